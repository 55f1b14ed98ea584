"""Sums per fold over sorted rows: what a criterion or a curve owes to each part of the data.

Parameters that all share: `x` (n,) ascending and finite; `y` (n,) finite, best less a common
reference; `repeats` (n,) how many equal rows c a row stands for, or (0,) when all are 1; `fold`
(n,) int16 in [0, folds).
"""

import numpy as np

from .cells import SLOTS, aligned_rows, fill_sums, make_work
from .compiled import (
    READ_1D,
    READ_BOOL_1D,
    READ_SMALL_1D,
    WRITE_2D,
    WRITE_3D,
    WRITE_BOOL_1D,
    kernel,
    types,
)
from .edges import first_beyond, first_within
from .localfit import LOST, RESIDUAL, SCORE, TRACE, UNIT_LEVERAGE, VALUE
from .windows import CHUNK, LINE, REPLACED, fit_slots, refit_slots

_LEAST_ROOM = 1e-10  # as in `windows`


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, READ_BOOL_1D, READ_SMALL_1D, READ_1D,
               types.float64, types.float64, WRITE_BOOL_1D, WRITE_2D, WRITE_2D)
)  # fmt: skip
def score_folds(
    x, y, weight, repeats, scored, fold, coefficients, bandwidth, most_leverage, alone, by_fold, out
):
    """Leave-one-out criterion sums of local constant and local line, in all and per fold.

    Parameters: as `windows.score_windows`, over all rows; `most_leverage` above which a row
    counts as alone.
    Results: `alone` (n,) set where a row's leverage exceeds `most_leverage` in either fit, left
    as it is elsewhere; `by_fold` (2, folds) each fold's share of the score; `out` (2, 4), local
    constant then local line: score, sum of c w r^2, sum of c L, rows (c) without a prediction.
    Zeros for no rows. Source: Allen (1974, Technometrics 16:125).
    """
    out[:] = 0.0
    by_fold[:] = 0.0
    n = x.shape[0]
    if n == 0:
        return
    arms, segments, places, centres, terms, carries, tables, moments, sums = make_work(
        n, coefficients, 1
    )
    fits = aligned_rows(1, REPLACED + 1, SLOTS + 8)[0]
    chunk = np.empty((5, CHUNK))
    basis = np.zeros((4, 8))
    fit = np.zeros(3)
    for first in range(0, n, SLOTS):
        count = min(SLOTS, n - first)
        fill_sums(
            x, y, weight, coefficients, bandwidth, 1, first, count,
            arms, segments, places, centres, terms, carries, tables, moments, sums,
        )  # fmt: skip
        if fit_slots(sums, coefficients[0], 1.0 / bandwidth, count, fits) > 0:
            refit_slots(
                x, y, weight, coefficients, bandwidth, first, count, sums, chunk, basis, fit, fits
            )
        for k in range(count):
            i = first + k
            c = repeats[i] if repeats.shape[0] > 0 else 1.0
            w = weight[i] / c if weight.shape[0] > 0 else 1.0
            for estimator in range(2):
                leverage = w * fits[LINE * estimator + UNIT_LEVERAGE, k]
                if not leverage < most_leverage:
                    alone[i] = True
                if scored.shape[0] > 0 and not scored[i]:
                    continue
                r = y[i] - fits[LINE * estimator + VALUE, k]
                room = 1.0 - leverage
                out[estimator, RESIDUAL] += c * w * r * r
                out[estimator, TRACE] += c * leverage
                if room > _LEAST_ROOM:
                    by_fold[estimator, fold[i]] += c * w * (r / room) ** 2
                else:
                    out[estimator, LOST] += c
    for estimator in range(2):
        for part in range(by_fold.shape[1]):
            out[estimator, SCORE] += by_fold[estimator, part]


@kernel(types.void(READ_1D, READ_1D, READ_1D, READ_1D, READ_1D, READ_SMALL_1D, WRITE_3D, WRITE_3D))
def sums_within(points, radii, x, y, repeats, fold, s, t):
    """Sums per fold over all rows within a radius of each point, every row alike.

    S_j = sum c u^j, T_j = sum c y u^j, u = (x - point) / radius (0 where the radius is 0).

    Parameters: `points`, `radii` (p,).
    Results: `s` (folds, 5, p), `t` (folds, 3, p); zeros where a fold has no row in the window.
    Source: Fan & Gijbels (1996), section 3.1.
    """
    s[:] = 0.0
    t[:] = 0.0
    for point in range(points.shape[0]):
        place = points[point]
        radius = radii[point]
        if not radius >= 0.0:
            continue
        low = first_within(x, 0, place, radius)
        high = first_beyond(x, low, place, radius)
        for i in range(low, high):
            c = repeats[i] if repeats.shape[0] > 0 else 1.0
            u = (x[i] - place) / radius if radius > 0.0 else 0.0
            part = fold[i]
            power = c
            for j in range(5):
                s[part, j, point] += power
                if j < 3:
                    t[part, j, point] += power * y[i]
                power *= u
