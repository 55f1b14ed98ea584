"""Text that fits: measured, wrapped, shortened, and placed where it covers nothing."""

from __future__ import annotations

import itertools
import math
import re
from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from numpy.typing import NDArray

# A text closer than this to what it names needs no tie.
_CLOSE_IN = 0.13
# After a separator a long name may be broken.
_BREAKS = re.compile(r"(?<=[_\-./])")


class Box(NamedTuple):
    """A rectangle in inches from the figure's lower left corner."""

    left: float
    bottom: float
    right: float
    top: float

    def meets(self, other: Box) -> bool:
        """Whether two boxes share more than a border."""
        return (
            self.left < other.right and other.left < self.right
            and self.bottom < other.top and other.bottom < self.top
        )  # fmt: skip

    def grown(self, by: float) -> Box:
        """Return the box with a margin on all sides."""
        return Box(self.left - by, self.bottom - by, self.right + by, self.top + by)

    def holds(self, points: NDArray[np.float64]) -> int:
        """Count the points, (n, 2), inside the box."""
        x, y = points[:, 0], points[:, 1]
        inside = (x > self.left) & (x < self.right) & (y > self.bottom) & (y < self.top)
        return int(np.count_nonzero(inside))

    def within(self, other: Box) -> bool:
        """Whether the box lies in another."""
        return (
            self.left >= other.left and self.right <= other.right
            and self.bottom >= other.bottom and self.top <= other.top
        )  # fmt: skip


class Ruler:
    """Measures text as the picture will draw it."""

    def __init__(self, figure: Figure) -> None:
        """Measure for a figure: its resolution counts, because glyphs are fitted to pixels."""
        self._dpi = figure.dpi
        self._renderer = FigureCanvasAgg(figure).get_renderer()

    def width(self, text: str, size: float, weight: str = "normal") -> float:
        """Return the width of one line in inches; `size` in points."""
        font = FontProperties(size=size, weight=weight)
        wide, _, _ = self._renderer.get_text_width_height_descent(text, font, ismath=False)
        return float(wide) / self._dpi

    def wrap(
        self, text: str, width: float, size: float, weight: str = "normal", most: int = 99
    ) -> list[str]:
        """Break text into lines.

        Parameters
        ----------
        text : str
            Words parted by spaces. A word that is too long alone is broken too.
        width : float
            Room, inches.
        size : float
            Points.
        weight : str
            Font weight.
        most : int
            Most lines; the last one is shortened.

        Returns
        -------
        list of str
            At least one line.
        """

        def fits(line: str) -> bool:
            return self.width(line, size, weight) <= width

        lines = [""]
        for word in text.split():
            joined = f"{lines[-1]} {word}".lstrip()
            if fits(joined):
                lines[-1] = joined
                continue
            if lines[-1] and fits(word):
                lines.append(word)
                continue
            # Too long for any line: by its parts, and those by letters.
            glue = " " if lines[-1] else ""
            for part in _BREAKS.split(word):
                for piece in [part] if fits(part) else part:
                    if fits(lines[-1] + glue + piece):
                        lines[-1] += glue + piece
                    else:
                        lines.append(piece)
                    glue = ""
        if len(lines) > most:
            rest = " ".join(lines[most - 1 :])
            lines = [*lines[: most - 1], self.shorten(rest, width, size, weight)]
        return lines

    def shorten(self, text: str, width: float, size: float, weight: str = "normal") -> str:
        """Cut text at its end, with an ellipsis, until it fits into `width` inches."""
        if self.width(text, size, weight) <= width:
            return text
        low, high = 0, len(text)
        while low < high:
            middle = (low + high + 1) // 2
            if self.width(text[:middle].rstrip() + "…", size, weight) <= width:
                low = middle
            else:
                high = middle - 1
        return text[:low].rstrip() + "…"


class Spot(NamedTuple):
    """Where a label may stand: its lower left corner in inches, and what that costs."""

    left: float
    bottom: float
    cost: float


class Label(NamedTuple):
    """A text to be placed.

    Attributes
    ----------
    width, height : float
        Inches.
    anchor : (float, float) or None
        What it names; a label far from it is tied to it by a line.
    spots : list of Spot
        Where it may stand.
    """

    width: float
    height: float
    anchor: tuple[float, float] | None
    spots: list[Spot]

    def box(self, spot: Spot) -> Box:
        """Return the room that the text takes at a spot."""
        return Box(spot.left, spot.bottom, spot.left + self.width, spot.bottom + self.height)

    def tie(self, spot: Spot) -> NDArray[np.float64] | None:
        """Return the ends of the line to the anchor, (2, 2); None where the text is close by."""
        if self.anchor is None:
            return None
        x, y = self.anchor
        box = self.box(spot)
        near = (min(max(x, box.left), box.right), min(max(y, box.bottom), box.top))
        if np.hypot(near[0] - x, near[1] - y) <= _CLOSE_IN:
            return None
        # Towards a letter, not a corner.
        inset = min(0.15, 0.5 * self.width)
        start = min(max(x, box.left + inset), box.right - inset)
        return np.array([[start, near[1]], [x, y]])


def around(x: float, y: float, width: float, height: float) -> list[Spot]:
    """Return spots around a marker: right above it first, then ever farther away."""
    spots = []
    for step in range(8):
        rise = 0.09 + 0.9 * step * height
        for aside in (0.5, 0.0, 1.0, -0.2, 1.2, -0.5, 1.5, -0.8, 1.8):
            # From a word's width aside on, the tie grows long.
            away = max(abs(aside - 0.5) - 0.5, 0.0)
            spots.append(
                Spot(x - aside * width, y + rise, 0.6 * abs(aside - 0.5) + away + 0.4 * step)
            )
    for left in (x + 0.1, x - 0.1 - width):
        spots.append(Spot(left, y - 0.5 * height, 0.2))
    return spots


def scattered(room: Box, width: float, height: float) -> list[Spot]:
    """Return spots all over a room, from its top down."""
    lefts = np.linspace(room.left, max(room.right - width, room.left), 12).tolist()
    rows = int((room.top - room.bottom) / height)
    return [
        Spot(left, room.top - (row + 1) * height, 0.2 * row)
        for row in range(rows)
        for left in lefts
    ]


def place_labels(
    labels: Sequence[Label],
    room: Box,
    taken: Sequence[Box],
    lines: Sequence[NDArray[np.float64]],
) -> list[Spot]:
    """Choose spots that together cover least.

    Parameters
    ----------
    labels : sequence of Label
        Two or three at most: all combinations may be looked at.
    room : Box
        The labels should lie within.
    taken : sequence of Box
        What is there already.
    lines : sequence of (n, 2) float64
        Points along drawn lines, inches, closely spaced.

    Returns
    -------
    list of Spot
        One per label, moved into the room sideways where needed.
    """
    choices = []
    for label in labels:
        judged = [_judge(label, spot, room, taken, lines) for spot in label.spots]
        choices.append(sorted(judged, key=lambda spot: spot.cost))
    best, least = [judged[0] for judged in choices], math.inf
    combinations = itertools.product(*choices)
    for chosen in sorted(combinations, key=lambda spots: sum(spot.cost for spot in spots)):
        alone = sum(spot.cost for spot in chosen)
        if alone >= least:
            break  # conflicts only add to it
        total = alone + _conflicts(labels, chosen)
        if total < least:
            best, least = list(chosen), total
    return best


def _judge(
    label: Label,
    spot: Spot,
    room: Box,
    taken: Sequence[Box],
    lines: Sequence[NDArray[np.float64]],
) -> Spot:
    left = min(max(spot.left, room.left), max(room.right - label.width, room.left))
    cost = spot.cost + 2.0 * abs(left - spot.left)
    moved = Spot(left, spot.bottom, cost)
    box = label.box(moved).grown(0.02)
    cost += 100.0 * sum(box.meets(other) for other in taken)
    cost += 0.0 if box.within(room.grown(0.03)) else 50.0
    for line in lines:
        covered = box.holds(line)
        cost += 8.0 * bool(covered) + 0.1 * covered
    tie = label.tie(moved)
    if tie is not None:
        across, up = np.abs(tie[1] - tie[0]).tolist()
        # A flat tie would run along the flat bottom of a curve.
        cost += 1.5 * math.hypot(across, up) + 3.0 * (up < 0.6 * across)
    return moved._replace(cost=cost)


def _conflicts(labels: Sequence[Label], spots: Sequence[Spot]) -> float:
    """The cost of texts over each other, and of ties through texts."""
    cost = 0.0
    boxes = [label.box(spot).grown(0.02) for label, spot in zip(labels, spots, strict=True)]
    for place, (label, spot) in enumerate(zip(labels, spots, strict=True)):
        tie = label.tie(spot)
        along = None if tie is None else dense(tie)
        for other, box in enumerate(boxes):
            if other == place:
                continue
            cost += 50.0 * boxes[place].meets(box)
            cost += 0.0 if along is None else 20.0 * bool(box.holds(along))
    return cost


def dense(points: NDArray[np.float64], step: float = 0.02) -> NDArray[np.float64]:
    """Return points along a polyline, at most `step` apart; breaks at points that are not finite.

    Parameters
    ----------
    points : (n, 2) float64
        Corners.
    step : float
        Spacing, same unit.
    """
    out = [points[np.isfinite(points).all(axis=1)]]
    for start, stop in itertools.pairwise(points):
        length = float(np.hypot(*(stop - start)))
        if np.isfinite(length) and length > step:
            # A line that leaves the picture far away needs no point for every inch of its way.
            share = np.linspace(0.0, 1.0, min(int(length / step) + 2, 2000))[:, None]
            out.append(start + share * (stop - start))
    return np.concatenate(out)
