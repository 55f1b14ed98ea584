"""The bin table by Dask: row groups counted by workers, tables merged in a tree.

The rule for folds is the local one: with a block its key, else runs of consecutive rows of a row
group. Parts and the tree are cut by rows and order alone, so the table is the same to the last bit
for any number of workers, also when workers die and their parts are counted again. Against the
local table the order of additions differs (1e-12 of the size of the terms).
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from itertools import accumulate
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable
from fastsmooth.engines.parts import block_of, count_tasks, need, open_planned
from fastsmooth.errors import InputError, ReadError
from fastsmooth.passes import Counting, Progress, shown_stride, silent, thin_out
from fastsmooth.plan import Plan
from fastsmooth.source import FileRecord, Fixed, Source, open_source

if TYPE_CHECKING:
    from distributed import Client

    from fastsmooth.settings import Reading

Floats = NDArray[np.float64]

# A part takes a worker some tens of milliseconds at least: many times what handing it out costs.
_FEWEST_ROWS = 4_000_000
# Handing out costs the scheduler about a millisecond a part.
MOST_PARTS = 16_384
TABLES_PER_MERGE = 16
_RETRIES = 3


@dataclass(frozen=True)
class Part:
    """Tasks that one worker counts into one table.

    Attributes
    ----------
    files : tuple of FileRecord
        The files that hold them, as they were when all were opened.
    tasks : tuple of (int, int)
        Number of each task where only these files are opened, and its place among all tasks.
    rows : int
        Rows in them, as far as known.
    """

    files: tuple[FileRecord, ...]
    tasks: tuple[tuple[int, int], ...]
    rows: int


@dataclass(frozen=True)
class _Counted:
    """What a worker hands on: sums and a thin selection of rows, or a refusal."""

    table: BinTable
    shown: Floats
    refusal: InputError | None = None


def bin_table(
    paths: Any,
    plan: Plan,
    client: Client,
    *,
    progress: Progress = silent,
    rows_per_part: int | None = None,
) -> BinTable:
    """Count files into the table of a plan on a Dask cluster.

    Parameters
    ----------
    paths : path or list of paths
        Files, folders or globs that this process and every worker see under the same names.
    plan : Plan
        From `fastsmooth.plan_for`.
    client : distributed.Client
        Connected to the cluster.
    progress : callable
        Called as ``progress("reading", rows_done, rows_expected)``.
    rows_per_part : int or None
        Rows that a worker takes at a time, rounded up to whole row groups; None means four million,
        or more where that would make very many parts. The table depends on it in the last bits.

    Returns
    -------
    BinTable
        All rows.

    Raises
    ------
    InputError
        The data cannot be used, or a worker sees other files.
    ReadError
        A file could not be read whole, also after three retries.
    """
    with open_planned(paths, plan) as source:
        table, _ = _count(source, plan, client, progress, rows_per_part, 0)
    return table


def counting(client: Client) -> Counting:
    """Return what `fastsmooth.make_curve` can count with in place of this process' threads.

    Parameters
    ----------
    client : distributed.Client
        Connected to the cluster.
    """

    def count(
        source: Source, plan: Plan, reading: Reading, progress: Progress
    ) -> tuple[BinTable, Floats]:
        del reading
        table, shown = _count(source, plan, client, progress, None, shown_stride(source))
        return table, thin_out(shown)

    return count


@contextmanager
def connected(address: str) -> Iterator[Counting]:
    """Connect to a scheduler for as long as the context lasts; see `counting`.

    Parameters
    ----------
    address : str
        As in ``tcp://10.0.0.7:8786``.

    Raises
    ------
    InputError
        Dask is not installed, or nothing answers.
    """
    try:
        from distributed import Client
    except ImportError:
        raise need("dask") from None
    try:
        client = Client(address, timeout="10s", set_as_default=False)
    except (OSError, ValueError) as error:
        raise InputError(
            "--cluster", "be the address of a running Dask scheduler",
            f"'{address}' gave {type(error).__name__} ({str(error).splitlines()[0]})",
            "start one with 'dask scheduler', or leave it out",
        ) from error  # fmt: skip
    with client:
        yield counting(client)


def _count(
    source: Source,
    plan: Plan,
    client: Client,
    progress: Progress,
    rows_per_part: int | None,
    stride: int,
) -> tuple[BinTable, Floats]:
    from distributed import as_completed

    if not source.files:
        raise InputError(
            "DATA", "be files where a cluster counts", "they are in this process' memory",
            "write them to Parquet where the workers can read them",
        )  # fmt: skip
    # Said before any worker starts.
    block_of(plan)
    if not source.tasks:
        return BinTable(plan), np.empty((2, 0))
    parts = cut(source, plan, rows_per_part)
    leaves = [
        client.submit(
            count_part, part, plan, source.fixed, stride, retries=_RETRIES, pure=False,
        )
        for part in parts
    ]  # fmt: skip
    root = _merged(client, leaves)
    rows = {leaf.key: part.rows for leaf, part in zip(leaves, parts, strict=True)}
    # A part's table is wanted by its merge only; holding on to it here would keep it in memory.
    waiting = as_completed([*leaves, root])
    del leaves
    done = 0
    try:
        for future in waiting:
            if future.status == "error":
                future.result()
            if future.key == root.key:
                break
            done += rows[future.key]
            progress("reading", done, source.rows_expected)
        counted: _Counted = root.result()
    finally:
        waiting.clear()
        root.release()
    if counted.refusal is not None:
        raise counted.refusal
    return counted.table, counted.shown


def cut(source: Source, plan: Plan, rows_per_part: int | None) -> list[Part]:
    """Cut the tasks into parts of so many rows; files of unknown length are parts of their own.

    A task meets a few folds only, and every so many tasks meet the same ones. Tasks of the same
    folds form a part, so that its table is small and cheap to send.
    """
    tasks, place = source.tasks, source.file_of_task
    if rows_per_part is None:
        rows_per_part = max(_FEWEST_ROWS, (source.rows_expected or 0) // MOST_PARTS)
    cycle = 1 if plan.block is not None else max(1, plan.folds // plan.folds_per_task)
    rows = sum(rows_per_part if task.rows is None else task.rows for task in tasks)
    windows = max(1, min(round(rows / (cycle * rows_per_part)), len(tasks)))
    counts = Counter(place)
    offsets = dict(zip(counts, accumulate(counts.values(), initial=0), strict=False))
    parts = []
    for window in np.array_split(np.arange(len(tasks)), windows):
        for start in range(min(cycle, window.size)):
            indices = window[start::cycle].tolist()
            files = dict.fromkeys(place[index] for index in indices)
            # Number of the first task of each file, where only these files are opened.
            own = dict(zip(files, accumulate((counts[f] for f in files), initial=0), strict=False))
            numbered = ((own[f] + i - offsets[f], i) for i in indices for f in (place[i],))
            known = sum(tasks[index].rows or 0 for index in indices)
            parts.append(Part(tuple(source.files[f] for f in files), tuple(numbered), known))
    return parts


def count_part(part: Part, plan: Plan, fixed: Fixed, stride: int) -> _Counted:
    """Count one part; runs on a worker."""
    try:
        with open_source(
            [file.path for file in part.files], plan.columns, where=plan.where, fixed=fixed
        ) as source:
            for seen, told in zip(source.files, part.files, strict=True):
                if seen != told:
                    raise ReadError(
                        "DATA", "be the same files on every worker",
                        f"a worker sees '{told.path}' with another size, time or number of rows",
                        "let all workers mount one folder",
                    )  # fmt: skip
            tasks = [(source.tasks[number], index) for number, index in part.tasks]
            table, shown = count_tasks(source, plan, tasks, stride)
    except ReadError:
        # Worth a retry: a file server may have been away.
        raise
    except InputError as refusal:
        # A refusal is a result: the same rows would be refused again.
        return _Counted(BinTable(plan), np.empty((2, 0)), refusal)
    return _Counted(table, shown)


def _merged(client: Client, futures: Sequence[Any]) -> Any:
    """Merge tables in a tree of fixed shape, and return the future of the root."""
    level = 0
    while len(futures) > 1 or level == 0:
        level += 1
        # Merges go before parts that wait: then few tables are in memory at a time.
        futures = [
            client.submit(
                _merge, futures[start : start + TABLES_PER_MERGE], retries=_RETRIES, pure=False,
                priority=level,
            )
            for start in range(0, len(futures), TABLES_PER_MERGE)
        ]  # fmt: skip
    return futures[0]


def _merge(parts: Sequence[_Counted]) -> _Counted:
    """Add tables in the order given; runs on a worker. The first refusal wins."""
    refused = next((part for part in parts if part.refusal is not None), None)
    if refused is not None:
        return refused
    total = BinTable(parts[0].table.plan)
    for part in parts:
        total.merge(part.table)
    return _Counted(total, np.concatenate([part.shown for part in parts], axis=1))
