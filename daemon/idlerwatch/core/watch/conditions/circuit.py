"""What the converter's circuit tells: banks that stand wrong, capacitors, the idler's sense, what is off its normal.

A position counts with its probability: undecided changes nothing, neither way. A bank is judged only once its control
has had the time the settings give it.
"""

import math
from collections.abc import Iterator, Mapping
from typing import Final

from idlerwatch.core.settings.model import Alarm, Bank, Capacitor, Settings
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.conditions import means
from idlerwatch.core.watch.conditions.view import Address, View
from idlerwatch.core.watch.conditions.watch import CONVERTER, Measure, Subject, Watch
from idlerwatch.core.watch.wiring import lacks

BACKWARDS: Final[Address] = ("converter", "converter", "backwards_probability")
SEQUENCE: Final[Address] = ("converter", "converter", "sequence_right")
OFF_NORMAL: Final[Address] = ("converter", "converter", "off_normal")
USUAL_FACTOR: Final[Address] = ("converter", "converter", "usual_unbalance_factor")
FACTOR: Final[Address] = ("converter", "converter", "voltage_unbalance_factor")
UNEXPLAINED: Final[Address] = ("converter", "converter", "unexplained_current_ratio")

FACTOR_WEIGHT: Final = 2.0
"""Two points of unbalance above what is usual count like four percent of a leg's voltage (common practice)."""
SURE: Final = 0.999
CERTAIN: Final = 0.03
"""A capacitor is called weak only where its ratio is known better than this (k = 2)."""
HALF_CURRENT: Final = 0.5
"""From this share of its usual current on a bank's ammeter says that it is in."""
LOADED: Final = 0.30
"""Share of the smallest machine's rated current above which currents are judged."""


def lacks_circuit(settings: Settings) -> str:
    """Return what an installation lacks to see its converter as a circuit; empty where nothing is lacking."""
    return lacks(settings, compile_plan(settings))


# --------------------------------------------------------------------------
# Banks
# --------------------------------------------------------------------------


def _closed_share(name: str) -> Measure:
    """The probability that a bank is closed or partly in; NaN while undecided."""
    position: Address = ("bank", name, "position")
    probability: Address = ("bank", name, "position_probability")

    def share(view: View) -> float:
        at, sure = view.value(position), view.value(probability)
        if math.isnan(at):
            return math.nan
        return 1.0 - sure if at == 0.0 else sure

    return share


def _not_closed(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_missing_bank(bank) for bank in _banks_in_running(settings))


def _missing_bank(bank: Bank) -> Subject:
    share, due = _closed_share(bank.name), bank.closes_after_s + bank.within_s

    def not_closed(view: View) -> float:
        if view.at - view.assessment.state_since < due:
            return 0.0
        return 1.0 - share(view)

    return Subject(bank.name, not_closed, ("bank", bank.name, "position_probability"))


def _start_bank_in(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_needless_bank(bank) for bank in settings.bank if _opens_in_running(bank))


def _needless_bank(bank: Bank) -> Subject:
    share = _closed_share(bank.name)
    current: Address = ("bank", bank.name, "current_ratio")

    def still_in(view: View) -> float:
        if view.value(current) > HALF_CURRENT:
            return 1.0
        return share(view)

    return Subject(bank.name, still_in, ("bank", bank.name, "position_probability"))


def _banks_in_running(settings: Settings) -> Iterator[Bank]:
    return (bank for bank in settings.bank if bank.closed_when != "free" and "running" in bank.closed_when)


def _opens_in_running(bank: Bank) -> bool:
    return bank.closed_when != "free" and "running" not in bank.closed_when


def _lacks_closing_bank(settings: Settings) -> str:
    if not any(True for _ in _banks_in_running(settings)):
        return "no bank is closed in running"
    return lacks_circuit(settings)


def _lacks_start_bank(settings: Settings) -> str:
    banks = [bank for bank in settings.bank if _opens_in_running(bank)]
    if not banks:
        return "no bank is open in running"
    if any(meter.at == f"bank:{bank.name}" for bank in banks for meter in settings.meter):
        return ""
    return lacks_circuit(settings)


# --------------------------------------------------------------------------
# Capacitors
# --------------------------------------------------------------------------


def _lost(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_share_left(settings, capacitor) for capacitor in settings.capacitor)


def _share_left(settings: Settings, capacitor: Capacitor) -> Subject:
    """What a capacitor is seen to have left: nothing where it is lost, what its bank's ammeter shows, else all."""
    lost: Address = ("capacitor", capacitor.name.lower(), "lost_probability")
    ammeter = _own_ammeter(settings, capacitor)

    def left(view: View) -> float:
        probability, ratio = view.value(lost), view.value(ammeter) if ammeter else math.nan
        if probability > SURE:
            return 0.0
        if not math.isnan(ratio) and view.value(("bank", capacitor.bank or "", "position")) != 0.0:
            return ratio
        return math.nan if math.isnan(probability) else 1.0

    return Subject(capacitor.name.lower(), left, lost)


def _own_ammeter(settings: Settings, capacitor: Capacitor) -> Address | None:
    """The current ratio of its bank, where the ammeter's conductor carries this capacitor's current alone."""
    ends = {capacitor.between.first, capacitor.between.second}
    for meter in settings.meter:
        if capacitor.bank is None or meter.at != f"bank:{capacitor.bank}":
            continue
        through = {channel.through for channel in meter.channels if channel.through}
        touched = [
            other
            for other in settings.capacitor
            if other.bank == capacitor.bank and through & {other.between.first, other.between.second}
        ]
        if touched == [capacitor] and through & ends:
            return ("bank", capacitor.bank, "current_ratio")
    return None


def _lacks_lost(settings: Settings) -> str:
    if not settings.capacitor:
        return "no capacitor is described"
    if any(_own_ammeter(settings, capacitor) for capacitor in settings.capacitor):
        return ""
    return lacks_circuit(settings)


def _weak(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    return tuple(_tracked(capacitor.name.lower()) for capacitor in settings.capacitor)


def _tracked(name: str) -> Subject:
    address: Address = ("capacitor", name, "capacitance_ratio")

    def ratio(view: View) -> float:
        figure = view.figures.get(address)
        return figure.value if figure is not None and figure.uncertainty < CERTAIN else math.nan

    return Subject(name, ratio, address)


def _lacks_weak(settings: Settings) -> str:
    return lacks_circuit(settings) if settings.capacitor else "no capacitor is described"


# --------------------------------------------------------------------------
# The converter and its machines
# --------------------------------------------------------------------------


def _backwards(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    def probability(view: View) -> float:
        return 1.0 if view.value(SEQUENCE) == 0.0 else view.value(BACKWARDS)

    return (Subject(CONVERTER, probability, BACKWARDS),)


def _lacks_rotation(settings: Settings) -> str:
    if any(contact.means == "sequence right" for contact in settings.contact):
        return ""
    return lacks_circuit(settings)


def _off_normal(_settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    def distance(view: View) -> float:
        legs, more = abs(view.value(OFF_NORMAL)), view.value(FACTOR) - view.value(USUAL_FACTOR)
        return legs if math.isnan(more) else max(legs, FACTOR_WEIGHT * more)

    return (Subject(CONVERTER, distance, OFF_NORMAL),)


def _unexplained(settings: Settings, _alarm: Alarm) -> tuple[Subject, ...]:
    least = LOADED * (means.smallest_machine(settings) or math.nan)
    legs: tuple[Address, ...] = tuple(("leg", leg, "current") for leg in ("l1", "l2", "l3"))

    def ratio(view: View) -> float:
        mean = sum(view.value(leg) for leg in legs) / len(legs)
        return view.value(UNEXPLAINED) if mean > least else 0.0

    return (Subject(CONVERTER, ratio, UNEXPLAINED),)


def _lacks_machines(settings: Settings) -> str:
    if not means.smallest_machine(settings):
        return "no three-phase machine is described"
    if any(machine.starter == "drive" for machine in settings.machine):
        return "a machine on a drive is no linear load"
    return "" if means.has_lines(settings) else lacks_circuit(settings)


WATCHES: Final[Mapping[str, Watch]] = {
    "running-backwards": Watch("above", _backwards, _lacks_rotation),
    "off-normal": Watch("above", _off_normal, lacks_circuit),
    "current-unexplained": Watch("above", _unexplained, _lacks_machines),
    "bank-not-closed": Watch("above", _not_closed, _lacks_closing_bank),
    "start-bank-in": Watch("above", _start_bank_in, _lacks_start_bank),
    "capacitor-lost": Watch("below", _lost, _lacks_lost, good=1.0),
    "capacitor-weak": Watch("below", _weak, _lacks_weak, good=1.0),
}
