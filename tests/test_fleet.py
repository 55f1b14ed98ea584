"""Many units in one pass: the bits of each alone, statuses, memory, files and commands."""

import datetime as dt
import decimal
import json
import math
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth import (
    Band,
    InputError,
    Reading,
    Smoothing,
    Unit,
    fleetpass,
    load_curve,
    make_curve,
    make_fleet,
    units_of,
)
from fastsmooth.bintable import Pyramid
from fastsmooth.cli import main
from fastsmooth.fleet import MADE, Fleet, arrow_type, column_of
from fastsmooth.fleetpass import count_fleet, count_units, lay_out
from fastsmooth.grouping import Grouping, Keys
from fastsmooth.likelybins import bins_for_width, likely_bins
from fastsmooth.packing import pack, unpack
from fastsmooth.passes import count_pass, task_groups
from fastsmooth.plan import Plan, Sample
from fastsmooth.search import search_table
from fastsmooth.sharedwidth import lowest_width
from fastsmooth.source import Columns, open_source
from tests import cases

X, Y = "wet_bulb_c", "power_kw"


def readings(n, units, seed=0, together=False):
    """Rows of some plants, one without a name, with nulls, NaN, infinities and a clock."""
    rng = np.random.default_rng([seed, 3])
    rows = cases.make_rows("uniform", n, seed)
    number = rng.integers(0, units, n)
    if together:
        number = np.sort(number)
    x, y = rows.wet_bulb_c.copy(), rows.power_kw + number
    x[rng.integers(0, n, n // 500 + 1)] = math.nan
    y[rng.integers(0, n, n // 500 + 1)] = math.inf
    return pa.table(
        {
            X: pa.array(x, mask=rng.random(n) < 0.005),
            Y: pa.array(y, mask=rng.random(n) < 0.005),
            "plant": pa.array([f"plant {one}" for one in number], mask=number == 2),
            "sharpness": cases.precisions(n, seed),
            "repeats": cases.repeats(n, seed),
            "logged_at": pa.array(np.arange(n) * 1200, pa.timestamp("s")),
        }
    )


def write(folder, table, files, rows_per_group):
    folder.mkdir(exist_ok=True)
    size = -(-table.num_rows // files)
    for number in range(files):
        pq.write_table(
            table.slice(number * size, size), folder / f"{number:03d}.parquet",
            row_group_size=rows_per_group,
        )  # fmt: skip
    return folder


def bits(table):
    sums = {fold: sums.tobytes() for fold, sums in table.sums.items()}
    return sums, table.extent.tolist(), table.tally, table.blocks


# Counting.

LAYOUTS = {
    # Rows of all plants in every row group, a fold for each row group.
    "mixed": (False, 8, 300, None),
    # The same with too few row groups: runs of each plant's own rows.
    "mixed, few row groups": (False, 1, 100_000, None),
    "one plant after the other": (True, 8, 300, None),
    "one plant after the other, few row groups": (True, 2, 100_000, None),
    "by day": (False, 4, 300, "logged_at:day"),
    "by day, one plant after the other": (True, 4, 100_000, "logged_at:day"),
}


@pytest.mark.parametrize("layout", LAYOUTS)
@pytest.mark.parametrize(
    ("weight", "count", "scale"),
    [(None, None, "linear"), (None, "repeats", "log"), ("sharpness", "repeats", "linear")],
)
def test_a_unit_among_others_has_the_bits_of_its_rows_alone(tmp_path, layout, weight, count, scale):
    together, files, rows_per_group, block = LAYOUTS[layout]
    table = readings(12_000, 5, together=together)
    data = write(tmp_path / "data", table, files, rows_per_group)
    columns = Columns(X, Y, weight, count, block=None if block is None else "logged_at")
    where = "sharpness > 0.3"
    reading = Reading(where=where, threads=2, scale=scale, block=block)
    with open_source(data, columns, where=where, units=("plant",)) as source:
        counted = count_fleet(source, reading, Grouping.parse("plant"))
    tables = counted.units.tables()
    assert set(tables) == {(f"plant {n}",) for n in (0, 1, 3, 4)} | {(None,)}
    used = 0
    for (plant,), mine in tables.items():
        of_plant = "plant IS NULL" if plant is None else f"plant = '{plant}'"
        with open_source(data, columns, where=f"{where} AND {of_plant}") as source:
            alone, _ = count_pass(source, mine.plan, replace(reading, where=source.where))
        assert len(alone.sums) > 3
        # The row filter of the one run is the key of the other.
        assert mine.tally.read == alone.tally.read - alone.tally.filtered
        alone.tally.read, alone.tally.filtered = mine.tally.read, 0
        assert bits(mine) == bits(alone)
        used += mine.tally.used
    assert used == counted.units.tally.used == counted.together.table.tally.used
    assert counted.units.tally == counted.together.table.tally
    assert counted.units.tally.read == 12_000
    assert counted.together.passes == 1


def test_each_layout_is_what_its_name_says(tmp_path):
    found = {}
    for name, (together, files, rows_per_group, block) in LAYOUTS.items():
        data = write(tmp_path / name, readings(12_000, 5, together=together), files, rows_per_group)
        columns = Columns(X, Y, block=None if block is None else "logged_at")
        with open_source(data, columns, units=("plant",)) as source:
            counted = count_fleet(source, Reading(block=block), Grouping.parse("plant"))
        found[name] = counted.layout.folds_per_task
    assert found["mixed"] == 1
    assert found["mixed, few row groups"] == 32
    assert found["one plant after the other"] in (4, 32)
    assert found["by day"] == 32


@pytest.mark.parametrize("layout", LAYOUTS)
def test_threads_change_no_bit_of_any_curve(tmp_path, layout):
    together, files, rows_per_group, block = LAYOUTS[layout]
    data = write(tmp_path / "data", readings(6000, 3, together=together), files, rows_per_group)
    made = [
        make_fleet(
            data, X, Y, by="plant", reading=Reading(threads=threads, block=block),
            smoothing=Smoothing(widths=12), band=Band(points=20),
        )
        for threads in (1, 3)
    ]  # fmt: skip
    assert made[0].table().equals(made[1].table(), check_metadata=True)


@pytest.mark.parametrize("layout", LAYOUTS)
def test_sums_added_up_early_or_late_are_the_same_bits(tmp_path, monkeypatch, layout):
    """Groups of tasks keep their own sums while memory allows, and are added up in order."""
    together, files, rows_per_group, block = LAYOUTS[layout]
    data = write(tmp_path / "data", readings(9000, 4, together=together), files, rows_per_group)
    columns = Columns(X, Y, block=None if block is None else "logged_at")
    base = replace(
        Plan.simple(-5.0, 28.0, bins=64, folds=8), columns=columns, rows_per_run=50, block=block
    )
    found = []
    for cap in (1 << 30, 1 << 18, 1):
        monkeypatch.setattr(fleetpass, "MEMORY_CAP_BYTES", cap)
        with open_source(data, columns, units=("plant",)) as source:
            counted = count_units(
                source, base, lambda key: base, Reading(block=block), Grouping.parse("plant")
            )
            groups = len(task_groups(source.tasks, base))
        found.append((len(counted._parts), counted))
    assert found[0][0] == groups
    assert found[2][0] == 1
    # Asked twice, a table is still the same.
    tables = [counted.tables() for _, counted in (*found, found[0])]
    for other in tables[1:]:
        assert {k: bits(v) for k, v in other.items()} == {k: bits(v) for k, v in tables[0].items()}
    pooled = [counted.pooled().total()[:, 0].tolist() for _, counted in found]
    assert pooled[0] == pooled[1] == pooled[2]


def test_chunks_of_any_length_give_the_same_bits(tmp_path, monkeypatch):
    from fastsmooth.source import Source

    data = write(tmp_path / "data", readings(6000, 4), 2, 1000)

    def counted():
        with open_source(data, Columns(X, Y), units=("plant",)) as source:
            base = replace(
                Plan.simple(-5.0, 28.0, bins=64, folds=4), columns=source.columns,
                rows_per_run=70,
            )  # fmt: skip
            found = count_units(
                source, base, lambda key: base, Reading(threads=1), Grouping.parse("plant"),
                sampled_rows=5,
            )  # fmt: skip
        samples = {key: [one.tolist() for one in found.sample(key)] for key in found.keys}
        return {key: bits(table) for key, table in found.tables().items()}, samples

    whole = counted()
    chunks = Source.chunks
    monkeypatch.setattr(Source, "chunks", lambda self, task, rows=0: chunks(self, task, 37))
    assert counted() == whole


def test_the_first_rows_of_each_unit_in_each_task_are_kept(tmp_path):
    table = readings(3000, 4)
    data = write(tmp_path / "data", table, 3, 1000)
    base = Plan.simple(-5.0, 28.0, bins=64, folds=4)
    with open_source(data, Columns(X, Y), units=("plant",)) as source:
        found = count_units(
            source, base, lambda key: base, Reading(), Grouping.parse("plant"), sampled_rows=6
        )
    rows = table.to_pylist()
    for key in found.keys:
        x, run, place = [], [], []
        for task in range(3):
            mine = [
                row for row in rows[1000 * task : 1000 * task + 1000]
                if row["plant"] == key[0] and row[X] is not None and row[Y] is not None
            ]  # fmt: skip
            for number, row in enumerate(mine[:6]):
                if math.isfinite(row[X]) and math.isfinite(row[Y]):
                    x.append(row[X])
                    run.append(task)
                    place.append(number)
        sample = found.sample(key)
        assert sample.x.tolist() == x
        assert sample.run.tolist() == run
        assert sample.place.tolist() == place


def test_units_of_a_plan_that_is_none_are_left_out(tmp_path):
    data = write(tmp_path / "data", readings(3000, 4), 1, 1000)
    base = Plan.simple(-5.0, 28.0, bins=64, folds=4)
    wanted = ("plant 1",)
    with open_source(data, Columns(X, Y), units=("plant",)) as source:
        found = count_units(source, base, {wanted: base}.get, Reading(), Grouping.parse("plant"))
        everything = count_units(source, base, lambda key: base, Reading(), Grouping.parse("plant"))
    assert found.keys == [wanted]
    assert bits(found.table(wanted)) == bits(everything.table(wanted))


# Planning.


def simple_plan(folds=32, block=None, weight=None):
    plan = Plan.simple(0.0, 10.0, folds=folds)
    return replace(plan, block=block, columns=Columns("x", "y", weight))


def bytes_of(layout, slots=8):
    return layout.units * layout.bins * layout.folds * slots * 8


@pytest.mark.parametrize("units", [1, 7, 48, 500, 3000, 6000])
@pytest.mark.parametrize("weight", [None, "w"])
@pytest.mark.parametrize("block", [None, "day"])
def test_tables_stay_within_the_cap(units, weight, block):
    plan = simple_plan(block=block, weight=weight)
    layout = lay_out(plan, units, units, 64, 50_000_000, 2)
    assert bytes_of(layout, 16 if weight else 8) <= fleetpass.MEMORY_CAP_BYTES
    assert 32 <= layout.bins <= 8192
    assert layout.folds >= (16 if block else 8)


def test_more_units_get_fewer_bins_then_fewer_folds():
    layouts = [lay_out(simple_plan(), n, n, 64, 10**8, 2) for n in (2, 48, 500, 4000, 12_000)]
    bins, folds = [one.bins for one in layouts], [one.folds for one in layouts]
    assert bins == sorted(bins, reverse=True)
    assert folds == sorted(folds, reverse=True)
    assert bins[0] == 8192
    assert folds[0] == folds[1] == 32
    assert folds[-1] == 8


def test_the_layout_does_not_depend_on_the_threads():
    for block in (None, "day"):
        one, many = (
            lay_out(simple_plan(block=block), 300, 300, 9, 10**7, threads) for threads in (1, 64)
        )
        assert replace(one, workers=0) == replace(many, workers=0)
        assert 1 <= many.workers <= 64


@pytest.mark.parametrize("block", [None, "day"])
def test_ten_thousand_units_find_room(block):
    layout = lay_out(simple_plan(block=block), 12_500, 4000, 50, 50_000_000, 2)
    assert bytes_of(layout) <= fleetpass.MEMORY_CAP_BYTES
    assert layout.bins >= (32 if block else 64)


@pytest.mark.parametrize("rows_per_unit", [1e4, 1e6])
def test_the_bins_that_widths_will_ask_for_are_guessed(rows_per_unit):
    """A typical unit's width on so many rows spans enough of the bins, without very many more."""
    rows = cases.make_rows("uniform", 40_000, 1)
    code = np.arange(40_000) % 4
    sample = Sample(rows.wet_bulb_c, rows.power_kw + 50.0 * code, code, np.arange(40_000))
    plan = Plan.simple(-5.0, 28.0)
    shape = SHAPES["biweight"]
    bins = likely_bins(sample, code, plan, shape, "local-linear", rows_per_unit)
    one = cases.make_rows("uniform", int(rows_per_unit), 2)
    own = make_curve(one.columns(), X, Y, smoothing=Smoothing(engine="binned"))
    spanned = own.bandwidth / (33.0 / bins)
    assert shape.fewest_bins_per_bandwidth <= spanned < 8 * shape.fewest_bins_per_bandwidth


def test_a_sample_too_small_tells_no_bins():
    few = Sample(np.arange(9.0), np.arange(9.0), np.zeros(9, np.int64), np.arange(9))
    nothing = likely_bins(
        few, np.zeros(9, np.int64), Plan.simple(0.0, 9.0), SHAPES["biweight"], "local-linear", 1e6
    )
    assert nothing is None
    same = Sample(np.ones(2000), np.arange(2000.0), np.zeros(2000, np.int64), np.arange(2000))
    assert (
        likely_bins(
            same, np.zeros(2000, np.int64), Plan.simple(0.0, 9.0), SHAPES["biweight"],
            "local-linear", 1e6,
        )
        is None
    )  # fmt: skip


@given(width=st.floats(1e-5, 1e3))
def test_a_width_of_the_callers_decides_the_bins(width):
    shape = SHAPES["biweight"]
    bins = bins_for_width(width, 0.0, 10.0, shape)
    wanted = 1.1 * shape.fewest_bins_per_bandwidth * 10.0 / width
    assert bins >= min(wanted, 1 << 30)
    assert bins <= max(1.26 * wanted, 64)
    # They merge two into one until few are left.
    assert bins % 16 == 0
    while bins > 128:
        assert bins % 2 == 0
        bins //= 2


def test_no_width_asks_for_endless_bins():
    assert bins_for_width(5e-324, 0.0, 10.0, SHAPES["biweight"]) == 1 << 30


def test_far_too_many_units_are_refused():
    with pytest.raises(InputError) as caught:
        lay_out(simple_plan(), 100_000, 100_000, 64, 10**9, 2)
    assert str(caught.value) == (
        "--by must tell fewer units apart, but there may be 100,000, too many for 1 GiB of "
        "memory; leave out a column, or make some units at a time with --where."
    )


def test_more_units_than_the_sample_showed_are_planned_anew(tmp_path):
    """The sampled starts of row groups show one plant; a thousand others come later."""
    n = 16 * 5000
    rng = np.random.default_rng(0)
    number = rng.integers(0, 1000, n)
    number[np.arange(n) % 5000 < 4200] = 0
    table = pa.table({X: rng.uniform(0.0, 9.0, n), Y: rng.normal(size=n), "plant": number})
    data = write(tmp_path / "data", table, 16, 5000)
    with open_source(data, Columns(X, Y), units=("plant",)) as source:
        counted = count_fleet(source, Reading(), Grouping.parse("plant"))
    assert counted.sample.units == 1
    assert counted.together.passes > 1
    assert len(counted.units.keys) == np.unique(number).size
    assert counted.units.tally.used == n
    for key in counted.units.keys[::50]:
        assert counted.units.table(key).tally.used == (number == key[0]).sum()


def test_two_thousand_units_are_counted_each_for_itself():
    units, rows = 2000, 20
    rng = np.random.default_rng(12)
    plant = rng.permutation(np.repeat(np.arange(units), rows))
    x, y = rng.uniform(0.0, 10.0, plant.size), rng.normal(size=plant.size)
    with open_source({X: x, Y: y, "plant": plant}, Columns(X, Y), units=("plant",)) as source:
        counted = count_fleet(source, Reading(), Grouping.parse("plant"))
    assert len(counted.units.keys) == units
    order = np.argsort(plant, kind="stable").reshape(units, rows)
    for key, table in counted.units.tables().items():
        mine = order[key[0]]
        assert table.tally.used == rows
        assert table.extent.tolist() == [x[mine].min(), x[mine].max()]
        total = table.total()
        shifted = total[:, 3] + total[:, 0] * table.plan.pilot_per_bin
        assert shifted.sum() == pytest.approx(y[mine].sum(), abs=1e-9)


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


# Curves.


@pytest.fixture(scope="module")
def odd():
    """Two ordinary plants, and units of every kind of trouble."""
    rng = np.random.default_rng(7)
    parts = {
        "north": (rng.uniform(0.0, 25.0, 4000), None),
        "south": (rng.uniform(0.0, 25.0, 3000), None),
        "far": (rng.uniform(500.0, 501.0, 3000), None),
        "stuck": (np.full(40, 3.0), np.arange(40.0)),
        "one": (np.array([4.0]), np.array([1.0])),
        "two": (np.array([1.0, 2.0]), np.array([1.0, 2.0])),
        "blind": (np.linspace(0.0, 9.0, 5), np.full(5, math.nan)),
        "huge": (np.linspace(0.0, 20.0, 50), np.full(50, 1e200)),
        "five": (np.array([1.0, 5.0, 9.0, 14.0, 20.0]), np.arange(5.0)),
    }
    x = np.concatenate([one for one, _ in parts.values()])
    y = np.concatenate(
        [np.sin(a) + rng.normal(0.0, 0.3, a.size) if b is None else b for a, b in parts.values()]
    )
    plant = np.repeat(list(parts), [one.size for one, _ in parts.values()])
    order = rng.permutation(x.size)
    return {X: x[order], Y: y[order], "plant": pa.array(plant[order].tolist())}


@pytest.fixture(scope="module")
def made(odd):
    return make_fleet(odd, X, Y, by="plant")


def test_units_with_too_little_data_say_so(made):
    told = {unit.key[0]: (unit.status, unit.reason, unit.rows) for unit in made.units}
    assert told == {
        "blind": ("no usable rows", "Every row was refused (5 y NaN).", 0),
        "far": (MADE, None, 3000),
        "five": (MADE, None, 5),
        "huge": (
            "data refused",
            "--y must stay below 1e70 in size, but 'power_kw' goes beyond it; leave such rows "
            "out with --where 'ABS(power_kw) < 1e70'.",
            50,
        ),
        "north": (MADE, None, 4000),
        "one": ("x constant", "There is one row only.", 1),
        "south": (MADE, None, 3000),
        "stuck": ("x constant", "wet_bulb_c is the same in all 40 rows.", 40),
        "two": (
            "too few distinct x",
            "2 rows hold fewer than 4 distinct wet_bulb_c that bins tell apart.",
            2,
        ),
    }
    assert list(told) == sorted(told)
    assert {key[0] for key in made.curves} == {"far", "five", "north", "south"}
    assert made.status_counts()[MADE] == 4


def test_a_block_that_never_changes_is_a_status():
    n = 400
    rng = np.random.default_rng(8)
    x = rng.uniform(0.0, 10.0, n)
    plant = np.array(["north", "south"])[np.arange(n) % 2]
    day = np.where(plant == "north", 0, np.arange(n) // 20)
    data = {"x": x, "y": np.sin(x) + rng.normal(size=n), "plant": plant, "day": day}
    found = make_fleet(
        data, "x", "y", by="plant", reading=Reading(block="day"), smoothing=Smoothing(widths=8)
    )
    assert [(unit.key[0], unit.status) for unit in found.units] == [
        ("north", "one block only"), ("south", MADE),
    ]  # fmt: skip
    assert found.units[0].reason.startswith("day is the same in all 200 rows")


def test_a_unit_of_a_narrow_range_is_counted_again_with_bins_of_its_own(made):
    far, north = (made.curves[(name,)] for name in ("far", "north"))
    assert far.trace["engine"]["passes"] == made.trace["engine"]["passes"] == 2
    assert far.trace["plan"]["origin"] == far.x[0]
    assert far.trace["engine"]["bins_per_bandwidth"] >= 32
    assert north.trace["engine"]["bins_per_bandwidth"] >= 32
    assert made.curves[("five",)].trace["engine"]["passes"] == 1


def test_each_curve_is_close_to_that_of_its_unit_alone(odd, made):
    for name in ("north", "south", "far"):
        mine = made.curves[(name,)]
        alone = make_curve(
            odd, X, Y, reading=Reading(where=f"plant = '{name}'"),
            smoothing=Smoothing(engine="binned"),
        )  # fmt: skip
        assert mine.bandwidth == pytest.approx(alone.bandwidth, rel=0.02)
        assert mine.x.tolist() == alone.x.tolist()
        away = np.abs(mine.estimate - alone.estimate) / alone.std_error
        assert np.nanmax(away) < 0.05
        assert mine.trace["rows"]["used"] == alone.trace["rows"]["used"]
        assert mine.trace["unit"] == [name]
        assert mine.settings["by"] == ["plant"]
        assert mine.density.rows.sum() == alone.density.rows.sum()
        assert mine.density.sampled.sum() > 0


def test_neighbouring_rows_of_a_unit_are_compared_though_others_lie_between():
    n, plants = 40_000, 4
    rng = np.random.default_rng(9)
    noise = np.empty((n // plants, plants))
    noise[0] = rng.normal(size=plants)
    for row in range(1, n // plants):
        noise[row] = 0.9 * noise[row - 1] + math.sqrt(1 - 0.81) * rng.normal(size=plants)
    x = rng.uniform(0.0, 10.0, n)
    data = {"x": x, "y": np.sin(x) + noise.ravel(), "plant": np.arange(n) % plants}
    found = make_fleet(data, "x", "y", by="plant", smoothing=Smoothing(widths=8))
    for curve in found.curves.values():
        assert curve.trace["serial"]["lag_one"] == pytest.approx(0.9, abs=0.1)
        assert "neighbouring rows alike" in [caution.code for caution in curve.cautions]


def test_far_outliers_are_left_out_for_all_and_told(odd):
    x = np.append(odd[X], [-9999.0, 1e6])
    plant = pa.array([*odd["plant"].to_pylist(), "north", "south"])
    data = {X: np.where(x > 400.0, 20.0, x), Y: np.append(odd[Y], [0.0, 0.0]), "plant": plant}
    data[X][-1] = 1e6
    found = make_fleet(data, X, Y, by="plant", smoothing=Smoothing(widths=8))
    assert [caution.code for caution in found.cautions] == ["range trimmed"]
    assert found.curves[("north",)].trace["rows"]["refused"] == {"x below range": 1}
    assert found.curves[("south",)].trace["rows"]["refused"] == {"x above range": 1}


def test_many_small_units():
    units, rows = 200, 30
    rng = np.random.default_rng(10)
    n = units * rows
    plant = rng.permutation(np.repeat(np.arange(units), rows))
    x = rng.uniform(0.0, 10.0, n)
    y = 0.5 * x + plant % 7 + rng.normal(0.0, 0.1, n)
    found = make_fleet(
        {"x": x, "y": y, "plant": plant}, "x", "y", by="plant",
        smoothing=Smoothing(bandwidth=20.0, widths=8), band=Band(points=4, keep_folds=False),
    )  # fmt: skip
    assert [unit.key[0] for unit in found.units] == list(range(units))
    assert {unit.rows for unit in found.units} == {rows}
    assert found.status_counts()[MADE] == units
    for unit in found.units[::17]:
        mine = plant == unit.key[0]
        slope, level = np.polyfit(x[mine], y[mine], 1)
        line = level + slope * unit.curve.x
        assert unit.curve.estimate == pytest.approx(line, abs=0.05)


# One width for all.


def test_a_shared_width_is_the_best_for_all_together(odd):
    data = {
        name: np.asarray(odd[name])[np.isin(np.asarray(odd["plant"]), ["north", "south"])]
        for name in (X, Y, "plant")
    }
    found = make_fleet(data, X, Y, by="plant", shared_bandwidth=True)
    told = found.trace["shared_bandwidth"]
    assert {curve.bandwidth for curve in found.curves.values()} == {told["bandwidth"]}
    assert told["units_judging"] == 2
    assert told["rows_judging"] == 7000
    # The same sum from each unit's own table, by hand.
    bins = found.trace["engine"]["bins"]
    with open_source(data, Columns(X, Y), units=("plant",)) as source:
        counted = count_fleet(
            source, Reading(), Grouping.parse("plant"), likely=lambda *about: bins
        )
    widths, loss = np.array(told["widths"]), 0.0
    for table in counted.units.tables().values():
        values = (
            search_table(table, Pyramid(table), SHAPES["biweight"], bounds=(widths[0], widths[-1]))
            .trails["local-linear"]
            .leave_one_out
        )
        loss = loss + table.tally.used * values / values.min()
    loss = loss / 7000
    assert told["relative_loss"] == pytest.approx(loss.tolist(), rel=1e-12)
    best = int(np.argmin(loss))
    assert widths[best - 1] < told["bandwidth"] < widths[best + 1]
    own = make_fleet(data, X, Y, by="plant")
    chosen = sorted(curve.bandwidth for curve in own.curves.values())
    assert chosen[0] * 0.99 <= told["bandwidth"] <= chosen[1] * 1.01


def test_a_unit_too_thin_to_judge_gets_the_shared_width_too(odd):
    found = make_fleet(odd, X, Y, by="plant", shared_bandwidth=True)
    told = found.trace["shared_bandwidth"]
    assert told["units_judging"] == 3
    assert {key[0] for key in found.curves} == {"far", "five", "north", "south"}
    assert len({curve.bandwidth for curve in found.curves.values()}) == 1


@pytest.mark.parametrize("criterion", ["gcv", "aicc", "plug-in"])
def test_every_criterion_can_choose_for_all(odd, criterion):
    keep = np.isin(np.asarray(odd["plant"]), ["north", "south"])
    data = {name: np.asarray(odd[name])[keep] for name in (X, Y, "plant")}
    smoothing = Smoothing(criterion=criterion, widths=24)
    own = make_fleet(data, X, Y, by="plant", smoothing=smoothing)
    both = make_fleet(data, X, Y, by="plant", smoothing=smoothing, shared_bandwidth=True)
    chosen = sorted(curve.bandwidth for curve in own.curves.values())
    shared = both.trace["shared_bandwidth"]["bandwidth"]
    assert chosen[0] * 0.97 <= shared <= chosen[1] * 1.03


def test_a_shared_width_needs_somebody_to_judge(odd):
    keep = np.isin(np.asarray(odd["plant"]), ["two", "five"])
    data = {name: np.asarray(odd[name])[keep] for name in (X, Y, "plant")}
    data["plant"] = np.where(np.arange(7) < 4, "first", "second")
    data[X] = np.array([1.0, 1.0, 2.0, 2.0, 3.0, 4.0, 4.0])
    with pytest.raises(InputError) as caught:
        make_fleet(data, X, Y, by="plant", shared_bandwidth=True)
    assert str(caught.value) == (
        "--shared-bandwidth must find a unit with rows enough to judge a width, but none of 2 "
        "has; give --bandwidth."
    )


def test_the_lowest_point_between_grid_widths():
    grid = np.geomspace(0.1, 10.0, 21)
    loss = 1.0 + (np.log(grid) - math.log(0.7)) ** 2
    assert lowest_width(grid, loss) == pytest.approx(0.7, rel=1e-9)
    loss[:3] = math.inf
    assert lowest_width(grid, np.where(grid < 0.72, math.inf, loss)) == grid[9]
    assert lowest_width(grid, -grid) == grid[-1]
    with pytest.raises(InputError, match="find a width at which all units can be judged"):
        lowest_width(grid, np.full(21, math.inf))


# Files.


def test_a_saved_fleet_comes_back_to_the_last_bit(made, tmp_path):
    for suffix in (".parquet", ".arrow", ".json"):
        made.save(tmp_path / f"f{suffix}")
        again = load_curve(tmp_path / f"f{suffix}")
        assert again.table().equals(made.table(), check_metadata=True)
        for key, curve in made.curves.items():
            assert again.curves[key].table().equals(curve.table(), check_metadata=True)
            assert again.curves[key].to_dict() == curve.to_dict()
        for one, other in zip(made.units, again.units, strict=True):
            assert repr(one) == repr(other)
            assert one.reason == other.reason
            assert one.bandwidth == other.bandwidth
            assert one.caution_codes == other.caution_codes


def test_a_csv_file_holds_the_table_alone(made, tmp_path):
    made.save(tmp_path / "f.csv")
    lines = (tmp_path / "f.csv").read_text().splitlines()
    assert lines[0].startswith('"plant","x","estimate"')
    assert "facts" not in lines[0]
    # A unit without a curve is a row that says so, not a gap.
    assert '"blind",,,,,,,,,,"no usable rows"' in lines
    assert len(lines) == 1 + 4 * 256 + 5
    with pytest.raises(InputError, match="holds the table alone"):
        load_curve(tmp_path / "f.csv")


def test_the_table_joins_by_the_key_columns(made):
    table = made.table()
    north = table.filter(pa.compute.equal(table["plant"], "north"))
    curve = made.curves[("north",)]
    assert north["estimate"].to_numpy().tolist() == curve.estimate.tolist()
    assert north["status"].to_pylist() == curve.statuses
    assert north["x"].to_numpy().tolist() == curve.x.tolist()


def test_rows_that_were_taken_out_are_noticed(made, tmp_path):
    whole = made.table()
    pq.write_table(whole.slice(5), tmp_path / "cut.parquet")
    with pytest.raises(InputError) as caught:
        load_curve(tmp_path / "cut.parquet")
    assert "must be as fastsmooth wrote it" in str(caught.value)
    pq.write_table(whole.slice(0, 400), tmp_path / "less.parquet")
    with pytest.raises(InputError, match="units"):
        load_curve(tmp_path / "less.parquet")
    kept = pa.array(np.arange(whole.num_rows) != 20)
    pq.write_table(whole.filter(kept), tmp_path / "one.parquet")
    with pytest.raises(InputError, match="points"):
        load_curve(tmp_path / "one.parquet")


def test_another_format_is_refused(made, tmp_path):
    table = made.table()
    told = json.loads(table.schema.metadata[b"fastsmooth.fleet"])
    told["format"] = 99
    pq.write_table(
        table.replace_schema_metadata({b"fastsmooth.fleet": json.dumps(told)}),
        tmp_path / "new.parquet",
    )
    with pytest.raises(InputError, match=r"must have format 1, but .* has format 99"):
        load_curve(tmp_path / "new.parquet")


def test_data_are_never_written_over(tmp_path):
    data = write(tmp_path / "data", readings(900, 2), 1, 900)
    found = make_fleet(data, X, Y, by="plant", smoothing=Smoothing(widths=8))
    with pytest.raises(InputError, match="must leave the data alone"):
        found.save(data / "000.parquet")


def test_key_columns_never_clash_with_those_of_a_curve():
    n = 300
    rng = np.random.default_rng(11)
    x = rng.uniform(0.0, 10.0, n)
    status = np.array(["run", "idle"])[np.arange(n) % 2]
    found = make_fleet(
        {"a": x, "y": np.sin(x), "status": status, "x": np.arange(n) % 2}, "a", "y",
        by=["status", "x"], smoothing=Smoothing(widths=8),
    )  # fmt: skip
    assert found.table().column_names[:3] == ["unit_status", "unit_x", "x"]
    assert column_of("plant") == "plant"
    assert [unit.key for unit in found.units] == [("idle", 1), ("run", 0)]


def test_curves_are_opened_when_asked_for(made):
    unit = made.units[1]
    assert unit.curve is unit.curve
    assert units_of(made)[("far",)].bandwidth == unit.bandwidth
    assert ("nobody",) not in made.curves
    one = unit.curve
    assert units_of(one) == {(): one}
    assert Unit(("a",), MADE, None, 3, one).curve is one
    assert Unit(("a",), MADE, None, 3, one).bandwidth == one.bandwidth
    assert repr(unit).startswith("Unit(far: made, 3")


@pytest.mark.parametrize(
    "kind",
    [
        pa.string(), pa.int8(), pa.timestamp("us"), pa.timestamp("ns", "Europe/Madrid"),
        pa.decimal128(10, -2), pa.binary(4), pa.duration("ms"), pa.time64("us"), pa.null(),
        pa.bool_(), pa.date32(), pa.large_string(), pa.float64(),
    ],
)  # fmt: skip
def test_types_are_read_back_from_their_names(kind):
    assert arrow_type(str(kind)) == kind


@pytest.mark.parametrize(
    "plain",
    [
        {}, [], None, [1.0] * 20, [1] * 20, [1.0, None] * 10, [[1.0, 2.0]] * 9, [[1, 2]] * 9,
        [True] * 20, [1, 2.0] * 10, ["a"] * 20, [None] * 20, [2**70] * 9, [[]] * 9,
        [[1.0], [1.0, 2.0]] * 8, [[None, 1.0]] * 9, {"a": {"b": [0.1] * 8}, "c": [-0.0] * 9},
        [5e-324] * 8, [[[1.0]] * 9] * 9,
    ],
)  # fmt: skip
def test_plain_data_come_back_as_they_were_packed(plain):
    again = unpack(pack(plain))
    assert again == plain
    assert json.dumps(again) == json.dumps(plain)


def test_packed_data_that_are_cut_short_are_noticed():
    with pytest.raises(ValueError, match="cut short"):
        unpack(b"abc")


# Refusals.


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (
            {"by": "plnt"},
            "--by must name a column of DATA, but 'plnt' is none; use 'plant'.",
        ),
        ({"by": []}, "--by must name a column of DATA, but it is []; name one or several columns, "
                     "as in --by plant."),
        ({"by": ["plant", "plant"]}, "--by must name each column once, but it is plant, plant; "
                                     "leave out the double."),
        ({"by": "plant:day"}, "--by must name a time column when a unit is given, but 'plant' "
                              "holds string; write --by plant."),
        ({"by": "plant", "smoothing": Smoothing(estimator="nearest")},
         "--estimator nearest must be left out with --by, but it needs all rows in memory; make "
         "one unit at a time with --where, or leave it out."),
        ({"by": "plant", "smoothing": Smoothing(engine="exact")},
         "--engine exact must be left out with --by, but it needs all rows in memory; make "
         "one unit at a time with --where, or leave it out."),
        ({"by": "plant", "smoothing": Smoothing(bandwidth=2.0), "shared_bandwidth": True},
         "--shared-bandwidth must be left out with --bandwidth, but a width is given; leave out "
         "one of them."),
        ({"by": "plant", "reading": Reading(strict=True)},
         "DATA must hold usable rows only with --strict, but some were refused (5 y NaN); clean "
         "the data, filter with --where, or leave --strict out."),
        ({"by": "plant", "reading": Reading(where="plant = 'one' OR plant = 'two'")},
         "DATA must hold a unit with rows enough for a curve, but none of 2 has (the first, one: "
         "x constant); check --by, --where and the columns."),
    ],
)  # fmt: skip
def test_refusals(odd, options, message):
    with pytest.raises(InputError) as caught:
        make_fleet(odd, X, Y, **options)
    assert str(caught.value) == message


def test_a_key_column_of_two_kinds_is_refused(tmp_path):
    for name, plant in (("a", ["north"] * 20), ("b", list(range(20)))):
        table = pa.table({"x": np.arange(20.0), "y": np.arange(20.0), "plant": plant})
        pq.write_table(table, tmp_path / f"{name}.parquet")
    with pytest.raises(InputError) as caught:
        make_fleet(tmp_path, "x", "y", by="plant")
    assert str(caught.value) == (
        "--by must name a column of one kind in every file, but 'plant' holds text in some and "
        "integers in others; write the files alike."
    )


# Commands.


def test_the_command_writes_one_table_and_tells_the_units(tmp_path, capsys):
    data = write(tmp_path / "data", readings(4000, 3), 2, 500)
    out = tmp_path / "curves.parquet"
    arguments = ["curve", str(data), "--x", X, "--y", Y, "--by", "plant", "--out", str(out)]
    assert main(arguments) == 0
    told = capsys.readouterr().out
    assert f"{Y} against {X}, by plant" in told
    assert "units      3: 3 made" in told
    assert "plant 0" in told
    assert "each unit's own, chosen by" in " ".join(told.split())
    assert f"wrote      {out}" in told
    assert len(load_curve(out).curves) == 3
    assert main(["info", str(out)]) == 0
    assert "units      3: 3 made" in capsys.readouterr().out
    assert main([*arguments, "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert [unit["key"] for unit in facts["units"]] == [["plant 0"], ["plant 1"], [None]]
    assert facts["status_counts"][MADE] == 3
    assert facts["written"] == [str(out)]
    assert main([*arguments, "--shared-bandwidth", "--quiet"]) == 0
    assert capsys.readouterr().out == ""
    assert main([*arguments, "--shared-bandwidth"]) == 0
    assert "for all, chosen by leave-one-out summed over 3 units" in " ".join(
        capsys.readouterr().out.split()
    )


def test_the_summary_holds_odd_names_on_one_line_each():
    from fastsmooth.fleetwords import fleet_lines

    rng = np.random.default_rng(4)
    names = ["a" * 300, "", "null", "line\nbreak", " led", None, "ö/ü"]
    n = 60 * len(names)
    x = rng.uniform(0.0, 10.0, n)
    plant = [names[row % len(names)] for row in range(n)]
    data = pa.table({"x": x, "y": x + rng.normal(0.0, 0.1, n), "plant": pa.array(plant)})
    made = make_fleet(data, "x", "y", by="plant", smoothing=Smoothing(bandwidth=3.0))
    lines = [one for one in fleet_lines(made) if " 60 rows  bandwidth 3" in one]
    assert [one[2:34].strip() for one in lines] == [
        '""', '" led"', "a" * 16 + "…" + "a" * 15, "line break", '"null"', "ö/ü", "null",
    ]  # fmt: skip
    assert {one.index(" rows  bandwidth") for one in lines} == {49}


def test_the_summary_tells_units_without_a_curve(made):
    from fastsmooth.fleetwords import caution_counts, fleet_lines

    text = "\n".join(fleet_lines(made))
    assert (
        "units      9: 4 made, 1 no usable rows, 2 x constant, 1 too few distinct x, 1 data refused"
    ) in text
    assert "no curve, x constant: wet_bulb_c is the same in all 40 rows." in text
    counts = caution_counts(made)
    assert counts["mostly thin"] == 1
    assert "cautions   1 unit: mostly thin" in text


@pytest.mark.parametrize(
    ("more", "message"),
    [
        (["--by", "plant", "--plot", "a.png"], "--plot must be left out with --by, but it is "
         "'a.png'; make one unit's curve with --where for it."),
        (["--shared-bandwidth"], "--shared-bandwidth must come with --by, but there is one unit; "
         "name what tells units apart, as in --by plant."),
    ],
)  # fmt: skip
def test_the_command_refuses(tmp_path, capsys, monkeypatch, more, message):
    monkeypatch.chdir(tmp_path)
    data = write(tmp_path / "data", readings(900, 2), 1, 900)
    assert main(["curve", str(data), "--x", X, "--y", Y, *more]) == 2
    assert capsys.readouterr().err == f"fastsmooth: {message}\n"
    assert not (tmp_path / "a.png").exists()
