"""Rows into bin moments, against exact sums of plain loops."""

import math

import numpy as np
import pytest
from fastsmooth.kernels import accumulate
from hypothesis import given
from hypothesis import strategies as st

from tests.oracle import bins as oracle

ORIGIN, WIDTH, BINS = -5.0, 0.5, 16
HIGH = ORIGIN + BINS * WIDTH
PILOT = [float(np.float32(20.0 + 0.3 * b)) for b in range(BINS)]
SLOTS = ("w", "wv", "wv2", "we", "wve", "wv2e", "we2")
WEIGHTED_SLOTS = (*SLOTS, None, "count", "w2", "w2v", "w2v2", "w2e", "w2ve", "w2e2")

bin_edges = [ORIGIN + WIDTH * b for b in range(BINS + 1)]
awkward_x = st.sampled_from(
    bin_edges
    + [np.nextafter(edge, -math.inf) for edge in bin_edges]
    + [np.nextafter(edge, math.inf) for edge in bin_edges]
    + [math.nan, math.inf, -math.inf, 0.0, -0.0, 1e300, -1e300, 5e-324]
)
xs = st.one_of(st.floats(ORIGIN, HIGH), awkward_x)
ys = st.one_of(
    st.floats(-100.0, 100.0),
    st.sampled_from([math.nan, math.inf, -math.inf, 1e33, -1e33, 1e-300, 0.0]),
)
factors = st.one_of(
    st.floats(0.1, 10.0), st.sampled_from([0.0, -1.0, math.nan, math.inf, -math.inf, 1.0])
)
rows = st.lists(st.tuples(xs, ys, factors, factors), max_size=60)


def empty_table(slots):
    table = np.zeros((BINS, slots))
    table[:, accumulate.PILOT] = PILOT
    return table, np.array([math.inf, -math.inf]), np.zeros(len(accumulate.REASONS), np.int64)


def add(kind, table, extent, refused, x, y, weight, count):
    scale = (ORIGIN, 1.0 / WIDTH, extent, refused)
    if kind == "plain":
        accumulate.accumulate_rows(table, x, y, *scale)
    elif kind == "counted":
        accumulate.accumulate_counted(table, x, y, count, *scale)
    else:
        accumulate.accumulate_weighted(table, x, y, weight, count, *scale)


def columns(listed):
    return [np.array([row[i] for row in listed], np.float64) for i in range(4)]


def refused_by_reason(refused):
    return {
        reason: int(number)
        for reason, number in zip(accumulate.REASONS, refused, strict=True)
        if number
    }


@pytest.mark.parametrize("kind", ["plain", "counted", "weighted"])
@given(listed=rows)
def test_sums_are_those_of_plain_loops(kind, listed):
    x, y, weight, count = columns(listed)
    if kind != "weighted":
        weight = np.ones_like(weight)
    if kind == "plain":
        count = np.ones_like(count)
    table, extent, refused = empty_table(16 if kind == "weighted" else 8)
    add(kind, table, extent, refused, x, y, weight, count)
    sums, sizes, reasons, used = oracle.moments(
        x.tolist(), y.tolist(), weight.tolist(), count.tolist(), ORIGIN, WIDTH, BINS, PILOT
    )
    assert refused_by_reason(refused) == reasons
    assert tuple(extent) == used
    assert table[:, accumulate.PILOT].tolist() == PILOT
    for b in range(BINS):
        for slot, name in enumerate(WEIGHTED_SLOTS[: table.shape[1]]):
            if name is None or slot >= len(WEIGHTED_SLOTS):
                continue
            expected = sums.get(b, {}).get(name, 0.0)
            # Rounding of v counts as much as the width of a bin.
            size = sizes.get(b, {}).get(name, 0.0) + sizes.get(b, {}).get(name.replace("v", ""), 0)
            assert table[b, slot] == pytest.approx(expected, rel=0.0, abs=1e-13 * size), name


def test_every_reason_is_met_and_the_first_one_counts():
    nan, inf = math.nan, math.inf
    bad = [
        (nan, nan, nan, nan, "x NaN"),
        (inf, nan, 1.0, 1.0, "x infinite"),
        (-inf, 1.0, 1.0, 1.0, "x infinite"),
        (0.0, nan, 0.0, 1.0, "y NaN"),
        (0.0, -inf, 1.0, 1.0, "y infinite"),
        (0.0, 1.0, nan, nan, "weight NaN"),
        (0.0, 1.0, 0.0, 1.0, "weight zero"),
        (0.0, 1.0, -1.0, 1.0, "weight negative or infinite"),
        (0.0, 1.0, inf, 1.0, "weight negative or infinite"),
        (0.0, 1.0, 1.0, nan, "count NaN"),
        (0.0, 1.0, 1.0, -0.0, "count zero"),
        (0.0, 1.0, 1.0, -2.0, "count negative or infinite"),
        (0.0, 1.0, 1.0, inf, "count negative or infinite"),
        (np.nextafter(ORIGIN, -inf), 1.0, 1.0, 1.0, "x below range"),
        (HIGH, 1.0, 1.0, 1.0, "x above range"),
    ]
    for *row, reason in bad:
        table, extent, refused = empty_table(16)
        before = table.copy()
        add("weighted", table, extent, refused, *columns([row]))
        assert refused_by_reason(refused) == {reason: 1}
        assert np.array_equal(table, before)
        assert tuple(extent) == (math.inf, -math.inf)
    assert {row[-1] for row in bad} == set(accumulate.REASONS)


def test_both_ends_of_the_bins():
    table, extent, refused = empty_table(8)
    last = HIGH - 1e-12
    x = np.array([ORIGIN, last])
    accumulate.accumulate_rows(
        table, x, np.array([20.0, 30.0]), ORIGIN, 1.0 / WIDTH, extent, refused
    )
    assert not refused.any()
    assert table[0, 0] == table[-1, 0] == 1.0
    assert table[0, 1] == -0.5
    assert table[-1, 1] == pytest.approx(0.5)
    assert tuple(extent) == (ORIGIN, last)


def test_empty_input_changes_nothing():
    for kind, slots in (("plain", 8), ("counted", 8), ("weighted", 16)):
        table, extent, refused = empty_table(slots)
        none = np.empty(0)
        add(kind, table, extent, refused, none, none, none, none)
        assert not table[:, : accumulate.PILOT].any()
        assert not refused.any()


def test_read_only_input_is_accepted_and_unchanged():
    x, y = np.array([0.0, 1.0, math.nan]), np.array([20.0, 21.0, 22.0])
    for array in (x, y):
        array.setflags(write=False)
    table, extent, refused = empty_table(8)
    accumulate.accumulate_rows(table, x, y, ORIGIN, 1.0 / WIDTH, extent, refused)
    assert table[:, 0].sum() == 2.0
    assert x[:2].tolist() == [0.0, 1.0]


def test_a_huge_outlier_does_not_touch_other_bins():
    x = np.array([0.1, 0.2, 3.1, 3.2])
    clean = np.array([20.0, 21.0, 22.0, 23.0])
    spoilt = np.array([20.0, 21.0, 1e33, 23.0])
    tables = []
    for y in (clean, spoilt):
        table, extent, refused = empty_table(8)
        accumulate.accumulate_rows(table, x, y, ORIGIN, 1.0 / WIDTH, extent, refused)
        tables.append(table)
    b = int((3.1 - ORIGIN) / WIDTH)
    others = np.arange(BINS) != b
    assert np.array_equal(tables[0][others], tables[1][others])


@pytest.mark.parametrize("offset", [0.0, 1e9, 1e12])
def test_squares_keep_their_digits_when_y_is_large(offset):
    """Variance of y = offset + 0.1, 0.2, 0.3, ... from the sums (the NumAcc4 of NIST StRD)."""
    y = offset + np.tile([0.1, 0.2, 0.3], 500)
    x = np.zeros(y.size)
    table = np.zeros((1, 8))
    table[0, accumulate.PILOT] = float(np.float32(offset))
    extent = np.array([math.inf, -math.inf])
    refused = np.zeros(len(accumulate.REASONS), np.int64)
    accumulate.accumulate_rows(table, x, y, -0.5, 1.0, extent, refused)
    n, e, e2 = table[0, 0], table[0, 3], table[0, 6]
    exact = math.fsum((one - math.fsum(y) / y.size) ** 2 for one in y.tolist())
    # At 1e12 a float's own spacing is 1.2e-4, and single precision of the pilot leaves 4096.
    assert e2 - e * e / n == pytest.approx(exact, rel=1e-9 if offset < 1e12 else 1e-2)
