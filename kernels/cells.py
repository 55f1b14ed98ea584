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

from .compiled import (
    READ_1D,
    READ_2D,
    READ_3D,
    WRITE_1D,
    WRITE_2D,
    WRITE_3D,
    helper,
    kernel,
    sum_kernel,
    types,
)

SLOTS = 1024  # rows evaluated at a time
_BLOCK = 256  # rows between the checkpoints of an arm
_CHUNK = 512  # rows at a time in loops over many work rows, which then fit the first-level cache
_COLUMNS = SLOTS + 3 * _BLOCK  # of an arm's table: as many rows as its slots meet, if not more
_REACH = 24  # windows that end before this many rows on either side are summed row by row
_STRIDE = 8  # added to the length of work rows, so that they do not share cache sets
_ONE = np.uint64(1)
# Columns of `Work.arms`: where the arm begins, which row of `Work.places` tells where it ends, how
# many blocks its carries reach, segments and columns in use. One more row holds the cell's first
# row and the row after its last, and the edges of the last window.
_ORIGIN, _EDGE, _CARRIED, _SEGMENTS, _FILLED = range(5)
_CELL_START, _CELL_END, _LOW, _HIGH = range(4)
# Columns of `Work.segments`: first row, rows, first column.
_FIRST, _ROWS, _COLUMN = range(3)
# Rows of `Work.places`: where the window begins, where it ends, the row after the slot's own; then
# for every arm the column of its table.
_LOWS, _HIGHS, _OWN, _PLACE = range(4)


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
    carries: np.ndarray  # (arms, blocks, rows) power sums up to each block; see `_start_arm`
    tables: np.ndarray  # (arms, rows, columns) growing power sums over each segment
    moments: np.ndarray  # (pairs of arms, rows, slots) power sums about the slot's centre
    sums: np.ndarray  # (3 degree + 4, slots) S_0, S_1, ..., T_0, T_1, ..., (centre - x) / h, sum w


_INTEGERS_2D = types.int64[:, ::1]
_INTEGERS_3D = types.int64[:, :, ::1]
_WORK_TYPES = (
    _INTEGERS_2D, _INTEGERS_3D, _INTEGERS_2D, WRITE_2D, WRITE_2D, WRITE_3D, WRITE_3D, WRITE_3D,
    WRITE_2D,
)  # fmt: skip
WORK = types.NamedTuple(_WORK_TYPES, Work)


@helper
def _load(x, y, first, count, centre, per_unit, column, terms):
    """Terms of rows first, first + 1, ...: v = (x - centre) per_unit; v; y."""
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


@helper
def _weigh(weight, first, count, column, terms):
    """Weigh the terms of rows first, first + 1, ..., and keep the weights beside them."""
    ws = weight[first : first + count]
    a = terms[1, column : column + count]
    b = terms[2, column : column + count]
    w = terms[3, column : column + count]
    for k in range(count):
        w[k] = ws[k]
        a[k] *= ws[k]
        b[k] *= ws[k]


@kernel(types.void(READ_1D, types.int64, types.int64, WRITE_2D))
def _copy_weights(weight, first, count, terms):
    """Weights of rows first, first + 1, ... into `terms`."""
    ws = weight[first : first + count]
    w = terms[3]
    for k in range(count):
        w[k] = ws[k]


@sum_kernel(
    types.void(READ_1D, READ_1D, types.int64, types.float64, types.float64, types.int64,
               types.int64, WRITE_2D, WRITE_3D)
)  # fmt: skip
def _sum_block(x, y, first, centre, per_unit, arm, at, terms, carries):
    """carries[arm, at + 1] = carries[arm, at] + power sums of rows first to first + _BLOCK.

    Their weights lie in `terms` (ones, where all are 1).
    """
    former = carries[arm, at]
    totals = carries[arm, at + 1]
    pairs = (totals.shape[0] - 1) // 2
    xs = x[first : first + _BLOCK]
    ys = y[first : first + _BLOCK]
    v = terms[0]
    a = terms[1]
    b = terms[2]
    w = terms[3]
    total = 0.0
    for k in range(_BLOCK):
        total += w[k]
        v[k] = (xs[k] - centre) * per_unit
        a[k] = w[k] * v[k]
        b[k] = w[k] * ys[k]
    totals[0] = former[0] + total
    for power in range(1, 1 + pairs, 2):
        s1 = s2 = t1 = t2 = 0.0
        for k in range(_BLOCK):
            u = v[k]
            p = a[k]
            q = b[k]
            s1 += p
            t1 += q
            p *= u
            q *= u
            s2 += p
            t2 += q
            a[k] = p * u
            b[k] = q * u
        totals[power] = former[power] + s1
        totals[power + 1] = former[power + 1] + s2
        totals[pairs + power] = former[pairs + power] + t1
        totals[pairs + power + 1] = former[pairs + power + 1] + t2


@kernel(
    types.void(WRITE_2D, _INTEGERS_3D, types.int64, types.int64, types.boolean,
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
    types.void(WRITE_2D, _INTEGERS_3D, types.int64, types.int64, types.boolean,
               types.int64, types.int64, WRITE_3D)
)  # fmt: skip
def _scan_two(terms, segments, arm, count, down, s_row, t_row, tables):
    """As `_scan_four` for two pairs: what is left over."""
    v = terms[0]
    a = terms[1]
    b = terms[2]
    r1 = tables[arm, s_row]
    r2 = tables[arm, s_row + 1]
    q1 = tables[arm, t_row]
    q2 = tables[arm, t_row + 1]
    stride = np.uint64(-1 if down else 1)
    for segment in range(count):
        rows = segments[arm, segment, _ROWS]
        j = np.uint64(segments[arm, segment, _COLUMN])
        i = j + np.uint64(rows) if down else j + _ONE
        s1 = r1[j]
        s2 = r2[j]
        t1 = q1[j]
        t2 = q2[j]
        for _ in range(rows):
            u = v[i]
            p = a[i]
            q = b[i]
            j += _ONE
            s1 += p
            t1 += q
            r1[j] = s1
            q1[j] = t1
            s2 += p * u
            t2 += q * u
            r2[j] = s2
            q2[j] = t2
            i += stride


@kernel(types.void(READ_2D, _INTEGERS_3D, types.int64, types.int64, types.boolean, WRITE_3D))
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


@kernel(
    types.void(READ_1D, types.int64, types.int64, _INTEGERS_2D, _INTEGERS_2D, WRITE_2D, WRITE_3D)
)
def _open_cell(x, start, slot, arms, places, centres, carries):
    """Begin a cell with the row `start` of a slot."""
    state = arms.shape[0] - 1
    end = places[_HIGHS, slot]
    arms[state, _CELL_START] = start
    arms[state, _CELL_END] = end
    # A row of the cell is in the windows of all rows of the cell. So where a window's rows all
    # but coincide, its power sums are taken about one of them, and keep their relative accuracy.
    centres[state, 0] = x[(start + end) // 2]
    for arm in range(state):
        arms[arm, _ORIGIN] = start if arm < 2 else end
        arms[arm, _CARRIED] = 0
        for row in range(carries.shape[2]):
            carries[arm, 0, row] = 0.0


@kernel(types.int64(types.int64, types.int64, types.int64, _INTEGERS_2D, _INTEGERS_2D))
def _fit_slots(side, begin, end, arms, places):
    """Return up to which of a cell's slots, begin to end, the tables have room for its arms.

    Tables take an arm's blocks whole, so its rows (lengths) lie in consecutive columns.
    """
    a = 2 * side
    down = arms[a, _EDGE]
    up = arms[a + 1, _EDGE]
    down_origin = arms[a, _ORIGIN]
    up_origin = arms[a + 1, _ORIGIN]
    down_room = (_COLUMNS - arms[a, _FILLED]) // _BLOCK
    up_room = (_COLUMNS - arms[a + 1, _FILLED]) // _BLOCK
    if min(down_room, up_room) < 1:
        return begin
    lowest = (down_origin - places[down, begin]) // _BLOCK - down_room + 1
    highest = (places[up, begin] - up_origin) // _BLOCK + up_room - 1
    low = begin + 1
    high = end
    while low < high:
        middle = (low + high + 1) // 2
        fits = (
            (down_origin - places[down, middle - 1]) // _BLOCK >= lowest
            and (places[up, middle - 1] - up_origin) // _BLOCK <= highest
        )  # fmt: skip
        low = middle if fits else low
        high = high if fits else middle - 1
    return low


@kernel(
    types.void(types.int64, types.int64, types.int64, _INTEGERS_2D, _INTEGERS_3D, _INTEGERS_2D,
               WRITE_2D, READ_3D, WRITE_3D)
)  # fmt: skip
def _plan_slots(side, begin, end, arms, segments, places, centres, carries, tables):
    """Plan the segments that a cell's slots need, and note in which columns they will find them.

    A segment is one block of an arm, or its first rows, on top of the arm's carry.
    """
    state = arms.shape[0] - 1
    for arm in range(2 * side, 2 * side + 2):
        edge = arms[arm, _EDGE]
        origin = arms[arm, _ORIGIN]
        column = arms[arm, _FILLED]
        segment = arms[arm, _SEGMENTS]
        sign = 2 * (arm % 2) - 1
        first = sign * (places[edge, begin] - origin)
        last = sign * (places[edge, end - 1] - origin)
        longest = max(first, last)
        at = min(first, last) // _BLOCK
        shift = column - at * _BLOCK - sign * origin
        while at * _BLOCK <= longest:
            rows = min(longest - at * _BLOCK, _BLOCK - 1)
            start = origin + at * _BLOCK if sign > 0 else origin - at * _BLOCK - rows
            segments[arm, segment, _FIRST] = start
            segments[arm, segment, _ROWS] = rows
            segments[arm, segment, _COLUMN] = column
            centres[arm, segment] = centres[state, 0]
            for row in range(carries.shape[2]):
                tables[arm, row, column] = carries[arm, at, row]
            column += rows + 1
            segment += 1
            at += 1
        arms[arm, _FILLED] = column
        arms[arm, _SEGMENTS] = segment
        for slot in range(begin, end):
            places[_PLACE + arm, slot] = sign * places[edge, slot] + shift


@kernel(
    types.void(READ_1D, READ_1D, types.float64, types.int64, _INTEGERS_2D, _INTEGERS_3D, READ_2D,
               WRITE_2D)
)  # fmt: skip
def _load_segments(x, y, per_unit, arm, arms, segments, centres, terms):
    """Terms of the planned segments of an arm."""
    for segment in range(arms[arm, _SEGMENTS]):
        _load(
            x, y, segments[arm, segment, _FIRST], segments[arm, segment, _ROWS],
            centres[arm, segment], per_unit, segments[arm, segment, _COLUMN] + 1, terms,
        )  # fmt: skip


@kernel(types.void(READ_1D, types.int64, _INTEGERS_2D, _INTEGERS_3D, WRITE_2D))
def _weigh_segments(weight, arm, arms, segments, terms):
    """Weigh the terms of the planned segments of an arm."""
    for segment in range(arms[arm, _SEGMENTS]):
        _weigh(
            weight, segments[arm, segment, _FIRST], segments[arm, segment, _ROWS],
            segments[arm, segment, _COLUMN] + 1, terms,
        )  # fmt: skip


@kernel(
    types.void(READ_3D, _INTEGERS_2D, types.int64, types.int64, types.int64, types.int64,
               types.int64, WRITE_3D)
)  # fmt: skip
def _join(tables, places, side, first_row, last_row, begin, end, moments):
    """Sum over a window = sum over the arm that shortens + sum over the arm that grows."""
    down_columns = places[_PLACE + 2 * side]
    up_columns = places[_PLACE + 2 * side + 1]
    for start in range(begin, end, _CHUNK):
        stop = min(end, start + _CHUNK)
        for row in range(first_row, last_row + 1):
            out = moments[side, row]
            down = tables[2 * side, row]
            up = tables[2 * side + 1, row]
            for k in range(np.uint64(start), np.uint64(stop)):
                out[k] = down[np.uint64(down_columns[k])] + up[np.uint64(up_columns[k])]


@kernel(types.void(_INTEGERS_2D, types.int64, types.int64, types.int64, types.int64, WRITE_3D))
def _join_counts(places, down, up, side, count, moments):
    """S_0 where all weights are 1: the rows between two rows of `places`."""
    out = moments[side, 0]
    lows = places[down]
    highs = places[up]
    for k in range(count):
        out[k] = highs[k] - lows[k]


@helper
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


@helper
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
    """Move j to the first row beyond the window, six rows at a look."""
    passed = np.uint64(6)
    while passed == np.uint64(6):
        passed = (
            np.uint64(x[j] - place <= reach)
            + np.uint64(x[j + np.uint64(1)] - place <= reach)
            + np.uint64(x[j + np.uint64(2)] - place <= reach)
            + np.uint64(x[j + np.uint64(3)] - place <= reach)
            + np.uint64(x[j + np.uint64(4)] - place <= reach)
            + np.uint64(x[j + np.uint64(5)] - place <= reach)
        )
        j += passed
    return j


@helper
def _step_low(x, j, place, reach):
    """Move j to the first row of the window, six rows at a look."""
    passed = np.uint64(6)
    while passed == np.uint64(6):
        passed = (
            np.uint64(place - x[j] > reach)
            + np.uint64(place - x[j + np.uint64(1)] > reach)
            + np.uint64(place - x[j + np.uint64(2)] > reach)
            + np.uint64(place - x[j + np.uint64(3)] > reach)
            + np.uint64(place - x[j + np.uint64(4)] > reach)
            + np.uint64(place - x[j + np.uint64(5)] > reach)
        )
        j += passed
    return j


@kernel(types.void(READ_1D, types.float64, types.int64, types.int64, _INTEGERS_2D, _INTEGERS_2D))
def _find_edges(x, bandwidth, first, count, arms, places):
    """Windows of rows first, first + 1, ...: row r of slot k is in it when lows <= r < highs.

    The last row of `arms` holds indices not above the first row's edges, and gets the last's.
    Two halves go side by side, each looking six rows ahead: a jump on every comparison costs
    four times as much on irregular data (measured 18 against 4.4 ns a row).
    """
    n = x.shape[0]
    lows = places[_LOWS]
    highs = places[_HIGHS]
    own = places[_OWN]
    state = arms.shape[0] - 1
    low = first_within(x, arms[state, _LOW], x[first], bandwidth)
    high = first_beyond(x, arms[state, _HIGH], x[first], bandwidth)
    last = x[first + count - 1]
    last_low = first_within(x, low, last, bandwidth)
    last_high = first_beyond(x, high, last, bandwidth)
    arms[state, _LOW] = last_low
    arms[state, _HIGH] = last_high
    half = count // 2 if last_high + 6 <= n else 0
    if half > 0:
        xs = x[first : first + count]
        k1 = np.uint64(half)
        l0 = np.uint64(low)
        h0 = np.uint64(high)
        l1 = np.uint64(first_within(x, low, xs[k1], bandwidth))
        h1 = np.uint64(first_beyond(x, high, xs[k1], bandwidth))
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
        low = np.int64(l1)
        high = np.int64(h1)
    for k in range(2 * half, count):
        place = x[first + k]
        while place - x[low] > bandwidth:
            low += 1
        while high < n and x[high] - place <= bandwidth:
            high += 1
        lows[k] = low
        highs[k] = high
    for k in range(count):
        own[k] = first + k + 1


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
    types.int64(READ_1D, READ_1D, types.float64, types.float64, types.float64, types.float64,
                types.int64, types.float64, types.int64, types.int64, types.int64, types.int64,
                types.int64, WRITE_2D, WRITE_2D)
)  # fmt: skip
def _add_neighbours(
    x, y, c0, c1, c2, c3, power, bandwidth, degree, first, slot, size, offset, terms, sums
):
    """Add to the sums of slot, slot + 1, ... the row `offset` places away, where in reach.

    K(u) = c0 + c1 r + c2 r^2 + c3 r^3 with r = |u|^power. The weights of those rows lie in
    `terms`. Returns how many were in reach.
    """
    # Unsigned indices in place of slices, which would count references on every call.
    here = np.uint64(first)
    there = np.uint64(first + offset)
    own = np.uint64(slot)
    t_row = 2 * degree + 1
    per_unit = 1.0 / bandwidth
    met = 0
    for k in range(np.uint64(size)):
        d = x[there + k] - x[here + k]
        inside = abs(d) <= bandwidth
        met += inside
        v = d * per_unit if inside else 0.0
        m = abs(v)
        r = v * v if power == 2 else (m if power == 1 else m * m * m)
        p = terms[3, k] * (c0 + r * (c1 + r * (c2 + r * c3))) if inside else 0.0
        sums[0, own + k] += p
        sums[t_row, own + k] += p * y[there + k]
        terms[0, k] = v
        terms[1, k] = p * v
    for j in range(1, degree + 1):
        for k in range(np.uint64(size)):
            g = terms[1, k]
            sums[j, own + k] += g
            sums[t_row + j, own + k] += g * y[there + k]
            terms[1, k] = g * terms[0, k]
    for j in range(degree + 1, t_row):
        for k in range(np.uint64(size)):
            g = terms[1, k]
            sums[j, own + k] += g
            terms[1, k] = g * terms[0, k]
    return met


@kernel(
    types.void(WRITE_3D, READ_1D, types.int64, types.boolean, types.int64, types.int64, WRITE_2D)
)
def _add_sums(moments, coefficients, side, left, degree, count, sums):
    """Add kernel sums made of power sums about a centre.

    Moved to x_i by sum w (v + s)^r = sum w v (v + s)^(r-1) + s sum w (v + s)^(r-1), in place.
    `left`: the rows lie left of x_i, where |u|^q = (-1)^q u^q.
    """
    top = coefficients.shape[0] - 1
    pairs = (moments.shape[1] - 1) // 2
    for begin in range(0, count, _CHUNK):
        end = min(count, begin + _CHUNK)
        size = end - begin
        shift = sums[3 * degree + 2, begin:end]
        for first, last in ((0, top + 2 * degree), (1 + pairs, 1 + pairs + top + degree)):
            for start in range(first + 1, last + 1):
                for row in range(last, start - 1, -1):
                    upper = moments[side, row, begin:end]
                    lower = moments[side, row - 1, begin:end]
                    for k in range(size):
                        upper[k] += shift[k] * lower[k]
        for j in range(3 * degree + 2):
            row = j if j <= 2 * degree else 1 + pairs + j - (2 * degree + 1)
            out = sums[j, begin:end]
            for q in range(top + 1):
                c = -coefficients[q] if left and q % 2 == 1 else coefficients[q]
                if c == 0.0:
                    continue
                source = moments[side, row + q, begin:end]
                for k in range(size):
                    out[k] += c * source[k]
        weights = moments[side, 0, begin:end]
        total = sums[3 * degree + 3, begin:end]
        for k in range(size):
            total[k] += weights[k]


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
        arms[arm, _EDGE] = _OWN
    arms[0, _EDGE] = _LOWS
    arms[count - 1, _EDGE] = _HIGHS
    slots = SLOTS + _STRIDE
    columns = _COLUMNS + _STRIDE
    terms = np.ones((4, columns))
    return Work(
        arms,
        np.zeros((count, SLOTS + _COLUMNS // _BLOCK, 3), np.int64),
        np.zeros((_PLACE + count, slots), np.int64),
        np.zeros((count + 1, SLOTS + _COLUMNS // _BLOCK)),
        terms,
        np.empty((count, n // _BLOCK + 2, rows)),
        np.zeros((count, rows, columns)),
        np.zeros((sides, rows, slots)),
        np.zeros((3 * degree + 4, slots)),
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
    if _all_short(x, bandwidth, first, count):
        # Every kernel is at most a cubic in |u|, u^2 or |u|^3.
        power = 1
        while power < top and coefficients[power] == 0.0:
            power += 1
        c0 = coefficients[0]
        c1 = coefficients[power] if top >= power else 0.0
        c2 = coefficients[2 * power] if top >= 2 * power else 0.0
        c3 = coefficients[3 * power] if top >= 3 * power else 0.0
        for begin in range(0, count, _CHUNK):
            end = min(count, begin + _CHUNK)
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
                            _copy_weights(weight, first + slot + offset, size, terms)
                        met += _add_neighbours(
                            x, y, c0, c1, c2, c3, power, bandwidth, degree, first + slot, slot,
                            size, offset, terms, sums,
                        )  # fmt: skip
                distance += 1
        arms[state, _CELL_END] = first + count
        return
    _find_edges(x, bandwidth, first, count, arms, places)
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
            if first + k >= arms[state, _CELL_END]:
                _open_cell(x, first + k, k, arms, places, centres, carries)
            centre = centres[state, 0]
            stop = min(count, arms[state, _CELL_END] - first)
            planned = stop
            for side in range(sides):
                planned = _fit_slots(side, k, planned, arms, places) if planned > k else k
            full = planned < stop
            if planned > k:
                _place_slots(x, first, k, planned, centre, per_unit, 3 * degree + 2, sums)
                for arm in range(state):
                    origin = arms[arm, _ORIGIN]
                    grows = arm % 2 == 1
                    edge = places[arms[arm, _EDGE], planned - 1 if grows else k]
                    needed = (edge - origin if grows else origin - edge) // _BLOCK
                    while arms[arm, _CARRIED] < needed:
                        at = arms[arm, _CARRIED]
                        start = origin + at * _BLOCK if grows else origin - (at + 1) * _BLOCK
                        if weighted:
                            _copy_weights(weight, start, _BLOCK, terms)
                        _sum_block(x, y, start, centre, per_unit, arm, at, terms, carries)
                        arms[arm, _CARRIED] = at + 1
                for side in range(sides):
                    _plan_slots(side, k, planned, arms, segments, places, centres, carries, tables)
            k = planned
        for arm in range(state):
            segments_used = arms[arm, _SEGMENTS]
            down = arm % 2 == 0
            _load_segments(x, y, per_unit, arm, arms, segments, centres, terms)
            if weighted:
                _weigh_segments(weight, arm, arms, segments, terms)
                _scan_one(terms, segments, arm, segments_used, down, tables)
            for q in range(0, pairs - 3, 4):
                _scan_four(terms, segments, arm, segments_used, down, 1 + q, 1 + pairs + q, tables)
            if pairs % 4 > 0:
                _scan_two(
                    terms, segments, arm, segments_used, down, pairs - 1, 2 * pairs - 1, tables
                )
            arms[arm, _SEGMENTS] = 0
            arms[arm, _FILLED] = 0
        for side in range(sides):
            s_first = 0 if weighted else 1
            _join(tables, places, side, s_first, top + 2 * degree, done, k, moments)
            _join(tables, places, side, 1 + pairs, 1 + pairs + top + degree, done, k, moments)
        done = k
    for side in range(sides):
        if not weighted:
            _join_counts(
                places, arms[2 * side, _EDGE], arms[2 * side + 1, _EDGE], side, count, moments
            )
        _add_sums(moments, coefficients, side, sides == 2 and side == 0, degree, count, sums)
