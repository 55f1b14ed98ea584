"""Curves of many units: count, search each, read again where widths ask for it, assemble."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.api import (
    check_band,
    check_columns,
    check_no_last,
    check_width,
    criterion_of,
    own_bandwidth,
    own_points,
    settings_or_default,
)
from fastsmooth.assemble import Chosen, assemble, middle_of
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.errors import InputError
from fastsmooth.fleet import MADE, SHARED, Fleet, PackedCurve, Unit, sort_key, unit_name
from fastsmooth.fleetpass import (
    MEMORY_CAP_BYTES,
    count_fleet,
    count_units,
)
from fastsmooth.grouping import Grouping, Key
from fastsmooth.passes import Counted, Progress, check_sizes, silent
from fastsmooth.plan import Plan, Sample, bin_width, pilot_of
from fastsmooth.search import search_table
from fastsmooth.settings import NEAREST, Band, Reading, Smoothing, check_flag
from fastsmooth.sharedwidth import shared_width
from fastsmooth.source import Columns, Source, open_source
from fastsmooth.store.disk import is_store
from fastsmooth.unitjob import Job, Tables, spread
from fastsmooth.unitpasses import add_unit_limits, weigh_in_rounds
from fastsmooth.unitsums import CountedUnits

if TYPE_CHECKING:
    from fastsmooth.trail import Search

Floats = NDArray[np.float64]

# All units are searched, those whose width asks for it again with finer bins, and once more.
_MOST_ROUNDS = 3
# A round may take so many passes where memory does not hold the finer bins of all its units.
_MOST_PARTS = 4
_FEWEST_PLACES = 4


@dataclass(frozen=True)
class Finer:
    """A unit whose width asks for finer bins: its next plan."""

    plan: Plan


def make_fleet(
    data: Any,
    x: str | None = None,
    y: str | None = None,
    *,
    by: str | Sequence[str],
    shared_bandwidth: bool = False,
    weight: str | None = None,
    count: str | None = None,
    reading: Reading | None = None,
    smoothing: Smoothing | None = None,
    band: Band | None = None,
    progress: Progress = silent,
) -> Fleet:
    """Make the reference curve of every unit in one pass over the data.

    Parameters
    ----------
    data, x, y, weight, count, reading, smoothing, band, progress
        As for `fastsmooth.make_curve`.
    by : str or sequence of str
        Columns whose values tell units apart, of any kind; a time column may be cut with a unit
        as in ``logged_at:month``.
    shared_bandwidth : bool
        Whether all units get one width, chosen jointly; otherwise each has its own.

    Returns
    -------
    Fleet
        A curve for each unit, or a status and the reason why there is none.

    Raises
    ------
    InputError
        An argument or the data cannot be used, or no unit has rows enough for a curve.
    ReadError
        A file could not be read whole.

    Examples
    --------
    >>> import numpy as np
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, 6000)
    >>> plant = np.array(["north", "south"])[rng.integers(0, 2, 6000)]
    >>> power_kw = 20.0 + 0.04 * wet_bulb_c**2 + 5.0 * (plant == "south")
    >>> power_kw += rng.normal(0.0, 0.1, 6000)
    >>> readings = {"wet_bulb_c": wet_bulb_c, "power_kw": power_kw, "plant": plant}
    >>> made = make_fleet(readings, "wet_bulb_c", "power_kw", by="plant")
    >>> {key: round(float(curve.at(10.0)[0])) for key, curve in made.curves.items()}
    {('north',): 24, ('south',): 29}
    """
    reading = settings_or_default("reading", reading, Reading)
    smoothing = settings_or_default("smoothing", smoothing, Smoothing)
    band = settings_or_default("band", band, Band)
    check_flag("--shared-bandwidth", shared_bandwidth)
    grouping = Grouping.parse(by)
    if is_store(data):
        from fastsmooth.store.fleets import fleet_of_store
        from fastsmooth.store.settings import StoreSettings

        _check_spared(smoothing, band, stored=True)
        _check_one_width(shared_bandwidth, smoothing)
        asked = StoreSettings(x, y, weight, count)
        return fleet_of_store(
            data, asked, grouping, shared_bandwidth, reading, smoothing, band, progress
        )
    x, y = check_columns(x, y, weight, count)
    check_no_last(reading)
    criterion = criterion_of(reading, smoothing)
    check_band(smoothing, band)
    _check_spared(smoothing, band)
    _check_one_width(shared_bandwidth, smoothing)
    block = None if reading.blocks is None else reading.blocks.column
    columns = Columns(x, y, weight, count, block=block)
    with open_source(
        data, columns, where=reading.where, units=grouping.columns,
        timeout_seconds=reading.timeout_seconds,
    ) as source:  # fmt: skip
        fixed = own_bandwidth(source, reading, smoothing)
        places = own_points(source, reading, band)
        job = Job(
            source, reading, smoothing, band, grouping, criterion, fixed, places, shared_bandwidth
        )
        return add_unit_limits(make_units(job, progress), job, progress)


def _check_one_width(shared_bandwidth: bool, smoothing: Smoothing) -> None:
    if shared_bandwidth and smoothing.bandwidth is not None:
        raise InputError(
            "--shared-bandwidth", "be left out with --bandwidth", "a width is given",
            "leave out one of them",
        )  # fmt: skip


def _check_spared(smoothing: Smoothing, band: Band, *, stored: bool = False) -> None:
    """Refuse what needs rows in memory, or, of a store, rows that are not at hand any more."""
    asked = {
        f"--estimator {NEAREST}": smoothing.estimator == NEAREST,
        "--engine exact": smoothing.engine == "exact",
    }
    again = {"--robust": smoothing.robust, "--limits": bool(band.limits)}
    for option, given in asked.items():
        if given:
            raise InputError(
                option, "be left out with --by", "it needs all rows in memory",
                "make one unit at a time with --where, or leave it out",
            )  # fmt: skip
    for option, given in again.items():
        if given and stored:
            raise InputError(
                option, "come with data files", "a store keeps no rows",
                "name the files, or leave it out",
            )  # fmt: skip


@dataclass(frozen=True)
class Weighed:
    """Tables of weighed rows; what is kept of rows as they are comes from the first pass.

    Attributes
    ----------
    tables : Tables
        Units whose rows were weighed.
    first : Tables
        All units, every row of full weight.
    keys : frozenset of tuple
        The units of `tables`.
    """

    tables: Tables
    first: Tables
    keys: frozenset[Key]

    def table(self, key: Key) -> BinTable:
        """Return the table of a unit."""
        return self.tables.table(key) if key in self.keys else self.first.table(key)

    def sample(self, key: Key) -> Sample:
        """Return some of its rows, in runs."""
        return self.first.sample(key)

    def shown(self, key: Key) -> Floats:
        """Return x and y of a thin selection of its rows, (2, n)."""
        return self.first.shown(key)


# Gives tables with the bins that some units ask for; None where rows are not at hand any more.
Recount = Callable[[Mapping[Key, Plan | None]], Tables]


def make_units(job: Job, progress: Progress) -> Fleet:
    """Count all rows in one pass, and make each unit's curve.

    Raises
    ------
    InputError
        The data cannot be used, or no unit has rows enough for a curve.
    """
    counted = count_fleet(job.source, job.reading, job.grouping, progress, job.likely_bins)
    ways, source = counted.units.ways, job.source
    tables: Tables = counted.units
    together = counted.together

    def count(
        source: Source, plan_for: Callable[[Key], Plan | None], room: int = 0
    ) -> CountedUnits:
        base = replace(ways.base, columns=source.columns)
        return count_units(
            source, base, plan_for, job.reading, job.grouping, progress,
            sampled_rows=ways.sampled_rows, room=room,
        )  # fmt: skip

    if job.smoothing.robust:
        keys = sorted(counted.units.keys, key=sort_key)
        _, able = _sort_out(job, tables, keys)
        rounds = weigh_in_rounds(job, tables, able, count, progress)
        # Units without a curve keep the table that tells why.
        tables = Weighed(rounds.tables, counted.units, frozenset(able))
        source = rounds.source or source
        together = replace(together, passes=together.passes + rounds.passes)
        job = replace(job, cores=rounds.cores, robust=rounds.facts)

    held = [counted.units]

    def recount(finer: Mapping[Key, Plan | None]) -> Tables:
        if not job.smoothing.robust:
            # Tables of the former pass have served; two of them might not fit into memory.
            held.pop().release()
        room = sum(plan.bins for plan in finer.values() if plan is not None)
        made = count(source, finer.get, room)
        held.append(made)
        return Weighed(made, counted.units, frozenset(finer)) if job.smoothing.robust else made

    layout = {
        "bins": ways.base.bins, "folds": ways.base.folds, "planned_units": counted.layout.units,
        "memory_cap_bytes": MEMORY_CAP_BYTES,
    }  # fmt: skip
    return fleet_of_tables(job, tables, counted.units.keys, together, layout, recount, progress)


def fleet_of_tables(
    job: Job,
    tables: Tables,
    keys: Sequence[Key],
    together: Counted,
    layout: dict[str, Any],
    recount: Recount | None,
    progress: Progress,
) -> Fleet:
    """Make the curve of each unit from its table.

    Parameters
    ----------
    job : Job
        What is to be made.
    tables : Tables
        The units' tables; they share folds, scale and columns.
    keys : sequence of tuple
        The units.
    together : Counted
        All units together: what became of the rows, cautions, passes.
    layout : dict
        How rows were counted, for the trace.
    recount : callable or None
        Counts units anew with finer bins.
    progress : callable
        Called as ``progress(stage, 0, None)``.

    Raises
    ------
    InputError
        No unit has rows enough for a curve.
    """
    keys = sorted(keys, key=sort_key)
    units, makers = _sort_out(job, tables, keys)
    shared = None
    if job.shared_bandwidth and makers:
        progress("searching", 0, None)
        shared = shared_width(job, tables, makers)
        job = replace(job, fixed=shared["bandwidth_on_scale"])
    passes = together.passes
    settings: dict[str, Any] = {}
    # The first round has its tables; later ones count some units after the other.
    parts: list[Mapping[Key, Plan | None]] = [dict.fromkeys(makers)]
    for tried in range(1, _MOST_ROUNDS + 1):
        last = recount is None or tried == _MOST_ROUNDS
        sharing = sum(map(len, parts))
        finer: dict[Key, Plan] = {}
        for part in parts:
            if recount is not None and tried > 1:
                tables = recount(part)
                passes += 1
            progress("fitting", 0, None)
            worker = Worker(job, tables, passes, settings, last, sharing)
            made = zip(part, spread(worker.make, list(part), job.reading.threads), strict=True)
            for key, one in made:
                if isinstance(one, Finer):
                    finer[key] = one.plan
                else:
                    units[key] = one
        if not finer:
            break
        parts = [*in_parts(finer, together.table.slots)]
    if "shared" not in settings:
        raise _none_made([units[key] for key in keys])
    trace = {
        **settings["shared"],
        "axis": job.source.axis.to_dict(),
        "by_types": job.grouping.types(job.source.schemas),
        "rows": together.table.tally.to_dict(),
        "engine": {"name": "binned", **layout, "passes": passes},
        "shared_bandwidth": shared,
        "robust": _robust_counts(job, keys),
    }
    cautions = together.cautions
    return Fleet(job.grouping.words, tuple(units[key] for key in keys), cautions, trace)


def _robust_counts(job: Job, keys: Sequence[Key]) -> list[list[int]] | None:
    """Rows judged, down-weighted and ignored in each unit, in the order of the units."""
    if not job.robust:
        return None
    names = ("rows_judged", "rows_down_weighted", "rows_ignored")
    return [[job.robust.get(key, {}).get(name, 0) for name in names] for key in keys]


def _sort_out(job: Job, tables: Tables, keys: Sequence[Key]) -> tuple[dict[Key, Unit], list[Key]]:
    """Part units of which no curve can be made, with the reason, from the others."""
    units: dict[Key, Unit] = {}

    def look(key: Key) -> Unit | None:
        table = tables.table(key)
        found = why_not(job, table)
        return None if found is None else Unit(key, *found, table.tally.used, None)

    for key, unit in zip(keys, spread(look, keys, job.reading.threads), strict=True):
        if unit is not None:
            units[key] = unit
    return units, [key for key in keys if key not in units]


def search_unit(job: Job, table: BinTable, pyramid: Pyramid) -> Search:
    """Search the width of one unit; errors as for `search_table`."""
    return search_table(
        table, pyramid, job.shape, criterion=job.criterion,
        by_block=job.reading.block is not None, widths=job.smoothing.widths,
    )  # fmt: skip


def middle_of_unit(job: Job, table: BinTable, places: Floats) -> Floats | None:
    """Return a unit's curve at places on the plan's scale; None where rows are too few for one."""
    pyramid, estimator = Pyramid(table), job.smoothing.estimator
    try:
        found = search_unit(job, table, pyramid)
    except InputError:
        return None
    bandwidth = job.fixed or found.trails[estimator].bandwidth
    return middle_of(pyramid, job.shape, bandwidth, estimator, places)


def why_not(job: Job, table: BinTable) -> tuple[str, str] | None:
    """Status and reason of a unit of which no curve can be made; None for others."""
    columns, rows = table.plan.columns, table.tally.used
    if not rows:
        refused = ", ".join(f"{n:,} {reason}" for reason, n in sorted(table.tally.refused.items()))
        return "no usable rows", f"Every row was refused ({refused})."
    low, high = table.extent.tolist()
    if low == high:
        return "x constant", (
            f"{columns.x} is the same in all {rows:,} rows."
            if rows > 1
            else "There is one row only."
        )
    if job.reading.block is not None and len(table.sums) < 2:
        return "one block only", (
            f"{job.reading.block} is the same in all {rows:,} rows, or its blocks share one fold."
        )
    total = table.total()
    try:
        check_sizes(total, rows, columns)
    except InputError as error:
        return "data refused", str(error)
    return None


def _why_no_width(job: Job, table: BinTable, error: InputError) -> tuple[str, str]:
    """Status and reason of a unit that refuses a search."""
    if error.argument != "--x":
        return "too few rows", str(error)
    return "too few distinct x", (
        f"{table.tally.used:,} rows hold fewer than {_FEWEST_PLACES} distinct "
        f"{job.source.columns.x} that bins tell apart."
    )


class Worker:
    """Makes the curve of one unit after the other, in any thread.

    Parameters
    ----------
    job : Job
        What is to be made.
    tables : Tables
        The units' tables.
    passes : int
        How often the data were read for them.
    settings : dict
        Takes what all curves share, from the first to be made.
    last : bool
        Whether there is no other round with finer bins.
    sharing : int
        Units that would share the memory of another round.
    """

    def __init__(
        self, job: Job, tables: Tables, passes: int, settings: dict[str, Any], last: bool,
        sharing: int = 1,
    ) -> None:  # fmt: skip
        self.job = job
        self.sharing = sharing
        self.tables = tables
        self.passes = passes
        self.last = last
        self.settings = settings

    def make(self, key: Key) -> Unit | Finer:
        """Return the unit with its curve, or with the reason against; or finer bins for it."""
        job, table = self.job, self.tables.table(key)
        shape, estimator = job.shape, job.smoothing.estimator
        pyramid = Pyramid(table)
        try:
            found = search_unit(job, table, pyramid)
        except InputError as error:
            return Unit(key, *_why_no_width(job, table, error), table.tally.used, None)
        if job.fixed is not None:
            check_width(job.fixed, table)
        bandwidth = job.fixed or found.trails[estimator].bandwidth
        if not self.last:
            plan = self._finer(key, table, bandwidth, found)
            if plan is not None:
                return Finer(plan)
        counted = Counted(table, self.tables.sample(key), self.tables.shown(key), (), self.passes)
        chosen = Chosen(
            counted, pyramid, found, shape, bandwidth, job.places, engine_reason="many units",
            core=job.cores.get(key), robust=job.robust.get(key),
        )  # fmt: skip
        smoothing = job.smoothing
        if job.fixed is not None and smoothing.bandwidth is None:
            smoothing = replace(smoothing, bandwidth=bandwidth)
        curve = assemble(job.source, chosen, job.reading, smoothing, job.band)
        words = job.grouping.words
        trace = {
            **curve.trace,
            "settings": {
                **curve.trace["settings"], "by": list(words),
                "shared_bandwidth": job.shared_bandwidth,
            },
            "unit": [None if part is None else str(part) for part in key],
        }  # fmt: skip
        # All units have the same: the first to come is as good as any.
        shared = self.settings.setdefault("shared", {name: trace[name] for name in SHARED})
        packed = PackedCurve.of(replace(curve, trace=trace), shared)
        return Unit(key, MADE, None, table.tally.used, packed)

    def _finer(self, key: Key, table: BinTable, bandwidth: float, found: Search) -> Plan | None:
        """Return a plan over the unit's own range with the bins that the width asks for."""
        shape, plan = self.job.shape, table.plan
        if bandwidth >= shape.fewest_bins_per_bandwidth * plan.width:
            return None
        # A width at the very end of what these bins resolve may want to go much further.
        at_end = found.trails[self.job.smoothing.estimator].at_low_end
        ahead = 4.0 if at_end and self.job.fixed is None else 1.0
        low, high = table.extent.tolist()
        wanted = ahead * shape.bins_per_bandwidth * (high - low) / bandwidth * 1.05
        bins = 1 << max(0, math.ceil(math.log2(max(wanted, 1.0))))
        room = _room(plan.folds, table.slots)
        most = max(1, min(room, _MOST_PARTS * room // self.sharing))
        bins = min(bins, 1 << int(math.log2(most)))
        if (high - low) / bins > 0.8 * plan.width:
            return None
        reference, pilot = plan.reference, plan.pilot
        sample = self.tables.sample(key)
        if sample.x.size:
            reference, pilot = pilot_of(sample, low, high)
        return replace(
            plan, origin=low, width=bin_width(low, high, bins), bins=bins, reference=reference,
            pilot=pilot,
        )  # fmt: skip


def _room(folds: int, slots: int) -> int:
    """Return how many bins all units of one pass may have together."""
    # Half of the memory for the tables, half for the tasks at work.
    return MEMORY_CAP_BYTES // (2 * 8 * slots * folds)


def in_parts(finer: dict[Key, Plan], slots: int) -> list[dict[Key, Plan]]:
    """Deal units that ask for finer bins to passes whose tables fit into memory."""
    parts: list[dict[Key, Plan]] = []
    bins = 0
    for key, plan in finer.items():
        if not parts or bins + plan.bins > _room(plan.folds, slots):
            parts.append({})
            bins = 0
        parts[-1][key] = plan
        bins += plan.bins
    return parts


def within_memory(finer: dict[Key, Plan], slots: int) -> dict[Key, Plan]:
    """Cut the bins of the finest plans until all of them fit."""
    bins = {key: plan.bins for key, plan in finer.items()}
    room = _room(next(iter(finer.values())).folds, slots)
    while sum(bins.values()) > room:
        most = max(bins.values())
        bins = {key: one // 2 if one == most else one for key, one in bins.items()}
    return {
        key: replace(plan, bins=bins[key], width=plan.width * (plan.bins / bins[key]))
        for key, plan in finer.items()
    }


def _none_made(units: Sequence[Unit]) -> InputError:
    first = units[0]
    return InputError(
        "DATA", "hold a unit with rows enough for a curve",
        f"none of {len(units):,} has (the first, {unit_name(first.key)}: {first.status})",
        "check --by, --where and the columns",
    )  # fmt: skip
