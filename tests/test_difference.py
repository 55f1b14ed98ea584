"""The difference of two curves: its error, its bands, its test, its stretches."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import stats

from bench.excess import Cell, one_run
from fastsmooth.difference import FLIPS, difference_of
from fastsmooth.foldsums import FoldedCurve, joint_degrees, stretches

GRID = np.linspace(0.0, 10.0, 101)


def curve(seed, level=0.0, folds=20, spread=0.3, good=None, width=1.5, first=0):
    """A curve whose folds pull it up and down smoothly, by so much per fold."""
    rng = np.random.default_rng(seed)
    knots = np.arange(-2.0 * width, 10.0 + 3.0 * width, width)
    news = rng.normal(0.0, spread, (folds, knots.size))
    shape = np.exp(-0.5 * ((GRID[:, None] - knots) / width) ** 2)
    pulls = news @ (shape / np.sqrt((shape**2).sum(axis=1, keepdims=True))).T
    pulls -= pulls.mean(axis=0)
    # A curve that is the mean of its folds: without one it moves by -(its pull) / (G - 1).
    centre = np.full(GRID.shape, 20.0 + level)
    return FoldedCurve(
        GRID, centre, -pulls / (folds - 1), np.full(pulls.shape, 1.0 / folds),
        np.arange(first, first + folds), np.full(GRID.shape, folds - 1.0),
        np.ones(GRID.shape, bool) if good is None else good,
    )  # fmt: skip


def compared(base, now, level=0.95, paired=False):
    return difference_of(base, now, 1.5, level, paired=paired)


def test_errors_of_independent_sides_add_up():
    base, now = curve(1), curve(2, level=1.0, folds=12, spread=0.5)
    found = compared(base, now)
    for place in (0, 37, 100):
        parts = []
        for side in (base, now):
            folds = side.moved.shape[0]
            total = math.fsum(one**2 for one in side.moved[:, place].tolist())
            parts.append(((folds - 1) / folds * total, folds - 1))
        variance = parts[0][0] + parts[1][0]
        degrees = variance**2 / sum(v**2 / nu for v, nu in parts)
        half = stats.t.ppf(0.975, degrees) * math.sqrt(variance)
        assert found.difference[place] == pytest.approx(1.0)
        assert found.std_error[place] == pytest.approx(math.sqrt(variance))
        assert found.degrees[place] == pytest.approx(degrees)
        assert found.lower[place] == pytest.approx(1.0 - half)
        assert found.upper[place] == pytest.approx(1.0 + half)
    assert found.statistic == pytest.approx((1.0 / found.std_error).max())


def test_what_paired_sides_share_cancels():
    base = curve(3, spread=1.0)
    now = curve(4, level=0.5, spread=0.05)
    shared = FoldedCurve(
        GRID, now.centre, base.moved + now.moved, now.shares, now.folds, now.degrees, now.good
    )
    apart, paired = compared(base, shared), compared(base, shared, paired=True)
    own = math.sqrt(0.95) * np.sqrt((now.moved**2).sum(axis=0))
    np.testing.assert_allclose(paired.std_error, own)
    assert paired.p_value < 0.01 < apart.p_value
    assert paired.stretches
    assert not apart.stretches


def test_folds_of_one_side_only_count_when_paired():
    base, now = curve(5, folds=10), curve(6, folds=10, first=5)
    found = compared(base, now, paired=True)
    both = np.zeros((15, GRID.size))
    both[:10] -= base.moved
    both[5:] += now.moved
    np.testing.assert_allclose(found.std_error, np.sqrt(14 / 15 * (both**2).sum(axis=0)))


def test_the_band_for_the_whole_curve_is_wider_at_every_point():
    found = compared(curve(7), curve(8))
    assert (found.lower_all < found.lower).all()
    assert (found.upper_all > found.upper).all()
    wider = compared(curve(7), curve(8), level=0.99)
    assert (wider.upper_all > found.upper_all).all()


def test_only_places_where_both_are_supported_are_compared():
    good = np.zeros(GRID.shape, bool)
    good[10:40] = good[60:62] = True
    good[80] = True  # one place alone is no stretch
    found = compared(curve(9, good=good), curve(10))
    expected = good.copy()
    expected[80] = False
    np.testing.assert_array_equal(found.compared, expected)
    assert stretches(found.compared) == [(10, 40), (60, 62)]
    nowhere = compared(curve(9, good=good), curve(10, good=~good))
    assert nowhere is None


def test_stretches_end_where_the_band_crosses_zero():
    base, now = curve(11, spread=0.05), curve(12, spread=0.05)
    rise = np.where(GRID < 3.0, 0.0, np.minimum(GRID - 3.0, 2.0))
    now = FoldedCurve(
        GRID, now.centre + rise, now.moved, now.shares, now.folds, now.degrees, now.good
    )
    found = compared(base, now)
    assert len(found.stretches) == 1
    only = found.stretches[0]
    assert only.high == GRID[-1]
    assert np.interp(only.low, GRID, found.lower_all) == pytest.approx(0.0, abs=1e-9)
    inside = only.low <= GRID
    assert only.mean_difference == pytest.approx(found.difference[inside].mean())


def test_stretches_of_either_sign_come_in_order():
    base, now = curve(13, spread=0.02), curve(14, spread=0.02)
    wave = np.sin(2.0 * math.pi * GRID / 10.0)
    now = FoldedCurve(
        GRID, now.centre - wave, now.moved, now.shares, now.folds, now.degrees, now.good
    )
    found = compared(base, now)
    assert [math.copysign(1.0, one.mean_difference) for one in found.stretches] == [-1.0, 1.0]
    assert found.stretches[0].high < 5.0 < found.stretches[1].low


# The test.


def test_the_test_is_the_same_every_time_and_never_zero():
    base, now = curve(15), curve(16, level=5.0)
    found, again = compared(base, now), compared(base, now)
    assert found.p_value == again.p_value == 1.0 / (FLIPS + 1)
    assert found.test() == {
        "statistic": found.statistic, "p_value": found.p_value, "sign_flips": FLIPS, "points": 101,
    }  # fmt: skip


def test_equal_curves_are_not_told_apart():
    found = compared(curve(17), curve(18))
    assert found.statistic == 0.0
    assert found.p_value == 1.0
    assert found.stretches == ()


def test_two_curves_without_any_error_and_without_difference():
    base, now = curve(19, spread=0.0), curve(20, spread=0.0)
    found = compared(base, now)
    assert (found.statistic, found.p_value) == (0.0, 1.0)


@settings(max_examples=5)
@given(st.integers(0, 2**31), st.floats(-3.0, 3.0), st.floats(1e-6, 1e6))
def test_units_of_y_and_the_order_of_sides_do_not_matter(seed, level, scale):
    base, now = curve(seed), curve(seed + 1, level=level)

    def scaled(one):
        return FoldedCurve(
            one.t, one.centre * scale, one.moved * scale, one.shares, one.folds, one.degrees,
            one.good,
        )  # fmt: skip

    found, larger = compared(base, now), compared(scaled(base), scaled(now))
    np.testing.assert_allclose(larger.std_error, found.std_error * scale, rtol=1e-9)
    assert larger.statistic == pytest.approx(found.statistic, rel=1e-6)
    other = compared(now, base)
    np.testing.assert_allclose(other.std_error, found.std_error, rtol=1e-12)
    np.testing.assert_allclose(other.difference, -found.difference)
    assert other.statistic == pytest.approx(found.statistic, rel=1e-9)


@given(st.floats(0.0, 1e9), st.floats(0.0, 1e9), st.floats(0.5, 100.0), st.floats(0.5, 100.0))
def test_joint_degrees_lie_between_the_smaller_and_the_sum(v, w, a, b):
    found = float(joint_degrees((np.array(v), np.array(w)), (np.array(a), np.array(b))))
    assert min(a, b) * (1.0 - 1e-9) <= found <= (a + b) * (1.0 + 1e-9)


# Simulated: days with a level of their own, the truth known. bench/excess.py has the larger study.


@pytest.fixture(scope="module")
def runs():
    cell = Cell("day effects", "uniform", 96, 30, 0.0)
    return np.array([one_run(cell, 5, run) for run in range(48)])


def test_simulated_intervals_and_bands_cover_and_tests_keep_their_size(runs):
    interval, found, differ, pointwise, every = runs[:, [2, 4, 6, 7, 8]].mean(axis=0)
    # In 48 runs a share of 95 % has a standard error of 3 %.
    assert interval >= 0.86
    assert found <= 0.14
    assert differ <= 0.14
    assert pointwise >= 0.88
    assert every >= 0.86


def test_simulated_errors_are_of_the_right_size(runs):
    ratio = math.sqrt(float(np.mean(runs[:, 1] ** 2))) / float(runs[:, 0].std())
    assert 0.75 < ratio < 1.35


def test_as_if_rows_were_independent_would_not_do(runs):
    assert runs[:, 3].mean() < 0.6


def test_a_simulated_drift_is_found():
    cell = Cell("day effects", "uniform", 96, 30, 0.08)
    drifted = np.array([one_run(cell, 6, run) for run in range(6)])
    assert drifted[:, 4].mean() >= 0.9
    assert drifted[:, 6].mean() >= 0.9
