"""Plug-in bandwidths: one guess from estimated curvature and noise, without a search.

The asymptotic mean squared error of a local line, averaged over the rows, is least at

    h = [ R(K) sigma^2 W / (mu_2(K)^2 n theta22) ]^(1/5),  theta22 = (1/n) sum over rows of m''^2,

with W the length of the interval that theta22 is taken over. The rules differ in how they
estimate sigma^2 and theta22. Both suppose independent errors of one variance and a curve that is
equally smooth everywhere.

All of it works on bin moments: counts are repeats; with precision weights, n in the formula is
the sum of weights, averages over rows are weighted, and sigma^2 is the variance at weight 1.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache
from itertools import pairwise
from typing import TYPE_CHECKING

import numpy as np
from numpy.polynomial import Legendre
from numpy.typing import NDArray

from fastsmooth.bintable import Level, Pyramid
from fastsmooth.errors import InputError
from fastsmooth.settings import ESTIMATORS, one_of
from fastsmooth.smoother import fit_level, kernel_sums, least_weight, score_level

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

# Least bins across the data. Quartics cost little and gain from finer ones: which rows a block
# begins with shows in q''.
_BINS_FOR_KERNELS = 1024
_BINS_FOR_QUARTICS = 4096
_BINS_PER_BANDWIDTH = 16
_DEGREE = 4
_LEAST_PLACES = _DEGREE + 2
_MOST_BLOCKS = 5
_ROWS_PER_BLOCK = 20
# Both ends of the range that the averages leave out; inside, z = -1 to 1 spans the range.
_TRIMMED = 0.05
_INNER = 2.0 * (1.0 - 2.0 * _TRIMMED)
# Mean square of q'' (in z) that rounding alone can make, in variances of y.
_NO_CURVATURE = 1e-18
# A local cubic whose second coefficient is this many times as variable as among evenly spread
# rows (300 times at the very end of a range) has too few places in its window.
_MOST_VARIABLE = 1000.0
# Sums of powers of u that are smaller than this share of S_0 may be rounding alone.
_ROUNDING = 1e-9
_MEDIAN_GAPS = 5.0
# With fewer rows in the interval, the rule would tune the width for where hardly any row is.
_LEAST_INNER_SHARE = 0.5


@dataclass(frozen=True)
class PilotConstants:
    """Kernel constants of the two pilot bandwidths (Ruppert, Sheather & Wand 1995).

    Attributes
    ----------
    curvature_negative, curvature_positive : float
        C2 of the bandwidth for theta22, by the sign of theta24.
    noise : float
        C3 of the bandwidth for sigma^2.
    """

    curvature_negative: float
    curvature_positive: float
    noise: float


@lru_cache(maxsize=16)
def pilot_constants(shape: Shape) -> PilotConstants:
    """Return a kernel's constants for the pilot bandwidths.

    With K2 the equivalent kernel of a local cubic's second coefficient and B = int u^4 K2:
    C2 = (24 R(K2) / B)^(1/7) if theta24 < 0, where bias can cancel variance, else
    (60 R(K2) / B)^(1/7); C3 = (4 R(2 K - K*K) / mu_2^4)^(1/9).

    Source: Ruppert, Sheather & Wand (1995, JASA 90:1257), section 3, there for the Gaussian;
    Fan & Gijbels (1996), section 3.2, for the equivalent kernel.

    Examples
    --------
    >>> from fastsmooth.kernels.shapes import SHAPES
    >>> round(pilot_constants(SHAPES["epanechnikov"]).noise, 5)
    2.34294
    """
    mu2, mu4, mu6 = (shape.moment(order) for order in (2, 4, 6))
    square0, square2, square4 = (_square_moment(shape, order) for order in (0, 2, 4))
    # K2(u) = (u^2 - mu_2) K(u) / (mu_4 - mu_2^2).
    roughness = (square4 - 2.0 * mu2 * square2 + mu2**2 * square0) / (mu4 - mu2**2) ** 2
    bias = (mu6 - mu2 * mu4) / (mu4 - mu2**2)
    return PilotConstants(
        (24.0 * roughness / bias) ** (1 / 7),
        (60.0 * roughness / bias) ** (1 / 7),
        (4.0 * _twicing_roughness(shape) / mu2**4) ** (1 / 9),
    )


def _square_moment(shape: Shape, order: int) -> float:
    """Int u^order K(u)^2 du for an even order."""
    if not shape.coefficients:
        # K^2 is R(K) times the normal density of variance 1/2.
        return shape.roughness * shape.moment(order) / 2.0 ** (order / 2)
    return 2.0 * sum(
        a * b / (i + j + order + 1)
        for i, a in enumerate(shape.coefficients)
        for j, b in enumerate(shape.coefficients)
    )


def _twicing_roughness(shape: Shape) -> float:
    """R(2 K - K*K)."""
    if not shape.coefficients:
        return (0.5 + 2.0 * math.sqrt(2.0) - 4.0 * math.sqrt(3.0) / 3.0) / math.sqrt(2.0 * math.pi)
    degree = len(shape.coefficients) - 1
    # K*K is piecewise a polynomial of degree 2 degree + 1; its square sets the number of nodes.
    nodes, weights = np.polynomial.legendre.leggauss(2 * degree + 2)
    kernel = np.polynomial.Polynomial(shape.coefficients)
    total = 0.0
    for start in (0.0, 1.0):
        t = start + (nodes + 1.0) / 2.0
        # K(s) K(s - t) lives on [t - 1, 1], with kinks at s = 0 and s = t if t < 1.
        inner = [np.zeros(t.shape), t] if start == 0.0 else []
        folded = np.zeros(t.shape)
        for left, right in pairwise([t - 1.0, *inner, np.ones(t.shape)]):
            s = left + (right - left) * (nodes[:, np.newaxis] + 1.0) / 2.0
            product = kernel(np.abs(s)) * kernel(np.abs(s - t))
            folded += (right - left) / 2.0 * (weights @ product)
        difference = (2.0 * kernel(t) if start == 0.0 else 0.0) - folded
        total += float(weights @ difference**2)  # half the interval, on both sides of 0
    return total


def plug_in_bandwidth(pyramid: Pyramid, shape: Shape, estimator: str) -> float:
    """Return the direct plug-in bandwidth.

    Quartics fitted to blocks of rows (as many blocks as Mallows' Cp prefers) give pilot
    bandwidths; a local cubic at the one then gives theta22, and a local line at the other
    sigma^2. Averages leave out a twentieth of the range at either end. Where a window holds too
    few places for a cubic, the blocks' quartic stands in. If theta22 or theta24 is nil, the
    answer is `rule_of_thumb`.

    Parameters
    ----------
    pyramid : Pyramid
        Levels of a finished table.
    shape : Shape
        Kernel function.
    estimator : str
        ``local-linear`` or ``local-constant``. The rule is made for the local line. The bias of
        the local constant also depends on how rows crowd, and no rule of the same standing
        covers that: it gets the same bandwidth.

    Returns
    -------
    float
        On the plan's scale, between five median gaps of x (a gap is at least a bin) and half the
        range of x.

    Raises
    ------
    InputError
        The estimator is unknown, the rows lie at fewer than six places, or fewer than half of
        them lie in the middle nine tenths of the range.

    Notes
    -----
    Source: Ruppert, Sheather & Wand (1995, JASA 90:1257), h_DPI.

    Examples
    --------
    >>> from fastsmooth.bintable import BinTable
    >>> from fastsmooth.kernels.shapes import SHAPES
    >>> from fastsmooth.plan import Plan
    >>> table = BinTable(Plan.simple(low=0.0, high=10.0, bins=2048, folds=1))
    >>> x = np.linspace(0.0, 10.0, 5000)
    >>> noise = np.random.default_rng(1).normal(size=5000)
    >>> table.add_rows(0, x, 20.0 + np.sin(x) + 0.3 * noise)
    >>> h = plug_in_bandwidth(Pyramid(table), SHAPES["epanechnikov"], "local-linear")
    >>> 0.3 < h < 0.4
    True
    """
    one_of("--estimator", estimator, ESTIMATORS)
    data = _data(pyramid)
    pilot = _blocked_quartics(data, _MOST_BLOCKS)
    if pilot.theta24 == 0.0:
        return rule_of_thumb(pyramid, shape)
    constants = pilot_constants(shape)
    factor = constants.curvature_negative if pilot.theta24 < 0.0 else constants.curvature_positive
    ratio = _ratio(pilot.variance, abs(pilot.theta24)) * _INNER / data.weight
    theta22 = _local_theta22(data, shape, data.clip(factor * ratio ** (1 / 7)), pilot)
    if theta22 <= 0.0:
        return rule_of_thumb(pyramid, shape)
    # Written as the square of a ratio: fourth powers of y would overflow.
    ratio = _ratio(pilot.variance, pilot.theta22) ** 2 * _INNER / data.weight**2
    variance = _local_variance(data, shape, data.clip(constants.noise * ratio ** (1 / 9)), pilot)
    return data.clip(_best(shape, variance, theta22, data.weight))


def rule_of_thumb(pyramid: Pyramid, shape: Shape) -> float:
    """Return the rule-of-thumb bandwidth: curvature and noise from one quartic over all rows.

    Good for a curve as simple as a quartic; far too wide for one that waves more often (2.6
    times the best width for five half waves). Use it to bracket a search.

    Parameters
    ----------
    pyramid : Pyramid
        Levels of a finished table.
    shape : Shape
        Kernel function.

    Returns
    -------
    float
        On the plan's scale, between five median gaps of x and half the range of x; that half for
        a quartic without curvature.

    Raises
    ------
    InputError
        As `plug_in_bandwidth`.

    Notes
    -----
    Source: Fan & Gijbels (1996), section 4.2.
    """
    data = _data(pyramid)
    pilot = _blocked_quartics(data, 1)
    return data.clip(_best(shape, pilot.variance, pilot.theta22, data.weight))


def _best(shape: Shape, variance: float, theta22: float, weight: float) -> float:
    """The bandwidth in z that minimises the asymptotic error; infinite without curvature."""
    return shape.canonical_bandwidth * float((_ratio(variance, theta22) * _INNER / weight) ** 0.2)


def _ratio(above: float, below: float) -> float:
    return above / below if below > 0.0 else math.inf


@dataclass(frozen=True)
class _Data:
    """A pyramid and the units of the rule: z = (x - middle) / half runs from -1 to 1."""

    pyramid: Pyramid
    middle: float
    half: float
    narrowest: float
    rows: float
    weight: float

    def z(self, x: Floats) -> Floats:
        return (x - self.middle) / self.half

    def clip(self, bandwidth: float) -> float:
        """Turn a bandwidth in z into one on the plan's scale, within the limits."""
        return min(max(bandwidth * self.half, self.narrowest), self.half)

    def coarsest(self, bins: int) -> int:
        """The coarsest level with so many bins across the data, else the finest."""
        levels = self.pyramid.levels
        enough = [i for i, level in enumerate(levels) if 2.0 * self.half >= bins * level.width]
        return max(enough, default=0)

    def level_for(self, bandwidth: float) -> Level:
        """The coarsest level that serves a bandwidth on the plan's scale."""
        index = self.pyramid.level_for(bandwidth, _BINS_PER_BANDWIDTH)
        return self.pyramid.levels[min(index, self.coarsest(_BINS_FOR_KERNELS))]


def _data(pyramid: Pyramid) -> _Data:
    finest = pyramid.levels[0]
    used = np.flatnonzero(finest.first[0])
    rows = float(finest.count.sum())
    if used.size < _LEAST_PLACES or rows < _LEAST_PLACES:
        raise InputError(
            "DATA",
            f"hold rows at {_LEAST_PLACES} or more places of x for a plug-in bandwidth",
            f"the {rows:,.0f} rows lie at {used.size:,}",
            "use --criterion leave-one-out or give --bandwidth",
        )
    x = _mean_places(finest, used)
    low, high = float(x[0]), float(x[-1])
    half, middle = 0.5 * (high - low), 0.5 * (low + high)
    inner = np.abs(x - middle) <= 0.5 * _INNER * half
    share = float(finest.count[used[inner]].sum()) / rows
    if share < _LEAST_INNER_SHARE:
        raise InputError(
            "DATA",
            "hold most rows in the middle nine tenths of the range of x for a plug-in bandwidth",
            f"{share:.1%} of them lie there",
            "narrow --range or use --criterion leave-one-out",
        )
    gap = max(float(np.median(np.diff(x))), finest.width)
    weight = float(finest.first[0].sum())
    return _Data(pyramid, middle, half, _MEDIAN_GAPS * gap, rows, weight)


def _mean_places(level: Level, used: NDArray[np.int64]) -> Floats:
    return level.origin + level.width * (used + 0.5 + level.first[1, used] / level.first[0, used])


@dataclass(frozen=True)
class _Pilot:
    """What the quartics say: sigma^2, the averages in z, and their q'' at places z."""

    variance: float
    theta22: float
    theta24: float
    z: Floats
    curvature: Floats


@dataclass(frozen=True)
class _Rows:
    """The rows of the bins in use: where they lie on average, and how they vary within bins."""

    z: Floats
    y: Floats
    weight: Floats
    count: Floats
    within: tuple[Floats, Floats, Floats]

    def residual(self, places: slice, value: Floats, slope: Floats) -> float:
        """Sum of w (y - q)^2 over the rows, q taken as a line within each bin."""
        zz, zy, yy = (one[places] for one in self.within)
        inside = np.maximum(yy - 2.0 * slope * zy + slope**2 * zz, 0.0)
        return float(np.sum(inside + self.weight[places] * (self.y[places] - value) ** 2))


def _binned_rows(data: _Data) -> _Rows:
    level = data.pyramid.levels[data.coarsest(_BINS_FOR_QUARTICS)]
    used = np.flatnonzero(level.first[0])
    w, v, vv, e, ve, _, ee = level.first[:, used]
    y = level.pilot[used] + e / w
    unit = level.width / data.half
    within = ((vv - v * v / w) * unit**2, (ve - v * e / w) * unit, ee - e * e / w)
    y -= np.average(y, weights=w)
    return _Rows(data.z(_mean_places(level, used)), y, w, level.count[used], within)


def _blocked_quartics(data: _Data, most: int) -> _Pilot:
    """Quartics by least squares in blocks of equally many rows, by Mallows' Cp at most `most`."""
    rows = _binned_rows(data)
    # Rows of a bin stay together; a bin belongs to the block of its middle row.
    ranks = (np.cumsum(rows.count) - 0.5 * rows.count) / data.rows
    tried = []
    for blocks in range(1, max(min(int(data.rows) // _ROWS_PER_BLOCK, most), 1) + 1):
        ends = np.searchsorted(ranks, np.arange(blocks + 1) / blocks)
        if blocks > 1 and np.diff(ends).min() < _LEAST_PLACES:
            break
        tried.append(_quartics(rows, ends))
    parameters = (_DEGREE + 1) * np.arange(1, len(tried) + 1)
    residuals = np.array([residual for residual, _, _ in tried])
    # Cp times the noise of the largest fit: the same minimum, and no division by a perfect fit.
    noise = residuals[-1] / (data.rows - parameters[-1])
    chosen = int(np.argmin(residuals - noise * (data.rows - 2.0 * parameters)))
    residual, second, fourth = tried[chosen]
    inner = rows.weight * (np.abs(rows.z) <= 0.5 * _INNER)
    theta22 = float(np.sum(inner * second**2)) / data.weight
    theta24 = float(np.sum(inner * second * fourth)) / data.weight
    if theta22 <= _NO_CURVATURE * float(np.sum(rows.weight * rows.y**2)) / data.weight:
        theta22 = theta24 = 0.0
    variance = residual / (data.rows - float(parameters[chosen]))
    return _Pilot(variance, theta22, theta24, rows.z, second)


def _quartics(rows: _Rows, ends: NDArray[np.int64]) -> tuple[float, Floats, Floats]:
    """Residual sum of squares, and q'' and q'''' at all places."""
    residual = 0.0
    second, fourth = np.empty(rows.z.size), np.empty(rows.z.size)
    for start, stop in zip(ends[:-1].tolist(), ends[1:].tolist(), strict=True):
        block = slice(start, stop)
        z = rows.z[block]
        # "full" answers clustered places with the least solution rather than a warning.
        fit, _ = Legendre.fit(z, rows.y[block], _DEGREE, w=np.sqrt(rows.weight[block]), full=True)
        residual += rows.residual(block, fit(z), fit.deriv()(z))
        second[block] = fit.deriv(2)(z)
        fourth[block] = fit.deriv(4)(z)
    return residual, second, fourth


def _local_theta22(data: _Data, shape: Shape, bandwidth: float, pilot: _Pilot) -> float:
    """Average of m''^2 from local cubics, in z.

    With A, B, C the two by two blocks of S_0..S_6, the second and third coefficients solve
    (C - B A^-1 B) beta = (T_2, T_3) - B A^-1 (T_0, T_1) (Fan & Gijbels 1996, section 3.1).
    """
    level = data.level_for(bandwidth)
    used = np.flatnonzero(level.first[0])
    inner = used[np.abs(data.z(_mean_places(level, used))) <= 0.5 * _INNER]
    h = bandwidth / level.width
    s0, s1, s2, s3, s4, s5, s6 = kernel_sums(level.first[0:3], shape, h, 7, squared=False)[:, inner]
    t0, t1, t2, t3 = kernel_sums(level.response, shape, h, 4, squared=False)[:, inner]
    determinant = s0 * s2 - s1 * s1
    line = determinant > _ROUNDING * s0 * s0
    safe = np.where(line, determinant, 1.0)
    # Rows of B A^-1.
    p0, p1 = (s2 * s2 - s1 * s3) / safe, (s0 * s3 - s1 * s2) / safe
    q0, q1 = (s2 * s3 - s1 * s4) / safe, (s0 * s4 - s1 * s3) / safe
    f00 = s4 - p0 * s2 - p1 * s3
    f01 = s5 - p0 * s3 - p1 * s4
    f11 = s6 - q0 * s3 - q1 * s4
    g0 = t2 - p0 * t0 - p1 * t1
    g1 = t3 - q0 * t0 - q1 * t1
    determinant = f00 * f11 - f01 * f01
    # The variance of the second coefficient is in proportion to f11 / determinant.
    even = shape.moment(4) - shape.moment(2) ** 2
    cubic = line & (f11 > _ROUNDING * s0) & (determinant > even / _MOST_VARIABLE * f11 * s0)
    beta = (f11 * g0 - f01 * g1) / np.where(cubic, determinant, 1.0)
    quartic = np.interp(data.z(level.centres[inner]), pilot.z, pilot.curvature)
    curvature = np.where(cubic, 2.0 * beta * (data.half / bandwidth) ** 2, quartic)
    return float(np.sum(level.first[0, inner] * curvature**2)) / data.weight


def _local_variance(data: _Data, shape: Shape, bandwidth: float, pilot: _Pilot) -> float:
    """sigma^2 from a local line's residuals, over n - 2 tr L + sum of w_i L_ij^2 / w_j.

    The divisor is exact for an unbiased fit (Buckley, Eagleson & Silverman 1988, Biometrika
    75:189); a fit that leaves no freedom answers with the pilot's variance.
    """
    level = data.level_for(bandwidth)
    fits = fit_level(level, shape, bandwidth, least_weight(data.pyramid, shape))
    scores = score_level(fits, "local-linear", level)
    used = level.first[0] > 0.0
    s0, s1, s2 = fits.sums[:, used]
    v0, v1, v2 = kernel_sums(level.first[0:3], shape, fits.bandwidth_bins, 3, squared=True)[:, used]
    # Windows without spread have fallen back to the local constant, of the same leverage.
    line = fits.unit_leverages["local-linear"][used] != fits.unit_leverages["local-constant"][used]
    determinant = np.where(line, s0 * s2 - s1 * s1, 1.0)
    squares = np.where(
        line,
        (s2 * s2 * v0 - 2.0 * s1 * s2 * v1 + s1 * s1 * v2) / determinant**2,
        v0 / (s0 * s0),
    )
    freedom = data.rows - 2.0 * scores.trace + float(np.sum(level.first[0, used] * squares))
    return max(scores.residual, 0.0) / freedom if freedom >= 1.0 else pilot.variance
