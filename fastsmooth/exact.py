"""The exact engine: rows in memory, sorted once, every sum over rows and not over bins."""

from __future__ import annotations

from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.blocks import Dealer
from fastsmooth.errors import InputError, ReadError
from fastsmooth.passes import Progress, silent
from fastsmooth.scoring import MOST_LEVERAGE, BinnedScoring, Mapper, Point, criteria_of
from fastsmooth.settings import ESTIMATORS, Reading
from fastsmooth.smoother import WIDEST_RANGES

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape
    from fastsmooth.plan import Plan
    from fastsmooth.source import Chunk, Columns, Source, Task

Floats = NDArray[np.float64]

# With so few rows the exact engine costs a second at most, so `auto` takes it.
AUTO_ROWS = 100_000
_POINTS_AT_A_TIME = 8
_NONE = np.empty(0)


@dataclass(frozen=True, eq=False)
class Rows:
    """All usable rows, ascending in x.

    Attributes
    ----------
    x : (n,) float64
        On the plan's scale.
    y : (n,) float64
        Less the plan's reference.
    weight : (n,) or (0,) float64
        Precision times repeats; empty where all are 1.
    repeats : (n,) or (0,) float64
        How many equal rows a row stands for; empty where all are 1.
    fold : (n,) int16
        Fold of each row.
    folds : int
        Number of folds with rows.
    """

    x: Floats
    y: Floats
    weight: Floats
    repeats: Floats
    fold: NDArray[np.int16]
    folds: int

    @property
    def total(self) -> float:
        """Rows, repeats counted."""
        return float(self.repeats.sum()) if self.repeats.size else float(self.x.shape[0])


def bytes_per_row(columns: Columns) -> int:
    """Return how much memory the exact engine needs for a row while it sorts and fits."""
    arrays = 2 + (columns.weight is not None or columns.count is not None) + (
        columns.count is not None
    )  # fmt: skip
    # As gathered, and sorted; the fold; then the order while sorting, or the variance later.
    return 2 * 8 * arrays + 2 * 2 + 8


def gather_rows(
    source: Source, table: BinTable, reading: Reading, progress: Progress = silent
) -> Rows:
    """Read again, keep the rows that the table has counted, and sort them by x.

    Raises
    ------
    ReadError
        The rows are not those of the pass before.
    """
    plan = table.plan
    folds = {fold: place for place, fold in enumerate(sorted(table.sums))}
    dealer = None if reading.blocks is None else Dealer(reading.blocks, plan.folds)

    def keep(task: Task, chunks: Iterator[Chunk]) -> list[tuple[NDArray[Any], ...]]:
        parts, row = [], 0
        for chunk in chunks:
            parts.append(_usable(chunk, plan, folds, dealer, task.index, row))
            row += chunk.x.shape[0]
        return parts

    done, parts = 0, []
    for part in source.map_tasks(keep, reading.threads):
        parts += part
        done += sum(one[0].shape[0] for one in part)
        progress("gathering", done, table.tally.used)
    x, y, weight, repeats, fold = (
        np.concatenate([part[place] for part in parts]) if parts else _NONE for place in range(5)
    )
    parts.clear()
    if x.shape[0] != table.tally.used:
        raise ReadError(
            "DATA", "stay as it is while it is read",
            f"{table.tally.used:,} rows could be used at first, {x.shape[0]:,} now",
            "run it again when nothing writes to it",
        )  # fmt: skip
    progress("sorting", 0, None)
    codes = fold.astype(np.int16)
    if not ascends(x):
        # No stable sort: it takes three times as long, and equal x share their window anyway.
        order = np.argsort(x)
        x, y, codes = x[order], y[order], codes[order]
        weight = weight[order] if weight.size else weight
        repeats = repeats[order] if repeats.size else repeats
    y -= plan.reference
    return Rows(x, y, weight, repeats, codes, len(folds))


def ascends(x: Floats) -> bool:
    """Return whether x never descends; stops at the first stretch that does."""
    # A block of cache at a time: no array of comparisons as long as the data.
    step = 1 << 16
    return all(
        bool(np.all(x[start : start + step] <= x[start + 1 : start + step + 1]))
        for start in range(0, x.shape[0] - step, step)
    ) and bool(np.all(np.diff(x[-step - 1 :]) >= 0.0))


def _usable(
    chunk: Chunk, plan: Plan, folds: dict[int, int], dealer: Dealer | None, task: int, row: int
) -> tuple[NDArray[Any], ...]:
    """x on the scale, y, weight, repeats and fold of the rows that a bin table would take."""
    x, y, weight, count = chunk.x, chunk.y, chunk.weight, chunk.count
    fold = np.empty(x.shape[0], np.int16)
    if dealer is None:
        for part, start, stop in plan.run_stretches(task, row, x.shape[0]):
            fold[start:stop] = folds.get(part, -1)
    else:
        dealt, _ = dealer.deal(chunk.extra[0])
        places = np.full(plan.folds + 1, -1, np.int16)
        places[list(folds)] = list(folds.values())
        fold[:] = places[dealt]
    usable = np.isfinite(x) & np.isfinite(y) & (fold >= 0)
    for one in (weight, count):
        if one is not None:
            usable &= (one > 0.0) & np.isfinite(one)
    if plan.scale == "log":
        usable &= x > 0.0
        x = np.log(x, where=usable, out=np.full(x.shape[0], np.nan))
    with np.errstate(invalid="ignore", over="ignore"):
        # As the bins are found: what lies in none is out of range.
        place = (x - plan.origin) * (1.0 / plan.width)
        usable &= (place >= 0.0) & (place < plan.bins)
    repeats = _NONE if count is None else count[usable]
    both = _NONE if weight is None and count is None else np.ones(int(np.count_nonzero(usable)))
    if weight is not None:
        both = both * weight[usable]
    if count is not None:
        both = both * repeats
    return x[usable], y[usable], both, repeats, fold[usable]


class ExactScoring(BinnedScoring):
    """Scores of both estimators at any bandwidth, from sorted rows.

    Leaving out whole folds is scored from the bins here too: a fold's absence moves the fit by
    far more than binning does.
    """

    def __init__(self, table: BinTable, pyramid: Pyramid, shape: Shape, rows: Rows) -> None:
        super().__init__(table, pyramid, shape)
        self.rows = rows
        self.coefficients = np.array(shape.coefficients, np.float64)
        self._vote_of(np.empty(0, bool))

    def _vote_of(self, voting: NDArray[np.bool_]) -> None:
        """Let these rows vote; all of them where the array is empty."""
        rows = self.rows
        self.voting = voting
        kept = slice(None) if not voting.size else voting
        repeats = rows.repeats[kept] if rows.repeats.size else None
        weight = rows.weight[kept] if rows.weight.size else None
        fold = rows.fold[kept]
        self.count = float(fold.shape[0] if repeats is None else repeats.sum())
        self.weight = float(fold.shape[0] if weight is None else weight.sum())
        self.shares = np.bincount(fold, weight, minlength=rows.folds) / self.weight

    def points(self, grid: list[float], mapped: Mapper) -> tuple[list[dict[str, Point]], float]:
        """Score every row that all widths can predict; see `BinnedScoring.points`."""
        n = self.rows.x.shape[0]

        def first(bandwidth: float) -> tuple[dict[str, Point], NDArray[np.intp]]:
            alone = np.zeros(n, bool)
            return self._score(bandwidth, alone), np.flatnonzero(alone)

        found = list(mapped(first, grid))
        alone = np.zeros(n, bool)
        for _, places in found:
            alone[places] = True
        if not alone.any():
            return [points for points, _ in found], 0.0
        self._vote_of(~alone)
        repeats = self.rows.repeats
        lost = float(repeats[alone].sum()) if repeats.size else float(np.count_nonzero(alone))
        return list(mapped(self.scores, grid)), lost

    def value(self, bandwidth: float, like: float, name: str, criterion: str) -> float:
        """Return one criterion of one estimator; `like` does not matter without levels."""
        from fastsmooth.kernels import windows

        rows, sums = self.rows, np.empty((2, 5))
        width = cut_width(bandwidth, self.table)
        windows.score_windows(
            rows.x, rows.y, rows.weight, rows.repeats, self.voting, self.coefficients, width, 0,
            rows.x.shape[0], sums,
        )  # fmt: skip
        score, residual, trace, lost, _ = sums[ESTIMATOR_ROWS[name]].tolist()
        return self._criteria(score, residual, trace, lost)[criterion]

    def scores(self, bandwidth: float, like: float | None = None) -> dict[str, Point]:
        """Score every voting row against the others."""
        return self._score(bandwidth, np.zeros(self.rows.x.shape[0], bool))

    def _score(self, bandwidth: float, alone: NDArray[np.bool_]) -> dict[str, Point]:
        from fastsmooth.kernels import foldscores

        rows = self.rows
        by_fold, sums = np.empty((2, rows.folds)), np.empty((2, 4))
        foldscores.score_folds(
            rows.x, rows.y, rows.weight, rows.repeats, self.voting, rows.fold, self.coefficients,
            cut_width(bandwidth, self.table), MOST_LEVERAGE, alone, by_fold, sums,
        )  # fmt: skip
        points = {}
        for name, place in ESTIMATOR_ROWS.items():
            criteria = self._criteria(*sums[place].tolist())
            folds = by_fold[place] / self.weight
            points[name] = Point(bandwidth, criteria, float(sums[place, 2]), folds, self.shares)
        return points

    def _criteria(
        self, score: float, residual: float, trace: float, lost: float
    ) -> dict[str, float]:
        heard = self.weight * (1.0 - lost / self.count)
        return criteria_of(score, residual, trace, heard, self.weight, self.count)


# Rows of the kernels' output.
ESTIMATOR_ROWS = {"local-constant": 0, "local-linear": 1}
assert set(ESTIMATOR_ROWS) == set(ESTIMATORS)


def cut_width(bandwidth: float, table: BinTable) -> float:
    """Return a bandwidth, cut where all wider ones fit the same line."""
    return min(bandwidth, WIDEST_RANGES * (table.plan.high - table.plan.origin))


class ExactFits(NamedTuple):
    """Local polynomials at points, from all rows; NaN in empty windows.

    Attributes
    ----------
    value : (p,) float64
        Less the plan's reference.
    slope : (p,) float64
        Per unit of x, on the plan's scale.
    squares : (p,) float64
        Sum of squared weights.
    variance : (p,) float64
        Variance of the value if rows are independent.
    degree : (p,) float64
        Degree that the window's rows bear; -1 in empty windows.
    """

    value: Floats
    slope: Floats
    squares: Floats
    variance: Floats
    degree: Floats


def fit_exactly(
    places: Floats,
    degree: int,
    *,
    rows: Rows,
    variance: Floats,
    shape: Shape,
    bandwidth: float,
    threads: int,
) -> ExactFits:
    """Fit local polynomials at any points.

    Parameters
    ----------
    places : (p,) float64
        On the plan's scale.
    degree : int
        0 to 2; lower where a window's rows do not bear it.
    rows : Rows
        Sorted.
    variance : (n,) float64
        Of each row of weight 1.
    shape : Shape
        Compact kernel function.
    bandwidth : float
        On the plan's scale.
    threads : int
        The result does not depend on it.
    """
    from fastsmooth.kernels import windows

    out = np.empty((7, places.shape[0]))
    coefficients = np.array(shape.coefficients, np.float64)
    per_row = variance
    if rows.weight.size:
        # Variance of one of the equal rows: inverse to its precision.
        per_row = variance * (rows.repeats if rows.repeats.size else 1.0) / rows.weight

    def fit(start: int) -> None:
        some = np.ascontiguousarray(places[start : start + _POINTS_AT_A_TIME])
        part = np.empty((7, some.shape[0]))
        windows.fit_points(
            some, rows.x, rows.y, rows.weight, rows.repeats, per_row, coefficients, bandwidth,
            degree, part,
        )  # fmt: skip
        out[:, start : start + _POINTS_AT_A_TIME] = part

    with ThreadPoolExecutor(threads) as pool:
        list(pool.map(fit, range(0, places.shape[0], _POINTS_AT_A_TIME)))
    return ExactFits(
        out[windows.VALUE], out[windows.SLOPE], out[windows.SQUARES], out[windows.VARIANCE],
        out[windows.DEGREE],
    )  # fmt: skip


def choose_engine(
    wanted: str, kernel: str, table: BinTable, memory_gigabytes: float
) -> tuple[str, str]:
    """Return which engine runs, and why.

    Raises
    ------
    InputError
        The exact engine is wanted where it cannot run.
    """
    from fastsmooth.kernels.shapes import SHAPES

    rows = table.tally.used
    needed = rows * bytes_per_row(table.plan.columns) / 1e9
    compact = bool(SHAPES[kernel].coefficients)
    if wanted == "exact":
        if not compact:
            raise InputError(
                "--engine exact", "come with a kernel that ends", f"--kernel is {kernel}",
                "take another kernel, or the binned engine",
            )  # fmt: skip
        check_memory("--engine exact", "the binned engine", table, memory_gigabytes)
        return "exact", "asked for"
    if wanted == "binned":
        return "binned", "asked for"
    if not compact:
        return "binned", f"the {kernel} kernel has no end"
    if rows > AUTO_ROWS:
        return "binned", f"more than {AUTO_ROWS:,} rows"
    if needed > memory_gigabytes:
        return "binned", f"--memory {memory_gigabytes:g}"
    return "exact", f"at most {AUTO_ROWS:,} rows"


def check_memory(argument: str, instead: str, table: BinTable, memory_gigabytes: float) -> None:
    """Refuse more rows than the memory allowed can hold.

    Raises
    ------
    InputError
        Naming the memory needed and the memory allowed.
    """
    rows = table.tally.used
    needed = rows * bytes_per_row(table.plan.columns) / 1e9
    if needed > memory_gigabytes:
        raise InputError(
            argument, f"stay within --memory {memory_gigabytes:g} (gigabytes)",
            f"{rows:,} rows need {needed:.3g}",
            f"raise it to {needed * 1.05:.2g}, or take {instead}",
        )  # fmt: skip
