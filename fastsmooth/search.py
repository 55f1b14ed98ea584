"""The choice of the bandwidth: criteria over a grid, the best, and how flat it lies."""

from __future__ import annotations

import math
from collections.abc import Iterable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable, Level, Pyramid
from fastsmooth.errors import InputError
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
from fastsmooth.trail import REFINED, Search, Trail

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

WIDTHS = 48
# The search itself looks further down, to see how much finer the bins must be.
_COARSEST_BINS_PER_BANDWIDTH = 8
# The narrowest width leaves this share of rows with windows of four places or more.
_SHARE_SUPPORTED = 0.95
_PLACES_PER_WINDOW = 4
_FEWER_BINS = 2
_FEWER_BINS_BY_FOLD = 8
_MANY_ROWS = 1e5
_LEAST_HEARD = 0.99
_REFINED_BY_FOLD = 1e-2
# Where the other folds' rows lie this far to one side, a fold's row asks for extrapolation.
_MOST_LOPSIDED = 0.5
# A row that makes so much of its own fit is alone: the others hardly predict it.
_MOST_LEVERAGE = 0.999
# A local minimum this close to the best rivals it.
_RIVAL_SHARE = 0.1
_GOLDEN = (math.sqrt(5.0) - 1.0) / 2.0


def narrowest_width(table: BinTable) -> float:
    """Return the narrowest bandwidth that the data can support, on the plan's scale.

    Nineteen rows in twenty must have four distinct places within one bandwidth to either side.
    Places closer together than a bin count as two at most.

    Raises
    ------
    InputError
        There are fewer than four places.
    """
    total = table.total()
    n = total[:, 0]
    with np.errstate(invalid="ignore", divide="ignore"):
        mean = total[:, 1] / n
        spread = total[:, 2] / n - mean * mean > 1e-9
    places = np.where(n > 0.0, 1 + spread, 0)
    if places.sum() < _PLACES_PER_WINDOW:
        raise InputError(
            "--x",
            f"hold at least {_PLACES_PER_WINDOW} distinct values",
            f"the rows that can be used have {int(places.sum())}",
            "name another column, or check --where and --range",
        )
    up_to = np.concatenate(([0], np.cumsum(places)))
    used = np.flatnonzero(n)
    weight = n[used]

    def supported(reach: int) -> bool:
        low = np.maximum(used - reach, 0)
        high = np.minimum(used + reach + 1, n.shape[0])
        enough = up_to[high] - up_to[low] >= _PLACES_PER_WINDOW
        return float(weight[enough].sum()) >= _SHARE_SUPPORTED * float(weight.sum())

    low, high = 0, n.shape[0]
    while low < high:
        middle = (low + high) // 2
        if supported(middle):
            high = middle
        else:
            low = middle + 1
    return (low + 1) * table.plan.width


def search_table(
    table: BinTable,
    pyramid: Pyramid,
    shape: Shape,
    *,
    criterion: str = "leave-one-out",
    by_block: bool = False,
    widths: int = WIDTHS,
    bounds: tuple[float, float] | None = None,
    threads: int = 1,
) -> Search:
    """Search the bandwidth of both estimators on a bin table.

    Parameters
    ----------
    table : BinTable
        Finished table.
    pyramid : Pyramid
        Its levels.
    shape : Shape
        Kernel function.
    criterion : str
        One of `fastsmooth.settings.CRITERIA`.
    by_block : bool
        Whether to leave out folds too; needed for the criterion ``leave-block-out``.
    widths : int
        Bandwidths in the grid, evenly spaced in log h.
    bounds : (float, float) or None
        Interval to search, on the plan's scale; None takes it from the data.
    threads : int
        Bandwidths worked on at a time; the result does not depend on it.

    Returns
    -------
    Search
        Criteria, choices, flat zones.

    Raises
    ------
    InputError
        Too few distinct x.
    """
    low, high = bounds or _interval(table)
    # Logarithms are of widths in bins: then x times a power of two gives h times it, to the bit.
    unit = table.plan.width
    grid = np.geomspace(low / unit, high / unit, widths) * unit
    job = _Job(pyramid, shape)
    with ThreadPoolExecutor(threads) as pool:
        fits = list(pool.map(job.fit, grid.tolist()))
        keep, rows_alone = _voters(pyramid, fits)
        if keep is not None:
            job.scored = Pyramid(table, keep)
        points = list(pool.map(job.scores_of, fits))
        by_fold = []
        if by_block:
            keep_folds, rows_alone = _fold_voters(pyramid, shape, low, job.empty)
            job.left_out = Pyramid(table, keep_folds)
            by_fold = list(pool.map(job.left_out_scores, grid.tolist()))
        trails = dict(
            zip(
                ESTIMATORS,
                pool.map(
                    lambda name: _trail(job, name, grid, points, by_fold, criterion), ESTIMATORS
                ),
                strict=True,
            )
        )
    return Search(criterion, shape.name, trails, rows_alone)


def left_out_error(
    pyramid: Pyramid, shape: Shape, bandwidth: float, estimator: str, *, by_fold: bool
) -> float:
    """Return the mean squared error of predicting left-out rows (or folds) at one width.

    Infinite where more than one row in a hundred has no prediction.
    """
    job = _Job(pyramid, shape)
    if not by_fold:
        return job.value(bandwidth, job.level(bandwidth), estimator, "leave-one-out")
    job.left_out = pyramid
    return job.left_out_scores(bandwidth)[estimator].criteria["leave-block-out"]


def _interval(table: BinTable) -> tuple[float, float]:
    """The widths to search: from what data and bins support up to the whole range."""
    low, high = table.extent.tolist()
    narrowest = max(narrowest_width(table), _COARSEST_BINS_PER_BANDWIDTH * table.plan.width)
    widest = max(high - low, 2.0 * narrowest)
    return narrowest, widest


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
            alone = ~(fit.chords[name][2] * mean_weight < _MOST_LEVERAGE) & (level.count > 0.0)
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
    lost = float(level.folds[:, 0][~keep].sum())
    return np.repeat(keep, finest.bins // level.bins, axis=1), lost


class _Job:
    """Scores of both estimators at any bandwidth."""

    def __init__(self, pyramid: Pyramid, shape: Shape) -> None:
        self.pyramid = pyramid
        self.shape = shape
        self.empty = least_weight(pyramid, shape)
        self.bins_per_bandwidth = _bins_per_bandwidth(pyramid, shape)
        # Rows that vote on leave-one-out and, where blocks are left out, on that.
        self.scored = pyramid
        self.left_out: Pyramid | None = None

    def level(self, bandwidth: float) -> int:
        return self.pyramid.level_for(bandwidth, self.bins_per_bandwidth)

    def fit(self, bandwidth: float, level: int | None = None) -> Fits:
        index = self.level(bandwidth) if level is None else level
        return fit_level(self.pyramid.levels[index], self.shape, bandwidth, self.empty)

    def scores_of(self, fits: Fits) -> dict[str, _Point]:
        """Score every voting row against the others."""
        scored = next(one for one in self.scored.levels if one.bins == fits.level.bins)
        points = {}
        for name in ESTIMATORS:
            scores = score_level(fits, name, scored)
            bandwidth = fits.bandwidth_bins * fits.level.width
            points[name] = _point_of(bandwidth, scores, fold_sums(scored, scores), scored)
        return points

    def value(self, bandwidth: float, level: int, name: str, criterion: str) -> float:
        """Return one criterion of one estimator: what a refinement needs, and no more."""
        scored = self.scored.levels[level]
        scores = score_level(self.fit(bandwidth, level), name, scored)
        return _criteria_of(scores, scored)[criterion]

    def scores(self, bandwidth: float, level: int | None = None) -> dict[str, _Point]:
        return self.scores_of(self.fit(bandwidth, level))

    def left_out_scores(self, bandwidth: float, level: int | None = None) -> dict[str, _Point]:
        """Score every fold against the others."""
        assert self.left_out is not None
        # Few bins do: a fold's absence moves the fit far more than binning does.
        fewer = max(4, self.shape.bins_per_bandwidth // _FEWER_BINS_BY_FOLD)
        index = self.pyramid.level_for(bandwidth, fewer) if level is None else level
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
            points[name] = _Point(
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


def _criteria_of(scores: Scores, scored: Level) -> dict[str, float]:
    n, weight = float(scored.count.sum()), float(scored.first[0].sum())
    # Voters have predictions at every width of the grid; between its widths one may be missing.
    heard = weight - scores.lost
    loo = scores.score / heard if heard > _LEAST_HEARD * weight else math.inf
    variance = scores.residual / weight
    room = 1.0 - scores.trace / n
    gcv = variance / room**2 if room > 0.0 else math.inf
    aicc = math.inf
    if n - scores.trace - 2.0 > 0.0 and variance > 0.0:
        aicc = math.log(variance) + 1.0 + 2.0 * (scores.trace + 1.0) / (n - scores.trace - 2.0)
    return {"leave-one-out": loo, "gcv": gcv, "aicc": aicc}


def _point_of(bandwidth: float, scores: Scores, folds: Floats, scored: Level) -> _Point:
    weight = float(scored.first[0].sum())
    shares = scored.folds[:, 0].sum(axis=1) / weight
    return _Point(
        bandwidth, _criteria_of(scores, scored), scores.trace, folds / weight, shares
    )  # fmt: skip


@dataclass(frozen=True)
class _Point:
    bandwidth: float
    criteria: dict[str, float]
    trace: float
    folds: Floats
    shares: Floats


def _trail(
    job: _Job,
    name: str,
    grid: Floats,
    points: list[dict[str, _Point]],
    left_out: list[dict[str, _Point]],
    criterion: str,
) -> Trail:
    mine = [point[name] for point in points]
    if criterion == "plug-in":
        from fastsmooth.plugin import plug_in_bandwidth

        bandwidth = float(
            np.clip(plug_in_bandwidth(job.pyramid, job.shape, name), grid[0], grid[-1])
        )
        best = job.scores(bandwidth)[name]
    else:
        by_fold = criterion == "leave-block-out"
        choosing = [point[name] for point in left_out] if by_fold else mine
        best = _refine(
            job, name, grid, [point.criteria[criterion] for point in choosing], criterion
        )
    by_row = best if criterion == "leave-one-out" else None
    if by_row is None:
        values = [point.criteria["leave-one-out"] for point in mine]
        by_row = _refine(job, name, grid, values, "leave-one-out")
    # The flat zone compares widths by the criterion that chose, or by leave-one-out where that
    # criterion has no sum over rows.
    judge = "leave-block-out" if criterion == "leave-block-out" else "leave-one-out"
    judged = [point[name] for point in left_out] if judge == "leave-block-out" else mine
    excess = np.array([p.criteria[judge] - best.criteria[judge] for p in judged])
    errors = np.array([_paired_error(p, best) for p in judged])
    zone = _flat_zone(grid, excess, errors, best.bandwidth, job.pyramid.plan.width)
    at_best = best if judge == "leave-one-out" else job.scores(best.bandwidth)[name]
    shown = np.array([p.criteria[criterion if criterion in p.criteria else judge] for p in judged])
    by_row_values = {
        c: np.array([p.criteria[c] for p in mine]) for c in ("leave-one-out", "gcv", "aicc")
    }
    return Trail(
        estimator=name,
        bandwidths=grid,
        leave_one_out=by_row_values["leave-one-out"],
        gcv=by_row_values["gcv"],
        aicc=by_row_values["aicc"],
        leave_block_out=np.array([p[name].criteria["leave-block-out"] for p in left_out]),
        excess=excess,
        excess_std_error=errors,
        bandwidth=best.bandwidth,
        leave_one_out_bandwidth=by_row.bandwidth,
        score=best.criteria[judge],
        trace=at_best.trace,
        flat_zone=zone,
        minima=_deep_minima(np.exp(shown) if criterion == "aicc" else shown, errors),
    )


def _refine(job: _Job, name: str, grid: Floats, values: list[float], criterion: str) -> _Point:
    """Golden section between the neighbours of the best grid point, on one level throughout."""
    if not any(math.isfinite(value) for value in values):
        raise InputError(
            "DATA",
            "leave some width at which rows can be predicted from others",
            "no width between the narrowest and the widest does",
            "give more rows or --bandwidth",
        )
    # Of equals (y does not vary, say) the widest.
    place = int(np.flatnonzero(np.array(values) == min(values))[-1])
    unit = job.pyramid.plan.width
    if criterion == "leave-block-out":

        def at(log_h: float) -> float:
            return job.left_out_scores(math.exp(log_h) * unit)[name].criteria[criterion]

        close = _REFINED_BY_FOLD
    else:
        level = job.level(float(grid[place]))

        def at(log_h: float) -> float:
            return job.value(math.exp(log_h) * unit, level, name, criterion)

        close = REFINED
    logs = np.log(grid / unit)
    low, high = float(logs[max(place - 1, 0)]), float(logs[min(place + 1, grid.shape[0] - 1)])
    best = (at(float(logs[place])), float(logs[place]))
    left, right = high - _GOLDEN * (high - low), low + _GOLDEN * (high - low)
    at_left, at_right = at(left), at(right)
    while high - low > close:
        if at_left <= at_right:
            high, right, at_right = right, left, at_left
            left = high - _GOLDEN * (high - low)
            at_left = at(left)
        else:
            low, left, at_left = left, right, at_right
            right = low + _GOLDEN * (high - low)
            at_right = at(right)
    chosen = min((best, (at_left, left), (at_right, right)), key=lambda pair: pair[0])[1]
    bandwidth = math.exp(chosen) * unit
    if criterion == "leave-block-out":
        return job.left_out_scores(bandwidth)[name]
    return job.scores(bandwidth, level)[name]


def _paired_error(point: _Point, best: _Point) -> float:
    """Standard error of the criterion's difference, from its differences per fold.

    Breiman, Friedman, Olshen & Stone (1984) for the one-standard-error rule; paired, because the
    error of the criterion's level is far larger than that of a difference.
    """
    folds = point.folds.shape[0]
    if folds < 2:
        return math.inf
    difference = point.folds - best.folds
    away = difference - point.shares * difference.sum()
    return math.sqrt(folds / (folds - 1.0) * float(away @ away))


def _flat_zone(
    grid: Floats, excess: Floats, errors: Floats, best: float, unit: float
) -> tuple[float, float]:
    """The interval around the best within one standard error, ends between grid points."""
    # Positive outside the zone. Where the criterion is undefined, so is membership: outside.
    over = np.where(np.isfinite(excess), excess - errors, math.inf)

    def end(places: Iterable[int]) -> float:
        former, former_over = best, -1.0
        for place in places:
            if over[place] > 0.0:
                if math.isfinite(over[place]) and former_over < 0.0:
                    share = former_over / (former_over - over[place]) if former != best else 0.5
                    former_log, log = math.log(former / unit), math.log(grid[place] / unit)
                    former = math.exp(former_log + share * (log - former_log)) * unit
                break
            # A grid point itself, not the exponential of its logarithm: `is_flat` compares.
            former, former_over = float(grid[place]), float(over[place])
        return former

    below = [i for i in range(grid.shape[0] - 1, -1, -1) if grid[i] < best]
    above = [i for i in range(grid.shape[0]) if grid[i] > best]
    return end(below), end(above)


def _deep_minima(values: Floats, errors: Floats) -> int:
    """Count local minima that rival the best and are parted from it by a standard error."""
    best = int(np.argmin(values))
    rival = values[best] + _RIVAL_SHARE * abs(values[best])
    minima = 1
    for place in range(values.shape[0]):
        around = values[max(place - 1, 0) : place + 2]
        if place == best or not values[place] <= min(around.min(), rival):
            continue
        lower = np.flatnonzero(values < values[place])
        if not lower.size:
            continue  # a tie with the best
        deep = True
        for end in (lower[lower < place][-1:], lower[lower > place][:1]):
            if end.size:
                between = slice(min(place, int(end[0])), max(place, int(end[0])) + 1)
                barrier = between.start + int(np.argmax(values[between]))
                climb = values[barrier] - values[place]
                deep &= bool(climb > max(errors[place], errors[barrier]))
        minima += deep
    return minima
