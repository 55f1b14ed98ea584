"""The upper panel: where the rows lie, the band, and the curve in the style of its support."""

from __future__ import annotations

import itertools
from typing import NamedTuple

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patheffects import withStroke
from numpy.typing import NDArray

from fastsmooth.curve import EDGE, OK, OUTSIDE, STATUSES, Curve, has_own_points
from fastsmooth.report.labels import Box, Ruler
from fastsmooth.report.look import (  # fmt: skip
    BAND,
    CELLS,
    CURVE,
    MUTED,
    OTHER,
    PAPER,
    ROWS,
    RULE,
    SMALL_PT,
    STYLES,
    figure_of,
    set_ticks,
    write,
)
from fastsmooth.report.scales import Shown, Ticks, number_ticks, short_count

Floats = NDArray[np.float64]

# Cells beyond these shares of the sample do not widen the picture, nor do cells farther from the
# middle of the sample than so many times its height: a code for missing may take a percent.
_BULK = (0.005, 0.995)
_MIDDLE = (0.1, 0.9)
_MIDDLE_REACH = 3
# A middle that lies in fewer cells is drawn too coarsely to say where the rows are.
_LEAST_CELLS = 3
# How far poorly supported parts may widen the picture, in heights of the well supported one.
_REACH = 0.5
_MARGIN = 0.06
_ROUNDING = 1e-10
_DECADES_FOR_LOG = 100.0
_FEW_POINTS = 40
_UNSAMPLED_SHARE = 0.05
# A name farther from its stretch than this would seem to belong elsewhere.
_FARTHEST_NAME_IN = 0.4


class Stretch(NamedTuple):
    """Consecutive points of one status: indices from `start` up to, not with, `stop`."""

    status: int
    start: int
    stop: int


def stretches(status: NDArray[np.int64]) -> list[Stretch]:
    """Cut the points into stretches of one status."""
    if not status.size:
        return []
    cuts = [0, *(np.flatnonzero(np.diff(status)) + 1).tolist(), status.size]
    return [Stretch(int(status[start]), start, stop) for start, stop in itertools.pairwise(cuts)]


def x_ends(curve: Curve) -> tuple[float, float]:
    """Return the ends of the x axis: all rows and all points that have a value."""
    given = curve.x[np.isfinite(curve.estimate)]
    edges = curve.density.x_edges
    low, high = float(edges[0]), float(edges[-1])
    if given.size:
        low, high = min(low, float(given[0])), max(high, float(given[-1]))
    return low, high


def y_ends(curve: Curve) -> tuple[float, float]:
    """Return the ends of the y axis: curve, band and the bulk of the rows, no outlier."""
    columns = np.stack((curve.estimate, curve.lower, curve.upper))
    # Where windows are wider than the data, edges are all there is.
    firm = columns[:, curve.status == (OK if (curve.status == OK).any() else EDGE)]
    # The line is always seen, even where a code for missing has pulled it away from the rows.
    line = curve.estimate[np.isfinite(curve.estimate)]
    values = [line, firm[np.isfinite(firm)], _bulk(curve)]
    low, high = _span(np.concatenate(values), columns)
    reach = _REACH * (high - low)
    # A band that opens up where rows are few is cut rather than flattening all else.
    rest = columns[np.isfinite(columns)]
    if rest.size:
        low, high = (
            min(low, max(float(rest.min()), low - reach)),
            max(high, min(float(rest.max()), high + reach)),
        )
    margin = _MARGIN * (high - low)
    size = max(abs(low), abs(high))
    if not margin > _ROUNDING * size:
        # A constant, up to rounding: its digits are no shape to look at.
        margin = 0.05 * size or 1.0
    return low - margin, high + margin


def cells_are_coarse(curve: Curve) -> bool:
    """Whether far values of y make the cells so high that they say nothing about the bulk."""
    low, high = y_ends(curve)
    edges = curve.density.y_edges
    return high - low < _LEAST_CELLS * float(edges[1] - edges[0])


def _span(values: Floats, columns: Floats) -> tuple[float, float]:
    if not values.size:
        values = columns[0][np.isfinite(columns[0])]
    if not values.size:
        return 0.0, 0.0
    return float(values.min()), float(values.max())


def _bulk(curve: Curve) -> Floats:
    """Ends of the y cells that hold the bulk of the sample; empty where cells are too coarse."""
    per_cell = curve.density.sampled.sum(axis=0)
    total = float(per_cell.sum())
    if not total > 0.0:
        return np.empty(0)
    shares = np.cumsum(per_cell) / total
    ends = np.searchsorted(shares, (*_BULK, *_MIDDLE)).clip(max=per_cell.size - 1)
    first, last, low, high = ends.tolist()
    height = high - low + 1
    if height < min(_LEAST_CELLS, per_cell.size) and np.isfinite(curve.estimate).any():
        return np.empty(0)
    first = max(first, low - _MIDDLE_REACH * height)
    last = min(last, high + _MIDDLE_REACH * height)
    return curve.density.y_edges[[first, last + 1]]


def has_unsampled_rows(curve: Curve) -> bool:
    """Whether the cells miss a part of x that holds more than a few of the rows."""
    rows = curve.density.rows
    unseen = rows[curve.density.sampled.sum(axis=1) == 0.0].sum()
    return bool(unseen > _UNSAMPLED_SHARE * rows.sum())


def draw_rows(panel: Axes, curve: Curve, shown: Shown) -> Ticks:
    """Draw the cells, the band and the curve; return the ticks of y."""
    low, high = y_ends(curve)
    if curve.scale == "log":
        panel.set_xscale("log")
    panel.set_xlim(*shown.plotted(np.array(x_ends(curve))))
    panel.set_ylim(low, high)
    ticks = number_ticks(low, high)
    set_ticks(panel.yaxis, ticks)
    set_ticks(panel.xaxis, shown.ticks)
    panel.grid(axis="y", color=RULE, linewidth=0.7)
    panel.tick_params(axis="x", labelbottom=False, length=0.0)
    panel.tick_params(axis="y", length=0.0)
    panel.spines["left"].set_visible(False)
    panel.spines["bottom"].set_color(RULE)
    _draw_cells(panel, curve, shown)
    x = shown.plotted(curve.x)
    _draw_band(panel, curve, x)
    _draw_limits(panel, curve, x)
    halo = [withStroke(linewidth=4.2, foreground=PAPER, alpha=0.75)]
    for stretch in stretches(curve.status):
        if stretch.status == OUTSIDE:
            continue
        if has_own_points(curve):
            break  # points of the caller's own: nothing is known of what lies between
        name = STATUSES[stretch.status]
        start, stop = joined(curve.status, stretch)
        panel.plot(
            x[start:stop], curve.estimate[start:stop], color=CURVE, linestyle=STYLES[name],
            linewidth=2.2, dash_capstyle="butt", solid_capstyle="round", path_effects=halo,
            gid=f"curve {name}", zorder=5,
        )  # fmt: skip
    alone = _alone(curve.estimate)
    dots = (
        np.isfinite(curve.estimate)
        if has_own_points(curve) or curve.x.size <= _FEW_POINTS
        else alone
    )
    panel.plot(
        x[dots], curve.estimate[dots], linestyle="none", marker="o", markersize=4.5, color=CURVE,
        markeredgecolor=PAPER, markeredgewidth=0.8, gid="curve points", zorder=6,
    )  # fmt: skip
    return ticks


def cell_shades(curve: Curve) -> Floats | None:
    """Return how dark each cell is, (k, m) from 0 for none; None where cells say nothing."""
    sampled = curve.density.sampled
    seen = sampled[sampled > 0.0]
    if not seen.size or cells_are_coarse(curve):
        return None
    # Square roots let both crowded and rare cells show.
    return np.sqrt(np.minimum(sampled, np.quantile(seen, 0.99)))


def _draw_cells(panel: Axes, curve: Curve, shown: Shown) -> None:
    shade = cell_shades(curve)
    if shade is None:
        return
    panel.pcolormesh(
        shown.plotted(curve.density.x_edges), curve.density.y_edges,
        np.ma.masked_where(shade <= 0.0, shade).T, cmap=CELLS, vmin=0.0,
        rasterized=True, zorder=1, gid="cells",
    )  # fmt: skip


def _draw_limits(panel: Axes, curve: Curve, x: Floats) -> None:
    if curve.limits is None:
        return
    for level, values in zip(curve.limits.levels, curve.limits.values, strict=True):
        panel.plot(x, values, color=OTHER, linewidth=0.8, zorder=4, gid=f"limit {level:g}")


def _draw_band(panel: Axes, curve: Curve, x: Floats) -> None:
    known = np.isfinite(curve.lower) & np.isfinite(curve.upper)
    own = has_own_points(curve)
    if not own:
        panel.fill_between(
            x, curve.lower, curve.upper, where=known, color=BAND, alpha=0.5, linewidth=0.0,
            zorder=3, gid="band",
        )  # fmt: skip
    few = known if own or curve.x.size <= _FEW_POINTS else known & _alone(curve.lower)
    panel.vlines(
        x[few], curve.lower[few], curve.upper[few], color=BAND, linewidth=3.0, zorder=3,
        gid="band points",
    )  # fmt: skip


def joined(status: NDArray[np.int64], stretch: Stretch) -> tuple[int, int]:
    """Return a stretch with the gaps to its neighbours, drawn in the style of the weaker side."""
    start, stop = stretch.start, stretch.stop
    if start > 0 and status[start - 1] != OUTSIDE and stretch.status != OK:
        start -= 1
    if stop < status.size and status[stop] == OK:
        stop += 1
    return start, stop


def _alone(values: Floats) -> NDArray[np.bool_]:
    known = np.concatenate(([False], np.isfinite(values), [False]))
    return known[1:-1] & ~known[:-2] & ~known[2:]


def draw_ribbon(ribbon: Axes, place: Box, curve: Curve, shown: Shown, ruler: Ruler) -> None:
    """Name the stretches that are not fully supported, above the panel."""
    ribbon.set_axis_off()
    ribbon.set_ylim(0.0, 1.0)
    ends = np.array(x_ends(curve))
    if curve.scale == "log":
        ribbon.set_xscale("log")
    ribbon.set_xlim(*shown.plotted(ends))
    transform = np.log if curve.scale == "log" else np.asarray
    low, high = transform(ends)
    pieces = []
    for name, left, right in weak_stretches(curve):
        if name != STATUSES[OUTSIDE]:
            ribbon.plot(
                shown.plotted(np.array([left, right])), [0.12, 0.12], color=MUTED, linewidth=1.4,
                linestyle=STYLES[name], gid=f"ribbon {name}", dash_capstyle="butt",
            )  # fmt: skip
        share = (transform(np.array([left, right])) - low) / (high - low)
        pieces.append((name, *(place.left + share * (place.right - place.left))))
    _name_pieces(ribbon, place, pieces, ruler)


def weak_stretches(curve: Curve) -> list[tuple[str, float, float]]:
    """Return status and ends, in axis floats, of the stretches that are not fully supported."""
    low, high = x_ends(curve)
    middles = 0.5 * (curve.x[1:] + curve.x[:-1])
    found = []
    for stretch in stretches(curve.status):
        left = float(middles[stretch.start - 1]) if stretch.start else low
        right = float(middles[stretch.stop - 1]) if stretch.stop < curve.x.size else high
        left, right = max(left, low), min(right, high)
        if stretch.status != OK and left < right:
            found.append((STATUSES[stretch.status], left, right))
    return found


def _name_pieces(
    ribbon: Axes, place: Box, pieces: list[tuple[str, float, float]], ruler: Ruler
) -> None:
    """Write each name once at least, the widest stretch first, and never over another."""
    taken: list[tuple[float, float]] = []
    named = set()
    for name, left, right in sorted(pieces, key=lambda piece: piece[1] - piece[2]):
        width = ruler.width(name, SMALL_PT)
        centre = 0.5 * (left + right)
        # Names may slide away from a crowded place, but only if they were not written yet.
        slides = np.arange(0.0, _FARTHEST_NAME_IN, 0.05) if name not in named else np.zeros(1)
        for slide in (sign * step for step in slides.tolist() for sign in (1.0, -1.0)):
            middle = min(max(centre + slide, place.left + width / 2), place.right - width / 2)
            spot = (middle - width / 2 - 0.05, middle + width / 2 + 0.05)
            if all(spot[1] <= other[0] or spot[0] >= other[1] for other in taken):
                write(
                    figure_of(ribbon), middle, place.bottom + 0.06, name, fontsize=SMALL_PT,
                    color=MUTED, ha="center", va="bottom", gid="status name",
                )  # fmt: skip
                taken.append(spot)
                named.add(name)
                break


def draw_counts(strip: Axes, curve: Curve, shown: Shown) -> str:
    """Draw the exact number of rows of each stretch; return what the heights are."""
    rows = curve.density.rows
    floor, ceiling, log, ticks = count_heights(curve)
    if log:
        strip.set_yscale("log")
    if curve.scale == "log":
        strip.set_xscale("log")
    strip.stairs(
        np.where(rows > 0.0, rows, floor), shown.plotted(curve.density.x_edges), baseline=floor,
        fill=True, color=ROWS, linewidth=0.0, gid="rows",
    )  # fmt: skip
    strip.set_ylim(floor, ceiling)
    set_ticks(strip.yaxis, ticks)
    strip.tick_params(axis="y", length=0.0, labelsize=SMALL_PT, labelcolor=MUTED)
    strip.set_xlim(*shown.plotted(np.array(x_ends(curve))))
    set_ticks(strip.xaxis, shown.ticks)
    strip.spines["left"].set_visible(False)
    return heights_text(log)


class Heights(NamedTuple):
    """How the numbers of rows are drawn: ends of their axis, whether logarithmic, its ticks."""

    floor: float
    ceiling: float
    log: bool
    ticks: Ticks


def count_heights(curve: Curve) -> Heights:
    """Decide how the number of rows of each stretch is drawn."""
    seen = curve.density.rows[curve.density.rows > 0.0]
    top = float(seen.max()) if seen.size else 1.0
    log = bool(seen.size) and top >= _DECADES_FOR_LOG * float(np.quantile(seen, 0.05))
    floor = 0.7 * float(seen.min()) if log else 0.0
    places = _decades(float(seen.min()), top) if log else [top]
    ticks = Ticks(places, [short_count(place) for place in places], "")
    return Heights(floor, top * (1.3 if log else 1.04), log, ticks)


def heights_text(log: bool) -> str:
    """Return what the heights of the strip are."""
    return "rows per stretch, logarithmic height" if log else "rows per stretch"


def _decades(low: float, top: float) -> list[float]:
    """Two powers of ten that span the strip: more would not fit its height."""
    first, last = int(np.ceil(np.log10(low))), int(np.floor(np.log10(top)))
    return [10.0**first, 10.0**last] if last > first else [10.0**last]
