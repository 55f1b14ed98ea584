"""The ledger: what a store has counted, with which settings, and where the sums lie."""

from __future__ import annotations

import json
import os
from dataclasses import asdict, dataclass, field, replace
from typing import Any

from fastsmooth.axis import Axis
from fastsmooth.blocks import Block
from fastsmooth.fleet import arrow_type
from fastsmooth.plan import Plan
from fastsmooth.source import Columns, Fixed
from fastsmooth.store import disk
from fastsmooth.store.grid import Grid
from fastsmooth.store.periods import Period
from fastsmooth.store.settings import StoreSettings


@dataclass(frozen=True)
class Entry:
    """A file that was counted.

    Attributes
    ----------
    path : str
        Full path or address.
    size_bytes, modified_ns : int
        Size, and modification time in nanoseconds since 1970.
    etag, sha256 : str or None
        Mark of the object store; sum over the content, if asked for.
    rows, filtered, used : int
        Rows read, dropped by the filter, and in the sums.
    refused : dict of str to int
        Rows refused, by reason.
    early : dict of str to int
        Those of them that were refused before their unit or period was known.
    counted_at : str
        When, in UTC.
    first_task, tasks : int
        Place and number of its row groups among all that the store has met.
    periods : tuple of int or None
        Periods that hold rows of it.
    units : int
        Units that it holds rows of.
    beyond : (float, float) or None
        Lowest and highest x that were left out for lying beyond the bins.
    """

    path: str
    size_bytes: int
    modified_ns: int
    etag: str | None
    sha256: str | None
    rows: int
    filtered: int
    used: int
    refused: dict[str, int]
    early: dict[str, int]
    counted_at: str
    first_task: int
    tasks: int
    periods: tuple[int | None, ...]
    units: int
    beyond: tuple[float, float] | None

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Entry:
        """Build an entry from plain data."""
        beyond = plain["beyond"]
        return cls(**{
            **plain, "periods": tuple(plain["periods"]), "beyond": beyond and tuple(beyond),
        })  # fmt: skip


@dataclass(frozen=True)
class PartRecord:
    """Where a part lies, and what it holds.

    Attributes
    ----------
    digest : str
        SHA-256 of its file, whose name begins with it.
    size_bytes : int
        Size of its file.
    period : int or None
        Its period.
    grid : int
        Which of the store's grids its bins are numbered in.
    files : tuple of int
        Ordinals of the files that it is the sum of.
    tier : int
        How often parts were merged into it.
    used : int
        Rows in its sums.
    low, high : float or None
        Lowest and highest x, on the plan's scale.
    """

    digest: str
    size_bytes: int
    period: int | None
    grid: int
    files: tuple[int, ...]
    tier: int
    used: int
    low: float | None
    high: float | None

    @property
    def path(self) -> str:
        """Path inside the store."""
        return os.path.join(disk.TABLES, self.digest[:40] + disk.TABLE_SUFFIX)

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> PartRecord:
        """Build a record from plain data."""
        return cls(**{**plain, "files": tuple(plain["files"])})


@dataclass(frozen=True)
class Basis:
    """What all counting into a store shares, and never changes.

    Attributes
    ----------
    settings : StoreSettings
        With defaults filled in.
    axis : Axis
        What the floats of x mean.
    by_types : tuple of str
        Arrow types of the unit columns.
    key_types : dict of str to str
        Arrow types of the columns that stand in folder names.
    x_unit, y_unit : str
        Units of the columns.
    bounds : (float, float) or None
        The caller's range, on the scale.
    reference : float
        A round number near the middle of y.
    rows_per_run, folds_per_task : int
        How runs of rows are dealt to folds.
    kinds : dict of str to str
        Kinds of the block's and the period's column, in words; see `fastsmooth.blocks.kind_of`.
    """

    settings: StoreSettings
    axis: Axis
    by_types: tuple[str, ...]
    key_types: dict[str, str]
    x_unit: str
    y_unit: str
    bounds: tuple[float, float] | None
    reference: float
    rows_per_run: int
    folds_per_task: int
    kinds: dict[str, str] = field(default_factory=dict)

    @property
    def period(self) -> Period | None:
        """The period, parsed."""
        return None if self.settings.period is None else Period.parse(self.settings.period)

    @property
    def slots(self) -> int:
        """Sums in a cell."""
        return 7 if self.settings.weight is None else 14

    @property
    def columns(self) -> Columns:
        """The columns of x, y, weight and count."""
        settings = self.settings
        block = None if settings.block is None else Block.parse(settings.block).column
        return Columns(*settings.names, settings.weight, settings.count, block=block)

    @property
    def fixed(self) -> Fixed:
        """How files are opened."""
        return Fixed(self.axis, {name: arrow_type(kind) for name, kind in self.key_types.items()})

    def plan(self, grid: Grid) -> Plan:
        """Return the plan of a table on a grid."""
        settings = self.settings
        return Plan(
            self.columns, self.axis, str(settings.scale), settings.where, settings.block,
            grid.origin, grid.width, grid.bins, settings.sizes[1], self.rows_per_run,
            self.folds_per_task, self.reference, grid.pilot,
        )  # fmt: skip

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {**asdict(self), "settings": self.settings.to_dict(), "axis": self.axis.to_dict()}

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Basis:
        """Build a basis from what `to_dict` returned."""
        bounds = plain["bounds"]
        return cls(**{
            **plain, "settings": StoreSettings.from_dict(plain["settings"]),
            "axis": Axis.from_dict(plain["axis"]), "by_types": tuple(plain["by_types"]),
            "bounds": bounds and tuple(bounds),
        })  # fmt: skip


@dataclass(frozen=True)
class Manifest:
    """One state of a store.

    Attributes
    ----------
    basis : Basis
        What never changes.
    generation : int
        How many states came before.
    grids : tuple of Grid
        The bins, the newest last; parts name theirs.
    entries : tuple of Entry
        The ledger. A file keeps its place.
    parts : tuple of PartRecord
        The sums.
    forgotten_before : int or None
        Rows of earlier periods are refused.
    unit_marks : frozenset of int
        A number for every unit met.
    version : str
        The version of fastsmooth that wrote it.
    """

    basis: Basis
    generation: int = 0
    grids: tuple[Grid, ...] = ()
    entries: tuple[Entry, ...] = ()
    parts: tuple[PartRecord, ...] = ()
    forgotten_before: int | None = None
    unit_marks: frozenset[int] = frozenset()
    version: str = field(default_factory=lambda: _version())

    @property
    def grid(self) -> Grid:
        """The newest bins."""
        return self.grids[-1]

    @property
    def tasks(self) -> int:
        """Row groups met so far."""
        return max((one.first_task + one.tasks for one in self.entries), default=0)

    @property
    def used(self) -> int:
        """Rows in the sums."""
        return sum(part.used for part in self.parts)

    @property
    def extent(self) -> tuple[float, float] | None:
        """Lowest and highest x in the sums, on the scale; None without rows."""
        lows = [part.low for part in self.parts if part.low is not None]
        highs = [part.high for part in self.parts if part.high is not None]
        return (min(lows), max(highs)) if lows else None

    @property
    def periods(self) -> list[int]:
        """Periods that hold rows, ascending."""
        return sorted({part.period for part in self.parts if part.period is not None})

    def to_bytes(self) -> bytes:
        """Return the content of a manifest file."""
        plain = {
            "basis": self.basis.to_dict(), "generation": self.generation,
            "grids": [grid.to_dict() for grid in self.grids],
            "entries": [asdict(entry) for entry in self.entries],
            "parts": [asdict(part) for part in self.parts],
            "forgotten_before": self.forgotten_before, "unit_marks": sorted(self.unit_marks),
            "version": self.version,
        }  # fmt: skip
        return json.dumps(plain, allow_nan=False, separators=(",", ":")).encode()

    @classmethod
    def from_bytes(cls, content: bytes) -> Manifest:
        """Build a manifest from what `to_bytes` returned."""
        plain = json.loads(content)
        return cls(
            Basis.from_dict(plain["basis"]), plain["generation"],
            tuple(Grid.from_dict(one) for one in plain["grids"]),
            tuple(Entry.from_dict(one) for one in plain["entries"]),
            tuple(PartRecord.from_dict(one) for one in plain["parts"]),
            plain["forgotten_before"], frozenset(plain["unit_marks"]), plain["version"],
        )  # fmt: skip


def manifest_name(digest: str) -> str:
    """Return the name of a manifest's file."""
    return digest[:40] + disk.MANIFEST_SUFFIX


def load_manifest(store: str) -> Manifest | None:
    """Read the current state; None if the folder holds no store yet.

    Raises
    ------
    OvertakenError
        A writer has published another one meanwhile, or a file is gone.
    ReadError
        A file is damaged, or of another format.
    """
    digest = disk.read_current(store)
    if digest is None:
        return None
    return Manifest.from_bytes(disk.read_file(store, manifest_name(digest), digest))


def publish(store: str, manifest: Manifest, contents: dict[str, bytes]) -> Manifest:
    """Write a new state and make it current; until its last step the former one is.

    Parameters
    ----------
    store : str
        The store's folder, locked.
    manifest : Manifest
        The new state, with the generation of the former one.
    contents : dict of str to bytes
        Files that are new in it, by path inside the store.

    Returns
    -------
    Manifest
        As published.
    """
    made = replace(manifest, generation=manifest.generation + 1, version=_version())
    for path, content in contents.items():
        folder, name = os.path.split(path)
        disk.write_file(os.path.join(store, folder), name, content)
    if contents:
        disk.sync_folder(os.path.join(store, disk.TABLES))
    whole = made.to_bytes()
    digest = disk.digest_of(whole)
    disk.write_file(store, manifest_name(digest), whole)
    disk.sync_folder(store)
    disk.write_current(store, digest)
    clear(store, made, digest)
    return made


def clear(store: str, manifest: Manifest, digest: str | None = None) -> None:
    """Remove files that the current state does not name: former ones, and what a crash left.

    Parameters
    ----------
    store : str
        The store's folder, locked.
    manifest : Manifest
        The current state.
    digest : str or None
        Its digest; None asks for the current one.
    """
    digest = digest or disk.read_current(store)
    if digest is not None:
        disk.sweep(store, {manifest_name(digest), *(part.path for part in manifest.parts)})


def _version() -> str:
    from importlib.metadata import version

    return version("fastsmooth")
