"""Noise along x, and the curve with its band at any points."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Level
from fastsmooth.curve import EDGE, OK, OUTSIDE, THIN
from fastsmooth.smoother import Fits, kernel_sums, least_spread

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

# The variance's own width is chosen among these multiples of the curve's by leaving out groups.
_VARIANCE_MULTIPLES = (1.0, 1.5, 2.0, 3.0, 4.0, 6.0, 8.0, 12.0, 16.0)
_VARIANCE_GROUPS = 8
_VARIANCE_BINS_PER_BANDWIDTH = 16


@dataclass(frozen=True)
class Noise:
    """Variance of a row of weight 1 around the curve, at the bin centres of a level.

    Attributes
    ----------
    variance : (bins,) float64
        sigma^2; every bin has a value.
    degrees : (bins,) float64
        Degrees of freedom of that value.
    overall : float
        One sigma^2 for all rows.
    bandwidth : float or None
        Width with which the variance was smoothed, in bins of the level; None if constant.
    """

    variance: Floats
    degrees: Floats
    overall: float
    bandwidth: float | None


class Points(NamedTuple):
    """The curve at some points; see `fastsmooth.curve.Curve` for the terms."""

    estimate: Floats
    slope: Floats
    std_error: Floats
    lower: Floats
    upper: Floats
    effective_rows: Floats
    residual_sd: Floats
    status: NDArray[np.int64]


def estimate_noise(fits: Fits, estimator: str, shape: Shape, kind: str) -> Noise:
    """Estimate the residual variance along x from bin moments.

    Squared residuals are divided by their expectation under constant variance,
    1 - 2 L_ii + sum_j L_ij^2 (Ruppert, Wand, Holst & Hoessjer 1997, Technometrics 39:262), and
    smoothed by a local line (Fan & Yao 1998, Biometrika 85:645), whose width is chosen by
    leaving out one of eight groups of folds at a time. With a constant variance:
    RSS / (n - 2 tr L + tr L L').

    Parameters
    ----------
    fits : Fits
        The curve at the bin centres.
    estimator : str
        Which of the two.
    shape : Shape
        Kernel function.
    kind : str
        ``local`` or ``constant``.
    """
    level = fits.level
    squared, expected = _squared_residuals(fits, estimator, shape)
    total = squared.sum(axis=0)
    room = float(expected.sum())
    overall = float(total.sum()) / room if room > 0.0 else np.nan
    if kind == "constant" or not room > 0.0:
        return Noise(np.full(level.bins, overall), np.full(level.bins, room), overall, None)
    # Fewer bins suffice for a variance: at least sixteen to a bandwidth.
    step = 1
    while fits.bandwidth_bins / (2 * step) >= _VARIANCE_BINS_PER_BANDWIDTH and level.bins % (2 * step) == 0:
        step *= 2
    groups = squared.reshape(squared.shape[0], -1, step).sum(axis=2)
    weights = expected.reshape(expected.shape[0], -1, step).sum(axis=2)
    own = fits.bandwidth_bins / step
    multiple = _choose_multiple(groups, weights, shape, own)
    width = multiple * own
    variance, degrees = _smooth_variance(groups.sum(axis=0), weights.sum(axis=0), shape, width)
    known = np.flatnonzero(np.isfinite(variance) & (variance > 0.0))
    if not known.size:
        return Noise(np.full(level.bins, overall), np.full(level.bins, room), overall, None)
    coarse = (np.arange(variance.shape[0]) + 0.5) * step
    centres = np.arange(level.bins) + 0.5
    return Noise(
        np.interp(centres, coarse[known], variance[known]),
        np.interp(centres, coarse[known], degrees[known]),
        overall,
        width * step,
    )


def _squared_residuals(fits: Fits, estimator: str, shape: Shape) -> tuple[Floats, Floats]:
    """Sums of w r^2 and their expectations over sigma^2, per group of folds and bin."""
    level = fits.level
    value, slope = fits.values[estimator], fits.slopes[estimator]
    v = kernel_sums(level.first[0:3], shape, fits.bandwidth_bins, 3, squared=True)
    s = fits.sums
    with np.errstate(invalid="ignore", divide="ignore"):
        constant = v[0] / s[0] ** 2
        spread = s[2] ** 2 * v[0] - 2.0 * s[1] * s[2] * v[1] + s[1] ** 2 * v[2]
        linear = spread / (s[0] * s[2] - s[1] ** 2) ** 2
        # Windows without a slope were fitted by a constant: their leverages are the same.
        fell_back = fits.unit_leverages["local-linear"] == fits.unit_leverages["local-constant"]
        own = constant if estimator == "local-constant" else np.where(fell_back, constant, linear)
        share = (
            level.count - 2.0 * fits.unit_leverages[estimator] * level.first[0]
            + own * level.first[0]
        )  # fmt: skip
    usable = np.isfinite(value) & (level.count > 0.0) & np.isfinite(share)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.where(usable, np.clip(share / level.count, 0.0, None), 0.0)
    r = np.where(usable, value - level.pilot, 0.0)
    g = np.where(usable, slope, 0.0)
    folds = level.folds.shape[0]
    ends = np.linspace(0, folds, min(_VARIANCE_GROUPS, folds) + 1).astype(int)
    grouped = np.add.reduceat(level.folds, ends[:-1], axis=0) if folds else level.folds
    squared = (
        grouped[:, 6] - 2.0 * r * grouped[:, 3] - 2.0 * g * grouped[:, 4]
        + r * r * grouped[:, 0] + 2.0 * r * g * grouped[:, 1] + g * g * grouped[:, 2]
    )  # fmt: skip
    # Rounding may leave a hair below zero where all rows sit on the curve.
    squared = np.clip(squared * usable, 0.0, None)
    with np.errstate(invalid="ignore", divide="ignore"):
        parts = np.where(level.first[0] > 0.0, grouped[:, 0] / level.first[0], 0.0)
    return squared, parts * ratio * level.count


def _choose_multiple(groups: Floats, weights: Floats, shape: Shape, own: float) -> float:
    bins = groups.shape[1]
    multiples = [m for m in _VARIANCE_MULTIPLES if m == 1.0 or m * own <= 2.0 * bins]
    if groups.shape[0] < 2 or len(multiples) == 1:
        return multiples[-1]
    scores = np.zeros(len(multiples))
    total, total_weight = groups.sum(axis=0), weights.sum(axis=0)
    scale, _ = _smooth_variance(total, total_weight, shape, own)
    with np.errstate(divide="ignore", invalid="ignore"):
        relative = np.where(scale > 0.0, 1.0 / scale**2, 0.0)
    for place, multiple in enumerate(multiples):
        # Wider windows do with coarser bins; the variance is scored on the fine ones.
        step = 1
        while multiple / (2 * step) >= 1.0 and bins % (2 * step) == 0:
            step *= 2
        coarse = groups.reshape(groups.shape[0], -1, step).sum(axis=2)
        coarse_weights = weights.reshape(groups.shape[0], -1, step).sum(axis=2)
        for group in range(groups.shape[0]):
            others = np.arange(groups.shape[0]) != group
            variance, _ = _smooth_variance(
                coarse[others].sum(axis=0), coarse_weights[others].sum(axis=0), shape,
                multiple * own / step,
            )  # fmt: skip
            variance = np.repeat(variance, step)
            part = relative * (variance**2 * weights[group] - 2.0 * variance * groups[group])
            missing = ~np.isfinite(variance) & (weights[group] > 0.0)
            scores[place] += np.inf if missing.any() else float(np.nansum(part))
    return multiples[int(np.argmin(scores))] if np.isfinite(scores).any() else multiples[-1]


def _smooth_variance(
    squared: Floats, weight: Floats, shape: Shape, width: float
) -> tuple[Floats, Floats]:
    """Local line through squared residuals over their expectations, kept positive."""
    moments = np.zeros((3, squared.shape[0]))
    moments[0] = weight
    s = kernel_sums(moments, shape, width, 3, squared=False)
    v = kernel_sums(moments, shape, width, 1, squared=True)
    moments[0] = squared
    t = kernel_sums(moments, shape, width, 2, squared=False)
    with np.errstate(invalid="ignore", divide="ignore"):
        seen = s[0] > 1e-9 * shape.at_zero
        constant = np.where(seen, np.clip(t[0], 0.0, None) / s[0], np.nan)
        determinant = s[0] * s[2] - s[1] ** 2
        line = (s[2] * t[0] - s[1] * t[1]) / determinant
        # The line may dip below zero or overshoot where one side of the window is empty.
        good = (determinant > 1e-4 * s[0] * s[2]) & np.isfinite(line)
        variance = np.where(good, np.clip(line, constant / 4.0, constant * 4.0), constant)
        degrees = np.where(seen, s[0] ** 2 / v[0], np.nan)
    return variance, np.clip(degrees, 1.0, None)


def fit_points(
    x: Floats,
    fits: Fits,
    noise: Noise,
    shape: Shape,
    *,
    estimator: str,
    reference: float,
    level_of_band: float,
    bias: str,
    least_rows: float,
    extent: tuple[float, float],
    occupied: Occupied,
) -> Points:
    """Evaluate curve, slope and band.

    With ``bias="corrected"`` the band is centred on the local quadratic value at the same width
    and has that value's standard error: this is robust bias correction with equal widths
    (Calonico, Cattaneo & Farrell 2018, J. Am. Stat. Assoc. 113:767). With ``"ignored"`` it is
    centred on the estimate and covers the smoothed mean, not the mean.

    Parameters
    ----------
    x : (n,) float64
        Where, on the plan's scale.
    fits, noise : Fits, Noise
        Of the level to use.
    shape : Shape
        Kernel function.
    estimator : str
        ``local-linear`` or ``local-constant``.
    reference : float
        The plan's reference, added to the values.
    level_of_band : float
        Confidence level.
    bias : str
        ``corrected`` or ``ignored``.
    least_rows : float
        Fewer effective rows are ``thin``.
    extent : (float, float)
        Lowest and highest x of the data, on the scale.
    occupied : Occupied
        Which bins of the finest level hold rows.
    """
    from fastsmooth.kernels import binned
    from scipy.special import stdtrit

    level = fits.level
    h = fits.bandwidth_bins
    places = (x - level.origin) / level.width
    moments = np.ascontiguousarray(level.first[0:3])
    sums = np.empty((binned.POINT_ROWS, x.shape[0]))
    binned.point_sums(
        shape.code, h, np.ascontiguousarray(places), moments, level.response,
        moments * noise.variance, level.squares, sums,
    )  # fmt: skip
    s, t = sums[binned.S : binned.S + 5], sums[binned.T : binned.T + 3]
    v, u = sums[binned.V : binned.V + 5], sums[binned.U : binned.U + 5]
    reach = shape.reach * fits.bandwidth_bins * level.width
    status = _support(x, reach, extent, occupied)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        constant = _Weights((np.ones_like(s[0]),), s[0])
        line = _Weights((s[2], -s[1]), s[0] * s[2] - s[1] ** 2)
        parabola = _quadratic(s)
        flat = ~(line.scale > np.maximum(1e-6 * s[0] * s[2], least_spread(h) * s[0] ** 2))
        used = constant if estimator == "local-constant" else line.or_else(constant, flat)
        estimate = used.apply(t)
        slope_of_line = np.where(flat, np.nan, (s[0] * t[1] - s[1] * t[0]) / line.scale) / h
        if estimator == "local-constant":
            ds, dt = sums[binned.DS], sums[binned.DT]
            slope = -(dt * s[0] - t[0] * ds) / s[0] ** 2 / h
            if shape.smoothness == 0:
                slope = np.full_like(slope, np.nan)
        else:
            slope = slope_of_line
        effective = 1.0 / used.variance(u)
        if bias == "corrected":
            bent = parabola.scale > 1e-6 * s[0] * s[2] * s[4]
            centre = np.where(bent, parabola.apply(t), np.nan)
            variance = np.where(bent, parabola.variance(v), np.nan)
        else:
            centre, variance = estimate, used.variance(v)
        std_error = np.sqrt(variance)
    centres = np.arange(level.bins) + 0.5
    degrees = np.interp(places, centres, noise.degrees)
    spread = np.sqrt(np.interp(places, centres, noise.variance))
    half = stdtrit(degrees, 0.5 + 0.5 * level_of_band) * std_error
    status[~np.isfinite(estimate)] = OUTSIDE
    status[(status != OUTSIDE) & ~(effective >= least_rows)] = THIN
    out = status == OUTSIDE
    columns = [estimate + reference, slope / level.width, std_error]
    columns += [centre - half + reference, centre + half + reference, effective, spread]
    return Points(*(np.where(out, np.nan, column) for column in columns), status=status)


class _Weights(NamedTuple):
    """Linear weights w K (c_0 + c_1 u + ...) / scale, for many points at once."""

    coefficients: tuple[Floats, ...]
    scale: Floats

    def apply(self, t: Floats) -> Floats:
        return sum(c * t[j] for j, c in enumerate(self.coefficients)) / self.scale  # type: ignore[return-value]

    def variance(self, v: Floats) -> Floats:
        total = np.zeros_like(self.scale)
        for i, a in enumerate(self.coefficients):
            for j, b in enumerate(self.coefficients):
                total += a * b * v[i + j]
        # Rounding can leave a hair below zero where the true value is zero.
        return np.clip(total, 0.0, None) / self.scale**2

    def or_else(self, other: _Weights, where: NDArray[np.bool_]) -> _Weights:
        """Take the other weights at some points."""
        padded = other.coefficients + (np.zeros_like(self.scale),) * (
            len(self.coefficients) - len(other.coefficients)
        )
        pairs = zip(self.coefficients, padded, strict=True)
        return _Weights(
            tuple(np.where(where, b, a) for a, b in pairs), np.where(where, other.scale, self.scale)
        )


def _quadratic(s: Floats) -> _Weights:
    """Weights of the local quadratic value (Fan & Gijbels 1996, section 3.1)."""
    c0 = s[2] * s[4] - s[3] ** 2
    c1 = s[2] * s[3] - s[1] * s[4]
    c2 = s[1] * s[3] - s[2] ** 2
    return _Weights((c0, c1, c2), s[0] * c0 + s[1] * c1 + s[2] * c2)


@dataclass(frozen=True)
class Occupied:
    """Which bins hold rows.

    Attributes
    ----------
    origin, width : float
        Of the bins, on the plan's scale.
    bins : (k,) int64
        The occupied ones, ascending.
    """

    origin: float
    width: float
    bins: NDArray[np.int64]


def _support(
    x: Floats, reach: float, extent: tuple[float, float], occupied: Occupied
) -> NDArray[np.int64]:
    """Status by support: a point must lie between rows of its own window."""
    low, high = extent
    status = np.full(x.shape[0], OK)
    status[(x - reach < low) | (x + reach > high)] = EDGE
    place = (x - occupied.origin) / occupied.width
    bin_of_x = np.floor(place).astype(np.int64)
    at = np.searchsorted(occupied.bins, bin_of_x, side="right") - 1
    left = occupied.bins[np.clip(at, 0, None)]
    in_bin = (at >= 0) & (left == bin_of_x)
    right = occupied.bins[np.clip(at + np.where(in_bin, 0, 1), 0, occupied.bins.size - 1)]
    to_left = np.where(in_bin, 0.0, place - (left + 1)) * occupied.width
    to_right = np.where(in_bin, 0.0, right - place) * occupied.width
    cut_off = (to_left > reach) | (to_right > reach) | (x < low) | (x > high)
    status[cut_off] = OUTSIDE
    return status
