"""Text that fits: measured, wrapped, shortened, and placed where it covers nothing."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from typing import NamedTuple

import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import FontProperties
from numpy.typing import NDArray

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

    def within(self, other: Box) -> bool:
        """Whether the box lies in another."""
        return (
            self.left >= other.left and self.right <= other.right
            and self.bottom >= other.bottom and self.top <= other.top
        )  # fmt: skip


class Ruler:
    """Measures text as the picture will draw it.

    Parameters
    ----------
    figure : Figure
        Its resolution counts, because glyphs are fitted to pixels.
    """

    def __init__(self, figure: Figure) -> None:
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
    """Where a label may stand: its lower left corner in inches, and how welcome it is there."""

    left: float
    bottom: float
    cost: float


def around(x: float, y: float, width: float, height: float) -> list[Spot]:
    """Return spots around a marker: above it first, then to the sides, then farther up."""
    spots = []
    for step, rise in enumerate((0.09, 0.2, 0.34, 0.5, 0.68, 0.88)):
        for shift, cost in ((0.5, 0.0), (0.0, 0.3), (1.0, 0.3), (-0.25, 0.6), (1.25, 0.6)):
            spots.append(Spot(x - shift * width, y + rise, cost + 0.5 * step))
    for left in (x + 0.1, x - 0.1 - width):
        spots.append(Spot(left, y - 0.5 * height, 0.2))
        spots.append(Spot(left, y - height - 0.06, 0.5))
    spots.append(Spot(x - 0.5 * width, y - height - 0.1, 0.6))
    return spots


def best_spot(
    spots: Iterable[Spot],
    size: tuple[float, float],
    room: Box,
    taken: Sequence[Box],
    lines: Sequence[NDArray[np.float64]],
) -> Spot:
    """Choose the spot that covers least.

    Parameters
    ----------
    spots : iterable of Spot
        Candidates.
    size : (float, float)
        Width and height of the label, inches.
    room : Box
        The label should lie within.
    taken : sequence of Box
        Other labels.
    lines : sequence of (n, 2) float64
        Points along drawn lines, inches, closely spaced.

    Returns
    -------
    Spot
        The best, moved into the room sideways where needed.
    """
    width, height = size

    def judged(spot: Spot) -> tuple[float, Spot]:
        left = min(max(spot.left, room.left), max(room.right - width, room.left))
        moved = Spot(left, spot.bottom, spot.cost + 2.0 * abs(left - spot.left))
        box = Box(left, spot.bottom, left + width, spot.bottom + height).grown(0.02)
        cost = moved.cost
        cost += 100.0 * sum(box.meets(other) for other in taken)
        cost += 0.0 if box.within(room.grown(0.03)) else 50.0
        for line in lines:
            inside = (line[:, 0] > box.left) & (line[:, 0] < box.right)
            inside &= (line[:, 1] > box.bottom) & (line[:, 1] < box.top)
            cost += 3.0 * bool(inside.any()) + 0.02 * float(np.count_nonzero(inside))
        return cost, moved

    return min((judged(spot) for spot in spots), key=lambda pair: pair[0])[1]


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
    for start, stop in zip(points[:-1], points[1:], strict=True):
        length = float(np.hypot(*(stop - start)))
        if np.isfinite(length) and length > step:
            # A line that leaves the picture far away needs no point for every inch of its way.
            share = np.linspace(0.0, 1.0, min(int(length / step) + 2, 2000))[:, None]
            out.append(start + share * (stop - start))
    return np.concatenate(out)
