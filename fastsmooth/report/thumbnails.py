"""Small curves for the table: drawn on their own scale, with what puts all on a common one."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.curve import OK, Curve, has_own_points
from fastsmooth.report.rows import joined, stretches

Floats = NDArray[np.float64]

# Units of drawing: fine enough for whole numbers, which take few letters.
WIDE, HIGH = 1200, 340
_MOST_POINTS = 72
# How far weak parts may widen the drawing, in lengths of the firm one; beyond they are cut.
_REACH = 0.2
# Units of very unequal height are shown on their own scale at first.
_ALIKE = 0.2


class Ends(NamedTuple):
    """Ends of both axes of a small curve; x is logarithmic on a log scale."""

    left: float
    right: float
    bottom: float
    top: float


@dataclass(frozen=True)
class Thumbnail:
    """A small curve.

    Attributes
    ----------
    firm, weak : str
        Lines of well and of poorly supported points, as SVG path data.
    band : str
        The band's outline; empty where there is none.
    common : str
        The transformation that puts it on the scale of all units.
    """

    firm: str
    weak: str
    band: str
    common: str = ""

    def within(self, own: Ends, together: Ends) -> Thumbnail:
        """Return it with the transformation to the scale of all units."""
        across = _ratio(own.right - own.left, together.right - together.left)
        up = _ratio(own.top - own.bottom, together.top - together.bottom)
        right = WIDE * _ratio(own.left - together.left, together.right - together.left, 0.0)
        down = HIGH * _ratio(together.top - own.top, together.top - together.bottom, 0.0)
        return replace(self, common=f"matrix({across:.4g} 0 0 {up:.4g} {right:.4g} {down:.4g})")


def thumbnail(curve: Curve) -> tuple[Thumbnail, Ends]:
    """Draw a small curve.

    Parameters
    ----------
    curve : Curve
        What to draw.

    Returns
    -------
    Thumbnail
        On its own scale: `WIDE` by `HIGH`, y downwards.
    Ends
        Its scale.
    """
    x = np.log(curve.x) if curve.scale == "log" else curve.x
    known = np.isfinite(curve.estimate)
    if not known.any():
        return Thumbnail("", "", ""), Ends(0.0, 0.0, 0.0, 0.0)
    firm = known & (curve.status == OK) & np.isfinite(curve.lower) & np.isfinite(curve.upper)
    ends = _ends(curve, x, known, firm)

    def line(places: NDArray[np.int64], heights: Floats) -> list[tuple[int, int]]:
        across = _placed(x[places], ends.left, ends.right, WIDE)
        down = HIGH - _placed(heights[places], ends.bottom, ends.top, HIGH)
        return list(zip(across.tolist(), down.tolist(), strict=True))

    lines: dict[bool, list[str]] = {True: [], False: []}
    own = has_own_points(curve)
    for one in stretches(curve.status):
        if not known[one.start] or own:
            continue
        start, stop = joined(curve.status, one)
        places = _thinned(start, stop, x.size)
        lines[one.status == OK].append(_path(line(places, curve.estimate)))
    if own:
        # Nothing is known of what lies between points of the caller's own.
        dots = line(np.flatnonzero(known), curve.estimate)
        return Thumbnail("".join(_path([dot]) for dot in dots), "", ""), ends
    band = []
    for start, stop in _runs(firm):
        places = _thinned(start, stop, x.size)
        band.append(_path(line(places, curve.upper) + line(places, curve.lower)[::-1]) + "z")
    return Thumbnail("".join(lines[True]), "".join(lines[False]), "".join(band)), ends


def _ends(
    curve: Curve, x: Floats, known: NDArray[np.bool_], firm: NDArray[np.bool_]
) -> Ends:  # fmt: skip
    """All that is firm, and of the weak parts as much as does not flatten it."""
    sure = firm if firm.any() else known
    across = x[sure]
    along = _widened(float(across[0]), float(across[-1]), x[known])
    heights = np.concatenate((curve.estimate[sure], curve.lower[firm], curve.upper[firm]))
    up = _widened(float(heights.min()), float(heights.max()), curve.estimate[known])
    return Ends(*along, *up)


def _widened(low: float, high: float, rest: Floats) -> tuple[float, float]:
    reach = _REACH * (high - low)
    return (
        min(low, max(float(rest.min()), low - reach)),
        max(high, min(float(rest.max()), high + reach)),
    )


def _runs(flags: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """First point, and the point after the last, of each run of true flags."""
    edges = np.flatnonzero(np.diff(np.concatenate(([0], flags.astype(int), [0]))))
    return [(start, stop) for start, stop in edges.reshape(-1, 2).tolist()]


def common_ends(ends: Sequence[Ends]) -> Ends:
    """Return the scale of all units."""
    if not ends:
        return Ends(0.0, 0.0, 0.0, 0.0)
    left, right, bottom, top = zip(*ends, strict=True)
    return Ends(min(left), max(right), min(bottom), max(top))


def alike(ends: Sequence[Ends]) -> bool:
    """Whether most units can be seen on the scale of all."""
    if not ends:
        return True
    together = common_ends(ends)
    heights = np.array([one.top - one.bottom for one in ends])
    return bool(np.median(heights) >= _ALIKE * (together.top - together.bottom))


def _thinned(start: int, stop: int, points: int) -> NDArray[np.int64]:
    """Points of a piece, as many as its share of the whole asks for, both ends among them."""
    most = max(2, round(_MOST_POINTS * (stop - start) / points))
    if stop - start <= most:
        return np.arange(start, stop)
    return np.unique(np.linspace(start, stop - 1, most).round().astype(np.int64))


def _placed(values: Floats, low: float, high: float, length: int) -> NDArray[np.int64]:
    if not high > low:
        return np.full(values.shape, length // 2, np.int64)
    return np.asarray((values - low) / (high - low) * length).round().astype(np.int64)


def _path(points: Sequence[tuple[int, int]]) -> str:
    """SVG path data: where the line begins, and then steps."""
    (left, down), *rest = points
    text = f"M{left} {down}"
    if not rest:
        return text + "h0"  # a point alone: round ends make it a dot
    steps = []
    for here in rest:
        steps.append(f"{here[0] - left} {here[1] - down}")
        left, down = here
    return f"{text}l{' '.join(steps)}"


def _ratio(part: float, whole: float, none: float = 1.0) -> float:
    return part / whole if whole > 0.0 else none
