"""The estimator `nearest`: the mean of the k rows nearest in x, from sorted rows in memory.

The window's width follows the data: narrow where rows are many, wide where they are few. Ties
share their place, so that the order of rows does not matter (see `fastsmooth.kernels.neighbours`).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property, partial
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import FEWEST_DEGREES, LEAST_DEGREES, Noise, Points, smooth_noise
from fastsmooth.bintable import BinTable, Level, Pyramid
from fastsmooth.critical import pointwise_value
from fastsmooth.curve import EDGE, FEWEST_FOLDS, OK, OUTSIDE, THIN
from fastsmooth.exact import Rows
from fastsmooth.fitness import facts_of
from fastsmooth.jackknife import Deviations, deviations_of
from fastsmooth.kernels.shapes import SHAPES
from fastsmooth.localweights import CONSTANT, PARABOLA, weights_of
from fastsmooth.scoring import Mapper, Point
from fastsmooth.settings import NEAREST, Band

if TYPE_CHECKING:
    from fastsmooth.plan import Sample

Floats = NDArray[np.float64]

_FEWEST_NEIGHBOURS = 2
# A point whose nearest row is this far out in its window lies in a gap.
_MOST_ALONE = 0.5
_VARIANCE_GROUPS = 4
_BINS_PER_RADIUS = 16
# Sums over a window are about its own radius: no bin spreads their rows.
_NO_BINS = 1e6


@dataclass(frozen=True, eq=False)
class Neighbours:
    """Sorted rows, gathered into one group per distinct x.

    Attributes
    ----------
    rows : Rows
        Sorted by x.
    x, count, total, within : (g,) float64
        Place of a group, its rows, their sum of y, and squares of y about their mean.
    group : (n,) int64
        Group of each row.
    """

    rows: Rows
    x: Floats
    count: Floats
    total: Floats
    within: Floats
    group: NDArray[np.int64]

    @classmethod
    def of(cls, rows: Rows) -> Neighbours:
        """Gather rows into groups."""
        from fastsmooth.kernels import neighbours

        out = [np.empty(rows.x.shape[0]) for _ in range(4)]
        groups = neighbours.group_rows(rows.x, rows.y, rows.repeats, *out)
        x, count, total, within = (one[:groups].copy() for one in out)
        return cls(rows, x, count, total, within, np.searchsorted(x, rows.x))

    @cached_property
    def distinct(self) -> bool:
        """Whether every row has an x of its own and stands for itself."""
        return self.x.shape[0] == self.rows.x.shape[0] and not self.rows.repeats.size

    @property
    def repeats(self) -> Floats:
        """How many rows each row stands for, (n,)."""
        rows = self.rows
        return rows.repeats if rows.repeats.size else np.ones(rows.x.shape[0])

    def means(self, places: Floats, k: int) -> tuple[Floats, Floats, Floats]:
        """Return mean, leverage of a row at the place, and radius at ascending places."""
        from fastsmooth.kernels import neighbours

        out = np.empty((3, places.shape[0]))
        neighbours.neighbour_means(places, self.x, self.count, self.total, k, out)
        return out[0], out[1], out[2]

    def of_groups(self, values: Floats) -> Floats:
        """Return the value of each row's group, (n,)."""
        return values if self.distinct else values[self.group]

    def without(self, fold: int) -> tuple[Floats, Floats, Floats]:
        """Return place, rows and sum of y of the groups that the other folds make."""
        others = self.rows.fold != fold
        if self.distinct:
            return self.x[others], np.ones(int(np.count_nonzero(others))), self.total[others]
        repeats = self.repeats * others
        size = self.x.shape[0]
        count = np.asarray(np.bincount(self.group, repeats, size), np.float64)
        total = np.asarray(np.bincount(self.group, repeats * self.rows.y, size), np.float64)
        seen = count > 0.0
        return self.x[seen], count[seen], total[seen]


class NeighbourScoring:
    """Scores of the mean of k neighbours, for any k; see `fastsmooth.scoring.BinnedScoring`."""

    names = (NEAREST,)
    unit = 1.0

    def __init__(self, near: Neighbours) -> None:
        self.near = near
        self.total = near.rows.total
        self.shares = np.bincount(near.rows.fold, near.repeats, near.rows.folds) / self.total

    def points(self, grid: list[float], mapped: Mapper) -> tuple[list[dict[str, Point]], float]:
        """Score all rows at each k: every row has k others."""
        return list(mapped(self.scores, grid)), 0.0

    def left_out_points(
        self, grid: list[float], mapped: Mapper
    ) -> tuple[list[dict[str, Point]], float]:
        """Score every fold's rows that lie between rows of other folds, at each k."""
        # A fold at a time: the others are gathered once for all k.
        found = list(mapped(partial(self._left_out, grid), range(self.near.rows.folds)))
        scores = np.array([one[0] for one in found])
        heard = np.array([one[1] for one in found])
        rows = max(float(heard.sum()), 1.0)
        points = []
        for place, k in enumerate(grid):
            value = float(scores[:, place].sum()) / rows
            criteria = {"leave-block-out": value if math.isfinite(value) else math.inf}
            one = Point(float(round(k)), criteria, math.nan, scores[:, place] / rows, heard / rows)
            points.append({NEAREST: one})
        return points, self.total - float(heard.sum())

    def _left_out(self, grid: list[float], fold: int) -> tuple[list[float], float]:
        """Sum of squared errors of a fold's rows at each k, and how many rows are predicted."""
        from fastsmooth.kernels import neighbours

        near = self.near
        x, count, total = near.without(fold)
        if not x.size:
            return [0.0] * len(grid), 0.0
        places = near.rows.x
        mine = np.flatnonzero((near.rows.fold == fold) & (places >= x[0]) & (places <= x[-1]))
        repeats, y, out = near.repeats[mine], near.rows.y[mine], np.empty((3, mine.shape[0]))
        scores = []
        for k in grid:
            neighbours.neighbour_means(places[mine], x, count, total, round(k), out)
            scores.append(float((repeats * (y - out[0]) ** 2).sum()))
        return scores, float(repeats.sum())

    def left_out_scores(self, bandwidth: float) -> dict[str, Point]:
        """Predict each fold's rows from the k nearest rows of the other folds."""
        return self.left_out_points([bandwidth], map)[0][0]

    def scores(self, bandwidth: float, like: float | None = None) -> dict[str, Point]:
        """Predict each row from its k nearest others."""
        near, k = self.near, round(bandwidth)
        # Leaving a row out and taking k others is taking k + 1 with it.
        mean, share, _ = near.means(near.x, k + 1)
        with np.errstate(invalid="ignore", divide="ignore"):
            away = (near.rows.y - near.of_groups(mean)) / (1.0 - near.of_groups(share))
        errors = near.repeats * away**2
        folds = np.bincount(near.rows.fold, errors, near.rows.folds) / self.total
        value = float(folds.sum())
        criteria = {"leave-one-out": value if math.isfinite(value) else math.inf}
        return {NEAREST: Point(float(k), criteria, self.trace(k), folds, self.shares)}

    def trace(self, k: int) -> float:
        """Return the sum of the leverages of all rows."""
        if self.near.distinct:
            return self.total / k
        _, share, _ = self.near.means(self.near.x, k)
        return float((self.near.count * share).sum())

    def value(self, bandwidth: float, like: float, name: str, criterion: str) -> float:
        """Return leave-one-out at one k."""
        from fastsmooth.kernels import neighbours

        near, sums, wanted = self.near, np.empty(1), np.array([round(bandwidth)])
        if near.distinct:
            neighbours.score_neighbours(
                near.x, near.total, np.empty(0, bool), wanted, 0, near.x.shape[0], sums
            )
        else:
            neighbours.score_groups(
                near.x, near.count, near.total, near.count, near.total, near.within, wanted, 0,
                near.x.shape[0], sums,
            )  # fmt: skip
        value = float(sums[0]) / self.total
        return value if math.isfinite(value) else math.inf


def neighbour_grid(near: Neighbours, widths: int) -> Floats:
    """Return the numbers of neighbours to search: from two to half of the rows."""
    most = max(near.rows.total // 2, _FEWEST_NEIGHBOURS)
    return np.unique(np.round(np.geomspace(_FEWEST_NEIGHBOURS, most, widths)))


def neighbour_noise(near: Neighbours, k: int, table: BinTable, pyramid: Pyramid, kind: str) -> (
    tuple[Noise, Level]
):  # fmt: skip
    """Estimate the residual variance along x, and the level that it stands on.

    Squared residuals over their expectation 1 - 2 L + sum l^2 under constant variance (Ruppert
    et al. 1997, Technometrics 39:262), L = sum l^2 = 1 / k, smoothed along x.
    """
    mean, share, radius = near.means(near.x, k)
    width = max(float(np.median(radius)), table.plan.width)
    level = pyramid.levels[pyramid.level_for(width, _BINS_PER_RADIUS)]
    away = near.rows.y - near.of_groups(mean)
    bins = np.clip((near.rows.x - level.origin) / level.width, 0, level.bins - 1).astype(int)
    groups = min(_VARIANCE_GROUPS, near.rows.folds)
    cell = (near.rows.fold.astype(int) * groups // near.rows.folds) * level.bins + bins
    size = groups * level.bins
    rooms = near.repeats * (1.0 - near.of_groups(share))
    squared, expected = (
        np.asarray(np.bincount(cell, one, size), np.float64).reshape(groups, level.bins)
        for one in (near.repeats * away**2, rooms)
    )
    return smooth_noise(squared, expected, width / level.width, SHAPES["biweight"], kind), level


def neighbour_points(
    places: Floats,
    near: Neighbours,
    k: int,
    noise: Noise,
    level: Level,
    *,
    reference: float,
    band: Band,
    by_block: bool,
) -> tuple[Points, Deviations, Floats]:
    """Evaluate the mean of k neighbours with its band.

    With ``bias="corrected"`` the band is centred on the parabola fitted to the same rows, every
    row alike, and has its standard error, as for the other estimators (Calonico, Cattaneo &
    Farrell 2018, J. Am. Stat. Assoc. 113:767). The slope is that of the line fitted to the same
    rows.

    Parameters
    ----------
    places : (p,) float64
        Ascending, on the plan's scale.
    near : Neighbours
        The rows.
    k : int
        Neighbours.
    noise, level : Noise, Level
        Residual variance along x, and the bins that it stands on.
    reference : float
        Added to the values.
    band : Band
        What the band shall be.
    by_block : bool
        Whether standard errors come from leaving out folds.

    Returns
    -------
    points : Points
        Curve and band.
    left_out : Deviations
        How far the band's centre moves when each fold is left out.
    centre : (p,) float64
        The band's centre.
    """
    from fastsmooth.kernels import foldscores

    rows, n = near.rows, places.shape[0]
    estimate, _, radius = near.means(places, k)
    s, t = np.empty((rows.folds, 5, n)), np.empty((rows.folds, 3, n))
    foldscores.sums_within(places, radius, rows.x, rows.y, rows.repeats, rows.fold, s, t)
    v, unused = np.empty((rows.folds, 5, n)), np.empty((rows.folds, 3, n))
    by_variance = near.repeats * noise.at(rows.x, level)
    foldscores.sums_within(places, radius, rows.x, rows.y, by_variance, rows.fold, v, unused)
    kind = PARABOLA if band.bias == "corrected" else CONSTANT
    whole = s.sum(axis=0)
    middle = weights_of(whole, _NO_BINS, kind)
    left_out = deviations_of(s, t, s, _NO_BINS, kind)
    with np.errstate(invalid="ignore", divide="ignore"):
        centre = middle.apply(t.sum(axis=0)) if kind == PARABOLA else estimate
        determinant = whole[0] * whole[2] - whole[1] ** 2
        slope = (whole[0] * t[:, 1].sum(axis=0) - whole[1] * t[:, 0].sum(axis=0)) / determinant
        slope = np.where(determinant > 1e-10 * whole[0] * whole[2], slope / radius, np.nan)
        std_error = left_out.std_error if by_block else np.sqrt(middle.variance(v.sum(axis=0)))
    degrees = left_out.degrees if by_block else noise.degrees_at(places, level)
    status = _support(places, near, radius, estimate)
    if by_block:
        # Every window holds k rows; folds it may lack.
        thin = (left_out.folds_met < FEWEST_FOLDS) | (degrees < FEWEST_DEGREES)
        status[(status != OUTSIDE) & thin] = THIN
    with np.errstate(invalid="ignore"):
        value = pointwise_value(band.level, degrees)
        half = np.where(degrees >= LEAST_DEGREES, value * std_error, np.nan)
    # Rows at both ends of a window alone say nothing of the curve between them.
    status[(status != OUTSIDE) & ~np.isfinite(half)] = THIN
    none = np.full(n, np.nan)
    columns = [
        estimate + reference, slope, none, std_error, centre - half + reference,
        centre + half + reference, np.full(n, float(k)), np.sqrt(noise.at(places, level)),
    ]  # fmt: skip
    out = status == OUTSIDE
    points = Points._make([*(np.where(out, np.nan, one) for one in columns), status])
    return points, left_out, centre + reference


def _support(
    places: Floats, near: Neighbours, radius: Floats, estimate: Floats
) -> NDArray[np.int64]:
    """Status of each place: windows cut by the end of the data, and gaps that a window spans."""
    x = near.x
    status = np.full(places.shape[0], OK)
    after = np.clip(np.searchsorted(x, places), 0, x.shape[0] - 1)
    before = np.maximum(after - 1, 0)
    nearest = np.minimum(np.abs(x[after] - places), np.abs(x[before] - places))
    status[(places - radius < x[0]) | (places + radius > x[-1])] = EDGE
    status[nearest > _MOST_ALONE * radius] = THIN
    status[(places < x[0]) | (places > x[-1]) | ~np.isfinite(estimate)] = OUTSIDE
    return status


def sample_residuals(
    near: Neighbours, k: int, noise: Noise, level: Level, reference: float, sample: Sample
) -> Floats:
    """Return residuals of the sample's rows over the residual spread at their x."""
    order = np.argsort(sample.x, kind="stable")
    fitted = np.empty(sample.x.shape[0])
    fitted[order] = near.means(sample.x[order], k)[0]
    variance = noise.at(sample.x, level)
    variance = np.where(variance > 0.0, variance, np.nan)
    inside = (sample.x >= near.x[0]) & (sample.x <= near.x[-1])
    away = sample.y - fitted - reference
    return np.where(inside, away / np.sqrt(variance), np.nan)


def neighbour_facts(
    near: Neighbours, k: int, left_out_error: float, trace: float, reference: float
) -> dict[str, Any]:
    """Return the figures of `fastsmooth.fitness.DEFINITIONS` for the mean of k neighbours."""
    mean, _, _ = near.means(near.x, k)
    y, repeats = near.rows.y, near.repeats
    rows = near.rows.total
    residual = y - near.of_groups(mean)
    middle = float((repeats * y).sum()) / rows
    return facts_of(
        rows, trace, left_out_error=left_out_error, mean_y=middle + reference,
        variance=float((repeats * (y - middle) ** 2).sum()) / rows,
        sum_residuals=float((repeats * residual).sum()),
        sum_squared_residuals=float((repeats * residual**2).sum()),
    )  # fmt: skip
