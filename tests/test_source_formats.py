"""Arrow IPC, CSV, frames, streams and lazy frames."""

import datetime as dt
import gc
import gzip
import math
import os
import tempfile

import duckdb
import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pyarrow.csv as csv
import pyarrow.dataset as ds
import pyarrow.ipc as ipc
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fastsmooth.errors import InputError, ReadError
from fastsmooth.readers import rebatch
from fastsmooth.source import Columns, open_source
from tests.source_tools import gather

XY = Columns("x", "y", extra=("plant",))
ROWS = 1000
X = np.random.default_rng(3).normal(size=ROWS)
TABLE = pa.table(
    {
        "x": X,
        "unused": ["-"] * ROWS,
        "y": pa.array([None if n % 10 == 0 else float(n) for n in range(ROWS)]),
        "plant": ["Avila" if n % 3 else "Soria" for n in range(ROWS)],
        "logged_at": pa.array(np.arange(ROWS) * 10, pa.timestamp("ms")),
    }
)
WHERE = "plant = 'Avila'"


def check(source, rows=64, sizes=None):
    """Compare with a plain loop over TABLE; twice, for the second pass must be like the first."""
    with source:
        for _ in range(2):
            got = gather(source, rows)
            kept = [
                (row["x"], row["y"])
                for row in TABLE.to_pylist()
                if row["plant"] == "Avila" and row["y"] is not None
            ]
            assert (got.rows, got.filtered) == (ROWS, 334)
            assert got.refused == {"y null": 66}
            assert list(zip(got.x.tolist(), got.y.tolist(), strict=True)) == kept
            assert got.extra == [["Avila"] * len(kept)]
            if sizes is not None:
                assert got.sizes == sizes


SIZES = [64] * 15 + [40]


def write_ipc(path, batch_rows, compression=None, stream=False):
    options = ipc.IpcWriteOptions(compression=compression)
    new = ipc.new_stream if stream else ipc.new_file
    with new(path, TABLE.schema, options=options) as writer:
        writer.write_table(TABLE, max_chunksize=batch_rows)
    return path


@pytest.mark.parametrize("compression", [None, "lz4", "zstd"])
@pytest.mark.parametrize("batch_rows", [7, 100, 1000])
@pytest.mark.parametrize("suffix", ["arrow", "feather", "ipc"])
def test_arrow_files(tmp_path, compression, batch_rows, suffix):
    path = write_ipc(tmp_path / f"a.{suffix}", batch_rows, compression)
    source = open_source(path, XY, where=WHERE)
    assert source.rows_expected == ROWS
    assert [task.rows for task in source.tasks] == [ROWS]
    check(source, sizes=SIZES)


def test_large_arrow_file_is_cut_into_tasks(tmp_path):
    n = 3_000_000
    table = pa.table({"x": np.arange(n), "y": np.zeros(n)})
    with ipc.new_file(tmp_path / "a.arrow", table.schema) as writer:
        writer.write_table(table, max_chunksize=100_000)
    with open_source(tmp_path, Columns("x", "y")) as source:
        assert [task.label for task in source.tasks] == [
            f"{tmp_path}/a.arrow, record batches {first} to {last}"
            for first, last in ((1, 10), (11, 20), (21, 30))
        ]
        totals = source.map_tasks(lambda _, chunks: sum(c.x.sum() for c in chunks), 2)
        assert sum(totals) == n * (n - 1) // 2
        assert source.rows_expected == n


def test_arrow_stream_in_a_file(tmp_path):
    source = open_source(write_ipc(tmp_path / "a.arrow", 100, stream=True), XY, where=WHERE)
    assert source.rows_expected is None
    assert [task.rows for task in source.tasks] == [None]
    check(source, sizes=SIZES)


def test_uncompressed_arrow_file_is_mapped(tmp_path):
    table = pa.table({"x": np.arange(500_000.0)})
    with ipc.new_file(tmp_path / "a.arrow", table.schema) as writer:
        writer.write_table(table)
    with open_source(tmp_path / "a.arrow", Columns("x", "x")) as source:
        before = pa.total_allocated_bytes()
        chunks = list(source.chunks(source.tasks[0]))
        # The metadata of a batch is copied, four megabytes of values are not.
        assert pa.total_allocated_bytes() - before < 100_000
        assert np.array_equal(np.concatenate([chunk.x for chunk in chunks]), table["x"])


@pytest.mark.parametrize("suffix", ["csv", "csv.gz"])
def test_csv(tmp_path, suffix):
    path = tmp_path / f"a.{suffix}"
    csv.write_csv(TABLE, tmp_path / "plain.csv")
    text = (tmp_path / "plain.csv").read_bytes()
    path.write_bytes(gzip.compress(text) if suffix == "csv.gz" else text)
    source = open_source(path, XY, where=WHERE)
    assert [task.label for task in source.tasks] == [str(path)]
    check(source, sizes=SIZES)


def csv_source(tmp_path, text, columns, **options):
    (tmp_path / "a.csv").write_text(text)
    return open_source(tmp_path / "a.csv", columns, **options)


def test_csv_types(tmp_path):
    text = (
        "x,y,n,t,d\n1,2,1,2026-01-01 00:00:00,2026-01-01\n,nan,2,2026-01-02 00:00:00,2026-01-02\n"
    )
    with csv_source(tmp_path, text, Columns("x", "y", extra=("n",))) as source:
        got = gather(source)
    assert (got.x.tolist(), got.y.tolist(), got.extra) == ([1.0], [2.0], [[1]])
    assert got.refused == {"x null": 1}
    with csv_source(tmp_path, text, Columns("y", "y")) as source:
        assert math.isnan(gather(source).x[1])
    with csv_source(tmp_path, text, Columns("t", "n"), where="d >= '2026-01-02'") as source:
        assert source.axis.arrow_type == "timestamp[us]"
        assert gather(source).x.tolist() == [86_400.0]
    with csv_source(tmp_path, text, Columns("d", "n")) as source:
        assert source.axis.kind == "date"
        assert gather(source).x.tolist() == [0.0, 86_400.0]


def test_csv_number_that_turns_fractional_after_the_first_block(tmp_path):
    text = "x,y\n" + "1,2\n" * 400_000 + "0.5,2.5\n"
    with csv_source(tmp_path, text, Columns("x", "y")) as source:
        got = gather(source)
    assert (got.x[-1], got.y[-1], len(got.x)) == (0.5, 2.5, 400_001)
    assert set(got.sizes[:-1]) == {65_536}


def test_csv_text_is_refused_naming_the_value(tmp_path):
    with pytest.raises(InputError) as caught:
        csv_source(tmp_path, "x,y\n1,2\n1,warm\n", Columns("x", "y"))
    assert str(caught.value) == (
        f"--y must name a column of numbers, but 'y' in '{tmp_path}/a.csv' is text, such as "
        "'warm'; correct it, leave the field empty, or cast the column to a number."
    )


def test_csv_text_after_the_first_block_is_refused_naming_the_value(tmp_path):
    text = "z,x,y\n" + "0,1,2\n" * 400_000 + "0,1,warm\n"
    source = csv_source(tmp_path, text, Columns("x", "y"))
    with source, pytest.raises(InputError) as caught:
        gather(source)
    assert str(caught.value) == (
        "--y must hold values of type double only, as its first lines do, but 'y' in "
        f"'{tmp_path}/a.csv' has the invalid value 'warm' in line 400002; correct it or leave the "
        "field empty."
    )


def test_csv_integers_beyond_2_to_the_53_are_refused(tmp_path):
    source = csv_source(tmp_path, "x,y\n1,2\n9007199254740993,1\n", Columns("x", "y"))
    with source, pytest.raises(InputError) as caught:
        gather(source)
    assert str(caught.value) == (
        "--x must hold integers below 2^53 (9,007,199,254,740,992), which a float64 keeps exactly, "
        f"but 'x' in '{tmp_path}/a.csv' holds larger ones; subtract an offset from the column, or "
        "divide it, first."
    )


def test_csv_files_of_different_types_mix(tmp_path):
    (tmp_path / "a.csv").write_text("x,y\n1,2\n")
    (tmp_path / "b.csv").write_text("y,x\n2.5,\n3,1e3\n")
    with open_source(tmp_path, Columns("x", "y")) as source:
        got = gather(source)
    assert (got.x.tolist(), got.y.tolist()) == ([1.0, 1000.0], [2.0, 3.0])


class Stream:
    """An object with nothing but an Arrow stream, which counts how often it is asked."""

    def __init__(self, table):
        self.table = table
        self.asked = 0

    def __arrow_c_stream__(self, requested_schema=None):
        self.asked += 1
        return self.table.__arrow_c_stream__(requested_schema)


def test_frames_and_streams():
    broken = pa.concat_tables([TABLE.slice(n, 7) for n in range(0, ROWS, 7)])
    check(open_source(TABLE, XY, where=WHERE), sizes=SIZES)
    check(open_source(broken, XY, where=WHERE), sizes=SIZES)
    batch = TABLE.combine_chunks().to_batches()[0]
    check(open_source(batch, XY, where=WHERE), sizes=SIZES)
    check(open_source(pl.from_arrow(TABLE), XY, where=WHERE), sizes=SIZES)
    check(open_source(TABLE.to_pandas(), XY, where=WHERE), sizes=SIZES)
    check(
        open_source(
            pl.from_arrow(TABLE).with_columns(pl.col("plant").cast(pl.Categorical)), XY, where=WHERE
        )
    )


def test_foreign_streams_are_asked_afresh_on_each_pass():
    stream = Stream(pa.concat_tables([TABLE.slice(n, 7) for n in range(0, ROWS, 7)]))
    source = open_source(stream, XY, where=WHERE)
    assert source.tasks[0].rows is None
    check(source, sizes=SIZES)
    assert stream.asked == 2


class SpentStream(Stream):
    """Gives its rows once and then, without a word, none."""

    def __arrow_c_stream__(self, requested_schema=None):
        table, self.table = self.table, self.table.slice(0, 0)
        return table.__arrow_c_stream__(requested_schema)


def test_stream_that_is_spent_is_no_empty_table():
    with open_source(SpentStream(TABLE), XY) as source:
        assert gather(source).rows == ROWS
        with pytest.raises(ReadError, match="the stream gave 1,000 rows first and 0 rows then"):
            gather(source)
    # A time axis looks at the first time when opening, which is a pass too.
    with (
        open_source(SpentStream(TABLE), Columns("logged_at", "x")) as source,
        pytest.raises(ReadError, match="the stream gave 1,000 rows first and 0 rows then"),
    ):
        gather(source)


def test_duckdb_relation():
    connection = duckdb.connect()
    connection.register("readings", TABLE)
    check(open_source(connection.sql("SELECT * FROM readings"), XY, where=WHERE), sizes=SIZES)


def test_stream_that_differs_on_the_second_pass():
    stream = Stream(TABLE)
    with open_source(stream, XY) as source:
        gather(source)
        stream.table = TABLE.slice(0, 900)
        with pytest.raises(ReadError) as caught:
            gather(source)
    assert str(caught.value) == (
        "DATA must deliver the same rows on each pass, but the stream gave 1,000 rows first and "
        "900 rows then; write it to a Parquet file and name that."
    )


def test_stream_that_delivers_other_types_than_announced():
    class Announcing(Stream):
        def __arrow_c_schema__(self):
            return self.table.schema.set(0, pa.field("x", pa.float32())).__arrow_c_schema__()

    with open_source(Announcing(TABLE), XY) as source:
        got = gather(source)
    assert np.array_equal(got.x, X.astype(np.float32)[[n for n in range(ROWS) if n % 10]])


def test_stream_that_breaks_off():
    def batches():
        yield TABLE.to_batches()[0]
        raise OSError("the cable was cut")

    reader = pa.RecordBatchReader.from_batches(TABLE.schema, batches())
    with pytest.raises(ReadError) as caught:
        open_source(reader, XY)
    assert str(caught.value) == (
        "DATA must deliver every row, but the stream broke off (OSError: the cable was cut); check "
        "what it holds, or write it to a Parquet file and name that."
    )


@pytest.fixture
def spool(tmp_path, monkeypatch):
    monkeypatch.setattr(tempfile, "tempdir", str(tmp_path))
    return tmp_path


def test_stream_for_one_pass_is_spooled_with_the_needed_columns(spool):
    source = open_source(TABLE.to_reader(100), XY, where=WHERE)
    [folder] = spool.iterdir()
    with ipc.open_file(str(folder / "rows.arrow")) as file:
        assert file.schema.names == ["x", "y", "plant"]
    assert (source.files, source.rows_expected) == ((), ROWS)
    check(source, sizes=SIZES)
    assert list(spool.iterdir()) == []


def test_lazy_frame_is_spooled_by_its_own_engine(spool):
    lazy = pl.from_arrow(TABLE).lazy().with_columns(pl.col("x") * 1)
    source = open_source(lazy, XY, where=WHERE)
    [folder] = spool.iterdir()
    assert pq.read_schema(folder / "rows.parquet").names == ["x", "y", "plant"]
    assert source.tasks[0].label == "the lazy frame, part 1"
    assert source.x_range == (X.min(), X.max())
    check(source)
    assert list(spool.iterdir()) == []


def test_spool_goes_when_the_source_is_forgotten(spool):
    source = open_source(TABLE.to_reader(), XY)
    assert len(list(spool.iterdir())) == 1
    del source
    gc.collect()
    assert list(spool.iterdir()) == []


def test_spool_goes_when_opening_fails(spool):
    table = pa.table({"x": pa.nulls(2, pa.float64()), "y": [1.0, 2.0]})
    with pytest.raises(InputError, match="nulls only"):
        open_source(pl.from_arrow(table).lazy(), Columns("x", "y"))
    assert list(spool.iterdir()) == []


def test_lazy_frame_with_regular_expression_characters_in_names():
    lazy = pl.DataFrame({"^x.*$": [1.0], "x2": [2.0]}).lazy()
    with open_source(lazy, Columns("^x.*$", "x2")) as source:
        assert gather(source).x.tolist() == [1.0]


def test_lazy_frame_over_a_damaged_file(tmp_path):
    table = pa.table({"x": np.random.default_rng(1).normal(size=100_000), "y": np.ones(100_000)})
    pq.write_table(table, tmp_path / "a.parquet", row_group_size=10_000)
    whole = (tmp_path / "a.parquet").read_bytes()
    (tmp_path / "a.parquet").write_bytes(whole[:200_000] + whole[300_000:])
    with pytest.raises(ReadError, match="DATA must deliver every row, but the lazy frame broke"):
        open_source(pl.scan_parquet(tmp_path / "a.parquet"), Columns("x", "y"))


def test_missing_column_of_a_lazy_frame():
    with pytest.raises(
        InputError, match="--x must name a column of DATA, but 'X' is none; use 'x'"
    ):
        open_source(pl.DataFrame({"x": [1.0], "y": [1.0]}).lazy(), Columns("X", "y"))


def test_data_set_with_its_own_filter(tmp_path):
    pq.write_table(TABLE, tmp_path / "a.parquet", row_group_size=300)
    check(open_source(ds.dataset(tmp_path), XY, where=WHERE), sizes=SIZES)
    some = ds.dataset(tmp_path).filter(ds.field("x") > 0)
    with open_source(some, Columns("x", "x")) as source:
        assert gather(source).x.tolist() == X[X > 0].tolist()


def test_arrays():
    x = np.arange(6.0)[::2]
    when = np.array(["2026-01-01T00:00:10", "NaT", "2026-01-01"], "datetime64[s]")
    data = {
        "x": x,
        "y": np.ma.array([1, 2, 3], mask=[False, False, True]),
        "big": np.array([1, 2, 3], ">f4"),
        "when": when,
        "plant": np.array(["a", "b", "c"]),
        "list": [1, 2, 3],
    }
    columns = Columns("x", "y", weight="big", count="list", extra=("plant",))
    with open_source(data, columns) as source:
        got = gather(source)
    assert (got.x.tolist(), got.y.tolist(), got.weight.tolist()) == ([0, 2], [1, 2], [1, 2])
    assert (got.count.tolist(), got.extra) == ([1, 2], [["a", "b"]])
    assert got.refused == {"y null": 1}
    with open_source(data, Columns("when", "x")) as source:
        got = gather(source)
    assert (got.x.tolist(), got.y.tolist(), got.refused) == ([10.0, 0.0], [0.0, 4.0], {"x null": 1})
    with open_source((x, x, x), Columns("a", "b", count="c")) as source:
        got = gather(source)
    assert (got.count.tolist(), got.weight) == ([0, 2, 4], None)
    with open_source({"x": [], "y": []}, Columns("x", "y")) as source:
        assert gather(source).rows == 0


def test_nan_of_arrays_stays_nan():
    with open_source({"x": [math.nan, 1.0], "y": [1.0, math.inf]}, Columns("x", "y")) as source:
        got = gather(source)
    assert np.array_equal(got.x, [math.nan, 1.0], equal_nan=True)
    assert (got.y.tolist(), got.refused) == ([1.0, math.inf], {})


def test_pandas_index_is_a_column_if_it_has_a_name():
    index = pd.Index([dt.datetime(2026, 1, 1), dt.datetime(2026, 1, 2)], name="logged_at")
    frame = pd.DataFrame({"y": [1.0, math.nan]}, index=index)
    with open_source(frame, Columns("logged_at", "y")) as source:
        got = gather(source)
    assert (got.x.tolist(), got.refused) == ([0.0], {"y null": 1})
    with pytest.raises(InputError, match="'index' is none; use one of 'y'"):
        open_source(pd.DataFrame({"y": [1.0]}), Columns("index", "y"))


def test_unaligned_memory_of_a_foreign_stream():
    raw = np.zeros(8 * 10 + 1, np.uint8)
    values = raw[1:].view(np.float64)
    values[:] = np.arange(10.0)
    column = pa.Array.from_buffers(pa.float64(), 10, [None, pa.py_buffer(raw[1:])])
    with open_source(pa.table({"x": column, "y": np.ones(10)}), Columns("x", "y")) as source:
        assert gather(source).x.tolist() == list(range(10))


@settings(max_examples=100, deadline=None)
@given(lengths=st.lists(st.integers(0, 12), max_size=8), rows=st.integers(1, 15))
def test_rebatch_keeps_rows_and_cuts_evenly(lengths, rows):
    names = ["Avila", "Soria", "Burgos"]
    batches, start = [], 0
    for turn, length in enumerate(lengths):
        # Each batch has a dictionary of its own.
        words = pa.array([names[(n + turn) % 3] for n in range(length)], pa.string())
        numbers = pa.array(range(start, start + length), pa.int64())
        batches.append(pa.record_batch({"n": numbers, "word": words.dictionary_encode()}))
        start += length
    got = list(rebatch(batches, rows))
    assert [batch.num_rows for batch in got] == [rows] * (start // rows) + (
        [start % rows] if start % rows else []
    )
    wanted = [row for batch in batches for row in batch.to_pylist()]
    assert [row for batch in got for row in batch.to_pylist()] == wanted


def test_rebatch_shares_memory_inside_a_batch():
    batch = pa.record_batch({"n": np.arange(10.0)})
    address = batch.column(0).buffers()[1].address
    assert all(part.column(0).buffers()[1].address == address for part in rebatch([batch], 4))


def test_temporary_folder_is_where_the_system_says(spool):
    with open_source(TABLE.to_reader(), XY):
        assert os.listdir(spool)[0].startswith("fastsmooth-")
