"""How the picture looks: colours, type, and axes laid out in inches."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import matplotlib as mpl
from matplotlib.axes import Axes
from matplotlib.axis import Axis as MplAxis
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.ticker import FixedFormatter, FixedLocator, NullLocator

from fastsmooth.report.labels import Box
from fastsmooth.report.scales import Ticks

# Apart in lightness as well as in hue, so that they stay apart for every kind of colour vision
# and in a grey print.
CURVE = "#b23a0e"
BAND = "#ee9a5d"
OTHER = "#4d7190"
OTHER_PALE = "#ccd8e2"
ROWS = "#8fa5b8"
INK = "#1d2b38"
MUTED = "#566573"
RULE = "#dfe4e9"
PAPER = "#ffffff"
CELLS = LinearSegmentedColormap.from_list("cells", ["#f1f4f7", "#c5d1dc", "#7f97ac"])

TITLE_PT, TEXT_PT, LABEL_PT, SMALL_PT = 15.0, 9.0, 8.5, 7.5
DPI = 150
# Line styles by status; lengths in line widths.
STYLES = {"ok": "solid", "thin": (0, (3.2, 1.4)), "edge": (0, (1.0, 1.1))}


@contextmanager
def plain_style() -> Iterator[None]:
    """Draw with this module's look, whatever the caller's settings for matplotlib are."""
    with mpl.rc_context():
        mpl.rcdefaults()
        mpl.rcParams.update(
            {
                "font.family": ["DejaVu Sans"],
                "font.size": LABEL_PT,
                "text.color": INK,
                "text.parse_math": False,  # a dollar sign in a column name is a dollar sign
                "axes.edgecolor": MUTED,
                "axes.linewidth": 0.8,
                "axes.labelcolor": INK,
                "axes.unicode_minus": True,
                "xtick.color": MUTED,
                "ytick.color": MUTED,
                "xtick.labelcolor": INK,
                "ytick.labelcolor": INK,
                "figure.facecolor": PAPER,
                "savefig.facecolor": PAPER,
                "savefig.dpi": DPI,
                "svg.hashsalt": "fastsmooth",
                "pdf.fonttype": 42,
            }
        )
        yield


def add_axes(figure: Figure, place: Box) -> Axes:
    """Add axes at a place in inches, with a left and a lower spine only."""
    wide, high = figure.get_size_inches()
    axes = figure.add_axes((
        place.left / wide, place.bottom / high,
        (place.right - place.left) / wide, (place.top - place.bottom) / high,
    ))  # fmt: skip
    axes.spines[["top", "right"]].set_visible(False)
    axes.patch.set_visible(False)
    axes.tick_params(length=3.0, width=0.8, pad=3.0)
    axes.set_axisbelow(True)
    return axes


def figure_of(axes: Axes) -> Figure:
    """Return the figure that holds the axes."""
    figure = axes.get_figure()
    if not isinstance(figure, Figure):
        raise TypeError("these axes belong to no figure of their own")
    return figure


def set_ticks(axis: MplAxis, ticks: Ticks) -> None:
    """Give an axis exactly these tick marks."""
    axis.set_major_locator(FixedLocator(ticks.places))
    axis.set_major_formatter(FixedFormatter(ticks.texts))
    axis.set_minor_locator(NullLocator())


def write(figure: Figure, x: float, y: float, text: str, **style: Any) -> None:
    """Write text at a place in inches; `style` goes to matplotlib's text."""
    wide, high = figure.get_size_inches()
    figure.text(x / wide, y / high, text, **style)
