"""The jobs: make a curve, search a bandwidth. The command line calls these and nothing else."""

from __future__ import annotations

import math
from collections.abc import Mapping
from dataclasses import asdict, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import Noise, Occupied, Points, estimate_noise, fit_points
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.cautions import (
    about_curve,
    about_rows,
    about_search,
    standardised_residuals,
)
from fastsmooth.curve import Curve, Density
from fastsmooth.errors import InputError
from fastsmooth.passes import Counted, Progress, bins_for, count_finer, count_rows, silent
from fastsmooth.search import Search, Trail, search_table
from fastsmooth.serial import serial_facts
from fastsmooth.settings import Band, Reading, Smoothing
from fastsmooth.smoother import Fits, fit_level, least_weight
from fastsmooth.source import Columns, Source, open_source

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

_MOST_SEARCHES = 3
# One curve costs little: finer bins than the search's keep its error down where rows are few.
_FINER_FOR_CURVE = 4
_ERROR_MARGIN = 8.0
_DENSITY_STRETCHES = 120
_DENSITY_STEPS = 72


def make_curve(
    data: Any,
    x: str,
    y: str,
    *,
    weight: str | None = None,
    count: str | None = None,
    reading: Reading | None = None,
    smoothing: Smoothing | None = None,
    band: Band | None = None,
    progress: Progress = silent,
) -> Curve:
    """Make the reference curve of y as a function of x.

    Parameters
    ----------
    data : path, list of paths, dict of arrays, tuple of arrays, or frame
        See `fastsmooth.source.open_source`.
    x, y : str
        Columns.
    weight : str or None
        Column of precisions: variance of a row is proportional to 1 / weight.
    count : str or None
        Column of repeats: a row stands for so many equal rows.
    reading : Reading or None
        Which rows are read, and how.
    smoothing : Smoothing or None
        How the mean is estimated.
    band : Band or None
        Points, band, and what counts as thin.
    progress : callable
        Called as ``progress(stage, rows_done, rows_expected)``.

    Returns
    -------
    Curve
        Table, band, search, cautions and trace.

    Raises
    ------
    InputError
        An argument or the data cannot be used.
    ReadError
        A file could not be read whole.

    Examples
    --------
    >>> import numpy as np
    >>> wet_bulb_c = np.linspace(0.0, 25.0, 2000)
    >>> power_kw = 20.0 + 0.04 * wet_bulb_c**2 + 0.5 * np.sin(7.0 * np.arange(2000))
    >>> made = make_curve({"wet_bulb_c": wet_bulb_c, "power_kw": power_kw}, "wet_bulb_c", "power_kw")
    >>> round(float(made.at(10.0)[0]), 1)
    24.0
    """
    reading = reading or Reading()
    smoothing = smoothing or Smoothing()
    band = band or Band()
    _criterion(reading, smoothing)
    block = None if reading.blocks is None else reading.blocks.column
    columns = Columns(x, y, weight, count, block=block)
    with open_source(data, columns, where=reading.where) as source:
        fixed = _own_bandwidth(source, reading, smoothing)
        places = _own_points(source, reading, band)
        counted, pyramid, found, chosen = _count_and_search(
            source, reading, smoothing, fixed, progress
        )
        progress("fitting", 0, None)
        return _assemble(source, counted, pyramid, found, chosen, places, reading, smoothing, band)


def search_bandwidth(
    data: Any,
    x: str,
    y: str,
    *,
    weight: str | None = None,
    count: str | None = None,
    reading: Reading | None = None,
    smoothing: Smoothing | None = None,
    progress: Progress = silent,
) -> Search:
    """Search the bandwidth of both estimators; parameters and errors as for `make_curve`.

    Returns
    -------
    Search
        Bandwidths in axis floats (seconds for times), or factors on a log scale.

    Examples
    --------
    >>> import numpy as np
    >>> wet_bulb_c = np.linspace(0.0, 25.0, 2000)
    >>> power_kw = 20.0 + 3.0 * np.sin(wet_bulb_c) + 0.5 * np.sin(7.0 * np.arange(2000))
    >>> found = search_bandwidth({"wet_bulb_c": wet_bulb_c, "power_kw": power_kw}, "wet_bulb_c", "power_kw")
    >>> 0.3 < found.trails["local-linear"].bandwidth < 3.0
    True
    """
    return make_curve(
        data, x, y, weight=weight, count=count, reading=reading, smoothing=smoothing,
        progress=progress,
    ).search  # fmt: skip


def find_shape(name: str) -> Shape:
    """Return the kernel function of a name that `Smoothing` has checked."""
    from fastsmooth.kernels.shapes import SHAPES

    return SHAPES[name]


def _criterion(reading: Reading, smoothing: Smoothing) -> str:
    if smoothing.criterion == "leave-block-out" and reading.block is None:
        raise InputError(
            "--criterion leave-block-out", "come with --block", "no block is given",
            "name what makes rows belong together, as in --block logged_at:day",
        )  # fmt: skip
    if smoothing.criterion is not None:
        return smoothing.criterion
    return "leave-one-out" if reading.block is None else "leave-block-out"


def _own_bandwidth(source: Source, reading: Reading, smoothing: Smoothing) -> float | None:
    """The caller's bandwidth on the plan's scale."""
    if smoothing.bandwidth is None:
        return None
    width = source.axis.width_from_user(smoothing.bandwidth)
    if reading.scale == "log":
        if not width > 1.0:
            raise InputError(
                "--bandwidth", "be a factor above 1 with --scale log", f"it is {width:g}",
                "write 1.2 for windows that reach 20 percent up",
            )  # fmt: skip
        return math.log(width)
    if not width > 0.0:
        raise InputError("--bandwidth", "be positive", f"it is {width:g}", "leave it out")
    return width


def _own_points(source: Source, reading: Reading, band: Band) -> Floats | None:
    """The caller's points on the plan's scale, ascending."""
    if band.at is None:
        return None
    places = np.sort(np.array([source.axis.from_user(one) for one in band.at], np.float64))
    if reading.scale == "log":
        if not places[0] > 0.0:
            raise InputError(
                "--at", "be positive with --scale log", f"it holds {places[0]:g}", "leave it out"
            )
        return np.log(places)
    return places


def _count_and_search(
    source: Source,
    reading: Reading,
    smoothing: Smoothing,
    fixed: float | None,
    progress: Progress,
) -> tuple[Counted, Pyramid, Search, float]:
    """Read and search; read again with finer bins while the chosen width asks for them."""
    counted = count_rows(source, reading, progress)
    shape = find_shape(smoothing.kernel)
    fine = shape.fewest_bins_per_bandwidth
    for tried in range(1, _MOST_SEARCHES + 1):
        progress("searching", 0, None)
        pyramid = Pyramid(counted.table)
        found = search_table(
            counted.table, pyramid, shape, criterion=_criterion(reading, smoothing),
            by_block=reading.block is not None, widths=smoothing.widths,
            threads=reading.threads,
        )  # fmt: skip
        chosen = fixed or found.trails[smoothing.estimator].bandwidth
        plan = counted.table.plan
        if chosen >= fine * plan.width or tried == _MOST_SEARCHES:
            break
        # A width at the very end of what these bins resolve may want to go much further.
        ahead = 4.0 if found.trails[smoothing.estimator].at_low_end and fixed is None else 1.0
        bins = bins_for(counted.table, chosen, ahead * shape.bins_per_bandwidth, reading.threads)
        low, high = counted.table.extent.tolist()
        if (high - low) / bins > 0.8 * plan.width:
            break
        counted = count_finer(source, counted, reading, bins, progress)
    return counted, pyramid, found, chosen


def _assemble(
    source: Source,
    counted: Counted,
    pyramid: Pyramid,
    found: Search,
    bandwidth: float,
    places: Floats | None,
    reading: Reading,
    smoothing: Smoothing,
    band: Band,
) -> Curve:
    table, shape = counted.table, find_shape(smoothing.kernel)
    plan = table.plan
    low, high = table.extent.tolist()
    if places is None:
        places = np.linspace(low, high, band.points)
    level = pyramid.levels[
        pyramid.level_for(bandwidth, _FINER_FOR_CURVE * shape.bins_per_bandwidth)
    ]
    empty = least_weight(pyramid, shape)
    occupied = Occupied(plan.origin, plan.width, np.flatnonzero(pyramid.levels[0].first[0]))

    def evaluate(fits: Fits, noise: Noise) -> Points:
        return fit_points(
            places, fits, noise, shape, estimator=smoothing.estimator, reference=plan.reference,
            band=band, by_block=plan.block is not None,
            extent=(low, high), occupied=occupied,
        )  # fmt: skip

    fits = fit_level(level, shape, bandwidth, empty)
    noise = estimate_noise(fits, smoothing.estimator, shape, band.noise)
    points = evaluate(fits, noise)
    coarse = fit_level(level.coarser(), shape, bandwidth, empty)
    doubtful = evaluate(coarse, _halved(noise))
    error = _binning_error(points, doubtful, shape)
    log = plan.scale == "log"
    x = np.exp(places) if log else places
    density = _density(counted, pyramid, log)
    slope = points.slope / x if log else points.slope
    settings = {
        "x": plan.columns.x, "y": plan.columns.y, "weight": plan.columns.weight,
        "count": plan.columns.count, "x_unit": source.x_unit, "y_unit": source.y_unit,
        "where": reading.where, "range": _plain_range(reading), "scale": plan.scale,
        "estimator": smoothing.estimator, "kernel": smoothing.kernel,
        "criterion": found.criterion, "block": plan.block,
        "bandwidth": None if smoothing.bandwidth is None else _in_axis(bandwidth, log),
        "widths": smoothing.widths, "level": band.level, "band": band.kind, "bias": band.bias, "noise": band.noise,
        "least_rows": band.least_rows, "folds": plan.folds,
    }  # fmt: skip
    engine = {
        "name": "binned", "bins": plan.bins, "bins_per_bandwidth": bandwidth / plan.width,
        "fewest_bins_per_bandwidth": shape.fewest_bins_per_bandwidth,
        "level_bins_per_bandwidth": bandwidth / level.width, "passes": counted.passes,
        "error_in_noise_sd": error, "equivalent_parameters": _trace(fits, smoothing.estimator),
        "residual_sd": math.sqrt(noise.overall) if noise.overall > 0.0 else 0.0,
    }  # fmt: skip
    trace = {
        "settings": settings,
        "rows": table.tally.to_dict(),
        "blocks": len(table.blocks) if plan.block is not None else None,
        "files": [asdict(record) for record in source.files],
        "engine": {k: _finite(v) for k, v in engine.items()},
        "plan": plan.to_dict(),
        "versions": dict(_versions()),
    }
    made = Curve(
        x=x, estimate=points.estimate, slope=slope, std_error=points.std_error,
        lower=points.lower, upper=points.upper, effective_rows=points.effective_rows,
        status=points.status, residual_sd=points.residual_sd,
        bandwidth=_in_axis(bandwidth, log), axis=plan.axis, density=density,
        search=_search_in_axis(found, log), cautions=counted.cautions, trace=trace,
    )  # fmt: skip
    sample = counted.sample._replace(x=np.exp(counted.sample.x) if log else counted.sample.x)
    residuals = standardised_residuals(made, sample)
    trace["serial"] = serial_facts(residuals, sample, table.tally.used)
    cautions = (
        *counted.cautions,
        *about_rows(table, source),
        *about_search(made),
        *about_curve(made, sample, residuals),
    )
    return replace(made, cautions=cautions)


def _halved(noise: Noise) -> Noise:
    def pairs(values: Floats) -> Floats:
        return values.reshape(-1, 2).mean(axis=1)

    return replace(noise, variance=pairs(noise.variance), degrees=pairs(noise.degrees))


def _binning_error(points: Points, coarse: Points, shape: Shape) -> float:
    """Estimated error of the binned sums, in residual standard deviations.

    The difference to a table of half as many bins, divided by what the order of the error allows
    (Richardson's argument: the error falls by at least two to the power smoothness + 1, up to
    three), times a margin, because the difference may be small by chance.
    """
    both = np.isfinite(points.estimate) & np.isfinite(coarse.estimate) & (points.residual_sd > 0.0)
    if not both.any():
        return math.nan
    away = np.abs(points.estimate - coarse.estimate)[both] / points.residual_sd[both]
    order = min(shape.smoothness + 1, 3)
    return _ERROR_MARGIN * float(away.max()) / (2.0**order - 1.0)


def _trace(fits: Fits, estimator: str) -> float:
    leverage = fits.unit_leverages[estimator] * fits.level.first[0]
    return float(np.nansum(leverage))


def _in_axis(bandwidth: float, log: bool) -> float:
    return math.exp(bandwidth) if log else bandwidth


def _search_in_axis(found: Search, log: bool) -> Search:
    if not log:
        return found

    def factors(trail: Trail) -> Trail:
        low, high = trail.flat_zone
        return replace(
            trail, bandwidths=np.exp(trail.bandwidths), bandwidth=math.exp(trail.bandwidth),
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
    mean = finest.origin + finest.width * (used + 0.5 + finest.first[1, used] / finest.first[0, used])
    rows, _ = np.histogram(np.clip(mean, low, high), edges, weights=finest.count[used])
    x, y = counted.shown
    inside = np.isfinite(x) & np.isfinite(y) & ((x > 0.0) | (not log))
    x, y = x[inside], y[inside]
    x = np.log(x) if log else x
    inside = (x >= low) & (x <= high)
    x, y = x[inside], y[inside]
    if y.size:
        bottom, top = (float(q) for q in np.quantile(y, (0.002, 0.998)))
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
