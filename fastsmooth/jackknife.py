"""Standard errors from folds: they survive whatever dependence stays within blocks."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Level, Pyramid
from fastsmooth.foldcurves import FoldCurves
from fastsmooth.localweights import slope_weights, sums_at, weights_of
from fastsmooth.smoother import others, width_in_bins

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

# Deviations by folds are off by less than a ten-thousandth of their error with so few.
_BINS_FOR_ERRORS = 16


@dataclass(frozen=True)
class Deviations:
    """How far the fit moves when each fold is left out.

    Attributes
    ----------
    moved : (folds, n) float64
        Fit without the fold less the fit with all; 0 where the fold has no row in the window.
    slope_moved : (folds, n) float64
        The same for the local line's slope, per bin.
    shares : (folds, n) float64
        The fold's share of the window's kernel weight.
    noise_shares : (folds, n) float64
        The fold's share of the variance that the fit would have if rows were independent; 0
        where the window carries no fit.
    """

    moved: Floats
    slope_moved: Floats
    shares: Floats
    noise_shares: Floats

    @property
    def folds_met(self) -> NDArray[np.int64]:
        """Folds with rows in the window, (n,)."""
        return np.count_nonzero(self.shares > 1e-9, axis=0)

    @property
    def degrees(self) -> Floats:
        """Degrees of freedom, (n,): one less than the effective number of folds.

        That number is exp(-sum v log v) (Hill 1973, Ecology 54:427) over the folds' shares v of
        the variance under independent rows, as in Bell & McCaffrey (2002, Survey Methodology
        28:169). Satterthwaite's 1 / sum v^2 is smaller, and right for the spread of the error;
        but the error shares its folds with the fit, and far out the ratio of the two follows t
        with these degrees. Shares of the kernel weight would not do: where a window ends with the
        last hot day, that day makes the fit, however many rows the others have.
        """
        v = self.noise_shares
        with np.errstate(invalid="ignore", divide="ignore"):
            entropy = -np.sum(np.where(v > 0.0, v * np.log(v), 0.0), axis=0)
        return np.maximum(np.exp(entropy) - 1.0, 0.0)

    @property
    def std_error(self) -> Floats:
        """Delete-a-group jackknife standard error, (n,).

        sqrt((G - 1) / G sum (m_without - m)^2) over the G folds that the window meets
        (Kott 2001, J. Official Statistics 17:521); NaN where it meets fewer than two.
        """
        return self._error(self.moved)

    @property
    def slope_std_error(self) -> Floats:
        """The same for the slope per bin, (n,)."""
        return self._error(self.slope_moved)

    def _error(self, moved: Floats) -> Floats:
        met = self.folds_met
        with np.errstate(invalid="ignore", divide="ignore"):
            factor = np.where(met > 1, (met - 1.0) / met, np.nan)
        return np.asarray(np.sqrt(factor * (moved**2).sum(axis=0)))


def fold_sums_at(
    places: Floats, level: Level, shape: Shape, bandwidth_bins: float
) -> tuple[Floats, Floats, Floats]:
    """Return the kernel sums of each fold at some places.

    Returns
    -------
    s, t, v : (folds, 5, n), (folds, 3, n), (folds, 5, n) float64
        As in `fastsmooth.localweights.PointSums`, with sigma^2 = 1 for a row of weight 1.
    """
    n, folds = places.shape[0], level.folds.shape[0]
    s, t, v = np.empty((folds, 5, n)), np.empty((folds, 3, n)), np.empty((folds, 5, n))
    unused = np.zeros((3, level.bins))
    for fold in range(folds):
        sums = level.folds[fold]
        response = sums[3:6] + level.pilot * sums[0:3]
        found = sums_at(places, sums[0:3], response, shape, bandwidth_bins, sums[0:3], unused)
        s[fold], t[fold], v[fold] = found.s, found.t, found.v
    return s, t, v


def leave_out_folds(
    places: Floats, level: Level, shape: Shape, bandwidth_bins: float, kind: str
) -> Deviations:
    """Refit at some places without each fold in turn.

    Parameters
    ----------
    places : (n,) float64
        In bins from the table's origin.
    level : Level
        Bin moments of all folds.
    shape : Shape
        Kernel function.
    bandwidth_bins : float
        h in bins.
    kind : str
        The fit; see `fastsmooth.localweights.weights_of`.
    """
    return deviations_of(*fold_sums_at(places, level, shape, bandwidth_bins), bandwidth_bins, kind)


def deviations_of(s: Floats, t: Floats, v: Floats, bandwidth_bins: float, kind: str) -> Deviations:
    """Refit without each fold in turn, from sums per fold as `fold_sums_at` returns them."""
    folds, n = s.shape[0], s.shape[2]
    weights = weights_of(s.sum(axis=0), bandwidth_bins, kind)
    total = weights.apply(t.sum(axis=0))
    without_s, without_t = others(s), others(t)
    slope = slope_weights(s.sum(axis=0), bandwidth_bins).apply(t.sum(axis=0))
    moved, slope_moved = np.zeros((folds, n)), np.zeros((folds, n))
    for fold in range(folds):
        value = weights_of(without_s[fold], bandwidth_bins, kind).apply(without_t[fold])
        # Too few places without this fold: its news cannot be told from the others'.
        here = s[fold, 0] > 0.0
        moved[fold] = np.where(here, value - total, 0.0)
        value = slope_weights(without_s[fold], bandwidth_bins).apply(without_t[fold])
        slope_moved[fold] = np.where(here, value - slope, 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        shares = np.clip(s[:, 0] / s[:, 0].sum(axis=0), 0.0, None)
        noise = np.array([weights.variance(one) for one in v])
        noise_shares = np.nan_to_num(noise / noise.sum(axis=0))
    return Deviations(moved, slope_moved, shares, noise_shares)


def keep_fold_curves(
    x: Floats, pyramid: Pyramid, folds: list[int], shape: Shape, bandwidth: float, kind: str
) -> FoldCurves:
    """Return a curve without each of its folds, to be kept with it.

    Parameters
    ----------
    x : (n,) float64
        Points of the curve, on the plan's scale.
    pyramid : Pyramid
        Levels of the table.
    folds : list of int
        The folds that hold rows, in the order of the levels.
    shape : Shape
        Kernel function.
    bandwidth : float
        On the plan's scale.
    kind : str
        The fit that the band is centred on; see `fastsmooth.localweights.weights_of`.
    """
    own = shape.bins_per_bandwidth
    level, places, h = _places_on(pyramid, x, bandwidth, own)
    unused = np.zeros((3, level.bins))
    sums = sums_at(places, level.first[0:3], level.response, shape, h, unused, unused)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        centre = weights_of(sums.s, h, kind).apply(sums.t) + pyramid.plan.reference
        coarse = _BINS_FOR_ERRORS if shape.smoothness else own
        level, places, h = _places_on(pyramid, x, bandwidth, coarse)
        left_out = leave_out_folds(places, level, shape, h, kind)
    return FoldCurves.of(
        np.array(folds, np.int64), centre, left_out.degrees, left_out.moved, left_out.shares
    )


def _places_on(
    pyramid: Pyramid, x: Floats, bandwidth: float, bins_per_bandwidth: int
) -> tuple[Level, Floats, float]:
    """The level with so many bins to a bandwidth, the places in its bins, and h in its bins."""
    level = pyramid.levels[pyramid.level_for(bandwidth, bins_per_bandwidth)]
    high = level.origin + level.width * level.bins
    places = (np.clip(x, level.origin, high) - level.origin) / level.width
    return level, places, width_in_bins(bandwidth, level)
