"""What the picture says: its title, its sentences, its small print."""

from __future__ import annotations

import re

import numpy as np

from fastsmooth.curve import EDGE, OUTSIDE, THIN, Curve, has_own_points
from fastsmooth.report.scales import named, printable

HOW_TO_READ_CRITERIA = (
    "Lower is better. Bars: the flat zone, within one standard error of the best."
)
NOT_A_LIMIT = "A mean curve is not a protection limit."
MOST_CAUTIONS = 3


def title(curve: Curve) -> str:
    """Return the title: y against x, with units."""
    told = curve.settings
    return f"{named(told['y'], told['y_unit'])} against {named(told['x'], told['x_unit'])}"


def width_text(curve: Curve, width: float) -> str:
    """Write a bandwidth with the unit of x, where it is a plain number."""
    text = curve.width_label(width)
    unit = curve.settings["x_unit"]
    plain = curve.scale == "linear" and curve.axis.kind == "number" and not curve.by_neighbours
    return f"{text} {unit}" if plain and unit else text


def range_text(curve: Curve, low: float, high: float) -> str:
    """Write an interval of bandwidths, what both ends share only once."""
    if curve.by_neighbours:
        return f"{low:,.0f} to {curve.width_label(high)}"
    if curve.scale == "log":
        return f"factor {low:.4g} to {high:.4g}"
    return f"{curve.width_label(low)} to {width_text(curve, high)}"


def subtitle(curve: Curve) -> str:
    """Return the sentences under the title: rows, estimator, bandwidth, band."""
    told, rows = curve.settings, curve.trace["rows"]
    taken = f"{rows['used']:,} rows"
    if rows["used"] != rows["read"]:
        taken += f" of {rows['read']:,} read"
    width = width_text(curve, curve.bandwidth)
    if told["kernel"] == "gaussian":
        width += " (standard deviation)"
    criterion = told["criterion"]
    chosen = f"chosen by {criterion}"
    trail = curve.search.trails.get(told["estimator"])
    if curve.width_given:
        chosen = "as given"
        if trail is not None:
            chosen += f" ({criterion} would choose {width_text(curve, trail.bandwidth)})"
    fit = f"{told['estimator']}, {told['kernel']} kernel, bandwidth {width}, {chosen}."
    if curve.by_neighbours:
        fit = f"mean of the nearest {width}, {chosen}."
    if not np.isfinite(curve.estimate).any():
        return f"There is no line: no point has rows near enough. {taken}, {fit}"
    subject = "The points are" if has_own_points(curve) else "The line is"
    sentence = f"{subject} the mean from {taken}: {fit}"
    if not np.isfinite(curve.lower).any():
        return f"{sentence} No band could be computed."
    covers = "mean" if told["bias"] == "corrected" else "smoothed mean, its bias ignored"
    # 99.9 percent must not become 100.
    return (
        f"{sentence} Around it the {told['band']} {100.0 * told['level']:.6g} % band for the "
        f"{covers}."
    )


def criterion(curve: Curve) -> tuple[str, str]:
    """Return the name and the unit of what the lower panel shows."""
    unit = curve.settings["y_unit"]
    squared = f"{unit}²" if unit else ""
    if curve.search.criterion == "gcv":
        return "generalised cross-validation", squared
    if curve.search.criterion == "aicc":
        return "corrected information criterion (AICc)", ""
    if curve.search.criterion == "leave-block-out":
        return "leave-block-out error", squared
    return "leave-one-out error", squared


def width_axis(curve: Curve) -> str:
    """Return the name of the bandwidth axis."""
    if curve.by_neighbours:
        return named(curve.width_word, "")
    if curve.scale == "log":
        return "bandwidth (factor)"
    unit = curve.settings["x_unit"] if curve.axis.kind == "number" else ""
    return named("bandwidth", unit)


def reading_notes(curve: Curve, coarse_cells: bool, unsampled: bool) -> str:
    """Explain the line styles that occur, and what the shading lacks."""
    notes = []
    if (curve.status == EDGE).any():
        notes.append("Dotted (edge): the window is cut off by the end of the data.")
    if (curve.status == THIN).any():
        least = curve.settings["least_rows"]
        folds = ", or too few folds of blocks" if curve.settings["block"] else ""
        notes.append(f"Dashed (thin): fewer than {least:g} effective rows{folds}.")
    if curve.limits is not None:
        shares = ", ".join(f"{100.0 * level:g} %" for level in curve.limits.levels)
        notes.append(f"Thin lines: below them lie {shares} of the rows.")
    if coarse_cells:
        notes.append("Rows are not shown: far values of y make their cells too coarse.")
    elif unsampled:
        notes.append("Shading rests on a sample, which holds no rows in parts of the axis.")
    if (curve.status == OUTSIDE).any():
        notes.append("No line (outside): no rows near enough on both sides.")
    return " ".join(notes)


def first_sentence(text: str) -> str:
    """Return a text up to its first full stop that ends a sentence.

    Examples
    --------
    >>> first_sentence("The best width 1.35 is the narrowest. Thin the rows.")
    'The best width 1.35 is the narrowest.'
    """
    return re.split(r"(?<=[.!?])\s+(?=\S)", text.strip(), maxsplit=1)[0]


def cautions(curve: Curve) -> tuple[str, list[str], str]:
    """Return a heading with the number of cautions, the first ones in short, and how many more."""
    count = len(curve.cautions)
    if not count:
        return "", [], ""
    sentences = [
        printable(first_sentence(caution.text)) for caution in curve.cautions[:MOST_CAUTIONS]
    ]
    rest = f"and {count - MOST_CAUTIONS} more" if count > MOST_CAUTIONS else ""
    return f"{count} caution{'s' if count > 1 else ''}", sentences, rest
