"""Parquet files, one task for each row group."""

from __future__ import annotations

import dataclasses
import json
from collections.abc import Iterator, Sequence
from decimal import Decimal

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.dataset as ds
import pyarrow.fs as pafs
import pyarrow.parquet as pq
import pyarrow.types as pt

from fastsmooth.casts import plain_type
from fastsmooth.files import FileRecord, Task, reading
from fastsmooth.readers import Extent, PartitionKeys, Reader, identify, with_constants

READ_BUFFER_BYTES = 1 << 20
RAW_UNITS = {"milliseconds": "ms", "microseconds": "us", "nanoseconds": "ns"}


class ParquetReader(Reader):
    """Parquet files by row group, each task with a file handle of its own."""

    def __init__(self, paths: Sequence[str]) -> None:
        """Read the footers of `paths`."""
        records: list[FileRecord] = []
        own: list[pa.Schema] = []
        self._footers: list[pq.FileMetaData] = []
        for record in identify(paths):
            with reading(record.path), _open(record.path, None) as file:
                footer = file.metadata
                own.append(file.schema_arrow)
            self._footers.append(footer)
            records.append(dataclasses.replace(record, rows=footer.num_rows))
        self._own = own
        self._keys = PartitionKeys(paths)
        self._leaves: dict[tuple[int, str], int | None] = {}
        self.files = tuple(records)
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
        with reading(path), _open(path, self._footers[place]) as file:
            # With no stored column the batches still tell the number of rows.
            for batch in file.iter_batches(
                rows, row_groups=[group], columns=stored, use_threads=False
            ):
                yield with_constants(batch, columns, constants)

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
            fragment = ds.ParquetFileFormat().make_fragment(
                path, pafs.LocalFileSystem(), partition_expression=fixed
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


def _open(path: str, footer: pq.FileMetaData | None) -> pq.ParquetFile:
    # Buffered reading instead of pre-buffering keeps memory at a few buffers, whatever the size
    # of a row group. Checksums are verified on the pages that carry one.
    return pq.ParquetFile(
        path,
        metadata=footer,
        pre_buffer=False,
        buffer_size=READ_BUFFER_BYTES,
        page_checksum_verification=True,
    )
