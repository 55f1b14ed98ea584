"""Counting one file into parts: sums, tallies and some rows of each unit and period."""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable, Tally
from fastsmooth.blocks import Block, Dealer
from fastsmooth.fleet import sort_key
from fastsmooth.grouping import Grouping, Keys
from fastsmooth.source import Chunk, Columns, FileRecord, Task, open_source
from fastsmooth.store.beyond import Beyond
from fastsmooth.store.cells import (
    PLAIN_SLOTS,
    RUN,
    WEIGHTED_SLOTS,
    Cells,
    Group,
    Key,
    Part,
    Rows,
    merge_parts,
)
from fastsmooth.store.grid import Grid
from fastsmooth.store.ledger import Basis
from fastsmooth.store.periods import Period
from fastsmooth.store.picks import levels_of, offset_of, run_rows, shown_cap
from fastsmooth.store.settings import StoreSettings
from fastsmooth.store.units import check_alike

if TYPE_CHECKING:
    import pyarrow as pa

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
PeriodNumber = int | None

# Row groups of a file are summed in so many groups, whatever the number of threads.
_GROUPS = 8
# Dense tables of the units at work are put aside as cells when they take more than this.
_DENSE_BYTES = 64 << 20
# More stretches of a period than this in a chunk are sorted together.
_MANY_STRETCHES = 64


@dataclass(frozen=True)
class Order:
    """One file to count.

    Attributes
    ----------
    path : str
        The file.
    ordinal : int
        Its place in the ledger.
    first_task : int
        Place of its first row group among all that the store has met; runs are dealt by it.
    keep_run : bool
        Whether its first rows are kept as they follow one another.
    level : int
        Least level of the rows that are kept to be shown.
    only : frozenset of period numbers, or None
        Periods wanted; None means all.
    """

    path: str
    ordinal: int
    first_task: int
    keep_run: bool
    level: int = 0
    only: frozenset[PeriodNumber] | None = None


@dataclass(frozen=True)
class CountedFile:
    """What a file holds.

    Attributes
    ----------
    order : Order
        What was asked for.
    record : FileRecord
        The file as it was.
    tasks : int
        Its row groups.
    tally : Tally
        All its rows.
    early : Tally
        Those that were dropped before their unit or period was known.
    parts : dict of period number to Part
        The rest.
    beyond : Beyond
        Values of x that found no bin.
    """

    order: Order
    record: FileRecord
    tasks: int
    tally: Tally
    early: Tally
    parts: dict[PeriodNumber, Part]
    beyond: Beyond


@dataclass(frozen=True)
class Counter:
    """Counts files on one grid.

    Attributes
    ----------
    basis : Basis
        What never changes.
    grid : Grid
        The bins.
    forgotten_before : int or None
        Rows of earlier periods are refused.
    """

    basis: Basis
    grid: Grid
    forgotten_before: int | None

    def columns(self) -> Columns:
        """Return the columns to be read: also block, units and period."""
        return columns_to_read(self.basis.settings)

    def count(
        self, order: Order, threads: int, progress: Callable[[int], None] | None
    ) -> CountedFile:
        """Count one file; the result does not depend on the number of threads.

        Raises
        ------
        InputError
            A column does not suit.
        ReadError
            The file is damaged, or changed meanwhile.
        """
        settings = self.basis.settings
        with open_source(
            order.path, self.columns(), where=settings.where, fixed=self.basis.fixed
        ) as source:
            many = min(_GROUPS, len(source.tasks))
            groups = [source.tasks[start::many] for start in range(many)]
            wanted = source.tasks[0].index if source.tasks and order.keep_run else -1

            def work(parts: Iterator[tuple[Task, Iterator[Chunk]]]) -> _Pool:
                pool = _Pool(self, order)
                for task, chunks in parts:
                    pool.add_task(task.index, chunks, task.index == wanted)
                return pool

            total = _Pool(self, order)
            for pool in source.map_groups(work, groups, threads, progress=progress):
                total.absorb(pool)
            total.put_aside()
            tally = Tally()
            tally.add(total.early)
            parts = {}
            for period in sorted(total.aside, key=lambda one: sort_key((one,))):
                parts[period] = merge_parts(total.aside[period])
                for group in parts[period].units.values():
                    tally.add(group.tally)
            return CountedFile(
                order, source.files[0], len(source.tasks), tally, total.early, parts,
                total.beyond,
            )  # fmt: skip


def columns_to_read(settings: StoreSettings) -> Columns:
    """Return the columns to be read: also block, units and period."""
    block = None if settings.block is None else Block.parse(settings.block).column
    extra = [] if block is None else [block]
    period = () if settings.period is None else (Period.parse(settings.period).column,)
    units = Grouping.parse(settings.by).columns if settings.by else ()
    for name in (*units, *period):
        if name not in extra:
            extra.append(name)
    return Columns(*settings.names, settings.weight, settings.count, tuple(extra), block)


class _Pool:
    """Sums of some row groups of a file."""

    def __init__(self, counter: Counter, order: Order) -> None:
        basis = counter.basis
        settings = basis.settings
        self._basis = basis
        self._order = order
        self._grid = counter.grid
        self._plan = basis.plan(counter.grid)
        self._forgotten = counter.forgotten_before
        self._coder = None if basis.period is None else basis.period.coder()
        self._names = {name: n for n, name in enumerate(counter.columns().extra)}
        self._dealer = None
        if settings.block is not None:
            self._dealer = Dealer(Block.parse(settings.block), settings.sizes[1])
        self._grouping = Grouping.parse(settings.by) if settings.by else None
        self._keys = None if self._grouping is None else Keys(self._grouping)
        self._tables: dict[tuple[int, PeriodNumber], BinTable] = {}
        self._shown: dict[tuple[int, PeriodNumber], list[Rows]] = {}
        self._with_run: set[tuple[int, PeriodNumber]] = set()
        self._level = order.level
        self._offset = 0
        self._shown_rows = 0
        self.aside: dict[PeriodNumber, list[Part]] = {}
        self.early = Tally()
        self.beyond = Beyond()

    def add_task(self, index: int, chunks: Iterator[Chunk], keep_run: bool) -> None:
        """Add one row group; `index` is its place in the file."""
        met: dict[int, int] = {}
        for chunk in chunks:
            self._add_chunk(chunk, index, met, keep_run)

    def absorb(self, other: _Pool) -> None:
        """Add the sums of the row groups that follow; the other is done with."""
        self.early.add(other.early)
        self.beyond.merge(other.beyond)
        for period, parts in other.aside.items():
            self.aside.setdefault(period, []).extend(parts)
        for (unit, period), table in other._tables.items():
            place = (self._number(other._key(unit)), period)
            if place in self._tables:
                self._tables[place].merge(table)
            else:
                self._tables[place] = table
            self._shown.setdefault(place, []).extend(other._shown.get((unit, period), []))
        self._level = max(self._level, other._level)
        self._thin()
        if self._dense_bytes() > _DENSE_BYTES:
            self.put_aside()

    def _number(self, key: Key) -> int:
        return 0 if self._keys is None else self._keys.number(key)

    def _add_chunk(self, chunk: Chunk, index: int, met: dict[int, int], keep_run: bool) -> None:
        self.early.add(Tally(chunk.rows, chunk.filtered, dict(chunk.refused)))
        rows = chunk.x.shape[0]
        # Rows whose unit and period become known are counted there.
        self.early.read -= rows
        if not rows:
            return
        extra = {name: chunk.extra[n] for name, n in self._names.items()}
        units = self._units(extra)
        numbers, missing = self._periods(extra)
        self._offset = offset_of(self._order.first_task + index)
        block = chunk.extra[0] if self._dealer is not None else None
        for unit, own in _split(units):
            start = met.get(unit, 0)
            count = rows if own is None else own.size
            met[unit] = start + count
            few = _Few(
                chunk.x, chunk.y, chunk.weight, chunk.count, block,
                np.arange(start, start + count),
                chunk.positions if own is None and chunk.positions is not None
                else np.arange(start, start + count),
            )  # fmt: skip
            if own is not None:
                # Places are given to the unit's rows already.
                few = few.taken(own, placed=True)
            self._add_unit(unit, few, numbers if own is None or numbers is None else numbers[own],
                           missing if own is None or missing is None else missing[own],
                           index, keep_run)  # fmt: skip

    def _units(self, extra: Mapping[str, pa.Array]) -> int | Integers:
        """The unit of every row; one number where all are of one."""
        if self._grouping is None or self._keys is None:
            return 0
        check_alike(self._grouping, self._basis.by_types, extra)
        codes = self._keys.codes([extra[name] for name in self._grouping.columns])
        first = int(codes[0])
        return first if bool((codes == first).all()) else codes.astype(np.int64)

    def _periods(
        self, extra: Mapping[str, pa.Array]
    ) -> tuple[Integers | None, NDArray[np.bool_] | None]:
        """The number of every row's period, and which rows have none."""
        if self._coder is None:
            return None, None
        codes, known = self._coder.code(extra[self._coder.block.column])
        missing = codes < 0
        # The last place is that of rows without a period.
        numbers = np.array([*known, 0], np.int64)[codes]
        return numbers, missing if missing.any() else None

    def _add_unit(
        self, unit: int, few: _Few, numbers: Integers | None,
        missing: NDArray[np.bool_] | None, index: int, keep_run: bool,
    ) -> None:  # fmt: skip
        bounds = self._basis.bounds
        if bounds is not None:
            kept = self._within(few, bounds)
            if kept is not None:
                few = few.taken(kept)
                numbers = None if numbers is None else numbers[kept]
                missing = None if missing is None else missing[kept]
        if numbers is None:
            self._add_rows(unit, None, few, index, keep_run)
            return
        if missing is not None and missing.any():
            self._drop("period null", int(np.count_nonzero(missing)))
            kept = np.flatnonzero(~missing)
            few, numbers = few.taken(kept), numbers[kept]
        if self._forgotten is not None and numbers.size and numbers.min() < self._forgotten:
            kept = np.flatnonzero(numbers >= self._forgotten)
            self._drop("period forgotten", numbers.size - kept.size)
            few, numbers = few.taken(kept), numbers[kept]
        for period, start, stop, order in self._stretches(numbers, few):
            part = few.taken(order) if order is not None else few
            self._add_rows(unit, period, part.cut(start, stop), index, keep_run)

    def _within(self, few: _Few, bounds: tuple[float, float]) -> Integers | None:
        """Places of the rows within the caller's range; None for all of them."""
        x = few.x
        if self._plan.scale == "log":
            x = np.log(x, where=x > 0.0, out=np.full(x.shape[0], np.nan))
        # What is not a number is refused for that reason later.
        usable = np.isfinite(few.x) & np.isfinite(few.y)
        below, above = usable & (x < bounds[0]), usable & (x > bounds[1])
        if not (below.any() or above.any()):
            return None
        self._drop("x below range", int(np.count_nonzero(below)))
        self._drop("x above range", int(np.count_nonzero(above)))
        return np.flatnonzero(~(below | above))

    def _drop(self, reason: str, rows: int) -> None:
        self.early.read += rows
        self.early.refuse(reason, rows)

    def _stretches(
        self, numbers: Integers, few: _Few
    ) -> Iterator[tuple[int, int, int, Integers | None]]:
        """Period, first and last row (exclusive) of each stretch, and the order of the rows."""
        if not numbers.size:
            return
        order = None
        starts = _starts(numbers)
        if starts.size > _MANY_STRETCHES:
            # Periods interleaved row by row. Rows of one run stay together.
            order = np.lexsort((numbers, few.number // self._plan.rows_per_run))
            numbers = numbers[order]
            starts = _starts(numbers)
        stops = np.append(starts[1:], numbers.size)
        for start, stop in zip(starts.tolist(), stops.tolist(), strict=True):
            period = int(numbers[start])
            if self._order.only is None or period in self._order.only:
                yield period, start, stop, order

    def _add_rows(
        self, unit: int, period: PeriodNumber, few: _Few, index: int, keep_run: bool
    ) -> None:
        if self._order.only is not None and period not in self._order.only:
            return
        place = (unit, period)
        table = self._tables.setdefault(place, BinTable(self._plan))
        refused = table.tally.refused
        before = refused.get("x below range", 0) + refused.get("x above range", 0)
        length = self._plan.rows_per_run
        if self._dealer is not None or _follow(few.number):
            table.update(few.chunk(), self._order.first_task + index, int(few.number[0]),
                         self._dealer)  # fmt: skip
        else:
            # Rows were taken out between these: each run is dealt by the number of its first row.
            starts = _starts(few.number // length)
            for start, stop in zip(starts, [*starts[1:], few.number.size], strict=True):
                first = int(few.number[start]) // length * length
                table.update(few.cut(start, stop).chunk(), self._order.first_task + index, first)
        if refused.get("x below range", 0) + refused.get("x above range", 0) > before:
            self._note_beyond(few)
        self._keep_rows(place, few, keep_run and place not in self._with_run)
        if self._dense_bytes() > _DENSE_BYTES:
            self.put_aside()

    def _note_beyond(self, few: _Few) -> None:
        x = few.x
        if self._plan.scale == "log":
            x = np.log(x, where=x > 0.0, out=np.full(x.shape[0], np.nan))
        usable = np.isfinite(x) & np.isfinite(few.y)
        self.beyond.add(x[usable & ((x < self._grid.origin) | (x >= self._grid.high))])

    def _keep_rows(self, place: tuple[int, PeriodNumber], few: _Few, keep_run: bool) -> None:
        kept = self._shown.setdefault(place, [])
        marks = few.number + self._offset
        own = np.flatnonzero((marks & ((1 << self._level) - 1)) == 0)
        kept.append(self._rows(few, own, levels_of(marks[own]), 0 * few.place[own]))
        self._shown_rows += own.size
        while self._shown_rows > 4 * shown_cap(self._basis):
            self._level += 1
            self._thin()
        if keep_run:
            self._with_run.add(place)
            own = np.arange(min(few.x.size, run_rows(self._basis)))
            kept.append(self._rows(few, own, np.full(own.size, RUN, np.int16), few.place[own]))

    def _rows(self, few: _Few, own: Integers, level: NDArray[np.int16], place: Integers) -> Rows:
        unit = np.zeros(own.size, np.int32)
        file = np.full(own.size, self._order.ordinal, np.int32)
        return Rows(unit, file, level, place, few.x[own], few.y[own])

    def _thin(self) -> None:
        self._shown_rows = 0
        for place, several in self._shown.items():
            rows = Rows.joined(several)
            rows = rows.picked((rows.level == RUN) | (rows.level >= self._level))
            self._shown[place] = [rows]
            self._shown_rows += int(np.count_nonzero(rows.level != RUN))

    def _dense_bytes(self) -> int:
        return sum(
            len(table.sums) * self._plan.bins * table.slots * 8 for table in self._tables.values()
        )

    def put_aside(self) -> None:
        """Turn the dense tables into cells."""
        slots = PLAIN_SLOTS if self._basis.slots == 7 else WEIGHTED_SLOTS
        for place in sorted(self._tables, key=lambda one: sort_key((one[1], one[0]))):
            unit, period = place
            table = self._tables[place]
            low, high = table.extent.tolist()
            blocks = {_block_number(key) for key in table.blocks}
            group = Group(low, high, table.tally, blocks)
            part = Part(
                {self._key(unit): group},
                _cells_of(table, slots, self._grid.first),
                Rows.joined(self._shown.get(place) or [Rows.none()]),
            )
            self.aside.setdefault(period, []).append(part)
        for period, parts in self.aside.items():
            if len(parts) > 1:
                self.aside[period] = [merge_parts(parts)]
        self._tables, self._shown = {}, {}
        self._shown_rows = 0

    def _key(self, unit: int) -> Key:
        return () if self._keys is None else self._keys.keys[unit]


@dataclass(frozen=True)
class _Few:
    """Some rows of a chunk, with what is known of them."""

    x: Floats
    y: Floats
    weight: Floats | None
    count: Floats | None
    block: pa.Array | None
    number: Integers  # among the unit's rows of the row group
    place: Integers  # the same with dropped rows counted, where that is known

    def taken(self, own: Integers, placed: bool = False) -> _Few:
        """Return the rows at some places; `placed` when numbers and places are theirs already."""
        import pyarrow as pa

        return _Few(
            self.x[own], self.y[own], None if self.weight is None else self.weight[own],
            None if self.count is None else self.count[own],
            None if self.block is None else self.block.take(pa.array(own)),
            self.number if placed else self.number[own],
            self.place if placed else self.place[own],
        )  # fmt: skip

    def cut(self, start: int, stop: int) -> _Few:
        """Return consecutive rows."""
        if start == 0 and stop == self.x.size:
            return self
        own = slice(start, stop)
        return _Few(
            self.x[own], self.y[own], None if self.weight is None else self.weight[own],
            None if self.count is None else self.count[own],
            None if self.block is None else self.block.slice(start, stop - start),
            self.number[own], self.place[own],
        )  # fmt: skip

    def chunk(self) -> Chunk:
        """Return the rows as a chunk whose only extra column is the block."""
        extra = () if self.block is None else (self.block,)
        return Chunk(self.x, self.y, self.weight, self.count, extra, self.x.size, 0)


def _split(units: int | Integers) -> Iterator[tuple[int, Integers | None]]:
    """Each unit with the places of its rows, in row order; None where all rows are of one."""
    if isinstance(units, int):
        yield units, None
        return
    # Small integers sort in linear time.
    small = units.astype(np.int16) if units.max() < 2**15 else units
    order = np.argsort(small, kind="stable")
    sorted_ = units[order]
    starts = _starts(sorted_)
    for start, stop in zip(starts.tolist(), [*starts[1:].tolist(), sorted_.size], strict=True):
        yield int(sorted_[start]), order[start:stop]


def _follow(numbers: Integers) -> bool:
    """Tell whether ascending numbers have no gap."""
    return int(numbers[-1]) - int(numbers[0]) + 1 == numbers.size


def _starts(values: Integers) -> Integers:
    return np.concatenate(([0], np.flatnonzero(values[1:] != values[:-1]) + 1))


def _cells_of(table: BinTable, slots: Sequence[int], first: int) -> Cells:
    folds, bins, sums = [], [], []
    for fold in sorted(table.sums):
        used = np.flatnonzero(table.sums[fold][:, 0])
        folds.append(np.full(used.size, fold, np.int32))
        bins.append(used + first)
        sums.append(table.sums[fold][used][:, np.array(slots)])
    if not bins:
        return Cells.none(len(slots))
    of_cell = np.concatenate(folds)
    unit = np.zeros(of_cell.size, np.int32)
    return Cells(unit, of_cell, np.concatenate(bins), np.concatenate(sums))


def _block_number(key: Any) -> int:
    """A number for a block's key: of blocks the store needs to know how many there are."""
    if isinstance(key, int) and not isinstance(key, bool) and -(2**63) <= key < 2**63:
        return key
    digest = hashlib.blake2b(str(key).encode(), digest_size=8).digest()
    return int.from_bytes(digest, "little", signed=True)
