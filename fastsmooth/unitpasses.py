"""Further passes over the rows of many units: robust weights, and limits."""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.fleet import MADE, SHARED, Fleet, PackedCurve, Unit
from fastsmooth.grouping import Grouping, Key, Keys
from fastsmooth.limits import Layout, count_residuals, limits_of
from fastsmooth.lookup import Lookup
from fastsmooth.passes import Progress
from fastsmooth.reweighted import Finder, Reweighted
from fastsmooth.robust import (
    ENOUGH,
    NOT_WEIGHED,
    POINTS,
    ROUNDS,
    Core,
    core_of,
    farthest_move,
    robust_facts,
)

if TYPE_CHECKING:
    from fastsmooth.bintable import BinTable
    from fastsmooth.plan import Plan
    from fastsmooth.source import Chunk
    from fastsmooth.unitjob import Job, Tables

# Counts the rows of a source into a table for each unit that has a plan.
Count = Callable[[Reweighted, Callable[[Key], "Plan | None"]], "Tables"]


def unit_finder(grouping: Grouping, keys: Sequence[Key]) -> Callable[[], Finder]:
    """Return what makes, for one thread, what gives each row of a chunk the number of its unit.

    A unit's number is the place of its key; units that are not among the keys have the next one.
    """
    number = {key: place for place, key in enumerate(keys)}

    def make() -> Finder:
        met = Keys(grouping)
        of_code = np.empty(0, np.int64)

        def find(chunk: Chunk) -> NDArray[np.int64]:
            nonlocal of_code
            codes = met.codes(chunk.units)
            if of_code.size < len(met.keys):
                of_code = np.array([number.get(key, len(keys)) for key in met.keys], np.int64)
            return of_code[codes]

        return find

    return make


@dataclass(frozen=True)
class Rounds:
    """What rounds of robust weights left behind.

    Attributes
    ----------
    source : Reweighted
        The data with the last weights.
    tables : Tables
        What was counted with them.
    cores : dict of tuple to Core
        Where most rows of each unit lie.
    facts : dict of tuple to dict
        What the weights did, for the trace of each unit.
    passes : int
        Further passes.
    """

    source: Reweighted | None
    tables: Tables
    cores: Mapping[Key, Core]
    facts: Mapping[Key, dict[str, Any]]
    passes: int


def weigh_in_rounds(
    job: Job, tables: Tables, keys: Sequence[Key], count: Count, progress: Progress
) -> Rounds:
    """Weigh rows by how far they lie from their unit's curve, as for one curve, in common passes.

    Parameters
    ----------
    job : Job
        What is to be made.
    tables : Tables
        The units' rows, all of full weight.
    keys : sequence of tuple
        Units of which a curve can be made.
    count : callable
        One pass.
    progress : callable
        As for `make_curve`.
    """
    from fastsmooth.manyunits import middle_of_unit
    from fastsmooth.unitjob import spread

    log, threads = job.reading.scale == "log", job.reading.threads

    def start(key: Key) -> Core | None:
        low, high = tables.table(key).extent.tolist()
        return core_of(tables.sample(key), np.linspace(low, high, POINTS))

    found = dict(zip(keys, spread(start, keys, threads), strict=True))
    cores = {key: core for key, core in found.items() if core is not None}
    facts: dict[Key, dict[str, Any]] = {key: dict(NOT_WEIGHED) for key in keys if key not in cores}
    samples = {key: tables.sample(key) for key in cores}
    plans = {key: tables.table(key).plan for key in keys}
    finder = unit_finder(job.grouping, keys)

    def again(unit: tuple[Key, BinTable, Core]) -> Core | None:
        key, table, core = unit
        return core_of(samples[key], core.x, middle_of_unit(job, table, core.x))

    weighed, rounds, moved = None, 0, dict.fromkeys(cores, np.inf)
    while cores and rounds < ROUNDS and max(moved.values()) > ENOUGH:
        rounds += 1
        points = (cores[key].points(log) if key in cores else None for key in keys)
        weighed = Reweighted(job.source, Lookup(points, log), finder)
        plans = {key: replace(plan, columns=weighed.columns) for key, plan in plans.items()}
        tables = count(weighed, plans.get)
        progress("searching", 0, None)
        wanted = [(key, tables.table(key), cores[key]) for key in cores]
        for (key, _, former), core in zip(wanted, spread(again, wanted, threads), strict=True):
            moved[key] = 0.0 if core is None else farthest_move(former, core)
            cores[key] = core or former
    for place, key in enumerate(keys):
        if key in cores and weighed is not None:
            counts = (weighed.rows[place], weighed.down[place], weighed.ignored[place])
            facts[key] = robust_facts(cores[key], counts, rounds, moved[key])
    return Rounds(weighed, tables, cores, facts, rounds)


def add_unit_limits(fleet: Fleet, job: Job, progress: Progress) -> Fleet:
    """Return the fleet with limits of each unit's own rows, in one more pass."""
    levels = job.band.limits
    if not levels:
        return fleet
    keys = [unit.key for unit in fleet.units]
    lookup = Lookup((unit.points() for unit in fleet.units), job.reading.scale == "log")
    layout = Layout.within_cap(lookup.units)
    finder = unit_finder(job.grouping, keys)
    counts = count_residuals(job.source, lookup, layout, job.reading, finder, progress)
    shared = {name: fleet.trace[name] for name in SHARED}
    units, made, known = [], 0, np.zeros(len(levels), np.int64)
    below, judged = np.zeros(len(levels)), 0
    for unit, own in zip(fleet.units, counts, strict=False):
        curve = unit.curve
        if unit.status == MADE and curve is not None:
            limits = limits_of(curve, own, layout, levels, job.shape)
            made += 1
            known += np.isfinite(limits.values).any(axis=1)
            below += np.nan_to_num(limits.coverage) * limits.rows_judged
            judged += limits.rows_judged
            packed = PackedCurve.of(replace(curve, limits=limits), shared)
            unit = Unit(unit.key, MADE, None, unit.rows, packed)
        units.append(unit)
    engine = {**fleet.trace["engine"], "passes": fleet.trace["engine"]["passes"] + 1}
    told = {
        "levels": list(levels), "units": made, "units_with_limit": known.tolist(),
        "coverage": (below / judged).tolist() if judged else None, "rows_judged": judged,
    }  # fmt: skip
    trace = {**fleet.trace, "engine": engine, "limits": told}
    return replace(fleet, units=tuple(units), trace=trace)
