"""Sums of powers of (x - centre) / h over stretches of sorted rows, and kernel sums made of them.

Terms are w v^q and w y v^q, v = (x - centre) / h, w the rows' weights. The power sums of a stretch
are kept in rows: 0, sum w; then sum w v^q, q = 1 to `pairs`; then sum w y v^q, q = 0 to pairs - 1.
The pairs (sum w v^(q+1), sum w y v^q) are taken four or two at a time. See `cells` for the whole.
"""

import numpy as np

from .compiled import (
    READ_1D,
    READ_2D,
    READ_3D,
    WRITE_2D,
    WRITE_3D,
    helper,
    kernel,
    sum_kernel,
    types,
)
from .edges import INTEGERS_2D, INTEGERS_3D, OWN

BLOCK = 256  # rows summed at a time
CHUNK = 512  # rows at a time in loops over many work rows, which then fit the first-level cache
# Columns of `arms`: where an arm begins, which row of `places` tells where it ends, how many
# blocks its carries reach, segments and columns in use. Columns of `segments`: first row, rows,
# first column. Rows of `places` from PLACE on: for every arm the column of its table.
ORIGIN, EDGE, CARRIED, SEGMENTS, FILLED = range(5)
FIRST, ROWS, COLUMN = range(3)
PLACE = OWN + 1
_ONE = np.uint64(1)


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
def copy_weights(weight, first, count, terms):
    """Weights of rows first, first + 1, ... into `terms`."""
    ws = weight[first : first + count]
    w = terms[3]
    for k in range(count):
        w[k] = ws[k]


@sum_kernel(
    types.void(READ_1D, READ_1D, types.int64, types.float64, types.float64, types.int64,
               types.int64, WRITE_2D, WRITE_3D)
)  # fmt: skip
def sum_block(x, y, first, centre, per_unit, arm, at, terms, carries):
    """carries[arm, at + 1] = carries[arm, at] + power sums of rows first to first + BLOCK.

    Their weights lie in `terms` (ones, where all are 1).
    """
    former = carries[arm, at]
    totals = carries[arm, at + 1]
    pairs = (totals.shape[0] - 1) // 2
    xs = x[first : first + BLOCK]
    ys = y[first : first + BLOCK]
    v = terms[0]
    a = terms[1]
    b = terms[2]
    w = terms[3]
    total = 0.0
    for k in range(BLOCK):
        total += w[k]
        v[k] = (xs[k] - centre) * per_unit
        a[k] = w[k] * v[k]
        b[k] = w[k] * ys[k]
    totals[0] = former[0] + total
    for power in range(1, 1 + pairs, 2):
        s1 = s2 = t1 = t2 = 0.0
        for k in range(BLOCK):
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
    types.void(WRITE_2D, INTEGERS_3D, types.int64, types.int64, types.boolean,
               types.int64, types.int64, WRITE_3D)
)  # fmt: skip
def scan_four(terms, segments, arm, count, down, s_row, t_row, tables):
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
        rows = segments[arm, segment, ROWS]
        j = np.uint64(segments[arm, segment, COLUMN])
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
    types.void(WRITE_2D, INTEGERS_3D, types.int64, types.int64, types.boolean,
               types.int64, types.int64, WRITE_3D)
)  # fmt: skip
def scan_two(terms, segments, arm, count, down, s_row, t_row, tables):
    """As `scan_four` for two pairs: what is left over."""
    v = terms[0]
    a = terms[1]
    b = terms[2]
    r1 = tables[arm, s_row]
    r2 = tables[arm, s_row + 1]
    q1 = tables[arm, t_row]
    q2 = tables[arm, t_row + 1]
    stride = np.uint64(-1 if down else 1)
    for segment in range(count):
        rows = segments[arm, segment, ROWS]
        j = np.uint64(segments[arm, segment, COLUMN])
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


@kernel(types.void(READ_2D, INTEGERS_3D, types.int64, types.int64, types.boolean, WRITE_3D))
def scan_one(terms, segments, arm, count, down, tables):
    """Growing sums of the weights; otherwise as `scan_four`."""
    values = terms[3]
    out = tables[arm, 0]
    for segment in range(count):
        rows = segments[arm, segment, ROWS]
        column = segments[arm, segment, COLUMN]
        total = out[column]
        for k in range(rows):
            total += values[column + rows - k if down else column + 1 + k]
            out[column + 1 + k] = total


@kernel(
    types.void(READ_1D, READ_1D, types.float64, types.int64, INTEGERS_2D, INTEGERS_3D, READ_2D,
               WRITE_2D)
)  # fmt: skip
def load_segments(x, y, per_unit, arm, arms, segments, centres, terms):
    """Terms of the planned segments of an arm."""
    for segment in range(arms[arm, SEGMENTS]):
        _load(
            x, y, segments[arm, segment, FIRST], segments[arm, segment, ROWS],
            centres[arm, segment], per_unit, segments[arm, segment, COLUMN] + 1, terms,
        )  # fmt: skip


@kernel(types.void(READ_1D, types.int64, INTEGERS_2D, INTEGERS_3D, WRITE_2D))
def weigh_segments(weight, arm, arms, segments, terms):
    """Weigh the terms of the planned segments of an arm."""
    for segment in range(arms[arm, SEGMENTS]):
        _weigh(
            weight, segments[arm, segment, FIRST], segments[arm, segment, ROWS],
            segments[arm, segment, COLUMN] + 1, terms,
        )  # fmt: skip


@kernel(
    types.void(READ_3D, INTEGERS_2D, types.int64, types.int64, types.int64, types.int64,
               types.int64, WRITE_3D)
)  # fmt: skip
def join(tables, places, side, first_row, last_row, begin, end, moments):
    """Sum over a window = sum over the arm that shortens + sum over the arm that grows."""
    down_columns = places[PLACE + 2 * side]
    up_columns = places[PLACE + 2 * side + 1]
    for start in range(begin, end, CHUNK):
        stop = min(end, start + CHUNK)
        for row in range(first_row, last_row + 1):
            out = moments[side, row]
            down = tables[2 * side, row]
            up = tables[2 * side + 1, row]
            for k in range(np.uint64(start), np.uint64(stop)):
                out[k] = down[np.uint64(down_columns[k])] + up[np.uint64(up_columns[k])]


@kernel(types.void(INTEGERS_2D, types.int64, types.int64, types.int64, types.int64, WRITE_3D))
def join_counts(places, down, up, side, count, moments):
    """S_0 where all weights are 1: the rows between two rows of `places`."""
    out = moments[side, 0]
    lows = places[down]
    highs = places[up]
    for k in range(count):
        out[k] = highs[k] - lows[k]


@helper
def kernel_profile(coefficients):
    """Return (power, times) with K(u) = K(0) (1 - |u|^power)^times, the form of all our kernels."""
    top = coefficients.shape[0] - 1
    power = 1
    while power < top and coefficients[power] == 0.0:
        power += 1
    return power, top // power


@helper
def kernel_factor(v, power, times):
    """(1 - |v|^power)^times; keeps its digits where it comes to zero, as the expanded sum does not.

    At |v| = 1, and beyond by rounding, it is zero to the last bit unless `times` is 0.
    """
    m = abs(v)
    r = v * v if power == 2 else (m if power == 1 else m * m * m)
    f = max(1.0 - r, 0.0)
    return f if times == 1 else (f * f if times == 2 else (f * f * f if times == 3 else 1.0))


@kernel(
    types.int64(READ_1D, READ_1D, types.float64, types.int64, types.int64, types.float64,
                types.int64, types.int64, types.int64, types.int64, types.int64, WRITE_2D,
                WRITE_2D)
)  # fmt: skip
def add_neighbours(
    x, y, peak, power, times, bandwidth, degree, first, slot, size, offset, terms, sums
):
    """Add to the sums of slot, slot + 1, ... the row `offset` places away, where in reach.

    K(u) = peak (1 - |u|^power)^times. The weights of those rows lie in `terms`. Returns how many
    were in reach.
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
        p = terms[3, k] * peak * kernel_factor(v, power, times) if inside else 0.0
        z = y[there + k]
        g = p * v
        sums[0, own + k] += p
        sums[t_row, own + k] += p * z
        if degree > 0:
            sums[1, own + k] += g
            sums[2, own + k] += g * v
            sums[t_row + 1, own + k] += g * z
        if degree > 1:
            terms[0, k] = v
            terms[1, k] = g * v
    for j in range(2, 2 * degree + 1):
        for k in range(np.uint64(size)):
            g = terms[1, k]
            if j > 2:
                sums[j, own + k] += g
            if j <= degree:
                sums[t_row + j, own + k] += g * y[there + k]
            terms[1, k] = g * terms[0, k]
    return met


@kernel(
    types.void(WRITE_3D, READ_1D, types.int64, types.boolean, types.int64, types.int64, WRITE_2D)
)
def add_sums(moments, coefficients, side, left, degree, count, sums):
    """Add kernel sums made of power sums about a centre.

    Moved to x_i by sum w (v + s)^r = sum w v (v + s)^(r-1) + s sum w (v + s)^(r-1), in place.
    `left`: the rows lie left of x_i, where |u|^q = (-1)^q u^q.
    """
    top = coefficients.shape[0] - 1
    pairs = (moments.shape[1] - 1) // 2
    for begin in range(0, count, CHUNK):
        end = min(count, begin + CHUNK)
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
        # Without the kernel: sum w, and sum w u^2 where there is a slope.
        for extra in range(2 if degree > 0 else 1):
            source = moments[side, 2 * extra, begin:end]
            out = sums[3 * degree + 3 + extra, begin:end]
            for k in range(size):
                out[k] += source[k]
