"""Passes over the data: the same bits for any threads, ranges that fit, and refusals."""

import math

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fastsmooth import InputError, ReadError, Reading, Smoothing, make_curve
from fastsmooth.bintable import BinTable
from fastsmooth.passes import bins_for, count_finer, count_pass, count_rows
from fastsmooth.plan import BINS, Plan, draw_sample, make_plan
from fastsmooth.source import Columns, open_source
from tests import cases
from tests.conftest import write_parquet

COLUMNS = Columns("wet_bulb_c", "power_kw")


def arrays(x, y=None, **more):
    x = np.asarray(x, float)
    y = np.cos(x) if y is None else np.asarray(y, float)
    return {"wet_bulb_c": x, "power_kw": y, **more}


def counted_of(data, *, where=None, weight=None, count=None, **reading):
    columns = Columns("wet_bulb_c", "power_kw", weight, count)
    with open_source(data, columns, where=where) as source:
        return count_rows(source, Reading(where=where, threads=2, **reading))


def codes(counted):
    return [caution.code for caution in counted.cautions]


@pytest.fixture(scope="module")
def thousand():
    rng = np.random.default_rng(1)
    return rng.uniform(0.0, 10.0, 4000)


# Determinism.


def test_threads_change_no_bit_of_a_table(plant_folder):
    made = []
    for threads in (1, 2, 4):
        with open_source(plant_folder, COLUMNS) as source:
            assert len(source.tasks) == 17
            counted = count_rows(source, Reading(threads=threads))
        made.append(counted)
    first = made[0]
    assert first.table.tally.used == 7000 + 7900 + 8800
    for other in made[1:]:
        assert other.table.plan == first.table.plan
        assert other.table.sums.keys() == first.table.sums.keys()
        for fold, sums in first.table.sums.items():
            assert other.table.sums[fold].tobytes() == sums.tobytes()
        assert other.shown.tobytes() == first.shown.tobytes()


def test_threads_change_no_bit_of_a_curve(plant_folder):
    made = [
        make_curve(plant_folder, "wet_bulb_c", "power_kw", reading=Reading(threads=threads))
        for threads in (1, 2, 4)
    ]
    for other in made[1:]:
        assert other.table().equals(made[0].table(), check_metadata=True)


def test_a_table_of_files_is_that_of_their_rows(plant_folder):
    """Whatever the files, row groups and folds, the sums over all folds are the rows' sums."""
    with open_source(plant_folder, COLUMNS) as source:
        table = count_rows(source, Reading()).table
    direct = BinTable(table.plan)
    for plant in range(3):
        rows = cases.make_rows("uniform", 7000 + 900 * plant, seed=plant)
        direct.add_rows(0, rows.wet_bulb_c, rows.power_kw)
    size = np.abs(direct.total()).max(axis=0) + 1.0
    assert (np.abs(table.total() - direct.total()) <= 1e-12 * size).all()


def test_chunks_of_any_length_give_the_same_bits(plant_folder, monkeypatch):
    from fastsmooth import source as source_module

    with open_source(plant_folder, COLUMNS) as source:
        plan = make_plan(source, draw_sample(source, "linear"), (-5.0, 28.0), scale="linear")

    def total():
        with open_source(plant_folder, COLUMNS) as source:
            table, _ = count_pass(source, plan, Reading(threads=1))
        return {fold: sums.tobytes() for fold, sums in table.sums.items()}

    whole = total()
    chunks = source_module.Source.chunks
    monkeypatch.setattr(
        source_module.Source,
        "chunks",
        lambda self, task, rows=0: chunks(self, task, 321),
    )
    assert total() == whole


# Ranges.


def test_ordinary_data_are_read_once(thousand):
    counted = counted_of(arrays(thousand))
    assert counted.passes == 1
    assert counted.table.plan.bins == BINS
    assert counted.table.extent.tolist() == [thousand.min(), thousand.max()]
    assert codes(counted) == []


def test_far_outliers_are_left_out_counted_and_told(thousand):
    x = np.append(thousand, [-9999.0, 1e6, 2e6])
    counted = counted_of(arrays(x, np.zeros(x.size)))
    assert codes(counted) == ["range trimmed"]
    assert counted.table.tally.refused == {"x below range": 1, "x above range": 2}
    assert counted.table.plan.high - counted.table.plan.origin < 25.0
    text = counted.cautions[0].text
    assert "1 rows lie below and 2 above it" in text
    assert "Give --range to decide yourself." in text


@pytest.mark.parametrize("far", [1e33, -1e200])
def test_one_absurd_value_is_left_out(thousand, far):
    counted = counted_of(arrays(np.append(thousand, far), np.zeros(thousand.size + 1)))
    assert codes(counted) == ["range trimmed"]
    assert sum(counted.table.tally.refused.values()) == 1
    assert counted.table.tally.used == thousand.size


def test_a_second_cluster_far_away_is_kept(thousand):
    """One row in eleven is no outlier, however far."""
    x = np.append(thousand, 1e4 + thousand[:400])
    counted = counted_of(arrays(x, np.zeros(x.size)))
    assert codes(counted) == []
    assert counted.table.tally.used == x.size


def test_a_trim_from_the_sample_that_drops_too_much_is_undone(tmp_path):
    """Sampled runs see one stretch only; the rest of the rows lies a long way off."""
    rng = np.random.default_rng(0)
    n = 400_000
    x = rng.uniform(0.0, 1.0, n)
    x[200_000:] = rng.uniform(1e5, 2e5, 200_000)
    write_parquet(tmp_path / "a.parquet", arrays(x, np.zeros(n)), rows_per_group=n)
    counted = counted_of(tmp_path / "a.parquet")
    assert codes(counted) == []
    assert counted.table.tally.used == n


def test_a_range_of_ones_own_is_taken_and_counted(thousand):
    counted = counted_of(arrays(thousand), range=("2", 7.5))
    inside = (thousand >= 2.0) & (thousand <= 7.5)
    assert counted.table.tally.used == inside.sum()
    assert counted.table.tally.refused == {
        "x below range": (thousand < 2.0).sum(),
        "x above range": (thousand > 7.5).sum(),
    }
    assert codes(counted) == []


@pytest.mark.parametrize("ends", [(0.0, 1e3), (-1e9, 1e9), (0.0, 1e200)])
def test_a_range_far_wider_than_the_rows_costs_no_accuracy(thousand, ends):
    counted = counted_of(arrays(thousand), range=ends)
    assert counted.table.tally.used == thousand.size
    span = counted.table.plan.high - counted.table.plan.origin
    assert span == pytest.approx(thousand.max() - thousand.min(), rel=1e-9)


def test_a_filter_that_leaves_a_narrow_stretch_costs_no_accuracy(tmp_path, thousand):
    """The files' statistics tell the range of all rows, not of those that meet the filter."""
    x = np.append(thousand, np.linspace(100.0, 1e7, 400))
    columns = arrays(x, np.zeros(x.size)) | {"plant": np.arange(x.size) >= thousand.size}
    write_parquet(tmp_path / "a.parquet", columns, rows_per_group=10_000)
    counted = counted_of(tmp_path / "a.parquet", where="not plant")
    assert counted.table.tally.filtered == 400
    assert counted.table.plan.high - counted.table.plan.origin < 25.0


def test_log_scale_bins_the_logarithms():
    x = np.exp(np.linspace(0.0, 5.0, 500))
    counted = counted_of(arrays(np.append(x, [0.0, -1.0]), np.zeros(502)), scale="log")
    assert counted.table.tally.refused == {"x not positive": 2}
    assert counted.table.extent.tolist() == [0.0, pytest.approx(5.0)]
    places = counted.table.total()[:, 0]
    assert np.diff(np.flatnonzero(places)).max() <= BINS / 499 + 2


# Finer bins.


def test_finer_bins_hold_the_same_rows(thousand):
    data = arrays(np.append(thousand, [-9999.0, 1e6]), np.zeros(thousand.size + 2))
    with open_source(data, COLUMNS) as source:
        reading = Reading(threads=1)
        counted = count_rows(source, reading)
        finer = count_finer(source, counted, reading, 4 * BINS)
    assert finer.passes == counted.passes + 1
    assert finer.table.plan.bins == 4 * BINS
    assert finer.table.tally == counted.table.tally
    assert finer.table.extent.tolist() == counted.table.extent.tolist()
    assert finer.cautions == counted.cautions


def test_bins_for_a_width_are_a_power_of_two_within_the_cap():
    table = BinTable(Plan.simple(0.0, 10.0, folds=2))
    table.add_rows(0, np.array([0.0, 10.0]), np.zeros(2))
    assert bins_for(table, 5.0, 64, threads=2) == BINS
    bins = bins_for(table, 0.05, 64, threads=2)
    assert bins == 16_384
    assert 0.05 / (10.0 / bins) >= 64
    assert bins_for(table, 1e-9, 64, threads=2) < 1 << 24


def test_a_narrow_width_is_read_again_with_finer_bins():
    rng = np.random.default_rng(0)
    x = rng.uniform(0.0, 10.0, 20_000)
    data = arrays(x, np.sin(40.0 * x) + 0.1 * rng.normal(size=x.size))
    made = make_curve(data, "wet_bulb_c", "power_kw", smoothing=Smoothing(widths=24))
    engine = made.trace["engine"]
    assert engine["passes"] == 2
    assert engine["bins"] > BINS
    assert engine["bins_per_bandwidth"] >= engine["fewest_bins_per_bandwidth"]
    assert 0.005 < made.bandwidth < 0.08


# Refusals.


def refused(data, **options):
    with pytest.raises(InputError) as caught:
        counted_of(data, **options)
    return str(caught.value)


@pytest.mark.parametrize("bad", [-1.0, math.inf])
@pytest.mark.parametrize("role", ["weight", "count"])
def test_negative_and_infinite_weights_are_refused(role, bad):
    factor = np.ones(10)
    factor[3] = bad
    text = refused(arrays(np.arange(10.0), rows=factor), **{role: "rows"})
    assert text == (
        f"--{role} must name a column of positive finite numbers, but 'rows' is negative or "
        'infinite in 1 rows; leave those rows out with --where \'"rows" > 0 AND "rows" < 1e30\'.'
    )


def test_zero_and_missing_weights_are_counted():
    factor = np.array([1.0, 0.0, math.nan, 1.0, 2.0, 1.0])
    counted = counted_of(arrays(np.arange(6.0), rows=factor), weight="rows")
    assert counted.table.tally.refused == {"weight zero": 1, "weight NaN": 1}
    assert counted.table.tally.used == 4


def test_strict_refuses_the_first_bad_row():
    y = np.zeros(10)
    y[[2, 5]] = math.nan
    y[7] = math.inf
    assert counted_of(arrays(np.arange(10.0), y)).table.tally.used == 7
    assert refused(arrays(np.arange(10.0), y), strict=True) == (
        "DATA must hold usable rows only with --strict, but some were refused (2 y NaN, "
        "1 y infinite); clean the data, filter with --where, or leave --strict out."
    )


def test_nothing_left_is_refused_with_the_counts():
    x = np.arange(10.0)
    assert refused(arrays(x), range=(20.0, 30.0)) == (
        "DATA must hold rows with finite x and y, but every row was filtered or refused (0 "
        "filtered, 10 x below range); check --where, --range and the columns."
    )
    assert refused(arrays(x), where="power_kw > 5") == (
        "DATA must hold rows with finite x and y, but every row was filtered or refused; "
        "check --where, --range and the columns."
    )
    assert refused(arrays([])) == (
        "DATA must hold rows with finite x and y, but every row was filtered or refused; "
        "check --where, --range and the columns."
    )


@pytest.mark.parametrize("far", [1e300, -1e160, 1e75])
def test_powers_that_overflow_are_refused(thousand, far):
    y = np.zeros(thousand.size)
    y[17] = far
    assert refused(arrays(thousand, y)) == (
        "--y must stay below 1e70 in size, but 'power_kw' goes beyond it; leave such rows "
        "out with --where 'ABS(power_kw) < 1e70'."
    )
    assert counted_of(arrays(thousand, y), where="ABS(power_kw) < 1e70").table.tally.filtered == 1


@pytest.mark.parametrize("unit", [1e-300, 1e-160, 1e-80])
def test_powers_that_underflow_are_refused(thousand, unit):
    assert refused(arrays(thousand, unit * np.sin(thousand))) == (
        "--y must differ by more than 1e-70, but values of 'power_kw' differ by less; write it in "
        "a smaller unit."
    )


@pytest.mark.parametrize("value", [0.0, 3.7, 1e-200])
def test_a_constant_y_is_no_underflow(thousand, value):
    assert counted_of(arrays(thousand, np.full(thousand.size, value))).table.tally.used == 4000


@pytest.mark.parametrize("role", ["weight", "count", "y"])
def test_what_overflows_is_named(thousand, role):
    columns = {"weight": np.ones(4000), "count": np.full(4000, 2.0), "y": np.sin(thousand)}
    columns[role] = np.where(np.arange(4000) % 2 == 0, 1e299, columns[role])
    data = {"wet_bulb_c": thousand, "power_kw": columns["y"], "sharpness": columns["weight"],
            "n": columns["count"]}  # fmt: skip
    told = refused(data, weight="sharpness", count="n")
    assert told.startswith(f"--{role} must ")
    assert "sharpness" not in told or role == "weight"


@pytest.mark.parametrize(("value", "size"), [(1e299, "larger"), (1e40, "larger"), (1e-200, "smal")])
def test_weights_whose_powers_no_float_holds_are_refused(thousand, value, size):
    data = arrays(thousand, np.sin(thousand), rows=np.full(thousand.size, value))
    told = refused(data, weight="rows")
    assert told.startswith(
        f"--weight must lie between 1e-30 and 1e30 on average, but the mean of 'rows' is {size}"
    )
    assert told.endswith(
        "; multiply it by a constant, because only ratios matter, or leave far values out with "
        "--where '\"rows\" < 1e30'."
    )


@pytest.mark.parametrize(("value", "mean"), [(1e299, "1e+299"), (0.5, "0.5")])
def test_counts_that_are_no_counts_are_refused(thousand, value, mean):
    data = arrays(thousand, np.sin(thousand), rows=np.full(thousand.size, value))
    assert refused(data, count="rows") == (
        "--count must hold numbers of equal rows, on average between 1 and 1e30, but the mean of "
        f"'rows' is {mean}; name it with --weight if only its ratios matter."
    )


def test_progress_tells_rows_and_their_number(plant_folder):
    told = []
    with open_source(plant_folder, COLUMNS) as source:
        count_rows(source, Reading(threads=2), lambda *news: told.append(news))
    assert {stage for stage, _, _ in told} == {"reading"}
    assert [rows for _, rows, _ in told] == sorted(rows for _, rows, _ in told)
    assert told[-1] == ("reading", 23_700, 23_700)


def test_shown_rows_are_rows_of_the_data(thousand):
    data = arrays(thousand)
    shown = counted_of(data).shown
    assert shown.shape[0] == 2
    assert 0 < shown.shape[1] <= 100_000
    assert np.isin(shown[0], thousand).all()
    assert shown[1] == pytest.approx(np.cos(shown[0]))


def test_values_outside_their_own_statistics_are_damage(tmp_path):
    rng = np.random.default_rng(3)
    x = rng.uniform(5.0, 25.0, 4000)
    path = tmp_path / "a.parquet"
    pq.write_table(
        pa.table({"x": x, "y": x}), path, compression="none", use_dictionary=False,
        write_page_checksum=False,
    )  # fmt: skip
    whole = bytearray(path.read_bytes())
    place = bytes(whole).index(x[:4].tobytes())
    whole[place + 800 : place + 1600] = bytes(800)  # a hundred values become 0
    path.write_bytes(whole)
    with pytest.raises(ReadError, match="100 values of 'x' lie outside the range"):
        make_curve(path, "x", "y")
