"""Sorted rows into kernel sums over windows, exactly: the sums of every row at every row.

For rows sorted by x, a bandwidth h and a kernel that is a polynomial in |u| on [-1, 1],

    S_j(i) = sum_r c w K(u) u^j,   T_j(i) = sum_r c w y K(u) u^j,   u = (x_r - x_i) / h,

over the window |x_r - x_i| <= h (differences as rounded, so that r is in the window of i exactly
when i is in the window of r). c is how many equal rows a row stands for, w its precision. Cost
per row does not depend on h, and no sum is ever subtracted from another: what lies outside a
window has no part in it, to the last bit.

How: rows are taken in cells, a cell being the rows up to h above its first row. Every window of
a cell's rows is then a stretch that ends where the cell begins, the whole cell, and a stretch
that begins where the cell ends; the two stretches are growing sums (an *arm*: so many rows
counted from an origin), tabulated a block at a time from checkpoints. The power sums are taken
about one row amid the cell and moved to x_i by the binomial theorem. Kernels in |u| take the
rows left and right of x_i apart: two arms each, all from the cell's two ends. Where windows hold
few rows, they are summed row by row. Sources: moving-window sums for polynomial kernels, Gasser &
Kneip (1989, Ann. Stat. 17:532); Seifert, Brockmann, Engel & Gasser (1994, JCGS 3:192); Fan &
Marron (1994, JCGS 3:35). Cells in place of their updating sums are ours.

Parallel work is the caller's: every kernel takes a range of rows. A row's sums depend on where
its range begins (in the last digits), so fix the ranges before the number of threads.

Common parameters: `x` (n,) ascending and finite, `y` (n,) finite, best less a common reference;
`weight` (n,) c w, or (0,) when all are 1; `bandwidth` h > 0, and 1 / h finite;
`coefficients` (degree + 1,), K(u) = sum_q coefficients[q] |u|^q; `begin`, `end` the rows wanted.
"""

from typing import NamedTuple

import numpy as np

from .compiled import (
    READ_1D,
    READ_2D,
    READ_3D,
    READ_BOOL_1D,
    READ_INT_1D,
    WRITE_1D,
    WRITE_2D,
    WRITE_3D,
    WRITE_INT_1D,
    helper,
    kernel,
    sum_kernel,
    types,
)
from .localfit import LOST, RESIDUAL, SCORE, SLOPE, TRACE, UNIT_LEVERAGE, VALUE

WRITE_INT_2D = types.int64[:, ::1]
_SLOTS = 256  # rows evaluated at a time
_BLOCK = 128  # rows between the checkpoints of an arm
_COLUMNS = _SLOTS + 3 * _BLOCK  # of an arm's table: as many rows as its slots meet, if not more
_REACH = 16  # windows that end before this many rows on either side are summed row by row
_STRIDE = 8  # added to the length of work rows, so that they do not share cache sets
_ONE = np.uint64(1)
# Entries of `Work.state`.
_CELL_START, _CELL_END, _LOW, _HIGH, _PLANNED = range(5)
# Entries of an arm: where it begins, its step, the block of the last segment (-1: none), how many
# blocks the growing carry holds, segments and columns in use.
_ORIGIN, _STEP, _AT, _CARRIED, _SEGMENTS, _FILLED = range(6)
# Entries of a segment: first row, rows, first column.
_FIRST, _ROWS, _COLUMN = range(3)


class Work(NamedTuple):
    """Work space for one range of rows: allocated once, passed to the kernels of the range.

    Arms come in pairs, one that shortens from row to row (even index) and one that grows (odd);
    kernels in u have one pair, kernels in |u| two: left and right of x_i.
    """

    state: np.ndarray  # the cell, the edges of the last window, slots tabulated per pair
    centre: np.ndarray  # (1,) place about which the cell's power sums are taken
    wanted: np.ndarray  # (rows,) power sums that the kernel needs
    terms: np.ndarray  # (4, columns) v, w v^q, w y v^q, w of the rows in the segments
    arms: np.ndarray  # (arms, 6)
    segments: np.ndarray  # (arms, slots, 3)
    centres: np.ndarray  # (arms, slots) each segment's cell's centre
    carries: np.ndarray  # (arms, blocks, rows) power sums up to each block; see `_start_arm`
    tables: np.ndarray  # (arms, rows, columns) growing power sums over each segment
    lengths: np.ndarray  # (arms, slots) rows in each arm
    columns: np.ndarray  # (arms, slots) where the tables hold them
    moments: np.ndarray  # (pairs of arms, rows, slots) power sums about the slot's centre
    edges: np.ndarray  # (2, slots)
    shift: np.ndarray  # (slots,) (centre - x) / h
    sums: np.ndarray  # (3 degree + 2, slots) the result: S_0, S_1, ..., then T_0, T_1, ...


_INTEGERS = types.int64[:, ::1]
WORK = types.NamedTuple(
    [
        types.int64[::1], WRITE_1D, types.boolean[::1], WRITE_2D, _INTEGERS,
        types.int64[:, :, ::1], WRITE_2D, WRITE_3D, WRITE_3D, _INTEGERS, _INTEGERS, WRITE_3D,
        _INTEGERS, WRITE_1D, WRITE_2D,
    ],
    Work,
)  # fmt: skip


@helper
def _round_up(pairs):
    """Pairs of power sums are taken four at a time."""
    return (pairs + 3) // 4 * 4


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, types.int64, types.int64, types.float64, types.float64,
               types.int64, WRITE_2D)
)  # fmt: skip
def _load(x, y, weight, first, count, centre, per_unit, column, terms):
    """Terms of rows first, first + 1, ...: v = (x - centre) per_unit, w v, w y, and w."""
    xs = x[first : first + count]
    ys = y[first : first + count]
    v = terms[0, column : column + count]
    a = terms[1, column : column + count]
    b = terms[2, column : column + count]
    for k in range(count):
        t = (xs[k] - centre) * per_unit
        v[k] = t
        a[k] = t
        b[k] = ys[k]
    if weight.shape[0] > 0:
        ws = weight[first : first + count]
        w = terms[3, column : column + count]
        for k in range(count):
            w[k] = ws[k]
            a[k] *= ws[k]
            b[k] *= ws[k]


@sum_kernel(
    types.void(WRITE_2D, types.int64, types.int64, types.int64, types.int64, types.int64, WRITE_3D)
)
def _add_four(terms, count, s_row, t_row, arm, at, carries):
    """Add four pairs of power sums to carries[arm, at]; leave the next powers in `terms`."""
    totals = carries[arm, at]
    v = terms[0]
    a = terms[1]
    b = terms[2]
    s1 = s2 = s3 = s4 = 0.0
    t1 = t2 = t3 = t4 = 0.0
    for k in range(count):
        u = v[k]
        p = a[k]
        q = b[k]
        s1 += p
        t1 += q
        p *= u
        q *= u
        s2 += p
        t2 += q
        p *= u
        q *= u
        s3 += p
        t3 += q
        p *= u
        q *= u
        s4 += p
        t4 += q
        a[k] = p * u
        b[k] = q * u
    totals[s_row] += s1
    totals[s_row + 1] += s2
    totals[s_row + 2] += s3
    totals[s_row + 3] += s4
    totals[t_row] += t1
    totals[t_row + 1] += t2
    totals[t_row + 2] += t3
    totals[t_row + 3] += t4


@sum_kernel(types.float64(READ_2D, types.int64, types.int64))
def _add_one(terms, row, count):
    """Sum of the first `count` terms of a row."""
    values = terms[row]
    total = 0.0
    for k in range(count):
        total += values[k]
    return total


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, types.int64, types.int64, types.float64, types.float64,
               types.int64, types.int64, WRITE_2D, WRITE_3D)
)  # fmt: skip
def _add_block(x, y, weight, first, count, centre, per_unit, arm, at, terms, carries):
    """Add the power sums of rows first, first + 1, ... to carries[arm, at]."""
    pairs = (carries.shape[2] - 1) // 2
    _load(x, y, weight, first, count, centre, per_unit, 0, terms)
    carries[arm, at, 0] += _add_one(terms, 3, count) if weight.shape[0] > 0 else count
    for q in range(0, pairs, 4):
        _add_four(terms, count, 1 + q, 1 + pairs + q, arm, at, carries)


@kernel(
    types.void(WRITE_2D, types.int64[:, :, ::1], types.int64, types.int64, types.boolean,
               types.int64, types.int64, WRITE_3D)
)  # fmt: skip
def _scan_four(terms, segments, arm, count, down, s_row, t_row, tables):
    """Growing sums of four pairs of powers over each segment, from its first column on.

    A segment's rows lie in `terms` from its first column + 1 on, and are taken from the last
    to the first where `down`; afterwards `terms` holds the next powers.
    Written out: eight sums live in registers (1.4 ns a row).
    """
    v = terms[0]
    a = terms[1]
    b = terms[2]
    r1 = tables[arm, s_row]
    r2 = tables[arm, s_row + 1]
    r3 = tables[arm, s_row + 2]
    r4 = tables[arm, s_row + 3]
    q1 = tables[arm, t_row]
    q2 = tables[arm, t_row + 1]
    q3 = tables[arm, t_row + 2]
    q4 = tables[arm, t_row + 3]
    stride = np.uint64(-1 if down else 1)
    for segment in range(count):
        rows = segments[arm, segment, _ROWS]
        j = np.uint64(segments[arm, segment, _COLUMN])
        i = j + np.uint64(rows) if down else j + _ONE
        s1 = r1[j]
        s2 = r2[j]
        s3 = r3[j]
        s4 = r4[j]
        t1 = q1[j]
        t2 = q2[j]
        t3 = q3[j]
        t4 = q4[j]
        for _ in range(rows):
            u = v[i]
            p = a[i]
            q = b[i]
            j += _ONE
            s1 += p
            t1 += q
            r1[j] = s1
            q1[j] = t1
            p *= u
            q *= u
            s2 += p
            t2 += q
            r2[j] = s2
            q2[j] = t2
            p *= u
            q *= u
            s3 += p
            t3 += q
            r3[j] = s3
            q3[j] = t3
            p *= u
            q *= u
            s4 += p
            t4 += q
            r4[j] = s4
            q4[j] = t4
            a[i] = p * u
            b[i] = q * u
            i += stride


@kernel(
    types.void(READ_2D, types.int64[:, :, ::1], types.int64, types.int64, types.boolean, WRITE_3D)
)
def _scan_one(terms, segments, arm, count, down, tables):
    """Growing sums of the weights; otherwise as `_scan_four`."""
    values = terms[3]
    out = tables[arm, 0]
    for segment in range(count):
        rows = segments[arm, segment, _ROWS]
        column = segments[arm, segment, _COLUMN]
        total = out[column]
        for k in range(rows):
            total += values[column + rows - k if down else column + 1 + k]
            out[column + 1 + k] = total


@kernel(types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64, WORK))
def _start_arm(x, y, weight, per_unit, arm, longest, work):
    """Prepare the carries of an arm whose origin was set: power sums over its first blocks.

    An arm that shortens needs its farthest block first, so all its blocks are summed now, up
    to `longest` rows. An arm that grows is summed as it grows: row 0 of its carries.
    """
    arms = work.arms
    carries = work.carries
    arms[arm, _AT] = -1
    arms[arm, _CARRIED] = 0
    rows = carries.shape[2]
    for row in range(rows):
        carries[arm, 0, row] = 0.0
    if arms[arm, _STEP] > 0:
        return
    for at in range(longest // _BLOCK):
        for row in range(rows):
            carries[arm, at + 1, row] = 0.0
        first = arms[arm, _ORIGIN] - (at + 1) * _BLOCK
        _add_block(
            x, y, weight, first, _BLOCK, work.centre[0], per_unit, arm, at + 1, work.terms, carries
        )
        for row in range(rows):
            carries[arm, at + 1, row] += carries[arm, at, row]


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64, types.int64,
               WORK)
)  # fmt: skip
def _add_segment(x, y, weight, per_unit, arm, at, rows, work):
    """Plan a segment: the first `rows` rows of block `at` of an arm, on top of its carry."""
    arms = work.arms
    carries = work.carries
    powers = carries.shape[2]
    centre = work.centre[0]
    origin = arms[arm, _ORIGIN]
    down = arms[arm, _STEP] < 0
    if not down:
        for passed in range(arms[arm, _CARRIED], at):
            for row in range(powers):
                carries[arm, 1, row] = 0.0
            first = origin + passed * _BLOCK
            _add_block(
                x, y, weight, first, _BLOCK, centre, per_unit, arm, 1, work.terms, carries
            )
            for row in range(powers):
                carries[arm, 0, row] += carries[arm, 1, row]
        arms[arm, _CARRIED] = max(arms[arm, _CARRIED], at)
    segment = arms[arm, _SEGMENTS]
    column = arms[arm, _FILLED]
    first = origin - at * _BLOCK - rows if down else origin + at * _BLOCK
    work.segments[arm, segment, _FIRST] = first
    work.segments[arm, segment, _ROWS] = rows
    work.segments[arm, segment, _COLUMN] = column
    work.centres[arm, segment] = centre
    source = at if down else 0
    for row in range(powers):
        work.tables[arm, row, column] = carries[arm, source, row]
    arms[arm, _AT] = at
    arms[arm, _SEGMENTS] = segment + 1
    arms[arm, _FILLED] = column + rows + 1


@kernel(types.void(READ_3D, types.int64[:, ::1], types.int64, types.int64, types.int64, types.int64,
                   WRITE_3D))  # fmt: skip
def _join(tables, columns, side, row, begin, end, moments):
    """Sum over a window = sum over the arm that shortens + sum over the arm that grows."""
    down = tables[2 * side, row]
    up = tables[2 * side + 1, row]
    down_columns = columns[2 * side]
    up_columns = columns[2 * side + 1]
    out = moments[side, row]
    for k in range(np.uint64(begin), np.uint64(end)):
        out[k] = down[np.uint64(down_columns[k])] + up[np.uint64(up_columns[k])]


@kernel(types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64, WORK))
def _tabulate(x, y, weight, per_unit, side, end, work):
    """Make the tables of a pair of arms, and join them for the slots planned, up to `end`."""
    begin = work.state[_PLANNED + side]
    arms = work.arms
    segments = work.segments
    rows = work.tables.shape[1]
    pairs = (rows - 1) // 2
    weighted = weight.shape[0] > 0
    for arm in range(2 * side, 2 * side + 2):
        count = arms[arm, _SEGMENTS]
        down = arms[arm, _STEP] < 0
        for segment in range(count):
            _load(
                x, y, weight, segments[arm, segment, _FIRST], segments[arm, segment, _ROWS],
                work.centres[arm, segment], per_unit, segments[arm, segment, _COLUMN] + 1,
                work.terms,
            )  # fmt: skip
        if weighted:
            _scan_one(work.terms, segments, arm, count, down, work.tables)
        for q in range(0, pairs, 4):
            _scan_four(work.terms, segments, arm, count, down, 1 + q, 1 + pairs + q, work.tables)
        arms[arm, _AT] = -1
        arms[arm, _SEGMENTS] = 0
        arms[arm, _FILLED] = 0
    if not weighted:
        for k in range(begin, end):
            work.moments[side, 0, k] = work.lengths[2 * side, k] + work.lengths[2 * side + 1, k]
    for row in range(0 if weighted else 1, rows):
        if work.wanted[row]:
            _join(work.tables, work.columns, side, row, begin, end, work.moments)
    work.state[_PLANNED + side] = end


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64, types.int64,
               WORK)
)  # fmt: skip
def _plan_slots(x, y, weight, per_unit, begin, end, side, work):
    """Plan the segments that a cell's slots need, and note in which columns they will find them."""
    a = 2 * side
    b = a + 1
    arms = work.arms
    lengths = work.lengths
    longest = lengths[b, end - 1]
    k = begin
    while k < end:
        down_at = lengths[a, k] // _BLOCK
        up_at = lengths[b, k] // _BLOCK
        # The slots whose arms end in the same two blocks.
        low = k + 1
        high = end
        while low < high:
            middle = (low + high) // 2
            if (
                lengths[a, middle] >= down_at * _BLOCK
                and lengths[b, middle] < (up_at + 1) * _BLOCK
            ):
                low = middle + 1
            else:
                high = middle
        if max(arms[a, _FILLED], arms[b, _FILLED]) + _BLOCK + 1 > _COLUMNS:
            _tabulate(x, y, weight, per_unit, side, k, work)
        if down_at != arms[a, _AT]:
            rows = lengths[a, k] - down_at * _BLOCK
            _add_segment(x, y, weight, per_unit, a, down_at, rows, work)
        if up_at != arms[b, _AT]:
            rows = min(longest - up_at * _BLOCK, _BLOCK - 1)
            _add_segment(x, y, weight, per_unit, b, up_at, rows, work)
        down_shift = work.segments[a, arms[a, _SEGMENTS] - 1, _COLUMN] - down_at * _BLOCK
        up_shift = work.segments[b, arms[b, _SEGMENTS] - 1, _COLUMN] - up_at * _BLOCK
        for slot in range(k, low):
            work.columns[a, slot] = lengths[a, slot] + down_shift
            work.columns[b, slot] = lengths[b, slot] + up_shift
        k = low


@kernel(types.int64(READ_1D, types.int64, types.float64, types.float64))
def first_beyond(x, start, place, reach):
    """Return the first index from `start` on with x - place > reach, or n; by doubling steps."""
    n = x.shape[0]
    step = 1
    low = start
    high = start
    while high < n and x[high] - place <= reach:
        low = high + 1
        high = min(n, high + step)
        step *= 2
    while low < high:
        middle = (low + high) // 2
        if x[middle] - place <= reach:
            low = middle + 1
        else:
            high = middle
    return low


@kernel(types.int64(READ_1D, types.int64, types.float64, types.float64))
def first_within(x, start, place, reach):
    """Return the first index from `start` on with place - x <= reach, or n; by doubling steps."""
    n = x.shape[0]
    step = 1
    low = start
    high = start
    while high < n and place - x[high] > reach:
        low = high + 1
        high = min(n, high + step)
        step *= 2
    while low < high:
        middle = (low + high) // 2
        if place - x[middle] > reach:
            low = middle + 1
        else:
            high = middle
    return low


@helper
def _step_high(x, j, place, reach):
    """Move j to the first row beyond the window, four rows at a look."""
    while True:
        passed = (
            np.uint64(x[j] - place <= reach)
            + np.uint64(x[j + np.uint64(1)] - place <= reach)
            + np.uint64(x[j + np.uint64(2)] - place <= reach)
            + np.uint64(x[j + np.uint64(3)] - place <= reach)
        )
        j += passed
        if passed < np.uint64(4):
            break
    return j


@helper
def _step_low(x, j, place, reach):
    """Move j to the first row of the window, four rows at a look."""
    while True:
        passed = (
            np.uint64(place - x[j] > reach)
            + np.uint64(place - x[j + np.uint64(1)] > reach)
            + np.uint64(place - x[j + np.uint64(2)] > reach)
            + np.uint64(place - x[j + np.uint64(3)] > reach)
        )
        j += passed
        if passed < np.uint64(4):
            break
    return j


@kernel(types.void(READ_1D, types.float64, types.int64, types.int64, WRITE_INT_1D, WRITE_INT_1D,
                   WRITE_INT_1D))  # fmt: skip
def _find_edges(x, bandwidth, first, count, edges, lows, highs):
    """Windows of rows first, first + 1, ...: row r of slot k is in it when lows <= r < highs.

    `edges` (2,) holds indices not above the first row's edges, and gets the last row's. Four
    stretches of rows go side by side, each looking four rows ahead: a jump on every comparison
    costs three times as much on irregular data (measured 11 against 4 ns a row).
    """
    n = x.shape[0]
    low = first_within(x, edges[0], x[first], bandwidth)
    high = first_beyond(x, edges[1], x[first], bandwidth)
    last = x[first + count - 1]
    last_low = first_within(x, low, last, bandwidth)
    last_high = first_beyond(x, high, last, bandwidth)
    edges[0] = last_low
    edges[1] = last_high
    quarter = count // 4 if last_high + 4 <= n else 0
    if quarter > 0:
        k1 = np.uint64(quarter)
        k2 = np.uint64(2 * quarter)
        k3 = np.uint64(3 * quarter)
        xs = x[first : first + count]
        l0 = np.uint64(low)
        h0 = np.uint64(high)
        l1 = np.uint64(first_within(x, low, xs[k1], bandwidth))
        h1 = np.uint64(first_beyond(x, high, xs[k1], bandwidth))
        l2 = np.uint64(first_within(x, l1, xs[k2], bandwidth))
        h2 = np.uint64(first_beyond(x, h1, xs[k2], bandwidth))
        l3 = np.uint64(first_within(x, l2, xs[k3], bandwidth))
        h3 = np.uint64(first_beyond(x, h2, xs[k3], bandwidth))
        for k in range(k1):
            place = xs[k]
            l0 = _step_low(x, l0, place, bandwidth)
            lows[k] = l0
            h0 = _step_high(x, h0, place, bandwidth)
            highs[k] = h0
            place = xs[k1 + k]
            l1 = _step_low(x, l1, place, bandwidth)
            lows[k1 + k] = l1
            h1 = _step_high(x, h1, place, bandwidth)
            highs[k1 + k] = h1
            place = xs[k2 + k]
            l2 = _step_low(x, l2, place, bandwidth)
            lows[k2 + k] = l2
            h2 = _step_high(x, h2, place, bandwidth)
            highs[k2 + k] = h2
            place = xs[k3 + k]
            l3 = _step_low(x, l3, place, bandwidth)
            lows[k3 + k] = l3
            h3 = _step_high(x, h3, place, bandwidth)
            highs[k3 + k] = h3
        low = np.int64(l3)
        high = np.int64(h3)
    for k in range(4 * quarter, count):
        place = x[first + k]
        while place - x[low] > bandwidth:
            low += 1
        while high < n and x[high] - place <= bandwidth:
            high += 1
        lows[k] = low
        highs[k] = high


@kernel(types.boolean(READ_1D, types.float64, types.int64, types.int64))
def _all_short(x, bandwidth, first, count):
    """Whether all windows of these rows end before `_REACH` rows on either side."""
    n = x.shape[0]
    begin = max(first - _REACH, 0)
    end = min(first + count, n - _REACH)
    if end > begin and x[begin + _REACH] - x[begin] <= bandwidth:
        return False
    near = x[begin:end]
    far = x[begin + _REACH : end + _REACH]
    long = 0
    for k in range(end - begin):
        long += far[k] - near[k] <= bandwidth
    return long == 0


@kernel(
    types.int64(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64,
                types.int64, types.int64, WRITE_2D, WRITE_2D)
)  # fmt: skip
def _add_neighbours(
    x, y, weight, coefficients, bandwidth, degree, first, count, offset, block, sums
):
    """Add to the sums of each slot the row `offset` places away; return how many were in reach."""
    n = x.shape[0]
    begin = max(0, -offset - first)
    end = min(count, n - offset - first)
    if end <= begin:
        return 0
    size = end - begin
    here = x[first + begin : first + end]
    there = x[first + begin + offset : first + end + offset]
    ys = y[first + begin + offset : first + end + offset]
    u = block[0]
    g = block[1]
    w = block[2]
    per_unit = 1.0 / bandwidth
    top = coefficients.shape[0] - 1
    highest = coefficients[top]
    met = 0
    for k in range(size):
        d = there[k] - here[k]
        inside = abs(d) <= bandwidth
        met += inside
        u[k] = d * per_unit if inside else 0.0
        g[k] = highest if inside else 0.0
        w[k] = 1.0 if inside else 0.0
    if weight.shape[0] > 0:
        ws = weight[first + begin + offset : first + end + offset]
        for k in range(size):
            w[k] *= ws[k]
            g[k] *= ws[k]
    for q in range(top - 1, -1, -1):
        c = coefficients[q]
        for k in range(size):
            g[k] = g[k] * abs(u[k]) + c * w[k]
    for j in range(2 * degree + 1):
        s = sums[j, begin:end]
        if j <= degree:
            t = sums[2 * degree + 1 + j, begin:end]
            for k in range(size):
                s[k] += g[k]
                t[k] += g[k] * ys[k]
                g[k] *= u[k]
        else:
            for k in range(size):
                s[k] += g[k]
                g[k] *= u[k]
    return met


@kernel(
    types.void(WRITE_2D, READ_1D, READ_1D, types.boolean, types.int64, types.int64, types.int64,
               WRITE_2D)
)  # fmt: skip
def _add_sums(moments, shift, coefficients, left, degree, pairs, count, sums):
    """Add kernel sums made of power sums about a centre: `shift` (slots,) is (centre - x_i) / h.

    Moved to x_i by sum w (v + s)^r = sum w v (v + s)^(r-1) + s sum w (v + s)^(r-1), in place.
    `left`: the rows lie left of x_i, where |u|^q = (-1)^q u^q.
    """
    top = coefficients.shape[0] - 1
    for first, last in ((0, top + 2 * degree), (1 + pairs, 1 + pairs + top + degree)):
        for start in range(first + 1, last + 1):
            for row in range(last, start - 1, -1):
                upper = moments[row]
                lower = moments[row - 1]
                for k in range(count):
                    upper[k] += shift[k] * lower[k]
    for j in range(3 * degree + 2):
        row = j if j <= 2 * degree else 1 + pairs + j - (2 * degree + 1)
        out = sums[j]
        for q in range(top + 1):
            c = coefficients[q]
            if c == 0.0:
                continue
            if left and q % 2 == 1:
                c = -c
            source = moments[row + q]
            for k in range(count):
                out[k] += c * source[k]




@kernel(WORK(types.int64, READ_1D, types.int64))
def make_work(n, coefficients, degree):
    """Allocate the work space for n rows, a kernel and a local polynomial of some degree."""
    top = coefficients.shape[0] - 1
    sides = 1
    for q in range(1, top + 1, 2):
        if coefficients[q] != 0.0:
            sides = 2
    pairs = _round_up(max(top + 2 * degree, top + degree + 1))
    rows = 2 * pairs + 1
    arms = np.zeros((2 * sides, 6), np.int64)
    for index in range(2 * sides):
        arms[index, _STEP] = 1 if index % 2 else -1
    wanted = np.zeros(rows, np.bool_)
    wanted[: top + 2 * degree + 1] = True
    wanted[1 + pairs : 2 + pairs + top + degree] = True
    slots = _SLOTS + _STRIDE
    columns = _COLUMNS + _STRIDE
    return Work(
        np.zeros(6, np.int64),
        np.zeros(1),
        wanted,
        np.zeros((4, columns)),
        arms,
        np.zeros((2 * sides, _SLOTS, 3), np.int64),
        np.zeros((2 * sides, _SLOTS)),
        np.empty((2 * sides, n // _BLOCK + 2, rows)),
        np.zeros((2 * sides, rows, columns)),
        np.zeros((2 * sides, slots), np.int64),
        np.zeros((2 * sides, slots), np.int64),
        np.zeros((sides, rows, slots)),
        np.zeros((2, slots), np.int64),
        np.zeros(slots),
        np.zeros((3 * degree + 2, slots)),
    )


@kernel(types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, WORK))
def _start_cell(x, y, weight, per_unit, slot, work):
    """Set up the cell that begins at the row of a slot: its centre and its arms."""
    start = work.state[_CELL_START]
    end = work.state[_CELL_END]
    # A row of the cell is in the windows of all rows of the cell. So where a window's rows all
    # but coincide, its power sums are taken about one of them, and keep their relative accuracy.
    work.centre[0] = x[(start + end) // 2]
    for index in range(work.arms.shape[0]):
        left = index < 2
        work.arms[index, _ORIGIN] = start if left else end
        longest = start - work.edges[0, slot] if left else end - start - 1
        _start_arm(x, y, weight, per_unit, index, longest, work)


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64,
               types.int64, WORK)
)  # fmt: skip
def fill_sums(x, y, weight, coefficients, bandwidth, degree, first, count, work):
    """Put the kernel sums of rows first, first + 1, ... (at most `_SLOTS`) into `work.sums`.

    Ranges must follow each other: `work` carries the cell from one call to the next.
    """
    sums = work.sums
    sums[:] = 0.0
    state = work.state
    if _all_short(x, bandwidth, first, count):
        _add_neighbours(
            x, y, weight, coefficients, bandwidth, degree, first, count, 0, work.terms, sums
        )
        for offset in range(1, _REACH):
            met = 0
            for signed in (offset, -offset):
                met += _add_neighbours(
                    x, y, weight, coefficients, bandwidth, degree, first, count, signed,
                    work.terms, sums,
                )  # fmt: skip
            if met == 0:
                break
        state[_CELL_END] = first + count
        return
    lows = work.edges[0]
    highs = work.edges[1]
    _find_edges(x, bandwidth, first, count, state[_LOW:], lows, highs)
    sides = work.moments.shape[0]
    lengths = work.lengths
    per_unit = 1.0 / bandwidth
    here = x[first : first + count]
    state[_PLANNED:] = 0
    k = 0
    while k < count:
        if first + k >= state[_CELL_END]:
            state[_CELL_START] = first + k
            state[_CELL_END] = highs[k]
            _start_cell(x, y, weight, per_unit, k, work)
        start = state[_CELL_START]
        end = state[_CELL_END]
        stop = min(count, end - first)
        centre = work.centre[0]
        for slot in range(k, stop):
            work.shift[slot] = (centre - here[slot]) * per_unit
            lengths[0, slot] = start - lows[slot]
        if sides == 1:
            for slot in range(k, stop):
                lengths[1, slot] = highs[slot] - start
        else:
            for slot in range(k, stop):
                lengths[1, slot] = first + slot + 1 - start
                lengths[2, slot] = end - first - slot - 1
                lengths[3, slot] = highs[slot] - end
        for side in range(sides):
            _plan_slots(x, y, weight, per_unit, k, stop, side, work)
        k = stop
    pairs = (work.tables.shape[1] - 1) // 2
    for side in range(sides):
        _tabulate(x, y, weight, per_unit, side, count, work)
        left = sides == 2 and side == 0
        _add_sums(
            work.moments[side], work.shift, coefficients, left, degree, pairs, count, sums
        )


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64,
               types.int64, WRITE_2D)
)  # fmt: skip
def window_sums(x, y, weight, coefficients, bandwidth, degree, begin, end, out):
    """Kernel sums at rows begin to end for a local polynomial: S_0..S_2p, then T_0..T_p.

    `degree` p is 0 to 3; `out` (3 p + 2, end - begin). No window is empty: it holds its own row.
    """
    if end <= begin:
        return
    work = make_work(x.shape[0], coefficients, degree)
    for first in range(begin, end, _SLOTS):
        count = min(_SLOTS, end - first)
        fill_sums(x, y, weight, coefficients, bandwidth, degree, first, count, work)
        for j in range(out.shape[0]):
            for k in range(count):
                out[j, first - begin + k] = work.sums[j, k]
