"""How the floats on the x axis map to what the user sees: numbers, times, dates, durations."""

from __future__ import annotations

import math
import re
from dataclasses import asdict, dataclass
from datetime import date, timedelta
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.errors import InputError

if TYPE_CHECKING:
    import pyarrow as pa

SECONDS_PER_DAY = 86_400
TICKS_PER_SECOND = {"s": 1, "ms": 1_000, "us": 1_000_000, "ns": 1_000_000_000}
# Longest first; a width is told in its two largest units.
WIDTH_UNITS = (
    ("d", 86_400.0),
    ("h", 3_600.0),
    ("min", 60.0),
    ("s", 1.0),
    ("ms", 1e-3),
    ("us", 1e-6),
    ("ns", 1e-9),
)
WIDTH_PATTERN = re.compile(
    r"\s*([0-9]*\.?[0-9]+(?:[eE][-+]?[0-9]+)?)\s*(d|h|min|s|ms|us|ns)(?![a-z])"
)
FINE_FRACTION = re.compile(r"\.[0-9]{7}")
OFFSET = re.compile(r"[T ][0-9:.]+(Z|[-+][0-9]{2}(:?[0-9]{2})?)$")
_ARGUMENT = "a value of x"


@dataclass(frozen=True)
class Axis:
    """The meaning of the floats on the x axis.

    For temporal kinds a float is seconds since the origin, so that the full resolution of the
    column survives in a float64.

    Parameters
    ----------
    kind : str
        ``number``, ``timestamp``, ``date`` or ``duration``.
    arrow_type : str
        The Arrow type of the column, in Arrow's spelling.
    unit : str
        Finest unit among the files: ``s``, ``ms``, ``us``, ``ns``, ``day``; empty for numbers.
    zone : str or None
        Time zone of the column.
    origin : int
        Subtracted in `unit` before the conversion to float; 0 for numbers and durations.

    Examples
    --------
    >>> axis = Axis("timestamp", "timestamp[us]", "us", None, 1_767_225_600_000_000)
    >>> axis.label(axis.from_user("2026-01-01 06:30"))
    '2026-01-01 06:30'
    >>> axis.width_label(7800.0)
    '2 h 10 min'
    """

    kind: str
    arrow_type: str
    unit: str
    zone: str | None
    origin: int

    def data_type(self) -> pa.DataType:
        """Return the Arrow type that `to_arrow` produces."""
        import pyarrow as pa

        if self.kind == "timestamp":
            return pa.timestamp(self.unit, self.zone)
        if self.kind == "date":
            return pa.date32()
        if self.kind == "duration":
            return pa.duration(self.unit)
        return pa.float64()

    def to_arrow(self, x: NDArray[np.float64]) -> pa.Array:
        """Turn floats into a column of the original kind.

        Parameters
        ----------
        x : (n,) float64
            Axis values. Temporal kinds are rounded to the nearest `unit`.

        Returns
        -------
        pyarrow.Array
            n values; null where x is NaN and, for temporal kinds, where the type cannot hold x.
        """
        import pyarrow as pa

        values = np.asarray(x, dtype=np.float64)
        if self.kind == "number":
            return pa.array(values, mask=np.isnan(values))
        # What overflows is beyond the limit below, and null.
        with np.errstate(over="ignore"):
            scaled = values / SECONDS_PER_DAY if self.unit == "day" else values * self._ticks()
        ticks = np.rint(scaled)
        limit = float(2**31 if self.unit == "day" else 2**63) - abs(self.origin)
        # The last float below the limit is the largest that the integer type surely holds.
        held = np.abs(ticks) < limit
        integers = np.where(held, ticks, 0.0).astype(np.int64) + self.origin
        if self.unit == "day":
            integers = integers.astype(np.int32)
        return pa.array(integers, mask=~held).cast(self.data_type())

    def from_user(self, value: object, argument: str = _ARGUMENT) -> float:
        """Read one value that a user gave: a text, a number, a time, a date or a duration.

        A time without a zone is read in the column's zone.

        Parameters
        ----------
        value : str, int, float, datetime.datetime, datetime.date, datetime.timedelta
            The value. Durations take seconds as a number, or a text such as ``2 h 10 min``.
        argument : str
            What the value was given for, for the refusal.

        Returns
        -------
        float
            The axis value.

        Raises
        ------
        InputError
            The value does not belong on this axis.
        """
        if isinstance(value, np.generic) and value.dtype.kind not in "mM":
            value = value.item()
        if self.kind == "number":
            return self._number(value, argument)
        if self.kind == "duration":
            return self.width_from_user(value, argument)
        if isinstance(value, np.datetime64):
            # Spelled as a date or to the second at least, which is how texts are read.
            coarse = {"Y": "D", "M": "D", "W": "D", "h": "s", "m": "s"}
            unit = np.datetime_data(value.dtype)[0]
            value = str(value.astype(f"datetime64[{coarse.get(unit, unit)}]"))
        if isinstance(value, date):
            value = value.isoformat()
        if not isinstance(value, str):
            remedy = "write it as in 2026-01-31"
            raise self._refusal(value, f"be a {self.kind}", remedy, argument)
        return self._moment(value, argument)

    def floats_from_user(self, values: Any, argument: str = _ARGUMENT) -> NDArray[np.float64]:
        """Read many values that a user gave.

        Parameters
        ----------
        values : array_like
            Axis floats as they are (NaN included), or anything that `from_user` reads.
        argument : str
            What the values were given for, for the refusal.

        Returns
        -------
        float64 array
            Axis values, in the shape of `values`.

        Raises
        ------
        InputError
            A value does not belong on this axis.
        """
        array = np.asarray(values)
        if array.dtype.kind in "fiu":
            return array.astype(np.float64)
        # A column of times keeps its zone as a list, but not as an array.
        listing = getattr(values, "to_pylist", None) or getattr(values, "to_list", None)
        ones = array.ravel() if listing is None else listing()
        floats = [self.from_user(one, argument) for one in ones]
        return np.array(floats, np.float64).reshape(array.shape)

    def width_from_user(self, value: object, argument: str = _ARGUMENT) -> float:
        """Read a width along the axis that a user gave.

        Parameters
        ----------
        value : str, int, float, datetime.timedelta
            A number (seconds on a temporal axis), or a text such as ``2 h 10 min``.
        argument : str
            What the width was given for, for the refusal.

        Returns
        -------
        float
            The width in axis floats.

        Raises
        ------
        InputError
            The value is not a width.
        """
        if isinstance(value, np.timedelta64):
            value = value.astype("timedelta64[us]").item()
        if isinstance(value, timedelta) and self.kind != "number":
            return value.total_seconds()
        if isinstance(value, str) and self.kind != "number":
            pieces = [match for match in WIDTH_PATTERN.finditer(value)]
            if pieces and not WIDTH_PATTERN.sub("", value).strip():
                seconds = dict(WIDTH_UNITS)
                return math.fsum(float(piece[1]) * seconds[piece[2]] for piece in pieces)
        return self._number(value, argument)

    def label(self, value: float) -> str:
        """Write one axis value for people.

        Parameters
        ----------
        value : float
            Axis value.

        Returns
        -------
        str
            The value in the column's own terms and zone; ``none`` for NaN.
        """
        if math.isnan(value):
            return "none"
        if self.kind == "number":
            return f"{value:.6g}"
        if self.kind == "duration":
            return self.width_label(value)
        cell = self.to_arrow(np.array([value]))
        if not cell[0].is_valid:
            return "none"
        if self.kind == "date":
            return str(cell[0].as_py())
        import pyarrow as pa
        import pyarrow.compute as pc

        if self.zone is not None:
            cell = pc.local_timestamp(cell)
        text = str(cell.cast(pa.string())[0].as_py())
        head, _, fraction = text.partition(".")
        fraction = fraction.rstrip("0")
        if fraction:
            return f"{head}.{fraction}"
        return head.removesuffix(":00") if head.endswith(":00") else head

    def width_label(self, h: float) -> str:
        """Write a width along the axis for people.

        Parameters
        ----------
        h : float
            Width in axis floats.

        Returns
        -------
        str
            Four significant digits for numbers, the two largest units for temporal kinds.
        """
        if self.kind == "number" or not math.isfinite(h):
            return f"{h:.4g}"
        sign = "-" if h < 0 else ""
        size = abs(h)
        for place, (unit, seconds) in enumerate(WIDTH_UNITS):
            if size < seconds * 0.9995 and unit != "ns":
                continue
            if unit in ("s", "ms", "us", "ns"):
                return f"{sign}{size / seconds:.4g} {unit}"
            smaller, smaller_seconds = WIDTH_UNITS[place + 1]
            # Rounding is done once, in the smaller unit, so that 59.9 min becomes 1 h.
            count = round(size / smaller_seconds)
            whole, rest = divmod(count, round(seconds / smaller_seconds))
            tail = f" {rest} {smaller}" if rest else ""
            return f"{sign}{whole} {unit}{tail}"
        return f"{h:.4g} s"

    def to_dict(self) -> dict[str, Any]:
        """Return the axis as plain data for JSON."""
        return asdict(self)

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Axis:
        """Build an axis from what `to_dict` returned.

        Parameters
        ----------
        plain : dict
            Plain data.

        Returns
        -------
        Axis
            The same axis.
        """
        return cls(**plain)

    def _ticks(self) -> int:
        return TICKS_PER_SECOND[self.unit]

    def _number(self, value: object, argument: str) -> float:
        remedy = "write a number"
        if self.kind != "number":
            remedy = "write seconds, or a width such as '2 h 10 min'"
        if isinstance(value, str | int | float) and not isinstance(value, bool):
            try:
                number = float(value)
            except ValueError:
                raise self._refusal(value, "be a number", remedy, argument) from None
            if math.isfinite(number):
                return number
        raise self._refusal(value, "be a finite number", remedy, argument)

    def _refusal(self, value: object, requirement: str, remedy: str, argument: str) -> InputError:
        shown = str(value) if isinstance(value, np.generic) else repr(value)
        return InputError(argument, requirement, f"{shown} was given", remedy)

    def _moment(self, text: str, argument: str) -> float:
        try:
            moment = parse_moment(text.strip(), self.zone)
        except ValueError as error:
            requirement = f"be a {self.kind}"
            if "zone" in str(error):
                requirement += " without a zone, as the column has none"
            raise self._refusal(
                text, requirement, "write it as in 2026-01-31 or 2026-01-31T06:30", argument
            ) from error
        per_second = TICKS_PER_SECOND[moment.type.unit]
        if self.unit == "day":
            origin_seconds, ticks_per_second = self.origin * SECONDS_PER_DAY, 1
        else:
            origin_seconds, ticks_per_second = self.origin, self._ticks()
        # Python integers: no overflow and one rounding.
        since = moment.value * ticks_per_second - origin_seconds * per_second
        return since / (per_second * ticks_per_second)


def parse_moment(text: str, zone: str | None) -> pa.TimestampScalar:
    """Read a time as people and ISO 8601 write it.

    Parameters
    ----------
    text : str
        A date, or a date and a time, with at most nine digits after the second.
    zone : str or None
        Zone in which a text without an offset is read. Of a local time that occurs twice the
        first is meant; one that a clock change skips means the change itself.

    Returns
    -------
    pyarrow.TimestampScalar
        In ``ns`` if the text has more than six digits after the second, else in ``us``; in
        `zone`.

    Raises
    ------
    ValueError
        No time, or an offset where there is no zone.
    """
    import pyarrow as pa
    import pyarrow.compute as pc

    unit = "ns" if FINE_FRACTION.search(text) else "us"
    if OFFSET.search(text):
        if zone is None:
            raise ValueError("an offset where there is no zone")
        return pa.scalar(text).cast(pa.timestamp(unit, "UTC")).cast(pa.timestamp(unit, zone))
    plain = pa.scalar(text).cast(pa.timestamp(unit))
    if zone is None:
        return plain
    return pc.assume_timezone(plain, zone, ambiguous="earliest", nonexistent="latest")
