"""The conductor map: points come back from their distances, and what contradicts is named, not bent."""

import cmath
import math

import numpy as np
import pytest
from hypothesis import assume, given
from hypothesis import strategies as st

from idlerwatch.core.conductors import CONDUCTORS, EARTH_PAIRS, LINE_PAIRS, NEUTRAL_PAIRS, Feed, Pair
from idlerwatch.core.converter.conductor_map import fit_conductors

SHED = Feed(Pair("L1", "N"), 230.0)
HOUSE = Feed(Pair("L1", "L2"), 240.0, neutral="centre-tap")
THREE_WIRE = Feed(Pair("L1", "L2"), 400.0, neutral="none")
SIX = (*NEUTRAL_PAIRS, *LINE_PAIRS)
ALL = (*SIX, *EARTH_PAIRS)
GAIN = 0.005 / math.sqrt(3.0)


def distances(points, pairs):
    by_name = dict(zip(CONDUCTORS, points, strict=True))
    return np.array([abs(by_name[pair.first] - by_name[pair.second]) for pair in pairs])


def nominal(feed):
    points = feed.nominal_points()
    return np.array([points.get(conductor, complex(math.nan, math.nan)) for conductor in CONDUCTORS])


def fit(feed, pairs, values, gain=GAIN):
    values = np.asarray(values, dtype=float)
    return fit_conductors(feed, pairs, values, np.maximum(gain * np.abs(np.nan_to_num(values, nan=1.0)), 1e-3))


moves = st.lists(st.tuples(st.floats(-60.0, 60.0), st.floats(-60.0, 60.0)), min_size=5, max_size=5).map(
    lambda pairs: np.array([complex(*pair) for pair in pairs])
)


@pytest.mark.parametrize(("feed", "pairs"), [(SHED, SIX), (SHED, ALL), (HOUSE, SIX), (HOUSE, ALL)])
@given(off=moves)
def test_points_come_back_from_their_distances(feed, pairs, off):
    points = nominal(feed) + off
    wanted = distances(points, pairs)
    assume(wanted.min() > 5.0)
    found = fit(feed, pairs, wanted)
    assert distances(found.points, SIX) == pytest.approx(distances(points, SIX), abs=1e-3)
    assert float(found.chi_square) < 1e-3
    assert int(found.misfit) == -1
    known = 5 if pairs is ALL else 4
    assert int(found.degrees_of_freedom) == len(pairs) - (2 * known - 3)


@given(off=moves)
def test_three_lines_are_a_triangle_on_the_declared_side(off):
    points = nominal(THREE_WIRE)[:3] + off[:3]
    sides = np.array([abs(points[0] - points[1]), abs(points[1] - points[2]), abs(points[2] - points[0])])
    area = ((points[1] - points[0]).conjugate() * (points[2] - points[0])).imag
    assume(area < -1e3)
    found = fit(THREE_WIRE, LINE_PAIRS, sides)
    assert distances(found.points, LINE_PAIRS) == pytest.approx(sides, abs=1e-6)
    turned = ((found.points[1] - found.points[0]).conjugate() * (found.points[2] - found.points[0])).imag
    assert turned == pytest.approx(area, rel=1e-6)
    assert np.isnan(found.points[3:]).all()


def test_the_other_rotation_is_the_mirror_image():
    forwards = fit(SHED, SIX, distances(nominal(SHED), SIX))
    mirrored = Feed(Pair("L1", "N"), 230.0, rotation="L1-L3-L2")
    backwards = fit(mirrored, SIX, distances(nominal(mirrored), SIX))
    assert backwards.points[:3] == pytest.approx(forwards.points[:3].conj(), abs=1e-6)


def test_legs_to_neutral_alone_determine_no_angle():
    found = fit(SHED, NEUTRAL_PAIRS, [230.0, 231.0, 229.0])
    assert np.isnan(found.points[[1, 2, 4]]).all()
    assert abs(found.points[0] - found.points[3]) == pytest.approx(230.0)


def test_a_lost_neutral_is_found_far_from_the_middle():
    points = nominal(SHED)
    points[3] = 180.0 * cmath.exp(2.0j)
    found = fit(SHED, SIX, distances(points, SIX))
    assert distances(found.points, SIX) == pytest.approx(distances(points, SIX), abs=1e-3)


def test_neutral_to_earth_follows_from_voltages_to_earth():
    points = nominal(SHED)
    points[4] = 7.0 + 3.0j
    pairs = (*SIX, *EARTH_PAIRS[:3])
    found = fit(SHED, pairs, distances(points, pairs), gain=1e-4)
    assert abs(found.points[3] - found.points[4]) == pytest.approx(abs(7.0 + 3.0j), abs=0.01)


def test_missing_distances_leave_out_only_what_rests_on_them():
    whole = distances(nominal(SHED), SIX)
    rows = np.tile(whole, (3, 1))
    rows[1, 5] = np.nan  # one to spare is used
    rows[2, 3:] = np.nan  # only legs to neutral are left
    found = fit(SHED, SIX, rows)
    assert found.degrees_of_freedom.tolist() == [1, 0, 0]
    assert not np.isnan(found.points[:2, :4]).any()
    assert np.isnan(found.points[2, 1:3]).all()


def test_nothing_measured_determines_nothing():
    found = fit(SHED, SIX, np.full(6, np.nan))
    assert np.isnan(found.points).all()
    assert np.isnan(found.chi_square)


def test_many_at_once_equal_each_alone():
    chance = np.random.default_rng(3)
    rows = distances(nominal(SHED), ALL) * (1.0 + 0.01 * chance.standard_normal((40, len(ALL))))
    rows[::7, 2] = np.nan
    rows[:, -1] = np.abs(chance.standard_normal(40)) + 1.0
    together = fit(SHED, ALL, rows)
    for index, row in enumerate(rows):
        alone = fit(SHED, ALL, row)
        # half of the last digit of a voltmeter: how far the search goes depends on its company
        assert together.points[index] == pytest.approx(alone.points, abs=0.05, nan_ok=True)
        assert together.chi_square[index] == pytest.approx(alone.chi_square, rel=1e-3)
        assert together.misfit[index] == alone.misfit


def test_two_voltmeters_on_one_pair_are_averaged_by_their_uncertainty():
    pairs = (*LINE_PAIRS, Pair("L1", "L2"))
    values = np.array([400.0, 398.0, 399.0, 404.0])
    found = fit_conductors(THREE_WIRE, pairs, values, np.array([1.0, 1.0, 1.0, 2.0]))
    assert abs(found.points[0] - found.points[1]) == pytest.approx((400.0 + 404.0 / 4.0) / 1.25, abs=1e-6)
    assert int(found.degrees_of_freedom) == 1
    assert float(found.chi_square) == pytest.approx(16.0 / 5.0, rel=1e-6)  # (404 - 400)^2 / (1 + 4)


def noisy(count, pairs=SIX, seed=5):
    chance = np.random.default_rng(seed)
    points = nominal(SHED) + np.array([3.0, 5.0 - 4.0j, -6.0j, 0.0, 4.0 + 2.0j])
    true = distances(points, pairs)
    return points, true * (1.0 + GAIN * chance.standard_normal((count, len(pairs))))


def test_chi_square_has_the_mean_of_its_degrees_of_freedom():
    """A chi-square variable of k degrees of freedom has mean k and variance 2 k (any table of statistics)."""
    _, rows = noisy(4000)
    found = fit(SHED, SIX, rows)
    assert found.chi_square.mean() == pytest.approx(1.0, abs=4.0 * math.sqrt(2.0 / 4000.0))
    assert (found.misfit >= 0).mean() == pytest.approx(0.001, abs=0.002)


def test_stated_moves_cover_the_scatter_of_a_voltage_nobody_measured():
    pairs = SIX[:5]  # L3-L1 is left to geometry
    points, rows = noisy(3000, pairs)
    found = fit(SHED, pairs, rows)
    span = found.points[:, 2] - found.points[:, 0]
    direction = span / np.abs(span)
    towards = (direction.conj()[:, None] * (found.moves[:, :, 2] - found.moves[:, :, 0])).real
    standard = np.sqrt((towards**2).sum(axis=1))
    error = np.abs(span) - abs(points[2] - points[0])
    assert (np.abs(error) <= 2.0 * standard).mean() == pytest.approx(0.954, abs=0.015)


def test_moves_are_what_a_changed_distance_does():
    _, rows = noisy(1)
    found = fit(SHED, SIX, rows[0])
    for index in range(len(SIX)):
        changed = rows[0].copy()
        changed[index] += 0.01 * GAIN * rows[0, index]
        # the weights stay those of the unchanged reading, as the moves assume
        again = fit_conductors(SHED, SIX, changed, GAIN * rows[0])
        moves = 0.01 * found.moves[index, :4]
        # derivatives are those at the closed form: a few percent of a move, nothing to an uncertainty of two digits
        assert (again.points - found.points)[:4] == pytest.approx(moves, abs=0.05 * np.abs(moves).max())


@pytest.mark.parametrize("wrong", range(6))
def test_a_voltmeter_that_disagrees_is_named_where_two_are_to_spare(wrong):
    pairs = (*SIX, SIX[wrong])  # a second, right voltmeter on the same pair
    points, _ = noisy(1)
    values = distances(points, pairs)
    values[wrong] *= 1.06
    found = fit(SHED, pairs, values)
    assert int(found.degrees_of_freedom) == 2
    assert int(found.misfit) == wrong


@pytest.mark.parametrize(("share", "is_told"), [(1.9, False), (3.5, True)])
def test_a_disagreement_is_told_from_the_quantile_on(share, is_told):
    """One degree of freedom, two equal voltmeters: chi-square is (d / (u sqrt 2))^2; the 0.999 quantile is 10.83."""
    pairs = (*LINE_PAIRS, Pair("L1", "L2"))
    off = share * math.sqrt(2.0)
    found = fit_conductors(THREE_WIRE, pairs, np.array([400.0, 400.0, 400.0, 400.0 + off]), np.ones(4))
    assert float(found.chi_square) == pytest.approx(share**2, rel=1e-3)
    assert bool(found.is_contradicted) is is_told
    assert int(found.misfit) == -1, "with one to spare nobody can say which is wrong"


def test_sides_that_cannot_close_are_bad_data_and_not_bent():
    found = fit(THREE_WIRE, LINE_PAIRS, [100.0, 100.0, 230.0])
    assert np.isnan(found.points).all()
    assert found.is_contradicted
    just = fit(THREE_WIRE, LINE_PAIRS, [100.0, 100.0, 200.2])
    assert not np.isnan(just.points[:3]).any(), "within the uncertainty of the meters it is a flat triangle"
    assert not just.is_contradicted


def test_a_centre_tap_lies_between_the_fed_legs():
    """Nominally L1, N and L2 lie on a line, where two circles touch: the worst case for trilateration."""
    found = fit(HOUSE, SIX, distances(nominal(HOUSE), SIX) * np.array([1.002, 0.998, 1.0, 1.0, 1.0, 1.0]))
    assert found.points[3] == pytest.approx((found.points[0] + found.points[1]) / 2.0, abs=2.0)
    assert int(found.misfit) == -1
