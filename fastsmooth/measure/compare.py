"""Two measured machines side by side."""

from __future__ import annotations

from dataclasses import asdict, dataclass
from typing import Any

from fastsmooth.errors import InputError
from fastsmooth.measure.figures import Figure, Measurement


@dataclass(frozen=True)
class Pair:
    """One figure of two machines: both with one thread, or each with all of its threads.

    Attributes
    ----------
    this, other : Figure
        Of the two machines.
    all_threads : bool
        Whether each used as many threads as it was measured with.
    """

    this: Figure
    other: Figure
    all_threads: bool

    @property
    def ratio(self) -> float:
        """How many times as fast this machine is as the other."""
        return self.this.times_faster(self.other)


@dataclass(frozen=True)
class Comparison:
    """What `fastsmooth.compare_measurements` found.

    Attributes
    ----------
    this, other : Measurement
        What was compared.
    pairs : tuple of Pair
        Figures that both hold, in this machine's order.
    """

    this: Measurement
    other: Measurement
    pairs: tuple[Pair, ...]

    def __str__(self) -> str:
        return "\n".join(self.lines())

    @property
    def cautions(self) -> tuple[str, ...]:
        """What the ratios show beside the machines."""
        found = []
        mine, theirs = self.this.machine.versions, self.other.machine.versions
        differing = [
            f"{name} {mine.get(name, 'none')} against {theirs.get(name, 'none')}"
            for name in dict.fromkeys((*mine, *theirs))
            if mine.get(name) != theirs.get(name)
        ]
        if differing:
            found.append(f"Software differs ({', '.join(differing)}): ratios compare it too.")
        if self.this.quick or self.other.quick:
            found.append("A quick measurement takes part: it is rough.")
        for name, measured in (("This machine", self.this), ("The other", self.other)):
            found += [f"{name}: {caution}" for caution in measured.cautions]
        return tuple(found)

    def lines(self) -> list[str]:
        """Return both machines as a table for people, a line each."""
        from fastsmooth.measure.tables import comparison_lines

        return comparison_lines(self)

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {
            "this": asdict(self.this.machine),
            "other": asdict(self.other.machine),
            "pairs": [
                {
                    "job": pair.this.job, "case": pair.this.case, "unit": pair.this.unit,
                    "all_threads": pair.all_threads,
                    "this": pair.this.value, "this_threads": pair.this.threads,
                    "other": pair.other.value, "other_threads": pair.other.threads,
                    "times_faster": pair.ratio,
                }
                for pair in self.pairs
            ],
            "cautions": list(self.cautions),
        }  # fmt: skip


def compare_measurements(this: Measurement, other: Measurement) -> Comparison:
    """Compare two machines, figure by figure.

    Parameters
    ----------
    this, other : Measurement
        From `measure_machine` or `load_measurement`.

    Returns
    -------
    Comparison
        Figures with one thread, and with all threads of each; the ratio is above 1 where `this`
        is faster.

    Raises
    ------
    InputError
        The two share no figure.
    """
    theirs = {(job, case): by_threads for job, case, by_threads in other.cases()}
    pairs = []
    for job, case, mine in this.cases():
        others = theirs.get((job, case), {})
        if 1 in mine and 1 in others and mine[1].unit == others[1].unit:
            pairs.append(Pair(mine[1], others[1], all_threads=False))
        here, there = mine.get(this.threads), others.get(other.threads)
        if here is None or there is None or here.unit != there.unit:
            continue
        if here.threads > 1 or there.threads > 1:
            pairs.append(Pair(here, there, all_threads=True))
    if not pairs:
        raise InputError(
            "--against", "hold figures that this measurement has too", "it shares none",
            "measure both machines with the same version of fastsmooth",
        )  # fmt: skip
    return Comparison(this, other, tuple(pairs))
