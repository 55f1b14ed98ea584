"""Exact windows: kernel sums, local fits and leave-one-out over sorted rows."""

from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from fractions import Fraction
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
import statsmodels.api as sm
from fastsmooth.kernels import windows
from fastsmooth.kernels.cells import aligned_rows
from fastsmooth.kernels.localfit import LOST, RESIDUAL, SCORE, SLOPE, TRACE, UNIT_LEVERAGE, VALUE
from fastsmooth.kernels.shapes import SHAPES
from fastsmooth.kernels.windows import DEGREE, LINE, REPLACED, ROWS, SQUARES, STAND_INS, VARIANCE
from hypothesis import given
from hypothesis import strategies as st
from scipy.signal import savgol_coeffs

from tests.oracle import local
from tests.oracle.windows import line_at, sums_at, window

COMPACT = [name for name in SHAPES if name != "gaussian"]
NONE = np.empty(0)
ALL = np.empty(0, dtype=bool)


def shape(name):
    return np.array(SHAPES[name].coefficients)


def sums(x, y, h, name, degree, weight=NONE, begin=0, end=None):
    end = len(x) if end is None else end
    out = np.full((3 * degree + 2, end - begin), np.nan)
    windows.window_sums(x, y, weight, shape(name), h, degree, begin, end, out)
    return out


def fits(x, y, h, name, weight=NONE, begin=0, end=None):
    end = len(x) if end is None else end
    out = np.full((REPLACED + 1, end - begin), np.nan)
    windows.fit_windows(x, y, weight, shape(name), h, begin, end, out)
    return out


def scores(x, y, h, name, weight=NONE, repeats=NONE, scored=ALL, begin=0, end=None):
    out = np.full((2, STAND_INS + 1), np.nan)
    end = len(x) if end is None else end
    windows.score_windows(x, y, weight, repeats, scored, shape(name), h, begin, end, out)
    return out


def at_points(points, x, y, h, name, degree, weight=NONE, repeats=NONE, variance=NONE):
    points = np.asarray(points, float)
    out = np.full((DEGREE + 1, points.size), np.nan)
    windows.fit_points(points, x, y, weight, repeats, variance, shape(name), h, degree, out)
    return out


def line_by_hand(place, x, y, w, h, name):
    """Local constant, local line (value, slope, K(0) a) in extended precision, for many rows."""
    inside = np.abs(x - place) <= h
    u = (x[inside] - place).astype(np.longdouble) / np.longdouble(h)
    k = local.KERNELS[name]
    g = np.array([k(v) for v in u]) * w[inside]
    z = y[inside].astype(np.longdouble)
    s0 = g.sum()
    middle, mean = (g * u).sum() / s0, (g * z).sum() / s0
    spread = (g * (u - middle) ** 2).sum()
    slope = (g * (u - middle) * (z - mean)).sum() / spread
    a = 1 / s0 + middle**2 / spread
    return float(mean), float(mean - middle * slope), float(slope / h), float(k(0.0) * a)


# Generated rows: ties, next-door floats, gaps, clumps, large offsets.


@dataclass(frozen=True)
class Case:
    x: np.ndarray
    y: np.ndarray
    weight: np.ndarray
    h: float


@st.composite
def cases(draw, largest=30):
    n = draw(st.integers(1, largest))
    offset = draw(st.sampled_from([0.0, 1.7e9, 1e14, -3.0]))
    unit = draw(st.sampled_from([1.0, 0.25, 64.0]))
    x = []
    for _ in range(n):
        kind = draw(st.sampled_from(["grid", "free", "same", "next", "far"]))
        last = x[-1] if x else offset
        x.append(
            {
                "grid": offset + unit * draw(st.integers(0, 12)),
                "free": offset + unit * draw(st.integers(0, 12 * 2**40)) / 2.0**40,
                "same": last,
                "next": float(np.nextafter(last, np.inf)) if last else 2.0**-40,
                "far": offset + 1000.0 * unit * draw(st.integers(1, 3)),
            }[kind]
        )
    x = np.sort(np.array(x))
    y = np.array(draw(st.lists(st.floats(-50.0, 50.0), min_size=n, max_size=n)))
    weight = np.array(draw(st.lists(st.floats(0.125, 8.0), min_size=n, max_size=n)))
    h = unit * draw(st.sampled_from([0.4, 1.0, 2.5, 7.0, 40.0]))
    return Case(x, y, weight, h)


@pytest.mark.parametrize("name", COMPACT)
@given(case=cases(largest=16), degree=st.integers(0, 3), weighted=st.booleans())
def test_generated_sums(name, case, degree, weighted):
    w = case.weight if weighted else np.ones(case.x.size)
    found = sums(case.x, case.y, case.h, name, degree, case.weight if weighted else NONE)
    for i in range(case.x.size):
        exact = sums_at(
            case.x[i], case.x.tolist(), case.y.tolist(), w.tolist(), case.h, name, degree
        )
        size = np.abs(w).sum()
        split = 2 * degree + 1
        assert found[:split, i] == pytest.approx(exact[:split], abs=1e-12 * size)
        assert found[split:, i] == pytest.approx(exact[split:], abs=1e-12 * size * 50.0)


@pytest.mark.parametrize("name", COMPACT)
@given(case=cases(), weighted=st.booleans())
def test_generated_fits_and_criterion(name, case, weighted):
    x, y, h = case.x, case.y, case.h
    w = case.weight if weighted else np.ones(x.size)
    found = fits(x, y, h, name, case.weight if weighted else NONE)
    totals = np.zeros((2, STAND_INS + 1))
    for i in range(x.size):
        constant, line = line_at(x[i], x.tolist(), y.tolist(), w.tolist(), h, name)
        share = line[3] if line else 0.0
        # Sums lose as many digits as D / (S_0 S_2) has zeros, and beside 1e-10 they decide whether
        # there is a line. Of a row all but at the window's end, rounding decides the weight.
        ends = x[np.abs(1.0 - np.abs(x - x[i]) / h) < 1e-6]
        at_end = all(abs(Fraction(one) - Fraction(x[i])) == Fraction(h) for one in ends.tolist())
        doubtful = 0.0 < share < 1e-9 or not at_end
        assert found[VALUE, i] == pytest.approx(constant[0], abs=1e-11)
        assert found[UNIT_LEVERAGE, i] == pytest.approx(constant[1], rel=1e-11)
        if not doubtful:
            value, slope, leverage = (constant[0], 0.0, constant[1]) if line is None else line[:3]
            loose = 1e-12 / max(share, 1e-4) if line else 1e-12
            steepest = 50.0 / line[4] if line else 0.0
            assert found[REPLACED, i] == (line is None)
            assert found[LINE + VALUE, i] == pytest.approx(value, abs=50.0 * loose)
            assert found[LINE + SLOPE, i] == pytest.approx(slope, abs=20.0 * steepest * loose)
            assert found[LINE + UNIT_LEVERAGE, i] == pytest.approx(leverage, rel=20.0 * loose)
        for estimator in range(2):
            r = y[i] - found[LINE * estimator + VALUE, i]
            leverage = w[i] * found[LINE * estimator + UNIT_LEVERAGE, i]
            alone = 1.0 - leverage <= 1e-10
            totals[estimator] += (
                0.0 if alone else w[i] * (r / (1.0 - leverage)) ** 2,
                w[i] * r * r,
                leverage,
                alone,
                found[REPLACED, i],
            )
    made = scores(x, y, h, name, case.weight if weighted else NONE)
    assert made == pytest.approx(totals, rel=1e-9, abs=1e-9)


# Long windows: several blocks and slots, cells of all sizes, both ways of summing in one run.


def long_rows(kind, n=5000):
    rng = np.random.default_rng(8)
    x = {
        "even": lambda: np.arange(n) / n,
        "random": lambda: rng.uniform(size=n),
        "rounded": lambda: np.round(rng.normal(0.5, 0.2, n), 3),
        "skewed": lambda: rng.exponential(0.1, n) ** 2,
        "clumps": lambda: np.where(rng.random(n) < 0.5, rng.integers(0, 5, n) / 5, rng.random(n)),
        "dense then sparse": lambda: np.r_[rng.uniform(0.0, 1e-3, n - 300), rng.uniform(size=300)],
    }[kind]()
    x = np.sort(x)
    return x, 20.0 + np.sin(9.0 * x) + rng.normal(size=n), rng.gamma(2.0, size=n)


KINDS = ("even", "random", "rounded", "skewed", "clumps", "dense then sparse")


@pytest.mark.parametrize("h", [0.0011, 0.02, 0.31, 3.0])
@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("name", ["uniform", "epanechnikov", "biweight", "tricube"])
def test_long_windows(kind, h, name):
    x, y, w = long_rows(kind)
    weight = w if name == "biweight" else NONE
    found = fits(x, y, h, name, weight)
    rows = np.unique(np.r_[0:5, 254:258, 1022:1027, 2500, 3333, x.size - 3 : x.size])
    for i in rows:
        if found[REPLACED, i]:
            continue
        mean, value, _, leverage = line_by_hand(
            x[i], x, y, w if weight.size else np.ones(x.size), h, name
        )
        assert found[VALUE, i] == pytest.approx(mean, rel=1e-12)
        assert found[LINE + VALUE, i] == pytest.approx(value, rel=3e-12)
        assert found[LINE + UNIT_LEVERAGE, i] == pytest.approx(leverage, rel=1e-10)


@pytest.mark.parametrize(
    ("name", "bound"),
    [
        ("uniform", 1e-13), ("triangular", 1e-13), ("epanechnikov", 1e-13), ("biweight", 1e-13),
        ("triweight", 5e-13), ("tricube", 5e-13),
    ],
)  # fmt: skip
def test_seconds_since_1970(name, bound):
    """Irregular time stamps in seconds, 59 rows a window: 13 digits."""
    rng = np.random.default_rng(2)
    x = 1.7e9 + np.cumsum(rng.exponential(2.0, 2000))
    y = 20.0 + np.sin(np.arange(2000) / 100.0) + 0.3 * rng.normal(size=2000)
    found = fits(x, y, 60.0, name)
    for i in range(0, 2000, 23):
        mean, value, _, leverage = line_by_hand(x[i], x, y, np.ones(x.size), 60.0, name)
        assert found[VALUE, i] == pytest.approx(mean, rel=bound)
        assert found[LINE + VALUE, i] == pytest.approx(value, rel=bound)
        assert found[LINE + UNIT_LEVERAGE, i] == pytest.approx(leverage, rel=2.0 * bound)


# What must not matter.


@pytest.mark.parametrize("name", COMPACT)
@pytest.mark.parametrize("h", [0.5, 30.0, 400.0])
def test_shift_and_scale_of_x_change_no_bit(name, h):
    """Only differences of x enter: quarters of a unit are exact at 2^46 = 7e13 as well."""
    rng = np.random.default_rng(4)
    x = np.sort(rng.integers(0, 8000, 3000) / 4.0)
    y = rng.normal(size=x.size)
    here = fits(x, y, h, name)
    assert np.array_equal(fits(x + 2.0**46, y, h, name), here, equal_nan=True)
    wide = fits(x * 1024.0, y, h * 1024.0, name)
    wide[LINE + SLOPE] *= 1024.0
    assert np.array_equal(wide, here, equal_nan=True)


@pytest.mark.parametrize("kind", ["rounded", "clumps"])
def test_order_of_tied_rows(kind):
    x, y, w = long_rows(kind)
    order = np.lexsort((np.random.default_rng(1).random(x.size), x))
    assert np.array_equal(x[order], x)
    for h in (0.004, 0.2):
        one = scores(x, y, h, "biweight", w)
        other = scores(x, y[order].copy(), h, "biweight", w[order].copy())
        assert other == pytest.approx(one, rel=1e-11)


@given(case=cases(largest=20), name=st.sampled_from(COMPACT), data=st.data())
def test_a_row_of_count_two_is_two_rows(case, name, data):
    n = case.x.size
    count = np.array(data.draw(st.lists(st.integers(1, 3), min_size=n, max_size=n)), float)
    repeat = count.astype(int)
    x, y, w = (np.repeat(one, repeat) for one in (case.x, case.y, case.weight))
    single = scores(x, y, case.h, name, w)
    counted = scores(case.x, case.y, case.h, name, count * case.weight, count)
    # A row that all but determines its own fit has its digits taken by 1 - L.
    rooms = 1.0 - w * fits(x, y, case.h, name, w)[[UNIT_LEVERAGE, LINE + UNIT_LEVERAGE]]
    tight = np.min(rooms, where=rooms > 1e-10, initial=1.0)
    assert counted == pytest.approx(single, rel=1e-10 / tight, abs=1e-10 / tight)


@given(case=cases(), name=st.sampled_from(COMPACT))
def test_unit_weights_are_no_weights(case, name):
    """The fast path is taken when there are no weights: same result, other code."""
    plain = scores(case.x, case.y, case.h, name)
    ones = np.ones(case.x.size)
    general = scores(case.x, case.y, case.h, name, ones, ones, np.ones(case.x.size, bool))
    assert general == pytest.approx(plain, rel=1e-12, abs=1e-12)


@pytest.mark.parametrize("kind", KINDS)
@pytest.mark.parametrize("name", ["triangular", "biweight"])
def test_unit_weights_are_no_weights_in_long_windows(kind, name):
    x, y, _ = long_rows(kind)
    for h in (0.003, 0.1):
        plain = fits(x, y, h, name)
        np.testing.assert_allclose(fits(x, y, h, name, np.ones(x.size)), plain, rtol=1e-12)


@pytest.mark.parametrize("name", ["uniform", "epanechnikov", "biweight", "tricube"])
@pytest.mark.parametrize("h", [0.0008, 0.01, 0.2])
def test_one_huge_value_stays_in_its_windows(name, h):
    x, y, _ = long_rows("random")
    spoilt = y.copy()
    spoilt[2600] = 1e33
    meets = np.abs(x - x[2600]) <= h
    clean, dirty = fits(x, y, h, name), fits(x, spoilt, h, name)
    assert np.array_equal(dirty[:, ~meets], clean[:, ~meets], equal_nan=True)
    inside = meets & (np.abs(x - x[2600]) < 0.5 * h)
    assert np.all(dirty[VALUE, inside] > 1e28)


def test_one_far_row_changes_no_other():
    x, y, _ = long_rows("random")
    far = np.r_[x, 1e33]
    found = fits(far, np.r_[y, 7.0], 0.01, "biweight")
    assert np.array_equal(found[:, :-1], fits(x, y, 0.01, "biweight"), equal_nan=True)
    assert found[VALUE, -1] == 7.0
    assert found[REPLACED, -1] == 1.0


# Ranges and threads.


@pytest.mark.parametrize("name", ["epanechnikov", "triangular"])
@pytest.mark.parametrize("kind", KINDS)
def test_ranges_add_up(name, kind):
    x, y, _ = long_rows(kind)
    cuts = [0, 1, 700, 1024, 1025, 3000, 3000, x.size]
    for h in (0.002, 0.07, 2.0):
        whole = scores(x, y, h, name)
        parts = sum(scores(x, y, h, name, begin=a, end=b) for a, b in pairwise(cuts))
        assert parts == pytest.approx(whole, rel=1e-11)
        pieces = np.hstack([fits(x, y, h, name, begin=a, end=b) for a, b in pairwise(cuts)])
        expected = fits(x, y, h, name)
        for made in (pieces, expected):
            made[LINE + SLOPE] *= h
        np.testing.assert_allclose(pieces, expected, rtol=1e-10, atol=1e-9)


def test_threads_change_no_bit():
    x, y, _ = long_rows("random")
    tasks = [(h, a, a + 1250) for h in (0.003, 0.05, 0.4) for a in range(0, 5000, 1250)]

    def work(task):
        h, begin, end = task
        return scores(x, y, h, "biweight", begin=begin, end=end)

    alone = [work(task) for task in tasks]
    with ThreadPoolExecutor(4) as pool:
        together = list(pool.map(work, tasks))
    assert np.array_equal(np.array(alone), np.array(together))


@pytest.mark.parametrize("length", [1, 7, 8, 1032])
def test_work_rows_begin_on_cache_lines(length):
    made = aligned_rows(2, 3, length)
    assert made.shape == (2, 3, -(-length // 8) * 8)
    assert not made.any()
    assert {row.ctypes.data % 64 for layer in made for row in layer} == {0}


# Degenerate windows.


@pytest.mark.parametrize("n", [0, 1, 2, 3])
@pytest.mark.parametrize("name", COMPACT)
def test_hardly_any_rows(n, name):
    x, y = np.arange(float(n)), np.arange(float(n)) ** 2
    lone = scores(x, y, 0.5, name)
    expected = [0.0, 0.0, float(n), float(n), float(n)]
    assert lone == pytest.approx(np.array([expected, expected]), abs=1e-12)
    assert fits(x, y, 0.5, name).shape == (REPLACED + 1, n)
    assert sums(x, y, 0.5, name, 2).shape == (8, n)


@pytest.mark.parametrize("n", [2, 40, 3000])
@pytest.mark.parametrize("name", COMPACT)
def test_all_rows_tied(n, name):
    y = np.random.default_rng(n).normal(size=n)
    x = np.full(n, 1e6 / 7.0)
    made = scores(x, y, 0.3, name)
    mean = y.mean()
    for estimator in range(2):
        assert made[estimator, SCORE] == pytest.approx(
            float(np.sum((y - mean) ** 2) / (1.0 - 1.0 / n) ** 2), rel=1e-11
        )
        assert made[estimator, TRACE] == pytest.approx(1.0, rel=1e-12)
        assert made[estimator, LOST] == 0.0
        assert made[estimator, STAND_INS] == n


@pytest.mark.parametrize("name", COMPACT)
def test_rows_that_all_but_coincide_keep_their_digits(name):
    """Clusters of 300 rows, 1e-9 bandwidths wide: many rows, so not summed directly."""
    rng = np.random.default_rng(6)
    offsets = np.sort(rng.integers(0, 1000, 300)) * 2.0**-40
    x = np.concatenate([place + offsets for place in (1.0, 4.0, 9.0)])
    y = 1e9 * (x - np.repeat([1.0, 4.0, 9.0], 300)) + rng.normal(size=x.size)
    found = fits(x, y, 1.0, name)
    for i in range(0, x.size, 61):
        mean, value, slope, leverage = line_by_hand(x[i], x, y, np.ones(x.size), 1.0, name)
        assert found[REPLACED, i] == 0.0
        assert found[VALUE, i] == pytest.approx(mean, rel=1e-12, abs=1e-12)
        assert found[LINE + VALUE, i] == pytest.approx(value, rel=1e-10, abs=1e-10)
        assert found[LINE + SLOPE, i] == pytest.approx(slope, rel=1e-9)
        assert found[LINE + UNIT_LEVERAGE, i] == pytest.approx(leverage, rel=1e-10)


def test_one_row_beside_a_clump():
    """D / (S_0 S_2) is 3e-7 at the lone row: summed directly, 12 digits kept."""
    x = np.r_[0.0, np.full(2_000_000, 1.0), 1.5]
    y = np.r_[5.0, np.full(2_000_000, 2.0), 4.0]
    found = fits(x, y, 1.4, "biweight", begin=0, end=1)[:, 0]
    _, value, slope, leverage = line_by_hand(
        0.0, np.array([0.0, 1.0]), np.array([5.0, 2.0]), np.array([1.0, 2e6]), 1.4, "biweight"
    )
    assert found[REPLACED] == 0.0
    assert found[LINE + VALUE] == pytest.approx(value, rel=1e-9)
    assert found[LINE + SLOPE] == pytest.approx(slope, rel=1e-9)
    assert found[LINE + UNIT_LEVERAGE] == pytest.approx(leverage, rel=1e-9)


def test_clump_at_the_very_end_of_a_window():
    """Nearly all rows where the kernel is 4e-12: summed by weight or one by one."""
    x, y = np.array([0.0, 0.3, 1.0 - 1e-6]), np.array([5.0, 1.0, 2.0])
    for copies, bound in ((60_000, 1e-9), (1_000_000, 1e-8)):
        w = np.array([1.0, 1.0, copies])
        expected = line_by_hand(0.0, x, y, w, 1.0, "biweight")
        repeat = [1, 1, copies]
        one_by_one = fits(np.repeat(x, repeat), np.repeat(y, repeat), 1.0, "biweight", end=1)
        for found, close in (
            (one_by_one[:, 0], bound),
            (fits(x, y, 1.0, "biweight", w)[:, 0], 1e-12),
        ):
            assert found[VALUE] == pytest.approx(expected[0], rel=close)
            assert found[LINE + VALUE] == pytest.approx(expected[1], rel=close)
            assert found[LINE + UNIT_LEVERAGE] == pytest.approx(expected[3], rel=close)


def test_rows_where_the_kernel_ends_bear_no_line():
    """Rows a bandwidth apart, each many times: neighbours are in the window with weight zero."""
    for copies in (1, 30, 3000, 70_000):
        x = np.repeat([0.0, 1.0, 2.0], copies)
        y = np.random.default_rng(copies).normal(size=x.size)
        for name in COMPACT[1:]:
            found = fits(x, y, 1.0, name, begin=copies, end=copies + 1)[:, 0]
            assert found[REPLACED] == 1.0
            assert found[LINE + SLOPE] == 0.0
            assert found[LINE + VALUE] == pytest.approx(y[copies : 2 * copies].mean(), abs=1e-11)


def test_windows_are_closed():
    """A row at the distance h itself is in the window, seen from both."""
    x, y = np.array([0.0, 1.0, 2.0]), np.array([1.0, 10.0, 100.0])
    assert sums(x, y, 1.0, "uniform", 0)[0].tolist() == [1.0, 1.5, 1.0]
    apart = np.array([0.0, float(np.nextafter(1.0, 2.0)), 2.0])
    assert sums(apart, y, 1.0, "uniform", 0)[0].tolist() == [0.5, 1.0, 1.0]


def test_scored_rows_and_leave_one_out_for_real():
    rng = np.random.default_rng(3)
    x = np.sort(rng.uniform(size=60))
    y, w = rng.normal(size=60), rng.gamma(3.0, size=60)
    kept = rng.random(60) < 0.5
    made = scores(x, y, 0.2, "triweight", w, scored=kept)
    others = scores(x, y, 0.2, "triweight", w, scored=~kept)
    whole = scores(x, y, 0.2, "triweight", w)
    assert made + others == pytest.approx(whole, rel=1e-12)
    for estimator in range(2):
        real = local.leave_one_out_for_real(
            x.tolist(), y.tolist(), 0.2, "triweight", estimator, w.tolist()
        )
        assert whole[estimator, SCORE] / w.sum() == pytest.approx(real, rel=1e-11)
        criteria = local.criteria(x.tolist(), y.tolist(), 0.2, "triweight", estimator, w.tolist())
        assert whole[estimator, RESIDUAL] == pytest.approx(criteria.residual, rel=1e-11)
        assert whole[estimator, TRACE] == pytest.approx(criteria.trace, rel=1e-11)


# Any points, any degree.


@given(
    case=cases(),
    name=st.sampled_from(COMPACT),
    place=st.floats(-1.0, 14.0),
    weighted=st.booleans(),
)
def test_generated_points(case, name, place, weighted):
    place += float(case.x[0])
    w = case.weight if weighted else np.ones(case.x.size)
    rows = window(place, case.x.tolist(), case.h)
    found = at_points([place], case.x, case.y, case.h, name, 1, case.weight if weighted else NONE)[
        :, 0
    ]
    assert found[ROWS] == len(rows)
    constant, line = line_at(place, case.x.tolist(), case.y.tolist(), w.tolist(), case.h, name)
    if constant is None or constant[1] > 1e6:
        return  # empty, or all weight at the very end of the window
    if line is None:
        assert found[DEGREE] == 0.0
        assert found[VALUE] == pytest.approx(constant[0], abs=1e-8)
    elif line[3] > 1e-8 and found[DEGREE] == 1.0:
        loose = 1e-9 / line[3]
        assert found[VALUE] == pytest.approx(line[0], abs=50.0 * loose)
        assert found[UNIT_LEVERAGE] == pytest.approx(line[2], rel=loose)
    if line is not None and line[3] > 1e-8:
        assert found[DEGREE] == 1.0


@pytest.mark.parametrize("degree", [0, 1, 2, 3])
@pytest.mark.parametrize("name", COMPACT)
def test_points_against_elimination(name, degree):
    rng = np.random.default_rng(9)
    x = np.sort(np.round(rng.uniform(size=90), 2))
    y = rng.normal(size=90)
    count = rng.integers(1, 4, 90).astype(float)
    w = rng.gamma(2.0, size=90)
    variance = rng.gamma(2.0, size=90)
    points = [0.013, 0.5, 0.707, 0.99]
    found = at_points(points, x, y, 0.21, name, degree, count * w, count, variance)
    for p, place in enumerate(points):
        fit = local.fit_at(
            place, x.tolist(), y.tolist(), 0.21, name, degree, w.tolist(), count.tolist()
        )
        single = np.array(fit.smoothing) ** 2 / count
        assert found[VALUE, p] == pytest.approx(fit.value, rel=1e-8)
        assert found[SLOPE, p] == pytest.approx(fit.slope, rel=1e-7, nan_ok=True)
        assert found[UNIT_LEVERAGE, p] == pytest.approx(fit.unit_leverage, rel=1e-8)
        assert found[SQUARES, p] == pytest.approx(float(single.sum()), rel=1e-8)
        assert found[VARIANCE, p] == pytest.approx(float(single @ variance), rel=1e-8)
        assert found[DEGREE, p] == degree


def test_points_where_rows_bear_less():
    x, y = np.array([0.0, 0.0, 1.0, 2.0, 9.0]), np.array([1.0, 3.0, 5.0, 7.0, 50.0])
    found = at_points([-4.0, 0.0, 0.5, 1.0, 9.0], x, y, 1.5, "uniform", 3)
    assert found[DEGREE].tolist() == [-1.0, 1.0, 2.0, 2.0, 0.0]
    assert found[ROWS].tolist() == [0.0, 3.0, 4.0, 4.0, 1.0]
    assert np.isnan(found[VALUE, 0])
    assert found[VALUE, 1:] == pytest.approx([2.0, 3.625, 5.0, 50.0], rel=1e-12)


@pytest.mark.parametrize("degree", [0, 1, 2, 3])
def test_even_grid_is_a_polynomial_filter(degree):
    """Savitzky & Golay (1964, Anal. Chem. 36:1627): 2 M + 1 points are a window of M + 1/2."""
    y = np.random.default_rng(0).normal(size=400)
    x = np.arange(400.0)
    for half in (4, 30):
        weights = savgol_coeffs(2 * half + 1, degree, use="dot")
        expected = np.correlate(y, weights, "valid")
        if degree < 2:
            made = fits(x, y, half + 0.5, "uniform")[LINE * degree + VALUE]
            assert made[half:-half] == pytest.approx(expected, abs=1e-12)
        found = at_points(x, x, y, half + 0.5, "uniform", degree)
        assert found[VALUE, half:-half] == pytest.approx(expected, abs=1e-12)
        assert found[SQUARES, half:-half] == pytest.approx(float(weights @ weights), rel=1e-11)
        if degree:
            slopes = savgol_coeffs(2 * half + 1, degree, deriv=1, use="dot")
            assert found[SLOPE, half:-half] == pytest.approx(
                np.correlate(y, slopes, "valid"), abs=1e-12
            )


# The motorcycle data of Silverman (1985, J. R. Stat. Soc. B 47:1), statsmodels' copy. Reference
# values: direct sums over all rows in 40-digit arithmetic, Epanechnikov kernel.


def motorcycle():
    path = Path(sm.__file__).parent / "gam/tests/results/motorcycle.csv"
    rows = np.genfromtxt(path, delimiter=",", skip_header=1)
    assert rows.shape == (133, 2)
    return rows[:, 0].copy(), rows[:, 1].copy()


@pytest.mark.parametrize(
    ("degree", "h", "values", "trace", "leave_one_out", "gcv", "aicc"),
    [
        (1, 3.0, (-23.3257688704, -107.263675155, 27.1865299951, -4.35932215874),
         16.16073183, 577.245858572, 601.033024457, 7.43841527819),
        (1, 5.0, (-29.2497645655, -98.9138838535, 17.8167939233, -6.50351249455),
         10.11441913, 598.393979199, 625.991243604, 7.46502878738),
        (0, 3.0, (-34.3651745448, -104.047504425, 24.1202294056, -7.44200542005),
         14.08925849, 622.038903001, 657.203202206, 7.52217425327),
    ],
)  # fmt: skip
def test_motorcycle_reference_values(degree, h, values, trace, leave_one_out, gcv, aicc):
    x, y = motorcycle()
    made = scores(x, y, h, "epanechnikov")[degree]
    n = x.size
    assert made[TRACE] == pytest.approx(trace, rel=1e-9)
    assert made[SCORE] / n == pytest.approx(leave_one_out, rel=1e-11)
    assert made[RESIDUAL] / n / (1.0 - made[TRACE] / n) ** 2 == pytest.approx(gcv, rel=1e-11)
    room = n - made[TRACE] - 2.0
    found = np.log(made[RESIDUAL] / n) + 1.0 + 2.0 * (made[TRACE] + 1.0) / room
    assert found == pytest.approx(aicc, rel=1e-11)
    curve = at_points([15.0, 20.0, 30.0, 50.0], x, y, h, "epanechnikov", degree)
    assert curve[VALUE] == pytest.approx(values, rel=1e-11)


def test_motorcycle_rows_alone():
    """At h = 2, one row (local constant) and two (line) have no prediction without themselves."""
    x, y = motorcycle()
    assert scores(x, y, 2.0, "epanechnikov")[:, LOST].tolist() == [1.0, 2.0]
