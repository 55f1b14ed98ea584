"""The choice of the bandwidth: what the search says on data built to say it."""

import math
from dataclasses import replace

import numpy as np
import pytest
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import assume, given, settings
from hypothesis import strategies as st

from fastsmooth import InputError, Reading, Search, Smoothing, search_bandwidth
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.plan import Plan
from fastsmooth.search import narrowest_width, search_table
from fastsmooth.source import Columns
from fastsmooth.trail import Trail
from tests import cases
from tests.oracle import local

LINEAR, CONSTANT = "local-linear", "local-constant"
BIWEIGHT = SHAPES["biweight"]


def table_of(x, y, folds=8, weight=None, count=None, bins=8192):
    plan = Plan.simple(float(np.min(x)), float(np.max(x)), bins=bins, folds=folds)
    if weight is not None:
        plan = replace(plan, columns=Columns("x", "y", "weight", "count"))
    table = BinTable(plan)
    for fold in range(folds):
        part = slice(fold, None, folds)
        rows = [np.ascontiguousarray(one[part]) for one in (x, y)]
        extra = [
            None if one is None else np.ascontiguousarray(one[part]) for one in (weight, count)
        ]
        table.add_rows(fold, *rows, *extra)
    return table


def search(x, y, *, kernel="biweight", criterion="leave-one-out", bounds=None, **columns):
    table = table_of(x, y, **columns)
    return search_table(
        table, Pyramid(table), SHAPES[kernel], criterion=criterion, bounds=bounds, widths=32
    )


def sine(n, seed=0, waves=1.0, sd=0.3):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 1.0, n)
    return x, np.sin(2.0 * math.pi * waves * x) + sd * rng.normal(size=n)


# Leave-one-out on bins is leaving out.


@pytest.mark.parametrize("estimator", [LINEAR, CONSTANT])
@pytest.mark.parametrize("kernel", ["biweight", "epanechnikov", "gaussian", "tricube"])
@pytest.mark.parametrize("with_weights", [False, True])
def test_binned_leave_one_out_is_really_leaving_out(estimator, kernel, with_weights):
    rows = cases.make_rows("uniform", 70, seed=4)
    x, y = rows.wet_bulb_c, rows.power_kw
    weight = cases.precisions(70) if with_weights else None
    count = np.ones(70) if with_weights else None
    bounds = (2.0, 9.0) if kernel == "gaussian" else (7.0, 20.0)
    found = search(x, y, kernel=kernel, weight=weight, count=count, bounds=bounds)
    trail = found.trails[estimator]
    for place in (0, 16, 31):
        exact = local.leave_one_out_for_real(
            x.tolist(), y.tolist(), float(trail.bandwidths[place]), kernel,
            local.DEGREES[estimator], None if weight is None else weight.tolist(),
        )  # fmt: skip
        # One bin holds few rows here, so unequal weights within a bin cost next to nothing.
        assert trail.leave_one_out[place] == pytest.approx(
            exact, rel=3e-3 if with_weights else 2e-4
        )


@settings(max_examples=25)
@given(seed=st.integers(0, 10_000))
def test_a_count_of_two_is_the_row_twice(seed):
    rng = np.random.default_rng(seed)
    n = int(rng.integers(30, 120))
    x, y = rng.uniform(0.0, 20.0, n), rng.normal(size=n)
    assume(np.unique(np.round(x, 2)).size > 20)
    count = rng.integers(1, 4, n)
    ones = np.ones(n)
    counted = search(x, y, weight=ones, count=count.astype(float), bounds=(4.0, 15.0))
    repeated = search(np.repeat(x, count), np.repeat(y, count), bounds=(4.0, 15.0))
    for name in (LINEAR, CONSTANT):
        one, other = counted.trails[name], repeated.trails[name]
        assert one.leave_one_out == pytest.approx(other.leave_one_out, rel=1e-9)
        assert one.gcv == pytest.approx(other.gcv, rel=1e-9)
        assert one.aicc == pytest.approx(other.aicc, rel=1e-9)
        assert one.trace == pytest.approx(other.trace, rel=1e-6)


@pytest.mark.parametrize("weight", [1.0, 0.25, 8.0])
def test_equal_weights_change_nothing_but_their_own_scale(weight):
    x, y = sine(400)
    plain = search(x, y)
    weighted = search(x, y, weight=np.full(400, weight), count=np.ones(400))
    for name in (LINEAR, CONSTANT):
        one, other = plain.trails[name], weighted.trails[name]
        # A mean over weights, so the scale of the weights drops out.
        assert other.leave_one_out == pytest.approx(one.leave_one_out, rel=1e-9)
        assert other.bandwidth == pytest.approx(one.bandwidth, rel=1e-9)
        assert other.trace == pytest.approx(one.trace, rel=1e-9)
        assert other.flat_zone == pytest.approx(one.flat_zone, rel=1e-6)


# Scale, offset and order of rows.


@pytest.mark.parametrize("factor", [2.0**-20, 0.5, 4.0, 2.0**30])
def test_scaling_x_by_a_power_of_two_scales_the_widths_exactly(factor):
    x, y = sine(500)
    plain = search_bandwidth((x, y), "x", "y").trails[LINEAR]
    scaled = search_bandwidth((factor * x, y), "x", "y").trails[LINEAR]
    assert scaled.bandwidth == factor * plain.bandwidth
    assert scaled.bandwidths.tolist() == (factor * plain.bandwidths).tolist()
    assert scaled.leave_one_out.tolist() == plain.leave_one_out.tolist()
    assert scaled.flat_zone == tuple(factor * end for end in plain.flat_zone)


@pytest.mark.parametrize("factor", [1000.0, 1e-7, 3.7])
def test_any_other_scale_does_so_to_rounding(factor):
    x, y = sine(500)
    plain = search_bandwidth((x, y), "x", "y").trails[LINEAR]
    scaled = search_bandwidth((factor * x, y), "x", "y").trails[LINEAR]
    assert scaled.bandwidth == pytest.approx(factor * plain.bandwidth, rel=1e-6)


@pytest.mark.parametrize("offset", [1024.0, -(2.0**20), 2.0**33])
def test_an_offset_of_x_that_costs_no_bits_changes_nothing(offset):
    x, y = sine(500)
    # x on a grid of 2^-18: the sum with the offset is exact.
    x = np.round(x * 2.0**18) / 2.0**18
    plain = search_bandwidth((x, y), "x", "y").trails[LINEAR]
    moved = search_bandwidth((x + offset, y), "x", "y").trails[LINEAR]
    assert moved.bandwidth == plain.bandwidth
    assert moved.leave_one_out.tolist() == plain.leave_one_out.tolist()


def test_seconds_since_1970_do_as_well_as_seconds_since_midnight():
    rng = np.random.default_rng(3)
    second = np.sort(rng.uniform(0.0, 86_400.0, 2000))
    y = np.sin(second / 7000.0) + 0.2 * rng.normal(size=2000)
    small = search_bandwidth((second, y), "x", "y").trails[LINEAR]
    large = search_bandwidth((second + 1_790_000_000.0, y), "x", "y").trails[LINEAR]
    assert large.bandwidth == pytest.approx(small.bandwidth, rel=1e-5)


@settings(max_examples=15)
@given(seed=st.integers(0, 1000))
def test_order_of_rows_matters_to_rounding_only(seed):
    x, y = sine(200)
    order = np.random.default_rng(seed).permutation(200)
    # Folds follow the row order, so only what does not rest on folds is compared.
    one = search(x, y, folds=2).trails[LINEAR]
    other = search(x[order], y[order], folds=2).trails[LINEAR]
    assert other.leave_one_out == pytest.approx(one.leave_one_out, rel=1e-10)
    assert other.gcv == pytest.approx(one.gcv, rel=1e-10)
    assert other.bandwidth == pytest.approx(one.bandwidth, rel=1e-6)


def test_number_of_threads_matters_to_no_bit():
    x, y = sine(600)
    table = table_of(x, y)
    pyramid = Pyramid(table)
    one, four = (search_table(table, pyramid, BIWEIGHT, threads=threads) for threads in (1, 4))
    assert one.to_dict() == four.to_dict()


# What the search says.


@pytest.mark.parametrize("criterion", ["leave-one-out", "gcv", "aicc", "plug-in"])
def test_flat_zone_holds_the_choice(criterion):
    for seed in range(5):
        x, y = sine(400, seed)
        found = search(x, y, criterion=criterion)
        assert found.criterion == criterion
        for trail in found.trails.values():
            low, high = trail.flat_zone
            assert trail.bandwidths[0] <= low <= trail.bandwidth <= high <= trail.bandwidths[-1]
            assert low < high


def test_excess_is_nil_at_the_choice_and_positive_elsewhere():
    x, y = sine(1000)
    table = table_of(x, y)
    pyramid = Pyramid(table)
    trail = search_table(table, pyramid, BIWEIGHT, bounds=(0.05, 0.9)).trails[LINEAR]
    assert (trail.excess >= 0.0).all()
    assert trail.score == pytest.approx(trail.leave_one_out.min(), rel=1e-3)
    assert trail.score <= trail.leave_one_out.min()
    near = int(np.argmin(np.abs(np.log(trail.bandwidths / trail.bandwidth))))
    assert trail.excess[near] < 1e-4 * trail.score
    # A grid that begins at the choice has the choice in it.
    again = search_table(
        table, pyramid, BIWEIGHT, bounds=(trail.bandwidth, 0.9)
    ).trails[LINEAR]  # fmt: skip
    assert again.at_low_end
    assert again.excess[0] == pytest.approx(0.0, abs=1e-6 * again.score)
    assert again.excess_std_error[0] == pytest.approx(0.0, abs=1e-4 * again.score)


def test_paired_error_is_that_of_the_folds_differences():
    """Breiman, Friedman, Olshen & Stone (1984), paired: folds of equal size, plain formula."""
    x, y = sine(800, seed=9)
    folds = 8
    trail = search(x, y, folds=folds, bounds=(0.04, 0.8)).trails[CONSTANT]
    place = int(np.argmin(trail.leave_one_out)) + 6
    h, best = float(trail.bandwidths[place]), trail.bandwidth
    differences = np.zeros(folds)
    scores = {}
    for width in (h, best):
        terms = []
        for xi, yi in zip(x, y, strict=True):
            k = np.clip(1.0 - ((x - xi) / width) ** 2, 0.0, None) ** 2
            value = float(k @ y / k.sum())
            terms.append(((yi - value) / (1.0 - 1.0 / k.sum())) ** 2)
        scores[width] = np.array(terms)
    for fold in range(folds):
        differences[fold] = (scores[h] - scores[best])[fold::folds].mean()
    assert trail.excess[place] == pytest.approx(differences.mean(), rel=1e-3)
    expected = differences.std(ddof=1) / math.sqrt(folds)
    assert trail.excess_std_error[place] == pytest.approx(expected, rel=1e-3)


def test_two_scales_of_waves_make_two_minima():
    """Slow and fast waves: smoothing over the fast ones is nearly as good as following them."""
    rng = np.random.default_rng(2)
    x = np.linspace(0.0, 1.0, 3000)
    y = np.sin(2 * math.pi * x) + 0.35 * np.sin(2 * math.pi * 90 * x) + rng.normal(size=3000)
    trail = search(x, y).trails[LINEAR]
    assert trail.minima == 2
    assert search(*sine(3000)).trails[LINEAR].minima == 1


def test_repeated_rows_drive_the_choice_to_the_low_end():
    x, y = sine(60)
    trail = search(np.tile(x, 10), np.tile(y, 10)).trails[LINEAR]
    assert trail.at_low_end
    assert not trail.at_high_end


def test_a_straight_line_drives_the_choice_to_the_high_end():
    chosen, flat = [], []
    for seed in range(12):
        rng = np.random.default_rng(seed)
        x = rng.uniform(0.0, 1.0, 300)
        found = search_bandwidth((x, 3.0 * x + 0.01 * rng.normal(size=300)), "x", "y")
        line = found.trails[LINEAR]
        chosen.append(line.at_high_end)
        flat.append(line.flat_zone[1] >= line.bandwidths[-1])
        # A constant cannot follow the line.
        assert found.trails[CONSTANT].flat_zone[1] < 0.1
    # Noise alone decides among wide windows: most often for the widest, nearly always not
    # significantly against it.
    assert sum(chosen) >= 5
    assert sum(flat) >= 9


def test_noise_alone_is_flat_towards_wide_windows():
    zones = []
    for seed in range(10):
        rng = np.random.default_rng(seed)
        trail = search(rng.uniform(0.0, 1.0, 400), rng.normal(size=400)).trails[LINEAR]
        zones.append(trail.flat_zone[1] >= trail.bandwidths[-1])
        assert not trail.at_low_end
    assert sum(zones) >= 8


def test_few_noisy_rows_are_flat_throughout():
    rng = np.random.default_rng(1)
    x = np.linspace(0.0, 1.0, 24)
    found = search(x, rng.normal(size=24), bounds=(0.4, 1.0))
    assert found.trails[CONSTANT].is_flat
    assert not search(*sine(2000)).trails[LINEAR].is_flat


def test_a_reading_that_never_varies_takes_the_widest_window():
    x = np.random.default_rng(0).uniform(0.0, 1.0, 200)
    for power_kw in (41.0, 41.3, 0.0, -1e9):
        found = search_bandwidth((x, np.full(200, power_kw)), "x", "y")
        for trail in found.trails.values():
            assert trail.at_high_end
            assert trail.is_flat


def test_isolated_rows_are_counted_and_judge_no_width():
    x, y = sine(1000)
    lonely_x, lonely_y = np.array([3.0, 4.0, 5.0]), np.array([50.0, -50.0, 80.0])
    bounds = (0.02, 0.6)
    alone = search(np.append(x, lonely_x), np.append(y, lonely_y), bounds=bounds)
    together = search(x, y, bounds=bounds)
    assert together.rows_alone == 0.0
    assert alone.rows_alone == 3.0
    ratio = alone.trails[LINEAR].bandwidth / together.trails[LINEAR].bandwidth
    assert ratio == pytest.approx(1.0, rel=2e-3)


def test_counted_rows_that_are_alone_count_as_often():
    x, y = sine(200)
    count = np.ones(201)
    x, y = np.append(x, 3.0), np.append(y, 9.0)
    found = search(x, y, weight=np.ones(201), count=count, bounds=(0.1, 0.6))
    assert found.rows_alone == 1.0
    count[-1] = 3.0
    # Three equal rows predict each other.
    assert search(x, y, weight=np.ones(201), count=count, bounds=(0.1, 0.6)).rows_alone == 0.0


# The interval searched.


def test_narrowest_width_leaves_windows_of_four_places():
    x = np.linspace(0.0, 100.0, 101)
    table = table_of(x, np.zeros(101))
    # Two places to either side and the row's own make five, one to a side three.
    assert narrowest_width(table) == pytest.approx(2.0, rel=0.02)
    crowded = np.concatenate([np.linspace(0.0, 1.0, 1000), np.linspace(2.0, 100.0, 10)])
    assert narrowest_width(table_of(crowded, np.zeros(1010))) < 0.2


@pytest.mark.parametrize("places", [1, 2, 3])
def test_fewer_than_four_places_are_refused(places):
    x = np.repeat(np.arange(float(places)), 10)
    with pytest.raises(InputError) as caught:
        narrowest_width(table_of(np.append(x, x[-1]), np.zeros(10 * places + 1))
                        if places > 1 else one_place())  # fmt: skip
    assert str(caught.value) == (
        f"--x must hold at least 4 distinct values, but the rows that can be used have {places}; "
        "name another column, or check --where and --range."
    )


def one_place():
    table = BinTable(Plan.simple(0.0, 1.0))
    table.add_rows(0, np.full(20, 0.5), np.zeros(20))
    return table


def test_grid_is_even_in_log_h_up_to_the_range():
    x, y = sine(500)
    trail = search(x, y).trails[LINEAR]
    ratios = trail.bandwidths[1:] / trail.bandwidths[:-1]
    assert ratios == pytest.approx(np.full(31, ratios[0]), rel=1e-9)
    assert trail.bandwidths[-1] == pytest.approx(x.max() - x.min(), rel=1e-9)


# Written and read back.


def test_a_search_returns_from_plain_data():
    found = search_bandwidth(sine(300), "x", "y", smoothing=Smoothing(widths=12))
    back = Search.from_dict(found.to_dict())
    assert back.to_dict() == found.to_dict()
    for name, trail in found.trails.items():
        assert isinstance(back.trails[name], Trail)
        assert back.trails[name].bandwidths.tolist() == trail.bandwidths.tolist()
        assert back.trails[name].flat_zone == trail.flat_zone


def test_inputs_stay_as_they_were_and_may_be_read_only():
    x, y = sine(300)
    x_before, y_before = x.copy(), y.copy()
    writable = search_bandwidth({"x": x, "y": y}, "x", "y", reading=Reading(threads=1))
    for array in (x, y):
        array.setflags(write=False)
    frozen = search_bandwidth({"x": x, "y": y}, "x", "y", reading=Reading(threads=2))
    assert frozen.to_dict() == writable.to_dict()
    assert x.tobytes() == x_before.tobytes()
    assert y.tobytes() == y_before.tobytes()
