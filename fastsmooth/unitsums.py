"""Bin moments of many units in one pool of memory: made empty, updated, merged, finished.

What a unit's table holds here is, to the last bit, what `BinTable` would hold had the unit's rows
been counted alone by the same plan, task by task.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable, Tally
from fastsmooth.blocks import MOST_KEYS, Dealer, merge_keys
from fastsmooth.grouping import Grouping, Key, Keys
from fastsmooth.plan import Plan, Sample, on_scale

if TYPE_CHECKING:
    from fastsmooth.source import Chunk, Task

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
PlanFor = Callable[[Key], Plan | None]

_PILOT = 7
_NULLS = ("x null", "y null", "weight null", "count null")
_LEAST_BINS = 4096
# Pairs of units and blocks up to this number are noted by flags.
_LARGEST_TABLE = 1 << 22


class TooManyUnits(Exception):  # noqa: N818 - it asks for another plan, it refuses nothing
    """More units turned up than memory was planned for."""


@dataclass(frozen=True)
class Ways:
    """How rows of many units are counted.

    Attributes
    ----------
    grouping : Grouping
        What tells units apart.
    base : Plan
        What the plans of all units share: folds, runs, scale, block, columns.
    plan_for : callable
        Gives the plan of a unit; None leaves its rows out.
    dealer : Dealer or None
        Deals blocks to folds; None deals runs of a unit's own rows.
    most_units : int or None
        More units than this are too many.
    room : int
        Bins that all units together may have, as far as is known.
    keep_bytes : int
        Memory that sums of groups may take before they are added up.
    sampled_rows : int
        The first rows of each unit in each task that are kept as they are.
    stride : int
        How many rows apart rows are kept for pictures.
    """

    grouping: Grouping
    base: Plan
    plan_for: PlanFor
    dealer: Dealer | None
    most_units: int | None
    room: int
    keep_bytes: int
    sampled_rows: int
    stride: int

    @property
    def slots(self) -> int:
        """Sums per bin, padding included."""
        return 16 if self.base.columns.weight is not None else 8


class _Rows:
    """Some rows of all units, as they are met."""

    def __init__(self, *kinds: type) -> None:
        self._kinds = kinds
        self._parts: list[tuple[NDArray[Any], ...]] = []

    def add(self, *columns: NDArray[Any]) -> None:
        if columns[0].size:
            self._parts.append(columns)

    def extend(self, other: _Rows, numbers: Integers) -> None:
        """Add another's rows; `numbers` gives the unit number here for each of the other's."""
        self._parts += [(numbers[codes], *columns) for codes, *columns in other._parts]

    def columns(self) -> tuple[NDArray[Any], ...]:
        """The rows sorted by unit, in the order in which they came."""
        if not self._parts:
            return tuple(np.empty(0, kind) for kind in self._kinds)
        joined = [np.concatenate(parts) for parts in zip(*self._parts, strict=True)]
        order = np.argsort(joined[0], kind="stable")
        return tuple(column[order] for column in joined)


class UnitSums:
    """Sums of many units for some folds.

    Parameters
    ----------
    ways : Ways
        How rows are counted.
    folds : sequence of int
        The folds that rows may go to, ascending.
    room : int
        Bins to make room for at first.

    Attributes
    ----------
    keys : list of tuple
        The units met, in the order in which they were met.
    plans : list of Plan or None
        Plan of each.
    tally : Tally
        All rows read, and those that were filtered or hold a null.
    blocks : dict of int to set
        Keys of the blocks that each unit has met, by its number.
    bin_counts : dict of int to (bins, slots) float64
        See `count_bins`.
    """

    def __init__(self, ways: Ways, folds: Sequence[int], room: int = 0) -> None:
        self.ways = ways
        self.folds = tuple(folds)
        self._room = room
        self.tally = Tally()
        self._keys = Keys(ways.grouping)
        self.plans: list[Plan | None] = []
        self._slot_of = np.full(ways.base.folds + 1, -1, np.int32)
        self._slot_of[list(self.folds)] = np.arange(len(self.folds))
        self._pool = np.zeros((len(self.folds), 0, ways.slots))
        self._filled = 0
        self._start = np.empty(0, np.int64)
        self._bins = np.empty(0)
        self._wanted = np.empty(0, bool)
        self._origin = np.empty(0)
        self._bins_per_unit = np.empty(0)
        self._pilot = np.empty(0)
        self._extent = np.empty((0, 2))
        self._refused = np.empty((0, 0), np.int64)
        self._read = np.empty(0, np.int64)
        self._seen = np.empty(0, np.int64)
        self._early = np.empty(0, np.int64)
        self._others: dict[str, Integers] = {}
        self.blocks: dict[int, set[Any]] = {}
        self.bin_counts: dict[int, Floats] = {}
        self._task = -1
        self._shown = _Rows(np.int64, np.float64, np.float64)
        self._sample = _Rows(np.int64, np.float64, np.float64, np.int64, np.int64)

    @property
    def keys(self) -> list[Key]:
        """The units met."""
        return self._keys.keys

    @property
    def touched_bytes(self) -> float:
        """Memory that rows have reached: no more bins than rows."""
        bins = np.minimum(self._bins * len(self.folds), self._read)
        return float(bins.sum()) * self.ways.slots * self._pool.itemsize

    @property
    def extents(self) -> Floats:
        """Lowest and highest x accepted of each unit, on the scale, (units, 2)."""
        return self._extent

    def kept(self) -> tuple[tuple[NDArray[Any], ...], tuple[NDArray[Any], ...]]:
        """Return rows for pictures (unit, x, y) and early ones (and task, place), by unit."""
        return self._shown.columns(), self._sample.columns()

    def forget_pilots(self) -> None:
        """Release what only adding rows needs."""
        self._pilot = np.empty(0)

    def update(self, chunk: Chunk, task: Task) -> None:
        """Add the rows of one chunk; chunks of a task come one after the other.

        Raises
        ------
        TooManyUnits
            More units have been met than memory was planned for.
        """
        from fastsmooth.kernels import grouped

        if task.index != self._task:
            self._task = task.index
            self._seen[:] = 0
            self._early[:] = 0
        self.tally.add(Tally(chunk.rows, chunk.filtered, dict(chunk.refused)))
        code = self._codes(chunk.units)
        for reason, units in chunk.refused_units.items():
            self._refuse(reason, self._codes(units))
        before = self._seen.copy()
        slot = np.empty(code.shape[0], np.int32)
        if self.ways.dealer is None:
            grouped.deal_runs(code, self.ways.base.rows_per_run, self._turns(), self._seen, slot)
        else:
            folds = self._deal_blocks(chunk, code)
            slot = np.where(code < 0, np.int32(-1), self._slot_of[folds])
            self._seen += np.bincount(code + 1, minlength=len(self.keys) + 1)[1:]
            self._refuse("block null", code[folds < 0])
        self._read += self._seen - before
        self._keep_early(chunk, code, before)
        stride = self.ways.stride
        self._shown.add(
            code[::stride].astype(np.int64), chunk.x[::stride].copy(), chunk.y[::stride].copy()
        )
        self._accumulate(chunk, code, slot)

    def _codes(self, units: Sequence[Any]) -> NDArray[np.int32]:
        code = self._keys.codes(units)
        if len(self.keys) > len(self.plans):
            self._add_units()
        return code if self._wanted.all() else np.where(self._wanted[code], code, np.int32(-1))

    def _add_units(self) -> None:
        """Make room for the units that have been met since."""
        from fastsmooth.kernels.accumulate import REASONS

        if self.ways.most_units is not None and len(self.keys) > self.ways.most_units:
            raise TooManyUnits
        new = [self.ways.plan_for(key) for key in self.keys[len(self.plans) :]]
        self.plans += new
        known = [plan for plan in new if plan is not None]
        bins = np.array([0 if plan is None else plan.bins for plan in new], np.int64)
        start = self._filled + np.concatenate(([0], np.cumsum(bins)))
        self._filled = int(start[-1])
        self._start = np.append(self._start, start[:-1])
        self._bins = np.append(self._bins, bins.astype(np.float64))
        self._wanted = np.append(self._wanted, [plan is not None for plan in new])
        origin = [0.0 if plan is None else plan.origin for plan in new]
        per_unit = [0.0 if plan is None else 1.0 / plan.width for plan in new]
        self._origin = np.append(self._origin, origin)
        self._bins_per_unit = np.append(self._bins_per_unit, per_unit)
        if self.folds:
            self._pilot = np.concatenate([self._pilot, *(plan.pilot_per_bin for plan in known)])
        n = len(new)
        self._extent = np.concatenate([self._extent, np.tile([np.inf, -np.inf], (n, 1))])
        self._refused = np.concatenate(
            [self._refused.reshape(-1, len(REASONS)), np.zeros((n, len(REASONS)), np.int64)]
        )
        none = np.zeros(n, np.int64)
        self._read = np.append(self._read, none)
        self._seen = np.append(self._seen, none)
        self._early = np.append(self._early, none)
        self._others = {k: np.append(v, none) for k, v in self._others.items()}
        if self._filled > self._pool.shape[1]:
            former = self._pool
            # Memory that no row reaches is never touched, and so costs nothing.
            room = max(self._room, _LEAST_BINS, self._filled + self._filled // 2)
            self._pool = np.zeros((former.shape[0], room, former.shape[2]))
            before = int(start[0])
            self._pool[:, :before] = former[:, :before]

    def _turns(self) -> NDArray[np.int32]:
        """Slots that the runs of a unit in the task at hand go through."""
        base = self.ways.base
        folds = [base.fold_of_run(self._task, run) for run in range(base.folds_per_task)]
        return self._slot_of[folds]

    def _deal_blocks(self, chunk: Chunk, code: NDArray[np.int32]) -> Integers:
        """Return the fold of each row, and note which blocks each unit has met."""
        dealer = self.ways.dealer
        assert dealer is not None
        codes, keys = dealer.code(chunk.extra[0])
        count = len(keys)
        pairs = code.astype(np.int64) * count + codes
        pairs = pairs[(code >= 0) & (codes >= 0)]
        if len(self.keys) * count <= _LARGEST_TABLE:
            flags = np.zeros(len(self.keys) * count, bool)
            flags[pairs] = True
            met = np.flatnonzero(flags)
        else:
            met = np.unique(pairs)
        for pair in met.tolist():
            unit, block = divmod(pair, count)
            own = self.blocks.setdefault(unit, set())
            if len(own) < MOST_KEYS:
                own.add(keys[block])
        return dealer.folds_of(keys)[codes]

    def _refuse(self, reason: str, code: NDArray[np.int32]) -> None:
        """Count refused rows of each unit."""
        if code.size:
            counts = np.bincount(code + 1, minlength=len(self.keys) + 1)[1:]
            self._others[reason] = self._others.get(reason, np.zeros_like(self._read)) + counts

    def _keep_early(self, chunk: Chunk, code: NDArray[np.int32], before: Integers) -> None:
        """Keep the first rows of each unit in the task, with their places among its rows."""
        from fastsmooth.kernels import grouped

        quota = self.ways.sampled_rows
        if not ((before < quota) & (self._seen > before)).any():
            return
        places = np.empty(code.shape[0], np.int64)
        first = self._early.copy()
        rows = places[: grouped.early_rows(code, quota, self._early, places)]
        codes = code[rows].astype(np.int64)
        # Rank among the rows of one unit, in row order.
        order = np.argsort(codes, kind="stable")
        ends = np.concatenate(([0], np.cumsum(np.bincount(codes, minlength=first.size))))
        rank = np.empty(codes.size, np.int64)
        rank[order] = np.arange(codes.size) - ends[codes[order]]
        run = np.full(rows.size, self._task)
        self._sample.add(codes, chunk.x[rows], chunk.y[rows], run, first[codes] + rank)

    def _accumulate(self, chunk: Chunk, code: NDArray[np.int32], slot: NDArray[np.int32]) -> None:
        from fastsmooth.kernels import grouped

        rows = [chunk.x, chunk.y]
        weighted = self.ways.base.columns.weight is not None
        if weighted:
            rows.append(chunk.weight if chunk.weight is not None else np.ones(code.size))
        if chunk.count is not None:
            rows.append(chunk.count)
        elif weighted:
            rows.append(np.ones(code.size))
        if self.ways.base.scale == "log":
            none = chunk.x <= 0.0
            if none.any():
                self._refuse("x not positive", code[none & (slot >= 0)])
                code, slot = code[~none], slot[~none]
                rows = [one[~none] for one in rows]
            rows[0] = np.log(rows[0])
        accumulate = (
            grouped.accumulate_units_weighted if weighted
            else grouped.accumulate_units if chunk.count is None
            else grouped.accumulate_units_counted
        )  # fmt: skip
        accumulate(
            self._pool, slot, code, *rows, self._start, self._bins, self._origin,
            self._bins_per_unit, self._pilot, self._extent, self._refused,
        )  # fmt: skip

    def merge(self, other: UnitSums) -> None:
        """Add another's sums, whose folds are among these; the other is left as it was.

        Raises
        ------
        TooManyUnits
            Together there are more units than memory was planned for.
        """
        from fastsmooth.kernels import grouped

        numbers = self.note(other)
        grouped.merge_units(
            self._pool, other._pool, self._slot_of[list(other.folds)].astype(np.int64),
            self._start[numbers], other._start, other._bins.astype(np.int64),
        )  # fmt: skip

    def note(self, other: UnitSums) -> Integers:
        """Take over everything of another but its sums; return the number here of its units."""
        numbers = np.array([self._keys.number(key) for key in other.keys], np.int64)
        if len(self.keys) > len(self.plans):
            self._add_units()
        self.tally.add(other.tally)
        if other.keys:
            low, high = self._extent[numbers].T
            self._extent[numbers, 0] = np.minimum(low, other._extent[:, 0])
            self._extent[numbers, 1] = np.maximum(high, other._extent[:, 1])
            self._refused[numbers] += other._refused
            self._read[numbers] += other._read
        for reason, counts in other._others.items():
            mine = self._others.setdefault(reason, np.zeros_like(self._read))
            mine[numbers] += counts
        for unit, blocks in other.blocks.items():
            number = int(numbers[unit])
            self.blocks[number] = merge_keys(self.blocks.get(number, set()), blocks)
        padded = np.append(numbers, -1)
        self._shown.extend(other._shown, padded)
        self._sample.extend(other._sample, padded)
        return numbers

    def count_bins(self) -> None:
        """Note the rows of each fold and bin over all units, which must share their bins."""
        bins, units = self.ways.base.bins, len(self.keys)
        for slot, fold in enumerate(self.folds if units else ()):
            sums = np.zeros((bins, self.ways.slots))
            own = self._pool[slot, : self._filled].reshape(units, bins, -1)
            for column in (0, 8) if self.ways.slots == 16 else (0,):
                sums[:, column] = own[:, :, column].sum(axis=0)
            if sums[:, 0].any():
                self.bin_counts[fold] = sums

    def part(self, number: int, fold: int) -> Floats | None:
        """Return the sums of a unit in a fold, (bins, slots); None if there is no row."""
        plan, start = self.plans[number], int(self._start[number])
        assert plan is not None
        sums = self._pool[self._slot_of[fold], start : start + plan.bins]
        if not sums[:, 0].any():
            return None
        sums[:, _PILOT] = plan.pilot_per_bin
        return sums

    def tally_of(self, number: int) -> Tally:
        """Return what became of the rows of a unit, those that met the row filter."""
        from fastsmooth.kernels.accumulate import REASONS

        tally = Tally(int(self._read[number]))
        for reason, counts in self._others.items():
            tally.refuse(reason, int(counts[number]))
            if reason in _NULLS:
                tally.read += int(counts[number])
        for reason, rows in zip(REASONS, self._refused[number].tolist(), strict=True):
            tally.refuse(reason, rows)
        return tally


class CountedUnits:
    """The tables of all units: groups of rows are taken one after the other, then finished.

    Parameters
    ----------
    ways : Ways
        How rows are counted.
    """

    def __init__(self, ways: Ways) -> None:
        self.ways = ways
        # Everything but the sums, which stay in parts while memory allows: to add them all up
        # would cost as much as to read a third of the rows, and a unit's rows may be in one part.
        self._all = UnitSums(ways, ())
        self._parts: list[UnitSums] = []
        self._together = False

    def take(self, part: UnitSums, alone: bool) -> None:
        """Add the sums of one group; `alone` if no other group has rows of the same folds.

        Raises
        ------
        TooManyUnits
            Together there are more units than memory was planned for.
        """
        self._all.note(part)
        self._parts.append(part)
        if alone:
            return
        if self._together or sum(one.touched_bytes for one in self._parts) > self.ways.keep_bytes:
            if not self._together:
                folds = range(self.ways.base.folds)
                self._parts.insert(0, UnitSums(self.ways, folds, self.ways.room))
                self._together = True
            # In the order of the groups: then a unit's sums are the same bits either way.
            while len(self._parts) > 1:
                self._parts[0].merge(self._parts.pop(1))

    def finish(self) -> None:
        """Sort what was kept by unit; nothing is taken any more."""
        self._numbers = [
            {key: number for number, key in enumerate(part.keys)} for part in self._parts
        ]
        self._number = {key: number for number, key in enumerate(self._all.keys)}
        for part in self._parts:
            part.forget_pilots()
        ends = np.arange(len(self._all.keys) + 1)
        self._shown, self._sample = self._all.kept()
        self._shown_ends = np.searchsorted(self._shown[0], ends)
        self._sample_ends = np.searchsorted(self._sample[0], ends)

    def release(self) -> None:
        """Give the memory of the sums back; no table can be asked for any more."""
        self._parts.clear()
        self._numbers.clear()

    @property
    def tally(self) -> Tally:
        """What became of all rows read."""
        tally = Tally(self._all.tally.read, self._all.tally.filtered)
        for reason, rows in self._all.tally.refused.items():
            tally.refuse(reason, rows)
        for number in range(len(self._all.keys)):
            for reason, rows in self._all.tally_of(number).refused.items():
                if reason not in _NULLS:  # those are in the chunks' own counts
                    tally.refuse(reason, rows)
        return tally

    @property
    def keys(self) -> list[Key]:
        """The units that were counted."""
        plans = zip(self._all.keys, self._all.plans, strict=True)
        return [key for key, plan in plans if plan is not None]

    def pooled(self) -> BinTable:
        """Return one table of all units, which must share their bins: weights and counts alone."""
        table = BinTable(self.ways.base)
        for part in self._parts:
            if not part.bin_counts:
                part.count_bins()
            for fold, counts in part.bin_counts.items():
                table.sums[fold] = table.sums[fold] + counts if fold in table.sums else counts
        table.tally = self.tally
        if self._all.keys:
            extent = self._all.extents
            table.extent = np.array([extent[:, 0].min(), extent[:, 1].max()])
        for blocks in self._all.blocks.values():
            table.blocks = merge_keys(table.blocks, blocks)
        return table

    def table(self, key: Key) -> BinTable:
        """Return the table of a unit."""
        number = self._number[key]
        plan = self._all.plans[number]
        assert plan is not None
        table = BinTable(plan)
        own: set[int] = set()
        for part, numbers in zip(self._parts, self._numbers, strict=True):
            if key in numbers:
                for fold in part.folds:
                    sums = part.part(numbers[key], fold)
                    if sums is None:
                        continue
                    if fold not in table.sums:
                        table.sums[fold] = sums
                        continue
                    if fold not in own:
                        table.sums[fold] = table.sums[fold].copy()
                        own.add(fold)
                    # Sums that overflow are refused once all rows are in.
                    with np.errstate(over="ignore", invalid="ignore"):
                        table.sums[fold] += sums
                    table.sums[fold][:, _PILOT] = plan.pilot_per_bin
        table.extent = self._all.extents[number].copy()
        table.tally = self._all.tally_of(number)
        table.blocks = self._all.blocks.get(number, set())
        return table

    def tables(self) -> dict[Key, BinTable]:
        """Return the table of each unit."""
        return {key: self.table(key) for key in self.keys}

    def shown(self, key: Key) -> Floats:
        """Return x and y of a thin selection of a unit's rows, (2, n)."""
        number = self._number[key]
        rows = slice(*self._shown_ends[number : number + 2])
        return np.stack([self._shown[1][rows], self._shown[2][rows]])

    def sample(self, key: Key) -> Sample:
        """Return the first rows of a unit in each task, those that can be used."""
        number = self._number[key]
        rows = slice(*self._sample_ends[number : number + 2])
        _, x, y, task, place = (column[rows] for column in self._sample)
        x, y, usable = on_scale(x, y, self.ways.base.scale)
        _, run = np.unique(task[usable], return_inverse=True)
        return Sample(x[usable], y[usable], run, place[usable])
