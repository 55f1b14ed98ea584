"""Many units in one pass: the bits of each alone, whatever the layout; memory planned."""

import math
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pytest
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth import (
    Band,
    InputError,
    Reading,
    Smoothing,
    fleetpass,
    make_curve,
    make_fleet,
)
from fastsmooth.fleetpass import count_fleet, count_units, lay_out
from fastsmooth.grouping import Grouping
from fastsmooth.likelybins import bins_for_width, likely_bins
from fastsmooth.passes import count_pass, task_groups
from fastsmooth.plan import Plan, Sample
from fastsmooth.source import Columns, open_source
from tests import cases
from tests.fleet_tools import LAYOUTS, X, Y, bits, readings, write

# Counting.


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
