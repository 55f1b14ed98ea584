"""Kernel functions, their constants, and their polynomial coefficients.

Every kernel K integrates to 1. Compact kernels live on [-1, 1] and are polynomials in |u|; the
Gaussian has standard deviation 1 and is cut at |u| = 8.5, where it is 2e-16 of its peak.

Symbols: R(K) = int K^2, mu_2 = int u^2 K, delta_0 = (R / mu_2^2)^(1/5) (canonical bandwidth,
Marron & Nolan 1988). Sources: Silverman (1986), Table 3.1; Wand & Jones (1995), Table 2.1;
Fan & Gijbels (1996), sections 3.2 and 4.2 for the constants of the plug-in rules.
"""

from dataclasses import dataclass
from math import comb, exp, pi, sqrt

UNIFORM, TRIANGULAR, EPANECHNIKOV, BIWEIGHT, TRIWEIGHT, TRICUBE, GAUSSIAN = range(7)
GAUSSIAN_SUPPORT = 8.5


@dataclass(frozen=True)
class Shape:
    """One kernel function.

    Attributes
    ----------
    name : str
        The published name, lower case.
    code : int
        What compiled kernels branch on.
    support : float
        K(u) = 0 for |u| > support, in units of the bandwidth.
    coefficients : tuple of float
        K(u) = sum_q coefficients[q] |u|^q on the support; empty for the Gaussian.
    smoothness : int
        K ~ (1 - |u|)^smoothness at the end of its support; large for the Gaussian.
    bins_per_bandwidth : int
        Bin widths in h at which binned sums are evaluated (at least this many, below twice it)
        where the table is fine enough.
    fewest_bins_per_bandwidth : int
        With fewer than these, sums lose the accuracy that is promised (1e-6 of the residual
        standard deviation for kernels with a continuous slope, 1e-4 for the others).
    """

    name: str
    code: int
    support: float
    coefficients: tuple[float, ...]
    smoothness: int
    bins_per_bandwidth: int
    fewest_bins_per_bandwidth: int

    def __call__(self, u: float) -> float:
        """Return K(u)."""
        distance = abs(u)
        if distance > self.support:
            return 0.0
        if not self.coefficients:
            return exp(-0.5 * u * u) / sqrt(2.0 * pi)
        return sum(c * distance**q for q, c in enumerate(self.coefficients))

    @property
    def at_zero(self) -> float:
        """K(0)."""
        return self(0.0)

    @property
    def is_even_polynomial(self) -> bool:
        """Whether K is a polynomial in u itself, not only in |u|."""
        return bool(self.coefficients) and not any(self.coefficients[1::2])

    def moment(self, order: int) -> float:
        """Return mu_order = int u^order K(u) du."""
        return 0.0 if order % 2 else 2.0 * self.half_moment(order)

    def half_moment(self, order: int) -> float:
        """Return int_0^1 u^order K(u) du (for the Gaussian int_0^infinity)."""
        if not self.coefficients:
            value = 0.5 if order % 2 == 0 else 1.0 / sqrt(2.0 * pi)
            for k in range(order - 1, 0, -2):
                value *= k
            return value
        return sum(c / (q + order + 1) for q, c in enumerate(self.coefficients))

    @property
    def reach(self) -> float:
        """Half the width of the window that counts as seen, in bandwidths: 1 if compact.

        For the Gaussian, the bandwidth of the biweight of equal canonical bandwidth.
        """
        if self.coefficients:
            return 1.0
        return SHAPES["biweight"].canonical_bandwidth / self.canonical_bandwidth

    @property
    def roughness(self) -> float:
        """R(K) = int K(u)^2 du."""
        if not self.coefficients:
            return 0.5 / sqrt(pi)
        return 2.0 * sum(
            a * b / (i + j + 1)
            for i, a in enumerate(self.coefficients)
            for j, b in enumerate(self.coefficients)
        )

    @property
    def canonical_bandwidth(self) -> float:
        """delta_0 = (R(K) / mu_2^2)^(1/5)."""
        return (self.roughness / self.moment(2) ** 2) ** 0.2


def _power(base: int, exponent: int, scale: float) -> tuple[float, ...]:
    """Coefficients of scale (1 - |u|^base)^exponent."""
    coefficients = [0.0] * (base * exponent + 1)
    for k in range(exponent + 1):
        coefficients[base * k] = scale * comb(exponent, k) * (-1.0) ** k
    return tuple(coefficients)


SHAPES = {
    shape.name: shape
    for shape in (
        Shape("uniform", UNIFORM, 1.0, (0.5,), 0, 64, 64),
        Shape("triangular", TRIANGULAR, 1.0, _power(1, 1, 1.0), 1, 64, 64),
        Shape("epanechnikov", EPANECHNIKOV, 1.0, _power(2, 1, 3 / 4), 1, 64, 64),
        Shape("biweight", BIWEIGHT, 1.0, _power(2, 2, 15 / 16), 2, 64, 32),
        Shape("triweight", TRIWEIGHT, 1.0, _power(2, 3, 35 / 32), 3, 64, 32),
        Shape("tricube", TRICUBE, 1.0, _power(3, 3, 70 / 81), 3, 64, 32),
        Shape("gaussian", GAUSSIAN, GAUSSIAN_SUPPORT, (), 99, 16, 12),
    )
}
