"""The files of a journal: how they are named, opened and, when old, unlinked.

A file's name holds the first sequence number in it, so that the order of the names is the order of the records, and
the week it was begun in, for people.
"""

import itertools
import sqlite3
import time
from collections.abc import Sequence
from contextlib import suppress
from dataclasses import dataclass
from pathlib import Path
from typing import Final

from idlerwatch.core.blocks import Kind

WEEK_DAYS: Final = 7.0
_DAY_S: Final = 86400.0
_PAGE_BYTES: Final = 512  # each commit writes whole pages to the log; the smallest write least (58, 64, 76 MB a day)
_SCHEMA: Final = {
    "cycle": """
        CREATE TABLE IF NOT EXISTS shapes (number INTEGER PRIMARY KEY, text TEXT NOT NULL);
        CREATE TABLE IF NOT EXISTS blocks (
            first INTEGER PRIMARY KEY, last INTEGER NOT NULL, since REAL, until REAL, body BLOB NOT NULL);
    """,
    "event": """
        CREATE TABLE IF NOT EXISTS events (
            sequence INTEGER PRIMARY KEY, utc REAL NOT NULL, name TEXT NOT NULL, body TEXT NOT NULL);
        CREATE INDEX IF NOT EXISTS events_by_name ON events (name, sequence);
    """,
}
_SCHEMA["window"] = _SCHEMA["cycle"]


@dataclass(frozen=True, slots=True)
class Keep:
    """For how many days each kind is kept; events as long as windows."""

    cycles_days: float = 30.0
    windows_days: float = 800.0

    def days(self, kind: Kind) -> float:
        """Return for how long records of a kind are kept."""
        return self.cycles_days if kind == "cycle" else self.windows_days

    def period(self, kind: Kind, utc: float) -> str:
        """Return the name of the week (or hour, where little is kept) that a stamp lies in.

        Examples
        --------
        >>> Keep().period("cycle", 1796104800.0), Keep(1 / 24, 1 / 24).period("event", 1796104800.0)
        ('2026w49', '2026-12-01t06')
        """
        pattern = "%Gw%V" if self.days(kind) >= WEEK_DAYS else "%Y-%m-%dt%H"
        return time.strftime(pattern, time.gmtime(utc))


def list_files(folder: Path, kind: Kind) -> list[Path]:
    """Return the files of a kind in the order of their records."""
    return sorted(folder.glob(f"{kind}s-*.sqlite"))


def file_name(kind: Kind, first: int, period: str) -> str:
    """Return the name of a file that begins with a sequence number."""
    return f"{kind}s-{first:012d}-{period}.sqlite"


def first_of(path: Path) -> int:
    """Return the first sequence number in a file's name."""
    return int(path.name.split("-", 2)[1])


def period_of(path: Path) -> str:
    """Return the week or hour in a file's name."""
    return path.stem.split("-", 2)[2]


def open_for_writing(path: Path, kind: Kind) -> sqlite3.Connection:
    """Open or make a file; a commit of an event is on the disk when it returns, one of a block soon after."""
    path.parent.mkdir(parents=True, exist_ok=True)
    address = f"{path.resolve().as_uri()}?vfs={_vfs(path)}"
    connection = sqlite3.connect(address, uri=True, isolation_level=None, timeout=5.0, check_same_thread=False)
    try:
        connection.execute(f"PRAGMA page_size = {_PAGE_BYTES}")
        connection.execute("PRAGMA journal_mode = WAL")
        connection.execute(f"PRAGMA synchronous = {'FULL' if kind == 'event' else 'NORMAL'}")
        connection.executescript(_SCHEMA[kind])
    except sqlite3.Error:
        connection.close()
        raise
    return connection


def _vfs(path: Path) -> str:
    """Return how SQLite shall lock a file.

    Blocks are committed all day: the index of their write-ahead log is kept in memory (``unix-excl``), since as a file
    it would be written anew with each commit and make more than half of all bytes written. Readers in this process see
    each commit at once, those in another see what has been checkpointed.
    """
    return "unix" if path.name.startswith("event") else "unix-excl"


def open_for_reading(path: Path) -> tuple[sqlite3.Connection, bool]:
    """Open a file to read it; also return whether the connection will see what is written from now on.

    To read beside a writer SQLite keeps a small file of its own; where that cannot be made (the disk is full, the
    reader may not write there) and nothing waits in the write-ahead log, the file is read as it stands.
    """
    connection = _open_read_only(path, f"mode=ro&vfs={_vfs(path)}")
    try:
        connection.execute("SELECT count(*) FROM sqlite_master").fetchone()
    except sqlite3.OperationalError as error:
        connection.close()
        if error.sqlite_errorcode == sqlite3.SQLITE_BUSY:  # another process writes it
            return _open_read_only(path, "immutable=1"), False
        log = path.with_name(path.name + "-wal")
        if log.exists() and log.stat().st_size:
            raise
        return _open_read_only(path, "immutable=1"), False
    except sqlite3.DatabaseError:
        connection.close()
        raise
    return connection, True


def _open_read_only(path: Path, mode: str) -> sqlite3.Connection:
    return sqlite3.connect(f"{path.resolve().as_uri()}?{mode}", uri=True, isolation_level=None, timeout=5.0)


def stamps(path: Path, kind: Kind) -> tuple[float, float] | None:
    """Return the stamp of the first record in a file and the latest stamp in it, POSIX seconds.

    None if it is empty; of a spoilt file, when it was written last.
    """
    first, latest, table = ("utc", "utc", "events") if kind == "event" else ("since", "until", "blocks")
    try:
        connection, _ = open_for_reading(path)
    except sqlite3.OperationalError:
        raise
    except sqlite3.DatabaseError:
        return path.stat().st_mtime, path.stat().st_mtime
    try:
        first_row = connection.execute(f"SELECT {first} FROM {table} ORDER BY rowid LIMIT 1").fetchone()  # noqa: S608
        latest_row = connection.execute(f"SELECT max({latest}) FROM {table}").fetchone()  # noqa: S608 - fixed words
    finally:
        connection.close()
    return None if first_row is None else (float(first_row[0]), float(latest_row[0]))


def unlink_old(folder: Path, kind: Kind, keep: Keep, utc: float) -> Sequence[Path]:
    """Unlink the oldest files, as long as their records and the start of the next file are older than is to be kept.

    Both are asked, since the clock may have been wrong while one of them was begun.
    """
    gone: list[Path] = []
    for path, successor in itertools.pairwise(list_files(folder, kind)):
        own, following = stamps(path, kind), stamps(successor, kind)
        if own is None or following is None or max(own[1], following[0]) > utc - keep.days(kind) * _DAY_S:
            break
        for part in (path, path.with_name(path.name + "-wal"), path.with_name(path.name + "-shm")):
            with suppress(FileNotFoundError):
                part.unlink()
        gone.append(path)
    return gone
