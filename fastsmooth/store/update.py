"""Bringing a store up to date: which files are new, counting them, and publishing the result."""

from __future__ import annotations

import contextlib
import hashlib
import os
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from dataclasses import dataclass, replace
from datetime import UTC, datetime
from threading import Lock
from typing import Any

import numpy as np

from fastsmooth.addresses import as_address
from fastsmooth.bintable import Tally
from fastsmooth.errors import InputError
from fastsmooth.files import FileRecord, find_files, read_identity
from fastsmooth.passes import Progress, check_signs, silent
from fastsmooth.plan import no_usable_rows
from fastsmooth.settings import usable_cores, whole_number
from fastsmooth.source import open_source
from fastsmooth.store import disk
from fastsmooth.store.cells import Key
from fastsmooth.store.changes import Sorted, digest_of_file, is_alike, is_same, sort_files
from fastsmooth.store.counting import CountedFile, Counter, Order, columns_to_read
from fastsmooth.store.grid import Grid, widen
from fastsmooth.store.ledger import Basis, Entry, Manifest, clear, load_manifest, publish
from fastsmooth.store.picks import keeps_run, level_for
from fastsmooth.store.planning import new_basis, open_files
from fastsmooth.store.settings import StoreSettings
from fastsmooth.store.shelf import Held, Shelf, shelf_of

_NAMED_AT_MOST = 3


@dataclass(frozen=True)
class Updated:
    """What an update did.

    Attributes
    ----------
    store : str
        The store's folder.
    generation : int
        The number of its state.
    changed : bool
        Whether it was written at all.
    added, replaced, unchanged, moved, reread, vanished : tuple of str
        Files: counted for the first time; counted anew; known and as they were; known under
        another path; read again because a period they share was rebuilt; gone since they were
        counted (their rows stay).
    left_out : tuple of str
        Files with rows that were left out for lying beyond the bins, and that fit now.
    rows : dict
        What became of the rows read (``read``, ``filtered``, ``refused``, ``used``).
    rebuilt, compacted, forgotten : tuple of str
        Periods.
    width_doubled : int
        How often the bins were made twice as wide.
    unfinished : str or None
        The owner of an update that was killed, of which nothing was left.
    """

    store: str
    generation: int
    changed: bool
    added: tuple[str, ...] = ()
    replaced: tuple[str, ...] = ()
    unchanged: tuple[str, ...] = ()
    moved: tuple[str, ...] = ()
    reread: tuple[str, ...] = ()
    vanished: tuple[str, ...] = ()
    left_out: tuple[str, ...] = ()
    rows: dict[str, Any] | None = None
    rebuilt: tuple[str, ...] = ()
    compacted: tuple[str, ...] = ()
    forgotten: tuple[str, ...] = ()
    width_doubled: int = 0
    unfinished: str | None = None


def update_store(
    store: str | os.PathLike[str],
    data: Any = None,
    settings: StoreSettings | None = None,
    *,
    replace_changed: bool = False,
    forget_before: str | None = None,
    with_hash: bool = False,
    threads: int | None = None,
    progress: Progress = silent,
) -> Updated:
    """Count files into a store, each once; make the store if there is none.

    Parameters
    ----------
    store : path
        A folder, of this use alone.
    data : path, glob or list of these, or None
        Files to be counted, known ones among them or not; None counts nothing.
    settings : StoreSettings or None
        What is counted: needed for a new store, checked for others.
    replace_changed : bool
        Whether files that changed since they were counted are counted anew (else refused), and
        damaged tables made anew from their files.
    forget_before : str or None
        A date, the beginning of a period: earlier periods are dropped and refused from now on.
    with_hash : bool
        Whether the SHA-256 of files is noted, and compared where it was noted before.
    threads : int or None
        Files (or row groups of a single one) read at a time; the result does not depend on it.
    progress : callable
        Called as ``progress(stage, rows_done, rows_expected)``.

    Returns
    -------
    Updated
        What was done.

    Raises
    ------
    InputError
        A setting contradicts the store's, a file changed, or another process holds the store.
    ReadError
        A file or the store is damaged.
    WriteError
        The store cannot be written; it is as it was.

    Examples
    --------
    >>> import tempfile, numpy as np, pyarrow as pa, pyarrow.parquet as pq
    >>> folder = tempfile.TemporaryDirectory()
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, 500)
    >>> readings = pa.table({"wet_bulb_c": wet_bulb_c, "power_kw": 20.0 + wet_bulb_c})
    >>> pq.write_table(readings, f"{folder.name}/monday.parquet")
    >>> wanted = StoreSettings("wet_bulb_c", "power_kw")
    >>> made = update_store(f"{folder.name}/store", f"{folder.name}/monday.parquet", wanted)
    >>> made.rows["used"], len(made.added)
    (500, 1)
    >>> update_store(f"{folder.name}/store", f"{folder.name}/monday.parquet").changed
    False
    >>> folder.cleanup()
    """
    folder = os.fspath(store)
    if as_address(folder) is not None:
        raise InputError(
            "STORE", "be a folder on this computer", f"'{folder}' is an address",
            "name a folder; DATA may lie elsewhere",
        )  # fmt: skip
    threads = usable_cores() if threads is None else whole_number("--threads", threads, 1)
    if data is None and forget_before is None and not replace_changed:
        raise InputError(
            "DATA", "be given", "there is nothing to do", "name files, or give --forget-before"
        )
    paths = [] if data is None else _files(data)
    with _folder(folder), disk.writing(folder), disk.locked(folder) as former:
        manifest = load_manifest(folder)
        job = _Job(folder, manifest, settings or StoreSettings(), threads, progress)
        done = job.run(paths, replace_changed, forget_before, with_hash)
    return replace(done, unfinished=None if former is None else former.words())


def _files(data: Any) -> list[str]:
    """Full paths of the files meant: a ledger can name nothing else."""
    several = data if isinstance(data, list | tuple) else [data]
    if not all(isinstance(one, str | os.PathLike) for one in several):
        raise InputError(
            "DATA", "be files, which the ledger can name", f"it is a {type(data).__name__}",
            "write it to a file first",
        )  # fmt: skip
    return [
        path if as_address(path) is not None else os.path.abspath(path) for path in find_files(data)
    ]


@contextmanager
def _folder(folder: str) -> Iterator[None]:
    """Make the folder of a new store, and remove it again if the store could not be made."""
    new = not os.path.isdir(folder)
    made = _missing_folders(folder)
    if not new and not disk.is_store(folder):
        with os.scandir(folder) as entries:
            foreign = sorted(entry.name for entry in entries if not disk.is_own(entry.name))
        if foreign:
            raise InputError(
                "STORE", "be a store, or an empty or new folder",
                f"'{folder}' holds '{foreign[0]}'", "name another folder",
            )  # fmt: skip
    try:
        with disk.writing(folder):
            os.makedirs(os.path.join(folder, disk.TABLES), exist_ok=True)
        yield
    except BaseException:
        if new and not disk.is_store(folder):
            with contextlib.suppress(OSError):
                os.unlink(os.path.join(folder, disk.LOCK))
            for one in (os.path.join(folder, disk.TABLES), *made):
                with contextlib.suppress(OSError):
                    os.rmdir(one)
        raise


def _missing_folders(folder: str) -> list[str]:
    """The folder and those above it that have yet to be made, the innermost first."""
    missing, place = [], os.path.abspath(folder)
    while not os.path.isdir(place):
        missing.append(place)
        place = os.path.dirname(place)
    return missing


class _Job:
    """One update, from the former state to the next."""

    def __init__(
        self, store: str, manifest: Manifest | None, settings: StoreSettings, threads: int,
        progress: Progress,
    ) -> None:  # fmt: skip
        self._store = store
        self._former = manifest
        self._threads = threads
        self._progress = progress
        self._rows_done = 0
        self._progress_lock = Lock()
        if manifest is None:
            self._settings = settings.filled()
        else:
            manifest.basis.settings.check_agrees(settings)
            self._settings = manifest.basis.settings

    def run(
        self, paths: list[str], replace_changed: bool, forget_before: str | None, with_hash: bool
    ) -> Updated:
        """Do everything; the store is written in the last step only."""
        former = self._former
        if former is None and not paths:
            raise InputError(
                "STORE", "be a store", f"'{self._store}' is none", "name files to make it of"
            )
        entries = [] if former is None else list(former.entries)
        found = sort_files(paths, entries, with_hash)
        if found.changed and not replace_changed:
            raise InputError(
                "DATA", "be as they were when they were counted",
                f"{_some([entries[n].path for n in found.changed])} changed since",
                "count them anew with --replace",
            )  # fmt: skip
        forgotten_before = None if former is None else former.forgotten_before
        if forget_before is not None:
            forgotten_before = self._forget(forget_before, forgotten_before)
        anew, affected = dict(found.changed), list[Held]()
        if former is not None and replace_changed:
            anew |= self._now_fitting(found.unchanged, entries)
            affected = self._affected(set(anew))
        again = self._to_reread(affected, set(anew), forgotten_before)
        orders, basis, grid = self._orders(found.new, anew, again)
        grids = (grid,) if former is None else former.grids
        shelf = Shelf(self._store, basis, []) if former is None else shelf_of(self._store, former)
        gone = [one.record for one in affected]
        shelf.drop(lambda one: any(one.record is record for record in gone))
        counted, grids = self._count(orders, basis, grids, forgotten_before, shelf)
        if former is None and not any(one.tally.used for one, _ in counted):
            raise no_usable_rows()
        keys = self._shelve(counted, shelf)
        marks = (frozenset() if former is None else former.unit_marks) | keys
        dropped = shelf.drop(
            lambda one: (
                one.period is not None
                and forgotten_before is not None
                and one.period < forgotten_before
            )
        )
        if dropped and not shelf.held and forget_before is not None:
            raise InputError(
                "--forget-before", "leave rows in the store", f"all lie before {forget_before}",
                "give an earlier date, or delete the store",
            )  # fmt: skip
        entries = self._entered(entries, found, counted, again, with_hash)
        compacted = shelf.compact(grids)
        parts, contents = shelf.write_out(len(marks))
        made = Manifest(
            basis, 0 if former is None else former.generation, grids, tuple(entries), parts,
            forgotten_before, marks,
        )  # fmt: skip
        # A table that was damaged is written again under its former name.
        changed = (
            former is None or bool(contents) or replace(made, version=former.version) != former
        )
        if changed:
            self._progress("writing", 0, None)
            made = publish(self._store, made, contents)
        elif former is not None:
            # An update that was killed may have left files behind.
            clear(self._store, former)
        total = Tally()
        for one, _ in counted:
            if one.order.only is None:
                total.add(one.tally)
        label = (lambda number: "") if basis.period is None else basis.period.label
        rebuilt = sorted({one.period for one in affected if one.period is not None})
        return Updated(
            self._store, made.generation, changed,
            tuple(one.path for one in found.new),
            tuple(entries[n].path for n in sorted(anew)),
            tuple(entries[n].path for n in found.unchanged if n not in anew),
            tuple(entries[n].path for n in sorted(found.moved)),
            tuple(entries[n].path for n in sorted(again)),
            tuple(entries[n].path for n in found.vanished),
            tuple(entries[n].path for n in _fitting(range(len(entries)), entries, grids[-1])),
            total.to_dict(), tuple(map(label, rebuilt)), tuple(map(label, compacted)),
            tuple(map(label, sorted({one.period for one in dropped if one.period is not None}))),
            0 if former is None else grids[-1].exponent - former.grid.exponent,
        )  # fmt: skip

    def _forget(self, date: str, former: int | None) -> int:
        period = None if self._former is None else self._former.basis.period
        if period is None:
            raise InputError(
                "--forget-before", "come with a store that keeps periods apart",
                f"'{self._store}' keeps none",
                "make another store with --period, as in --period logged_at:month",
            )  # fmt: skip
        number = period.begun_at(date, "--forget-before")
        return number if former is None else max(former, number)

    def _now_fitting(self, unchanged: list[int], entries: list[Entry]) -> dict[int, FileRecord]:
        """Files named again whose rows beyond the bins would find bins now."""
        assert self._former is not None
        fitting = _fitting(unchanged, entries, self._former.grid)
        return {n: read_identity(entries[n].path, None) for n in fitting}

    def _affected(self, anew: set[int]) -> list[Held]:
        """Parts that must be made anew: they hold a file that changed, or are damaged."""
        assert self._former is not None
        shelf = shelf_of(self._store, self._former)
        return [
            one for one in shelf.held if anew.intersection(one.files) or not shelf.is_whole(one)
        ]

    def _to_reread(
        self, affected: list[Held], anew: set[int], forgotten_before: int | None
    ) -> dict[int, frozenset[int | None]]:
        """Unchanged files whose rows in some periods must be read again, and these periods."""
        assert self._former is not None or not affected
        wanted: dict[int, set[int | None]] = {}
        for one in affected:
            gone = (
                forgotten_before is not None
                and one.period is not None
                and one.period < forgotten_before
            )
            for n in one.files:
                if n not in anew and not gone:
                    wanted.setdefault(n, set()).add(one.period)
        if self._former is None or not wanted:
            return {}
        lost = []
        for n in sorted(wanted):
            entry = self._former.entries[n]
            try:
                here = is_alike(entry, read_identity(entry.path, None))
            except InputError:
                here = False
            if not here:
                lost.append(entry.path)
        if lost:
            raise InputError(
                "--replace", "find the other files of the periods that are made anew",
                f"{_some(lost)} changed or went away", "put them back",
            )  # fmt: skip
        return {n: frozenset(periods) for n, periods in sorted(wanted.items())}

    def _orders(
        self, new: list[FileRecord], anew: dict[int, FileRecord],
        again: dict[int, frozenset[int | None]],
    ) -> tuple[list[Order], Basis, Grid]:  # fmt: skip
        """What to count, and with which basis and first bins."""
        former = self._former
        entries = () if former is None else former.entries
        paths = [one.path for one in new] + [entries[n].path for n in sorted({*anew, *again})]
        tasks = dict.fromkeys(paths, 0)
        rows = 0 if former is None else former.used
        if former is not None:
            basis, grid = former.basis, former.grid
            if paths:
                with open_files(paths, basis) as source:
                    self._note_tasks(tasks, source.files, source.file_of_task)
                    rows += source.rows_expected or 0
        else:
            self._progress("planning", 0, None)
            columns = columns_to_read(self._settings)
            with open_source(paths, columns, where=self._settings.where) as source:
                self._note_tasks(tasks, source.files, source.file_of_task)
                basis, grid = new_basis(source, self._settings, self._threads)
                rows += source.rows_expected or 0
        orders = []
        first = 0 if former is None else former.tasks
        units = 1 if former is None else max(1, len(former.unit_marks))
        of_unit = (sum(entry.units for entry in entries) + len(new)) / units
        for ordinal, record in enumerate(new, len(entries)):
            run = keeps_run(ordinal, of_unit, basis)
            orders.append(Order(record.path, ordinal, first, run, level_for(rows, basis)))
            first += tasks[record.path]
        for n in sorted({*anew, *again}):
            run = keeps_run(n, of_unit, basis)
            only = None if n in anew else again[n]
            level = level_for(rows, basis)
            orders.append(Order(entries[n].path, n, entries[n].first_task, run, level, only))
        return orders, basis, grid

    def _note_tasks(
        self, tasks: dict[str, int], files: Sequence[FileRecord], file_of_task: Sequence[int]
    ) -> None:
        for place in file_of_task:
            tasks[files[place].path] += 1

    def _count(
        self, orders: list[Order], basis: Basis, grids: tuple[Grid, ...],
        forgotten_before: int | None, shelf: Shelf,
    ) -> tuple[list[tuple[CountedFile, int]], tuple[Grid, ...]]:  # fmt: skip
        """Count files on the newest grid, or on a wider one where rows lie beyond it."""
        counter = Counter(basis, grids[-1], forgotten_before)
        counted = [(one, len(grids) - 1) for one in self._run(orders, counter)]
        for one, _ in counted:
            check_signs(one.tally.refused, basis.columns)
        beyond = [one for one, _ in counted if one.beyond.low <= one.beyond.high]
        if not beyond or basis.bounds is not None:
            return counted, grids
        grid = _wider(grids[-1], shelf, [one for one, _ in counted])
        if grid == grids[-1]:
            return counted, grids
        grids = (*grids, grid)
        fitting = {
            one.order.ordinal: one.order
            for one in beyond
            if ((one.beyond.all() >= grid.origin) & (one.beyond.all() < grid.high)).any()
        }
        wider = Counter(basis, grid, forgotten_before)
        again = {one.order.ordinal: one for one in self._run(list(fitting.values()), wider)}
        return [
            (again[one.order.ordinal], len(grids) - 1) if one.order.ordinal in again
            else (one, number)
            for one, number in counted
        ], grids  # fmt: skip

    def _run(self, orders: list[Order], counter: Counter) -> list[CountedFile]:
        heard: Callable[[int], None] | None = None
        if self._progress is not silent:
            heard = self._report
        if len(orders) == 1:
            return [counter.count(orders[0], self._threads, heard)]
        with ThreadPoolExecutor(self._threads, thread_name_prefix="fastsmooth") as pool:
            jobs = [pool.submit(counter.count, order, 1, heard) for order in orders]
            try:
                return [job.result() for job in jobs]
            finally:
                pool.shutdown(wait=True, cancel_futures=True)

    def _report(self, rows: int) -> None:
        with self._progress_lock:
            self._rows_done += rows
            self._progress("reading", self._rows_done, None)

    def _shelve(self, counted: list[tuple[CountedFile, int]], shelf: Shelf) -> frozenset[int]:
        """Put what was counted on the shelf; return a number for every unit met."""
        marks: set[int] = set()
        for one, grid in counted:
            for period, part in one.parts.items():
                marks.update(map(_unit_mark, part.units))
                shelf.held.append(Held(period, grid, (one.order.ordinal,), 0, None, part))
        return frozenset(marks)

    def _entered(
        self, entries: list[Entry], found: Sorted, counted: list[tuple[CountedFile, int]],
        again: dict[int, frozenset[int | None]], with_hash: bool,
    ) -> list[Entry]:  # fmt: skip
        """The ledger with the files of this update."""
        entries = list(entries)
        for n, record in {**found.touched, **found.moved}.items():
            entries[n] = replace(
                entries[n], path=record.path, size_bytes=record.size_bytes,
                modified_ns=record.modified_ns, etag=record.etag,
            )  # fmt: skip
        now = datetime.now(UTC).isoformat(timespec="seconds")
        for one, _ in sorted(counted, key=lambda pair: pair[0].order.ordinal):
            if one.order.ordinal in again:
                continue
            digest = self._hash_of(one.record, found) if with_hash else None
            entry = _entry(one, now, digest)
            if one.order.ordinal < len(entries):
                entries[one.order.ordinal] = replace(
                    entry, sha256=entry.sha256 or self._kept_hash(entries, one, found)
                )
            else:
                entries.append(entry)
        if with_hash:
            for n in (*found.unchanged, *found.moved):
                if entries[n].sha256 is None:
                    entries[n] = replace(entries[n], sha256=digest_of_file(entries[n].path))
        return entries

    def _hash_of(self, record: FileRecord, found: Sorted) -> str:
        digest = found.digests.get(record.path) or digest_of_file(record.path)
        if not is_same(record, read_identity(record.path, record.rows)):
            raise InputError(
                "DATA", "stay as it is while it is read", f"'{record.path}' changed meanwhile",
                "run again when nothing writes to it",
            )  # fmt: skip
        return digest

    def _kept_hash(self, entries: list[Entry], one: CountedFile, found: Sorted) -> str | None:
        """A file that had a hash keeps one."""
        had = entries[one.order.ordinal].sha256 is not None
        return self._hash_of(one.record, found) if had else None


def _wider(grid: Grid, shelf: Shelf, counted: Sequence[CountedFile]) -> Grid:
    """The grid that holds all rows but far outliers; the same grid if it does already."""
    extents = [part.extent for one in counted for part in one.parts.values()]
    own = shelf.extent()
    if own is not None:
        extents.append(own)
    low = min((low for low, _ in extents), default=np.inf)
    high = max((high for _, high in extents), default=-np.inf)
    if not low < high:
        low, high = grid.origin, grid.high
    stride = max(one.beyond.stride for one in counted)
    values = np.concatenate([one.beyond.all()[:: stride // one.beyond.stride] for one in counted])
    rows = sum(one.tally.used for one in counted) + stride * values.size
    hull = widen(low, high, values, max(1, rows // stride))
    try:
        return grid.grown(hull.low, hull.high)
    except OverflowError:
        raise InputError(
            "--x", "span a width that can be cut into bins", "new values lie too far away",
            "leave them out with --where, or make another store with --range",
        ) from None  # fmt: skip


def _entry(one: CountedFile, now: str, digest: str | None) -> Entry:
    refused = one.tally.refused
    left_out = refused.get("x below range", 0) + refused.get("x above range", 0)
    beyond = one.beyond
    keys: set[Key] = {key for part in one.parts.values() for key in part.units}
    return Entry(
        one.record.path, one.record.size_bytes, one.record.modified_ns, one.record.etag, digest,
        one.tally.read, one.tally.filtered, one.tally.used, dict(sorted(refused.items())),
        dict(sorted(one.early.refused.items())), now, one.order.first_task, one.tasks,
        tuple(one.parts), len(keys),
        (beyond.low, beyond.high) if left_out and beyond.low <= beyond.high else None,
    )  # fmt: skip


def _fitting(ordinals: Sequence[int] | range, entries: Sequence[Entry], grid: Grid) -> list[int]:
    """Files with rows that were left out and would find bins now."""
    return [
        n for n in ordinals
        if (ends := entries[n].beyond) is not None
        and any(grid.origin <= end < grid.high for end in ends)
    ]  # fmt: skip


def _unit_mark(key: Key) -> int:
    digest = hashlib.blake2b(repr(key).encode(), digest_size=6).digest()
    return int.from_bytes(digest, "little")


def _some(paths: Sequence[str]) -> str:
    named = ", ".join(f"'{path}'" for path in paths[:_NAMED_AT_MOST])
    more = len(paths) - _NAMED_AT_MOST
    return named + (f" and {more:,} more" if more > 0 else "")
