"""What engines with a GROUP BY give back, as a table of rows, and the `BinTable` made of it.

One row for each bin of each fold or block, and one for each reason against rows:

    reason   0 for rows in the table; else a place in `REASONS`, counted from 1
    fold     fold of the rows; or `block`, the key of their block, which is dealt to a fold here
    bin      number of the bin, 0 where there is a reason
    rows     how many rows
    low, high  lowest and highest x, on the plan's scale; null where there is a reason
    w, wv, ...  the sums of `fastsmooth.kernels.accumulate`; null where there is a reason
"""

from __future__ import annotations

import itertools
from collections.abc import Iterable, Iterator
from dataclasses import replace
from typing import Any

import numpy as np
import pyarrow as pa
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable, sum_names
from fastsmooth.blocks import Dealer, merge_keys
from fastsmooth.engines.parts import block_of
from fastsmooth.errors import InputError
from fastsmooth.kernels.accumulate import REASONS as KERNEL_REASONS
from fastsmooth.plan import Plan

Floats = NDArray[np.float64]

FILTERED = "filtered"
REASONS = (
    FILTERED, "x null", "y null", "weight null", "count null", "block null", "x not positive",
    *KERNEL_REASONS,
    # Only where a column may hold anything.
    "x no number", "y no number", "weight no number", "count no number",
)  # fmt: skip
# Rows refused for later reasons than this one have met their block: it counts as seen.
DEALT_FROM = REASONS.index("block null") + 1
_ROWS_AT_A_TIME = 65_536
_REMEDY = "hand over all columns and rows that the statement gives"


def result_columns(plan: Plan) -> tuple[str, ...]:
    """Return the names of the columns of a result, in order."""
    names = fold_columns(plan)
    return names if plan.block is None else ("reason", "block", *names[2:])


def fold_columns(plan: Plan) -> tuple[str, ...]:
    """Return the names of the columns of a result whose blocks are dealt to folds already."""
    return ("reason", "fold", "bin", "rows", "low", "high", *sum_names(plan))


def read_result(plan: Plan, result: Any) -> BinTable:
    """Build a bin table from what an engine gave back.

    Parameters
    ----------
    plan : Plan
        The plan that the statement was made of.
    result : object
        Anything that streams Arrow (an Arrow table, a duckdb relation, a polars or pandas frame),
        or an iterable of tuples in the order of the statement's columns, as a database cursor is.
        It is read once, in pieces.

    Returns
    -------
    BinTable
        Equal to the one that this process would have counted, but for the order of additions.

    Raises
    ------
    InputError
        The result is not what the statement of this plan gives.

    Examples
    --------
    >>> plan = Plan.simple(0.0, 30.0, bins=4, folds=2)
    >>> row = (0, 1, 2, 2, 16.0, 17.0, 2.0, 0.2, 0.1, 61.0, 6.1, 3.0, 1861.0)
    >>> table = read_result(plan, [row])
    >>> table.tally.used, float(table.sums[1][2, 3])
    (2, 61.0)
    """
    table = BinTable(plan)
    block = block_of(plan)
    # A block cut to units in the engine is on its own clock already: the zone is used up.
    dealer = None if block is None else Dealer(replace(block, zone=None), plan.folds)
    for part in _parts(result_columns(plan), result):
        _add(table, part, dealer)
        _check_plan(plan, part)
    return table


def read_folds(plan: Plan, result: Any) -> BinTable:
    """Build a bin table from rows by fold and bin, as `read_result` does."""
    table = BinTable(plan)
    for part in _parts(fold_columns(plan), result):
        _add(table, part, None)
    return table


def _parts(names: tuple[str, ...], result: Any) -> Iterator[pa.RecordBatch]:
    if hasattr(result, "__arrow_c_stream__"):
        reader = pa.RecordBatchReader.from_stream(result)
        missing = [name for name in names if name not in reader.schema.names]
        if missing:
            raise _refusal(f"column '{missing[0]}' is missing")
        for batch in reader:
            yield batch.select(list(names))
        return
    if not isinstance(result, Iterable):
        raise _refusal(f"{type(result).__name__} cannot be read")
    rows = iter(result)
    while piece := list(itertools.islice(rows, _ROWS_AT_A_TIME)):
        if any(len(row) != len(names) for row in piece):
            raise _refusal(f"a row does not hold {len(names)} values")
        columns = zip(*piece, strict=True)
        yield pa.RecordBatch.from_arrays([pa.array(column) for column in columns], list(names))


def _refusal(received: str) -> InputError:
    return InputError("the result", "be what the statement of this plan gives", received, _REMEDY)


def _numbers(part: pa.RecordBatch, name: str, to: pa.DataType) -> NDArray[Any]:
    """A column as numbers without nulls; integers may come as decimals or floats."""
    column = part.column(name)
    if column.null_count:
        raise _refusal(f"'{name}' is null in {column.null_count:,} rows")
    try:
        if pa.types.is_decimal(column.type):
            column = column.cast(pa.decimal128(38, 0))
        return column.cast(to).to_numpy(zero_copy_only=False)
    except pa.ArrowInvalid as error:
        raise _refusal(f"'{name}' holds {column.type} ({str(error).splitlines()[0]})") from error


def _check_plan(plan: Plan, part: pa.RecordBatch) -> None:
    """Refuse the result of another plan's statement, which may have been kept for long."""
    used = part.filter(pa.array(_numbers(part, "reason", pa.int64()) == 0))
    bins = _numbers(used, "bin", pa.int64())
    low, high = (_numbers(used, name, pa.float64()) for name in ("low", "high"))
    left = plan.origin + bins * plan.width
    # A database's own logarithm may differ in the last digits.
    hair = 1e-9 * (plan.width + max(abs(plan.origin), abs(plan.high)))
    if ((low < left - hair) | (high > left + plan.width + hair)).any():
        raise _refusal("x lies in other bins: another plan made the statement")


def _add(table: BinTable, part: pa.RecordBatch, dealer: Dealer | None) -> None:
    plan = table.plan
    reason = _numbers(part, "reason", pa.int64())
    rows = _numbers(part, "rows", pa.int64())
    if ((reason < 0) | (reason > len(REASONS)) | (rows < 0)).any():
        raise _refusal("it names an unknown reason, or fewer than no rows")
    table.tally.read += int(rows.sum())
    for code in np.unique(reason[reason > 0]).tolist():
        these = int(rows[reason == code].sum())
        if REASONS[code - 1] == FILTERED:
            table.tally.filtered += these
        else:
            table.tally.refuse(REASONS[code - 1], these)
    if dealer is not None:
        met = part.filter(pa.array((reason == 0) | (reason > DEALT_FROM))).column("block")
        _, keys = dealer.deal(_as_times(met, dealer))
        table.blocks = merge_keys(table.blocks, keys)
    used = part.filter(pa.array(reason == 0))
    if not used.num_rows:
        return
    bins = _numbers(used, "bin", pa.int64())
    if dealer is None:
        folds = _numbers(used, "fold", pa.int64())
    else:
        folds, _ = dealer.deal(_as_times(used.column("block"), dealer))
    for what, values, count in (("fold", folds, plan.folds), ("bin", bins, plan.bins)):
        if ((values < 0) | (values >= count)).any():
            raise _refusal(f"a {what} lies outside 0 to {count - 1}")
    low, high = (_numbers(used, name, pa.float64()) for name in ("low", "high"))
    table.extent = np.array([min(table.extent[0], low.min()), max(table.extent[1], high.max())])
    names = sum_names(plan)
    sums = {slot: _numbers(used, name, pa.float64()) for name, slot in names.items()}
    for fold in np.unique(folds).tolist():
        mine = folds == fold
        target = table.of_fold(fold)
        for slot, values in sums.items():
            # Several blocks of one fold may share a bin.
            target[:, slot] += np.bincount(bins[mine], values[mine], plan.bins)


def _as_times(column: pa.Array, dealer: Dealer) -> pa.Array:
    """A block cut to units that comes as text (SQLite knows no times) as the times it spells."""
    if dealer.block.unit is None or not pa.types.is_string(column.type):
        return column
    try:
        return column.cast(pa.timestamp("s"))
    except pa.ArrowInvalid as error:
        raise _refusal(f"'block' holds text that is no time ({error})") from error
