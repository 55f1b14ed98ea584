"""The picture of a curve: where the rows lie, the curve, and how its bandwidth was chosen."""

from __future__ import annotations

import os
from typing import Any, NamedTuple

from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from fastsmooth.curve import Curve
from fastsmooth.report import words
from fastsmooth.report.criteria import draw_criteria
from fastsmooth.report.labels import Box, Ruler
from fastsmooth.report.look import (
    DPI,
    LABEL_PT,
    MUTED,
    SMALL_PT,
    TEXT_PT,
    TITLE_PT,
    add_axes,
    plain_style,
    write,
)  # fmt: skip
from fastsmooth.report.rows import (
    cells_are_coarse,
    draw_counts,
    draw_ribbon,
    draw_rows,
    has_unsampled_rows,
    x_ends,
)
from fastsmooth.report.saving import save_figure
from fastsmooth.report.scales import named, shown_axis

# All in inches.
_WIDTH = 9.0
_MARGIN, _LEFT, _RIGHT = 0.3, 0.85, 8.7
_INDENT = 0.17
_TITLE_LINE, _TEXT_LINE, _SMALL_LINE = 0.27, 0.175, 0.145
_ROWS_HEIGHT, _STRIP_HEIGHT, _CRITERIA_HEIGHT, _LANE_HEIGHT = 2.95, 0.42, 1.35, 0.18
_SMALL_TITLE_PT = 11.0


def draw(curve: Curve, path: str | os.PathLike[str]) -> None:
    """Draw a curve into a file; the suffix decides: .png, .svg or .pdf.

    The same curve gives the same bytes.

    Parameters
    ----------
    curve : Curve
        What to draw.
    path : path
        Where the file shall be.

    Raises
    ------
    WriteError
        The file cannot be written; nothing is left behind.
    """
    save_figure(path, lambda: figure(curve), words.title(curve), words.subtitle(curve))


def figure(curve: Curve) -> Figure:
    """Return the picture of a curve as a matplotlib figure.

    Above, the rows as shaded cells, the band and the curve, and the number of rows of each
    stretch; below, the criterion of both estimators over the bandwidth. The figure is about 9 by
    8.5 inches; long names and many cautions make it higher.

    Parameters
    ----------
    curve : Curve
        What to draw.

    Returns
    -------
    matplotlib.figure.Figure
        The figure, with a canvas.
    """
    with plain_style():
        return _figure(curve)


class _Line(NamedTuple):
    """A line of the heading or of the small print."""

    x: float
    text: str
    height: float
    style: dict[str, Any]


class _Places(NamedTuple):
    """Where the panels lie."""

    ribbon: Box
    rows: Box
    strip: Box
    criteria: Box
    lanes: Box


def _figure(curve: Curve) -> Figure:
    made = Figure(figsize=(_WIDTH, _WIDTH), dpi=DPI)
    FigureCanvasAgg(made)
    ruler = Ruler(made)
    heading, small_print = _heading(curve, ruler), _small_print(curve, ruler)
    # From the bottom up: much small print makes the figure higher, not the panels smaller.
    below = 0.1 + sum(line.height for line in small_print)
    places = _places(below + 0.1, len(curve.search.trails))
    height = places.ribbon.top + 0.32 + sum(line.height for line in heading) + 0.14
    made.set_size_inches(_WIDTH, height)
    _write_down(made, height - 0.14, heading)
    _write_down(made, below, small_print)
    _draw_panels(made, curve, places, ruler)
    return made


def _heading(curve: Curve, ruler: Ruler) -> list[_Line]:
    room = _RIGHT - _MARGIN
    size, step = TITLE_PT, _TITLE_LINE
    titles = ruler.wrap(words.title(curve), room, size, "bold")
    if len(titles) > 2:
        size, step = _SMALL_TITLE_PT, 0.75 * _TITLE_LINE
        titles = ruler.wrap(words.title(curve), room, size, "bold", most=3)
    style = {"fontsize": size, "fontweight": "bold", "gid": "title"}
    lines = [_Line(_MARGIN, text, step, style) for text in titles]
    style = {"fontsize": TEXT_PT, "gid": "subtitle"}
    for text in ruler.wrap(words.subtitle(curve), room, TEXT_PT, most=4):
        lines.append(_Line(_MARGIN, text, _TEXT_LINE, style))
    notes = words.reading_notes(curve, cells_are_coarse(curve), has_unsampled_rows(curve))
    style = {"fontsize": SMALL_PT, "color": MUTED, "gid": "notes"}
    for text in ruler.wrap(notes, room, SMALL_PT) if notes else []:
        lines.append(_Line(_MARGIN, text, _SMALL_LINE, style))
    return lines


def _small_print(curve: Curve, ruler: Ruler) -> list[_Line]:
    lines = []
    style = {"fontsize": SMALL_PT, "gid": "cautions"}
    heading, sentences, rest = words.cautions(curve)
    if heading:
        lines.append(_Line(_MARGIN, heading, _SMALL_LINE, {**style, "fontweight": "bold"}))
    for number, sentence in enumerate(sentences, 1):
        for place, text in enumerate(
            ruler.wrap(sentence, _RIGHT - _MARGIN - _INDENT, SMALL_PT, most=3)
        ):
            if place == 0:
                lines.append(_Line(_MARGIN, str(number), 0.0, style))
            lines.append(_Line(_MARGIN + _INDENT, text, _SMALL_LINE, style))
    if rest:
        lines.append(_Line(_MARGIN + _INDENT, rest, _SMALL_LINE, style))
    if lines:
        lines.append(_Line(_MARGIN, "", 0.4 * _SMALL_LINE, style))
    style = {"fontsize": SMALL_PT, "color": MUTED, "gid": "small print"}
    return [*lines, _Line(_MARGIN, words.NOT_A_LIMIT, _SMALL_LINE, style)]


def _write_down(made: Figure, top: float, lines: list[_Line]) -> None:
    for line in lines:
        if line.text:
            write(made, line.x, top, line.text, va="top", **line.style)
        top -= line.height


def _places(bottom: float, trails: int) -> _Places:
    def above(low: float, height: float) -> Box:
        return Box(_LEFT, low, _RIGHT, low + height)

    lanes = above(bottom + 0.5, _LANE_HEIGHT * max(trails, 1))
    criteria = above(lanes.top + 0.04, _CRITERIA_HEIGHT)
    strip = above(criteria.top + 0.98, _STRIP_HEIGHT)
    rows = above(strip.top + 0.2, _ROWS_HEIGHT)
    return _Places(above(rows.top + 0.02, 0.22), rows, strip, criteria, lanes)


def _draw_panels(made: Figure, curve: Curve, places: _Places, ruler: Ruler) -> None:
    told = curve.settings
    shown = shown_axis(
        curve.axis, told["x"], told["x_unit"], x_ends(curve), curve.scale == "log",
        _RIGHT - _LEFT, lambda text: ruler.width(text, LABEL_PT),
    )  # fmt: skip
    value_ticks = draw_rows(add_axes(made, places.rows), curve, shown)
    draw_ribbon(add_axes(made, places.ribbon), places.ribbon, curve, shown, ruler)
    heights = draw_counts(add_axes(made, places.strip), curve, shown)
    error_ticks = draw_criteria(
        add_axes(made, places.criteria), add_axes(made, places.lanes), places.criteria, curve, ruler
    )

    def name_axis(x: float, y: float, text: str) -> None:
        side = "left" if x == _MARGIN else "right"
        text = ruler.shorten(text, _RIGHT - _MARGIN, LABEL_PT, "bold")
        write(made, x, y, text, fontsize=LABEL_PT, fontweight="bold", ha=side, gid="axis name")

    def note(x: float, y: float, text: str) -> None:
        side = "right" if x == _RIGHT else "left"
        write(made, x, y, text, fontsize=SMALL_PT, color=MUTED, ha=side, gid="notes")

    error, unit = words.criterion(curve)
    y_name = named(told["y"], told["y_unit"], value_ticks.note)
    name_axis(_MARGIN, places.ribbon.top + 0.05, y_name)
    name_axis(_RIGHT, places.strip.bottom - 0.42, shown.label)
    name_axis(_MARGIN, places.criteria.top + 0.12, named(error, unit, error_ticks.note))
    name_axis(_RIGHT, places.lanes.bottom - 0.42, words.width_axis(curve))
    note(_LEFT + 0.05, places.strip.top + 0.03, heights)
    note(_RIGHT, places.criteria.top + 0.12, words.HOW_TO_READ_CRITERIA)
