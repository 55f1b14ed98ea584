"""Passes over the data: plan, count into a bin table, look, and plan again where needed."""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable
from fastsmooth.blocks import Dealer
from fastsmooth.curve import Caution
from fastsmooth.errors import InputError, ReadError
from fastsmooth.plan import (
    BINS,
    Plan,
    Sample,
    check_scale,
    draw_sample,
    find_range,
    make_plan,
    most_bins,
    no_usable_rows,
    user_range,
)
from fastsmooth.quoting import sql_name, where_option
from fastsmooth.settings import Reading
from fastsmooth.source import Chunk, Columns, Source, Task

# The range is trimmed when all but one row in a thousand lie within an eighth of it.
_TRIMMED_SHARE = 0.001
_TRIM_GAIN = 8.0
# A statistics range this much wider than the sample's says that the extremes are no readings.
_ABSURD_RANGE = 1e4
_SAMPLE_ENOUGH = 1000
_MOST_PASSES = 4
_SHOWN_ROWS = 50_000
_FEW_GROUPS = 24
# Mean weights and counts, and y, up to here (and down to the inverse) keep every sum finite.
_LARGEST = 1e30
_LARGEST_Y = 1e70
_MANY_GROUPS = 64

Floats = NDArray[np.float64]

Progress = Callable[[str, int, int | None], None]
# What `count_pass` does: source, plan, reading and progress -> table and shown rows.
Counting = Callable[[Source, Plan, Reading, Progress], tuple[BinTable, Floats]]


def silent(stage: str, rows: int, of: int | None) -> None:
    """Report progress to nobody."""


@dataclass(frozen=True)
class Counted:
    """Rows counted into a table, and what was noticed on the way.

    Attributes
    ----------
    table : BinTable
        Finished.
    sample : Sample
        Some of the rows.
    shown : (2, n) float64
        x and y of a thin selection of all rows, for pictures.
    cautions : tuple of Caution
        About range and rows.
    passes : int
        How often the data were read.
    """

    table: BinTable
    sample: Sample
    shown: Floats
    cautions: tuple[Caution, ...]
    passes: int


def count_pass(
    source: Source, plan: Plan, reading: Reading, progress: Progress = silent
) -> tuple[BinTable, Floats]:
    """Read all rows once into a table of the plan; also give a thin selection of rows, (2, n).

    Each task (or fixed group of tasks) sums into a table of its own; tables are merged in a fixed
    order, so the result is the same to the last bit for any number of threads.
    """
    done = 0
    dealer = None if reading.blocks is None else Dealer(reading.blocks, plan.folds)
    stride = shown_stride(source)

    def count(parts: Iterator[tuple[Task, Iterator[Chunk]]]) -> tuple[BinTable, Floats]:
        table = BinTable(plan)
        shown: tuple[list[Floats], list[Floats]] = ([], [])
        for task, chunks in parts:
            row = 0
            for chunk in chunks:
                table.update(chunk, task.index, row, dealer)
                row += chunk.x.shape[0]
                shown[0].append(chunk.x[::stride].copy())
                shown[1].append(chunk.y[::stride].copy())
        if not shown[0]:
            return table, np.empty((2, 0))
        return table, np.stack([np.concatenate(values) for values in shown])

    def report(rows: int) -> None:
        nonlocal done
        done += rows
        progress("reading", done, source.rows_expected)

    total, shown = BinTable(plan), []
    groups = task_groups(source.tasks, plan)
    heard = None if progress is silent else report
    for part, few in source.map_groups(count, groups, reading.threads, progress=heard):
        total.merge(part)
        shown.append(few)
    rows = np.concatenate(shown, axis=1) if shown else np.empty((2, 0))
    return total, thin_out(rows)


def shown_stride(source: Source) -> int:
    """Return how many rows apart the rows shown in pictures are taken from each chunk."""
    return max(1, (source.rows_expected or _SHOWN_ROWS * 64) // _SHOWN_ROWS)


def thin_out(rows: Floats) -> Floats:
    """Thin rows, (2, n), that turn out to be more than a picture can show."""
    return rows[:, :: max(1, rows.shape[1] // (2 * _SHOWN_ROWS))]


def task_groups(tasks: Sequence[Task], plan: Plan) -> list[Sequence[Task]]:
    """Tasks that are summed into one table: their number does not depend on the threads.

    A table with all folds costs as much to merge as some hundred thousand rows to read, so that
    tasks which meet all folds are summed in a few groups. Every so many tasks form a group: then
    all groups take equally long where rows differ along the data.
    """
    if plan.block is None:
        if plan.folds_per_task == 1:
            # Tasks of one fold follow each other: no two groups share a fold.
            return [tasks[start :: plan.folds] for start in range(min(plan.folds, len(tasks)))]
        if plan.folds_per_task < plan.folds:
            return [(task,) for task in tasks]
    groups = max(_FEW_GROUPS, min(_MANY_GROUPS, len(tasks) // 8))
    return [tasks[start::groups] for start in range(min(groups, len(tasks)))]


def block_words(reading: Reading) -> str | None:
    """Return the block of a reading in words."""
    return None if reading.block is None else str(reading.block)


def count_rows(
    source: Source, reading: Reading, progress: Progress = silent, counting: Counting = count_pass,
    sample: Sample | None = None,
) -> Counted:  # fmt: skip
    """Plan and read, as often as the range of x demands (once for ordinary data).

    `counting` reads all rows once: threads of this process, or the workers of a cluster. `sample`
    are some of the rows, if they are at hand.

    Raises
    ------
    InputError
        No row can be used, x is constant, a weight is negative, or `strict` meets a refused row.
    """
    scale = reading.scale
    check_scale(source, scale)
    if sample is None:
        sample = draw_sample(source, scale, reading.threads)
    trimmed = False
    stated = None
    if reading.range is not None:
        bounds = user_range(source, reading.range, scale)
    else:
        stated = statistics_bounds(source, scale)
        bounds = stated or find_range(source, scale, reading.threads)
        full = bounds
        bounds = plausible_bounds(bounds, sample)
        trimmed = bounds != full
    for passes in range(1, _MOST_PASSES + 1):
        slots = 8 if source.columns.weight is None else 16
        plan = make_plan(
            source, sample, bounds, scale=scale, block=block_words(reading),
            bins=min(BINS, most_bins(reading.folds, reading.threads, slots)), folds=reading.folds,
        )  # fmt: skip
        table, shown = counting(source, plan, reading, progress)
        check_rows(table, source, reading)
        if bounds == stated and rows_outside(table):
            bounds = full = _corrected_bounds(source, stated, reading, rows_outside(table))
            continue
        if passes == _MOST_PASSES:
            break
        if _mostly_empty(table):
            low, high = table.extent.tolist()
            bounds = low, high
            continue
        if reading.range is not None:
            break
        if trimmed and rows_outside(table) > _TRIMMED_SHARE * (
            table.tally.used + rows_outside(table)
        ):
            # The sample missed too much: give the range back.
            bounds, trimmed = full, False
            continue
        narrower = _trimmed_bounds(table)
        if narrower is None:
            break
        bounds, trimmed = narrower, True
    cautions = []
    if trimmed and rows_outside(table):
        cautions.append(_trim_caution(table, source))
    cautions += about_midnight(source, reading)
    return Counted(table, sample, shown, tuple(cautions), passes)


def count_finer(
    source: Source, counted: Counted, reading: Reading, bins: int, progress: Progress = silent,
    counting: Counting = count_pass,
) -> Counted:  # fmt: skip
    """Read again with more bins over the range that holds rows."""
    plan = counted.table.plan
    low, high = counted.table.extent.tolist()
    finer = make_plan(
        source, counted.sample, (low, high), scale=plan.scale, block=plan.block, bins=bins,
        folds=plan.folds,
    )  # fmt: skip
    again, shown = counting(source, finer, reading, progress)
    return replace(counted, table=again, shown=shown, passes=counted.passes + 1)


def bins_for(table: BinTable, bandwidth: float, bins_per_bandwidth: float, threads: int) -> int:
    """Return how many bins give the bandwidth so many bins, within the memory cap."""
    low, high = table.extent.tolist()
    wanted = bins_per_bandwidth * (high - low) / bandwidth * 1.05
    power = 1 << max(0, math.ceil(math.log2(max(wanted, 1.0))))
    return max(BINS, min(power, most_bins(table.plan.folds, threads, table.slots)))


def check_rows(table: BinTable, source: Source, reading: Reading) -> None:
    """Refuse what must not be smoothed over.

    Raises
    ------
    InputError
        Negative weights or counts, sizes that cannot be computed with, no usable row, or any
        refused row when `strict`.
    """
    refused = table.tally.refused
    check_signs(refused, source.columns)
    if table.tally.used == 0:
        counts = ", ".join(f"{rows:,} {reason}" for reason, rows in sorted(refused.items()))
        if not counts:
            raise no_usable_rows()
        raise InputError(
            "DATA", "hold rows with finite x and y",
            f"every row was filtered or refused ({table.tally.filtered:,} filtered, {counts})",
            "check --where, --range and the columns",
        )  # fmt: skip
    check_sizes(table.total(), table.tally.used, source.columns)
    if reading.block is not None and len(table.sums) < 2:
        blocks = len(table.blocks)
        raise InputError(
            "--block", "tell at least two blocks apart",
            f"'{reading.block}' is the same in all {table.tally.used:,} rows"
            if blocks < 2
            else f"the {blocks:,} blocks of '{reading.block}' were dealt to one fold",
            "name a finer block, or leave it out",
        )  # fmt: skip
    if reading.range is not None:
        # The caller left these out; they are no fault of the data.
        refused = {k: v for k, v in refused.items() if not k.endswith(" range")}
    if reading.strict and refused:
        counts = ", ".join(f"{rows:,} {reason}" for reason, rows in sorted(refused.items()))
        raise InputError(
            "DATA", "hold usable rows only with --strict", f"some were refused ({counts})",
            "clean the data, filter with --where, or leave --strict out",
        )  # fmt: skip


def check_signs(refused: dict[str, int], columns: Columns) -> None:
    """Refuse negative or infinite weights and counts: no row with one can be meant.

    Parameters
    ----------
    refused : dict of str to int
        Rows refused, by reason.
    columns : Columns
        For the refusal.

    Raises
    ------
    InputError
        There are some.
    """
    for role in ("weight", "count"):
        bad = refused.get(f"{role} negative or infinite", 0)
        if bad:
            column = getattr(columns, role)
            raise InputError(
                f"--{role}", "name a column of positive finite numbers",
                f"'{column}' is negative or infinite in {bad:,} rows",
                "leave those rows out with "
                + where_option(f"{sql_name(column)} > 0 AND {sql_name(column)} < 1e30"),
            )  # fmt: skip


def check_sizes(total: Floats, rows: int, columns: Columns) -> None:
    """Refuse values whose powers no float64 can hold: bands take y to the fourth.

    Parameters
    ----------
    total : (bins, slots) float64
        Sums over all folds; see `BinTable`.
    rows : int
        Rows in them.
    columns : Columns
        For the refusal.

    Raises
    ------
    InputError
        Counts, weights or y of a size that cannot be computed with, or counts below 1.
    """
    with np.errstate(over="ignore", invalid="ignore"):
        sums = total.sum(axis=0)
    precision, weighted = float(sums[0]), columns.weight is not None
    counted = float(sums[8]) if weighted else precision
    if columns.count is not None and not rows * (1.0 - 1e-9) <= counted <= rows * _LARGEST:
        raise InputError(
            "--count", "hold numbers of equal rows, on average between 1 and 1e30",
            f"the mean of '{columns.count}' is {counted / rows:.3g}",
            "name it with --weight if only its ratios matter",
        )  # fmt: skip
    # Squared weights overflow first.
    mean = precision / counted if weighted and math.isfinite(float(sums[9])) else math.inf
    if weighted and not 1.0 / _LARGEST <= mean <= _LARGEST:
        size = "larger" if mean > 1.0 else "smaller"
        raise InputError(
            "--weight", "lie between 1e-30 and 1e30 on average",
            f"the mean of '{columns.weight}' is {size}",
            "multiply it by a constant, because only ratios matter, or leave far values out with "
            + where_option(f"{sql_name(str(columns.weight))} < 1e30"),
        )  # fmt: skip
    mean_square = float(sums[6]) / precision
    if not (mean_square * rows < _LARGEST_Y**2 and np.isfinite(total).all()):
        raise InputError(
            "--y", "stay below 1e70 in size", f"'{columns.y}' goes beyond it",
            "leave such rows out with "
            + where_option(f"ABS({sql_name(columns.y)}) < 1e70"),
        )  # fmt: skip
    if mean_square < _LARGEST_Y**-2 and total[:, 3].any():
        raise InputError(
            "--y", "differ by more than 1e-70",
            f"values of '{columns.y}' differ by less", "write it in a smaller unit",
        )  # fmt: skip


def statistics_bounds(source: Source, scale: str) -> tuple[float, float] | None:
    """Return the range of x by the files' statistics, on the scale; None where they do not tell."""
    if source.x_range is None:
        return None
    low, high = source.x_range
    if scale == "log":
        return (math.log(low), math.log(high)) if low > 0.0 else None
    return low, high


def _corrected_bounds(
    source: Source, stated: tuple[float, float], reading: Reading, outside: int
) -> tuple[float, float]:
    """Return the range that the values have where it is the stated one but for rounding.

    Raises
    ------
    ReadError
        It is not: some values are not what was written.
    """
    low, high = find_range(source, reading.scale, reading.threads)
    rounding = (stated[1] - stated[0]) * 2.0**-40
    if low < stated[0] - rounding or high > stated[1] + rounding:
        raise ReadError(
            "DATA", "agree with its own statistics",
            f"{outside:,} values of '{source.columns.x}' lie outside the range that files state",
            "copy or write the files again: some are damaged",
        )  # fmt: skip
    return min(low, stated[0]), max(high, stated[1])


def plausible_bounds(bounds: tuple[float, float], sample: Sample) -> tuple[float, float]:
    """Narrow a range so wide that the sample would fall into a single bin."""
    low, high = bounds
    if sample.x.size < _SAMPLE_ENOUGH:
        return bounds
    first, last = (float(q) for q in np.quantile(sample.x, (0.001, 0.999)))
    span = last - first
    if span <= 0.0 or high - low < _ABSURD_RANGE * span:
        return bounds
    return max(low, first - 100.0 * span), min(high, last + 100.0 * span)


def rows_outside(table: BinTable) -> int:
    """Return how many rows lie outside the plan's range."""
    refused = table.tally.refused
    return refused.get("x below range", 0) + refused.get("x above range", 0)


def _mostly_empty(table: BinTable) -> bool:
    """Whether the rows use less than half of the bins' range: a range given, or a filter."""
    low, high = table.extent.tolist()
    return bool(0.0 < 2.0 * (high - low) < table.plan.high - table.plan.origin)


def _trimmed_bounds(table: BinTable) -> tuple[float, float] | None:
    """A range without the far outliers, or None if there is nothing to gain."""
    plan = table.plan
    weight = table.total()[:, 0]
    up_to = np.cumsum(weight)
    aside = 0.5 * _TRIMMED_SHARE * up_to[-1]
    first = int(np.searchsorted(up_to, aside, side="right"))
    last = int(np.searchsorted(up_to, up_to[-1] - aside, side="left"))
    low = plan.origin + first * plan.width
    high = plan.origin + (last + 1) * plan.width
    margin = 0.5 * (high - low)
    low, high = (
        max(low - margin, float(table.extent[0])),
        min(high + margin, float(table.extent[1])),
    )
    if (high - low) * _TRIM_GAIN > table.extent[1] - table.extent[0]:
        return None
    return low, high


def about_midnight(source: Source, reading: Reading) -> list[Caution]:
    """Tell that blocks are cut at midnight UTC where the data are written in another zone."""
    block = reading.blocks
    if block is None or block.unit in (None, "hour") or block.zone is not None:
        return []
    if not source.shows_offset(block.column):
        return []
    zoned = replace(block, zone="Europe/Madrid")
    return [Caution(
        "midnight UTC",
        f"{block.column} is written with an offset from UTC, which reading turns into UTC: each "
        f"{block.unit} begins at midnight UTC. Name the zone of the place, as in --block {zoned}.",
    )]  # fmt: skip


def _trim_caution(table: BinTable, source: Source) -> Caution:
    refused = table.tally.refused
    plan = table.plan
    ends = [math.exp(end) if plan.scale == "log" else end for end in (plan.origin, plan.high)]
    below, above = refused.get("x below range", 0), refused.get("x above range", 0)
    return Caution(
        "range trimmed",
        f"The range of {source.columns.x} was trimmed to {source.axis.label(ends[0])} to "
        f"{source.axis.label(ends[1])} because of far outliers: {below:,} rows lie below and "
        f"{above:,} above it and were left out. Give --range to decide yourself.",
    )
