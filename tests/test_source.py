"""Parquet files and arrays as chunks: order, counts, filters, nulls, threads."""

import math
import threading
import time

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fastsmooth.errors import InputError, ReadError
from fastsmooth.source import Columns, open_source
from tests.source_tools import gather

XY = Columns("wet_bulb_c", "power_kw")


def write(path, rows=1000, seed=1, row_group_size=300, **options):
    random = np.random.default_rng(seed)
    table = pa.table(
        {
            "wet_bulb_c": random.normal(12, 6, rows).round(2),
            "power_kw": random.normal(30, 4, rows),
            "plant": random.integers(0, 3, rows),
        }
    )
    pq.write_table(table, path, row_group_size=row_group_size, **options)
    return table


def test_rows_come_in_file_and_row_group_order(tmp_path):
    second = write(tmp_path / "b.parquet", seed=2)
    first = write(tmp_path / "a.parquet", seed=1)
    with open_source(tmp_path, XY) as source:
        got = gather(source, rows=70)
        again = gather(source)
    x = np.concatenate([first["wet_bulb_c"].to_numpy(), second["wet_bulb_c"].to_numpy()])
    y = np.concatenate([first["power_kw"].to_numpy(), second["power_kw"].to_numpy()])
    assert np.array_equal(got.x, x)
    assert np.array_equal(got.y, y)
    assert np.array_equal(again.x, x)
    assert got.sizes == ([70] * 4 + [20]) * 3 + [70, 30] + ([70] * 4 + [20]) * 3 + [70, 30]
    assert source.rows_expected == got.rows == 2000
    assert [task.index for task in source.tasks] == list(range(8))
    assert [task.rows for task in source.tasks] == [300, 300, 300, 100] * 2
    assert source.tasks[5].label == f"{tmp_path}/b.parquet, row group 2 of 4"
    assert source.x_range == (x.min(), x.max())
    assert [record.rows for record in source.files] == [1000, 1000]
    assert source.files[0].size_bytes == (tmp_path / "a.parquet").stat().st_size
    assert source.files[0].modified_ns == (tmp_path / "a.parquet").stat().st_mtime_ns
    assert got.weight is None
    assert source.axis.kind == "number"


def test_null_free_floats_are_views(tmp_path):
    write(tmp_path / "a.parquet")
    with open_source(tmp_path / "a.parquet", XY) as source:
        chunk = next(source.chunks(source.tasks[0]))
    assert not chunk.x.flags.owndata
    assert not chunk.x.flags.writeable
    arrays = {"wet_bulb_c": np.arange(5.0), "power_kw": np.ones(5)}
    with open_source(arrays, XY) as source:
        chunk = next(source.chunks(source.tasks[0]))
    assert np.shares_memory(chunk.x, arrays["wet_bulb_c"])
    assert np.shares_memory(chunk.y, arrays["power_kw"])


def test_paths_globs_and_lists_mean_the_same(tmp_path):
    (tmp_path / "deep").mkdir()
    write(tmp_path / "a.parquet", rows=10)
    write(tmp_path / "deep" / "b.pq", rows=20)
    write(tmp_path / "_hidden.parquet", rows=40)
    write(tmp_path / ".hidden.parquet", rows=40)
    (tmp_path / "_temporary").mkdir()
    write(tmp_path / "_temporary" / "c.parquet", rows=40)
    (tmp_path / "README.txt").write_text("no data")
    for data in (
        tmp_path,
        str(tmp_path),
        [tmp_path / "deep", tmp_path / "a.parquet"],
        str(tmp_path / "**" / "*.p*q*"),
        (str(tmp_path / "*.parquet"), str(tmp_path / "deep" / "*")),
    ):
        with open_source(data, XY) as source:
            names = [record.path.removeprefix(f"{tmp_path}/") for record in source.files]
        assert names == ["a.parquet", "deep/b.pq"]


def test_file_whose_name_has_glob_characters(tmp_path):
    write(tmp_path / "plant[1].parquet", rows=10)
    with open_source(tmp_path / "plant[1].parquet", XY) as source:
        assert source.rows_expected == 10


def test_units_come_from_field_metadata(tmp_path):
    schema = pa.schema(
        [
            pa.field("wet_bulb_c", pa.float64(), metadata={"unit": "°C"}),
            pa.field("power_kw", pa.float64()),
        ]
    )
    pq.write_table(pa.table([[1.0], [2.0]], schema=schema), tmp_path / "a.parquet")
    with open_source(tmp_path, XY) as source:
        assert (source.x_unit, source.y_unit) == ("°C", "")


def test_odd_column_names(tmp_path):
    table = pa.table(
        [[1.0], [2.0], [3.0], [4.0], [[{"b": 5.0}]], [6.0]],
        names=["a b", "a.b", "twice", "twice", "a", "Größe"],
    )
    pq.write_table(table, tmp_path / "a.parquet")
    with open_source(tmp_path, Columns("a.b", "a b", weight="Größe")) as source:
        got = gather(source)
    assert (got.x.tolist(), got.y.tolist(), got.weight.tolist()) == ([2.0], [1.0], [6.0])
    with open_source(tmp_path, Columns("a.b", "a.b", extra=("a.b", "a b"))) as source:
        got = gather(source)
    assert (got.x.tolist(), got.y.tolist(), got.extra) == ([2.0], [2.0], [[2.0], [1.0]])


def test_column_beside_a_struct_with_the_same_path(tmp_path):
    table = pa.table({"a.b": [1.0, 2.0], "a": [{"b": 7.0}, {"b": 8.0}], "y": [3.0, 4.0]})
    pq.write_table(table, tmp_path / "a.parquet")
    with open_source(tmp_path, Columns("a.b", "y")) as source:
        assert gather(source).x.tolist() == [1.0, 2.0]
        assert source.x_range is None


VALUE = st.one_of(
    st.none(), st.sampled_from([math.nan, math.inf, -math.inf, -0.0, 1e300]), st.integers(-5, 5)
)
ROW = st.tuples(*[VALUE.map(lambda value: None if value is None else float(value))] * 4)


@settings(max_examples=60, deadline=None)
@given(
    rows=st.lists(ROW, min_size=1, max_size=40),
    row_group_size=st.integers(1, 41),
    chunk_rows=st.integers(1, 41),
    where=st.sampled_from([None, "x > 0", "NOT x > 0", "y <> 1 OR w IS NULL", "x > 100"]),
    in_memory=st.booleans(),
)
def test_counts_and_values_against_a_plain_loop(
    tmp_path_factory, rows, row_group_size, chunk_rows, where, in_memory
):
    # One row without nulls keeps the columns from being null throughout.
    rows = [(1.0, 1.0, 1.0, 1.0), *rows]
    x, y, w, c = (list(column) for column in zip(*rows, strict=True))
    table = pa.table(
        {name: pa.array(v, pa.float64()) for name, v in zip("xywc", (x, y, w, c), strict=True)}
        | {"id": list(range(len(rows)))}
    )
    path = tmp_path_factory.getbasetemp() / "loop.parquet"
    pq.write_table(table, path, row_group_size=row_group_size)

    def above(value, limit):
        return None if value is None else value > limit

    kept, filtered = [], 0
    refused = {"x null": 0, "y null": 0, "weight null": 0, "count null": 0}
    for number, row in enumerate(rows):
        if where == "x > 0":
            keep = above(row[0], 0)
        elif where == "NOT x > 0":
            keep = None if row[0] is None else not row[0] > 0
        elif where == "x > 100":
            keep = above(row[0], 100)
        elif where is not None:
            keep = row[2] is None or (row[1] is not None and row[1] != 1)
        else:
            keep = True
        if not keep:
            filtered += 1
            continue
        null = next((n for n, value in zip(refused, row, strict=True) if value is None), None)
        if null is None:
            kept.append((*row, number))
        else:
            refused[null] += 1

    data = table if in_memory else path
    columns = Columns("x", "y", weight="w", count="c", extra=("id",))
    with open_source(data, columns, where=where) as source:
        got = gather(source, chunk_rows)
        assert source.where == where
    assert (got.rows, got.filtered) == (len(rows), filtered)
    assert got.refused == {reason: number for reason, number in refused.items() if number}
    for place, values in enumerate((got.x, got.y, got.weight, got.count)):
        assert np.array_equal(values, [row[place] for row in kept], equal_nan=True)
    assert got.extra == [[row[4] for row in kept]]


def test_pruned_row_groups_are_counted_and_not_read(tmp_path, monkeypatch):
    table = pa.table({"x": np.arange(100.0), "y": np.ones(100), "n": np.arange(100)})
    pq.write_table(table, tmp_path / "a.parquet", row_group_size=10)
    read = []
    real = pq.ParquetFile.iter_batches

    def spy(self, *args, **options):
        read.append(options["row_groups"])
        return real(self, *args, **options)

    monkeypatch.setattr(pq.ParquetFile, "iter_batches", spy)
    with open_source(
        tmp_path, Columns("x", "y", extra=("n",)), where="x >= 25 AND n < 48"
    ) as source:
        got = gather(source)
        assert source.x_range == (20.0, 49.0)
    assert got.x.tolist() == list(range(25, 48))
    assert (got.rows, got.filtered) == (100, 77)
    assert read == [[2], [3], [4]]


def test_statistics_range_needs_finite_ends_everywhere(tmp_path):
    def range_of(*groups):
        with pq.ParquetWriter(
            tmp_path / "a.parquet", pa.schema([("x", pa.float64()), ("y", pa.float64())])
        ) as writer:
            for group in groups:
                columns = {"x": pa.array(group, pa.float64()), "y": [1.0] * len(group)}
                writer.write_table(pa.table(columns))
        with open_source(tmp_path, Columns("x", "y")) as source:
            return source.x_range

    assert range_of([1.0, 2.0], [0.5]) == (0.5, 2.0)
    assert range_of([1.0, math.nan], [0.5]) == (0.5, 1.0)
    assert range_of([1.0, 2.0], [None, None]) == (1.0, 2.0)
    assert range_of([1.0, 2.0], [math.nan]) is None
    assert range_of([1.0, math.inf]) is None
    assert range_of([-math.inf, 2.0], [1.0]) is None


def test_partition_keys_are_columns(tmp_path):
    for plant, month in (("7", "2026-01"), ("12", "__HIVE_DEFAULT_PARTITION__")):
        folder = tmp_path / f"plant={plant}" / f"month={month}" / "site=R%C3%ADo%20Tinto"
        folder.mkdir(parents=True)
        write(folder / "a.parquet", rows=5, seed=int(plant))
    columns = Columns("plant_x", "power_kw", extra=("site", "month"))
    with pytest.raises(InputError, match="'plant_x' is none; use 'plant'"):
        open_source(tmp_path, columns)
    columns = Columns("wet_bulb_c", "power_kw", extra=("site", "month"))
    with open_source(tmp_path, columns, where="month IS NULL OR site = 'none'") as source:
        got = gather(source)
    assert got.extra == [["Río Tinto"] * 5, [None] * 5]
    assert (got.rows, got.filtered) == (10, 5)
    # The files have a column 'plant' of their own, which comes first.
    with open_source(tmp_path, Columns("plant", "power_kw")) as source:
        assert set(gather(source).x) <= {0.0, 1.0, 2.0}


def test_numeric_partition_key_as_x(tmp_path):
    for level in ("1", "2.5"):
        (tmp_path / f"level={level}").mkdir()
        pq.write_table(pa.table({"y": [1.0, 2.0]}), tmp_path / f"level={level}" / "a.parquet")
    with open_source(tmp_path, Columns("level", "y")) as source:
        assert gather(source).x.tolist() == [1.0, 1.0, 2.5, 2.5]
        assert source.x_range == (1.0, 2.5)
    with open_source(
        str(tmp_path / "*" / "a.parquet"), Columns("y", "y"), where="level > 2"
    ) as source:
        got = gather(source)
    assert (got.x.tolist(), got.filtered) == ([1.0, 2.0], 2)
    (tmp_path / "level=high").mkdir()
    pq.write_table(pa.table({"y": [1.0]}), tmp_path / "level=high" / "a.parquet")
    with pytest.raises(InputError, match=r"--x must name a column of numbers.*is text; cast"):
        open_source(tmp_path, Columns("level", "y"))


def test_empty_file_is_no_error(tmp_path):
    pq.write_table(
        pa.table({"x": pa.array([], "double"), "y": pa.array([], "double")}), tmp_path / "a.parquet"
    )
    with open_source(tmp_path, Columns("x", "y")) as source:
        got = gather(source)
    assert (got.rows, source.rows_expected, source.x_range) == (0, 0, None)


def sum_of(task, chunks):
    return task.index, sum(float(chunk.x.sum()) for chunk in chunks)


def test_results_come_in_task_order_for_any_threads(tmp_path):
    write(tmp_path / "a.parquet", rows=2000, row_group_size=50)
    with open_source(tmp_path, XY) as source:
        one = list(source.map_tasks(sum_of, 1, 20))
        for threads in (2, 5):
            assert list(source.map_tasks(sum_of, threads, 20)) == one
    assert [index for index, _ in one] == list(range(40))


def test_few_results_wait_in_memory(tmp_path):
    write(tmp_path / "a.parquet", rows=2000, row_group_size=50)
    done = []

    def note(task, chunks):
        list(chunks)
        done.append(task.index)
        return task.index

    with open_source(tmp_path, XY) as source:
        results = source.map_tasks(note, 2)
        for expected in range(40):
            assert next(results) == expected
            time.sleep(0.001)
            assert len(done) <= expected + 1 + 2 * 2


def test_progress_counts_every_row_one_call_at_a_time(tmp_path):
    write(tmp_path / "a.parquet", rows=2000, row_group_size=50)
    total, inside, overlaps = [0], [0], []

    def progress(rows):
        inside[0] += 1
        overlaps.append(inside[0])
        time.sleep(0.0005)
        total[0] += rows
        inside[0] -= 1

    with open_source(tmp_path, XY, where="wet_bulb_c > 100") as source:
        list(source.map_tasks(sum_of, 3, 20, progress))
    assert total == [2000]
    assert set(overlaps) == {1}


@pytest.mark.parametrize("threads", [1, 3])
def test_an_error_stops_the_rest(tmp_path, threads):
    write(tmp_path / "a.parquet", rows=2000, row_group_size=50)
    started = []

    def fail(task, chunks):
        started.append(task.index)
        if task.index == 3:
            raise ZeroDivisionError("task 3")
        return sum(chunk.rows for chunk in chunks)

    before = threading.active_count()
    with open_source(tmp_path, XY) as source:
        results = source.map_tasks(fail, threads, 20)
        assert [next(results) for _ in range(3)] == [50, 50, 50]
        with pytest.raises(ZeroDivisionError, match="task 3"):
            next(results)
    assert max(started) <= 3 + 2 * threads
    assert threading.active_count() == before


def test_abandoned_pass_leaves_no_threads(tmp_path):
    write(tmp_path / "a.parquet", rows=2000, row_group_size=50)
    before = threading.active_count()
    with open_source(tmp_path, XY) as source:
        results = source.map_tasks(sum_of, 3)
        next(results)
        results.close()
    assert threading.active_count() == before


def test_threads_below_one_are_refused():
    with (
        open_source({"wet_bulb_c": [1.0], "power_kw": [1.0]}, XY) as source,
        pytest.raises(InputError, match="--threads must be at least 1, but it is 0; leave it out"),
    ):
        list(source.map_tasks(sum_of, 0))


def test_short_read_is_an_error(tmp_path, monkeypatch):
    write(tmp_path / "a.parquet")
    real = pq.ParquetFile.iter_batches

    def early_end(self, *args, **options):
        yield next(iter(real(self, *args, **options)))

    with open_source(tmp_path, XY) as source:
        monkeypatch.setattr(pq.ParquetFile, "iter_batches", early_end)
        with pytest.raises(ReadError) as caught:
            gather(source, rows=100)
    assert str(caught.value) == (
        f"DATA must hold as many rows as it says, but {tmp_path}/a.parquet, row group 1 of 4 "
        "delivered 100 of 300 rows; copy or write the file again."
    )


@pytest.mark.parametrize("when", ["before", "during", "removed"])
def test_file_that_changes_is_an_error(tmp_path, when):
    path = tmp_path / "a.parquet"
    write(path)
    with open_source(path, XY) as source:
        chunks = source.chunks(source.tasks[0], 100)
        if when != "before":
            next(chunks)
        if when == "removed":
            path.unlink()
        else:
            write(path, rows=1001)
        with pytest.raises(ReadError) as caught:
            list(chunks)
    assert str(caught.value) == (
        f"DATA must stay as it is while it is read, but '{path}' was changed or removed "
        "meanwhile; run again when nothing writes to it."
    )


def test_tasks_of_arrays_do_not_depend_on_their_layout():
    table = pa.table({"wet_bulb_c": np.arange(100.0), "power_kw": np.ones(100)})
    broken = pa.concat_tables([table.slice(n, 7) for n in range(0, 100, 7)])
    with open_source(table, XY) as whole, open_source(broken, XY) as parts:
        assert gather(parts, 30).sizes == gather(whole, 30).sizes == [30, 30, 30, 10]
        assert np.array_equal(gather(parts, 30).x, gather(whole, 30).x)


def test_large_arrays_are_cut_into_tasks():
    n = (1 << 20) + 5
    with open_source({"wet_bulb_c": np.arange(n) * 1.0, "power_kw": np.zeros(n)}, XY) as source:
        assert [task.rows for task in source.tasks] == [1 << 20, 5]
        assert source.tasks[1].label == "rows 1,048,576 to 1,048,580"
        totals = list(source.map_tasks(sum_of, 2))
    assert sum(total for _, total in totals) == n * (n - 1) / 2
