"""Parquet files, one task for each row group."""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Iterable, Iterator, Mapping, Sequence
from contextlib import contextmanager
from decimal import Decimal

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.dataset as ds
import pyarrow.parquet as pq
import pyarrow.types as pt

from fastsmooth.addresses import as_address
from fastsmooth.casts import plain_type
from fastsmooth.files import Task, ask_each, open_input, reading, system_of
from fastsmooth.readers import Extent, PartitionKeys, Reader, identify, with_constants

READ_BUFFER_BYTES = 1 << 20
RAW_UNITS = {"milliseconds": "ms", "microseconds": "us", "nanoseconds": "ns"}


class ParquetReader(Reader):
    """Parquet files by row group, each task with a file handle of its own."""

    def __init__(
        self, paths: Sequence[str], key_types: Mapping[str, pa.DataType] | None = None
    ) -> None:
        """Read the footers of `paths`."""
        records = identify(paths)
        told = ask_each(paths, _read_footer)
        own = [schema for _, schema in told]
        self._footers = [footer for footer, _ in told]
        self._own = own
        self._keys = PartitionKeys(paths, key_types)
        self.key_types = self._keys.types
        self._leaves: dict[tuple[int, str], int | None] = {}
        self._encoded: tuple[str, ...] = ()
        self.files = tuple(
            dataclasses.replace(record, rows=footer.num_rows)
            for record, footer in zip(records, self._footers, strict=True)
        )
        self.places = tuple(paths)
        self.schemas = tuple(self._keys.extend(schema, n) for n, schema in enumerate(own))
        self.rows_expected = sum(footer.num_rows for footer in self._footers)
        tasks: list[Task] = []
        self._groups: list[tuple[int, int]] = []
        for place, footer in enumerate(self._footers):
            for group in range(footer.num_row_groups):
                rows = footer.row_group(group).num_rows
                if rows:
                    label = f"{paths[place]}, row group {group + 1} of {footer.num_row_groups}"
                    tasks.append(Task(len(tasks), label, rows))
                    self._groups.append((place, group))
        self.tasks = tuple(tasks)
        self.place_of = tuple(place for place, _ in self._groups)
        # Task and row group of each file's tasks.
        self._of_place: list[list[tuple[int, int]]] = [[] for _ in paths]
        for index, (place, group) in enumerate(self._groups):
            self._of_place[place].append((index, group))

    def batches(self, index: int, columns: Sequence[str], rows: int) -> Iterator[pa.RecordBatch]:
        """Read one row group, a chunk at a time."""
        place, group = self._groups[index]
        path = self.places[place]
        constants = self._keys.constants(place, self._own[place])
        stored = [name for name in columns if name not in constants]
        encoded = [name for name in self._encoded if name in stored]
        with reading(path), _open(path, self._footers[place], encoded) as file:
            # With no stored column the batches still tell the number of rows.
            for batch in file.iter_batches(
                rows, row_groups=[group], columns=stored, use_threads=False
            ):
                yield with_constants(batch, columns, constants)

    def encode(self, columns: Iterable[str]) -> None:
        """Read these columns, where they are text, as the dictionaries that the files hold."""
        self._encoded = tuple(sorted(columns))

    def constant(self, index: int, column: str) -> pa.Scalar | None:
        """Return a value that stands in the folder's name, or that is both lowest and highest."""
        place, group = self._groups[index]
        constants = self._keys.constants(place, self._own[place])
        if column in constants:
            return constants[column]
        kind, leaf = self._own[place].field(column).type, self._leaf(place, column)
        # Others are stored in units of their own, or compare in more ways than one.
        if leaf is None or not (pt.is_string(kind) or pt.is_signed_integer(kind)):
            return None
        chunk = self._footers[place].row_group(group).column(leaf)
        statistics = chunk.statistics if chunk.is_stats_set else None
        if statistics is None or not statistics.has_min_max or not statistics.has_null_count:
            return None
        # Bounds that were cut short are never equal: the upper one is raised.
        if statistics.null_count or statistics.min != statistics.max:
            return None
        return pa.scalar(statistics.min, kind)

    def prune(self, place: int, condition: pc.Expression) -> set[int]:
        """Find the tasks of a file in which no row can meet `condition`."""
        path = self.places[place]
        constants = self._keys.constants(place, self._own[place])
        fixed = None
        for name, value in constants.items():
            field = pc.field(name)
            part = field == value if value.is_valid else field.is_null()
            fixed = part if fixed is None else fixed & part
        with reading(path):
            system, inner = system_of(path)
            fragment = ds.ParquetFileFormat().make_fragment(
                inner, system, partition_expression=fixed
            )
            kept = fragment.subset(condition, schema=self.schemas[place]).row_groups
        kept_groups = {group.id for group in kept}
        return {index for index, group in self._of_place[place] if group not in kept_groups}

    def extent(self, index: int, column: str) -> Extent | None:
        """Return a row group's statistics of a column."""
        place, group = self._groups[index]
        constants = self._keys.constants(place, self._own[place])
        rows = self.tasks[index].rows
        if column in constants:
            constant = constants[column].as_py()
            if constant is None:
                return Extent(None, None, "", rows)
            return None if isinstance(constant, str) else Extent(constant, constant, "", 0)
        leaf = self._leaf(place, column)
        if leaf is None:
            return None
        chunk = self._footers[place].row_group(group).column(leaf)
        if not chunk.is_stats_set:
            return None
        statistics = chunk.statistics
        nulls = statistics.null_count if statistics.has_null_count else None
        if not statistics.has_min_max:
            return Extent(None, None, "", nulls)
        plain = plain_type(self._own[place].field(column).type)
        if pt.is_timestamp(plain) or pt.is_duration(plain) or pt.is_date(plain):
            unit = self._raw_unit(place, leaf, plain)
            if unit is None:
                return Extent(None, None, "", nulls)
            return Extent(statistics.min_raw, statistics.max_raw, unit, nulls)
        low, high = statistics.min, statistics.max
        if not isinstance(low, int | float | Decimal):
            return Extent(None, None, "", nulls)
        if isinstance(low, Decimal):
            low, high = float(low), float(high)
        return Extent(low, high, "", nulls)

    def _raw_unit(self, place: int, leaf: int, plain: pa.DataType) -> str | None:
        column = self._footers[place].schema.column(leaf)
        if column.physical_type == "INT32" and pt.is_date(plain):
            return "day"
        if column.physical_type != "INT64":
            return None
        if pt.is_duration(plain):
            return str(plain.unit)
        logical = json.loads(column.logical_type.to_json())
        # The stored unit may be finer than the column's: seconds are stored as milliseconds.
        return RAW_UNITS.get(str(logical.get("timeUnit")))

    def _leaf(self, place: int, column: str) -> int | None:
        key = (place, column)
        if key not in self._leaves:
            schema = self._footers[place].schema
            found = [n for n in range(len(schema)) if schema.column(n).path == column]
            self._leaves[key] = found[0] if len(found) == 1 else None
        return self._leaves[key]


def _read_footer(path: str) -> tuple[pq.FileMetaData, pa.Schema]:
    with reading(path), _open(path, None) as file:
        return file.metadata, file.schema_arrow


@contextmanager
def _open(
    path: str, footer: pq.FileMetaData | None, encoded: Sequence[str] = ()
) -> Iterator[pq.ParquetFile]:
    # On this computer buffered reading keeps memory at a few buffers, whatever the size of a row
    # group. From a store the columns of the one row group that a handle reads are fetched at once,
    # since every request has far to go. Checksums are verified on the pages that carry one.
    if as_address(path) is None:
        with pq.ParquetFile(
            path,
            metadata=footer,
            pre_buffer=False,
            buffer_size=READ_BUFFER_BYTES,
            page_checksum_verification=True,
            read_dictionary=encoded,
        ) as file:
            yield file
        return
    with (
        open_input(path) as stored,
        pq.ParquetFile(
            stored,
            metadata=footer,
            pre_buffer=True,
            page_checksum_verification=True,
            read_dictionary=encoded,
        ) as file,  # fmt: skip
    ):
        yield file
