"""The job of comparing: last year's rows, or their curve, against this month's."""

from __future__ import annotations

import os
from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np

from fastsmooth.api import count_and_search, make_curve
from fastsmooth.assemble import Chosen, assemble
from fastsmooth.comparison import COMPARED, CurveComparison, UnitComparison, in_order
from fastsmooth.curve import Curve
from fastsmooth.describe import result_in_file
from fastsmooth.errors import InputError
from fastsmooth.fleet import Fleet
from fastsmooth.manyunits import make_fleet
from fastsmooth.passes import Progress, silent
from fastsmooth.settings import Band, Reading, Smoothing
from fastsmooth.sides import (
    Terms,
    axis_shift,
    band_like,
    check_alike,
    check_method,
    check_units,
    columns_of,
    compare_counted,
    compare_pair,
    folds_of,
    reading_of,
    smoothing_like,
    terms_of,
    width_on_scale,
)
from fastsmooth.source import Columns, open_source
from fastsmooth.store.disk import is_store


def compare_curves(
    base: Any,
    now: Any,
    x: str | None = None,
    y: str | None = None,
    *,
    by: str | Sequence[str] = (),
    count: str | None = None,
    reading: Reading | None = None,
    base_reading: Reading | None = None,
    smoothing: Smoothing | None = None,
    band: Band | None = None,
    level: float | None = None,
    hours_per_row: float | None = None,
    paired: bool = False,
    progress: Progress = silent,
) -> CurveComparison:
    """Compare current rows with a baseline: along x, and in sum.

    Both curves have the same kernel and the same width, the baseline's. Errors of either come from
    leaving out folds, so they survive whatever dependence stays within blocks; the excess has the
    error of the current rows and of the baseline.

    Parameters
    ----------
    base : Curve, Fleet, path of a file of either, or data
        The baseline; data as for `make_curve`.
    now : data, Curve, Fleet, or path of a file of either
        What is compared with it. Of a curve only the difference along x can be told, no excess.
    x, y : str or None
        Columns; None takes those of the baseline's curve.
    by : str or sequence of str
        Columns that tell units apart, where the baseline is data; curves of many units bring
        their own. Each unit is compared with its own baseline.
    count : str or None
        Column of repeats; None takes that of the baseline's curve.
    reading : Reading or None
        Which rows are read, and how; None reads as the baseline's curve was read, and so does
        a block that is None.
    base_reading : Reading or None
        The same for a baseline of data, where it differs (another `where`).
    smoothing, band : Smoothing or None, Band or None
        How a baseline of data is smoothed, and its points; a curve brings its own.
    level : float or None
        Confidence level of bands and intervals; None takes that of the baseline's band.
    hours_per_row : float or None
        What one row stands for, so that readings in kW add up to kWh: 10 / 3600 for readings ten
        seconds apart. None adds up plain rows.
    paired : bool
        Whether both sides hold the same blocks, as two machines on the same days do: errors that
        they have in common then cancel.
    progress : callable
        Called as ``progress(stage, rows_done, rows_expected)``.

    Returns
    -------
    CurveComparison
        Difference along x with its bands, test and stretches; the excess with its error; units
        by falling excess.

    Raises
    ------
    InputError
        An argument or the data cannot be used, or the two sides have nothing in common.
    ReadError
        A file could not be read whole.

    Examples
    --------
    >>> import numpy as np
    >>> rng = np.random.default_rng(1)
    >>> def readings(drift):
    ...     wet_bulb_c = rng.uniform(0.0, 25.0, 4000)
    ...     power_kw = (20.0 + 0.04 * wet_bulb_c**2) * drift + rng.normal(0.0, 1.0, 4000)
    ...     return {"wet_bulb_c": wet_bulb_c, "power_kw": power_kw}
    >>> found = compare_curves(readings(1.0), readings(1.03), "wet_bulb_c", "power_kw")
    >>> excess = found.units[0].excess
    >>> 0.02 < excess.share_lower < 0.03 < excess.share_upper < 0.04
    True
    """
    baseline = held_curve(base)
    if baseline is None:
        baseline = _curve_of_data(
            base, x, y, by, count, base_reading or reading, smoothing, band, progress
        )
    else:
        own = {"by": by or None, "smoothing": smoothing, "band": band, "base_reading": base_reading}
        for argument, given in own.items():
            if given is not None:
                raise InputError(
                    f"{argument}=", "be left out where BASE is a curve", "a curve brings its own",
                    "leave it out",
                )  # fmt: skip
    terms = terms_of(baseline.settings, level, hours_per_row, paired)
    current = held_curve(now)
    if is_store(now):
        raise InputError(
            "NOW", "be data or a curve", f"'{now}' is a store",
            "give its rows, or make its curve with the bandwidth of BASE and name that file",
        )  # fmt: skip
    if isinstance(baseline, Fleet) != isinstance(current, Fleet) and current is not None:
        raise InputError(
            "NOW", "hold the same units as BASE",
            "one holds curves of many units and the other a single curve",
            "give data, or curves made with the same --by",
        )  # fmt: skip
    if isinstance(baseline, Fleet):
        from fastsmooth import compareunits

        if isinstance(current, Fleet):
            units, facts = compareunits.compare_fleets(baseline, current, terms)
        else:
            units, facts = compareunits.compare_units(
                baseline, now, x, y, count, reading, terms, progress
            )
        by, kinds = baseline.by, list(baseline.trace["by_types"])
    else:
        unit, made = _compare_one(baseline, current, now, x, y, count, reading, terms, progress)
        units, facts, by, kinds = [unit], side_facts(made), (), []
    facts["name"] = _name(now)
    mine = {**side_facts(baseline), "name": _name(base)}
    trace = {
        "settings": baseline.settings,
        # What was given counts too: a curve file is no less dear than its data.
        "files": [*mine.pop("files"), *facts.pop("files"), *_paths(base), *_paths(now)],
        "by_types": kinds, "paired": terms.paired, "hours_per_row": terms.hours_per_row,
        "base": mine, "now": facts,
    }  # fmt: skip
    return CurveComparison(tuple(by), adjusted(units), terms.level, baseline.axis, trace)


def _compare_one(
    base: Curve, current: Curve | Fleet | None, now: Any, x: str | None, y: str | None,
    count: str | None, reading: Reading | None, terms: Terms, progress: Progress,
) -> tuple[UnitComparison, Curve]:  # fmt: skip
    kept = folds_of(base, "BASE")
    if isinstance(current, Curve):
        check_alike(base, current)
        unit, made = compare_pair(base, kept, current, folds_of(current, "NOW"), terms), current
    else:
        reading = reading_of(base, reading)
        columns = columns_of(base.settings, x, y, count, reading)
        made, chosen = _count_now(now, base, columns, reading, progress)
        unit = compare_counted(
            base, kept, made, chosen.counted.table, chosen.pyramid.levels[0], terms
        )
    if unit.status != COMPARED:
        raise InputError(
            "NOW", "share a stretch of x with BASE where both have rows enough", str(unit.reason),
            "take a longer period, or another --block",
        )  # fmt: skip
    return unit, made


def adjusted(units: Sequence[UnitComparison]) -> tuple[UnitComparison, ...]:
    """Return units in order of their excess, p values adjusted for their number.

    Of the units whose adjusted value is at most q, a share of at most q is expected to have no
    excess in truth (Benjamini & Hochberg 1995, JRSSB 57:289).
    """
    from scipy.stats import false_discovery_control

    known = [
        place for place, unit in enumerate(units)
        if unit.excess is not None and unit.excess.p_value is not None
    ]  # fmt: skip
    values = [unit.excess.p_value for unit in (units[k] for k in known) if unit.excess is not None]
    told = list(units)
    if known:
        for place, value in zip(known, false_discovery_control(values).tolist(), strict=True):
            told[place] = replace(told[place], adjusted_p_value=float(value))
    return in_order(told)


def side_facts(side: Curve | Fleet) -> dict[str, Any]:
    """Return what one side of a comparison was made from, as plain data."""
    told = side.settings
    return {
        "rows": side.trace["rows"], "blocks": side.trace.get("blocks"), "block": told["block"],
        "where": told["where"], "files": [record["path"] for record in side.trace["files"]],
    }  # fmt: skip


def _paths(given: Any) -> list[str]:
    if isinstance(given, str | os.PathLike):
        return [os.fspath(given)]
    if isinstance(given, list | tuple) and all(isinstance(one, str | os.PathLike) for one in given):
        return [os.fspath(one) for one in given]
    return []


def _name(given: Any) -> str | None:
    return ", ".join(_paths(given)) or None


def held_curve(given: Any) -> Curve | Fleet | None:
    """Return the curve or curves that were given, or that the file named holds; None for data."""
    if isinstance(given, str | os.PathLike):
        return result_in_file(os.fspath(given))
    return given if isinstance(given, Curve | Fleet) else None


def _curve_of_data(
    data: Any, x: str | None, y: str | None, by: str | Sequence[str], count: str | None,
    reading: Reading | None, smoothing: Smoothing | None, band: Band | None, progress: Progress,
) -> Curve | Fleet:  # fmt: skip
    # A store knows its own columns.
    if (x is None or y is None) and not is_store(data):
        raise InputError(
            "--x and --y", "be given where BASE is data", "one is missing",
            "name both columns, or give a curve file as BASE",
        )  # fmt: skip
    smoothing = Smoothing() if smoothing is None else smoothing
    check_method(smoothing.estimator, "BASE", smoothing.robust)
    smoothing = replace(smoothing, engine="binned")
    if by:
        return make_fleet(
            data, x, y, by=by, count=count, reading=reading, smoothing=smoothing, band=band,
            progress=progress,
        )  # fmt: skip
    return make_curve(
        data, x, y, count=count, reading=reading, smoothing=smoothing, band=band,
        progress=progress,
    )  # fmt: skip


def _count_now(
    data: Any, base: Curve, columns: Columns, reading: Reading, progress: Progress
) -> tuple[Curve, Chosen]:
    """Read the current rows; make their curve at the baseline's width and points."""
    with open_source(
        data, columns, where=reading.where, timeout_seconds=reading.timeout_seconds
    ) as source:
        check_units(base.settings, source.x_unit, source.y_unit)
        places = base.x + axis_shift(base.axis, source.axis)
        if base.scale == "log":
            places = np.log(places)
        smoothing = smoothing_like(base)
        chosen = count_and_search(
            source, reading, smoothing, width_on_scale(base), places, progress
        )
        progress("fitting", 0, None)
        return assemble(source, chosen, reading, smoothing, band_like(base)), chosen
