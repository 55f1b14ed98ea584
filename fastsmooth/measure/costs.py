"""What large jobs take on a measured machine, and what they cost."""

from __future__ import annotations

from dataclasses import dataclass

from fastsmooth.measure.figures import CURVE, RANDOM, SEARCH, SENSOR, Measurement

BILLION = 1_000_000_000
ASSUMPTIONS = (
    "a billion rows at the measured rate, which is slower than that of more rows; files as fast "
    "as from memory (here they come from the operating system's cache); the machine is paid by "
    "the second and does nothing else"
)
_SECONDS_PER_HOUR = 3600.0


@dataclass(frozen=True)
class Cost:
    """One large job.

    Attributes
    ----------
    job : str
        What is done.
    seconds : float
        How long it takes with all threads that were measured.
    price : float or None
        What it costs, in the currency of the price per hour; None where that is not known.
    """

    job: str
    seconds: float
    price: float | None


def costs_of(measurement: Measurement) -> tuple[Cost, ...]:
    """Return what a curve of a billion rows, of both kinds, and one bandwidth search take.

    Jobs that were not measured are left out. Source of the seconds: rows over the measured rate
    of whole curves; the search as measured. Price: hours times the price per hour.
    """
    seconds: list[tuple[str, float]] = []
    for case in (RANDOM, SENSOR):
        figure = measurement.figure(CURVE, case, measurement.threads)
        if figure is not None:
            # A rate in million rows per second.
            seconds.append((f"a billion rows, {case}", BILLION / (figure.value * 1e6)))
    for job, case, by_threads in measurement.cases():
        if job == SEARCH and measurement.threads in by_threads:
            seconds.append((f"{SEARCH}, {case}", by_threads[measurement.threads].value / 1e3))
    price = measurement.price_per_hour
    return tuple(
        Cost(job, taken, None if price is None else taken / _SECONDS_PER_HOUR * price)
        for job, taken in seconds
    )
