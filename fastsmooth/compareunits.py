"""Comparing many units: each with its own baseline, all counted in one pass."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from typing import Any

import numpy as np

from fastsmooth.bintable import Pyramid
from fastsmooth.comparison import UnitComparison
from fastsmooth.curve import Curve
from fastsmooth.errors import InputError
from fastsmooth.fleet import MADE, Fleet, Key, Unit, sort_key
from fastsmooth.fleetpass import count_fleet, count_units
from fastsmooth.grouping import Grouping
from fastsmooth.manyunits import Finer, Worker, why_not, within_memory
from fastsmooth.passes import Progress
from fastsmooth.settings import Reading
from fastsmooth.sides import (
    Terms,
    axis_shift,
    band_like,
    check_alike,
    check_units,
    columns_of,
    compare_counted,
    compare_pair,
    folds_of,
    reading_of,
    smoothing_like,
    width_on_scale,
)
from fastsmooth.source import Source, open_source
from fastsmooth.unitjob import Job, Tables, spread

_MOST_PASSES = 3


def compare_fleets(
    base: Fleet, now: Fleet, terms: Terms
) -> tuple[list[UnitComparison], dict[str, Any]]:
    """Compare curves with curves, unit by unit; also return where NOW's come from.

    Raises
    ------
    InputError
        The units are told apart by other columns, or curves are not comparable.
    """
    if base.by != now.by:
        raise InputError(
            "NOW", f"be made with --by {' --by '.join(base.by)}, as BASE",
            f"it was made with --by {' --by '.join(now.by)}", "make it again",
        )  # fmt: skip
    theirs = {unit.key: unit for unit in now.units}
    units = []
    for unit in base.units:
        other = theirs.pop(unit.key, None)
        mine, curve = unit.curve, None if other is None else other.curve
        if mine is None or curve is None:
            units.append(_missing(unit, other))
            continue
        check_alike(mine, curve)
        told = compare_pair(mine, folds_of(mine, "BASE"), curve, folds_of(curve, "NOW"), terms)
        units.append(replace(told, key=unit.key))
    units += [_missing(None, unit) for unit in theirs.values()]
    return units, {
        "rows": now.trace["rows"], "blocks": None, "block": now.settings["block"],
        "where": now.settings["where"], "files": [one["path"] for one in now.trace["files"]],
    }  # fmt: skip


def compare_units(
    base: Fleet, data: Any, x: str | None, y: str | None, count: str | None,
    reading: Reading | None, terms: Terms, progress: Progress,
) -> tuple[list[UnitComparison], dict[str, Any]]:  # fmt: skip
    """Count the current rows of all units in one pass and compare each with its baseline.

    Raises
    ------
    InputError
        An argument or the data cannot be used.
    """
    reading = reading_of(base, reading)
    columns = columns_of(base.settings, x, y, count, reading)
    grouping = Grouping.parse(base.by)
    with open_source(
        data, columns, where=reading.where, units=grouping.columns,
        timeout_seconds=reading.timeout_seconds,
    ) as source:  # fmt: skip
        check_units(base.settings, source.x_unit, source.y_unit)
        axis_shift(base.axis, source.axis)
        counted = count_fleet(source, reading, grouping, progress)
        ways = counted.units.ways

        def recount(finer: dict[Key, Any]) -> Tables:
            return count_units(
                source, ways.base, finer.get, reading, grouping, progress,
                sampled_rows=ways.sampled_rows,
            )  # fmt: skip

        units = _compare_counted(
            base, source, reading, grouping, counted.units, counted.units.keys, recount, terms,
            progress,
        )  # fmt: skip
        tally = counted.together.table.tally.to_dict()
    return units, {
        "rows": tally, "blocks": None,
        "block": None if reading.block is None else str(reading.block), "where": reading.where,
        "files": [record.path for record in source.files],
    }  # fmt: skip


def _compare_counted(
    base: Fleet, source: Source, reading: Reading, grouping: Grouping, tables: Tables,
    keys: list[Key], recount: Callable[[dict[Key, Any]], Tables], terms: Terms,
    progress: Progress,
) -> list[UnitComparison]:  # fmt: skip
    known = {unit.key: unit for unit in base.units}
    current = set(keys)
    done: dict[Key, UnitComparison] = {}
    for key in sorted(current | set(known), key=sort_key):
        unit = known.get(key)
        if unit is None or unit.status != MADE or key not in current:
            other = None
            if key in current:
                other = Unit(key, MADE, None, tables.table(key).tally.used, None)
            done[key] = _missing(unit, other)
    pending = [key for key in sorted(current, key=sort_key) if key not in done]
    shift = axis_shift(base.axis, source.axis)
    for tried in range(1, _MOST_PASSES + 1):
        progress("comparing", 0, None)
        held, last = tables, tried == _MOST_PASSES

        def compare(key: Key, held: Tables = held, last: bool = last) -> UnitComparison | Finer:
            mine = known[key].curve
            assert mine is not None
            places = mine.x + shift
            job = Job(
                source, reading, smoothing_like(mine), band_like(mine), grouping,
                "leave-one-out", width_on_scale(mine),
                np.log(places) if mine.scale == "log" else places, False,
            )  # fmt: skip
            return _compare_unit(key, mine, job, held, terms, last)

        made = dict(zip(pending, spread(compare, pending, reading.threads), strict=True))
        done |= {key: one for key, one in made.items() if isinstance(one, UnitComparison)}
        finer = {key: one.plan for key, one in made.items() if isinstance(one, Finer)}
        if not finer:
            break
        pending = list(finer)
        tables = recount(within_memory(finer, 8))
    return [done[key] for key in sorted(done, key=sort_key)]


def _compare_unit(
    key: Key, mine: Curve, job: Job, tables: Tables, terms: Terms, last: bool
) -> UnitComparison | Finer:
    table = tables.table(key)
    rows = mine.trace["rows"]["used"], table.tally.used
    found = why_not(job, table)
    if found is not None:
        return UnitComparison(key, "no curve now", found[1], *rows, None, None, None, None, ())
    made = Worker(job, tables, 1, {}, last).make(key)
    if isinstance(made, Finer):
        return made
    curve = made.curve
    if curve is None:
        return UnitComparison(key, "no curve now", made.reason, *rows, None, None, None, None, ())
    kept = folds_of(mine, "BASE")
    told = compare_counted(mine, kept, curve, table, Pyramid(table).levels[0], terms)
    return replace(told, key=key)


def _missing(base: Unit | None, now: Unit | None) -> UnitComparison:
    """A unit that one side lacks."""
    known = base is not None and base.status == MADE
    status = "no rows now" if known else "no baseline"
    if base is None:
        reason = "BASE holds no such unit."
    elif not known:
        reason = f"BASE has no curve of it: {base.status}."
    elif now is None:
        reason = "NOW holds no such unit."
    else:
        reason = f"NOW has no curve of it: {now.status}."
    key = base.key if base is not None else now.key if now is not None else ()
    return UnitComparison(
        key, status, reason, None if base is None else base.rows,
        None if now is None else now.rows, None, None, None, None, (),
    )  # fmt: skip
