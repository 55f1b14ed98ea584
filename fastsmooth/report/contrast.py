"""The picture of a comparison: both curves and their difference, or units by their excess."""

from __future__ import annotations

import os
from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from numpy.typing import NDArray

from fastsmooth.comparison import CurveComparison, UnitComparison
from fastsmooth.comparison_words import amount_text, p_text
from fastsmooth.difference import Difference
from fastsmooth.excess import Excess
from fastsmooth.report.labels import Box, Ruler
from fastsmooth.report.look import (
    BAND,
    CURVE,
    DPI,
    INK,
    LABEL_PT,
    MUTED,
    OTHER,
    OTHER_PALE,
    RULE,
    SMALL_PT,
    TEXT_PT,
    TITLE_PT,
    add_axes,
    plain_style,
    set_ticks,
    write,
)  # fmt: skip
from fastsmooth.report.saving import save_figure
from fastsmooth.report.scales import Shown, named, number_ticks, printable, shown_axis
from fastsmooth.report.words import NOT_A_LIMIT, first_sentence

Floats = NDArray[np.float64]

# All in inches.
_WIDTH = 9.0
_MARGIN, _LEFT, _RIGHT = 0.3, 0.85, 8.7
_TITLE_LINE, _TEXT_LINE, _SMALL_LINE = 0.27, 0.175, 0.145
_CURVES_HEIGHT, _DIFFERENCE_HEIGHT, _LANE_HEIGHT = 2.6, 1.9, 0.16
_UNIT_HEIGHT, _UNIT_LEFT = 0.22, 2.3
_MOST_UNITS = 60
_MOST_CAUTIONS = 3
# Bands that open up where rows are few do not widen the picture beyond so many middle heights.
_REACH = 2.0


def draw(found: CurveComparison, path: str | os.PathLike[str]) -> None:
    """Draw a comparison into a file; the suffix decides: .png, .svg or .pdf.

    The same comparison gives the same bytes.

    Parameters
    ----------
    found : CurveComparison
        What to draw.
    path : path
        Where the file shall be.

    Raises
    ------
    WriteError
        The file cannot be written; nothing is left behind.
    """
    save_figure(path, lambda: figure(found), _title(found))


def figure(found: CurveComparison) -> Figure:
    """Return the picture of a comparison as a matplotlib figure.

    One unit: above, both curves; below, now less base with its pointwise band, the limits of the
    band for the whole curve, and bars where it excludes 0. Many units: the excess of each with its
    interval, largest first.

    Parameters
    ----------
    found : CurveComparison
        What to draw.

    Returns
    -------
    matplotlib.figure.Figure
        The figure, with a canvas.
    """
    with plain_style():
        made = Figure(figsize=(_WIDTH, _WIDTH), dpi=DPI)
        FigureCanvasAgg(made)
        if found.by:
            _draw_units(made, found)
        else:
            _draw_one(made, found, found.units[0])
        return made


def _title(found: CurveComparison) -> str:
    told = found.settings
    text = f"{named(told['y'], told['y_unit'])} against {named(told['x'], told['x_unit'])}"
    return f"{text}: now and base"


def _heading(
    made: Figure, found: CurveComparison, ruler: Ruler, said: str
) -> list[tuple[str, float, dict[str, Any]]]:
    room = _RIGHT - _MARGIN
    style: dict[str, Any] = {"fontsize": TITLE_PT, "fontweight": "bold", "gid": "title"}
    lines = [
        (text, _TITLE_LINE, style)
        for text in ruler.wrap(_title(found), room, TITLE_PT, "bold", most=2)
    ]
    style = {"fontsize": TEXT_PT, "gid": "subtitle"}
    return lines + [(text, _TEXT_LINE, style) for text in ruler.wrap(said, room, TEXT_PT, most=4)]


def _small_print(cautions: list[str], ruler: Ruler) -> list[tuple[str, float, dict[str, Any]]]:
    style: dict[str, Any] = {"fontsize": SMALL_PT, "gid": "cautions"}
    lines = []
    for text in cautions[:_MOST_CAUTIONS]:
        for line in ruler.wrap(printable(text), _RIGHT - _MARGIN, SMALL_PT, most=2):
            lines.append((line, _SMALL_LINE, style))
    if len(cautions) > _MOST_CAUTIONS:
        lines.append((f"and {len(cautions) - _MOST_CAUTIONS} more cautions", _SMALL_LINE, style))
    style = {"fontsize": SMALL_PT, "color": MUTED, "gid": "small print"}
    return [*lines, (NOT_A_LIMIT, _SMALL_LINE, style)]


def _write_down(made: Figure, top: float, lines: list[tuple[str, float, dict[str, Any]]]) -> None:
    for text, height, style in lines:
        write(made, _MARGIN, top, text, va="top", **style)
        top -= height


def _excess_words(found: CurveComparison, excess: Excess | None) -> str:
    if excess is None:
        return "Only a curve is known of now, so there is no excess."
    text = f"Excess {amount_text(excess.amount)} {found.amount_unit}"
    if excess.share is not None:
        text += f" ({excess.share:+.2%})"
    if excess.lower is not None and excess.upper is not None:
        text += (
            f", {100 * excess.level:g} % interval {amount_text(excess.lower)} to "
            f"{amount_text(excess.upper)}"
        )
    return f"{text}, from {excess.rows:,.0f} rows."


def _draw_one(made: Figure, found: CurveComparison, unit: UnitComparison) -> None:
    ruler = Ruler(made)
    along = unit.difference
    said = _excess_words(found, unit.excess)
    if along is not None:
        said += (
            f" Largest difference {along.statistic:.3g} standard errors, {p_text(along.p_value)} "
            f"by sign flips of folds."
        )
    heading = _heading(made, found, ruler, said)
    below = _small_print([first_sentence(one.text) for one in unit.cautions], ruler)
    foot = 0.1 + sum(height for _, height, _ in below)
    lane = Box(_LEFT, foot + 0.5, _RIGHT, foot + 0.5 + _LANE_HEIGHT)
    lower = Box(_LEFT, lane.top + 0.04, _RIGHT, lane.top + 0.04 + _DIFFERENCE_HEIGHT)
    upper = Box(_LEFT, lower.top + 0.55, _RIGHT, lower.top + 0.55 + _CURVES_HEIGHT)
    height = upper.top + 0.38 + sum(line[1] for line in heading) + 0.14
    made.set_size_inches(_WIDTH, height)
    _write_down(made, height - 0.14, heading)
    _write_down(made, foot, below)
    if along is None:
        write(
            made, _LEFT, lower.top, "The curves meet nowhere well enough to be drawn together.",
            fontsize=TEXT_PT, gid="notes",
        )  # fmt: skip
        return
    told = found.settings
    x = found.x_of(along.t)
    seen = np.flatnonzero(np.isfinite(along.base) | np.isfinite(along.now))
    ends = (float(x[seen[0]]), float(x[seen[-1]]))
    shown = shown_axis(
        found.axis, told["x"], told["x_unit"], ends, found.scale == "log", _RIGHT - _LEFT,
        lambda text: ruler.width(text, LABEL_PT),
    )  # fmt: skip
    note = _draw_curves(add_axes(made, upper), found, along, shown, ends)
    name = {"fontsize": LABEL_PT, "fontweight": "bold", "gid": "axis name"}
    write(made, _MARGIN, upper.top + 0.12, named(told["y"], told["y_unit"], note), **name)
    _key(made, ruler, upper.top + 0.12, (("base", OTHER), ("now", CURVE)))
    note = _draw_difference(add_axes(made, lower), found, along, shown, ends)
    write(made, _MARGIN, lower.top + 0.12, named("now less base", told["y_unit"], note), **name)
    write(
        made, _RIGHT, lower.top + 0.12,
        f"Shaded: {100 * found.level:g} % band at each point. Thin lines: for the whole curve.",
        fontsize=SMALL_PT, color=MUTED, ha="right", gid="notes",
    )  # fmt: skip
    _draw_lane(add_axes(made, lane), found, along, shown, ends)
    write(made, _RIGHT, lane.bottom - 0.42, shown.label, ha="right", **name)
    real = "Bars: the difference is real." if along.stretches else "No stretch is certain."
    write(
        made, _LEFT, lane.bottom - 0.42, real, fontsize=SMALL_PT, color=MUTED, gid="notes"
    )  # fmt: skip


def _key(made: Figure, ruler: Ruler, height: float, words: tuple[tuple[str, str], ...]) -> None:
    """Name the lines above their panel, in their colours, from the right."""
    right = _RIGHT
    for word, colour in reversed(words):
        write(
            made, right, height, word, fontsize=LABEL_PT, fontweight="bold", color=colour,
            ha="right", gid="line name",
        )  # fmt: skip
        right -= ruler.width(word, LABEL_PT, "bold") + 0.2


def _prepare(
    panel: Axes, found: CurveComparison, shown: Shown, ends: tuple[float, float],
    span: tuple[float, float],
) -> str:  # fmt: skip
    if found.scale == "log":
        panel.set_xscale("log")
    panel.set_xlim(*shown.plotted(np.array(ends)))
    low, high = span
    margin = 0.06 * (high - low) or 0.05 * max(abs(low), abs(high)) or 1.0
    panel.set_ylim(low - margin, high + margin)
    ticks = number_ticks(low - margin, high + margin)
    set_ticks(panel.yaxis, ticks)
    set_ticks(panel.xaxis, shown.ticks)
    panel.grid(axis="y", color=RULE, linewidth=0.7)
    panel.tick_params(axis="x", labelbottom=False, length=0.0)
    panel.tick_params(axis="y", length=0.0)
    panel.spines["left"].set_visible(False)
    panel.spines["bottom"].set_color(RULE)
    return ticks.note


def _draw_curves(
    panel: Axes, found: CurveComparison, along: Difference, shown: Shown, ends: tuple[float, float]
) -> str:
    x = shown.plotted(found.x_of(along.t))
    known = along.compared
    both = np.concatenate((along.base[known], along.now[known]))
    note = _prepare(panel, found, shown, ends, (float(both.min()), float(both.max())))
    for name, values, colour in (("base", along.base, OTHER), ("now", along.now, CURVE)):
        # Beyond the part that is compared a curve says less: it is drawn thin.
        panel.plot(x, values, color=colour, linewidth=0.8, alpha=0.6, gid=f"{name} beyond")
        panel.plot(
            x, np.where(known, values, np.nan), color=colour, linewidth=2.2,
            solid_capstyle="round", gid=name,
        )  # fmt: skip
    return note


def _draw_difference(
    panel: Axes, found: CurveComparison, along: Difference, shown: Shown, ends: tuple[float, float]
) -> str:
    x = shown.plotted(found.x_of(along.t))
    note = _prepare(panel, found, shown, ends, _span(along))
    panel.fill_between(
        x, along.lower, along.upper, where=along.compared, color=BAND, alpha=0.5, linewidth=0.0,
        gid="band",
    )  # fmt: skip
    for bound in (along.lower_all, along.upper_all):
        panel.plot(x, bound, color=CURVE, linewidth=0.8, gid="band for all")
    panel.axhline(0.0, color=INK, linewidth=0.9, gid="zero")
    panel.plot(x, along.difference, color=CURVE, linewidth=2.0, gid="difference")
    return note


def _span(along: Difference) -> tuple[float, float]:
    """Ends of the difference's axis: zero, the difference, and its bands as far as they matter."""
    middle = along.difference[along.compared]
    low, high = min(0.0, float(middle.min())), max(0.0, float(middle.max()))
    half = 0.5 * (along.upper - along.lower)
    reach = _REACH * max(high - low, 2.0 * float(np.nanmedian(half)))
    bounds = np.concatenate((along.lower_all, along.upper_all, along.lower, along.upper))
    bounds = bounds[np.isfinite(bounds)]
    return (
        max(min(low, float(bounds.min())), low - reach),
        min(max(high, float(bounds.max())), high + reach),
    )


def _draw_lane(
    lane: Axes, found: CurveComparison, along: Difference, shown: Shown, ends: tuple[float, float]
) -> None:
    if found.scale == "log":
        lane.set_xscale("log")
    lane.set_xlim(*shown.plotted(np.array(ends)))
    lane.set_ylim(0.0, 1.0)
    set_ticks(lane.xaxis, shown.ticks)
    lane.set_yticks([])
    lane.spines["left"].set_visible(False)
    for one in along.stretches:
        places = shown.plotted(found.x_of([one.low, one.high]))
        lane.plot(
            places, [0.5, 0.5], color=CURVE if one.mean_difference > 0.0 else OTHER, linewidth=5.0,
            solid_capstyle="butt", gid="real",
        )  # fmt: skip


def _draw_units(made: Figure, found: CurveComparison) -> None:
    ruler = Ruler(made)
    ranked = [(unit, unit.excess) for unit in found.units if unit.excess is not None]
    shown = ranked[:_MOST_UNITS]
    real = {unit.key for unit in found.discoveries()}
    said = (
        f"Excess of {len(ranked):,} units by {', '.join(found.by)} with {100 * found.level:g} % "
        f"intervals. In red the {len(real):,} that are real, with at most "
        f"{100 * (1.0 - found.level):.3g} % false discoveries (Benjamini & Hochberg)."
    )
    if len(ranked) > len(shown):
        said += f" The first {len(shown)} are drawn."
    heading = _heading(made, found, ruler, said)
    below = _small_print([], ruler)
    foot = 0.1 + sum(height for _, height, _ in below)
    place = Box(_UNIT_LEFT, foot + 0.55, _RIGHT, foot + 0.55 + _UNIT_HEIGHT * max(len(shown), 1))
    height = place.top + 0.15 + sum(line[1] for line in heading) + 0.14
    made.set_size_inches(_WIDTH, height)
    _write_down(made, height - 0.14, heading)
    _write_down(made, foot, below)
    panel = add_axes(made, place)
    bounds = [
        value for _, one in shown for value in (one.lower, one.upper, one.amount, 0.0)
        if value is not None
    ] or [0.0, 1.0]  # fmt: skip
    low, high = min(bounds), max(bounds)
    margin = 0.04 * (high - low) or 1.0
    panel.set_xlim(low - margin, high + margin)
    panel.set_ylim(len(shown) - 0.5, -0.5)
    ticks = number_ticks(low - margin, high + margin)
    set_ticks(panel.xaxis, ticks)
    panel.set_yticks([])
    panel.spines["left"].set_visible(False)
    panel.grid(axis="x", color=RULE, linewidth=0.7)
    panel.axvline(0.0, color=INK, linewidth=0.9, gid="zero")
    for row, (unit, one) in enumerate(shown):
        colour = CURVE if unit.key in real else OTHER
        if one.lower is not None and one.upper is not None:
            panel.hlines(
                row, one.lower, one.upper, linewidth=3.0, gid="interval",
                color=BAND if unit.key in real else OTHER_PALE,
            )  # fmt: skip
        panel.plot([one.amount], [row], marker="o", markersize=5.0, color=colour, gid="excess")
        text = ruler.shorten(printable(unit.name), _UNIT_LEFT - _MARGIN - 0.1, LABEL_PT)
        y = place.top - (row + 0.5) * _UNIT_HEIGHT
        write(
            made, _UNIT_LEFT - 0.1, y, text, fontsize=LABEL_PT, ha="right", va="center", gid="unit"
        )
    write(
        made, _RIGHT, place.bottom - 0.42, named("excess", found.amount_unit, ticks.note),
        fontsize=LABEL_PT, fontweight="bold", ha="right", gid="axis name",
    )  # fmt: skip
