"""A comparison in a few lines for people."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

from fastsmooth.difference import Difference
from fastsmooth.excess import Excess
from fastsmooth.fleet import short_name

if TYPE_CHECKING:
    from fastsmooth.comparison import CurveComparison, UnitComparison

_MOST_STRETCHES = 6
_MOST_UNITS = 20
_LONGEST_NAME = 48


def comparison_lines(found: CurveComparison) -> list[str]:
    """Return what a person should read first about a comparison, one fact a line."""
    told = found.settings
    lines = [f"{told['y']} against {told['x']}: now less base"]
    if not found.by:
        return lines + _single_lines(found, found.units[0])
    return lines + _many_lines(found)


def amount_text(value: float) -> str:
    """Write an amount with its sign: whole from a thousand on, else in four digits.

    Examples
    --------
    >>> amount_text(12345.6), amount_text(-1.23456)
    ('+12,346', '-1.235')
    """
    return f"{value:+,.0f}" if abs(value) >= 1000.0 else f"{value:+.4g}"


def p_text(value: float | None) -> str:
    """Write a p value.

    Examples
    --------
    >>> p_text(0.0321), p_text(1e-9), p_text(None)
    ('p = 0.032', 'p < 0.0001', 'no p value')
    """
    if value is None:
        return "no p value"
    return "p < 0.0001" if value < 1e-4 else f"p = {value:.2g}"


def _single_lines(found: CurveComparison, unit: UnitComparison) -> list[str]:
    lines = []
    for side in ("base", "now"):
        facts = found.trace[side]
        name = "" if facts["name"] is None else f"{facts['name']}: "
        rows = facts["rows"]
        text = f"{side:<10} {name}{rows['used']:,} used of {rows['read']:,} read"
        if facts["block"] is not None:
            text += f", {facts['blocks']:,} blocks by {facts['block']}"
        if facts["where"] is not None:
            text += f", where {facts['where']}"
        lines.append(text)
    told = found.settings
    width = _width_text(found, unit)
    lines.append(
        f"bandwidth  {width} for both; {told['estimator']}, {told['kernel']} kernel"
        + ("; both sides hold the same blocks" if found.trace["paired"] else "")
    )
    lines += _excess_lines(found, unit.excess)
    if unit.difference is not None:
        lines += _difference_lines(found, unit.difference)
    return [*lines, *(f"caution    {caution.text}" for caution in unit.cautions)]


def _width_text(found: CurveComparison, unit: UnitComparison) -> str:
    width = math.nan if unit.bandwidth is None else unit.bandwidth
    return f"factor {width:.4g}" if found.scale == "log" else found.axis.width_label(width)


def _excess_lines(found: CurveComparison, excess: Excess | None) -> list[str]:
    if excess is None:
        return ["excess     none: only a curve is known of now, or none of its rows has a baseline"]
    text = f"excess     {amount_text(excess.amount)} {found.amount_unit}"
    if excess.share is not None:
        text += f" ({excess.share:+.2%} of {excess.expected:,.6g} expected)"
    lines = [text]
    if excess.std_error is not None:
        lines.append(_interval_text(excess))
        if excess.now_std_error is not None and excess.base_std_error is not None:
            lines.append(
                f"error      {_size(excess.std_error)}: {_size(excess.now_std_error)} from now's "
                f"rows, {_size(excess.base_std_error)} from the baseline; {excess.degrees:.1f} "
                f"degrees of freedom"
            )
    text = f"rows       {excess.rows:,.0f} added up"
    if excess.independent_rows is not None:
        text += f", worth {excess.independent_rows:,.4g} independent ones"
    if excess.rows_outside or excess.rows_thin:
        text += (
            f"; not in it: {excess.rows_outside:,.0f} outside the baseline, "
            f"{excess.rows_thin:,.0f} where it is thin"
        )
    return [*lines, text]


def _interval_text(excess: Excess) -> str:
    text = f"           {100 * excess.level:g} % interval "
    if excess.lower is None or excess.upper is None:
        return text + "without ends: too few degrees of freedom"
    text += f"{amount_text(excess.lower)} to {amount_text(excess.upper)}"
    if excess.share_lower is not None and excess.share_upper is not None:
        text += f" ({excess.share_lower:+.2%} to {excess.share_upper:+.2%})"
    return f"{text}, {p_text(excess.p_value)}"


def _size(value: float) -> str:
    return f"{value:,.0f}" if value >= 1000.0 else f"{value:.4g}"


def _difference_lines(found: CurveComparison, along: Difference) -> list[str]:
    lines = [
        f"test       largest difference {along.statistic:.3g} standard errors, "
        f"{p_text(along.p_value)} by {along.flips} sign flips of folds"
    ]
    level = f"{100 * found.level:g} %"
    if not along.stretches:
        return [*lines, f"real       nowhere: the {level} band for the whole curve holds 0"]
    for one in along.stretches[:_MOST_STRETCHES]:
        lines.append(
            f"real       {found.x_label(one.low)} to {found.x_label(one.high)}: "
            f"{amount_text(one.mean_difference)} on average ({level} band for the whole curve)"
        )
    more = len(along.stretches) - _MOST_STRETCHES
    return [*lines, f"           and {more:,} more stretches"] if more > 0 else lines


def _many_lines(found: CurveComparison) -> list[str]:
    compared = [unit for unit in found.units if unit.excess is not None]
    real = found.discoveries()
    share = f"{100 * (1.0 - found.level):.3g} %"
    lines = [
        f"units      {len(compared):,} compared of {len(found.units):,} by {', '.join(found.by)}; "
        f"{len(real):,} with a real excess (of such findings at most {share} are expected to be "
        f"false: Benjamini & Hochberg)",
        f"excess     in {found.amount_unit}, {100 * found.level:g} % interval of each unit alone",
        "",
        f"{'rank':>4}  {'unit':<22}{'excess':>12}{'from':>12}{'to':>12}{'share':>9}"
        f"{'adjusted p':>12}{'test p':>9}",
    ]
    for rank, unit in enumerate(compared[:_MOST_UNITS], 1):
        lines.append(_unit_line(rank, unit, unit.excess))
    if len(compared) > _MOST_UNITS:
        lines.append(f"      and {len(compared) - _MOST_UNITS:,} more: see --units-out")
    rest = [unit for unit in found.units if unit.excess is None]
    if rest:
        lines.append("")
        for unit in rest[:_MOST_UNITS]:
            lines.append(
                f"not ranked {short_name(unit.name, _LONGEST_NAME)}: {unit.reason or unit.status}"
            )
        if len(rest) > _MOST_UNITS:
            lines.append(f"           and {len(rest) - _MOST_UNITS:,} more")
    counts: dict[str, int] = {}
    for unit in found.units:
        for code in {caution.code for caution in unit.cautions}:
            counts[code] = counts.get(code, 0) + 1
    of = f"{len(found.units):,} units"
    lines += [f"caution    {code}: {n:,} of {of}" for code, n in counts.items()]
    return lines


def _unit_line(rank: int, unit: UnitComparison, excess: Excess | None) -> str:
    def cell(value: float | None, width: int, write: Any) -> str:
        return f"{'none' if value is None else write(value):>{width}}"

    assert excess is not None
    test = None if unit.difference is None else unit.difference.p_value
    return (
        f"{rank:>4}  {short_name(unit.name, 21):<22}{cell(excess.amount, 12, amount_text)}"
        f"{cell(excess.lower, 12, amount_text)}{cell(excess.upper, 12, amount_text)}"
        f"{cell(excess.share, 9, '{:+.2%}'.format)}"
        f"{cell(unit.adjusted_p_value, 12, '{:.2g}'.format)}{cell(test, 9, '{:.2g}'.format)}"
    )
