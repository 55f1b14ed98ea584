"""Kernel sums into local fits: value, slope, leverage; and the criterion's sums over bins.

Sums S_j = sum w K(u) u^j and T_j = sum w y K(u) u^j, u = (x_i - x) / h (Fan & Gijbels 1996,
chapter 3). Local constant (Nadaraya 1964; Watson 1964): m = T_0 / S_0, a = 1 / S_0. Local linear
(Stone 1977; Cleveland 1979): D = S_0 S_2 - S_1^2, m = (S_2 T_0 - S_1 T_1) / D,
slope = (S_0 T_1 - S_1 T_0) / (h D), a = S_2 / D. The leverage of row i is w_i K(0) a at its x.
"""

import numpy as np

from .compiled import READ_1D, READ_2D, WRITE_1D, WRITE_2D, kernel, sum_kernel, types

# Rows of the output of `fit_bins`, once per estimator.
VALUE, SLOPE, UNIT_LEVERAGE = 0, 1, 2
# Rows of the output of `score_bins`.
SCORE, RESIDUAL, TRACE, LOST = 0, 1, 2, 3
# Without this much room (1 - leverage) a row has no leave-one-out prediction.
_LEAST_ROOM = 1e-10


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


@kernel(types.void(READ_1D, READ_1D, types.float64, WRITE_1D))
def curve_slopes(value, slope, bandwidth, out):
    """Slope of the fitted curve at bin centres, per bin width: by central differences.

    Not the local slope coefficient, which estimates the derivative of the truth; rows inside a
    bin sit on the fitted curve. At the ends and beside empty windows: one-sided, or the local
    slope (`slope`, per bandwidth, `bandwidth` in bins), or 0 where there is none.
    """
    bins = value.shape[0]
    for b in range(bins):
        left = value[b - 1] if b > 0 else np.nan
        right = value[b + 1] if b + 1 < bins else np.nan
        if np.isfinite(left) and np.isfinite(right):
            out[b] = 0.5 * (right - left)
        elif np.isfinite(slope[b]):
            out[b] = slope[b] / bandwidth
        elif np.isfinite(right):
            out[b] = right - value[b]
        elif np.isfinite(left):
            out[b] = value[b] - left
        else:
            out[b] = 0.0


@kernel(
    types.void(READ_2D, READ_2D, READ_1D, READ_1D, READ_1D, READ_1D, WRITE_2D, WRITE_1D)
)
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


@sum_kernel(types.void(types.Array(types.float64, 3, "C", readonly=True), READ_2D, WRITE_1D))
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
