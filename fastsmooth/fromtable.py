"""A curve from a bin table that was made elsewhere: plan here, count anywhere, come back."""

from __future__ import annotations

from contextlib import nullcontext
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from fastsmooth.api import (
    check_band,
    check_columns,
    check_width,
    criterion_of,
    own_bandwidth,
    own_points,
    settings_or_default,
)
from fastsmooth.assemble import Chosen, assemble
from fastsmooth.axis import Axis
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.blocks import Block, Coder
from fastsmooth.curve import Caution, Curve
from fastsmooth.engines.parts import block_of, open_planned
from fastsmooth.errors import InputError
from fastsmooth.kernels.shapes import SHAPES
from fastsmooth.passes import (
    Counted,
    check_rows,
    plausible_bounds,
    rows_outside,
    statistics_bounds,
)
from fastsmooth.plan import (
    BINS,
    Plan,
    Sample,
    check_scale,
    draw_sample,
    find_range,
    make_plan,
    most_bins,
    user_range,
)
from fastsmooth.search import search_table
from fastsmooth.settings import NEAREST, Band, Reading, Smoothing, whole_number
from fastsmooth.source import Columns, FileRecord, Source, open_source

_NO_ROWS = Sample(np.empty(0), np.empty(0), np.empty(0, np.int64), np.empty(0, np.int64))
_MANY_OUTSIDE = 0.001
_FEWEST_BINS = 512


def plan_for(
    data: Any,
    x: str,
    y: str,
    *,
    weight: str | None = None,
    count: str | None = None,
    reading: Reading | None = None,
    rows: int | None = None,
    bins: int | None = None,
) -> Plan:
    """Plan how rows are counted, from a look at them: footers, statistics and a sample.

    Parameters
    ----------
    data : object
        The data themselves, as for `fastsmooth.make_curve`, or a sample of rows where the data
        are out of reach; then `reading` should give their range and `rows` their number.
    x, y, weight, count : str
        Columns, as for `fastsmooth.make_curve`.
    reading : Reading or None
        Which rows are used: filter, range, scale, folds and block are fixed by the plan.
    rows : int or None
        How many rows there are in all, where `data` are a sample of them.
    bins : int or None
        Number of bins, best a power of two; None takes 8192, or fewer where many folds ask for it.
        A curve whose width is too narrow for them says so (caution ``coarse bins``).

    Returns
    -------
    Plan
        Plain data (`Plan.to_dict`), to be handed to an engine.

    Raises
    ------
    InputError
        An argument or the data cannot be used.

    Examples
    --------
    >>> wet_bulb_c = np.random.default_rng(1).uniform(-5.0, 28.0, 1000)
    >>> sample = {"wet_bulb_c": wet_bulb_c, "power_kw": 20.0 + 0.1 * wet_bulb_c**2}
    >>> plan = plan_for(sample, "wet_bulb_c", "power_kw", rows=1_000_000_000)
    >>> plan.bins, plan.folds, plan.rows_per_run
    (8192, 32, 65536)
    """
    reading = settings_or_default("reading", reading, Reading)
    check_columns(x, y, weight, count)
    block = reading.blocks
    columns = Columns(x, y, weight, count, block=None if block is None else block.column)
    with open_source(
        data, columns, where=reading.where, timeout_seconds=reading.timeout_seconds
    ) as source:
        check_scale(source, reading.scale)
        if rows is not None:
            source.rows_expected = rows
        sample = draw_sample(source, reading.scale, reading.threads)
        if reading.range is not None:
            bounds = user_range(source, reading.range, reading.scale)
        else:
            bounds = statistics_bounds(source, reading.scale) or find_range(
                source, reading.scale, reading.threads
            )
            bounds = plausible_bounds(bounds, sample)
        slots = 8 if weight is None else 16
        most = most_bins(reading.folds, reading.threads, slots)
        if bins is not None:
            most = whole_number("bins=", bins, _FEWEST_BINS, most)
        plan = make_plan(
            source, sample, bounds, scale=reading.scale,
            block=None if block is None else str(_on_own_zone(block, source)),
            bins=most if bins is not None else min(BINS, most), folds=reading.folds,
        )  # fmt: skip
    # Refused now rather than on the workers.
    block_of(plan)
    return plan


def _on_own_zone(block: Block, source: Source) -> Block:
    """Name the zone of a block's column, because engines hand instants over in zones of their own.

    Without the zone, days would begin at midnight of wherever the session happens to be. A unit
    that the column does not have is refused here: not every engine would notice.
    """
    if block.unit is None or not source.tasks:
        return block
    column = next(source.chunks(source.tasks[0], 1)).extra[0]
    Coder(block).code(column)
    return replace(block, zone=block.zone or getattr(column.type, "tz", None))


def curve_from_table(
    table: BinTable,
    data: Any = None,
    *,
    smoothing: Smoothing | None = None,
    band: Band | None = None,
    threads: int | None = None,
) -> Curve:
    """Make the curve of a bin table, whichever engine counted it.

    Parameters
    ----------
    table : BinTable
        Finished.
    data : object or None
        What was counted, or a sample of it, in the plan's columns. A few runs of rows are read for
        the picture's cloud, the likeness of neighbouring rows, and codes for missing readings;
        files are noted in the trace. None does without, and says so.
    smoothing : Smoothing or None
        How the mean is estimated, by the binned engine.
    band : Band or None
        Points, band, and what counts as thin.
    threads : int or None
        Threads for the search; None takes all processors.

    Returns
    -------
    Curve
        As `fastsmooth.make_curve` returns it. The width is chosen among those that the table's bins
        resolve: where a narrower one seems better a caution says so, and the remedy is a plan with
        a narrower range.

    Raises
    ------
    InputError
        The table holds nothing that can be smoothed, or a setting asks for all rows.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, 20_000)
    >>> power_kw = 20.0 + 0.04 * wet_bulb_c**2 + rng.normal(0.0, 0.1, 20_000)
    >>> plan = plan_for({"wet_bulb_c": wet_bulb_c, "power_kw": power_kw}, "wet_bulb_c", "power_kw")
    >>> table = BinTable(plan)
    >>> for fold in range(plan.folds):
    ...     rows = slice(fold, None, plan.folds)
    ...     table.add_rows(fold, wet_bulb_c[rows].copy(), power_kw[rows].copy())
    >>> made = curve_from_table(table)
    >>> round(float(made.at(10.0)[0]), 1), made.cautions[0].code
    (24.0, 'no rows at hand')
    """
    smoothing = settings_or_default("smoothing", smoothing, Smoothing)
    band = settings_or_default("band", band, Band)
    check_rows_spared(smoothing, band, "a table")
    plan = table.plan
    reading = Reading(where=plan.where, scale=plan.scale, folds=plan.folds, block=block_of(plan))
    if threads is not None:
        reading = replace(reading, threads=threads)
    check_band(smoothing, band)
    opened: Any = nullcontext(_Elsewhere(plan.axis, plan.columns))
    if data is not None:
        opened = open_planned(data, plan)
    with opened as source:
        check_rows(table, source, reading)
        counted = _counted(table, source, data is not None, reading)
        return curve_of_counted(
            counted, source, reading, smoothing, band, "the rows were counted elsewhere"
        )


def check_rows_spared(smoothing: Smoothing, band: Band, kept: str) -> None:
    """Refuse settings that ask for rows where only sums are at hand.

    Parameters
    ----------
    smoothing, band : Smoothing, Band
        What was asked for.
    kept : str
        What keeps the sums, as ``a store``.

    Raises
    ------
    InputError
        They do.
    """
    asked = {
        f"--estimator {NEAREST}": smoothing.estimator == NEAREST,
        "--engine exact": smoothing.engine == "exact",
        "--robust": smoothing.robust,
        "--limits": bool(band.limits),
    }
    for option, given in asked.items():
        if given:
            raise InputError(
                option, "come with data files", f"{kept} keeps no rows",
                "name the files, or leave it out",
            )  # fmt: skip


def curve_of_counted(
    counted: Counted, source: Any, reading: Reading, smoothing: Smoothing, band: Band, reason: str
) -> Curve:
    """Make the curve of rows that were counted, without reading them again.

    Parameters
    ----------
    counted : Counted
        Table, and some rows.
    source : Source or what stands for it
        Axis, columns, files and units.
    reading : Reading
        How the rows were read.
    smoothing, band : Smoothing, Band
        How the mean is estimated, and what is shown.
    reason : str
        Why the binned engine is taken, for the trace.
    """
    table = counted.table
    pyramid, shape = Pyramid(table), SHAPES[smoothing.kernel]
    found = search_table(
        table, pyramid, shape, criterion=criterion_of(reading, smoothing),
        by_block=table.plan.block is not None, widths=smoothing.widths, threads=reading.threads,
    )  # fmt: skip
    bandwidth = own_bandwidth(source, reading, smoothing)
    if bandwidth is not None:
        check_width(bandwidth, table)
    chosen = Chosen(
        counted, pyramid, found, shape, bandwidth or found.trails[smoothing.estimator].bandwidth,
        own_points(source, reading, band), engine_reason=reason,
    )  # fmt: skip
    made = assemble(source, chosen, reading, smoothing, band)
    trace = {**made.trace, "rows_at_hand": int(counted.sample.x.size)}
    return replace(made, trace=trace)


@dataclass(frozen=True)
class _Elsewhere:
    """Stands for data that are not at hand."""

    axis: Axis
    columns: Columns
    files: tuple[FileRecord, ...] = ()
    x_unit: str = ""
    y_unit: str = ""


def _counted(table: BinTable, source: Any, at_hand: bool, reading: Reading) -> Counted:
    plan = table.plan
    cautions = []
    sample = draw_sample(source, plan.scale, reading.threads) if at_hand else _NO_ROWS
    if not at_hand:
        cautions.append(Caution(
            "no rows at hand",
            "Only sums were at hand: the picture shows no single rows, and neither the likeness of "
            "neighbouring rows nor codes for missing readings could be looked for. Hand in the "
            "data, or a sample of consecutive rows, to have them looked for.",
        ))  # fmt: skip
    outside = rows_outside(table)
    if outside > _MANY_OUTSIDE * (table.tally.used + outside):
        low, high = (
            plan.axis.label(float(np.exp(end)) if plan.scale == "log" else end)
            for end in (plan.origin, plan.high)
        )
        cautions.append(Caution(
            "rows outside the plan",
            f"{outside:,} rows have {plan.columns.x} outside the plan's range {low} to {high} and "
            f"were left out. Make the plan with a range that holds them.",
        ))  # fmt: skip
    x = np.exp(sample.x) if plan.scale == "log" else sample.x
    return Counted(table, sample, np.stack([x, sample.y]), tuple(cautions), 1)
