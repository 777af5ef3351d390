"""Learned circuits beside the journal: one file a version, never deleted; the one accepted last is in force.

A file that is missing, damaged or not accepted is one sentence; the daemon runs on the plate's values then.
"""

import os
import tomllib
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from pathlib import Path
from typing import Final

from idlerwatch.core.converter.known import KnownCircuit, read_known, write_text
from idlerwatch.core.watch.circuit import NOT_LEARNED

FOLDER: Final = "circuit"


@dataclass(frozen=True, slots=True, eq=False)
class Version:
    """One file: its name, and what it holds or what is wrong with it."""

    path: Path
    known: KnownCircuit | None
    fault: str = ""

    @property
    def name(self) -> str:
        """How a person names it."""
        return self.path.stem


def folder_of(journal: Path) -> Path:
    """Return where a journal's circuits lie."""
    return journal / FOLDER


def read_circuit(path: Path) -> Version:
    """Return one version; whatever is wrong with the file becomes its sentence."""
    try:
        return Version(path, read_known(tomllib.loads(path.read_text(encoding="utf-8"))))
    except OSError as error:
        return Version(path, None, f"{path}: unreadable ({error.strerror})")
    except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
        return Version(path, None, f"{path}: damaged ({error}), must be as `circuit learn` wrote it")
    except ValueError as error:
        return Version(path, None, f"{path}: {error}")


def versions(journal: Path) -> tuple[Version, ...]:
    """Return all versions, the oldest first."""
    return tuple(read_circuit(path) for path in sorted(folder_of(journal).glob("*.toml")))


def in_force(journal: Path) -> tuple[KnownCircuit | None, str]:
    """Return the circuit accepted last, or None and a sentence.

    A damaged file that may be the one in force is not passed over in favour of an older one: nobody accepted that.
    """
    found = versions(journal)
    damaged = [version for version in found if version.fault]
    accepted = [version for version in found if version.known is not None and version.known.accepted_at]
    if damaged and (not accepted or damaged[-1].name > accepted[-1].name):
        return None, f"{damaged[-1].fault}; the plate's values serve"
    if not accepted:
        return None, NOT_LEARNED
    newest = max(accepted, key=lambda version: "" if version.known is None else version.known.accepted_at)
    return newest.known, ""


def save(journal: Path, known: KnownCircuit) -> Path:
    """Write a new version; return its file."""
    stamp = known.learned_at.replace("-", "").replace(":", "").partition(".")[0].rstrip("Z")
    path = folder_of(journal) / f"{stamp}Z.toml"
    _write(path, write_text(known))
    return path


def accept(version: Version, by: str, at: datetime | None = None) -> KnownCircuit:
    """Write into a version who accepted it, and when. Raises ValueError for one that cannot be read."""
    if version.known is None:
        raise ValueError(version.fault)
    when = (at or datetime.now(UTC)).strftime("%Y-%m-%dT%H:%M:%SZ")
    known = replace(version.known, accepted_by=by, accepted_at=when)
    _write(version.path, write_text(known))
    return known


def _write(path: Path, text: str) -> None:
    """Write a file whole or not at all."""
    path.parent.mkdir(parents=True, exist_ok=True)
    beside = path.with_suffix(".new")
    with beside.open("w", encoding="utf-8") as file:
        file.write(text)
        file.flush()
        os.fsync(file.fileno())
    beside.replace(path)
