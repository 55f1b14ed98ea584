"""A curve as the page's script draws it: places as shares of a panel, texts ready to be shown."""

from __future__ import annotations

import math
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.curve import STATUSES, Caution, Curve, has_own_points
from fastsmooth.report import words
from fastsmooth.report.criteria import (
    best_text,
    criterion_paths,
    flat_text,
    given_width,
    panel_ends,
    width_ends,
)
from fastsmooth.report.rows import (
    cell_shades,
    cells_are_coarse,
    count_heights,
    has_unsampled_rows,
    heights_text,
    joined,
    stretches,
    weak_stretches,
    x_ends,
    y_ends,
)
from fastsmooth.report.scales import (
    Shown,
    Ticks,
    Track,
    log_ticks,
    named,
    number_ticks,
    printable,
    shown_axis,
    width_ticks,
)
from fastsmooth.summary import curve_lines

Floats = NDArray[np.float64]

# The panels' width at which tick labels are chosen, inches of 96 pixels; in a narrower window the
# script leaves some out.
_LENGTH_IN = 8.5
_LETTER_IN = 0.075
# How finely values are told: this many steps in the height of the picture, as far as a whole number
# of steps is exact in the script.
_STEPS = 1e4
_EXACT_DIGITS = 15
# Shares are rounded to a twentieth of a pixel.
_SHARE_DECIMALS = 5
SHADES = 6
# Parts of a criterion's line farther outside its panel than so many heights are cut.
_CUT = 1.0
_LABEL = 11  # where the text of a line of the summary begins
# Cautions about the choice of the width stand beside the panel that shows the choice.
ABOUT_SEARCH = frozenset(
    {
        "width outside the flat zone",
        "width at the lower end",
        "width at the upper end",
        "several minima",
        "flat criterion",
        "rows alone",
    }
)


def unit_data(curve: Curve) -> dict[str, Any]:
    """Return all that is shown of one curve as plain data for JSON.

    Places along an axis are shares of its length, from 0 at its low end to 1 at its high one, so
    that logarithms, times and zones are settled here.

    Parameters
    ----------
    curve : Curve
        What to show.

    Returns
    -------
    dict
        ``said`` and ``notes`` (sentences), ``facts`` (label and lines), ``cautions`` by panel,
        ``picture`` and ``criteria``.
    """
    notes = words.reading_notes(curve, cells_are_coarse(curve), has_unsampled_rows(curve))
    cautions = [_told(caution) for caution in curve.cautions]
    return {
        "said": printable(words.subtitle(curve)),
        "notes": notes,
        "facts": _facts(curve),
        "cautions": {
            "curve": [one for one in cautions if one["code"] not in ABOUT_SEARCH],
            "search": [one for one in cautions if one["code"] in ABOUT_SEARCH],
        },
        "picture": _picture(curve),
        "criteria": _criteria(curve),
    }


def _told(caution: Caution) -> dict[str, str]:
    return {"code": printable(caution.code), "text": printable(caution.text)}


def _facts(curve: Curve) -> list[tuple[str, list[str]]]:
    """The summary's lines under their labels; the title and the cautions stand elsewhere."""
    facts: list[tuple[str, list[str]]] = []
    for line in curve_lines(curve)[1:]:
        label, text = line[:_LABEL].strip(), printable(line[_LABEL:].strip())
        if label == "caution":
            continue
        if label or not facts:
            facts.append((label, [text]))
        else:
            facts[-1][1].append(text)
    return facts


def _measure(text: str) -> float:
    """About how wide a text is, inches: browsers have fonts of their own."""
    return _LETTER_IN * len(text)


class _Along:
    """The x axis of a curve."""

    def __init__(self, curve: Curve) -> None:
        told, ends = curve.settings, x_ends(curve)
        self._log = curve.scale == "log"
        self.shown: Shown = shown_axis(
            curve.axis, told["x"], told["x_unit"], ends, self._log, _LENGTH_IN, _measure
        )
        self._low, self._high = self._even(self.shown.plotted(np.array(ends))).tolist()

    def _even(self, plotted: Floats) -> Floats:
        return np.log(plotted) if self._log else plotted

    def shares(self, x: Floats) -> list[float]:
        return self._shares(self.shown.plotted(x))

    def ticks(self) -> list[tuple[float, str]]:
        ticks = self.shown.ticks
        return list(zip(self._shares(np.array(ticks.places)), ticks.texts, strict=True))

    def _shares(self, plotted: Floats) -> list[float]:
        span = self._high - self._low
        share = (self._even(plotted) - self._low) / span if span > 0.0 else 0.5 + 0.0 * plotted
        return _rounded(share, _SHARE_DECIMALS)


def _picture(curve: Curve) -> dict[str, Any]:
    along, (low, high) = _Along(curve), y_ends(curve)
    told = curve.settings
    value_ticks = number_ticks(low, high)
    decimals = _decimals(curve, high - low)
    own = has_own_points(curve)
    return {
        "x": {
            "name": printable(told["x"]),
            "unit": printable(told["x_unit"]),
            "title": along.shown.label,
            "ticks": along.ticks(),
            "at": _evenly(along.shares(curve.x)),
            "labels": _labels(curve),
        },
        "y": {
            "name": printable(told["y"]),
            "unit": printable(told["y_unit"]),
            "title": named(told["y"], told["y_unit"], value_ticks.note),
            "ticks": list(zip(value_ticks.places, value_ticks.texts, strict=True)),
            "ends": (low, high),
            "decimals": decimals,
        },
        "estimate": steps_of(curve.estimate, decimals),
        "lower": steps_of(curve.lower, decimals),
        "upper": steps_of(curve.upper, decimals),
        "residual_sd": _significant(curve.residual_sd, 4),
        "effective_rows": _significant(curve.effective_rows, 3),
        "status": "".join(str(code) for code in curve.status.tolist()),
        "statuses": STATUSES,
        "strokes": [] if own else _strokes(curve),
        "own_points": own,
        "weak": [
            (name, *along.shares(np.array([left, right])))
            for name, left, right in weak_stretches(curve)
        ],
        "limits": _limits(curve, decimals),
        "cells": _cells(curve),
        "rows": _rows(curve, along),
    }


def _strokes(curve: Curve) -> list[tuple[str, int, int]]:
    """Pieces of the line: status, first point, and the point after the last."""
    return [
        (STATUSES[one.status], *joined(curve.status, one))
        for one in stretches(curve.status)
        if STATUSES[one.status] != "outside"
    ]


def _limits(curve: Curve, decimals: int) -> list[dict[str, Any]]:
    found = curve.limits
    if found is None:
        return []
    return [
        {"name": f"{100.0 * level:.6g} %", "values": steps_of(values, decimals)}
        for level, values in zip(found.levels, found.values, strict=True)
    ]


def _cells(curve: Curve) -> dict[str, Any] | None:
    """How dark each cell is, as digits: columns along x, each from the bottom up."""
    shade = cell_shades(curve)
    if shade is None:
        return None
    levels = np.ceil(shade / shade.max() * SHADES).astype(np.int64)
    edges = curve.density.y_edges
    return {
        "ends": (float(edges[0]), float(edges[-1])),
        "columns": ["".join(map(str, column)) for column in levels.tolist()],
    }


def _rows(curve: Curve, along: _Along) -> dict[str, Any]:
    """The strip of rows: edges along x, heights as shares, and the counts themselves."""
    rows, heights = curve.density.rows, count_heights(curve)
    low, high = heights.floor, heights.ceiling

    def share(values: Floats) -> Floats:
        if heights.log:
            return np.log(np.maximum(values, low) / low) / math.log(high / low)
        return (values - low) / (high - low)

    ticks = heights.ticks
    return {
        "title": heights_text(heights.log),
        "edges": along.shares(curve.density.x_edges),
        "heights": _rounded(share(rows), 3),
        "counts": rows.tolist(),
        "ticks": list(
            zip(_rounded(share(np.array(ticks.places)), 3), ticks.texts, strict=True)
        ),
    }  # fmt: skip


def _criteria(curve: Curve) -> dict[str, Any] | None:
    """The criterion of each estimator over the width, its best width and its flat zone."""
    paths = criterion_paths(curve)
    if not paths:
        return None
    given = given_width(curve, paths)
    low, high = width_ends(paths, given)
    bottom, top = panel_ends(paths)

    def across(widths: Floats) -> Floats:
        return np.log(widths / low) / math.log(high / low)

    def up(values: Floats) -> Floats:
        return np.clip((values - bottom) / (top - bottom), -_CUT, 1.0 + _CUT)

    track = Track(lambda width: _LENGTH_IN * float(across(np.array(width))), _measure)
    marks = (
        log_ticks(low, high, track)
        if curve.by_neighbours
        else width_ticks(low, high, curve.axis, curve.scale == "log", track)
    )
    given_text = f"given {printable(words.width_text(curve, curve.bandwidth))}"
    error, unit = words.criterion(curve)
    error_ticks = number_ticks(bottom, top, 4)
    return {
        "title": named(error, unit, error_ticks.note),
        "width_title": words.width_axis(curve),
        "how": words.HOW_TO_READ_CRITERIA,
        "x_ticks": _placed(marks, across),
        "y_ticks": _placed(error_ticks, up),
        "given": None if given is None else (_share(across(np.array(given))), given_text),
        "paths": [
            {
                "used": path.used,
                "at": _rounded(across(path.widths), _SHARE_DECIMALS),
                "up": _rounded(up(path.values), 4),
                "best": (_share(across(np.array(path.best))), _share(up(np.array(path.least)))),
                "text": printable(best_text(curve, path)),
                "flat": _rounded(across(np.clip(path.flat_zone, low, high)), _SHARE_DECIMALS),
                "flat_text": printable(flat_text(curve, path)),
            }
            for path in paths
        ],
    }


def _placed(ticks: Ticks, share: Any) -> list[tuple[float, str]]:
    places = _rounded(share(np.array(ticks.places)), _SHARE_DECIMALS)
    return list(zip(places, ticks.texts, strict=True))


def _share(value: Floats) -> float | None:
    share = float(value)
    return round(share, _SHARE_DECIMALS) if math.isfinite(share) else None


def _rounded(values: Floats, decimals: int) -> list[Any]:
    """Plain numbers with so many decimals; None for what is not finite."""
    # Python rounds to the nearest decimal number itself, and its text is short.
    return [
        round(value, decimals) + 0.0 if math.isfinite(value) else None
        for value in values.tolist()
    ]  # fmt: skip


def _significant(values: Floats, digits: int) -> list[Any]:
    """Plain numbers with so many significant digits; None for what is not finite."""
    return [
        float(f"{value:.{digits}g}") if math.isfinite(value) else None
        for value in values.tolist()
    ]  # fmt: skip


def _decimals(curve: Curve, height: float) -> int:
    """How many decimals values are told with; below 0 for whole tens, hundreds..."""
    decimals = math.ceil(math.log10(_STEPS / height))
    columns = np.stack((curve.estimate, curve.lower, curve.upper))
    largest = float(np.max(np.abs(columns), where=np.isfinite(columns), initial=0.0))
    if largest > 0.0:
        decimals = min(decimals, _EXACT_DIGITS - math.ceil(math.log10(largest)))
    return decimals


def steps_of(values: Floats, decimals: int) -> list[int | None]:
    """Return values in steps of the last decimal, each less the known one before: few digits.

    Parameters
    ----------
    values : (n,) float64
        Values; NaN where unknown.
    decimals : int
        The size of a step is 10 to the power of minus this.

    Returns
    -------
    list of int or None
        n steps. Added up, known ones give the value, rounded; None where it is unknown.
    """
    size = 10.0**decimals
    steps: list[int | None] = []
    last = 0
    for value in values.tolist():
        if math.isfinite(value):
            # The first rounding is to the nearest decimal number, the second to its whole steps.
            here = round(round(value, decimals) * size)
            steps.append(here - last)
            last = here
        else:
            steps.append(None)
    return steps


def _evenly(shares: list[float]) -> list[float]:
    """The ends alone where all lies evenly between them."""
    even = np.linspace(shares[0], shares[-1], len(shares))
    return [shares[0], shares[-1]] if np.allclose(shares, even, rtol=0.0, atol=2e-5) else shares


def _labels(curve: Curve) -> list[str] | list[float]:
    """What stands for each x, or the ends alone where the script comes to the same texts."""
    labels = [curve.axis.label(one) for one in curve.x.tolist()]
    if curve.axis.kind != "number" or curve.x.size < 3:
        return labels
    low, high = float(curve.x[0]), float(curve.x[-1])
    even = low + np.arange(curve.x.size) * ((high - low) / (curve.x.size - 1))
    even[-1] = high
    same = labels == [curve.axis.label(one) for one in even.tolist()]
    return [low, high] if same else labels
