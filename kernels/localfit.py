"""Kernel sums into local fits: value, slope, leverage; and the criterion's sums over bins.

Sums S_j = sum w K(u) u^j and T_j = sum w y K(u) u^j, u = (x_i - x) / h (Fan & Gijbels 1996,
chapter 3). Local constant (Nadaraya 1964; Watson 1964): m = T_0 / S_0, a = 1 / S_0. Local linear
(Stone 1977; Cleveland 1979): D = S_0 S_2 - S_1^2, m = (S_2 T_0 - S_1 T_1) / D,
slope = (S_0 T_1 - S_1 T_0) / (h D), a = S_2 / D. The leverage of row i is w_i K(0) a at its x.
"""

import numpy as np

from .compiled import (
    READ_1D,
    READ_2D,
    READ_3D,
    READ_INT_1D,
    WRITE_1D,
    WRITE_2D,
    helper,
    kernel,
    sum_kernel,
    types,
)

# Rows of the output of `fit_bins`, once per estimator.
VALUE, SLOPE, UNIT_LEVERAGE = 0, 1, 2
# Rows of the output of `score_bins`.
SCORE, RESIDUAL, TRACE, LOST = 0, 1, 2, 3
# Without this much room (1 - leverage) a row has no leave-one-out prediction.
_LEAST_ROOM = 1e-10
# Share of a bin's sums of squares that a residual must have to be told from rounding.
_LEAST_RESIDUAL = 1e-14


@kernel(types.void(READ_2D, READ_2D, types.float64, types.float64, types.float64, WRITE_2D))
def fit_bins(s, t, at_zero, least_weight, least_spread, out):
    """Local constant and local linear fits at every bin centre from S_0..S_2 and T_0, T_1.

    `s` (3, bins), `t` (2, bins); windows with S_0 <= least_weight are empty: NaN. A window whose
    rows spread by no more than sqrt(least_spread) bandwidths has no slope: there the local line
    falls back to the local constant. `out` (6, bins): value, slope per bandwidth, and K(0) a
    for local constant (rows 0 to 2, slope NaN) and local linear (rows 3 to 5).
    """
    for b in range(s.shape[1]):
        s0 = s[0, b]
        if not s0 > least_weight:
            for row in range(6):
                out[row, b] = np.nan
            continue
        out[0, b] = t[0, b] / s0
        out[1, b] = np.nan
        out[2, b] = at_zero / s0
        determinant = s0 * s[2, b] - s[1, b] * s[1, b]
        if determinant > least_spread * s0 * s0 and determinant > 1e-6 * s0 * s[2, b]:
            out[3, b] = (s[2, b] * t[0, b] - s[1, b] * t[1, b]) / determinant
            out[4, b] = (s0 * t[1, b] - s[1, b] * t[0, b]) / determinant
            out[5, b] = at_zero * s[2, b] / determinant
        else:
            out[3, b] = out[0, b]
            out[4, b] = 0.0
            out[5, b] = out[2, b]


@helper
def _parabola(values, b):
    """Slope and half the second derivative at bin b, per bin: through three neighbouring centres.

    At the ends and beside empty windows through the three on one side; a line where only two are
    known, (0, 0) where there is none but b.
    """
    bins = values.shape[0]
    middle = values[b]
    left = values[b - 1] if b > 0 else np.nan
    right = values[b + 1] if b + 1 < bins else np.nan
    if np.isfinite(left) and np.isfinite(right):
        return 0.5 * (right - left), 0.5 * (left - 2.0 * middle + right)
    if np.isfinite(right):
        further = values[b + 2] if b + 2 < bins else np.nan
        bend = 0.5 * (middle - 2.0 * right + further) if np.isfinite(further) else 0.0
        return right - middle - bend, bend
    if np.isfinite(left):
        further = values[b - 2] if b > 1 else np.nan
        bend = 0.5 * (middle - 2.0 * left + further) if np.isfinite(further) else 0.0
        return middle - left + bend, bend
    return 0.0, 0.0


@kernel(types.void(READ_2D, READ_1D, READ_1D, WRITE_2D))
def chords(first, value, unit_leverage, out):
    """The line, and the leverage, that stand for the fitted curve among the rows of each bin.

    Around a bin's centre the curve is a + g v + c v^2. Rows with mean place v0 and variance s^2
    see the line with slope g + 2 c v0 whose mean over them is the curve's: value at the centre
    a + c (s^2 - v0^2). It is the curve itself for rows at one place, and errs by terms of third
    order otherwise. The slope is the curve's own, not the local line's, which estimates the
    derivative of the truth. Leverage: its parabola's mean over the rows, kept between the
    neighbouring centres' values.

    Parameters: `first` (7, bins) with sums of w (1, v, v^2); `value`, `unit_leverage` (bins,) at
    the centres. `out` (3, bins): value, slope per bin, unit leverage; NaN in empty windows.
    """
    bins = value.shape[0]
    for b in range(bins):
        n = first[0, b]
        place = first[1, b] / n if n > 0.0 else 0.0
        # Rounding may leave a hair below zero where all rows are at one place.
        spread = max(first[2, b] / n - place * place, 0.0) if n > 0.0 else 0.0
        slope, bend = _parabola(value, b)
        out[0, b] = value[b] + bend * (spread - place * place)
        out[1, b] = slope + 2.0 * bend * place
        slope, bend = _parabola(unit_leverage, b)
        leverage = unit_leverage[b] + slope * place + bend * (spread + place * place)
        low = unit_leverage[b]
        high = low
        for other in range(max(b - 1, 0), min(b + 2, bins)):
            # Comparisons with NaN are false: empty neighbours do not count.
            if unit_leverage[other] < low:
                low = unit_leverage[other]
            if unit_leverage[other] > high:
                high = unit_leverage[other]
        if b > 0 and b + 1 < bins:
            leverage = min(max(leverage, low), high)
        out[2, b] = leverage


@kernel(types.void(READ_2D, READ_2D, READ_1D, READ_1D, READ_1D, READ_1D, WRITE_2D, WRITE_1D))
def score_bins(first, second, pilot, value, slope, unit_leverage, coefficients, out):
    """Sums over rows of what a criterion needs, from bin moments.

    With r = value - pilot and g = slope (per bin width), a bin's sum of w (y - m)^2 is
    R = E2 - 2 r E - 2 g VE + r^2 N + 2 r g V + g^2 V2. Leverage of a row is w `unit_leverage`;
    where weights within a bin differ, the bin's residual-weighted mean weight R' / R stands for w
    (exact for equal weights, and to first order in the leverage otherwise).

    Parameters: `first` (7, bins) sums of w (1, v, v^2, e, v e, v^2 e, e^2); `second` (6, bins)
    sums of w^2 (1, v, v^2, e, v e, e^2), or (6, 0) when all weights are 1; `pilot` (bins,).
    Results: `coefficients` (7, bins) with which sum(coefficients * first) is the leave-one-out
    sum of w (r_i / (1 - L_i))^2 - also for any part of the rows, such as a fold; `out` (4,): that
    sum, the sum of w r_i^2, the trace, and the weight of rows without a leave-one-out
    prediction (1 - L_i <= 1e-10, or an empty window).
    Source: Allen (1974, Technometrics 16:125); Stone (1974, JRSSB 36:111).
    """
    weighted = second.shape[1] > 0
    out[:] = 0.0
    coefficients[:] = 0.0
    for b in range(first.shape[1]):
        n = first[0, b]
        if n == 0.0:
            continue
        if not np.isfinite(value[b]):
            out[LOST] += n
            continue
        r = value[b] - pilot[b]
        g = slope[b]
        residual = (
            first[6, b] - 2.0 * r * first[3, b] - 2.0 * g * first[4, b]
            + r * r * n + 2.0 * r * g * first[1, b] + g * g * first[2, b]
        )  # fmt: skip
        # What rounding leaves of rows that all lie on the curve is no residual.
        if residual < _LEAST_RESIDUAL * (first[6, b] + r * r * n):
            residual = 0.0
        leverage = unit_leverage[b]
        out[TRACE] += leverage * n
        out[RESIDUAL] += residual
        if weighted:
            doubly = (
                second[5, b] - 2.0 * r * second[3, b] - 2.0 * g * second[4, b]
                + r * r * second[0, b] + 2.0 * r * g * second[1, b] + g * g * second[2, b]
            )  # fmt: skip
            mean_weight = doubly / residual if residual > 0.0 else second[0, b] / n
            leverage *= mean_weight
        room = 1.0 - leverage
        if not room > _LEAST_ROOM:
            out[LOST] += n
            continue
        factor = 1.0 / (room * room)
        out[SCORE] += factor * residual
        coefficients[0, b] = factor * r * r
        coefficients[1, b] = factor * 2.0 * r * g
        coefficients[2, b] = factor * g * g
        coefficients[3, b] = factor * -2.0 * r
        coefficients[4, b] = factor * -2.0 * g
        coefficients[6, b] = factor


@sum_kernel(types.void(READ_3D, READ_2D, WRITE_1D))
def fold_scores(folds, coefficients, out):
    """out[f] = sum over bins of coefficients * folds[f]; `folds` (folds, 7, bins)."""
    for f in range(folds.shape[0]):
        total = 0.0
        for row in range(folds.shape[1]):
            if row == 5:
                continue  # v^2 e has no part in squared residuals
            a = folds[f, row]
            c = coefficients[row]
            part = 0.0
            for b in range(a.shape[0]):
                part += a[b] * c[b]
            total += part
        out[f] = total


@kernel(types.void(READ_3D, READ_INT_1D, READ_1D, READ_1D, WRITE_2D, WRITE_2D))
def group_residuals(folds, ends, residual, slope, squared, weight):
    """Sums of w (y - m)^2 and of w per group of folds and bin.

    `folds` (folds, 7, bins); group g is the folds ends[g] to ends[g + 1]; `residual` (bins,) is
    value less pilot and `slope` (bins,) per bin, as for `score_bins`; `squared`, `weight`
    (groups, bins). Rounding may leave a hair below zero where all rows sit on the curve; it is
    cut off.
    """
    bins = folds.shape[2]
    for g in range(squared.shape[0]):
        for b in range(bins):
            squared[g, b] = 0.0
            weight[g, b] = 0.0
        for f in range(ends[g], ends[g + 1]):
            for b in range(bins):
                r = residual[b]
                s = slope[b]
                weight[g, b] += folds[f, 0, b]
                squared[g, b] += (
                    folds[f, 6, b] - 2.0 * r * folds[f, 3, b] - 2.0 * s * folds[f, 4, b]
                    + r * r * folds[f, 0, b] + 2.0 * r * s * folds[f, 1, b]
                    + s * s * folds[f, 2, b]
                )  # fmt: skip
        for b in range(bins):
            squared[g, b] = max(squared[g, b], 0.0)
