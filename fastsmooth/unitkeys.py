"""Which unit a row belongs to, when the units are known beforehand."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import numpy as np
import pyarrow as pa
import pyarrow.types as pt
from numpy.typing import NDArray

from fastsmooth.casts import filterable_type, is_number, is_text, plain_array, plain_type
from fastsmooth.errors import InputError
from fastsmooth.grouping import Grouping, Key, Keys

Integers = NDArray[np.int64]


class KnownUnits:
    """The units that have curves, or could have had.

    Where one side holds text and the other does not (names of folders do, if one of them is no
    number), values are compared as text.

    Parameters
    ----------
    by : tuple of str
        The columns that tell units apart, time columns with their unit; none for one unit.
    types : sequence of pyarrow.DataType
        The type of each in the curves' own data.
    keys : sequence of tuple
        One value for each column of `by`; a unit's number is its place.
    schemas : sequence of pyarrow.Schema
        Of each file that is to be scored.
    places : sequence of str
        The files, for sentences.

    Raises
    ------
    InputError
        A column of another kind than in the curves' own data.
    """

    def __init__(
        self, by: tuple[str, ...], types: Sequence[pa.DataType], keys: Sequence[Key],
        schemas: Sequence[pa.Schema], places: Sequence[str],
    ) -> None:  # fmt: skip
        self.grouping = Grouping.parse(by) if by else None
        self.columns: tuple[str, ...] = () if self.grouping is None else self.grouping.columns
        self.unknown = len(keys)
        self.as_text: list[bool] = []
        parts: list[Sequence[object]] = [[key[part] for key in keys] for part in range(len(by))]
        for part, kind in enumerate(types):
            cut = self.grouping is not None and self.grouping.by[part].unit is not None
            text = False
            for schema, place in zip(schemas, places, strict=True):
                given = plain_type(schema.field(self.columns[part]).type)
                # A time that is cut has a key of its own type; the coder checks its column.
                text |= not cut and _unlike_text(self.columns[part], given, kind, place)
            self.as_text.append(text)
            if text and not is_text(kind):
                parts[part] = pa.array(parts[part], kind).cast(pa.string()).to_pylist()
        self.number: dict[Key, int] = {}
        for place_, key in enumerate(zip(*parts, strict=True) if by else [()]):
            self.number[key] = place_

    def finder(self) -> UnitFinder:
        """Return what finds units, for one thread."""
        return UnitFinder(self)


def _unlike_text(column: str, given: pa.DataType, kind: pa.DataType, place: str) -> bool:
    """Tell whether values are to be compared as text; refuse those that cannot be compared."""
    if pt.is_null(given) or given == kind:
        return False
    if is_text(given) or is_text(kind):
        other = kind if is_text(given) else given
        if is_text(other):
            return False
        if is_number(other) or pt.is_temporal(other):
            return True
    alike = (is_number, pt.is_timestamp, pt.is_date, pt.is_duration, pt.is_time, _is_binary)
    if any(test(given) and test(kind) for test in alike):
        return False
    raise InputError(
        "--by", "name a column of the same kind as in the data of the curves",
        f"'{column}' in '{place}' holds {given} and the curves have {kind}", "cast the column",
    )  # fmt: skip


def _is_binary(kind: pa.DataType) -> bool:
    return bool(pt.is_binary(kind) or pt.is_large_binary(kind) or pt.is_fixed_size_binary(kind))


class UnitFinder:
    """Finds the number of each row's unit; not to be shared between threads.

    Parameters
    ----------
    known : KnownUnits
        The units.
    """

    def __init__(self, known: KnownUnits) -> None:
        self._known = known
        self._keys = None if known.grouping is None else Keys(known.grouping)
        # Number of the known unit of each key met.
        self._unit = np.empty(0, np.int64)

    def find(
        self, columns: Mapping[str, pa.Array], rows: int
    ) -> tuple[int | Integers, dict[Key, int]]:
        """Return the number of each row's unit, and what is not known.

        Parameters
        ----------
        columns : mapping of str to pyarrow.Array
            At least the columns that tell units apart, of `rows` values each.
        rows : int
            Number of rows.

        Returns
        -------
        unit : int or (rows,) int64
            One number if all rows are of one unit; `KnownUnits.unknown` for others.
        unknown : dict of tuple to int
            Rows by keys that are none of the units.
        """
        if self._keys is None:
            return 0, {}
        if not rows:
            return np.empty(0, np.int64), {}
        codes = self._keys.codes([
            _as_text(columns[name]) if text else _plain(columns[name])
            for name, text in zip(self._known.columns, self._known.as_text, strict=True)
        ])  # fmt: skip
        new = self._keys.keys[self._unit.size :]
        numbers = [self._known.number.get(key, self._known.unknown) for key in new]
        self._unit = np.append(self._unit, np.array(numbers, np.int64))
        unit = self._unit[codes]
        unknown: dict[Key, int] = {}
        lost = codes[unit == self._known.unknown]
        if lost.size:
            counts = np.bincount(lost)
            unknown = {
                self._keys.keys[code]: int(counts[code]) for code in np.flatnonzero(counts).tolist()
            }
        first = int(unit[0])
        return (first, unknown) if (unit == first).all() else (unit, unknown)


def _plain(column: pa.Array) -> pa.Array:
    if pt.is_dictionary(column.type):
        # Dictionaries tell rows apart without a look at their values.
        held = pa.dictionary(column.type.index_type, filterable_type(column.type.value_type))
        return column if held == column.type else plain_array(column)
    return plain_array(column)


def _as_text(column: pa.Array) -> pa.Array:
    plain = plain_array(column)
    return plain if is_text(plain.type) else plain.cast(pa.string())
