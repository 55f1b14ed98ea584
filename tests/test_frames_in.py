"""Every kind of frame gives the curve of the same arrays, to the last bit."""

import datetime as dt
import doctest
import warnings

import duckdb
import ibis
import numpy as np
import pandas as pd
import polars as pl
import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.parquet as pq
import pytest

import fastsmooth.polars_frames
from fastsmooth import make_curve, make_fleet, smooth
from fastsmooth.curve import VALUES
from fastsmooth.errors import InputError, ReadError
from fastsmooth.frames import _Spooled
from fastsmooth.settings import Band, Reading, Smoothing
from fastsmooth.source import Columns, open_source
from tests import cases
from tests.source_tools import gather

ROWS = cases.make_rows("uniform", 120_000, seed=2)
COLUMNS = ROWS.columns()
TABLE = pa.table(COLUMNS)
NAMES = ("wet_bulb_c", "power_kw")


class Stream:
    """Anything that streams Arrow."""

    def __init__(self, table):
        self.table = table

    def __arrow_c_stream__(self, requested_schema=None):
        return self.table.to_reader(1000).__arrow_c_stream__(requested_schema)


def from_duckdb(folder):
    connection = duckdb.connect()
    connection.register("readings", TABLE)
    return connection.sql("SELECT power_kw, wet_bulb_c FROM readings")


def from_ibis(folder):
    connection = ibis.duckdb.connect()
    connection.con.register("readings", TABLE)
    with warnings.catch_warnings():
        # It asks its database for the schema by a name that the database means to drop.
        warnings.simplefilter("ignore", DeprecationWarning)
        table = connection.table("readings")
    return table.mutate(power_kw=ibis._.power_kw * 1.0)


def from_files(folder):
    pq.write_table(TABLE, folder / "a.parquet")
    return ds.dataset(folder)


FRAMES = {
    "lists": lambda _: {name: values.tolist() for name, values in COLUMNS.items()},
    "tuple": lambda _: (ROWS.wet_bulb_c, ROWS.power_kw),
    "array with fields": lambda _: np.rec.fromarrays(list(COLUMNS.values()), names=NAMES),
    "strided arrays": lambda _: {n: np.repeat(v, 2)[::2] for n, v in COLUMNS.items()},
    "Arrow table": lambda _: TABLE,
    "Arrow table of many batches": lambda _: pa.Table.from_batches(TABLE.to_batches(777)),
    "Arrow batch": lambda _: TABLE.to_batches()[0],
    "Arrow reader": lambda _: TABLE.to_reader(1000),
    "Arrow data set in memory": lambda _: ds.dataset(TABLE),
    "Arrow data set of files": from_files,
    "pandas": lambda _: pd.DataFrame(COLUMNS),
    "pandas over Arrow": lambda _: TABLE.to_pandas(types_mapper=pd.ArrowDtype),
    "pandas columns": lambda _: dict(pd.DataFrame(COLUMNS).items()),
    "polars": lambda _: pl.DataFrame(COLUMNS),
    "polars lazy": lambda _: pl.DataFrame(COLUMNS).lazy().with_columns(pl.col("power_kw") * 1.0),
    "polars columns": lambda _: pl.DataFrame(COLUMNS).to_dict(),
    "duckdb": from_duckdb,
    "Ibis": from_ibis,
    "Ibis in memory": lambda _: ibis.memtable(TABLE),
}


@pytest.fixture(scope="module")
def expected():
    return make_curve(COLUMNS, *NAMES)


@pytest.mark.parametrize("kind", FRAMES)
def test_same_bits_as_from_arrays(expected, kind, tmp_path):
    made = make_curve(FRAMES[kind](tmp_path), *NAMES)
    assert made.bandwidth == expected.bandwidth
    for name in ("x", *VALUES, "status"):
        assert np.array_equal(getattr(made, name), getattr(expected, name), equal_nan=True), name
    assert made.trace["rows"] == expected.trace["rows"]


def test_stream_of_unknown_length_differs_by_rounding_only(expected):
    # How rows are dealt to folds, and so the order of summing, depends on their number.
    made = make_curve(Stream(TABLE), *NAMES)
    assert made.bandwidth == pytest.approx(expected.bandwidth, rel=1e-9)
    for name in ("estimate", "slope", "std_error", "residual_sd"):
        assert np.allclose(getattr(made, name), getattr(expected, name), rtol=1e-9, equal_nan=True)


def test_filtered_data_set_is_counted_with_its_filter(tmp_path):
    kept = ROWS.wet_bulb_c > 5.0
    made = make_curve(from_files(tmp_path).filter(ds.field("wet_bulb_c") > 5.0), *NAMES)
    alone = make_curve({name: values[kept] for name, values in COLUMNS.items()}, *NAMES)
    assert np.array_equal(made.estimate, alone.estimate, equal_nan=True)


def test_columns_of_frames_keep_zones_and_nulls():
    times = [dt.datetime(2026, 3, 1, hour) for hour in (0, 1, 2)]
    polars_column = pl.Series(times).dt.replace_time_zone("Europe/Madrid")
    pandas_column = pd.Series(times).dt.tz_localize("Europe/Madrid")
    for column in (polars_column, pandas_column):
        data = {"logged_at": column, "power_kw": pl.Series([1.0, None, 3.0])}
        with open_source(data, Columns("logged_at", "power_kw")) as source:
            assert source.axis.zone == "Europe/Madrid"
            got = gather(source)
        assert got.x.tolist() == [23 * 3600.0, 25 * 3600.0]
        assert got.refused == {"y null": 1}


def test_relation_whose_rows_come_and_go():
    connection = duckdb.connect()
    connection.execute(
        "CREATE TABLE readings AS SELECT range::DOUBLE AS x, 1.0::DOUBLE AS y FROM range(100)"
    )
    with open_source(connection.sql("FROM readings"), Columns("x", "y")) as source:
        assert source.rows_expected == 100
        gather(source)
        connection.execute("DELETE FROM readings WHERE x > 50")
        with pytest.raises(ReadError, match="gave 100 rows first and 51 rows then"):
            gather(source)


def test_query_that_fails_is_one_sentence():
    for data in (
        duckdb.connect().sql("SELECT 1.0 AS y, (range::VARCHAR || 'a')::DOUBLE AS x FROM range(5)"),
        ibis.memtable(pa.table({"x": ["1", "a"], "y": [1.0, 2.0]})).mutate(
            x=ibis._.x.cast("float64")
        ),
    ):
        with pytest.raises(ReadError) as caught, open_source(data, Columns("x", "y")) as source:
            gather(source)
        assert str(caught.value).startswith("DATA must deliver every row, but the stream broke off")
        assert str(caught.value).count("\n") == 0


def test_what_is_no_frame_is_refused():
    for data in (np.zeros((5, 2)), {1.0, 2.0}, 3):
        with pytest.raises(InputError, match="DATA must be a path, arrays or a frame, but it is a"):
            make_curve(data, *NAMES)


def test_smooth_takes_and_gives_arrays():
    x, y = ROWS.wet_bulb_c[:3000], ROWS.power_kw[:3000]
    at = np.array([[5.0, 20.0], [12.5, -50.0]])
    estimates = smooth(x, y, at)
    exact = make_curve((x, y), "x", "y", band=Band(at=(5.0, 12.5, 20.0)))
    assert estimates.shape == (2, 2)
    assert estimates.dtype == np.float64
    close = 0.02 * exact.std_error
    assert np.all(np.abs(estimates[[0, 1, 0], [0, 0, 1]] - exact.estimate) < close)
    assert np.isnan(estimates[1, 1])
    assert smooth(x, y, 5.0).shape == ()
    assert np.array_equal(smooth(list(x), pd.Series(y), at), estimates, equal_nan=True)


def test_smooth_at_its_own_rows():
    x, y = ROWS.wet_bulb_c[:2000], ROWS.power_kw[:2000]
    holed = np.append(x, np.nan)
    estimates = smooth(holed, np.append(y, 1.0))
    assert np.isnan(estimates).tolist() == [False] * 2000 + [True]
    assert np.array_equal(estimates[:2000], smooth(x, y))
    assert np.std(y - estimates[:2000]) == pytest.approx(cases.NOISE_SD_KW, rel=0.1)


def test_smooth_over_times():
    start = np.datetime64("2026-03-01", "s")
    seconds = np.random.default_rng(1).integers(0, 86_400, 2000)
    y = np.sin(seconds / 14_000.0)
    at = [dt.datetime(2026, 3, 1, 6), dt.datetime(2026, 3, 1, 18)]
    assert smooth(start + seconds, y, at) == pytest.approx(
        np.sin(np.array([21_600, 64_800]) / 14_000.0), abs=1e-2
    )


def test_smooth_passes_settings_on():
    x, y = ROWS.wet_bulb_c[:2000], ROWS.power_kw[:2000]
    weight, count = cases.precisions(2000), cases.repeats(2000)
    narrow = Smoothing(bandwidth=0.9, kernel="tricube")
    estimates = smooth(
        x, y, [3.0, 4.0], weight=weight, count=count, smoothing=narrow,
        reading=Reading(where="x > 0"),
    )  # fmt: skip
    made = make_curve(
        {"x": x, "y": y, "w": weight, "n": count}, "x", "y", weight="w", count="n",
        smoothing=narrow, reading=Reading(where="x > 0"), band=Band(at=(3.0, 4.0)),
    )  # fmt: skip
    assert np.all(np.abs(estimates - made.estimate) < 0.02 * made.std_error)


def test_smooth_refuses_what_is_no_column():
    for wrong, told in ((3.0, "float with 0"), (np.zeros((2, 2)), "ndarray with 2"), ("a", "str")):
        with pytest.raises(
            InputError, match=f"y must be one-dimensional, but it is of type {told}"
        ):
            smooth([1.0, 2.0], wrong)


@pytest.mark.parametrize("kernel", ["biweight", "gaussian", "uniform"])
@pytest.mark.parametrize("width", [0.3, 2.0])
def test_dense_curve_is_read_as_it_would_be_computed(width, kernel):
    x = np.linspace(0.0, 30.0, 1500)
    y = np.sin(x / width / 3.0)
    smoothing = Smoothing(bandwidth=width, kernel=kernel)
    at = np.array([0.01, 7.77, 15.003, 29.9])
    exact = make_curve((x, y), "x", "y", smoothing=smoothing, band=Band(at=tuple(at))).estimate
    assert smooth(x, y, at, smoothing=smoothing) == pytest.approx(exact, abs=1e-3)


READINGS = (
    pl.DataFrame(COLUMNS)
    .head(9000)
    .with_columns(plant=pl.Series(["north", "south", None] * 3000), small=pl.int_range(9000) < 2)
)


def test_polars_namespace_makes_one_curve():
    made = make_curve(READINGS, *NAMES).table()
    for frame in (READINGS, READINGS.lazy()):
        assert frame.fastsmooth.curve(*NAMES).equals(pl.DataFrame(made))


def test_polars_namespace_makes_one_curve_for_each_group():
    settings_of_all = {"smoothing": Smoothing(bandwidth=2.0), "band": Band(points=20)}
    made = READINGS.fastsmooth.curve(*NAMES, by="plant", **settings_of_all)
    assert made.columns == ["plant", "x", *VALUES, "status"]
    assert made["plant"].to_list() == ["north"] * 20 + ["south"] * 20 + [None] * 20
    lazy = READINGS.lazy().fastsmooth.curve(*NAMES, by="plant", **settings_of_all)
    assert lazy.equals(made)
    fleet = make_fleet(READINGS, *NAMES, by="plant", **settings_of_all)
    for key, curve in fleet.curves.items():
        mine = made.filter(pl.col("plant").eq_missing(key[0]))
        assert np.array_equal(mine["estimate"].fill_null(np.nan), curve.estimate, equal_nan=True)


def test_polars_group_without_a_curve_says_why():
    made = READINGS.fastsmooth.curve(*NAMES, by=["small"], reading=Reading(threads=1))
    [row] = made.filter("small").to_dicts()
    assert row["status"] == "too few distinct x"
    assert row["estimate"] is None
    assert made.filter(~pl.col("small")).height == 256


def test_doctests_of_the_namespace_count():
    assert doctest.testmod(fastsmooth.polars_frames).attempted > 5


def test_a_reader_of_what_was_written_first_must_say_how_it_is_written():
    class Unfinished(_Spooled):
        """Without `_write`."""

    with pytest.raises(TypeError, match="_write"):
        Unfinished("the stream", TABLE.schema)
