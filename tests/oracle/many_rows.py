"""The loops of `tests.oracle.local` compiled, for inputs too large for plain Python.

Still every row against every other, one plain sum after another; a test holds these against the
plain ones. Sums are about the mean of y, which changes no fit and keeps digits.
"""

import math

import numba
import numpy as np

CODES = {
    "uniform": 0, "triangular": 1, "epanechnikov": 2, "biweight": 3, "triweight": 4,
    "tricube": 5, "gaussian": 6,
}  # fmt: skip


@numba.njit
def kernel_at(code, u):
    distance = abs(u)
    if code == 6:
        return math.exp(-0.5 * u * u) / math.sqrt(2.0 * math.pi)
    if distance > 1.0:
        return 0.0
    if code == 0:
        return 0.5
    if code == 1:
        return 1.0 - distance
    if code == 2:
        return 0.75 * (1.0 - u * u)
    if code == 3:
        return 15.0 / 16.0 * (1.0 - u * u) ** 2
    if code == 4:
        return 35.0 / 32.0 * (1.0 - u * u) ** 3
    return 70.0 / 81.0 * (1.0 - distance**3) ** 3


@numba.njit
def fits_at(places, x, y, w, h, code, degree):
    """Rows: value, slope, a_00 K(0), sum of l^2 / count (with w = count weights of one row)."""
    out = np.full((4, places.shape[0]), np.nan)
    for p in range(places.shape[0]):
        s0 = s1 = s2 = t0 = t1 = v0 = v1 = v2 = 0.0
        for i in range(x.shape[0]):
            u = (x[i] - places[p]) / h
            k = kernel_at(code, u)
            if k == 0.0:
                continue
            g = w[i] * k
            s0 += g
            s1 += g * u
            s2 += g * u * u
            t0 += g * y[i]
            t1 += g * u * y[i]
            g *= g
            v0 += g
            v1 += g * u
            v2 += g * u * u
        if s0 <= 0.0:
            continue
        determinant = s0 * s2 - s1 * s1
        at_zero = kernel_at(code, 0.0)
        if degree == 1 and determinant > 1e-12 * s0 * s2:
            out[0, p] = (s2 * t0 - s1 * t1) / determinant
            out[1, p] = (s0 * t1 - s1 * t0) / determinant / h
            out[2, p] = at_zero * s2 / determinant
            out[3, p] = (s2 * s2 * v0 - 2.0 * s1 * s2 * v1 + s1 * s1 * v2) / determinant**2
        else:
            out[0, p] = t0 / s0
            out[2, p] = at_zero / s0
            out[3, p] = v0 / (s0 * s0)
    return out


def fit_many(places, x, y, h, kernel, degree, weights=None):
    """Value, slope, unit leverage and sum of squared row weights at many places, (4, places)."""
    w = np.ones(len(x)) if weights is None else np.asarray(weights, float)
    middle = float(np.mean(y))
    out = fits_at(
        np.asarray(places, float), np.asarray(x, float), np.asarray(y, float) - middle, w,
        float(h), CODES[kernel], degree,
    )  # fmt: skip
    out[0] += middle
    return out


def criteria_many(x, y, h, kernel, degree, weights=None):
    """Leave-one-out, gcv, aicc, trace, as `tests.oracle.local.criteria` (counts all 1)."""
    w = np.ones(len(x)) if weights is None else np.asarray(weights, float)
    value, _, unit_leverage, _ = fit_many(x, x, y, h, kernel, degree, w)
    leverage = w * unit_leverage
    residual = np.asarray(y, float) - value
    n, total = len(x), w.sum()
    with np.errstate(divide="ignore", invalid="ignore"):
        # A row that alone decides its own fit has no prediction from the others.
        loo = (
            np.where(1.0 - leverage > 1e-10, w * (residual / (1.0 - leverage)) ** 2, np.inf).sum()
            / total
        )
    variance = (w * residual**2).sum() / total
    trace = leverage.sum()
    room = n - trace - 2.0
    return {
        "leave-one-out": float(loo),
        "gcv": float(variance / (1.0 - trace / n) ** 2),
        "aicc": float(np.log(variance) + 1.0 + 2.0 * (trace + 1.0) / room) if room > 0 else np.inf,
        "trace": float(trace),
    }


def best_bandwidth(x, y, kernel, degree, low, high, criterion="leave-one-out", widths=24):
    """The bandwidth of least criterion: a grid in log h, then golden section around its best."""

    def score(log_h):
        return criteria_many(x, y, math.exp(log_h), kernel, degree)[criterion]

    grid = np.linspace(math.log(low), math.log(high), widths)
    place = int(np.argmin([score(one) for one in grid]))
    left, right = grid[max(place - 1, 0)], grid[min(place + 1, widths - 1)]
    golden = (math.sqrt(5.0) - 1.0) / 2.0
    while right - left > 1e-4:
        a, b = right - golden * (right - left), left + golden * (right - left)
        if score(a) <= score(b):
            right = b
        else:
            left = a
    return math.exp(0.5 * (left + right))
