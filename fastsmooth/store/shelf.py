"""The parts of a store while it is being updated, and how they are merged."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from fastsmooth.errors import ReadError
from fastsmooth.fleet import arrow_type
from fastsmooth.store import disk
from fastsmooth.store.cells import RUN, Part, Rows, from_bytes, merge_parts, to_bytes
from fastsmooth.store.grid import Grid
from fastsmooth.store.ledger import Basis, Manifest, PartRecord
from fastsmooth.store.picks import level_for

# So many parts of a period that is still open become one; so many of these the next, and so on.
_MERGED_TOGETHER = 32
# Rows in all runs of consecutive rows, about.
_RUN_ROWS_KEPT = 200_000
_RUNS_OF_UNIT = 8
_FEWEST_RUN_ROWS = 32


@dataclass(frozen=True)
class Held:
    """A part, on the disk or in memory.

    Attributes
    ----------
    period : int or None
        Its period.
    grid : int
        Which of the store's grids it is on.
    files : tuple of int
        Ordinals of the files that it is the sum of, ascending.
    tier : int
        How often parts were merged into it.
    record : PartRecord or None
        Where it lies.
    part : Part or None
        What it holds, if it was not written yet.
    """

    period: int | None
    grid: int
    files: tuple[int, ...]
    tier: int
    record: PartRecord | None
    part: Part | None

    @classmethod
    def stored(cls, record: PartRecord) -> Held:
        """Return a part on the disk."""
        return cls(record.period, record.grid, record.files, record.tier, record, None)

    @property
    def extent(self) -> tuple[float, float] | None:
        """Lowest and highest x; None without rows."""
        if self.part is not None:
            low, high = self.part.extent
            return (low, high) if low <= high else None
        assert self.record is not None
        if self.record.low is None or self.record.high is None:
            return None
        return self.record.low, self.record.high

    @property
    def used(self) -> int:
        """Rows in the sums."""
        if self.part is not None:
            return self.part.used
        assert self.record is not None
        return self.record.used


def read_part(store: str, record: PartRecord, basis: Basis) -> Part:
    """Read a part of a store.

    Raises
    ------
    OvertakenError
        Its file is gone.
    ReadError
        Its file is damaged.
    """
    return from_bytes(disk.read_file(store, record.path, record.digest), basis.settings.by)


def regridded(part: Part, own: int, grids: Sequence[Grid]) -> Part:
    """Return a part on the newest grid."""
    if own == len(grids) - 1:
        return part
    return Part(part.units, part.cells.regridded(grids[own], grids[-1]), part.rows)


class Shelf:
    """All parts of a store.

    Parameters
    ----------
    store : str
        The store's folder, locked.
    basis : Basis
        What never changes.
    held : iterable of Held
        Parts.
    """

    def __init__(self, store: str, basis: Basis, held: Iterable[Held]) -> None:
        self._store = store
        self._basis = basis
        self.held = list(held)

    def extent(self) -> tuple[float, float] | None:
        """Return the lowest and highest x of all parts; None without rows."""
        extents = [one.extent for one in self.held]
        known = [one for one in extents if one is not None]
        if not known:
            return None
        return min(low for low, _ in known), max(high for _, high in known)

    def is_whole(self, one: Held) -> bool:
        """Tell whether a part can be read."""
        if one.record is None:
            return True
        try:
            disk.read_file(self._store, one.record.path, one.record.digest)
        except ReadError:
            return False
        return True

    def drop(self, which: Callable[[Held], bool]) -> list[Held]:
        """Take parts out, and return them."""
        gone = [one for one in self.held if which(one)]
        self.held = [one for one in self.held if not which(one)]
        return gone

    def compact(self, grids: Sequence[Grid]) -> list[int]:
        """Merge all parts of each closed period, and many parts of an open one.

        A period is closed once a later one holds rows.

        Returns
        -------
        list of int
            Closed periods that were merged.
        """
        by_period: dict[int | None, list[Held]] = {}
        for one in self.held:
            by_period.setdefault(one.period, []).append(one)
        newest = max((period for period in by_period if period is not None), default=None)
        closed = []
        kept: list[Held] = []
        for period, several in by_period.items():
            several.sort(key=lambda one: (-one.tier, one.files))
            if period is not None and period != newest:
                if len(several) > 1:
                    closed.append(period)
                    several = [self._merged(several, grids)]
            else:
                several = self._by_tiers(several, grids)
            kept.extend(several)
        self.held = kept
        return sorted(closed)

    def _by_tiers(self, several: list[Held], grids: Sequence[Grid]) -> list[Held]:
        tier = 0
        while tier <= max(one.tier for one in several):
            alike = [one for one in several if one.tier == tier]
            if len(alike) >= _MERGED_TOGETHER:
                together = alike[:_MERGED_TOGETHER]
                several = [one for one in several if all(one is not other for other in together)]
                several.append(self._merged(together, grids))
            else:
                tier += 1
        return several

    def _merged(self, several: Sequence[Held], grids: Sequence[Grid]) -> Held:
        parts = [regridded(self._load(one), one.grid, grids) for one in several]
        files = sorted({ordinal for one in several for ordinal in one.files})
        tier = 1 + max(one.tier for one in several)
        return Held(several[0].period, len(grids) - 1, tuple(files), tier, None, merge_parts(parts))

    def _load(self, one: Held) -> Part:
        if one.part is not None:
            return one.part
        assert one.record is not None
        return read_part(self._store, one.record, self._basis)

    def write_out(self, units: int) -> tuple[tuple[PartRecord, ...], dict[str, bytes]]:
        """Return the records of all parts, and the content of the files that are new."""
        settings = self._basis.settings
        by = [
            (name, arrow_type(kind))
            for name, kind in zip(settings.by, self._basis.by_types, strict=True)
        ]
        level = level_for(sum(one.used for one in self.held), self._basis)
        records, contents = [], {}
        for one in sorted(self.held, key=lambda held: (held.period or 0, held.files)):
            if one.record is not None:
                records.append(one.record)
                continue
            assert one.part is not None
            part = Part(one.part.units, one.part.cells, thinned(one.part.rows, level, units))
            content = to_bytes(part, by)
            low, high = one.extent or (None, None)
            record = PartRecord(
                disk.digest_of(content), len(content), one.period, one.grid, one.files, one.tier,
                one.used, low, high,
            )  # fmt: skip
            records.append(record)
            contents[record.path] = content
        return tuple(records), contents


def shelf_of(store: str, manifest: Manifest) -> Shelf:
    """Return the parts of a state."""
    return Shelf(store, manifest.basis, (Held.stored(record) for record in manifest.parts))


def thinned(rows: Rows, level: int, units: int) -> Rows:
    """Leave out rows that a store of this size need not keep.

    Parameters
    ----------
    rows : Rows
        Some rows.
    level : int
        Least level of the thin selection.
    units : int
        Units of the store: each has its runs, so that these must be short if units are many.
    """
    longest = _RUN_ROWS_KEPT // max(1, _RUNS_OF_UNIT * units)
    if longest < _FEWEST_RUN_ROWS:
        longest = 0
    in_run = rows.level == RUN
    kept = ~in_run & (rows.level >= level)
    places = np.flatnonzero(in_run)
    if places.size:
        order = np.lexsort((rows.place[places], rows.file[places], rows.unit[places]))
        places = places[order]
        unit, file = rows.unit[places], rows.file[places]
        new = np.concatenate(([True], (unit[1:] != unit[:-1]) | (file[1:] != file[:-1])))
        rank = np.arange(places.size) - np.maximum.accumulate(
            np.where(new, np.arange(places.size), 0)
        )
        kept[places[rank < longest]] = True
    return rows.picked(kept)
