import json
import math
import resource
import signal
import sqlite3
import subprocess
import sys
import textwrap
import threading
from pathlib import Path

import pytest

from fakes.findings import UTC, alarm, cycle, event, row
from idlerwatch.core.blocks import Cycle, Event
from idlerwatch.core.values import Acknowledge, CycleEnd, Trouble
from idlerwatch.edges.journal import Cursor, Journal, JournalReader, Keep

WEEK_S = 7 * 86400.0


class Settable:
    def __init__(self, value):
        self.value = value

    def __call__(self):
        return self.value


def exact(inputs):
    """Make NaN comparable."""
    return [repr(given) for given in inputs]


@pytest.fixture
def journal(tmp_path):
    journal = Journal(tmp_path / "journal", commit_s=5.0, utc=Settable(UTC))
    yield journal
    journal.close()


def test_a_replay_gives_exactly_what_the_core_was_given_in_its_order(tmp_path, journal):
    given = []
    for n in range(23):
        inputs, end = cycle(n)
        told = Acknowledge(end.at - 0.1, "leg-low", "l2", "Jo") if n % 7 == 3 else None
        if told:
            journal.add_told(told, place=2)
            journal.add_told(Trouble(end.at, "mqtt", "away"), place=len(inputs))
        given += [*inputs[:2], *([told] if told else []), *inputs[2:]]
        given += [Trouble(end.at, "mqtt", "away")] if told else []
        given.append(end)
        journal.add_cycle(inputs, end, 1)
    journal.flush()
    assert exact(JournalReader(journal.path).inputs()) == exact(given)


def test_records_are_ordered_by_number_though_the_clock_steps_back(tmp_path):
    utc = Settable(UTC + WEEK_S)
    journal = Journal(tmp_path, utc=utc)
    first = journal.add_event("start", {})
    utc.value = 0.0
    second = journal.add_event("clock", {})
    utc.value = UTC
    third = journal.add_event("clock", {})
    journal.close()
    assert [record.sequence for record in JournalReader(tmp_path).read(0, "event") if record.name != "standing"] == [
        first,
        second,
        third,
    ]


def test_nothing_is_committed_before_commit_s_and_everything_at_it(journal):
    reader = JournalReader(journal.path)
    for n in range(5):
        journal.add_cycle(*cycle(n), settings=1)
        assert reader.read(0, "cycle") == []
    journal.add_windows([row()])
    journal.add_cycle(*cycle(5), settings=1)
    assert len(reader.read(0, "cycle")) == 6
    assert [record.row for record in reader.read(0, "window")] == [row()]


def test_an_event_is_there_for_a_reader_as_soon_as_it_was_added(journal):
    woken = []
    journal.listen("event", lambda: woken.append(True))
    sequence = journal.add_alarm(event())
    (found,) = JournalReader(journal.path).read(0, "event")
    assert (found.sequence, found.name) == (sequence, "alarm")
    assert woken == [True]


def test_the_settings_in_force_stand_with_each_cycle(journal):
    for n in range(4):
        journal.add_cycle(*cycle(n), settings=1 + n // 2)
    journal.flush()
    assert [record.settings for record in JournalReader(journal.path).cycles()] == [1, 1, 2, 2]


def test_cycles_between_two_stamps_both_included(journal):
    for n in range(10):
        journal.add_cycle(*cycle(n), settings=1)
    journal.flush()
    ends = [cycle(n)[1].at + cycle(n)[1].utc_offset for n in range(10)]
    found = list(JournalReader(journal.path).cycles(ends[3], ends[6]))
    assert [record.utc for record in found] == ends[3:7]


def test_numbers_go_on_after_a_restart(tmp_path):
    journal = Journal(tmp_path)
    last = journal.add_event("start", {})
    journal.add_windows([row()])
    journal.close()
    again = Journal(tmp_path)
    assert again.add_event("start", {}) == last + 2
    again.close()


def test_numbers_never_fall_behind_a_cursor(tmp_path):
    cursor = Cursor(tmp_path, "mqtt", at_first=0)
    cursor.move(500)
    journal = Journal(tmp_path)
    assert journal.add_event("start", {}) == 501
    journal.close()


def test_reading_goes_on_after_a_number_and_stops_near_the_limit(journal):
    for n in range(60):
        journal.add_windows([row(n)])
    journal.flush()
    reader = JournalReader(journal.path)
    assert [record.sequence for record in reader.read(57, "window", 10)] == [58, 59, 60]
    assert reader.read(60, "window") == []


def test_each_week_has_files_of_its_own_and_old_ones_go_whole(tmp_path):
    utc = Settable(UTC)
    journal = Journal(tmp_path, keep=Keep(cycles_days=30.0, windows_days=60.0), utc=utc)
    for week in range(12):
        utc.value = UTC + week * WEEK_S
        inputs, end = cycle(0)
        journal.add_cycle(inputs, CycleEnd(end.at, utc.value - end.at), settings=1)
        journal.add_event("start", {"week": week})
        journal.flush()
    journal.close()
    oldest_cycle = next(JournalReader(tmp_path).cycles()).utc
    oldest_event = JournalReader(tmp_path).read(0, "event")[0].utc
    assert utc.value - 38 * 86400 <= oldest_cycle <= utc.value - 30 * 86400
    assert utc.value - 68 * 86400 <= oldest_event <= utc.value - 60 * 86400


def test_nothing_is_unlinked_while_the_clock_is_not_right(tmp_path):
    utc = Settable(UTC)
    journal = Journal(tmp_path, keep=Keep(cycles_days=30.0, windows_days=30.0), utc=utc, is_synchronised=lambda: False)
    for week in range(12):
        utc.value = UTC + week * WEEK_S
        journal.add_event("start", {})
    journal.close()
    assert len(list(tmp_path.glob("events-*.sqlite"))) == 12


def test_a_runtime_folder_keeps_an_hour(tmp_path):
    utc = Settable(UTC)
    journal = Journal(tmp_path, keep=Keep(1 / 24, 1 / 24), utc=utc)
    for minute in range(0, 300, 10):
        utc.value = UTC + 60.0 * minute
        journal.add_event("start", {})
    oldest = JournalReader(tmp_path).read(0, "event")[0].utc
    journal.close()
    assert 3600.0 <= utc.value - oldest <= 2 * 3600.0


def test_standing_alarms_are_those_whose_last_event_was_not_normal(journal):
    journal.add_alarm(event(1, of=alarm("leg-low", "l2")))
    journal.add_alarm(event(1, of=alarm("leg-low", "l3")))
    journal.add_alarm(event(2, of=alarm("leg-low", "l2", "acknowledged")))
    journal.add_alarm(event(2, of=alarm("leg-low", "l3", "normal")))
    (standing,) = JournalReader(journal.path).standing()
    assert (standing.subject, standing.state) == ("l2", "acknowledged")
    assert math.isnan(standing.usual)


def test_standing_alarms_are_known_weeks_later_from_the_newest_file_alone(tmp_path):
    utc = Settable(UTC)
    journal = Journal(tmp_path, utc=utc)
    journal.add_alarm(event(1))
    for week in range(1, 4):
        utc.value = UTC + week * WEEK_S
        journal.add_event("start", {})
    journal.close()
    for old in sorted(tmp_path.glob("events-*.sqlite"))[:-1]:
        old.unlink()
    assert [standing.tag for standing in JournalReader(tmp_path).standing()] == ["leg-low"]


def test_the_last_event_of_a_name_is_found(journal):
    journal.add_event("settings", {"number": 1})
    journal.add_event("settings", {"number": 2})
    journal.add_event("stop", {})
    assert JournalReader(journal.path).last_event("settings").body == {"number": 2}
    assert JournalReader(journal.path).last_event("nothing") is None


def test_at_standstill_one_cycle_a_minute_is_kept_and_what_led_to_the_start_in_full(journal):
    journal.add_cycle(*cycle(0), settings=1)
    journal.thin(60.0)
    for n in range(1, 146):
        journal.add_cycle(*cycle(n), settings=1)
    journal.thin(0.0)
    journal.add_cycle(*cycle(146), settings=1)
    journal.flush()
    kept = [round(record.end.at - 5000.7) for record in JournalReader(journal.path).cycles()]
    assert kept == [0, 60, 120, *range(136, 147)]


def test_the_recent_inputs_are_those_of_the_last_seconds(journal):
    for n in range(20):
        journal.add_cycle(*cycle(n), settings=1)
    journal.flush()
    ends = [given.at for given in JournalReader(journal.path).recent(5.0) if isinstance(given, CycleEnd)]
    assert ends == [cycle(n)[1].at for n in range(14, 20)]


def test_a_folder_that_is_no_folder_is_told_once_each_way_and_nothing_is_lost(tmp_path):
    said = []
    folder = tmp_path / "journal"
    folder.write_text("in the way")
    journal = Journal(folder, commit_s=1.0, report=said.append)
    sequence = journal.add_alarm(event())
    for n in range(4):
        journal.add_cycle(*cycle(n), settings=1)
    assert len(said) == 1
    assert "journal" in said[0]
    assert [one.sequence for one in journal.unwritten()] == [sequence]
    folder.unlink()
    journal.add_event("start", {})
    journal.close()
    assert said[1:] == [""]
    assert [record.name for record in JournalReader(folder).read(0, "event")] == ["alarm", "start"]
    assert len(list(JournalReader(folder).cycles())) == 4


def test_a_full_disk_is_told_once_each_way_and_an_alarm_still_reaches_its_readers(tmp_path):
    said = []
    journal = Journal(tmp_path, commit_s=1.0, report=said.append)
    journal.add_event("start", {})
    reader = JournalReader(tmp_path, journal.unwritten)
    assert len(reader.read(0, "event")) == 1
    soft, hard = resource.getrlimit(resource.RLIMIT_FSIZE)
    handler = signal.signal(signal.SIGXFSZ, signal.SIG_IGN)
    resource.setrlimit(resource.RLIMIT_FSIZE, (1, hard))
    try:
        sequence = journal.add_alarm(event())
        for n in range(3):
            journal.add_cycle(*cycle(n), settings=1)
        assert [record.sequence for record in reader.read(1, "event")] == [sequence]
        assert len(said) == 1
    finally:
        resource.setrlimit(resource.RLIMIT_FSIZE, (soft, hard))
        signal.signal(signal.SIGXFSZ, handler)
    journal.flush()
    assert said[1:] == [""]
    assert [record.sequence for record in JournalReader(tmp_path).read(1, "event")] == [sequence]
    journal.close()


def test_what_waits_for_a_disk_is_bounded_and_the_loss_is_an_event(tmp_path, monkeypatch):
    monkeypatch.setattr("idlerwatch.edges.journal.writer.MOST_CYCLES", 10)
    folder = tmp_path / "journal"
    folder.write_text("in the way")
    journal = Journal(folder, commit_s=1.0)
    for n in range(25):
        journal.add_cycle(*cycle(n), settings=1)
    folder.unlink()
    journal.flush()
    journal.close()
    assert len(list(JournalReader(folder).cycles())) == 10
    assert JournalReader(folder).last_event("journal").body["lost"] == 15


def test_a_spoilt_file_is_passed_over_and_another_begun(tmp_path):
    journal = Journal(tmp_path)
    journal.add_event("start", {})
    journal.close()
    (spoilt,) = tmp_path.glob("events-*.sqlite")
    spoilt.write_bytes(b"no database at all" * 500)
    said = []
    again = Journal(tmp_path, report=said.append)
    again.add_event("start", {"again": True})
    again.close()
    assert said == []
    assert [record.body for record in JournalReader(tmp_path).read(0, "event")] == [{"again": True}]


def test_a_reader_does_not_hold_back_the_writers_checkpoint(journal):
    reader = JournalReader(journal.path)
    for _ in range(3000):
        journal.add_event("start", {"text": "x" * 200})
        reader.read(journal.last_sequence - 1, "event")
    (wal,) = journal.path.glob("events-*.sqlite-wal")
    assert wal.stat().st_size < 3_000_000


def test_a_reader_in_another_thread_sees_what_is_committed(journal):
    seen = []

    def read():
        reader = JournalReader(journal.path)
        seen.extend(reader.read(0, "event"))
        reader.close()

    journal.add_event("start", {})
    thread = threading.Thread(target=read)
    thread.start()
    thread.join(5.0)
    assert [record.name for record in seen] == ["start"]


def test_acknowledged_events_and_committed_cycles_survive_a_kill(tmp_path):
    program = textwrap.dedent(f"""
        import sys
        sys.path[:0] = {sys.path!r}
        from fakes.findings import cycle, event
        from idlerwatch.edges.journal import Journal
        journal = Journal({str(tmp_path)!r}, commit_s=20.0)
        n = 0
        while True:
            n += 1
            journal.add_cycle(*cycle(n), settings=1)
            print(journal.add_alarm(event(n)), flush=True)
    """)
    for _ in range(3):
        process = subprocess.Popen([sys.executable, "-c", program], stdout=subprocess.PIPE)
        acknowledged = [int(process.stdout.readline()) for _ in range(60)]
        process.kill()
        acknowledged += [int(line) for line in process.stdout.read().split(b"\n")[:-1]]
        process.wait()
        process.stdout.close()
        found = {record.sequence for record in JournalReader(tmp_path).read(acknowledged[0] - 1, "event", 100_000)}
        assert found >= set(acknowledged)
    for path in tmp_path.glob("*.sqlite"):
        connection = sqlite3.connect(path)
        assert connection.execute("PRAGMA integrity_check").fetchall() == [("ok",)]
        connection.close()
    assert list(JournalReader(tmp_path).cycles())


@pytest.mark.parametrize("text", ["", "no number", "12 13"])
def test_a_cursor_that_cannot_be_read_begins_as_a_new_one(tmp_path: Path, text):
    (tmp_path / "cursor.mqtt").write_text(text)
    assert Cursor(tmp_path, "mqtt", at_first=7).at == 7


def test_a_cursor_that_spares_the_disk_writes_seldom_and_at_the_end(tmp_path):
    now = Settable(0.0)
    cursor = Cursor(tmp_path, "influx", at_first=0, every_s=300.0, monotonic=now)
    now.value = 299.0
    cursor.move(5)
    assert Cursor(tmp_path, "influx", at_first=9).at == 0
    now.value = 300.0
    cursor.move(6)
    assert Cursor(tmp_path, "influx", at_first=9).at == 6
    cursor.move(8)
    cursor.close()
    assert Cursor(tmp_path, "influx", at_first=9).at == 8


def test_a_body_that_is_no_json_is_our_mistake_and_raises(journal):
    with pytest.raises(ValueError, match="JSON"):
        journal.add_event("start", {"value": math.nan})


def test_records_say_when():
    assert Cycle(1, *cycle(0), settings=1).utc == pytest.approx(UTC + 0.7)
    assert Event(1, UTC, "start", json.loads("{}")).utc == UTC
