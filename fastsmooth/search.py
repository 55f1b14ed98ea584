"""The choice of the bandwidth: criteria over a grid, the best, and how flat it lies."""

from __future__ import annotations

import math
from collections.abc import Iterable
from concurrent.futures import ThreadPoolExecutor
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.errors import InputError
from fastsmooth.scoring import BinnedScoring, Point
from fastsmooth.settings import ESTIMATORS, NEAREST
from fastsmooth.trail import REFINED, Search, Trail

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape
    from fastsmooth.nearest import Neighbours, NeighbourScoring

    Scoring = BinnedScoring | NeighbourScoring

Floats = NDArray[np.float64]

WIDTHS = 48
# The search itself looks further down, to see how much finer the bins must be.
_COARSEST_BINS_PER_BANDWIDTH = 8
# The narrowest width leaves this share of rows with windows of four places or more.
_SHARE_SUPPORTED = 0.95
_PLACES_PER_WINDOW = 4
_REFINED_BY_FOLD = 1e-2
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
        raise too_few_places(int(places.sum()))
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
    scoring: BinnedScoring | None = None,
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
    scoring : BinnedScoring or None
        What scores a bandwidth, in place of the table's bins.

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
    job = scoring or BinnedScoring(table, pyramid, shape)
    with ThreadPoolExecutor(threads) as pool:
        # With one thread there is nobody to hand the work to.
        mapped = pool.map if threads > 1 else map
        points, rows_alone = job.points(grid.tolist(), mapped)
        by_fold: list[dict[str, Point]] = []
        if by_block:
            by_fold, not_judged = job.left_out_points(grid.tolist(), mapped)
            rows_alone = not_judged if criterion == "leave-block-out" else rows_alone
        found = mapped(lambda name: _trail(job, name, grid, points, by_fold, criterion), ESTIMATORS)
        trails = dict(zip(ESTIMATORS, found, strict=True))
    return Search(criterion, shape.name, trails, rows_alone)


def search_neighbours(
    near: Neighbours, *, criterion: str, by_block: bool, widths: int = WIDTHS, threads: int = 1
) -> Search:
    """Search the number of neighbours; parameters as for `search_table`.

    Returns
    -------
    Search
        With one trail, whose bandwidths are numbers of neighbours.

    Raises
    ------
    InputError
        Too few rows.
    """
    from fastsmooth.nearest import NeighbourScoring, neighbour_grid

    grid = neighbour_grid(near, widths)
    if near.x.shape[0] < _PLACES_PER_WINDOW:
        raise too_few_places(near.x.shape[0])
    job = NeighbourScoring(near)
    with ThreadPoolExecutor(threads) as pool:
        points, rows_alone = job.points(grid.tolist(), pool.map)
        by_fold: list[dict[str, Point]] = []
        if by_block:
            by_fold, not_judged = job.left_out_points(grid.tolist(), pool.map)
            rows_alone = not_judged if criterion == "leave-block-out" else rows_alone
    trail = _trail(job, NEAREST, grid, points, by_fold, criterion)
    return Search(criterion, NEAREST, {NEAREST: trail}, rows_alone)


def too_few_places(places: int) -> InputError:
    """Return the refusal of data with too few distinct x."""
    return InputError(
        "--x", f"hold at least {_PLACES_PER_WINDOW} distinct values",
        f"the rows that can be used have {places}",
        "name another column, or check --where and --range",
    )  # fmt: skip


def left_out_error(
    scoring: BinnedScoring, bandwidth: float, estimator: str, *, by_fold: bool
) -> float:
    """Return the mean squared error of predicting left-out rows (or folds) at one width.

    Infinite where more than one row in a hundred has no prediction.
    """
    if not by_fold:
        return scoring.value(bandwidth, bandwidth, estimator, "leave-one-out")
    scoring.left_out = scoring.pyramid
    return scoring.left_out_scores(bandwidth)[estimator].criteria["leave-block-out"]


def _interval(table: BinTable) -> tuple[float, float]:
    """The widths to search: from what data and bins support up to the whole range."""
    low, high = table.extent.tolist()
    narrowest = max(narrowest_width(table), _COARSEST_BINS_PER_BANDWIDTH * table.plan.width)
    widest = max(high - low, 2.0 * narrowest)
    return narrowest, widest


def _trail(
    job: Scoring,
    name: str,
    grid: Floats,
    points: list[dict[str, Point]],
    left_out: list[dict[str, Point]],
    criterion: str,
) -> Trail:
    mine = [point[name] for point in points]
    if criterion == "plug-in":
        from fastsmooth.plugin import plug_in_bandwidth

        assert isinstance(job, BinnedScoring)
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
    zone = _flat_zone(grid, excess, errors, best.bandwidth, job.unit)
    at_best = best if judge == "leave-one-out" else job.scores(best.bandwidth)[name]
    shown = np.array([p.criteria[criterion if criterion in p.criteria else judge] for p in judged])
    by_row_values = {
        # Neighbours have leave-one-out alone.
        c: np.array([p.criteria.get(c, math.inf) for p in mine])
        for c in ("leave-one-out", "gcv", "aicc")
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


def _refine(job: Scoring, name: str, grid: Floats, values: list[float], criterion: str) -> Point:
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
    unit = job.unit
    if criterion == "leave-block-out":

        def at(log_h: float) -> float:
            return job.left_out_scores(math.exp(log_h) * unit)[name].criteria[criterion]

        close = _REFINED_BY_FOLD
    else:
        like = float(grid[place])

        def at(log_h: float) -> float:
            return job.value(math.exp(log_h) * unit, like, name, criterion)

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
    return job.scores(bandwidth, like)[name]


def _paired_error(point: Point, best: Point) -> float:
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
