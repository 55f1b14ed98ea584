"""From a chosen bandwidth to the finished result."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from functools import lru_cache, partial
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import Noise, Occupied, Points, estimate_noise, fit_points, values_at
from fastsmooth.bintable import Level, Pyramid
from fastsmooth.cautions import (
    about_curve,
    about_folds,
    about_rows,
    about_search,
    fold_weights,
    standardised_residuals,
)
from fastsmooth.curve import EDGE, OK, Curve, Density
from fastsmooth.exact import ExactScoring, Rows, cut_width, fit_exactly
from fastsmooth.fitness import fit_facts
from fastsmooth.foldcurves import FoldCurves
from fastsmooth.jackknife import keep_fold_curves
from fastsmooth.landmarks import find_landmarks
from fastsmooth.localweights import kind_of_centre
from fastsmooth.nearest import (
    Neighbours,
    NeighbourScoring,
    neighbour_facts,
    neighbour_noise,
    neighbour_points,
    sample_residuals,
)
from fastsmooth.passes import Counted
from fastsmooth.robust import Core
from fastsmooth.scoring import BinnedScoring
from fastsmooth.search import left_out_error
from fastsmooth.serial import serial_facts
from fastsmooth.settings import NEAREST, Band, Reading, Smoothing
from fastsmooth.smoother import fit_level, least_weight
from fastsmooth.source import Source
from fastsmooth.trail import Search, Trail

if TYPE_CHECKING:
    from fastsmooth.files import FileRecord
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

# One curve costs little: finer bins than the search's keep its error down where rows are few.
_FINER_FOR_CURVE = 4
_ERROR_MARGIN = 8.0
# Rounding of sums of y - reference, in units of the last place.
_ROUNDINGS = 16.0
_DENSITY_STRETCHES = 120
_DENSITY_STEPS = 72
_SUPPORT_POINTS = 256
# A curve to be read anywhere: between points so close, a cubic spline departs from it by about a
# hundredth of its standard error.
_POINTS_PER_WINDOW = 8
_DENSE_POINTS = (256, 8192)


@dataclass(frozen=True)
class Chosen:
    """What has been decided before the curve is drawn.

    Attributes
    ----------
    counted : Counted
        The rows.
    pyramid : Pyramid
        Levels of their table.
    search : Search
        Criteria, on the plan's scale.
    shape : Shape
        Kernel function.
    bandwidth : float
        On the plan's scale.
    places : (n,) float64 or None
        The caller's own points, on the plan's scale.
    rows : Rows or None
        Sorted rows for the exact engine; None for the binned one.
    engine_reason : str
        Why this engine ran.
    near : Neighbours or None
        Rows in groups for the estimator ``nearest``; `bandwidth` is then the number of rows.
    core : Core or None
        Where most rows lie, if far rows weigh less.
    robust : dict or None
        What the weights did.
    """

    counted: Counted
    pyramid: Pyramid
    search: Search
    shape: Shape
    bandwidth: float
    places: Floats | None
    rows: Rows | None = None
    engine_reason: str = "asked for"
    near: Neighbours | None = None
    core: Core | None = None
    robust: dict[str, Any] | None = None

    def scoring(self) -> BinnedScoring:
        """Return what scores a bandwidth over all rows."""
        table = self.counted.table
        if self.rows is None:
            return BinnedScoring(table, self.pyramid, self.shape)
        return ExactScoring(table, self.pyramid, self.shape, self.rows)


@dataclass(frozen=True)
class Evaluated:
    """What an estimator gives for the result.

    Attributes
    ----------
    places : (n,) float64
        Where, on the plan's scale.
    points : Points
        Curve and band there.
    engine : dict
        How it was computed.
    fit : dict
        How well it predicts.
    landmarks : list of dict or None
        On the plan's scale.
    stretches : list of (float, float) or None
        Where landmarks were looked for, on the plan's scale.
    without_folds : FoldCurves or None
        The curve without each fold.
    residuals : (rows,) float64
        Standardised residuals of the sample.
    """

    places: Floats
    points: Points
    engine: dict[str, Any]
    fit: dict[str, Any]
    landmarks: list[dict[str, Any]] | None
    stretches: list[tuple[float, float]] | None
    without_folds: FoldCurves | None
    residuals: Floats


def assemble(
    source: Source, chosen: Chosen, reading: Reading, smoothing: Smoothing, band: Band
) -> Curve:
    """Evaluate the curve and put together everything that belongs to the result."""
    table, plan = chosen.counted.table, chosen.counted.table.plan
    log = plan.scale == "log"
    evaluate = _by_bandwidth if chosen.near is None else _by_neighbours
    found = evaluate(chosen, reading, smoothing, band)
    points, sample = found.points, chosen.counted.sample
    trace: dict[str, Any] = {
        "settings": _settings(source, chosen, reading, smoothing, band),
        "rows": table.tally.to_dict(),
        "blocks": len(table.blocks) if plan.block is not None else None,
        "folds_with_rows": fold_weights(table).size,
        "files": list(_file_facts(tuple(source.files))),
        "engine": {k: _finite(v) for k, v in found.engine.items()},
        "fit": found.fit,
        "landmarks": None,
        "landmark_stretches": None,
        "plan": json.loads(json.dumps(plan.to_dict())),
        "versions": dict(_versions()),
        "robust": _robust_in_axis(chosen.robust, log),
        "serial": serial_facts(found.residuals, sample, table.tally.used),
    }
    if found.landmarks is not None:
        trace["landmarks"] = [_in_axis_terms(mark, log) for mark in found.landmarks]
    if found.stretches is not None:
        trace["landmark_stretches"] = [
            [_in_axis(low, log), _in_axis(high, log)] for low, high in found.stretches
        ]
    x = np.exp(found.places) if log else found.places
    per_x = 1.0 / x if log else np.ones_like(x)
    widths_are_factors = log and chosen.near is None
    made = Curve(
        x=x, estimate=points.estimate, slope=points.slope * per_x,
        slope_std_error=points.slope_std_error * per_x, std_error=points.std_error,
        lower=points.lower, upper=points.upper, effective_rows=points.effective_rows,
        status=points.status, residual_sd=points.residual_sd,
        bandwidth=_in_axis(chosen.bandwidth, widths_are_factors), axis=plan.axis,
        density=_density(chosen.counted, chosen.pyramid, log),
        search=_search_in_axis(chosen.search, widths_are_factors), cautions=(), trace=trace,
        without_folds=found.without_folds,
    )  # fmt: skip
    cautions = (
        *chosen.counted.cautions,
        *about_rows(table),
        *about_folds(made, table),
        *about_search(made),
        *about_curve(made, sample, found.residuals),
    )
    return replace(made, cautions=cautions)


def _places(chosen: Chosen, band: Band) -> Floats:
    if chosen.places is not None:
        return chosen.places
    low, high = chosen.counted.table.extent.tolist()
    points = band.points
    if points is None:
        # How often the window fits into the range.
        windows = (high - low) / chosen.bandwidth
        if chosen.near is not None:
            windows = chosen.counted.table.tally.used / chosen.bandwidth
        fewest, most = _DENSE_POINTS
        points = int(min(max(fewest, _POINTS_PER_WINDOW * windows), most)) + 1
    return np.linspace(low, high, points)


def _by_bandwidth(chosen: Chosen, reading: Reading, smoothing: Smoothing, band: Band) -> Evaluated:
    """Evaluate the estimators that have a kernel and a bandwidth."""
    table, shape, bandwidth = chosen.counted.table, chosen.shape, chosen.bandwidth
    plan, pyramid = table.plan, chosen.pyramid
    low, high = table.extent.tolist()
    places = _places(chosen, band)
    finer = _FINER_FOR_CURVE * shape.bins_per_bandwidth
    level = pyramid.levels[pyramid.level_for(bandwidth, finer)]
    empty = least_weight(pyramid, shape)
    estimator = smoothing.estimator
    fits = fit_level(level, shape, bandwidth, empty)
    noise = estimate_noise(fits, estimator, shape, band.noise)
    if chosen.core is not None:
        noise = _core_noise(noise, chosen.core, level, band.noise)
    # Weights made from the residuals themselves are no precisions: folds tell the error.
    by_fold = plan.block is not None or chosen.core is not None
    occupied = Occupied(plan.origin, plan.width, np.flatnonzero(pyramid.levels[0].first[0]))
    exact, rows = None, chosen.rows
    if rows is not None:
        exact = partial(
            fit_exactly, rows=rows, variance=noise.at(rows.x, level), shape=shape,
            bandwidth=cut_width(bandwidth, table), threads=reading.threads,
        )  # fmt: skip

    def evaluate(at: Floats, as_band: Band) -> Points:
        return fit_points(
            at, fits, noise, shape, estimator=estimator, reference=plan.reference, band=as_band,
            by_block=by_fold, extent=(low, high), occupied=occupied, exact=exact,
        )  # fmt: skip

    points = evaluate(places, band)
    error = 0.0
    if rows is None:
        error = binning_error(points, places, level, bandwidth, shape, estimator, plan.reference)
    score = chosen.search.trails[estimator].score
    if smoothing.bandwidth is not None:
        by_block = chosen.search.criterion == "leave-block-out"
        score = left_out_error(chosen.scoring(), bandwidth, estimator, by_fold=by_block)
    engine = {
        "name": "binned" if rows is None else "exact", "reason": chosen.engine_reason,
        "bins": plan.bins, "bins_per_bandwidth": bandwidth / plan.width,
        "fewest_bins_per_bandwidth": shape.fewest_bins_per_bandwidth,
        "level_bins_per_bandwidth": bandwidth / level.width, "passes": chosen.counted.passes,
        "error_in_noise_sd": error, "residual_sd": _residual_sd(noise),
    }  # fmt: skip
    landmarks, stretches = None, None
    if band.landmarks or band.crossings:
        grid, on_grid = places, points
        if chosen.places is not None:
            # The caller's few points do not show where the curve is supported.
            grid = np.linspace(low, high, _SUPPORT_POINTS)
            on_grid = evaluate(grid, replace(band, kind="pointwise"))
        stretches = _stretches(grid, on_grid)
        marks = find_landmarks(
            stretches, level, shape, fits.bandwidth_bins,
            estimator=estimator, reference=plan.reference, confidence=band.level,
            crossings=band.crossings,
        )  # fmt: skip
        landmarks = [mark.to_dict() for mark in marks]
    without_folds = None
    if band.keep_folds and len(table.sums) > 1:
        without_folds = keep_fold_curves(
            places, pyramid, sorted(table.sums), shape, bandwidth,
            kind_of_centre(estimator, band.bias),
        )  # fmt: skip
    return Evaluated(
        places, points, engine, fit_facts(fits, estimator, score, plan.reference), landmarks,
        stretches, without_folds,
        standardised_residuals(fits, noise, estimator, plan.reference, chosen.counted.sample),
    )  # fmt: skip


def _by_neighbours(chosen: Chosen, reading: Reading, smoothing: Smoothing, band: Band) -> Evaluated:
    """Evaluate the mean of the nearest rows."""
    table, near = chosen.counted.table, chosen.near
    assert near is not None
    plan, k = table.plan, round(chosen.bandwidth)
    noise, level = neighbour_noise(near, k, table, chosen.pyramid, band.noise)
    places = _places(chosen, band)
    points, left_out, centre = neighbour_points(
        places, near, k, noise, level, reference=plan.reference, band=band,
        by_block=plan.block is not None,
    )  # fmt: skip
    trail = chosen.search.trails[smoothing.estimator]
    score, trace = trail.score, trail.trace
    if smoothing.neighbours is not None:
        scoring = NeighbourScoring(near)
        trace = scoring.trace(k)
        by_fold = chosen.search.criterion == "leave-block-out"
        score = (
            scoring.left_out_points([float(k)], map)[0][0][NEAREST].criteria["leave-block-out"]
            if by_fold
            else scoring.value(k, k, NEAREST, "leave-one-out")
        )
    engine = {
        "name": "exact", "reason": "nearest rows are found among all rows",
        "bins": plan.bins, "passes": chosen.counted.passes, "error_in_noise_sd": 0.0,
        "residual_sd": _residual_sd(noise),
    }  # fmt: skip
    without_folds = None
    if band.keep_folds and len(table.sums) > 1:
        without_folds = FoldCurves.of(
            np.array(sorted(table.sums), np.int64), centre, left_out.degrees, left_out.moved,
            left_out.shares,
        )  # fmt: skip
    residuals = sample_residuals(near, k, noise, level, plan.reference, chosen.counted.sample)
    fit = neighbour_facts(near, k, score, trace, plan.reference)
    return Evaluated(places, points, engine, fit, None, None, without_folds, residuals)


def middle_of(
    pyramid: Pyramid, shape: Shape, bandwidth: float, estimator: str, places: Floats
) -> Floats:
    """Return the curve at places on the plan's scale; NaN where there is none."""
    finer = _FINER_FOR_CURVE * shape.bins_per_bandwidth
    level = pyramid.levels[pyramid.level_for(bandwidth, finer)]
    value = values_at(places, level, bandwidth, shape, estimator)
    return value + pyramid.plan.reference


def _core_noise(noise: Noise, core: Core, level: Level, kind: str) -> Noise:
    """The noise of most rows: weights leave too little of that of all."""
    sd = core.sd_at(level.centres)
    if kind == "constant":
        sd = np.full(level.bins, np.median(sd))
    variance = sd**2
    return Noise(variance, noise.degrees, float(np.median(variance)), noise.bandwidth)


def _robust_in_axis(facts: dict[str, Any] | None, log: bool) -> dict[str, Any] | None:
    if facts is None or not log or "where" not in facts:
        return facts
    where = [
        {**one, "low": math.exp(one["low"]), "high": math.exp(one["high"])}
        for one in facts["where"]
    ]
    return {**facts, "where": where}


def _residual_sd(noise: Noise) -> float:
    return math.sqrt(noise.overall) if noise.overall > 0.0 else 0.0


def _settings(
    source: Source, chosen: Chosen, reading: Reading, smoothing: Smoothing, band: Band
) -> dict[str, Any]:
    plan = chosen.counted.table.plan
    own = smoothing.bandwidth is not None
    return {
        "x": plan.columns.x, "y": plan.columns.y, "weight": source.columns.weight,
        "count": plan.columns.count, "x_unit": source.x_unit, "y_unit": source.y_unit,
        "where": reading.where, "range": _plain_range(reading), "scale": plan.scale,
        "estimator": smoothing.estimator, "kernel": smoothing.kernel,
        "criterion": chosen.search.criterion, "block": plan.block, "engine": smoothing.engine,
        "bandwidth": _in_axis(chosen.bandwidth, plan.scale == "log") if own else None,
        "neighbours": smoothing.neighbours, "robust": smoothing.robust,
        "widths": smoothing.widths, "level": band.level, "band": band.kind, "bias": band.bias,
        "noise": band.noise, "least_rows": band.least_rows, "folds": plan.folds,
        "points": band.points, "at": None if band.at is None else [str(one) for one in band.at],
        "landmarks": band.landmarks, "crossings": list(band.crossings),
        "limits": list(band.limits), "strict": reading.strict,
    }  # fmt: skip


def _stretches(places: Floats, points: Points) -> list[tuple[float, float]]:
    good = (points.status == OK) | (points.status == EDGE)
    ends = np.flatnonzero(np.diff(np.concatenate(([0], good.astype(int), [0])))).reshape(-1, 2)
    return [(float(places[start]), float(places[stop - 1])) for start, stop in ends.tolist()]


def _in_axis_terms(mark: dict[str, Any], log: bool) -> dict[str, Any]:
    places = ("x", "lower", "upper")
    return {k: math.exp(v) if log and k in places and v is not None else v for k, v in mark.items()}


def binning_error(
    points: Points,
    places: Floats,
    level: Level,
    bandwidth: float,
    shape: Shape,
    estimator: str,
    reference: float,
) -> float:
    """Return an estimate of the curve's error from binning, in residual standard deviations.

    The difference to a table of half as many bins, divided by what the order of the error allows
    (Richardson's argument: the error falls by at least two to the power smoothness + 1, up to
    three), times a margin, because the difference may be small by chance. To it comes the rounding
    of the sums and of their result: where all rows of a bin share one x, nothing else is left.
    `bench/results/errors.md` says how often the estimate bounds the error, and how far it lies
    above it.

    Parameters
    ----------
    points : Points
        The curve at the places, from the level's bins.
    places : (n,) float64
        On the plan's scale.
    level : Level
        Bins that made the curve.
    bandwidth : float
        On the plan's scale.
    shape : Shape
        Kernel function.
    estimator : str
        ``local-linear`` or ``local-constant``.
    reference : float
        The plan's reference.
    """
    coarse = values_at(places, level.coarser(), bandwidth, shape, estimator) + reference
    both = np.isfinite(points.estimate) & np.isfinite(coarse) & (points.residual_sd > 0.0)
    if not both.any():
        return math.nan
    estimate, sd = points.estimate[both], points.residual_sd[both]
    order = min(shape.smoothness + 1, 3)
    away = _ERROR_MARGIN / (2.0**order - 1.0) * np.abs(estimate - coarse[both])
    summed = np.abs(estimate - reference) + sd
    rounding = np.finfo(float).eps * (np.abs(estimate) + _ROUNDINGS * summed)
    return float(((away + rounding) / sd).max())


def _in_axis(bandwidth: float, log: bool) -> float:
    return math.exp(bandwidth) if log else bandwidth


def _search_in_axis(found: Search, log: bool) -> Search:
    if not log:
        return found

    def factors(trail: Trail) -> Trail:
        low, high = trail.flat_zone
        return replace(
            trail, bandwidths=np.exp(trail.bandwidths), bandwidth=math.exp(trail.bandwidth),
            leave_one_out_bandwidth=math.exp(trail.leave_one_out_bandwidth),
            flat_zone=(math.exp(low), math.exp(high)),
        )  # fmt: skip

    return replace(found, trails={name: factors(trail) for name, trail in found.trails.items()})


def _density(counted: Counted, pyramid: Pyramid, log: bool) -> Density:
    plan = counted.table.plan
    low, high = counted.table.extent.tolist()
    edges = np.linspace(low, high, _DENSITY_STRETCHES + 1)
    finest = pyramid.levels[0]
    used = np.flatnonzero(finest.count)
    # A bin's rows go to the stretch that holds their mean.
    mean = finest.origin + finest.width * (
        used + 0.5 + finest.first[1, used] / finest.first[0, used]
    )
    rows, _ = np.histogram(np.clip(mean, low, high), edges, weights=finest.count[used])
    x, y = counted.shown
    inside = np.isfinite(x) & np.isfinite(y) & ((x > 0.0) | (not log))
    x, y = x[inside], y[inside]
    x = np.log(x) if log else x
    inside = (x >= low) & (x <= high)
    x, y = x[inside], y[inside]
    if y.size:
        bottom, low_y, high_y, top = (float(q) for q in np.quantile(y, (0.002, 0.05, 0.95, 0.998)))
        # A code for missing readings must not stretch the cells.
        bottom = max(bottom, low_y - (high_y - low_y))
        top = min(top, high_y + (high_y - low_y))
    else:
        bottom = top = plan.reference
    margin = 0.05 * (top - bottom) or max(abs(top), 1.0) * 0.01
    steps = np.linspace(bottom - margin, top + margin, _DENSITY_STEPS + 1)
    sampled, _, _ = np.histogram2d(x, y, (edges, steps))
    return Density(np.exp(edges) if log else edges, rows, steps, sampled)


def _plain_range(reading: Reading) -> list[str] | None:
    return None if reading.range is None else [str(end) for end in reading.range]


def _finite(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value


@lru_cache(maxsize=4)
def _file_facts(files: tuple[FileRecord, ...]) -> list[dict[str, Any]]:
    """The files as plain data: one list for all the curves made from them."""
    return [asdict(record) for record in files]


@lru_cache(maxsize=1)
def _versions() -> Mapping[str, str]:
    import platform
    from importlib.metadata import version

    names = ("fastsmooth", "numpy", "numba", "pyarrow")
    return {"python": platform.python_version(), **{name: version(name) for name in names}}
