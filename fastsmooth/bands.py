"""Noise along x, and the curve with its band at any points."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Level
from fastsmooth.critical import chords_of_path, pointwise_value, simulated_tail, tail_for_all
from fastsmooth.curve import EDGE, FEWEST_FOLDS, OK, OUTSIDE, THIN
from fastsmooth.jackknife import leave_out_folds
from fastsmooth.localweights import (
    CONSTANT,
    DEGREES,
    LINE,
    PointSums,
    kind_of_centre,
    slope_of,
    slope_weights,
    sums_at,
    weights_of,
)
from fastsmooth.settings import Band
from fastsmooth.smoother import Fits, chords_of, kernel_sums, width_in_bins

if TYPE_CHECKING:
    from collections.abc import Callable

    from fastsmooth.exact import ExactFits
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

# The variance's own width is chosen among these multiples of the curve's by leaving out groups.
_VARIANCE_MULTIPLES = (1.0, 2.0, 4.0, 8.0, 16.0)
_VARIANCE_GROUPS = 4
_VARIANCE_BINS_PER_BANDWIDTH = 16
# Chords between the weights of neighbouring points follow their path this closely.
_POINTS_PER_BANDWIDTH = 10
_MOST_POINTS = 2000
LEAST_DEGREES = 2.0
# With fewer, some block or two make the fit: its error from folds is hardly known.
FEWEST_DEGREES = 4.0


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

    def at(self, x: Floats, level: Level) -> Floats:
        """Return the variance at x (plan's scale), between bin centres on a straight line."""
        return np.interp(_in_bins(x, level), np.arange(level.bins) + 0.5, self.variance)

    def degrees_at(self, x: Floats, level: Level) -> Floats:
        """Return the degrees of freedom of that variance."""
        return np.interp(_in_bins(x, level), np.arange(level.bins) + 0.5, self.degrees)


class Points(NamedTuple):
    """The curve at some points; see `fastsmooth.curve.Curve` for the terms."""

    estimate: Floats
    slope: Floats
    slope_std_error: Floats
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
    leaving out one of four groups of folds at a time. With a constant variance:
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
    squared, expected = _squared_residuals(fits, estimator, shape)
    return smooth_noise(squared, expected, fits.bandwidth_bins, shape, kind)


def smooth_noise(
    squared: Floats, expected: Floats, bandwidth_bins: float, shape: Shape, kind: str
) -> Noise:
    """Estimate the residual variance along x from squared residuals.

    Parameters
    ----------
    squared, expected : (groups, bins) float64
        Sums of squared residuals per group of folds, and what they would be for a variance of 1.
    bandwidth_bins : float
        The curve's own bandwidth, in bins.
    shape : Shape
        Kernel function.
    kind : str
        ``local`` or ``constant``.
    """
    bins = squared.shape[1]
    total = squared.sum(axis=0)
    room = float(expected.sum())
    overall = float(total.sum()) / room if room > 0.0 else np.nan
    if kind == "constant" or not room > 0.0:
        return Noise(np.full(bins, overall), np.full(bins, room), overall, None)
    # Fewer bins suffice for a variance: at least sixteen to a bandwidth.
    step = 1
    while bandwidth_bins / (2 * step) >= _VARIANCE_BINS_PER_BANDWIDTH and bins % (2 * step) == 0:
        step *= 2
    groups = squared.reshape(squared.shape[0], -1, step).sum(axis=2)
    weights = expected.reshape(expected.shape[0], -1, step).sum(axis=2)
    own = bandwidth_bins / step
    multiple = _choose_multiple(groups, weights, shape, own)
    width = multiple * own
    variance, degrees = _smooth_variance(groups.sum(axis=0), weights.sum(axis=0), shape, width)
    known = np.flatnonzero(np.isfinite(variance) & (variance > 0.0))
    if not known.size:
        return Noise(np.full(bins, overall), np.full(bins, room), overall, None)
    coarse = (np.arange(variance.shape[0]) + 0.5) * step
    centres = np.arange(bins) + 0.5
    return Noise(
        np.interp(centres, coarse[known], variance[known]),
        np.interp(centres, coarse[known], degrees[known]),
        overall,
        width * step,
    )


def _squared_residuals(fits: Fits, estimator: str, shape: Shape) -> tuple[Floats, Floats]:
    """Sums of w r^2 and their expectations over sigma^2, per group of folds and bin."""
    level = fits.level
    value, slope, leverage = fits.chords[estimator]
    v = kernel_sums(level.first[0:3], shape, fits.bandwidth_bins, 3, squared=True)
    s = fits.sums
    with np.errstate(invalid="ignore", divide="ignore"):
        constant = v[0] / s[0] ** 2
        spread = s[2] ** 2 * v[0] - 2.0 * s[1] * s[2] * v[1] + s[1] ** 2 * v[2]
        linear = spread / (s[0] * s[2] - s[1] ** 2) ** 2
        # Windows without a slope were fitted by a constant: their leverages are the same.
        fell_back = fits.unit_leverages["local-linear"] == fits.unit_leverages["local-constant"]
        own = constant if estimator == "local-constant" else np.where(fell_back, constant, linear)
        _, _, own = chords_of(level, fits.values[estimator], own)
        share = level.count + (own - 2.0 * leverage) * level.first[0]
    usable = np.isfinite(value) & (level.count > 0.0) & np.isfinite(share)
    with np.errstate(invalid="ignore", divide="ignore"):
        ratio = np.where(usable, np.clip(share / level.count, 0.0, None), 0.0)
    r = np.where(usable, value - level.pilot, 0.0)
    g = np.where(usable, slope, 0.0)
    from fastsmooth.kernels import localfit

    folds = level.folds.shape[0]
    ends = np.linspace(0, folds, min(_VARIANCE_GROUPS, folds) + 1).astype(np.int64)
    squared = np.empty((ends.shape[0] - 1, level.bins))
    grouped = np.empty_like(squared)
    localfit.group_residuals(level.folds, ends, r, g, squared, grouped)
    squared *= usable
    with np.errstate(invalid="ignore", divide="ignore"):
        parts = np.where(level.first[0] > 0.0, grouped / level.first[0], 0.0)
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
    band: Band,
    by_block: bool,
    extent: tuple[float, float],
    occupied: Occupied,
    exact: Callable[[Floats, int], ExactFits] | None = None,
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
    band : Band
        What the band shall be.
    by_block : bool
        Whether folds are made of blocks: standard errors then come from leaving out folds.
    extent : (float, float)
        Lowest and highest x of the data, on the scale.
    occupied : Occupied
        Which bins of the finest level hold rows.
    exact : callable or None
        Fits of a degree at places from the rows themselves, in place of the bins'.
    """
    level, h = fits.level, fits.bandwidth_bins
    places = _in_bins(x, level)
    sums = _all_sums(places, fits, noise, shape)
    own = CONSTANT if estimator == "local-constant" else LINE
    centred = kind_of_centre(estimator, band.bias)
    used, middle = weights_of(sums.s, h, own), weights_of(sums.s, h, centred)
    status = _support(x, shape.reach * h * level.width, extent, occupied)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        estimate, centre = used.apply(sums.t), middle.apply(sums.t)
        effective = 1.0 / used.variance(sums.u)
        spread = np.sqrt(noise.at(x, level))
        if by_block:
            left_out = leave_out_folds(places, level, shape, h, centred)
            std_error, degrees = left_out.std_error, left_out.degrees
            slope_error = left_out.slope_std_error
        else:
            std_error = np.sqrt(middle.variance(sums.v))
            degrees = noise.degrees_at(x, level)
            slope_error = np.sqrt(slope_weights(sums.s, h).variance(sums.v))
        slope = slope_of(sums, shape, h, estimator) / level.width
        if exact is not None:
            at_own = exact(x, DEGREES[own])
            at_centre = at_own if centred == own else exact(x, DEGREES[centred])
            estimate, effective = at_own.value, 1.0 / at_own.squares
            borne = (centred == own) | (at_centre.degree == DEGREES[centred])
            centre = np.where(borne, at_centre.value, np.nan)
            if own == LINE:
                slope = np.where(at_own.degree == DEGREES[LINE], at_own.slope, np.nan)
            if not by_block:
                std_error = np.where(borne, np.sqrt(at_centre.variance), np.nan)
    status[~np.isfinite(estimate)] = OUTSIDE
    thin = ~(effective >= band.least_rows)
    if by_block:
        thin |= (left_out.folds_met < FEWEST_FOLDS) | (degrees < FEWEST_DEGREES)
    status[(status != OUTSIDE) & thin] = THIN
    value = pointwise_value(band.level, degrees)
    if band.kind == "simultaneous":
        value = _value_for_all(x, status, degrees, fits, noise, shape, centred, band, by_block)
    with np.errstate(invalid="ignore"):
        # With fewer degrees of freedom t quantiles say more about t than about the data.
        half = np.where(degrees >= LEAST_DEGREES, value * std_error, np.nan)
    if estimator == "local-constant":
        slope_error = np.full_like(slope_error, np.nan)
    columns = [estimate + reference, slope, slope_error / level.width, std_error]
    columns += [centre - half + reference, centre + half + reference, effective, spread]
    out = status == OUTSIDE
    masked = [np.where(out, np.nan, column) for column in columns]
    return Points._make([*masked, status])


def values_at(x: Floats, level: Level, bandwidth: float, shape: Shape, estimator: str) -> Floats:
    """Return the estimate less the plan's reference at x (plan's scale), from one level."""
    h = width_in_bins(bandwidth, level)
    unused = np.zeros((3, level.bins))
    places = _in_bins(x, level)
    sums = sums_at(places, level.first[0:3], level.response, shape, h, unused, unused)
    kind = CONSTANT if estimator == "local-constant" else LINE
    with np.errstate(invalid="ignore", divide="ignore"):
        return weights_of(sums.s, h, kind).apply(sums.t)


def _in_bins(x: Floats, level: Level) -> Floats:
    """Places in bins of the level; those beyond its ends, where nothing is claimed, at the ends."""
    high = level.origin + level.width * level.bins
    return np.asarray((np.clip(x, level.origin, high) - level.origin) / level.width)


def _all_sums(places: Floats, fits: Fits, noise: Noise, shape: Shape) -> PointSums:
    level = fits.level
    weight = level.first[0:3]
    return sums_at(
        places, weight, level.response, shape, fits.bandwidth_bins, weight * noise.variance,
        level.squares,
    )  # fmt: skip


def _value_for_all(
    x: Floats,
    status: NDArray[np.int64],
    degrees: Floats,
    fits: Fits,
    noise: Noise,
    shape: Shape,
    kind: str,
    band: Band,
    by_block: bool,
) -> Floats:
    """Critical values with which the band covers all supported stretches at once.

    The band claims nothing beyond the points of status ``ok`` and ``edge``.
    """
    level, h = fits.level, fits.bandwidth_bins
    good = (status == OK) | (status == EDGE)
    ends = np.flatnonzero(np.diff(np.concatenate(([0], good.astype(int), [0])))).reshape(-1, 2)
    if not ends.size:
        return pointwise_value(band.level, degrees)
    chords, known, moved = [], [], []
    for start, stop in ends.tolist():
        low, high = ((x[i] - level.origin) / level.width for i in (start, stop - 1))
        steps = int(np.clip(np.ceil((high - low) / h * _POINTS_PER_BANDWIDTH), 1, _MOST_POINTS))
        places = np.linspace(low, high, steps + 1)
        if by_block:
            left_out = leave_out_folds(places, level, shape, h, kind)
            moved.append(left_out.moved)
            chords.append(chords_of_path(left_out.moved))
            # Between two points that count there may be a place that would not.
            along = np.maximum(left_out.degrees, FEWEST_DEGREES)
        else:
            chords.append(_weight_chords(places, fits, noise, shape, kind))
            # One scale for all: a constant variance has the same degrees everywhere.
            along = np.full(places.shape, np.median(degrees[good]))
        known.append(0.5 * (along[1:] + along[:-1]))
    tail = tail_for_all(
        band.level, np.concatenate(chords), np.concatenate(known), ends.shape[0],
        own_scale=by_block,
    )  # fmt: skip
    if by_block:
        # Counting crossings never gives too much: what simulation gives beyond it is safe.
        typical = float(np.median(degrees[good]))
        tail = max(tail, simulated_tail(band.level, np.concatenate(moved, axis=1), typical))
    return pointwise_value(1.0 - tail, degrees)


def _weight_chords(places: Floats, fits: Fits, noise: Noise, shape: Shape, kind: str) -> Floats:
    from fastsmooth.kernels import arcs

    weights = weights_of(_all_sums(places, fits, noise, shape).s, fits.bandwidth_bins, kind)
    coefficients = np.zeros((3, places.shape[0]))
    for j, c in enumerate(weights.coefficients):
        coefficients[j] = c / weights.scale
    chords = np.empty(max(places.shape[0] - 1, 0))
    arcs.weight_chords(
        shape.code, fits.bandwidth_bins, places, coefficients,
        fits.level.first[0] * noise.variance, chords,
    )  # fmt: skip
    return np.nan_to_num(chords)


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
    beyond = (x < low) | (x > high)
    x = np.clip(x, low, high)
    status[(x - reach < low) | (x + reach > high)] = EDGE
    place = (x - occupied.origin) / occupied.width
    bin_of_x = np.floor(place).astype(np.int64)
    at = np.searchsorted(occupied.bins, bin_of_x, side="right") - 1
    left = occupied.bins[np.clip(at, 0, None)]
    in_bin = (at >= 0) & (left == bin_of_x)
    right = occupied.bins[np.clip(at + np.where(in_bin, 0, 1), 0, occupied.bins.size - 1)]
    to_left = np.where(in_bin, 0.0, place - (left + 1)) * occupied.width
    to_right = np.where(in_bin, 0.0, right - place) * occupied.width
    cut_off = (to_left > reach) | (to_right > reach) | beyond
    status[cut_off] = OUTSIDE
    return status
