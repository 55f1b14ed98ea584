"""Standard errors from folds: against folds really left out, and against sums worked by hand."""

import math

import numpy as np
import pytest
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from fastsmooth import Band, Reading, Smoothing, make_curve
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.curve import OUTSIDE, THIN
from fastsmooth.jackknife import Deviations, leave_out_folds
from fastsmooth.localweights import CONSTANT, LINE, PARABOLA
from fastsmooth.plan import Plan
from tests import cases
from tests.oracle import folds as oracle
from tests.oracle import local

DEGREES = {CONSTANT: 0, LINE: 1, PARABOLA: 2}


def finest_level(x, y, folds, bins=8192):
    """The finest level of a table whose rows go to the folds given."""
    plan = Plan.simple(float(np.min(x)), float(np.max(x)), bins=bins, folds=max(folds) + 1)
    table = BinTable(plan)
    for fold in sorted(set(folds)):
        own = np.flatnonzero(np.asarray(folds) == fold)
        table.add_rows(fold, np.ascontiguousarray(x[own]), np.ascontiguousarray(y[own]))
    return Pyramid(table).levels[0]


def made_of(moved=None, shares=None):
    """Deviations at one place; the kernel weight and the variance have the same shares."""
    column = np.array(moved if shares is None else shares, float)[:, np.newaxis]
    zero = np.zeros_like(column)
    known = zero if moved is None else np.array(moved)[:, np.newaxis]
    return Deviations(known, zero, column, column)


def deviations(at, x, y, folds, h, kernel, kind):
    level = finest_level(x, y, folds)
    places = (np.asarray(at, float) - level.origin) / level.width
    return leave_out_folds(places, level, SHAPES[kernel], h / level.width, kind)


# By hand.


def test_a_mean_of_four_folds_worked_by_hand():
    # One place, a window that weighs all rows alike: the fit is the mean of (1), (3), (5, 7), (4).
    # All rows: 20 / 5 = 4. Without each fold: 19/4 = 4.75, 17/4 = 4.25, 8/3, 16/4 = 4.
    x = np.array([-1.0, 1.0, -0.5, 0.5, 0.0])
    y = np.array([1.0, 3.0, 5.0, 7.0, 4.0])
    made = deviations([0.0], x, y, [0, 1, 2, 2, 3], 100.0, "uniform", CONSTANT)
    np.testing.assert_allclose(made.moved[:, 0], [0.75, 0.25, -4.0 / 3.0, 0.0], atol=1e-12)
    np.testing.assert_allclose(made.shares[:, 0], [0.2, 0.2, 0.4, 0.2], rtol=1e-12)
    assert made.folds_met.tolist() == [4]
    # 3/4 (9/16 + 1/16 + 16/9) = 3/4 * 173/72 = 173/96
    assert made.std_error[0] == pytest.approx(math.sqrt(173.0 / 96.0), rel=1e-12)


def test_with_folds_of_one_row_it_is_the_error_of_a_mean():
    # Delete-one jackknife of a mean is s / sqrt(n) exactly (Tukey 1958, Ann. Math. Stat. 29:614).
    # For 1, 3, 5, 7, 4: mean 4, squares 9 + 1 + 1 + 9 + 0 = 20, s^2 = 5, s^2 / n = 1.
    x = np.array([-1.0, 1.0, -0.5, 0.5, 0.0])
    y = np.array([1.0, 3.0, 5.0, 7.0, 4.0])
    made = deviations([0.0], x, y, [0, 1, 2, 3, 4], 100.0, "uniform", CONSTANT)
    assert made.std_error[0] == pytest.approx(1.0, rel=1e-12)


def test_two_equal_folds_worked_by_hand():
    made = made_of(moved=[0.3, -0.3], shares=[0.5, 0.5])
    # 1/2 (0.09 + 0.09) = 0.09
    assert made.std_error[0] == pytest.approx(0.3, rel=1e-12)
    assert made.degrees[0] == pytest.approx(1.0)


@pytest.mark.parametrize(
    ("shares", "degrees"),
    [
        ((0.25, 0.25, 0.25, 0.25), 3.0),
        ((0.25, 0.25, 0.25, 0.25, 0.0), 3.0),
        # 0.5^-0.5 0.25^-0.25 0.25^-0.25 = 2^0.5 2^0.5 2^0.5
        ((0.5, 0.25, 0.25), 2.0**1.5 - 1.0),
        ((1.0, 0.0), 0.0),
    ],
)
def test_degrees_are_one_less_than_equal_folds(shares, degrees):
    assert made_of(shares=shares).degrees[0] == pytest.approx(degrees, abs=1e-12)


def test_a_window_of_one_fold_has_no_error():
    made = made_of(moved=[0.0, 0.1], shares=[0.0, 1.0])
    assert math.isnan(made.std_error[0])
    assert made.degrees[0] == 0.0


def test_a_window_without_a_fit_has_no_degrees():
    made = deviations(
        [50.0], np.array([0.0, 1.0, 100.0]), np.zeros(3), [0, 1, 2], 5.0, "biweight", LINE
    )
    assert made.degrees[0] == 0.0


@pytest.mark.parametrize("kind", DEGREES)
def test_shares_of_the_variance_are_sums_of_squared_weights(kind):
    rows = cases.make_rows("clustered", 120, seed=12)
    x, y = rows.wet_bulb_c, rows.power_kw
    folds = np.random.default_rng(4).integers(0, 5, x.size).tolist()
    made = deviations([6.0, 20.0], x, y, folds, 6.0, "biweight", kind)
    for place, at in enumerate((6.0, 20.0)):
        weights = local.fit_at(at, x.tolist(), y.tolist(), 6.0, "biweight", DEGREES[kind]).smoothing
        squares = [
            math.fsum(one**2 for one, own in zip(weights, folds, strict=True) if own == fold)
            for fold in range(5)
        ]
        shares = [one / math.fsum(squares) for one in squares]
        np.testing.assert_allclose(made.noise_shares[:, place], shares, rtol=2e-3, atol=1e-5)
        expected = math.exp(-math.fsum(one * math.log(one) for one in shares)) - 1.0
        assert made.degrees[place] == pytest.approx(expected, rel=2e-3)


def test_one_fold_at_the_end_of_the_data_makes_the_fit():
    # Four folds share the rows up to 10, a fifth has the few beyond: at 12 the line leans on it,
    # although it has little of the kernel weight.
    x = np.concatenate((np.linspace(0.0, 10.0, 400), np.linspace(11.5, 12.0, 8)))
    folds = [*(place % 4 for place in range(400)), *([4] * 8)]
    made = deviations([12.0], x, np.cos(x), folds, 8.0, "biweight", LINE)
    assert made.shares[4, 0] < 0.2
    assert made.noise_shares[4, 0] > 2.0 * made.shares[4, 0]
    assert made.degrees[0] < 3.0


@pytest.mark.parametrize(("folds", "evenness"), [(32, 2.0), (32, 0.4), (14, 1.0)])
def test_far_out_the_ratio_follows_t_with_these_degrees(folds, evenness):
    """Means of independent normal rows in folds of unequal size, over their jackknife error."""
    rng = np.random.default_rng(int(10 * evenness) + folds)
    shares = rng.gamma(evenness, size=folds)
    shares /= shares.sum()
    runs = 100_000
    means = rng.normal(size=(folds, runs)) / np.sqrt(shares)[:, np.newaxis]
    whole = shares @ means
    # (m - share mean_g) / (1 - share) is the mean without the fold.
    moved = (shares / (1.0 - shares))[:, np.newaxis] * (whole - means)
    columns = np.repeat(shares[:, np.newaxis], runs, axis=1)
    made = Deviations(moved, np.zeros_like(moved), columns, columns)
    ratio = np.abs(whole / made.std_error)
    degrees = float(made.degrees[0])
    for tail, least in ((0.05, 0.9), (0.01, 0.85), (0.001, 0.6)):
        beyond = np.mean(ratio > stats.t.isf(tail / 2.0, degrees)) / tail
        # Three standard errors of the share in so many runs.
        assert least < beyond < 1.0 + 3.0 / math.sqrt(tail * runs) + 0.05


# Against refits.


@pytest.mark.parametrize("kind", DEGREES)
@pytest.mark.parametrize("kernel", ["biweight", "epanechnikov", "gaussian"])
def test_each_fold_is_really_left_out(kernel, kind):
    rows = cases.make_rows("uniform", 160, seed=11)
    x, y = rows.wet_bulb_c, rows.power_kw
    folds = np.random.default_rng(3).integers(0, 6, x.size).tolist()
    at, h = [-2.0, 4.0, 11.3, 26.0], 5.0
    made = deviations(at, x, y, folds, h, kernel, kind)
    lists = (x.tolist(), y.tolist(), folds, h, kernel, DEGREES[kind])
    for place, one in enumerate(at):
        whole = local.fit_at(one, lists[0], lists[1], h, kernel, DEGREES[kind]).value
        for fold in range(6):
            left = local.fit_at(
                one, oracle.without(lists[0], folds, fold), oracle.without(lists[1], folds, fold),
                h, kernel, DEGREES[kind],
            )  # fmt: skip
            # The binned sums of 8192 bins stay within some 1e-5 of the rows' own.
            assert made.moved[fold, place] == pytest.approx(left.value - whole, abs=2e-5)
        assert made.std_error[place] == pytest.approx(oracle.jackknife_error(one, *lists), rel=1e-4)


@given(st.integers(0, 10**6), st.integers(2, 9), st.floats(2.0, 8.0))
def test_on_few_places_binning_loses_nothing(seed, count, h):
    # Rows on bin centres: table and rows must agree to rounding, empty folds and all.
    rng = np.random.default_rng(seed)
    x = rng.integers(0, 25, 40).astype(float)
    x[:2] = 0.0, 24.0
    y = np.round(rng.normal(size=40), 3)
    folds = rng.integers(0, count, 40).tolist()
    made = deviations([12.0], x, y, folds, h, "triangular", CONSTANT)
    met = {own for one, own in zip(x.tolist(), folds, strict=True) if abs(one - 12.0) < h}
    level = finest_level(x, y, folds)
    # Folds without a row have no row in the table either.
    assert level.folds.shape[0] == len(set(folds))
    assert made.folds_met[0] == len(met)
    if len(met) >= 2:
        error = oracle.jackknife_error(12.0, x.tolist(), y.tolist(), folds, h, "triangular", 0)
        assert made.std_error[0] == pytest.approx(error, rel=2e-3, abs=1e-9)
    if met:
        assert made.shares.sum(axis=0)[0] == pytest.approx(1.0)


def test_a_fold_outside_the_window_moves_nothing():
    x = np.concatenate((np.linspace(0.0, 10.0, 60), [24.0, 24.5]))
    y = np.sin(x)
    folds = [*(place % 5 for place in range(60)), 5, 5]
    made = deviations([4.0], x, y, folds, 3.0, "biweight", LINE)
    assert made.moved[5, 0] == 0.0
    assert made.shares[5, 0] == 0.0
    assert made.folds_met[0] == 5


# Through the whole engine.


def blocks_of_rows(days, rows_per_day, seed, shift_sd=0.4):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 24.0, days * rows_per_day)
    shift = (shift_sd * rng.normal(size=days)).repeat(rows_per_day)
    y = np.sin(x / 4.0) + shift + 0.3 * rng.normal(size=x.size)
    return {"wet_bulb_c": x, "power_kw": y, "day": np.arange(days).repeat(rows_per_day)}


def curve_of(data, block, bandwidth=3.0):
    return make_curve(
        data, "wet_bulb_c", "power_kw", reading=Reading(block=block, threads=1),
        smoothing=Smoothing(bandwidth=bandwidth, widths=8), band=Band(points=21),
    )  # fmt: skip


def test_a_shift_of_whole_days_shows_in_the_error():
    # Sixty days: the level of the curve is uncertain by 0.4 / sqrt(60) whatever the rows say.
    data = blocks_of_rows(60, 400, seed=1)
    by_day, by_row = curve_of(data, "day"), curve_of(data, None)
    expected = 0.4 / math.sqrt(60.0)
    # A variance from some thirty folds has a relative standard error of 1/4, its root of 1/8.
    assert np.median(by_day.std_error) == pytest.approx(expected, rel=0.35)
    assert np.median(by_row.std_error) < 0.6 * expected


def test_without_shifts_both_errors_agree():
    data = blocks_of_rows(60, 200, seed=2, shift_sd=0.0)
    by_day, by_row = curve_of(data, "day"), curve_of(data, None)
    assert np.median(by_day.std_error / by_row.std_error) == pytest.approx(1.0, abs=0.15)


def test_places_seen_by_few_folds_are_thin():
    # Above 20 degrees only eight days have rows, however many.
    data = blocks_of_rows(64, 200, seed=3)
    keep = (data["wet_bulb_c"] < 20.0) | (data["day"] < 8)
    made = curve_of({name: values[keep] for name, values in data.items()}, "day", bandwidth=1.0)
    hot, cold = made.x > 21.5, made.x < 18.5
    assert set(made.status[hot].tolist()) <= {THIN, OUTSIDE}
    assert THIN not in made.status[cold]
