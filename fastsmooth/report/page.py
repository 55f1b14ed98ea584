"""The page: one HTML file with a table of all units and a picture of each, for any browser."""

from __future__ import annotations

import base64
import hashlib
import json
import math
import os
import zlib
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, datetime
from importlib import metadata, resources
from typing import Any, BinaryIO
from urllib.parse import quote

import numpy as np
from matplotlib.colors import to_hex
from numpy.typing import NDArray

from fastsmooth.curve import STATUSES, Curve, spare_data
from fastsmooth.files_out import PAGE_SUFFIXES, check_writable, write_atomically
from fastsmooth.fleet import MADE, Fleet, Unit
from fastsmooth.report import look, words
from fastsmooth.report.criteria import on_scale
from fastsmooth.report.panels import SHADES, unit_data
from fastsmooth.report.scales import named, printable
from fastsmooth.report.thumbnails import HIGH, WIDE, Ends, Thumbnail, alike, common_ends, thumbnail
from fastsmooth.summary import PRUDENCE, status_counts

Floats = NDArray[np.float64]

# Published files, unchanged; see vendored/README.md.
_LIBRARY = ("d3-path.min.js", "d3-shape.min.js", "d3-selection.min.js")
_COLOURS = {
    "curve": look.CURVE,
    "band": look.BAND,
    "other": look.OTHER,
    "other-pale": look.OTHER_PALE,
    "rows": look.ROWS,
    "ink": look.INK,
    "muted": look.MUTED,
    "rule": look.RULE,
    "paper": look.PAPER,
    **{f"cell-{level}": to_hex(look.CELLS(level / SHADES)) for level in range(1, SHADES + 1)},
}
_MISSING = "\N{EN DASH}"


def write_page(result: Curve | Fleet, path: str | os.PathLike[str]) -> None:
    """Write a curve, or the curves of many units, as one HTML file that loads nothing else.

    Parameters
    ----------
    result : Curve or Fleet
        What to show.
    path : path
        Where the file shall be; it ends in .html.

    Raises
    ------
    WriteError
        The file cannot be written; nothing is left behind.
    """
    check_writable(path, "--page", PAGE_SUFFIXES)
    spare_data([record["path"] for record in result.trace["files"]], path, "--page")
    content = page_text(result, datetime.now(UTC)).encode()

    def save(stream: BinaryIO) -> None:
        stream.write(content)

    write_atomically(path, save, "--page")


def page_text(result: Curve | Fleet, made_at: datetime) -> str:
    """Return the page as HTML.

    Parameters
    ----------
    result : Curve or Fleet
        What to show.
    made_at : datetime.datetime
        When it was made, with a zone.

    Returns
    -------
    str
        The same result and time give the same text.
    """
    import jinja2

    packed, rows, alike = _rows_of(result)
    style = _colours() + _own_file("page.css")
    licence = f"/*!\n{_own_file('vendored/LICENSE')}*/"
    library = "\n".join([licence, *(_own_file(f"vendored/{name}") for name in _LIBRARY)])
    script = _own_file("page.js")
    told = {
        "single": isinstance(result, Curve),
        "units": [row.told for row in rows],
        "curves": packed,
    }
    surroundings = jinja2.Environment(
        autoescape=True, undefined=jinja2.StrictUndefined, trim_blocks=True, lstrip_blocks=True
    )
    template = surroundings.from_string(_own_file("page.html.jinja"))
    return template.render(
        policy=_policy([library, script], style),
        style=style,
        library=library,
        script=script,
        told=_json(told),
        title=_title(result.settings),
        single=isinstance(result, Curve),
        head=_head(result, made_at),
        columns=_columns(result),
        rows=rows,
        alike=alike,
        wide=WIDE,
        high=HIGH,
        prudence=PRUDENCE,
    )


@dataclass(frozen=True)
class Row:
    """A unit in the table.

    Attributes
    ----------
    cells : list of str
        Its key.
    link : str
        What stands after the number sign in its address.
    status, reason, support : str
        Whether there is a curve, why not, and how many of its points are weak.
    rows : str
        Rows used.
    width, flat : str
        The chosen width, and the flat zone.
    bar : (float, float, float) or None
        Places of the flat zone's ends and of the chosen width, for the bar.
    scatter, fit, cautions : str
        Standard deviation of rows around the curve, R2 on left-out rows, number of cautions.
    caution_names : str
        The cautions in short.
    small : Thumbnail or None
        The small curve.
    told : dict
        What the script needs: name, link, values to sort by, text to find.
    """

    cells: list[str]
    link: str
    status: str
    reason: str
    support: str
    rows: str
    width: str
    flat: str
    bar: tuple[float, float, float] | None
    scatter: str
    fit: str
    cautions: str
    caution_names: str
    small: Thumbnail | None
    told: dict[str, Any]


@dataclass(frozen=True)
class _Summary:
    """What the table tells of a curve; the curve itself need not stay open."""

    width: float
    flat: tuple[float, float]
    width_text: str
    flat_text: str
    scatter: float | None
    fit: float | None
    cautions: list[str]
    support: str
    thumbnail: Thumbnail
    ends: Ends


def _rows_of(result: Curve | Fleet) -> tuple[list[str | None], list[Row], bool]:
    """Pack each unit's curve for the script, and make its row of the table."""
    units = (
        [Unit((), MADE, None, int(result.trace["rows"]["used"]), result)]
        if isinstance(result, Curve)
        else result.units
    )
    packed: list[str | None] = []
    summaries: list[_Summary | None] = []
    for unit in units:
        curve = unit.curve  # each is opened once, and let go
        packed.append(None if curve is None else _pack(unit_data(curve)))
        summaries.append(None if curve is None else _summary(curve))
    made = [one for one in summaries if one is not None]
    ends = [one.ends for one in made]
    together = common_ends(ends)
    low = min((one.flat[0] for one in made), default=1.0)
    high = max((one.flat[1] for one in made), default=1.0)
    by = () if isinstance(result, Curve) else result.by
    ranks = [_ranks([unit.key[place] for unit in units]) for place in range(len(by))]
    rows = [
        _row(unit, summary, by, [one[place] for one in ranks], together, (low, high))
        for place, (unit, summary) in enumerate(zip(units, summaries, strict=True))
    ]
    return packed, rows, alike(ends)


def _summary(curve: Curve) -> _Summary:
    trail = curve.search.trails.get(curve.settings["estimator"])
    flat = (curve.bandwidth, curve.bandwidth) if trail is None else trail.flat_zone
    low, high, width = on_scale(curve, np.array([*flat, curve.bandwidth])).tolist()
    small, ends = thumbnail(curve)
    counts = status_counts(curve)
    return _Summary(
        width=width,
        flat=(min(low, width), max(high, width)),
        width_text=printable(words.width_text(curve, curve.bandwidth)),
        flat_text="" if trail is None else printable(words.range_text(curve, *flat)),
        scatter=curve.trace["engine"]["residual_sd"],
        fit=curve.trace["fit"]["r2_left_out"],
        cautions=[printable(caution.code) for caution in curve.cautions],
        support=", ".join(f"{counts[name]} {name}" for name in STATUSES[1:] if counts[name]),
        thumbnail=small,
        ends=ends,
    )


def _row(
    unit: Unit, summary: _Summary | None, by: Sequence[str], ranks: list[int | None],
    together: Ends, widths: tuple[float, float],
) -> Row:  # fmt: skip
    cells = [key_text(value) for value in unit.key]
    link = "&".join(_link(name, value) for name, value in zip(by, unit.key, strict=True))
    reason = printable(unit.reason or "")
    cautions = [] if summary is None else summary.cautions
    values = [*ranks, None if summary is None else summary.ends.top, unit.status, unit.rows]
    values += [None, None, None] if summary is None else [
        summary.width, summary.scatter, summary.fit
    ]  # fmt: skip
    told = {
        "name": ", ".join(cells),
        "link": link,
        "reason": f"{unit.status}: {reason}" if summary is None else "",
        "sort": [*values, None if summary is None else len(cautions)],
        "find": " ".join([*cells, unit.status, reason, *cautions]),
    }
    shown = {"width": "", "flat": "", "scatter": "", "fit": "", "cautions": "", "support": ""}
    bar = None
    if summary is not None:
        bar = _bar(summary, widths)
        shown = {
            "width": summary.width_text,
            "flat": summary.flat_text,
            "scatter": _number(summary.scatter, ".4g"),
            "fit": _number(summary.fit, ".3f"),
            "cautions": str(len(cautions)) if cautions else "",
            "support": f"points: {summary.support}" if summary.support else "",
        }
    return Row(
        cells=cells, link=link, status=unit.status, reason=reason, rows=f"{unit.rows:,}",
        bar=bar, caution_names=", ".join(cautions), told=told,
        small=None if summary is None else summary.thumbnail.within(summary.ends, together),
        **shown,
    )  # fmt: skip


def key_text(value: Any) -> str:
    """Write one value of a key for people."""
    if value is None:
        return "null"
    return printable(str(value)).strip() or "(blank)"


def _link(name: str, value: Any) -> str:
    """One part of a unit's address; nothing in it needs to be escaped further."""
    if value is None:
        return quote(name, safe="")
    return f"{quote(name, safe='')}={quote(str(value), safe='')}"


def _ranks(values: Sequence[Any]) -> list[int | None]:
    """Places in ascending order, equal values alike; None for null, which is sorted last."""

    def missing(value: Any) -> bool:
        return value is None or value != value

    order = {value: place for place, value in enumerate(sorted(
        {value for value in values if not missing(value)}
    ))}  # fmt: skip
    return [None if missing(value) else order[value] for value in values]


def _bar(summary: _Summary, ends: tuple[float, float]) -> tuple[float, float, float]:
    low, high = ends
    span = math.log(high / low)

    def share(width: float) -> float:
        return round(100.0 * math.log(width / low) / span, 1) if span > 0.0 else 50.0

    return share(summary.flat[0]), share(summary.flat[1]), share(summary.width)


def _number(value: float | None, form: str) -> str:
    if value is None or not math.isfinite(value):
        return _MISSING
    return f"{value:{form}}".replace("-", "\N{MINUS SIGN}")


def _title(told: dict[str, Any]) -> str:
    return f"{named(told['y'], told['y_unit'])} against {named(told['x'], told['x_unit'])}"


def _columns(result: Curve | Fleet) -> list[dict[str, Any]]:
    """Headings of the columns that can be sorted, in the order of a row's ``sort``."""
    told = result.settings
    by = [] if isinstance(result, Curve) else [printable(name) for name in result.by]
    width = "neighbours" if told["estimator"] == "nearest" else "bandwidth"
    keys = [{"name": name, "unit": "", "kind": "key"} for name in by]
    return [
        *keys,
        {"name": "curve", "unit": "by its height", "kind": "small"},
        {"name": "status", "unit": "", "kind": "status"},
        {"name": "rows", "unit": "", "kind": "number rows"},
        {"name": width, "unit": "flat zone", "kind": "number width"},
        {"name": "residual sd", "unit": printable(told["y_unit"]), "kind": "number scatter"},
        {"name": "R²", "unit": "left-out rows", "kind": "number fit"},
        {"name": "cautions", "unit": "", "kind": "number cautions"},
    ]


def _head(result: Curve | Fleet, made_at: datetime) -> dict[str, Any]:
    """What stands above the table: units by status, rows, settings, cautions."""
    rows, told = result.trace["rows"], result.settings
    text = f"{rows['used']:,} rows used of {rows['read']:,} read"
    if rows.get("filtered"):
        text += f"; {rows['filtered']:,} filtered"
    if rows.get("refused"):
        counts = ", ".join(f"{n:,} {printable(why)}" for why, n in rows["refused"].items())
        text += f"; refused: {counts}"
    cautions: list[str] = []
    common: list[tuple[str, int]] = []
    statuses: list[tuple[str, int]] = []
    if isinstance(result, Fleet):
        cautions = [printable(caution.text) for caution in result.cautions]
        counted = Counter(
            printable(code) for unit in result.units for code in set(unit.caution_codes)
        )
        common = sorted(counted.items(), key=lambda one: (-one[1], one[0]))
        statuses = [(name, count) for name, count in result.status_counts().items() if count]
    kernel = "" if told["estimator"] == "nearest" else f", {told['kernel']} kernel"
    settings = [f"{told['estimator']}{kernel}"]
    settings.append(f"bandwidth by {told['criterion']}")
    if told.get("shared_bandwidth"):
        settings[-1] = f"one bandwidth for all units, by {told['criterion']}"
    if told["bandwidth"] is not None:
        settings[-1] = "bandwidth as given"
    settings.append(f"{told['band']} {100.0 * told['level']:.6g} % band")
    if told["block"]:
        settings.append(f"blocks by {told['block']}")
    if told["where"]:
        settings.append(f"rows where {told['where']}")
    return {
        "units": len(result.units) if isinstance(result, Fleet) else 1,
        "statuses": statuses,
        "made": MADE,
        "rows": text,
        "settings": printable("; ".join(settings)),
        "cautions": cautions,
        "common": common,
        "made_at": f"{made_at:%Y-%m-%d %H:%M} {made_at:%Z}",
        "version": metadata.version("fastsmooth"),
    }


def _pack(data: dict[str, Any]) -> str:
    """Plain data as compressed JSON in letters; the script unpacks a unit when it is opened."""
    return base64.b64encode(zlib.compress(_json(data).encode(), 9)).decode()


def _json(data: Any) -> str:
    """JSON that no HTML parser takes for the end of a script."""
    text = json.dumps(data, ensure_ascii=False, separators=(",", ":"), allow_nan=False)
    for letter in "<>&":
        text = text.replace(letter, f"\\u{ord(letter):04x}")
    return text


def _policy(scripts: Sequence[str], style: str) -> str:
    """The page's security policy: nothing is loaded, and only its own scripts run."""

    def digest(text: str) -> str:
        return f"'sha256-{base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()}'"

    return (
        f"default-src 'none'; script-src {' '.join(map(digest, scripts))}; "
        f"style-src {digest(style)}; base-uri 'none'; form-action 'none'"
    )


def _own_file(name: str) -> str:
    return resources.files("fastsmooth.report").joinpath(name).read_text(encoding="utf-8")


def _colours() -> str:
    """The picture's colours, by name."""
    return f":root {{{' '.join(f'--{name}: {value};' for name, value in _COLOURS.items())}}}\n"
