"""Part of the data counted on its own: what any worker does, whichever engine started it."""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Sequence
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable
from fastsmooth.blocks import Block, Dealer, quoted
from fastsmooth.casts import Role, column_kind
from fastsmooth.errors import InputError
from fastsmooth.plan import Plan
from fastsmooth.readers import Reader, pick, rebatch
from fastsmooth.source import Fixed, Source, Task, open_source
from fastsmooth.where import parse_where

Floats = NDArray[np.float64]


class StreamReader(Reader):
    """A stream of record batches, read once, as one task."""

    def __init__(self, schema: pa.Schema, batches: Iterable[pa.RecordBatch], name: str) -> None:
        """Take `batches` of a schema; `name` stands in errors."""
        self.places, self.schemas = (name,), (schema,)
        self.tasks, self.place_of = (Task(0, name, None),), (0,)
        self._batches = batches

    def batches(self, index: int, columns: Sequence[str], rows: int) -> Iterator[pa.RecordBatch]:
        """Deliver the stream."""
        del index
        return rebatch((pick(batch, columns) for batch in self._batches), rows)


def block_of(plan: Plan) -> Block | None:
    """Return the block that a plan tells in words, or None.

    Parameters
    ----------
    plan : Plan
        A plan.

    Raises
    ------
    InputError
        The block is made by a function, which does not travel with the plan.

    Examples
    --------
    >>> from dataclasses import replace
    >>> from fastsmooth.source import Columns
    >>> plan = Plan.simple(0.0, 30.0)
    >>> columns = Columns("wet_bulb_c", "power_kw", block="logged_at")
    >>> block_of(replace(plan, columns=columns, block="logged_at:day"))
    Block(column='logged_at', unit='day', zone=None, key=None)
    """
    column = plan.columns.block
    if plan.block is None or column is None:
        return None
    # The name stands in quotes where it needs them.
    name = quoted(column) if plan.block.startswith(quoted(column)) else column
    rest = plan.block.removeprefix(name)
    if " by " in rest:
        raise InputError(
            "--block", "be a column, or a time column with a unit, where other processes count",
            f"it is made by a function ({plan.block})",
            "write the keys to a column of their own",
        )  # fmt: skip
    unit, _, zone = rest.removeprefix(":").partition("@")
    return Block(column, unit or None, zone or None)


def dealer_of(plan: Plan) -> Dealer | None:
    """Return what deals the plan's blocks to folds; None where runs of rows are dealt."""
    block = block_of(plan)
    return None if block is None else Dealer(block, plan.folds)


def open_planned(data: Any, plan: Plan) -> Source:
    """Open data for a plan that may have been made of others: the plan fixes the axis."""
    source = open_source(data, plan.columns, where=plan.where)
    if source.axis == plan.axis:
        return source
    source.close()
    if source.axis.kind != plan.axis.kind:
        raise InputError(
            "--x", f"name a column of {plan.axis.kind}s, as in the plan",
            f"'{plan.columns.x}' holds {source.axis.kind}s", "make the plan from such data",
        )  # fmt: skip
    # Times count from the plan's origin, whichever rows were at hand when it was made.
    fixed = Fixed(plan.axis, source.fixed.key_types)
    return open_source(data, plan.columns, where=plan.where, fixed=fixed)


def count_tasks(
    source: Source, plan: Plan, tasks: Iterable[tuple[Task, int]], stride: int = 0
) -> tuple[BinTable, Floats]:
    """Count some tasks of opened data into one table.

    Parameters
    ----------
    source : Source
        Opened data.
    plan : Plan
        The plan.
    tasks : iterable of (Task, int)
        Tasks of the source, each with its place among all tasks of the whole data.
    stride : int
        How many rows apart rows are shown in pictures; 0 shows none.

    Returns
    -------
    table : BinTable
        Their sums.
    shown : (2, n) float64
        x and y of the rows shown.
    """
    table, dealer = BinTable(plan), dealer_of(plan)
    shown = [np.empty((2, 0))]
    for task, index in tasks:
        row = 0
        for chunk in source.chunks(task):
            table.update(chunk, index, row, dealer)
            row += chunk.x.shape[0]
            if stride:
                shown.append(np.stack([chunk.x[::stride], chunk.y[::stride]]))
    return table, np.concatenate(shown, axis=1)


def count_batches(
    schema: pa.Schema, batches: Iterable[pa.RecordBatch], plan: Plan, index: int, name: str
) -> BinTable:
    """Count a stream of record batches into a table, as one task.

    Parameters
    ----------
    schema : pyarrow.Schema
        Of the batches.
    batches : iterable of pyarrow.RecordBatch
        Rows, in order.
    plan : Plan
        The plan.
    index : int
        Place of the stream among all streams of the data.
    name : str
        What the stream is called in errors.
    """
    with open_batches(schema, batches, plan, name) as source:
        table, _ = count_tasks(source, plan, [(source.tasks[0], index)])
    return table


def open_batches(
    schema: pa.Schema, batches: Iterable[pa.RecordBatch], plan: Plan, name: str
) -> Source:
    """Open a stream of record batches as the source of a plan that was made elsewhere."""
    reader = StreamReader(schema, batches, name)
    return Source(reader, plan.columns, plan.where, Fixed(plan.axis, {}))


def check_schema(schema: pa.Schema, plan: Plan, name: str) -> tuple[str, ...]:
    """Check the columns of a table against a plan, and return the columns that counting reads.

    Raises
    ------
    InputError
        A column is missing or of a kind that its part cannot use, or the row filter does not suit
        the table.
    """
    open_batches(schema, (), plan, name).close()
    columns = plan.columns
    roles = {"x": columns.x, "y": columns.y, "weight": columns.weight, "count": columns.count}
    used = []
    for role, column in roles.items():
        if column is None:
            continue
        kind = column_kind(Role(role, column), schema.field(column).type, name)
        if role == "x" and kind not in ("empty", plan.axis.kind):
            raise InputError(
                "--x", f"name a column of {plan.axis.kind}s, as in the plan",
                f"'{column}' in {name} holds {kind}s", "make the plan from such data",
            )  # fmt: skip
        used.append(column)
    used += columns.extra
    if plan.where is not None:
        used += parse_where(plan.where, schema.remove_metadata()).columns
    return tuple(dict.fromkeys(used))


def need(extra: str) -> InputError:
    """Return the refusal when an engine's package is not installed."""
    return InputError(
        f"the {extra} engine", "find its packages", "they are not installed",
        f"run pip install 'fastsmooth[{extra}]'",
    )  # fmt: skip
