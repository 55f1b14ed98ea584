"""Local fits and leave-one-out criteria over sorted rows, exactly.

A row of bandwidth h meets the rows with |x_r - x_i| <= h (differences as rounded). Kernel sums
come from `cells`, at a cost per row that does not depend on h.

    S_j(i) = sum_r c w K(u) u^j,   T_j(i) = sum_r c w y K(u) u^j,   u = (x_r - x_i) / h

c is how many equal rows a row stands for, w its precision. Local constant (Nadaraya 1964; Watson
1964): m = T_0 / S_0, a = 1 / S_0. Local linear (Stone 1977; Cleveland 1979): D = S_0 S_2 - S_1^2,
m = (S_2 T_0 - S_1 T_1) / D, a = S_2 / D. One of the c copies of row i has the leverage
L = w K(0) a, and is predicted without itself by y - (y - m) / (1 - L) (Allen 1974, Technometrics
16:125). Where D / (S_0 S_2) is small (see `_SHARE_SHORT`) the window is summed again, about its
own mean; where D <= 1e-10 S_0 S_2 there is no line, and the local constant stands in for it.

Parallel work is the caller's: kernels take a range of rows. The last digits of a row's result
depend on where its range begins, so fix the ranges before the number of threads.

Parameters that all share: `x` (n,) ascending and finite; `y` (n,) finite, best less a common
reference; `weight` (n,) c w > 0, or (0,) when all are 1; `coefficients` of one of the compact
kernels in `shapes`, K(u) = sum_q coefficients[q] |u|^q = K(0) (1 - |u|^a)^b; `bandwidth` h > 0,
with 1 / h finite.
"""

import numpy as np

from .cells import SLOTS, aligned_rows, fill_sums, make_work
from .compiled import (
    READ_1D,
    READ_2D,
    READ_BOOL_1D,
    WRITE_1D,
    WRITE_2D,
    kernel,
    sum_kernel,
    types,
)
from .edges import first_beyond, first_within
from .localfit import LOST, RESIDUAL, SCORE, SLOPE, TRACE, UNIT_LEVERAGE, VALUE
from .powersums import kernel_factor, kernel_profile

# Rows of the output of `fit_windows`: VALUE, SLOPE, UNIT_LEVERAGE of the local constant, then
# (3 on) of the local line; and whether the local constant stands in for the line.
LINE, REPLACED = 3, 6
# Columns of the output of `score_windows`: SCORE, RESIDUAL, TRACE, LOST, and
STAND_INS = 4
# Rows of the output of `fit_points`: VALUE, SLOPE, UNIT_LEVERAGE, and
SQUARES, VARIANCE, ROWS, DEGREE = 3, 4, 5, 6
_LEAST_ROOM = 1e-10  # without this much room (1 - L) a row has no leave-one-out prediction
_NO_LINE = 1e-10  # D / (S_0 S_2) up to which there is no line
# Power sums lose as many digits as the least of D / (S_0 S_2), S_0 / (K(0) sum w) and
# S_2 / (K(0) sum w u^2) has zeros. Below these shares a window is summed directly; where windows
# are long only if it must be, since that costs time in proportion.
_SHARE_SHORT, _SHARE_MIDDLING, _SHARE_LONG = 1e-3, 1e-6, 1e-9
_SHORT, _LONG = 256, 65536  # rows in a short window; in a middling one
CHUNK = 512  # rows at a time in a window summed directly
# Columns of a window's orthogonal basis, a row per degree: the recurrence; sums of w K times p^2,
# p^2 u, p^2 u^2, p (y - mean); p and its slope at u = 0.
_ALPHA, _BETA, _NORM, _FIRST_MOMENT, _SECOND_MOMENT, _DOT, _AT_ZERO, _SLOPE_AT_ZERO = range(8)


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64,
               types.int64, WRITE_2D)
)  # fmt: skip
def window_sums(x, y, weight, coefficients, bandwidth, degree, begin, end, out):
    """Kernel sums at rows begin to end for a local polynomial: S_0..S_2p, then T_0..T_p.

    Parameters: `degree` p, 0 to 3; `out` (3 p + 2, end - begin). No window is empty: it holds its
    own row. Nothing happens where end <= begin. Source: Fan & Gijbels (1996), section 3.
    """
    if end <= begin:
        return
    arms, segments, places, centres, terms, carries, tables, moments, sums = make_work(
        x.shape[0], coefficients, degree
    )
    for first in range(begin, end, SLOTS):
        count = min(SLOTS, end - first)
        fill_sums(
            x, y, weight, coefficients, bandwidth, degree, first, count,
            arms, segments, places, centres, terms, carries, tables, moments, sums,
        )  # fmt: skip
        for j in range(3 * degree + 2):
            for k in range(count):
                out[j, first - begin + k] = sums[j, k]


@sum_kernel(
    types.void(READ_1D, READ_1D, READ_1D, types.float64, types.float64, types.int64, types.int64,
               WRITE_2D)
)  # fmt: skip
def _kernel_terms(x, weight, coefficients, place, per_unit, first, count, terms):
    """Rows of `terms` for rows first, first + 1, ...: u, and w K(u)."""
    xs = x[first : first + count]
    ws = weight[first : first + count]
    u = terms[0]
    g = terms[1]
    peak = coefficients[0]
    power, times = kernel_profile(coefficients)
    for k in range(count):
        v = (xs[k] - place) * per_unit
        u[k] = v
        g[k] = peak * kernel_factor(v, power, times)
    if weight.shape[0] > 0:
        for k in range(count):
            g[k] *= ws[k]


@sum_kernel(
    types.void(READ_1D, types.int64, types.int64, types.int64, types.float64, WRITE_2D, WRITE_2D)
)
def _add_products(y, degree, first, count, mean, terms, basis):
    """Add to basis[degree] a chunk's sums of w K times p^2, p^2 u, p^2 u^2, p (y - mean).

    p is the polynomial of that degree which is orthogonal to all lower ones in the window,
    p_(j+1) = (u - alpha_j) p_j - beta_j p_(j-1) (Forsythe 1957, J. SIAM 5:74).
    """
    u = terms[0]
    g = terms[1]
    now = terms[2]
    before = terms[3]
    ys = y[first : first + count]
    for k in range(count):
        now[k] = 1.0
        before[k] = 0.0
    for j in range(degree):
        alpha = basis[j, _ALPHA]
        beta = basis[j, _BETA]
        for k in range(count):
            later = (u[k] - alpha) * now[k] - beta * before[k]
            before[k] = now[k]
            now[k] = later
    norm = first_moment = second_moment = dot = 0.0
    for k in range(count):
        gp = g[k] * now[k]
        gpp = gp * now[k]
        norm += gpp
        first_moment += gpp * u[k]
        second_moment += gpp * u[k] * u[k]
        dot += gp * (ys[k] - mean)
    basis[degree, _NORM] += norm
    basis[degree, _FIRST_MOMENT] += first_moment
    basis[degree, _SECOND_MOMENT] += second_moment
    basis[degree, _DOT] += dot


@sum_kernel(
    types.void(READ_1D, READ_1D, types.int64, types.int64, types.int64, WRITE_2D, READ_2D, WRITE_1D)
)
def _add_squares(repeats, variance, degree, first, count, terms, basis, totals):
    """Add to `totals` a chunk's sums over single rows of l^2, and of l^2 times the variance.

    l = w K(u) sum_j p_j(0) p_j(u) / |p_j|^2, so that the fitted value is sum l y. A row that
    stands for c rows has c l at one place, hence c l^2 = (c l)^2 / c.
    """
    u = terms[0]
    g = terms[1]
    now = terms[2]
    before = terms[3]
    share = terms[4]
    cs = repeats[first : first + count]
    variances = variance[first : first + count]
    for k in range(count):
        now[k] = 1.0
        before[k] = 0.0
        share[k] = basis[0, _AT_ZERO] / basis[0, _NORM]
    for j in range(degree):
        alpha = basis[j, _ALPHA]
        beta = basis[j, _BETA]
        factor = basis[j + 1, _AT_ZERO] / basis[j + 1, _NORM]
        for k in range(count):
            later = (u[k] - alpha) * now[k] - beta * before[k]
            before[k] = now[k]
            now[k] = later
            share[k] += factor * later
    for k in range(count):
        share[k] *= g[k]
        share[k] *= share[k]
    if repeats.shape[0] > 0:
        for k in range(count):
            share[k] /= cs[k]
    total = 0.0
    for k in range(count):
        total += share[k]
    totals[0] += total
    if variance.shape[0] > 0:
        total = 0.0
        for k in range(count):
            total += share[k] * variances[k]
        totals[1] += total


@kernel(
    types.int64(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.float64, types.int64,
                types.int64, types.int64, WRITE_2D, WRITE_2D, WRITE_1D)
)  # fmt: skip
def _fit_window(x, y, weight, coefficients, place, bandwidth, low, high, degree, terms, basis, out):
    """Local polynomial at a place from the rows low to high, summed directly about their mean.

    Puts value, slope (per unit of x) and K(0) a into out[0:3]. Returns the degree reached: one
    more power is taken only where it adds more than 1e-10 of its squares to what lower powers
    explain; -1 where no row has weight (NaN).
    """
    per_unit = 1.0 / bandwidth
    peak = coefficients[0]
    for row in range(3):
        out[row] = np.nan
    for j in range(degree + 1):
        basis[j, :] = 0.0
        mean = basis[0, _DOT] / basis[0, _NORM] if j > 0 else 0.0
        done = low
        while done < high:
            count = min(CHUNK, high - done)
            _kernel_terms(x, weight, coefficients, place, per_unit, done, count, terms)
            _add_products(y, j, done, count, mean, terms, basis)
            done += count
        norm = basis[j, _NORM]
        if j == 0:
            if not norm > 0.0:
                return -1
            basis[0, _AT_ZERO] = 1.0
            out[0] = basis[0, _DOT] / norm
            out[1] = 0.0 if degree > 0 else np.nan
            out[2] = peak / norm
        else:
            if not norm > _NO_LINE * basis[j - 1, _SECOND_MOMENT]:
                return j - 1
            alpha = basis[j - 1, _ALPHA]
            beta = basis[j - 1, _BETA]
            former = basis[j - 2, _AT_ZERO] if j > 1 else 0.0
            former_slope = basis[j - 2, _SLOPE_AT_ZERO] if j > 1 else 0.0
            value = -alpha * basis[j - 1, _AT_ZERO] - beta * former
            slope = (
                basis[j - 1, _AT_ZERO] - alpha * basis[j - 1, _SLOPE_AT_ZERO] - beta * former_slope
            )
            basis[j, _AT_ZERO] = value
            basis[j, _SLOPE_AT_ZERO] = slope
            basis[j, _BETA] = norm / basis[j - 1, _NORM]
            out[0] += basis[j, _DOT] / norm * value
            out[1] += basis[j, _DOT] / norm * slope * per_unit
            out[2] += peak * value * value / norm
        basis[j, _ALPHA] = basis[j, _FIRST_MOMENT] / norm
    return degree


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, READ_1D, READ_1D, READ_1D, types.float64,
               types.int64, WRITE_2D)
)  # fmt: skip
def fit_points(points, x, y, weight, repeats, variance, coefficients, bandwidth, degree, out):
    """Local polynomial at any points, each window summed directly: meant for some hundred points.

    Parameters: `points` (p,); `repeats` (n,) c, or (0,) when all are 1; `variance` (n,) of one
    row's y, or (0,); `degree` 0 to 3.
    Results: `out` (7, p), rows: value; slope per unit of x (the local coefficient; NaN for
    degree 0); K(0) a, the leverage that a row of weight 1 would have there; the sum of squared
    weights l^2 over single rows (its inverse: the number of effective rows); the sum of l^2
    times variance (0 where `variance` is empty); rows in the window; and the degree that the
    window's rows bear, -1 in an empty window, where all but rows is NaN.
    Source: Fan & Gijbels (1996), chapter 3; orthogonal polynomials, Forsythe (1957).
    """
    terms = np.empty((5, CHUNK))
    basis = np.zeros((4, 8))
    fit = np.zeros(3)
    totals = np.zeros(2)
    for point in range(points.shape[0]):
        place = points[point]
        low = first_within(x, 0, place, bandwidth)
        high = first_beyond(x, low, place, bandwidth)
        reached = _fit_window(
            x, y, weight, coefficients, place, bandwidth, low, high, degree, terms, basis, fit
        )
        totals[:] = 0.0
        rows = 0.0
        done = low
        while done < high:
            count = min(CHUNK, high - done)
            for k in range(done, done + count):
                rows += repeats[k] if repeats.shape[0] > 0 else 1.0
            if reached >= 0:
                _kernel_terms(x, weight, coefficients, place, 1.0 / bandwidth, done, count, terms)
                _add_squares(repeats, variance, reached, done, count, terms, basis, totals)
            done += count
        for row in range(3):
            out[row, point] = fit[row]
        out[SQUARES, point] = totals[0] if reached >= 0 else np.nan
        out[VARIANCE, point] = totals[1] if reached >= 0 else np.nan
        out[ROWS, point] = rows
        out[DEGREE, point] = reached


@kernel(types.int64(READ_2D, types.float64, types.float64, types.int64, WRITE_2D))
def fit_slots(sums, at_zero, per_unit, count, fits):
    """Both estimators from kernel sums, see `fit_windows`; return how many windows look poor.

    Row REPLACED of `fits` gets 1 for those, whose power sums lost three digits or more.
    """
    s0 = sums[0]
    s1 = sums[1]
    s2 = sums[2]
    t0 = sums[3]
    t1 = sums[4]
    total = sums[6]
    second = sums[7]
    value = fits[VALUE]
    slope = fits[SLOPE]
    leverage = fits[UNIT_LEVERAGE]
    line_value = fits[LINE + VALUE]
    line_slope = fits[LINE + SLOPE]
    line_leverage = fits[LINE + UNIT_LEVERAGE]
    poor = fits[REPLACED]
    found = 0
    for k in range(count):
        product = s0[k] * s2[k]
        determinant = product - s1[k] * s1[k]
        good = (
            (determinant > _SHARE_SHORT * product)
            & (s0[k] >= _SHARE_SHORT * at_zero * total[k])
            & (s2[k] >= _SHARE_SHORT * at_zero * second[k])
        )
        poor[k] = 0.0 if good else 1.0
        found += not good
        inverse = 1.0 / s0[k]
        value[k] = t0[k] * inverse
        slope[k] = np.nan
        leverage[k] = at_zero * inverse
        inverse = 1.0 / determinant
        line_value[k] = (s2[k] * t0[k] - s1[k] * t1[k]) * inverse
        line_slope[k] = (s0[k] * t1[k] - s1[k] * t0[k]) * inverse * per_unit
        line_leverage[k] = at_zero * s2[k] * inverse
    return found


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64,
               READ_2D, WRITE_2D, WRITE_2D, WRITE_1D, WRITE_2D)
)  # fmt: skip
def refit_slots(x, y, weight, coefficients, bandwidth, first, count, sums, terms, basis, fit, fits):
    """Fit windows that look poor directly, where need be; rows at one x share their window."""
    at_zero = coefficients[0]
    former = -1
    for k in range(count):
        if fits[REPLACED, k] == 0.0:
            continue
        place = x[first + k]
        if former >= 0 and x[first + former] == place:
            for row in range(REPLACED + 1):
                fits[row, k] = fits[row, former]
            continue
        former = k
        low = first_within(x, 0, place, bandwidth)
        high = first_beyond(x, first + k, place, bandwidth)
        rows = high - low
        least = _SHARE_LONG
        if rows <= _LONG:
            least = _SHARE_MIDDLING if rows > _SHORT else _SHARE_SHORT
        product = sums[0, k] * sums[2, k]
        # No digit left in S_2: rows beside x_i all lie where the kernel ends.
        flat = rows > _LONG and sums[2, k] < least * at_zero * sums[7, k]
        if x[low] == x[high - 1] or flat:
            reached = 0
        elif (
            product - sums[1, k] * sums[1, k] > least * product
            and sums[0, k] >= least * at_zero * sums[6, k]
            and sums[2, k] >= least * at_zero * sums[7, k]
        ):
            reached = 1
        else:
            _fit_window(
                x, y, weight, coefficients, place, bandwidth, low, high, 0, terms, basis, fit
            )
            fits[VALUE, k] = fit[0]
            fits[UNIT_LEVERAGE, k] = fit[2]
            reached = _fit_window(
                x, y, weight, coefficients, place, bandwidth, low, high, 1, terms, basis, fit
            )
            for row in range(3):
                fits[LINE + row, k] = fit[row]
        fits[REPLACED, k] = 0.0
        if reached < 1:
            fits[LINE + VALUE, k] = fits[VALUE, k]
            fits[LINE + SLOPE, k] = 0.0
            fits[LINE + UNIT_LEVERAGE, k] = fits[UNIT_LEVERAGE, k]
            fits[REPLACED, k] = 1.0


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, types.float64, types.int64, types.int64,
               WRITE_2D)
)  # fmt: skip
def fit_windows(x, y, weight, coefficients, bandwidth, begin, end, out):
    """Local constant and local line at the rows begin to end.

    Results: `out` (7, end - begin), rows: value, slope (NaN), K(0) / S_0 of the local constant;
    value, slope per unit of x, K(0) S_2 / D of the local line; 1 where the window has no line
    (fewer than two distinct x, or D <= 1e-10 S_0 S_2): there the line's value and leverage are
    the local constant's, and its slope 0. The leverage of one of the c rows that row i stands
    for is w times K(0) a. No window is empty. Nothing happens where end <= begin.
    """
    if end <= begin:
        return
    arms, segments, places, centres, terms, carries, tables, moments, sums = make_work(
        x.shape[0], coefficients, 1
    )
    fits = aligned_rows(1, REPLACED + 1, SLOTS + 8)[0]
    chunk = np.empty((5, CHUNK))
    basis = np.zeros((4, 8))
    fit = np.zeros(3)
    for first in range(begin, end, SLOTS):
        count = min(SLOTS, end - first)
        fill_sums(
            x, y, weight, coefficients, bandwidth, 1, first, count,
            arms, segments, places, centres, terms, carries, tables, moments, sums,
        )  # fmt: skip
        if fit_slots(sums, coefficients[0], 1.0 / bandwidth, count, fits) > 0:
            refit_slots(
                x, y, weight, coefficients, bandwidth, first, count, sums, chunk, basis,
                fit, fits,
            )  # fmt: skip
        for row in range(REPLACED + 1):
            for k in range(count):
                out[row, first - begin + k] = fits[row, k]


@kernel(types.void(READ_1D, READ_1D, READ_BOOL_1D, types.int64, types.int64, WRITE_2D))
def _weigh_rows(weight, repeats, scored, first, count, rows):
    """Row 0 of `rows`: w of a single row; row 1: c, or 0 for rows that are not scored."""
    for k in range(count):
        c = repeats[first + k] if repeats.shape[0] > 0 else 1.0
        rows[0, k] = weight[first + k] / c if weight.shape[0] > 0 else 1.0
        rows[1, k] = c if scored.shape[0] == 0 or scored[first + k] else 0.0


@sum_kernel(types.void(READ_1D, READ_2D, READ_2D, types.int64, types.int64, types.int64, WRITE_2D))
def _score_slots(y, fits, rows, first, count, estimator, out):
    """Add the criterion sums of some rows to out[estimator]; see `score_windows`."""
    ys = y[first : first + count]
    value = fits[LINE * estimator + VALUE]
    unit_leverage = fits[LINE * estimator + UNIT_LEVERAGE]
    replaced = fits[REPLACED]
    precisions = rows[0]
    repeats = rows[1]
    score = residual = trace = lost = stand_ins = 0.0
    for k in range(count):
        w = precisions[k]
        c = repeats[k]
        r = ys[k] - value[k]
        leverage = w * unit_leverage[k]
        room = 1.0 - leverage
        predicted = room > _LEAST_ROOM
        squares = c * w * r * r if c > 0.0 else 0.0
        residual += squares
        score += squares / (room * room) if predicted else 0.0
        trace += c * leverage
        lost += 0.0 if predicted else c
        stand_ins += c * replaced[k]
    out[estimator, SCORE] += score
    out[estimator, RESIDUAL] += residual
    out[estimator, TRACE] += trace
    out[estimator, LOST] += lost
    out[estimator, STAND_INS] += stand_ins


@kernel(
    types.void(READ_1D, READ_1D, READ_1D, READ_1D, READ_BOOL_1D, READ_1D, types.float64,
               types.int64, types.int64, WRITE_2D)
)  # fmt: skip
def score_windows(x, y, weight, repeats, scored, coefficients, bandwidth, begin, end, out):
    """Leave-one-out criterion sums of local constant and local line over the rows begin to end.

    Parameters: `repeats` (n,) c, or (0,) when all are 1; `scored` (n,) bool, rows that enter the
    criterion (all enter the fits), or (0,) for all.
    Results: `out` (2, 5), local constant then local line: sum of c w (r / (1 - L))^2 over the
    rows that have a prediction without themselves; sum of c w r^2 over all; sum of c L; rows (c)
    without such a prediction (1 - L <= 1e-10); rows where the local constant stands in for the
    line (both estimators' rows hold it). Zeros where end <= begin.
    Source: Allen (1974, Technometrics 16:125); Stone (1974, JRSSB 36:111).
    """
    out[:] = 0.0
    if end <= begin:
        return
    arms, segments, places, centres, terms, carries, tables, moments, sums = make_work(
        x.shape[0], coefficients, 1
    )
    fits = aligned_rows(1, REPLACED + 1, SLOTS + 8)[0]
    rows = aligned_rows(1, 2, SLOTS + 8)[0]
    rows[:] = 1.0
    chunk = np.empty((5, CHUNK))
    basis = np.zeros((4, 8))
    fit = np.zeros(3)
    plain = weight.shape[0] + repeats.shape[0] + scored.shape[0] == 0
    for first in range(begin, end, SLOTS):
        count = min(SLOTS, end - first)
        fill_sums(
            x, y, weight, coefficients, bandwidth, 1, first, count,
            arms, segments, places, centres, terms, carries, tables, moments, sums,
        )  # fmt: skip
        if fit_slots(sums, coefficients[0], 1.0 / bandwidth, count, fits) > 0:
            refit_slots(
                x, y, weight, coefficients, bandwidth, first, count, sums, chunk, basis,
                fit, fits,
            )  # fmt: skip
        if not plain:
            _weigh_rows(weight, repeats, scored, first, count, rows)
        for estimator in range(2):
            _score_slots(y, fits, rows, first, count, estimator, out)
