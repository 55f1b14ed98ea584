"""Rows to files, batch by batch: Parquet, Arrow IPC or CSV, a file or a folder, whole or not."""

from __future__ import annotations

import abc
import contextlib
import gzip
import json
import os
import secrets
import shutil
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any, BinaryIO

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as csv
import pyarrow.ipc as ipc
import pyarrow.parquet as pq
import pyarrow.types as pt

from fastsmooth.axis import TICKS_PER_SECOND
from fastsmooth.casts import plain_array, plain_type
from fastsmooth.errors import WriteError
from fastsmooth.files import file_format

SCORED_KEY = b"fastsmooth.scored"
# What is known only when all rows are written, in the footers of Parquet files.
COUNTS_KEY = b"fastsmooth.scored_rows"
SUFFIXES = (".parquet", ".arrow", ".csv")

_ROW_GROUP_ROWS = 1 << 20
_ROW_GROUP_BYTES = 64 << 20
_GZIP_LEVEL = 6
_WIDTHS = {"INT32": 4, "FLOAT": 4, "INT64": 8, "DOUBLE": 8, "INT96": 12}


@dataclass(frozen=True)
class ParquetStyle:
    """How a Parquet file is laid out.

    Attributes
    ----------
    compression : str
        Codec of every column.
    dictionaries : tuple of str
        Columns (paths of nested ones) that are written as dictionaries.
    """

    compression: str
    dictionaries: tuple[str, ...]

    @classmethod
    def like(cls, footer: pq.FileMetaData, column: str) -> ParquetStyle:
        """Take the codec of `column` from a file, and dictionaries where they spare half there."""
        compression, dictionaries = "zstd", []
        if footer.num_row_groups:
            group = footer.row_group(0)
            for number in range(group.num_columns):
                chunk = group.column(number)
                if chunk.path_in_schema == column:
                    compression = chunk.compression.lower()
                if _dictionary_pays(chunk):
                    dictionaries.append(chunk.path_in_schema)
        known = {"uncompressed": "none", "lz4_raw": "lz4", "lzo": "zstd", "unknown": "zstd"}
        return cls(known.get(compression, compression), tuple(dictionaries))

    @classmethod
    def of(cls, schema: pa.Schema) -> ParquetStyle:
        """Choose for rows that come from no Parquet file."""
        floats = (pt.is_floating, pt.is_nested)
        names = [one.name for one in schema if not any(test(one.type) for test in floats)]
        return cls("zstd", tuple(names))


def _dictionary_pays(chunk: pq.ColumnChunkMetaData) -> bool:
    if not chunk.has_dictionary_page:
        return False
    width = _WIDTHS.get(chunk.physical_type)
    return width is None or 2 * chunk.total_uncompressed_size < width * chunk.num_values


class RowsOut(abc.ABC):
    """Takes record batches of one schema; `close` makes the file complete."""

    rows = 0

    @abc.abstractmethod
    def write(self, batch: pa.RecordBatch) -> None:
        """Add rows."""

    def end_stretch(self) -> None:  # noqa: B027 - most formats have no row groups
        """Learn that a row group of the data ends here."""

    @abc.abstractmethod
    def close(self, counts: dict[str, Any]) -> None:
        """End the file; it tells `counts` where its format still takes them."""

    def abandon(self) -> None:
        """Let go of a file that will not be whole."""
        with contextlib.suppress(OSError, pa.ArrowException):
            self.close({})


class ParquetRows(RowsOut):
    """A Parquet file whose row groups are held in memory one at a time."""

    def __init__(self, stream: BinaryIO, schema: pa.Schema, style: ParquetStyle) -> None:
        self._held: list[pa.RecordBatch] = []
        self._bytes = self._held_rows = 0
        self._schema = schema
        self._writer = pq.ParquetWriter(
            stream, schema, version="2.6", data_page_version="1.0", write_page_checksum=True,
            compression=style.compression, use_dictionary=list(style.dictionaries),
        )  # fmt: skip

    def write(self, batch: pa.RecordBatch) -> None:
        """Add rows to the row group at hand."""
        self.rows += batch.num_rows
        self._held.append(batch)
        self._held_rows += batch.num_rows
        self._bytes += batch.nbytes
        if self._held_rows >= _ROW_GROUP_ROWS or self._bytes >= _ROW_GROUP_BYTES:
            self._flush()

    def end_stretch(self) -> None:
        """End the row group where one of the data ends."""
        self._flush()

    def _flush(self) -> None:
        if self._held_rows:
            table = pa.Table.from_batches(self._held, self._schema)
            self._writer.write_table(table, row_group_size=self._held_rows)
        self._held = []
        self._bytes = self._held_rows = 0

    def close(self, counts: dict[str, Any]) -> None:
        """Write what is held, and the footer."""
        self._flush()
        self._writer.add_key_value_metadata({COUNTS_KEY: json.dumps(counts).encode()})
        self._writer.close()

    def abandon(self) -> None:
        """Let go of the stream; what was not written is dropped."""
        self._held, self._held_rows = [], 0
        super().abandon()
        # A writer that could not be closed would try again when it is forgotten.
        self._writer.is_open = False


class ArrowRows(RowsOut):
    """An Arrow IPC file; what it tells stands first, so it has no counts."""

    def __init__(self, stream: BinaryIO, schema: pa.Schema) -> None:
        options = ipc.IpcWriteOptions(emit_dictionary_deltas=True)
        self._writer = ipc.new_file(stream, schema, options=options)
        self._schema = schema
        # The format lets a dictionary grow, but not be replaced.
        self._grown: dict[int, pa.Array] = {}

    def write(self, batch: pa.RecordBatch) -> None:
        """Add rows."""
        self.rows += batch.num_rows
        arrays = [
            self._grow(place, column) if pt.is_dictionary(column.type) else column
            for place, column in enumerate(batch.columns)
        ]
        self._writer.write_batch(pa.RecordBatch.from_arrays(arrays, schema=self._schema))

    def _grow(self, place: int, column: pa.DictionaryArray) -> pa.Array:
        before = self._grown.get(place)
        if before is not None and not before.equals(column.dictionary):
            none = pa.array([], column.indices.type)
            earlier = pa.DictionaryArray.from_arrays(none, before, ordered=column.type.ordered)
            column = pa.chunked_array([earlier, column]).unify_dictionaries().chunk(1)
        self._grown[place] = column.dictionary
        return column

    def close(self, counts: dict[str, Any]) -> None:
        """Write the footer."""
        del counts
        self._writer.close()


class CsvRows(RowsOut):
    """A CSV file with a header line; it carries no trace.

    Durations are seconds, as in every text file that fastsmooth writes.
    """

    def __init__(self, stream: BinaryIO, schema: pa.Schema, compressed: bool) -> None:
        self._schema = pa.schema([(one.name, _text_type(one.type)) for one in schema])
        self._gzip: gzip.GzipFile | None = None
        if compressed:
            # Without a time of writing equal rows give equal bytes.
            self._gzip = gzip.GzipFile("", "wb", _GZIP_LEVEL, stream, mtime=0)
        self._writer = csv.CSVWriter(self._gzip or stream, self._schema)

    def write(self, batch: pa.RecordBatch) -> None:
        """Add rows."""
        self.rows += batch.num_rows
        arrays = [_as_text_type(column) for column in batch.columns]
        self._writer.write_batch(pa.RecordBatch.from_arrays(arrays, schema=self._schema))

    def close(self, counts: dict[str, Any]) -> None:
        """Write what is buffered."""
        del counts
        self._writer.close()
        if self._gzip is not None:
            self._gzip.close()


def _text_type(data_type: pa.DataType) -> pa.DataType:
    plain = plain_type(data_type)
    return pa.float64() if pt.is_duration(plain) else plain


def _as_text_type(column: pa.Array) -> pa.Array:
    plain = plain_array(column)
    if not pt.is_duration(plain.type):
        return plain
    ticks = plain.cast(pa.int64()).cast(pa.float64(), safe=False)
    return pc.divide(ticks, float(TICKS_PER_SECOND[plain.type.unit]))


class TableRows(RowsOut):
    """Rows kept in memory."""

    def __init__(self, schema: pa.Schema) -> None:
        self._schema = schema
        self._batches: list[pa.RecordBatch] = []
        self.table: pa.Table | None = None

    def write(self, batch: pa.RecordBatch) -> None:
        """Keep rows."""
        self.rows += batch.num_rows
        self._batches.append(batch)

    def close(self, counts: dict[str, Any]) -> None:
        """Make the table."""
        del counts
        self.table = pa.Table.from_batches(self._batches, self._schema)


def open_rows(
    stream: BinaryIO, name: str, schema: pa.Schema, style: ParquetStyle, trace: dict[str, Any]
) -> RowsOut:
    """Start a file in the format that its name says.

    Parameters
    ----------
    stream : binary file
        Where the bytes go.
    name : str
        Name of the file; the suffix decides.
    schema : pyarrow.Schema
        The columns.
    style : ParquetStyle
        Layout, for Parquet.
    trace : dict
        What the file shall tell of its making.

    Returns
    -------
    RowsOut
        Ready for rows.

    Raises
    ------
    WriteError
        The format cannot hold a column.
    """
    kind = file_format(name)
    told = {SCORED_KEY: json.dumps(trace, allow_nan=False, default=str).encode()}
    schema = schema.with_metadata({**(schema.metadata or {}), **told})
    openers: dict[str | None, Callable[[], RowsOut]] = {
        "parquet": lambda: ParquetRows(stream, schema, style),
        "arrow": lambda: ArrowRows(stream, schema),
        "csv": lambda: CsvRows(stream, schema, name.lower().endswith(".gz")),
    }
    with _holding(name):
        if kind == "csv":
            for field in schema:
                if pt.is_nested(plain_type(field.type)):
                    raise pa.ArrowInvalid(f"'{field.name}' is nested")
        return openers[kind]()


@contextmanager
def _holding(name: str) -> Iterator[None]:
    """Turn what a format cannot hold into one sentence."""
    try:
        yield
    except (pa.ArrowInvalid, pa.ArrowNotImplementedError, pa.ArrowTypeError) as error:
        reason = str(error).strip().split("\n")[0].rstrip(".")
        raise WriteError(
            "--out", f"be of a format that holds every column ({', '.join(SUFFIXES)})",
            f"'{name}' cannot: {reason}",
            "name a file of another format, or leave columns out with --keep",
        ) from error  # fmt: skip


def write_rows(out: RowsOut, batches: Iterator[pa.RecordBatch], name: str) -> None:
    """Write batches as they come; see `open_rows` for `name` and what is refused."""
    for batch in batches:
        with _holding(name):
            out.write(batch)


# -- a place that is whole or absent


def check_target(path: str, data: Sequence[str], folder: bool) -> None:
    """Refuse a place for scored rows, before any work.

    An existing file or folder may be replaced only if every file in it says that scored rows were
    written to it: Parquet and Arrow files say so, CSV files cannot.

    Parameters
    ----------
    path : str
        The place.
    data : sequence of str
        The data files.
    folder : bool
        Whether a folder is to be written.

    Raises
    ------
    WriteError
        It holds data, is something else, or lies where nothing may be written.
    """
    place = os.path.realpath(path)
    for one in map(os.path.realpath, data):
        if one == place or one.startswith(place + os.sep):
            raise WriteError(
                "--out", "leave the data alone", f"'{path}' holds '{one}', which is read",
                "name another place",
            )  # fmt: skip
    if os.path.isdir(place) and not folder:
        raise WriteError("--out", "name a file", f"'{path}' is a folder", "add a file name to it")
    if os.path.exists(place):
        if folder and not os.path.isdir(place):
            raise WriteError(
                "--out", "name a folder, as DATA are several files", f"'{path}' is a file",
                "name a folder that does not exist",
            )  # fmt: skip
        foreign = next((one for one in _files_below(place) if not _is_scored(one)), None)
        if foreign is not None:
            raise WriteError(
                "--out", "be new, or hold scored rows and nothing else",
                f"'{foreign}' does not say that it holds scored rows",
                "name another place, or remove it yourself",
            )  # fmt: skip
    parent = os.path.dirname(place)
    if folder and not os.path.isdir(parent):
        raise WriteError(
            "--out", "lie in a folder that exists", f"'{parent}' does not exist", "make it first"
        )
    if not os.access(parent, os.W_OK | os.X_OK):
        raise WriteError(
            "--out", "lie in a folder that may be written", f"'{parent}' may not",
            "name another folder",
        )  # fmt: skip


def _files_below(place: str) -> Iterator[str]:
    if not os.path.isdir(place):
        yield place
        return
    for base, _, names in os.walk(place):
        for name in sorted(names):
            yield os.path.join(base, name)


def _is_scored(path: str) -> bool:
    kind = file_format(path)
    try:
        if kind == "parquet":
            metadata = pq.read_schema(path).metadata
        elif kind == "arrow":
            with pa.memory_map(path) as mapped, ipc.open_file(mapped) as file:
                metadata = file.schema.metadata
        else:
            return False
    except (pa.ArrowException, OSError):
        return False
    return SCORED_KEY in (metadata or {})


@contextmanager
def whole_folder(path: str) -> Iterator[str]:
    """Give a temporary folder that takes the name `path` if all goes well, and else goes away.

    Parameters
    ----------
    path : str
        The place, as `check_target` has accepted it.

    Yields
    ------
    str
        The temporary folder, in the same folder as `path`; its name begins with a dot, so that it
        is never read as data.
    """
    target = os.path.realpath(path)
    parent = os.path.dirname(target)
    temporary = os.path.join(parent, f".{secrets.token_hex(8)}.partial")
    former = f"{temporary}.former"
    os.mkdir(temporary)
    try:
        yield temporary
        if os.path.isdir(target):
            os.rename(target, former)
        try:
            os.rename(temporary, target)
        except OSError:
            if os.path.isdir(former):
                os.rename(former, target)
            raise
    finally:
        # After success there is no temporary folder; nothing may hide the first error.
        with contextlib.suppress(OSError):
            shutil.rmtree(temporary)
    if os.path.isdir(former):
        shutil.rmtree(former)
