"""A written plan for 10^12 rows on 1,000 cores, from costs measured here.

`python -m bench.trillion` measures what each stage costs on this machine and writes
`bench/trillion.md`. Nothing of that size was run: the plan says what was measured, what is assumed,
and what follows by multiplication.
"""

import argparse
import pickle
import tempfile
import time
from collections.abc import Callable
from dataclasses import dataclass
from functools import partial
from pathlib import Path
from typing import Any

import pyarrow as pa
import pyarrow.parquet as pq

import fastsmooth
from bench.data import KINDS, MILLION, parquet_files
from bench.engines import dask_client, local_table
from bench.names import X, Y
from bench.ratios import machine
from fastsmooth import Reading
from fastsmooth.bintable import BinTable
from fastsmooth.engines.dask import MOST_PARTS, TABLES_PER_MERGE
from fastsmooth.engines.parts import open_planned
from fastsmooth.passes import count_pass

# Assumed, not measured. One place, so that a reader can put in figures of a cluster at hand.
ROWS = 10**12
CORES = 1000
MACHINES = 32
MACHINE_BYTES_PER_SECOND = 2.5e9  # 20 Gbit/s from the storage to each machine
ROWS_PER_FILE = 50 * MILLION
ROWS_PER_GROUP = 1 * MILLION
PARTS = MOST_PARTS
FANNING_IN = TABLES_PER_MERGE
SHUFFLED_BYTES = 4 + 4 + 4 + 8 + 2 * 8 + 7 * 8  # keys, rows, extent and sums of a bin
SLOWEST = 1.3  # the last parts finish so much later than the average ones

_ROUNDS = 9
_FILES_OPENED = 200
_TASKS = 2000


@dataclass(frozen=True)
class Costs:
    """What was measured here; seconds and bytes.

    Attributes
    ----------
    row_seconds : dict of str to float
        Reading and counting a row on one core, by kind of data.
    row_bytes : dict of str to float
        A row in its file.
    open_seconds : float
        Opening a file and reading its footer.
    submit_seconds : float
        Handing a task out to a worker and hearing of its end.
    merge_seconds : float
        Adding one table with all folds to another.
    table_bytes : int
        A table with all folds as it is sent.
    part_bytes : int
        A table of one part, which meets few folds.
    part_rows : int
        Its bins, at most.
    send_seconds : float
        Writing and reading a table for the way, the way aside.
    finish_seconds : float
        Search, curve and band from the table.
    """

    row_seconds: dict[str, float]
    row_bytes: dict[str, float]
    open_seconds: float
    submit_seconds: float
    merge_seconds: float
    table_bytes: int
    part_bytes: int
    part_rows: int
    send_seconds: float
    finish_seconds: float


def timed(run: Callable[[], Any]) -> float:
    """Seconds of the fastest of some runs: what it costs when nothing else wants the processor."""
    run()
    seconds = []
    for _ in range(_ROUNDS):
        start = time.perf_counter()
        run()
        seconds.append(time.perf_counter() - start)
    return min(seconds)


def measure(rows: int) -> Costs:
    """Take all figures on this machine."""
    row_seconds, row_bytes = {}, {}
    for kind in KINDS:
        files = parquet_files(kind, rows)
        plan = fastsmooth.plan_for(files, X, Y)
        with open_planned(files, plan) as source:
            seconds = timed(partial(count_pass, source, plan, Reading(threads=1)))
        row_seconds[kind] = seconds / rows
        row_bytes[kind] = sum(Path(file).stat().st_size for file in files) / rows
    files = parquet_files("full precision", rows)
    plan = fastsmooth.plan_for(files, X, Y)
    table = local_table(files, plan)
    part = BinTable(plan)
    for fold in range(plan.folds_per_task):
        part.of_fold(fold)
    sent = pickle.dumps(table, protocol=5)
    target = BinTable(plan)
    target.merge(table)
    return Costs(
        row_seconds, row_bytes, _open_seconds(), _submit_seconds(),
        timed(lambda: target.merge(table)), len(sent), len(pickle.dumps(part, protocol=5)),
        len(part.sums) * plan.bins,
        timed(lambda: pickle.loads(pickle.dumps(table, protocol=5))),
        timed(lambda: fastsmooth.curve_from_table(table)),
    )  # fmt: skip


def _open_seconds() -> float:
    """Seconds to open one of many files with as many row groups as the plan's."""
    groups = ROWS_PER_FILE // ROWS_PER_GROUP
    rows = pa.table({X: pa.array([1.0 + n for n in range(groups)]), Y: pa.array([2.0] * groups)})
    with tempfile.TemporaryDirectory() as folder:
        paths = [f"{folder}/{n:04d}.parquet" for n in range(_FILES_OPENED)]
        for path in paths:
            pq.write_table(rows, path, row_group_size=1)
        plan = fastsmooth.plan_for(paths[:1], X, Y)
        return timed(lambda: open_planned(paths, plan).close()) / _FILES_OPENED


def _submit_seconds() -> float:
    from distributed import wait

    with dask_client() as client:
        return timed(
            lambda: wait([client.submit(abs, n, pure=False) for n in range(_TASKS)])
        ) / _TASKS  # fmt: skip


def written(costs: Costs, rows: int) -> str:
    """Write the plan."""
    files = ROWS // ROWS_PER_FILE
    per_part = ROWS // PARTS
    bandwidth = MACHINES * MACHINE_BYTES_PER_SECOND
    levels, merges, tables = 0, 0, PARTS
    while tables > 1:
        tables = -(-tables // FANNING_IN)
        levels, merges = levels + 1, merges + tables
    sent = PARTS * costs.part_bytes + merges * costs.table_bytes
    opening = files * costs.open_seconds
    submitting = (PARTS + merges) * costs.submit_seconds
    merging = PARTS * costs.merge_seconds / CORES + levels * FANNING_IN * costs.merge_seconds
    moving = sent / bandwidth + levels * (
        costs.send_seconds + FANNING_IN * costs.table_bytes / MACHINE_BYTES_PER_SECOND
    )
    lines = [
        "# A plan for 10^12 rows",
        "",
        "Made by `python -m bench.trillion`. **Nothing of this size was run.** Costs were measured "
        f"on the machine below with {rows:,} rows; the rest is assumed (next table) or follows by "
        "multiplication.",
        "",
        ", ".join(f"{name} {value}" for name, value in machine().items()),
        "",
        "## Assumed",
        "| what | figure |",
        "|---|---|",
        f"| rows | 10^12 of two columns, in {files:,} files of {ROWS_PER_FILE:,} rows, row groups "
        f"of {ROWS_PER_GROUP:,} |",
        f"| cores | {CORES:,} like the one measured, in {MACHINES} machines |",
        f"| storage to each machine | {MACHINE_BYTES_PER_SECOND / 1e9:g} GB/s, all machines at "
        f"once: {bandwidth / 1e9:,.0f} GB/s |",
        f"| plan | 8,192 bins, 32 folds; {PARTS:,} parts of about {per_part / 1e6:.0f} million "
        f"rows; tables merged {FANNING_IN} at a time in {levels} levels |",
        f"| uneven ends | the last parts finish {SLOWEST:g} times later than the average |",
        "",
        "## Measured here, on one core (the fastest of nine runs)",
        "| stage | cost |",
        "|---|---|",
    ]
    for kind in KINDS:
        lines.append(
            f"| read and count a row, {kind} | {costs.row_seconds[kind] * 1e9:.1f} ns, "
            f"{costs.row_bytes[kind]:.1f} bytes of file |"
        )
    lines += [
        f"| open a file of {ROWS_PER_FILE // ROWS_PER_GROUP} row groups | "
        f"{costs.open_seconds * 1e3:.2f} ms |",
        f"| hand out a task and hear of its end | {costs.submit_seconds * 1e3:.2f} ms |",
        f"| add a table with all folds to another | {costs.merge_seconds * 1e3:.1f} ms |",
        f"| write and read such a table for the way | {costs.send_seconds * 1e3:.1f} ms |",
        f"| size of such a table; of a part's | {costs.table_bytes / 1e6:.1f} MB; "
        f"{costs.part_bytes / 1e6:.1f} MB |",
        f"| search, curve and band from the table | {costs.finish_seconds:.2f} s |",
        "",
        "## What follows",
        "| stage | where | " + " | ".join(KINDS) + " |",
        "|---|---|" + "---|" * len(KINDS),
    ]
    totals = {}
    stages: list[tuple[str, str, dict[str, float]]] = [
        (f"open {files:,} files, plan", "one process", dict.fromkeys(KINDS, opening)),
        ("hand out parts and merges", "scheduler, beside counting",
         dict.fromkeys(KINDS, submitting)),
        ("storage delivers", "network, beside counting",
         {kind: ROWS * costs.row_bytes[kind] / bandwidth for kind in KINDS}),
        ("count", f"{CORES:,} cores",
         {kind: SLOWEST * ROWS * costs.row_seconds[kind] / CORES for kind in KINDS}),
        ("merge tables", "workers", dict.fromkeys(KINDS, merging)),
        ("send tables", "network", dict.fromkeys(KINDS, moving)),
        ("search, curve, band", "one process", dict.fromkeys(KINDS, costs.finish_seconds)),
    ]  # fmt: skip
    for name, where, seconds in stages:
        cells = " | ".join(f"{seconds[kind]:,.1f} s" for kind in KINDS)
        lines.append(f"| {name} | {where} | {cells} |")
    slowest = {}
    for kind in KINDS:
        beside = {name: seconds[kind] for name, where, seconds in stages[1:4]}
        slowest[kind] = max(beside, key=lambda name: beside[name])
        totals[kind] = sum(s[kind] for name, _, s in stages if name not in beside) + max(
            beside.values()
        )
    cells = " | ".join(f"**{totals[kind]:,.0f} s**" for kind in KINDS)
    lines += [
        f"| expected, in all | the slowest of what goes on beside each other counts | {cells} |",
        "",
        "## Over the network",
        f"Rows do not move: each is read once, by the worker that counts it "
        f"({' or '.join(f'{ROWS * costs.row_bytes[kind] / 1e12:,.1f} TB' for kind in KINDS)} from "
        "the storage). "
        f"Between workers only bin tables move: {PARTS:,} of {costs.part_bytes / 1e6:.1f} MB and "
        f"{merges:,} of {costs.table_bytes / 1e6:.1f} MB, at most {sent / 1e9:,.0f} GB, or "
        f"{sent / (ROWS * costs.row_bytes['full precision']):.1e} of the data; to the process that "
        f"asked, one table of {costs.table_bytes / 1e6:.1f} MB. Spark sends the same bins as rows "
        f"of its shuffle: {PARTS:,} partitions of {costs.part_rows:,} rows of {SHUFFLED_BYTES} "
        f"bytes, {PARTS * costs.part_rows * SHUFFLED_BYTES / 1e9:,.0f} GB.",
        "",
        "## The first bottleneck",
    ]
    for kind in KINDS:
        named = max(stages, key=lambda stage: stage[2][kind])
        lines.append(
            f"- {kind}: **{named[0]}** ({named[2][kind]:,.0f} s of {totals[kind]:,.0f} s); while "
            f"workers count, what they wait for is: {slowest[kind]}."
        )
    lines += [
        "",
        "What to do about each, in the order in which they come up:",
        "- *Storage*: columns that compress (rounded readings) cost a fraction; a `--where` on a "
        "sorted column skips row groups by their statistics.",
        "- *Opening files*: one process reads all footers before it hands anything out, so the "
        "number of files counts, not the rows. Files of more rows are the remedy; splitting the "
        "opening over workers is not built.",
        f"- *Scheduler*: parts grow with the rows so that there are never more than {PARTS:,}.",
        "- *Merging* does not grow with the rows: it depends on parts, bins and folds alone.",
        "- *Precision*: a bin of 10^8 rows still adds up to 1e-12 of the size of its terms, "
        "because parts are summed apart and then in a tree.",
        "",
    ]
    return "\n".join(lines)


def main() -> None:
    """Measure, write the plan, print it."""
    parser = argparse.ArgumentParser(prog="python -m bench.trillion", description=__doc__)
    parser.add_argument("--rows", type=int, default=20, help="million rows measured")
    parser.add_argument("--out", type=Path, default=Path(__file__).with_name("trillion.md"))
    options = parser.parse_args()
    rows = options.rows * MILLION
    text = written(measure(rows), rows)
    options.out.write_text(text)
    print(text)


if __name__ == "__main__":
    main()
