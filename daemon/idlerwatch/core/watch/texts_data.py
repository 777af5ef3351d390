"""The words of every alarm that can be told: `call` while it is in (after NOW or TODAY), `clear` when it has gone.

A verb comes first; then what was found, what is usual, how it is known. Never more than one cause, never an order to
open a box, and what is not measured is not mentioned. Fields are those of `texts.FIELDS`; parts in square brackets are
left out where a figure is missing.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Final


@dataclass(frozen=True, slots=True)
class Text:
    """The words of one alarm."""

    call: str
    clear: str


_TOUCH = "touch no metal of panel or machines"
_UPSTREAM = "A neutral broken upstream of the bond does not show here."

TEXTS: Final[Mapping[str, Text]] = {
    # ------------------------------------------------------------------ supply
    "supply-lost": Text(
        "switch every machine off at its own switch before power returns. Supply is gone since {since}[: {value}]"
        "[ (usual {usual})][, a machine last ran {machine_at}]. Then converter first, machines one by one.[ {sure}.]",
        "supply is back[, {value}]. Converter first, then machines one by one.",
    ),
    "supply-low": Text(
        "avoid heavy cuts for now. The supply itself is low: {value} since {since} (limit {limit}[, usual {usual}])."
        "[ {sure}.] If it lasts, call the network operator; 10-minute figures are kept.[ {legs}.]",
        "supply {value}[ (usual {usual})].",
    ),
    "supply-below-range": Text(
        "note that the supply is at the lower end: {value} since {since} (limit {limit}[, usual {usual}]).[ {sure}.]",
        "supply {value}[ (usual {usual})].",
    ),
    "supply-very-low": Text(
        "end the cut and stop the machines. The supply is far too low: {value} since {since} (limit {limit}"
        "[, usual {usual}]); motors stall at that.[ {sure}.] Wait until it is back.[ {legs}.]",
        "supply {value}[ (usual {usual})].",
    ),
    "supply-high": Text(
        "tell the network operator if it lasts. The supply is high: {value} since {since} (limit {limit}"
        "[, usual {usual}]).[ {sure}.] 10-minute figures are kept.[ {legs}.]",
        "supply {value}[ (usual {usual})].",
    ),
    "supply-above-range": Text(
        "note that the supply is above its usual range: {value} since {since} (limit {limit}[, usual {usual}])."
        "[ {sure}.] 10-minute figures are kept.",
        "supply {value}[ (usual {usual})].",
    ),
    "supply-frequency": Text(
        "note the frequency of the supply: {frequency}, off by {value} since {since} (limit {limit}).[ {sure}.]",
        "frequency of the supply[ {frequency}].",
    ),
    "generator-frequency": Text(
        "take load off the generator. It runs at {frequency}, off by {value} since {since} (limit {limit}"
        "[, usual {usual}]).[ {sure}.] If it stays so unloaded, have the governor looked at.",
        "the generator runs[ at {frequency}].",
    ),
    "supply-overload": Text(
        "stop one machine. The supply takes {value} since {since} (breaker {breaker}[, usual {usual}]).[ {sure}.]"
        " Never fit a larger breaker for it.",
        "supply takes {value} (breaker {breaker}).",
    ),
    "supply-overload-heavy": Text(
        "stop the heaviest machine. The supply takes {value} since {since}, far above the breaker's {breaker}"
        "[ (usual {usual})].[ {sure}.] A machine may be stalled: look which one does not turn.",
        "supply takes {value} (breaker {breaker}).",
    ),
    "leading-supply": Text(
        "have the capacitors re-chosen. At idle the supply current leads: {value} of the idle power is capacitive"
        " (limit {limit}).[ {sure} by the supply meter.]",
        "the supply current leads no more than usual.",
    ),
    "neutral-shift": Text(
        "call an electrician about the service neutral. It has shifted {value} since {since} (limit {limit}"
        "[, usual {usual}]): one hot leg rises as the other falls.[ {sure}.] Unplug what is sensitive.",
        "service neutral off by {value}.",
    ),
    "neutral-shift-high": Text(
        "unplug all 120 V loads and call the network operator. The service neutral has shifted {value} (limit {limit}"
        "[, usual {usual}]): it is open or nearly so, and a live conductor then.[ {sure}.]",
        "service neutral off by {value}.",
    ),
    # ------------------------------------------------------ starting and stopping
    "start-not-completed": Text(
        "press STOP on the converter. Start has lasted {value}[ (usual {usual_start})][, supply {supply_amperes}]."
        " Wait 15 min before one more try; if it hums again leave it off. Likely a start capacitor or its contactor.",
        "the start is over.",
    ),
    "supply-legs-only": Text(
        "switch the machine off at its own switch. Current flows only in the supply legs ({amperes}) while the"
        " converter does not run: a motor stands stalled on it.[ {sure}.] Let its windings cool; converter first.",
        "no machine draws on the supply legs alone.",
    ),
    "converter-stopped-under-load": Text(
        "switch all machines off at their own switches. The converter stopped while one ran[, last seen {machine_at}]"
        "[; currents {amperes}]. From its state and currents. Let nothing restart by itself; then find why it stopped.",
        "machines are off or the converter runs[; currents {amperes}].",
    ),
    "starts-too-many": Text(
        "leave the converter running between jobs. Counted {starts} (usual at most 3 and 8): each start heats the"
        " rotor. Let it rest half an hour.",
        "starts are back to usual.",
    ),
    "left-on": Text(
        "switch the converter off when you pass. Idling for {value}, no machine used[: {supply_kw}]."
        "[ Legs {legs}.] From its currents. It only costs money.",
        "the converter no longer idles.",
    ),
    "left-on-after-hours": Text(
        "switch the converter off when you pass. Idling for {value}, no machine used, closing time {closing}"
        "[: {supply_kw}].[ Legs {legs}.] From its currents. Nobody may be there.",
        "the converter no longer idles.",
    ),
    # ------------------------------------------------------------------- legs
    "leg-lost": Text(
        "stop all machines, then the converter. {thing} is lost: {value}[ (usual {usual})] since {since}"
        "[; supply {supply_volts}].[ {sure}.] Motors burn on two legs. The rest is for an electrician.[ {amperes}.]",
        "{thing} {value}[ (usual {usual})].",
    ),
    "leg-low": Text(
        "make lighter cuts. {thing} is low: {value} since {since} (limit {limit}[, usual {usual}])"
        "[; supply {supply_volts}].[ {sure}.] If that is new, have run capacitors and their contactor looked at."
        "[ {amperes}.]",
        "{thing} {value}[ (usual {usual})].",
    ),
    "leg-very-low": Text(
        "end the cut and stop the machine. {thing} is down to {value} since {since} (limit {limit}[, usual {usual}])"
        "[; supply {supply_volts}].[ {sure}.] Do not go on until it is back.[ {amperes}.]",
        "{thing} {value}[ (usual {usual})].",
    ),
    "leg-high": Text(
        "keep a machine running, or switch the converter off. {thing} is high: {value} since {since} (limit {limit}"
        "[, usual {usual}])[; supply {supply_volts}].[ {sure}.] Have the capacitors re-chosen if it comes back.",
        "{thing} {value}[ (usual {usual})].",
    ),
    "leg-very-high": Text(
        "stop machines, then converter. {thing} is at {value} (limit {limit}[, usual {usual}]).[ {sure}.]"
        " Likely start capacitors still in: they can burst; keep clear of the box. Capacitors stay charged."
        "[ Supply {supply_volts}.]",
        "{thing} {value}[ (usual {usual})].",
    ),
    "machine-on-two-legs": Text(
        "stop the machine, do not try again. No current in {thing} to speak of ({amperes})[, legs {legs}]: fuse,"
        " contact or wire open towards the machine.[ {sure}.] On two legs its motor burns in minutes.",
        "all three legs carry current, or no machine runs[: {amperes}].",
    ),
    # --------------------------------------------------------------- unbalance
    "unbalance": Text(
        "plan shorter heavy jobs. Unbalance was {value} over 10 minutes (limit {limit}[, usual {usual}])"
        "[, now {legs}].[ {sure}.] Motors run hot; have the capacitors re-chosen.",
        "unbalance {value} over 10 minutes[ (usual {usual})].",
    ),
    "unbalance-high": Text(
        "end the heavy work soon. Unbalance {value} since {since} (limit {limit}[, usual {usual}])[; {legs}].[ {sure}.]"
        " More than load explains: have the run capacitors and their contactor looked at.",
        "unbalance {value}[ (usual {usual})].",
    ),
    "current-unbalance": Text(
        "note the uneven currents: {value} since {since} (limit {limit}[, usual {usual}])[; {amperes}].[ {sure}.]",
        "current unbalance {value}[ (usual {usual})].",
    ),
    "power-factor": Text(
        "note the power factor: {value} since {since} (limit {limit}[, usual {usual}]).[ {sure}.]",
        "power factor {value}[ (usual {usual})].",
    ),
    "ammeter-reversed": Text(
        "have the current transformer on {thing} looked at. Its power was negative in {value} of ten loaded minutes"
        " (limit {limit}).[ {sure}.] Turn it only isolated; never open the secondary of one that carries current.",
        "{thing} no longer reads backwards.",
    ),
    # ----------------------------------------------------------------- the circuit
    "running-backwards": Text(
        "start no machine. The idler runs backwards, {odds} sure[, {sure_from}]: machines turn the wrong way and a"
        " spindle's tool can unscrew. Switch the converter off; prove the rotation with a rotation tester.",
        "the idler runs forwards. Prove the rotation with a rotation tester all the same.",
    ),
    "off-normal": Text(
        "have capacitors, contactor and terminals looked at. The converter is {value} off its normal for this load"
        " since {since} (limit {limit})[: legs {legs}][, usual {usual_legs}].[ Seen {sure_from}.]",
        "the converter is as usual for its load[: legs {legs}].",
    ),
    "current-unexplained": Text(
        "run one machine at a time and look which it is. {value} of the current is uneven beyond what the voltages"
        " explain (limit {limit})[; {amperes}]. Likely a winding or contact in a machine.[ {sure}.]",
        "the machines' currents are explained by their voltages[; {amperes}].",
    ),
    "bank-not-closed": Text(
        "end the cut, stop the machine. {bank} capacitors are not in[: legs {legs}][, usual {usual_legs}]."
        " Likely coil, its fuse or contactor. {odds} sure[, {sure_from}]. Capacitors stay charged: electrician.",
        "{bank} capacitors are in[, legs {legs}].",
    ),
    "start-bank-in": Text(
        "stop machines, then converter. {bank} capacitors are still in[: legs {legs}]. They can burst: keep clear of"
        " their box. Capacitors stay charged: electrician. {odds} sure[, {sure_from}].",
        "{bank} capacitors are out[, legs {legs}].",
    ),
    "capacitor-lost": Text(
        "plan a visit of the electrician. {capacitor} {left} since {since}[; legs {legs}]: lost, or one pole of"
        " its contactor open.[ Seen {sure_from}.] Capacitors stay charged.",
        "{capacitor} is in as it should be.",
    ),
    "capacitor-weak": Text(
        "have {capacitor} replaced at the next visit. It has {value} of the microfarads it was learned with"
        " (limit {limit}).[ Seen {sure_from}.] Capacitors stay charged: electrician.",
        "{capacitor} has {value} of its microfarads.",
    ),
    # ----------------------------------------------------------- neutral and earth
    "neutral-earth-raised": Text(
        "have the neutral's terminals tightened at the next visit. Neutral is {value} above earth since {since}"
        f" (limit {{limit}}[, usual {{usual}}]).[ {{sure}}.] {_UPSTREAM}",
        "neutral {value} above earth[ (usual {usual})].",
    ),
    "neutral-earth-high": Text(
        "have an electrician look at the neutral's terminals. Neutral is {value} above earth since {since}"
        f" (limit {{limit}}[, usual {{usual}}]).[ {{sure}}.] {_UPSTREAM}",
        "neutral {value} above earth[ (usual {usual})].",
    ),
    "neutral-earth-dangerous": Text(
        f"{_TOUCH}. All-pole switch off only if safely reached; call an electrician."
        f" Neutral is {{value}} above earth[ (usual {{usual}})] since {{since}}.[ {{sure}}.] {_UPSTREAM}",
        "neutral {value} above earth[ (usual {usual})]. Find out why before work goes on.",
    ),
    "neutral-earth-jump": Text(
        f"{_TOUCH}. All-pole switch off only if safely reached; call an electrician. Neutral is {{earth}} above earth"
        "[ (was {earth_before})] since {since}: neutral broken after the bond.[ {sure}.]"
        "[ Converter is live, supply {supply_volts}.]",
        "neutral[ {earth}] above earth. Find out why before work goes on.",
    ),
    "neutral-earth-near-zero": Text(
        "ask whether neutral and earth are bonded in this panel. Neutral is {value} above earth under load since"
        " {since} (limit {limit}[, usual {usual}]).[ {sure}.]",
        "neutral {value} above earth[ (usual {usual})].",
    ),
    # --------------------------------------------------------------- the watch
    "supply-meter-silent": Text(
        "look at the meter {thing} and its data cable. The supply meter is silent since {since}: the converter is"
        " hardly watched. From the bus.[ Legs {legs}.]",
        "the meter {thing} answers.",
    ),
    "leg-meter-silent": Text(
        "look at the meter {thing} and its data cable. It is silent since {since}; its figures are not measured."
        " From the bus.[ Supply takes {supply_amperes}.]",
        "the meter {thing} answers.",
    ),
    "blind": Text(
        "look at the data cable at the converter. The meters that tell its state are silent since {since}"
        "[, yet supply takes {supply_amperes}]: it may be running UNWATCHED. No alarm can come for its legs. Machines"
        " need not stop; look in hourly.",
        "the converter is watched again.",
    ),
    "earth-transducer-silent": Text(
        "look at the supply and data cable of the transducer {thing}. It is silent since {since}:"
        " a broken neutral would not be told. From the bus.",
        "the transducer {thing} answers.",
    ),
    "bus-down": Text(
        "look at the adapter and data cable of the bus {thing}. All its meters are silent since {since}"
        "[; {trouble}]. What runs there runs UNWATCHED. Machines need not stop; look in hourly.",
        "the bus {thing} answers.",
    ),
    "own-health": Text(
        "look at the board that watches: {thing} is in trouble since {since}[ ({trouble})]. By its own report.",
        "the board reports no more trouble with {thing}.",
    ),
    "way-out-down": Text(
        "look at router, cable and server: {way} cannot be reached since {since}[ ({trouble})]. As the board itself"
        " reports. Messages may not reach every phone.",
        "{way} is reached again.",
    ),
    "idler-temperature": Text(
        "let the {thing} cool, unloaded. Its frame is at {value} since {since} (limit {limit}[, usual {usual}])."
        "[ {sure}.] Cooling air may be blocked.",
        "frame of the {thing} at {value}[ (usual {usual})].",
    ),
    "machine-temperature": Text(
        "let the {thing} cool. Its frame is at {value} since {since} (limit {limit}[, usual {usual}]).[ {sure}.]"
        " Cooling air may be blocked.",
        "frame of the {thing} at {value}[ (usual {usual})].",
    ),
}
