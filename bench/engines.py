"""The bin table and the curve by every engine on the same rows, timed in turn in one run.

`python -m bench.engines --rows 50` prints seconds by the clock, and the ratio of the curve by Dask
on worker processes to the same curve by threads of this process. Starting clusters and sessions is
left out; every engine has two processors' worth of workers. Files are warm.
"""

import argparse
import os
import sys
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
from typing import Any

import fastsmooth
from bench.data import MILLION, parquet_files
from bench.jobs import Job
from bench.names import X, Y
from bench.ratios import Figure, line, machine, median_ratio, take_turns
from fastsmooth import Reading, Smoothing
from fastsmooth.bintable import BinTable
from fastsmooth.engines import dask as by_dask
from fastsmooth.engines import spark as by_spark
from fastsmooth.engines.parts import open_planned
from fastsmooth.engines.sql import read_result, statement
from fastsmooth.passes import count_pass
from fastsmooth.plan import Plan

CURVE_BY_DASK = 1.3
WORKERS = 2


@contextmanager
def dask_client() -> Iterator[Any]:
    """A cluster of two worker processes on this machine."""
    from distributed import Client, LocalCluster

    with (
        LocalCluster(
            n_workers=WORKERS, threads_per_worker=1, processes=True, dashboard_address=":0"
        ) as cluster,
        Client(cluster) as client,
    ):
        yield client


@contextmanager
def spark_session() -> Iterator[Any]:
    """A session of two threads in this machine's Java."""
    from pyspark.sql import SparkSession

    os.environ["PYSPARK_PYTHON"] = sys.executable
    session = (
        SparkSession.builder.master(f"local[{WORKERS}]")
        .config("spark.ui.enabled", "false")
        .config("spark.ui.showConsoleProgress", "false")
        .config("spark.driver.host", "127.0.0.1")
        .config("spark.driver.bindAddress", "127.0.0.1")
        .config("spark.driver.memory", "4g")
        .config("spark.sql.shuffle.partitions", str(WORKERS))
        .config("spark.sql.execution.arrow.maxRecordsPerBatch", "65536")
        .getOrCreate()
    )
    try:
        yield session
    finally:
        session.stop()


def jobs(files: Sequence[str], client: Any, session: Any, duck: Any) -> list[Job]:
    """The curve by threads and by Dask, and the table by each engine."""
    plan = fastsmooth.plan_for(list(files), X, Y)
    rows = local_table(files, plan).tally.used

    def check(table: BinTable) -> None:
        assert table.tally.used == rows
        assert table.total()[:, 0].sum() == rows

    def check_curve(made: fastsmooth.Curve) -> None:
        assert made.trace["rows"]["used"] == rows

    def curve(**options: Any) -> fastsmooth.Curve:
        reading, smoothing = Reading(threads=WORKERS), Smoothing(engine="binned")
        return fastsmooth.make_curve(
            list(files), X, Y, reading=reading, smoothing=smoothing, **options
        )

    frame = session.read.parquet(*files)
    frame.createOrReplaceTempView("readings")
    listed = ", ".join(f"'{file}'" for file in files)
    duck.execute(f"CREATE VIEW readings AS SELECT * FROM read_parquet([{listed}], "
                 "file_row_number = true)")  # fmt: skip
    fold = f"(file_row_number // {plan.rows_per_run}) % {plan.folds}"
    in_duckdb = statement(plan, "readings", "duckdb", fold=fold)
    in_spark = statement(plan, "readings", "spark")
    return [
        Job("curve, threads", curve, check_curve, rows),
        Job("curve, Dask", lambda: curve(counting=by_dask.counting(client)), check_curve, rows),
        Job("table, threads", lambda: local_table(files, plan), check, rows),
        Job("table, Dask", lambda: by_dask.bin_table(list(files), plan, client), check, rows),
        Job("table, duckdb", lambda: read_result(plan, duck.sql(in_duckdb)), check, rows),
        Job("table, Spark workers", lambda: by_spark.bin_table(frame, plan), check, rows),
        Job("table, Spark SQL", lambda: read_result(plan, session.sql(in_spark).toArrow()), check,
            rows),
    ]  # fmt: skip


def local_table(files: Sequence[str], plan: Plan) -> BinTable:
    """The table by threads of this process."""
    with open_planned(list(files), plan) as source:
        return count_pass(source, plan, Reading(threads=WORKERS))[0]


def main() -> int:
    """Measure and print; return 1 when the limit is exceeded."""
    parser = argparse.ArgumentParser(prog="python -m bench.engines", description=__doc__)
    parser.add_argument("--rows", type=int, default=50, help="million rows")
    parser.add_argument("--rounds", type=int, default=5, help="turns that each engine takes")
    options = parser.parse_args()
    import duckdb

    print(", ".join(f"{name} {value}" for name, value in machine().items()))
    files = parquet_files("full precision", options.rows * MILLION)
    with ExitStack() as stack:
        client = stack.enter_context(dask_client())
        session = stack.enter_context(spark_session())
        duck = stack.enter_context(duckdb.connect())
        duck.execute(f"SET threads = {WORKERS}")
        made = jobs(files, client, session, duck)
        times = take_turns(made, options.rounds)
    for job in made:
        timed = times[job.name]
        told = f"{min(timed.seconds):.3f} to {max(timed.seconds):.3f} s"
        print(line(Figure(job.name, timed.median, "s", told)))
    value, told = median_ratio(times, "curve, Dask", "curve, threads")
    limit = Figure("curve, Dask / threads", value, "x", told, CURVE_BY_DASK)
    value, told = median_ratio(times, "table, Dask", "table, threads")
    for figure in (limit, Figure("table, Dask / threads", value, "x", told)):
        print(line(figure))
    return 1 if limit.verdict == "EXCEEDED" else 0


if __name__ == "__main__":
    sys.exit(main())
