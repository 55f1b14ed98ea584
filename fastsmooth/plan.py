"""What must be fixed before the first row is counted: range, bins, folds and runs, pilot."""

from __future__ import annotations

import math
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import asdict, dataclass, fields, replace
from functools import cached_property
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.axis import Axis
from fastsmooth.errors import InputError
from fastsmooth.source import Chunk, Columns, Source, Task

Floats = NDArray[np.float64]

BINS = 8192
FOLDS = 32
# Tables of all folds and of the tasks at work may take this much together.
MEMORY_CAP_BYTES = 256 << 20
_LONGEST_RUN_ROWS = 65_536
_PILOT_NODES = 256
_SAMPLE_TASKS = 16
_SAMPLE_ROWS = 4096
# From this many tasks on, each task meets only a few folds, which keeps merging cheap.
_TASKS_FOR_FEW_FOLDS = 16
_FEW_FOLDS = 4
# A window of a sixty-fourth of the range should meet a dozen runs; see `shorten_runs`.
_RUNS_PER_WINDOW = 12
_WINDOWS_PER_RANGE = 64


@dataclass(frozen=True)
class Plan:
    """Everything that tables must share to be added up; plain data.

    Attributes
    ----------
    columns : Columns
        Which columns play which part.
    axis : Axis
        What the floats of x mean.
    scale : str
        ``linear``, or ``log``: bins, widths and windows in log x.
    where : str or None
        Row filter.
    block : str or None
        What makes rows belong together, in words; None deals runs of rows to the folds.
    origin, width : float
        Left end of the first bin and width of the bins, on the scale.
    bins : int
        Number of bins.
    folds : int
        Number of folds.
    rows_per_run : int
        Consecutive rows of a task that go to one fold.
    folds_per_task : int
        Folds that the runs of one task go through in turn.
    reference : float
        A round number near the middle of y.
    pilot : tuple of float
        Rough curve: offsets subtracted from y in equal stretches of the range.

    Examples
    --------
    >>> plan = Plan.simple(low=0.0, high=10.0, bins=1024, folds=8)
    >>> plan.bin_of(0.0), plan.bin_of(10.0)
    (0, 1023)
    """

    columns: Columns
    axis: Axis
    scale: str
    where: str | None
    block: str | None
    origin: float
    width: float
    bins: int
    folds: int
    rows_per_run: int
    folds_per_task: int
    reference: float
    pilot: tuple[float, ...]

    @classmethod
    def simple(cls, low: float, high: float, bins: int = BINS, folds: int = FOLDS) -> Plan:
        """Return a plan for a number axis without a pilot."""
        return cls(
            columns=Columns("x", "y"),
            axis=Axis("number", "double", "", None, 0),
            scale="linear",
            where=None,
            block=None,
            origin=low,
            width=bin_width(low, high, bins),
            bins=bins,
            folds=folds,
            rows_per_run=_LONGEST_RUN_ROWS,
            folds_per_task=folds,
            reference=0.0,
            pilot=(0.0,),
        )

    @property
    def high(self) -> float:
        """Right end of the last bin, on the scale."""
        return self.origin + self.bins * self.width

    @cached_property
    def pilot_per_bin(self) -> Floats:
        """The pilot offset of every bin, (bins,)."""
        pilot = np.asarray(self.pilot)
        return pilot[np.arange(self.bins) * pilot.shape[0] // self.bins]

    def bin_of(self, value: float) -> int:
        """Return the bin that holds a value on the scale, clipped to the table."""
        t = (value - self.origin) * (1.0 / self.width)
        return int(min(max(t, 0.0), self.bins - 1.0))

    def fold_of_run(self, task_index: int, run: int) -> int:
        """Return the fold of a run of consecutive rows: neighbours never share one."""
        return (task_index * self.folds_per_task + run % self.folds_per_task) % self.folds

    def run_stretches(self, task_index: int, row: int, rows: int) -> list[tuple[int, int, int]]:
        """Fold, first and last row (exclusive) of the runs in a chunk that begins at a row."""
        # Plain integers: this is done for every chunk, and arrays of two items cost more.
        length = self.rows_per_run
        stretches = []
        start = 0
        while start < rows:
            run, within = divmod(row + start, length)
            stop = min(rows, start + length - within)
            stretches.append((self.fold_of_run(task_index, run), start, stop))
            start = stop
        return stretches

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        # Field by field: `asdict` would copy the pilot number by number.
        plain = {field.name: getattr(self, field.name) for field in fields(self)}
        plain["columns"] = asdict(self.columns)
        plain["axis"] = self.axis.to_dict()
        return plain

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Plan:
        """Build a plan from what `to_dict` returned."""
        columns = dict(plain["columns"])
        columns["extra"] = tuple(columns["extra"])
        return cls(
            **{
                **plain,
                "columns": Columns(**columns),
                "axis": Axis.from_dict(plain["axis"]),
                "pilot": tuple(plain["pilot"]),
            }
        )


class Sample(NamedTuple):
    """Some rows, in runs of consecutive rows spread over the data.

    Attributes
    ----------
    x, y : (rows,) float64
        Usable rows, x on the plan's scale.
    run : (rows,) int64
        Which run a row belongs to; rows of a run are in the file's own order.
    place : (rows,) int64
        Place among all rows of the run, the dropped ones counted.
    """

    x: Floats
    y: Floats
    run: NDArray[np.int64]
    place: NDArray[np.int64]

    def take(self, rows: NDArray[np.int64]) -> Sample:
        """Return some of the rows."""
        return Sample(self.x[rows], self.y[rows], self.run[rows], self.place[rows])


def bin_width(low: float, high: float, bins: int) -> float:
    """Return the bin width for which both ends of the range fall inside the bins."""
    # A hair wider than the range: the highest x must not land beyond the last bin.
    return (high - low) / bins * (1.0 + 2.0**-40)


def most_bins(folds: int, threads: int, slots: int) -> int:
    """Return the largest power of two of bins whose tables stay within the memory cap."""
    # The merged table, and its levels (laid out anew, twice over with the coarser ones), and a
    # few folds for each task at work or waiting.
    tables = 3 * folds + 3 * threads * _FEW_FOLDS
    return 1 << int(math.log2(MEMORY_CAP_BYTES / (8 * slots * tables)))


def draw_sample(source: Source, scale: str, threads: int = 1) -> Sample:
    """Read short runs of consecutive rows, spread evenly over the tasks.

    Parameters
    ----------
    source : Source
        Opened data.
    scale : str
        ``linear`` or ``log``.
    threads : int
        Tasks read at a time; the sample does not depend on it.

    Returns
    -------
    Sample
        Usable rows only.
    """
    tasks = source.tasks
    if not tasks:
        return Sample(np.empty(0), np.empty(0), np.empty(0, np.int64), np.empty(0, np.int64))
    chosen = np.unique(np.linspace(0, len(tasks) - 1, min(_SAMPLE_TASKS, len(tasks))).astype(int))
    # Few tasks: longer runs of each, so that a single file is sampled as deeply as a fleet.
    rows = _SAMPLE_ROWS * (_SAMPLE_TASKS // chosen.shape[0])

    def draw(index: int) -> tuple[Floats, Floats, NDArray[np.int64]] | None:
        # A chunk may be empty after the filter; a few more are tried.
        for chunk in _first_chunks(source, tasks[index], rows):
            x, y, usable = on_scale(chunk.x, chunk.y, scale)
            kept = np.flatnonzero(usable)
            if kept.size:
                place = kept if chunk.positions is None else chunk.positions[kept]
                return x[kept], y[kept], place
        return None

    with ThreadPoolExecutor(threads) as pool:
        drawn = [one for one in pool.map(draw, chosen.tolist()) if one is not None]
    if not drawn:
        return Sample(np.empty(0), np.empty(0), np.empty(0, np.int64), np.empty(0, np.int64))
    x, y, place = (np.concatenate(parts) for parts in zip(*drawn, strict=True))
    run = np.repeat(np.arange(len(drawn)), [one[0].size for one in drawn])
    return Sample(x, y, run, place)


def _first_chunks(source: Source, task: Task, rows: int) -> Iterator[Chunk]:
    for tried, chunk in enumerate(source.chunks(task, rows)):
        yield chunk
        if tried == 3:
            return


def on_scale(x: Floats, y: Floats, scale: str) -> tuple[Floats, Floats, NDArray[np.bool_]]:
    """Return x on the scale, y, and which rows can be used."""
    usable = np.isfinite(x) & np.isfinite(y)
    if scale == "log":
        usable &= x > 0.0
        x = np.log(x, where=usable, out=np.zeros(x.shape[0]))
    return x, y, usable


def find_range(source: Source, scale: str, threads: int) -> tuple[float, float]:
    """Read all x for its lowest and highest usable value, on the scale.

    Raises
    ------
    InputError
        No row can be used.
    """

    def extent(task: Task, chunks: Iterator[Chunk]) -> tuple[float, float]:
        low, high = math.inf, -math.inf
        for chunk in chunks:
            x, _, usable = on_scale(chunk.x, chunk.y, scale)
            if usable.any():
                low = min(low, float(x[usable].min()))
                high = max(high, float(x[usable].max()))
        return low, high

    low, high = math.inf, -math.inf
    for one_low, one_high in source.map_tasks(extent, threads):
        low, high = min(low, one_low), max(high, one_high)
    if low > high:
        raise no_usable_rows()
    return low, high


def no_usable_rows() -> InputError:
    """Return the refusal of data without a single usable row."""
    return InputError(
        "DATA",
        "hold rows with finite x and y",
        "every row was filtered or refused",
        "check --where, --range and the columns",
    )


def user_range(source: Source, given: tuple[object, object], scale: str) -> tuple[float, float]:
    """Turn the two ends that a user gave into floats on the scale.

    Raises
    ------
    InputError
        The ends are not ascending, or not positive on a log scale.
    """
    low, high = (source.axis.from_user(end, "--range") for end in given)
    if not low < high:
        raise InputError(
            "--range", "ascend", f"{given[0]} to {given[1]} does not", "give the lower end first"
        )
    if scale == "log":
        if low <= 0.0:
            raise InputError(
                "--range", "be positive with --scale log", f"it begins at {given[0]}", "raise it"
            )
        low, high = math.log(low), math.log(high)
    if not _can_be_cut(low, high, BINS):
        raise InputError(
            "--range", "span a width that can be cut into bins",
            f"{given[0]} to {given[1]} is too {'wide' if high - low > 1.0 else 'narrow'}",
            "leave it out, or give values that occur",
        )  # fmt: skip
    return low, high


def _can_be_cut(low: float, high: float, bins: int) -> bool:
    width = bin_width(low, high, bins)
    return high > low and 0.0 < width < math.inf and math.isfinite(1.0 / width)


def check_scale(source: Source, scale: str) -> None:
    """Refuse a scale that does not suit the axis.

    Raises
    ------
    InputError
        The scale is unknown, or log on a time axis.
    """
    if scale not in ("linear", "log"):
        raise InputError("--scale", "be linear or log", f"it is '{scale}'", "choose one")
    if scale == "log" and source.axis.kind != "number":
        raise InputError(
            "--scale",
            "be linear for times",
            f"'{source.columns.x}' holds {source.axis.kind}s",
            "leave it out",
        )


def make_plan(
    source: Source,
    sample: Sample,
    bounds: tuple[float, float],
    *,
    scale: str,
    block: str | None = None,
    bins: int = BINS,
    folds: int = FOLDS,
) -> Plan:
    """Plan one pass over the data.

    Parameters
    ----------
    source : Source
        Opened data.
    sample : Sample
        Some of its rows.
    bounds : (float, float)
        Range of x, on the scale.
    scale : str
        ``linear`` or ``log``.
    block : str or None
        What makes rows belong together, in words.
    bins, folds : int
        Number of bins and folds.

    Raises
    ------
    InputError
        x is constant.
    """
    low, high = bounds
    width = bin_width(low, high, bins)
    if high > low and math.isinf(width):
        raise InputError(
            "--x", "lie within a range of 1e308",
            f"'{source.columns.x}' lies between {source.axis.label(low)} and "
            f"{source.axis.label(high)}",
            "leave the far values out with --range",
        )  # fmt: skip
    if not _can_be_cut(low, high, bins):
        raise InputError(
            "--x",
            "name a column that varies",
            f"'{source.columns.x}' lies between {source.axis.label(_off_scale(low, scale))} and "
            f"{source.axis.label(_off_scale(high, scale))} everywhere",
            "name another column, or check --where and --range",
        )
    reference, pilot = pilot_of(sample, low, high)
    tasks = len(source.tasks)
    rows = source.rows_expected
    if rows is None:
        # A stream of unknown length: the sample shows how short it may be.
        run = min(_LONGEST_RUN_ROWS, max(1, sample.x.size // (4 * folds)))
    else:
        run = min(_LONGEST_RUN_ROWS, max(1, rows // (4 * folds)))
    few = tasks >= _TASKS_FOR_FEW_FOLDS and folds > _FEW_FOLDS
    plan = Plan(
        source.columns, source.axis, scale, source.where, block, low, width, bins, folds,
        run, _FEW_FOLDS if few else folds, reference, pilot,
    )  # fmt: skip
    return _shorten_runs(plan, sample)


def _off_scale(value: float, scale: str) -> float:
    return math.exp(value) if scale == "log" else value


def pilot_of(sample: Sample, low: float, high: float) -> tuple[float, tuple[float, ...]]:
    """Median of y in equal stretches of x; stretches without rows take the nearest one's."""
    if not sample.x.size:
        return 0.0, (0.0,)
    reference = float(np.median(sample.y))
    # Clipped as floats: a far outlier of x has no integer cell.
    cell = np.clip((sample.x - low) / (high - low) * _PILOT_NODES, 0.0, _PILOT_NODES - 1.0)
    cell = cell.astype(int)
    y = sample.y[np.lexsort((sample.y, cell))]
    counts = np.bincount(cell, minlength=_PILOT_NODES)
    first = np.cumsum(counts) - counts
    medians = np.full(_PILOT_NODES, np.nan)
    met = counts > 0
    # The two middle ones of an even number, twice the one of an odd number.
    middle = first[met] + (counts[met] - 1) // 2, first[met] + counts[met] // 2
    medians[met] = 0.5 * (y[middle[0]] + y[middle[1]])
    known = np.flatnonzero(np.isfinite(medians))
    nodes = np.arange(_PILOT_NODES)
    right = np.clip(np.searchsorted(known, nodes), 0, known.size - 1)
    left = np.maximum(right - 1, 0)
    nearer = np.abs(known[left] - nodes) <= np.abs(known[right] - nodes)
    nearest = np.where(nearer, known[left], known[right])
    return reference, tuple(medians[nearest].tolist())


def _shorten_runs(plan: Plan, sample: Sample) -> Plan:
    """Shorten runs where x follows the row order, until narrow windows meet a dozen of them.

    With x in row order a long run is a stretch of x of its own: leaving it out would ask the
    others to extrapolate. The sample's runs show how far x wanders in so many rows.
    """
    spans = []
    for run in np.unique(sample.run):
        x = sample.x[sample.run == run]
        if x.size >= 2:
            spans.append(
                (float(x.max() - x.min()) / (x.size - 1), float(np.abs(np.diff(x)).mean()))
            )
    if not spans:
        return plan
    # Drift: x moves one way. It is telling only if most of the movement is net movement.
    net, total = (float(np.median([span[i] for span in spans])) for i in (0, 1))
    if total <= 0.0 or net < 0.5 * total:
        return plan
    window = (plan.high - plan.origin) / _WINDOWS_PER_RANGE
    longest = max(1, int(window / net / _RUNS_PER_WINDOW))
    if longest >= plan.rows_per_run:
        return plan
    return replace(plan, rows_per_run=longest, folds_per_task=plan.folds)
