"""The project's speed and memory limits, measured against references in the same run.

`python -m bench.ratios --rows 50` prints one line per figure: figure, limit, reference. Exit code
1 when a limit is exceeded. Timings: the jobs take turns, round after round, each turn an untimed
run and a timed one; a figure is the median over rounds, a ratio the median of the ratios within
rounds. Processor seconds of the whole process stand beside: they show how much of a time was spent
waiting for processors that others used. Files are warm (in the operating system's cache).
"""

import argparse
import gc
import json
import os
import platform
import statistics
import sys
import time
from collections.abc import Sequence
from dataclasses import asdict, dataclass, field
from importlib.metadata import version
from pathlib import Path

from bench import fresh
from bench.data import MILLION, parquet_files
from bench.jobs import Job, curve_name, rounded_job, search_name, table_jobs, whole_jobs
from fastsmooth.settings import usable_cores

# The limits that the project sets itself.
CURVE_TO_SCAN = 2.5
CURVE_TO_GROUP_BY = 0.5
SEARCH_SECONDS = 0.1
IMPORT_SECONDS = 0.3
HELP_SECONDS = 0.4
FIRST_RUN_MORE_SECONDS = 12.0
SECOND_RUN_MORE_SECONDS = 1.5
PEAK_MB = 500.0
LARGE_PEAK_RATIO = 1.1
BILLION_ROWS_SECONDS = 15.0
# Ratios and rates are promised for so many rows; with fewer, the search outweighs the reading.
LEAST_ROWS = 50 * MILLION

_SCANS = ("scan, pyarrow", "scan, polars")
_GROUP_BYS = ("GROUP BY, polars", "GROUP BY, duckdb")
_START_UPS = 7


@dataclass(frozen=True)
class Timed:
    """What the rounds of one job took.

    Attributes
    ----------
    seconds : list of float
        By the clock, one per round.
    processor_seconds : list of float
        Of all threads of the process.
    """

    seconds: list[float] = field(default_factory=list)
    processor_seconds: list[float] = field(default_factory=list)

    @property
    def median(self) -> float:
        """Median seconds by the clock."""
        return statistics.median(self.seconds)


Times = dict[str, Timed]


@dataclass(frozen=True)
class Figure:
    """One line of the report.

    Attributes
    ----------
    name : str
        What was measured.
    value : float
        The figure.
    unit : str
        Its unit.
    reference : str
        What it is measured against, or how.
    limit : float or None
        What the project promises; None where it promises nothing.
    """

    name: str
    value: float
    unit: str
    reference: str = ""
    limit: float | None = None

    @property
    def verdict(self) -> str:
        """``held``, ``EXCEEDED``, or empty without a limit."""
        if self.limit is None:
            return ""
        return "held" if self.value <= self.limit else "EXCEEDED"


def take_turns(jobs: Sequence[Job], rounds: int) -> Times:
    """Time the jobs in turn, each round begun by another job; check every result.

    A turn is one untimed run and one timed one. Without the untimed run a job pays for the memory
    that the job before it has given back, which makes a fast scan up to five times slower
    (14 ms against 30 to 90 ms for 10 million rows) and would flatter every ratio to it.

    Returns
    -------
    dict of str to Timed
        By the names of the jobs.
    """
    for job in jobs:
        job.check(job.run())
    times = {job.name: Timed() for job in jobs}
    for turn in range(rounds):
        first = turn % len(jobs)
        for job in (*jobs[first:], *jobs[:first]):
            job.run()
            gc.collect()
            start, processor_start = time.perf_counter(), time.process_time()
            result = job.run()
            seconds, processor = time.perf_counter() - start, time.process_time() - processor_start
            times[job.name].seconds.append(seconds)
            times[job.name].processor_seconds.append(processor)
            job.check(result)
            # Freed outside the next job's time.
            del result
    return times


def median_ratio(times: Times, name: str, other: str) -> tuple[float, str]:
    """Return the median ratio of two jobs' seconds within rounds, and its spread in words."""
    ratios = [a / b for a, b in zip(times[name].seconds, times[other].seconds, strict=True)]
    spread = f"{min(ratios):.2f} to {max(ratios):.2f}"
    return statistics.median(ratios), f"{other} {times[other].median:.3f} s ({spread})"


def ratio_figures(times: Times, curve: str, passes: int, limits_apply: bool) -> list[Figure]:
    """The curve against bare scans and GROUP BYs."""
    fastest = min(_SCANS, key=lambda name: times[name].median)
    figures = []
    for other in (*_SCANS, *_GROUP_BYS):
        value, reference = median_ratio(times, curve, other)
        limit = CURVE_TO_GROUP_BY if other in _GROUP_BYS else None
        if other == fastest:
            limit, reference = CURVE_TO_SCAN, f"the fastest scan: {reference}"
        limit = limit if limits_apply else None
        figures.append(Figure(f"{curve} / {other}", value, "x", reference, limit))
    told = f"{passes} pass{'es' if passes > 1 else ''} over the data"
    return [Figure(curve, times[curve].median, "s", told), *figures]


def time_figures(jobs: Sequence[Job], times: Times) -> list[Figure]:
    """Every job's median; nanoseconds a row beside it where rows mean something."""
    limits = {
        search_name(64, usable_cores()): SEARCH_SECONDS,
        "pyramid and search, 64 widths": SEARCH_SECONDS,
    }
    figures = []
    for job in jobs:
        timed = times[job.name]
        value = timed.median
        reference = f"{min(timed.seconds):.4f} to {max(timed.seconds):.4f} s"
        reference += f", processors {statistics.median(timed.processor_seconds):.4f} s"
        if job.rows is not None:
            reference += f", {value / job.rows * 1e9:.2f} ns a row"
        figures.append(Figure(job.name, value, "s", reference, limits.get(job.name)))
    return figures


def billion_figure(job: Job, times: Times, limits_apply: bool) -> Figure:
    """Seconds for a billion rounded rows, at most: the search, which does not grow with the
    rows, is scaled up with the rest.
    """
    rows = job.rows or 0
    value = times[job.name].median / rows * 1e9
    limit = BILLION_ROWS_SECONDS if limits_apply else None
    return Figure(
        "a billion rounded rows, at most", value, "s", f"scaled from {rows:,} rows", limit
    )


def start_up_figures() -> list[Figure]:
    """Whole processes that import, show help, or load the kernels."""
    times = fresh.start_up(_START_UPS)
    bare = f"whole process; bare interpreter {statistics.median(times['interpreter']):.3f} s"
    limits = {"import fastsmooth": IMPORT_SECONDS, "fastsmooth --help": HELP_SECONDS}
    return [
        Figure(name, statistics.median(seconds), "s", bare, limits.get(name))
        for name, seconds in times.items()
        if name != "interpreter"
    ]


def run_figures(files: Sequence[str], in_process: float) -> list[Figure]:
    """First run ever and second run, above the same curve in process with warm kernels."""
    runs = fresh.first_and_second_run(files)
    reference = f"whole process {{:.2f}} s, in process {in_process:.2f} s"
    return [
        Figure("first run ever, more than in process", runs.first - in_process, "s",
               reference.format(runs.first), FIRST_RUN_MORE_SECONDS),
        Figure("second run, more than in process", runs.second - in_process, "s",
               reference.format(runs.second), SECOND_RUN_MORE_SECONDS),
    ]  # fmt: skip


def memory_figures(files: Sequence[str], larger: Sequence[str] | None) -> list[Figure]:
    """Peak memory of fresh processes; that of more rows against that of fewer."""
    peak = fresh.peak(files)
    figures = [_peak_figure(peak, PEAK_MB)]
    if larger is not None:
        large = fresh.peak(larger)
        figures += [
            _peak_figure(large, None),
            Figure("peak memory, more rows / fewer", large.peak_bytes / peak.peak_bytes, "x",
                   f"{large.rows:,} rows / {peak.rows:,} rows", LARGE_PEAK_RATIO),
        ]  # fmt: skip
    return figures


def _peak_figure(peak: fresh.Peak, limit: float | None) -> Figure:
    told = f"fresh process, {peak.passes} pass{'es' if peak.passes > 1 else ''} over the data"
    return Figure(f"peak memory, {peak.rows:,} rows", peak.peak_bytes / 1e6, "MB", told, limit)


def machine() -> dict[str, object]:
    """What the figures were taken on."""
    libraries = ("fastsmooth", "numpy", "numba", "pyarrow", "polars", "duckdb")
    return {
        "processors": usable_cores(),
        "machine": platform.machine(),
        "system": f"{platform.system()} {platform.release()}",
        "python": platform.python_version(),
        "load_average_at_start": os.getloadavg()[0],
        **{name: version(name) for name in libraries},
    }


def line(figure: Figure) -> str:
    """Write a figure for people."""
    limit = "" if figure.limit is None else f"limit {figure.limit:g}"
    return (
        f"{figure.name:<44} {figure.value:>9.3f} {figure.unit:<3} {limit:<11} {figure.verdict:<9} "
        f"{figure.reference}"
    ).rstrip()


def measure(options: argparse.Namespace) -> tuple[list[Figure], Times]:
    """Take all figures, printing each as soon as it is known."""
    taken: list[Figure] = []
    all_times: Times = {}

    def tell(title: str, figures: Sequence[Figure]) -> None:
        print(f"\n{title}")
        for figure in figures:
            print(line(figure), flush=True)
        taken.extend(figures)

    rows = options.rows * MILLION
    if options.folder is None:
        files = parquet_files("full precision", rows)
    else:
        files = sorted(str(path) for path in options.folder.glob("*.parquet"))
    tell("Start-up, fresh processes", start_up_figures())

    jobs = whole_jobs(files)
    # Its files are other files: it takes its turns with the rest, but is compared with none.
    rounded = rounded_job(parquet_files("rounded", rows))
    times = take_turns([*jobs, rounded], options.rounds)
    all_times |= times
    curve = curve_name(usable_cores())
    made = next(job for job in jobs if job.name == curve).run()
    tell("From files, in turn", time_figures([*jobs, rounded], times))
    passes, counted = made.trace["engine"]["passes"], made.trace["rows"]["used"]
    large = counted >= LEAST_ROWS
    note = "" if large else f" (no limits: they are set for {LEAST_ROWS:,} rows or more)"
    tell(f"Ratios{note}", ratio_figures(times, curve, passes, large))
    tell("Large data", [billion_figure(rounded, times, large)])

    jobs = table_jobs()
    times = take_turns(jobs, options.rounds)
    all_times |= times
    tell("From memory, in turn", time_figures(jobs, times))

    tell("Whole processes", run_figures(files, all_times[curve].median))
    larger = parquet_files("full precision", options.large * MILLION) if options.large else None
    tell("Memory", memory_figures(files, larger))
    return taken, all_times


def main() -> int:
    """Measure, print, write; return 1 when a limit is exceeded."""
    parser = argparse.ArgumentParser(prog="python -m bench.ratios", description=__doc__)
    parser.add_argument("--rows", type=int, default=50, help="million rows")
    parser.add_argument("--large", type=int, help="million rows of the larger memory figure")
    parser.add_argument("--rounds", type=int, default=7, help="turns that each job takes")
    parser.add_argument("--folder", type=Path, help="Parquet files to use in place of made ones")
    parser.add_argument("--out", type=Path, help="JSON file to write")
    options = parser.parse_args()
    about = machine()
    print(", ".join(f"{name} {value}" for name, value in about.items()))
    figures, times = measure(options)
    exceeded = [figure.name for figure in figures if figure.verdict == "EXCEEDED"]
    print(f"\n{len(exceeded)} limits exceeded" + (f": {'; '.join(exceeded)}" if exceeded else ""))
    if options.out is not None:
        told = {
            "machine": about,
            "million_rows": options.rows,
            "folder": None if options.folder is None else str(options.folder),
            "rounds": options.rounds,
            "figures": [{**asdict(figure), "verdict": figure.verdict} for figure in figures],
            "times": {name: asdict(timed) for name, timed in times.items()},
        }
        options.out.write_text(json.dumps(told, indent=2) + "\n")
    return 1 if exceeded else 0


if __name__ == "__main__":
    sys.exit(main())
