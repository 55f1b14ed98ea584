"""Blocks: rows that belong together, and the fold that each block goes to.

Rows of one block (a day, a batch) may depend on each other; blocks are taken as independent. Every
row of a block goes to the same fold, whichever file it stands in, so "all but one fold" leaves out
whole blocks.
"""

from __future__ import annotations

import hashlib
import re
import shlex
from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import lru_cache
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.errors import InputError
from fastsmooth.near import advise

if TYPE_CHECKING:
    import pyarrow as pa

UNITS = ("hour", "day", "week", "month")
# More keys than this are counted no further; so many blocks need no counting.
MOST_KEYS = 100_000
_LONG_SPAN_SECONDS = 20 * 365 * 86_400
_LONG_GAP_SECONDS = 365 * 86_400
_SECONDS = {"s": 1, "ms": 1_000, "us": 1_000_000, "ns": 1_000_000_000}
_MASK = (1 << 64) - 1
_QUOTED = re.compile(r'"((?:[^"]|"")+)"(?::(.+))?', re.DOTALL)


@dataclass(frozen=True)
class Block:
    """What makes rows belong together.

    Parameters
    ----------
    column : str
        A column of any type; its distinct values are the blocks.
    unit : str or None
        For a time column: ``hour``, ``day``, ``week`` (from Monday) or ``month``.
    zone : str or None
        Time zone in which units begin, for a column of instants; None means the column's own,
        which is UTC for times with an offset in CSV files. A clock without a zone is taken as it
        is.
    key : callable or None
        Takes the column as an Arrow array and returns an array of keys to use in its place.

    Examples
    --------
    >>> Block.parse("logged_at:day@Europe/Madrid")
    Block(column='logged_at', unit='day', zone='Europe/Madrid', key=None)
    """

    column: str
    unit: str | None = None
    zone: str | None = None
    key: Callable[[Any], Any] | None = None

    def __post_init__(self) -> None:
        if self.unit is not None and self.unit not in UNITS:
            raise InputError(
                "--block", "name a column, or a time column with a unit as in logged_at:day",
                f"'{self.unit}' is no unit",
                f"{advise(self.unit, UNITS)}, or put quotes around a name that holds a colon, as "
                f"in {shlex.quote(quoted(f'{self.column}:{self.unit}'))}",
            )  # fmt: skip
        if self.zone is not None:
            import zoneinfo

            try:
                zoneinfo.ZoneInfo(self.zone)
            except (zoneinfo.ZoneInfoNotFoundError, ValueError):
                raise InputError(
                    "--block", "name a known time zone after @", f"'{self.zone}' is none",
                    "write it as in Europe/Madrid",
                ) from None  # fmt: skip

    @classmethod
    def parse(cls, text: str) -> Block:
        """Read ``COLUMN``, ``COLUMN:unit`` or ``COLUMN:unit@zone``.

        A name in double quotes is taken as it is, colons included; a double quote in it is
        doubled, as in SQL.

        Raises
        ------
        InputError
            The unit or the zone is unknown, or a quote is not closed.

        Examples
        --------
        >>> Block.parse('"site:batch"')
        Block(column='site:batch', unit=None, zone=None, key=None)
        """
        if text.startswith('"'):
            found = _QUOTED.fullmatch(text)
            if found is None:
                raise InputError(
                    "--block", "name a column, or a time column with a unit as in logged_at:day",
                    f"the quotes in {text} do not hold a name",
                    "write '\"site:batch\"' or '\"logged:at\":day'",
                )  # fmt: skip
            unit, _, zone = (found[2] or "").partition("@")
            return cls(found[1].replace('""', '"'), unit or None, zone or None)
        column, colon, rest = text.rpartition(":")
        if not colon or not column:
            return cls(text)
        unit, _, zone = rest.partition("@")
        return cls(column, unit, zone or None)

    def __str__(self) -> str:
        text = self.column
        # Without a unit, what follows a colon would be taken for one.
        if text.startswith('"') or (":" in text and not self.unit):
            text = quoted(text)
        if self.unit:
            text += f":{self.unit}"
        if self.zone:
            text += f"@{self.zone}"
        if self.key is not None:
            text += f" by {getattr(self.key, '__name__', 'a function')}"
        return text


def quoted(name: str) -> str:
    """Put a name in double quotes, as `Block.parse` reads it.

    Examples
    --------
    >>> quoted("site:batch")
    '"site:batch"'
    """
    return '"' + name.replace('"', '""') + '"'


class Coder:
    """Tells the values of a column, or the time units that they lie in, apart.

    Parameters
    ----------
    block : Block
        The column, and the unit if there is one.
    argument : str
        The option that named it, for refusals.
    """

    def __init__(self, block: Block, argument: str = "--block") -> None:
        self.block = block
        self.argument = argument
        # The dictionary met last, and its values: the batches of a row group share one.
        self._known: tuple[pa.Array, list[Any]] | None = None

    def code(self, column: pa.Array) -> tuple[NDArray[np.integer[Any]], list[Any]]:
        """Return for every row the place of its key in a list of keys, and the list.

        Parameters
        ----------
        column : pyarrow.Array
            The column.

        Returns
        -------
        codes : (rows,) int32 or int64
            -1 where the key is null.
        keys : list
            Distinct values of the column, of which some may be those of no row; the number of
            each unit since 1970 (weeks from Monday) where a unit is given.

        Raises
        ------
        InputError
            A unit was given for a column that holds no times, a zone for one without a zone, or
            the values cannot be told apart.
        """
        if self.block.key is not None:
            column = self.block.key(column)
        if self.block.unit is not None:
            return self._code_times(column)
        return self._code_values(column)

    def _code_values(self, column: pa.Array) -> tuple[NDArray[np.integer[Any]], list[Any]]:
        import pyarrow as pa
        import pyarrow.compute as pc

        kind = column.type
        if pa.types.is_nested(kind):
            raise InputError(
                self.argument, "name a column of plain values",
                f"'{self.block.column}' holds {kind}", "name another column",
            )  # fmt: skip
        if pa.types.is_floating(kind):
            # NaN is no block, and -0.0 is the same as 0.0.
            column = pc.if_else(pc.is_nan(column), None, pc.add(column, 0.0))
            largest = pc.max(pc.abs(column)).as_py()
            if largest is not None and largest >= 2**53:
                raise InputError(
                    self.argument, "name a column whose values are told apart",
                    f"'{self.block.column}' holds floats beyond 2^53, which merge neighbours",
                    "write the column as text or as integers",
                )  # fmt: skip
        coded = column if pa.types.is_dictionary(column.type) else pc.dictionary_encode(column)
        known = self._known
        if known is None or known[0].type != coded.dictionary.type or not (
            known[0].equals(coded.dictionary)
        ):  # fmt: skip
            known = self._known = (coded.dictionary, coded.dictionary.to_pylist())
        indices = coded.indices
        if pa.types.is_unsigned_integer(indices.type):
            indices = indices.cast(pa.int64())
        if indices.null_count:
            indices = pc.fill_null(indices, -1)
        return indices.to_numpy(), known[1]

    def _code_times(self, column: pa.Array) -> tuple[NDArray[np.integer[Any]], list[Any]]:
        import pyarrow as pa

        kind = told = column.type
        if pa.types.is_date(kind):
            if self.block.unit == "hour":
                raise InputError(
                    self.argument, "name a column of times when the unit is an hour",
                    f"'{self.block.column}' holds {told}, which tells no hours",
                    f"write {self.argument} {replace(self.block, unit='day')}",
                )  # fmt: skip
            column = column.cast(pa.timestamp("ms" if pa.types.is_date64(kind) else "s"))
            kind = column.type
        if not pa.types.is_timestamp(kind):
            raise InputError(
                self.argument, "name a time column when a unit is given",
                f"'{self.block.column}' holds {kind}",
                f"write {self.argument} {replace(self.block, unit=None, zone=None)}",
            )  # fmt: skip
        if self.block.zone is not None and kind.tz is None:
            raise InputError(
                self.argument, "name a column of instants when a zone is given",
                f"'{self.block.column}' holds {told}, a clock without a zone",
                f"write {self.argument} {replace(self.block, zone=None)}, which takes it as it is",
            )  # fmt: skip
        valid = None
        if column.null_count:
            valid = column.is_valid().to_numpy(zero_copy_only=False)
            if not valid.any():
                return np.full(len(column), -1, np.int64), []
            column = column.fill_null(column.drop_null()[0])
        ticks = column.cast(pa.int64()).to_numpy()
        if not ticks.size:
            return np.empty(0, np.int64), []
        codes, numbers = self._code_ticks(ticks, kind)
        if valid is not None:
            codes = np.where(valid, codes, -1)
        return codes, numbers.tolist()

    def _code_ticks(
        self, ticks: NDArray[np.int64], kind: pa.DataType
    ) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
        low, high = int(ticks.min()), int(ticks.max())
        if high - low > _LONG_SPAN_SECONDS * _SECONDS[kind.unit]:
            # A stray time (a clock that was never set) makes the list of units between endless:
            # stretches without rows are left out of it.
            order = np.argsort(ticks, kind="stable")
            gap = np.diff(ticks[order]) > _LONG_GAP_SECONDS * _SECONDS[kind.unit]
            parts = np.split(order, np.flatnonzero(gap) + 1)
            if len(parts) > 1:
                codes, numbers, before = np.empty(ticks.size, np.int64), [], 0
                for part in parts:
                    codes[part], of_part = self._code_ticks(ticks[part], kind)
                    codes[part] += before
                    before += of_part.size
                    numbers.append(of_part)
                return codes, np.concatenate(numbers)
        starts, keys = _unit_starts(
            low, high, kind.unit, self.block.unit or "day", self.block.zone or kind.tz or "UTC",
            kind.tz is not None,
        )  # fmt: skip
        # Logs are in time order more often than not; then a few cuts do for all rows. Only units
        # that hold rows are kept: one stray time makes the range of units long.
        if bool((ticks[1:] >= ticks[:-1]).all()):
            cuts = np.searchsorted(ticks, starts[1:])
            lengths = np.diff(np.concatenate(([0], cuts, [ticks.size])))
            used = np.flatnonzero(lengths)
            return np.repeat(np.arange(used.size), lengths[used]), keys[used]
        place = np.searchsorted(starts, ticks, side="right") - 1
        used, own = np.unique(place, return_inverse=True)
        return own.astype(np.int64), keys[used]


class Dealer(Coder):
    """Deals blocks to folds.

    Parameters
    ----------
    block : Block
        What makes rows belong together.
    folds : int
        Number of folds.
    """

    def __init__(self, block: Block, folds: int) -> None:
        super().__init__(block)
        self.folds = folds

    def deal(self, column: pa.Array) -> tuple[NDArray[np.int64], set[Any]]:
        """Return the fold of every row (-1 where the block is null), and the keys met.

        Parameters
        ----------
        column : pyarrow.Array
            The block column.

        Raises
        ------
        InputError
            As `Coder.code` does.
        """
        codes, keys = self.code(column)
        met = np.bincount(codes + 1, minlength=len(keys) + 1)[1:]
        return self.folds_of(keys)[codes], {
            key for key, rows in zip(keys, met, strict=True) if rows
        }

    def folds_of(self, keys: list[Any]) -> NDArray[np.int64]:
        """Return the fold of each key that `code` gave, and -1 for null as one more at the end."""
        if self.block.unit is None:
            return np.array([fold_of_key(key, self.folds) for key in keys] + [-1], np.int64)
        return np.append(self._folds_of(np.array(keys, np.int64)), -1)

    def _folds_of(self, numbers: NDArray[np.int64]) -> NDArray[np.int64]:
        return np.array(
            [fold_of_number(number, self.folds) for number in numbers.tolist()], np.int64
        )


def check_alike(column: str, types: list[pa.DataType], argument: str = "--block") -> None:
    """Refuse a column that files hold in different kinds: equal blocks or units would be parted.

    Raises
    ------
    InputError
        Kinds or time zones differ.
    """
    kinds = list(dict.fromkeys(kind for kind in map(kind_of, types) if kind))
    if len(kinds) > 1:
        raise InputError(
            argument, "name a column of one kind in every file",
            f"'{column}' holds {kinds[0]} in some and {kinds[1]} in others",
            "write the files alike",
        )  # fmt: skip


def kind_of(data_type: pa.DataType) -> str:
    """Return the kind of a column in words; empty where it holds nulls only."""
    import pyarrow.types as pt

    if pt.is_dictionary(data_type):
        return kind_of(data_type.value_type)
    if pt.is_timestamp(data_type):
        return f"times in zone {data_type.tz}" if data_type.tz else "times without a zone"
    known = (
        (pt.is_null, ""), (pt.is_integer, "integers"), (pt.is_floating, "floats"),
        (pt.is_decimal, "decimals"), (pt.is_boolean, "truth values"), (pt.is_date, "dates"),
        (pt.is_string, "text"), (pt.is_large_string, "text"), (pt.is_string_view, "text"),
    )  # fmt: skip
    return next((words for test, words in known if test(data_type)), str(data_type))


def merge_keys(mine: set[Any], other: set[Any]) -> set[Any]:
    """Return the union of two sets of block keys, counted up to a limit."""
    return mine if len(mine) >= MOST_KEYS else mine | other


def _unit_starts(
    low: int, high: int, tick: str, unit: str, zone: str, zoned: bool
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Starts of all units that touch [low, high], in ticks, and the number of each unit."""
    per_second = _SECONDS[tick]
    # A week that touches `low` may begin seven days before it; zones shift by up to a day.
    margin = 9 * 86_400
    seconds = np.array([low // per_second - margin, high // per_second + margin])
    code = {"hour": "h", "day": "D", "week": "D", "month": "M"}[unit]
    ends = seconds.astype("datetime64[s]").astype(f"datetime64[{code}]")
    locals_ = np.arange(ends[0], ends[1] + 1)
    numbers = locals_.astype(np.int64)
    if unit == "week":
        # 1970-01-01 was a Thursday: day numbers of Mondays leave 4 when divided by 7.
        mondays = numbers % 7 == 4
        locals_, numbers = locals_[mondays], numbers[mondays] // 7
    starts = locals_.astype("datetime64[s]").astype(np.int64)
    # Hours are absolute; days, weeks and months begin at local midnight.
    if zoned and unit != "hour":
        import pyarrow as pa
        import pyarrow.compute as pc

        plain = pa.array(starts).cast(pa.timestamp("s"))
        moved = pc.assume_timezone(plain, zone, ambiguous="earliest", nonexistent="latest")
        starts = moved.cast(pa.int64()).to_numpy()
    starts = starts * per_second
    first = int(np.searchsorted(starts, low, side="right")) - 1
    last = int(np.searchsorted(starts, high, side="right")) - 1
    return starts[first : last + 1], numbers[first : last + 1]


def fold_of_key(key: Any, folds: int) -> int:
    """Return the fold of a block named by a value: the same in every file, run and version."""
    if key is None:
        return -1
    if isinstance(key, int) and not isinstance(key, bool):
        return fold_of_number(key, folds)
    digest = hashlib.blake2b(str(key).encode(), digest_size=8).digest()
    return int.from_bytes(digest, "little") % folds


def fold_of_number(number: int, folds: int) -> int:
    """Return the fold of a numbered block.

    Every `folds` consecutive numbers are dealt to all folds, in an order of their own: folds stay
    of equal size, and none follows a cycle in the numbers (weekdays, shifts).
    """
    group, place = divmod(number, folds)
    return _shuffled(group & _MASK, folds)[place]


@lru_cache(maxsize=4096)
def _shuffled(seed: int, n: int) -> tuple[int, ...]:
    """A fixed shuffle of range(n): Fisher-Yates with SplitMix64 (Steele, Lea & Flood 2014)."""
    order = list(range(n))
    state = seed
    for last in range(n - 1, 0, -1):
        state = (state + 0x9E3779B97F4A7C15) & _MASK
        mixed = state
        mixed = ((mixed ^ (mixed >> 30)) * 0xBF58476D1CE4E5B9) & _MASK
        mixed = ((mixed ^ (mixed >> 27)) * 0x94D049BB133111EB) & _MASK
        mixed ^= mixed >> 31
        other = mixed % (last + 1)
        order[last], order[other] = order[other], order[last]
    return tuple(order)
