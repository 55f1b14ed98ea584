"""What a caller may set, in three groups, checked once."""

from __future__ import annotations

import contextlib
import math
import os
from collections.abc import Iterable
from dataclasses import dataclass, field
from numbers import Integral, Real
from typing import TYPE_CHECKING, Any

from fastsmooth.addresses import DEFAULT_TIMEOUT_SECONDS
from fastsmooth.errors import InputError
from fastsmooth.near import advise

if TYPE_CHECKING:
    from fastsmooth.blocks import Block

# Estimators with a bandwidth, searched together; and the one with a number of neighbours.
ESTIMATORS = ("local-linear", "local-constant")
NEAREST = "nearest"
KERNELS = (
    "biweight", "epanechnikov", "uniform", "triangular", "triweight", "tricube", "gaussian",
)  # fmt: skip
CRITERIA = ("leave-one-out", "leave-block-out", "gcv", "aicc", "plug-in")
SCALES = ("linear", "log")
ENGINES = ("auto", "binned", "exact")
NOISES = ("local", "constant")
BIASES = ("corrected", "ignored")
BANDS = ("pointwise", "simultaneous")


def usable_cores() -> int:
    """Return the number of processors that this process may use."""
    if hasattr(os, "sched_getaffinity"):
        return len(os.sched_getaffinity(0))
    return os.cpu_count() or 1


def one_of(argument: str, value: object, known: tuple[str, ...]) -> None:
    """Refuse a word that is none of the known ones."""
    if not isinstance(value, str) or value not in known:
        raise InputError(
            argument, "be one of " + ", ".join(known), f"it is {value!r}",
            advise(str(value), known),
        )  # fmt: skip


def check_text(argument: str, value: object, names: str, remedy: str = "leave it out") -> None:
    """Refuse what is no text."""
    if not isinstance(value, str):
        raise InputError(argument, names, f"it is {value!r}", remedy)


def check_flag(argument: str, value: object) -> None:
    """Refuse what is neither True nor False: any text counts as true."""
    if not isinstance(value, bool):
        raise InputError(argument, "be True or False", f"it is {value!r}", "leave it out")


def whole_number(argument: str, value: Any, low: int, high: int | None = None) -> int:
    """Return a whole number as a plain int, or refuse it."""
    limits = f"be at least {low:,}" if high is None else f"be between {low:,} and {high:,}"
    if not isinstance(value, Integral) or isinstance(value, bool):
        kind = "be a whole number"
        raise InputError(
            argument, f"{kind}, {low:,} or more" if high is None else limits.replace("be", kind, 1),
            f"it is {value!r}", "leave it out",
        )  # fmt: skip
    plain = int(value)
    if plain < low or (high is not None and plain > high):
        raise InputError(argument, limits, f"it is {plain:,}", "leave it out")
    return plain


def finite_number(
    argument: str, value: Any, requirement: str, remedy: str = "leave it out"
) -> float:
    """Return a finite number as a plain float, or refuse it."""
    if not isinstance(value, Real) or isinstance(value, bool) or not math.isfinite(value):
        raise InputError(argument, requirement, f"it is {value!r}", remedy)
    return float(value)


def as_tuple(argument: str, value: Any, requirement: str, remedy: str) -> tuple[Any, ...]:
    """Return several values as a tuple; refuse a single one, of which a text is one too."""
    if isinstance(value, Iterable) and not isinstance(value, str | bytes):
        # An array without dimensions says that it can be iterated, but cannot.
        with contextlib.suppress(TypeError):
            return tuple(value)
    raise InputError(argument, requirement, f"it is {value!r}", remedy)


def _set(settings: Any, **values: Any) -> None:
    """Store the plain form of what was checked in a frozen group of settings."""
    for name, value in values.items():
        object.__setattr__(settings, name, value)


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
        (``logged_at:day``); a name that holds a colon stands in double quotes. None deals runs of
        consecutive rows to the folds.
    timeout_seconds : float
        How long a silent object store is waited for, each time.
    last : str or None
        Of a store: only so much up to its newest period, as in ``12 months``.
    """

    where: str | None = None
    range: tuple[object, object] | None = None
    scale: str = "linear"
    strict: bool = False
    threads: int = field(default_factory=usable_cores)
    folds: int = 32
    block: Block | str | None = None
    timeout_seconds: float = DEFAULT_TIMEOUT_SECONDS
    last: str | None = None

    def __post_init__(self) -> None:
        if self.last is not None:
            check_text("--last", self.last, "be a number and a unit, as in '12 months'")
        if self.block is not None:
            from fastsmooth.blocks import Block

            if not isinstance(self.block, Block):
                check_text("--block", self.block, "name a column, with or without a unit")
                _set(self, block=Block.parse(str(self.block)))
        if self.where is not None:
            check_text("--where", self.where, "be an SQL condition")
        if self.range is not None:
            both, remedy = "hold the lowest and the highest x", "give two values"
            ends = as_tuple("--range", self.range, both, remedy)
            if len(ends) != 2:
                raise InputError("--range", both, f"it is {self.range!r}", remedy)
            _set(self, range=ends)
        one_of("--scale", self.scale, SCALES)
        check_flag("--strict", self.strict)
        seconds = "be a positive number of seconds"
        timeout = finite_number("--timeout", self.timeout_seconds, seconds)
        if not timeout > 0.0:
            raise InputError("--timeout", seconds, f"it is {timeout:g}", "leave it out")
        _set(
            self, timeout_seconds=timeout, threads=whole_number("--threads", self.threads, 1),
            folds=whole_number("--folds", self.folds, 2, 1024),
        )  # fmt: skip

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
        ``local-linear``, ``local-constant``, or ``nearest``, the mean of the nearest rows, which
        needs all rows in memory and knows neither kernel nor bandwidth.
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
    engine : str
        ``binned`` sums over bins, ``exact`` over every row in memory (not with the Gaussian
        kernel); ``auto`` is exact up to 100,000 rows.
    memory_gigabytes : float
        What the exact engine may take; beyond it, it is refused.
    neighbours : int or None
        Rows that ``nearest`` takes the mean of; None lets the criterion choose.
    robust : bool
        Whether rows far from the curve weigh less, in up to three further passes over the data.
    """

    estimator: str = "local-linear"
    kernel: str = "biweight"
    bandwidth: object | None = None
    criterion: str | None = None
    widths: int = 48
    engine: str = "auto"
    memory_gigabytes: float = 4.0
    neighbours: int | None = None
    robust: bool = False

    def __post_init__(self) -> None:
        one_of("--estimator", self.estimator, (*ESTIMATORS, NEAREST))
        one_of("--kernel", self.kernel, KERNELS)
        if self.criterion is not None:
            one_of("--criterion", self.criterion, CRITERIA)
        one_of("--engine", self.engine, ENGINES)
        size = "be a positive number of gigabytes"
        memory = finite_number("--memory", self.memory_gigabytes, size)
        if not memory > 0.0:
            raise InputError("--memory", size, f"it is {memory:g}", "leave it out")
        _set(
            self, widths=whole_number("--widths", self.widths, 8, 1000), memory_gigabytes=memory
        )  # fmt: skip
        if self.neighbours is not None:
            _set(self, neighbours=whole_number("--neighbours", self.neighbours, 1))
        check_flag("--robust", self.robust)
        if self.robust and self.engine == "exact":
            raise InputError(
                "--robust", "come with the binned engine", "--engine is exact", "leave --engine out"
            )
        self._check_nearest()

    def _check_nearest(self) -> None:
        """Refuse what does not go with the estimator."""
        if self.estimator != NEAREST:
            if self.neighbours is not None:
                raise InputError(
                    "--neighbours", f"come with --estimator {NEAREST}",
                    f"the estimator is {self.estimator}", "give --bandwidth, or leave it out",
                )  # fmt: skip
            return
        if self.bandwidth is not None:
            raise InputError(
                "--bandwidth", f"be left out with --estimator {NEAREST}", "it is given",
                "give --neighbours",
            )  # fmt: skip
        if self.robust:
            raise InputError(
                "--robust", "come with another estimator", f"--estimator is {NEAREST}",
                "leave --estimator out",
            )  # fmt: skip
        if self.criterion not in (None, "leave-one-out", "leave-block-out"):
            raise InputError(
                "--criterion", f"be leave-one-out or leave-block-out with --estimator {NEAREST}",
                f"it is {self.criterion}", "leave it out",
            )  # fmt: skip
        if self.engine == "binned":
            raise InputError(
                "--engine binned", "come with another estimator",
                f"{NEAREST} needs every row", "leave it out",
            )  # fmt: skip


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
        Points with fewer effective rows are ``thin`` (not with ``nearest``, whose windows hold
        as many rows everywhere: there a gap in the middle of the window is); with a block also
        those whose window meets fewer than twelve folds, or whose error has fewer than four
        degrees of freedom.
    points : int or None
        Evenly spaced points from the lowest to the highest x (in log x on a log scale); None
        takes as many as the width asks for, so that the curve can be read anywhere between.
    at : tuple or None
        Points of the caller's own, in the column's terms, in place of `points`.
    landmarks : bool
        Whether to locate the steepest place and the turning points, with intervals.
    crossings : tuple of float
        Values of y whose crossings are located too.
    limits : tuple of float
        Shares, as 0.05 and 0.95, for which to find the curve below which so many rows lie; one
        more pass over the data.
    keep_folds : bool
        Whether the curve without each fold is kept with it, which comparisons need.
    """

    level: float = 0.95
    kind: str = "pointwise"
    bias: str = "corrected"
    noise: str = "local"
    least_rows: float = 30.0
    points: int | None = 256
    at: tuple[object, ...] | None = None
    landmarks: bool = False
    crossings: tuple[float, ...] = ()
    limits: tuple[float, ...] = ()
    keep_folds: bool = True

    def __post_init__(self) -> None:
        one_of("--band", self.kind, BANDS)
        one_of("--bias", self.bias, BIASES)
        one_of("--noise", self.noise, NOISES)
        check_flag("--landmarks", self.landmarks)
        check_flag("keep_folds", self.keep_folds)
        share, remedy = "lie between 0 and 1", "write 0.95 for 95 percent"
        level = finite_number("--level", self.level, share, remedy)
        if not 0.0 < level < 1.0:
            raise InputError("--level", share, f"it is {level}", remedy)
        least = finite_number("--least-rows", self.least_rows, "be a finite number, 0 or more")
        if least < 0.0:
            raise InputError("--least-rows", "be 0 or more", f"it is {least}", "leave it out")
        crossings = as_tuple("--crossing", self.crossings, "hold values of y", "put it in a tuple")
        crossings = tuple(
            finite_number("--crossing", one, "be a finite number") for one in crossings
        )
        _set(self, level=level, least_rows=least, crossings=crossings)
        if self.points is not None:
            _set(self, points=whole_number("--points", self.points, 2, 1_000_000))
        self._check_limits()
        if self.at is not None:
            _set(self, at=as_tuple("--at", self.at, "hold points, one by one", "put it in a tuple"))
            if not self.at:
                raise InputError(
                    "--at", "hold a point", "it is empty", "give points or leave it out"
                )

    def _check_limits(self) -> None:
        shares, remedy = "hold shares between 0 and 1", "write 0.05 and 0.95"
        limits = as_tuple("--limits", self.limits, shares, remedy)
        limits = tuple(sorted({finite_number("--limits", one, shares, remedy) for one in limits}))
        for one in limits:
            if not 0.0 < one < 1.0:
                raise InputError("--limits", shares, f"it holds {one:g}", remedy)
        _set(self, limits=limits)
        if limits and self.at is not None:
            raise InputError(
                "--limits", "come with evenly spaced points", "--at is given", "leave one out"
            )
