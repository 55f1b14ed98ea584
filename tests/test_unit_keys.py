"""What tells units apart: columns of any kind, pairs, cut times."""

import datetime as dt
import decimal
import math

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fastsmooth import (
    Reading,
    Smoothing,
    load_curve,
    make_fleet,
)
from fastsmooth.fleet import Fleet
from fastsmooth.grouping import Grouping, Keys
from tests.fleet_tools import X, Y, write

# Keys.

HOUR = dt.datetime(2026, 3, 1, 5, 30)
A_HALF = decimal.Decimal("0.5")
KEYS = {
    "text": pa.array(["b", "a", None, "b"]),
    "dictionary": pa.array(["b", "a", None, "b"]).dictionary_encode(),
    "small dictionary": pa.array(["b", "a", None, "b"]).cast(pa.dictionary(pa.uint8(), pa.utf8())),
    "large text": pa.array(["b", "a", None, "b"], pa.large_string()),
    "view": pa.array(["b", "a", None, "b"]),
    "integer": pa.array([7, -3, None, 7], pa.int16()),
    "float": pa.array([0.0, 2.5, math.nan, -0.0]),
    "truth": pa.array([True, False, None, True]),
    "date": pa.array([dt.date(2026, 3, 1), dt.date(1969, 1, 1), None, dt.date(2026, 3, 1)]),
    "time": pa.array([HOUR, dt.datetime(1950, 1, 1), None, HOUR], pa.timestamp("ns")),
    "zoned": pa.array([HOUR, dt.datetime(1950, 1, 1), None, HOUR], pa.timestamp("ms", "UTC")),
    "decimal": pa.array([A_HALF, decimal.Decimal("-2.2"), None, A_HALF]),
    "bytes": pa.array([b"\xff", b"", None, b"\xff"]),
    "duration": pa.array([dt.timedelta(hours=2), dt.timedelta(0), None, dt.timedelta(hours=2)]),
}  # fmt: skip


@pytest.mark.parametrize("name", KEYS)
@pytest.mark.parametrize("suffix", [".parquet", ".arrow", ".json"])
def test_any_kind_of_column_tells_units_apart(tmp_path, name, suffix):
    kind = KEYS[name]
    n = 900
    rng = np.random.default_rng(1)
    which = rng.integers(0, 4, n)
    column = kind.take(pa.array(which))
    if name == "view":
        column = column.cast(pa.string_view())
    x = rng.uniform(0.0, 10.0, n)
    data = {"x": x, "y": np.sin(x) + rng.normal(0.0, 0.1, n), "key": column}
    made = make_fleet(data, "x", "y", by="key", smoothing=Smoothing(widths=8))
    expected = kind.to_pylist()
    expected[2] = None
    keys = [unit.key for unit in made.units]
    assert set(keys) == {(expected[0],), (expected[1],), (None,)}
    assert keys[-1] == (None,)
    assert keys[:-1] == sorted(keys[:-1])
    by_key = {unit.key: unit.rows for unit in made.units}
    assert by_key[(expected[0],)] == ((which == 0) | (which == 3)).sum()
    assert by_key[(expected[1],)] == (which == 1).sum()
    path = tmp_path / f"curves{suffix}"
    made.save(path)
    again = load_curve(path)
    assert isinstance(again, Fleet)
    assert [unit.key for unit in again.units] == keys
    assert again.table().equals(made.table(), check_metadata=True)


def test_two_columns_make_a_unit_of_each_pair(tmp_path):
    n = 2000
    rng = np.random.default_rng(2)
    x = rng.uniform(0.0, 10.0, n)
    plant = np.array(["north", "south", "west"])[rng.integers(0, 3, n)]
    line = rng.integers(1, 3, n)
    keep = ~((plant == "west") & (line == 2))
    table = pa.table({X: x, Y: np.cos(x) + rng.normal(size=n), "plant": plant, "line": line})
    table = table.filter(pa.array(keep))
    data = write(tmp_path / "data", table, 3, 100)
    made = make_fleet(data, X, Y, by=["plant", "line"], smoothing=Smoothing(widths=8))
    rows = {unit.key: unit.rows for unit in made.units}
    assert rows == {
        (p, one): int(((plant == p) & (line == one)).sum())
        for p, one in [("north", 1), ("north", 2), ("south", 1), ("south", 2), ("west", 1)]
    }
    assert list(rows) == sorted(rows)
    shown = made.table()
    assert shown.column_names[:3] == ["plant", "line", "x"]
    assert shown["line"].type == pa.int64()


def test_more_pairs_than_a_table_holds_are_told_apart_too():
    rng = np.random.default_rng(3)
    first, second = rng.integers(0, 3000, 5000), rng.integers(0, 3000, 5000)
    keys = Keys(Grouping.parse(["a", "b"]))
    code = keys.codes([pa.array(first), pa.array(second)])
    pairs = list(zip(first.tolist(), second.tolist(), strict=True))
    assert [keys.keys[one] for one in code] == pairs
    assert len(keys.keys) == len(set(pairs))


def test_a_time_column_is_cut_into_months_and_hours():
    times = [dt.datetime(2025, 12, 31, 23, 30), dt.datetime(2026, 1, 1, 0, 30), None]
    utc = pa.array(times, pa.timestamp("us", "UTC"))
    months = Keys(Grouping.parse("t:month@Europe/Madrid"))
    assert months.codes([utc]).tolist() == [0, 0, 1] or months.keys[0] == (dt.date(2026, 1, 1),)
    assert set(months.keys) == {(dt.date(2026, 1, 1),), (None,)}
    clock = Keys(Grouping.parse("t:month"))
    clock.codes([pa.array(times, pa.timestamp("s"))])
    assert set(clock.keys) == {(dt.date(2025, 12, 1),), (dt.date(2026, 1, 1),), (None,)}
    weeks = Keys(Grouping.parse("t:week"))
    weeks.codes([pa.array(times, pa.timestamp("s"))])
    assert set(weeks.keys) == {(dt.date(2025, 12, 29),), (None,)}
    hours = Keys(Grouping.parse("t:hour"))
    hours.codes([utc])
    assert set(hours.keys) == {
        (dt.datetime(2025, 12, 31, 23, tzinfo=dt.UTC),),
        (dt.datetime(2026, 1, 1, 0, tzinfo=dt.UTC),),
        (None,),
    }


def test_units_may_be_months(tmp_path):
    n = 3000
    rng = np.random.default_rng(4)
    x = rng.uniform(0.0, 10.0, n)
    hours = pa.array(np.arange(n), pa.int64())
    logged = pa.array(hours.to_numpy() * 3600, pa.timestamp("s"))
    table = pa.table({"x": x, "y": np.sin(x) + rng.normal(size=n), "logged_at": logged})
    made = make_fleet(
        table, "x", "y", by="logged_at:month", reading=Reading(block="logged_at:day"),
        smoothing=Smoothing(widths=8),
    )  # fmt: skip
    assert made.by == ("logged_at:month",)
    assert [unit.key[0] for unit in made.units] == [dt.date(1970, m, 1) for m in range(1, 6)] + []
    assert [unit.rows for unit in made.units] == [744, 672, 744, 720, 120]
    days = [curve.trace["blocks"] for curve in made.curves.values()]
    assert days == [31, 28, 31, 30, 5]
    made.save(tmp_path / "m.parquet")
    assert load_curve(tmp_path / "m.parquet").table()["logged_at:month"].type == pa.date32()


def test_a_key_column_in_the_folders_names_or_constant_in_a_row_group_is_not_read(
    tmp_path, monkeypatch
):
    from fastsmooth.parquet import ParquetReader

    rng = np.random.default_rng(5)
    for plant in ("north", "south"):
        for line in (1, 2):
            folder = tmp_path / f"line={line}"
            folder.mkdir(exist_ok=True)
            x = rng.uniform(0.0, 10.0, 300)
            table = pa.table({"x": x, "y": np.sin(x) + rng.normal(size=300)})
            table = table.append_column("plant", pa.array([plant] * 300))
            pq.write_table(table, folder / f"{plant}.parquet", row_group_size=100)
    asked = []
    batches = ParquetReader.batches

    def watched(self, index, columns, rows):
        asked.append(tuple(columns))
        return batches(self, index, columns, rows)

    monkeypatch.setattr(ParquetReader, "batches", watched)
    made = make_fleet(tmp_path, "x", "y", by=["plant", "line"], smoothing=Smoothing(widths=8))
    assert set(asked) == {("x", "y")}
    assert {unit.key: unit.rows for unit in made.units} == {
        (plant, line): 300 for plant in ("north", "south") for line in (1, 2)
    }


def test_a_key_column_may_be_x_block_and_filter_at_once(tmp_path):
    n = 1200
    rng = np.random.default_rng(6)
    plant = rng.integers(0, 4, n)
    x = rng.uniform(0.0, 10.0, n)
    table = pa.table({"x": x, "y": np.sin(x) + rng.normal(size=n), "plant": plant, "n": plant + 1})
    data = write(tmp_path / "data", table, 2, 200)
    made = make_fleet(
        data, "x", "y", by="plant", count="n", smoothing=Smoothing(widths=8),
        reading=Reading(where="plant < 3 AND n > 1"),
    )  # fmt: skip
    assert {unit.key: unit.rows for unit in made.units} == {
        (one,): int((plant == one).sum()) for one in (1, 2)
    }
