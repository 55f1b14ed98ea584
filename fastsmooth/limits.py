"""Limits: curves below which a stated share of the rows lies, from one more pass over the data.

Residuals in standard deviations of single rows at their x are counted by stretch of x and by
value. The share of rows below a value at x is a kernel average of the shares of the stretches, one
width for all levels, with weights that are never negative (Nadaraya-Watson weights; Yu & Jones
1998, J. Am. Stat. Assoc. 93:228, for the width): it rises with the value, so limits of different
levels never cross.
"""

from __future__ import annotations

import math
from collections.abc import Callable, Iterator, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.blocks import Dealer
from fastsmooth.curve import OUTSIDE, Curve, Limits
from fastsmooth.lookup import CurvePoints, Lookup, root_of
from fastsmooth.passes import Progress, silent
from fastsmooth.settings import Reading

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape
    from fastsmooth.reweighted import Finder
    from fastsmooth.source import Chunk, Source, Task

Floats = NDArray[np.float64]

# Residuals are counted in equal cells of asinh(z): fine near the curve, and none is too far.
_FARTHEST = math.asinh(1e6)
_STRETCHES, _CELLS, _GROUPS = 128, 1024, 4
_FEWEST_STRETCHES, _FEWEST_CELLS = 32, 128
_MEMORY_CAP_BYTES = 256 << 20
_LONGEST_RUN_ROWS = 65_536
_RUNS = 128
# Fewer rows than this beyond a level say nothing of where it lies.
_LEAST_BEYOND = 5.0


@dataclass(frozen=True)
class Layout:
    """How residuals are counted.

    Attributes
    ----------
    units, groups, stretches, cells : int
        Units; parts of the data that are left out in turn; stretches of x; cells of z.
    """

    units: int
    groups: int = _GROUPS
    stretches: int = _STRETCHES
    cells: int = _CELLS

    @classmethod
    def within_cap(cls, units: int) -> Layout:
        """Return the finest layout whose counts stay within the memory cap."""
        groups, stretches, cells = _GROUPS, _STRETCHES, _CELLS
        while 8 * units * groups * stretches * cells > _MEMORY_CAP_BYTES:
            if cells > _FEWEST_CELLS:
                cells //= 2
            elif stretches > _FEWEST_STRETCHES:
                stretches //= 2
            elif groups > 2:
                groups //= 2
            else:
                break
        return cls(units, groups, stretches, cells)

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """Shape of the counts."""
        return self.units, self.groups, self.stretches, self.cells

    @property
    def edges(self) -> Floats:
        """Ends of the cells, in asinh(z), (cells + 1,)."""
        return np.linspace(-_FARTHEST, _FARTHEST, self.cells + 1)


def count_residuals(
    source: Source,
    lookup: Lookup,
    layout: Layout,
    reading: Reading,
    finder: Callable[[], Finder] | None = None,
    progress: Progress = silent,
) -> Floats:
    """Read all rows and count their standardised residuals.

    Parameters
    ----------
    source : Source
        Open.
    lookup : Lookup
        The curve of each unit.
    layout : Layout
        How to count.
    reading : Reading
        Blocks, threads.
    finder : callable or None
        See `fastsmooth.reweighted.Reweighted`.
    progress : callable
        As for `make_curve`.

    Returns
    -------
    (units, groups, stretches, cells) float64
        Rows (repeats counted).
    """
    find_units = finder or (lambda: lambda chunk: 0)
    dealer = None if reading.blocks is None else Dealer(reading.blocks, reading.folds)
    per_cell = layout.cells / (2.0 * _FARTHEST)
    done = 0
    # Runs of consecutive rows, some dozens to a group; how many rows a stream holds is not known.
    run = int(np.clip((source.rows_expected or 0) // _RUNS, 1, _LONGEST_RUN_ROWS))

    def place(
        task: Task, chunks: Iterator[Chunk]
    ) -> tuple[int, list[tuple[NDArray[Any], Floats | None]]]:
        find, row, read, found = find_units(), 0, 0, []
        for chunk in chunks:
            unit = find(chunk)
            own = chunk.weight
            root = None if own is None else root_of(own)
            z = lookup.score(chunk.x, chunk.y, unit, np.inf, root).z
            stretch = lookup.stretch(chunk.x, unit, layout.stretches)
            group: NDArray[Any] = (row + np.arange(chunk.x.shape[0])) // run
            group = (task.index + group) % layout.groups
            if dealer is not None:
                fold, _ = dealer.deal(chunk.extra[0])
                group = np.where(fold < 0, -1, fold % layout.groups)
            seen = np.isfinite(z) & (stretch >= 0) & (group >= 0)
            count = chunk.count
            if count is not None:
                seen &= np.isfinite(count) & (count > 0.0)
            with np.errstate(invalid="ignore"):
                cell = (np.arcsinh(np.where(seen, z, 0.0)) + _FARTHEST) * per_cell
            cell = np.clip(cell.astype(np.int64), 0, layout.cells - 1)
            flat = (unit * layout.groups + group) * layout.stretches + stretch
            flat = flat * layout.cells + cell
            found.append((flat[seen], None if count is None else count[seen]))
            row += chunk.x.shape[0]
            read += chunk.rows
        return read, found

    counts = np.zeros(math.prod(layout.shape))
    for read, found in source.map_tasks(place, reading.threads):
        done += read
        progress("finding limits", done, source.rows_expected)
        for flat, count in found:
            # In the order of the tasks: the same bits for any number of threads.
            np.add.at(counts, flat, 1.0 if count is None else count)
    return counts.reshape(layout.shape)


def add_limits(
    source: Source,
    curve: Curve,
    shape: Shape,
    reading: Reading,
    levels: Sequence[float],
    progress: Progress = silent,
) -> Curve:
    """Return the curve with limits of its own rows, in one more pass; as it is without levels."""
    if not levels:
        return curve
    lookup = Lookup([CurvePoints.of(curve)], curve.scale == "log")
    layout = Layout.within_cap(lookup.units)
    counts = count_residuals(source, lookup, layout, reading, progress=progress)
    passes = curve.trace["engine"]["passes"] + 1
    return replace(
        curve, limits=limits_of(curve, counts[0], layout, levels, shape),
        trace={**curve.trace, "engine": {**curve.trace["engine"], "passes": passes}},
    )  # fmt: skip


def limits_of(
    curve: Curve, counts: Floats, layout: Layout, levels: Sequence[float], shape: Shape
) -> Limits:
    """Turn counted residuals of one unit into limits.

    Parameters
    ----------
    curve : Curve
        The curve that residuals were taken from.
    counts : (groups, stretches, cells) float64
        Rows.
    layout : Layout
        How they were counted.
    levels : sequence of float
        Shares, ascending, between 0 and 1.
    shape : Shape
        The curve's kernel function.
    """
    log = curve.scale == "log"
    x = np.log(curve.x) if log else curve.x
    width = (x[-1] - x[0]) / layout.stretches
    own = math.log(curve.bandwidth) if curve.widths_are_factors else curve.bandwidth
    if curve.by_neighbours:
        own = 0.0
    # Quantiles ask for wider windows than the mean; less than a stretch to either side is none.
    h = max(own * widening(levels), 1.5 * width)
    centres = x[0] + width * (np.arange(layout.stretches) + 0.5)

    def z_at(places: Floats, rows: Floats) -> tuple[Floats, Floats]:
        """Limits in z at places, (levels, places), and the rows that they rest on."""
        weight = _kernel(np.abs(places[:, np.newaxis] - centres) / h, shape)
        in_cells = weight @ rows
        total = in_cells.sum(axis=1)
        square = (weight**2) @ rows.sum(axis=1)
        with np.errstate(invalid="ignore", divide="ignore"):
            effective = np.where(square > 0.0, total**2 / square, 0.0)
        z = np.stack([_quantiles(in_cells, total, level, layout.edges) for level in levels])
        return z, effective

    z, effective = z_at(x, counts.sum(axis=0))
    beyond = np.minimum(np.array(levels), 1.0 - np.array(levels))[:, np.newaxis] * effective
    known = (beyond >= _LEAST_BEYOND) & (curve.status != OUTSIDE)
    with np.errstate(invalid="ignore"):
        values = np.where(known, curve.estimate + np.sinh(z) * curve.residual_sd, np.nan)
    below, judged = np.zeros(len(levels)), 0.0
    for group in range(layout.groups):
        others = np.delete(counts, group, axis=0).sum(axis=0)
        z, effective = z_at(centres, others)
        rows = np.where(effective > 0.0, counts[group].sum(axis=1), 0.0)
        judged += float(rows.sum())
        for place in range(len(levels)):
            share = _share_below(counts[group], z[place], layout.edges)
            below[place] += float((share * rows).sum())
    coverage = below / judged if judged else np.full(len(levels), np.nan)
    return Limits(tuple(levels), values, tuple(coverage.tolist()), int(judged))


def _kernel(distance: Floats, shape: Shape) -> Floats:
    if not shape.coefficients:
        return np.exp(-0.5 * distance**2)
    value = np.polynomial.polynomial.polyval(distance, shape.coefficients)
    return np.where(distance <= shape.support, value, 0.0)


def widening(levels: Sequence[float]) -> float:
    """Return how much wider than the mean's a window for quantiles is: the widest of the levels'.

    (t (1 - t) / phi(Phi^-1(t))^2)^(1/5) (Yu & Jones 1998, J. Am. Stat. Assoc. 93:228).
    """
    from scipy.stats import norm

    t = np.array(levels)
    return float(np.max((t * (1.0 - t) / norm.pdf(norm.ppf(t)) ** 2) ** 0.2))


def _quantiles(in_cells: Floats, total: Floats, level: float, edges: Floats) -> Floats:
    """Where the share `level` of each row of cells is reached, on a straight line in its cell."""
    up_to = np.cumsum(in_cells, axis=1)
    target = level * total
    cell = np.minimum((up_to < target[:, np.newaxis]).sum(axis=1), in_cells.shape[1] - 1)
    rows = np.arange(in_cells.shape[0])
    before = np.where(cell > 0, up_to[rows, np.maximum(cell - 1, 0)], 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        share = np.clip((target - before) / in_cells[rows, cell], 0.0, 1.0)
    return edges[cell] + share * (edges[1] - edges[0])


def _share_below(rows: Floats, z: Floats, edges: Floats) -> Floats:
    """The share of each stretch's rows below its limit, on a straight line within a cell."""
    place = np.clip(
        (np.nan_to_num(z) - edges[0]) / (edges[1] - edges[0]), 0.0, rows.shape[1] - 1e-9
    )
    cell = place.astype(np.int64)
    up_to = np.cumsum(rows, axis=1)
    each = np.arange(rows.shape[0])
    before = np.where(cell > 0, up_to[each, np.maximum(cell - 1, 0)], 0.0)
    with np.errstate(invalid="ignore", divide="ignore"):
        share = (before + (place - cell) * rows[each, cell]) / up_to[:, -1]
    return np.nan_to_num(share)
