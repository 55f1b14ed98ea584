"""Data of any kind as chunks of float64 columns, in a fixed order, as often as asked."""

from __future__ import annotations

import math
import os
from collections import deque
from collections.abc import Callable, Iterator, Mapping, Sequence
from concurrent.futures import Future, ThreadPoolExecutor
from dataclasses import dataclass, field
from threading import Event, Lock
from types import TracebackType
from typing import TYPE_CHECKING, Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from fastsmooth.addresses import DEFAULT_TIMEOUT_SECONDS
from fastsmooth.axis import Axis
from fastsmooth.errors import InputError, ReadError
from fastsmooth.files import FileRecord, Task, check_unchanged, file_format, find_files, join_names

if TYPE_CHECKING:
    import pyarrow as pa

    from fastsmooth.casts import Role, Values
    from fastsmooth.readers import Reader
    from fastsmooth.where import Filter

__all__ = ["Axis", "Chunk", "Columns", "FileRecord", "Source", "Task", "open_source"]

T = TypeVar("T")
CHUNK_ROWS = 65_536
PENDING_PER_THREAD = 2


@dataclass(frozen=True)
class Columns:
    """Which columns play which part.

    Parameters
    ----------
    x, y : str
        The reading along the axis and the reading whose mean is sought.
    weight : str or None
        Weight of each row.
    count : str or None
        Number of readings that each row stands for.
    block : str or None
        What makes rows belong together; delivered as the first of the extra columns.
    extra : tuple of str
        Further columns, delivered as they are.
    """

    x: str
    y: str
    weight: str | None = None
    count: str | None = None
    extra: tuple[str, ...] = ()
    block: str | None = None

    def __post_init__(self) -> None:
        if self.block is not None and self.block not in self.extra[:1]:
            object.__setattr__(self, "extra", (self.block, *self.extra))


@dataclass(frozen=True)
class Fixed:
    """What all files of a set share: some of them are opened alone as they were with the others.

    Parameters
    ----------
    axis : Axis
        What the floats of x mean.
    key_types : mapping of str to pyarrow.DataType
        Types of the columns that stand in folder names.
    """

    axis: Axis
    key_types: Mapping[str, pa.DataType]


@dataclass
class Chunk:
    """Consecutive rows, in the file's own order, without the rows that hold a null.

    Parameters
    ----------
    x, y : (n,) float64
        Values, C-contiguous, possibly read-only. NaN and infinities are left in. On a temporal
        axis x is seconds since the origin.
    weight, count : (n,) float64 or None
        Values, if such columns are named.
    extra : tuple of pyarrow.Array
        Further columns, n values each, as they are.
    rows : int
        Rows read, before the row filter and before nulls were removed.
    filtered : int
        Rows that the row filter dropped.
    refused : dict of str to int
        Rows with a null, by the first of ``x null``, ``y null``, ``weight null``, ``count null``
        that applies.
    positions : (n,) int64 or None
        Place of each row among the rows read; None when none was dropped.
    units : tuple of pyarrow.Array
        Columns that tell units apart, n values each.
    refused_units : dict of str to tuple of pyarrow.Array
        The same columns of the rows in `refused`.
    """

    x: NDArray[np.float64]
    y: NDArray[np.float64]
    weight: NDArray[np.float64] | None
    count: NDArray[np.float64] | None
    extra: tuple[pa.Array, ...]
    rows: int
    filtered: int
    refused: dict[str, int] = field(default_factory=dict)
    positions: NDArray[np.int64] | None = None
    units: tuple[pa.Array, ...] = ()
    refused_units: dict[str, tuple[pa.Array, ...]] = field(default_factory=dict)


class Source:
    """An opened set of data, to be passed over once or several times.

    Use as a context manager, or call `close`.

    Parameters
    ----------
    reader : Reader
        Where record batches come from.
    columns : Columns
        Which columns play which part.
    where : str or None
        Row filter.
    fixed : Fixed or None
        What was fixed when all files were opened; None fixes it now.
    units : sequence of str
        Columns that tell units apart, delivered as they are or as dictionaries.

    Attributes
    ----------
    axis : Axis
        What the floats of x mean; the same for every file.
    files : tuple of FileRecord
        The files as they were when opened; empty for data in memory.
    tasks : tuple of Task
        What can be read on its own, in the fixed order.
    rows_expected : int or None
        Rows before the filter, if known.
    x_range : tuple of float or None
        Smallest and largest x by the files' statistics, over row groups in which rows may meet
        the filter; None unless every one of them has a finite range.
    x_unit, y_unit : str
        Units from the fields' metadata; empty if there are none.
    fixed : Fixed
        What is needed to open some of the files alone.
    """

    def __init__(
        self,
        reader: Reader,
        columns: Columns,
        where: str | None,
        fixed: Fixed | None = None,
        units: Sequence[str] = (),
    ) -> None:
        """Check the columns, parse the filter and fix the axis; see `open_source`."""
        from fastsmooth.casts import caster
        from fastsmooth.opening import (
            check_kinds,
            check_present,
            check_some_value,
            find_pruned,
            make_axis,
            parse_filters,
            unit_of,
        )

        self._reader = reader
        self.columns = columns
        self.where = where
        self._roles = _roles_of(columns)
        self._units = tuple(units)
        check_present(reader, self._roles, columns.extra, columns.block, self._units)
        if columns.block is not None:
            from fastsmooth.blocks import check_alike

            block = columns.block
            check_alike(block, [schema.field(block).type for schema in reader.schemas])
        for name in self._units:
            from fastsmooth.blocks import check_alike

            check_alike(name, [schema.field(name).type for schema in reader.schemas], "--by")
        self._filters = parse_filters(reader, where)
        used = [role.column for role in self._roles] + list(columns.extra)
        used += [name for one in self._filters for name in one.columns]
        # What nothing else reads may come in any form, or not at all where it is constant.
        self._only_units = frozenset(self._units) - frozenset(used)
        self._needed = tuple(dict.fromkeys([*used, *self._units]))
        schemas = reader.schemas
        reader.prepare(self._needed)
        reader.encode(self._only_units)
        if reader.schemas is not schemas:
            # A temporary file may store a column in another type than announced.
            self._filters = parse_filters(reader, where)
        self.files = reader.files
        self.tasks = reader.tasks
        self.rows_expected = reader.rows_expected
        self.x_unit = unit_of(reader, columns.x)
        self.y_unit = unit_of(reader, columns.y)
        if fixed is None:
            kinds = check_kinds(reader, self._roles)
            check_some_value(reader, self._roles)
            fixed = Fixed(make_axis(reader, self._roles[0], kinds), reader.key_types)
        self.fixed = fixed
        self.axis = fixed.axis
        self._pruned = find_pruned(reader, self._filters)
        self.x_range = self._statistics_range()
        self._casts = [
            tuple(
                caster(role, schema.field(role.column).type, self.axis if place_x else None)
                for role, place_x in zip(self._roles, (True, False, False, False), strict=False)
            )
            for schema in reader.schemas
        ]

    def __enter__(self) -> Source:
        """Return the source itself."""
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Close the source."""
        self.close()

    @property
    def schemas(self) -> Sequence[pa.Schema]:
        """The schema of each file, or of the data in memory."""
        return self._reader.schemas

    @property
    def file_of_task(self) -> Sequence[int]:
        """The place in `files` of each task's file."""
        return self._reader.place_of

    def shows_offset(self, column: str) -> bool:
        """Tell whether times are written with an offset from UTC that reading them loses."""
        return self._reader.shows_offset(column)

    def close(self) -> None:
        """Release what the source holds, temporary files included."""
        self._reader.close()

    def constant_units(self, task: Task) -> tuple[pa.Array, ...] | None:
        """Return the one value of each unit column in a task, (1,) each, if known unread."""
        from fastsmooth.casts import constant_array

        arrays = []
        for name in self._units:
            value = self._reader.constant(task.index, name) if name in self._only_units else None
            if value is None:
                return None
            arrays.append(constant_array(value, 1))
        return tuple(arrays)

    def chunks(self, task: Task, rows: int = CHUNK_ROWS) -> Iterator[Chunk]:
        """Read one task from start to end.

        Parameters
        ----------
        task : Task
            One of `tasks`.
        rows : int
            Rows of each chunk before filtering; the last may have fewer.

        Yields
        ------
        Chunk
            The rows. A task that cannot meet the filter by its statistics is one empty chunk
            that counts all its rows as filtered.

        Raises
        ------
        ReadError
            Damage, another number of rows than the footer says, or a file that changed.
        InputError
            Integers beyond 2^53.
        """
        record = self._check_task_file(task)
        if task.index in self._pruned:
            yield self._empty_chunk(task)
            return
        place = self._reader.place_of[task.index]
        filter_ = self._filters[place] if self._filters else None
        casts = self._casts[place]
        found = {name: self._reader.constant(task.index, name) for name in self._only_units}
        constants = {name: value for name, value in found.items() if value is not None}
        needed = tuple(name for name in self._needed if name not in constants)
        seen = 0
        for batch in self._reader.batches(task.index, needed, rows):
            seen += batch.num_rows
            yield self._chunk(batch, needed, casts, filter_, constants)
        if task.rows is not None and seen != task.rows:
            raise ReadError(
                "DATA",
                "hold as many rows as it says",
                f"{task.label} delivered {seen:,} of {task.rows:,} rows",
                "copy or write the file again",
            )
        if record is not None:
            check_unchanged(record)

    def map_tasks(
        self,
        function: Callable[[Task, Iterator[Chunk]], T],
        threads: int,
        chunk_rows: int = CHUNK_ROWS,
        progress: Callable[[int], None] | None = None,
    ) -> Iterator[T]:
        """Apply a function to every task, several at a time, and give results in task order.

        Parameters
        ----------
        function : callable
            Takes a task and its chunks, and returns a result. It runs in a thread of its own and
            must not share what it changes.
        threads : int
            Tasks at a time; 1 runs them in the caller's thread.
        chunk_rows : int
            Rows of each chunk.
        progress : callable or None
            Called with the number of rows of each chunk as it is read, one call at a time.

        Yields
        ------
        object
            Results in task order, at most two for each thread kept waiting.

        Raises
        ------
        Exception
            What reading or `function` raised first in task order; the other tasks are stopped.
        """
        return self.map_groups(
            lambda parts: next(function(task, chunks) for task, chunks in parts),
            [(task,) for task in self.tasks],
            threads,
            chunk_rows,
            progress,
        )

    def map_groups(
        self,
        function: Callable[[Iterator[tuple[Task, Iterator[Chunk]]]], T],
        groups: Sequence[Sequence[Task]],
        threads: int,
        chunk_rows: int = CHUNK_ROWS,
        progress: Callable[[int], None] | None = None,
    ) -> Iterator[T]:
        """Apply a function to groups of tasks, several groups at a time; results in group order.

        Parameters
        ----------
        function : callable
            Takes an iterator of tasks with their chunks, and returns a result.
        groups : sequence of sequences of Task
            Tasks of one group are read one after the other.
        threads, chunk_rows, progress
            As for `map_tasks`.
        """
        if threads < 1:
            raise InputError("--threads", "be at least 1", f"it is {threads}", "leave it out")
        return self._map_groups(function, groups, threads, chunk_rows, progress)

    def _map_groups(
        self,
        function: Callable[[Iterator[tuple[Task, Iterator[Chunk]]]], T],
        groups: Sequence[Sequence[Task]],
        threads: int,
        chunk_rows: int,
        progress: Callable[[int], None] | None,
    ) -> Iterator[T]:
        stop = Event()
        lock = Lock()

        def feed(task: Task) -> Iterator[Chunk]:
            for chunk in self.chunks(task, chunk_rows):
                if stop.is_set():
                    return
                if progress is not None:
                    with lock:
                        progress(chunk.rows)
                yield chunk

        def run(group: Sequence[Task]) -> T:
            return function((task, feed(task)) for task in group)

        if threads == 1:
            yield from map(run, groups)
            return
        pool = ThreadPoolExecutor(threads, thread_name_prefix="fastsmooth")
        pending: deque[Future[T]] = deque()
        try:
            for group in groups:
                if len(pending) >= PENDING_PER_THREAD * threads:
                    yield pending.popleft().result()
                pending.append(pool.submit(run, group))
            while pending:
                yield pending.popleft().result()
        finally:
            stop.set()
            pool.shutdown(wait=True, cancel_futures=True)

    def _chunk(
        self,
        batch: pa.RecordBatch,
        needed: Sequence[str],
        casts: Sequence[Callable[[pa.Array], Values]],
        filter_: Filter | None,
        constants: Mapping[str, pa.Scalar],
    ) -> Chunk:
        from pyarrow.types import is_dictionary

        from fastsmooth.casts import constant_array, filterable_type, plain_array

        rows = kept = batch.num_rows
        positions: NDArray[np.int64] | None = None
        column = dict(zip(needed, batch.columns, strict=True))
        as_they_are = [*self.columns.extra]
        for name in self.columns.extra:
            column[name] = column[name].cast(filterable_type(column[name].type))
        for name in self._units:
            if name not in constants and name not in as_they_are:
                as_they_are.append(name)
                if not is_dictionary(column[name].type):
                    column[name] = plain_array(column[name])
        if filter_ is not None:
            mask = filter_.mask(batch)
            kept = mask.true_count
            if kept < rows:
                positions = np.flatnonzero(mask.fill_null(False).to_numpy(zero_copy_only=False))
                # Columns that only the filter reads are done with. Runs cannot be filtered.
                plain = {role.column: plain_array(column[role.column]) for role in self._roles}
                others = {name: column[name] for name in as_they_are}
                column = {name: array.filter(mask) for name, array in (plain | others).items()}
        parts = [cast(column[role.column]) for role, cast in zip(self._roles, casts, strict=True)]
        extra = tuple(column[name] for name in self.columns.extra)
        units = tuple(
            constant_array(constants[name], kept) if name in constants else column[name]
            for name in self._units
        )
        refused: dict[str, int] = {}
        refused_units: dict[str, tuple[pa.Array, ...]] = {}
        keep: NDArray[np.bool_] | None = None
        for role, part in zip(self._roles, parts, strict=True):
            if part.valid is not None:
                missing = ~part.valid if keep is None else keep & ~part.valid
                reason, number = f"{role.name} null", int(np.count_nonzero(missing))
                keep = part.valid if keep is None else keep & part.valid
                if number:
                    refused[reason] = number
                    refused_units[reason] = _select(units, missing)
        floats = [part.floats for part in parts]
        if keep is not None:
            floats = [values[keep] for values in floats]
            positions = np.flatnonzero(keep) if positions is None else positions[keep]
            extra, units = _select(extra, keep), _select(units, keep)
        named = {role.name: values for role, values in zip(self._roles, floats, strict=True)}
        return Chunk(
            named["x"],
            named["y"],
            named.get("weight"),
            named.get("count"),
            extra,
            rows,
            rows - kept,
            refused,
            positions,
            units,
            refused_units,
        )

    def _empty_chunk(self, task: Task) -> Chunk:
        import pyarrow as pa

        from fastsmooth.casts import filterable_type

        schema = self._reader.schemas[self._reader.place_of[task.index]]
        names = (*self.columns.extra, *self._units)
        empty = [pa.array([], filterable_type(schema.field(name).type)) for name in names]
        none = np.empty(0)
        return Chunk(
            none,
            none,
            none if self.columns.weight is not None else None,
            none if self.columns.count is not None else None,
            tuple(empty[: len(self.columns.extra)]),
            rows=task.rows or 0,
            filtered=task.rows or 0,
            units=tuple(empty[len(self.columns.extra) :]),
        )

    def _check_task_file(self, task: Task) -> FileRecord | None:
        if not self.files:
            return None
        record = self.files[self._reader.place_of[task.index]]
        check_unchanged(record)
        return record

    def _statistics_range(self) -> tuple[float, float] | None:
        from fastsmooth.opening import axis_float

        lows: list[float] = []
        highs: list[float] = []
        for task in self.tasks:
            if task.index in self._pruned:
                continue
            extent = self._reader.extent(task.index, self.columns.x)
            if extent is not None and extent.nulls is not None and extent.nulls == task.rows:
                continue
            if extent is None or extent.low is None or extent.high is None:
                return None
            lows.append(axis_float(extent.low, extent.unit, self.axis))
            highs.append(axis_float(extent.high, extent.unit, self.axis))
        if not lows or not math.isfinite(min(lows)) or not math.isfinite(max(highs)):
            return None
        return min(lows), max(highs)


def open_source(
    data: Any,
    columns: Columns,
    *,
    where: str | None = None,
    fixed: Fixed | None = None,
    units: Sequence[str] = (),
    timeout_seconds: float = DEFAULT_TIMEOUT_SECONDS,
) -> Source:
    """Open data of any kind.

    Parameters
    ----------
    data : path, list of paths, dict, tuple, or frame
        A file, folder or glob (Parquet, Arrow IPC or CSV), here or in an object store
        (``s3://bucket/folder``), or a list of these; a dict of column name to one-dimensional
        array; a tuple of arrays in the order x, y, weight, count, extra
        (those that `columns` names); a pyarrow Dataset; a polars LazyFrame; or any object with
        ``__arrow_c_stream__``.
    columns : Columns
        Which columns play which part.
    where : str or None
        Row filter, an SQL condition.
    fixed : Fixed or None
        Where `data` are some files of a larger set: what was fixed when all were opened.
    units : sequence of str
        Columns that tell units apart.
    timeout_seconds : float
        How long a silent object store is waited for, each time.

    Returns
    -------
    Source
        To be used as a context manager.

    Raises
    ------
    InputError
        Data, a column or the filter cannot be used.
    ReadError
        A file is damaged.

    Examples
    --------
    >>> import numpy as np
    >>> arrays = {"wet_bulb_c": np.array([9.5, 10.0]), "power_kw": np.array([30.0, 31.0])}
    >>> with open_source(arrays, Columns("wet_bulb_c", "power_kw")) as source:
    ...     [chunk.rows for task in source.tasks for chunk in source.chunks(task)]
    [2]
    """
    reader = _open_reader(data, columns, fixed, timeout_seconds)
    try:
        return Source(reader, columns, where, fixed, units)
    except BaseException:
        reader.close()
        raise


def _open_reader(
    data: Any, columns: Columns, fixed: Fixed | None, timeout_seconds: float
) -> Reader:
    from fastsmooth import readers

    if isinstance(data, str | os.PathLike):
        return _open_files(find_files(data, timeout_seconds), columns, fixed)
    if isinstance(data, list | tuple) and (
        not data or all(isinstance(one, str | os.PathLike) for one in data)
    ):
        return _open_files(find_files(data, timeout_seconds), columns, fixed)
    if isinstance(data, tuple):
        names = [columns.x, columns.y, columns.weight, columns.count, *columns.extra]
        named = [name for name in names if name is not None]
        if len(data) != len(named):
            raise InputError(
                "DATA",
                "hold one array for each named column",
                f"it holds {len(data)} arrays for {join_names(named)}",
                "hand in a dict of name to array",
            )
        data = dict(zip(named, data, strict=True))
    if isinstance(data, dict):
        return readers.TableReader(readers.table_from_arrays(data), "the arrays")
    from fastsmooth.frames import open_frame

    return open_frame(data)


def _open_files(paths: tuple[str, ...], columns: Columns, fixed: Fixed | None = None) -> Reader:
    kind = file_format(paths[0])
    key_types = None if fixed is None else fixed.key_types
    if kind == "csv":
        from fastsmooth.csvfile import CsvReader

        return CsvReader(paths, _roles_of(columns), key_types)
    if kind == "arrow":
        from fastsmooth.arrowfile import ArrowReader

        return ArrowReader(paths, key_types)
    from fastsmooth.parquet import ParquetReader

    return ParquetReader(paths, key_types)


def _select(arrays: tuple[pa.Array, ...], keep: NDArray[np.bool_]) -> tuple[pa.Array, ...]:
    import pyarrow as pa

    mask = pa.array(keep)
    return tuple(array.filter(mask) for array in arrays)


def _roles_of(columns: Columns) -> tuple[Role, ...]:
    from fastsmooth.casts import Role

    named = {
        "x": columns.x,
        "y": columns.y,
        "weight": columns.weight,
        "count": columns.count,
    }
    return tuple(Role(name, column) for name, column in named.items() if column is not None)
