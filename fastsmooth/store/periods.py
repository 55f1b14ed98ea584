"""Periods: the stretches of time that a store keeps apart, so that it can forget and roll."""

from __future__ import annotations

import contextlib
import re
from dataclasses import dataclass
from typing import Any

import numpy as np

from fastsmooth.blocks import UNITS, Block, Coder
from fastsmooth.errors import InputError

_NUMPY_UNIT = {"hour": "h", "day": "D", "month": "M"}
# The Monday of week 0 is so many days after 1970-01-01, a Thursday.
_FIRST_MONDAY = 4
_WORDS = "be a number and a unit, as in '12 months'"
# What a span may be counted in, for periods of each unit: (months, days, hours) of one.
_SPANS = {
    "hour": {"hour": (0, 0, 1), "day": (0, 1, 0), "week": (0, 7, 0)},
    "day": {"day": (0, 1, 0), "week": (0, 7, 0), "month": (1, 0, 0), "year": (12, 0, 0)},
    "week": {"week": (0, 7, 0)},
    "month": {"month": (1, 0, 0), "year": (12, 0, 0)},
}


@dataclass(frozen=True)
class Period:
    """A time column cut into hours, days, weeks or months.

    Periods have numbers: so many units after 1970 began (weeks from Monday).

    Parameters
    ----------
    column : str
        A column of times.
    unit : str
        ``hour``, ``day``, ``week`` or ``month``.
    zone : str or None
        Time zone in which units begin; None means the column's own.

    Examples
    --------
    >>> Period.parse("logged_at:month")
    Period(column='logged_at', unit='month', zone=None)
    >>> Period.parse("logged_at:month").label(660)
    '2025-01'
    """

    column: str
    unit: str
    zone: str | None = None

    @classmethod
    def parse(cls, text: str) -> Period:
        """Read ``COLUMN:unit`` or ``COLUMN:unit@zone``.

        Raises
        ------
        InputError
            The unit or the zone is unknown, or missing.
        """
        try:
            cut = Block.parse(text)
        except InputError as error:
            raise InputError("--period", error.requirement, error.received, error.remedy) from None
        if cut.unit is None:
            raise InputError(
                "--period", "name a time column with a unit", f"'{text}' has none",
                f"write {text}:month",
            )  # fmt: skip
        return cls(cut.column, cut.unit, cut.zone)

    def __str__(self) -> str:
        return str(Block(self.column, self.unit, self.zone))

    def coder(self) -> Coder:
        """Return what gives every row its period: see `fastsmooth.blocks.Coder`."""
        return Coder(Block(self.column, self.unit, self.zone), "--period")

    def label(self, number: int) -> str:
        """Return a period's name for people: the date, or the date and hour, of its beginning."""
        if self.unit == "week":
            return f"week of {self._start(number).astype('datetime64[D]')}"
        text = str(self._start(number).astype(f"datetime64[{_NUMPY_UNIT[self.unit]}]"))
        return text.replace("T", " ") + (":00" if self.unit == "hour" else "")

    def begun_at(self, date: str, argument: str) -> int:
        """Return the number of the period that begins at a date.

        Raises
        ------
        InputError
            It is no date, or lies inside a period: part of a period cannot be told from the rest.
        """
        at: Any = np.datetime64("NaT", "s")
        with contextlib.suppress(ValueError):
            at = np.datetime64(date.strip().replace(" ", "T"), "s")
        if np.isnat(at):
            raise InputError(argument, "be a date", f"it is '{date}'", "write it as in 2025-03-01")
        number = self._number_at(at)
        starts = self._start(number)
        if starts != at:
            near = str(starts.astype("datetime64[D]" if self.unit != "hour" else "datetime64[h]"))
            raise InputError(
                argument, f"be the beginning of a {self.unit}, which the store keeps whole",
                f"'{date}' lies within one", f"write {near}",
            )  # fmt: skip
        return number

    def _number_at(self, at: Any) -> int:
        if self.unit == "week":
            return (int(at.astype("datetime64[D]").astype(np.int64)) - _FIRST_MONDAY) // 7
        return int(at.astype(f"datetime64[{_NUMPY_UNIT[self.unit]}]").astype(np.int64))

    def _start(self, number: int) -> Any:
        """The moment at which a period begins, on the clock of its zone."""
        unit = _NUMPY_UNIT.get(self.unit, "D")
        count = 7 * number + _FIRST_MONDAY if self.unit == "week" else number
        return np.array(count).astype(f"datetime64[{unit}]").astype("datetime64[s]")[()]

    def first_of_last(self, span: str, newest: int) -> int:
        """Return the first period of a span that ends with the newest period.

        Parameters
        ----------
        span : str
            As in ``12 months``, ``1 year``, ``30 days``.
        newest : int
            Number of the newest period.

        Raises
        ------
        InputError
            It is no span, or one that cuts periods.
        """
        read = re.fullmatch(r"\s*(\d+)\s*([a-z]+?)s?\s*", span)
        if read is None or int(read[1]) == 0:
            raise InputError("--last", _WORDS, f"it is '{span}'", "write it so")
        known = _SPANS[self.unit]
        if read[2] not in known:
            every = {name for spans in _SPANS.values() for name in spans}
            what = "of another unit" if read[2] in every else "of no unit of time"
            listed = ", ".join(f"{name}s" for name in known)
            raise InputError(
                "--last", f"be counted in {listed}, because the store keeps {self.unit}s apart",
                f"'{span}' is {what}", f"write it in {next(iter(known))}s",
            )  # fmt: skip
        months, days, hours = (int(read[1]) * one for one in known[read[2]])
        stop = self._start(newest + 1)
        if months:
            # The day of the month is kept where the month has it.
            month = stop.astype("datetime64[M]")
            day = stop.astype("datetime64[D]") - month.astype("datetime64[D]")
            start = (month - months).astype("datetime64[D]")
            length = (month - months + 1).astype("datetime64[D]") - start
            at = (start + min(day, length - 1)).astype("datetime64[s]")
        else:
            at = stop - np.timedelta64(24 * days + hours, "h")
        return self._number_at(at)


assert set(_SPANS) == set(UNITS)
