"""Column types: what becomes a float64, what is refused, and what the x axis means."""

import datetime as dt
import decimal
import json
import math
import zoneinfo

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth.axis import Axis
from fastsmooth.errors import InputError
from fastsmooth.source import Columns, open_source
from tests.source_tools import gather

XY = Columns("x", "y")
DAY = 86_400


def in_file(tmp_path, name="a.parquet", **columns):
    length = len(next(iter(columns.values())))
    pq.write_table(pa.table({"y": [1.0] * length} | columns), tmp_path / name)
    return tmp_path


NUMBERS = {
    "int8": pa.array([1, -2, 3], pa.int8()),
    "uint16": pa.array([1, 2, 3], pa.uint16()),
    "int64": pa.array([2**53, -(2**53), None]),
    "uint64": pa.array([2**53, 0, None], pa.uint64()),
    "half": pa.array(np.array([1.5, 2.5, -3.5], np.float16)),
    "single": pa.array([0.1, None, math.inf], pa.float32()),
    "decimal": pa.array([decimal.Decimal("0.10"), None, decimal.Decimal("-7.25")]),
    "boolean": pa.array([True, False, None]),
    "dictionary": pa.array([7, 7, None]).dictionary_encode(),
    "double dictionary": pa.array([0.5, None, 0.5]).dictionary_encode(),
}


@pytest.mark.parametrize("name", NUMBERS)
@pytest.mark.parametrize("place", ["file", "memory"])
def test_numbers_keep_their_value(tmp_path, name, place):
    column = NUMBERS[name]
    data = in_file(tmp_path, x=column) if place == "file" else pa.table({"x": column, "y": column})
    with open_source(data, XY, where="y IS NOT NULL") as source:
        got = gather(source)
    wanted = [float(value) for value in column.to_pylist() if value is not None]
    assert got.x.tolist() == wanted
    nulls = column.null_count if place == "file" else 0
    assert got.refused == ({"x null": nulls} if nulls else {})
    assert source.axis == Axis("number", "double", "", None, 0)


def test_statistics_of_typed_columns_give_the_range(tmp_path):
    def range_of(column):
        with open_source(in_file(tmp_path, x=column), XY) as source:
            return source.x_range

    assert range_of(pa.array([1, -2, None], pa.int16())) == (-2.0, 1.0)
    assert range_of(pa.array([2**40, 3], pa.uint64())) == (3.0, 2.0**40)
    assert range_of(NUMBERS["decimal"]) == (-7.25, 0.1)
    assert range_of(NUMBERS["boolean"]) == (0.0, 1.0)
    assert range_of(NUMBERS["half"]) is None


@pytest.mark.parametrize("value", [2**53 + 1, -(2**53) - 1])
@pytest.mark.parametrize("as_dictionary", [False, True])
def test_integers_beyond_2_to_the_53_are_refused(value, as_dictionary):
    column = pa.array([1, value, None])
    column = column.dictionary_encode() if as_dictionary else column
    table = pa.table({"x": [1, 2, 3], "y": column})
    with open_source(table, XY) as source, pytest.raises(InputError) as caught:
        gather(source)
    assert str(caught.value) == (
        "--y must hold integers of at most 2^53 (9,007,199,254,740,992), which a float64 keeps "
        f"exactly, but 'y' has {value:,}; subtract an offset from the column, or divide it, first."
    )


@pytest.mark.parametrize(
    ("column", "found", "remedy"),
    [
        (pa.array(["1", "2"]), "text", "cast the column to a number"),
        (pa.array(["1", "2"]).dictionary_encode(), "text", "cast the column to a number"),
        (pa.array(["1", "2"], pa.large_string()), "text", "cast the column to a number"),
        (pa.array([b"1", b"2"]), "of type binary", "cast the column to a number"),
        (
            pa.array([1, 2], pa.timestamp("us")),
            "of type timestamp[us]",
            "cast the column to a number",
        ),
        (pa.array([1, 2], pa.time32("s")), "of type time32[ms]", "cast the column to a number"),
        (
            pa.array([[1.0], [2.0]]),
            "nested (list<element: double>)",
            "write its parts as columns of their own",
        ),
    ],
    ids=str,
)
def test_other_types_are_refused_by_type(tmp_path, column, found, remedy):
    path = in_file(tmp_path, x=pa.array([1, 2]), bad=column) / "a.parquet"
    with pytest.raises(InputError) as caught:
        open_source(path, Columns("x", "bad"))
    assert str(caught.value) == (
        f"--y must name a column of numbers, but 'bad' in '{path}' is {found}; {remedy}."
    )


def test_text_as_x_is_refused(tmp_path):
    path = in_file(tmp_path, x=pa.array(["1", "2"])) / "a.parquet"
    with pytest.raises(InputError) as caught:
        open_source(path, XY)
    assert str(caught.value) == (
        "--x must name a column of numbers, times, dates or durations, but "
        f"'x' in '{path}' is text; cast the column to a number."
    )


@pytest.mark.parametrize("column", [pa.nulls(2), pa.array([None, None], pa.float64())])
@pytest.mark.parametrize("place", ["file", "memory"])
def test_column_of_nulls_is_refused(tmp_path, column, place):
    data = pa.table({"x": [1.0, 2.0], "y": column})
    if place == "file":
        pq.write_table(data, tmp_path / "a.parquet", row_group_size=1)
        data = tmp_path
    with pytest.raises(InputError) as caught:
        open_source(data, XY)
    assert str(caught.value) == (
        "--y must name a column with values, but 'y' holds nulls only; name another column."
    )


def test_files_of_different_number_types_mix(tmp_path):
    in_file(tmp_path, "a.parquet", x=pa.array([1, 2], pa.int32()))
    in_file(tmp_path, "b.parquet", x=pa.array([1.5, None]))
    in_file(tmp_path, "c.parquet", x=pa.nulls(2))
    with open_source(tmp_path, XY) as source:
        got = gather(source)
    assert got.x.tolist() == [1.0, 2.0, 1.5]
    assert got.refused == {"x null": 3}


TEXT_TYPES = [pa.string(), pa.large_string(), pa.string_view()]


@pytest.mark.parametrize("text_type", TEXT_TYPES, ids=str)
def test_extra_columns_keep_text_through_filters(text_type):
    plant = pa.array(["Avila", "Soria", None], text_type)
    table = pa.table({"x": [1.0, None, 3.0], "y": [1.0, 1.0, 1.0], "plant": plant})
    with open_source(
        table, Columns("x", "y", extra=("plant",)), where="x IS NULL OR x > 0"
    ) as source:
        assert gather(source).extra == [["Avila", None]]
    with open_source(table, Columns("x", "y", extra=("plant",)), where="x > 1") as source:
        assert gather(source).extra == [[None]]


# Temporal axes -----------------------------------------------------------------------------------


def times(unit, zone, *texts):
    moments = [None if text is None else np.datetime64(text, unit) for text in texts]
    integers = [None if m is None else int(m.astype(np.int64)) for m in moments]
    return pa.array(integers, pa.int64()).cast(pa.timestamp(unit, zone))


@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
@pytest.mark.parametrize("zone", [None, "UTC", "Europe/Madrid"])
@pytest.mark.parametrize("place", ["file", "memory"])
def test_times_become_seconds_since_the_first_day(tmp_path, unit, zone, place):
    column = times(unit, zone, "2026-03-01T06:30:05", None, "2026-02-28T23:00:00")
    data = (
        in_file(tmp_path, x=column) if place == "file" else pa.table({"x": column, "y": [1, 1, 1]})
    )
    with open_source(data, XY) as source:
        got = gather(source)
        axis = source.axis
    # A file's statistics tell the smallest time; in memory the first time counts.
    origin = "2026-02-28" if place == "file" else "2026-03-01"
    since = np.datetime64("2026-03-01T06:30:05") - np.datetime64(origin)
    late = float(since / np.timedelta64(1, "s"))
    early = float(
        (np.datetime64("2026-02-28T23:00:00") - np.datetime64(origin)) / np.timedelta64(1, "s")
    )
    assert got.x.tolist() == [late, early]
    assert got.refused == {"x null": 1}
    # Parquet has no unit of seconds.
    unit = "ms" if (unit, place) == ("s", "file") else unit
    assert (axis.kind, axis.unit, axis.zone) == ("timestamp", unit, zone)
    assert axis.arrow_type == str(pa.timestamp(unit, zone))
    back = axis.to_arrow(got.x)
    assert back.type == pa.timestamp(unit, zone)
    assert back.to_pylist() == column.drop_null().to_pylist()
    assert source.x_range == ((early, late) if place == "file" else None)
    assert Axis.from_dict(json.loads(json.dumps(axis.to_dict()))) == axis


def test_finest_unit_among_files_counts(tmp_path):
    in_file(tmp_path, "a.parquet", x=times("s", None, "2026-01-02T00:00:01"))
    in_file(tmp_path, "b.parquet", x=times("ms", None, "2026-01-01T00:00:00.250"))
    in_file(tmp_path, "c.parquet", x=times("us", None, "2026-01-03T00:00:00.000001"))
    with open_source(tmp_path, XY) as source:
        assert source.axis.unit == "us"
        assert gather(source).x.tolist() == [DAY + 1.0, 0.25, 2 * DAY + 1e-6]
        assert source.x_range == (0.25, 2 * DAY + 1e-6)


def test_origin_does_not_depend_on_the_filter(tmp_path):
    column = times("us", None, "2026-01-01T05:00", "2026-01-05T05:00")
    pq.write_table(pa.table({"x": column, "y": [1, 2]}), tmp_path / "a.parquet", row_group_size=1)
    with open_source(tmp_path, XY) as whole, open_source(tmp_path, XY, where="y > 1") as part:
        assert whole.axis == part.axis
        assert part.x_range == (4 * DAY + 18_000.0,) * 2


def test_dates_and_durations(tmp_path):
    days = [dt.date(2026, 3, 1), None, dt.date(2026, 2, 27)]
    for data_type in (pa.date32(), pa.date64()):
        column = pa.array(days, data_type)
        for data in (in_file(tmp_path, x=column), pa.table({"x": column, "y": [1, 1, 1]})):
            with open_source(data, XY) as source:
                got = gather(source)
            assert (source.axis.kind, source.axis.unit) == ("date", "day")
            assert source.axis.to_arrow(got.x).to_pylist() == [days[0], days[2]]
            assert got.x[0] - got.x[1] == 2 * DAY
    column = pa.array([7_800, None, -5], pa.duration("ms"))
    for data in (in_file(tmp_path, x=column), pa.table({"x": column, "y": [1, 1, 1]})):
        with open_source(data, XY) as source:
            got = gather(source)
        assert got.x.tolist() == [7.8, -0.005]
        assert source.axis == Axis("duration", "duration[ms]", "ms", None, 0)
        assert source.axis.to_arrow(got.x) == column.drop_null()


def test_zones_do_not_mix_with_none(tmp_path):
    in_file(tmp_path, "a.parquet", x=times("us", None, "2026-01-01"))
    in_file(tmp_path, "b.parquet", x=times("us", "UTC", "2026-01-01"))
    with pytest.raises(InputError) as caught:
        open_source(tmp_path, XY)
    assert str(caught.value) == (
        "--x must name a column with a zone in every file or in none, but 'x' has zone UTC in "
        "some and no zone in others; write the files alike."
    )


def test_kinds_do_not_mix(tmp_path):
    in_file(tmp_path, "a.parquet", x=times("us", None, "2026-01-01"))
    in_file(tmp_path, "b.parquet", x=pa.array([1.0]))
    with pytest.raises(InputError) as caught:
        open_source(tmp_path, XY)
    assert str(caught.value) == (
        "--x must name a column of one kind in every file, but 'x' holds timestamps in "
        f"'{tmp_path}/a.parquet' and numbers in '{tmp_path}/b.parquet'; write the files alike."
    )


def test_nanoseconds_survive(tmp_path):
    column = times("ns", None, "2026-01-01T00:00:00.000000001", "2026-01-01T00:00:00.000000002")
    with open_source(in_file(tmp_path, x=column), XY) as source:
        got = gather(source)
    assert got.x.tolist() == [1e-9, 2e-9]


def test_times_that_the_finest_unit_cannot_hold_are_refused(tmp_path):
    in_file(tmp_path, "a.parquet", x=times("ns", None, "2026-01-01"))
    in_file(tmp_path, "b.parquet", x=times("us", None, "9999-01-01"))
    with open_source(tmp_path, XY) as source, pytest.raises(InputError) as caught:
        gather(source)
    assert str(caught.value) == (
        "--x must hold times that fit 64-bit counts of ns, but 'x' has one that does not; filter "
        "such rows away or store every file in a coarser unit than ns."
    )


def test_times_too_far_apart_are_refused():
    column = pa.array([-(2**63) + 1, 2**63 - 1]).cast(pa.timestamp("ns"))
    table = pa.table({"x": column, "y": [1, 1]})
    with open_source(table, XY) as source, pytest.raises(InputError) as caught:
        gather(source)
    assert str(caught.value) == (
        "--x must hold times that lie within 64-bit counts of each other, but 'x' spans more; "
        "filter the far ones away with --where."
    )


ZONED = Axis("timestamp", "timestamp[us, tz=Europe/Madrid]", "us", "Europe/Madrid", 0)
NAIVE = Axis("timestamp", "timestamp[ns]", "ns", None, 1_767_225_600_000_000_000)
DATES = Axis("date", "date32[day]", "day", None, 20_454)
SPELLS = Axis("duration", "duration[ms]", "ms", None, 0)
NUMBER = Axis("number", "double", "", None, 0)
SUMMER = dt.datetime(2026, 7, 1, 12, tzinfo=zoneinfo.ZoneInfo("Europe/Madrid"))


@pytest.mark.parametrize(
    ("axis", "value", "wanted"),
    [
        (NUMBER, "1.5", 1.5),
        (NUMBER, 3, 3.0),
        (NUMBER, np.float32(0.5), 0.5),
        (NAIVE, "2026-01-01", 0.0),
        (NAIVE, "2026-01-01T00:00:00.000000001", 1e-9),
        (NAIVE, "2026-01-01 06:30", 23_400.0),
        (NAIVE, dt.date(2026, 1, 2), DAY),
        (NAIVE, dt.datetime(2025, 12, 31, 23), -3600.0),
        (NAIVE, np.datetime64("2026-01-01T00:00:01"), 1.0),
        (ZONED, "1970-01-01 01:00", 0.0),
        (ZONED, "1970-01-01T00:00Z", 0.0),
        (ZONED, "1970-01-01T02:00:00+02:00", 0.0),
        (ZONED, SUMMER, SUMMER.timestamp()),
        (DATES, "2026-01-03", 2 * DAY),
        (DATES, "2026-01-03 12:00", 2.5 * DAY),
        (DATES, dt.date(2026, 1, 1), 0.0),
        (SPELLS, "2 h 10 min", 7800.0),
        (SPELLS, "1.5d", 1.5 * DAY),
        (SPELLS, "250ms", 0.25),
        (SPELLS, 90, 90.0),
        (SPELLS, dt.timedelta(minutes=1), 60.0),
    ],
    ids=str,
)
def test_values_from_the_user(axis, value, wanted):
    assert axis.from_user(value) == wanted


@pytest.mark.parametrize(
    ("axis", "value", "sentence"),
    [
        (NUMBER, "warm", "be a number, but 'warm' was given; write a number"),
        (NUMBER, "nan", "be a finite number, but 'nan' was given; write a number"),
        (NUMBER, True, "be a finite number, but True was given; write a number"),
        (
            NAIVE,
            "soon",
            "be a timestamp, but 'soon' was given; write it as in 2026-01-31 or 2026-01-31T06:30",
        ),
        (NAIVE, 5, "be a timestamp, but 5 was given; write it as in 2026-01-31"),
        (
            NAIVE,
            "2026-01-01T00:00Z",
            "be a timestamp without a zone, as the column has none, but '2026-01-01T00:00Z' was "
            "given; write it as in 2026-01-31 or 2026-01-31T06:30",
        ),
        (
            SPELLS,
            "2 weeks",
            "be a number, but '2 weeks' was given; write seconds, or a width such as '2 h 10 min'",
        ),
    ],
    ids=str,
)
def test_values_from_the_user_that_are_refused(axis, value, sentence):
    with pytest.raises(InputError) as caught:
        axis.from_user(value)
    assert str(caught.value) == f"a value of x must {sentence}."


def test_clock_changes_are_read_the_stated_way():
    # Sunday 25 October 2026: 02:30 occurs twice; Sunday 29 March 2026: 02:30 does not occur.
    autumn = dt.datetime(2026, 10, 25, 0, 30, tzinfo=dt.UTC).timestamp()
    spring = dt.datetime(2026, 3, 29, 1, 0, tzinfo=dt.UTC).timestamp()
    assert ZONED.from_user("2026-10-25 02:30") == autumn
    assert ZONED.from_user("2026-03-29 02:30") == spring


@pytest.mark.parametrize(
    ("axis", "value", "text"),
    [
        (NUMBER, 12.3456789, "12.3457"),
        (NUMBER, math.nan, "none"),
        (NAIVE, 0.0, "2026-01-01 00:00"),
        (NAIVE, 61.0, "2026-01-01 00:01:01"),
        (NAIVE, 0.25, "2026-01-01 00:00:00.25"),
        (NAIVE, math.inf, "none"),
        (ZONED, 0.0, "1970-01-01 01:00"),
        (DATES, 86_400.0, "2026-01-02"),
        (SPELLS, 7800.0, "2 h 10 min"),
    ],
    ids=str,
)
def test_labels(axis, value, text):
    assert axis.label(value) == text


@pytest.mark.parametrize(
    ("width", "text"),
    [
        (7800.0, "2 h 10 min"),
        (7200.0, "2 h"),
        (3599.9, "1 h"),
        (3540.0, "59 min"),
        (90.0, "1 min 30 s"),
        (1.5, "1.5 s"),
        (0.25, "250 ms"),
        (2.5e-7, "250 ns"),
        (0.0, "0 ns"),
        (86_400 * 1.5, "1 d 12 h"),
        (86_399.0, "1 d"),
        (-90.0, "-1 min 30 s"),
        (math.inf, "inf"),
    ],
)
def test_width_labels(width, text):
    assert NAIVE.width_label(width) == text
    assert NUMBER.width_label(1.35) == "1.35"
    if math.isfinite(width) and width > 0:
        assert NAIVE.width_from_user(text) == pytest.approx(width, rel=1e-3)


@given(st.lists(st.floats(-1e9, 1e9), max_size=5), st.sampled_from(["s", "ms", "us", "ns"]))
def test_to_arrow_rounds_to_the_unit(values, unit):
    axis = Axis("timestamp", f"timestamp[{unit}]", unit, None, 5)
    scale = {"s": 1, "ms": 10**3, "us": 10**6, "ns": 10**9}[unit]
    got = axis.to_arrow(np.array(values)).cast(pa.int64()).to_pylist()
    assert got == [5 + round(value * scale) for value in values]


def test_to_arrow_gives_null_where_there_is_no_value():
    x = np.array([math.nan, math.inf, -math.inf, 1e300, 2.0])
    assert NAIVE.to_arrow(x).is_valid().to_pylist() == [False] * 4 + [True]
    assert DATES.to_arrow(x).is_valid().to_pylist() == [False] * 4 + [True]
    assert SPELLS.to_arrow(x).is_valid().to_pylist() == [False] * 4 + [True]
    assert NUMBER.to_arrow(x).to_pylist() == [None, math.inf, -math.inf, 1e300, 2.0]
