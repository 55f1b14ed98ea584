"""Do bands cover the mean as often as they say, and is the chosen width a good one?

`python -m bench.coverage` draws data whose mean is known, many times over, and counts. A cell of
the study is one truth, one kind of noise, one way in which x varies and one size. For each cell:

- how often the pointwise band holds the mean, averaged over the supported points (status ``ok``
  or ``edge``), and how often the simultaneous band holds all of it;
- how much larger the integrated squared error is at the width that leave-block-out chose than at
  the best width, in the mean over all runs;
- the same bands made as if rows were independent, at the width that leave-one-out chose.
"""

from __future__ import annotations

import argparse
import math
import time
import zlib
from collections.abc import Callable
from concurrent.futures import ProcessPoolExecutor, as_completed
from dataclasses import dataclass, field, replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import Occupied, Points, estimate_noise, fit_points
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.blocks import fold_of_number
from fastsmooth.curve import EDGE, OK
from fastsmooth.plan import Plan
from fastsmooth.search import search_table
from fastsmooth.settings import Band
from fastsmooth.smoother import fit_level, least_weight

Floats = NDArray[np.float64]

LOW_C, HIGH_C = 0.0, 24.0
FOLDS = 32
POINTS = 101
WIDTHS = 24
LEVEL = 0.95
BINS, SEARCH_BINS = 2048, 256
# The search goes down to this part of the range; no truth here asks for so narrow a width.
NARROWEST = 48.0
ESTIMATOR = "local-linear"
KERNEL = "biweight"
NOISE_SD_KW = 1.0
FIRST_DAY = 20_454  # 2026-01-01

KINDS = ("pointwise", "simultaneous")
# What the bands owe.
POINTWISE = (0.92, 0.97)
SIMULTANEOUS = (0.90, 0.98)
MOST_EXCESS = 1.15


def step(wet_bulb_c: Floats) -> Floats:
    """Machines that come on within two degrees."""
    return 20.0 + 6.0 / (1.0 + np.exp(-(wet_bulb_c - 13.0) / 0.6))


def wave(wet_bulb_c: Floats) -> Floats:
    """Two and a half turns over the range."""
    return 20.0 + 2.0 * np.sin(2.0 * math.pi * wet_bulb_c / 9.6)


def line(wet_bulb_c: Floats) -> Floats:
    """A straight line: no width is too wide."""
    return 18.0 + 0.3 * wet_bulb_c


def bump(wet_bulb_c: Floats) -> Floats:
    """Flat but for one bump."""
    return 20.0 + 4.0 * np.exp(-0.5 * ((wet_bulb_c - 9.0) / 1.2) ** 2)


TRUTHS: dict[str, Callable[[Floats], Floats]] = {
    "step": step, "wave": wave, "line": line, "bump": bump,
}  # fmt: skip


def wandering(rng: np.random.Generator, days: int, rows_per_day: int) -> Floats:
    """Wet-bulb temperature through a season and through each day, (days, rows_per_day)."""
    from scipy.signal import lfilter

    weather = lfilter([math.sqrt(1.0 - 0.6**2)], [1.0, -0.6], rng.normal(size=days))
    season = 12.0 + 5.0 * np.sin(2.0 * math.pi * (np.arange(days) / days + rng.uniform()))
    hour = np.arange(rows_per_day) / rows_per_day
    swing = rng.uniform(2.0, 5.0, days)[:, np.newaxis]
    mean = (season + 1.8 * weather)[:, np.newaxis]
    x = (
        mean
        + swing * np.sin(2.0 * math.pi * (hour - 0.35))
        + 0.1 * rng.normal(size=(days, hour.size))
    )
    # Readings beyond the range are rare and would have few days to themselves.
    return np.clip(x, LOW_C, HIGH_C) + 1e-3 * rng.uniform(size=x.shape)


def uniform(rng: np.random.Generator, days: int, rows_per_day: int) -> Floats:
    """Any temperature at any time, (days, rows_per_day)."""
    return rng.uniform(LOW_C, HIGH_C, (days, rows_per_day))


DESIGNS: dict[str, Callable[[np.random.Generator, int, int], Floats]] = {
    "wandering": wandering, "uniform": uniform,
}  # fmt: skip


def autoregressive(rho: float) -> Callable[[np.random.Generator, Floats], Floats]:
    """Each reading resembles the one before it; days are independent."""

    def draw(rng: np.random.Generator, x: Floats) -> Floats:
        from scipy.signal import lfilter

        news = math.sqrt(1.0 - rho * rho) * rng.normal(size=x.shape)
        # The first reading of a day comes from the stationary distribution.
        news[:, 0] = rng.normal(size=x.shape[0])
        return np.asarray(lfilter([1.0], [1.0, -rho], news, axis=1))

    return draw


def independent(rng: np.random.Generator, x: Floats) -> Floats:
    """Normal, all rows independent."""
    return rng.normal(size=x.shape)


def uneven(rng: np.random.Generator, x: Floats) -> Floats:
    """Independent, three times the spread when hot."""
    return rng.normal(size=x.shape) * (0.5 + (x - LOW_C) / (HIGH_C - LOW_C))


def heavy_tailed(rng: np.random.Generator, x: Floats) -> Floats:
    """Student's t with three degrees of freedom, scaled to variance one."""
    return rng.standard_t(3.0, x.shape) / math.sqrt(3.0)


def day_effects(rng: np.random.Generator, x: Floats) -> Floats:
    """A level of its own for every day, and independent noise."""
    return 0.6 * rng.normal(size=(x.shape[0], 1)) + 0.8 * rng.normal(size=x.shape)


NOISES: dict[str, Callable[[np.random.Generator, Floats], Floats]] = {
    "independent": independent, "uneven": uneven, "heavy-tailed": heavy_tailed,
    "AR 0.5": autoregressive(0.5), "AR 0.9": autoregressive(0.9), "AR 0.99": autoregressive(0.99),
    "day effects": day_effects,
}  # fmt: skip


@dataclass(frozen=True)
class Cell:
    """One set of circumstances."""

    truth: str
    noise: str
    design: str
    days: int
    rows_per_day: int

    def __str__(self) -> str:
        return f"{self.truth}, {self.noise}, {self.design}, {self.days} x {self.rows_per_day}"


@dataclass(frozen=True)
class Run:
    """What one draw of data gave; `(2,)` arrays are by block, by row."""

    width: Floats
    error: Floats
    errors_on_grid: Floats
    pointwise: Floats
    simultaneous: Floats
    half_width: Floats
    half_width_for_all: Floats
    supported: float


def draw_tables(cell: Cell, seed: int, run: int) -> tuple[BinTable, BinTable]:
    """Draw the rows of one run into tables whose folds are whole days: to search, to fit.

    The search compares errors far larger than those of coarse bins, and is most of the work.
    """
    rng = np.random.default_rng([seed, zlib.crc32(str(cell).encode()), run])
    x = DESIGNS[cell.design](rng, cell.days, cell.rows_per_day)
    y = TRUTHS[cell.truth](x) + NOISE_SD_KW * NOISES[cell.noise](rng, x)
    folds = [fold_of_number(FIRST_DAY + day, FOLDS) for day in range(cell.days)]
    tables = []
    for bins in (SEARCH_BINS, BINS):
        plan = Plan.simple(float(x.min()), float(x.max()), bins, FOLDS)
        table = BinTable(replace(plan, reference=20.0, pilot=(20.0,)))
        for fold, one_x, one_y in zip(folds, x, y, strict=True):
            table.add_rows(fold, np.ascontiguousarray(one_x), np.ascontiguousarray(one_y))
        tables.append(table)
    return tables[0], tables[1]


def one_run(cell: Cell, seed: int, run: int) -> Run:
    """Draw, search, and compare with the truth."""
    from fastsmooth.kernels.shapes import SHAPES

    shape = SHAPES[KERNEL]
    searched, table = draw_tables(cell, seed, run)
    low, high = table.extent.tolist()
    found = search_table(
        searched, Pyramid(searched), shape, criterion="leave-block-out", by_block=True,
        widths=WIDTHS, bounds=((high - low) / NARROWEST, high - low),
    ).trails[ESTIMATOR]  # fmt: skip
    pyramid = Pyramid(table)
    x = np.linspace(low, high, POINTS)
    truth = TRUTHS[cell.truth](x)
    empty = least_weight(pyramid, shape)
    finest = pyramid.levels[0]
    occupied = Occupied(finest.origin, finest.width, np.flatnonzero(finest.first[0]))

    def both_bands(width: float, by_block: bool) -> tuple[Points, Points]:
        level = pyramid.levels[pyramid.level_for(width, shape.bins_per_bandwidth)]
        fits = fit_level(level, shape, width, empty)
        noise = estimate_noise(fits, ESTIMATOR, shape, "local")
        pointwise, simultaneous = (
            fit_points(
                x, fits, noise, shape, estimator=ESTIMATOR, reference=table.plan.reference,
                band=Band(level=LEVEL, kind=kind), by_block=by_block, extent=(low, high),
                occupied=occupied,
            )
            for kind in KINDS
        )  # fmt: skip
        return pointwise, simultaneous

    widths = np.array([found.bandwidth, found.leave_one_out_bandwidth])
    error, covered, covered_all, half, half_all = (np.empty(2) for _ in range(5))
    good = np.zeros(POINTS, bool)
    for place, by_block in enumerate((True, False)):
        at, for_all = both_bands(float(widths[place]), by_block)
        if by_block:
            good = (at.status == OK) | (at.status == EDGE)
        error[place] = np.mean((at.estimate - truth)[good] ** 2)
        covered[place] = ((at.lower <= truth) & (truth <= at.upper))[good].mean()
        covered_all[place] = ((for_all.lower <= truth) & (truth <= for_all.upper))[good].all()
        half[place] = np.mean((0.5 * (at.upper - at.lower))[good])
        half_all[place] = np.mean((0.5 * (for_all.upper - for_all.lower))[good])
    on_grid = np.empty(WIDTHS)
    for place, width in enumerate(common_widths().tolist()):
        level = pyramid.levels[pyramid.level_for(width, shape.bins_per_bandwidth)]
        fitted = fit_level(level, shape, width, empty).values[ESTIMATOR]
        # Fits at bin centres lie so close that a line between them is the curve.
        curve = np.interp(x, level.centres, fitted) + table.plan.reference
        on_grid[place] = np.mean((curve - truth)[good] ** 2)
    on_grid[~np.isfinite(on_grid)] = math.inf
    return Run(widths, error, on_grid, covered, covered_all, half, half_all, float(good.mean()))


def common_widths() -> Floats:
    """The widths among which the best is sought, the same in all runs."""
    return np.geomspace((HIGH_C - LOW_C) / NARROWEST, HIGH_C - LOW_C, WIDTHS)


@dataclass(frozen=True)
class Result:
    """A cell's means over its runs."""

    cell: Cell
    runs: int
    width: float
    best_width: float
    excess: float
    excess_by_row: float
    pointwise: Floats
    pointwise_error: float
    simultaneous: Floats
    half_width: Floats
    half_width_for_all: Floats
    supported: float
    seconds: float = field(compare=False)

    @property
    def kept(self) -> bool:
        """Whether the shares covered lie in the ranges that the bands owe."""
        return self.within(0.0)

    def within(self, allowance: float) -> bool:
        """Whether they do, or miss them by no more standard errors of the study than allowed."""
        return all(
            low - allowance * error <= value <= high + allowance * error
            for value, error, (low, high) in (
                (float(self.pointwise[0]), self.pointwise_error, POINTWISE),
                (float(self.simultaneous[0]), self.simultaneous_error, SIMULTANEOUS),
            )
        )

    @property
    def simultaneous_error(self) -> float:
        """Standard error of a share at the level itself, in so many runs."""
        return math.sqrt(LEVEL * (1.0 - LEVEL) / self.runs)

    @property
    def distance(self) -> float:
        """How far the worse of the two coverages lies from the nominal level, in allowances."""
        away = [
            (LEVEL - value) / (LEVEL - low) if value < LEVEL else (value - LEVEL) / (high - LEVEL)
            for value, (low, high) in (
                (float(self.pointwise[0]), POINTWISE), (float(self.simultaneous[0]), SIMULTANEOUS),
            )
        ]  # fmt: skip
        return max(away)


def summarise(cell: Cell, runs: list[Run], seconds: float) -> Result:
    """Average the runs of a cell."""
    errors = np.array([run.error for run in runs])
    on_grid = np.array([run.errors_on_grid for run in runs])
    mean_on_grid = on_grid.mean(axis=0)
    best = int(np.argmin(mean_on_grid))

    each = np.array([run.pointwise[0] for run in runs])

    def mean(name: str) -> Floats:
        return np.mean([getattr(run, name) for run in runs], axis=0)

    return Result(
        cell=cell, runs=len(runs), width=float(np.median([run.width[0] for run in runs])),
        best_width=float(common_widths()[best]),
        excess=float(errors[:, 0].mean() / mean_on_grid[best]),
        excess_by_row=float(errors[:, 1].mean() / mean_on_grid[best]),
        pointwise=mean("pointwise"),
        pointwise_error=float(each.std(ddof=1) / math.sqrt(len(runs))),
        simultaneous=mean("simultaneous"),
        half_width=mean("half_width"), half_width_for_all=mean("half_width_for_all"),
        supported=float(mean("supported")), seconds=seconds,
    )  # fmt: skip


def study_cell(cell: Cell, runs: int, seed: int) -> Result:
    """Run one cell."""
    start = time.process_time()
    done = [one_run(cell, seed, run) for run in range(runs)]
    return summarise(cell, done, time.process_time() - start)


def all_cells(quick: bool = False) -> list[Cell]:
    """Return the cells of the study.

    Every kind of noise on a steep curve where the temperature wanders; the other truths under the
    noises that are hardest for them; few days, and many days of few readings.
    """
    size = (96, 288)
    if quick:
        return [
            Cell("step", "AR 0.99", "wandering", *size),
            Cell("line", "day effects", "uniform", *size),
        ]
    cells = [Cell("step", noise, "wandering", *size) for noise in NOISES]
    for truth, noise, design in (
        ("line", "independent", "wandering"), ("line", "AR 0.99", "wandering"),
        ("line", "day effects", "wandering"), ("wave", "independent", "uniform"),
        ("wave", "AR 0.99", "uniform"), ("bump", "uneven", "uniform"),
        ("bump", "day effects", "uniform"),
    ):  # fmt: skip
        cells.append(Cell(truth, noise, design, *size))
    cells.append(Cell("bump", "AR 0.99", "wandering", 48, 288))
    cells.append(Cell("bump", "day effects", "wandering", 365, 96))
    return cells


def study(cells: list[Cell], runs: int, seed: int, processes: int) -> list[Result]:
    """Run all cells, saying how each came out; worst first."""
    results = []
    with ProcessPoolExecutor(processes) as pool:
        waiting = [pool.submit(study_cell, cell, runs, seed) for cell in cells]
        for done in as_completed(waiting):
            result = done.result()
            results.append(result)
            print(
                f"{result.cell}: pointwise {result.pointwise[0]:.3f}, simultaneous "
                f"{result.simultaneous[0]:.3f}, error {result.excess:.2f}",
                flush=True,
            )
    return sorted(results, key=lambda result: (-result.distance, str(result.cell)))


def markdown(results: list[Result], runs: int, seed: int, picture: str) -> str:
    """Tell the study in a table."""
    kept, excess = sum(result.kept for result in results), mean_excess(results)
    worst = max(results, key=lambda result: result.excess)
    by_chance = sum(result.within(2.0) for result in results) - kept
    spread = results[0].simultaneous_error
    pooled = [float(np.mean([getattr(r, name)[0] for r in results])) for name in KINDS]
    lines = [
        "# Coverage of the bands",
        "",
        f"Written by `python -m bench.coverage --runs {runs} --seed {seed}`: {runs} runs a cell, "
        f"{len(results)} cells, {POINTS} points, {WIDTHS} widths, {FOLDS} folds of days, {KERNEL}, "
        f"{ESTIMATOR}.",
        "",
        "A cell is a truth, a kind of noise, a way in which temperature varies, and days x "
        "readings a day. All bands are nominally 95 %. *Pointwise* is the share of supported "
        "points (`ok` or `edge`) whose band holds the mean, *simultaneous* the share of runs in "
        "which the band holds all of it. *Error* is the integrated squared error at the width that "
        "leave-block-out chose, over that of the best single width for the cell. *By row* is the "
        "same as if rows were independent: leave-one-out chooses the width, bands come from the "
        "residual variance. Half widths in kW; the noise has a standard deviation near 1.",
        "",
        f"- Pointwise {POINTWISE[0]:.0%} to {POINTWISE[1]:.0%} and simultaneous "
        f"{SIMULTANEOUS[0]:.0%} to {SIMULTANEOUS[1]:.0%}: {kept} of {len(results)} cells; "
        f"{by_chance} more miss them by less than two standard errors of the study (*by chance?*; "
        f"a share of 95 % in {runs} runs has a standard error of {spread:.1%}). All cells "
        f"together: pointwise {pooled[0]:.1%}, simultaneous {pooled[1]:.1%}.",
        f"- Error of the chosen width on average over cells: {excess:.2f} times the best width's "
        f"(wanted: at most {MOST_EXCESS:.2f}); largest {worst.excess:.2f} ({worst.cell}).",
        "",
        f"![Coverage by cell]({picture})",
        "",
        "Worst cell first.",
        "",
        "| cell | pointwise | simultaneous | half width | for all | supported | width, C "
        "| best width, C | error | by row: pointwise | simultaneous | error |",
        "|---|---|---|---|---|---|---|---|---|---|---|---|",
    ]
    for r in results:
        mark = "" if r.kept else " *by chance?*" if r.within(2.0) else " **out**"
        lines.append(
            f"| {r.cell}{mark} | {r.pointwise[0]:.3f} | {r.simultaneous[0]:.3f} "
            f"| {r.half_width[0]:.3f} | {r.half_width_for_all[0]:.3f} | {r.supported:.2f} "
            f"| {r.width:.2f} | {r.best_width:.2f} | {r.excess:.2f} "
            f"| {r.pointwise[1]:.3f} | {r.simultaneous[1]:.3f} | {r.excess_by_row:.2f} |"
        )
    return "\n".join(lines) + "\n"


def mean_excess(results: list[Result]) -> float:
    """Return the mean over cells of the chosen width's error over the best width's."""
    return float(np.mean([result.excess for result in results]))


def draw(results: list[Result], runs: int, path: Path) -> None:
    """Draw both coverages of every cell, by block and by row."""
    from matplotlib.figure import Figure

    figure = Figure(figsize=(9.0, 1.2 + 0.26 * len(results)), layout="constrained")
    axes = figure.subplots(1, 2, sharey=True)
    places = np.arange(len(results))[::-1]
    for ax, name, owed in zip(axes, KINDS, (POINTWISE, SIMULTANEOUS), strict=True):
        ax.axvspan(*owed, color="#dfe9df", zorder=0)
        ax.axvline(LEVEL, color="#5a7d5a", linewidth=0.8)
        for place, label, colour in (
            (1, "rows taken as independent", "#b5654a"),
            (0, "by day", "#1f4e79"),
        ):
            values = np.array([getattr(result, name)[place] for result in results])
            ax.plot(values, places, "o", color=colour, markersize=4, label=label)
        ax.set_title(f"{name} band")
        ax.set_xlim(-0.02, 1.02)
        ax.set_xlabel(f"share covered in {runs} runs")
        ax.grid(axis="x", color="#e5e5e5", linewidth=0.5)
    axes[0].set_yticks(places, [str(result.cell) for result in results], fontsize=7)
    axes[0].legend(loc="lower left", fontsize=7, frameon=False)
    figure.savefig(path, dpi=110)


def main() -> None:
    """Run the study and write its table and picture."""
    parser = argparse.ArgumentParser(prog="python -m bench.coverage", description=__doc__)
    parser.add_argument("--runs", type=int, default=200, help="draws of data in each cell")
    parser.add_argument("--out", type=Path, default=Path(__file__).parent / "results")
    parser.add_argument("--quick", action="store_true", help="two cells only")
    parser.add_argument("--seed", type=int, default=20_260_101)
    parser.add_argument("--processes", type=int, default=2)
    options = parser.parse_args()
    start = time.perf_counter()
    results = study(all_cells(options.quick), options.runs, options.seed, options.processes)
    options.out.mkdir(parents=True, exist_ok=True)
    draw(results, options.runs, options.out / "coverage.png")
    text = markdown(results, options.runs, options.seed, "coverage.png")
    (options.out / "coverage.md").write_text(text)
    seconds = sum(result.seconds for result in results)
    print(
        f"{sum(result.kept for result in results)} of {len(results)} cells kept; error on average "
        f"{mean_excess(results):.3f}; {seconds:.0f} s of processor, "
        f"{time.perf_counter() - start:.0f} s in all"
    )


if __name__ == "__main__":
    main()
