"""Frames, streams and lazy frames that the caller hands in."""

from __future__ import annotations

import abc
import os
import shutil
import sys
import tempfile
import weakref
from collections import Counter
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from typing import Any

import numpy as np
import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.ipc as ipc

from fastsmooth.arrowfile import ArrowReader
from fastsmooth.errors import InputError, ReadError
from fastsmooth.files import Task
from fastsmooth.parquet import ParquetReader
from fastsmooth.readers import Extent, Reader, TableReader, pick, rebatch, table_from_arrays

IN_MEMORY = ("pandas", "polars")
# Streams whose length is asked for first: how rows are dealt to folds depends on it.
COUNTS: dict[str, Callable[[Any], int]] = {
    "duckdb": len,
    "ibis": lambda table: int(table.count().to_pyarrow().as_py()),
}


def open_frame(data: Any) -> Reader:
    """Choose the reader of an object that is neither a path nor arrays.

    Parameters
    ----------
    data : object
        A pyarrow Table, RecordBatch, RecordBatchReader or Dataset, a NumPy array with named
        fields, a polars LazyFrame, or anything with ``__arrow_c_stream__``.

    Returns
    -------
    Reader
        Its reader.

    Raises
    ------
    InputError
        An object of another kind.
    """
    if isinstance(data, pa.RecordBatch):
        data = pa.Table.from_batches([data])
    if isinstance(data, pa.Table):
        return TableReader(data, "the table")
    if isinstance(data, pa.RecordBatchReader):
        return SpoolReader(data)
    if isinstance(data, ds.Dataset):
        return _dataset_reader(data)
    if isinstance(data, np.ndarray) and data.dtype.names:
        fields = {name: data[name] for name in data.dtype.names}
        return TableReader(table_from_arrays(fields), "the array")
    module, name = type(data).__module__.partition(".")[0], type(data).__name__
    if module == "pyspark":
        # It has an Arrow stream, but one that gathers every row in this process.
        raise InputError(
            "DATA",
            "be read where it lies",
            "a Spark frame would be gathered in this process whole",
            "write it to Parquet files and name their folder",
        )
    if module == "polars" and name == "LazyFrame":
        return LazyReader(data)
    if not hasattr(data, "__arrow_c_stream__"):
        raise InputError(
            "DATA",
            "be a path, arrays or a frame",
            f"it is a {name}",
            "hand in a path, a dict of arrays, or a frame with __arrow_c_stream__",
        )
    if module in IN_MEMORY:
        _check_names(data)
        with _streaming("the frame"):
            return TableReader(pa.RecordBatchReader.from_stream(data).read_all(), "the frame")
    with _streaming("the stream", module):
        rows = COUNTS[module](data) if module in COUNTS else None
        first = pa.RecordBatchReader.from_stream(data)
    schema = pa.schema(data) if hasattr(data, "__arrow_c_schema__") else first.schema
    return StreamReader(
        lambda _: pa.RecordBatchReader.from_stream(data), schema, first, module, rows
    )


def _check_names(frame: Any) -> None:
    """Refuse a frame with two columns of one name, which cannot be handed over."""
    names = Counter(str(name) for name in getattr(frame, "columns", ()))
    for name, times in names.most_common(1):
        if times > 1:
            raise InputError(
                "DATA", "name each column once", f"{times} columns are called '{name}'",
                "rename all but one",
            )  # fmt: skip


@contextmanager
def _streaming(name: str, module: str = "") -> Iterator[None]:
    """Tell of errors of a stream; `module` is that of the object that streams."""
    own = (pa.ArrowException, OSError, TypeError, ValueError, RuntimeError, *_errors_of(module))
    try:
        yield
    except own as error:
        first_line = str(error).strip().split("\n")[0][:160]
        raise ReadError(
            "DATA",
            "deliver every row",
            f"{name} broke off ({type(error).__name__}: {first_line})",
            "check what it holds, or write it to a Parquet file and name that",
        ) from error


def _errors_of(module: str) -> tuple[type[Exception], ...]:
    """Return the base errors of the module that streams, if it is loaded and has such."""
    # Database modules derive their errors from one class of this name (PEP 249). Ibis has its
    # own, and passes on those of the database behind it.
    places = [(module, "Error")]
    if module == "ibis":
        places = [("ibis.common.exceptions", "IbisError"), ("duckdb", "Error")]
    found = [getattr(sys.modules.get(place), name, None) for place, name in places]
    return tuple(one for one in found if isinstance(one, type) and issubclass(one, Exception))


class StreamReader(Reader):
    """A source of Arrow streams that is asked for a fresh one on each pass."""

    def __init__(
        self,
        open_stream: Callable[[Sequence[str]], pa.RecordBatchReader],
        schema: pa.Schema,
        first: pa.RecordBatchReader | None = None,
        module: str = "",
        rows: int | None = None,
    ) -> None:
        """Keep `open_stream`, which takes the columns wanted and may deliver more.

        `first` is a stream that is open already, for the first pass; `module` is that of the
        object that streams, `rows` its length if known.
        """
        self._module = module
        self._open = open_stream
        self._first = first
        self._rows = rows
        self.rows_expected = rows
        self._seen = 0
        self.places = ("the stream",)
        self.schemas = (schema,)
        self.tasks = (Task(0, "the stream", None),)
        self.place_of = (0,)

    def batches(self, index: int, columns: Sequence[str], rows: int) -> Iterator[pa.RecordBatch]:
        """Deliver a fresh stream; its length must be that of the pass before."""
        delivered = 0
        with _streaming("the stream", self._module):
            first, self._first = self._first, None
            with self._open(columns) if first is None else first as stream:
                for batch in rebatch((pick(batch, columns) for batch in stream), rows):
                    delivered += batch.num_rows
                    # A pass that is not read to its end still tells that so many rows exist.
                    self._seen = max(self._seen, delivered)
                    yield self._retyped(batch)
        before = self._seen if self._rows is None else self._rows
        if delivered < before or (self._rows is not None and delivered != before):
            raise ReadError(
                "DATA",
                "deliver the same rows on each pass",
                f"the stream gave {before:,} rows first and {delivered:,} rows then",
                "write it to a Parquet file and name that",
            )
        self._rows = delivered

    def _retyped(self, batch: pa.RecordBatch) -> pa.RecordBatch:
        """Cast what comes in another type than announced, which some exporters do."""
        wanted = [self.schemas[0].field(name).type for name in batch.schema.names]
        if wanted == batch.schema.types:
            return batch
        arrays = [
            column if column.type == to else column.cast(to)
            for column, to in zip(batch.columns, wanted, strict=True)
        ]
        return pa.RecordBatch.from_arrays(arrays, names=batch.schema.names)


def _dataset_reader(dataset: ds.Dataset) -> Reader:
    # Read-ahead is cut to what keeps memory bounded. Parts of other formats take no such options.
    parquet = isinstance(getattr(dataset, "format", None), ds.ParquetFileFormat)
    scan_options = ds.ParquetFragmentScanOptions(pre_buffer=False) if parquet else None

    def open_stream(columns: Sequence[str]) -> pa.RecordBatchReader:
        scanner = dataset.scanner(
            columns={name: ds.field(name) for name in columns},
            batch_readahead=1,
            fragment_readahead=1,
            use_threads=False,
            fragment_scan_options=scan_options,
        )
        return scanner.to_reader()

    with _streaming("the data set"):
        # Footers and memory tell without reading rows.
        rows = dataset.count_rows() if parquet or isinstance(dataset, ds.InMemoryDataset) else None
    return StreamReader(open_stream, dataset.schema, rows=rows)


class _Spooled(Reader):
    """Data written to a temporary file once, with just the columns needed, and read from there."""

    def __init__(self, place: str, schema: pa.Schema) -> None:
        self.places = (place,)
        self.schemas = (schema,)
        self._inner: Reader | None = None

    def prepare(self, columns: Sequence[str]) -> None:
        """Write the temporary file; `close` removes it."""
        folder = tempfile.mkdtemp(prefix="fastsmooth-")
        # Also removed when the reader is forgotten or the process ends without a close.
        self._spool = weakref.finalize(self, shutil.rmtree, folder, ignore_errors=True)
        with _streaming(self.places[0]):
            self._inner = self._write(folder, columns)
        self.schemas = self._inner.schemas
        self.tasks = tuple(
            Task(task.index, f"{self.places[0]}, part {task.index + 1}", task.rows)
            for task in self._inner.tasks
        )
        self.place_of = self._inner.place_of
        self.rows_expected = self._inner.rows_expected

    @abc.abstractmethod
    def _write(self, folder: str, columns: Sequence[str]) -> Reader:
        """Write the columns into the folder and return a reader of what was written."""

    def batches(self, index: int, columns: Sequence[str], rows: int) -> Iterator[pa.RecordBatch]:
        """Read the temporary file."""
        assert self._inner is not None
        return self._inner.batches(index, columns, rows)

    def extent(self, index: int, column: str) -> Extent | None:
        """Return the temporary file's statistics."""
        assert self._inner is not None
        return self._inner.extent(index, column)


class SpoolReader(_Spooled):
    """A stream that can be read only once."""

    def __init__(self, stream: pa.RecordBatchReader) -> None:
        """Keep `stream` until `prepare` reads it."""
        super().__init__("the stream", stream.schema)
        self._stream = stream

    def _write(self, folder: str, columns: Sequence[str]) -> Reader:
        path = os.path.join(folder, "rows.arrow")
        schema = pa.schema([self._stream.schema.field(name) for name in columns])
        with ipc.new_file(path, schema) as file:
            for batch in self._stream:
                file.write_batch(pick(batch, columns))
        return ArrowReader([path])


class LazyReader(_Spooled):
    """A polars LazyFrame, run once by its own engine."""

    def __init__(self, frame: Any) -> None:
        """Ask `frame` for its schema; nothing is run yet."""
        import polars as pl

        with _streaming("the lazy frame"), _polars_errors():
            schema = pl.DataFrame(schema=frame.collect_schema()).to_arrow().schema
        super().__init__("the lazy frame", schema)
        self._frame = frame

    def _write(self, folder: str, columns: Sequence[str]) -> Reader:
        import polars.selectors as cs

        path = os.path.join(folder, "rows.parquet")
        with _polars_errors():
            # A sink raises on damaged input, where streamed collecting may end early in silence.
            self._frame.select(cs.by_name(*columns)).sink_parquet(path, compression="lz4")
        return ParquetReader([path])


@contextmanager
def _polars_errors() -> Iterator[None]:
    """Turn errors of polars, panics included, into one that `_streaming` tells of."""
    from polars.exceptions import PanicException, PolarsError

    try:
        yield
    except (PolarsError, PanicException) as error:
        raise RuntimeError(str(error)) from error
