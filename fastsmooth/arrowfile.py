"""Arrow IPC files, memory-mapped if local, one task for each stretch of record batches."""

from __future__ import annotations

import dataclasses
from collections.abc import Iterator, Mapping, Sequence

import pyarrow as pa
import pyarrow.dataset as ds
import pyarrow.ipc as ipc

from fastsmooth.addresses import as_address
from fastsmooth.errors import ReadError
from fastsmooth.files import FileRecord, Task, open_input, reading, system_of
from fastsmooth.readers import PartitionKeys, Reader, identify, rebatch, with_constants

ROWS_PER_TASK = 1 << 20
FILE_MAGIC = b"ARROW1"
FEATHER_1_MAGIC = b"FEA1"


class ArrowReader(Reader):
    """Arrow IPC files and streams.

    A file in the stream format has no footer and is one task of unknown length.
    """

    def __init__(
        self, paths: Sequence[str], key_types: Mapping[str, pa.DataType] | None = None
    ) -> None:
        """Read the footers of `paths`."""
        records: list[FileRecord] = []
        tasks: list[Task] = []
        self._own: list[pa.Schema] = []
        # Files whose values can be used where they are mapped, since they are not compressed.
        self._mapped: set[int] = set()
        # Place and record batches of each task; None for a stream.
        self._stretches: list[tuple[int, range | None]] = []
        for place, record in enumerate(identify(paths)):
            path = record.path
            rows = None
            with reading(path):
                if _has_footer(path):
                    with open_input(path) as opened, ipc.open_file(opened) as file:
                        schema, count = file.schema, file.num_record_batches
                        local = isinstance(opened, pa.MemoryMappedFile)
                        if count and local and _is_mapped(file.get_batch(0), opened):
                            self._mapped.add(place)
                    rows = _count_rows(path)
                    stretches = _cut(count, rows)
                else:
                    with open_input(path) as opened, ipc.open_stream(opened) as stream:
                        schema, stretches = stream.schema, [None]
            self._own.append(schema)
            records.append(dataclasses.replace(record, rows=rows))
            for stretch in stretches:
                whole = stretch is None or len(stretches) == 1
                label = path
                if stretch is not None and not whole:
                    label += f", record batches {stretch[0] + 1} to {stretch[-1] + 1}"
                tasks.append(Task(len(tasks), label, rows if whole else None))
                self._stretches.append((place, stretch))
        self._keys = PartitionKeys(paths, key_types)
        self.key_types = self._keys.types
        self.files = tuple(records)
        self.places = tuple(paths)
        self.schemas = tuple(self._keys.extend(one, n) for n, one in enumerate(self._own))
        self.tasks = tuple(tasks)
        self.place_of = tuple(place for place, _ in self._stretches)
        known = [record.rows for record in records if record.rows is not None]
        self.rows_expected = sum(known) if len(known) == len(records) else None

    def batches(self, index: int, columns: Sequence[str], rows: int) -> Iterator[pa.RecordBatch]:
        """Deliver views of the mapped file where it is not compressed."""
        place, stretch = self._stretches[index]
        constants = self._keys.constants(place, self._own[place])
        stored = [name for name in columns if name not in constants]
        path = self.places[place]
        with reading(path):
            for batch in rebatch(self._read(place, stretch, stored), rows):
                yield with_constants(batch, columns, constants)

    def _read(
        self, place: int, stretch: range | None, stored: Sequence[str]
    ) -> Iterator[pa.RecordBatch]:
        options = ipc.IpcReadOptions(use_threads=False)
        if place not in self._mapped:
            # Naming the fields saves decompressing the others, but copies what is mapped. An empty
            # list means every field; one is enough to tell the number of rows.
            numbers = sorted(self._own[place].get_field_index(name) for name in stored)
            options = ipc.IpcReadOptions(included_fields=numbers or [0], use_threads=False)
        with open_input(self.places[place]) as opened:
            if stretch is None:
                with ipc.open_stream(opened, options=options) as stream:
                    for batch in stream:
                        batch.validate()
                        yield batch
                return
            with ipc.open_file(opened, options=options) as file:
                for number in stretch:
                    batch = file.get_batch(number)
                    # Lengths that a damaged file states wrongly would be read beyond its end.
                    batch.validate()
                    yield batch


def _count_rows(path: str) -> int:
    """Add up what the record batches' own headers say."""
    system, inner = system_of(path)
    return int(ds.dataset(inner, format="ipc", filesystem=system).count_rows())


def _cut(count: int, rows: int) -> list[range | None]:
    """Cut a file's record batches into stretches of about a million rows."""
    if not count or not rows:
        return []
    step = max(1, round(ROWS_PER_TASK * count / rows))
    return [range(start, min(start + step, count)) for start in range(0, count, step)]


def _is_mapped(batch: pa.RecordBatch, mapped: pa.MemoryMappedFile) -> bool:
    """Tell whether every buffer of a batch lies in the mapped file."""
    mapped.seek(0)
    whole = mapped.read_buffer()
    buffers = [buffer for column in batch.columns for buffer in column.buffers() if buffer]
    return all(
        whole.address <= buffer.address <= whole.address + whole.size
        for buffer in buffers
        if buffer.size
    )


def _has_footer(path: str) -> bool:
    with open(path, "rb") if as_address(path) is None else open_input(path) as file:
        magic = file.read(len(FILE_MAGIC))
    if magic.startswith(FEATHER_1_MAGIC):
        raise ReadError(
            "DATA",
            "be Arrow IPC files of format version 4 or later",
            f"'{path}' is of the first Feather version",
            "write the file again as Arrow IPC or Parquet",
        )
    # A file too short for either format is reported by the reader of files.
    return magic == FILE_MAGIC or len(magic) < len(FILE_MAGIC)
