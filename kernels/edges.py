"""Windows in sorted rows: which rows lie within a reach of a place.

Row r is in the window of a place when |x_r - place| <= reach, the difference as rounded. Rounding
is symmetric and monotone, so r is in the window of row i exactly when i is in the window of r, and
windows of sorted places begin and end in order.
"""

import numpy as np

from .compiled import READ_1D, helper, kernel, types

# Rows of `places`: the first row of a slot's window, the row after its last, the row after its own.
LOWS, HIGHS, OWN = range(3)
# Columns of the last row of `arms`: the cell's first row, the row after its last (see `cells`);
# edges of the last window.
CELL_START, CELL_END, LOW, HIGH = range(4)
INTEGERS_2D = types.int64[:, ::1]
INTEGERS_3D = types.int64[:, :, ::1]


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
    """Move j to the first row beyond the window: up to seven rows in three looks, and again."""
    moved = np.uint64(7)
    while moved == np.uint64(7):
        moved = np.uint64(4) * np.uint64(x[j + np.uint64(3)] - place <= reach)
        moved += np.uint64(2) * np.uint64(x[j + moved + np.uint64(1)] - place <= reach)
        moved += np.uint64(x[j + moved] - place <= reach)
        j += moved
    return j


@helper
def _step_low(x, j, place, reach):
    """Move j to the first row of the window, as `_step_high` does."""
    moved = np.uint64(7)
    while moved == np.uint64(7):
        moved = np.uint64(4) * np.uint64(place - x[j + np.uint64(3)] > reach)
        moved += np.uint64(2) * np.uint64(place - x[j + moved + np.uint64(1)] > reach)
        moved += np.uint64(place - x[j + moved] > reach)
        j += moved
    return j


@kernel(types.void(READ_1D, types.float64, types.int64, types.int64, INTEGERS_2D, INTEGERS_2D))
def find_edges(x, bandwidth, first, count, arms, places):
    """Windows of rows first, first + 1, ...: row r of slot k is in it when lows <= r < highs.

    The last row of `arms` holds indices not above the first row's edges, and gets the last's.
    Four stretches of rows go side by side, without a jump that depends on the data: one jump a
    comparison costs four times as much where x is irregular (measured 18 against 4 ns a row).
    """
    n = x.shape[0]
    lows = places[LOWS]
    highs = places[HIGHS]
    own = places[OWN]
    state = arms.shape[0] - 1
    low = first_within(x, arms[state, LOW], x[first], bandwidth)
    high = first_beyond(x, arms[state, HIGH], x[first], bandwidth)
    last = x[first + count - 1]
    last_low = first_within(x, low, last, bandwidth)
    last_high = first_beyond(x, high, last, bandwidth)
    arms[state, LOW] = last_low
    arms[state, HIGH] = last_high
    quarter = count // 4 if last_high + 8 <= n else 0
    if quarter > 0:
        xs = x[first : first + count]
        k1 = np.uint64(quarter)
        k2 = k1 + k1
        k3 = k2 + k1
        l0 = np.uint64(low)
        h0 = np.uint64(high)
        l1 = np.uint64(first_within(x, low, xs[k1], bandwidth))
        h1 = np.uint64(first_beyond(x, high, xs[k1], bandwidth))
        l2 = np.uint64(first_within(x, np.int64(l1), xs[k2], bandwidth))
        h2 = np.uint64(first_beyond(x, np.int64(h1), xs[k2], bandwidth))
        l3 = np.uint64(first_within(x, np.int64(l2), xs[k3], bandwidth))
        h3 = np.uint64(first_beyond(x, np.int64(h2), xs[k3], bandwidth))
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
    for k in range(count):
        own[k] = first + k + 1


@kernel(types.boolean(READ_1D, types.float64, types.int64, types.int64, types.int64))
def all_short(x, bandwidth, reach, first, count):
    """Whether all windows of these rows end before `reach` rows on either side."""
    n = x.shape[0]
    begin = max(first - reach, 0)
    end = min(first + count, n - reach)
    if end > begin and x[begin + reach] - x[begin] <= bandwidth:
        return False
    near = x[begin:end]
    far = x[begin + reach : end + reach]
    long = 0
    for k in range(end - begin):
        long += far[k] - near[k] <= bandwidth
    return long == 0
