"""What a new store fixes for good, and whether new files agree with it."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fastsmooth.axis import Axis
from fastsmooth.blocks import Block, check_alike, kind_of
from fastsmooth.errors import InputError
from fastsmooth.fleet import arrow_type
from fastsmooth.grouping import Grouping, Keys
from fastsmooth.plan import check_scale, draw_sample, find_range, make_plan, user_range
from fastsmooth.source import Source, open_source
from fastsmooth.store.counting import columns_to_read
from fastsmooth.store.grid import NODES, Grid, core_range, widen
from fastsmooth.store.ledger import Basis
from fastsmooth.store.periods import Period
from fastsmooth.store.settings import StoreSettings
from fastsmooth.store.units import stored_type

if TYPE_CHECKING:
    from collections.abc import Sequence

Floats = NDArray[np.float64]

_TASKS_LOOKED_AT = 16
_FINENESS = ("s", "ms", "us", "ns")


def open_files(paths: Sequence[str], basis: Basis) -> Source:
    """Open files as the first ones were opened, or refuse them.

    Raises
    ------
    InputError
        x, block or period is of another kind or in another time zone, or x is finer than the
        store counts it.
    """
    source = open_source(list(paths), columns_to_read(basis.settings), where=basis.settings.where)
    try:
        _check_axis(source.axis, basis.axis, basis.settings.names[0])
        _check_kinds(_kinds(source, basis.settings), basis)
    except InputError:
        source.close()
        raise
    return source


def _check_axis(axis: Axis, own: Axis, column: str) -> None:
    finer = own.unit in _FINENESS and axis.unit in _FINENESS[_FINENESS.index(own.unit) + 1 :]
    if (axis.kind, axis.zone) != (own.kind, own.zone) or finer:
        raise InputError(
            "--x", "be of the same kind in every file",
            f"'{column}' is {axis.arrow_type} and the store has {own.arrow_type}",
            "write the files alike, or make another store",
        )  # fmt: skip


def _kinds(source: Source, settings: StoreSettings) -> dict[str, str]:
    """Kinds of the block's and the period's column, which must be one each in all files."""
    made = {}
    for argument, column in _told_apart(settings).items():
        types = [schema.field(column).type for schema in source.schemas]
        check_alike(column, types, argument)
        made[column] = next((kind for kind in map(kind_of, types) if kind), "")
    return made


def _told_apart(settings: StoreSettings) -> dict[str, str]:
    """The columns whose values make blocks and periods, by option."""
    made = {}
    if settings.period is not None:
        made["--period"] = Period.parse(settings.period).column
    if settings.block is not None:
        made["--block"] = Block.parse(settings.block).column
    return made


def _check_kinds(kinds: dict[str, str], basis: Basis) -> None:
    """Refuse files whose blocks or periods would begin elsewhere than those of the store."""
    for argument, column in _told_apart(basis.settings).items():
        kind, own = kinds[column], basis.kinds.get(column, "")
        if kind and own and kind != own:
            raise InputError(
                argument, "name a column of one kind in every file",
                f"'{column}' holds {kind} and in the store's files {own}",
                "write the files alike, or make another store",
            )  # fmt: skip


def new_basis(source: Source, settings: StoreSettings, threads: int) -> tuple[Basis, Grid]:
    """Fix what a new store counts, and its first bins, from the files opened.

    Parameters
    ----------
    source : Source
        All files of the first update.
    settings : StoreSettings
        With defaults filled in.
    threads : int
        Row groups read at a time.

    Raises
    ------
    InputError
        x is constant, or a setting does not suit the data.
    """
    scale = str(settings.scale)
    check_scale(source, scale)
    sample = draw_sample(source, scale, threads)
    bounds = None
    if settings.range is not None:
        bounds = user_range(source, settings.range, scale)
        low, high = bounds
    else:
        low, high = _first_range(source, sample.x, scale, threads)
    settings = settings.with_bins_for(_units_met(source, settings))
    bins, folds = settings.sizes
    try:
        grid = Grid.over(low, high, bins, (0.0,) * NODES)
    except OverflowError:
        raise InputError(
            "--x", "span a width that can be cut into bins",
            f"'{source.columns.x}' does not", "give --range",
        ) from None  # fmt: skip
    near = (sample.x >= grid.origin) & (sample.x < grid.high)
    sample = sample._replace(
        x=sample.x[near], y=sample.y[near], run=sample.run[near], place=sample.place[near]
    )
    plan = make_plan(
        source, sample, (grid.origin, grid.high), scale=scale, block=settings.block, bins=bins,
        folds=folds,
    )  # fmt: skip
    pilot = plan.pilot if len(plan.pilot) == NODES else plan.pilot * NODES
    basis = Basis(
        settings, source.axis, _by_types(source, settings),
        {name: str(kind) for name, kind in source.fixed.key_types.items()}, source.x_unit,
        source.y_unit, bounds, plan.reference, plan.rows_per_run, plan.folds_per_task,
        _kinds(source, settings),
    )  # fmt: skip
    return basis, Grid(grid.exponent, grid.first, bins, pilot)


def _by_types(source: Source, settings: StoreSettings) -> tuple[str, ...]:
    import pyarrow as pa

    if not settings.by:
        return ()
    chunk = next(source.chunks(source.tasks[0], 1))
    fields = zip(source.columns.extra, chunk.extra, strict=True)
    grouping = Grouping.parse(settings.by)
    own = grouping.types([pa.schema([(name, array.type) for name, array in fields])])
    return tuple(
        stored_type(one.column, arrow_type(kind))
        for one, kind in zip(grouping.by, own, strict=True)
    )


def _units_met(source: Source, settings: StoreSettings) -> int:
    """About how many units there are, by the beginnings of some row groups."""
    if not settings.by or not source.tasks:
        return 1
    grouping = Grouping.parse(settings.by)
    keys = Keys(grouping)
    chosen = source.tasks[:: max(1, len(source.tasks) // _TASKS_LOOKED_AT)]
    alone = True
    for task in chosen:
        chunk = next(source.chunks(task))
        columns = dict(zip(source.columns.extra, chunk.extra, strict=True))
        if chunk.x.size:
            codes = keys.codes([columns[name] for name in grouping.columns])
            alone = alone and bool((codes == codes[0]).all())
    # Row groups of one unit each: the others may hold as many more.
    share = len(source.tasks) / len(chosen) if alone else 1.0
    return max(1, math.ceil(len(keys.keys) * share))


def _first_range(source: Source, x: Floats, scale: str, threads: int) -> tuple[float, float]:
    """The range of x without codes for missing readings; see `widen`."""
    stated = source.x_range
    if stated is not None and scale == "log":
        stated = (math.log(stated[0]), math.log(stated[1])) if stated[0] > 0.0 else None
    core = core_range(x)
    if core is None:
        # So few rows, or all alike: every one must be seen.
        low, high = stated or find_range(source, scale, threads)
        if low == high:
            raise InputError(
                "--x", "name a column that varies",
                f"'{source.columns.x}' is the same in all rows of the first files",
                "begin the store with more files, or give --range",
            )  # fmt: skip
        return low, high
    outside = x[(x < core[0]) | (x > core[1])]
    hull = widen(*core, outside, x.size)
    if stated is not None:
        # Statistics tell of rows that the sample missed, though not how many there are.
        ends = np.array([one for one in stated if not hull.low <= one <= hull.high])
        if ends.size:
            hull = widen(hull.low, hull.high, ends, 1 << 40)
    return hull.low, hull.high
