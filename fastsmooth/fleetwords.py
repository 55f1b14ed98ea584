"""Curves of many units in a few lines for people, and as plain data for programs."""

from __future__ import annotations

import math
from collections import Counter
from typing import Any

import numpy as np

from fastsmooth.fleet import MADE, Fleet, Unit, short_name
from fastsmooth.summary import row_lines

_FIRST_UNITS = 10
_FIRST_WITHOUT = 5
_MOST_ROBUST = 3
_LONGEST_NAME = 32


def fleet_lines(fleet: Fleet) -> list[str]:
    """Return what a person should read first about curves of many units, one fact a line."""
    settings, engine = fleet.settings, fleet.trace["engine"]
    title = f"{settings['y']} against {settings['x']}, by {', '.join(fleet.by)}"
    lines = [title, *row_lines(fleet.trace)]
    counts = {status: n for status, n in fleet.status_counts().items() if n}
    told = ", ".join(f"{n:,} {status}" for status, n in counts.items())
    lines.append(f"units      {len(fleet.units):,}: {told}")
    if settings["block"] is not None:
        lines.append(
            f"blocks     {settings['block']}, dealt to {settings['folds']} folds for each unit"
        )
    lines += _width_lines(fleet)
    kind = "local quadratic centre" if settings["bias"] == "corrected" else "bias ignored"
    lines.append(f"band       {settings['band']} {100 * settings['level']:g} %, {kind}")
    lines += _robust_lines(fleet)
    lines += _limit_lines(fleet)
    if "bins" in engine:
        times = "one pass" if engine["passes"] == 1 else f"{engine['passes']} passes"
        lines.append(
            f"engine     binned, {engine['bins']:,} bins and {engine['folds']} folds a unit at "
            f"first, {times} over the data"
        )
    lines += [f"caution    {caution.text}" for caution in fleet.cautions]
    lines += [
        f"cautions   {n:,} {'unit' if n == 1 else 'units'}: {code}"
        for code, n in caution_counts(fleet).items()
    ]
    return [*lines, "", *_unit_lines(fleet)]


def fleet_facts(fleet: Fleet) -> dict[str, Any]:
    """Return what `fleet_lines` tells, and every unit, as plain data for JSON."""
    return {
        "by": list(fleet.by),
        "settings": fleet.settings,
        "rows": fleet.trace["rows"],
        "files": len(fleet.trace["files"]),
        "engine": fleet.trace["engine"],
        "shared_bandwidth": fleet.trace["shared_bandwidth"],
        "robust": fleet.trace.get("robust"),
        "limits": fleet.trace.get("limits"),
        "status_counts": fleet.status_counts(),
        "cautions": [caution._asdict() for caution in fleet.cautions],
        "caution_counts": caution_counts(fleet),
        "units": [
            {
                "key": list(unit.key), "status": unit.status, "reason": unit.reason,
                "rows": unit.rows, "bandwidth": unit.bandwidth,
                "cautions": list(unit.caution_codes),
            }
            for unit in fleet.units
        ],
    }  # fmt: skip


def caution_counts(fleet: Fleet) -> dict[str, int]:
    """Return how many units have each caution, the most frequent first."""
    counts = Counter(code for unit in fleet.units for code in set(unit.caution_codes))
    return dict(sorted(counts.items(), key=lambda pair: (-pair[1], pair[0])))


def _label(fleet: Fleet, width: float) -> str:
    log = fleet.settings["scale"] == "log"
    return f"factor {width:.4g}" if log else fleet.axis.width_label(width)


def _width_lines(fleet: Fleet) -> list[str]:
    settings, shared = fleet.settings, fleet.trace["shared_bandwidth"]
    made = [unit for unit in fleet.units if unit.bandwidth is not None]
    widths = np.array([unit.bandwidth for unit in made], np.float64)
    estimator = f"{settings['estimator']}, {settings['kernel']} kernel"
    if settings["bandwidth"] is not None and shared is None:
        return [f"bandwidth  {_label(fleet, settings['bandwidth'])} given for all; {estimator}"]
    if shared is not None:
        text = f"{_label(fleet, shared['bandwidth'])} for all, chosen by {shared['criterion']}"
        return [
            f"bandwidth  {text} summed over {shared['units_judging']:,} units with "
            f"{shared['rows_judging']:,} rows; {estimator}"
        ]
    low, high = int(np.argmin(widths)), int(np.argmax(widths))
    middle = math.exp(float(np.median(np.log(widths))))
    ends = [
        f"{_label(fleet, widths[place])} ({short_name(made[place].name, _LONGEST_NAME)})"
        for place in (low, high)
    ]
    return [
        f"bandwidth  {' to '.join(ends)}, median {_label(fleet, middle)}; each unit's own, chosen "
        f"by {settings['criterion']}; {estimator}"
    ]


def _limit_lines(fleet: Fleet) -> list[str]:
    facts = fleet.trace.get("limits")
    if facts is None:
        return []
    levels, units = facts["levels"], facts["units"]
    text = f"limits     {', '.join(f'{100 * level:g} %' for level in levels)} of rows below"
    if facts["coverage"] is not None:
        found = ", ".join(f"{100 * share:.3g} %" for share in facts["coverage"])
        text += f"; of {facts['rows_judged']:,} rows held against limits made without them {found}"
    for level, known in zip(levels, facts["units_with_limit"], strict=True):
        if known < units:
            text += f"; {units - known:,} units have none at {100 * level:g} %, for too few rows"
    return [text]


def _robust_lines(fleet: Fleet) -> list[str]:
    counts = fleet.trace.get("robust")
    if counts is None:
        return []
    judged, down, ignored = (sum(one[place] for one in counts) for place in range(3))
    shares = [one[2] / one[0] if one[0] else 0.0 for one in counts]
    most = sorted(range(len(shares)), key=lambda place: -shares[place])[:_MOST_ROBUST]
    told = ", ".join(
        f"{short_name(fleet.units[place].name, _LONGEST_NAME)} {shares[place]:.2%}"
        for place in most
        if shares[place] > 0.0
    )
    text = (
        f"robust     {down:,} rows ({down / max(judged, 1):.2%}) count less than half, {ignored:,} "
        f"of them not at all"
    )
    return [text + (f"; most in {told}" if told else "")]


def _unit_lines(fleet: Fleet) -> list[str]:
    made = [unit for unit in fleet.units if unit.status == MADE]
    without = [unit for unit in fleet.units if unit.status != MADE]
    shown = [*made[:_FIRST_UNITS], *without[:_FIRST_WITHOUT]]
    width = min(max(len(unit.name) for unit in shown), _LONGEST_NAME)
    lines = [_unit_line(fleet, unit, width) for unit in made[:_FIRST_UNITS]]
    if len(made) > _FIRST_UNITS:
        lines.append(f"  and {len(made) - _FIRST_UNITS:,} more")
    lines += [
        f"  {short_name(unit.name, width):<{width}}  {unit.rows:>13,} rows  no curve, "
        f"{unit.status}: {unit.reason}"
        for unit in without[:_FIRST_WITHOUT]
    ]
    if len(without) > _FIRST_WITHOUT:
        lines.append(f"  and {len(without) - _FIRST_WITHOUT:,} more without a curve")
    return lines


def _unit_line(fleet: Fleet, unit: Unit, width: int) -> str:
    assert unit.bandwidth is not None
    told = f"  {short_name(unit.name, width):<{width}}  {unit.rows:>13,} rows  bandwidth "
    told += _label(fleet, unit.bandwidth)
    return told + (f"; {', '.join(unit.caution_codes)}" if unit.caution_codes else "")
