"""Speed of the curve, of its parts, and of bare scans and GROUP BYs beside it.

Run by `pytest bench`. Everything here is warm: files in the operating system's cache, kernels
compiled and loaded, one untimed round first. Set-up is not timed; results are checked. Cold
starts are in `bench.ratios` and, for compiling, in `test_kernels.py`.
"""

import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from bench.jobs import Job, curve_name, rounded_job, search_name, table_jobs, whole_jobs
from fastsmooth.settings import usable_cores

_ROUNDS = 5
_CORES = usable_cores()
_WHOLE = (
    "scan, pyarrow",
    "scan, polars",
    "GROUP BY, polars",
    "GROUP BY, duckdb",
    *(curve_name(threads) for threads in dict.fromkeys((1, 2, _CORES))),
)
_TABLE = (
    "accumulation",
    "pyramid",
    *(search_name(widths, t) for widths in (48, 64) for t in dict.fromkeys((1, _CORES))),
    "pyramid and search, 64 widths",
    "curve and band",
    "curve read off",
)


@pytest.fixture(scope="module")
def whole(files: list[str]) -> dict[str, Job]:
    return {job.name: job for job in whole_jobs(files)}


@pytest.fixture(scope="module")
def table() -> dict[str, Job]:
    return {job.name: job for job in table_jobs()}


def time_job(benchmark: BenchmarkFixture, job: Job, rounds: int = _ROUNDS) -> None:
    """Time a job after one untimed round, and check its result."""
    result = benchmark.pedantic(job.run, rounds=rounds, iterations=1, warmup_rounds=1)
    job.check(result)
    if job.rows is not None and benchmark.stats is not None:
        benchmark.extra_info["ns_a_row"] = benchmark.stats.stats.median / job.rows * 1e9


def test_job_names_are_complete(whole: dict[str, Job], table: dict[str, Job]) -> None:
    assert set(whole) == set(_WHOLE)
    assert set(table) == set(_TABLE)


@pytest.mark.benchmark(group="from files")
@pytest.mark.parametrize("name", _WHOLE)
def test_from_files(benchmark: BenchmarkFixture, whole: dict[str, Job], name: str) -> None:
    """Warm. Two float64 columns of full precision, all rows."""
    time_job(benchmark, whole[name])


@pytest.mark.benchmark(group="from files, rounded")
def test_rounded_readings(benchmark: BenchmarkFixture, rounded_files: list[str]) -> None:
    """Warm. Readings in steps of 0.01, in the order of time, dictionary and zstd."""
    time_job(benchmark, rounded_job(rounded_files))


@pytest.mark.benchmark(group="from memory")
@pytest.mark.parametrize("name", _TABLE)
def test_from_memory(benchmark: BenchmarkFixture, table: dict[str, Job], name: str) -> None:
    """Warm. Readings or a bin table of 8192 bins and 32 folds, in memory."""
    time_job(benchmark, table[name], rounds=2 * _ROUNDS)
