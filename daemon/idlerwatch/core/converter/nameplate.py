"""What a machine's circuit probably is, when all that is known is its nameplate.

A rating is a power balance: what goes in less what comes out is lost, and the loss divides among copper, iron and
friction much alike in cage machines. With usual leakage reactances that gives every constant of the equivalent circuit,
in closed form, such that the circuit draws the rated current at the rated power factor, delivers the rated power at the
rated speed, and loses what its efficiency says. Figures missing from the plate are replaced by usual ones.

All of it is a guess to begin with, and `Typical.relative` says how good one: learning weighs it by that.

The constants are those of a warm machine, a star phase, whatever its winding: a delta is three times its star.
"""

import math
from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType
from typing import Final

import numpy as np

from idlerwatch.core.converter.machine import EquivalentCircuit, Iron
from idlerwatch.core.converter.network import Complexes

EFFICIENCY: Final = MappingProxyType(
    {
        0.37: 0.660,
        0.75: 0.721, 1.1: 0.750, 1.5: 0.772, 2.2: 0.797, 3.0: 0.815, 4.0: 0.831, 5.5: 0.847, 7.5: 0.860, 11.0: 0.876,
        15.0: 0.887, 18.5: 0.893, 22.0: 0.899, 30.0: 0.907,
    }
)  # fmt: skip
"""Efficiency by kilowatts: class IE1, four poles, 50 Hz (IEC 60034-30-1, as a maker's catalogue prints it from 0.75 to
11 kW; the rest from memory).

Idlers are mostly old machines; IE3 is eight points better at 1.5 kW and four at 11 kW."""

POWER_FACTOR: Final = MappingProxyType({0.75: 0.75, 7.5: 0.85, 18.5: 0.896})
"""Power factor at rated load by kilowatts: 0.75 to 0.85 for four poles of 1 to 10 hp (common practice, no source);
0.896 measured on 18.5 kW (the machine with losses of the Modelica Standard Library)."""

STATOR_SHARE: Final = 0.45
"""Stator copper and stray loss over all loss: (770 + 102) of 1944 W on that 18.5 kW machine. Stray loss follows the
current, so it is counted as resistance."""
ROTOR_SHARE: Final = 0.21
"""Rotor copper: 410 of 1944 W."""
CORE_SHARE: Final = 0.25
"""Core: 482 of 1944 W."""
FRICTION_SHARE: Final = 0.09
"""Friction and fan: 180 of 1944 W."""

STATOR_REACTANCE: Final = 0.09
"""Over the base impedance. 0.072 measured on 18.5 kW; 0.10, 0.089 (P. Hubert, examples 5.15, 5.16, the latter on the
base of its rated current); 0.10 (Fitzgerald, example 6.2, taken as 7.5 kW)."""
ROTOR_REACTANCE: Final = 0.10
"""Over the base impedance. 0.11 measured on 18.5 kW; 0.13 (Hubert 5.16); 0.043 (Fitzgerald 6.2); 0.10 (the
default machine of the Modelica Standard Library)."""
ZERO_REACTANCE: Final = 0.06
"""Zero-sequence reactance of a star over the base impedance; below the leakage (common practice, no source)."""
SATURATION: Final = 0.27
"""No-load current then climbs by a third at +10 %; 20 to 50 % (0.10 to 0.72) is common practice, no source."""

LEAST_MAGNETISING, MOST_MAGNETISING = 0.15, 0.80
"""Magnetising over rated current: 0.335 measured on 18.5 kW, 0.566 (Hubert 5.16), 0.5 to 0.7 below 2 kW (common
practice, no source). A plate that leads outside of these is not that exact."""


@dataclass(frozen=True, slots=True)
class Nameplate:
    """What stands on the plate; `rated_voltage` line to line. [kW, V, Hz, A, 1/min, 1, A]

    `magnetising_current` is the line current with nothing on the shaft, which plates do not tell but a clamp does.
    """

    rated_kw: float
    rated_voltage: float
    frequency: float = 50.0
    rated_current: float | None = None
    rated_speed_rpm: float | None = None
    rated_power_factor: float | None = None
    magnetising_current: float | None = None


@dataclass(frozen=True, slots=True)
class Typical:
    """A machine that fits a nameplate, and how well that is known.

    `zero_impedance` is that of the star when its star point is tied. [ohm] `friction` and `rated_torque`, the one at
    the shaft, are torques. [synchronous W] `relative` is the standard uncertainty over the value, by the
    names used here and in `EquivalentCircuit` and `Iron`. [1]
    """

    circuit: EquivalentCircuit
    iron: Iron
    zero_impedance: complex
    friction: float
    rated_current: float
    rated_slip: float
    rated_torque: float
    relative: Mapping[str, float]


@dataclass(frozen=True, slots=True)
class _Rating:
    """The rating made whole: a phase's voltage and current (which lags), output, loss, and slip."""

    voltage: float
    current: complex
    power: float
    loss: float
    slip: float

    @property
    def base(self) -> float:
        return self.voltage / abs(self.current)

    @property
    def friction(self) -> float:
        return FRICTION_SHARE * self.loss

    @property
    def airgap_power(self) -> float:
        return (self.power + self.friction) / (1.0 - self.slip)


def typical_machine(plate: Nameplate) -> Typical:
    """Return the machine that fits a nameplate.

    Parameters
    ----------
    plate
        Its rated power, voltage and frequency at least. A measured magnetising current outranks the rated current and
        power factor, which the circuit then meets a few percent off.

    Returns
    -------
    Typical
        Constants without leading axes.

    Raises
    ------
    ValueError
        Where no machine can have that plate.

    Examples
    --------
    >>> from idlerwatch.core.converter.machine import phase_admittance
    >>> idler = typical_machine(Nameplate(7.5, 400.0, rated_current=15.2, rated_speed_rpm=1455.0))
    >>> amperes = 400.0 / np.sqrt(3.0) * abs(phase_admittance(idler.circuit, np.array(idler.rated_slip)))
    >>> round(idler.rated_slip, 3), round(float(amperes), 1)
    (0.03, 15.2)

    References
    ----------
    The circuit of `machine`, solved backwards from terminals to rotor (derived).
    """
    rating = _complete(plate)
    impedance = complex(STATOR_SHARE * rating.loss / (3.0 * abs(rating.current) ** 2), STATOR_REACTANCE * rating.base)
    across = rating.voltage - impedance * rating.current
    conductance = rating.airgap_power / (3.0 * abs(across) ** 2)
    leakage = ROTOR_REACTANCE * rating.base
    load = (1.0 + math.sqrt(1.0 - (2.0 * conductance * leakage) ** 2)) / (2.0 * conductance)
    circuit = EquivalentCircuit(
        stator_resistance=np.asarray(impedance.real),
        stator_reactance=np.asarray(impedance.imag),
        magnetising_reactance=np.asarray(_magnetising_reactance(plate, rating, across, 1.0 / complex(load, leakage))),
        rotor_resistance=np.asarray(load * rating.slip),
        rotor_reactance=np.asarray(leakage),
        core_resistance=np.asarray(3.0 * abs(across) ** 2 / (CORE_SHARE * rating.loss)),
    )
    return Typical(
        circuit=circuit,
        iron=Iron(np.asarray(SATURATION), np.asarray(abs(across))),
        zero_impedance=complex(impedance.real, ZERO_REACTANCE * rating.base),
        friction=rating.friction / (1.0 - rating.slip),
        rated_current=abs(rating.current),
        rated_slip=rating.slip,
        rated_torque=rating.power / (1.0 - rating.slip),
        relative=_relative(plate),
    )


def believed(plate: Nameplate) -> tuple[Nameplate, str]:
    """Return the plate without its optional figures where these contradict it, and the sentence that says so.

    Examples
    --------
    >>> plain, fault = believed(Nameplate(5.5, 240.0, rated_current=15.6))
    >>> plain.rated_current, fault
    (None, 'rated_current must be above 15.6 A for 5.5 kW at such a voltage')
    """
    try:
        typical_machine(plate)
    except ValueError as error:
        return Nameplate(plate.rated_kw, plate.rated_voltage, plate.frequency), str(error)
    return plate, ""


def zero_admittance(machine: Typical, star_point: str) -> Complexes:
    """Return Y0 of a machine whose star point is on ``N``, or ``floating``. [S]"""
    return np.asarray(1.0 / machine.zero_impedance if star_point == "N" else 0.0, dtype=np.complex128)


def _complete(plate: Nameplate) -> _Rating:
    """Return the rating with usual figures where the plate has none."""
    power = 1e3 * plate.rated_kw
    current, factor = plate.rated_current, plate.rated_power_factor
    if current is not None and factor is not None:
        efficiency = power / (math.sqrt(3.0) * plate.rated_voltage * current * factor)
    else:
        efficiency = _by_size(EFFICIENCY, plate.rated_kw)
    factor = factor or _by_size(POWER_FACTOR, plate.rated_kw)
    current = current or power / (math.sqrt(3.0) * plate.rated_voltage * efficiency * factor)
    factor = power / (math.sqrt(3.0) * plate.rated_voltage * current * efficiency)
    _check(plate, efficiency, factor)
    loss = power / efficiency - power
    voltage = plate.rated_voltage / math.sqrt(3.0)
    return _Rating(voltage, current * complex(factor, -math.sqrt(1.0 - factor**2)), power, loss, _slip(plate, loss))


def _check(plate: Nameplate, efficiency: float, factor: float) -> None:
    least = 1e3 * plate.rated_kw / (math.sqrt(3.0) * plate.rated_voltage * efficiency)
    if factor >= 0.98:
        raise ValueError(f"rated_current must be above {least:.3g} A for {plate.rated_kw:g} kW at such a voltage")
    if not 0.4 < efficiency < 0.98:
        raise ValueError(
            f"rated_current and rated_power_factor make an efficiency of {efficiency:.2f}, must be 0.4 to 0.98"
        )


def _slip(plate: Nameplate, loss: float) -> float:
    """Return the rated slip: of the plate, the synchronous speed being the next above; else from the rotor's loss."""
    if plate.rated_speed_rpm is None:
        lost = ROTOR_SHARE * loss
        return lost / (1e3 * plate.rated_kw + FRICTION_SHARE * loss + lost)
    pole_pairs = math.floor(60.0 * plate.frequency / plate.rated_speed_rpm)
    slip = 1.0 - pole_pairs * plate.rated_speed_rpm / (60.0 * plate.frequency)
    if pole_pairs < 1 or not 0.0 < slip < 0.25:
        wanted = f"a little below {60.0 * plate.frequency:g}/1, /2, /3 ..."
        raise ValueError(f"rated_speed_rpm is {plate.rated_speed_rpm:g}, must be {wanted} at {plate.frequency:g} Hz")
    return slip


def _magnetising_reactance(plate: Nameplate, rating: _Rating, across: complex, rotor: complex) -> float:
    """Return Xm at the airgap voltage of rated load: from the no-load current, else from what var the rotor leaves."""
    if plate.magnetising_current is not None:
        idle = rating.voltage - STATOR_REACTANCE * rating.base * plate.magnetising_current
        steeper = (1.0 + SATURATION * (idle / abs(across)) ** 8) / (1.0 + SATURATION)
        return idle / plate.magnetising_current * steeper
    susceptance = -(rating.current / across).imag + rotor.imag
    return rating.base / min(max(susceptance * rating.base, LEAST_MAGNETISING), MOST_MAGNETISING)


def _by_size(table: Mapping[float, float], kilowatts: float) -> float:
    """Return a table's value at a size, between its rows along the logarithm, at its ends beyond."""
    return float(np.interp(math.log(kilowatts), [math.log(size) for size in table], list(table.values())))


def _relative(plate: Nameplate) -> Mapping[str, float]:
    """Return relative standard uncertainties: how far the machines named above lie from these rules, roughly.

    A plate's slip may be off by a fifth of itself (IEC 60034-1, tolerances; from memory), which is 0.12 at k = sqrt 3.
    """
    knows_current = plate.magnetising_current is not None
    return MappingProxyType(
        {
            "stator_resistance": 0.30,
            "stator_reactance": 0.25,
            "rotor_resistance": 0.30 if plate.rated_speed_rpm is None else 0.12,
            "rotor_reactance": 0.45,
            "magnetising_reactance": 0.05 if knows_current else 0.25,
            "core_resistance": 0.50,
            "zero_impedance": 0.50,
            "saturation": 0.55,
            "friction": 0.50,
        }
    )
