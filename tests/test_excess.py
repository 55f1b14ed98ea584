"""The excess and its error: against plain loops, and at the limits of what can be known."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.excess import excess_of
from fastsmooth.foldsums import FoldedCurve
from fastsmooth.plan import Plan
from tests.oracle import excess as oracle

GRID = np.linspace(0.0, 20.0, 201)


def line_of(a, b):
    """A straight line, which bins and splines reproduce to rounding."""
    return lambda x: a + b * x


def folded(centre, deviations, good=None, degrees=20.0):
    """A baseline whose centre and deviations are given as functions of x."""
    moved = np.array([[dev(t) for t in GRID] for dev in deviations.values()])
    return FoldedCurve(
        GRID, np.array([centre(t) for t in GRID]), moved,
        np.full(moved.shape, 1.0 / moved.shape[0]), np.array(list(deviations)),
        np.full(GRID.shape, degrees), np.ones(GRID.shape, bool) if good is None else good,
    )  # fmt: skip


def counted(x, y, folds, low=0.0, high=20.0, reference=30.0, bins=1024):
    """The finest level of a table whose rows go to the folds given."""
    plan = Plan.simple(low, high, bins=bins, folds=max(folds) + 1)
    table = BinTable(plan)
    for fold in sorted(set(folds)):
        own = np.asarray(folds) == fold
        table.add_rows(fold, np.ascontiguousarray(x[own]), np.ascontiguousarray(y[own]))
    return Pyramid(table).levels[0], np.array(sorted(table.sums))


def found_of(base, x, y, folds, *, confidence=0.95, per_row=1.0, paired=False):
    level, own = counted(x, y, folds)
    return excess_of(base, level, 0.0, own, confidence=confidence, per_row=per_row, paired=paired)


def drawn(seed, rows=240, folds=12):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 20.0, rows)
    fold = rng.integers(0, folds, rows)
    y = 30.0 + 0.5 * x + rng.normal(0.0, 1.0, folds)[fold] + rng.normal(0.0, 1.0, rows)
    return x, y, fold.tolist()


def wobbles(seed, folds=8):
    rng = np.random.default_rng(seed)
    return {fold: line_of(*rng.normal(0.0, (0.05, 0.005))) for fold in range(folds)}


# Against the oracle.


@given(st.integers(0, 2**31), st.integers(8, 300), st.integers(4, 30), st.booleans())
def test_amount_and_error_are_those_of_plain_loops(seed, rows, folds, paired):
    x, y, fold = drawn(seed, rows, folds)
    if len(set(fold)) < 4:
        fold = [place % 4 for place in range(rows)]
    deviations, baseline = wobbles(seed), line_of(29.0, 0.55)
    found = found_of(folded(baseline, deviations), x, y, fold, paired=paired)
    told = oracle.excess(x.tolist(), y.tolist(), fold, baseline, deviations)
    assert found.rows == rows
    assert found.folds == told["folds"]
    assert found.amount == pytest.approx(told["amount"], rel=1e-9, abs=1e-8)
    assert found.expected == pytest.approx(told["expected"], rel=1e-12)
    assert found.actual == pytest.approx(float(y.sum()), rel=1e-12)
    assert found.now_std_error == pytest.approx(math.sqrt(told["now_variance"]), rel=1e-8)
    assert found.base_std_error == pytest.approx(math.sqrt(told["base_variance"]), rel=1e-8)
    variance = told["now_variance"] + told["base_variance"]
    if paired:
        variance = told["paired_variance"]
    assert found.std_error == pytest.approx(math.sqrt(variance), rel=1e-8, abs=1e-9)
    assert found.independent_rows == pytest.approx(told["independent_rows"], rel=1e-8)


def test_ties_and_empty_bins_change_nothing():
    x, y, fold = drawn(3)
    x = np.round(x * 2.0) / 2.0
    deviations, baseline = wobbles(3), line_of(29.0, 0.55)
    found = found_of(folded(baseline, deviations), x, y, fold)
    told = oracle.excess(x.tolist(), y.tolist(), fold, baseline, deviations)
    assert found.amount == pytest.approx(told["amount"], rel=1e-9)
    assert found.now_std_error == pytest.approx(math.sqrt(told["now_variance"]), rel=1e-9)


def test_a_curved_baseline_is_followed_within_the_bins():
    x, y, fold = drawn(4, rows=4000)

    def curved(t):
        return 28.0 + 3.0 * math.sin(0.4 * t)

    deviations = wobbles(4)
    found = found_of(folded(curved, deviations), x, y, fold)
    told = oracle.excess(x.tolist(), y.tolist(), fold, curved, deviations)
    assert abs(found.amount - told["amount"]) < 1e-3 * math.sqrt(told["now_variance"])
    assert found.now_std_error == pytest.approx(math.sqrt(told["now_variance"]), rel=1e-4)


def test_worked_by_hand():
    # Four folds of one row each at the same x: residuals 1, 2, 3, 6 around a baseline of 10.
    x, y = np.full(4, 5.0), np.array([11.0, 12.0, 13.0, 16.0])
    still = {fold: line_of(0.0, 0.0) for fold in range(8)}
    found = found_of(folded(line_of(10.0, 0.0), still), x, y, [0, 1, 2, 3], confidence=0.9)
    # Around their mean 3: -2, -1, 0, 3; 4 / (4 - 2) (4 + 1 + 0 + 9) = 28.
    assert found.amount == pytest.approx(12.0)
    assert found.expected == pytest.approx(40.0)
    assert found.share == pytest.approx(0.3)
    assert found.std_error == pytest.approx(math.sqrt(28.0))
    assert found.base_std_error == 0.0
    assert found.degrees == pytest.approx(2.0)
    half = stats.t.ppf(0.95, 2) * math.sqrt(28.0)
    assert (found.lower, found.upper) == pytest.approx((12.0 - half, 12.0 + half))
    assert found.p_value == pytest.approx(2 * stats.t.sf(12.0 / math.sqrt(28.0), 2))
    assert found.share_std_error == pytest.approx(math.sqrt(28.0) / 40.0)
    # 4 rows with mean square 14 / 4: 4 * 14 / 28.
    assert found.independent_rows == pytest.approx(2.0)


def test_the_error_of_the_baseline_is_that_of_its_sum():
    x, y, fold = drawn(5, rows=100)
    # Every fold moves the baseline by 0.1 everywhere, half of them up: D = 10 for 100 rows.
    deviations = {k: line_of(0.1 if k % 2 else -0.1, 0.0) for k in range(10)}
    found = found_of(folded(line_of(30.0, 0.5), deviations), x, y, fold)
    assert found.base_std_error == pytest.approx(math.sqrt(0.9 * 10 * 100.0))
    # A share's baseline stands in the denominator too.
    ratio = 1.0 + found.share
    variance = found.now_std_error**2 + (ratio * found.base_std_error) ** 2
    assert found.share_std_error == pytest.approx(math.sqrt(variance) / found.expected)


def test_degrees_lie_between_the_smaller_and_the_sum_of_both():
    x, y, fold = drawn(6)
    found = found_of(folded(line_of(29.0, 0.5), wobbles(6), degrees=7.0), x, y, fold)
    assert 7.0 <= found.degrees <= 7.0 + len(set(fold))


# What a row stands for; what is left out.


def test_hours_scale_amounts_and_leave_shares_alone():
    x, y, fold = drawn(7)
    base = folded(line_of(29.0, 0.55), wobbles(7))
    rows, hours = found_of(base, x, y, fold), found_of(base, x, y, fold, per_row=0.25)
    for name in ("actual", "expected", "amount", "std_error", "lower", "upper", "now_std_error"):
        assert getattr(hours, name) == pytest.approx(0.25 * getattr(rows, name))
    for name in ("share", "share_std_error", "share_lower", "p_value", "independent_rows", "rows"):
        assert getattr(hours, name) == getattr(rows, name)


def test_rows_without_a_baseline_are_counted_and_not_added_up():
    x, y, fold = drawn(8)
    # No baseline below 4, a thin one from 16 on.
    good = (GRID >= 4.0) & (GRID <= 16.0)
    base = folded(line_of(29.0, 0.55), wobbles(8), good=good)
    base.centre[GRID < 4.0] = np.nan
    found = found_of(base, x, y, fold)
    inside = (x >= 4.0) & (x <= 16.0)
    told = oracle.excess(
        x[inside].tolist(), y[inside].tolist(), np.asarray(fold)[inside].tolist(),
        line_of(29.0, 0.55), wobbles(8),
    )  # fmt: skip
    # A bin at the border may fall to either side.
    assert abs(found.rows - inside.sum()) <= 2
    assert abs(found.rows_outside - (x < 4.0).sum()) <= 2
    assert abs(found.rows_thin - (x > 16.0).sum()) <= 2
    assert found.rows + found.rows_outside + found.rows_thin == x.size
    assert found.amount == pytest.approx(told["amount"], abs=10.0)


def test_no_row_with_a_baseline_leaves_nothing_to_tell():
    x, y, fold = drawn(9)
    base = folded(line_of(29.0, 0.5), wobbles(9), good=np.zeros(GRID.shape, bool))
    found = found_of(base, x, y, fold)
    assert (found.rows, found.amount, found.share, found.std_error) == (0.0, 0.0, None, None)


@pytest.mark.parametrize("folds", [1, 2, 3])
def test_few_folds_give_no_error(folds):
    x, y, _ = drawn(10)
    found = found_of(
        folded(line_of(29.0, 0.5), wobbles(10)), x, y, [k % folds for k in range(x.size)]
    )
    assert found.folds == folds
    assert found.amount == pytest.approx(float((y - 29.0 - 0.5 * x).sum()))
    assert found.share == pytest.approx(found.amount / found.expected)
    for name in ("std_error", "lower", "upper", "p_value", "share_lower", "independent_rows"):
        assert getattr(found, name) is None


def test_nothing_positive_expected_has_no_share():
    x, y, fold = drawn(11)
    found = found_of(folded(line_of(-1.0, 0.0), wobbles(11)), x, y, fold)
    assert found.share is None
    assert found.share_std_error is None
    assert found.std_error > 0.0


def test_a_drift_that_grows_with_x_is_not_taken_for_scatter():
    x, y, fold = drawn(12, rows=2000, folds=20)
    base = folded(line_of(30.0, 0.5), wobbles(12))
    plain = found_of(base, x, y, fold)
    drifted = found_of(base, x, y + 0.4 * x, fold)
    assert drifted.amount == pytest.approx(plain.amount + 0.4 * float(x.sum()))
    assert drifted.now_std_error == pytest.approx(plain.now_std_error, rel=1e-6)


def test_a_weight_of_repeats_is_rows_written_out():
    rng = np.random.default_rng(13)
    x, y, fold = drawn(13, rows=120)
    count = rng.integers(1, 5, x.size)
    plan = Plan.simple(0.0, 20.0, bins=1024, folds=12)
    table = BinTable(plan)
    for one in sorted(set(fold)):
        own = np.asarray(fold) == one
        table.add_rows(one, x[own].copy(), y[own].copy(), count=count[own].astype(float))
    base = folded(line_of(29.0, 0.55), wobbles(13))
    level = Pyramid(table).levels[0]
    found = excess_of(
        base, level, 0.0, np.array(sorted(table.sums)), confidence=0.95, per_row=1.0, paired=False
    )
    many = np.repeat(np.arange(x.size), count)
    out = found_of(base, x[many], y[many], np.asarray(fold)[many].tolist())
    for name in ("rows", "amount", "std_error", "independent_rows", "p_value", "degrees"):
        assert getattr(found, name) == pytest.approx(getattr(out, name), rel=1e-9)


def test_equal_rows_have_no_excess_and_no_error():
    x = np.linspace(1.0, 19.0, 40)
    still = {fold: line_of(0.0, 0.0) for fold in range(8)}
    found = found_of(
        folded(line_of(16.0, 0.5), still), x, 16.0 + 0.5 * x, [k % 8 for k in range(40)]
    )
    assert found.amount == pytest.approx(0.0, abs=1e-9)
    assert found.std_error == pytest.approx(0.0, abs=1e-9)
