"""Local constant, linear and quadratic fits by plain loops over raw rows.

Slow and obvious: every sum is `math.fsum` over a list, every system is solved by elimination in
the textbook order, every left-out row is really left out. Nothing here knows of bins.

Rows are lists of equal length. `weights` are precisions (the variance of a row is proportional to
1 / weight), `counts` are repeats (a row stands for so many equal rows); both default to ones.
"""

import math
from dataclasses import dataclass

# Kernel functions as printed in Wand & Jones (1995), Table 2.1, and Cleveland (1979, tricube).
KERNELS = {
    "uniform": lambda u: 0.5 if abs(u) <= 1.0 else 0.0,
    "triangular": lambda u: max(0.0, 1.0 - abs(u)),
    "epanechnikov": lambda u: 0.75 * (1.0 - u * u) if abs(u) < 1.0 else 0.0,
    "biweight": lambda u: 15.0 / 16.0 * (1.0 - u * u) ** 2 if abs(u) < 1.0 else 0.0,
    "triweight": lambda u: 35.0 / 32.0 * (1.0 - u * u) ** 3 if abs(u) < 1.0 else 0.0,
    "tricube": lambda u: 70.0 / 81.0 * (1.0 - abs(u) ** 3) ** 3 if abs(u) < 1.0 else 0.0,
    "gaussian": lambda u: math.exp(-0.5 * u * u) / math.sqrt(2.0 * math.pi),
}
DEGREES = {"local-constant": 0, "local-linear": 1}


@dataclass(frozen=True)
class Fit:
    """A fit at one place.

    `smoothing` are the row weights l_i with which value = sum l_i y_i; `unit_leverage` is the
    leverage at this place of one copy of a row of weight 1.
    """

    value: float
    slope: float
    unit_leverage: float
    smoothing: list[float]

    @property
    def sum_of_squares(self) -> float:
        return math.fsum(one * one for one in self.smoothing)


def solve(matrix, right):
    """Solve a small system by elimination with the largest pivot; None if it is singular."""
    size = len(right)
    rows = [[*matrix[i], right[i]] for i in range(size)]
    largest = max(abs(value) for row in matrix for value in row)
    for column in range(size):
        pivot = max(range(column, size), key=lambda i: abs(rows[i][column]))
        if abs(rows[pivot][column]) <= 1e-13 * largest:
            return None
        rows[column], rows[pivot] = rows[pivot], rows[column]
        for i in range(column + 1, size):
            factor = rows[i][column] / rows[column][column]
            for j in range(column, size + 1):
                rows[i][j] -= factor * rows[column][j]
    answer = [0.0] * size
    for i in reversed(range(size)):
        known = math.fsum(rows[i][j] * answer[j] for j in range(i + 1, size))
        answer[i] = (rows[i][size] - known) / rows[i][i]
    return answer


def fit_at(at, x, y, h, kernel, degree, weights=None, counts=None):
    """Fit a polynomial by least squares with kernel weights around one place.

    A window without rows gives None; one whose rows cannot carry the degree takes one less.
    """
    k = KERNELS[kernel]
    weights = weights or [1.0] * len(x)
    counts = counts or [1.0] * len(x)
    u = [(one - at) / h for one in x]
    mass = [c * w * k(v) for c, w, v in zip(counts, weights, u, strict=True)]
    if math.fsum(mass) <= 0.0:
        return None
    s = [math.fsum(m * v**j for m, v in zip(mass, u, strict=True)) for j in range(2 * degree + 1)]
    matrix = [[s[i + j] for j in range(degree + 1)] for i in range(degree + 1)]
    first = solve(matrix, [1.0] + [0.0] * degree)
    if first is None:
        return fit_at(at, x, y, h, kernel, degree - 1, weights, counts)
    # Value = first row of the inverse times the moments of y; slope = the second row's.
    smoothing = [
        m * math.fsum(a * v**j for j, a in enumerate(first)) for m, v in zip(mass, u, strict=True)
    ]
    value = math.fsum(a * b for a, b in zip(smoothing, y, strict=True))
    slope = math.nan
    if degree >= 1:
        second = solve(matrix, [0.0, 1.0] + [0.0] * (degree - 1))
        slope = (
            math.fsum(
                m * math.fsum(a * v**j for j, a in enumerate(second)) * b
                for m, v, b in zip(mass, u, y, strict=True)
            )
            / h
        )
    return Fit(value, slope, k(0.0) * first[0], smoothing)


@dataclass(frozen=True)
class Criteria:
    """Criteria over all rows; `leave_one_out` by the identity, `lost` rows without a prediction."""

    leave_one_out: float
    gcv: float
    aicc: float
    trace: float
    residual: float
    degrees: float
    lost: int


def criteria(x, y, h, kernel, degree, weights=None, counts=None):
    """Leave-one-out, gcv and aicc as they are defined, with the leave-one-out identity.

    Sources: Allen (1974, Technometrics 16:125); Craven & Wahba (1979, Numer. Math. 31:377);
    Hurvich, Simonoff & Tsai (1998, JRSSB 60:271). `degrees` = n - 2 tr L + tr L L'.
    """
    weights = weights or [1.0] * len(x)
    counts = counts or [1.0] * len(x)
    scores, residuals, leverages, squares, lost = [], [], [], [], 0
    for at, seen, w, c in zip(x, y, weights, counts, strict=True):
        fit = fit_at(at, x, y, h, kernel, degree, weights, counts)
        leverage = w * fit.unit_leverage
        residual = seen - fit.value
        residuals.append(c * w * residual**2)
        leverages.append(c * leverage)
        # A row of count c spreads its smoothing weight over c copies.
        l2 = math.fsum(a * a / b for a, b in zip(fit.smoothing, counts, strict=True))
        squares.append(c * l2)
        if 1.0 - leverage <= 1e-10:
            lost += 1
        else:
            scores.append(c * w * (residual / (1.0 - leverage)) ** 2)
    n = math.fsum(counts)
    total = math.fsum(c * w for c, w in zip(counts, weights, strict=True))
    trace = math.fsum(leverages)
    variance = math.fsum(residuals) / total
    room = n - trace - 2.0
    return Criteria(
        leave_one_out=math.fsum(scores) / total,
        gcv=variance / (1.0 - trace / n) ** 2,
        aicc=math.log(variance) + 1.0 + 2.0 * (trace + 1.0) / room if room > 0.0 else math.inf,
        trace=trace,
        residual=math.fsum(residuals),
        degrees=n - 2.0 * trace + math.fsum(squares),
        lost=lost,
    )


def leave_one_out_for_real(x, y, h, kernel, degree, weights=None):
    """Mean of w (y_i - prediction from the other rows)^2, every row really left out."""
    weights = weights or [1.0] * len(x)
    terms = []
    for i in range(len(x)):
        others = [j for j in range(len(x)) if j != i]
        fit = fit_at(
            x[i], [x[j] for j in others], [y[j] for j in others], h, kernel, degree,
            [weights[j] for j in others],
        )  # fmt: skip
        terms.append(weights[i] * (y[i] - fit.value) ** 2)
    return math.fsum(terms) / math.fsum(weights)


def constant_noise(x, y, h, kernel, degree):
    """RSS / (n - 2 tr L + tr L L') (Buckley, Eagleson & Silverman 1988; Cleveland & Devlin)."""
    made = criteria(x, y, h, kernel, degree)
    return made.residual / made.degrees
