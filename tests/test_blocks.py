"""Blocks: the same key goes to the same fold, whatever file, chunk or order it stands in."""

import time
from collections import Counter
from dataclasses import replace
from datetime import UTC, date, datetime, timedelta
from itertools import pairwise

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest
from hypothesis import example, given
from hypothesis import strategies as st

from fastsmooth import Band, InputError, Reading, Smoothing, make_curve
from fastsmooth.blocks import UNITS, Block, Dealer, fold_of_key, fold_of_number, merge_keys
from fastsmooth.curve import OUTSIDE, THIN
from fastsmooth.engines.parts import block_of
from fastsmooth.plan import Plan
from fastsmooth.source import Columns
from fastsmooth.store.settings import StoreSettings
from tests import cases
from tests.oracle import blocks as oracle

FOLDS = 7
MADRID = "Europe/Madrid"
FOLDS_OF_NAMES = [20, 14, 4, 11]
FOLDS_OF_NUMBERS = [1, 7, 0, 13]
# Clocks change at 1 and 2 o'clock, at midnight, by half an hour; or never.
ZONES = [MADRID, "America/Sao_Paulo", "Australia/Lord_Howe", "Asia/Kathmandu", "UTC"]


def deal(column, block, folds=FOLDS):
    per_row, keys = Dealer(block, folds).deal(column)
    return per_row.tolist(), keys


# Words.


@pytest.mark.parametrize(
    ("text", "block"),
    [
        ("plant", Block("plant")),
        ("logged_at:day", Block("logged_at", "day")),
        ("logged_at:week@Europe/Madrid", Block("logged_at", "week", MADRID)),
        ("site:batch:hour", Block("site:batch", "hour")),
        ('"site:batch"', Block("site:batch")),
        ('"site:day"', Block("site:day")),
        ('"the ""good"" batch"', Block('the "good" batch')),
    ],
)
def test_a_block_is_read_from_words_and_said_in_the_same(text, block):
    assert Block.parse(text) == block
    if not text.startswith('"the'):
        assert str(block) == text


@pytest.mark.parametrize(
    ("text", "block"),
    [
        ('"plant"', Block("plant")),
        ('"logged_at":day', Block("logged_at", "day")),
        ('"site:batch":day@Europe/Madrid', Block("site:batch", "day", MADRID)),
        ('"logged@day":week', Block("logged@day", "week")),
    ],
)
def test_any_name_may_stand_in_quotes(text, block):
    assert Block.parse(text) == block


@given(
    st.text(st.sampled_from('ab:@" day'), min_size=1), st.sampled_from([None, *UNITS]),
    st.sampled_from([None, MADRID]),
)  # fmt: skip
def test_words_say_the_whole_block_whatever_its_name(column, unit, zone):
    block = Block(column, unit, zone if unit else None)
    assert Block.parse(str(block)) == block


@pytest.mark.parametrize(
    "block",
    [
        Block("site:batch"), Block("logged:at", "day"), Block('"at"', "week", MADRID),
        Block("plant"), Block("a by b"),
    ],
)  # fmt: skip
def test_a_plan_carries_its_block_to_other_processes(block):
    columns = Columns("wet_bulb_c", "power_kw", block=block.column)
    plan = replace(Plan.simple(0.0, 30.0), columns=columns, block=str(block))
    assert block_of(plan) == block
    by_function = replace(plan, block=f"{block} by shift")
    with pytest.raises(InputError, match="it is made by a function"):
        block_of(by_function)


def test_a_store_keeps_blocks_and_units_in_one_spelling():
    plain = StoreSettings(block="logged_at:day", by=("plant",), period="logged_at:month")
    quoted = StoreSettings(block='"logged_at":day', by=('"plant"',), period='"logged_at":month')
    assert quoted == plain


@pytest.mark.parametrize("text", ['"', '""', '"plant', '"plant"day', '"plant":', '"a"b"'])
def test_quotes_that_hold_no_name_are_refused(text):
    with pytest.raises(InputError) as caught:
        Block.parse(text)
    assert str(caught.value) == (
        "--block must name a column, or a time column with a unit as in logged_at:day, but the "
        f"quotes in {text} do not hold a name; write '\"site:batch\"' or '\"logged:at\":day'."
    )


def test_a_function_is_named_in_the_words():
    def shift(column):
        return column

    assert str(Block("logged_at", key=shift)) == "logged_at by shift"


def test_an_unknown_unit_is_refused_with_the_nearest_one():
    with pytest.raises(InputError) as caught:
        Block.parse("logged_at:dya")
    assert str(caught.value).startswith(
        "--block must name a column, or a time column with a unit as in logged_at:day, but 'dya' "
        "is no unit; "
    )
    assert caught.value.remedy == (
        "use 'day', or put quotes around a name that holds a colon, as in '\"logged_at:dya\"'"
    )


@pytest.mark.parametrize("zone", ["Europe/Nowhere", "../etc", ""])
def test_an_unknown_zone_is_refused(zone):
    with pytest.raises(InputError) as caught:
        Block("logged_at", "day", zone)
    assert str(caught.value) == (
        f"--block must name a known time zone after @, but '{zone}' is none; write it as in "
        f"Europe/Madrid."
    )


# Folds of keys.


@given(st.integers(-(2**70), 2**70), st.integers(2, 200))
def test_numbers_are_dealt_as_the_shuffle_says(number, folds):
    assert fold_of_number(number, folds) == oracle.fold_of_number(number, folds)


@given(st.integers(-(2**40), 2**40), st.integers(2, 64))
def test_every_run_of_numbers_meets_all_folds_equally(group, folds):
    numbers = range(group * folds, (group + 1) * folds)
    assert sorted(fold_of_number(number, folds) for number in numbers) == list(range(folds))


def test_no_fold_follows_a_cycle_in_the_numbers():
    # A fold for every weekday would leave out all Mondays at once: days of one weekday must be
    # spread over the seven folds like the throws of a die.
    folds = [fold_of_number(day, 7) for day in range(7 * 700)]
    for weekday in range(7):
        seen = Counter(folds[weekday::7])
        # 700 throws: a count has mean 100 and standard deviation 9.3.
        assert all(60 < seen[fold] < 140 for fold in range(7))


@given(
    st.one_of(
        st.none(), st.booleans(), st.integers(), st.text(), st.floats(allow_nan=False), st.dates()
    ),
    st.integers(2, 64),
)
def test_keys_of_any_kind_have_a_fold_of_their_own(key, folds):
    assert fold_of_key(key, folds) == oracle.fold_of_value(key, folds)


def test_folds_are_the_same_in_every_version():
    # Tables of one release are added to those of the next: these may never change.
    assert [fold_of_key(key, 32) for key in ("north", "south", "", "é")] == FOLDS_OF_NAMES
    assert [fold_of_number(day, 32) for day in (20_454, 20_455, -1, 0)] == FOLDS_OF_NUMBERS


# Columns of values.


COLUMNS = {
    "strings": pa.array(["north", "south", None, "north", "east"]),
    "large strings": pa.array(["north", "south", None, "north"], pa.large_string()),
    "whole numbers": pa.array([5, -3, None, 5, 2**40], pa.int64()),
    "small numbers": pa.array([5, 3, None, 5], pa.uint8()),
    "truth values": pa.array([True, False, None, True]),
    "dates": pa.array([date(2026, 3, 1), None, date(2026, 3, 2), date(2026, 3, 1)]),
    "times": pa.array([datetime(2026, 3, 1, 4), None, datetime(2026, 3, 1, 4)]),
    "decimals": pa.array(["1.50", None, "2.25"]).cast(pa.decimal128(6, 2)),
    "only nulls": pa.array([None, None], pa.string()),
    "no rows": pa.array([], pa.string()),
}


@pytest.mark.parametrize("name", COLUMNS)
@pytest.mark.parametrize("coded", [False, True])
def test_values_are_dealt_one_by_one(name, coded):
    column = COLUMNS[name].dictionary_encode() if coded else COLUMNS[name]
    values = COLUMNS[name].to_pylist()
    folds, keys = deal(column, Block("plant"))
    assert folds == [oracle.fold_of_value(value, FOLDS) for value in values]
    assert keys == {value for value in values if value is not None}


def test_two_codings_of_the_same_strings_agree():
    # Files write dictionaries in the order in which they meet the values, some of them unused.
    one = pa.DictionaryArray.from_arrays(pa.array([0, 1, None, 0]), ["north", "south", "west"])
    two = pa.DictionaryArray.from_arrays(pa.array([2, 1, None, 2]), ["west", "south", "north"])
    assert deal(one, Block("plant")) == deal(two, Block("plant"))
    assert deal(one, Block("plant"))[1] == {"north", "south"}


@given(
    st.lists(st.one_of(st.none(), st.sampled_from("abcdefgh")), max_size=40),
    st.lists(st.integers(0, 40), max_size=4),
    st.randoms(use_true_random=False),
)
def test_chunks_and_order_do_not_matter_for_values(values, cuts, random):
    column = pa.array(values, pa.string())
    whole, keys = deal(column, Block("plant"))
    cuts = sorted({0, len(values), *(min(cut, len(values)) for cut in cuts)})
    parts = [deal(column.slice(a, b - a), Block("plant")) for a, b in pairwise(cuts)]
    assert [fold for folds, _ in parts for fold in folds] == whole
    assert set().union(*(met for _, met in parts)) == keys
    order = list(range(len(values)))
    random.shuffle(order)
    shuffled, met = deal(column.take(pa.array(order, pa.int64())), Block("plant"))
    assert shuffled == [whole[place] for place in order]
    assert met == keys


# Columns of times.

MOMENTS = st.datetimes(datetime(1960, 1, 1), datetime(2036, 1, 1))


def around_clock_changes():
    # Madrid: 2026-03-29 and 2026-10-25. Sao Paulo: midnight of 2018-11-04 did not exist, and the
    # last hour of 2018-02-17 came twice. Lord Howe moves by half an hour.
    days = (datetime(2026, 3, 28, 20), datetime(2026, 10, 24, 20), datetime(2018, 11, 3, 20))
    starts = (*days, datetime(2018, 2, 17, 20), datetime(2026, 4, 4, 8), datetime(2026, 10, 3, 8))
    return [start + timedelta(minutes=10 * step) for start in starts for step in range(150)]


@given(
    st.lists(MOMENTS, min_size=1, max_size=12),
    st.sampled_from(ZONES),
    st.sampled_from(UNITS),
    st.sampled_from(["s", "ms", "us", "ns"]),
    st.booleans(),
)
@pytest.mark.parametrize("from_block", [False, True])
def test_instants_are_dealt_by_the_clock_of_the_zone(
    from_block, moments, zone, unit, tick, in_order
):
    if tick == "s":
        moments = [moment.replace(microsecond=0) for moment in moments]
    elif tick == "ms":
        moments = [
            moment.replace(microsecond=moment.microsecond // 1000 * 1000) for moment in moments
        ]
    instants = [moment.replace(tzinfo=UTC) for moment in moments]
    instants = sorted(instants) if in_order else instants
    column = pa.array(instants, pa.timestamp(tick, "UTC" if from_block else zone))
    folds, keys = deal(column, Block("logged_at", unit, zone if from_block else None))
    numbers = [oracle.unit_number(instant, unit, zone) for instant in instants]
    assert folds == [oracle.fold_of_number(number, FOLDS) for number in numbers]
    assert keys == set(numbers)


def test_a_zone_may_be_a_fixed_offset():
    # 20:00 in Greenwich is 01:30 of the next day half past five hours further east.
    instants = pa.array([datetime(2026, 3, 1, 20, tzinfo=UTC)], pa.timestamp("us", "+05:30"))
    number = (date(2026, 3, 2) - date(1970, 1, 1)).days
    assert deal(instants, Block("logged_at", "day")) == (
        [oracle.fold_of_number(number, FOLDS)], {number},
    )  # fmt: skip


@pytest.mark.parametrize("zone", ZONES)
@pytest.mark.parametrize("unit", UNITS)
def test_days_on_which_clocks_change_are_whole(zone, unit):
    instants = [moment.replace(tzinfo=UTC) for moment in around_clock_changes()]
    folds, keys = deal(pa.array(instants, pa.timestamp("us", zone)), Block("logged_at", unit))
    numbers = [oracle.unit_number(instant, unit, zone) for instant in instants]
    assert folds == [oracle.fold_of_number(number, FOLDS) for number in numbers]
    assert keys == set(numbers)


@given(st.lists(st.one_of(st.none(), MOMENTS), max_size=12), st.sampled_from(UNITS))
@example([None, None], "day")
@example([], "day")
def test_clocks_without_a_zone_are_taken_as_they_are_and_nulls_belong_nowhere(moments, unit):
    folds, keys = deal(pa.array(moments, pa.timestamp("us")), Block("logged_at", unit))
    numbers = [
        None if moment is None else oracle.unit_number(moment, unit, None) for moment in moments
    ]
    expected = [-1 if n is None else oracle.fold_of_number(n, FOLDS) for n in numbers]
    assert folds == expected
    assert keys == {number for number in numbers if number is not None}


@pytest.mark.parametrize("kind", [pa.date32(), pa.date64()])
@pytest.mark.parametrize("unit", ["day", "week", "month"])
def test_dates_have_units_too(kind, unit):
    dates = [date(1969, 12, 31), date(2026, 3, 1), date(2026, 3, 2), None, date(2024, 2, 29)]
    folds, keys = deal(pa.array(dates, kind), Block("logged_at", unit))
    moments = [None if one is None else datetime(one.year, one.month, one.day) for one in dates]
    numbers = [m and oracle.unit_number(m, unit, None) for m in moments]
    assert folds == [-1 if n is None else oracle.fold_of_number(n, FOLDS) for n in numbers]
    assert len(keys) == len({n for n in numbers if n is not None})


def test_a_unit_needs_times():
    with pytest.raises(InputError) as caught:
        deal(pa.array(["north"]), Block("plant", "day"))
    assert str(caught.value) == (
        "--block must name a time column when a unit is given, but 'plant' holds string; write "
        "--block plant."
    )


@pytest.mark.parametrize(
    ("kind", "holds"), [(pa.date32(), "date32[day]"), (pa.date64(), "date64[ms]")]
)
def test_dates_have_no_hours(kind, holds):
    with pytest.raises(InputError) as caught:
        deal(pa.array([date(2026, 3, 1)], kind), Block("logged on", "hour"))
    assert str(caught.value) == (
        "--block must name a column of times when the unit is an hour, but 'logged on' holds "
        f"{holds}, which tells no hours; write --block logged on:day."
    )


@pytest.mark.parametrize(
    ("column", "holds"),
    [
        (pa.array([datetime(2026, 3, 1, 4)], pa.timestamp("us")), "timestamp[us]"),
        (pa.array([date(2026, 3, 1)], pa.date32()), "date32[day]"),
    ],
)
def test_a_zone_needs_instants(column, holds):
    # Such a clock may show any zone's time: moving it by another would be a guess.
    with pytest.raises(InputError) as caught:
        deal(column, Block("logged_at", "day", MADRID))
    assert str(caught.value) == (
        f"--block must name a column of instants when a zone is given, but 'logged_at' holds "
        f"{holds}, a clock without a zone; write --block logged_at:day, which takes it as it is."
    )


def test_a_function_names_the_blocks():
    def hundreds(column):
        return pc.floor(pc.divide(column, 100.0)).cast(pa.int64())

    folds, keys = deal(pa.array([5.0, 99.0, 100.0, None]), Block("load", key=hundreds))
    expected = [oracle.fold_of_number(number, FOLDS) for number in (0, 0, 1)]
    assert folds == [*expected, -1]
    assert keys == {0, 1}


def test_keys_are_counted_up_to_a_limit():
    many = set(range(100_000))
    assert merge_keys(many, {-1}) is many
    assert merge_keys({1}, {2}) == {1, 2}


# Through the whole engine.


def readings(days=40, rows_per_day=60, seed=0):
    rng = np.random.default_rng(seed)
    n = days * rows_per_day
    wet_bulb_c = rng.uniform(-5.0, 28.0, n)
    level = rng.normal(size=days).repeat(rows_per_day)
    power_kw = cases.mean_power_kw(wet_bulb_c) + level + 0.5 * rng.normal(size=n)
    start = datetime(2026, 3, 1, tzinfo=UTC)
    step = timedelta(days=1) / rows_per_day
    times = pa.array([start + place * step for place in range(n)], pa.timestamp("us", "UTC"))
    return pa.table({"wet_bulb_c": wet_bulb_c, "power_kw": power_kw, "logged_at": times})


def curve_of(data, block="logged_at:day", **options):
    return make_curve(
        data, "wet_bulb_c", "power_kw", reading=Reading(block=block, threads=1, **options),
        smoothing=Smoothing(widths=8), band=Band(points=21),
    )  # fmt: skip


def test_files_and_their_order_do_not_matter(tmp_path):
    table = readings()
    rng = np.random.default_rng(5)
    shuffled = table.take(pa.array(rng.permutation(table.num_rows)))
    whole = curve_of(table)
    # Days cut across files, rows in any order, small row groups.
    for number, part in enumerate((shuffled.slice(0, 900), shuffled.slice(900))):
        pq.write_table(part, tmp_path / f"plant_{number}.parquet", row_group_size=170)
    split = curve_of(str(tmp_path))
    assert split.trace["blocks"] == whole.trace["blocks"] == 40
    assert split.bandwidth == pytest.approx(whole.bandwidth, rel=1e-9)
    for name in ("estimate", "std_error", "lower", "upper"):
        np.testing.assert_allclose(getattr(split, name), getattr(whole, name), rtol=1e-8, atol=1e-9)


def test_rows_without_a_block_are_refused_and_counted():
    table = readings()
    known = np.ones(table.num_rows, bool)
    known[::7] = False
    times = pc.if_else(pa.array(known), table["logged_at"].combine_chunks(), None)
    holed = table.set_column(2, "logged_at", times)
    made = curve_of(holed)
    lost = int(np.count_nonzero(~known))
    assert made.trace["rows"]["refused"] == {"block null": lost}
    assert made.trace["rows"]["used"] == table.num_rows - lost
    kept = curve_of(table.filter(pa.array(known)))
    np.testing.assert_allclose(made.estimate, kept.estimate, rtol=1e-9, atol=1e-9)
    np.testing.assert_allclose(made.std_error, kept.std_error, rtol=1e-9, atol=1e-9)


def test_strict_refuses_rows_without_a_block():
    table = readings()
    times = pc.if_else(
        pa.array(np.arange(table.num_rows) != 4), table["logged_at"].combine_chunks(), None
    )
    with pytest.raises(InputError, match=r"some were refused \(1 block null\)"):
        curve_of(table.set_column(2, "logged_at", times), strict=True)


def test_a_single_block_is_refused():
    table = readings().append_column("plant", pa.array(["north"] * 2400))
    with pytest.raises(InputError) as caught:
        curve_of(table, block="plant")
    assert str(caught.value) == (
        "--block must tell at least two blocks apart, but 'plant' is the same in all 2,400 rows; "
        "name a finer block, or leave it out."
    )


def test_blocks_that_share_a_fold_are_not_called_the_same():
    # Both names go to one of two folds.
    names = [name for name in map(str, range(20)) if fold_of_key(name, 2) == 0][:2]
    table = readings().append_column("plant", pa.array(names * 1200))
    with pytest.raises(InputError) as caught:
        curve_of(table, block="plant", folds=2)
    assert str(caught.value) == (
        "--block must tell at least two blocks apart, but the 2 blocks of 'plant' were dealt to "
        "one fold; name a finer block, or leave it out."
    )


OFFSETS = {"+02:00": True, "-0530": True, "+01": True, "Z": False, "+00:00": False, "": False}


@pytest.mark.parametrize("offset", OFFSETS)
def test_an_offset_in_a_csv_file_is_told_where_days_begin_at_another_midnight(tmp_path, offset):
    rng = np.random.default_rng(4)
    lines = ["logged_at,wet_bulb_c,power_kw"]
    for place in range(40 * 24):
        moment = datetime(2026, 3, 1) + timedelta(hours=place)
        x = rng.uniform(0.0, 25.0)
        lines.append(f"{moment.isoformat()}{offset},{x},{cases.mean_power_kw(x) + rng.normal()}")
    path = tmp_path / "readings.csv"
    path.write_text("\n".join(lines))
    made = curve_of(str(path))
    told = [one.text for one in made.cautions if one.code == "midnight UTC"]
    assert told == OFFSETS[offset] * [
        "logged_at is written with an offset from UTC, which reading turns into UTC: each day "
        "begins at midnight UTC. Name the zone of the place, as in --block "
        "logged_at:day@Europe/Madrid."
    ]
    if offset == "+02:00":
        # 40 days of the place touch 41 of UTC; a zone two hours ahead gives the former.
        assert made.trace["blocks"] == 41
        zoned = curve_of(str(path), block="logged_at:day@Etc/GMT-2")
        assert zoned.trace["blocks"] == 40
        for quiet in (zoned, curve_of(str(path), block="logged_at:hour")):
            assert "midnight UTC" not in {one.code for one in quiet.cautions}


def test_few_blocks_make_thin_points_and_a_caution():
    made = curve_of(readings(days=9, rows_per_day=200))
    assert "few blocks" in {caution.code for caution in made.cautions}
    assert set(made.status.tolist()) <= {THIN, OUTSIDE}


def test_a_stray_time_costs_no_time_and_changes_no_other_fold():
    hours = np.arange(50_000) * 600 + 1_700_000_000
    stray = hours.copy()
    stray[[7, 9]] = (-62_000_000_000, 200_000_000_000)  # the years 5 and 8307
    dealer = Dealer(Block("t", "hour"), 16)
    plain, _ = dealer.deal(pa.array(hours, pa.timestamp("s", "UTC")))
    began = time.process_time()
    folds, keys = dealer.deal(pa.array(stray, pa.timestamp("s", "UTC")))
    assert time.process_time() - began < 1.0  # building every hour between takes minutes
    same = np.delete(np.arange(50_000), [7, 9])
    assert np.array_equal(folds[same], plain[same])
    assert len(keys) == len(np.unique(hours // 3600)) + 2


def test_nan_is_no_block_and_zero_has_no_sign():
    folds, keys = Dealer(Block("b"), 8).deal(pa.array([0.0, -0.0, np.nan, 1.0, None]))
    assert folds[0] == folds[1]
    assert folds[2] == folds[4] == -1
    assert keys == {0.0, 1.0}


def test_nested_columns_are_no_blocks():
    with pytest.raises(InputError, match="--block must name a column of plain values"):
        Dealer(Block("b"), 8).deal(pa.array([[1], [2]]))


@pytest.mark.parametrize(
    ("first", "second", "told"),
    [
        (pa.int64(), pa.float64(), "integers in some and floats in others"),
        (pa.int64(), pa.string(), "integers in some and text in others"),
        (pa.timestamp("s", "UTC"), pa.timestamp("s", "Pacific/Auckland"), "zone UTC in some"),
    ],
)
def test_a_block_column_of_two_kinds_is_refused(tmp_path, first, second, told):
    x = np.linspace(0.0, 1.0, 100)
    days = pa.array(np.arange(100) // 10)
    for name, kind in (("a", first), ("b", second)):
        pq.write_table(
            pa.table({"x": x, "y": x, "k": days.cast(kind)}), tmp_path / f"{name}.parquet"
        )
    with pytest.raises(InputError, match=told):
        make_curve(tmp_path, "x", "y", reading=Reading(block="k"))


def test_floats_too_large_to_tell_apart_are_no_blocks():
    with pytest.raises(InputError, match="floats beyond 2\\^53"):
        Dealer(Block("b"), 8).deal(pa.array([1.8e19, 1.8e19 + 4096]))
