"""Leave-block-out: the criterion from fold tables is that of refits without each fold."""

import math

import numpy as np
import pytest
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth import Band, InputError, Reading, Smoothing, make_curve
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.plan import Plan
from fastsmooth.search import search_table
from fastsmooth.smoother import least_weight, left_out_fold_scores, others
from tests import cases
from tests.oracle import folds as oracle

DEGREES = {"local-constant": 0, "local-linear": 1}
BINS = 8192


def table_of(x, y, folds, bins=BINS):
    plan = Plan.simple(float(np.min(x)), float(np.max(x)), bins=bins, folds=max(folds) + 1)
    table = BinTable(plan)
    for fold in sorted(set(folds)):
        own = np.flatnonzero(np.asarray(folds) == fold)
        table.add_rows(fold, np.ascontiguousarray(x[own]), np.ascontiguousarray(y[own]))
    return table


def scores_of(x, y, folds, h, kernel, bins=BINS):
    pyramid = Pyramid(table_of(x, y, folds, bins))
    shape = SHAPES[kernel]
    one = pyramid.levels[0]
    return left_out_fold_scores(one, one, shape, h, least_weight(pyramid, shape))


@given(st.lists(st.lists(st.floats(-1e6, 1e6), min_size=3, max_size=3), min_size=1, max_size=9))
def test_others_are_all_but_one(parts):
    found = others(np.array(parts))
    for place in range(len(parts)):
        for column in range(3):
            rest = [part[column] for other, part in enumerate(parts) if other != place]
            scale = math.fsum(abs(one) for one in rest)
            assert found[place, column] == pytest.approx(math.fsum(rest), abs=1e-14 * scale)


def test_one_huge_part_leaves_the_others_untouched():
    # Total less part would return nothing but rounding here.
    parts = np.array([[1.0], [1e33], [2.0]])
    assert others(parts)[1, 0] == 3.0


@pytest.mark.parametrize("estimator", DEGREES)
@pytest.mark.parametrize("kernel", ["biweight", "epanechnikov", "triangular", "gaussian"])
def test_scores_are_those_of_refits_without_each_fold(kernel, estimator):
    rows = cases.make_rows("clustered", 80, seed=5)
    x, y = rows.wet_bulb_c, rows.power_kw
    folds = np.random.default_rng(1).integers(0, 5, x.size).tolist()
    for h in (4.0, 9.0):
        found, lost = scores_of(x, y, folds, h, kernel)[estimator]
        expected = oracle.scores_per_fold(
            x.tolist(), y.tolist(), folds, h, kernel, DEGREES[estimator]
        )
        assert lost == 0.0
        np.testing.assert_allclose(found, [expected[fold] for fold in range(5)], rtol=2e-4)


@given(
    st.lists(
        st.tuples(st.integers(0, 15), st.integers(-20, 20), st.integers(0, 3)),
        min_size=12, max_size=40,
    )
)  # fmt: skip
def test_ties_and_uneven_folds_are_left_out_too(rows):
    x = np.array([0.0, 15.0, *(float(one) for one, _, _ in rows)])
    y = np.array([1.0, -1.0, *(float(one) for _, one, _ in rows)])
    folds = [4, 5, *(fold for _, _, fold in rows)]
    # A window of the whole range: whatever fold is left out, others remain in reach.
    found, lost = scores_of(x, y, folds, 40.0, "epanechnikov", bins=512)["local-constant"]
    assert lost == 0.0
    expected = oracle.scores_per_fold(x.tolist(), y.tolist(), folds, 40.0, "epanechnikov", 0)
    np.testing.assert_allclose(
        found, [expected[fold] for fold in sorted(expected)], rtol=1e-3, atol=1e-6
    )


def test_rows_that_no_other_fold_reaches_are_counted_as_lost():
    x = np.concatenate((np.linspace(0.0, 10.0, 40), [20.0, 20.5, 21.0]))
    folds = [*(place % 4 for place in range(40)), 4, 4, 4]
    found = scores_of(x, np.sin(x), folds, 2.0, "biweight")
    assert found["local-linear"][1] == found["local-constant"][1] == 3.0


def days_of_rows(days, rows_per_day, seed, shift_sd, noise_sd=0.3):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 24.0, days * rows_per_day)
    # Within a day the deviation is a wave of its own in x: rows of a day tell each other of it.
    phase = rng.uniform(0.0, 2.0 * math.pi, days).repeat(rows_per_day)
    y = np.sin(x / 3.0) + shift_sd * np.sin(3.0 * x + phase) + noise_sd * rng.normal(size=x.size)
    return x, y, np.arange(days).repeat(rows_per_day)


def test_the_search_takes_the_criterion_from_fold_tables():
    x, y, day = days_of_rows(12, 15, seed=2, shift_sd=0.5)
    folds = day.tolist()
    table = table_of(x, y, folds)
    found = search_table(
        table, Pyramid(table), SHAPES["biweight"], criterion="leave-block-out", by_block=True,
        widths=8, bounds=(3.0, 24.0),
    )  # fmt: skip
    for name, degree in DEGREES.items():
        trail = found.trails[name]
        lists = (x.tolist(), y.tolist(), folds)
        for width, value in zip(trail.bandwidths, trail.leave_block_out, strict=True):
            expected = oracle.leave_block_out(*lists, float(width), "biweight", degree)
            # A fold's absence is judged on 16 bins per bandwidth.
            assert value == pytest.approx(expected, rel=5e-3)
        at_best = oracle.leave_block_out(*lists, trail.bandwidth, "biweight", degree)
        assert trail.score == pytest.approx(at_best, rel=5e-3)
        assert trail.score <= trail.leave_block_out.min()
        # The flat zone: paired differences per fold, Breiman et al. (1984).
        best = oracle.scores_per_fold(*lists, trail.bandwidth, "biweight", degree)
        shares = [folds.count(fold) / len(folds) for fold in range(12)]
        for place in (0, 7):
            own = oracle.scores_per_fold(*lists, float(trail.bandwidths[place]), "biweight", degree)
            differences = [(own[fold] - best[fold]) / len(folds) for fold in range(12)]
            assert trail.excess[place] == pytest.approx(math.fsum(differences), rel=0.05, abs=1e-4)
            assert trail.excess_std_error[place] == pytest.approx(
                oracle.paired_error(differences, shares), rel=0.05, abs=1e-4
            )


def test_the_flat_zone_holds_what_lies_within_a_standard_error():
    x, y, day = days_of_rows(24, 60, seed=3, shift_sd=0.5)
    table = table_of(x, y, day.tolist())
    trail = search_table(
        table, Pyramid(table), SHAPES["biweight"], criterion="leave-block-out", by_block=True,
        widths=24,
    ).trails["local-linear"]  # fmt: skip
    low, high = trail.flat_zone
    assert low <= trail.bandwidth <= high
    within = trail.excess <= trail.excess_std_error
    inside = (trail.bandwidths > low) & (trail.bandwidths < high)
    assert within[inside].all()
    # The neighbours just outside are worse by more than a standard error.
    below, above = np.flatnonzero(trail.bandwidths < low), np.flatnonzero(trail.bandwidths > high)
    if below.size:
        assert not within[below[-1]]
    if above.size:
        assert not within[above[0]]
    assert below.size or above.size


def curve_of(x, y, day, **options):
    criterion = options.pop("criterion", None)
    return make_curve(
        {"wet_bulb_c": x, "power_kw": y, "day": day}, "wet_bulb_c", "power_kw",
        reading=Reading(threads=1, **options), smoothing=Smoothing(widths=16, criterion=criterion),
        band=Band(points=21),
    )  # fmt: skip


def test_with_a_block_it_is_the_default_and_does_not_follow_the_days():
    x, y, day = days_of_rows(48, 250, seed=4, shift_sd=0.6)
    by_block, by_row = curve_of(x, y, day, block="day"), curve_of(x, y, day)
    assert by_block.search.criterion == "leave-block-out"
    assert by_row.search.criterion == "leave-one-out"
    # What leave-one-out would choose is told beside it.
    trail = by_block.search.trails["local-linear"]
    assert trail.leave_one_out_bandwidth == pytest.approx(by_row.bandwidth, rel=0.02)
    chosen = curve_of(x, y, day, block="day", criterion="leave-one-out")
    assert chosen.search.criterion == "leave-one-out"
    assert chosen.bandwidth == pytest.approx(by_row.bandwidth, rel=0.02)


def test_rows_that_repeat_within_a_block_do_not_fool_it():
    # Every reading logged twenty times: leave-one-out finds its own copies and follows the noise.
    rng = np.random.default_rng(6)
    x, y, day = days_of_rows(40, 20, seed=5, shift_sd=0.0, noise_sd=0.5)
    x, y, day = (values.repeat(20) for values in (x, y, day))
    x = x + 1e-4 * rng.uniform(size=x.size)
    by_block, by_row = curve_of(x, y, day, block="day"), curve_of(x, y, day)
    truth = np.sin(by_block.x / 3.0)
    assert by_row.bandwidth < 0.3 * by_block.bandwidth
    # Its windows hold so few places that some points have none.
    miss_by_block = np.mean((by_block.estimate - truth) ** 2)
    assert miss_by_block < 0.25 * np.nanmean((by_row.estimate - truth) ** 2)


def test_leave_block_out_needs_a_block():
    x, y, day = days_of_rows(4, 30, seed=7, shift_sd=0.0)
    with pytest.raises(InputError) as caught:
        curve_of(x, y, day, criterion="leave-block-out")
    assert str(caught.value) == (
        "--criterion leave-block-out must come with --block, but no block is given; name what "
        "makes rows belong together, as in --block logged_at:day."
    )
