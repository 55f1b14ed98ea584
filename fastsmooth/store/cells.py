"""The sums of a store: non-empty bins only, per unit and fold, and the bytes that hold them.

A part is what some files hold of one period. Parts of one period are merged by addition and are
never subtracted from.
"""

from __future__ import annotations

import io
import json
from collections.abc import Sequence
from dataclasses import dataclass, field
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Tally
from fastsmooth.fleet import sort_key
from fastsmooth.store.grid import Grid

if TYPE_CHECKING:
    import pyarrow as pa

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]
Key = tuple[Any, ...]

# Slots of a bin table that are sums: the pilot (7) and the padding (15) are not.
PLAIN_SLOTS = (0, 1, 2, 3, 4, 5, 6)
WEIGHTED_SLOTS = (*PLAIN_SLOTS, 8, 9, 10, 11, 12, 13, 14)
PLAIN_NAMES = ("w", "wv", "wv2", "we", "wve", "wv2e", "we2")
WEIGHTED_NAMES = (*PLAIN_NAMES, "count", "w2", "w2v", "w2v2", "w2e", "w2ve", "w2e2")
RUN = -1


@dataclass
class Group:
    """What is known of the rows of one unit besides their sums.

    Attributes
    ----------
    low, high : float
        Lowest and highest x, on the plan's scale; (infinity, -infinity) without rows.
    tally : Tally
        Rows that reached the unit, and those refused there.
    blocks : set of int
        Numbers of the blocks met.
    """

    low: float = np.inf
    high: float = -np.inf
    tally: Tally = field(default_factory=Tally)
    blocks: set[int] = field(default_factory=set)

    def add(self, other: Group) -> None:
        """Add what is known of more rows of the same unit."""
        self.low, self.high = min(self.low, other.low), max(self.high, other.high)
        self.tally.add(other.tally)
        self.blocks |= other.blocks


@dataclass(frozen=True)
class Cells:
    """Sums of non-empty bins, sorted by unit, fold and bin.

    Attributes
    ----------
    unit, fold : (n,) int32
        Place of the unit in the part's list, and fold.
    bin : (n,) int64
        Number of the bin; see `fastsmooth.store.grid`.
    sums : (n, 7 or 14) float64
        In the order of `PLAIN_NAMES` or `WEIGHTED_NAMES`.
    """

    unit: NDArray[np.int32]
    fold: NDArray[np.int32]
    bin: Integers
    sums: Floats

    @classmethod
    def none(cls, slots: int) -> Cells:
        """Return no cells."""
        empty = np.empty(0, np.int32)
        return cls(empty, empty, np.empty(0, np.int64), np.empty((0, slots)))

    @classmethod
    def added(cls, parts: Sequence[Cells]) -> Cells:
        """Return the sum of several, added in the order given."""
        unit, fold, bin_, sums = (
            np.concatenate([getattr(one, name) for one in parts])
            for name in ("unit", "fold", "bin", "sums")
        )
        # A stable sort keeps the order of the parts, so that equal parts give equal bits.
        order = np.lexsort((bin_, fold, unit))
        return cls(unit[order], fold[order], bin_[order], sums[order])._joined()

    def _joined(self) -> Cells:
        """Add up neighbours of the same unit, fold and bin."""
        if not self.bin.size:
            return self
        same = (
            (self.unit[1:] == self.unit[:-1])
            & (self.fold[1:] == self.fold[:-1])
            & (self.bin[1:] == self.bin[:-1])
        )
        if not same.any():
            return self
        starts = np.concatenate(([0], np.flatnonzero(~same) + 1))
        # Sums that overflow are refused when a curve is made.
        with np.errstate(over="ignore", invalid="ignore"):
            sums = np.add.reduceat(self.sums, starts, axis=0)
        return Cells(self.unit[starts], self.fold[starts], self.bin[starts], sums)

    def regridded(self, old: Grid, new: Grid) -> Cells:
        """Return the same rows on a coarser or moved grid.

        The pilot is exchanged first, while the bins are still the old ones: e' = e + d with
        d = old pilot - new pilot. Then neighbours merge, v' = (v + s) / 2 with s = -1/2 on the
        left and 1/2 on the right.
        """
        doublings = new.exponent - old.exponent
        with np.errstate(over="ignore", invalid="ignore"):
            sums = self.sums.copy()
            d = old.pilot_of(self.bin) - new.pilot_of(_shifted(self.bin, doublings))
            _exchange_pilot(sums, d)
            made = Cells(self.unit, self.fold, self.bin, sums)
            for _ in range(doublings):
                sums = made.sums.copy()
                _halve(sums, np.where(made.bin % 2 == 0, -0.5, 0.5))
                made = Cells(made.unit, made.fold, made.bin >> 1, sums)._joined()
        return made


def _shifted(bins: Integers, doublings: int) -> Integers:
    return bins >> min(doublings, 63)


def _exchange_pilot(sums: Floats, d: Floats) -> None:
    if not d.any():
        return
    sums[:, 6] += 2.0 * d * sums[:, 3] + d * d * sums[:, 0]
    for e, plain in ((3, 0), (4, 1), (5, 2)):
        sums[:, e] += d * sums[:, plain]
    if sums.shape[1] > 7:
        sums[:, 13] += 2.0 * d * sums[:, 11] + d * d * sums[:, 8]
        for e, plain in ((11, 8), (12, 9)):
            sums[:, e] += d * sums[:, plain]


def _halve(sums: Floats, s: Floats) -> None:
    triples = [(0, 1, 2), (3, 4, 5)]
    if sums.shape[1] > 7:
        triples.append((8, 9, 10))
        sums[:, 12] = 0.5 * (sums[:, 12] + s * sums[:, 11])
    for zero, one, two in triples:
        sums[:, two] = 0.25 * (sums[:, two] + 2.0 * s * sums[:, one] + s * s * sums[:, zero])
        sums[:, one] = 0.5 * (sums[:, one] + s * sums[:, zero])


@dataclass(frozen=True)
class Rows:
    """Some of the rows themselves, for pictures and for the likeness of neighbours.

    Attributes
    ----------
    unit, file : (n,) int32
        Place of the unit in the part's list, and ordinal of the file in the ledger.
    level : (n,) int16
        `RUN` for consecutive rows of a file; else a thin selection: of all rows of the store,
        one in two to the power l has a level of l or more.
    place : (n,) int64
        Place in the file's run; 0 in the thin selection.
    x, y : (n,) float64
        As read, before a log scale.
    """

    unit: NDArray[np.int32]
    file: NDArray[np.int32]
    level: NDArray[np.int16]
    place: Integers
    x: Floats
    y: Floats

    @classmethod
    def none(cls) -> Rows:
        """Return no rows."""
        whole = np.empty(0, np.int32)
        return cls(whole, whole, np.empty(0, np.int16), np.empty(0, np.int64), np.empty(0),
                   np.empty(0))  # fmt: skip

    @classmethod
    def joined(cls, parts: Sequence[Rows]) -> Rows:
        """Return several after one another."""
        names = ("unit", "file", "level", "place", "x", "y")
        return cls(*(np.concatenate([getattr(one, name) for one in parts]) for name in names))

    def picked(self, kept: NDArray[np.bool_] | Integers) -> Rows:
        """Return the rows at some places, or those for which `kept` is true."""
        return Rows(self.unit[kept], self.file[kept], self.level[kept], self.place[kept],
                    self.x[kept], self.y[kept])  # fmt: skip


@dataclass(frozen=True)
class Part:
    """What some files hold of one period.

    Attributes
    ----------
    units : dict of tuple to Group
        Every unit, in the order of the cells' unit numbers.
    cells : Cells
        Sums.
    rows : Rows
        Some rows.
    """

    units: dict[Key, Group]
    cells: Cells
    rows: Rows

    @property
    def extent(self) -> tuple[float, float]:
        """Lowest and highest x, on the plan's scale."""
        groups = self.units.values()
        return (min((one.low for one in groups), default=np.inf),
                max((one.high for one in groups), default=-np.inf))  # fmt: skip

    @property
    def used(self) -> int:
        """Rows in the sums."""
        return sum(group.tally.used for group in self.units.values())


def merge_parts(parts: Sequence[Part]) -> Part:
    """Return the sum of several parts on one grid, units in the order of their keys."""
    keys = sorted({key for part in parts for key in part.units}, key=sort_key)
    place = {key: number for number, key in enumerate(keys)}
    units = {key: Group() for key in keys}
    cells, rows = [], []
    for part in parts:
        for key, group in part.units.items():
            units[key].add(group)
        moved = np.array([place[key] for key in part.units], np.int32)
        own = part.cells
        cells.append(Cells(moved[own.unit], own.fold, own.bin, own.sums))
        few = part.rows
        rows.append(Rows(moved[few.unit], few.file, few.level, few.place, few.x, few.y))
    return Part(units, Cells.added(cells), Rows.joined(rows))


def to_bytes(part: Part, by: Sequence[tuple[str, pa.DataType]]) -> bytes:
    """Write a part as three Arrow streams: units, cells, rows.

    Parameters
    ----------
    part : Part
        What shall be stored.
    by : sequence of (str, pyarrow.DataType)
        Names and types of the unit columns.
    """
    import pyarrow as pa

    groups = list(part.units.values())
    units: dict[str, pa.Array] = {
        f"by {name}": pa.array([key[n] for key in part.units], data_type)
        for n, (name, data_type) in enumerate(by)
    }
    units |= {
        "low": pa.array([group.low for group in groups], pa.float64()),
        "high": pa.array([group.high for group in groups], pa.float64()),
        "tally": pa.array([json.dumps(group.tally.to_dict()) for group in groups], pa.string()),
        "blocks": pa.array([sorted(group.blocks) for group in groups], pa.list_(pa.int64())),
    }
    names = WEIGHTED_NAMES if part.cells.sums.shape[1] > 7 else PLAIN_NAMES
    cells = {"unit": part.cells.unit, "fold": part.cells.fold, "bin": part.cells.bin}
    cells |= {name: part.cells.sums[:, n].copy() for n, name in enumerate(names)}
    rows = {name: getattr(part.rows, name) for name in ("unit", "file", "level", "place", "x", "y")}
    stream = io.BytesIO()
    options = pa.ipc.IpcWriteOptions(compression="zstd")
    for table in (units, cells, rows):
        made = pa.table(table)
        with pa.ipc.new_stream(stream, made.schema, options=options) as writer:
            writer.write_table(made)
    return stream.getvalue()


def from_bytes(content: bytes, by: Sequence[str]) -> Part:
    """Build a part from what `to_bytes` returned."""
    import pyarrow as pa

    source = pa.BufferReader(content)
    units, cells, rows = (pa.ipc.open_stream(source).read_all() for _ in range(3))
    keys = list(zip(*(units[f"by {name}"].to_pylist() for name in by), strict=True))
    groups: dict[Key, Group] = {}
    for n, (low, high, tally, blocks) in enumerate(zip(
        units["low"].to_pylist(), units["high"].to_pylist(), units["tally"].to_pylist(),
        units["blocks"].to_pylist(), strict=True,
    )):  # fmt: skip
        told = json.loads(tally)
        of_rows = Tally(told["read"], told["filtered"], told["refused"])
        groups[keys[n] if by else ()] = Group(low, high, of_rows, set(blocks))
    names = cells.column_names[3:]
    sums = np.empty((cells.num_rows, len(names)))
    for n, name in enumerate(names):
        sums[:, n] = cells[name].to_numpy()
    return Part(
        groups,
        Cells(cells["unit"].to_numpy(), cells["fold"].to_numpy(), cells["bin"].to_numpy(), sums),
        Rows(*(rows[name].to_numpy() for name in rows.column_names)),
    )
