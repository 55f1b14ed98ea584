"""From axis floats to places and ticks that people read: numbers, logarithms, times, widths."""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone, tzinfo
from typing import NamedTuple
from zoneinfo import ZoneInfo

import numpy as np
from matplotlib.dates import MINUTELY, SECONDLY, AutoDateLocator, num2date
from matplotlib.ticker import MaxNLocator
from numpy.typing import NDArray

from fastsmooth.axis import SECONDS_PER_DAY, TICKS_PER_SECOND, WIDTH_UNITS, Axis

Floats = NDArray[np.float64]

_MINUS = "\N{MINUS SIGN}"
_MONTHS = ("Jan", "Feb", "Mar", "Apr", "May", "Jun", "Jul", "Aug", "Sep", "Oct", "Nov", "Dec")
_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
_STEPS = [1, 2, 2.5, 5, 10]
_SIXTIETHS = [1, 2, 5, 10, 15, 30]
_MOST_TICKS = 8
# Linear steps read better than 1, 2, 5 where a log axis spans less than this factor.
_SHORT_LOG_SPAN = 4.0
_GAP_IN = 0.12
# Below this span a calendar has nothing to say, nor has it outside the years 2 to 9998.
_SHORTEST_CALENDAR_S = 10.0
_CALENDAR_DAYS = (-718_000.0, 2_930_000.0)
_WIDTHS_S = (
    *(digit * 10.0**power for power in range(-9, 0) for digit in (1, 2, 5)),
    1.0, 2.0, 5.0, 10.0, 30.0, 60.0, 120.0, 300.0, 600.0, 1800.0, 3600.0, 7200.0, 21_600.0,
    43_200.0, *(86_400.0 * digit * 10.0**power for power in range(7) for digit in (1, 2, 5)),
)  # fmt: skip
_FACTORS = (
    *(1.0 + digit * 10.0**power for power in range(-9, 0) for digit in (1, 2, 5)),
    2.0, 3.0, 5.0, 10.0, 30.0, *(10.0**power for power in (2, 3, 4, 6, 9, 12, 20, 50, 100, 200)),
)  # fmt: skip


class Ticks(NamedTuple):
    """Tick marks of one axis.

    Attributes
    ----------
    places : list of float
        Where, in plotted units.
    texts : list of str
        What they say.
    note : str
        What they have in common: a power of ten, a value to add, a date; may be empty.
    """

    places: list[float]
    texts: list[str]
    note: str


@dataclass(frozen=True)
class Track:
    """The room for tick labels along an axis.

    Attributes
    ----------
    inches : callable
        Where along the axis a value lies.
    measure : callable
        How wide a text is, inches.
    """

    inches: Callable[[float], float]
    measure: Callable[[str], float]

    def fitting(self, values: Iterable[float], name: Callable[[float], str]) -> list[float]:
        """Return the values whose labels keep a gap to the one before."""
        kept, end = [], -math.inf
        for value in values:
            centre, half = self.inches(value), 0.5 * self.measure(name(value))
            if centre - half >= end + _GAP_IN:
                kept.append(value)
                end = centre + half
        return kept


class Shown(NamedTuple):
    """How x is drawn.

    Attributes
    ----------
    plotted : callable
        Turns axis floats into plotted units.
    ticks : Ticks
        Its tick marks.
    label : str
        What stands at the axis.
    """

    plotted: Callable[[Floats], Floats]
    ticks: Ticks
    label: str


def named(name: str, unit: str, note: str = "") -> str:
    """Write a column with its unit, and what its ticks have in common."""
    text = f"{name} ({unit})" if unit else name
    return printable(f"{text}, {note}" if note else text)


def printable(text: str) -> str:
    """Put spaces for line breaks and other characters that no font draws.

    Examples
    --------
    >>> printable("power\\nkw")
    'power kw'
    """
    return "".join(one if one.isprintable() else " " for one in text)


def short_number(value: float) -> str:
    """Write a number for people: up to six digits with commas, else a power of ten.

    Examples
    --------
    >>> short_number(12000.0), short_number(0.25), short_number(3e8)
    ('12,000', '0.25', '3e8')
    """
    if value == 0.0 or 1e-4 <= abs(value) < 999_999.5:
        text = f"{value:,.0f}" if abs(value) >= 1e5 else f"{value:,.6g}"
    else:
        mantissa, exponent = f"{value:.2e}".split("e")
        text = f"{float(mantissa):g}e{int(exponent)}"
    return text.replace("-", _MINUS)


def short_count(rows: float) -> str:
    """Write a number of rows in a few letters.

    Examples
    --------
    >>> short_count(950.0), short_count(12_300.0), short_count(4_500_000.0)
    ('950', '12 k', '4.5 M')
    """
    for unit, size in (("G", 1e9), ("M", 1e6), ("k", 1e3)):
        if rows >= size:
            shown = rows / size
            return f"{shown:.2g} {unit}" if shown < 99.5 else f"{shown:.0f} {unit}"
    return f"{rows:.3g}"


def number_ticks(low: float, high: float, most: int = 6) -> Ticks:
    """Return ticks of a plain number axis from `low` to `high`, short even for large numbers."""
    places = _linear(low, high, most)
    if len(places) < 2:
        return Ticks(places, [short_number(place) for place in places], "")
    step = places[1] - places[0]
    largest = max(abs(places[0]), abs(places[-1]))
    offset = 0.0
    if step < (1e-4 if largest >= 1e4 else 1e-5) * largest:
        # Only the last digits differ: they are shown, and the rest is said once.
        unit = 10.0 ** math.ceil(math.log10(high - low))
        offset = math.floor(low / unit) * unit
        largest = max(abs(places[0] - offset), abs(places[-1] - offset))
    power = 0
    if not 1e-2 <= largest < 999_999.5:
        power = 3 * math.floor(math.log10(largest) / 3.0)
    step /= 10.0**power
    decimals = max(0, -math.floor(math.log10(step) + 1e-9))
    if not math.isclose(round(step, decimals), step, rel_tol=1e-6):
        decimals += 1  # steps of 2.5
    texts = []
    for place in places:
        # Adding zero turns a negative zero into zero.
        value = round((place - offset) / 10.0**power, decimals) + 0.0
        texts.append(f"{value:,.{decimals}f}".replace("-", _MINUS))
    notes = [f"in 10{str(power).translate(_SUPERSCRIPT)}"] if power else []
    if offset:
        whole = f"{offset:,.0f}" if offset % 1.0 == 0.0 and abs(offset) < 1e15 else f"{offset:.12g}"
        notes.append(f"above {whole.replace('-', _MINUS)}")
    return Ticks(places, texts, ", ".join(notes))


def log_ticks(low: float, high: float, track: Track) -> Ticks:
    """Return ticks of a logarithmic axis from `low` to `high`: as many round values as fit."""
    powers = range(math.floor(math.log10(low)), math.ceil(math.log10(high)) + 1)
    families: list[list[float]] = []
    if high < _SHORT_LOG_SPAN * low:
        families += [_linear(low, high, most) for most in (_MOST_TICKS, 5, 3)]
    for digits in ((1, 2, 3, 4, 5, 6, 7, 8, 9), (1, 2, 5), (1, 3)):
        families.append([digit * 10.0**power for power in powers for digit in digits])
    for step in (1, 2, 3, 5, 10, 20, 50, 100):
        families.append([10.0**power for power in powers if power % step == 0])
    chosen: list[float] = []
    for family in families:
        inside = [value for value in family if low <= value <= high]
        fitting = track.fitting(inside, short_number)
        if len(fitting) == len(inside) and len(inside) >= 3:
            chosen = inside
            break
        chosen = max(chosen, fitting, key=len)
    return Ticks(chosen, [short_number(value) for value in chosen], "")


def width_ticks(low: float, high: float, axis: Axis, log: bool, track: Track) -> Ticks:
    """Return ticks of a logarithmic axis of bandwidths.

    Parameters
    ----------
    low, high : float
        Its ends, on the plan's scale: logarithms of factors where `log`.
    axis : Axis
        What x means.
    log : bool
        Whether x is on a log scale.
    track : Track
        Room along the axis, for values on the plan's scale.
    """
    if log:
        texts = {math.log(factor): f"{factor:.10g}" for factor in _FACTORS}
    elif axis.kind == "number":
        return log_ticks(low, high, track)
    else:
        texts = {width: axis.width_label(width) for width in _WIDTHS_S}
    inside = [width for width in texts if low <= width <= high]
    # Every second label, if need be, rather than an uneven choice.
    for step in range(1, len(inside) + 1):
        chosen = inside[::step]
        if len(track.fitting(chosen, texts.__getitem__)) == len(chosen):
            return Ticks(chosen, [texts[width] for width in chosen], "")
    return Ticks([], [], "")


def shown_axis(
    axis: Axis,
    name: str,
    unit: str,
    ends: tuple[float, float],
    log: bool,
    length_in: float,
    measure: Callable[[str], float],
) -> Shown:
    """Decide how x is drawn.

    Parameters
    ----------
    axis : Axis
        What x means.
    name, unit : str
        Column and unit; the unit may be empty.
    ends : (float, float)
        Ends of the axis, in axis floats.
    log : bool
        Whether x is on a log scale.
    length_in : float
        Length of the axis, inches.
    measure : callable
        How wide a text is, inches.

    Returns
    -------
    Shown
        Numbers as they are; durations in a unit that suits; times as days since 1970, for
        matplotlib's dates, or as seconds after the first where the span is too short for these.
    """
    low, high = ends
    if log:
        track = Track(lambda x: length_in * math.log(x / low) / math.log(high / low), measure)
        return Shown(np.asarray, log_ticks(low, high, track), named(name, unit))
    if axis.kind in ("timestamp", "date"):
        days = _days(axis, np.array(ends))
        in_calendar = _CALENDAR_DAYS[0] < days[0] and days[1] < _CALENDAR_DAYS[1]
        if in_calendar and high - low >= _SHORTEST_CALENDAR_S:
            return _calendar(axis, name, days, length_in, measure)
        ticks = number_ticks(0.0, high - low, _MOST_TICKS)
        label = named(f"{name}, seconds after {axis.label(low)}", "", ticks.note)
        return Shown(lambda x: x - low, ticks, label)
    size = 1.0
    if axis.kind == "duration":
        reach = max(abs(low), abs(high))
        unit, size = next((one for one in WIDTH_UNITS if reach >= 2.0 * one[1]), WIDTH_UNITS[-1])
    for most in range(_MOST_TICKS, 0, -1):
        ticks = number_ticks(low / size, high / size, most)
        if _fits(ticks, (low / size, high / size), length_in, measure):
            break
    return Shown(lambda x: x / size, ticks, named(name, unit, ticks.note))


def _linear(low: float, high: float, most: int) -> list[float]:
    places = MaxNLocator(nbins=most, steps=_STEPS).tick_values(low, high)
    margin = 1e-9 * (high - low)
    return [float(one) for one in places if low - margin <= one <= high + margin]


def _fits(
    ticks: Ticks, ends: tuple[float, float], length_in: float, measure: Callable[[str], float]
) -> bool:
    texts = dict(zip(ticks.places, ticks.texts, strict=True))
    kept = _track(ends, length_in, measure).fitting(ticks.places, texts.__getitem__)
    return len(kept) == len(texts)


def _track(ends: tuple[float, float], length_in: float, measure: Callable[[str], float]) -> Track:
    low, high = ends
    return Track(lambda x: (x - low) / (high - low) * length_in, measure)


def _days(axis: Axis, x: Floats) -> Floats:
    """Days since 1970 (UTC) of axis floats."""
    ticks = 1 if axis.unit == "day" else TICKS_PER_SECOND[axis.unit] * SECONDS_PER_DAY
    return axis.origin / ticks + x / SECONDS_PER_DAY


def _calendar(
    axis: Axis, name: str, days: Floats, length_in: float, measure: Callable[[str], float]
) -> Shown:
    zone = _zone(axis.zone)
    first, last = num2date(days, tz=zone)
    for most in range(_MOST_TICKS, 2, -1):
        locator = AutoDateLocator(tz=zone, minticks=3, maxticks=most)
        # Steps of two as well: from one to five is too far for a span of ten.
        locator.intervald[MINUTELY] = locator.intervald[SECONDLY] = _SIXTIETHS
        # Where summer time begins or ends, some come twice.
        places = sorted({float(one) for one in locator.tick_values(first, last)})
        places = [one for one in places if days[0] <= one <= days[1]]
        moments = num2date(places, tz=zone)
        ticks = Ticks(places, *_moment_texts(moments, (first, last)))
        if _fits(ticks, (float(days[0]), float(days[1])), length_in, measure):
            break
    else:
        # Days that step over the end of a month can lie close together at any count.
        texts = dict(zip(ticks.places, ticks.texts, strict=True))
        track = _track((float(days[0]), float(days[1])), length_in, measure)
        kept = track.fitting(ticks.places, texts.__getitem__)
        ticks = Ticks(kept, [texts[place] for place in kept], ticks.note)
    unit = axis.zone or ""
    return Shown(lambda x: _days(axis, x), ticks, named(name, unit, ticks.note))


def _moment_texts(
    moments: list[datetime], ends: tuple[datetime, datetime]
) -> tuple[list[str], str]:
    """What changes between ticks goes into their texts, what does not into the note."""
    steps = [(b - a).total_seconds() for a, b in itertools.pairwise(moments)]
    step = min(steps, default=0.0)
    day = float(SECONDS_PER_DAY)
    if step > 360 * day:
        return [str(moment.year) for moment in moments], ""
    if step > 27 * day:
        texts = [_MONTHS[moment.month - 1] for moment in moments]
        for place, moment in enumerate(moments):
            if place == 0 or moment.year != moments[place - 1].year:
                texts[place] += f" {moment.year}"
        return texts, ""
    # An hour's difference may come from summer time.
    if step > day - 2 * 3600:
        years = sorted({end.year for end in ends})
        texts = [f"{moment.day} {_MONTHS[moment.month - 1]}" for moment in moments]
        return texts, " to ".join(map(str, years))
    texts = []
    for moment in moments:
        text = f"{moment:%H:%M}" if step >= 60.0 else f"{moment:%H:%M:%S}"
        if ends[0].date() != ends[1].date() and moment.hour == moment.minute == moment.second == 0:
            text = f"{moment.day} {_MONTHS[moment.month - 1]}"
        texts.append(text)
    dates = dict.fromkeys(f"{end.day} {_MONTHS[end.month - 1]} {end.year}" for end in ends)
    return texts, " to ".join(dates)


def _zone(name: str | None) -> tzinfo:
    """The zone of an Arrow column: a name, or an offset such as +02:00."""
    if name is None:
        return UTC
    if name[0] in "+-":
        sign = -1 if name[0] == "-" else 1
        hours, minutes = (int(part) for part in name[1:].split(":"))
        return timezone(sign * timedelta(hours=hours, minutes=minutes))
    return ZoneInfo(name)
