"""What a caller may set, in three groups, checked once."""

from __future__ import annotations

import os
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from fastsmooth.errors import InputError
from fastsmooth.near import advise

if TYPE_CHECKING:
    from fastsmooth.blocks import Block

ESTIMATORS = ("local-linear", "local-constant")
KERNELS = (
    "biweight", "epanechnikov", "uniform", "triangular", "triweight", "tricube", "gaussian",
)  # fmt: skip
CRITERIA = ("leave-one-out", "leave-block-out", "gcv", "aicc", "plug-in")
SCALES = ("linear", "log")
NOISES = ("local", "constant")
BIASES = ("corrected", "ignored")
BANDS = ("pointwise", "simultaneous")


def usable_cores() -> int:
    """Return the number of processors that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def one_of(argument: str, value: str, known: tuple[str, ...]) -> None:
    """Refuse a word that is none of the known ones."""
    if value not in known:
        raise InputError(
            argument, "be one of " + ", ".join(known), f"it is '{value}'", advise(value, known)
        )


@dataclass(frozen=True)
class Reading:
    """Which rows are read, and how.

    Parameters
    ----------
    where : str or None
        SQL condition that a row must meet.
    range : (object, object) or None
        Lowest and highest x to use, in the column's own terms; None takes all.
    scale : str
        ``linear``, or ``log`` for x spread over decades: windows are then factors.
    strict : bool
        Whether a single refused row is an error.
    threads : int
        Row groups read at a time. Results do not depend on it.
    folds : int
        Parts into which the rows are dealt for standard errors.
    block : Block or str or None
        Which rows may depend on each other: a column, or a time column with a unit
        (``logged_at:day``). None deals runs of consecutive rows to the folds.
    """

    where: str | None = None
    range: tuple[object, object] | None = None
    scale: str = "linear"
    strict: bool = False
    threads: int = field(default_factory=usable_cores)
    folds: int = 32
    block: Block | str | None = None

    def __post_init__(self) -> None:
        if isinstance(self.block, str):
            from fastsmooth.blocks import Block

            object.__setattr__(self, "block", Block.parse(self.block))
        one_of("--scale", self.scale, SCALES)
        if self.threads < 1:
            raise InputError("--threads", "be at least 1", f"it is {self.threads}", "leave it out")
        if not 2 <= self.folds <= 1024:
            raise InputError(
                "--folds", "be between 2 and 1024", f"it is {self.folds}", "leave it out"
            )

    @property
    def blocks(self) -> Block | None:
        """The block, parsed."""
        assert not isinstance(self.block, str)
        return self.block


@dataclass(frozen=True)
class Smoothing:
    """How the mean is estimated.

    Parameters
    ----------
    estimator : str
        ``local-linear`` or ``local-constant``.
    kernel : str
        One of `KERNELS`.
    bandwidth : object or None
        Half-width of the window (standard deviation of the Gaussian) in the column's terms, a
        factor above 1 on a log scale; None lets the criterion choose.
    criterion : str or None
        One of `CRITERIA`; None means ``leave-block-out`` where a block is given, else
        ``leave-one-out``.
    widths : int
        Bandwidths in the search grid.
    """

    estimator: str = "local-linear"
    kernel: str = "biweight"
    bandwidth: object | None = None
    criterion: str | None = None
    widths: int = 48

    def __post_init__(self) -> None:
        one_of("--estimator", self.estimator, ESTIMATORS)
        one_of("--kernel", self.kernel, KERNELS)
        if self.criterion is not None:
            one_of("--criterion", self.criterion, CRITERIA)
        if not 8 <= self.widths <= 1000:
            raise InputError(
                "--widths", "be between 8 and 1000", f"it is {self.widths}", "leave it out"
            )


@dataclass(frozen=True)
class Band:
    """How the curve is laid out and how sure it claims to be.

    Parameters
    ----------
    level : float
        Confidence level of the band.
    kind : str
        ``pointwise`` covers each point with that confidence, ``simultaneous`` the whole curve.
    bias : str
        ``corrected`` covers the mean; ``ignored`` covers the smoothed mean.
    noise : str
        ``local`` lets the residual variance change with x; ``constant`` does not.
    least_rows : float
        Points with fewer effective rows are ``thin``; with a block also those whose window
        meets fewer than twelve folds, or whose error has fewer than four degrees of freedom.
    points : int
        Evenly spaced points from the lowest to the highest x (in log x on a log scale).
    at : tuple or None
        Points of the caller's own, in the column's terms, in place of `points`.
    landmarks : bool
        Whether to locate the steepest place and the turning points, with intervals.
    crossings : tuple of float
        Values of y whose crossings are located too.
    """

    level: float = 0.95
    kind: str = "pointwise"
    bias: str = "corrected"
    noise: str = "local"
    least_rows: float = 30.0
    points: int = 256
    at: tuple[object, ...] | None = None
    landmarks: bool = False
    crossings: tuple[float, ...] = ()

    def __post_init__(self) -> None:
        one_of("--band", self.kind, BANDS)
        one_of("--bias", self.bias, BIASES)
        one_of("--noise", self.noise, NOISES)
        if not 0.0 < self.level < 1.0:
            raise InputError(
                "--level", "lie between 0 and 1", f"it is {self.level}", "write 0.95 for 95 percent"
            )
        if not self.least_rows >= 0.0:
            raise InputError(
                "--least-rows", "be 0 or more", f"it is {self.least_rows}", "leave it out"
            )
        if not 2 <= self.points <= 1_000_000:
            raise InputError(
                "--points", "be between 2 and 1000000", f"it is {self.points}", "leave it out"
            )
        if self.at is not None and not len(self.at):
            raise InputError("--at", "hold a point", "it is empty", "give points or leave it out")
