"""What goes wrong between shed and board, over the real path: rig, serial port, daemon process, broker, phone."""

import contextlib
import itertools

import pytest

from fakes.daemon import daemon, example, phone
from idlerwatch.core.values import CycleEnd
from idlerwatch.edges.files import load_settings
from idlerwatch.edges.journal import JournalReader
from idlerwatch.rig.rig import Rig
from idlerwatch.rig.scenario import Event, Scenario
from servers import wait_until

LEG_METERS = ("leg1", "leg2", "leg3", "earth", "bank")


def events(*given):
    return tuple(Event(at_s=at_s, do=do, what=what) for at_s, do, what in given)


@contextlib.contextmanager
def watched(folder, broker, *given):
    """The daemon on a rig to which something happens; yields the phone, the daemon and the rig."""
    plan = folder / "plan.toml"
    plan.write_text(example(folder, "rig", broker.port))
    rig = Rig(load_settings(plan), Scenario(title="test", lasts_s=60.0, event=events(*given)))
    rig.start()
    try:
        settings = example(folder, rig.ports["panel"], broker.port)
        with phone(broker.port) as listening, daemon(folder, settings) as running:
            yield listening, running, rig
    finally:
        rig.stop()


class States:
    """The states that assessments have shown, in order, without repetition."""

    def __init__(self, listening):
        self.seen = []
        self._listening = listening
        listening.on_payload = self._take

    def _take(self, level, _payload):
        if level == "assessment":
            state = self._listening.json("assessment")["state"]
            if not self.seen or self.seen[-1] != state:
                self.seen.append(state)


def test_a_data_cable_cut_while_the_supply_draws_current_is_blind_and_never_stopped(tmp_path, broker):
    cut = [(14.0, "silence meter", name) for name in LEG_METERS]
    back = [(34.0, "restore meter", name) for name in LEG_METERS]
    with watched(tmp_path, broker, (1.0, "start converter", ""), *cut, *back) as (listening, running, _):
        states = States(listening)
        wait_until(lambda: "running" in states.seen, 30.0, "a running converter")
        wait_until(lambda: states.seen[-1] == "blind", 40.0, "blind")
        wait_until(lambda: states.seen[-1] == "running", 40.0, "running again")
        assert states.seen[states.seen.index("running") :] == ["running", "blind", "running"]
        assert running.stop() == 0


def test_meters_that_die_and_boot_with_their_legs_are_neither_an_alarm_nor_a_wrong_figure(tmp_path, broker):
    course = [(1.0, "start converter", ""), (10.0, "start machine", "planer"), (16.0, "stop machine", "planer"),
              (19.0, "stop converter", "")]  # fmt: skip
    with watched(tmp_path, broker, *course) as (listening, running, _):
        states = States(listening)
        wait_until(lambda: "running" in states.seen, 30.0, "a running converter")
        wait_until(lambda: states.seen[-1] == "stopped", 60.0, "a stopped converter")
        assert running.stop() == 0
        assert [m["tag"] for _, m in listening.messages if m["priority"] in ("high", "medium")] == []
    for reading in readings_of(tmp_path / "journal", "leg2"):
        voltage = reading.values[1, "voltage"]
        assert voltage != voltage or 150.0 < voltage < 260.0, voltage  # noqa: PLR0124


def test_an_adapter_pulled_out_and_put_back_is_told_once_each_way_and_nothing_is_lost(tmp_path, broker):
    with watched(tmp_path, broker, (0.5, "start converter", "")) as (listening, running, rig):
        wait_until(lambda: listening.json("assessment").get("state") == "running", 30.0, "a running converter")
        for _ in range(3):
            rig.lines["panel"].unplug()
            wait_until(lambda: says(listening, "supply") == "port gone", 15.0, "a port that is gone")
            rig.lines["panel"].plug()
            wait_until(lambda: says(listening, "supply") == "answering", 15.0, "meters that answer")
        assert running.stop() == 0
    ends, troubles = kept(tmp_path / "journal")
    gaps = [later.at - earlier.at for earlier, later in itertools.pairwise(ends)]
    assert max(gaps) < 3.0, "cycles go on while the adapter is out"
    assert [bool(trouble.text) for trouble in troubles] == [True, False] * 3


def says(listening, meter):
    return listening.json("assessment")["meters"][meter]


def kept(folder):
    reader = JournalReader(folder)
    inputs = list(reader.inputs())
    reader.close()
    ends = [item for item in inputs if isinstance(item, CycleEnd)]
    return ends, [item for item in inputs if getattr(item, "part", "") == "bus panel"]


def readings_of(folder, meter):
    reader = JournalReader(folder)
    inputs = list(reader.inputs())
    reader.close()
    found = [item for item in inputs if getattr(item, "meter", "") == meter and hasattr(item, "values")]
    assert found, pytest.fail(f"no reading of {meter}")
    return found
