"""Two sides of a comparison: what makes them comparable, and comparing one unit."""

from __future__ import annotations

import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.axis import SECONDS_PER_DAY, TICKS_PER_SECOND, Axis
from fastsmooth.bintable import BinTable, Level
from fastsmooth.comparison import COMPARED, UnitComparison
from fastsmooth.curve import Caution, Curve, has_own_points
from fastsmooth.difference import difference_of
from fastsmooth.errors import InputError
from fastsmooth.excess import FEWEST_FOLDS, Excess, excess_of
from fastsmooth.fleet import Fleet
from fastsmooth.foldcurves import FoldCurves
from fastsmooth.foldsums import FoldedCurve
from fastsmooth.settings import NEAREST, Band, Reading, Smoothing, check_flag, finite_number
from fastsmooth.source import Columns

Floats = NDArray[np.float64]

# Now's width is the baseline's: its own search is not looked at.
_FEWEST_WIDTHS = 8
_FEW_POINTS_PER_BANDWIDTH = 3.0
_MANY_NOT_COUNTED = 0.05
# Cautions about either curve that bear on its comparison.
_BEARING = (
    "many rows refused", "few blocks", "one fold dominates", "neighbouring rows alike",
    "repeated far value", "range trimmed", "coarse bins",
)  # fmt: skip
# What must be the same on both sides for their difference to say anything.
_ALIKE = {
    "kernel": "--kernel", "estimator": "--estimator", "scale": "--scale", "bias": "--bias",
}  # fmt: skip


@dataclass(frozen=True)
class Terms:
    """How two sides are compared.

    Attributes
    ----------
    level : float
        Confidence level of bands and intervals.
    paired : bool
        Whether both sides hold the same blocks.
    hours_per_row : float or None
        What a row stands for; None adds up plain rows.
    """

    level: float
    paired: bool
    hours_per_row: float | None


def terms_of(
    told: Mapping[str, Any], level: float | None, hours_per_row: float | None, paired: bool
) -> Terms:
    """Check how two sides shall be compared; `told` are the settings of the baseline.

    Raises
    ------
    InputError
        A level that is none, hours that are no positive number, or a flag that is none.
    """
    check_flag("--paired", paired)
    band = Band(level=told["level"] if level is None else level)
    return Terms(band.level, paired, _hours(hours_per_row))


def _hours(given: float | None) -> float | None:
    if given is None:
        return None
    requirement = "be a positive number of hours"
    remedy = "write 0.25 for a row every quarter of an hour"
    hours = finite_number("--hours-per-row", given, requirement, remedy)
    if not hours > 0.0:
        raise InputError("--hours-per-row", requirement, f"it is {hours:g}", remedy)
    return hours


def reading_of(base: Curve | Fleet, given: Reading | None = None) -> Reading:
    """Return how rows are read to be compared with a baseline: as given, or as it was read.

    Without a block of their own they take the baseline's.

    Raises
    ------
    InputError
        The scale is not the baseline's.
    """
    told = base.settings
    if given is not None:
        if given.scale != told["scale"]:
            raise InputError(
                "--scale", "be the same on both sides",
                f"BASE is {told['scale']} and NOW {given.scale}", f"write {told['scale']}",
            )  # fmt: skip
        return given if given.block is not None else replace(given, block=told["block"])
    return Reading(
        where=told["where"], range=None if told["range"] is None else tuple(told["range"]),
        scale=told["scale"], folds=told["folds"], block=told["block"],
    )  # fmt: skip


def columns_of(
    told: Mapping[str, Any], x: str | None, y: str | None, count: str | None, reading: Reading
) -> Columns:
    """Return the columns of the current rows: as given, or as in the baseline's settings.

    Raises
    ------
    InputError
        The baseline's rows are weighted.
    """
    if told["weight"] is not None:
        raise InputError(
            "BASE", "be made without --weight for an excess",
            f"its rows are weighted by '{told['weight']}', so that sums over rows have no meaning",
            "make it without, or compare two curves",
        )  # fmt: skip
    block = None if reading.blocks is None else reading.blocks.column
    return Columns(x or told["x"], y or told["y"], None, count or told["count"], block=block)


def check_method(estimator: str, argument: str, robust: bool) -> None:
    """Refuse curves that are no means with a bandwidth; a robust one may be the baseline."""
    if estimator == NEAREST:
        raise InputError(
            "--estimator", "be one with a bandwidth to be compared", f"it is {NEAREST}",
            "make the curve without it",
        )  # fmt: skip
    if robust and argument == "NOW":
        raise InputError(
            "NOW", "be a plain mean to be compared",
            "a robust curve leaves far rows out, which are part of what rows add up to",
            "make the curve without --robust",
        )  # fmt: skip


def folds_of(curve: Curve, argument: str) -> FoldCurves:
    """What the curve keeps of its folds.

    Raises
    ------
    InputError
        It keeps nothing, or its points do not follow it.
    """
    check_method(curve.settings["estimator"], argument, curve.settings.get("robust", False))
    if has_own_points(curve):
        raise InputError(
            argument, "have evenly spaced points to be compared", "it was made with --at",
            "make it without",
        )  # fmt: skip
    if curve.without_folds is None:
        raise InputError(
            argument, "keep its curves without each fold",
            "the file holds none: an older version wrote it, or it was told not to",
            "make the curve again, or give the data in its place",
        )  # fmt: skip
    return curve.without_folds


def check_alike(base: Curve, now: Curve) -> None:
    """Refuse two curves whose difference would be one of method."""
    for name, option in _ALIKE.items():
        if base.settings[name] != now.settings[name]:
            raise InputError(
                option, "be the same for both curves",
                f"BASE has {base.settings[name]} and NOW {now.settings[name]}",
                f"make NOW again with {option} {base.settings[name]}",
            )  # fmt: skip
    if not math.isclose(base.bandwidth, now.bandwidth, rel_tol=1e-9):
        raise InputError(
            "--bandwidth", "be the same for both curves",
            f"BASE has {base.width_label(base.bandwidth)} and NOW "
            f"{now.width_label(now.bandwidth)}",
            f"make NOW again with --bandwidth {base.bandwidth!r}, or give its data",
        )  # fmt: skip
    check_units(base.settings, now.settings["x_unit"], now.settings["y_unit"])
    axis_shift(base.axis, now.axis)


def check_units(told: Mapping[str, Any], x_unit: str, y_unit: str) -> None:
    """Refuse sides that state different units.

    Raises
    ------
    InputError
        They do.
    """
    for option, mine, theirs in (("--x", told["x_unit"], x_unit), ("--y", told["y_unit"], y_unit)):
        if mine and theirs and mine != theirs:
            raise InputError(
                option, "have one unit on both sides", f"BASE is in {mine} and NOW in {theirs}",
                "bring both to one unit",
            )  # fmt: skip


def axis_shift(base: Axis, now: Axis) -> float:
    """Return what is added to floats on the baseline's axis for the same places on the other.

    Raises
    ------
    InputError
        The axes hold different kinds.
    """
    if base.kind != now.kind or (base.zone is None) != (now.zone is None):
        kinds = [
            f"{axis.kind}s" + (" in a zone" if axis.zone is not None else "")
            for axis in (base, now)
        ]
        raise InputError(
            "--x", "hold one kind on both sides", f"BASE holds {kinds[0]} and NOW {kinds[1]}",
            "name the column that BASE was made from",
        )  # fmt: skip
    return _origin_seconds(base) - _origin_seconds(now)


def _origin_seconds(axis: Axis) -> float:
    if axis.kind not in ("timestamp", "date"):
        return 0.0
    if axis.unit == "day":
        return float(axis.origin * SECONDS_PER_DAY)
    return axis.origin / TICKS_PER_SECOND[axis.unit]


def smoothing_like(base: Curve) -> Smoothing:
    """Return the smoothing that gives other rows a curve comparable with this one."""
    told = base.settings
    return Smoothing(
        told["estimator"], told["kernel"], base.bandwidth, widths=_FEWEST_WIDTHS, engine="binned"
    )


def band_like(base: Curve) -> Band:
    """Return the band that gives other rows a curve comparable with this one."""
    told = base.settings
    return Band(bias=told["bias"], noise=told["noise"], least_rows=told["least_rows"])


def width_on_scale(base: Curve) -> float:
    """Return the baseline's width on the scale of the fit."""
    return math.log(base.bandwidth) if base.scale == "log" else base.bandwidth


def compare_pair(
    base: Curve, kept: FoldCurves, now: Curve, now_kept: FoldCurves, terms: Terms
) -> UnitComparison:
    """Compare two curves, each with its folds."""
    mine = FoldedCurve.of(base, kept)
    theirs = FoldedCurve.of(now, now_kept, -axis_shift(base.axis, now.axis)).at(mine.t)
    return _compare(base, now, mine, theirs, None, terms)


def compare_counted(
    base: Curve, kept: FoldCurves, now: Curve, table: BinTable, level: Level, terms: Terms
) -> UnitComparison:
    """Compare current rows with their baseline.

    Parameters
    ----------
    base : Curve
        The baseline.
    kept : FoldCurves
        Its folds.
    now : Curve
        The current rows' curve at the baseline's width and points.
    table : BinTable
        The current rows, counted.
    level : Level
        The table's finest level.
    terms : Terms
        How they are compared.
    """
    mine = FoldedCurve.of(base, kept)
    theirs = replace(FoldedCurve.of(now, folds_of(now, "NOW")), t=mine.t)
    excess = excess_of(
        FoldedCurve.of(base, kept, axis_shift(base.axis, now.axis)), level, table.plan.reference,
        np.array(sorted(table.sums), np.int64), confidence=terms.level,
        per_row=terms.hours_per_row or 1.0, paired=terms.paired,
    )  # fmt: skip
    return _compare(base, now, mine, theirs, excess, terms)


def _compare(
    base: Curve, now: Curve, mine: FoldedCurve, theirs: FoldedCurve, excess: Excess | None,
    terms: Terms,
) -> UnitComparison:  # fmt: skip
    along = difference_of(mine, theirs, width_on_scale(base), terms.level, paired=terms.paired)
    if excess is not None and not excess.rows:
        excess = None
    status, reason = COMPARED, None
    if along is None and excess is None:
        status, reason = "no common support", _no_support(base, now)
    return UnitComparison(
        (), status, reason, base.trace["rows"]["used"], now.trace["rows"]["used"],
        base.bandwidth, along, excess, None,
        tuple(_cautions(base, now, along is None, excess, terms)),
    )  # fmt: skip


def _no_support(base: Curve, now: Curve) -> str:
    ends = []
    for name, curve in (("BASE", base), ("NOW", now)):
        edges = curve.density.x_edges
        label = curve.axis.label
        ends.append(f"{name} lies between {label(float(edges[0]))} and {label(float(edges[-1]))}")
    return " and ".join(ends)


def _cautions(
    base: Curve, now: Curve, no_difference: bool, excess: Excess | None, terms: Terms
) -> Iterator[Caution]:
    for side, curve in (("Base", base), ("Now", now)):
        for caution in curve.cautions:
            if caution.code in _BEARING:
                yield Caution(caution.code, f"{side}: {caution.text}")
    if base.settings.get("robust"):
        yield Caution(
            "robust baseline",
            "The baseline leaves far rows out and the current rows are all counted: faults of the "
            "current period are part of the difference.",
        )
    trail = base.search.trails[base.settings["estimator"]]
    if base.width_given and base.bandwidth > trail.flat_zone[1]:
        yield Caution(
            "wide baseline",
            f"The baseline's width {base.width_label(base.bandwidth)} was given and lies above its "
            f"flat zone (up to {base.width_label(trail.flat_zone[1])}): where it smooths over a "
            f"bend, a difference may be the baseline's own.",
        )
    blocks = base.settings["block"], now.settings["block"]
    if blocks[0] != blocks[1]:
        told = [one or "runs of rows" for one in blocks]
        yield Caution(
            "blocks differ",
            f"The baseline's error rests on {told[0]}, that of the current rows on {told[1]}: give "
            f"both the same --block unless you know why not.",
        )
    spacing = float(np.diff(base.x).max()) if base.scale == "linear" else 0.0
    if spacing * _FEW_POINTS_PER_BANDWIDTH > base.bandwidth:
        yield Caution(
            "few points",
            f"The baseline has less than {_FEW_POINTS_PER_BANDWIDTH:g} points to a bandwidth, too "
            f"few to be read between them: make it with more --points.",
        )
    if no_difference:
        yield Caution(
            "no difference along x",
            "There is no stretch of x where both curves are supported well enough to be compared "
            "point by point.",
        )
    if excess is None:
        return
    missing = excess.rows_outside + excess.rows_thin
    if missing > _MANY_NOT_COUNTED * (missing + excess.rows):
        yield Caution(
            "rows without baseline",
            f"{missing / (missing + excess.rows):.0%} of the current rows lie where the baseline "
            f"has no rows or too few; they are not in the excess.",
        )
    if excess.folds < FEWEST_FOLDS:
        yield Caution(
            "few folds",
            f"The current rows lie in {excess.folds} fold{'s' if excess.folds > 1 else ''}: fewer "
            f"than {FEWEST_FOLDS} give the excess no error.",
        )
    elif excess.std_error == 0.0 and terms.paired:
        yield Caution("no error", "Both sides are the same rows: their difference has no error.")
