"""What scoring found, in a few lines for people."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

from fastsmooth.fleet import short_name, unit_name
from fastsmooth.summary import PRUDENCE

if TYPE_CHECKING:
    from fastsmooth.score import Scored

_MOST_UNITS = 12
_MOST_UNKNOWN = 5
_LONGEST_NAME = 48


def scored_lines(scored: Scored) -> list[str]:
    """Return what a person should read first, one fact a line."""
    settings, rows = scored.trace["settings"], scored.trace["rows"]
    units = scored.units.to_pylist()
    lines = [f"{settings['y']} against {settings['x']}, held against {_curve_words(scored)}"]
    text = f"rows       {rows['read']:,} read"
    files = len(scored.trace["files"])
    text += f" from {_counted(files, 'file')}" if files else ""
    text += f"; {rows['filtered']:,} left out by --where" if rows["filtered"] else ""
    lines.append(f"{text}; {rows['written']:,} written")
    by_status = {name: n for name, n in rows["by_status"].items() if n}
    lines.append("status     " + (", ".join(f"{n:,} {name}" for name, n in by_status.items())
                                  or "no rows"))  # fmt: skip
    lines.append(f"limits     {_limit_words(settings)}")
    if scored.by:
        lines += _fleet_lines(scored, units)
    else:
        lines += _unit_lines(units[0], "outside    ", "           ")
    lines += [f"caution    {caution.text}" for caution in scored.cautions]
    return [*lines, *([] if scored.trace["out"] is None else [f"wrote      {scored.trace['out']}"]),
            "", PRUDENCE]  # fmt: skip


def _limit_words(settings: dict[str, Any]) -> str:
    if settings["limits"] is None:
        return f"{settings['z_limit']:.4g} residual sd on either side of the curve"
    low, high = settings["limits"]
    return (
        f"the curves' own: {100 * low:g} % of rows below, {100 * (1.0 - high):g} % above, where "
        f"nothing has changed"
    )


def _curve_words(scored: Scored) -> str:
    curve = scored.trace["curve"]
    n = scored.units.num_rows
    what = "one curve" if not scored.by else f"curves of {n:,} units"
    return what if curve is None else f"{what} of '{curve['path']}'"


def _unit_lines(unit: dict[str, Any], head: str, indent: str) -> list[str]:
    if not unit["scored"]:
        return [f"{head}nothing could be scored"]
    lines = [
        f"{head}{unit['outside']:,} of {unit['scored']:,} scored ({unit['share_outside']:.3%}): "
        f"{unit['above']:,} above, {unit['below']:,} below"
    ]
    if unit["runs"]:
        runs, longest = unit["runs"], unit["longest_run"]
        lines[0] += f"; {_counted(runs, 'run')}, the longest of {_counted(longest, 'row')}"
    error = unit["mean_residual_std_error"]
    give = "too few rows for its error" if error is None else f"give or take {error:.3g}"
    lines.append(f"{indent}mean residual {unit['mean_residual']:.4g} ({give})")
    return lines


def _counted(number: int, what: str) -> str:
    return f"{number:,} {what}" + ("" if number == 1 else "s")


def _fleet_lines(scored: Scored, units: list[dict[str, Any]]) -> list[str]:
    met = [unit for unit in units if unit["rows"]]
    flagged = [unit for unit in met if unit["outside"]]
    silent = len(units) - len(met)
    lines = [
        f"units      {len(met):,} of {len(units):,} met"
        + (f", {silent:,} without a row" if silent else "")
        + f"; {len(flagged):,} with rows outside"
    ]
    # The worst first; equal ones in their own order.
    flagged.sort(key=lambda unit: -unit["share_outside"])
    columns = scored.units.column_names[: len(scored.by)]
    for unit in flagged[:_MOST_UNITS]:
        name = short_name(unit_name(tuple(unit[one] for one in columns)), _LONGEST_NAME)
        lines += _unit_lines(unit, f"outside    {name}: ", "           ")
    if len(flagged) > _MOST_UNITS:
        lines.append(f"           and {len(flagged) - _MOST_UNITS:,} units more (--json has all)")
    if scored.unknown:
        most = sorted(scored.unknown.items(), key=lambda item: -item[1])
        told = "; ".join(
            f"{short_name(unit_name(key), _LONGEST_NAME)}: {_counted(rows, 'row')}"
            for key, rows in most[:_MOST_UNKNOWN]
        )
        more = len(most) - _MOST_UNKNOWN
        lines.append(f"unknown    {told}" + (f"; and {more:,} units more" if more > 0 else ""))
    return lines
