"""Negative-sequence current: what a healthy motor draws is explained, what a bad winding adds is not.

Truths by symmetrical components: I1 = y1 V1, I2 = y2 V2 of a machine's equivalent circuit at its slip.
"""

import math
from dataclasses import replace

import numpy as np
import pytest

from fakes.sheds import cycle, running, slipway
from idlerwatch.core.conductors import LEGS
from idlerwatch.core.converter.machine import phase_admittance
from idlerwatch.core.converter.nameplate import Nameplate, typical_machine
from idlerwatch.core.electrical.sequence import phasors_from_sequence
from idlerwatch.core.watch.align import begin_align, step
from idlerwatch.core.watch.channel import Measured, Power
from idlerwatch.core.watch.compile import compile_plan
from idlerwatch.core.watch.derive import derive
from idlerwatch.core.watch.explained import compile_machines, unexplained_current

PLANER = [{"name": "planer", "rated_kw": 4.0, "rated_current": 8.4}]
MACHINE = typical_machine(Nameplate(4.0, 400.0, 50.0, 8.4))


def scene(extra=0j, slip=0.02, negative=12.0 + 5.0j, scale=1.0):
    """The planer on an uneven converter: derived figures and points."""
    settings = slipway(machine=PLANER)
    voltages = phasors_from_sequence(np.array([0.0, 225.0, negative]))
    y1, y2 = (complex(phase_admittance(MACHINE.circuit, np.array(s))) for s in (slip, 2.0 - slip))
    currents = scale * phasors_from_sequence(np.array([0.0, y1 * 225.0, y2 * negative + extra]))
    points = dict(zip(LEGS, voltages.tolist(), strict=True)) | {"N": 0j}
    plan = compile_plan(settings)
    align, sample = begin_align(plan.slow), None
    for event in cycle(0.0, running()):
        align, sample = step(align, event)
    powers = {}
    for leg, voltage, current in zip(LEGS, voltages, currents, strict=True):
        apparent = voltage * current.conjugate()
        powers[leg] = Power(
            current=Measured(abs(current)), active=Measured(apparent.real), reactive=Measured(apparent.imag)
        )
    return compile_machines(settings), replace(derive(plan, sample), legs=powers), points


def unexplained(**changes):
    machines, derived, points = scene(**changes)
    return unexplained_current(machines, derived, points, LEGS).value


@pytest.mark.parametrize("negative", [0j, 4.0 + 2.0j, 12.0 + 5.0j, 20.0 - 8.0j])
def test_what_a_healthy_motor_draws_on_uneven_voltages_is_explained(negative):
    assert unexplained(negative=negative) == pytest.approx(0.0, abs=1e-9)


def test_what_a_bad_winding_adds_is_not_explained():
    """A third of the positive-sequence current more than the voltages make."""
    y1 = complex(phase_admittance(MACHINE.circuit, np.array(0.02)))
    extra = abs(y1) * 225.0 / 3.0
    assert unexplained(negative=0j, extra=extra) == pytest.approx(1.0 / 3.0, rel=0.01)


def test_a_load_no_described_machine_fits_is_not_judged():
    assert math.isnan(unexplained(scale=0.01))


def test_without_angles_powers_or_machines_nothing_is_said():
    machines, derived, points = scene()
    assert math.isnan(unexplained_current(machines, derived, None, LEGS).value)
    assert math.isnan(unexplained_current(None, derived, points, LEGS).value)
    silent = replace(derived, legs={**derived.legs, "L2": Power()})
    assert math.isnan(unexplained_current(machines, silent, points, LEGS).value)
    assert compile_machines(slipway(machine=[])) is None
    drive = [{"name": "saw", "rated_kw": 3.0, "starter": "drive"}]
    assert compile_machines(slipway(machine=drive)) is None
