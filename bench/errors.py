"""How the error of binned results falls with the number of bins.

`python -m bench.errors` takes each kernel and estimator at the width that leave-one-out over all
rows would choose, counts the rows into bins of which so many make that width, and compares with the
sums over all rows: the curve, its leave-one-out criterion, the width chosen from the bins, and what
the curve says of its own error. Then it goes through the crossing of the tests and counts how often
that word is kept. Same seed, same tables.
"""

from __future__ import annotations

import argparse
import math
import time
from collections import defaultdict
from collections.abc import Iterable, Iterator
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from fastsmooth.kernels.shapes import SHAPES, Shape

from fastsmooth.bintable import Level
from fastsmooth.smoother import fit_level, least_weight, score_level
from tests import cases
from tests.sweep import ESTIMATORS, Data, Figures, least, sweep

BINS_PER_BANDWIDTH = (4, 8, 16, 32, 64, 128, 256, 512)
SIZES = (2_500, 50_000)
# Every row meets every other there.
GAUSSIAN_SIZES = (2_500,)
SEED = 31
SWEEP_SEEDS = (17, 18, 19)
# Finer bins are not searched: their choice has no error left to see, and searching them is slow.
MOST_BINS_SEARCHED = 128
# As close as widths are sought.
_CLOSEST = 1e-4
_OUTLIERS = "outliers"
_WIDTHS = 24
# The width from bins is sought between the exact one over this and times this.
_AROUND = 1.3


@dataclass(frozen=True)
class Cell:
    """One binned result beside the exact one.

    Attributes
    ----------
    figures : Figures
        Of the curve.
    criterion : float
        Relative error of leave-one-out.
    width : float
        Relative error of the chosen width, 1e-4 at least; NaN where it was not sought.
    """

    figures: Figures
    criterion: float
    width: float


def leave_one_out(data: Data, level: Level, shape: Shape, bandwidth: float, name: str) -> float:
    """Return leave-one-out from the bins of a level."""
    fits = fit_level(level, shape, bandwidth, least_weight(data.pyramid, shape))
    return score_level(fits, name, level).score / data.x.size


def study_kernel(data: Data, shape: Shape) -> Iterator[Cell]:
    """Compare both estimators at all numbers of bins."""
    span = data.x[-1] - data.x[0]
    # The Gaussian's window is wider for the same h.
    low, high = data.well_seen / shape.reach, span / shape.reach
    for name in ESTIMATORS:
        best = data.best(shape, name, low, high, _WIDTHS)
        exact = data.leave_one_out(shape, best, name)
        inside = low * 1.01 < best < high / 1.01
        for bins in BINS_PER_BANDWIDTH:
            # An even number, so that pairs can be merged.
            binned = replace(data, bins=2 * math.ceil(0.5 * bins * span / best))
            level = binned.pyramid.levels[0]
            figures = binned.compare(level, shape, best, name)
            criterion = leave_one_out(binned, level, shape, best, name) / exact - 1.0
            width = math.nan
            if inside and bins <= MOST_BINS_SEARCHED:
                width = chosen_width(binned, level, shape, name, best) / best - 1.0
            case = figures.case._replace(bins_per_bandwidth=bins)
            width = max(abs(width), _CLOSEST) if math.isfinite(width) else width
            yield Cell(figures._replace(case=case), abs(criterion), width)


def chosen_width(data: Data, level: Level, shape: Shape, name: str, around: float) -> float:
    """Return the width of least leave-one-out from the bins."""

    def score(log_h: float) -> float:
        return leave_one_out(data, level, shape, math.exp(log_h), name)

    left, right = math.log(around / _AROUND), math.log(around * _AROUND)
    return math.exp(least(score, left, right))


def study_design(design: str, rows: int, seed: int) -> list[Cell]:
    """Compare all kernels on the rows of one design."""
    data = Data.of(design, rows, seed)
    return [
        cell
        for name, shape in SHAPES.items()
        if rows in (SIZES if shape.coefficients else GAUSSIAN_SIZES)
        for cell in study_kernel(data, shape)
    ]


def study(seed: int, processes: int) -> list[Cell]:
    """Compare on all designs and sizes, in a fixed order."""
    jobs = [(design, rows) for rows in sorted(SIZES, reverse=True) for design in cases.ALL_DESIGNS]
    with ProcessPoolExecutor(processes) as pool:
        waiting = [pool.submit(study_design, design, rows, seed) for design, rows in jobs]
        return [cell for done in waiting for cell in done.result()]


def crossing(seeds: Iterable[int], processes: int) -> list[Figures]:
    """Go through the crossing of the tests once per seed."""
    with ProcessPoolExecutor(processes) as pool:
        waiting = [pool.submit(_one_crossing, seed) for seed in seeds]
        return [figures for done in waiting for figures in done.result()]


def _one_crossing(seed: int) -> list[Figures]:
    return list(sweep(seed=seed))


def by_kernel_and_bins(cells: Iterable[Cell]) -> dict[tuple[str, int], list[Cell]]:
    """Group the cells."""
    groups: dict[tuple[str, int], list[Cell]] = defaultdict(list)
    for cell in cells:
        case = cell.figures.case
        groups[case.kernel, case.bins_per_bandwidth].append(cell)
    return groups


def middle_and_worst(values: Iterable[float]) -> str:
    """Two cells of a table: median and largest of the values that are known."""
    known = [value for value in values if math.isfinite(value)]
    return f"| {np.median(known):.0e} | {max(known):.0e} " if known else "|  |  "


def above(figures: Iterable[Figures]) -> float:
    """How many times its true error an estimate is, in the median; rounding does not count."""
    return float(np.median([one.estimated / one.error for one in figures if one.error > 1e-12]))


def markdown(cells: list[Cell], crossed: list[Figures], seed: int, picture: str) -> str:
    """Tell the study in tables."""
    lines = [
        "# Error of binned results against bins",
        "",
        f"Written by `python -m bench.errors --seed {seed}`.",
        "",
        "## The curve's word about its own error",
        "",
        "Every binned curve carries an estimate of its error (`error_in_noise_sd`). Here are "
        f"{len(crossed):,} curves: kernels x estimators x designs ({', '.join(cases.ALL_DESIGNS)}) "
        "x 300 to 200,000 rows x 64 to 512 bins per bandwidth (Gaussian 16 to 128), "
        f"{len(SWEEP_SEEDS)} seeds. *Kept*: share of curves nowhere farther from the exact one "
        "than estimated. *Above*: how many times the error the estimate is, in the median. "
        "*Worst*: the largest error where the curve says `ok` or `edge`, in noise standard "
        "deviations, at the fewest bins and at twice as many or more.",
        "",
        "| kernel | curves | kept | above | worst at fewest bins | worst beyond |",
        "|---|---|---|---|---|---|",
    ]
    for kernel in SHAPES:
        own = [figures for figures in crossed if figures.case.kernel == kernel]
        fewest = min(figures.case.bins_per_bandwidth for figures in own)
        errors: dict[bool, list[float]] = {True: [], False: []}
        for figures in own:
            errors[figures.case.bins_per_bandwidth == fewest].append(figures.supported_error)
        kept = float(np.mean([figures.bounded for figures in own]))
        lines.append(
            f"| {kernel} | {len(own)} | {kept:.1%} | {above(own):.0f} | {max(errors[True]):.1e} "
            f"| {max(errors[False]):.1e} |"
        )
    lines += [
        "",
        "## At the chosen width",
        "",
        "Each kernel and estimator at the width that leave-one-out over all rows chooses, "
        f"{' and '.join(f'{size:,}' for size in SIZES)} rows (Gaussian "
        f"{GAUSSIAN_SIZES[0]:,}), all designs; tables of so many bins per bandwidth. *Curve*: "
        "largest error of a curve where it says `ok` or `edge`, in noise standard deviations. "
        "*Criterion*: relative error of leave-one-out. *Width*: relative error of the width chosen "
        f"from the bins, no closer than {_CLOSEST:g} and to {MOST_BINS_SEARCHED} bins only; the "
        "criterion of kernels with a kink is jagged, so that widths far apart may do equally well. "
        "Median and worst over the designs without far outliers. *Outliers*: worst curve where far "
        "outliers stay in the range (by default they are cut off): windows are then wider than the "
        "bulk of the rows, and a bin is no small part of it. *Kept* and *above*: as before, of all "
        "designs.",
        "",
        f"![Error against bins]({picture})",
    ]
    groups = by_kernel_and_bins(cells)
    for kernel in SHAPES:
        lines += [
            "",
            f"### {kernel}",
            "",
            "| bins per bandwidth | curve | worst | outliers | criterion | worst | width | worst "
            "| kept | above |",
            "|---|---|---|---|---|---|---|---|---|---|",
        ]
        for bins in BINS_PER_BANDWIDTH:
            all_designs = [cell.figures for cell in groups[kernel, bins]]
            usual = [c for c in groups[kernel, bins] if c.figures.case.design != _OUTLIERS]
            stray = [one.supported_error for one in all_designs if one.case.design == _OUTLIERS]
            lines.append(
                f"| {bins} "
                + middle_and_worst(cell.figures.supported_error for cell in usual)
                + f"| {max(stray):.0e} "
                + middle_and_worst(cell.criterion for cell in usual)
                + middle_and_worst(cell.width for cell in usual)
                + f"| {np.mean([one.bounded for one in all_designs]):.0%} "
                + f"| {above(all_designs):.0f} |"
            )
    return "\n".join(lines) + "\n"


def draw(cells: list[Cell], path: Path) -> None:
    """Draw median errors of curve, criterion and width against bins, a line per kernel."""
    from matplotlib.figure import Figure

    groups = by_kernel_and_bins(cells)
    figure = Figure(figsize=(10.5, 4.0), layout="constrained")
    axes = figure.subplots(1, 3)
    panels = (
        ("curve, noise sd", lambda cell: cell.figures.supported_error),
        ("leave-one-out, relative", lambda cell: cell.criterion),
        ("chosen width, relative", lambda cell: cell.width),
    )
    colours = ("#777777", "#b5654a", "#d9a441", "#1f4e79", "#3f8f6b", "#7a5aa6", "#111111")
    for ax, (title, value_of) in zip(axes, panels, strict=True):
        for kernel, colour in zip(SHAPES, colours, strict=True):
            known = {
                bins: [
                    value
                    for cell in groups[kernel, bins]
                    if cell.figures.case.design != _OUTLIERS
                    and math.isfinite(value := value_of(cell))
                ]
                for bins in BINS_PER_BANDWIDTH
            }
            places = [bins for bins, values in known.items() if values]
            medians = [float(np.median(known[bins])) for bins in places]
            ax.plot(places, medians, "o-", color=colour, markersize=3, linewidth=1, label=kernel)
        ax.set_title(title, fontsize=10)
        ax.set_xscale("log", base=2)
        ax.set_yscale("log")
        ax.set_xlabel("bins per bandwidth")
        ax.set_xticks(BINS_PER_BANDWIDTH, [str(bins) for bins in BINS_PER_BANDWIDTH])
        ax.grid(color="#e5e5e5", linewidth=0.5)
    axes[0].legend(fontsize=7, frameon=False)
    axes[0].set_ylabel("median error")
    figure.savefig(path, dpi=110)


def main() -> None:
    """Run the study and write its tables and picture."""
    parser = argparse.ArgumentParser(prog="python -m bench.errors", description=__doc__)
    parser.add_argument("--out", type=Path, default=Path(__file__).parent / "results")
    parser.add_argument("--seed", type=int, default=SEED)
    parser.add_argument("--processes", type=int, default=2)
    options = parser.parse_args()
    start = time.perf_counter()
    crossed = crossing(SWEEP_SEEDS, options.processes)
    cells = study(options.seed, options.processes)
    options.out.mkdir(parents=True, exist_ok=True)
    draw(cells, options.out / "errors.png")
    (options.out / "errors.md").write_text(markdown(cells, crossed, options.seed, "errors.png"))
    print(f"{len(crossed)} and {len(cells)} curves, {time.perf_counter() - start:.0f} s")


if __name__ == "__main__":
    main()
