"""The bin table by Spark: partitions counted by Python workers, sums added by Spark's GROUP BY.

The workers run the same compiled code as everywhere and send the bins of their partition, not its
rows. With a block in the plan the folds are those of every engine; without one a run is so many
consecutive rows of a partition. Spark adds what arrives first, so that two runs may differ in the
last bits.
"""

from __future__ import annotations

import json
import warnings
from collections.abc import Iterator
from functools import partial
from typing import TYPE_CHECKING, Any

import numpy as np
import pyarrow as pa

from fastsmooth.bintable import BinTable, sum_names
from fastsmooth.blocks import merge_keys
from fastsmooth.engines.parts import block_of, check_schema, count_batches, need
from fastsmooth.engines.result import FILTERED, REASONS, fold_columns, read_folds
from fastsmooth.errors import InputError
from fastsmooth.plan import Plan

if TYPE_CHECKING:
    from pyspark.sql import DataFrame

# Rows that carry no sums say what they do in place of a reason: keys of blocks, and refusals.
_WORDS = "words"
_KEYS = -1
_REFUSAL = -2


def bin_table(df: DataFrame, plan: Plan) -> BinTable:
    """Count a Spark data frame into the table of a plan.

    Parameters
    ----------
    df : pyspark.sql.DataFrame
        The rows; other columns than the plan's are not sent to the workers.
    plan : Plan
        From `fastsmooth.plan_for`.

    Returns
    -------
    BinTable
        All rows.

    Raises
    ------
    InputError
        pyspark is missing, or a column or the plan's filter does not suit the frame.
    """
    try:
        from pyspark.sql import functions
    except ImportError:
        raise need("spark") from None
    block_of(plan)
    schema = df.limit(0).toArrow().schema
    used = check_schema(schema, plan, "the Spark frame")
    # Names may hold dots, which Spark takes for paths.
    named = df.select(*[df["`" + name.replace("`", "``") + "`"] for name in used])
    sums = list(sum_names(plan))
    with warnings.catch_warnings():
        # It asks for pandas before any Arrow function, and does not know the newest one; nothing
        # of pandas is used here.
        warnings.filterwarnings("ignore", "PySpark does not yet fully support pandas")
        counted = named.mapInArrow(partial(_count_partition, plan), _spark_schema(plan))
    added = counted.groupBy("reason", "fold", "bin", _WORDS).agg(
        functions.sum("rows").alias("rows"),
        functions.min("low").alias("low"),
        functions.max("high").alias("high"),
        *[functions.sum(name).alias(name) for name in sums],
    )
    whole = added.toArrow()
    reason = whole["reason"].to_numpy()
    refusals = sorted(whole.filter(pa.array(reason == _REFUSAL))[_WORDS].to_pylist())
    if refusals:
        raise InputError(*json.loads(refusals[0]))
    table = read_folds(plan, whole.filter(pa.array(reason >= 0)))
    keys = whole.filter(pa.array(reason == _KEYS))[_WORDS].to_pylist()
    table.blocks = merge_keys(table.blocks, {json.loads(key) for key in keys})
    return table


def _columns(plan: Plan) -> pa.Schema:
    whole = {"reason": pa.int32(), "fold": pa.int32(), "bin": pa.int32(), "rows": pa.int64()}
    fields = [(name, whole.get(name, pa.float64())) for name in fold_columns(plan)]
    return pa.schema([*fields, (_WORDS, pa.string())])


def _spark_schema(plan: Plan) -> str:
    words = {pa.int32(): "int", pa.int64(): "bigint", pa.float64(): "double", pa.string(): "string"}
    return ", ".join(f"`{field.name}` {words[field.type]}" for field in _columns(plan))


def _count_partition(plan: Plan, batches: Iterator[pa.RecordBatch]) -> Iterator[pa.RecordBatch]:
    """Count one partition; runs on an executor, which must have fastsmooth installed."""
    from itertools import chain

    from pyspark import TaskContext

    first = next(batches, None)
    if first is None:
        return
    context = TaskContext.get()
    index = 0 if context is None else context.partitionId()
    name = f"partition {index}"
    try:
        table = count_batches(first.schema, chain([first], batches), plan, index, name)
    except InputError as refusal:
        # As a row: an error here would reach the caller as a page of Java.
        parts = (refusal.argument, refusal.requirement, refusal.received, refusal.remedy)
        yield _batch(plan, reason=[_REFUSAL], bin=[0], rows=[0], words=[json.dumps(parts)])
        return
    yield from _rows_of(table)


def _batch(plan: Plan, **columns: Any) -> pa.RecordBatch:
    """Lay columns of equal length out as rows of a result; those not given are null."""
    schema, rows = _columns(plan), len(columns["reason"])
    arrays = [
        pa.array(columns[field.name], field.type)
        if field.name in columns
        else pa.nulls(rows, field.type)
        for field in schema
    ]
    return pa.RecordBatch.from_arrays(arrays, schema=schema)


def _rows_of(table: BinTable) -> Iterator[pa.RecordBatch]:
    """Turn a table into rows that add up by GROUP BY; see `fastsmooth.engines.result`."""
    plan, tally = table.plan, table.tally
    told = {FILTERED: tally.filtered, **tally.refused}
    codes = [REASONS.index(reason) + 1 for reason in told]
    yield _batch(plan, reason=codes, bin=[0] * len(told), rows=list(told.values()))
    keys = [json.dumps(key, default=str) for key in table.blocks]
    none = [0] * len(keys)
    yield _batch(plan, reason=[_KEYS] * len(keys), bin=none, rows=none, words=keys)
    names = sum_names(plan)
    unsaid = tally.used
    for fold, sums in sorted(table.sums.items()):
        bins = np.flatnonzero(sums[:, 0])
        if not bins.size:
            continue
        # Bins hold weights; how many rows those are is said once for the partition.
        rows = np.zeros(bins.size, np.int64)
        rows[0], unsaid = unsaid, 0
        ends = {
            name: np.full(bins.size, end)
            for name, end in zip(("low", "high"), table.extent.tolist(), strict=True)
        }
        yield _batch(
            plan, reason=np.zeros(bins.size, np.int32), fold=np.full(bins.size, fold),
            bin=bins, rows=rows, **ends,
            **{name: sums[bins, slot] for name, slot in names.items()},
        )  # fmt: skip
