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


@sum_kernel(types.void(WRITE_2D, types.int64, types.int64, types.int64, WRITE_1D))
def _add_four(terms, count, s_row, t_row, totals):
    """Add four pairs of power sums over a block to `totals`; leave the next powers in it."""
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


@sum_kernel(types.float64(READ_1D, types.int64))
def _add_one(values, count):
    """Sum of the first `count` values."""
    total = 0.0
    for k in range(count):
        total += values[k]
    return total


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, types.int64, types.int64, types.float64, types.float64,
               WRITE_2D, WRITE_1D)
)  # fmt: skip
def _add_block(x, y, weight, first, count, centre, per_unit, terms, totals):
    """Add the power sums of rows first, first + 1, ... to `totals` (rows,)."""
    pairs = (totals.shape[0] - 1) // 2
    _load(x, y, weight, first, count, centre, per_unit, 0, terms)
    totals[0] += _add_one(terms[3], count) if weight.shape[0] > 0 else count
    for q in range(0, pairs, 4):
        _add_four(terms, count, 1 + q, 1 + pairs + q, totals)


@kernel(
    types.void(WRITE_2D, types.int64[:, ::1], types.int64, types.boolean, types.int64,
               types.int64, WRITE_2D)
)  # fmt: skip
def _scan_four(terms, segments, count, down, s_row, t_row, table):
    """Growing sums of four pairs of powers over each segment, from its first column on.

    A segment's rows lie in `terms` from its first column + 1 on, and are taken from the last
    to the first where `down`; afterwards `terms` holds the next powers.
    Written out: eight sums live in registers (1.4 ns a row).
    """
    v = terms[0]
    a = terms[1]
    b = terms[2]
    r1 = table[s_row]
    r2 = table[s_row + 1]
    r3 = table[s_row + 2]
    r4 = table[s_row + 3]
    q1 = table[t_row]
    q2 = table[t_row + 1]
    q3 = table[t_row + 2]
    q4 = table[t_row + 3]
    stride = np.uint64(-1 if down else 1)
    for segment in range(count):
        rows = segments[segment, _ROWS]
        j = np.uint64(segments[segment, _COLUMN])
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


@kernel(types.void(READ_1D, types.int64[:, ::1], types.int64, types.boolean, WRITE_1D))
def _scan_one(values, segments, count, down, out):
    """Growing sums of one row of terms; otherwise as `_scan_four`."""
    for segment in range(count):
        rows = segments[segment, _ROWS]
        column = segments[segment, _COLUMN]
        total = out[column]
        for k in range(rows):
            total += values[column + rows - k if down else column + 1 + k]
            out[column + 1 + k] = total


@kernel(types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64, WORK))
def _start_arm(x, y, weight, per_unit, index, longest, work):
    """Prepare the carries of an arm whose origin was set: power sums over its first blocks.

    An arm that shortens needs its farthest block first, so all its blocks are summed now, up
    to `longest` rows. An arm that grows is summed as it grows: row 0 of its carries.
    """
    arm = work.arms[index]
    carries = work.carries[index]
    arm[_AT] = -1
    arm[_CARRIED] = 0
    carries[0] = 0.0
    if arm[_STEP] > 0:
        return
    for at in range(longest // _BLOCK):
        carries[at + 1] = 0.0
        first = arm[_ORIGIN] - (at + 1) * _BLOCK
        _add_block(
            x, y, weight, first, _BLOCK, work.centre[0], per_unit, work.terms, carries[at + 1]
        )
        for row in range(carries.shape[1]):
            carries[at + 1, row] += carries[at, row]


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64, types.int64,
               WORK)
)  # fmt: skip
def _add_segment(x, y, weight, per_unit, index, at, rows, work):
    """Plan a segment: the first `rows` rows of block `at` of an arm, on top of its carry."""
    arm = work.arms[index]
    carries = work.carries[index]
    down = arm[_STEP] < 0
    if not down:
        totals = carries[1]
        for passed in range(arm[_CARRIED], at):
            totals[:] = 0.0
            first = arm[_ORIGIN] + passed * _BLOCK
            _add_block(x, y, weight, first, _BLOCK, work.centre[0], per_unit, work.terms, totals)
            for row in range(carries.shape[1]):
                carries[0, row] += totals[row]
        arm[_CARRIED] = max(arm[_CARRIED], at)
    segment = arm[_SEGMENTS]
    column = arm[_FILLED]
    first = arm[_ORIGIN] + at * _BLOCK
    if down:
        first = arm[_ORIGIN] - at * _BLOCK - rows
    work.segments[index, segment, _FIRST] = first
    work.segments[index, segment, _ROWS] = rows
    work.segments[index, segment, _COLUMN] = column
    work.centres[index, segment] = work.centre[0]
    source = carries[at if down else 0]
    for row in range(carries.shape[1]):
        work.tables[index, row, column] = source[row]
    arm[_AT] = at
    arm[_SEGMENTS] = segment + 1
    arm[_FILLED] = column + rows + 1


@kernel(types.void(READ_1D, READ_1D, READ_INT_1D, READ_INT_1D, types.int64, types.int64, WRITE_1D))
def _join(down, up, down_columns, up_columns, begin, end, out):
    """Sum over a window = sum over the arm that shortens + sum over the arm that grows."""
    for k in range(np.uint64(begin), np.uint64(end)):
        out[k] = down[np.uint64(down_columns[k])] + up[np.uint64(up_columns[k])]


@kernel(types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64, WORK))
def _tabulate(x, y, weight, per_unit, side, end, work):
    """Make the tables of a pair of arms, and join them for the slots planned, up to `end`."""
    begin = work.state[_PLANNED + side]
    rows = work.tables.shape[1]
    pairs = (rows - 1) // 2
    weighted = weight.shape[0] > 0
    a = 2 * side
    b = a + 1
    for index in (a, b):
        arm = work.arms[index]
        down = arm[_STEP] < 0
        segments = work.segments[index]
        table = work.tables[index]
        for segment in range(arm[_SEGMENTS]):
            _load(
                x, y, weight, segments[segment, _FIRST], segments[segment, _ROWS],
                work.centres[index, segment], per_unit, segments[segment, _COLUMN] + 1, work.terms,
            )  # fmt: skip
        if weighted:
            _scan_one(work.terms[3], segments, arm[_SEGMENTS], down, table[0])
        for q in range(0, pairs, 4):
            _scan_four(work.terms, segments, arm[_SEGMENTS], down, 1 + q, 1 + pairs + q, table)
        arm[_AT] = -1
        arm[_SEGMENTS] = 0
        arm[_FILLED] = 0
    if not weighted:
        n = work.moments[side, 0]
        for k in range(begin, end):
            n[k] = work.lengths[a, k] + work.lengths[b, k]
    for row in range(0 if weighted else 1, rows):
        if work.wanted[row]:
            _join(
                work.tables[a, row], work.tables[b, row], work.columns[a], work.columns[b],
                begin, end, work.moments[side, row],
            )  # fmt: skip
    work.state[_PLANNED + side] = end


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64, types.int64,
               WORK)
)  # fmt: skip
def _plan_slots(x, y, weight, per_unit, begin, end, side, work):
    """Plan the segments that a cell's slots need, and note in which columns they will find them."""
    a = 2 * side
    b = a + 1
    down_arm = work.arms[a]
    up_arm = work.arms[b]
    down_rows = work.lengths[a]
    up_rows = work.lengths[b]
    longest = up_rows[end - 1]
    k = begin
    while k < end:
        down_at = down_rows[k] // _BLOCK
        up_at = up_rows[k] // _BLOCK
        # The slots whose arms end in the same two blocks.
        low = k + 1
        high = end
        while low < high:
            middle = (low + high) // 2
            if down_rows[middle] >= down_at * _BLOCK and up_rows[middle] < (up_at + 1) * _BLOCK:
                low = middle + 1
            else:
                high = middle
        if max(down_arm[_FILLED], up_arm[_FILLED]) + _BLOCK + 1 > _COLUMNS:
            _tabulate(x, y, weight, per_unit, side, k, work)
        if down_at != down_arm[_AT]:
            rows = down_rows[k] - down_at * _BLOCK
            _add_segment(x, y, weight, per_unit, a, down_at, rows, work)
        if up_at != up_arm[_AT]:
            rows = min(longest - up_at * _BLOCK, _BLOCK - 1)
            _add_segment(x, y, weight, per_unit, b, up_at, rows, work)
        down_shift = work.segments[a, down_arm[_SEGMENTS] - 1, _COLUMN] - down_at * _BLOCK
        up_shift = work.segments[b, up_arm[_SEGMENTS] - 1, _COLUMN] - up_at * _BLOCK
        for slot in range(k, low):
            work.columns[a, slot] = down_rows[slot] + down_shift
            work.columns[b, slot] = up_rows[slot] + up_shift
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
