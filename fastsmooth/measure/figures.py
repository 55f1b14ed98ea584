"""What was measured: figures with their spread, and everything told about the machine."""

from __future__ import annotations

import json
import os
import statistics
from collections.abc import Iterator, Mapping
from dataclasses import asdict, dataclass
from typing import TYPE_CHECKING, Any, BinaryIO

from fastsmooth.machine import Machine

if TYPE_CHECKING:
    import pyarrow as pa

    from fastsmooth.measure.costs import Cost

KIND = "measurement of a machine"
FORMAT = 1
OUT_SUFFIXES = (".json",)

COPY, READ = "memory, copied", "memory, read"
SCAN, SCAN_BYTES = "Parquet scan", "Parquet scan, bytes"
CURVE = "whole curve"
ACCUMULATION = "accumulation"
EXACT = "exact leave-one-out"
NEIGHBOURS = "nearest neighbours, leave-one-out"
SEARCH = "bandwidth search"
# In the order in which they are told.
JOBS = (
    COPY, READ, SCAN, SCAN_BYTES, CURVE, ACCUMULATION, EXACT, NEIGHBOURS, SEARCH,
)  # fmt: skip
RANDOM, SENSOR = "random digits, snappy", "sensor-like, zstd"

# Compiled loops alone: where these do not keep their threads busy, others use the processors.
_COMPILED = (ACCUMULATION, EXACT, NEIGHBOURS)
_BUSY_SHARE = 0.9
_STOLEN_SHARE = 0.02


@dataclass(frozen=True)
class Figure:
    """One measured figure.

    Attributes
    ----------
    job : str
        What was done.
    case : str
        To what; figures of the same job and case compare across machines.
    unit : str
        Unit of `value`, `low` and `high`; a rate when it ends in ``/s``.
    threads : int
        Threads at work.
    value : float
        Median over the rounds.
    low, high : float
        Quartiles over the rounds.
    rounds : int
        How often it was timed.
    processors : float
        Processors that the process kept busy meanwhile, on average.
    sizes : mapping of str to int
        What it was taken at, such as rows or bytes.
    """

    job: str
    case: str
    unit: str
    threads: int
    value: float
    low: float
    high: float
    rounds: int
    processors: float
    sizes: Mapping[str, int]

    @property
    def is_rate(self) -> bool:
        """Whether more is better."""
        return self.unit.endswith("/s")

    @property
    def spread(self) -> float:
        """Distance of the quartiles over the median."""
        return (self.high - self.low) / self.value

    def times_faster(self, other: Figure) -> float:
        """Return how many times as fast this is as another figure of the same unit."""
        return self.value / other.value if self.is_rate else other.value / self.value


@dataclass(frozen=True)
class Loading:
    """How long the compiled kernels took to be there.

    Attributes
    ----------
    seconds : float
        By the clock.
    state : str
        ``compiled`` (a first run), ``loaded`` from the disk, or ``present`` in the process.
    """

    seconds: float
    state: str


@dataclass(frozen=True)
class Measurement:
    """What `fastsmooth.measure_machine` found.

    Attributes
    ----------
    machine : Machine
        What it was taken on.
    measured_at : str
        When, UTC.
    threads : int
        Most threads that were used.
    quick : bool
        Whether it was the short, rough kind.
    price_per_hour : float or None
        What an hour of the machine costs, in a currency of the caller's.
    loading : Loading
        Compiling or loading the kernels; in no figure.
    load_average : float or None
        Processes that wanted a processor in the minute before.
    stolen_share : float or None
        Share of processor time that the host gave to others.
    figures : tuple of Figure
        What was measured, in order.
    """

    machine: Machine
    measured_at: str
    threads: int
    quick: bool
    price_per_hour: float | None
    loading: Loading
    load_average: float | None
    stolen_share: float | None
    figures: tuple[Figure, ...]

    def __str__(self) -> str:
        return "\n".join(self.lines())

    def figure(self, job: str, case: str, threads: int) -> Figure | None:
        """Return one figure, or None if there is none of this job, case and threads."""
        wanted = (job, case, threads)
        for one in self.figures:
            if (one.job, one.case, one.threads) == wanted:
                return one
        return None

    def cases(self) -> Iterator[tuple[str, str, dict[int, Figure]]]:
        """Yield each job and case, with its figures by number of threads."""
        found: dict[tuple[str, str], dict[int, Figure]] = {}
        for one in self.figures:
            found.setdefault((one.job, one.case), {})[one.threads] = one
        for (job, case), by_threads in found.items():
            yield job, case, dict(sorted(by_threads.items()))

    @property
    def busy_share(self) -> float | None:
        """Share of the asked-for processors that compiled loops got, at the worst thread count."""
        shares: dict[int, list[float]] = {}
        for one in self.figures:
            if one.job in _COMPILED:
                shares.setdefault(one.threads, []).append(one.processors / one.threads)
        return min((statistics.median(found) for found in shares.values()), default=None)

    @property
    def cautions(self) -> tuple[str, ...]:
        """What makes the figures slower than the machine is; empty when nothing does."""
        found = []
        if self.busy_share is not None and self.busy_share < _BUSY_SHARE:
            found.append(
                f"Other work shared the processors: threads got {100 * self.busy_share:.0f} % of "
                "them. The machine is faster than these figures; measure again when it is idle."
            )
        if self.stolen_share is not None and self.stolen_share > _STOLEN_SHARE:
            found.append(
                f"The host gave {100 * self.stolen_share:.0f} % of the processor time to others; "
                "a machine of your own would be faster, this one may stay so."
            )
        quota = self.machine.core_quota
        if quota is not None and quota < self.threads:
            found.append(
                f"A container limits this process to {quota:g} processors' worth of time: more "
                "threads than that gain nothing."
            )
        return tuple(found)

    def costs(self) -> tuple[Cost, ...]:
        """Return what large jobs take, and cost where a price is known; see `Cost`."""
        from fastsmooth.measure.costs import costs_of

        return costs_of(self)

    def lines(self) -> list[str]:
        """Return everything as a table for people, a line each."""
        from fastsmooth.measure.tables import measurement_lines

        return measurement_lines(self)

    def table(self) -> pa.Table:
        """Return the figures as an Arrow table, a row each."""
        import pyarrow as pa

        names = (
            "job", "case", "unit", "threads", "value", "low", "high", "rounds", "processors",
        )  # fmt: skip
        return pa.table({name: [getattr(one, name) for one in self.figures] for name in names})

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON; `from_dict` reads it back."""
        plain = asdict(self)
        # A list, as JSON gives it back.
        return {"kind": KIND, "format": FORMAT, **plain, "figures": list(plain["figures"])}

    @classmethod
    def from_dict(cls, plain: Any) -> Measurement:
        """Build a measurement from what `to_dict` returned.

        Raises
        ------
        InputError
            It is something else, of a later format, or was altered.
        """
        from fastsmooth.measure.reading import measurement_from

        return measurement_from(plain, "the measurement", "the data")

    def save(self, path: str | os.PathLike[str], argument: str = "--out") -> None:
        """Write it as JSON; `fastsmooth.load_measurement` reads it back.

        Raises
        ------
        WriteError
            The name does not end in ``.json``, or the file cannot be written.
        """
        from fastsmooth.files_out import check_writable, write_atomically

        check_writable(path, argument, OUT_SUFFIXES)
        text = json.dumps(self.to_dict(), indent=1, allow_nan=False) + "\n"

        def write(stream: BinaryIO) -> None:
            stream.write(text.encode())

        write_atomically(path, write, argument)
