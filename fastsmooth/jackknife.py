"""Standard errors from folds: they survive whatever dependence stays within blocks."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Level
from fastsmooth.localweights import slope_weights, sums_at, weights_of
from fastsmooth.smoother import others

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]


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
    """

    moved: Floats
    slope_moved: Floats
    shares: Floats

    @property
    def folds_met(self) -> NDArray[np.int64]:
        """Folds with rows in the window, (n,)."""
        return np.count_nonzero(self.shares > 1e-9, axis=0)

    @property
    def degrees(self) -> Floats:
        """Degrees of freedom, (n,): one less than the equal folds that would be as sharp."""
        with np.errstate(invalid="ignore", divide="ignore"):
            equal = self.shares.sum(axis=0) ** 2 / (self.shares**2).sum(axis=0)
        return np.maximum(equal - 1.0, 0.0)

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
) -> tuple[Floats, Floats]:
    """Return S_0..S_4 (folds, 5, n) and T_0..T_2 (folds, 3, n) of each fold at some places."""
    n, folds = places.shape[0], level.folds.shape[0]
    s, t = np.empty((folds, 5, n)), np.empty((folds, 3, n))
    unused = np.zeros((3, level.bins))
    for fold in range(folds):
        sums = level.folds[fold]
        response = sums[3:6] + level.pilot * sums[0:3]
        found = sums_at(places, sums[0:3], response, shape, bandwidth_bins, unused, unused)
        s[fold], t[fold] = found.s, found.t
    return s, t


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
    n, folds = places.shape[0], level.folds.shape[0]
    s, t = fold_sums_at(places, level, shape, bandwidth_bins)
    total = weights_of(s.sum(axis=0), bandwidth_bins, kind).apply(t.sum(axis=0))
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
    return Deviations(moved, slope_moved, shares)
