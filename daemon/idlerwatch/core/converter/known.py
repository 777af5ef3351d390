"""A learned circuit as a thing to keep: its figures with how they were found, and the text of its file.

The file is TOML that a person can read: what was learned when, from how many states over which supply, how well it
fits, each figure with its expanded uncertainty (k = 2); the joint covariance follows at the end, for the program. A
circuit becomes the normal only when a person has accepted it.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Final

import numpy as np

from idlerwatch.core.converter.circuit import Floats

VERSION: Final = 1
_WANTED: Final[Mapping[str, type | tuple[type, ...]]] = {
    "version": int,
    "learned_at": str,
    "converter": str,
    "arrangement": str,
    "states": int,
    "samples": int,
    "lowest_supply_volts": (int, float),
    "highest_supply_volts": (int, float),
    "misfit": (int, float),
    "condition": (int, float),
    "has_converged": bool,
    "not_separable": list,
    "accepted_by": str,
    "accepted_at": str,
    "parameter": list,
    "covariance": list,
}


@dataclass(frozen=True, slots=True, eq=False)
class KnownCircuit:
    """A circuit learned from recorded load states.

    Attributes
    ----------
    names, parameters, covariance : (p,), (p,), (p, p)
        As `Wiring.names`. [1]
    learned_at, accepted_at
        ISO 8601 UTC; `accepted_at` and `accepted_by` are empty until a person has accepted it.
    converter, arrangement
        Of which converter, in which arrangement of capacitors and meters: see `watch.wiring`.
    states, samples
        Distinct load states, and how many samples they are the means of.
    lowest_supply, highest_supply
        Over the states. [V]
    misfit
        Chi-square over its degrees of freedom. [1]
    condition
        Of the information about the parameters. [1]
    not_separable
        Names of capacitors that cannot be told from the idler or from each other.
    """

    names: tuple[str, ...]
    parameters: Floats
    covariance: Floats
    learned_at: str
    converter: str
    arrangement: str
    states: int
    samples: int
    lowest_supply: float
    highest_supply: float
    misfit: float
    condition: float
    has_converged: bool
    not_separable: tuple[str, ...] = ()
    accepted_by: str = ""
    accepted_at: str = ""


def write_text(known: KnownCircuit) -> str:
    """Return the text of the circuit's file."""
    names = ", ".join(f'"{name}"' for name in known.not_separable)
    expanded = 2.0 * np.sqrt(np.diag(known.covariance))
    lines = [
        "# The circuit of a converter as its own meters showed it. Written by idlerwatch; a person accepts it.",
        f"version = {VERSION}",
        f'learned_at = "{known.learned_at}"',
        f'converter = "{known.converter}"            # of these idlers on this supply',
        f'arrangement = "{known.arrangement}"          # with these capacitors, banks and meters',
        f"states = {known.states}",
        f"samples = {known.samples}",
        f"lowest_supply_volts = {known.lowest_supply:.1f}",
        f"highest_supply_volts = {known.highest_supply:.1f}",
        f"misfit = {known.misfit:.3f}  # chi-square over its degrees of freedom; a sound one has about 1 or less",
        f"condition = {known.condition:.3e}",
        f"has_converged = {str(known.has_converged).lower()}",
        f"not_separable = [{names}]",
        f'accepted_by = "{_plain(known.accepted_by)}"',
        f'accepted_at = "{known.accepted_at}"',
        "",
        "# Admittances over the idler's rated current / nominal leg voltage; gains, capacitances: relative changes.",
        "parameter = [",
        *(
            f'  {{ name = "{name}", value = {float(value)!r}, uncertainty = {width:.4g} }},'
            for name, value, width in zip(known.names, known.parameters, expanded.tolist(), strict=True)
        ),
        "]",
        "",
        "covariance = [",
        *(f"  [{', '.join(repr(float(entry)) for entry in row)}]," for row in known.covariance),
        "]",
    ]
    return "\n".join(lines) + "\n"


def _plain(text: str) -> str:
    """Return a person's name without what would break a line of TOML."""
    return "".join(sign for sign in text if sign.isprintable() and sign not in '"\\')


def read_known(mapping: Mapping[str, Any]) -> KnownCircuit:
    """Return the circuit of a file's mapping. Raises ValueError with place, value found and what was wanted."""
    wrong = next((key for key, kind in _WANTED.items() if not isinstance(mapping.get(key), kind)), None)
    if wrong is not None:
        raise ValueError(f"{wrong} is {mapping.get(wrong)!r}, must be {_words(_WANTED[wrong])}")
    if mapping["version"] != VERSION:
        raise ValueError(f"version is {mapping['version']}, must be {VERSION}")
    names, parameters = _parameters(mapping["parameter"])
    covariance = _matrix(mapping["covariance"], len(names))
    return KnownCircuit(
        names=names,
        parameters=parameters,
        covariance=covariance,
        learned_at=mapping["learned_at"],
        converter=mapping["converter"],
        arrangement=mapping["arrangement"],
        states=mapping["states"],
        samples=mapping["samples"],
        lowest_supply=float(mapping["lowest_supply_volts"]),
        highest_supply=float(mapping["highest_supply_volts"]),
        misfit=float(mapping["misfit"]),
        condition=float(mapping["condition"]),
        has_converged=mapping["has_converged"],
        not_separable=tuple(map(str, mapping["not_separable"])),
        accepted_by=mapping["accepted_by"],
        accepted_at=mapping["accepted_at"],
    )


def _words(kind: type | tuple[type, ...]) -> str:
    words = {int: "a whole number", str: "a text", bool: "true or false", list: "a list"}
    return "a number" if isinstance(kind, tuple) else words[kind]


def _parameters(rows: list[Any]) -> tuple[tuple[str, ...], Floats]:
    wrong = next((place for place, row in enumerate(rows) if not _is_parameter(row)), None)
    if wrong is not None:
        raise ValueError(f"parameter {wrong + 1} is {rows[wrong]!r}, must have a name and a value")
    return tuple(row["name"] for row in rows), np.array([float(row["value"]) for row in rows])


def _is_parameter(row: object) -> bool:
    return isinstance(row, Mapping) and isinstance(row.get("name"), str) and _is_number(row.get("value"))


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and math.isfinite(value)


def _matrix(rows: list[Any], size: int) -> Floats:
    shapes = {len(row) if isinstance(row, list) else -1 for row in rows}
    if len(rows) != size or shapes != {size} or not all(_is_number(entry) for row in rows for entry in row):
        raise ValueError(f"covariance has {len(rows)} rows, must be {size} by {size} numbers")
    matrix = np.array(rows, dtype=np.float64)
    least = float(np.linalg.eigvalsh(0.5 * (matrix + matrix.T)).min())
    if not np.allclose(matrix, matrix.T, rtol=1e-6, atol=1e-12) or least < -1e-9 * float(np.abs(matrix).max()):
        raise ValueError("covariance is no covariance: it must be symmetric and never negative")
    return matrix
