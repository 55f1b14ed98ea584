"""A store holds the same sums as one pass over all files, however they came in."""

import math
import os
import shutil
from dataclasses import replace
from datetime import datetime, timedelta

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from fastsmooth import (
    Band,
    InputError,
    Reading,
    Smoothing,
    StoreSettings,
    make_curve,
    search_bandwidth,
)
from fastsmooth import open_store as opened
from fastsmooth import update_store as update
from fastsmooth.blocks import fold_of_number
from fastsmooth.fromtable import curve_from_table
from fastsmooth.manyunits import make_fleet
from fastsmooth.passes import count_pass
from fastsmooth.source import open_source
from fastsmooth.store.cells import Cells
from fastsmooth.store.grid import Grid, core_range, widen
from fastsmooth.store.opening import Window
from fastsmooth.store.periods import Period
from tests.store_tools import BEGIN, DAY, UNITS, write_day


@pytest.fixture(scope="module")
def days(tmp_path_factory):
    """Eight days of three units; a month ends after the fourth."""
    folder = tmp_path_factory.mktemp("days")
    return [write_day(folder, day) for day in range(8)]


def grow(store, paths, wanted):
    """Make a store file by file."""
    for path in paths:
        update(store, path, wanted)
    return opened(store)


def one_pass(plan, paths, block=None, where=None):
    """Count all files at once on a plan."""
    columns = replace(plan.columns, extra=(), block=None if block is None else "logged_at")
    with open_source([str(path) for path in paths], columns, where=where) as source:
        table, _ = count_pass(source, replace(plan, columns=columns, where=where),
                              Reading(block=block, where=where, threads=1))  # fmt: skip
    return table


def assert_same_sums(table, other):
    """All sums agree to 1e-12 of the size of their terms."""
    assert sorted(table.sums) == sorted(other.sums)
    for fold, sums in table.sums.items():
        theirs = other.sums[fold]
        weight = np.maximum(sums[:, [0]], 1.0)
        size = weight * max(1.0, float(np.abs(sums[:, 6] / weight[:, 0]).max()))
        assert (np.abs(sums - theirs) <= 1e-12 * size).all()
        assert (sums[:, 0] > 0).tolist() == (theirs[:, 0] > 0).tolist()


CASES = {
    "blocks": DAY,
    "runs": StoreSettings("wet_bulb_c", "power_kw"),
    "runs and periods": StoreSettings("wet_bulb_c", "power_kw", period="logged_at:day"),
    "weighted": replace(DAY, weight="precision", count="repeats"),
    "counted": replace(DAY, count="repeats"),
    "log": StoreSettings("wet_bulb_c", "power_kw", block="logged_at:day", scale="log"),
    "filtered": replace(DAY, where="power_kw > 21"),
}


@pytest.mark.parametrize("case", CASES)
def test_file_by_file_equals_one_pass(case, days, tmp_path):
    wanted = CASES[case]
    store = grow(tmp_path / "store", days, wanted)
    # In log x the first day spans them all.
    assert len(store.manifest.grids) > 1 or case == "log", "the range must grow on the way"
    table = store.tables()[()]
    block = wanted.block and "logged_at:day"
    whole = one_pass(store.plan, days, block, wanted.where)
    if block is None:
        assert table.plan.rows_per_run < 240
    assert_same_sums(table, whole)
    np.testing.assert_array_equal(table.extent, whole.extent)
    assert table.tally.to_dict() == whole.tally.to_dict()
    if block:
        assert len(table.blocks) == len(whole.blocks) == 8


def test_units_equal_each_unit_alone(days, tmp_path):
    store = grow(tmp_path / "store", days, UNITS)
    tables = store.tables()
    assert list(tables) == [("eastholm",), ("northmoor",), (None,)]
    for key, table in tables.items():
        where = "plant IS NULL" if key[0] is None else f"plant = '{key[0]}'"
        alone = one_pass(store.plan, days, "logged_at:day", where)
        assert_same_sums(table, alone)
        assert table.tally.used == alone.tally.used
    pooled = store.counted()[()].table
    assert_same_sums(pooled, one_pass(store.plan, days, "logged_at:day"))


def test_units_dealt_by_runs_get_the_folds_that_they_have_alone(days, tmp_path):
    wanted = StoreSettings("wet_bulb_c", "power_kw", by=("plant",), bins=1024)
    store = grow(tmp_path / "store", days, wanted)
    for key, table in store.tables().items():
        where = "plant IS NULL" if key[0] is None else f"plant = '{key[0]}'"
        assert_same_sums(table, one_pass(store.plan, days, None, where))


def test_many_files_at_once_and_one_by_one_hold_the_same_rows(days, tmp_path):
    update(tmp_path / "at once", [str(path) for path in days], UNITS)
    at_once = opened(tmp_path / "at once").tables()
    by_file = grow(tmp_path / "by file", days, UNITS).tables()
    for key, table in at_once.items():
        other = by_file[key]
        assert table.plan.width == other.plan.width
        assert table.tally.to_dict() == other.tally.to_dict()
        moved = round((table.plan.origin - other.plan.origin) / table.plan.width)
        mine = {int(n) + moved: table.total()[n, 0] for n in np.flatnonzero(table.total()[:, 0])}
        theirs = {int(n): other.total()[n, 0] for n in np.flatnonzero(other.total()[:, 0])}
        assert mine == theirs


def contents(store):
    """Every table file's name, which is made of its content, and the ledger but for the clock."""
    state = opened(store).manifest
    entries = [replace(entry, counted_at="", path=os.path.basename(entry.path))
               for entry in state.entries]  # fmt: skip
    return state.parts, entries, state.grids, state.basis


@pytest.mark.parametrize("wanted", [DAY, UNITS], ids=["alone", "units"])
def test_repeated_builds_and_any_threads_give_the_same_bits(days, tmp_path, wanted):
    for name, threads in (("a", 1), ("b", 3)):
        update(tmp_path / name, [str(path) for path in days[:5]], wanted, threads=threads)
        update(tmp_path / name, [str(path) for path in days[5:]], threads=threads)
    assert contents(tmp_path / "a") == contents(tmp_path / "b")


def test_adding_a_file_twice_changes_nothing(days, tmp_path):
    update(tmp_path / "store", str(days[0]), DAY)
    before = {name: os.stat(tmp_path / "store" / name).st_mtime_ns
              for name in os.listdir(tmp_path / "store") if name != "LOCK"}  # fmt: skip
    again = update(tmp_path / "store", [str(days[0])])
    assert not again.changed
    assert again.unchanged == (str(days[0]),)
    after = {name: os.stat(tmp_path / "store" / name).st_mtime_ns
             for name in os.listdir(tmp_path / "store") if name != "LOCK"}  # fmt: skip
    assert after == before
    assert opened(tmp_path / "store").manifest.generation == 1


def test_closed_periods_are_compacted(days, tmp_path):
    store = grow(tmp_path / "store", days, UNITS)
    january, february = store.manifest.periods
    parts = store.manifest.parts
    assert [part.files for part in parts if part.period == january] == [(0, 1, 2, 3)]
    assert [part.files for part in parts if part.period == february] == [(4,), (5,), (6,), (7,)]
    # Whatever was replaced is gone from the folder.
    names = sorted(os.listdir(tmp_path / "store" / "tables"))
    assert names == sorted(os.path.basename(part.path) for part in parts)


def test_many_parts_without_periods_are_merged_in_tiers(tmp_path):
    paths = [write_day(tmp_path, day, rows=20) for day in range(70)]
    wanted = StoreSettings("wet_bulb_c", "power_kw", range=(-30, 90), bins=256)
    update(tmp_path / "store", [str(path) for path in paths[:40]], wanted)
    store = grow(tmp_path / "store", paths[40:], None)
    assert sorted(part.tier for part in store.manifest.parts) == [0] * 6 + [1, 1]
    assert_same_sums(store.tables()[()], one_pass(store.plan, paths))


def test_a_changed_file_is_refused_and_can_be_replaced(tmp_path):
    paths = [write_day(tmp_path, day) for day in range(8)]
    grow(tmp_path / "store", paths, UNITS)
    write_day(tmp_path, 6, rows=300, seed=1)
    with pytest.raises(InputError) as refused:
        update(tmp_path / "store", [str(path) for path in paths])
    assert str(refused.value) == (
        f"DATA must be as they were when they were counted, but '{paths[6]}' changed since; count "
        f"them anew with --replace."
    )
    done = update(tmp_path / "store", str(paths[6]), replace_changed=True)
    assert (done.replaced, done.reread, done.rebuilt) == ((str(paths[6]),), (), ("2025-02",))
    fresh = grow(tmp_path / "fresh", paths, UNITS)
    mine = opened(tmp_path / "store")
    assert mine.plan == fresh.plan
    for key, table in mine.tables().items():
        assert_same_sums(table, fresh.tables()[key])
    assert mine.entries[6].rows == 300


def test_replacing_in_a_compacted_period_reads_its_other_files_again(tmp_path):
    paths = [write_day(tmp_path, day) for day in range(8)]
    grow(tmp_path / "store", paths, UNITS)
    write_day(tmp_path, 2, rows=300, seed=1)
    done = update(tmp_path / "store", str(paths[2]), replace_changed=True)
    assert done.replaced == (str(paths[2]),)
    assert done.reread == tuple(str(paths[n]) for n in (0, 1, 3))
    assert done.rebuilt == ("2025-01",)
    assert done.rows["read"] == 300, "rows that are only read again are not counted as new"
    fresh = grow(tmp_path / "fresh", paths, UNITS)
    for key, table in opened(tmp_path / "store").tables().items():
        assert_same_sums(table, fresh.tables()[key])


def test_replacing_needs_the_other_files_of_the_period(tmp_path):
    paths = [write_day(tmp_path, day) for day in range(8)]
    grow(tmp_path / "store", paths, UNITS)
    write_day(tmp_path, 2, rows=300, seed=1)
    paths[0].unlink()
    before = contents(tmp_path / "store")
    with pytest.raises(InputError) as refused:
        update(tmp_path / "store", str(paths[2]), replace_changed=True)
    assert str(refused.value) == (
        "--replace must find the other files of the periods that are made anew, but "
        f"'{paths[0]}' changed or went away; put them back."
    )
    assert contents(tmp_path / "store") == before


def test_files_that_vanished_are_told_and_stay_counted(tmp_path):
    paths = [write_day(tmp_path, day) for day in range(3)]
    grow(tmp_path / "store", paths, DAY)
    paths[1].unlink()
    done = update(tmp_path / "store", str(paths[2]))
    assert (done.changed, done.vanished) == (False, (str(paths[1]),))
    assert opened(tmp_path / "store").manifest.used == 3 * 240


def test_a_moved_file_is_not_counted_twice(tmp_path):
    paths = [write_day(tmp_path, day) for day in range(3)]
    grow(tmp_path / "store", paths, DAY)
    (tmp_path / "archive").mkdir()
    moved = tmp_path / "archive" / paths[1].name
    shutil.move(paths[1], moved)
    done = update(tmp_path / "store", str(moved))
    assert (done.moved, done.added, done.vanished) == ((str(moved),), (), ())
    store = opened(tmp_path / "store")
    assert store.manifest.used == 3 * 240
    assert store.entries[1].path == str(moved)
    assert not update(tmp_path / "store", str(moved)).changed


def test_a_renamed_file_is_not_counted_twice(tmp_path):
    paths = [write_day(tmp_path, day) for day in range(3)]
    os.utime(paths[1], ns=(1_700_000_000_123_456_789,) * 2)
    grow(tmp_path / "store", paths, DAY)
    renamed = tmp_path / "kept.parquet"
    paths[1].rename(renamed)
    done = update(tmp_path / "store", str(tmp_path))
    assert (done.moved, done.added, done.vanished) == ((str(renamed),), (), ())
    assert opened(tmp_path / "store").manifest.used == 3 * 240
    # A time in whole seconds may be shared by chance.
    os.utime(paths[2], ns=(1_700_000_000_000_000_000,) * 2)
    update(tmp_path / "store", str(paths[2]), replace_changed=True)
    paths[2].rename(tmp_path / "other.parquet")
    with pytest.raises(InputError) as refused:
        update(tmp_path / "store", str(tmp_path))
    assert str(refused.value) == (
        f"DATA must be told apart from files that were counted and are gone, but "
        f"'{tmp_path}/other.parquet' may be '{paths[2]}' or another, for size and time are the "
        f"same; put the files back under their names, or write a new one once more, for a time of "
        f"its own."
    )
    os.utime(tmp_path / "other.parquet")
    assert update(tmp_path / "store", str(tmp_path)).added == (f"{tmp_path}/other.parquet",)


def test_a_file_reached_by_a_link_is_not_counted_twice(tmp_path):
    (tmp_path / "real").mkdir()
    paths = [write_day(tmp_path / "real", day) for day in range(2)]
    (tmp_path / "link").symlink_to(tmp_path / "real")
    update(tmp_path / "store", str(tmp_path / "real"), DAY)
    done = update(tmp_path / "store", str(tmp_path / "link"))
    assert (done.changed, done.added, len(done.unchanged)) == (False, (), 2)
    # A change is noticed by way of the link, too.
    write_day(tmp_path / "real", 0, rows=300)
    with pytest.raises(InputError, match="changed since; count them anew with --replace"):
        update(tmp_path / "store", str(tmp_path / "link"))
    done = update(tmp_path / "store", str(tmp_path / "link"), replace_changed=True)
    assert (done.replaced, done.added) == ((str(paths[0]),), ())
    assert opened(tmp_path / "store").manifest.used == 300 + 240
    os.link(paths[1], tmp_path / "real" / "twin.parquet")
    with pytest.raises(InputError, match=r"name each file once, but '.*' and '.*' are one file;"):
        update(tmp_path / "store", str(tmp_path / "real"))


def test_a_hash_tells_a_touched_file_from_a_changed_one(tmp_path):
    path = write_day(tmp_path, 0)
    update(tmp_path / "store", str(path), DAY, with_hash=True)
    os.utime(path, ns=(1, 1))
    assert update(tmp_path / "store", str(path)).unchanged == ()
    assert opened(tmp_path / "store").entries[0].modified_ns == 1
    # Same size and time, other content: only the hash knows.
    content = bytearray(path.read_bytes())
    content[200] ^= 1
    path.write_bytes(bytes(content))
    os.utime(path, ns=(1, 1))
    assert update(tmp_path / "store", str(path)).unchanged == (str(path),)
    with pytest.raises(InputError, match="changed since; count them anew with --replace"):
        update(tmp_path / "store", str(path), with_hash=True)


def test_a_hash_tells_a_copy_from_a_new_file(tmp_path):
    path = write_day(tmp_path, 0)
    update(tmp_path / "store", str(path), DAY, with_hash=True)
    copy = tmp_path / "copy.parquet"
    shutil.copyfile(path, copy)
    with pytest.raises(InputError) as refused:
        update(tmp_path / "store", str(copy), with_hash=True)
    assert str(refused.value) == (
        f"DATA must hold each file once, but '{copy}' and '{path}' hold the same bytes; leave one "
        f"of them out."
    )
    path.unlink()
    assert update(tmp_path / "store", str(copy), with_hash=True).moved == (str(copy),)
    assert opened(tmp_path / "store").manifest.used == 240


def test_forgetting_drops_whole_periods_and_keeps_the_ledger(days, tmp_path):
    grow(tmp_path / "store", days, UNITS)
    done = update(tmp_path / "store", forget_before="2025-02-01")
    assert done.forgotten == ("2025-01",)
    later = "logged_at >= TIMESTAMP '2025-02-01 00:00:00'"
    store = opened(tmp_path / "store")
    assert_same_sums(store.counted()[()].table, one_pass(store.plan, days, "logged_at:day", later))
    # Neither the same file nor another one brings the period back.
    assert not update(tmp_path / "store", [str(path) for path in days]).changed
    late = write_day(tmp_path, 3, seed=2)
    done = update(tmp_path / "store", str(late))
    assert done.rows == {
        "read": 240, "filtered": 0, "refused": {"period forgotten": 240}, "used": 0,
    }  # fmt: skip


def test_forgetting_never_empties_a_store(days, tmp_path):
    grow(tmp_path / "store", days, UNITS)
    with pytest.raises(InputError) as refused:
        update(tmp_path / "store", forget_before="2052-01-01")
    assert str(refused.value) == (
        "--forget-before must leave rows in the store, but all lie before 2052-01-01; give an "
        "earlier date, or delete the store."
    )
    assert opened(tmp_path / "store").manifest.used == 8 * 240
    # With rows of a later period in the same update there is something left.
    late = write_day(tmp_path, 40)
    update(tmp_path / "store", str(late), forget_before="2025-03-01")
    assert opened(tmp_path / "store").manifest.used == 240
    # When the only file left holds rows of forgotten periods now, the store is empty.
    os.replace(write_day(tmp_path, 3), late)
    update(tmp_path / "store", str(late), replace_changed=True)
    for make in (make_curve, lambda store: make_fleet(store, by=("plant",))):
        with pytest.raises(InputError, match="a store that holds rows, but all its periods were"):
            make(tmp_path / "store")


def test_the_last_periods_are_had_without_reading(days, tmp_path):
    grow(tmp_path / "store", days, replace(DAY, period="logged_at:day"))
    store = opened(tmp_path / "store")
    later = "logged_at >= TIMESTAMP '2025-02-02 00:00:00'"
    whole = one_pass(store.plan, days, "logged_at:day", later)
    assert_same_sums(store.tables(Window(last="3 days"))[()], whole)
    before = "logged_at < TIMESTAMP '2025-02-02 00:00:00'"
    rest = one_pass(store.plan, days, "logged_at:day", before)
    assert_same_sums(store.tables(Window(before="2025-02-02"))[()], rest)
    made = make_curve(tmp_path / "store", reading=Reading(last="3 days"))
    assert made.trace["rows"]["used"] == whole.tally.used
    assert made.trace["store"]["periods"] == ["2025-02-02", "2025-02-04"]


def test_the_range_grows_without_reading_old_files_again(days, tmp_path):
    update(tmp_path / "store", str(days[0]), DAY)
    far = write_day(tmp_path, 1, wet_bulb_c=np.linspace(-40.0, 60.0, 240))
    days[0].rename(tmp_path / "aside.parquet")
    try:
        done = update(tmp_path / "store", str(far))
    finally:
        (tmp_path / "aside.parquet").rename(days[0])
    assert done.width_doubled >= 2
    assert done.rows["used"] == 240
    store = opened(tmp_path / "store")
    assert_same_sums(store.tables()[()], one_pass(store.plan, [days[0], far], "logged_at:day"))


def test_codes_for_missing_readings_do_not_widen_the_bins(tmp_path):
    first = write_day(tmp_path, 0)
    x = 9.0 + np.random.default_rng(5).normal(0.0, 1.0, 240)
    x[[3, 70, 150]] = [-9999.0, 1e30, -9999.0]
    second = write_day(tmp_path, 1, wet_bulb_c=x)
    update(tmp_path / "store", str(first), DAY)
    done = update(tmp_path / "store", str(second))
    assert done.width_doubled == 0
    assert done.rows["refused"] == {"x above range": 1, "x below range": 2}
    store = opened(tmp_path / "store")
    assert store.entries[1].beyond == (-9999.0, 1e30)
    (caution,) = [one for one in make_curve(tmp_path / "store").cautions
                  if one.code == "range trimmed"]  # fmt: skip
    assert caution.text.startswith("3 rows in 1 of 2 files lie so far outside ")


def test_codes_in_the_first_files_do_not_widen_the_bins(tmp_path):
    x = 9.0 + np.random.default_rng(5).normal(0.0, 1.0, 240)
    x[[3, 70, 150]] = [-9999.0, 1e30, -9999.0]
    done = update(tmp_path / "store", str(write_day(tmp_path, 0, wet_bulb_c=x)), DAY)
    assert done.rows["refused"] == {"x above range": 1, "x below range": 2}
    grid = opened(tmp_path / "store").manifest.grid
    assert grid.high - grid.origin < 32.0


def test_rows_left_out_that_fit_later_are_told_and_can_be_counted(tmp_path):
    update(tmp_path / "store", str(write_day(tmp_path, 0)), DAY)
    x = np.full(240, 9.0)
    x[0] = 400.0
    odd = write_day(tmp_path, 1, wet_bulb_c=x)
    assert update(tmp_path / "store", str(odd)).rows["refused"] == {"x above range": 1}
    wide = write_day(tmp_path, 2, wet_bulb_c=np.linspace(0.0, 500.0, 240))
    assert update(tmp_path / "store", str(wide)).left_out == (str(odd),)
    done = update(tmp_path / "store", str(odd), replace_changed=True)
    assert (done.replaced, done.left_out) == ((str(odd),), ())
    assert opened(tmp_path / "store").manifest.used == 720


def test_a_range_of_the_callers_own_never_grows(days, tmp_path):
    store = grow(tmp_path / "store", days, replace(DAY, range=(6.0, 12.0)))
    assert len(store.manifest.grids) == 1
    x = np.concatenate([pq.read_table(path)["wet_bulb_c"].to_numpy() for path in days])
    refused = {"x above range": int((x > 12.0).sum()), "x below range": int((x < 6.0).sum())}
    assert store.tables()[()].tally.refused == refused
    assert make_curve(tmp_path / "store").cautions == tuple(
        one for one in make_curve(tmp_path / "store").cautions if one.code != "range trimmed"
    )


def test_unusable_rows_are_counted_by_reason(tmp_path):
    x = np.linspace(0.0, 20.0, 240)
    y = 20.0 + x
    x[0], x[1], y[2], y[3] = np.nan, np.inf, np.nan, -np.inf
    stamps = pa.array([None, *(BEGIN + timedelta(minutes=n) for n in range(239))])
    masked = pa.array(x, mask=np.arange(240) == 10)
    path = write_day(tmp_path, 0, wet_bulb_c=masked, power_kw=y, logged_at=stamps)
    done = update(tmp_path / "store", str(path), DAY)
    assert done.rows["refused"] == {
        "period null": 1, "x infinite": 1, "x null": 1, "y NaN": 1, "y infinite": 1,
    }  # fmt: skip
    assert opened(tmp_path / "store").tables()[()].tally.to_dict() == done.rows


def test_a_file_without_a_usable_row_is_entered_all_the_same(days, tmp_path):
    grow(tmp_path / "store", days[:2], DAY)
    path = write_day(tmp_path, 2, power_kw=np.full(240, np.nan))
    assert update(tmp_path / "store", str(path)).rows["used"] == 0
    assert not update(tmp_path / "store", str(path)).changed
    assert opened(tmp_path / "store").tables()[()].tally.refused == {"y NaN": 240}


def test_a_curve_of_a_store_is_that_of_its_rows(days, tmp_path):
    store = grow(tmp_path / "store", days, DAY)
    table = one_pass(store.plan, days, "logged_at:day")
    smoothing = Smoothing(bandwidth=2.0)
    mine = make_curve(tmp_path / "store", smoothing=smoothing)
    theirs = curve_from_table(table, [str(path) for path in days], smoothing=smoothing)
    for name in ("x", "estimate", "std_error", "lower", "upper", "effective_rows"):
        np.testing.assert_allclose(getattr(mine, name), getattr(theirs, name), rtol=1e-8)
    np.testing.assert_array_equal(mine.status, theirs.status)
    assert mine.trace["rows"] == theirs.trace["rows"]
    assert mine.trace["blocks"] == 8
    assert mine.trace["engine"]["passes"] == 0
    found = search_bandwidth(tmp_path / "store")
    trail = curve_from_table(table).search.trails["local-linear"]
    assert math.isclose(found.trails["local-linear"].bandwidth, trail.bandwidth, rel_tol=1e-6)


def test_curves_of_a_stores_units_are_those_of_the_units_alone(days, tmp_path):
    store = grow(tmp_path / "store", days, UNITS)
    smoothing = Smoothing(bandwidth=2.0)
    made = make_fleet(tmp_path / "store", by="plant", smoothing=smoothing)
    assert [unit.key for unit in made.units] == [("eastholm",), ("northmoor",), (None,)]
    for key, curve in made.curves.items():
        where = "plant IS NULL" if key[0] is None else f"plant = '{key[0]}'"
        table = one_pass(store.plan, days, "logged_at:day", where)
        theirs = curve_from_table(table, smoothing=smoothing)
        np.testing.assert_allclose(curve.estimate, theirs.estimate, rtol=1e-8)
        np.testing.assert_allclose(curve.std_error, theirs.std_error, rtol=1e-8)
    assert made.trace["rows"]["used"] == 8 * 240
    assert made.trace["store"]["files"] == 8
    few = make_fleet(tmp_path / "store", by="plant", reading=Reading(last="1 month"))
    assert few.trace["rows"]["used"] == 4 * 240
    with pytest.raises(InputError) as refused:
        make_fleet(tmp_path / "store", by="shift")
    assert str(refused.value) == (
        "--by must name what the store keeps apart, but 'shift' is none of it; use one of 'plant'."
    )


def test_units_of_two_columns_can_be_taken_together(days, tmp_path):
    two = StoreSettings(
        "wet_bulb_c", "power_kw", by=("plant", "repeats"), block="logged_at:day", bins=512
    )
    store = grow(tmp_path / "store", days, two)
    assert len(store.tables()) == 9
    by_plant = store.counted(by=("plant",))
    alone = one_pass(store.plan, days, "logged_at:day", "plant = 'eastholm'")
    assert_same_sums(by_plant[("eastholm",)].table, alone)
    swapped = store.counted(by=("repeats", "plant"))
    assert (3.0, "eastholm") in swapped


def test_bins_are_fewer_for_very_many_units():
    wanted = StoreSettings("wet_bulb_c", "power_kw", by=("plant",)).filled()
    assert [wanted.with_bins_for(units).bins for units in (1, 48, 100, 1000, 10_000)] == [
        4096, 4096, 2048, 256, 256,
    ]  # fmt: skip
    assert replace(wanted, bins=512).with_bins_for(1000).bins == 512


def test_some_rows_are_kept_to_be_shown_and_to_judge_neighbours_by(days, tmp_path):
    store = grow(tmp_path / "store", days, DAY)
    counted = store.counted()[()]
    assert counted.shown.shape == (2, 8 * 240)
    runs = np.unique(counted.sample.run)
    assert runs.size == 8
    for run, path in zip(runs, days, strict=True):
        own = counted.sample.run == run
        first = pq.read_table(path)["wet_bulb_c"].to_numpy()[:100]
        np.testing.assert_array_equal(counted.sample.x[own], first)
        np.testing.assert_array_equal(counted.sample.place[own], np.arange(100))


def test_settings_are_fixed_and_contradictions_refused(days, tmp_path):
    grow(tmp_path / "store", days[:4], UNITS)
    cases = {
        StoreSettings(x="power_kw"): "--x must agree with the store, but it is power_kw and the "
        "store has wet_bulb_c; leave --x out, or make another store.",
        StoreSettings(by=("shift",)): "--by must agree with the store, but it is shift and the "
        "store has plant; leave --by out, or make another store.",
        StoreSettings(weight="precision"): "--weight must agree with the store, but it is "
        "precision and the store has none; leave --weight out, or make another store.",
        StoreSettings(bins=2048): "--bins must agree with the store, but it is 2048 and the store "
        "has 1024; leave --bins out, or make another store.",
    }
    for wanted, sentence in cases.items():
        with pytest.raises(InputError) as refused:
            update(tmp_path / "store", str(days[5]), wanted)
        assert str(refused.value) == sentence
    with pytest.raises(InputError, match="--where must agree with the store, but it is power_kw"):
        make_curve(tmp_path / "store", reading=Reading(where="power_kw > 3"))
    with pytest.raises(InputError, match="--block must agree with the store, but it is plant and"):
        make_curve(tmp_path / "store", reading=Reading(block="plant"))
    assert make_curve(tmp_path / "store", "wet_bulb_c", "power_kw").bandwidth > 0.0


@pytest.mark.parametrize(
    ("option", "asked"),
    [
        ("--engine exact", {"smoothing": Smoothing(engine="exact")}),
        ("--estimator nearest", {"smoothing": Smoothing(estimator="nearest")}),
        ("--robust", {"smoothing": Smoothing(robust=True)}),
        ("--limits", {"band": Band(limits=(0.05, 0.95))}),
    ],
)
def test_what_needs_rows_is_refused(days, tmp_path, option, asked):
    grow(tmp_path / "store", days[:2], UNITS)
    with pytest.raises(InputError) as refused:
        make_curve(tmp_path / "store", **asked)
    assert str(refused.value) == (
        f"{option} must come with data files, but a store keeps no rows; name the files, or leave "
        f"it out."
    )


@pytest.mark.parametrize("blocks", ["logged_at:day", None])
def test_days_of_another_clock_are_refused(tmp_path, blocks):
    wanted = replace(DAY, block=blocks)
    first = write_day(tmp_path, 0)
    table = pq.read_table(first)
    here = table["logged_at"].cast(pa.timestamp("s", "Europe/Madrid"))
    second = tmp_path / "madrid.parquet"
    pq.write_table(table.set_column(0, "logged_at", here), second)
    update(tmp_path / "store", str(first), wanted)
    with pytest.raises(InputError) as refused:
        update(tmp_path / "store", str(second))
    assert str(refused.value) == (
        "--period must name a column of one kind in every file, but 'logged_at' holds times in "
        "zone Europe/Madrid and in the store's files times without a zone; write the files alike, "
        "or make another store."
    )
    # In one update they are refused alike.
    with pytest.raises(InputError, match="must name a column of one kind in every file"):
        update(tmp_path / "other", [str(first), str(second)], wanted)


def test_refusals_of_new_stores_leave_no_folder(days, tmp_path):
    cases = [
        (StoreSettings("wet_bulb_c"), "--y must be given for a new store, but it is missing"),
        (StoreSettings("wetbulb", "power_kw"), "'wetbulb'"),
        (replace(DAY, period="plant:month"), "--period must name a time column"),
        (replace(DAY, where="power_kw > 1000"), "DATA must hold rows with finite x and y"),
    ]
    for wanted, text in cases:
        with pytest.raises(InputError, match=text):
            update(tmp_path / "new" / "store", str(days[0]), wanted)
        assert not (tmp_path / "new").exists()
    (tmp_path / "other").mkdir()
    (tmp_path / "other" / "notes.txt").write_text("mine")
    with pytest.raises(InputError, match="STORE must be a store, or an empty or new folder, but"):
        update(tmp_path / "other", str(days[0]), DAY)
    assert os.listdir(tmp_path / "other") == ["notes.txt"]
    with pytest.raises(InputError, match="is none; make one with 'fastsmooth update'"):
        opened(tmp_path / "nowhere")


def test_columns_of_another_kind_are_refused(days, tmp_path):
    grow(tmp_path / "store", days[:1], UNITS)
    ints = write_day(tmp_path, 1, plant=np.arange(240))
    with pytest.raises(InputError) as refused:
        update(tmp_path / "store", str(ints))
    assert str(refused.value) == (
        "--by must name a column of the same kind in every file, but 'plant' holds int64 and the "
        "store has string; write the files alike."
    )
    times = write_day(tmp_path, 1, wet_bulb_c=np.datetime64(BEGIN, "s") + np.arange(240))
    with pytest.raises(InputError, match="--x must be of the same kind in every file, but"):
        update(tmp_path / "store", str(times))


def test_x_may_be_a_time(days, tmp_path):
    store = grow(tmp_path / "store", days, StoreSettings("logged_at", "power_kw"))
    assert store.tables()[()].tally.used == 8 * 240
    made = make_curve(tmp_path / "store", smoothing=Smoothing(bandwidth="2 d"))
    assert made.table()["x"].type == pa.timestamp("ms")
    whole = one_pass(store.plan, days)
    assert_same_sums(store.tables()[()], whole)


def test_folder_names_keep_their_type(tmp_path):
    for name in ("7", "B2"):
        (tmp_path / f"line={name}").mkdir()
        write_day(tmp_path / f"line={name}", 0)
    wanted = StoreSettings("wet_bulb_c", "power_kw", by=("line",))
    update(tmp_path / "store", str(tmp_path / "line=*"), wanted)
    # Alone, the folder's name would be read as a number.
    (tmp_path / "line=007").mkdir()
    path = write_day(tmp_path / "line=007", 1)
    update(tmp_path / "store", str(path))
    assert list(opened(tmp_path / "store").tables()) == [("007",), ("7",), ("B2",)]


def test_periods_are_refused_where_there_are_none(days, tmp_path):
    grow(tmp_path / "store", days[:1], StoreSettings("wet_bulb_c", "power_kw"))
    for act, option in (
        (lambda: update(tmp_path / "store", forget_before="2025-02-01"), "--forget-before"),
        (lambda: make_curve(tmp_path / "store", reading=Reading(last="1 month")), "--last"),
    ):
        with pytest.raises(InputError) as refused:
            act()
        assert str(refused.value) == (
            f"{option} must come with a store that keeps periods apart, but "
            f"'{tmp_path / 'store'}' keeps none; make another store with --period, as in --period "
            f"logged_at:month."
        )
    with pytest.raises(InputError, match="--last must come with a store in place of DATA"):
        make_curve(str(days[0]), "wet_bulb_c", "power_kw", reading=Reading(last="1 month"))


@pytest.mark.parametrize(
    ("unit", "text", "newest", "first"),
    [
        ("month", "12 months", "2025-03", "2024-04"), ("month", "1 year", "2025-03", "2024-04"),
        ("day", "30 days", "2025-03-15", "2025-02-14"), ("day", "2 weeks", "2025-03-15",
         "2025-03-02"), ("day", "1 month", "2025-03-30", "2025-02-28"),
        ("hour", "1 day", "2025-03-15 05:00", "2025-03-14 06:00"),
        ("week", "2 weeks", "2025-03-10", "2025-03-03"),
    ],
)  # fmt: skip
def test_spans_count_back_from_the_newest_period(unit, text, newest, first):
    period = Period.parse(f"logged_at:{unit}")
    number = period.begun_at(newest, "DATE")
    assert period.first_of_last(text, number) == period.begun_at(first, "DATE")


@pytest.mark.parametrize(
    ("act", "text"),
    [
        (lambda p: p.first_of_last("soon", 3), "--last must be a number and a unit, as in '12 "
         "months', but it is 'soon'"),
        (lambda p: p.first_of_last("3 days", 3), "--last must be counted in months, years, because "
         "the store keeps months apart, but '3 days' is of another unit; write it in months."),
        (lambda p: p.first_of_last("3 moons", 3), "is of no unit of time"),
        (lambda p: p.begun_at("2025-03-17", "--forget-before"), "--forget-before must be the "
         "beginning of a month, which the store keeps whole, but '2025-03-17' lies within one; "
         "write 2025-03-01."),
        (lambda p: p.begun_at("tomorrow", "--forget-before"), "--forget-before must be a date, but "
         "it is 'tomorrow'; write it as in 2025-03-01."),
    ],
)  # fmt: skip
def test_periods_refuse_in_one_sentence(act, text):
    with pytest.raises(InputError) as refused:
        act(Period.parse("logged_at:month"))
    assert text in str(refused.value)


def moments(x, y, grid):
    """Sums of a bin by plain loops: the oracle."""
    cells = {}
    for one, value in zip(x, y, strict=True):
        number = math.floor(one / 2.0**grid.exponent)
        place = (number - grid.first) * len(grid.pilot) // grid.bins
        v = one / 2.0**grid.exponent - number - 0.5
        e = value - grid.pilot[min(max(place, 0), len(grid.pilot) - 1)]
        sums = cells.setdefault(number, [0.0] * 7)
        for n, term in enumerate((1.0, v, v * v, e, v * e, v * v * e, e * e)):
            sums[n] += term
    return cells


@settings(max_examples=60, deadline=None)
@given(
    st.lists(st.floats(-30.0, 30.0), min_size=1, max_size=40),
    st.lists(st.floats(-2000.0, 2000.0), max_size=5),
    st.integers(0, 2**32 - 1),
)
def test_coarser_bins_hold_the_same_sums(x, wider, seed):
    rng = np.random.default_rng(seed)
    y = rng.normal(100.0, 5.0, len(x))
    grid = Grid.over(-30.0, 31.0, 256, tuple(rng.normal(100.0, 5.0, 16).tolist()))
    cells = moments(x, y, grid)
    held = Cells(
        np.zeros(len(cells), np.int32), np.zeros(len(cells), np.int32),
        np.array(sorted(cells), np.int64), np.array([cells[n] for n in sorted(cells)]),
    )  # fmt: skip
    for value in wider:
        new = grid.grown(min(*x, value), max(*x, value))
        assert new.holds(min(*x, value), max(*x, value))
        held, grid = held.regridded(grid, new), new
    expected = moments(x, y, grid)
    assert held.bin.tolist() == sorted(expected)
    sums = np.array([expected[n] for n in sorted(expected)])
    np.testing.assert_allclose(held.sums, sums, rtol=1e-11, atol=1e-9)


@settings(max_examples=200, deadline=None)
@given(st.floats(-1e12, 1e12), st.floats(1e-6, 1e12), st.floats(-1e13, 1e13))
def test_a_grid_holds_what_it_was_made_for(low, span, other):
    if not low + span > low or span < 1e-9 * abs(low):
        return
    grid = Grid.over(low, low + span, 1024, (0.0,) * 256)
    assert grid.holds(low, low + span)
    assert span > 0.24 * (grid.high - grid.origin)
    low, high = min(low, other), max(low + span, other)
    grown = grid.grown(low, high)
    assert grown.holds(low, high)
    assert grown.exponent >= grid.exponent


def test_far_values_are_told_from_a_wide_range():
    assert widen(0.0, 10.0, np.array([30.0, 100.0, -40.0]), 1000).far == 0
    hull = widen(0.0, 10.0, np.array([30.0, -9999.0, 1e30]), 1000)
    assert (hull.low, hull.high, hull.far) == (0.0, 30.0, 2)
    # Too many to be outliers.
    assert widen(0.0, 10.0, np.full(100, -9999.0), 1000).low == -9999.0
    assert core_range(np.full(5, 3.0)) is None
    assert core_range(np.array([3.0] * 98 + [4.0, 5.0])) == (3.0, pytest.approx(4.01))


def test_blocks_go_to_the_fold_that_their_number_tells(days, tmp_path):
    store = grow(tmp_path / "store", days[:3], DAY)
    first = (BEGIN - datetime(1970, 1, 1)).days
    folds = {fold_of_number(first + day, 32) for day in range(3)}
    assert set(store.tables()[()].sums) == folds
