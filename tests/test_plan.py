"""What a plan fixes before the first row is counted."""

import json
import math
from dataclasses import replace

import numpy as np
import pytest
from fastsmooth.kernels import accumulate
from hypothesis import assume, given
from hypothesis import strategies as st

from fastsmooth import InputError
from fastsmooth.plan import (
    BINS,
    MEMORY_CAP_BYTES,
    Plan,
    bin_width,
    check_scale,
    draw_sample,
    find_range,
    make_plan,
    most_bins,
    user_range,
)
from fastsmooth.source import Columns, open_source
from tests.conftest import write_parquet

COLUMNS = Columns("wet_bulb_c", "power_kw")


def opened(x, y=None):
    y = np.zeros(len(x)) if y is None else y
    return open_source({"wet_bulb_c": np.asarray(x), "power_kw": np.asarray(y)}, COLUMNS)


def planned(x, y=None, *, scale="linear", bounds=None, **options):
    with opened(x, y) as source:
        sample = draw_sample(source, scale)
        bounds = bounds or find_range(source, scale, threads=1)
        return make_plan(source, sample, bounds, scale=scale, **options)


ends = st.floats(-1e15, 1e15) | st.sampled_from([0.0, 1.7e9, -273.15, 1e-300, 1e14])


@given(low=ends, span=st.floats(1e-9, 1e15), bins=st.sampled_from([1024, 8192, 1 << 20]))
def test_both_ends_of_the_range_fall_inside_the_bins(low, span, bins):
    high = low + span
    # A range of few floats has no bins worth the name; it must still lose no row.
    assume(high > low)
    width = bin_width(low, high, bins)
    table = np.zeros((bins, 8))
    extent, refused = np.array([np.inf, -np.inf]), np.zeros(len(accumulate.REASONS), np.int64)
    x = np.array([low, high, low + 0.5 * (high - low)])
    accumulate.accumulate_rows(table, x, np.zeros(3), low, 1.0 / width, extent, refused)
    assert not refused.any()
    assert table[0, 0] >= 1.0
    assert table[-1, 0] >= 1.0
    assert extent.tolist() == [low, high]


def test_bin_of_a_value_is_the_kernels():
    plan = Plan.simple(-5.0, 30.0, bins=1024)
    for value in (-5.0, 0.0, 12.345, 29.999, 30.0):
        table, refused = np.zeros((1024, 8)), np.zeros(len(accumulate.REASONS), np.int64)
        accumulate.accumulate_rows(
            table, np.array([value]), np.zeros(1), plan.origin, 1.0 / plan.width,
            np.array([np.inf, -np.inf]), refused,
        )  # fmt: skip
        assert np.flatnonzero(table[:, 0]).tolist() == [plan.bin_of(value)]
    assert plan.bin_of(-99.0) == 0
    assert plan.bin_of(99.0) == 1023


def test_a_plan_survives_json():
    plan = replace(
        planned(np.arange(10.0), np.arange(10.0)), where="power_kw > 0", block="plant", scale="log"
    )
    assert Plan.from_dict(json.loads(json.dumps(plan.to_dict()))) == plan


def test_pilot_follows_y_and_fills_stretches_without_rows():
    x = np.concatenate([np.linspace(0.0, 10.0, 500), np.linspace(20.0, 30.0, 500)])
    y = np.where(x < 15.0, 7.0, 9.0)
    plan = planned(x, y)
    per_bin = plan.pilot_per_bin
    assert per_bin.shape == (BINS,)
    assert set(per_bin.tolist()) == {7.0, 9.0}
    assert per_bin[plan.bin_of(14.0)] == 7.0
    assert per_bin[plan.bin_of(16.0)] == 9.0
    assert 7.0 <= plan.reference <= 9.0


@pytest.mark.parametrize("y", [41.3, -1e12 - 0.4, 1e300])
def test_a_constant_is_its_own_pilot(y):
    """So that sums of squares about it are nil, however large it is."""
    plan = planned(np.arange(10.0), np.full(10, y))
    assert plan.reference == y
    assert set(plan.pilot) == {y}


def test_a_far_outlier_of_x_does_not_disturb_the_pilot():
    x = np.append(np.linspace(0.0, 10.0, 100), 1e33)
    plan = planned(x, np.append(np.full(100, 5.0), 8.0), bounds=(0.0, 10.0))
    assert plan.pilot[0] == 5.0


# Runs and folds.


def test_runs_are_a_quarter_of_a_folds_share():
    plan = planned(np.random.default_rng(0).uniform(size=12_800), folds=32)
    assert plan.rows_per_run == 100
    assert planned(np.random.default_rng(0).uniform(size=20), folds=32).rows_per_run == 1


def test_x_in_row_order_shortens_runs_until_narrow_windows_meet_a_dozen():
    n = 60_000
    plan = planned(np.linspace(0.0, 64.0, n), folds=2)
    # A sixty-fourth of the range is n / 64 rows; a dozen runs of 78 rows are 936.
    assert plan.rows_per_run == pytest.approx(n / 64 / 12, abs=1)
    backwards = planned(np.linspace(64.0, 0.0, n), folds=2)
    assert backwards.rows_per_run == plan.rows_per_run
    rng = np.random.default_rng(0)
    shuffled = planned(rng.permutation(np.linspace(0.0, 64.0, n)), folds=2)
    assert shuffled.rows_per_run == n // 8
    # Up and down each day: most movement is no net movement.
    daily = planned(10.0 * np.sin(np.arange(n) * 2.0 * math.pi / 500.0), folds=2)
    assert daily.rows_per_run == n // 8


@given(
    folds=st.integers(2, 64), per_task=st.integers(2, 64), task=st.integers(0, 50),
    run=st.integers(0, 500),
)  # fmt: skip
def test_neighbouring_runs_of_a_task_never_share_a_fold(folds, per_task, task, run):
    assume(per_task <= folds)
    plan = replace(Plan.simple(0.0, 1.0, folds=folds), folds_per_task=per_task)
    fold = plan.fold_of_run(task, run)
    assert 0 <= fold < folds
    assert fold != plan.fold_of_run(task, run + 1)


def test_many_tasks_meet_few_folds_each_and_all_folds_together(tmp_path):
    rng = np.random.default_rng(0)
    columns = {"wet_bulb_c": rng.uniform(size=2000), "power_kw": rng.normal(size=2000)}
    write_parquet(tmp_path / "a.parquet", columns, rows_per_group=100)
    with open_source(tmp_path / "a.parquet", COLUMNS) as source:
        plan = make_plan(source, draw_sample(source, "linear"), (0.0, 1.0), scale="linear")
        assert len(source.tasks) == 20
    assert plan.folds_per_task == 4
    met = {plan.fold_of_run(task, run) for task in range(20) for run in range(4)}
    assert met == set(range(32))


# The sample.


def test_sample_is_runs_of_consecutive_rows_with_their_places():
    n = 300_000
    x = np.arange(float(n))
    y = x.copy()
    y[5] = math.nan
    with opened(x, y) as source:
        sample = draw_sample(source, "linear")
    assert sample.x.size <= 2048 * 32
    assert np.isfinite(sample.y).all()
    for run in np.unique(sample.run):
        inside = sample.run == run
        assert (np.diff(sample.place[inside]) == np.diff(sample.x[inside])).all()
    first = sample.x[sample.run == 0]
    assert 4.0 in first
    assert 5.0 not in first


def test_sample_of_nothing_is_empty():
    with opened(np.empty(0)) as source:
        assert draw_sample(source, "linear").x.size == 0
    with opened(np.array([1.0, 2.0]), np.array([math.nan, math.nan])) as source:
        assert draw_sample(source, "linear").x.size == 0


# Ranges and scales.


def test_range_is_read_from_usable_rows():
    x = np.array([3.0, math.nan, -2.0, math.inf, 99.0, -0.5])
    y = np.array([1.0, 1.0, 1.0, 1.0, math.nan, 1.0])
    with opened(x, y) as source:
        assert find_range(source, "linear", threads=2) == (-2.0, 3.0)
        assert find_range(source, "log", threads=1) == (math.log(3.0), math.log(3.0))


def test_no_usable_row_is_refused():
    x, y = np.array([math.nan, 1.0]), np.array([1.0, math.nan])
    with opened(x, y) as source, pytest.raises(InputError) as caught:
        find_range(source, "linear", threads=1)
    assert str(caught.value) == (
        "DATA must hold rows with finite x and y, but every row was filtered or refused; "
        "check --where, --range and the columns."
    )


@pytest.mark.parametrize("value", [0.0, 7.25, -1e300])
def test_constant_x_is_refused(value):
    with pytest.raises(InputError) as caught:
        planned(np.full(10, value))
    assert str(caught.value) == (
        f"--x must name a column that varies, but 'wet_bulb_c' lies between {value:.6g} and "
        f"{value:.6g} everywhere; name another column, or check --where and --range."
    )


def test_a_range_that_has_no_bins_is_refused():
    with pytest.raises(InputError, match=r"^--x must name a column that varies"):
        planned(np.array([0.0, 1.0]), bounds=(0.0, 1e-310))
    with pytest.raises(InputError) as caught:
        planned(np.array([0.0, 1.0]), bounds=(-1.7e308, 1.7e308))
    assert str(caught.value) == (
        "--x must lie within a range of 1e308, but 'wet_bulb_c' lies between -1.7e+308 and "
        "1.7e+308; leave the far values out with --range."
    )


def test_readings_close_together_far_from_zero_are_not_constant():
    plan = planned(1e14 + np.arange(0.0, 10.0, 0.25))
    assert plan.high - plan.origin == pytest.approx(9.75, rel=1e-2)


@pytest.mark.parametrize(
    ("given", "scale", "text"),
    [
        ((3, 1), "linear", "--range must ascend, but 3 to 1 does not; give the lower end first."),
        (
            ("-1e308", "1e308"), "linear",
            "--range must span a width that can be cut into bins, but -1e308 to 1e308 is too "
            "wide; leave it out, or give values that occur.",
        ),
        (
            (0, 1e-310), "linear",
            "--range must span a width that can be cut into bins, but 0 to 1e-310 is too narrow; "
            "leave it out, or give values that occur.",
        ),
        (
            (0, float("inf")), "linear",
            "--range must be a finite number, but inf was given; write a number.",
        ),
        (("a", 5), "linear", "--range must be a number, but 'a' was given; write a number."),
        ((2, 2), "linear", "--range must ascend, but 2 to 2 does not; give the lower end first."),
        (
            ("-1", "5"), "log",
            "--range must be positive with --scale log, but it begins at -1; raise it.",
        ),
    ],
)  # fmt: skip
def test_bad_ranges_are_refused(given, scale, text):
    with opened(np.arange(3.0)) as source, pytest.raises(InputError) as caught:
        user_range(source, given, scale)
    assert str(caught.value) == text


def test_a_range_is_taken_in_the_columns_terms():
    with opened(np.arange(3.0)) as source:
        assert user_range(source, ("1", 2), "linear") == (1.0, 2.0)
        assert user_range(source, (1, 100), "log") == (0.0, math.log(100.0))
    times = np.array(["2026-01-01", "2026-01-03"], "datetime64[s]")
    with opened(times) as source:
        low, high = user_range(source, ("2026-01-01", "2026-01-02 12:00"), "linear")
        assert high - low == 36 * 3600.0


def test_scales_that_do_not_suit_the_axis_are_refused():
    with opened(np.arange(3.0)) as source, pytest.raises(InputError) as caught:
        check_scale(source, "cubic")
    assert str(caught.value) == "--scale must be linear or log, but it is 'cubic'; choose one."
    times = np.array(["2026-01-01", "2026-01-03"], "datetime64[s]")
    with opened(times) as source, pytest.raises(InputError) as caught:
        check_scale(source, "log")
    assert str(caught.value) == (
        "--scale must be linear for times, but 'wet_bulb_c' holds timestamps; leave it out."
    )


@pytest.mark.parametrize("folds", [2, 32, 1024])
@pytest.mark.parametrize("slots", [8, 16])
def test_most_bins_keep_within_the_memory_cap(folds, slots):
    bins = most_bins(folds, 2, slots)
    assert bins & (bins - 1) == 0
    assert bins >= 512
    assert 3 * folds * bins * slots * 8 <= MEMORY_CAP_BYTES
