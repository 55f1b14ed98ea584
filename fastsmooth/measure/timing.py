"""One piece of work, timed round after round."""

from __future__ import annotations

import gc
import statistics
import time
from collections.abc import Callable, Iterable, Mapping, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from types import TracebackType
from typing import Any, TypeVar

from fastsmooth.measure.figures import Figure

Part = TypeVar("Part")
Result = TypeVar("Result")

_SECONDS_PER_UNIT = {"ns": 1e-9, "ms": 1e-3}


@dataclass(frozen=True)
class Work:
    """What is timed, and how its figure is computed.

    Attributes
    ----------
    job, case, unit, threads
        As in `Figure`. Units are ``X/s``, or begin with ``ns`` or ``ms``.
    amount : float
        In units of X for a rate (GB, million rows); else what the time is divided by.
    run : callable
        The timed part.
    is_right : callable
        Takes the result of `run`; whether it is what it must be.
    sizes : mapping of str to int
        What it is taken at.
    also : (str, str, float) or None
        Another job, unit and amount of the same rounds.
    """

    job: str
    case: str
    unit: str
    threads: int
    amount: float
    run: Callable[[], Any]
    is_right: Callable[[Any], bool]
    sizes: Mapping[str, int] = field(default_factory=dict)
    also: tuple[str, str, float] | None = None


class Crew:
    """Thread pools that stay for the whole measurement, one per number of threads."""

    def __init__(self) -> None:
        self._pools: dict[int, ThreadPoolExecutor] = {}

    def __enter__(self) -> Crew:
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:  # fmt: skip
        for pool in self._pools.values():
            pool.shutdown(cancel_futures=True)

    def map(
        self, threads: int, function: Callable[[Part], Result], parts: Iterable[Part]
    ) -> list[Result]:
        """Apply a function to all parts, so many at a time; one thread needs no pool."""
        if threads == 1:
            return [function(part) for part in parts]
        if threads not in self._pools:
            self._pools[threads] = ThreadPoolExecutor(threads)
        return list(self._pools[threads].map(function, parts))


def time_work(work: Work, is_enough: Callable[[Sequence[float]], bool]) -> list[Figure]:
    """Time a piece of work, after one untimed run, until the seconds of its rounds are enough.

    Returns
    -------
    list of Figure
        One, or two where the work names another unit.

    Raises
    ------
    RuntimeError
        A result is wrong: a fault of this package or of the machine.
    """
    _expect_right(work, work.run())
    seconds: list[float] = []
    processors: list[float] = []
    collecting = gc.isenabled()
    # A collection of garbage in the middle of a round would be timed with it.
    gc.disable()
    try:
        while not is_enough(seconds):
            start, processor_start = time.perf_counter(), time.process_time()
            result = work.run()
            # A clock that stands still for so short a time is taken at its resolution.
            taken = max(time.perf_counter() - start, 1e-9)
            processors.append((time.process_time() - processor_start) / taken)
            seconds.append(taken)
            _expect_right(work, result)
            del result
    finally:
        if collecting:
            gc.enable()
    figures = [(work.job, work.unit, work.amount), *([work.also] if work.also else [])]
    return [
        _figure(work, job, unit, _values(unit, amount, seconds), statistics.fmean(processors))
        for job, unit, amount in figures
    ]


def _expect_right(work: Work, result: Any) -> None:
    if not work.is_right(result):
        raise RuntimeError(f"{work.job}, {work.case}: the result is wrong")


def _values(unit: str, amount: float, seconds: Sequence[float]) -> list[float]:
    if unit.endswith("/s"):
        return [amount / taken for taken in seconds]
    return [taken / _SECONDS_PER_UNIT[unit[:2]] / amount for taken in seconds]


def _figure(work: Work, job: str, unit: str, values: list[float], processors: float) -> Figure:
    low, middle, high = statistics.quantiles(values, n=4, method="inclusive")
    return Figure(
        job, work.case, unit, work.threads, middle, low, high, len(values),
        processors, dict(work.sizes),
    )  # fmt: skip
