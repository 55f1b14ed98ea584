"""The jobs: make a curve, search a bandwidth. The command line calls these and nothing else."""

from __future__ import annotations

import math
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from fastsmooth.assemble import Chosen, assemble
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.curve import Curve
from fastsmooth.errors import InputError
from fastsmooth.kernels.shapes import SHAPES
from fastsmooth.passes import Progress, bins_for, count_finer, count_rows, silent
from fastsmooth.search import search_table
from fastsmooth.settings import Band, Reading, Smoothing, check_text
from fastsmooth.source import Columns, Source, open_source
from fastsmooth.trail import Search

Floats = NDArray[np.float64]
T = TypeVar("T")

_MOST_SEARCHES = 3
# A given width must not vanish beside the range, and must be a finite number of bins.
_NARROWEST_RANGES = 1e-12
_WIDEST_BINS = 1e307


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
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, 2000)
    >>> power_kw = 20.0 + 0.04 * wet_bulb_c**2 + rng.normal(0.0, 0.1, 2000)
    >>> readings = {"wet_bulb_c": wet_bulb_c, "power_kw": power_kw}
    >>> made = make_curve(readings, "wet_bulb_c", "power_kw")
    >>> round(float(made.at(10.0)[0]), 1)
    24.0
    """
    reading = _group("reading", reading, Reading)
    smoothing = _group("smoothing", smoothing, Smoothing)
    band = _group("band", band, Band)
    for argument, column in {"--x": x, "--y": y}.items():
        check_text(argument, column, "name a column of DATA", "name one")
    for argument, own in {"--weight": weight, "--count": count}.items():
        if own is not None:
            check_text(argument, own, "name a column of DATA")
    _criterion(reading, smoothing)
    _check_band(smoothing, band)
    block = None if reading.blocks is None else reading.blocks.column
    columns = Columns(x, y, weight, count, block=block)
    with open_source(data, columns, where=reading.where) as source:
        fixed = _own_bandwidth(source, reading, smoothing)
        places = _own_points(source, reading, band)
        chosen = _count_and_search(source, reading, smoothing, fixed, places, progress)
        progress("fitting", 0, None)
        return assemble(source, chosen, reading, smoothing, band)


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
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, 2000)
    >>> power_kw = 20.0 + 3.0 * np.sin(wet_bulb_c) + rng.normal(0.0, 0.5, 2000)
    >>> readings = {"wet_bulb_c": wet_bulb_c, "power_kw": power_kw}
    >>> found = search_bandwidth(readings, "wet_bulb_c", "power_kw")
    >>> 0.3 < found.trails["local-linear"].bandwidth < 3.0
    True
    """
    return make_curve(
        data, x, y, weight=weight, count=count, reading=reading, smoothing=smoothing,
        progress=progress,
    ).search  # fmt: skip


def _group(argument: str, given: T | None, kind: type[T]) -> T:
    """Return the settings given, or the defaults; refuse another group's."""
    if given is None:
        return kind()
    if not isinstance(given, kind):
        name = kind.__name__
        raise InputError(
            f"{argument}=", f"be a {name}", f"it is {given!r}", f"write {argument}={name}(...)"
        )
    return given


def _criterion(reading: Reading, smoothing: Smoothing) -> str:
    if smoothing.criterion == "leave-block-out" and reading.block is None:
        raise InputError(
            "--criterion leave-block-out", "come with --block", "no block is given",
            "name what makes rows belong together, as in --block logged_at:day",
        )  # fmt: skip
    if smoothing.criterion is not None:
        return smoothing.criterion
    return "leave-one-out" if reading.block is None else "leave-block-out"


def _check_band(smoothing: Smoothing, band: Band) -> None:
    """Refuse a band for the whole curve with a kernel that jumps: its weights turn without end."""
    from fastsmooth.kernels.shapes import SHAPES

    if band.kind == "simultaneous" and SHAPES[smoothing.kernel].smoothness == 0:
        raise InputError(
            "--band simultaneous", "come with a kernel without a jump",
            f"--kernel is {smoothing.kernel}", "leave --kernel out",
        )  # fmt: skip


def _own_bandwidth(source: Source, reading: Reading, smoothing: Smoothing) -> float | None:
    """The caller's bandwidth on the plan's scale."""
    if smoothing.bandwidth is None:
        return None
    width = source.axis.width_from_user(smoothing.bandwidth, "--bandwidth")
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


def _check_width(width: float, table: BinTable) -> None:
    """Refuse a width that no arithmetic resolves; one far beyond the range fits a line."""
    low, high = table.extent.tolist()
    received = ""
    if width < _NARROWEST_RANGES * (high - low):
        received = "it is below 1e-12 of it"
    if not width / table.plan.width < _WIDEST_BINS:
        received = "it is too wide to be counted in bins"
    if received:
        raise InputError(
            "--bandwidth", "be comparable with the range of x", received,
            "leave it out, or give a width that a picture could show",
        )  # fmt: skip


def _own_points(source: Source, reading: Reading, band: Band) -> Floats | None:
    """The caller's points on the plan's scale, ascending."""
    if band.at is None:
        return None
    places = np.sort([source.axis.from_user(one, "--at") for one in band.at])
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
    places: Floats | None,
    progress: Progress,
) -> Chosen:
    """Read and search; read again with finer bins while the chosen width asks for them."""
    counted = count_rows(source, reading, progress)
    shape = SHAPES[smoothing.kernel]
    fine = shape.fewest_bins_per_bandwidth
    for tried in range(1, _MOST_SEARCHES + 1):
        progress("searching", 0, None)
        pyramid = Pyramid(counted.table)
        found = search_table(
            counted.table, pyramid, shape, criterion=_criterion(reading, smoothing),
            by_block=reading.block is not None, widths=smoothing.widths,
            threads=reading.threads,
        )  # fmt: skip
        if fixed is not None:
            _check_width(fixed, counted.table)
        bandwidth = fixed or found.trails[smoothing.estimator].bandwidth
        plan = counted.table.plan
        if bandwidth >= fine * plan.width or tried == _MOST_SEARCHES:
            break
        # A width at the very end of what these bins resolve may want to go much further.
        ahead = 4.0 if found.trails[smoothing.estimator].at_low_end and fixed is None else 1.0
        bins = bins_for(counted.table, bandwidth, ahead * shape.bins_per_bandwidth, reading.threads)
        low, high = counted.table.extent.tolist()
        if (high - low) / bins > 0.8 * plan.width:
            break
        counted = count_finer(source, counted, reading, bins, progress)
    return Chosen(counted, pyramid, found, shape, bandwidth, places)
