"""The way to the phone: MQTT 5 (3.1.1 on request), with the reason code of every acknowledgement looked at.

Messages go out by a cursor (`send`, from the outlet's thread), QoS 1, and count as sent when the broker has
acknowledged them with success; a broker that forbids a topic says so in MQTT 5 and is a trouble, not a success (in
3.1.1 it stays silent about that). Everything else is a picture of the newest assessment and made by a thread of this
module alone: the lamp, the retained record of each standing alarm, the assessment itself. A broker's acknowledgement
does not mean that its disk has it, so all of that is published again on every connection, and records that the broker
still holds of alarms no longer standing are emptied.

The library calls back in its network thread while holding locks of its own: callbacks only put into a queue, and no
lock of ours is held while publishing. A publication while not connected would be queued in memory by the library and
sent later, so what has been given to it once is waited for and never given again.
"""

import logging
import queue
import threading
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from typing import Final

import paho.mqtt.client as paho
from paho.mqtt.enums import CallbackAPIVersion, MQTTErrorCode

from idlerwatch.core import payloads
from idlerwatch.core.blocks import Event, Record
from idlerwatch.core.retained import Picture, Publication
from idlerwatch.core.settings.model import Mqtt as Settings
from idlerwatch.core.values import Acknowledge, AlarmEvent, Assessment, Shelve
from idlerwatch.edges.mqtt.flight import Flight
from idlerwatch.edges.outlet import Away, Troubles

log = logging.getLogger(__name__)

KEEPALIVE_S: Final = 15
LONGEST_RECONNECT_S: Final = 30
AT_ONCE: Final = 8
"""Records sent together. Fewer than the twenty unacknowledged messages that the library and a broker allow: beyond that
the library holds messages back, and after a reconnection some of those wait until the next one is acknowledged."""
ACKNOWLEDGED_WITHIN_S: Final = 10.0
FAREWELL_S: Final = 1.0
INBOX_SIZE: Final = 4096
"""What the library has called back and was not yet looked at. When it is full (a flood of commands) the newest is lost;
a lost acknowledgement only makes a message be sent once more."""
_COMMANDS: Final[Mapping[str, Sequence[str]]] = {
    "none": (),
    "acknowledge": ("acknowledge",),
    "acknowledge+shelve": ("acknowledge", "shelve"),
}


@dataclass(frozen=True, slots=True)
class _Connected:
    refused: str = ""


@dataclass(frozen=True, slots=True)
class _Disconnected:
    reason: str


@dataclass(frozen=True, slots=True)
class _Answered:
    mid: int
    failure: str


@dataclass(frozen=True, slots=True)
class _Came:
    topic: str
    payload: bytes
    is_retained: bool


@dataclass(frozen=True, slots=True)
class _Show:
    """There is a new assessment."""


@dataclass(frozen=True, slots=True)
class _End:
    """The thread ends."""


_Item = _Connected | _Disconnected | _Answered | _Came | _Show | _End


class Mqtt:
    """The connection to one broker: a sender for the outlet of events, and a live sink.

    Parameters
    ----------
    settings, site, converter
        The table ``[mqtt]`` and what the topics begin with.
    password
        From a file or a credential of the service manager.
    command
        Takes what people acknowledge or put aside; returns at once.
    report
        Told a sentence when the broker is away or refuses, an empty text when all is well again.
    """

    def __init__(
        self,
        settings: Settings,
        site: str,
        converter: str,
        *,
        password: str | None = None,
        command: Callable[[Acknowledge | Shelve], None] = lambda _: None,
        report: Callable[[str], None] = lambda _: None,
    ) -> None:
        self._settings = settings
        self._beginning = payloads.prefix(site, converter)
        self._command = command
        self._troubles = Troubles(report)
        self._inbox: queue.Queue[_Item] = queue.Queue(INBOX_SIZE)
        self._latest: Assessment | None = None
        self._is_show_due = False
        self._is_connected = threading.Event()
        self._is_greeted = False
        self._why_away = self._unreached
        self._hurry: Callable[[], None] = lambda: None
        self._picture = Picture(settings.assessment_s)
        self._waited: dict[int, str] = {}
        self._forbidden: dict[str, str] = {}
        self._flight = Flight()
        self._client = _client(settings, f"idlerwatch-{site}-{converter}", password)
        self._client.will_set(self._topic("watching"), "no", qos=1, retain=True)
        self._wire_callbacks()
        self._thread = threading.Thread(target=self._serve, name="mqtt", daemon=True)
        self.dropped = 0

    # ---------------------------------------------------------------- what the service calls

    def start(self, hurry: Callable[[], None] = lambda: None) -> None:
        """Begin to connect, and go on trying; `hurry` is called at each connection."""
        self._hurry = hurry
        self._thread.start()
        self._client.connect_async(self._settings.host, self._settings.port, KEEPALIVE_S)
        self._client.loop_start()

    def show(self, assessment: Assessment) -> None:
        """Take the newest assessment; one that was not yet looked at is dropped and counted."""
        self._latest = assessment
        if self._is_show_due:
            self.dropped += 1
            return
        self._is_show_due = True
        self._put(_Show())

    def tell(self, event: AlarmEvent) -> None:
        """Nothing: messages come from the journal."""

    def send(self, records: Sequence[Record]) -> int:
        """Publish what people are told, wait for the broker, return the last record it has acknowledged."""
        if not self._is_connected.is_set():
            raise Away(self._why_away)
        records = records[:AT_ONCE]
        told = {record.sequence: event for record in records if (event := _told(record)) is not None}
        for sequence, event in told.items():
            if not self._flight.holds(sequence):
                self._flight.add(sequence, self._publish("message", payloads.text(payloads.message(event))))
        self._flight.wait(told, ACKNOWLEDGED_WITHIN_S, self._is_connected.is_set)
        return self._last_acknowledged(records, told)

    def close(self) -> None:
        """Say that nobody is watching any more, and disconnect."""
        if self._is_connected.is_set():
            mid = self._publish("watching", "no", retain=True)
            self._flight.add(-1, mid)
            self._flight.wait([-1], FAREWELL_S, self._is_connected.is_set)
        self._client.disconnect()
        self._client.loop_stop()
        self._put(_End())
        if self._thread.ident is not None:
            self._thread.join(FAREWELL_S)

    # ---------------------------------------------------------------- messages

    def _last_acknowledged(self, records: Sequence[Record], told: Mapping[int, AlarmEvent]) -> int:
        last = records[0].sequence - 1
        failure: str | None = ""
        for record in records:
            if record.sequence in told:
                failure = self._flight.take(record.sequence)
                if failure != "":
                    break
            last = record.sequence
        text = f"the broker refuses messages: {failure}" if failure else ""
        if failure is None and last < records[0].sequence:
            text = f"the broker has not acknowledged a message within {ACKNOWLEDGED_WITHIN_S:.0f} s"
        self._troubles.say("message", text)
        if last < records[0].sequence:
            raise Away(text)
        return last

    def _publish(self, level: str, payload: str, *, qos: int = 1, retain: bool = False) -> int:
        info = self._client.publish(self._topic(level), payload, qos=qos, retain=retain)
        if info.rc == MQTTErrorCode.MQTT_ERR_QUEUE_SIZE:
            raise Away("the broker is too slow: too much waits for it")
        return info.mid

    def _topic(self, level: str) -> str:
        return f"{self._beginning}/{level}"

    # ---------------------------------------------------------------- the thread that shows

    def _serve(self) -> None:
        while True:
            match self._inbox.get():
                case _Connected(refused=""):
                    self._on_connected()
                case _Connected(refused=reason):
                    self._why_away = reason
                    self._troubles.say("connection", reason)
                case _Disconnected(reason):
                    self._why_away = f"the broker has gone: {reason}"
                    self._is_connected.clear()
                    self._flight.notify()
                    self._troubles.say("connection", self._why_away)
                case _Answered(mid, failure):
                    self._on_answered(mid, failure)
                case _Came(topic, payload, is_retained):
                    self._on_came(topic, payload, is_retained=is_retained)
                case _Show():
                    self._is_show_due = False
                    self._show()
                case _End():
                    return

    def _on_connected(self) -> None:
        self._forbidden = {}
        self._waited = {}
        self._is_greeted = False
        self._show_publication(Publication("watching", "yes", qos=1))
        for level in ("alarm/+/+", *_COMMANDS[self._settings.commands]):
            self._client.subscribe(self._topic(level), qos=1)
        self._is_connected.set()
        self._troubles.say("connection", "")
        self._hurry()

    def _show(self) -> None:
        if self._latest is not None and self._is_greeted and self._is_connected.is_set():
            for publication in self._picture.publications(self._latest):
                self._show_publication(publication)

    def _show_publication(self, publication: Publication) -> None:
        try:
            mid = self._publish(publication.level, publication.payload, qos=publication.qos, retain=True)
        except Away as away:
            log.warning("%s: %s", publication.level, away.text)
            return
        if publication.qos:
            self._waited[mid] = publication.level

    def _on_answered(self, mid: int, failure: str) -> None:
        level = self._waited.pop(mid, None)
        if level is None:
            self._flight.answer(mid, failure)
            return
        if level == "watching" and not self._is_greeted:
            # only now has the library sent again what an earlier connection left over: nothing old can come after this
            self._is_greeted = True
            self._picture.forget()
            self._show()
        self._forbidden.pop(level, None)
        if failure:
            self._forbidden[level] = failure
        worst = next(iter(self._forbidden.items()), None)
        self._troubles.say("retained", f"the broker refuses {worst[0]}: {worst[1]}" if worst else "")

    def _on_came(self, topic: str, payload: bytes, *, is_retained: bool) -> None:
        level = topic.removeprefix(f"{self._beginning}/")
        if level.startswith("alarm/"):
            if is_retained and payload:  # it may be of an alarm that no longer stands
                self._picture.note_held(level)
                self._show()
            return
        if is_retained or level not in _COMMANDS[self._settings.commands]:
            return  # a retained command would come again at each connection
        try:
            self._command(payloads.read_command(level, payload, time.monotonic()))
        except ValueError as error:
            log.warning("ignored: %s", error)

    # ---------------------------------------------------------------- what the library calls, in its own thread

    def _wire_callbacks(self) -> None:
        client = self._client
        client.on_connect = lambda _c, _u, _f, reason, _p: self._put(
            _Connected(f"the broker refuses the connection: {reason}" if reason.is_failure else "")
        )
        client.on_connect_fail = lambda _c, _u: self._put(_Connected(self._unreached))
        client.on_disconnect = lambda _c, _u, _f, reason, _p: self._put(_Disconnected(str(reason)))
        client.on_publish = lambda _c, _u, mid, reason, _p: self._put(
            _Answered(mid, str(reason) if reason.is_failure else "")
        )
        client.on_message = lambda _c, _u, came: self._put(_Came(came.topic, bytes(came.payload), came.retain))

    def _put(self, item: _Item) -> None:
        try:
            self._inbox.put_nowait(item)
        except queue.Full:
            self.dropped += 1

    @property
    def _unreached(self) -> str:
        return f"the broker at {self._settings.host}:{self._settings.port} is not reached"


def _client(settings: Settings, name: str, password: str | None) -> paho.Client:
    protocol = paho.MQTTv5 if settings.protocol == 5 else paho.MQTTv311
    client = paho.Client(CallbackAPIVersion.VERSION2, client_id=name, protocol=protocol)
    client.suppress_exceptions = True  # an exception in a callback would end the library's thread for good
    client.enable_logger(log)
    client.reconnect_delay_set(1, LONGEST_RECONNECT_S)
    if settings.username is not None:
        client.username_pw_set(settings.username, password)
    if settings.ca_file is not None:
        client.tls_set(settings.ca_file)
    return client


def _told(record: Record) -> AlarmEvent | None:
    if not isinstance(record, Event) or record.name != "alarm" or not record.body["is_told"]:
        return None
    return payloads.read_event(record.body)
