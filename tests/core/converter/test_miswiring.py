"""Each usual mistake of wiring shows in the misfit of the learned circuit and is named.

Sound and spoilt meters look at the same random converters of the rig; the mistakes are made with the rig's phasors, not
with the code that undoes them.
"""

from dataclasses import replace

import numpy as np
import pytest

from fakes.population import Options, channels_of, draw, measure, running, wiring_of
from idlerwatch.core.converter.circuit import Sample
from idlerwatch.core.converter.hypotheses import catalogue
from idlerwatch.core.converter.learn import Recorded
from idlerwatch.core.converter.miswiring import Mistake, are_computed, diagnose, misfit
from idlerwatch.core.converter.nameplate import Nameplate
from idlerwatch.core.converter.prior import Limits, prior_of

COUNT, STATES = 6, 12
TURN = np.exp(2j * np.pi / 3.0)


@pytest.fixture(scope="module")
def shop():
    population = draw(Options(feed="L1-N", count=COUNT), 11)
    return population, [running(population) for _ in range(STATES)]


def spoilt(population, view, kind):
    """What the leg meters of L2 and L3 tell after a mistake: rays (n, 3) and currents (n, 2)."""
    seen = measure(population, view).sample
    points, currents = view.potentials["leg"], view.currents["leg"]
    volts = points[:, :3] - points[:, 3:4]
    direction = volts / np.abs(volts)
    rays, told = seen.rays.copy(), seen.currents.copy()
    match kind:
        case "first reversed":
            told[:, 0] *= -1.0
        case "second reversed":
            told[:, 1] *= -1.0
        case "ammeters swapped":  # each meter multiplies its own voltage with the other's current
            told[:, 0] = currents[:, 2] / direction[:, 1]
            told[:, 1] = currents[:, 1] / direction[:, 2]
        case "voltmeters exchanged":
            rays[:, [1, 2]] = rays[:, [2, 1]]
            told[:, 0] = currents[:, 1] / direction[:, 2]
            told[:, 1] = currents[:, 2] / direction[:, 1]
        case "in front":  # between idler and capacitors: what the capacitors take goes through the ammeter too
            w = 2j * np.pi * population.plant.frequency
            bank = view.currents["bank:run"]
            always = w * population.plant.capacitors.farads[:, 2] * volts[:, 1]
            told[:, 0] = (currents[:, 1] + bank[:, 1] + always) / direction[:, 1]
            told[:, 1] = (currents[:, 2] + bank[:, 2]) / direction[:, 2]
    return replace(seen, rays=rays, currents=told)


def diagnoses(shop, kind):
    population, views = shop
    seen = [spoilt(population, view, kind) for view in views]
    for index in range(COUNT):
        wiring = wiring_of(population, index)
        sample = Sample(*(np.stack([getattr(one, name)[index] for one in seen]) for name in Sample.__slots__))
        recorded = Recorded(sample, catalogue(wiring, (1.0, 0.0)).positions, np.zeros(STATES, dtype=np.int64))
        plate = Nameplate(float(population.kilowatts[index]), 400.0)
        prior = prior_of(wiring, [plate], Limits([0.005] * 3, [0.01] * len(channels_of(population.options))))
        yield diagnose(wiring, recorded, prior, np.full(wiring.rows, 0.002 * wiring.rated_current))


def test_sound_wiring_fits_and_nothing_is_named(shop):
    found = list(diagnoses(shop, ""))
    assert all(diagnosis.fits and diagnosis.mistake is None for diagnosis in found)
    assert max(misfit(diagnosis.learned) for diagnosis in found) < 1.3


@pytest.mark.parametrize(
    ("kind", "mistake"),
    [
        ("first reversed", Mistake("reversed", (0,))),
        ("second reversed", Mistake("reversed", (1,))),
        ("ammeters swapped", Mistake("swapped", (0, 1))),
        ("voltmeters exchanged", Mistake("voltmeters", (1, 2))),
    ],
)
def test_mistake_of_wiring_shows_and_is_named(shop, kind, mistake):
    found = list(diagnoses(shop, kind))
    assert not any(diagnosis.fits for diagnosis in found)
    assert [diagnosis.mistake for diagnosis in found] == [mistake] * COUNT


def test_meters_in_front_of_the_capacitors_are_named_mostly_and_never_taken_for_another_mistake(shop):
    """Part of what the capacitors take can be mistaken for the idler's own: not every converter shows it."""
    found = list(diagnoses(shop, "in front"))
    named = [diagnosis.mistake for diagnosis in found if diagnosis.mistake is not None]
    assert set(named) == {Mistake("in front")}
    assert len(named) >= 0.75 * COUNT


def test_computed_line_voltages_are_told_from_measured_ones(shop):
    """The identity of 120 degrees holds in every state where a meter computes, and fails where it measures."""
    _, views = shop
    legs = np.stack([np.abs(view.potentials["leg"][0, :3] - view.potentials["leg"][0, 3]) for view in views])
    points = np.stack([view.potentials["leg"][0] for view in views])
    measured = np.abs(points[:, 1] - points[:, 2])
    computed = np.sqrt(legs[:, 1] ** 2 + legs[:, 2] ** 2 + legs[:, 1] * legs[:, 2])
    rounded = np.round(computed, 1)
    assert are_computed(rounded, legs[:, 1], legs[:, 2])
    assert not are_computed(measured, legs[:, 1], legs[:, 2])
    assert not are_computed(np.full(STATES, np.nan), legs[:, 1], legs[:, 2])
