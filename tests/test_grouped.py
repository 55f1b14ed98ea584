"""Rows of many units into one pool: the bits of each unit counted alone, and plain loops."""

import math

import numpy as np
import pytest
from fastsmooth.kernels import accumulate, grouped
from hypothesis import given
from hypothesis import strategies as st

from tests.oracle import bins as oracle

UNITS, SLOTS = 3, 2
ORIGIN = np.array([-5.0, 0.0, 2.0])
WIDTH = np.array([0.5, 0.25, 1.0])
BINS = np.array([16, 8, 4])
START = np.array([4, 20, 0])  # not in the order of the units
PILOT = np.array([float(np.float32(20.0 + 0.3 * b)) for b in range(28)])

xs = st.one_of(
    st.floats(-6.0, 4.0),
    st.sampled_from([-5.0, 3.0, 2.0, 6.0, np.nextafter(2.0, 3.0), math.nan, math.inf, -0.0, 1e300]),
)
ys = st.one_of(st.floats(-100.0, 100.0), st.sampled_from([math.nan, -math.inf, 1e33, 0.0]))
factors = st.one_of(st.floats(0.1, 10.0), st.sampled_from([0.0, -1.0, math.nan, math.inf, 1.0]))
rows = st.lists(
    st.tuples(
        xs, ys, factors, factors, st.integers(-1, UNITS - 1), st.integers(-1, SLOTS - 1)
    ),
    max_size=80,
)  # fmt: skip


def split(listed):
    floats = [np.array([row[i] for row in listed], np.float64) for i in range(4)]
    codes = [np.array([row[i] for row in listed], np.int32) for i in (4, 5)]
    return *floats, *codes


def empty_pool(sums):
    extent = np.tile([math.inf, -math.inf], (UNITS, 1))
    refused = np.zeros((UNITS, len(accumulate.REASONS)), np.int64)
    return np.zeros((SLOTS, PILOT.size, sums)), extent, refused


def add(kind, pool, extent, refused, x, y, weight, count, code, slot):
    place = (START, BINS.astype(float), ORIGIN, 1.0 / WIDTH, PILOT, extent, refused)
    if kind == "plain":
        grouped.accumulate_units(pool, slot, code, x, y, *place)
    elif kind == "counted":
        grouped.accumulate_units_counted(pool, slot, code, x, y, count, *place)
    else:
        grouped.accumulate_units_weighted(pool, slot, code, x, y, weight, count, *place)


def alone(kind, unit, slot, x, y, weight, count, code, slots):
    """The table of one unit and slot, by the kernels that count one unit."""
    mine = (code == unit) & (slots == slot)
    table = np.zeros((BINS[unit], 16 if kind == "weighted" else 8))
    table[:, accumulate.PILOT] = PILOT[START[unit] :][: BINS[unit]]
    extent = np.array([math.inf, -math.inf])
    refused = np.zeros(len(accumulate.REASONS), np.int64)
    scale = (float(ORIGIN[unit]), 1.0 / float(WIDTH[unit]), extent, refused)
    if kind == "plain":
        accumulate.accumulate_rows(table, x[mine], y[mine], *scale)
    elif kind == "counted":
        accumulate.accumulate_counted(table, x[mine], y[mine], count[mine], *scale)
    else:
        accumulate.accumulate_weighted(table, x[mine], y[mine], weight[mine], count[mine], *scale)
    return table, extent, refused


@pytest.mark.parametrize("kind", ["plain", "counted", "weighted"])
@given(listed=rows, cut=st.integers(0, 80))
def test_every_unit_has_the_bits_of_its_rows_alone(kind, listed, cut):
    columns = split(listed)
    pool, extent, refused = empty_pool(16 if kind == "weighted" else 8)
    add(kind, pool, extent, refused, *(one[:cut] for one in columns))
    add(kind, pool, extent, refused, *(one[cut:] for one in columns))
    for unit in range(UNITS):
        low, high, reasons = math.inf, -math.inf, 0
        for slot in range(SLOTS):
            table, own_extent, own_refused = alone(kind, unit, slot, *columns)
            sums = pool[slot, START[unit] :][: BINS[unit]]
            met = sums[:, 0] > 0.0
            assert sums[met].tobytes() == table[met].tobytes()
            assert not sums[~met].any()
            assert not table[~met, 0].any()
            low, high = min(low, own_extent[0]), max(high, own_extent[1])
            reasons = reasons + own_refused
        assert extent[unit].tolist() == [low, high]
        assert refused[unit].tolist() == reasons.tolist()


@given(listed=rows)
def test_sums_are_those_of_plain_loops(listed):
    x, y, weight, count, code, slot = split(listed)
    pool, extent, refused = empty_pool(16)
    add("weighted", pool, extent, refused, x, y, weight, count, code, slot)
    names = ("w", "wv", "wv2", "we", "wve", "wv2e", "we2", None, "count", "w2", "w2v", "w2v2",
             "w2e", "w2ve", "w2e2")  # fmt: skip
    for unit in range(UNITS):
        for one in range(SLOTS):
            mine = (code == unit) & (slot == one)
            pilot = PILOT[START[unit] :][: BINS[unit]].tolist()
            sums, sizes, _, _ = oracle.moments(
                x[mine].tolist(), y[mine].tolist(), weight[mine].tolist(), count[mine].tolist(),
                float(ORIGIN[unit]), float(WIDTH[unit]), int(BINS[unit]), pilot,
            )  # fmt: skip
            for b in range(BINS[unit]):
                for place, name in enumerate(names):
                    if name is not None:
                        found = pool[one, START[unit] + b, place]
                        expected = sums.get(b, {}).get(name, 0.0)
                        size = sizes.get(b, {}).get(name, 0.0)
                        assert abs(found - expected) <= 1e-13 * size * (1 + mine.sum())


@given(
    codes=st.lists(st.integers(-1, 3), max_size=60), length=st.integers(1, 7),
    turns=st.lists(st.integers(0, 5), min_size=1, max_size=4, unique=True), cut=st.integers(0, 60),
)  # fmt: skip
def test_runs_of_a_units_own_rows_go_through_the_slots_in_turn(codes, length, turns, cut):
    code = np.array(codes, np.int32)
    seen = np.zeros(4, np.int64)
    slot = np.full(code.size, 99, np.int32)
    for part in (slice(None, cut), slice(cut, None)):
        own = np.empty(code[part].size, np.int32)
        grouped.deal_runs(code[part], length, np.array(turns, np.int32), seen, own)
        slot[part] = own
    rows = dict.fromkeys(range(4), 0)
    expected = []
    for unit in codes:
        if unit < 0:
            expected.append(-1)
            continue
        expected.append(turns[rows[unit] // length % len(turns)])
        rows[unit] += 1
    assert slot.tolist() == expected
    assert seen.tolist() == list(rows.values())


@given(
    places=st.lists(st.integers(-1, 4), max_size=30),
    table=st.lists(st.integers(-1, 9), min_size=6, max_size=6),
)  # fmt: skip
def test_look_up(places, table):
    code = np.empty(len(places), np.int32)
    least = grouped.look_up(np.array(table, np.int32), np.array(places, np.int32), code)
    assert code.tolist() == [table[place] for place in places]  # -1 is the last
    assert least == min(code.tolist(), default=0)


@given(codes=st.lists(st.integers(-1, 3), max_size=60), quota=st.integers(1, 5))
def test_the_first_rows_of_each_unit_are_found(codes, quota):
    code = np.array(codes, np.int32)
    seen = np.array([0, 1, 0, 4])
    taken = seen.tolist()
    expected = []
    for place, unit in enumerate(codes):
        if unit >= 0 and taken[unit] < quota:
            taken[unit] += 1
            expected.append(place)
    rows = np.empty(code.size, np.int64)
    found = grouped.early_rows(code, quota, seen, rows)
    assert rows[:found].tolist() == expected
    assert seen.tolist() == taken


@pytest.mark.parametrize("sums", [8, 16])
def test_pools_merge_unit_by_unit_and_fold_by_fold(sums):
    rng = np.random.default_rng(0)
    mine = rng.normal(size=(3, 20, sums))
    other = rng.normal(size=(2, 12, sums))
    other[:, 3, 0] = 0.0  # no row there
    mine[..., 7] = other[..., 7] = 5.0  # the pilot
    expected = mine.copy()
    slot_of, start, other_start, bins = [2, 0], [15, 4], [0, 5], [5, 7]
    for slot, into in enumerate(slot_of):
        for unit in range(2):
            for b in range(bins[unit]):
                here, there = start[unit] + b, other_start[unit] + b
                if other[slot, there, 0] != 0.0:
                    for j in range(sums):
                        if j != 7:
                            expected[into, here, j] += other[slot, there, j]
    grouped.merge_units(
        mine, other, np.array(slot_of), np.array(start), np.array(other_start), np.array(bins)
    )
    assert mine.tobytes() == expected.tobytes()


def test_nothing_changes_nothing():
    pool, extent, refused = empty_pool(8)
    none, nobody = np.empty(0), np.empty(0, np.int32)
    add("plain", pool, extent, refused, none, none, none, none, nobody, nobody)
    assert not pool.any()
    assert not refused.any()
    assert np.isinf(extent).all()
    seen = np.zeros(2, np.int64)
    grouped.deal_runs(nobody, 1, np.zeros(1, np.int32), seen, nobody.copy())
    assert not seen.any()
