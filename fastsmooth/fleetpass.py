"""Passes over the rows of many units: memory planned first, then one table for each unit."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable
from fastsmooth.blocks import Dealer
from fastsmooth.errors import InputError
from fastsmooth.grouping import Grouping, Key, Keys
from fastsmooth.passes import Counted, Progress, count_rows, silent, task_groups
from fastsmooth.plan import BINS, Plan, Sample, bin_width, on_scale, pilot_of
from fastsmooth.settings import Reading
from fastsmooth.source import Chunk, Source, Task
from fastsmooth.unitsums import CountedUnits, PlanFor, TooManyUnits, UnitSums, Ways

Floats = NDArray[np.float64]

# Tables of all units, folds and the tasks at work may take this much together.
MEMORY_CAP_BYTES = 1 << 30
# While the bins of all units in one fold fit the processor's cache, a row costs half.
CACHE_BYTES = 4 << 20
_WORKING_BINS = 2048
_FEWEST_BINS = 32
# With fewer bins than this, half the folds are worth more.
_ENOUGH_BINS = 256
_FEWEST_FOLDS = 8
# Windows that meet fewer than twelve folds of blocks are thin.
_FEWEST_FOLDS_OF_BLOCKS = 16
_LONGEST_RUN_ROWS = 65_536
_ALL_ROWS = 1 << 60
_FOLDS_OF_TASK = 4
_TASKS_FOR_FEW_FOLDS = 16
_RUNS_PER_FOLD = 4
# Pools at work or waiting while tasks are counted; more threads than they allow stay idle.
_POOLS_AT_WORK = 4
# Units may be more than the sample showed.
_MARGIN = 1.25
_SAMPLE_TASKS = 16
_SAMPLE_ROWS = 4096
_ROWS_FOR_PILOT = 64
# Where one task holds this share of all units, every task does.
_SHARE_IN_EVERY_TASK = 0.8
# Rows of each unit kept as they are, for cautions, and of all units together.
_KEPT_ROWS = 8192
_KEPT_ROWS_OF_ALL = 2_000_000
_SHOWN_ROWS = 200_000


@dataclass(frozen=True)
class UnitSample:
    """Some rows of all units, in runs of consecutive rows of all.

    Attributes
    ----------
    rows : Sample
        Usable rows.
    code : (rows,) int64
        Unit of each.
    keys : list of tuple
        Key of each unit.
    units : int
        Estimated number of units in the data.
    units_per_task : float
        Mean number of units met in one task's rows.
    """

    rows: Sample
    code: NDArray[np.int64]
    keys: list[Key]
    units: int
    units_per_task: float

    def of(self, number: int) -> Sample:
        """Return the rows of one unit."""
        return self.rows.take(np.flatnonzero(self.code == number))


def draw_units(source: Source, grouping: Grouping, scale: str, threads: int = 1) -> UnitSample:
    """Read short runs of consecutive rows, spread evenly over the tasks, with their units.

    Parameters
    ----------
    source : Source
        Opened data.
    grouping : Grouping
        What tells units apart.
    scale : str
        ``linear`` or ``log``.
    threads : int
        Tasks read at a time; the sample does not depend on it.
    """
    tasks = source.tasks
    chosen = np.unique(np.linspace(0, len(tasks) - 1, min(_SAMPLE_TASKS, len(tasks))).astype(int))
    rows = _SAMPLE_ROWS * (_SAMPLE_TASKS // max(1, chosen.shape[0]))

    def draw(index: int) -> Chunk | None:
        # A chunk may be empty after the filter; a few more are tried.
        for tried, chunk in enumerate(source.chunks(tasks[index], rows)):
            if chunk.x.size:
                return chunk
            if tried == 3:
                break
        return None

    with ThreadPoolExecutor(threads) as pool:
        chunks = [one for one in pool.map(draw, chosen.tolist()) if one is not None]
    keys = Keys(grouping)
    parts = [(np.empty(0), np.empty(0), *(np.empty(0, np.int64) for _ in range(3)))]
    # Row groups that hold one unit alone tell so unread.
    told = [source.constant_units(task) for task in tasks]
    untold = sum(one is None for one in told) - sum(told[index] is None for index in chosen)
    held, known = [], []
    for run, chunk in enumerate(chunks):
        code = keys.codes(chunk.units).astype(np.int64)
        held.append(_species(code))
        known.append(len(keys.keys))
        x, y, usable = on_scale(chunk.x, chunk.y, scale)
        kept = np.flatnonzero(usable)
        place = kept if chunk.positions is None else chunk.positions[kept]
        parts.append((x[kept], y[kept], np.full(kept.size, run), place, code[kept]))
    x, y, run_of, places, codes = (np.concatenate(column) for column in zip(*parts, strict=True))
    units, per_task = len(keys.keys), 1.0
    if held:
        per_task, seen = float(np.mean(held)), _species(codes)
        if per_task < _SHARE_IN_EVERY_TASK * seen:
            # Tasks differ: what the later half of those sampled added, the others may add too.
            half = len(held) // 2
            later = (known[-1] - known[half - 1]) / (len(held) - half) if half else known[-1]
            seen = units + later * untold
        for arrays in told:
            if arrays is not None:
                keys.codes(arrays)
        units = max(len(keys.keys), math.ceil(seen))
    return UnitSample(Sample(x, y, run_of, places), codes, keys.keys, units, per_task)


def _species(code: NDArray[np.int64]) -> float:
    """Estimate how many units there are from some rows (Chao 1984, Scand. J. Statist. 11:265).

    Units met once, f1, and twice, f2, tell how many were not met: f1 (f1 - 1) / (2 (f2 + 1)).
    """
    counts = np.bincount(code)
    once, twice = np.count_nonzero(counts == 1), np.count_nonzero(counts == 2)
    return float(np.count_nonzero(counts) + once * (once - 1) / (2.0 * (twice + 1)))


@dataclass(frozen=True)
class Layout:
    """How the rows of many units are laid out in memory.

    Attributes
    ----------
    units : int
        Units for which there is room.
    bins : int
        Bins of each unit.
    folds : int
        Folds.
    folds_per_task : int
        Folds that the runs of a unit in one task go through; 1: each task has one fold.
    rows_per_run : int
        Consecutive rows of a unit in a task that go to one fold.
    workers : int
        Tasks that may be counted at a time.
    """

    units: int
    bins: int
    folds: int
    folds_per_task: int
    rows_per_run: int
    workers: int


def lay_out(
    plan: Plan,
    units: int,
    units_per_task: float,
    tasks: int,
    rows: int,
    threads: int,
    likely: int = _WORKING_BINS,
) -> Layout:
    """Decide on bins, folds and runs for many units, within the memory cap.

    Where every task holds rows of most units and there are tasks enough, each task is a fold of
    its own (of all units): no two threads then share sums, and one fold's bins stay in the cache.
    Otherwise a unit's own rows are dealt to folds in runs, or blocks are.

    Parameters
    ----------
    plan : Plan
        The plan for all units together.
    units : int
        Number of units for which there shall be room.
    units_per_task : float
        How many of them one task holds.
    tasks, rows : int
        Tasks and rows of the data.
    threads : int
        Threads at hand; bins and folds do not depend on it.
    likely : int
        Bins that a typical unit will ask for.

    Raises
    ------
    InputError
        Even the coarsest bins would take more memory than the cap.
    """
    slots = 16 if plan.columns.weight is not None else 8
    by_block = plan.block is not None
    # A unit's own share of all tasks: in how many there are rows of it.
    tasks_per_unit = max(1.0, min(tasks, tasks * units_per_task / units))
    # The plan has shortened runs where x follows the row order: a task is a stretch of x then.
    ordered = plan.rows_per_run < min(_LONGEST_RUN_ROWS, max(1, rows // (4 * plan.folds)))
    fewest = min(plan.folds, _FEWEST_FOLDS_OF_BLOCKS if by_block else _FEWEST_FOLDS)
    folds = plan.folds
    apart = not by_block and not ordered and tasks_per_unit >= _FEWEST_FOLDS_OF_BLOCKS
    if apart:
        folds = min(folds, 1 << int(math.log2(tasks_per_unit)))
    lane = 8.0 * slots
    while True:
        per_task = folds
        if apart:
            per_task = 1
        elif not by_block and tasks_per_unit >= _TASKS_FOR_FEW_FOLDS and folds > _FOLDS_OF_TASK:
            per_task = _FOLDS_OF_TASK
        at_work = 0.0 if apart else min(units_per_task, units) * per_task
        fitting = MEMORY_CAP_BYTES / (lane * (units * folds + _POOLS_AT_WORK * at_work))
        if fitting >= _ENOUGH_BINS or folds // 2 < fewest:
            break
        folds //= 2
    if fitting < _ENOUGH_BINS:
        # One thread at work is better than coarser bins.
        fitting = MEMORY_CAP_BYTES / (lane * (units * folds + at_work))
    if fitting < _FEWEST_BINS:
        raise InputError(
            "--by", "tell fewer units apart",
            f"there may be {units:,}, too many for {MEMORY_CAP_BYTES >> 30} GiB of memory",
            "leave out a column, or make some units at a time with --where",
        )  # fmt: skip
    at_once = min(units, units_per_task) * per_task
    working = max(likely, _power_below(CACHE_BYTES / (lane * at_once)))
    bins = min(BINS, working, _power_below(fitting))
    run = _ALL_ROWS
    if not apart:
        run = min(_LONGEST_RUN_ROWS, max(1, rows // (units * _RUNS_PER_FOLD * folds)))
        if ordered:
            run = max(1, min(run, int(plan.rows_per_run / units_per_task)))
            per_task = folds
    free = MEMORY_CAP_BYTES - lane * bins * units * folds
    pool = lane * bins * min(units_per_task, units) * per_task
    workers = threads if apart else max(1, min(threads, int(free / (2.0 * pool))))
    return Layout(units, bins, folds, per_task, run, workers)


def _power_below(number: float) -> int:
    return 1 << max(0, int(math.log2(max(number, 1.0))))


def count_units(
    source: Source,
    base: Plan,
    plan_for: PlanFor,
    reading: Reading,
    grouping: Grouping,
    progress: Progress = silent,
    *,
    most_units: int | None = None,
    room: int = 0,
    units_per_task: float = 1.0,
    sampled_rows: int = 1,
    pooled: bool = False,
) -> CountedUnits:
    """Read all rows once into one table for each unit.

    A unit's table has the same bits as `fastsmooth.passes.count_pass` gives for its rows alone
    with its plan, for any number of threads.

    Parameters
    ----------
    source : Source
        Opened data, with the grouping's columns as `units`.
    base : Plan
        What the plans of all units share: folds, runs, scale, columns, block.
    plan_for : callable
        Takes a key and gives the unit's plan, or None to leave its rows out. It is called from
        several threads, several times for a key.
    reading : Reading
        Block and threads.
    grouping : Grouping
        What tells units apart.
    progress : callable
        Called as ``progress("reading", rows_done, rows_expected)``.
    most_units : int or None
        More are refused with `TooManyUnits`; None takes any number.
    room : int
        Bins that all units together will have, as far as is known: memory is not moved then.
    units_per_task : float
        How many units a task holds, as far as is known.
    sampled_rows : int
        First rows of each unit in each task that are kept as they are.
    pooled : bool
        Whether all units share their bins and a table of them together is wanted.

    Raises
    ------
    TooManyUnits
        There are more than `most_units`.
    """
    dealer = None if reading.blocks is None else Dealer(reading.blocks, base.folds)
    stride = max(1, (source.rows_expected or 64 * _SHOWN_ROWS) // _SHOWN_ROWS)
    ways = Ways(
        grouping, base, plan_for, dealer, most_units, room, MEMORY_CAP_BYTES // 2,
        max(1, sampled_rows), stride,
    )  # fmt: skip
    alone = base.folds_per_task == 1 and base.block is None

    def count(parts: Iterator[tuple[Task, Iterator[Chunk]]]) -> UnitSums:
        sums: UnitSums | None = None
        for task, chunks in parts:
            if sums is None:
                folds, own_room = met_by[task.index]
                sums = UnitSums(ways, folds, own_room)
            for chunk in chunks:
                sums.update(chunk, task)
        assert sums is not None  # no group is empty
        if pooled and alone:
            sums.count_bins()  # while they are in the cache
        return sums

    done = 0

    def report(rows: int) -> None:
        nonlocal done
        done += rows
        progress("reading", done, source.rows_expected)

    groups = task_groups(source.tasks, base)
    met_by = {
        group[0].index: (
            _folds_met(group, base),
            min(room, math.ceil(_MARGIN * units_per_task * len(group)) * base.bins),
        )
        for group in groups
    }
    total = CountedUnits(ways)
    heard = None if progress is silent else report
    for part in source.map_groups(count, groups, reading.threads, progress=heard):
        total.take(part, alone)
    total.finish()
    return total


def _folds_met(group: Sequence[Task], base: Plan) -> list[int]:
    """Folds that rows of a group of tasks may go to."""
    if base.block is not None:
        return list(range(base.folds))
    return sorted(
        {base.fold_of_run(task.index, run) for task in group for run in range(base.folds_per_task)}
    )


@dataclass(frozen=True)
class FleetCounted:
    """Rows of all units, counted.

    Attributes
    ----------
    together : Counted
        All units together: rows per bin, range, cautions, passes.
    units : CountedUnits
        Each unit.
    sample : UnitSample
        Some rows, drawn beforehand.
    layout : Layout
        How memory was laid out.
    """

    together: Counted
    units: CountedUnits
    sample: UnitSample
    layout: Layout


# Guesses the bins that a typical unit will ask for, from a sample, the plan for all units together
# and the rows of a unit.
Likely = Callable[[UnitSample, Plan, float], int]


def usual_bins(sample: UnitSample, plan: Plan, rows_per_unit: float) -> int:
    """Guess the usual number of bins, whatever the data."""
    del sample, plan, rows_per_unit
    return _WORKING_BINS


def count_fleet(
    source: Source,
    reading: Reading,
    grouping: Grouping,
    progress: Progress = silent,
    likely: Likely = usual_bins,
) -> FleetCounted:
    """Plan and read, as often as the range of x and the number of units demand (mostly once).

    The range is that of all units together, decided as for one curve. `likely` guesses how many
    bins a unit will ask for.

    Raises
    ------
    InputError
        As for `fastsmooth.passes.count_rows`, or memory is too small for so many units.
    """
    sample = draw_units(source, grouping, reading.scale, reading.threads)
    room = math.ceil(_MARGIN * sample.units) + 1
    extra_passes = 0
    last: tuple[CountedUnits, Layout] | None = None

    def counting(
        source: Source, plan: Plan, reading: Reading, progress: Progress
    ) -> tuple[BinTable, Floats]:
        nonlocal room, extra_passes, last
        while True:
            layout = _layout_of(source, plan, sample, room, reading.threads, likely)
            base = _base_of(plan, layout)
            try:
                units = count_units(
                    source, base, plans_of(base, sample), replace(reading, threads=layout.workers),
                    grouping, progress, most_units=room, room=room * layout.bins,
                    units_per_task=sample.units_per_task,
                    sampled_rows=_sampled_rows(layout, source, sample), pooled=True,
                )  # fmt: skip
            except TooManyUnits:
                room *= 4
                extra_passes += 1
                continue
            last = units, layout
            return units.pooled(), np.empty((2, 0))

    together = count_rows(source, reading, progress, counting, sample.rows)
    assert last is not None
    together = replace(together, passes=together.passes + extra_passes)
    return FleetCounted(together, last[0], sample, last[1])


def _layout_of(
    source: Source, plan: Plan, sample: UnitSample, room: int, threads: int, likely: Likely
) -> Layout:
    rows = source.rows_expected or 64 * max(1, sample.rows.x.size)
    return lay_out(
        plan, room, sample.units_per_task, max(1, len(source.tasks)), rows, threads,
        likely(sample, plan, rows / max(1, sample.units)),
    )  # fmt: skip


def _base_of(plan: Plan, layout: Layout) -> Plan:
    low, high = plan.origin, plan.high
    width = plan.width * (plan.bins / layout.bins)
    if not 0.0 < width < math.inf:
        width = bin_width(low, high, layout.bins)
    return replace(
        plan, width=width, bins=layout.bins, folds=layout.folds,
        folds_per_task=layout.folds_per_task, rows_per_run=layout.rows_per_run,
    )  # fmt: skip


def plans_of(base: Plan, sample: UnitSample) -> Callable[[Key], Plan]:
    """Return what gives each unit the common bins with a pilot of its own, where rows allow."""
    low, high = base.origin, base.high
    number = {key: code for code, key in enumerate(sample.keys)}
    counts = np.bincount(sample.code, minlength=len(sample.keys))
    order = np.argsort(sample.code, kind="stable")
    ends = np.concatenate(([0], np.cumsum(counts)))
    known: dict[Key, Plan] = {}

    def plan_for(key: Key) -> Plan:
        plan = known.get(key)
        if plan is None:
            plan = base
            code = number.get(key)
            if code is not None and counts[code] >= _ROWS_FOR_PILOT:
                own = sample.rows.take(order[ends[code] : ends[code + 1]])
                reference, pilot = pilot_of(own, low, high)
                plan = replace(base, reference=reference, pilot=pilot)
            # Two threads may both make it: they make the same.
            plan = known.setdefault(key, plan)
        return plan

    return plan_for


def _sampled_rows(layout: Layout, source: Source, sample: UnitSample) -> int:
    tasks = max(1.0, len(source.tasks) * min(1.0, sample.units_per_task / max(1, sample.units)))
    return max(1, int(min(_KEPT_ROWS / tasks, _KEPT_ROWS_OF_ALL / (tasks * layout.units))))
