"""From axis floats to places and ticks that people read: numbers, logarithms, times, widths."""

from __future__ import annotations

import math
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from datetime import UTC, datetime, timedelta, timezone, tzinfo
from zoneinfo import ZoneInfo

import numpy as np
from numpy.typing import NDArray

from fastsmooth.axis import SECONDS_PER_DAY, TICKS_PER_SECOND, WIDTH_UNITS, Axis

Floats = NDArray[np.float64]
# Inches taken by a label of so many letters; None stands for "one below the other".
Measure = Callable[[str], float]

_SUPERSCRIPT = str.maketrans("-0123456789", "⁻⁰¹²³⁴⁵⁶⁷⁸⁹")
# Below this span a calendar has nothing to say.
_SHORTEST_CALENDAR_S = 10.0
_DATES_FROM = datetime(2, 1, 1, tzinfo=UTC).timestamp()
_DATES_UNTIL = datetime(9998, 1, 1, tzinfo=UTC).timestamp()
_WIDTH_STEPS_S = (
    *(a * 10.0**k for k in range(-9, 0) for a in (1, 2, 5)),
    1, 2, 5, 10, 20, 30, 60, 120, 300, 600, 1200, 1800, 3600, 7200, 10_800, 21_600, 43_200,
    *(86_400.0 * a * 10.0**k for k in range(7) for a in (1, 2, 5)),
)  # fmt: skip


@dataclass(frozen=True)
class Ticks:
    """Tick marks of one axis.

    Attributes
    ----------
    places : list of float
        Where, in plotted units.
    texts : list of str
        What they say.
    note : str
        What all have in common: a power of ten, a value to add, a date; may be empty.
    """

    places: list[float]
    texts: list[str]
    note: str = ""


def short_number(value: float) -> str:
    """Write a number for people: up to six digits with commas, else a short power of ten.

    Examples
    --------
    >>> short_number(12000.0), short_number(0.25), short_number(3e8)
    ('12,000', '0.25', '3e8')
    """
    if value == 0.0 or 1e-4 <= abs(value) < 999_999.5:
        text = f"{value:,.6g}" if abs(value) < 1e5 else f"{value:,.0f}"
        return text.replace("-", "−")
    mantissa, exponent = f"{value:.3g}".split("e") if "e" in f"{value:.3g}" else (f"{value:g}", "0")
    return f"{mantissa}e{int(exponent)}".replace("-", "−")


def count_text(rows: float) -> str:
    """Write a number of rows in a few letters.

    Examples
    --------
    >>> count_text(950), count_text(12_300), count_text(4_500_000)
    ('950', '12 k', '4.5 M')
    """
    for unit, size in (("G", 1e9), ("M", 1e6), ("k", 1e3)):
        if rows >= 0.9995 * size:
            shown = rows / size
            return f"{shown:.2g} {unit}" if shown < 99.5 else f"{shown:.0f} {unit}"
    return f"{rows:.3g}"


def number_ticks(low: float, high: float, most: int = 6) -> Ticks:
    """Return ticks of a plain number axis.

    Parameters
    ----------
    low, high : float
        Ends of the axis, ascending.
    most : int
        Most ticks.

    Returns
    -------
    Ticks
        Numbers of at most six digits; what they would share is in the note.
    """
    from matplotlib.ticker import MaxNLocator

    places = MaxNLocator(nbins=most, steps=[1, 2, 2.5, 5, 10]).tick_values(low, high)
    margin = 1e-9 * (high - low)
    places = places[(places >= low - margin) & (places <= high + margin)]
    if places.size < 2:
        return Ticks([float(one) for one in places], [short_number(float(one)) for one in places])
    step = float(places[1] - places[0])
    largest = float(np.abs(places).max())
    offset = 0.0
    if largest >= 1e4 and step < 1e-4 * largest:
        # Only the last digits differ: they are shown, the rest is said once.
        unit = 10.0 ** math.ceil(math.log10(high - low))
        offset = math.floor(low / unit) * unit
    shifted = places - offset
    largest = float(np.abs(shifted).max())
    power = 0
    if not 1e-3 <= largest < 999_999.5:
        power = 3 * math.floor(math.log10(largest) / 3.0)
    decimals = max(0, math.ceil(-math.log10(step / 10.0**power) - 1e-9))
    # Steps such as 2.5 need one digit more than their size tells.
    while abs(round(step / 10.0**power, decimals) * 10.0**power - step) > 1e-6 * step:
        decimals += 1
    texts = []
    for place in shifted.tolist():
        # Adding zero turns a negative zero into zero.
        value = round(place / 10.0**power, decimals) + 0.0
        texts.append(f"{value:,.{decimals}f}".replace("-", "−"))
    notes = []
    if power:
        notes.append("in 10" + str(power).translate(_SUPERSCRIPT))
    if offset:
        notes.append(f"{'above' if offset > 0 else 'from'} {_whole(offset)}")
    return Ticks(places.tolist(), texts, ", ".join(notes))


def _whole(value: float) -> str:
    text = f"{value:,.0f}" if abs(value) < 1e15 and value == round(value) else f"{value:.12g}"
    return text.replace("-", "−")


def log_ticks(
    low: float,
    high: float,
    place_of: Callable[[float], float],
    measure: Measure,
    per_inch: float,
    name: Callable[[float], str] = short_number,
) -> Ticks:
    """Return ticks of a logarithmic axis of positive numbers.

    Parameters
    ----------
    low, high : float
        Ends of the axis.
    place_of : callable
        Turns a value into inches along the axis, up to a constant, over `per_inch`.
    measure : callable
        Inches that a text takes.
    per_inch : float
        Units of `place_of` in an inch.
    name : callable
        Writes a value.

    Returns
    -------
    Ticks
        As many round values as fit without touching.
    """
    first, last = math.floor(math.log10(low)), math.ceil(math.log10(high))
    families: list[list[float]] = []
    if last - first <= 2:
        families.append([float(one) for one in number_ticks(low, high, 8).places if one > 0.0])
    for digits in ((1, 2, 3, 4, 5, 6, 7, 8, 9), (1, 2, 5), (1, 3)):
        families.append([d * 10.0**k for k in range(first, last + 1) for d in digits])
    for step in (1, 2, 3, 5, 10, 20, 50):
        families.append([10.0**k for k in range(first, last + 1) if k % step == 0])
    inside = [[one for one in family if low <= one <= high] for family in families]
    # The evenest family of 1, 2, 5 and its kin that fits; plain steps only for short spans.
    for family in inside[-9:] if last - first > 2 else [*inside[-9:-7], *inside[:1]]:
        if len(family) >= 3 and fits_side_by_side(family, place_of, measure, per_inch, name):
            return Ticks(family, [name(one) for one in family])
    return _thinned(inside[0] or [low, high], place_of, measure, per_inch, name)


def fits_side_by_side(
    values: Sequence[float],
    place_of: Callable[[float], float],
    measure: Measure,
    per_inch: float,
    name: Callable[[float], str],
) -> bool:
    """Whether the labels of all values keep a gap between them."""
    ends = -math.inf
    for value in values:
        centre, half = place_of(value) / per_inch, 0.5 * measure(name(value))
        if centre - half < ends + 0.1:
            return False
        ends = centre + half
    return True


def _thinned(
    values: Sequence[float],
    place_of: Callable[[float], float],
    measure: Measure,
    per_inch: float,
    name: Callable[[float], str],
) -> Ticks:
    for step in range(1, len(values) + 1):
        chosen = values[::step]
        if fits_side_by_side(chosen, place_of, measure, per_inch, name):
            break
    return Ticks(list(chosen), [name(one) for one in chosen])
