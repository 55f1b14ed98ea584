"""CSV files, streamed, one task for each file."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping, Sequence
from contextlib import contextmanager

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as csv
import pyarrow.types as pt

from fastsmooth.addresses import as_address, open_stream
from fastsmooth.casts import LARGEST_EXACT_INTEGER, Role, is_text
from fastsmooth.errors import InputError
from fastsmooth.files import Task, reading
from fastsmooth.readers import PartitionKeys, Reader, identify, rebatch, with_constants

BLOCK_BYTES = 1 << 20
# Spellings of NaN are left out: they are read as NaN, like everywhere else.
NULLS = ["", "NA", "N/A", "#N/A", "null", "NULL"]
OFFSET, NO_OFFSET = r":\d\d.*[+-]\d\d(:?\d\d)?$", r"[+-]00(:?00)?$"
BAD_VALUE = re.compile(r"CSV column #(\d+):(?: Row #(\d+):)? CSV conversion error to (.*?): (.*)")


class CsvReader(Reader):
    """CSV files with a header line.

    The first megabyte of each file tells its types. Columns that play a numeric part are read as
    float64 even if they begin with integers. An empty field is null.
    """

    def __init__(
        self,
        paths: Sequence[str],
        roles: Sequence[Role],
        key_types: Mapping[str, pa.DataType] | None = None,
    ) -> None:
        """Infer the types of `paths`; `roles` are the columns that must be numbers or times."""
        self.files = tuple(identify(paths))
        self.places = tuple(paths)
        self._roles = {role.column: role for role in roles}
        self._own: list[pa.Schema] = []
        self._whole: list[frozenset[str]] = []
        for path in paths:
            inferred = _inferred(path)
            for role in roles:
                if role.column in inferred.names:
                    _check_numbers(path, role, inferred)
            self._own.append(pa.schema([self._wider(field) for field in inferred]))
            self._whole.append(
                frozenset(field.name for field in inferred if pt.is_integer(field.type))
                & frozenset(self._roles)
            )
        self._keys = PartitionKeys(paths, key_types)
        self.key_types = self._keys.types
        self.schemas = tuple(self._keys.extend(one, n) for n, one in enumerate(self._own))
        self.tasks = tuple(Task(n, path, None) for n, path in enumerate(paths))
        self.place_of = tuple(range(len(paths)))

    def _wider(self, field: pa.Field) -> pa.Field:
        """Allow for what later lines may hold."""
        is_number = pt.is_integer(field.type) or pt.is_null(field.type)
        if field.name in self._roles and is_number:
            return field.with_type(pa.float64())
        if pt.is_timestamp(field.type) and field.type.unit == "s":
            return field.with_type(pa.timestamp("us", field.type.tz))
        return field

    def batches(self, index: int, columns: Sequence[str], rows: int) -> Iterator[pa.RecordBatch]:
        """Stream one file."""
        path = self.places[index]
        own = self._own[index]
        constants = self._keys.constants(index, own)
        stored = [name for name in columns if name not in constants]
        types = {name: own.field(name).type for name in stored}
        whole = [name for name in stored if name in self._whole[index]]
        with reading(path), self._naming(path, own), _open(path, types or None) as stream:
            for batch in rebatch(stream, rows):
                for name in whole:
                    _check_whole(path, self._roles[name], batch.column(name))
                yield with_constants(batch, columns, constants)

    def shows_offset(self, column: str) -> bool:
        """Look for an offset other than zero in the first megabyte of the first file."""
        if column not in self._own[0].names:
            return False
        path = self.places[0]
        with reading(path), _open(path, {column: pa.string()}) as stream:
            texts = next(iter(stream)).column(0)
        other = pc.and_(
            pc.match_substring_regex(texts, OFFSET),
            pc.invert(pc.match_substring_regex(texts, NO_OFFSET)),
        )
        return pc.any(other).as_py() is True

    @contextmanager
    def _naming(self, path: str, own: pa.Schema) -> Iterator[None]:
        try:
            yield
        except pa.ArrowInvalid as error:
            found = BAD_VALUE.search(str(error))
            if found is None:
                raise
            name = own.names[int(found[1])]
            line = f" in line {found[2]}" if found[2] else ""
            argument = self._roles[name].argument if name in self._roles else "DATA"
            raise InputError(
                argument,
                f"hold values of type {found[3]} only, as its first lines do",
                f"'{name}' in '{path}' has the {found[4]}{line}",
                "correct it or leave the field empty",
            ) from error


def _open(path: str, types: dict[str, pa.DataType] | None) -> csv.CSVStreamingReader:
    address = as_address(path)
    return csv.open_csv(
        path if address is None else open_stream(address),
        read_options=csv.ReadOptions(use_threads=False, block_size=BLOCK_BYTES),
        parse_options=csv.ParseOptions(newlines_in_values=True),
        convert_options=csv.ConvertOptions(
            include_columns=None if types is None else list(types),
            column_types=types,
            null_values=NULLS,
            strings_can_be_null=True,
        ),
    )


def _inferred(path: str) -> pa.Schema:
    with reading(path), _open(path, None) as stream:
        return stream.schema


def _check_numbers(path: str, role: Role, inferred: pa.Schema) -> None:
    """Refuse a column of text, naming the first value that is no number."""
    if not all(
        is_text(inferred.field(n).type) for n in inferred.get_all_field_indices(role.column)
    ):
        return
    with reading(path), _open(path, {role.column: pa.string()}) as stream:
        for batch in stream:
            for value in batch.column(0):
                text = value.as_py()
                if text is not None and not _is_float(text):
                    raise InputError(
                        role.argument,
                        "name a column of numbers",
                        f"'{role.column}' in '{path}' is text, such as '{text[:40]}'",
                        "correct it, leave the field empty, or cast the column to a number",
                    )


def _is_float(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def _check_whole(path: str, role: Role, column: pa.Array) -> None:
    """Refuse integers that reading them as float64 may have rounded."""
    floats = column.to_numpy(zero_copy_only=False)
    if np.any(np.abs(floats) >= LARGEST_EXACT_INTEGER):
        raise InputError(
            role.argument,
            f"hold integers below 2^53 ({LARGEST_EXACT_INTEGER:,}), which a float64 keeps exactly",
            f"'{role.column}' in '{path}' holds larger ones",
            "subtract an offset from the column, or divide it, first",
        )
