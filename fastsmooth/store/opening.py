"""An opened store: its ledger, and bin tables made of the sums that it holds."""

from __future__ import annotations

import math
import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field, replace
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from fastsmooth.axis import Axis
from fastsmooth.bintable import BinTable, Tally
from fastsmooth.curve import Caution
from fastsmooth.errors import InputError
from fastsmooth.files import FileRecord
from fastsmooth.fleet import arrow_type, sort_key, unit_name
from fastsmooth.grouping import Grouping
from fastsmooth.near import advise
from fastsmooth.passes import Counted
from fastsmooth.plan import Plan, Sample
from fastsmooth.settings import Reading, usable_cores
from fastsmooth.source import Columns
from fastsmooth.store import disk
from fastsmooth.store.cells import PLAIN_SLOTS, RUN, WEIGHTED_SLOTS, Key, Part, Rows
from fastsmooth.store.ledger import Entry, Manifest, PartRecord, load_manifest
from fastsmooth.store.picks import level_for
from fastsmooth.store.settings import StoreSettings
from fastsmooth.store.shelf import read_part, regridded, thinned

if TYPE_CHECKING:
    import pyarrow as pa

Floats = NDArray[np.float64]
T = TypeVar("T")

_FEW_SETTINGS = Reading(threads=1)


@dataclass(frozen=True)
class Window:
    """Which periods of a store are wanted; None sets no limit.

    Parameters
    ----------
    last : str or None
        So much up to the newest period, as in ``12 months``.
    before : str or None
        Only periods before the one that begins at this date.
    """

    last: str | None = None
    before: str | None = None


@dataclass
class _Sums:
    """What is gathered for one unit."""

    table: BinTable
    rows: list[Rows] = field(default_factory=list)


@dataclass(frozen=True)
class StoredSource:
    """Stands for the data of a store, which are not read again.

    Attributes
    ----------
    axis, columns, files, x_unit, y_unit, schemas
        As of a `fastsmooth.source.Source`; the one file is the store's ledger, and the schema
        holds the unit columns.
    """

    axis: Axis
    columns: Columns
    files: tuple[FileRecord, ...]
    x_unit: str
    y_unit: str
    schemas: tuple[pa.Schema, ...]


class Store:
    """A store as it is now; it does not change when the folder is updated.

    Get one from `open_store`.

    Attributes
    ----------
    path : str
        Its folder.
    manifest : Manifest
        Its state: ledger, settings, bins.
    """

    def __init__(self, path: str, manifest: Manifest) -> None:
        self.path = path
        self.manifest = manifest

    @property
    def settings(self) -> StoreSettings:
        """What it counts."""
        return self.manifest.basis.settings

    @property
    def reading(self) -> Reading:
        """How its rows were read."""
        return reading_of(self.settings, Reading())

    @property
    def entries(self) -> tuple[Entry, ...]:
        """The files counted."""
        return self.manifest.entries

    @property
    def by(self) -> tuple[str, ...]:
        """The columns that tell units apart."""
        return self.settings.by

    @property
    def by_types(self) -> tuple[str, ...]:
        """Arrow types of the unit columns."""
        return self.manifest.basis.by_types

    @property
    def plan(self) -> Plan:
        """The plan that all its tables share."""
        return self.manifest.basis.plan(self.manifest.grid)

    @property
    def source(self) -> StoredSource:
        """What stands for the data where a curve is put together."""
        import pyarrow as pa

        basis = self.manifest.basis
        path = os.path.join(self.path, disk.CURRENT)
        try:
            status = os.stat(path)
            size_bytes, modified_ns = status.st_size, status.st_mtime_ns
        except OSError:
            size_bytes = modified_ns = 0  # gone since it was opened; only the trace tells it
        ledger = FileRecord(path, size_bytes, modified_ns, sum(one.rows for one in self.entries))
        types = [arrow_type(kind) for kind in basis.by_types]
        names = Grouping.parse(self.by).columns if self.by else ()
        schema = pa.schema(list(zip(names, types, strict=True)))
        return StoredSource(
            basis.axis, basis.columns, (ledger,), basis.x_unit, basis.y_unit, (schema,)
        )

    def periods(self, window: Window | None = None) -> list[int]:
        """Return the numbers of the periods in a window that hold rows, ascending.

        Raises
        ------
        InputError
            A window was given and the store keeps no periods apart, or it holds none.
        """
        held = self.manifest.periods
        if window is None or window == Window():
            return held
        period = self.manifest.basis.period
        if period is None:
            option = "--last" if window.last is not None else "--before"
            raise InputError(
                option, "come with a store that keeps periods apart", f"'{self.path}' keeps none",
                "make another store with --period, as in --period logged_at:month",
            )  # fmt: skip
        if window.before is not None:
            stop = period.begun_at(window.before, "--before")
            held = [number for number in held if number < stop]
        if not held and self.manifest.periods:
            raise InputError(
                "--before", "leave rows in the store", "none are earlier", "give a later date"
            )
        if window.last is not None and held:
            start = period.first_of_last(window.last, held[-1])
            held = [number for number in held if number >= start]
        return held

    def period_labels(self, numbers: Sequence[int]) -> list[str]:
        """Return periods for people."""
        period = self.manifest.basis.period
        return [] if period is None else [period.label(number) for number in numbers]

    def tables(
        self, window: Window | None = None, *, threads: int | None = None
    ) -> dict[Key, BinTable]:
        """Return the bin table of every unit; without unit columns the one key is ().

        Parameters
        ----------
        window : Window or None
            Which periods; None takes all.
        threads : int or None
            Files read at a time; the result does not depend on it.

        Raises
        ------
        InputError
            The window does not suit.
        ReadError
            The store is damaged.
        """
        sums = self._gather(window, threads, self.by)
        return {key: sums[key].table for key in sorted(sums, key=sort_key)}

    def counted(
        self,
        window: Window | None = None,
        *,
        by: Sequence[str] = (),
        threads: int | None = None,
    ) -> dict[Key, Counted]:
        """Return what a pass over the data would have counted.

        Parameters
        ----------
        window : Window or None
            Which periods; None takes all.
        by : sequence of str
            Some of the columns that tell the store's units apart, in any order: units that agree
            in them are taken together. Without any the one key is ().
        threads : int or None
            Files read at a time.

        Raises
        ------
        InputError
            The store does not keep such units apart, the window does not suit, or all periods were
            forgotten.
        """
        sums = self._gather(window, threads, by)
        if not sums:
            raise InputError(
                "DATA", "be a store that holds rows", "all its periods were forgotten",
                "count files of later periods first",
            )  # fmt: skip
        cautions = tuple(self.cautions())
        return {
            key: self._counted(sums[key], cautions, len(sums)) for key in sorted(sums, key=sort_key)
        }

    def unit(self, key: Key, window: Window | None = None) -> Counted:
        """Return what a pass over one unit's rows would have counted.

        Raises
        ------
        InputError
            There is no such unit.
        """
        found = self.counted(window, by=self.by)
        if key not in found:
            raise InputError(
                "the unit", "be one of the store", f"there is no {unit_name(key)}",
                advise(unit_name(key), map(unit_name, found)),
            )  # fmt: skip
        return found[key]

    def _counted(self, sums: _Sums, cautions: tuple[Caution, ...], units: int) -> Counted:
        basis = self.manifest.basis
        rows = Rows.joined(sums.rows) if sums.rows else Rows.none()
        level = level_for(self.manifest.used, basis)
        rows = thinned(rows, level, units)
        shown = np.stack([rows.x[rows.level != RUN], rows.y[rows.level != RUN]])
        return Counted(sums.table, _sample(rows, self.plan.scale), shown, cautions, 0)

    def _gather(
        self, window: Window | None, threads: int | None, by: Sequence[str]
    ) -> dict[Key, _Sums]:
        for name in by:
            if name not in self.by:
                raise InputError(
                    "--by", "name what the store keeps apart", f"'{name}' is none of it",
                    advise(name, self.by) if self.by else "make another store with --by",
                )  # fmt: skip
        places = [self.by.index(name) for name in by]
        records = self._records(window)
        made: dict[Key, _Sums] = {}
        for part in self._parts(records, threads or usable_cores()):
            self._add(made, part, places)
        if () in made:
            made[()].table.tally.add(self.early(window))
        return made

    def _records(self, window: Window | None) -> tuple[PartRecord, ...]:
        if window is None or window == Window():
            return self.manifest.parts
        wanted = set(self.periods(window))
        return tuple(one for one in self.manifest.parts if one.period in wanted)

    def _parts(self, records: Sequence[PartRecord], threads: int) -> list[Part]:
        manifest = self.manifest

        def load(record: PartRecord) -> Part:
            part = read_part(self.path, record, manifest.basis)
            return regridded(part, record.grid, manifest.grids)

        if len(records) < 2 or threads < 2:
            return [load(record) for record in records]
        with ThreadPoolExecutor(threads, thread_name_prefix="fastsmooth") as pool:
            return list(pool.map(load, records))

    def _add(self, made: dict[Key, _Sums], part: Part, places: Sequence[int]) -> None:
        """Add a part; the key of a unit is cut to some places."""
        grid = self.manifest.grid
        plan = self.plan
        slots = np.array(PLAIN_SLOTS if self.manifest.basis.slots == 7 else WEIGHTED_SLOTS)
        keys = [tuple(key[n] for n in places) for key in part.units]
        cells = part.cells
        bins = cells.bin - grid.first
        edges = np.flatnonzero(
            (np.diff(cells.unit, prepend=-1) != 0) | (np.diff(cells.fold, prepend=-1) != 0)
        )
        stops = np.append(edges, bins.size)[1:]
        for key, group in zip(keys, part.units.values(), strict=True):
            one = made.setdefault(key, _Sums(BinTable(plan)))
            one.table.tally.add(group.tally)
            one.table.blocks |= group.blocks
            one.table.extent = np.array([
                min(one.table.extent[0], group.low), max(one.table.extent[1], group.high)
            ])  # fmt: skip
        # Whole rows of a table are added faster than the columns that hold sums.
        rows = np.zeros((bins.size, BinTable(plan).slots))
        rows[:, slots] = cells.sums
        with np.errstate(over="ignore", invalid="ignore"):
            for start, stop in zip(edges.tolist(), stops.tolist(), strict=True):
                table = made[keys[int(cells.unit[start])]].table
                fold = int(cells.fold[start])
                sums = table.sums.get(fold)
                if sums is None:
                    sums = table.sums[fold] = _empty(plan, table.slots)
                # Bins of one unit and fold differ, so that none is added to twice.
                sums[bins[start:stop]] += rows[start:stop]
        order = np.argsort(part.rows.unit, kind="stable")
        ends = np.searchsorted(part.rows.unit[order], np.arange(len(keys) + 1))
        for n, key in enumerate(keys):
            if ends[n] < ends[n + 1]:
                made[key].rows.append(part.rows.picked(order[ends[n] : ends[n + 1]]))

    def early(self, window: Window | None = None) -> Tally:
        """Return what was dropped before unit and period were known, of files that take part."""
        taking = {n for record in self._records(window) for n in record.files}
        tally = Tally()
        for n, entry in enumerate(self.entries):
            if n in taking or not entry.periods:
                read = entry.filtered + sum(entry.early.values())
                tally.add(Tally(read, entry.filtered, dict(entry.early)))
        return tally

    def cautions(self) -> list[Caution]:
        """Return what readers must know: rows that were left out."""
        left_out = [one for one in self.entries if one.beyond is not None]
        if not left_out:
            return []
        rows = sum(
            rows for one in left_out for reason, rows in one.refused.items()
            if reason in ("x below range", "x above range")
        )  # fmt: skip
        axis = self.manifest.basis.axis
        ends = [_off_scale(end, self.plan.scale) for end in (self.plan.origin, self.plan.high)]
        return [Caution(
            "range trimmed",
            f"{rows:,} rows in {len(left_out):,} of {len(self.entries):,} files lie so far outside "
            f"{axis.label(ends[0])} to {axis.label(ends[1])} that the store left them out. Make "
            f"another store with --range or --where to decide yourself.",
        )]  # fmt: skip


def _off_scale(value: float, scale: str) -> float:
    return math.exp(value) if scale == "log" else value


def _empty(plan: Plan, slots: int) -> Floats:
    table = np.zeros((plan.bins, slots))
    table[:, 7] = plan.pilot_per_bin
    return table


def _sample(rows: Rows, scale: str) -> Sample:
    usable = (rows.level == RUN) & np.isfinite(rows.x) & np.isfinite(rows.y)
    if scale == "log":
        usable &= rows.x > 0.0
    few = rows.picked(usable)
    order = np.lexsort((few.place, few.file))
    file = few.file[order]
    x = few.x[order]
    _, run = np.unique(file, return_inverse=True)
    return Sample(np.log(x) if scale == "log" else x, few.y[order], run.astype(np.int64),
                  few.place[order])  # fmt: skip


def open_store(path: str | os.PathLike[str]) -> Store:
    """Open a store for reading; nobody is kept from updating it meanwhile.

    Parameters
    ----------
    path : path
        Its folder.

    Returns
    -------
    Store
        As it is now.

    Raises
    ------
    InputError
        There is no store.
    ReadError
        It is damaged, or of a format that this version does not read.
    """
    return with_store(path, lambda store: store)


def with_store(path: str | os.PathLike[str], use: Callable[[Store], T]) -> T:
    """Open a store and use it; begin again where an update has replaced its files meanwhile.

    Parameters
    ----------
    path : path
        Its folder.
    use : callable
        Takes the store.

    Raises
    ------
    InputError
        There is no store.
    ReadError
        It is damaged.
    """
    folder = os.fspath(path)
    missing: disk.OvertakenError | None = None
    for _ in range(disk.MOST_TRIES):
        try:
            manifest = load_manifest(folder)
            if manifest is None:
                raise InputError(
                    "STORE", "be a store", f"'{folder}' is none",
                    "make one with 'fastsmooth update'",
                )  # fmt: skip
            return use(Store(folder, manifest))
        except disk.OvertakenError as gone:
            # The same file missing twice was lost, not replaced.
            if missing is not None and missing.path == gone.path:
                break
            missing = gone
    assert missing is not None
    raise missing


def reading_of(settings: StoreSettings, given: Reading) -> Reading:
    """Return how a store was read; refuse a reading that contradicts it.

    Raises
    ------
    InputError
        Filter, range, scale, folds or block differ.
    """
    asked = StoreSettings(
        where=given.where, range=given.range,
        block=None if given.block is None else str(given.block),
        scale=None if given.scale == _FEW_SETTINGS.scale else given.scale,
        folds=None if given.folds == _FEW_SETTINGS.folds else given.folds,
    )  # fmt: skip
    settings.check_agrees(asked)
    made: dict[str, Any] = {
        "where": settings.where, "range": settings.range, "block": settings.block,
        "scale": str(settings.scale), "folds": settings.sizes[1],
    }  # fmt: skip
    return replace(given, **made)
