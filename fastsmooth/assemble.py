"""From a chosen bandwidth to the finished result."""

from __future__ import annotations

import json
import math
from collections.abc import Mapping
from dataclasses import asdict, dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import Occupied, Points, estimate_noise, fit_points, values_at
from fastsmooth.bintable import Level, Pyramid
from fastsmooth.cautions import (
    about_curve,
    about_rows,
    about_search,
    standardised_residuals,
)
from fastsmooth.curve import EDGE, OK, Curve, Density
from fastsmooth.fitness import fit_facts
from fastsmooth.landmarks import find_landmarks
from fastsmooth.passes import Counted
from fastsmooth.search import left_out_error
from fastsmooth.serial import serial_facts
from fastsmooth.settings import Band, Reading, Smoothing
from fastsmooth.smoother import fit_level, least_weight
from fastsmooth.source import Source
from fastsmooth.trail import Search, Trail

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

# One curve costs little: finer bins than the search's keep its error down where rows are few.
_FINER_FOR_CURVE = 4
_ERROR_MARGIN = 8.0
_DENSITY_STRETCHES = 120
_DENSITY_STEPS = 72
_SUPPORT_POINTS = 256


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
    """

    counted: Counted
    pyramid: Pyramid
    search: Search
    shape: Shape
    bandwidth: float
    places: Floats | None


def assemble(
    source: Source, chosen: Chosen, reading: Reading, smoothing: Smoothing, band: Band
) -> Curve:
    """Evaluate the curve and put together everything that belongs to the result."""
    table, shape, bandwidth = chosen.counted.table, chosen.shape, chosen.bandwidth
    plan, pyramid = table.plan, chosen.pyramid
    log = plan.scale == "log"
    low, high = table.extent.tolist()
    places = chosen.places
    if places is None:
        places = np.linspace(low, high, band.points)
    finer = _FINER_FOR_CURVE * shape.bins_per_bandwidth
    level = pyramid.levels[pyramid.level_for(bandwidth, finer)]
    empty = least_weight(pyramid, shape)
    estimator = smoothing.estimator
    fits = fit_level(level, shape, bandwidth, empty)
    noise = estimate_noise(fits, estimator, shape, band.noise)
    occupied = Occupied(plan.origin, plan.width, np.flatnonzero(pyramid.levels[0].first[0]))

    def evaluate(at: Floats, as_band: Band) -> Points:
        return fit_points(
            at, fits, noise, shape, estimator=estimator, reference=plan.reference, band=as_band,
            by_block=plan.block is not None, extent=(low, high), occupied=occupied,
        )  # fmt: skip

    points = evaluate(places, band)
    error = _binning_error(points, places, level, bandwidth, shape, estimator, plan.reference)
    trail = chosen.search.trails[estimator]
    score = trail.score
    if smoothing.bandwidth is not None:
        by_fold = chosen.search.criterion == "leave-block-out"
        score = left_out_error(pyramid, shape, bandwidth, estimator, by_fold=by_fold)
    fit = fit_facts(fits, estimator, score, plan.reference)
    engine = {
        "name": "binned", "bins": plan.bins, "bins_per_bandwidth": bandwidth / plan.width,
        "fewest_bins_per_bandwidth": shape.fewest_bins_per_bandwidth,
        "level_bins_per_bandwidth": bandwidth / level.width, "passes": chosen.counted.passes,
        "error_in_noise_sd": error,
        "residual_sd": math.sqrt(noise.overall) if noise.overall > 0.0 else 0.0,
    }  # fmt: skip
    trace: dict[str, Any] = {
        "settings": _settings(source, chosen, reading, smoothing, band),
        "rows": table.tally.to_dict(),
        "blocks": len(table.blocks) if plan.block is not None else None,
        "files": [asdict(record) for record in source.files],
        "engine": {k: _finite(v) for k, v in engine.items()},
        "fit": fit,
        "landmarks": None,
        "plan": json.loads(json.dumps(plan.to_dict())),
        "versions": dict(_versions()),
    }
    if band.landmarks or band.crossings:
        grid, on_grid = places, points
        if chosen.places is not None:
            # The caller's few points do not show where the curve is supported.
            grid = np.linspace(low, high, _SUPPORT_POINTS)
            on_grid = evaluate(grid, replace(band, kind="pointwise"))
        marks = find_landmarks(
            _stretches(grid, on_grid), level, shape, fits.bandwidth_bins,
            estimator=estimator, reference=plan.reference, confidence=band.level,
            crossings=band.crossings,
        )  # fmt: skip
        trace["landmarks"] = [_in_axis_terms(mark.to_dict(), log) for mark in marks]
    x = np.exp(places) if log else places
    per_x = 1.0 / x if log else np.ones_like(x)
    made = Curve(
        x=x, estimate=points.estimate, slope=points.slope * per_x,
        slope_std_error=points.slope_std_error * per_x, std_error=points.std_error,
        lower=points.lower, upper=points.upper, effective_rows=points.effective_rows,
        status=points.status, residual_sd=points.residual_sd,
        bandwidth=_in_axis(bandwidth, log), axis=plan.axis,
        density=_density(chosen.counted, pyramid, log),
        search=_search_in_axis(chosen.search, log), cautions=(), trace=trace,
    )  # fmt: skip
    sample = chosen.counted.sample
    residuals = standardised_residuals(fits, noise, estimator, plan.reference, sample)
    trace["serial"] = serial_facts(residuals, sample, table.tally.used)
    cautions = (
        *chosen.counted.cautions,
        *about_rows(table, source),
        *about_search(made),
        *about_curve(made, sample, residuals),
    )
    return replace(made, cautions=cautions)


def _settings(
    source: Source, chosen: Chosen, reading: Reading, smoothing: Smoothing, band: Band
) -> dict[str, Any]:
    plan = chosen.counted.table.plan
    own = smoothing.bandwidth is not None
    return {
        "x": plan.columns.x, "y": plan.columns.y, "weight": plan.columns.weight,
        "count": plan.columns.count, "x_unit": source.x_unit, "y_unit": source.y_unit,
        "where": reading.where, "range": _plain_range(reading), "scale": plan.scale,
        "estimator": smoothing.estimator, "kernel": smoothing.kernel,
        "criterion": chosen.search.criterion, "block": plan.block,
        "bandwidth": _in_axis(chosen.bandwidth, plan.scale == "log") if own else None,
        "widths": smoothing.widths, "level": band.level, "band": band.kind, "bias": band.bias,
        "noise": band.noise, "least_rows": band.least_rows, "folds": plan.folds,
        "points": band.points, "at": None if band.at is None else [str(one) for one in band.at],
        "landmarks": band.landmarks, "crossings": list(band.crossings), "strict": reading.strict,
    }  # fmt: skip


def _stretches(places: Floats, points: Points) -> list[tuple[float, float]]:
    good = (points.status == OK) | (points.status == EDGE)
    ends = np.flatnonzero(np.diff(np.concatenate(([0], good.astype(int), [0])))).reshape(-1, 2)
    return [(float(places[start]), float(places[stop - 1])) for start, stop in ends.tolist()]


def _in_axis_terms(mark: dict[str, Any], log: bool) -> dict[str, Any]:
    places = ("x", "lower", "upper")
    return {k: math.exp(v) if log and k in places and v is not None else v for k, v in mark.items()}


def _binning_error(
    points: Points,
    places: Floats,
    level: Level,
    bandwidth: float,
    shape: Shape,
    estimator: str,
    reference: float,
) -> float:
    """Estimated error of the binned sums, in residual standard deviations.

    The difference to a table of half as many bins, divided by what the order of the error allows
    (Richardson's argument: the error falls by at least two to the power smoothness + 1, up to
    three), times a margin, because the difference may be small by chance.
    """
    coarse = values_at(places, level.coarser(), bandwidth, shape, estimator) + reference
    both = np.isfinite(points.estimate) & np.isfinite(coarse) & (points.residual_sd > 0.0)
    if not both.any():
        return math.nan
    away = np.abs(points.estimate - coarse)[both] / points.residual_sd[both]
    order = min(shape.smoothness + 1, 3)
    return _ERROR_MARGIN * float(away.max()) / (2.0**order - 1.0)


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


@lru_cache(maxsize=1)
def _versions() -> Mapping[str, str]:
    import platform
    from importlib.metadata import version

    names = ("fastsmooth", "numpy", "numba", "pyarrow")
    return {"python": platform.python_version(), **{name: version(name) for name in names}}
