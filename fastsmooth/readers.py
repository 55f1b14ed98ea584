"""Readers: each kind of data as tasks that deliver Arrow record batches of named columns."""

from __future__ import annotations

import abc
import weakref
from collections.abc import Iterable, Iterator, Mapping, Sequence
from dataclasses import dataclass

import numpy as np
import pyarrow as pa

from fastsmooth.errors import InputError
from fastsmooth.files import FileRecord, Task, ask_each, partition_keys, read_identity

ROWS_PER_TABLE_TASK = 1 << 20


@dataclass(frozen=True)
class Extent:
    """What a row group's statistics say of one column.

    Parameters
    ----------
    low, high : int or float or None
        Smallest and largest value, NaN and null aside; None if unknown.
    unit : str
        Unit of the counts for temporal columns, else empty.
    nulls : int or None
        Number of nulls, if known.
    """

    low: float | None
    high: float | None
    unit: str
    nulls: int | None


class Reader(abc.ABC):
    """Data opened for reading, possibly several times.

    `schemas` has one schema for each place (file or frame), named in `places`; `place_of` gives
    the place of each task. Tasks exist after `prepare`. `key_types` are the types of columns that
    stand in folder names.
    """

    files: tuple[FileRecord, ...] = ()
    places: tuple[str, ...]
    schemas: tuple[pa.Schema, ...]
    tasks: tuple[Task, ...] = ()
    place_of: tuple[int, ...] = ()
    rows_expected: int | None = None
    key_types: Mapping[str, pa.DataType] = {}
    _spool: weakref.finalize | None = None

    def prepare(self, columns: Sequence[str]) -> None:  # noqa: B027 - most have nothing to prepare
        """Learn which columns will be read; called once, before the first `batches`."""

    @abc.abstractmethod
    def batches(self, index: int, columns: Sequence[str], rows: int) -> Iterator[pa.RecordBatch]:
        """Deliver a task's rows in order, `rows` at a time, with just `columns`, in that order."""

    def encode(self, columns: Iterable[str]) -> None:  # noqa: B027 - most cannot do better
        """Learn which text columns may be delivered as dictionaries, where that is faster."""

    def extent(self, index: int, column: str) -> Extent | None:
        """Return the statistics of a task's column, if there are any."""
        del index, column
        return None

    def constant(self, index: int, column: str) -> pa.Scalar | None:
        """Return the value that a task's column holds in every row, if that is known unread."""
        del index, column
        return None

    def shows_offset(self, column: str) -> bool:
        """Tell whether times are written with an offset from UTC that reading them loses."""
        del column
        return False

    def close(self) -> None:
        """Remove temporary files, if there are any."""
        if self._spool is not None:
            self._spool()


def count_fields(schema: pa.Schema, column: str) -> int:
    """Count the fields of a name.

    Parameters
    ----------
    schema : pyarrow.Schema
        A schema, possibly with equal names.
    column : str
        A name.

    Returns
    -------
    int
        How many fields have that name.
    """
    return len(schema.get_all_field_indices(column))


def pick(batch: pa.RecordBatch, columns: Sequence[str]) -> pa.RecordBatch:
    """Select columns by name from a batch that may hold others, even of equal names.

    Parameters
    ----------
    batch : pyarrow.RecordBatch
        A batch.
    columns : sequence of str
        Names, each of exactly one column of the batch.

    Returns
    -------
    pyarrow.RecordBatch
        The columns in the order asked for.
    """
    if batch.schema.names == list(columns):
        return batch
    return batch.select([batch.schema.get_field_index(name) for name in columns])


def rebatch(batches: Iterable[pa.RecordBatch], rows: int) -> Iterator[pa.RecordBatch]:
    """Cut and join batches so that each but the last has exactly `rows` rows.

    Where chunks begin then depends on the rows alone, not on how they were written or sent.

    Parameters
    ----------
    batches : iterable of pyarrow.RecordBatch
        Batches of one schema.
    rows : int
        Rows of each batch delivered.

    Yields
    ------
    pyarrow.RecordBatch
        A view of one incoming batch where it lies inside one, else a copy.
    """
    held: list[pa.RecordBatch] = []
    missing = rows
    for batch in batches:
        start = 0
        while batch.num_rows - start >= missing:
            held.append(batch.slice(start, missing))
            start += missing
            missing = rows
            yield _join(held)
            held = []
        if start < batch.num_rows:
            held.append(batch.slice(start))
            missing -= batch.num_rows - start
    if held:
        yield _join(held)


def _join(batches: list[pa.RecordBatch]) -> pa.RecordBatch:
    if len(batches) == 1:
        return batches[0]
    # Dictionaries may differ from batch to batch; a table unifies them.
    table = pa.Table.from_batches(batches).unify_dictionaries().combine_chunks()
    return table.to_batches()[0]


class TableReader(Reader):
    """A table in memory, cut into tasks of a million rows."""

    def __init__(self, table: pa.Table, name: str) -> None:
        """Cut `table`, called `name` in errors."""
        self._table = table
        self.places = (name,)
        self.schemas = (table.schema,)
        self.rows_expected = table.num_rows
        starts = range(0, table.num_rows, ROWS_PER_TABLE_TASK)
        self.tasks = tuple(
            Task(
                index,
                f"rows {start:,} to {min(start + ROWS_PER_TABLE_TASK, table.num_rows) - 1:,}",
                min(ROWS_PER_TABLE_TASK, table.num_rows - start),
            )
            for index, start in enumerate(starts)
        )
        self.place_of = (0,) * len(self.tasks)

    def batches(self, index: int, columns: Sequence[str], rows: int) -> Iterator[pa.RecordBatch]:
        """Deliver views of the table."""
        numbers = [self._table.schema.get_field_index(name) for name in columns]
        part = self._table.select(numbers).slice(index * ROWS_PER_TABLE_TASK, ROWS_PER_TABLE_TASK)
        return rebatch(part.to_batches(), rows)

    def extent(self, index: int, column: str) -> Extent:
        """Count a stretch's nulls."""
        number = self._table.schema.get_field_index(column)
        part = self._table.column(number).slice(index * ROWS_PER_TABLE_TASK, ROWS_PER_TABLE_TASK)
        return Extent(None, None, "", part.null_count)


def table_from_arrays(arrays: dict[str, object]) -> pa.Table:
    """Wrap named one-dimensional arrays as a table, without a copy where their memory allows.

    Parameters
    ----------
    arrays : dict of str to (n,) array-like
        NumPy arrays, lists, Arrow arrays, or columns of frames.

    Returns
    -------
    pyarrow.Table
        n rows.

    Raises
    ------
    InputError
        Other than one dimension, unequal lengths, or values of no column type.
    """
    if not arrays:
        raise InputError("DATA", "hold at least one array", "it holds none", "hand in x and y")
    columns = {}
    for name, values in arrays.items():
        if isinstance(values, pa.Array | pa.ChunkedArray):
            columns[name] = values
            continue
        if hasattr(values, "__arrow_c_stream__"):
            # A column of a frame keeps its time zone, categories and nulls.
            columns[name] = pa.chunked_array(values)
            continue
        array = np.asarray(values)
        if array.ndim != 1:
            raise InputError(
                "DATA",
                "hold one-dimensional arrays",
                f"'{name}' has {array.ndim} dimensions",
                "hand in one column at a time",
            )
        mask = np.ma.getmaskarray(values) if isinstance(values, np.ma.MaskedArray) else None
        # Arrow shares native-endian memory only.
        native = array.astype(array.dtype.newbyteorder("="), copy=False)
        try:
            columns[name] = pa.array(native, mask=mask, from_pandas=False)
        except (pa.ArrowException, TypeError) as error:
            raise InputError(
                "DATA",
                "hold arrays of numbers, times or text",
                f"'{name}' is of type {array.dtype}",
                "convert it first",
            ) from error
    lengths = {name: len(column) for name, column in columns.items()}
    first = next(iter(lengths))
    for name, length in lengths.items():
        if length != lengths[first]:
            raise InputError(
                "DATA",
                "hold arrays of equal length",
                f"'{first}' has {lengths[first]:,} values and '{name}' has {length:,}",
                "hand in one value of each for every row",
            )
    return pa.table(columns)


class PartitionKeys:
    """Columns that stand in folder names, ``key=value``.

    A column's type is the same in every file: integer if every value is one, else float, else
    text; or what `types` says, where the paths are some of a larger set.
    """

    def __init__(
        self, paths: Sequence[str], types: Mapping[str, pa.DataType] | None = None
    ) -> None:
        """Read the keys off every path, in order."""
        keys = [partition_keys(path) for path in paths]
        self._values: list[dict[str, pa.Scalar]] = [{} for _ in paths]
        self.types: dict[str, pa.DataType] = {}
        for name in dict.fromkeys(name for each in keys for name in each):
            texts = [each.get(name) for each in keys]
            data_type = (types or {}).get(name)
            if data_type is None:
                data_type = _common_type([text for text in texts if text is not None])
            self.types[name] = data_type
            for values, each, text in zip(self._values, keys, texts, strict=True):
                if name in each:
                    values[name] = pa.scalar(text, pa.string()).cast(data_type)

    def extend(self, schema: pa.Schema, place: int) -> pa.Schema:
        """Add the keys of file `place` to its schema; a column of the file itself comes first."""
        for name, value in self._values[place].items():
            if name not in schema.names:
                schema = schema.append(pa.field(name, value.type))
        return schema

    def value(self, place: int, name: str) -> pa.Scalar:
        """Return the constant of file `place`."""
        return self._values[place][name]

    def constants(self, place: int, own: pa.Schema) -> dict[str, pa.Scalar]:
        """Return the constants of file `place` that its `own` columns do not replace."""
        return {name: value for name, value in self._values[place].items() if name not in own.names}


def _common_type(texts: list[str]) -> pa.DataType:
    for data_type, parse in ((pa.int64(), int), (pa.float64(), float)):
        try:
            for text in texts:
                number = parse(text)
                if "_" in text or text != text.strip() or abs(number) >= 2**63:
                    raise ValueError(text)
        except ValueError:
            continue
        if texts:
            return data_type
    return pa.string()


def with_constants(
    batch: pa.RecordBatch, columns: Sequence[str], constants: dict[str, pa.Scalar]
) -> pa.RecordBatch:
    """Select columns by name, taking those that stand in folder names from `constants`.

    Parameters
    ----------
    batch : pyarrow.RecordBatch
        What the file holds.
    columns : sequence of str
        Names wanted, in order.
    constants : dict of str to pyarrow.Scalar
        Columns that the file does not hold.

    Returns
    -------
    pyarrow.RecordBatch
        The columns in the order asked for.
    """
    if not any(name in constants for name in columns):
        return pick(batch, columns)
    arrays = [
        pa.repeat(constants[name], batch.num_rows)
        if name in constants
        else batch.column(batch.schema.get_field_index(name))
        for name in columns
    ]
    return pa.RecordBatch.from_arrays(arrays, names=list(columns))


def identify(paths: Sequence[str]) -> list[FileRecord]:
    """Note the identity of files before anything of them is read.

    Parameters
    ----------
    paths : sequence of str
        Paths.

    Returns
    -------
    list of FileRecord
        One for each, rows unknown.
    """
    return ask_each(paths, lambda path: read_identity(path, None))
