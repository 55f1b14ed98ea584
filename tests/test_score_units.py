"""Scoring against the curves of many units."""

from dataclasses import replace
from datetime import date, timedelta
from decimal import Decimal

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fastsmooth.errors import InputError
from fastsmooth.fleet import Fleet, Unit
from fastsmooth.lookup import ROW_STATUSES
from fastsmooth.score import DEFAULT_Z_LIMIT, score_rows
from tests.curves import CASES, cooling
from tests.scored_rows import (
    assert_rows,
    row_by_hand,
    sound,
    tally_by_hand,
)


def fleet_of(curves, by=("plant",), types=("string",), keys=None):
    keys = keys or list(curves)
    units = tuple(
        Unit(key, "made" if curves[key] else "too few rows", None if curves[key] else "Too few.",
             10, curves[key])
        for key in keys
    )  # fmt: skip
    first = next(one for one in curves.values() if one)
    settings = {**first.trace["settings"], "weight": None, "where": None}
    trace = {
        "settings": settings, "files": [], "versions": {}, "axis": first.axis.to_dict(),
        "by_types": list(types), "rows": {}, "engine": {}, "shared_bandwidth": None,
    }  # fmt: skip
    return Fleet(tuple(by), units, (), trace)


@pytest.fixture(scope="module")
def two_curves():
    return sound(CASES["plain"]()), sound(CASES["gap"]())


def fleet_rows(n, plants, seed=4):
    rng = np.random.default_rng(seed)
    x = rng.uniform(-1.0, 26.0, n)
    names = [plants[k] for k in rng.integers(0, len(plants), n)]
    return pa.table({"wet_bulb_c": x, "power_kw": cooling(x, 12.0), "plant": names})


def by_unit(rows, curves, z_limit=DEFAULT_Z_LIMIT):
    return [
        row_by_hand(curves.get((plant,), "unknown"), x, y, z_limit)
        for x, y, plant in zip(*(rows[name].to_pylist() for name in
                                 ("wet_bulb_c", "power_kw", "plant")), strict=True)
    ]  # fmt: skip


@pytest.mark.parametrize("encoded", [False, True])
def test_each_row_meets_the_curve_of_its_unit(two_curves, encoded):
    curves = {("eastfield",): two_curves[0], ("northmoor",): two_curves[1], ("southby",): None,
              (None,): two_curves[0]}  # fmt: skip
    rows = fleet_rows(500, ["northmoor", "eastfield", "southby", "newton", "oldham", None])
    if encoded:
        rows = rows.set_column(2, "plant", rows["plant"].combine_chunks().dictionary_encode())
    told = score_rows(rows, fleet_of(curves), z_limit=1.0)
    by_loops = by_unit(rows, curves, 1.0)
    assert_rows(told.table, by_loops)
    plants = rows["plant"].to_pylist()
    for unit in told.units.to_pylist():
        own = [row[3] for row, plant in zip(by_loops, plants, strict=True)
               if plant == unit["plant"]]  # fmt: skip
        codes = [ROW_STATUSES.index(word) for word in own]
        ((_, runs, longest),) = tally_by_hand(1, codes, [0] * len(codes))
        assert unit["rows"] == len(own)
        assert (unit["above"], unit["below"]) == (own.count("above"), own.count("below"))
        assert unit["no_curve"] == own.count("no curve")
        assert (unit["runs"], unit["longest_run"]) == (runs, longest)
    assert told.unknown == {(one,): plants.count(one) for one in ("newton", "oldham")}
    assert {one.code for one in told.cautions} >= {"unknown"}
    words = "\n".join(told.lines())
    assert f"newton: {plants.count('newton')} rows" in words
    assert "4 of 4 met" in words


def test_files_of_one_unit_each_and_units_without_a_row(two_curves, tmp_path):
    curves = {(7,): two_curves[0], (12,): two_curves[1], (99,): two_curves[1]}
    folder = tmp_path / "new"
    whole = {}
    for plant in (7, 12, 13):
        place = folder / f"plant={plant}"
        place.mkdir(parents=True)
        rows = fleet_rows(120, [plant], seed=plant)
        pq.write_table(rows.drop_columns(["plant"]), place / "a.parquet", row_group_size=50)
        whole[plant] = rows
    fleet = fleet_of(curves, types=("int64",))
    fleet.save(tmp_path / "fleet.parquet")
    told = score_rows(folder, tmp_path / "fleet.parquet", out=tmp_path / "scored")
    for plant, rows in whole.items():
        back = pq.ParquetFile(tmp_path / f"scored/plant={plant}/a.parquet").read()
        assert_rows(back, by_unit(rows, curves))
    assert told.units["rows"].to_pylist() == [120, 120, 0]
    assert told.unknown == {(13,): 120}
    assert "2 of 3 met, 1 without a row" in "\n".join(told.lines())


def test_two_columns_tell_units_apart(two_curves):
    curves = {("a", 1): two_curves[0], ("a", 2): two_curves[1], ("b", 1): two_curves[1]}
    rows = fleet_rows(300, ["a", "b"])
    lines = pa.array(np.arange(300) % 3, pa.int16())
    rows = rows.append_column("line", lines)
    told = score_rows(rows, fleet_of(curves, ("plant", "line"), ("string", "int64")))
    by_loops = [
        row_by_hand(curves.get((plant, line), "unknown"), x, y, DEFAULT_Z_LIMIT)
        for x, y, plant, line in zip(*(rows[name].to_pylist() for name in (
            "wet_bulb_c", "power_kw", "plant", "line")), strict=True)
    ]  # fmt: skip
    assert_rows(told.table, by_loops)
    assert set(told.unknown) == {("a", 0), ("b", 0), ("b", 2)}


@pytest.mark.parametrize(
    ("kind", "keys"),
    [
        ("date32[day]", [date(2026, 1, 1), date(2026, 2, 1)]),
        ("bool", [False, True]),
        ("decimal128(5, 1)", [Decimal("1.0"), Decimal("2.5")]),
        ("double", [0.5, 2.5]),
    ],
)
def test_units_of_any_type(two_curves, kind, keys):
    curves = {(key,): one for key, one in zip(keys, two_curves, strict=True)}
    rows = fleet_rows(100, keys)
    told = score_rows(rows, fleet_of(curves, types=(kind,)))
    assert_rows(told.table, by_unit(rows, curves))
    assert not told.unknown


def test_unit_columns_of_other_types_are_compared_by_value(two_curves):
    curves = {(7,): two_curves[0], (300,): two_curves[1]}
    rows = fleet_rows(60, [7, 300, -5])
    for to in (pa.int16(), pa.int64(), pa.float64(), pa.string()):
        data = rows.set_column(2, "plant", rows["plant"].cast(to))
        told = score_rows(data, fleet_of(curves, types=("int64",)))
        assert_rows(told.table, by_unit(rows, curves))
    small = fleet_of({(7,): two_curves[0]}, types=("int8",))
    assert_rows(score_rows(rows, small).table, by_unit(rows, {(7,): two_curves[0]}))
    flags = rows.set_column(2, "plant", pa.array([[1]] * 60))
    with pytest.raises(InputError, match=r"^--by must name a column of the same kind"):
        score_rows(flags, fleet_of(curves, types=("int64",)))


def test_units_column_must_be_there(two_curves):
    fleet = fleet_of({("a",): two_curves[0]})
    with pytest.raises(InputError, match=r"^DATA must hold each named column, but 'plant' is none"):
        score_rows(fleet_rows(5, ["a"]).drop_columns(["plant"]), fleet)
    with pytest.raises(InputError, match=r"^--curve must hold at least one curve"):
        score_rows(fleet_rows(5, ["a"]), replace(fleet, units=fleet.units[:0]))


def _grouped(values, keys):
    own = {key: [] for key in keys}
    for value in values:
        own[value].append(value)
    return [own[key] for key in keys]


def test_many_units_interleaved(two_curves):
    keys = [f"plant {k:04}" for k in range(1000)]
    curves = {(key,): two_curves[k % 2] for k, key in enumerate(keys)}
    rows = fleet_rows(20_000, keys)
    told = score_rows(rows, fleet_of(curves))
    assert told.units["rows"].to_pylist() == [
        len(part) for part in _grouped(rows["plant"].to_pylist(), keys)
    ]
    some = rows.take(list(range(0, 20_000, 97)))
    table = told.table.take(list(range(0, 20_000, 97)))
    assert_rows(table, by_unit(some, curves))


def test_times_cut_to_months_tell_units_apart(two_curves):
    curves = {(date(2026, 1, 1),): two_curves[0], (date(2026, 3, 1),): two_curves[1]}
    rows = fleet_rows(90, ["a"]).drop_columns(["plant"])
    days = [date(2026, 1, 5) + timedelta(k) for k in range(90)]
    rows = rows.append_column("day", pa.array(days))
    told = score_rows(rows, fleet_of(curves, ("day:month",), ("date32[day]",)))
    months = [one.replace(day=1) for one in days]
    assert_rows(told.table, by_unit(rows.append_column("plant", pa.array(months)), curves))
    assert told.units.column_names[0] == "day:month"
    assert set(told.unknown) == {(date(2026, 2, 1),), (date(2026, 4, 1),)}
