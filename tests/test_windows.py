"""Exact kernel sums over sorted rows, against plain loops; and binned sums against them."""

import numpy as np
import pytest
from fastsmooth.kernels import windows
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import given, settings
from hypothesis import strategies as st

from fastsmooth import Reading, Smoothing, search_bandwidth
from tests import cases
from tests.oracle import local, many_rows

COMPACT = [name for name, shape in SHAPES.items() if shape.coefficients]
NONE, NO_MASK = np.empty(0), np.empty(0, bool)


def coefficients(kernel):
    return np.array(SHAPES[kernel].coefficients)


def scores(x, y, h, kernel, weight=NONE, repeats=NONE, scored=NO_MASK, ranges=None):
    out, part = np.zeros((2, 5)), np.zeros((2, 5))
    for begin, end in ranges or [(0, len(x))]:
        windows.score_windows(
            x, y, weight, repeats, scored, coefficients(kernel), h, begin, end, part
        )
        out += part
    return out


def fits(x, y, h, kernel, weight=NONE, begin=0, end=None):
    end = len(x) if end is None else end
    out = np.empty((7, end - begin))
    windows.fit_windows(x, y, weight, coefficients(kernel), h, begin, end, out)
    return out


def rows(design, n, seed=1):
    made = cases.make_rows(design, n, seed=seed)
    order = np.argsort(made.wet_bulb_c, kind="stable")
    return made.wet_bulb_c[order], made.power_kw[order] - 30.0


@pytest.mark.parametrize("kernel", COMPACT)
@pytest.mark.parametrize("design", ["uniform", "clustered", "lattice", "gap"])
def test_fits_are_those_of_plain_loops(kernel, design):
    x, y = rows(design, 120)
    h = 4.0
    found = fits(x, y, h, kernel)
    for i in range(0, 120, 7):
        constant = local.fit_at(x[i], x.tolist(), y.tolist(), h, kernel, 0)
        line = local.fit_at(x[i], x.tolist(), y.tolist(), h, kernel, 1)
        assert found[0, i] == pytest.approx(constant.value, rel=1e-12, abs=1e-12)
        assert found[2, i] == pytest.approx(constant.unit_leverage, rel=1e-12)
        if not found[6, i]:
            assert found[3, i] == pytest.approx(line.value, rel=1e-11, abs=1e-11)
            assert found[4, i] == pytest.approx(line.slope, rel=1e-10, abs=1e-10)
            assert found[5, i] == pytest.approx(line.unit_leverage, rel=1e-11)


@pytest.mark.parametrize("kernel", COMPACT)
@pytest.mark.parametrize("h", [0.3, 2.0, 15.0, 1e4])
def test_criteria_are_those_of_every_row_against_every_other(kernel, h):
    x, y = rows("uniform", 3000)
    found = scores(x, y, h, kernel)
    for estimator, degree in ((0, 0), (1, 1)):
        wanted = many_rows.criteria_many(x, y, h, kernel, degree)
        assert found[estimator, 3] == 0.0
        assert found[estimator, 0] / 3000 == pytest.approx(wanted["leave-one-out"], rel=1e-11)
        assert found[estimator, 2] == pytest.approx(wanted["trace"], rel=1e-11)


@given(st.data())
@settings(max_examples=60, deadline=None)
def test_ties_near_ties_gaps_and_tiny_samples(data):
    base = st.floats(0.0, 8.0).map(lambda v: round(v, 1))
    x = data.draw(st.lists(base, min_size=1, max_size=40))
    near = data.draw(st.lists(st.sampled_from(range(len(x))), max_size=5))
    x = np.sort(np.array(x + [np.nextafter(x[i], 9.0) for i in near]))
    y = np.array(data.draw(st.lists(st.floats(-5, 5), min_size=x.size, max_size=x.size)))
    h = data.draw(st.sampled_from([0.05, 0.35, 1.05, 20.0]))
    kernel = data.draw(st.sampled_from(COMPACT))
    found = fits(x, y, h, kernel)
    assert np.isfinite(found[[0, 2, 3, 4, 5]]).all()
    for i in range(x.size):
        constant = local.fit_at(x[i], x.tolist(), y.tolist(), h, kernel, 0)
        assert found[0, i] == pytest.approx(constant.value, rel=1e-9, abs=1e-9)


def test_nothing_and_one_row():
    assert scores(NONE, NONE, 1.0, "biweight").tolist() == np.zeros((2, 5)).tolist()
    alone = scores(np.array([3.0]), np.array([7.0]), 1.0, "biweight")
    assert alone[:, 3].tolist() == [1.0, 1.0]  # no prediction without itself
    assert alone[:, 0].tolist() == [0.0, 0.0]


@pytest.mark.parametrize("kernel", ["biweight", "tricube"])
def test_a_count_is_a_repetition_and_equal_weights_are_none(kernel):
    x, y = rows("uniform", 400)
    counts = cases.repeats(400).astype(float)
    counted = scores(x, y, 1.5, kernel, weight=counts, repeats=counts)
    again = scores(np.repeat(x, counts.astype(int)), np.repeat(y, counts.astype(int)), 1.5, kernel)
    assert counted[:, :4] == pytest.approx(again[:, :4], rel=1e-11)
    plain = scores(x, y, 1.5, kernel)
    weighted = scores(x, y, 1.5, kernel, weight=np.full(400, 1.0))
    assert weighted[:, :4] == pytest.approx(plain[:, :4], rel=1e-12)


def test_weights_against_plain_loops():
    x, y = rows("uniform", 500)
    w = cases.precisions(500)
    found = scores(x, y, 2.0, "biweight", weight=w)
    for estimator in (0, 1):
        wanted = many_rows.criteria_many(x, y, 2.0, "biweight", estimator, weights=w)
        assert found[estimator, 0] / w.sum() == pytest.approx(wanted["leave-one-out"], rel=1e-11)


def test_only_scored_rows_count_but_all_rows_fit():
    x, y = rows("uniform", 600)
    mask = np.arange(600) % 3 == 0
    part = scores(x, y, 2.0, "biweight", scored=mask)
    rest = scores(x, y, 2.0, "biweight", scored=~mask)
    whole = scores(x, y, 2.0, "biweight")
    assert part[:, 0] + rest[:, 0] == pytest.approx(whole[:, 0], rel=1e-12)


def test_ranges_add_up_and_the_same_ranges_give_the_same_bits():
    x, y = rows("uniform", 5000)
    ranges = [(0, 1700), (1700, 1700), (1700, 3333), (3333, 5000)]
    whole = scores(x, y, 1.0, "biweight")
    parts = scores(x, y, 1.0, "biweight", ranges=ranges)
    assert parts == pytest.approx(whole, rel=1e-12)
    assert scores(x, y, 1.0, "biweight", ranges=ranges).tobytes() == parts.tobytes()


@pytest.mark.parametrize("kernel", ["epanechnikov", "biweight", "tricube"])
def test_one_huge_row_leaves_all_other_windows_untouched_to_the_bit(kernel):
    x, y = rows("uniform", 4000)
    h = 0.8
    poisoned = y.copy()
    poisoned[1234] = 1e33
    before, after = fits(x, y, h, kernel), fits(x, poisoned, h, kernel)
    far = np.abs(x - x[1234]) > h
    assert far.sum() > 3000
    assert before[:, far].tobytes() == after[:, far].tobytes()


@pytest.mark.parametrize("shift", [1.7e9, 1e14])
def test_far_from_zero_nothing_is_lost(shift):
    rng = np.random.default_rng(4)
    x = np.cumsum(rng.integers(1, 40, 3000)) / 8.0  # exact at either place
    y = np.sin(x / 300.0) + rng.normal(0.0, 0.3, 3000)
    here, there = fits(x, y, 60.0, "biweight"), fits(x + shift, y, 60.0, "biweight")
    assert there[[0, 3, 5]] == pytest.approx(here[[0, 3, 5]], rel=1e-11, abs=1e-12)


@pytest.mark.parametrize("degree", [0, 1, 2, 3])
def test_points_anywhere_bear_values_slopes_and_errors(degree):
    x, y = rows("uniform", 300)
    points = np.array([2.0, 9.5, 17.25, 400.0])
    out = np.empty((7, 4))
    windows.fit_points(points, x, y, NONE, NONE, NONE, coefficients("biweight"), 6.0, degree, out)
    for p, at in enumerate(points[:3]):
        wanted = local.fit_at(at, x.tolist(), y.tolist(), 6.0, "biweight", degree)
        assert out[0, p] == pytest.approx(wanted.value, rel=1e-10)
        assert out[3, p] == pytest.approx(wanted.sum_of_squares, rel=1e-10)
        if degree:
            assert out[1, p] == pytest.approx(wanted.slope, rel=1e-9, abs=1e-9)
    assert np.isnan(out[0, 3])
    assert out[6, 3] == -1.0


@pytest.mark.parametrize("design", ["clustered", "uniform", "lattice"])
def test_the_binned_criterion_is_the_exact_one(design):
    """200,000 rows, widths over three decades: what the bins say against every row."""
    x, y = rows(design, 200_000)
    found = search_bandwidth(
        (x, y), "x", "y", reading=Reading(threads=1), smoothing=Smoothing(widths=12)
    )
    assert found.rows_alone == 0.0
    fine = 64 * (x[-1] - x[0]) / 8192
    for estimator, name in ((0, "local-constant"), (1, "local-linear")):
        trail = found.trails[name]
        for h, binned in zip(trail.bandwidths, trail.leave_one_out, strict=True):
            exact = scores(x, y, float(h), "biweight")[estimator, 0] / x.size
            # Thin windows, where one row decides much, are the worst of it. Narrower widths only
            # tell the search to make finer bins.
            assert binned == pytest.approx(exact, rel=2e-5 if h >= fine else 1e-4)


@pytest.mark.parametrize("kernel", COMPACT)
@pytest.mark.parametrize("degree", [0, 1, 2, 3])
def test_sums_for_every_degree(kernel, degree):
    x, y = rows("lattice", 200)
    h = 3.0
    out = np.empty((3 * degree + 2, 200))
    windows.window_sums(x, y, NONE, coefficients(kernel), h, degree, 0, 200, out)
    u = (x[np.newaxis] - x[:, np.newaxis]) / h
    k = np.vectorize(SHAPES[kernel])(u)
    # Moving a power sum by up to a bandwidth multiplies its rounding by up to 2 per power.
    close = 1e-11 * 6.0**degree
    for j in range(3 * degree + 2):
        power = j if j <= 2 * degree else j - 2 * degree - 1
        terms = k * u**power * (1.0 if j <= 2 * degree else y)
        scale = np.abs(terms).sum(axis=1).max()
        assert out[j] == pytest.approx(terms.sum(axis=1), rel=close, abs=close * scale)
