"""Does the interval of an excess hold the true excess as often as it says, and do tests keep size?

`python -m bench.excess` draws a baseline and a current period whose curves are known, many times
over. A cell of the study is a kind of noise, the days on either side, and a drift. For each cell:

- how often the interval of the excess holds it, and how often the same interval would if rows were
  independent;
- how often the excess is found to be other than 0, and how often the sign flips find a difference
  anywhere along x: without drift, the size of the tests, with drift their power;
- how often the pointwise band holds the difference, and how often that for the whole curve does.
"""

from __future__ import annotations

import argparse
import math
import time
import zlib
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, replace
from functools import partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from bench.coverage import DESIGNS, FIRST_DAY, NOISE_SD_KW, NOISES, TRUTHS
from fastsmooth.bands import FEWEST_DEGREES, Occupied, estimate_noise, fit_points
from fastsmooth.bintable import BinTable, Level, Pyramid
from fastsmooth.blocks import fold_of_number
from fastsmooth.critical import pointwise_value
from fastsmooth.curve import EDGE, OK
from fastsmooth.difference import difference_of
from fastsmooth.excess import excess_of
from fastsmooth.foldsums import FoldedCurve, stretches
from fastsmooth.jackknife import keep_fold_curves
from fastsmooth.localweights import PARABOLA
from fastsmooth.plan import Plan
from fastsmooth.settings import Band
from fastsmooth.smoother import fit_level, least_weight

Floats = NDArray[np.float64]

FOLDS, BINS, POINTS = 32, 1024, 128
LEVEL = 0.95
WIDTH_C = 0.8
ROWS_PER_DAY = 96
KERNEL, ESTIMATOR, TRUTH = "biweight", "local-linear", "step"


@dataclass(frozen=True)
class Cell:
    """One set of circumstances."""

    noise: str
    design: str
    base_days: int
    now_days: int
    drift: float

    def __str__(self) -> str:
        drift = f"drift {self.drift:+.0%}" if self.drift else "no drift"
        return f"{self.noise}, {self.design}, {self.base_days} / {self.now_days} days, {drift}"


CELLS = (
    Cell("independent", "wandering", 365, 30, 0.0),
    Cell("day effects", "wandering", 365, 30, 0.0),
    Cell("day effects", "wandering", 365, 30, 0.03),
    Cell("day effects", "wandering", 365, 10, 0.0),
    Cell("day effects", "wandering", 96, 96, 0.0),
    Cell("day effects", "uniform", 365, 30, 0.0),
    Cell("AR 0.9", "wandering", 365, 30, 0.0),
    Cell("AR 0.99", "wandering", 365, 30, 0.0),
    Cell("AR 0.99", "wandering", 96, 30, 0.1),
    Cell("heavy-tailed", "wandering", 96, 30, 0.0),
)


@dataclass(frozen=True)
class Side:
    """One period: its curve with folds, its finest level, its rows."""

    curve: FoldedCurve
    level: Level
    folds: NDArray[np.int64]
    x: Floats
    y: Floats


def draw(rng: np.random.Generator, cell: Cell, days: int, first: int, drift: float) -> tuple:
    x = DESIGNS[cell.design](rng, days, ROWS_PER_DAY)
    noise = NOISE_SD_KW * NOISES[cell.noise](rng, x)
    folds = [fold_of_number(FIRST_DAY + first + day, FOLDS) for day in range(days)]
    return x, TRUTHS[TRUTH](x) * (1.0 + drift) + noise, folds


def side(x: Floats, y: Floats, folds: list[int], at: Floats) -> Side:
    """Count the rows and fit at the points."""
    from fastsmooth.kernels.shapes import SHAPES

    shape = SHAPES[KERNEL]
    plan = Plan.simple(float(x.min()), float(x.max()), BINS, FOLDS)
    table = BinTable(replace(plan, reference=20.0, pilot=(20.0,)))
    for fold, one_x, one_y in zip(folds, x, y, strict=True):
        table.add_rows(fold, np.ascontiguousarray(one_x), np.ascontiguousarray(one_y))
    pyramid = Pyramid(table)
    level = pyramid.levels[pyramid.level_for(WIDTH_C, shape.bins_per_bandwidth)]
    fits = fit_level(level, shape, WIDTH_C, least_weight(pyramid, shape))
    finest = pyramid.levels[0]
    points = fit_points(
        at, fits, estimate_noise(fits, ESTIMATOR, shape, "constant"), shape, estimator=ESTIMATOR,
        reference=20.0, band=Band(level=LEVEL), by_block=True, extent=tuple(table.extent.tolist()),
        occupied=Occupied(finest.origin, finest.width, np.flatnonzero(finest.first[0])),
    )  # fmt: skip
    met = sorted(table.sums)
    kept = keep_fold_curves(at, pyramid, met, shape, WIDTH_C, PARABOLA)
    supported = (points.status == OK) | (points.status == EDGE)
    curve = FoldedCurve(
        at, kept.centre, kept.moved, kept.shares, kept.folds, kept.degrees,
        supported & kept.known & (kept.degrees >= FEWEST_DEGREES),
    )  # fmt: skip
    return Side(curve, finest, np.array(met), x.ravel(), y.ravel())


def one_run(cell: Cell, seed: int, run: int) -> list[float]:
    rng = np.random.default_rng([seed, zlib.crc32(str(cell).encode()), run])
    base_rows = draw(rng, cell, cell.base_days, 0, 0.0)
    now_rows = draw(rng, cell, cell.now_days, cell.base_days, cell.drift)
    at = np.linspace(base_rows[0].min(), base_rows[0].max(), POINTS)
    base, now = side(*base_rows, at), side(*now_rows, at)
    excess = excess_of(
        base.curve, now.level, 20.0, now.folds, confidence=LEVEL, per_row=1.0, paired=False
    )
    used = np.zeros(now.x.shape, bool)
    for start, stop in stretches(base.curve.good):
        used |= (now.x >= at[start]) & (now.x <= at[stop - 1])
    true = cell.drift * float(TRUTHS[TRUTH](now.x[used]).sum())
    # As if rows were independent: their scatter around the curve, and nothing else.
    residual = now.y[used] - TRUTHS[TRUTH](now.x[used]) * (1.0 + cell.drift)
    by_row = float(residual.std()) * math.sqrt(residual.size)
    half = float(pointwise_value(LEVEL, np.array(np.inf))) * by_row
    along = difference_of(base.curve, now.curve, WIDTH_C, LEVEL, paired=False)
    told = [math.nan] * 3
    if along is not None:
        truth = cell.drift * TRUTHS[TRUTH](at)
        inside = ((along.lower <= truth) & (truth <= along.upper))[along.compared].mean()
        every = ((along.lower_all <= truth) & (truth <= along.upper_all))[along.compared].all()
        told = [float(along.p_value <= 1.0 - LEVEL), float(inside), float(every)]
    return [
        excess.amount - true, excess.std_error, float(excess.lower <= true <= excess.upper),
        float(abs(excess.amount - true) <= half), float(excess.p_value <= 1.0 - LEVEL),
        excess.independent_rows / excess.rows, *told,
    ]  # fmt: skip


def summarise(cell: Cell, runs: NDArray[np.float64]) -> str:
    told = runs[np.isfinite(runs[:, 6])]
    mean = [*runs[:, :6].mean(axis=0), *(told[:, 6:].mean(axis=0) if told.size else [math.nan] * 3)]
    ratio = math.sqrt(float(np.mean(runs[:, 1] ** 2))) / float(runs[:, 0].std())
    cells = [f"{mean[2]:.3f}", f"{mean[3]:.3f}", f"{ratio:.2f}", f"{mean[5]:.3f}", f"{mean[4]:.3f}"]
    cells += ["none" if math.isnan(one) else f"{one:.3f}" for one in mean[6:]]
    return f"| {cell} | {' | '.join(cells)} |"


def main() -> None:
    parser = argparse.ArgumentParser(description="Coverage of the excess, size of its tests.")
    parser.add_argument("--runs", type=int, default=400)
    parser.add_argument("--seed", type=int, default=20260101)
    parser.add_argument("--processes", type=int, default=2)
    given = parser.parse_args()
    start = time.perf_counter()
    lines = []
    with ProcessPoolExecutor(given.processes) as pool:
        for cell in CELLS:
            runs = list(
                pool.map(partial(one_run, cell, given.seed), range(given.runs), chunksize=8)
            )
            lines.append(summarise(cell, np.array(runs)))
            print(lines[-1], flush=True)
    error = math.sqrt(LEVEL * (1.0 - LEVEL) / given.runs)
    text = f"""# Excess: coverage of its interval, and size of the tests

Written by `python -m bench.excess --runs {given.runs} --seed {given.seed}`: a baseline and a
current period of days with {ROWS_PER_DAY} readings each, {FOLDS} folds of days, bandwidth
{WIDTH_C:g} C, {KERNEL} kernel, the local quadratic centre. Intervals and bands are nominally
{LEVEL:.0%}, tests at {1.0 - LEVEL:.0%}; a share of 95 % in {given.runs} runs has a standard
error of {error:.1%}.

- *Interval*: share of runs whose interval holds the true excess; *by row*: the same if rows were
  independent and the baseline were known.
- *Error*: root mean square of the stated standard error over the true one.
- *n'/n*: independent rows over rows.
- *Excess found* and *difference found* (sign flips): without drift the size of the test, with
  drift its power.
- *Pointwise*, *whole curve*: coverage of the bands of the difference; none where ten days leave no
  stretch with twelve folds.

"""
    names = "cell", "interval", "by row", "error", "n'/n", "excess found", "difference found"
    names = *names, "pointwise", "whole curve"
    text += f"| {' | '.join(names)} |\n{'|---' * len(names)}|\n"
    text += "\n".join(lines) + "\n"
    place = Path(__file__).parent / "results" / "excess.md"
    place.write_text(text)
    print(f"wrote {place} in {time.perf_counter() - start:.0f} s")


if __name__ == "__main__":
    main()
