"""Data whose rows weigh less the farther they lie from a curve: a source like any other."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from dataclasses import replace
from threading import Lock
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.lookup import Lookup, root_of
from fastsmooth.source import CHUNK_ROWS, Chunk, Source, Task

Floats = NDArray[np.float64]
# Gives each row of a chunk the number of its unit; for one thread.
Finder = Callable[[Chunk], "int | NDArray[np.int64]"]

# Standard deviation of normal noise over its median absolute value.
MEDIAN_TO_SD = 1.482602218505602
# Cleveland's six median absolute residuals, in standard deviations.
CUTOFF = 6.0 / MEDIAN_TO_SD
# Weights of zero would drop rows from the counts.
LEAST_WEIGHT = 1e-9
_HALF = 0.5
STRETCHES = 64
# What the weights are called where a column of precisions is expected.
_NAME = "weights from the curve"


def bisquare(z: Floats) -> Floats:
    """Return the weights of residuals in standard deviations; 1 where there is none (NaN).

    (1 - (z / c)^2)^2 within the cutoff c, beyond it next to nothing (Cleveland 1979, J. Am. Stat.
    Assoc. 74:829).
    """
    with np.errstate(over="ignore", invalid="ignore"):
        inside = np.clip(1.0 - (z / CUTOFF) ** 2, 0.0, 1.0) ** 2
    return np.where(np.isnan(z), 1.0, np.maximum(inside, LEAST_WEIGHT))


class Reweighted(Source):
    """A source whose rows carry bisquare weights, times their own.

    Parameters
    ----------
    source : Source
        Open; closing it is its owner's.
    lookup : Lookup
        The curve of each unit, its residual standard deviation a robust one.
    finder : callable
        Called once for each task read; returns what finds the units of that task's rows.

    Attributes
    ----------
    rows, down, ignored : (units, STRETCHES) int64
        Rows that were read since the last `forget`, by unit and stretch of x; those that count
        less than half; those that do not count at all.
    """

    def __init__(
        self, source: Source, lookup: Lookup, finder: Callable[[], Finder] | None = None
    ) -> None:
        # All that is open stays one: this is another way to read it, not another opening.
        self.__dict__.update(source.__dict__)
        self._inner = source
        self._lookup = lookup
        self._finder = finder or (lambda: lambda chunk: 0)
        self._lock = Lock()
        weight = source.columns.weight
        self.columns = replace(source.columns, weight=_NAME if weight is None else weight)
        self.forget()

    def forget(self) -> None:
        """Count anew: a pass begins."""
        shape = (self._lookup.units, STRETCHES)
        self.rows, self.down, self.ignored = (np.zeros(shape, np.int64) for _ in range(3))

    def map_groups(self, *arguments: Any, **options: Any) -> Iterator[Any]:
        """Pass over the data; see `Source.map_groups`. Rows are counted anew."""
        self.forget()
        return super().map_groups(*arguments, **options)

    def chunks(self, task: Task, rows: int = CHUNK_ROWS) -> Iterator[Chunk]:
        """Read one task; see `Source.chunks`."""
        find = self._finder()
        for chunk in self._inner.chunks(task, rows):
            yield self._weigh(chunk, find(chunk))

    def _weigh(self, chunk: Chunk, unit: int | NDArray[np.int64]) -> Chunk:
        own = chunk.weight
        root = None if own is None else root_of(own)
        scored = self._lookup.score(chunk.x, chunk.y, unit, np.inf, root)
        weight = bisquare(scored.z)
        stretch = self._lookup.stretch(chunk.x, unit, STRETCHES)
        place = np.asarray(unit * STRETCHES + stretch)
        seen = (stretch >= 0) & np.isfinite(scored.z)
        counts = [
            np.bincount(place[seen & which], minlength=self.rows.size).reshape(self.rows.shape)
            for which in (np.True_, weight < _HALF, weight <= LEAST_WEIGHT)
        ]
        with self._lock:
            # Whole numbers: the order in which threads come does not matter.
            self.rows += counts[0]
            self.down += counts[1]
            self.ignored += counts[2]
        return replace(chunk, weight=weight if own is None else weight * own)
