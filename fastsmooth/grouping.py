"""What tells units apart: columns of any kind, or time columns cut into hours, days, weeks, months.

A unit's key has one plain Python value for each column, and None for null. Rows get a number for
their unit in the order in which a thread meets the keys; what is reported is sorted by key, so that
nothing depends on that order.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from typing import TYPE_CHECKING, Any
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from fastsmooth.blocks import Block, Coder
from fastsmooth.errors import InputError

if TYPE_CHECKING:
    import pyarrow as pa

Key = tuple[Any, ...]
Codes = NDArray[np.int32]

_UNKNOWN = np.int32(-1)
_EPOCH = date(1970, 1, 1)
# 1970-01-01 was a Thursday: the Monday after began week 0.
_FIRST_MONDAY = 4
# Tables of all pairs of values up to this size are looked up row by row.
_LARGEST_TABLE = 1 << 22


@dataclass(frozen=True)
class Grouping:
    """The columns whose values tell units apart.

    Parameters
    ----------
    by : tuple of Block
        Columns, time columns with a unit.

    Examples
    --------
    >>> Grouping.parse(["plant", "logged_at:month"]).words
    ('plant', 'logged_at:month')
    """

    by: tuple[Block, ...]

    @classmethod
    def parse(cls, by: str | Sequence[str]) -> Grouping:
        """Read ``COLUMN``, ``COLUMN:unit`` or ``COLUMN:unit@zone``, one or several.

        Raises
        ------
        InputError
            There is none, one is no text, or a unit or a zone is unknown.
        """
        texts = [by] if isinstance(by, str) else list(by)
        remedy = "name one or several columns, as in --by plant"
        if not texts or not all(isinstance(one, str) and one for one in texts):
            raise InputError("--by", "name a column of DATA", f"it is {by!r}", remedy)
        if len(set(texts)) < len(texts):
            raise InputError(
                "--by", "name each column once", f"it is {', '.join(texts)}", "leave out the double"
            )
        try:
            return cls(tuple(Block.parse(text) for text in texts))
        except InputError as error:
            raise InputError("--by", error.requirement, error.received, error.remedy) from None

    @property
    def columns(self) -> tuple[str, ...]:
        """Names of the columns."""
        return tuple(one.column for one in self.by)

    @property
    def words(self) -> tuple[str, ...]:
        """The columns with their units."""
        return tuple(str(one) for one in self.by)

    def types(self, schemas: Sequence[pa.Schema]) -> list[str]:
        """Return the Arrow type of each part of a key, as Arrow spells it.

        Parameters
        ----------
        schemas : sequence of pyarrow.Schema
            Of all files.
        """
        return [
            _key_type(one, [schema.field(one.column).type for schema in schemas]) for one in self.by
        ]


def _key_type(block: Block, types: list[pa.DataType]) -> str:
    import pyarrow as pa
    import pyarrow.types as pt

    from fastsmooth.casts import finest_unit, is_text, plain_type

    plain = list(dict.fromkeys(plain_type(one) for one in types if not pt.is_null(plain_type(one))))
    if not plain:
        return "null"
    if block.unit == "hour":
        zone = block.zone or getattr(plain[0], "tz", None)
        return str(pa.timestamp("s", zone))
    if block.unit is not None:
        return str(pa.date32())
    if all(pt.is_timestamp(one) for one in plain):
        return str(pa.timestamp(_coarse(finest_unit(plain)), plain[0].tz))
    if all(pt.is_duration(one) for one in plain):
        return str(pa.duration(_coarse(finest_unit(plain))))
    if all(pt.is_time(one) for one in plain):
        return str(plain[0] if plain[0].unit != "ns" else pa.time64("us"))
    if len(plain) == 1:
        return str(plain[0])
    if all(pt.is_integer(one) for one in plain):
        return str(pa.int64())
    if all(pt.is_floating(one) for one in plain):
        return str(pa.float64())
    if all(is_text(one) for one in plain):
        return str(pa.string())
    if all(pt.is_date(one) for one in plain):
        return str(pa.date32())
    return str(plain[0])


def _coarse(unit: str) -> str:
    return "us" if unit == "ns" else unit


class Keys:
    """Numbers the units that one thread meets.

    Parameters
    ----------
    grouping : Grouping
        The columns.

    Attributes
    ----------
    keys : list of tuple
        Key of each number.
    """

    def __init__(self, grouping: Grouping) -> None:
        self.keys: list[Key] = []
        self._number: dict[Key, int] = {}
        self._coders = [Coder(one, "--by") for one in grouping.by]
        self._by = grouping.by
        self._zones: list[str | None] = [None] * len(grouping.by)
        # The lists of values met last, and the unit of each combination of them.
        self._values: list[list[Any]] = []
        self._table = np.empty(0, np.int32)

    def number(self, key: Key) -> int:
        """Return the number of a key, a new one if it is new."""
        number = self._number.get(key)
        if number is None:
            number = self._number[key] = len(self.keys)
            self.keys.append(key)
        return number

    def codes(self, columns: Sequence[pa.Array]) -> Codes:
        """Return the unit number of every row; keys that are new get new numbers.

        Parameters
        ----------
        columns : sequence of pyarrow.Array
            One for each column of the grouping, n values each.

        Raises
        ------
        InputError
            A column's values cannot be told apart, or a unit was given for what holds no times.
        """
        from fastsmooth.kernels import grouped

        coded = [
            coder.code(_to_microseconds(column, coder.block))
            for coder, column in zip(self._coders, columns, strict=True)
        ]
        self._zones = [
            one.zone or getattr(column.type, "tz", None)
            for one, column in zip(self._by, columns, strict=True)
        ]
        values = [keys for _, keys in coded]
        # Null has the code -1 and so the last place of its axis.
        sizes = [len(keys) + 1 for keys in values]
        place = coded[0][0]
        if len(coded) > 1:
            place = place.astype(np.int64)
            place[place < 0] += sizes[0]
            for (codes, _), size in zip(coded[1:], sizes[1:], strict=True):
                place *= size
                place += np.where(codes < 0, size - 1, codes)
        total = 1
        for size in sizes:
            total *= size
        if total > _LARGEST_TABLE:
            return self._by_search(place, values, sizes)
        if len(values) != len(self._values) or any(
            new is not old for new, old in zip(values, self._values, strict=True)
        ):
            self._values, self._table = values, np.full(total, _UNKNOWN, np.int32)
        place = np.ascontiguousarray(place, np.int32)
        out = np.empty(place.shape[0], np.int32)
        if grouped.look_up(self._table, place, out) < 0:
            met = np.unique(place[out < 0] % total)
            self._table[met] = [self._number_of(one, values, sizes) for one in met.tolist()]
            grouped.look_up(self._table, place, out)
        return out

    def _by_search(
        self, place: NDArray[np.integer[Any]], values: list[list[Any]], sizes: list[int]
    ) -> Codes:
        used, own = np.unique(place, return_inverse=True)
        numbers = [self._number_of(one, values, sizes) for one in used.tolist()]
        return np.array(numbers, np.int32)[own]

    def _number_of(self, place: int, values: list[list[Any]], sizes: list[int]) -> int:
        parts = []
        for part in range(len(sizes) - 1, -1, -1):
            place, code = divmod(place, sizes[part])
            value = values[part][code] if code < sizes[part] - 1 else None
            if value is not None and self._by[part].unit is not None:
                value = _start_of(value, self._by[part], self._zones[part])
            parts.append(value)
        return self.number(tuple(reversed(parts)))


def _to_microseconds(column: pa.Array, block: Block) -> pa.Array:
    """Times in nanoseconds as microseconds, which Python's own times can hold."""
    import pyarrow as pa
    import pyarrow.types as pt

    kind = column.type
    if block.unit is not None or getattr(kind, "unit", None) != "ns":
        return column
    to = pa.duration("us") if pt.is_duration(kind) else pa.time64("us")
    if pt.is_timestamp(kind):
        to = pa.timestamp("us", kind.tz)
    try:
        return column.cast(to)
    except pa.ArrowInvalid:
        raise InputError(
            "--by", "name a column of times in whole microseconds",
            f"'{block.column}' is finer", f"write --by {block.column}:day",
        ) from None  # fmt: skip


def _start_of(number: int, block: Block, zone: str | None) -> date | datetime:
    """The start of a time unit of a number: a date, or an hour in the zone."""
    try:
        if block.unit == "month":
            return date(1970 + number // 12, number % 12 + 1, 1)
        if block.unit == "hour":
            hour = datetime(1970, 1, 1) + timedelta(hours=number)
            return hour if zone is None else hour.replace(tzinfo=UTC).astimezone(ZoneInfo(zone))
        days = number if block.unit == "day" else 7 * number + _FIRST_MONDAY
        return _EPOCH + timedelta(days=days)
    except (OverflowError, ValueError):
        raise InputError(
            "--by", "name a column of times between the years 1 and 9999",
            f"'{block.column}' holds others", "leave such rows out with --where",
        ) from None  # fmt: skip
