"""Bin tables: chunking, merging, levels, and the way through Arrow."""

import itertools
import json
import math
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fastsmooth.bintable import BinTable, Pyramid, Tally
from fastsmooth.errors import InputError
from fastsmooth.plan import Plan
from fastsmooth.source import Chunk, Columns

BINS, FOLDS = 1024, 4
PLAIN = replace(
    Plan.simple(low=0.0, high=30.0, bins=BINS, folds=FOLDS),
    rows_per_run=5,
    reference=24.0,
    pilot=tuple(float(np.float32(v)) for v in np.linspace(19.3, 33.1, 256)),
)
WEIGHTED = replace(PLAIN, columns=Columns("x", "y", "weight", "count"))

numbers = st.floats(-2.0, 32.0) | st.sampled_from([math.nan, math.inf, -math.inf, 30.0, 0.0])
powers = st.floats(-50.0, 80.0) | st.sampled_from([math.nan, 1e20])
positive = st.floats(0.01, 20.0)
rows = st.lists(st.tuples(numbers, powers, positive, positive), max_size=50)


def columns(listed):
    return [np.array([row[i] for row in listed], np.float64) for i in range(4)]


def add(table, fold, x, y, weight, count):
    if table.slots == 16:
        table.add_rows(fold, x, y, weight, count)
    else:
        table.add_rows(fold, x, y)


def chunk_of(x, y, weight=None, count=None):
    return Chunk(x, y, weight, count, (), rows=x.size, filtered=0)


def close(one, other, size):
    """Equal to rounding; `size` is the sum of the absolute terms (bins, slots)."""
    assert one.shape == other.shape
    assert (np.abs(one - other) <= 1e-13 * size).all()


def sizes(plan, listed):
    """Sums of absolute terms, an upper bound for what rounding is relative to."""
    table = BinTable(replace(plan, pilot=(-1e21,)))
    x, y, weight, count = columns(listed)
    add(table, 0, x, np.abs(y), weight, count)
    total = table.total()
    return np.abs(total) + 1.0


@pytest.mark.parametrize("plan", [PLAIN, WEIGHTED], ids=["plain", "weighted"])
@given(listed=rows, cuts=st.lists(st.integers(0, 50), max_size=6))
def test_cutting_rows_into_chunks_changes_nothing_to_the_last_bit(plan, listed, cuts):
    """Rows go to folds by their place in the task, whatever the chunks; terms keep their order."""
    parts = columns(listed)
    if plan is PLAIN:
        parts[2:] = [None, None]
    whole = BinTable(plan)
    whole.update(chunk_of(*parts), task_index=3, row_in_task=0)
    pieces = BinTable(plan)
    ends = sorted({0, len(listed), *(min(cut, len(listed)) for cut in cuts)})
    for start, stop in itertools.pairwise(ends):
        cut = [None if one is None else np.ascontiguousarray(one[start:stop]) for one in parts]
        pieces.update(chunk_of(*cut), task_index=3, row_in_task=start)
    assert whole.sums.keys() == pieces.sums.keys()
    for fold in whole.sums:
        assert whole.sums[fold].tobytes() == pieces.sums[fold].tobytes()
    assert whole.tally == pieces.tally
    assert whole.extent.tolist() == pieces.extent.tolist()


@pytest.mark.parametrize("plan", [PLAIN, WEIGHTED], ids=["plain", "weighted"])
@given(listed=rows)
def test_rows_of_a_run_share_a_fold_and_neighbouring_runs_do_not(plan, listed):
    usable = [row for row in listed if 0.0 <= row[0] <= 30.0 and math.isfinite(row[1])]
    x, y, weight, count = columns(usable)
    if plan is PLAIN:
        weight = count = None
    table = BinTable(plan)
    table.update(chunk_of(x, y, weight, count), task_index=1, row_in_task=0)
    slot = 8 if plan is WEIGHTED else 0
    expected = {}
    for place, row in enumerate(usable):
        fold = plan.fold_of_run(1, place // plan.rows_per_run)
        expected[fold] = expected.get(fold, 0.0) + (row[3] if plan is WEIGHTED else 1.0)
    assert {f: s[:, slot].sum() for f, s in table.sums.items()} == pytest.approx(expected)
    assert all(plan.fold_of_run(1, run) != plan.fold_of_run(1, run + 1) for run in range(20))


@pytest.mark.parametrize("plan", [PLAIN, WEIGHTED], ids=["plain", "weighted"])
@given(first=rows, second=rows, third=rows)
def test_merging_is_associative_and_leaves_the_other_alone(plan, first, second, third):
    def table_of(listed, fold):
        table = BinTable(plan)
        if listed:
            add(table, fold, *columns(listed))
        return table

    left, right = table_of(first, 0), table_of(second, 0)
    before = {fold: sums.copy() for fold, sums in right.sums.items()}
    left.merge(right)
    left.merge(table_of(third, 2))
    assert all(np.array_equal(right.sums[fold], before[fold]) for fold in before)
    tail = table_of(second, 0)
    tail.merge(table_of(third, 2))
    other = table_of(first, 0)
    other.merge(tail)
    everything = table_of(first + second, 0)
    everything.merge(table_of(third, 2))
    size = sizes(plan, first + second + third)
    for made in (other, everything):
        close(left.total(), made.total(), size)
        assert left.tally == made.tally
        assert left.extent.tolist() == made.extent.tolist()


def test_merging_an_empty_table_changes_no_bit():
    table = BinTable(PLAIN)
    table.add_rows(1, np.array([3.0, 4.0]), np.array([25.0, 26.0]))
    before = table.sums[1].copy()
    table.merge(BinTable(PLAIN))
    assert np.array_equal(table.sums[1], before)
    empty = BinTable(PLAIN)
    empty.merge(table)
    assert np.array_equal(empty.sums[1], before)
    assert empty.sums[1] is not table.sums[1]


def test_tables_of_different_plans_do_not_add_up():
    with pytest.raises(InputError) as caught:
        BinTable(PLAIN).merge(BinTable(replace(PLAIN, width=0.01)))
    assert str(caught.value) == (
        "the tables must share one plan, but their bins, folds or columns differ; "
        "make both from the same plan."
    )


def about_reference(level):
    """Sums of w (1, v, v^2, e, v e, v^2 e, e^2) with e = y - reference: no pilot."""
    n, v, v2, e, ve, v2e, e2 = level.first
    p = level.pilot
    return np.array([n, v, v2, e + p * n, ve + p * v, v2e + p * v2, e2 + 2 * p * e + p * p * n])


def squares_about_reference(level):
    """Sums of w^2 (1, v, v^2, e, v e, e^2) with e = y - reference."""
    n, v, v2, e, ve, e2 = level.second
    p = level.pilot
    return np.array([n, v, v2, e + p * n, ve + p * v, e2 + 2 * p * e + p * p * n])


@pytest.mark.parametrize("plan", [PLAIN, WEIGHTED], ids=["plain", "weighted"])
@settings(max_examples=20)
@given(seed=st.integers(0, 10_000))
def test_a_coarser_level_is_a_table_of_twice_the_width(plan, seed):
    rng = np.random.default_rng(seed)
    n = 300
    x = rng.choice([rng.uniform(0.0, 30.0, n), np.round(rng.uniform(0.0, 30.0, n))])
    y = 20.0 + 0.3 * x + rng.normal(size=n)
    weight, count = rng.gamma(2.0, 0.5, n), rng.integers(1, 4, n).astype(float)
    fine, half = BinTable(plan), BinTable(replace(plan, bins=BINS // 2, width=2.0 * plan.width))
    for table in (fine, half):
        for fold in range(FOLDS):
            part = slice(fold, None, FOLDS)
            add(table, fold, *(np.ascontiguousarray(a[part]) for a in (x, y, weight, count)))
    made, direct = Pyramid(fine).levels[1], Pyramid(half).levels[0]
    assert made.bins == direct.bins
    assert made.width == direct.width
    assert about_reference(made) == pytest.approx(about_reference(direct), abs=1e-10)
    assert made.response == pytest.approx(direct.response, abs=1e-11)
    assert made.count == pytest.approx(direct.count, abs=1e-12)
    assert made.folds.sum(axis=0) == pytest.approx(made.first, abs=1e-11)
    if plan is WEIGHTED:
        assert squares_about_reference(made) == pytest.approx(
            squares_about_reference(direct), abs=1e-10
        )


def test_levels_halve_down_to_the_coarsest():
    table = BinTable(PLAIN)
    table.add_rows(0, np.array([1.0, 2.0, 29.0]), np.array([20.0, 21.0, 30.0]))
    levels = Pyramid(table).levels
    assert [level.bins for level in levels] == [1024, 512]
    assert [level.width for level in levels] == [PLAIN.width, 2 * PLAIN.width]
    assert all(level.first[0].sum() == 3.0 for level in levels)


def test_level_for_takes_the_coarsest_with_enough_bins():
    table = BinTable(Plan.simple(0.0, 8192.0, bins=8192, folds=2))
    table.add_rows(0, np.array([1.0, 2.0]), np.array([1.0, 2.0]))
    pyramid = Pyramid(table)
    assert [level.bins for level in pyramid.levels] == [8192, 4096, 2048, 1024, 512]
    assert pyramid.level_for(10.0, 64) == 0
    assert pyramid.level_for(127.0, 64) == 0
    assert pyramid.level_for(129.0, 64) == 1
    assert pyramid.level_for(1e9, 64) == 4


def test_a_kept_part_of_the_bins_drops_the_other_rows_from_every_sum():
    table = BinTable(WEIGHTED)
    x = np.array([1.0, 2.0, 29.0])
    table.add_rows(0, x, np.array([20.0, 21.0, 30.0]), np.array([1.0, 2.0, 3.0]), np.ones(3))
    keep = np.ones(BINS, bool)
    keep[PLAIN.bin_of(29.0)] = False
    finest = Pyramid(table, keep).levels[0]
    assert finest.first[0].sum() == 3.0
    assert finest.second[0].sum() == 5.0
    assert finest.count.sum() == 2.0
    assert finest.folds[:, 0].sum() == 3.0
    assert table.total()[:, 0].sum() == 6.0


@pytest.mark.parametrize("plan", [PLAIN, WEIGHTED], ids=["plain", "weighted"])
@given(first=rows, second=rows)
def test_a_table_returns_from_arrow_to_the_bit(plan, first, second):
    table = BinTable(plan)
    add(table, 0, *columns(first))
    add(table, 3, *columns(second))
    written = table.to_arrow()
    back = BinTable.from_arrow(written)
    assert back.plan == table.plan
    assert back.tally == table.tally
    assert back.extent.tobytes() == table.extent.tobytes()
    assert back.total().tobytes() == table.total().tobytes()
    for fold, sums in table.sums.items():
        if sums[:, 0].any():
            assert back.sums[fold].tobytes() == sums.tobytes()
    assert written["fold"].type == written["bin"].type == pa.int32()
    assert back.to_arrow().equals(written)


def test_a_table_returns_from_a_parquet_file(tmp_path):
    table = BinTable(PLAIN)
    table.add_rows(2, np.array([1.0, 2.5]), np.array([20.0, 22.0]))
    pq.write_table(table.to_arrow(), tmp_path / "sums.parquet")
    back = BinTable.from_arrow(pq.read_table(tmp_path / "sums.parquet"))
    assert back.sums[2].tobytes() == table.sums[2].tobytes()
    assert back.plan == PLAIN


def test_a_stranger_is_refused():
    with pytest.raises(InputError) as caught:
        BinTable.from_arrow(pa.table({"fold": [1]}))
    assert str(caught.value) == (
        "the Arrow table must be a bin table, but its metadata hold no plan; "
        "write it with BinTable.to_arrow."
    )


def test_a_plan_is_plain_data():
    text = json.dumps(WEIGHTED.to_dict())
    assert Plan.from_dict(json.loads(text)) == WEIGHTED


def test_a_tally_counts():
    tally = Tally(read=10, filtered=3)
    tally.refuse("y null", 2)
    tally.refuse("y null", 1)
    tally.refuse("x NaN", 0)
    tally.add(Tally(5, 1, {"x NaN": 1}))
    assert tally.to_dict() == {
        "read": 15, "filtered": 4, "refused": {"x NaN": 1, "y null": 3}, "used": 7,
    }  # fmt: skip


def test_log_scale_refuses_what_has_no_logarithm():
    plan = replace(Plan.simple(0.0, math.log(100.0), BINS, FOLDS), scale="log")
    table = BinTable(plan)
    x = np.array([1.0, 10.0, 0.0, -3.0, math.nan, math.inf, -math.inf, 101.0])
    table.add_rows(0, x, np.ones(8))
    assert table.tally.refused == {
        "x not positive": 3, "x NaN": 1, "x infinite": 1, "x above range": 1,
    }  # fmt: skip
    assert table.tally.used == 2
    assert table.extent.tolist() == [0.0, math.log(10.0)]
    assert x[2] == 0.0
