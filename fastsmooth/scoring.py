"""Criteria of both estimators at any bandwidth, from the bins of a table."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable, Level, Pyramid
from fastsmooth.settings import ESTIMATORS
from fastsmooth.smoother import (
    Fits,
    Scores,
    fit_level,
    fold_sums,
    kernel_sums,
    least_weight,
    left_out_fold_scores,
    others,
    score_level,
)

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]
# Maps a function over values, in order: the builtin, or a pool's.
Mapper = Callable[[Callable[[Any], Any], Iterable[Any]], Iterable[Any]]

_FEWER_BINS = 2
_FEWER_BINS_BY_FOLD = 8
_MANY_ROWS = 1e5
_LEAST_HEARD = 0.99
# Where the other folds' rows lie this far to one side, a fold's row asks for extrapolation.
_MOST_LOPSIDED = 0.5
# A row that makes so much of its own fit is alone: the others hardly predict it.
MOST_LEVERAGE = 0.999


@dataclass(frozen=True)
class Point:
    """Criteria of one estimator at one bandwidth.

    Attributes
    ----------
    bandwidth : float
        On the plan's scale.
    criteria : dict of str to float
        By name; infinite where undefined.
    trace : float
        Sum of the leverages of the rows that vote.
    folds : (folds,) float64
        Each fold's share of the criterion.
    shares : (folds,) float64
        Each fold's share of the voting rows.
    """

    bandwidth: float
    criteria: dict[str, float]
    trace: float
    folds: Floats
    shares: Floats


class BinnedScoring:
    """Scores of both estimators at any bandwidth, from the levels of a table."""

    def __init__(self, table: BinTable, pyramid: Pyramid, shape: Shape) -> None:
        self.table = table
        # Logarithms are of widths in this unit.
        self.unit = table.plan.width
        self.pyramid = pyramid
        self.shape = shape
        self.empty = least_weight(pyramid, shape)
        self.bins_per_bandwidth = _bins_per_bandwidth(pyramid, shape)
        # Rows that vote on leave-one-out and, where blocks are left out, on that.
        self.scored = pyramid
        self.left_out: Pyramid | None = None

    def points(self, grid: list[float], mapped: Mapper) -> tuple[list[dict[str, Point]], float]:
        """Score every row that all widths can predict, at each width.

        Returns
        -------
        points : list of dict of str to Point
            Per width and estimator.
        rows_alone : float
            Rows that some width cannot predict from others; they take no part at any.
        """
        fits = list(mapped(self.fit, grid))
        keep, rows_alone = _voters(self.pyramid, fits)
        if keep is not None:
            self.scored = Pyramid(self.table, keep)
        return list(mapped(self._scores_of, fits)), rows_alone

    def left_out_points(
        self, grid: list[float], mapped: Mapper
    ) -> tuple[list[dict[str, Point]], float]:
        """Score every fold that the others can predict, at each width; returns as `points`."""
        keep, rows_alone = _fold_voters(self.pyramid, self.shape, grid[0], self.empty)
        self.left_out = Pyramid(self.table, keep)
        return list(mapped(self.left_out_scores, grid)), rows_alone

    def level(self, bandwidth: float) -> int:
        """Return the level on which a bandwidth is scored."""
        return self.pyramid.level_for(bandwidth, self.bins_per_bandwidth)

    def fit(self, bandwidth: float, like: float | None = None) -> Fits:
        """Fit both estimators, on the level of another bandwidth if one is given."""
        level = self.pyramid.levels[self.level(bandwidth if like is None else like)]
        return fit_level(level, self.shape, bandwidth, self.empty)

    def _scores_of(self, fits: Fits) -> dict[str, Point]:
        scored = self._voters_of(fits)
        points = {}
        for name in ESTIMATORS:
            scores = score_level(fits, name, scored)
            bandwidth = fits.bandwidth_bins * fits.level.width
            points[name] = _point_of(bandwidth, scores, fold_sums(scored, scores), scored)
        return points

    def _voters_of(self, fits: Fits) -> Level:
        return next(one for one in self.scored.levels if one.bins == fits.level.bins)

    def value(self, bandwidth: float, like: float, name: str, criterion: str) -> float:
        """Return one criterion of one estimator: what a refinement needs, and no more.

        `like` is the width on whose level all values of a refinement are taken.
        """
        fits = self.fit(bandwidth, like)
        scored = self._voters_of(fits)
        return _criteria_of(score_level(fits, name, scored), scored)[criterion]

    def scores(self, bandwidth: float, like: float | None = None) -> dict[str, Point]:
        """Score every voting row against the others."""
        return self._scores_of(self.fit(bandwidth, like))

    def left_out_scores(self, bandwidth: float) -> dict[str, Point]:
        """Score every fold against the others."""
        assert self.left_out is not None
        # Few bins do: a fold's absence moves the fit far more than binning does.
        fewer = max(4, self.shape.bins_per_bandwidth // _FEWER_BINS_BY_FOLD)
        index = self.pyramid.level_for(bandwidth, fewer)
        scored = self.left_out.levels[index]
        weight = float(scored.first[0].sum())
        found = left_out_fold_scores(
            self.pyramid.levels[index], scored, self.shape, bandwidth, self.empty
        )
        with np.errstate(invalid="ignore", divide="ignore"):
            shares = scored.folds[:, 0].sum(axis=1) / weight
        points = {}
        for name, (folds, lost) in found.items():
            value = float(folds.sum()) / weight if lost == 0.0 and weight > 0.0 else math.inf
            points[name] = Point(
                bandwidth, {"leave-block-out": value}, math.nan, folds / weight, shares
            )
        return points


def _bins_per_bandwidth(pyramid: Pyramid, shape: Shape) -> int:
    """Bins in h at which criteria are taken.

    With many rows half of the curve's own number keeps the criterion within 1e-6 of its value
    (measured, 1e5 rows and more, kernels with a continuous slope) at a quarter of the work.
    """
    many = float(pyramid.levels[-1].count.sum()) >= _MANY_ROWS
    smooth = shape.smoothness >= 2
    return (
        max(4, shape.bins_per_bandwidth // _FEWER_BINS)
        if many and smooth
        else shape.bins_per_bandwidth
    )


def criteria_of(
    score: float, residual: float, trace: float, heard: float, weight: float, rows: float
) -> dict[str, float]:
    """Return the criteria that sums over rows give.

    Parameters
    ----------
    score, residual, trace : float
        See `fastsmooth.smoother.Scores`.
    heard, weight : float
        Weight of the rows with a prediction, and of all that vote.
    rows : float
        Rows that vote.
    """
    # Voters have predictions at every width of the grid; between its widths one may be missing.
    loo = score / heard if heard > _LEAST_HEARD * weight else math.inf
    variance = residual / weight
    room = 1.0 - trace / rows
    gcv = variance / room**2 if room > 0.0 else math.inf
    aicc = math.inf
    if rows - trace - 2.0 > 0.0 and variance > 0.0:
        aicc = math.log(variance) + 1.0 + 2.0 * (trace + 1.0) / (rows - trace - 2.0)
    return {"leave-one-out": loo, "gcv": gcv, "aicc": aicc}


def _criteria_of(scores: Scores, scored: Level) -> dict[str, float]:
    n, weight = float(scored.count.sum()), float(scored.first[0].sum())
    return criteria_of(
        scores.score, scores.residual, scores.trace, weight - scores.lost, weight, n
    )  # fmt: skip


def _point_of(bandwidth: float, scores: Scores, folds: Floats, scored: Level) -> Point:
    weight = float(scored.first[0].sum())
    shares = scored.folds[:, 0].sum(axis=1) / weight
    return Point(
        bandwidth, _criteria_of(scores, scored), scores.trace, folds / weight, shares
    )  # fmt: skip


def _voters(pyramid: Pyramid, fits: list[Fits]) -> tuple[NDArray[np.bool_] | None, float]:
    """Bins of the finest level whose rows have a leave-one-out prediction at every width.

    The criterion is taken over the same rows at every width and for both estimators: a set that
    changed with the width would compare unlike things.
    """
    finest = pyramid.levels[0]
    lost = np.zeros(finest.bins, bool)
    for fit in fits:
        level = fit.level
        with np.errstate(invalid="ignore", divide="ignore"):
            mean_weight = np.where(level.count > 0.0, level.first[0] / level.count, 0.0)
        for name in ESTIMATORS:
            # Beyond this, room is a difference of nearly equal binned sums.
            alone = ~(fit.chords[name][2] * mean_weight < MOST_LEVERAGE) & (level.count > 0.0)
            if alone.any():
                lost |= np.repeat(alone, finest.bins // level.bins)
    lost &= finest.count > 0.0
    if not lost.any():
        return None, 0.0
    return ~lost, float(finest.count[lost].sum())


def _fold_voters(
    pyramid: Pyramid, shape: Shape, narrowest: float, empty: float
) -> tuple[NDArray[np.bool_], float]:
    """Bins of each fold whose rows the other folds predict at the narrowest width.

    Not only must the others have rows in the window, they must lie on both sides: a row that
    only one stretch of days has seen asks the others to extrapolate, and would judge every width
    by that.
    """
    finest = pyramid.levels[0]
    level = pyramid.levels[pyramid.level_for(narrowest, shape.bins_per_bandwidth)]
    h = narrowest / level.width
    parts = [kernel_sums(fold[0:3], shape, h, 2, squared=False) for fold in level.folds]
    s = others(np.array(parts))
    with np.errstate(invalid="ignore", divide="ignore"):
        keep = (s[:, 0] > empty) & (np.abs(s[:, 1] / s[:, 0]) < _MOST_LOPSIDED * shape.reach)
    # Folds know weights, not rows: those lost are taken to weigh what all rows of their bin do.
    weight = np.where(keep, 0.0, level.folds[:, 0]).sum(axis=0)
    with np.errstate(invalid="ignore", divide="ignore"):
        lost = np.where(level.first[0] > 0.0, weight / level.first[0] * level.count, 0.0)
    return np.repeat(keep, finest.bins // level.bins, axis=1), float(lost.sum())
