"""The pass that scores: batches in, batches with the new columns out, in row order."""

from __future__ import annotations

import dataclasses
import queue
from collections import deque
from collections.abc import Callable, Iterator, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field
from functools import partial
from threading import Event, Lock, Semaphore
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.types as pt
from numpy.typing import NDArray

from fastsmooth.arrowfile import ArrowReader
from fastsmooth.axis import Axis
from fastsmooth.casts import (
    Role,
    Values,
    caster,
    column_kind,
    filterable_type,
    finest_unit,
    plain_type,
)
from fastsmooth.csvfile import CsvReader
from fastsmooth.errors import InputError, ReadError
from fastsmooth.files import Task, check_unchanged, partition_keys
from fastsmooth.grouping import Grouping, Key
from fastsmooth.lookup import ABOVE, BELOW, ROW_STATUSES, Lookup, root_of
from fastsmooth.near import advise
from fastsmooth.opening import check_present, find_pruned, parse_filters
from fastsmooth.parquet import ParquetReader
from fastsmooth.readers import Reader, count_fields
from fastsmooth.tally import Tally
from fastsmooth.unitkeys import KnownUnits, UnitFinder

Floats = NDArray[np.float64]

BATCH_ROWS = 65_536
NEW_COLUMNS = ("expected", "residual", "z", "status")
# Batches of one task that may wait to be written.
_BATCHES_AHEAD = 4
_MOST_UNKNOWN_KEYS = 1000
_STATUS_WORDS = pa.array(ROW_STATUSES)


@dataclass
class Part:
    """What became of some rows; parts merge in row order.

    Attributes
    ----------
    tally : Tally
        Of each unit.
    read, filtered, written : int
        Rows read, dropped by the row filter, and delivered.
    unknown : dict of tuple to int
        Rows by keys of no known unit; the first thousand keys met.
    """

    tally: Tally
    read: int = 0
    filtered: int = 0
    written: int = 0
    unknown: dict[Key, int] = field(default_factory=dict)

    def merge(self, later: Part) -> None:
        """Add the rows that follow."""
        self.tally.merge(later.tally)
        self.read += later.read
        self.filtered += later.filtered
        self.written += later.written
        self.note_unknown(later.unknown)

    def counts(self) -> dict[str, Any]:
        """Return the rows as plain data for JSON."""
        by_status = self.tally.counts.sum(axis=0).tolist()
        return {
            "read": self.read, "filtered": self.filtered, "written": self.written,
            "by_status": dict(zip(ROW_STATUSES, by_status, strict=True)),
        }  # fmt: skip

    def note_unknown(self, found: dict[Key, int]) -> None:
        """Count rows of unknown units."""
        for key, rows in found.items():
            if key in self.unknown or len(self.unknown) < _MOST_UNKNOWN_KEYS:
                self.unknown[key] = self.unknown.get(key, 0) + rows


@dataclass(frozen=True)
class Wishes:
    """What is asked of the pass.

    Attributes
    ----------
    x, y : str
        Columns.
    weight : str or None
        Column of precisions, if the curve was made with one.
    where : str or None
        Row filter; rows that do not meet it are left out.
    keep : tuple of str or None
        Columns to keep, None for all.
    flagged_only : bool
        Whether to deliver only rows outside the limits.
    z_limit : float or None
        Rows whose z lies farther from 0 are outside; None judges by the curves' own limits.
    prefix : str
        Put before the names of the new columns.
    """

    x: str
    y: str
    weight: str | None
    where: str | None
    keep: tuple[str, ...] | None
    flagged_only: bool
    z_limit: float | None
    prefix: str

    @property
    def new_columns(self) -> list[str]:
        """Names of the new columns."""
        return [self.prefix + name for name in NEW_COLUMNS]


class ScorePass:
    """Opened data with all that is needed to score them.

    Parameters
    ----------
    reader : Reader
        Where record batches come from.
    wishes : Wishes
        What is asked.
    lookup : Lookup
        The curves.
    by : tuple of str
        The columns that tell units apart.
    by_types : sequence of pyarrow.DataType
        The type of each in the curves' own data.
    keys : sequence of tuple
        The key of each unit.
    axis : Axis
        The curves' axis.
    relative : sequence of str or None
        Path of each file below the folder that is written; None where no folder is written.
        Columns that stand in the names of these folders are not written into the files.

    Raises
    ------
    InputError
        A column is missing, of a kind that cannot be used, or has the name of a new one.
    """

    def __init__(
        self, reader: Reader, wishes: Wishes, lookup: Lookup, by: tuple[str, ...],
        by_types: Sequence[pa.DataType], keys: Sequence[Key], axis: Axis,
        relative: Sequence[str] | None,
    ) -> None:  # fmt: skip
        self.reader = reader
        self.wishes = wishes
        self._lookup = lookup
        named = {"x": wishes.x, "y": wishes.y, "weight": wishes.weight}
        self._roles = tuple(Role(name, one) for name, one in named.items() if one is not None)
        by_columns = Grouping.parse(by).columns if by else ()
        check_present(reader, self._roles, by_columns, None)
        kept = _kept_columns(reader, wishes)
        filters = parse_filters(reader, wishes.where)
        used = [role.column for role in self._roles] + list(by_columns)
        used += [name for one in filters for name in one.columns]
        # Kept columns stand last, in the file's own order.
        self._needed = [list(dict.fromkeys([*used, *names])) for names in kept]
        schemas = reader.schemas
        reader.prepare(list(dict.fromkeys(name for names in self._needed for name in names)))
        if reader.schemas is not schemas:
            # A temporary file may store a column in another type than announced.
            filters = parse_filters(reader, wishes.where)
        self._filters = filters
        self._pruned = find_pruned(reader, filters)
        self._written = [
            [name for name in names if name not in _in_folders(reader, place, relative)]
            for place, names in enumerate(kept)
        ]
        self.schemas = tuple(self._schema(place) for place in range(len(reader.places)))
        self._units = KnownUnits(by, by_types, keys, reader.schemas, reader.places)
        axis = self._check_kinds(axis)
        self._casts = [
            [
                caster(role, schema.field(role.column).type, axis if role.name == "x" else None)
                for role in self._roles
            ]
            for schema in reader.schemas
        ]
        self.tasks_of: list[list[Task]] = [[] for _ in reader.places]
        for task in reader.tasks:
            self.tasks_of[reader.place_of[task.index]].append(task)

    def _check_kinds(self, axis: Axis) -> Axis:
        """Refuse columns of other kinds; return the axis in the finest unit of curve and data."""
        types = []
        for place, schema in zip(self.reader.places, self.reader.schemas, strict=True):
            for role in self._roles:
                data_type = schema.field(role.column).type
                kind = column_kind(role, data_type, f"'{place}'")
                if role.name != "x" or kind == "empty":
                    continue
                plain = plain_type(data_type)
                if kind != axis.kind:
                    raise InputError(
                        "--x", f"hold {axis.kind}s, as in the data of the curve",
                        f"'{role.column}' in '{place}' holds {kind}s", "cast the column",
                    )  # fmt: skip
                if kind == "timestamp" and (plain.tz is None) != (axis.zone is None):
                    words = ["without a zone", "with a zone"]
                    raise InputError(
                        "--x", f"hold times {words[axis.zone is not None]}, as in the data of the "
                        "curve", f"'{role.column}' in '{place}' holds times "
                        f"{words[plain.tz is not None]}", "write the zone to the column",
                    )  # fmt: skip
                types.append(plain)
        if axis.kind not in ("timestamp", "duration") or not types:
            return axis
        unit = finest_unit([axis.data_type(), *types])
        finer = {"s": 1, "ms": 10**3, "us": 10**6, "ns": 10**9}
        return dataclasses.replace(
            axis, unit=unit, origin=axis.origin * (finer[unit] // finer[axis.unit])
        )

    def _schema(self, place: int) -> pa.Schema:
        """The columns that are written for one file."""
        whole = self.reader.schemas[place]
        fields = [whole.field(name) for name in self._written[place]]
        y_metadata = whole.field(self.wishes.y).metadata or {}
        unit = {b"unit": y_metadata[b"unit"]} if b"unit" in y_metadata else None
        expected, residual, z, status = self.wishes.new_columns
        fields += [
            pa.field(expected, pa.float64(), metadata=unit),
            pa.field(residual, pa.float64(), metadata=unit),
            pa.field(z, pa.float64()),
            pa.field(status, pa.dictionary(pa.int8(), pa.string())),
        ]
        metadata = dict(whole.metadata or {})
        if self.wishes.keep is not None:
            metadata.pop(b"pandas", None)  # it lists columns that may be gone
        return pa.schema(fields, metadata=metadata)

    def new_part(self) -> Part:
        """Return a part without rows."""
        return Part(Tally(self._lookup.units))

    def batches(self, task: Task, part: Part) -> Iterator[pa.RecordBatch]:
        """Score one task from start to end.

        Parameters
        ----------
        task : Task
            One of the reader's tasks.
        part : Part
            Updated with what became of the rows.

        Yields
        ------
        pyarrow.RecordBatch
            Rows with the new columns.

        Raises
        ------
        ReadError
            Damage, another number of rows than the footer says, or a file that changed.
        InputError
            A value that a float64 cannot hold.
        """
        place = self.reader.place_of[task.index]
        record = self.reader.files[place] if self.reader.files else None
        if record is not None:
            check_unchanged(record)
        if task.index in self._pruned:
            part.read += task.rows or 0
            part.filtered += task.rows or 0
            return
        seen = 0
        finder = self._units.finder()
        for batch in self.reader.batches(task.index, self._needed[place], BATCH_ROWS):
            seen += batch.num_rows
            part.read += batch.num_rows
            yield self._scored(batch, place, part, finder)
        if task.rows is not None and seen != task.rows:
            raise ReadError(
                "DATA", "hold as many rows as it says",
                f"{task.label} delivered {seen:,} of {task.rows:,} rows",
                "copy or write the file again",
            )  # fmt: skip
        if record is not None:
            check_unchanged(record)

    def _scored(
        self, batch: pa.RecordBatch, place: int, part: Part, finder: UnitFinder
    ) -> pa.RecordBatch:
        columns = dict(zip(self._needed[place], batch.columns, strict=True))
        rows = batch.num_rows
        if self._filters:
            mask = self._filters[place].mask(batch).fill_null(False)
            if mask.true_count < rows:
                columns = {name: take_where(one, mask) for name, one in columns.items()}
                part.filtered += rows - mask.true_count
                rows = mask.true_count
        floats = [
            _with_nan(cast(columns[role.column]))
            for role, cast in zip(self._roles, self._casts[place], strict=True)
        ]
        root_weight = None
        if len(floats) > 2:
            root_weight = root_of(floats[2])
        unit, unknown = finder.find(columns, rows)
        part.note_unknown(unknown)
        scored = self._lookup.score(floats[0], floats[1], unit, self.wishes.z_limit, root_weight)
        part.tally.add(scored, unit)
        status = pa.DictionaryArray.from_arrays(pa.array(scored.status), _STATUS_WORDS)
        arrays = [columns[name] for name in self._written[place]]
        arrays += [_null_where_nan(one) for one in scored[:3]] + [status]
        if self.wishes.flagged_only:
            flagged = pa.array((scored.status == ABOVE) | (scored.status == BELOW))
            arrays = [take_where(one, flagged) for one in arrays]
        out = pa.RecordBatch.from_arrays(arrays, schema=self.schemas[place])
        part.written += out.num_rows
        return out


def _kept_columns(reader: Reader, wishes: Wishes) -> list[list[str]]:
    """The columns to keep of each file, in its own order."""
    known = list(dict.fromkeys(name for schema in reader.schemas for name in schema.names))
    for name in wishes.keep or ():
        if name not in known:
            raise InputError(
                "--keep", "name columns of DATA", f"'{name}' is none", advise(name, known)
            )
    kept = []
    for place, schema in zip(reader.places, reader.schemas, strict=True):
        names = [one for one in schema.names if wishes.keep is None or one in wishes.keep]
        for name in names:
            if count_fields(schema, name) > 1:
                raise InputError(
                    "DATA", "name each column once", f"'{place}' has several called '{name}'",
                    "rename all but one, or leave them out with --keep",
                )  # fmt: skip
            if name in wishes.new_columns:
                raise InputError(
                    "DATA", f"have no column called '{name}', which is added",
                    f"'{place}' has one", "give the new columns other names, as in --prefix new_",
                )  # fmt: skip
        kept.append(names)
    return kept


def _in_folders(reader: Reader, place: int, relative: Sequence[str] | None) -> set[str]:
    """The columns of a file that the folders below the one written tell."""
    if relative is None or not isinstance(reader, ParquetReader | ArrowReader | CsvReader):
        return set()
    return set(partition_keys(relative[place])) - set(reader._own[place].names)


def take_where(array: pa.Array, mask: pa.BooleanArray) -> pa.Array:
    """Return the values of any column at which the mask is true, in the column's own type."""
    kind = array.type
    if pt.is_run_end_encoded(kind):
        return pc.run_end_encode(pc.run_end_decode(array).filter(mask), kind.run_end_type)
    held = filterable_type(kind)
    if held != kind:
        return array.cast(held).filter(mask).cast(kind)
    return array.filter(mask)


def _with_nan(values: Values) -> Floats:
    if values.valid is None:
        return values.floats
    return np.where(values.valid, values.floats, np.nan)


def _null_where_nan(values: Floats) -> pa.Array:
    missing = np.isnan(values)
    return pa.array(values, mask=missing) if missing.any() else pa.array(values)


Deliver = Callable[[int, Part, Iterator[tuple[Task, Iterator[pa.RecordBatch]]]], None]


def run_pass(
    job: ScorePass, deliver: Deliver, threads: int, report: Callable[[int], None]
) -> Iterator[Part]:
    """Score every file, several at a time, and give what became of each in order.

    Parameters
    ----------
    job : ScorePass
        The data.
    deliver : callable
        Takes the place of a file, the part that tells of its rows when they are all delivered,
        and an iterator of its tasks with their batches, in order; writes them. It runs in a
        thread of its own where there are several files.
    threads : int
        Files at a time. Of a single file, row groups are scored ahead of the writing.
    report : callable
        Called with the number of rows of each batch, one call at a time.

    Yields
    ------
    Part
        One for each file, in the order of the files.

    Raises
    ------
    Exception
        What reading or writing raised first in the order of files; the others are stopped.
    """
    places = range(len(job.reader.places))
    workers = min(threads, len(places))
    ahead = threads // workers
    stop = Event()
    lock = Lock()

    def feed(task: Task, part: Part) -> Iterator[pa.RecordBatch]:
        before = 0
        for batch in job.batches(task, part):
            if stop.is_set():
                return
            with lock:
                report(part.read - before)
            before = part.read
            yield batch

    def run(place: int) -> Part:
        whole = job.new_part()
        tasks = job.tasks_of[place]

        def each() -> Iterator[tuple[Task, Iterator[pa.RecordBatch]]]:
            for task, part, batches in _ahead(job, tasks, feed, ahead, stop):
                yield task, batches
                whole.merge(part)

        deliver(place, whole, each())
        return whole

    try:
        if workers == 1:
            yield from map(run, places)
            return
        pool = ThreadPoolExecutor(workers, thread_name_prefix="fastsmooth")
        pending: deque[Future[Part]] = deque()
        try:
            for place in places:
                if len(pending) >= 2 * workers:
                    yield pending.popleft().result()
                pending.append(pool.submit(run, place))
            while pending:
                yield pending.popleft().result()
        finally:
            stop.set()
            pool.shutdown(wait=True, cancel_futures=True)
    finally:
        stop.set()


def _ahead(
    job: ScorePass, tasks: Sequence[Task], feed: Callable[[Task, Part], Iterator[pa.RecordBatch]],
    threads: int, stop: Event,
) -> Iterator[tuple[Task, Part, Iterator[pa.RecordBatch]]]:  # fmt: skip
    """Score tasks while those before are written; give each with its batches, in order."""
    if threads == 1:
        for task in tasks:
            part = job.new_part()
            yield task, part, feed(task, part)
        return

    ended = Event()

    def run(task: Task, part: Part, line: queue.SimpleQueue[Any], free: Semaphore) -> None:
        for batch in feed(task, part):
            while not free.acquire(timeout=0.1):
                if stop.is_set() or ended.is_set():
                    return
            line.put(batch)

    pool = ThreadPoolExecutor(threads, thread_name_prefix="fastsmooth-ahead")
    # Tasks start in order, so the one that is waited for always runs or has run.
    pending: deque[tuple[Task, Part, Iterator[pa.RecordBatch]]] = deque()
    try:
        for task in tasks:
            part = job.new_part()
            line: queue.SimpleQueue[Any] = queue.SimpleQueue()
            free = Semaphore(_BATCHES_AHEAD)
            future = pool.submit(run, task, part, line, free)
            future.add_done_callback(partial(_end, line))
            pending.append((task, part, _drain(line, free, future)))
            if len(pending) > threads:
                yield pending.popleft()
        while pending:
            yield pending.popleft()
    finally:
        ended.set()
        pool.shutdown(wait=True, cancel_futures=True)


def _end(line: queue.SimpleQueue[Any], _: Future[None]) -> None:
    line.put(None)


def _drain(
    line: queue.SimpleQueue[Any], free: Semaphore, future: Future[None]
) -> Iterator[pa.RecordBatch]:
    while True:
        batch = line.get()
        if batch is None:
            future.result()
            return
        free.release()
        yield batch
