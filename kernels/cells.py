"""Sorted rows into kernel sums over windows, exactly: the sums of every row at every row.

For rows sorted by x, a bandwidth h and a kernel that is a polynomial in |u| on [-1, 1],

    S_j(i) = sum_r c w K(u) u^j,   T_j(i) = sum_r c w y K(u) u^j,   u = (x_r - x_i) / h,

over the window |x_r - x_i| <= h (differences as rounded, so that r is in the window of i exactly
when i is in the window of r). c is how many equal rows a row stands for, w its precision. The
cost per row does not depend on h, and no sum is ever subtracted from another: what lies outside a
window has no part in it, to the last bit.

How: rows are taken in cells, a cell being the rows up to h above its first. Every window of a
cell's rows contains the cell. So it is a stretch that ends where the cell begins and a stretch
that begins there: two *arms*, each so many rows counted from an origin, one shrinking from row to
row and one growing. An arm's growing sums are tabulated block by block on top of the sums of
whole blocks (its carries). They are sums of powers of (x - centre) / h, the centre a row amid the
cell, and are moved to x_i by the binomial theorem. Kernels in |u| take the rows left and right of
x_i apart: two more arms begin where the cell ends. Where windows hold few rows they are summed
row by row. Sources: moving-window sums for polynomial kernels, Gasser & Kneip (1989, Ann. Stat.
17:532); Seifert, Brockmann, Engel & Gasser (1994, JCGS 3:192); Fan & Marron (1994, JCGS 3:35).
The cells in place of their updating sums are ours.

Rows are handled in slots, up to `SLOTS` rows at a time. What calls others is one function,
`fill_sums`: a compiled function that calls others counts references to its arrays on every call.
"""

from typing import NamedTuple

import numpy as np

from .compiled import READ_1D, READ_3D, WRITE_2D, WRITE_3D, kernel, types
from .edges import (
    CELL_END,
    CELL_START,
    HIGHS,
    INTEGERS_2D,
    INTEGERS_3D,
    LOWS,
    OWN,
    all_short,
    find_edges,
)
from .powersums import (
    BLOCK,
    CARRIED,
    CHUNK,
    COLUMN,
    EDGE,
    FILLED,
    FIRST,
    ORIGIN,
    PLACE,
    ROWS,
    SEGMENTS,
    add_neighbours,
    add_sums,
    copy_weights,
    join,
    join_counts,
    kernel_profile,
    load_segments,
    scan_four,
    scan_one,
    scan_two,
    sum_block,
    weigh_segments,
)

SLOTS = 1024  # rows evaluated at a time
_COLUMNS = SLOTS + 3 * BLOCK  # of an arm's table: as many rows as its slots meet, if not more
_REACH = 24  # windows that end before this many rows on either side are summed row by row
_STRIDE = 8  # added to the length of work rows, so that they do not share cache sets


class Work(NamedTuple):
    """Work space for one range of rows, allocated once.

    Arms come in pairs, one that shortens from row to row (even index) and one that grows (odd);
    kernels in u have one pair, kernels in |u| two: left and right of x_i.
    """

    arms: np.ndarray  # (arms + 1, 5)
    segments: np.ndarray  # (arms, slots, 3)
    places: np.ndarray  # (3 + arms, slots)
    centres: np.ndarray  # (arms + 1, slots) each segment's centre; last row: the cell's
    terms: np.ndarray  # (4, columns) v, w v^q, w y v^q, w of the rows in the segments
    carries: np.ndarray  # (arms, blocks, rows) power sums of an arm's first blocks
    tables: np.ndarray  # (arms, rows, columns) growing power sums over each segment
    moments: np.ndarray  # (pairs of arms, rows, slots) power sums about the slot's centre
    # (3 degree + 5, slots) S_0, S_1, ..., T_0, T_1, ..., (centre - x) / h; then, where windows are
    # not summed row by row, sum w and sum w u^2, else zeros.
    sums: np.ndarray


_WORK_TYPES = (
    INTEGERS_2D, INTEGERS_3D, INTEGERS_2D, WRITE_2D, WRITE_2D, WRITE_3D, WRITE_3D, WRITE_3D,
    WRITE_2D,
)  # fmt: skip
WORK = types.NamedTuple(_WORK_TYPES, Work)


@kernel(types.void(READ_1D, types.int64, types.int64, INTEGERS_2D, INTEGERS_2D, WRITE_2D, WRITE_3D))
def _open_cell(x, start, slot, arms, places, centres, carries):
    """Begin a cell with the row `start` of a slot."""
    state = arms.shape[0] - 1
    end = places[HIGHS, slot]
    arms[state, CELL_START] = start
    arms[state, CELL_END] = end
    # A row of the cell is in the windows of all rows of the cell. So where a window's rows all
    # but coincide, its power sums are taken about one of them, and keep their relative accuracy.
    centres[state, 0] = x[(start + end) // 2]
    for arm in range(state):
        arms[arm, ORIGIN] = start if arm < 2 else end
        arms[arm, CARRIED] = 0
        for row in range(carries.shape[2]):
            carries[arm, 0, row] = 0.0


@kernel(types.int64(types.int64, types.int64, types.int64, INTEGERS_2D, INTEGERS_2D))
def _fit_slots(side, begin, end, arms, places):
    """Return up to which of a cell's slots, begin to end, the tables have room for its arms.

    Tables take an arm's blocks whole, so its rows (lengths) lie in consecutive columns.
    """
    a = 2 * side
    down = arms[a, EDGE]
    up = arms[a + 1, EDGE]
    down_origin = arms[a, ORIGIN]
    up_origin = arms[a + 1, ORIGIN]
    down_room = (_COLUMNS - arms[a, FILLED]) // BLOCK
    up_room = (_COLUMNS - arms[a + 1, FILLED]) // BLOCK
    if min(down_room, up_room) < 1:
        return begin
    lowest = (down_origin - places[down, begin]) // BLOCK - down_room + 1
    highest = (places[up, begin] - up_origin) // BLOCK + up_room - 1
    low = begin + 1
    high = end
    while low < high:
        middle = (low + high + 1) // 2
        fits = (
            (down_origin - places[down, middle - 1]) // BLOCK >= lowest
            and (places[up, middle - 1] - up_origin) // BLOCK <= highest
        )  # fmt: skip
        low = middle if fits else low
        high = high if fits else middle - 1
    return low


@kernel(
    types.void(types.int64, types.int64, types.int64, INTEGERS_2D, INTEGERS_3D, INTEGERS_2D,
               WRITE_2D, READ_3D, WRITE_3D)
)  # fmt: skip
def _plan_slots(side, begin, end, arms, segments, places, centres, carries, tables):
    """Plan the segments that a cell's slots need, and note in which columns they will find them.

    A segment is one block of an arm, or its first rows, on top of the arm's carry.
    """
    state = arms.shape[0] - 1
    for arm in range(2 * side, 2 * side + 2):
        edge = arms[arm, EDGE]
        origin = arms[arm, ORIGIN]
        column = arms[arm, FILLED]
        segment = arms[arm, SEGMENTS]
        sign = 2 * (arm % 2) - 1
        first = sign * (places[edge, begin] - origin)
        last = sign * (places[edge, end - 1] - origin)
        longest = max(first, last)
        at = min(first, last) // BLOCK
        shift = column - at * BLOCK - sign * origin
        while at * BLOCK <= longest:
            rows = min(longest - at * BLOCK, BLOCK - 1)
            start = origin + at * BLOCK if sign > 0 else origin - at * BLOCK - rows
            segments[arm, segment, FIRST] = start
            segments[arm, segment, ROWS] = rows
            segments[arm, segment, COLUMN] = column
            centres[arm, segment] = centres[state, 0]
            for row in range(carries.shape[2]):
                tables[arm, row, column] = carries[arm, at, row]
            column += rows + 1
            segment += 1
            at += 1
        arms[arm, FILLED] = column
        arms[arm, SEGMENTS] = segment
        for slot in range(begin, end):
            places[PLACE + arm, slot] = sign * places[edge, slot] + shift


@kernel(
    types.void(READ_1D, types.int64, types.int64, types.int64, types.float64, types.float64,
               types.int64, WRITE_2D)
)  # fmt: skip
def _place_slots(x, first, begin, end, centre, per_unit, row, sums):
    """Distances from the rows of slots begin to end to their cell's centre, in bandwidths."""
    here = x[first + begin : first + end]
    out = sums[row, begin:end]
    for k in range(end - begin):
        out[k] = (centre - here[k]) * per_unit


@kernel(WRITE_3D(types.int64, types.int64, types.int64))
def aligned_rows(layers, rows, length):
    """Zeros (layers, rows, length), every row beginning on a cache line.

    Vectors that straddle two lines cost twice the time (measured: 2 of 20 ns a row).
    """
    line = 8  # float64 in 64 bytes
    stride = (length + line - 1) // line * line
    flat = np.zeros(layers * rows * stride + line)
    start = (-(flat.ctypes.data // 8)) % line
    whole = flat[start : start + layers * rows * stride].reshape((layers, rows, stride))
    return whole


@kernel(WORK(types.int64, READ_1D, types.int64))
def make_work(n, coefficients, degree):
    """Allocate the work space for n rows, a kernel and a local polynomial of some degree."""
    top = coefficients.shape[0] - 1
    sides = 1
    for q in range(1, top + 1, 2):
        if coefficients[q] != 0.0:
            sides = 2
    # Pairs S_(q + 1), T_q of power sums are taken four or two at a time.
    pairs = (max(top + 2 * degree, top + degree + 1) + 1) // 2 * 2
    rows = 2 * pairs + 1
    count = 2 * sides
    arms = np.zeros((count + 1, 5), np.int64)
    for arm in range(count):
        arms[arm, EDGE] = OWN
    arms[0, EDGE] = LOWS
    arms[count - 1, EDGE] = HIGHS
    slots = SLOTS + _STRIDE
    columns = _COLUMNS + _STRIDE
    terms = aligned_rows(1, 4, columns)[0]
    terms[:] = 1.0
    return Work(
        arms,
        np.zeros((count, SLOTS + _COLUMNS // BLOCK, 3), np.int64),
        np.zeros((PLACE + count, slots), np.int64),
        np.zeros((count + 1, SLOTS + _COLUMNS // BLOCK)),
        terms,
        np.empty((count, n // BLOCK + 2, rows)),
        aligned_rows(count, rows, columns),
        aligned_rows(sides, rows, slots),
        aligned_rows(1, 3 * degree + 5, slots)[0],
    )


@kernel(types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64,
                   types.int64, *_WORK_TYPES))  # fmt: skip
def fill_sums(
    x, y, weight, coefficients, bandwidth, degree, first, count,
    arms, segments, places, centres, terms, carries, tables, moments, sums,
):  # fmt: skip
    """Put the kernel sums of rows first, first + 1, ... (at most `SLOTS`) into `sums`.

    Ranges must follow each other: the work arrays carry the cell from one call to the next.
    """
    for row in range(sums.shape[0]):
        for k in range(count):
            sums[row, k] = 0.0
    state = arms.shape[0] - 1
    top = coefficients.shape[0] - 1
    n = x.shape[0]
    weighted = weight.shape[0] > 0
    if all_short(x, bandwidth, _REACH, first, count):
        power, times = kernel_profile(coefficients)
        for begin in range(0, count, CHUNK):
            end = min(count, begin + CHUNK)
            met = 1
            distance = 0
            while met > 0 and distance < _REACH:
                met = 0
                for sign in range(-1, 2 if distance > 0 else 0, 2):
                    offset = sign * distance
                    slot = max(begin, -offset - first)
                    size = min(end, n - offset - first) - slot
                    if size > 0:
                        if weighted:
                            copy_weights(weight, first + slot + offset, size, terms)
                        met += add_neighbours(
                            x, y, coefficients[0], power, times, bandwidth, degree, first + slot,
                            slot, size, offset, terms, sums,
                        )  # fmt: skip
                distance += 1
        arms[state, CELL_END] = first + count
        return
    find_edges(x, bandwidth, first, count, arms, places)
    sides = moments.shape[0]
    powers = carries.shape[2]
    pairs = (powers - 1) // 2
    per_unit = 1.0 / bandwidth
    done = 0
    while done < count:
        # As many slots as the tables have room for.
        k = done
        full = False
        while k < count and not full:
            if first + k >= arms[state, CELL_END]:
                _open_cell(x, first + k, k, arms, places, centres, carries)
            centre = centres[state, 0]
            stop = min(count, arms[state, CELL_END] - first)
            planned = stop
            for side in range(sides):
                planned = _fit_slots(side, k, planned, arms, places) if planned > k else k
            full = planned < stop
            if planned > k:
                _place_slots(x, first, k, planned, centre, per_unit, 3 * degree + 2, sums)
                for arm in range(state):
                    origin = arms[arm, ORIGIN]
                    grows = arm % 2 == 1
                    edge = places[arms[arm, EDGE], planned - 1 if grows else k]
                    needed = (edge - origin if grows else origin - edge) // BLOCK
                    while arms[arm, CARRIED] < needed:
                        at = arms[arm, CARRIED]
                        start = origin + at * BLOCK if grows else origin - (at + 1) * BLOCK
                        if weighted:
                            copy_weights(weight, start, BLOCK, terms)
                        sum_block(x, y, start, centre, per_unit, arm, at, terms, carries)
                        arms[arm, CARRIED] = at + 1
                for side in range(sides):
                    _plan_slots(side, k, planned, arms, segments, places, centres, carries, tables)
            k = planned
        for arm in range(state):
            segments_used = arms[arm, SEGMENTS]
            down = arm % 2 == 0
            load_segments(x, y, per_unit, arm, arms, segments, centres, terms)
            if weighted:
                weigh_segments(weight, arm, arms, segments, terms)
                scan_one(terms, segments, arm, segments_used, down, tables)
            for q in range(0, pairs - 3, 4):
                scan_four(terms, segments, arm, segments_used, down, 1 + q, 1 + pairs + q, tables)
            if pairs % 4 > 0:
                scan_two(
                    terms, segments, arm, segments_used, down, pairs - 1, 2 * pairs - 1, tables
                )
            arms[arm, SEGMENTS] = 0
            arms[arm, FILLED] = 0
        for side in range(sides):
            s_first = 0 if weighted else 1
            join(tables, places, side, s_first, top + 2 * degree, done, k, moments)
            join(tables, places, side, 1 + pairs, 1 + pairs + top + degree, done, k, moments)
        done = k
    for side in range(sides):
        if not weighted:
            join_counts(
                places, arms[2 * side, EDGE], arms[2 * side + 1, EDGE], side, count, moments
            )
        add_sums(moments, coefficients, side, sides == 2 and side == 0, degree, count, sums)
