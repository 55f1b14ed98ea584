"""What a store counts, fixed when it is made."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import asdict, dataclass, fields, replace
from typing import Any

from fastsmooth.blocks import Block
from fastsmooth.errors import InputError
from fastsmooth.grouping import Grouping
from fastsmooth.settings import SCALES, as_tuple, check_text, one_of, whole_number
from fastsmooth.store.periods import Period

FEWEST_BINS = 256
MOST_BINS = 65_536
BINS_ALONE = 8192
MOST_BINS_OF_UNITS = 4096
# All units' tables together, when all their curves are made at once.
_MEMORY_BYTES = 512 << 20
_BIN_BYTES = 64
FOLDS = 32


@dataclass(frozen=True)
class StoreSettings:
    """What a store counts; None leaves a setting as it is, or to its default in a new store.

    Parameters
    ----------
    x, y : str or None
        The reading along the axis and the reading whose mean is sought; a new store needs both.
    weight, count : str or None
        Columns of precisions and of repeats.
    by : tuple of str
        Columns whose values tell units apart.
    block : str or None
        Which rows may depend on each other, as in ``logged_at:day``.
    period : str or None
        Time column and unit by which rows are kept apart, as in ``logged_at:month``: only a
        store with periods can forget and roll.
    where : str or None
        SQL condition that a row must meet.
    range : (object, object) or None
        Lowest and highest x; None lets the bins grow with the data.
    scale : str or None
        ``linear`` (default) or ``log``.
    bins : int or None
        Bins, a power of two; default 8192, with `by` 4096, fewer for very many units.
    folds : int or None
        Parts into which the rows are dealt for standard errors; default 32.
    """

    x: str | None = None
    y: str | None = None
    weight: str | None = None
    count: str | None = None
    by: tuple[str, ...] = ()
    block: str | None = None
    period: str | None = None
    where: str | None = None
    range: tuple[object, object] | None = None
    scale: str | None = None
    bins: int | None = None
    folds: int | None = None

    def __post_init__(self) -> None:
        for name in ("x", "y", "weight", "count", "block", "period", "where"):
            value = getattr(self, name)
            if value is not None:
                check_text(f"--{name}", value, "be a text", "write it in quotes")
        object.__setattr__(
            self, "by", as_tuple("--by", self.by, "hold column names", "put it in a tuple")
        )
        # Kept in one spelling, so that quotes around a name make no other store.
        if self.by:
            object.__setattr__(self, "by", Grouping.parse(self.by).words)
        if self.block is not None:
            object.__setattr__(self, "block", str(Block.parse(self.block)))
        if self.period is not None:
            object.__setattr__(self, "period", str(Period.parse(self.period)))
        if self.scale is not None:
            one_of("--scale", self.scale, SCALES)
        if self.range is not None:
            both, remedy = "hold the lowest and the highest x", "give two values"
            ends = as_tuple("--range", self.range, both, remedy)
            if len(ends) != 2:
                raise InputError("--range", both, f"it is {self.range!r}", remedy)
            object.__setattr__(self, "range", tuple(str(end) for end in ends))
        if self.folds is not None:
            whole_number("--folds", self.folds, 2, 1024)
        if self.bins is not None:
            bins = whole_number("--bins", self.bins, FEWEST_BINS, MOST_BINS)
            if bins & (bins - 1):
                raise InputError(
                    "--bins", "be a power of two", f"it is {bins}",
                    f"give {1 << (bins.bit_length() - 1)} or {1 << bins.bit_length()}",
                )  # fmt: skip

    def filled(self) -> StoreSettings:
        """Return the settings of a new store, defaults filled in but for the bins of many units.

        Raises
        ------
        InputError
            x or y is missing.
        """
        for name in ("x", "y"):
            if getattr(self, name) is None:
                raise InputError(
                    f"--{name}", "be given for a new store", "it is missing", "name a column"
                )
        return replace(
            self, scale=self.scale or "linear", folds=self.folds or FOLDS,
            bins=self.bins or (None if self.by else BINS_ALONE),
        )  # fmt: skip

    def with_bins_for(self, units: int) -> StoreSettings:
        """Return the settings with as many bins as leave the tables of all units in memory."""
        if self.bins is not None:
            return self
        room = _MEMORY_BYTES // (_BIN_BYTES * (self.folds or FOLDS) * max(units, 1))
        power = 1 << max(0, room.bit_length() - 1)
        return replace(self, bins=min(max(power, FEWEST_BINS), MOST_BINS_OF_UNITS))

    def check_agrees(self, given: StoreSettings) -> None:
        """Refuse settings that contradict those of the store.

        Raises
        ------
        InputError
            One differs.
        """
        for name, value in given._plain().items():
            own = getattr(self, name)
            if value not in (None, ()) and value != own:
                raise InputError(
                    f"--{name}", "agree with the store",
                    f"it is {_words(value)} and the store has {_words(own)}",
                    f"leave --{name} out, or make another store",
                )  # fmt: skip

    def _plain(self) -> dict[str, Any]:
        return {one.name: getattr(self, one.name) for one in fields(self)}

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return asdict(self)

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> StoreSettings:
        """Build settings from what `to_dict` returned."""
        ends = plain["range"]
        return cls(**{**plain, "by": tuple(plain["by"]), "range": ends and tuple(ends)})

    @property
    def names(self) -> tuple[str, str]:
        """Columns x and y of a filled store."""
        assert self.x is not None
        assert self.y is not None
        return self.x, self.y

    @property
    def sizes(self) -> tuple[int, int]:
        """Bins and folds of a filled store."""
        assert self.bins is not None
        assert self.folds is not None
        return self.bins, self.folds


def _words(value: object) -> str:
    if value is None or value == ():
        return "none"
    if isinstance(value, Sequence) and not isinstance(value, str):
        return " ".join(str(one) for one in value)
    return str(value)
