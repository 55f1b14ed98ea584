"""What is to be made of every unit, and what holds the units' tables."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any, Protocol, TypeVar

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable
from fastsmooth.fleetpass import UnitSample, usual_bins
from fastsmooth.grouping import Grouping, Key
from fastsmooth.kernels.shapes import SHAPES
from fastsmooth.likelybins import bins_for_width, likely_bins
from fastsmooth.plan import Plan, Sample
from fastsmooth.settings import Band, Reading, Smoothing
from fastsmooth.source import Source

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape
    from fastsmooth.robust import Core

Floats = NDArray[np.float64]
T = TypeVar("T")
U = TypeVar("U")


@dataclass(frozen=True)
class Job:
    """What is to be made of every unit.

    Attributes
    ----------
    source : Source
        Opened data.
    reading, smoothing, band
        Settings.
    grouping : Grouping
        What tells units apart.
    criterion : str
        What chooses the width.
    fixed : float or None
        The caller's width for all units, on the plan's scale.
    places : (n,) float64 or None
        The caller's points, on the plan's scale.
    shared_bandwidth : bool
        Whether all units get one width, chosen jointly.
    cores, robust : mapping of tuple
        Where most rows of a unit lie, and what weights did, once rows far off weigh less.
    """

    source: Source
    reading: Reading
    smoothing: Smoothing
    band: Band
    grouping: Grouping
    criterion: str
    fixed: float | None
    places: Floats | None
    shared_bandwidth: bool
    cores: Mapping[Key, Core] = field(default_factory=dict)
    robust: Mapping[Key, dict[str, Any]] = field(default_factory=dict)

    @property
    def shape(self) -> Shape:
        """The kernel function."""
        return SHAPES[self.smoothing.kernel]

    def likely_bins(self, sample: UnitSample, plan: Plan, rows_per_unit: float) -> int:
        """Guess how many bins a typical unit will ask for."""
        if self.fixed is not None:
            return bins_for_width(self.fixed, plan.origin, plan.high, self.shape)
        told = likely_bins(
            sample.rows, sample.code, plan, self.shape, self.smoothing.estimator, rows_per_unit
        )
        return usual_bins(sample, plan, rows_per_unit) if told is None else told


class Tables(Protocol):
    """What holds the tables of all units: a pass over the data, or a store."""

    def table(self, key: Key) -> BinTable:
        """Return the table of a unit."""

    def sample(self, key: Key) -> Sample:
        """Return some of its rows, in runs."""

    def shown(self, key: Key) -> Floats:
        """Return x and y of a thin selection of its rows, (2, n)."""


def spread(function: Callable[[T], U], values: Sequence[T], threads: int) -> list[U]:
    """Apply a function to values, several at a time; stop early when one fails."""
    if threads == 1 or len(values) < 2:
        return [function(value) for value in values]
    pool = ThreadPoolExecutor(threads, thread_name_prefix="fastsmooth")
    try:
        return list(pool.map(function, values))
    finally:
        pool.shutdown(wait=True, cancel_futures=True)
