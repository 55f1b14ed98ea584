"""The lower panel: the criterion of both estimators over the bandwidth, and their flat zones."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np
from matplotlib.axes import Axes
from matplotlib.lines import Line2D
from matplotlib.patheffects import withStroke
from numpy.typing import NDArray

from fastsmooth.curve import Curve
from fastsmooth.report.labels import Box, Label, Ruler, Spot, around, dense, place_labels, scattered
from fastsmooth.report.look import (  # fmt: skip
    CURVE,
    INK,
    LABEL_PT,
    OTHER,
    OTHER_PALE,
    PAPER,
    RULE,
    SMALL_PT,
    figure_of,
    set_ticks,
    write,
)
from fastsmooth.report.scales import Ticks, Track, log_ticks, number_ticks, width_ticks
from fastsmooth.report.words import range_text, width_text
from fastsmooth.trail import Trail

Floats = NDArray[np.float64]

# The other estimator's least value is shown if it lies within so many depths of the valley.
_OTHER_WITHIN = 3.0
# The valley is at least so many times as deep as its flat zone.
_FLAT_DEPTHS = 4.0
_ROUNDING = 1e-10
_LINE_IN = 0.155
# A given width so many times beyond those searched is told in words alone.
_FAR_AWAY = 1e6


@dataclass(frozen=True)
class CriterionPath:
    """One estimator's criterion, ready to draw: widths on the plan's scale.

    Attributes
    ----------
    trail : Trail
        What the search found.
    widths, values : (k,) float64
        The criterion over the width; NaN where undefined.
    best, least : float
        The chosen width, and the criterion there; NaN if it is defined nowhere.
    flat_zone : (2,) float64
        Ends of the flat zone.
    used : bool
        Whether the curve was made by this estimator.
    """

    trail: Trail
    widths: Floats
    values: Floats
    best: float
    flat_zone: Floats
    least: float
    used: bool

    @property
    def colour(self) -> str:
        """What it is drawn in."""
        return CURVE if self.used else OTHER


def criterion_paths(curve: Curve) -> list[CriterionPath]:
    """Return one path per estimator, the used one last, so that it is drawn on top."""
    made = []
    for name, trail in curve.search.trails.items():
        values = trail.values(curve.search.criterion)
        widths = on_scale(curve, trail.bandwidths)
        best = float(on_scale(curve, np.array([trail.bandwidth]))[0])
        known = np.isfinite(values)
        flat = on_scale(curve, np.array(trail.flat_zone))
        least = np.nan
        if known.any():
            # On the drawn line, so that the marker sits there; between grid points it is a hair
            # above the refined minimum.
            least = float(np.interp(np.log(best), np.log(widths[known]), values[known]))
        used = name == curve.settings["estimator"]
        made.append(
            CriterionPath(trail, widths, np.where(known, values, np.nan), best, flat, least, used)
        )
    return sorted(made, key=lambda path: path.used)


def on_scale(curve: Curve, widths: Floats) -> Floats:
    """Return widths on the plan's scale: logarithms of factors on a log scale."""
    return np.log(widths) if curve.scale == "log" else widths


def valley_ends(paths: Iterable[CriterionPath]) -> tuple[float, float]:
    """Return the ends of the criterion's axis: the used estimator's valley fills it.

    A criterion may rise by decades towards narrow or wide bandwidths; showing all of that would
    flatten the part that decides.
    """
    known = [path for path in paths if np.isfinite(path.least)]
    if not known:
        return 0.0, 1.0
    main = known[-1]
    least = float(np.nanmin(main.values))
    place = int(np.nanargmin(main.values))
    rises = main.values - least
    finite = np.isfinite(rises)
    sides = [
        float(np.max(side, where=np.isfinite(side), initial=0.0))
        for side in (rises[:place], rises[place + 1 :])
    ]
    # A minimum at one end has a single side, of which the nearer half is shown.
    rise = min(sides) if min(sides) > 0.0 else float(np.median(rises[finite]))
    flat = np.interp(np.log(main.flat_zone), np.log(main.widths[finite]), rises[finite])
    rise = min(max(rise, _FLAT_DEPTHS * float(flat.max())), max(sides))
    if not rise > _ROUNDING * abs(least):
        rise = 0.01 * abs(least) or 1.0
    bottom, top = least, least + rise
    for path in known[:-1]:
        if abs(path.least - least) <= _OTHER_WITHIN * rise:
            bottom, top = min(bottom, path.least), max(top, path.least + 0.25 * rise)
    return bottom, top


def panel_ends(paths: Iterable[CriterionPath]) -> tuple[float, float]:
    """Return the valley's ends with room for markers below, and for their labels above."""
    bottom, top = valley_ends(paths)
    return bottom - 0.08 * (top - bottom), top + 0.12 * (top - bottom)


def given_width(curve: Curve, paths: list[CriterionPath]) -> float | None:
    """Return the caller's own width on the plan's scale; None if there is none to be drawn."""
    if not curve.width_given:
        return None
    given = float(on_scale(curve, np.array([curve.bandwidth]))[0])
    low, high = width_ends(paths, None)
    if paths and not low / _FAR_AWAY < given < high * _FAR_AWAY:
        return None  # showing it would make a point of all that was searched
    return given


def draw_criteria(panel: Axes, lanes: Axes, place: Box, curve: Curve, ruler: Ruler) -> Ticks:
    """Draw the criterion curves, their minima and flat zones; return the ticks of y.

    Parameters
    ----------
    panel, lanes : Axes
        For the curves, and for the bars below them.
    place : Box
        Where `panel` lies, inches.
    curve : Curve
        What to draw.
    ruler : Ruler
        Measures labels.
    """
    paths = criterion_paths(curve)
    given = given_width(curve, paths)
    low, high = width_ends(paths, given)
    bottom, top = panel_ends(paths)
    for axes in (panel, lanes):
        axes.set_xscale("log")
        axes.set_xlim(low, high)
    panel.set_ylim(bottom, top)
    ticks = number_ticks(bottom, top, 4)
    set_ticks(panel.yaxis, ticks)
    panel.grid(axis="y", color=RULE, linewidth=0.7)
    panel.spines[["left", "bottom"]].set_visible(False)
    panel.tick_params(axis="y", length=0.0)
    panel.tick_params(axis="x", length=0.0, labelbottom=False)
    scale = _Inches(place, (low, high), (bottom, top))
    track = Track(scale.across, lambda text: ruler.width(text, LABEL_PT))
    width_marks = (
        log_ticks(low, high, track)
        if curve.by_neighbours
        else width_ticks(low, high, curve.axis, curve.scale == "log", track)
    )
    set_ticks(panel.xaxis, width_marks)
    set_ticks(lanes.xaxis, width_marks)
    for path in paths:
        panel.plot(
            path.widths, path.values, color=path.colour, linewidth=2.2 if path.used else 1.4,
            alpha=1.0 if path.used else 0.75, gid=f"criterion {path.trail.estimator}",
            zorder=4 if path.used else 3,
        )  # fmt: skip
        panel.plot(
            [path.best], [path.least], linestyle="none", marker="o", markersize=6.0,
            color=path.colour, markeredgecolor=PAPER, markeredgewidth=0.9, zorder=6,
            gid=f"best {path.trail.estimator}",
        )  # fmt: skip
    if given is not None:
        panel.axvline(given, color=INK, linewidth=1.1, gid="given", zorder=2)
    _write_labels(panel, curve, paths, given, scale, ruler)
    _draw_lanes(lanes, curve, paths, scale, ruler)
    return ticks


@dataclass(frozen=True)
class _Inches:
    """Places in inches of a panel with a logarithmic x axis."""

    box: Box
    x: tuple[float, float]
    y: tuple[float, float]

    def across(self, width: float) -> float:
        share = np.log(width / self.x[0]) / np.log(self.x[1] / self.x[0])
        return self.box.left + float(share) * (self.box.right - self.box.left)

    def up(self, value: float) -> float:
        share = (value - self.y[0]) / (self.y[1] - self.y[0])
        return self.box.bottom + share * (self.box.top - self.box.bottom)

    def line(self, widths: Floats, values: Floats) -> Floats:
        """A drawn line as closely spaced points; what leaves the panel is cut off beyond it."""
        height = self.box.top - self.box.bottom
        up = [self.up(value) for value in values.tolist()]
        cut = np.clip(up, self.box.bottom - height, self.box.top + height)
        return dense(np.column_stack(([self.across(width) for width in widths.tolist()], cut)))


def width_ends(paths: list[CriterionPath], given: float | None) -> tuple[float, float]:
    """Return the ends of the width axis: all that was searched, and the given width."""
    widths = [path.widths for path in paths]
    if given is not None:
        widths.append(np.array([given]))
    every = np.concatenate(widths) if widths else np.array([1.0])
    # A little air at both ends, in proportion to the span.
    air = (float(every.max()) / float(every.min())) ** 0.02 * 1.01
    return float(every.min()) / air, float(every.max()) * air


def _write_labels(
    panel: Axes,
    curve: Curve,
    paths: list[CriterionPath],
    given: float | None,
    scale: _Inches,
    ruler: Ruler,
) -> None:
    box = scale.box
    lines = [scale.line(path.widths, path.values) for path in paths]
    markers = [(scale.across(path.best), scale.up(path.least)) for path in paths]
    taken = [Box(x, y, x, y).grown(0.05) for x, y in markers if np.isfinite(y)]
    if given is not None:
        x = scale.across(given)
        lines.append(dense(np.array([[x, box.bottom], [x, box.top]])))
        text = f"given {width_text(curve, curve.bandwidth)}"
        width = ruler.width(text, LABEL_PT)
        spots = [
            Spot(left, box.top - _LINE_IN * (step + 1), 0.1 * step)
            for step in range(6) for left in (x + 0.06, x - 0.06 - width)
        ]  # fmt: skip
        label = Label(width, _LINE_IN, None, spots)
        (spot,) = place_labels([label], box, taken, lines)
        _put(panel, text, INK, "normal", spot)
        taken.append(label.box(spot))
    texts, labels = [], []
    for path, (x, y) in zip(paths, markers, strict=True):
        text = best_text(curve, path)
        inside = box.bottom <= y <= box.top
        if np.isfinite(y) and not inside:
            text += f" ({'above' if y > box.top else 'below'} this panel)"
        width = ruler.width(text, LABEL_PT, _weight(path))
        if np.isfinite(y):
            height = min(max(y, box.bottom), box.top - _LINE_IN - 0.09)
            spots = around(x, height, width, _LINE_IN)
        else:
            spots = scattered(box, width, _LINE_IN)
        texts.append(text)
        labels.append(Label(width, _LINE_IN, (x, y) if inside else None, spots))
    for path, text, label, spot in zip(
        paths, texts, labels, place_labels(labels, box, taken, lines), strict=True
    ):
        _put(panel, text, path.colour, _weight(path), spot)
        tie = label.tie(spot)
        if tie is not None:
            figure = figure_of(panel)
            figure.add_artist(Line2D(
                tie[:, 0], tie[:, 1], transform=figure.dpi_scale_trans, color=path.colour,
                linewidth=0.7, alpha=0.8, gid="tie",
            ))  # fmt: skip


def _weight(path: CriterionPath) -> str:
    return "bold" if path.used else "normal"


def _put(panel: Axes, text: str, colour: str, weight: str, spot: Spot) -> None:
    write(
        figure_of(panel), spot.left, spot.bottom + 0.03, text, fontsize=LABEL_PT, color=colour,
        fontweight=weight, ha="left", va="baseline", gid="criterion label",
        path_effects=[withStroke(linewidth=2.5, foreground=PAPER)],
    )  # fmt: skip


def best_text(curve: Curve, path: CriterionPath) -> str:
    """Write an estimator with its best width."""
    name = path.trail.estimator
    if not np.isfinite(path.least):
        return f"{name}: undefined at every width"
    verb = "best"
    if path.used and not curve.width_given:
        verb = "chosen"
    elif curve.search.criterion == "plug-in":
        verb = "plug-in"
    return f"{name}: {verb} {width_text(curve, path.trail.bandwidth)}"


def _draw_lanes(
    lanes: Axes, curve: Curve, paths: list[CriterionPath], scale: _Inches, ruler: Ruler
) -> None:
    """Draw one bar per estimator over its flat zone, the words in it or beside it."""
    lanes.set_ylim(-0.5, max(len(paths), 1) - 0.5)
    set_ticks(lanes.yaxis, Ticks([], [], ""))
    lanes.spines["left"].set_visible(False)
    left_end, right_end = scale.box.left, scale.box.right
    for lane, path in enumerate(paths):
        low, high = np.clip(path.flat_zone, *scale.x).tolist()
        # A zone of one width is still a bar that can be seen.
        hair = (scale.x[1] / scale.x[0]) ** 0.002
        lanes.fill_between(
            [low / hair, high * hair], lane - 0.34, lane + 0.34, linewidth=0.0,
            color=path.colour if path.used else OTHER_PALE, gid=f"flat zone {path.trail.estimator}",
        )  # fmt: skip
        text = flat_text(curve, path)
        width = ruler.width(text, SMALL_PT)
        start, stop = scale.across(low), scale.across(high)
        x, align, colour = stop + 0.08, "left", path.colour
        if stop - start > width + 0.16:
            x, align = 0.5 * (start + stop), "center"
            colour = PAPER if path.used else INK
        elif right_end - stop < width + 0.1 and start - left_end > width + 0.1:
            x, align = start - 0.08, "right"
        share = (x - left_end) / (right_end - left_end)
        lanes.text(
            share, lane, text, transform=lanes.get_yaxis_transform(), fontsize=SMALL_PT,
            color=colour, ha=align, va="center_baseline", gid="flat label",
        )  # fmt: skip


def flat_text(curve: Curve, path: CriterionPath) -> str:
    """Write an estimator with its flat zone."""
    low, high = path.trail.flat_zone
    name = path.trail.estimator
    if path.trail.is_flat:
        return f"{name}: flat zone over all widths searched"
    return f"{name}: flat zone {range_text(curve, low, high)}"
