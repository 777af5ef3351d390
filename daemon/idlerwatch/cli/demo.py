"""``idlerwatch demo``: the daemon itself, on a virtual converter, with a broker of its own and a phone that listens."""

import logging
import signal
import sys
import tempfile
import threading
from collections.abc import Callable, Mapping
from pathlib import Path
from typing import Any, Final

import click

from idlerwatch.cli.broker import Broker, Phone, start_broker
from idlerwatch.core import payloads
from idlerwatch.core.settings.model import Alarm, Journal, Mqtt, Settings
from idlerwatch.core.values import AlarmEvent, Assessment
from idlerwatch.edges.clock import Clock, is_synchronised
from idlerwatch.edges.console import Console
from idlerwatch.edges.files import config_directory, load_settings, read_toml
from idlerwatch.rig.build import build_plant
from idlerwatch.rig.rig import Rig, on_rig
from idlerwatch.rig.scenario import Event, Scenario, read_scenario
from idlerwatch.service import Service, Stop, build

SCENARIOS: Final = Path(__file__).resolve().parent.parent / "rig" / "scenarios"
SHORTER: Final = 20.0
SHORTEST_S: Final = 1.0
"""Alarm delays are divided by the one, but not below the other."""


@click.command()
@click.option("--for", "seconds", type=click.FloatRange(min=1.0), help="End after so many seconds.")
@click.option("--scenario", "name", default="slipway", show_default=True, help="A name (see --list), or a file.")
@click.option("--list", "is_list", is_flag=True, help="List the scenarios, a sentence each.")
@click.option(
    "--settings", "path", type=click.Path(path_type=Path), help="Your own settings, with virtual meters in their place."
)
def command(seconds: float | None, name: str, path: Path | None, *, is_list: bool) -> None:
    """Watch a virtual converter through a bad day: the real daemon, virtual meters on real serial ports.

    Example: idlerwatch demo --for 60
    """
    if is_list:
        for file in sorted(SCENARIOS.glob("*.toml")):
            click.echo(f"{file.stem:<16} {read_toml(file).get('title', '')}")
        return
    logging.basicConfig(level=logging.WARNING, format="%(levelname)s %(name)s: %(message)s", stream=sys.stderr)
    settings = load_settings(path or config_directory() / "example.toml")
    scenario = _scenario(name, settings)
    with tempfile.TemporaryDirectory(prefix="idlerwatch-demo-") as folder, start_broker(Path(folder)) as broker:
        play(_for_demo(settings, path, Path(folder), broker), scenario, broker, seconds)


def _scenario(name: str, settings: Settings) -> Scenario:
    file = Path(name) if name.endswith(".toml") else SCENARIOS / f"{name}.toml"
    if not file.is_file():
        known = ", ".join(sorted(path.stem for path in SCENARIOS.glob("*.toml")))
        sentence = f"there is no scenario {name!r}; there are {known}, and files of yours"
        raise click.BadParameter(sentence, param_hint="--scenario")
    plant = build_plant(settings)
    return read_scenario(f"scenario {name}", read_toml(file), plant, [meter.name for meter in settings.meter])


def _for_demo(settings: Settings, path: Path | None, folder: Path, broker: Broker) -> Settings:
    """Return the settings with the demo's broker, a journal that goes with it, and shorter delays."""
    return settings.model_copy(
        update={
            "mqtt": Mqtt(host="127.0.0.1", port=broker.port, protocol=broker.protocol),
            "influx": settings.influx if path is not None else None,
            "journal": Journal(path=str(folder / "journal"), commit_s=2.0),
            "alarms": {key: shortened(alarm) for key, alarm in settings.alarms.items()},
        }
    )


def shortened(alarm: Alarm) -> Alarm:
    """Return an alarm with delays that fit into a demo; meters boot no faster there, so their silence keeps its own."""
    if alarm.tag.endswith(("silent", "blind")):
        return alarm

    def shorter(delay_s: float) -> float:
        return min(delay_s, max(SHORTEST_S, delay_s / SHORTER))

    return alarm.model_copy(update={"on_delay_s": shorter(alarm.on_delay_s), "off_delay_s": shorter(alarm.off_delay_s)})


def play(
    settings: Settings,
    scenario: Scenario,
    broker: Broker,
    seconds: float | None,
    is_clock_right: Callable[[], bool] = is_synchronised,
) -> None:
    """Run the daemon on the rig until the time is over or somebody stops it, then say what reached the phone."""
    title = f"{settings.site.name} / {settings.site.converter} (virtual)"
    shown = _ByPhone(Console(sys.stdout, title, settings.supply.labels))
    rig = Rig(settings, scenario, shown.happened)
    click.echo(scenario.title)
    click.echo(f"Virtual meters on real serial ports; broker: {broker.name}; MQTT {broker.protocol}.")
    click.echo(f"Alarm delays are a twentieth of the usual, at least {SHORTEST_S:.0f} s, so that a minute is enough.\n")
    rig.start()
    on_ports = on_rig(settings, rig.ports)
    runtime = Path(settings.journal.path if settings.journal else ".")
    service = Service(
        lambda _: on_ports, lambda given, post: build(given, post, runtime, [shown], is_clock_right), Clock()
    )
    topic = f"{payloads.prefix(settings.site.name, settings.site.converter)}/message"
    phone = Phone(broker, topic, shown.arrived)
    for number in (signal.SIGTERM, signal.SIGINT):
        signal.signal(number, lambda *_: service.post(Stop()))
    timer = threading.Timer(seconds, service.post, [Stop()]) if seconds else None
    if timer:
        timer.start()
    shown.console.start()
    try:
        service.run()
    finally:
        if timer:
            timer.cancel()
        phone.close()
        shown.console.stop()
        rig.stop()
    shown.sum_up()


class _ByPhone:
    """Shows on the console what really came through the broker to the phone, when it came."""

    def __init__(self, console: Console) -> None:
        self.console = console
        self._sent: dict[str, AlarmEvent] = {}
        self._came_first: set[str] = set()
        self._told: list[AlarmEvent] = []
        self._lock = threading.Lock()

    def show(self, assessment: Assessment) -> None:
        """Take the newest assessment."""
        self.console.show(assessment)

    def tell(self, event: AlarmEvent) -> None:
        """Keep an event until the phone has it."""
        if not event.is_told:
            return
        with self._lock:
            is_there = event.identity in self._came_first
            self._sent[event.identity] = event
        if is_there:
            self._reached(event)

    def arrived(self, message: Mapping[str, Any]) -> None:
        """Take a message as the phone got it."""
        with self._lock:
            event = self._sent.get(message["id"])
            if event is None:
                self._came_first.add(message["id"])
        if event is not None:
            self._reached(event)

    def happened(self, event: Event) -> None:
        """Say what the scenario has just done."""
        if event.says:
            self.console.note(event.says)

    def _reached(self, event: AlarmEvent) -> None:
        self._told.append(event)
        self.console.tell(event)

    def sum_up(self) -> None:
        """Say how many alarms came, were told, and went."""
        raised = {event.alarm.occurrence for event in self._told if event.alarm.state == "unacknowledged"}
        over = {event.alarm.occurrence for event in self._told if event.alarm.state in ("normal", "returned")}
        click.echo(
            f"\n{len(self._told)} messages reached the phone: {len(raised)} alarms came, {len(raised & over)} of them "
            f"returned to normal."
        )
