"""The way to the time-series database: windows by a cursor, written synchronously, none lost and none in the way.

What the database answers decides (InfluxDB v2 write API):

* accepted (204): go on;
* a line is wrong (400, 422): the batch is halved until the lines that are refused stand alone; they are set aside in
  the file ``refused.lp`` beside the journal with the database's sentence, and the rest is written. A line written twice
  is the same point, so a half that had been written already does no harm;
* too large (413): the batch is halved, too;
* everything else (401, 403, 404, 429, 5xx, no answer; 400 because the organisation is not found): all is kept and tried
  again later, after ``Retry-After`` where the database asks for it.

The library's own retries and batches are not used: they drop data. It is imported in the outlet's thread, since that
takes a while and memory that a daemon without a database need not have.
"""

import logging
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any, Final, cast

from idlerwatch.core import payloads
from idlerwatch.core.blocks import Record, Window
from idlerwatch.core.settings.model import Influx as Settings
from idlerwatch.edges.outlet import Away

if TYPE_CHECKING:
    from influxdb_client.client.write_api import WriteApi

log = logging.getLogger(__name__)

TIMEOUT_S: Final = 10.0
REFUSED_FILE: Final = "refused.lp"
REFUSED_BYTES: Final = 10_000_000
"""The file of refused lines grows no larger; what comes after that is only counted in the log."""
_WRONG_LINE: Final = (400, 422)
_TOO_LARGE: Final = 413


class Influx:
    """Writes windows to one bucket: the sender for the outlet of windows.

    Parameters
    ----------
    settings, site, converter
        The table ``[influx]`` and two tags of every line.
    token
        From a file or a credential of the service manager.
    folder
        Where refused lines are set aside.
    """

    def __init__(
        self,
        settings: Settings,
        site: str,
        converter: str,
        *,
        token: str | None,
        folder: Path,
        timeout_s: float = TIMEOUT_S,
    ) -> None:
        self._settings = settings
        self._tags = (site, converter)
        self._token = token or ""
        self._path = folder / REFUSED_FILE
        self._timeout_s = timeout_s
        self._client: Any = None
        self._api: WriteApi | None = None

    def start(self, hurry: Callable[[], None]) -> None:
        """Nothing: the connection is made with the first write."""

    def send(self, records: Sequence[Record]) -> int:
        """Write the windows; all of them are acknowledged or set aside when this returns. Raises `Away`."""
        rows = [record.row for record in records if isinstance(record, Window)]
        self._write_or_halve([line for row in rows if (line := payloads.line(row, *self._tags))])
        return records[-1].sequence

    def close(self) -> None:
        """Close the connection."""
        if self._client is not None:
            self._client.close()
        self._client = self._api = None

    def _write_or_halve(self, lines: Sequence[str]) -> None:
        refusal = self._write(lines) if lines else ""
        if not refusal:
            return
        if len(lines) == 1:
            self._set_aside(lines[0], refusal)
            return
        middle = len(lines) // 2
        self._write_or_halve(lines[:middle])
        self._write_or_halve(lines[middle:])

    def _write(self, lines: Sequence[str]) -> str:
        """Write lines at once; return why they cannot be written as they are, empty where they were. Raises `Away`."""
        from influxdb_client.domain.write_precision import WritePrecision  # noqa: PLC0415 - see the head of the module
        from influxdb_client.rest import ApiException  # noqa: PLC0415
        from urllib3.exceptions import HTTPError  # noqa: PLC0415

        try:
            self._connected().write(
                self._settings.bucket, self._settings.org, "\n".join(lines), cast("WritePrecision", WritePrecision.MS)
            )
        except ApiException as error:
            return _judge(error)
        except (HTTPError, OSError) as error:
            raise Away(f"the database at {self._settings.url} does not answer: {_first_line(error)}") from error
        return ""

    def _connected(self) -> "WriteApi":
        if self._api is None:
            from influxdb_client.client.influxdb_client import InfluxDBClient  # noqa: PLC0415
            from influxdb_client.client.write_api import SYNCHRONOUS  # noqa: PLC0415

            self._client = InfluxDBClient(
                self._settings.url,
                self._token,
                org=self._settings.org,
                timeout=round(self._timeout_s * 1000.0),
                enable_gzip=True,
                retries=False,
            )
            self._api = self._client.write_api(write_options=SYNCHRONOUS)
        return self._api

    def _set_aside(self, line: str, refusal: str) -> None:
        log.warning("the database refuses a line: %s: %s", refusal, line)
        try:
            with self._path.open("a", encoding="utf-8") as file:
                if file.tell() < REFUSED_BYTES:
                    file.write(f"# {refusal}\n{line}\n")
        except OSError as error:
            log.warning("a refused line cannot be set aside in %s: %s", self._path, error.strerror)


def _judge(error: Any) -> str:
    """Return the sentence of a refusal that lies in the lines; raise `Away` for one that does not."""
    sentence = _sentence(error)
    status = error.status
    if status == _TOO_LARGE or (status in _WRONG_LINE and "not found" not in sentence):
        return sentence
    raise Away(f"the database answers {status}: {sentence}", _retry_after_s(error)) from error


def _sentence(error: Any) -> str:
    """Return what the server says; its body may be anything, a proxy's page too."""
    text = str(error.message or error.body or error.reason or "nothing")
    return " ".join(text.split())[:300]


def _retry_after_s(error: Any) -> float:
    asked = (error.headers or {}).get("Retry-After", "")
    return float(asked) if asked.isdigit() else 0.0


def _first_line(error: BaseException) -> str:
    return str(error).split("\n", 1)[0][:200]
