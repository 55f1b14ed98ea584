"""Local fits in 40 digits, and nearest neighbours one by one: plain loops over all rows.

A row is in the window of a place when the difference of the two floats, as a float, is at most h.
From there on every number is exact to 40 digits: differences, kernel, sums about the window's own
mean. Rows are lists of equal length; weights are products of precision and count.
"""

from fractions import Fraction

import mpmath

# Kernel functions as printed in Wand & Jones (1995), Table 2.1, and Cleveland (1979, tricube).
KERNELS = {
    "uniform": lambda u: mpmath.mpf(1) / 2,
    "triangular": lambda u: 1 - abs(u),
    "epanechnikov": lambda u: mpmath.mpf(3) / 4 * (1 - u * u),
    "biweight": lambda u: mpmath.mpf(15) / 16 * (1 - u * u) ** 2,
    "triweight": lambda u: mpmath.mpf(35) / 32 * (1 - u * u) ** 3,
    "tricube": lambda u: mpmath.mpf(70) / 81 * (1 - abs(u) ** 3) ** 3,
}
DIGITS = 40


def window(place, x, h):
    """The rows of a window."""
    return [i for i, one in enumerate(x) if abs(one - place) <= h]


def sums_at(place, x, y, weights, h, kernel, degree):
    """S_0 to S_2p, then T_0 to T_p."""
    with mpmath.workdps(DIGITS):
        rows = window(place, x, h)
        u = [(mpmath.mpf(x[i]) - mpmath.mpf(place)) / mpmath.mpf(h) for i in rows]
        mass = [weights[i] * KERNELS[kernel](v) for i, v in zip(rows, u, strict=True)]
        s = [
            mpmath.fsum(m * v**j for m, v in zip(mass, u, strict=True))
            for j in range(2 * degree + 1)
        ]
        t = [
            mpmath.fsum(m * v**j * y[i] for i, m, v in zip(rows, mass, u, strict=True))
            for j in range(degree + 1)
        ]
        return [float(one) for one in s + t]


def line_at(place, x, y, weights, h, kernel):
    """Local constant and local line: (value, K(0) a) and (value, slope, K(0) a, share, spread).

    share is sum w K (u - mean of u)^2 over sum w K u^2, which is D / (S_0 S_2); where it is at
    most 1e-10 there is no line, None. spread is the standard deviation of x in the window. An
    empty window gives None twice.
    """
    with mpmath.workdps(DIGITS):
        rows = window(place, x, h)
        u = [(mpmath.mpf(x[i]) - mpmath.mpf(place)) / mpmath.mpf(h) for i in rows]
        mass = [weights[i] * KERNELS[kernel](v) for i, v in zip(rows, u, strict=True)]
        peak = KERNELS[kernel](mpmath.mpf(0))
        s0 = mpmath.fsum(mass)
        if s0 <= 0:
            return None, None
        seen = [mpmath.mpf(y[i]) for i in rows]
        middle = mpmath.fsum(m * v for m, v in zip(mass, u, strict=True)) / s0
        mean = mpmath.fsum(m * z for m, z in zip(mass, seen, strict=True)) / s0
        spread = mpmath.fsum(m * (v - middle) ** 2 for m, v in zip(mass, u, strict=True))
        second = mpmath.fsum(m * v**2 for m, v in zip(mass, u, strict=True))
        constant = (float(mean), float(peak / s0))
        if spread <= second * mpmath.mpf("1e-10"):
            return constant, None
        slope = (
            mpmath.fsum(
                m * (v - middle) * (z - mean) for m, v, z in zip(mass, u, seen, strict=True)
            )
            / spread
        )
        line = (
            float(mean - middle * slope),
            float(slope / mpmath.mpf(h)),
            float(peak * (1 / s0 + middle**2 / spread)),
            float(spread / second),
            float(mpmath.sqrt(spread / s0) * mpmath.mpf(h)),
        )
        return constant, line


def neighbours_mean(place, x, y, counts, k):
    """Mean of the k rows nearest to a place, those at the k-th distance in equal parts.

    Returns the mean, the part that one row at the place has in it, and the k-th distance.
    """
    distances = [abs(one - place) for one in x]
    copies = sorted(d for d, c in zip(distances, counts, strict=True) for _ in range(c))
    radius = copies[k - 1]
    inside = [i for i, d in enumerate(distances) if d < radius]
    border = [i for i, d in enumerate(distances) if d == radius]
    rows_inside = sum(counts[i] for i in inside)
    share = Fraction(k - rows_inside, sum(counts[i] for i in border))
    total = sum(Fraction(y[i]) * counts[i] for i in inside)
    total += share * sum(Fraction(y[i]) * counts[i] for i in border)
    part = share if radius == 0.0 else Fraction(1)
    return float(total / k), float(part / k), radius


def neighbours_left_out(x, y, counts, k):
    """Sum over single rows of (y - mean of the k nearest others)^2, each row really left out."""
    total = Fraction(0)
    for i, (place, seen) in enumerate(zip(x, y, strict=True)):
        others = [c - (j == i) for j, c in enumerate(counts)]
        kept = [j for j, c in enumerate(others) if c > 0]
        mean, _, _ = neighbours_mean(
            place, [x[j] for j in kept], [y[j] for j in kept], [others[j] for j in kept], k
        )
        total += counts[i] * (Fraction(seen) - Fraction(mean)) ** 2
    return float(total)
