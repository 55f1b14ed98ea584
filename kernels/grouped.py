"""Rows of many units into one flat pool of bin moments, and pools into each other.

A unit (a plant, a line) has a stretch of the pool for each fold that rows may go to: bin b of unit
u in slot f is ``pool[f, start[u] + b]``. The sums of a bin, their order and every rounding are
those of `accumulate`, so that a unit counted among others has the same bits as counted alone.

A unit's pilots need not be in the pool beforehand: an empty bin takes its own from `pilot` with
its first row, so that memory which no row reaches is never touched.
"""

import numpy as np

from .accumulate import reason_to_refuse
from .compiled import (
    READ_1D,
    READ_3D,
    READ_INT_1D,
    WRITE_2D,
    WRITE_3D,
    WRITE_INT_1D,
    kernel,
    types,
)

WRITE_INT_2D = types.int64[:, ::1]
READ_CODE_1D = types.Array(types.int32, 1, "C", readonly=True)
WRITE_CODE_1D = types.int32[::1]


@kernel(types.void(READ_CODE_1D, types.int64, READ_CODE_1D, WRITE_INT_1D, WRITE_CODE_1D))
def deal_runs(code, rows_per_run, turns, seen, slot):
    """Deal each unit's own rows to slots in turn, `rows_per_run` consecutive rows to each.

    `code` (rows,) unit of each row, negative for rows of no unit; `turns` (k,) slots in the order
    in which a unit's runs go through them, again from the first after the last; `seen` (units,)
    rows of each unit before these, is updated; `slot` (rows,) receives the slot of each row, -1
    for rows of no unit. A unit's row r goes to ``turns[(r // rows_per_run) % k]``, whatever rows
    of others lie between. Empty input changes nothing.
    """
    k = turns.shape[0]
    former = np.int32(-1)
    due = np.int64(0)
    now = np.int32(0)
    for i in range(code.shape[0]):
        u = code[i]
        if u < 0:
            slot[i] = -1
            continue
        row = seen[u]
        seen[u] = row + 1
        # Divisions are slow: most rows are in the first run, or follow one of the same run.
        if row < rows_per_run:
            slot[i] = turns[0]
            continue
        if u != former or row == due:
            run = row // rows_per_run
            former = u
            due = (run + 1) * rows_per_run
            now = turns[run % k]
        slot[i] = now


@kernel(
    types.void(
        WRITE_3D, READ_CODE_1D, READ_CODE_1D, READ_1D, READ_1D,
        READ_INT_1D, READ_1D, READ_1D, READ_1D, READ_1D, WRITE_2D, WRITE_INT_2D,
    )
)  # fmt: skip
def accumulate_units(
    pool, slot, code, x, y, start, bins, origin, bins_per_unit, pilot, extent, refused
):
    """Add plain rows, each to its unit's bins in its slot; see `accumulate.accumulate_rows`.

    Parameters: `pool` (slots, total bins, 8); `slot`, `code` (rows,), rows with either negative
    are passed over; `x`, `y` (rows,); `start`, `bins`, `origin`, `bins_per_unit` (units,) first
    bin, number of bins, left end and bins per unit of x of each unit; `pilot` (total bins,);
    `extent` (units, 2) and `refused` (units, len(REASONS)) as for one table. Empty input changes
    nothing.

    Measured 5 ns a row while the pool of a slot fits the cache (48 units of 2048 bins), 10 beyond
    it, 20 to 30 where each row is a miss (10,000 units).
    """
    for i in range(x.shape[0]):
        u = code[i]
        f = slot[i]
        if (u < 0) | (f < 0):
            continue
        xi = x[i]
        yi = y[i]
        t = (xi - origin[u]) * bins_per_unit[u]
        if not ((t >= 0.0) & (t < bins[u]) & (abs(yi) < np.inf)):
            refused[u, reason_to_refuse(xi, yi, 1.0, 1.0, t < 0.0)] += 1
            continue
        whole = np.int64(t)
        b = np.uint64(start[u] + whole)
        k = np.uint64(f)
        if pool[k, b, 0] == 0.0:
            pool[k, b, 7] = pilot[b]
        v = t - float(whole) - 0.5
        e = yi - pool[k, b, 7]
        ve = v * e
        extent[u, 0] = min(extent[u, 0], xi)
        extent[u, 1] = max(extent[u, 1], xi)
        pool[k, b, 0] += 1.0
        pool[k, b, 1] += v
        pool[k, b, 2] += v * v
        pool[k, b, 3] += e
        pool[k, b, 4] += ve
        pool[k, b, 5] += v * ve
        pool[k, b, 6] += e * e


@kernel(
    types.void(
        WRITE_3D, READ_CODE_1D, READ_CODE_1D, READ_1D, READ_1D, READ_1D,
        READ_INT_1D, READ_1D, READ_1D, READ_1D, READ_1D, WRITE_2D, WRITE_INT_2D,
    )
)  # fmt: skip
def accumulate_units_counted(
    pool, slot, code, x, y, count, start, bins, origin, bins_per_unit, pilot, extent, refused
):
    """Add rows that each stand for `count` (rows,) equal rows; otherwise as `accumulate_units`."""
    for i in range(x.shape[0]):
        u = code[i]
        f = slot[i]
        if (u < 0) | (f < 0):
            continue
        t = (x[i] - origin[u]) * bins_per_unit[u]
        c = count[i]
        usable = (t >= 0.0) & (t < bins[u]) & (abs(y[i]) < np.inf) & (c > 0.0) & (c < np.inf)
        if not usable:
            refused[u, reason_to_refuse(x[i], y[i], 1.0, c, t < 0.0)] += 1
            continue
        whole = np.int64(t)
        b = np.uint64(start[u] + whole)
        k = np.uint64(f)
        if pool[k, b, 0] == 0.0:
            pool[k, b, 7] = pilot[b]
        v = t - float(whole) - 0.5
        e = y[i] - pool[k, b, 7]
        extent[u, 0] = min(extent[u, 0], x[i])
        extent[u, 1] = max(extent[u, 1], x[i])
        pool[k, b, 0] += c
        pool[k, b, 1] += c * v
        pool[k, b, 2] += c * v * v
        pool[k, b, 3] += c * e
        pool[k, b, 4] += c * v * e
        pool[k, b, 5] += c * v * v * e
        pool[k, b, 6] += c * e * e


@kernel(
    types.void(
        WRITE_3D, READ_CODE_1D, READ_CODE_1D, READ_1D, READ_1D, READ_1D, READ_1D,
        READ_INT_1D, READ_1D, READ_1D, READ_1D, READ_1D, WRITE_2D, WRITE_INT_2D,
    )
)  # fmt: skip
def accumulate_units_weighted(
    pool, slot, code, x, y, weight, count, start, bins, origin, bins_per_unit, pilot, extent,
    refused,
):  # fmt: skip
    """Add rows of precision `weight` and repeat `count` (rows,) each to pools (.., .., 16)."""
    for i in range(x.shape[0]):
        u = code[i]
        f = slot[i]
        if (u < 0) | (f < 0):
            continue
        t = (x[i] - origin[u]) * bins_per_unit[u]
        w = weight[i]
        c = count[i]
        usable = (
            (t >= 0.0) & (t < bins[u]) & (abs(y[i]) < np.inf)
            & (w > 0.0) & (w < np.inf) & (c > 0.0) & (c < np.inf)
        )  # fmt: skip
        if not usable:
            refused[u, reason_to_refuse(x[i], y[i], w, c, t < 0.0)] += 1
            continue
        whole = np.int64(t)
        b = np.uint64(start[u] + whole)
        k = np.uint64(f)
        if pool[k, b, 0] == 0.0:
            pool[k, b, 7] = pilot[b]
        v = t - float(whole) - 0.5
        e = y[i] - pool[k, b, 7]
        extent[u, 0] = min(extent[u, 0], x[i])
        extent[u, 1] = max(extent[u, 1], x[i])
        cw = c * w
        cww = cw * w
        pool[k, b, 0] += cw
        pool[k, b, 1] += cw * v
        pool[k, b, 2] += cw * v * v
        pool[k, b, 3] += cw * e
        pool[k, b, 4] += cw * v * e
        pool[k, b, 5] += cw * v * v * e
        pool[k, b, 6] += cw * e * e
        pool[k, b, 8] += c
        pool[k, b, 9] += cww
        pool[k, b, 10] += cww * v
        pool[k, b, 11] += cww * v * v
        pool[k, b, 12] += cww * e
        pool[k, b, 13] += cww * v * e
        pool[k, b, 14] += cww * e * e


@kernel(types.void(WRITE_3D, READ_3D, READ_INT_1D, READ_INT_1D, READ_INT_1D, READ_INT_1D))
def merge_units(mine, other, slot_of, start, other_start, bins):
    """Add another pool's sums to those of the same units, bins and folds.

    Parameters: `mine`, `other` (slots, total bins, 8 or 16); `slot_of` (other's slots,) the slot
    of `mine` that holds the same fold; `start`, `other_start`, `bins` (units,) first bin in each
    pool and number of bins (of the stretch to add) of each unit. Bins in which the other has no
    row are left alone; slot 7 holds the pilot and is carried, not added.
    """
    width = mine.shape[2]
    for f in range(other.shape[0]):
        g = slot_of[f]
        for u in range(start.shape[0]):
            for b in range(bins[u]):
                there = other_start[u] + b
                if other[f, there, 0] == 0.0:
                    continue
                here = start[u] + b
                for j in range(width):
                    mine[g, here, j] += other[f, there, j]
                mine[g, here, 7] = other[f, there, 7]


@kernel(types.int64(READ_CODE_1D, READ_CODE_1D, WRITE_CODE_1D))
def look_up(table, place, code):
    """Look up ``code[i] = table[place[i]]`` and return the smallest code (0 for no rows).

    `table` (values + 1,), `place` (rows,) with -1 for the last entry; `code` (rows,).
    """
    last = table.shape[0] - 1
    least = np.int32(2**31 - 1)
    for i in range(place.shape[0]):
        at = place[i]
        found = table[at if at >= 0 else last]
        least = min(least, found)
        code[i] = found
    return np.int64(least) if place.shape[0] else 0


@kernel(types.int64(READ_CODE_1D, types.int64, WRITE_INT_1D, WRITE_INT_1D))
def early_rows(code, quota, seen, rows):
    """Find the rows that are among the first `quota` of their unit; return how many there are.

    `code` (rows,) unit of each row, negative for rows of no unit; `seen` (units,) rows of each
    unit before these, is updated up to `quota`; `rows` (rows,) receives the places found, in order.
    """
    found = 0
    for i in range(code.shape[0]):
        u = code[i]
        if u >= 0 and seen[u] < quota:
            seen[u] += 1
            rows[found] = i
            found += 1
    return found
