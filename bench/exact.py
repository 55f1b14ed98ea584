"""What the exact kernels cost, and what general-purpose references take for the same work.

`python -m bench.exact` lets all jobs of a kind take turns, round after round, in one thread, and
prints one table: nanoseconds of processor for a row and width (or k), the reference's beside ours,
the median of the ratios within rounds, and the limits that the project sets itself. Time in which
others had the processor does not count; what they do to caches and shared cores does. The table is
written to `bench/results/exact.md`. Exit code 1 when a limit is exceeded.
"""

import argparse
import os
import statistics
import sys
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np

from bench.jobs import Job
from bench.ratios import Times, machine, take_turns
from bench.references import (
    Sorted,
    dense_scores,
    direct_scores,
    kernel_regression_scores,
    neighbour_lines,
    neighbour_lines_statsmodels,
    neighbour_scores,
    neighbour_scores_sklearn,
    smooth_by_spline,
    smooth_with_own_width,
    window_scores,
)
from tests.cases import NOISE_SD_KW

# The limits, in nanoseconds a row and width (both estimators), or a row and k.
WINDOW_LIMITS = {"epanechnikov": 20.0, "biweight": 30.0}
NEIGHBOUR_LIMIT = 10.0
# From so many rows on the windows must beat the dense loops.
BEATS_DENSE_FROM = 2_000

SHARES = (1e-5, 1e-4, 1e-3, 1e-2, 0.1, 0.3)
NEIGHBOURS = (5, 50, 500, 5_000)
DENSE_SIZES = (500, 1_000, 2_000, 5_000, 10_000)
DENSE_SHARES = (0.003, 0.01, 0.03, 0.1, 0.3)
_SMALLEST = 100_000
# A timed run shorter than this is repeated within its turn.
_LEAST_ROWS_A_RUN = 200_000
_AFFORDABLE_PAIRS = 1e9


@dataclass(frozen=True)
class Line:
    """One line of the table.

    Attributes
    ----------
    what, at : str
        The work, and at which width or k.
    rows : int
        Rows.
    results : int
        Rows times widths that one run of the job goes through.
    ours, reference : str
        Names of the jobs; the reference may be empty.
    repeats : int
        How often our job does the work in one run; the reference does it once.
    limit : float or None
        Most nanoseconds, where the project promises something.
    """

    what: str
    at: str
    rows: int
    results: int
    ours: str
    reference: str = ""
    repeats: int = 1
    limit: float | None = None


@dataclass(frozen=True)
class Suite:
    """Jobs that take turns, and the lines that are made of their times."""

    jobs: list[Job]
    lines: list[Line]


def repeated(work: Callable[[], Any], times: int) -> Callable[[], Any]:
    """Return what does the work several times and gives the last result."""

    def run() -> Any:
        for _ in range(times):
            result = work()
        return result

    return run


def close_to(expected: np.ndarray, rtol: float = 1e-7) -> Callable[[np.ndarray], None]:
    """Return a check that a result is the expected one."""

    def check(result: np.ndarray) -> None:
        np.testing.assert_allclose(result, expected, rtol=rtol)

    return check


def repeats_for(results: int) -> int:
    """How often to repeat short work, so that a run is long enough to time."""
    return max(1, _LEAST_ROWS_A_RUN // results)


def window_suite(rows: int) -> Suite:
    """Leave-one-out at one width after another, from a few rows in a window to most of them."""
    data = Sorted.of(rows)
    suite = Suite([], [])
    for kernel, limit in WINDOW_LIMITS.items():
        for share in SHARES:
            widths = [share * data.span]
            name = f"{kernel}, {rows}, {share:g}"
            # Where windows are too long for direct sums, the tests vouch for the result.
            affordable = 2.0 * share * rows * rows <= _AFFORDABLE_PAIRS
            summed = direct_scores if affordable else window_scores
            work = _bound(window_scores, data, kernel, widths)
            # Lines through two or three rows: direct sums, not about their mean, lose digits.
            check = close_to(summed(data, kernel, widths), 1e-5)
            suite.jobs.append(Job(name, work, check, rows))
            suite.lines.append(
                Line(f"leave-one-out, {kernel}", f"{share:g}", rows, rows, name, limit=limit)
            )
    return suite


def neighbour_suite(rows: int) -> Suite:
    """Leave-one-out of nearest-neighbour means, one k after another."""
    data = Sorted.of(rows)
    suite = Suite([], [])
    for k in NEIGHBOURS:
        name = f"neighbours, {rows}, {k}"
        expected = NOISE_SD_KW**2 * (1.0 + 1.0 / k) * rows
        # The mean bends within a window: five per cent hold as long as k is a small share.
        check = close_to(np.array([expected]), 0.05 if k <= rows // 100 else 1.0)
        suite.jobs.append(Job(name, _bound(neighbour_scores, data, [k]), check, rows))
        suite.lines.append(
            Line("neighbours, leave-one-out", str(k), rows, rows, name, limit=NEIGHBOUR_LIMIT)
        )
    return suite


def dense_suite(rows: int) -> Suite:
    """Leave-one-out over a grid of widths: ours, every pair of rows, every pair in a window."""
    data = Sorted.of(rows)
    widths = [share * data.span for share in DENSE_SHARES]
    results = rows * len(widths)
    suite = Suite([], [])
    for kernel in WINDOW_LIMITS:
        ours = f"windows, {kernel}, {rows}"
        expected = window_scores(data, kernel, widths)
        check = close_to(expected)
        repeats = repeats_for(results)
        work = _bound(window_scores, data, kernel, widths)
        suite.jobs.append(Job(ours, repeated(work, repeats), check))
        for told, scores in (("every pair", dense_scores), ("pairs in windows", direct_scores)):
            name = f"{told}, {kernel}, {rows}"
            suite.jobs.append(Job(name, _bound(scores, data, kernel, widths), check))
            suite.lines.append(
                Line(
                    f"leave-one-out, {kernel}", f"{len(widths)} from {DENSE_SHARES[0]:g}", rows,
                    results, ours, name, repeats,
                )
            )  # fmt: skip
    return suite


def library_suite() -> Suite:
    """General-purpose libraries, at sizes that they can do in seconds."""
    suite = Suite([], [])

    def add(
        what: str, at: str, rows: int, each: int, ours: Job, theirs: Job, repeats: int = 1
    ) -> None:
        suite.jobs.extend((ours, theirs))
        suite.lines.append(Line(what, at, rows, rows * each, ours.name, theirs.name, repeats))

    data = Sorted.of(500)
    two = [0.03 * data.span, 0.1 * data.span]
    repeats = repeats_for(1_000)
    add(
        "leave-one-out, biweight (Gaussian)", "2 widths", 500, 2,
        Job("windows, 500", repeated(_bound(window_scores, data, "biweight", two), repeats),
            close_to(direct_scores(data, "biweight", two))),
        Job("statsmodels KernelReg", _bound(kernel_regression_scores, data, two),
            close_to(kernel_regression_scores(data, two))),
        repeats,
    )  # fmt: skip
    for rows in (10_000, 100_000):
        data = Sorted.of(rows)
        grid = (5, 50)
        repeats = repeats_for(2 * rows)
        expected = neighbour_scores(data, grid)
        add(
            "neighbours, leave-one-out", "5 and 50", rows, 2,
            Job(f"neighbours, {rows}", repeated(_bound(neighbour_scores, data, grid), repeats),
                close_to(expected)),
            Job(f"scikit-learn, {rows}", _bound(neighbour_scores_sklearn, data, grid),
                close_to(expected)),
            repeats,
        )  # fmt: skip
    for rows, k in ((500, 25), (5_000, 250)):
        data = Sorted.of(rows)
        repeats = repeats_for(rows * k // 20)
        check = close_to(neighbour_lines(data, k), 1e-6)
        add(
            "neighbour lines, tricube", str(k), rows, 1,
            Job(f"lines, {rows}", repeated(_bound(neighbour_lines, data, k), repeats), check),
            Job(f"statsmodels lowess, {rows}", _bound(neighbour_lines_statsmodels, data, k),
                check),
            repeats,
        )  # fmt: skip
    data = Sorted.of(2_000)

    def follows(values: np.ndarray) -> None:
        assert np.sqrt(np.mean((values - smooth_by_spline(data)) ** 2)) < 0.25 * NOISE_SD_KW

    add(
        "curve with a width of its own", "chosen", 2_000, 1,
        Job("our curve, 2000", _bound(smooth_with_own_width, data), follows),
        Job("scipy make_smoothing_spline", _bound(smooth_by_spline, data), follows),
    )  # fmt: skip
    return suite


def _bound(work: Callable[..., Any], *arguments: Any) -> Callable[[], Any]:
    return lambda: work(*arguments)


def median_seconds(name: str, times: Times) -> float:
    """Return the median seconds of processor that a run of a job took."""
    return statistics.median(times[name].processor_seconds)


def nanoseconds(line: Line, times: Times) -> tuple[float, float | None]:
    """Return ours and the reference's nanoseconds for one row and width."""
    ours = median_seconds(line.ours, times) / (line.results * line.repeats) * 1e9
    if not line.reference:
        return ours, None
    return ours, median_seconds(line.reference, times) / line.results * 1e9


def ratio(line: Line, times: Times) -> float:
    """Return the median over rounds of the reference's time over ours."""
    pairs = zip(
        times[line.reference].processor_seconds, times[line.ours].processor_seconds, strict=True
    )
    return statistics.median(theirs / (own / line.repeats) for theirs, own in pairs)


def exceeded(line: Line, times: Times) -> bool:
    """Whether a promise is broken."""
    if line.limit is not None:
        return nanoseconds(line, times)[0] > line.limit
    dense = line.reference.startswith("every pair")
    return dense and line.rows >= BEATS_DENSE_FROM and ratio(line, times) < 1.0


def table(lines: Sequence[Line], times: Times) -> list[str]:
    """Write the lines as one markdown table."""
    told = [
        "| work | width or k | rows | ours, ns | spread | reference | its ns | its time / ours "
        "| limit |",
        "|---|---|---|---|---|---|---|---|---|",
    ]
    for line in lines:
        ours, theirs = nanoseconds(line, times)
        per = line.results * line.repeats
        low, high = (end(times[line.ours].processor_seconds) / per * 1e9 for end in (min, max))
        reference = line.reference.split(",")[0]
        beside = f"{theirs:,.0f} | {ratio(line, times):,.2f}" if theirs is not None else " | "
        limit = "" if line.limit is None else f"{line.limit:g}"
        if exceeded(line, times):
            limit = f"{limit or '1 x'} **exceeded**"
        told.append(
            f"| {line.what} | {line.at} | {line.rows:,} | {ours:,.1f} | {low:,.1f} to {high:,.1f} "
            f"| {reference} | {beside} | {limit} |"
        )
    return told


def dense_sentence(lines: Sequence[Line], times: Times) -> str:
    """Say from how many rows on the windows beat the dense loops."""
    told = []
    for kernel in WINDOW_LIMITS:
        own = [
            line
            for line in lines
            if line.reference.startswith("every pair") and line.what.endswith(kernel)
        ]
        slower = [line.rows for line in own if ratio(line, times) < 1.0]
        faster = [line.rows for line in own if line.rows > max(slower, default=0)]
        told.append(
            f"{kernel} from {min(faster):,} rows on" if faster else f"{kernel} at no size measured"
        )
    return (
        "Ours takes less time than every pair of rows: " + ", ".join(told) + f" (sizes from "
        f"{min(DENSE_SIZES)}; promised from {BEATS_DENSE_FROM:,} on)."
    )


def main() -> int:
    """Measure, print, write; return 1 when a limit is exceeded."""
    parser = argparse.ArgumentParser(prog="python -m bench.exact", description=__doc__)
    parser.add_argument("--rows", type=int, default=10_000_000, help="largest number of rows")
    parser.add_argument("--rounds", type=int, default=5, help="turns that each job takes")
    parser.add_argument("--out", type=Path, default=Path(__file__).parent / "results")
    options = parser.parse_args()
    about = machine()
    lines: list[Line] = []
    times: Times = {}
    sizes = [size for size in (_SMALLEST, 1_000_000, 10_000_000) if size <= options.rows]
    suites: list[Callable[[], Suite]] = [
        *(_bound(dense_suite, size) for size in DENSE_SIZES),
        library_suite,
        *(_bound(make, size) for make in (window_suite, neighbour_suite) for size in sizes),
    ]
    for make in suites:
        suite = make()
        times |= take_turns(suite.jobs, options.rounds)
        lines += suite.lines
    over = [line for line in lines if exceeded(line, times)]
    text = "\n".join(
        [
            "# Exact kernels beside references",
            "",
            f"Written by `python -m bench.exact --rows {options.rows} --rounds {options.rounds}` "
            "in one run, one thread, jobs of a kind taking turns. Nanoseconds of processor for one "
            "row and one width, both estimators at once, or for one row and one k; medians over "
            "rounds, ratios within rounds. Widths are shares of the range of x; rows are spread "
            "evenly. *Every pair* and *pairs in windows* are compiled loops with the same flags.",
            "",
            f"- {dense_sentence(lines, times)}",
            f"- {len(over)} limits exceeded.",
            f"- Load average {about['load_average_at_start']:.1f} before, {os.getloadavg()[0]:.1f} "
            f"after, {about['processors']} processors: others' use of caches and shared cores is "
            "in these figures, their time is not.",
            "",
            *table(lines, times),
            "",
            ", ".join(f"{name} {value}" for name, value in about.items()),
            "",
        ]
    )
    print(text)
    options.out.mkdir(parents=True, exist_ok=True)
    (options.out / "exact.md").write_text(text)
    return 1 if over else 0


if __name__ == "__main__":
    sys.exit(main())
