"""Nearest neighbours in sorted data: local means, and local lines with tricube weights.

Rows are first gathered into groups, one per distinct x, so that results depend neither on the
order of rows nor on how often a row is written. Around a place x, the window of k neighbours holds
all groups within d, the smallest distance within which at least k rows lie. The groups at the
distance d itself (one, or one on either side) count in part, all rows alike, so that the window
holds exactly k rows: with I rows nearer than d and B rows at d, each of the B counts (k - I) / B.
So no tie is broken by the order of rows. (Stone 1977, Ann. Stat. 5:595, section 1, for ties.)

Mean of k neighbours: m(x) = (sum of y nearer than d + (k - I) / B sum of y at d) / k. Leaving out
one of the rows at x and taking its k nearest others is the same as taking k + 1 neighbours with
it, so that y_i less its prediction without itself is (y_i - m) / (1 - L), L = share / (k + 1),
where share is 1, or (k + 1 - I) / B where d = 0 (Hastie & Tibshirani 1990, section 3.4, for L).

Sums over windows are stretches up to an anchor, summed backwards once per anchor, plus stretches
grown from it. No sum is ever subtracted: what lies outside a window has no part in it.

Common parameters: `x` (g,) distinct, ascending, finite; `count` (g,) rows in each group, > 0;
`total` (g,) sum of y over a group, y best less a common reference.
"""

import numpy as np

from .compiled import (
    READ_1D,
    READ_BOOL_1D,
    READ_INT_1D,
    WRITE_1D,
    WRITE_2D,
    WRITE_INT_1D,
    helper,
    kernel,
    sum_kernel,
    types,
)

_SLOTS = 1024  # rows scored at a time
_WINDOWS = 2 * _SLOTS  # windows summed at a time
_NO_LINE = 1e-10  # share of the squared distances below which their spread bears no slope
_FEW = 16  # windows of up to this many rows are summed row by row

# Rows of the output of `fit_lines`.
VALUE, SLOPE, UNIT_LEVERAGE, RADIUS = 0, 1, 2, 3


@kernel(types.int64(READ_1D, READ_1D, READ_1D, WRITE_1D, WRITE_1D, WRITE_1D, WRITE_1D))
def group_rows(x, y, repeats, places, count, total, within):
    """Gather sorted rows into one group per distinct x; return the number of groups.

    Parameters: `x` (n,) ascending; `y` (n,); `repeats` (n,) how many equal rows a row stands for,
    or (0,) when all are 1. Results, first entries of (n,) arrays: x; rows; sum of y; sum of
    squares of y about the group's mean (in two passes). None for n = 0.
    """
    n = x.shape[0]
    groups = 0
    i = 0
    while i < n:
        start = i
        c = 0.0
        t = 0.0
        while i < n and x[i] == x[start]:
            r = repeats[i] if repeats.shape[0] > 0 else 1.0
            c += r
            t += r * y[i]
            i += 1
        mean = t / c
        squares = 0.0
        for j in range(start, i):
            r = repeats[j] if repeats.shape[0] > 0 else 1.0
            squares += r * (y[j] - mean) * (y[j] - mean)
        places[groups] = x[start]
        count[groups] = c
        total[groups] = t
        within[groups] = squares if i - start > 1 else 0.0
        groups += 1
    return groups


@helper
def _open_window(x, count, place, neighbours):
    """Return (low, high, rows) of the smallest window about a place that holds so many rows.

    Groups are added by distance, both at once where they are equally far; all when there are
    fewer rows.
    """
    n = x.shape[0]
    low = np.searchsorted(x, place)
    high = low
    rows = 0.0
    while rows < neighbours and high - low < n:
        left = place - x[low - 1] if low > 0 else np.inf
        right = x[high] - place if high < n else np.inf
        if left <= right:
            low -= 1
            rows += count[low]
        if right <= left:
            rows += count[high]
            high += 1
    return low, high, rows


@helper
def _move_window(x, count, place, neighbours, low, high, rows):
    """Move a window on to a place that is not before its last; its ends never move back."""
    n = x.shape[0]
    moving = True
    while moving:
        left = place - x[low]
        enough = rows - count[low] >= neighbours
        if enough and left > x[high - 1] - place:
            rows -= count[low]
            low += 1
        elif not enough and high < n and x[high] - place <= left:
            rows += count[high]
            high += 1
        else:
            moving = False
    return low, high, rows


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.int64, types.int64, types.int64,
               WRITE_1D, WRITE_2D)
)  # fmt: skip
def _slide(points, x, count, total, neighbours, begin, end, tails, out):
    """Means of neighbours at the points begin to end; see `neighbour_means`.

    `tails` (g + 1,) is work space: sums from a group up to the anchor.
    """
    if end <= begin or x.shape[0] == 0:
        return
    low, high, rows = _open_window(x, count, points[begin], neighbours)
    anchor = -1
    summed = high
    grown = 0.0
    shorter = 0.0
    for i in range(begin, end):
        place = points[i]
        low, high, rows = _move_window(x, count, place, neighbours, low, high, rows)
        while summed < high:
            shorter = grown
            grown += total[summed]
            summed += 1
        if low >= anchor:
            # The window has left the anchor behind: the next is its last group.
            anchor = high - 1
            tails[anchor] = 0.0
            for j in range(anchor - 1, low - 1, -1):
                tails[j] = tails[j + 1] + total[j]
            shorter = 0.0
            grown = total[anchor]
            summed = high
        left = place - x[low]
        right = x[high - 1] - place
        radius = max(left, right)
        at_left = left == radius and low < high - 1
        at_right = right == radius or low == high - 1
        near = tails[low + 1] if at_left else tails[low]
        near += shorter if at_right else grown
        far = (total[low] if at_left else 0.0) + (total[high - 1] if at_right else 0.0)
        far_rows = (count[low] if at_left else 0.0) + (count[high - 1] if at_right else 0.0)
        share = (neighbours - (rows - far_rows)) / far_rows
        out[0, i - begin] = (near + share * far) / neighbours
        out[1, i - begin] = (1.0 if radius > 0.0 else share) / neighbours
        out[2, i - begin] = radius


@kernel(types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.int64, WRITE_2D))
def neighbour_means(points, x, count, total, neighbours, out):
    """Mean of the k nearest rows at ascending points.

    Parameters: `points` (p,) ascending; `neighbours` k >= 1.
    Results: `out` (3, p), rows: mean; leverage that a row at the point has in it (1 / k, or less
    where more than k rows lie at the point itself); distance d of the farthest neighbour. Where
    there are fewer than k rows, all NaN.
    """
    rows = 0.0
    for j in range(x.shape[0]):
        rows += count[j]
    if rows < neighbours:
        out[:] = np.nan
        return
    tails = np.empty(x.shape[0] + 1)
    _slide(points, x, count, total, neighbours, 0, points.shape[0], tails, out)


@helper
def _step_low(x, j, size, place):
    """Move j past the rows that are farther than the row `size` after them, six at a look."""
    passed = np.uint64(6)
    while passed == np.uint64(6):
        passed = (
            np.uint64(x[j + size] - place < place - x[j])
            + np.uint64(x[j + size + np.uint64(1)] - place < place - x[j + np.uint64(1)])
            + np.uint64(x[j + size + np.uint64(2)] - place < place - x[j + np.uint64(2)])
            + np.uint64(x[j + size + np.uint64(3)] - place < place - x[j + np.uint64(3)])
            + np.uint64(x[j + size + np.uint64(4)] - place < place - x[j + np.uint64(4)])
            + np.uint64(x[j + size + np.uint64(5)] - place < place - x[j + np.uint64(5)])
        )
        j += passed
    return j


@helper
def _first_low(x, size, place, start):
    """Return where the window of a place begins, from `start` on: doubling steps, then halving."""
    last = x.shape[0] - size
    step = 1
    low = start
    high = start
    while high < last and x[high + size] - place < place - x[high]:
        low = high + 1
        high = min(last, high + step)
        step *= 2
    while low < high:
        middle = (low + high) // 2
        if x[middle + size] - place < place - x[middle]:
            low = middle + 1
        else:
            high = middle
    return low


@kernel(types.int64(READ_1D, types.int64, types.int64, types.int64, types.int64, WRITE_INT_1D))
def _find_lows(x, size, first, count, start, lows):
    """Where the windows of rows first, first + 1, ... begin, none before `start`.

    Equally far rows on either side: the left one is taken. Two halves go side by side, looking
    six rows ahead, as in `edges`. Returns for how many rows it looked: up to the first window
    that begins `_WINDOWS` rows or more after the first.
    """
    n = x.shape[0]
    low = _first_low(x, size, x[first], start)
    last = _first_low(x, size, x[first + count - 1], low)
    half = count // 2 if last + size + 6 <= n else 0
    if half > 0:
        middle = np.uint64(half)
        xs = x[first : first + count]
        jump = np.uint64(size)
        l0 = np.uint64(low)
        l1 = np.uint64(_first_low(x, size, xs[middle], low))
        for k in range(middle):
            l0 = _step_low(x, l0, jump, xs[k])
            lows[k] = l0
            l1 = _step_low(x, l1, jump, xs[middle + k])
            lows[middle + k] = l1
        low = np.int64(l1)
    for k in range(2 * half, count):
        place = x[first + k]
        while low + size < n and x[low + size] - place < place - x[low]:
            low += 1
        lows[k] = low
    while lows[count - 1] - lows[0] >= _WINDOWS:
        count = max(count // 2, 1)
    return count


@kernel(
    types.void(READ_1D, types.int64, types.int64, types.int64, WRITE_INT_1D, WRITE_1D, WRITE_1D)
)
def _sum_windows(y, size, first, last, state, tails, sums):
    """Sums of y over the windows of `size` rows that begin at first to last.

    `tails` (size,) holds sums up to an anchor, a multiple of `size`; `tails` and state[0], the
    anchor, and `grown` in sums[-1] up to row state[1], carry over to later windows.
    """
    if size <= _FEW:
        for k in range(last - first + 1):
            sums[k] = y[first + k]
        for q in range(1, size):
            ys = y[first + q : last + 1 + q]
            for k in range(last - first + 1):
                sums[k] += ys[k]
        return
    low = first
    grown = sums[sums.shape[0] - 1]
    while low <= last:
        anchor = (low // size + 1) * size
        if anchor != state[0]:
            tail = 0.0
            for j in range(anchor - 1, low - 1, -1):
                tail += y[j]
                tails[j - anchor + size] = tail
            grown = 0.0
            state[0] = anchor
            state[1] = anchor
        for j in range(state[1], low + size):
            grown += y[j]
        stop = min(last + 1, anchor)
        ys = y[low + size : stop + size]
        for k in range(stop - low):
            sums[low - first + k] = tails[low - anchor + size + k] + grown
            if low + k + 1 < stop:
                grown += ys[k]
        state[1] = stop - 1 + size
        low = stop
    sums[sums.shape[0] - 1] = grown


@sum_kernel(
    types.float64(READ_1D, READ_1D, READ_1D, types.int64, types.int64, types.int64, READ_INT_1D,
                  READ_1D)
)  # fmt: skip
def _score_slots(x, y, kept, size, first, count, lows, sums):
    """Sum of (y - m)^2 over the rows `kept`, m the means of their windows of `size` rows."""
    xs = x[first : first + count]
    ys = y[first : first + count]
    base = lows[0]
    last = np.uint64(x.shape[0] - 1)
    jump = np.uint64(size)
    per_row = 1.0 / size
    total = 0.0
    for k in range(count):
        low = np.uint64(lows[k])
        after = min(low + jump, last)
        # Two rows equally far, one on either side, count half each. Both are in the window.
        tied = (low + jump <= last) & (x[after] - xs[k] == xs[k] - x[low])
        half = 0.5 * (y[after] - y[low]) if tied else 0.0
        r = ys[k] - (sums[np.uint64(lows[k] - base)] + half) * per_row
        total += r * r if kept[k] > 0.0 else 0.0
    return total


@kernel(types.void(READ_BOOL_1D, types.int64, types.int64, WRITE_1D))
def _keep_scored(scored, first, count, kept):
    """Ones for rows that are scored, zeros for the others."""
    for k in range(count):
        kept[k] = 1.0 if scored[first + k] else 0.0


@kernel(types.void(READ_1D, READ_1D, READ_BOOL_1D, READ_INT_1D, types.int64, types.int64, WRITE_1D))
def score_neighbours(x, y, scored, neighbours, begin, end, out):
    """Leave-one-out sums of squares for a grid of k, where all x are distinct.

    The fast case of `score_groups`: every group is one row.

    Parameters: `y` (n,) as `total`; `scored` (n,) bool, rows that enter the sum (all enter the
    means), or (0,) for all; `neighbours` (m,) grid of k >= 1; `begin`, `end` the rows wanted.
    Results: `out` (m,): sum of (y_i less the mean of the k rows nearest to it, itself left
    out)^2; NaN where k >= n.
    """
    n = x.shape[0]
    longest = 1
    for m in range(neighbours.shape[0]):
        longest = max(longest, min(neighbours[m] + 1, n))
    lows = np.zeros(_SLOTS, np.int64)
    state = np.zeros(2, np.int64)
    kept = np.ones(_SLOTS)
    tails = np.empty(longest)
    sums = np.zeros(_WINDOWS + 1)
    for m in range(neighbours.shape[0]):
        size = neighbours[m] + 1
        out[m] = np.nan if size > n else 0.0
        state[0] = -1
        first = begin if size <= n else end
        low = 0
        while first < end:
            count = _find_lows(x, size, first, min(_SLOTS, end - first), low, lows)
            low = lows[count - 1]
            _sum_windows(y, size, lows[0], low, state, tails, sums)
            if scored.shape[0] > 0:
                _keep_scored(scored, first, count, kept)
            out[m] += _score_slots(x, y, kept, size, first, count, lows, sums)
            first += count
        out[m] *= (size / (size - 1.0)) ** 2


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, READ_1D, READ_1D, READ_INT_1D, types.int64,
               types.int64, WRITE_1D)
)  # fmt: skip
def score_groups(
    x,
    count,
    total,
    scored_count,
    scored_total,
    scored_within,
    neighbours,
    begin,
    end,
    out,
):
    """Leave-one-out sums of squares for a grid of k, rows in groups.

    Parameters: `scored_count`, `scored_total`, `scored_within` (g,) as `group_rows` makes them of
    the rows that enter the sum (zeros in groups without any; all rows enter the means);
    `neighbours` (m,) grid of k >= 1; `begin`, `end` the groups wanted.
    Results: `out` (m,): sum over rows of (y_i less the mean of the k rows nearest to it, itself
    left out)^2; NaN where there are no k other rows.
    """
    rows = 0.0
    for j in range(x.shape[0]):
        rows += count[j]
    tails = np.empty(x.shape[0] + 1)
    for m in range(neighbours.shape[0]):
        size = neighbours[m] + 1
        out[m] = np.nan if size > rows else 0.0
        # Opening a window costs as much as its rows, so stretches are long where windows are.
        stretch = min(max(end - begin, 1), max(_SLOTS, 8 * size))
        means = np.empty((3, stretch))
        for first in range(begin, end if size <= rows else begin, stretch):
            stop = min(end, first + stretch)
            _slide(x, x, count, total, size, first, stop, tails, means)
            for j in range(first, stop):
                c = scored_count[j]
                if c > 0.0:
                    r = scored_total[j] / c - means[0, j - first]
                    room = 1.0 - means[1, j - first]
                    out[m] += (scored_within[j] + c * r * r) / (room * room)


@kernel(types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.int64, WRITE_2D))
def fit_lines(points, x, count, total, neighbours, out):
    """Local line at ascending points, tricube weights over the distance to the k-th neighbour.

    Weights are K(|x_r - x| / d), K(u) = (1 - |u|^3)^3 70 / 81, d the smallest distance within
    which at least k rows lie; the rows at d itself have weight zero. Where d = 0, or where all
    weight lies at one x, the value is the mean of the rows that have weight and the slope is 0
    (d = 0: the rows at the point). Sums are taken directly, in two passes about the window's
    mean: cost grows with k.

    Parameters: `points` (p,) ascending; `neighbours` k >= 1.
    Results: `out` (4, p), rows: value, slope per unit of x, K(0) a (leverage that one row at the
    point would have), d. NaN where there are fewer than k rows, or none has weight.
    Source: Cleveland (1979, J. Am. Stat. Assoc. 74:829), without its robustness rounds.
    """
    out[:] = np.nan
    n = x.shape[0]
    rows = 0.0
    for j in range(n):
        rows += count[j]
    if rows < neighbours or points.shape[0] == 0:
        return
    low, high, rows = _open_window(x, count, points[0], neighbours)
    for i in range(points.shape[0]):
        place = points[i]
        low, high, rows = _move_window(x, count, place, neighbours, low, high, rows)
        radius = max(place - x[low], x[high - 1] - place)
        out[RADIUS, i] = radius
        s0 = s1 = t0 = 0.0
        for j in range(low, high):
            u = (x[j] - place) / radius if radius > 0.0 else 0.0
            cube = abs(u) * u * u
            g = (1.0 - cube) ** 3
            s0 += count[j] * g
            s1 += count[j] * g * u
            t0 += total[j] * g
        if not s0 > 0.0:
            continue
        centre = s1 / s0
        mean = t0 / s0
        spread = 0.0
        slope = 0.0
        second = 0.0
        for j in range(low, high):
            u = (x[j] - place) / radius if radius > 0.0 else 0.0
            cube = abs(u) * u * u
            g = (1.0 - cube) ** 3
            spread += count[j] * g * (u - centre) * (u - centre)
            slope += g * (u - centre) * (total[j] - count[j] * mean)
            second += count[j] * g * u * u
        if spread > _NO_LINE * second:
            slope /= spread
            out[VALUE, i] = mean - centre * slope
            out[SLOPE, i] = slope / radius
            out[UNIT_LEVERAGE, i] = 1.0 / s0 + centre * centre / spread
        else:
            out[VALUE, i] = mean
            out[SLOPE, i] = 0.0
            out[UNIT_LEVERAGE, i] = 1.0 / s0
