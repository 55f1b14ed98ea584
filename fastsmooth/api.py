"""The jobs: make a curve, search a bandwidth. The command line calls these and nothing else."""

from __future__ import annotations

import math
from dataclasses import replace
from functools import partial
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from fastsmooth.assemble import Chosen, assemble, middle_of
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.curve import Curve
from fastsmooth.errors import InputError
from fastsmooth.exact import ExactScoring, check_memory, choose_engine, gather_rows
from fastsmooth.kernels.shapes import SHAPES
from fastsmooth.limits import add_limits
from fastsmooth.nearest import Neighbours
from fastsmooth.passes import (
    Counted,
    Counting,
    Progress,
    bins_for,
    count_finer,
    count_pass,
    count_rows,
    silent,
)
from fastsmooth.reweighted import Reweighted
from fastsmooth.robust import (
    ENOUGH,
    NOT_WEIGHED,
    ROUNDS,
    core_of,
    farthest_move,
    robust_facts,
)
from fastsmooth.robust import POINTS as ROBUST_POINTS
from fastsmooth.search import search_neighbours, search_table
from fastsmooth.settings import NEAREST, Band, Reading, Smoothing, check_text
from fastsmooth.source import Columns, Source, open_source
from fastsmooth.store.disk import is_store
from fastsmooth.trail import Search

Floats = NDArray[np.float64]
T = TypeVar("T")

_MOST_SEARCHES = 3
# A given width must not vanish beside the range, and must be a finite number of bins.
_NARROWEST_RANGES = 1e-12
_WIDEST_BINS = 1e307


def make_curve(
    data: Any,
    x: str | None = None,
    y: str | None = None,
    *,
    weight: str | None = None,
    count: str | None = None,
    reading: Reading | None = None,
    smoothing: Smoothing | None = None,
    band: Band | None = None,
    progress: Progress = silent,
    counting: Counting = count_pass,
) -> Curve:
    """Make the reference curve of y as a function of x.

    Parameters
    ----------
    data : path, list of paths, dict of arrays, tuple of arrays, or frame
        See `fastsmooth.source.open_source`; or the folder of a store.
    x, y : str
        Columns; a store knows its own.
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
    counting : callable
        Reads all rows into a bin table: threads of this process, or the workers of a cluster
        (`fastsmooth.engines.dask.counting`).

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
    reading = settings_or_default("reading", reading, Reading)
    smoothing = settings_or_default("smoothing", smoothing, Smoothing)
    band = settings_or_default("band", band, Band)
    if is_store(data):
        from fastsmooth.store.curves import curve_of_store
        from fastsmooth.store.settings import StoreSettings

        asked = StoreSettings(x, y, weight, count)
        return curve_of_store(data, asked, reading, smoothing, band, progress)
    x, y = check_columns(x, y, weight, count)
    check_no_last(reading)
    criterion_of(reading, smoothing)
    check_band(smoothing, band)
    if smoothing.estimator == NEAREST and weight is not None:
        raise InputError(
            "--weight", f"be left out with --estimator {NEAREST}",
            "its mean is over so many rows, all alike", "give --count, or take another estimator",
        )  # fmt: skip
    if smoothing.robust and weight is not None:
        raise InputError(
            "--weight", "be left out with --robust", "it is given",
            "rows are weighed by how far they lie from the curve; give --count, or leave one out",
        )  # fmt: skip
    block = None if reading.blocks is None else reading.blocks.column
    columns = Columns(x, y, weight, count, block=block)
    with open_source(
        data, columns, where=reading.where, timeout_seconds=reading.timeout_seconds
    ) as source:
        fixed = own_bandwidth(source, reading, smoothing)
        places = own_points(source, reading, band)
        chosen = count_and_search(source, reading, smoothing, fixed, places, progress, counting)
        progress("fitting", 0, None)
        made = assemble(source, chosen, reading, smoothing, band)
        return add_limits(source, made, chosen.shape, reading, band.limits, progress)


def search_bandwidth(
    data: Any,
    x: str | None = None,
    y: str | None = None,
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


def check_no_last(reading: Reading) -> None:
    """Refuse a span of time for data that are no store."""
    if reading.last is not None:
        raise InputError(
            "--last", "come with a store in place of DATA", "DATA are no store",
            "choose rows with --where, or make a store with 'fastsmooth update'",
        )  # fmt: skip


def check_columns(x: Any, y: Any, weight: object, count: object) -> tuple[str, str]:
    """Refuse names of columns that are no text; return x and y."""
    for argument, column in {"--x": x, "--y": y}.items():
        check_text(argument, column, "name a column of DATA", "name one")
    for argument, own in {"--weight": weight, "--count": count}.items():
        if own is not None:
            check_text(argument, own, "name a column of DATA")
    return x, y


def settings_or_default(argument: str, given: T | None, kind: type[T]) -> T:
    """Return the settings given, or the defaults; refuse another group's."""
    if given is None:
        return kind()
    if not isinstance(given, kind):
        name = kind.__name__
        raise InputError(
            f"{argument}=", f"be a {name}", f"it is {given!r}", f"write {argument}={name}(...)"
        )
    return given


def criterion_of(reading: Reading, smoothing: Smoothing) -> str:
    """Return the criterion that chooses the width; refuse one that the blocks do not suit."""
    if smoothing.criterion == "leave-block-out" and reading.block is None:
        raise InputError(
            "--criterion leave-block-out", "come with --block", "no block is given",
            "name what makes rows belong together, as in --block logged_at:day",
        )  # fmt: skip
    if smoothing.criterion is not None:
        return smoothing.criterion
    return "leave-one-out" if reading.block is None else "leave-block-out"


def check_band(smoothing: Smoothing, band: Band) -> None:
    """Refuse a band for the whole curve with a kernel that jumps: its weights turn without end."""
    from fastsmooth.kernels.shapes import SHAPES

    nearest = smoothing.estimator == NEAREST
    if nearest and (band.landmarks or band.crossings):
        raise InputError(
            "--landmarks and --crossing", f"be left out with --estimator {NEAREST}",
            "its curve is made of steps", "take another estimator",
        )  # fmt: skip
    if nearest and band.kind == "simultaneous":
        raise InputError(
            "--band simultaneous", f"be left out with --estimator {NEAREST}",
            "its curve is made of steps", "take another estimator",
        )  # fmt: skip
    if band.kind == "simultaneous" and SHAPES[smoothing.kernel].smoothness == 0:
        raise InputError(
            "--band simultaneous", "come with a kernel without a jump",
            f"--kernel is {smoothing.kernel}", "leave --kernel out",
        )  # fmt: skip


def own_bandwidth(source: Source, reading: Reading, smoothing: Smoothing) -> float | None:
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


def check_width(width: float, table: BinTable) -> None:
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


def own_points(source: Source, reading: Reading, band: Band) -> Floats | None:
    """The caller's points on the plan's scale, ascending."""
    if band.at is None:
        return None
    places = np.sort([source.axis.from_user(one, "--at") for one in band.at])
    if reading.scale == "log":
        if not places[0] > 0.0:
            raise InputError(
                "--at", "be positive with --scale log", f"it holds {places[0]:g}",
                "leave such points out",
            )  # fmt: skip
        return np.log(places)
    return places


def count_and_search(
    source: Source,
    reading: Reading,
    smoothing: Smoothing,
    fixed: float | None,
    places: Floats | None,
    progress: Progress,
    counting: Counting = count_pass,
) -> Chosen:
    """Read and search; read again with finer bins or new weights where they are asked for."""
    counted = count_rows(source, reading, progress, counting)
    if smoothing.robust:
        return _search_in_rounds(source, counted, reading, smoothing, fixed, places, progress)
    return search_counted(source, counted, reading, smoothing, fixed, places, progress, counting)


def search_counted(
    source: Source,
    counted: Counted,
    reading: Reading,
    smoothing: Smoothing,
    fixed: float | None,
    places: Floats | None,
    progress: Progress,
    counting: Counting = count_pass,
) -> Chosen:
    """Search the rows counted; read again with finer bins while the chosen width asks for them."""
    shape = SHAPES[smoothing.kernel]
    search = partial(
        search_table, criterion=criterion_of(reading, smoothing),
        by_block=reading.block is not None, widths=smoothing.widths, threads=reading.threads,
    )  # fmt: skip
    if smoothing.estimator == NEAREST:
        return _search_neighbours(source, counted, reading, smoothing, places, progress)
    engine, reason = "binned", "rows are weighed in passes"
    if not smoothing.robust:
        engine, reason = choose_engine(
            smoothing.engine, smoothing.kernel, counted.table, smoothing.memory_gigabytes
        )
    fine = shape.fewest_bins_per_bandwidth
    for tried in range(1, _MOST_SEARCHES + 1):
        progress("searching", 0, None)
        pyramid = Pyramid(counted.table)
        found = search(counted.table, pyramid, shape)
        if fixed is not None:
            check_width(fixed, counted.table)
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
        counted = count_finer(source, counted, reading, bins, progress, counting)
    if engine == "binned":
        return Chosen(counted, pyramid, found, shape, bandwidth, places, engine_reason=reason)
    rows = gather_rows(source, counted.table, reading, progress)
    progress("searching", 0, None)
    scoring = ExactScoring(counted.table, pyramid, shape, rows)
    found = search(counted.table, pyramid, shape, scoring=scoring)
    bandwidth = fixed or found.trails[smoothing.estimator].bandwidth
    return Chosen(counted, pyramid, found, shape, bandwidth, places, rows, reason)


def _search_in_rounds(
    source: Source,
    counted: Counted,
    reading: Reading,
    smoothing: Smoothing,
    fixed: float | None,
    places: Floats | None,
    progress: Progress,
) -> Chosen:
    """Search, weigh the rows by how far they lie from the curve, and search again; in passes."""
    from fastsmooth.lookup import Lookup

    sample = counted.sample
    chosen = search_counted(source, counted, reading, smoothing, fixed, places, progress)
    low, high = chosen.counted.table.extent.tolist()
    core = core_of(sample, np.linspace(low, high, ROBUST_POINTS))
    if core is None:
        return replace(chosen, robust=dict(NOT_WEIGHED))
    log = reading.scale == "log"
    rounds, moved = 0, math.inf
    while rounds < ROUNDS and moved > ENOUGH:
        rounds += 1
        weighed = Reweighted(source, Lookup([core.points(log)], log))
        table = chosen.counted.table
        counted = count_finer(weighed, chosen.counted, reading, table.plan.bins, progress)
        chosen = search_counted(weighed, counted, reading, smoothing, fixed, places, progress)
        middle = middle_of(
            chosen.pyramid, chosen.shape, chosen.bandwidth, smoothing.estimator, core.x
        )
        before, core = core, core_of(sample, core.x, middle) or core
        moved = farthest_move(before, core)
    counts = (weighed.rows[0], weighed.down[0], weighed.ignored[0])
    return replace(chosen, core=core, robust=robust_facts(core, counts, rounds, moved))


def _search_neighbours(
    source: Source,
    counted: Counted,
    reading: Reading,
    smoothing: Smoothing,
    places: Floats | None,
    progress: Progress,
) -> Chosen:
    """Read the rows into memory and search the number of neighbours."""
    check_memory(
        f"--estimator {NEAREST}", "another estimator", counted.table, smoothing.memory_gigabytes
    )
    near = Neighbours.of(gather_rows(source, counted.table, reading, progress))
    if smoothing.neighbours is not None and smoothing.neighbours >= near.rows.total:
        raise InputError(
            "--neighbours", f"be below the number of rows, {near.rows.total:,.0f}",
            f"it is {smoothing.neighbours:,}", "lower it, or leave it out",
        )  # fmt: skip
    progress("searching", 0, None)
    found = search_neighbours(
        near, criterion=criterion_of(reading, smoothing), by_block=reading.block is not None,
        widths=smoothing.widths, threads=reading.threads,
    )  # fmt: skip
    k = float(smoothing.neighbours or found.trails[NEAREST].bandwidth)
    pyramid = Pyramid(counted.table)
    return Chosen(counted, pyramid, found, SHAPES["uniform"], k, places, near.rows, near=near)
