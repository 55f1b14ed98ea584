"""A result in a few lines for people, and as plain data for programs."""

from __future__ import annotations

import math
from typing import TYPE_CHECKING, Any

import numpy as np

from fastsmooth.curve import STATUSES, Curve
from fastsmooth.fitness import DEFINITIONS
from fastsmooth.robust import worst_stretches
from fastsmooth.trail import Search, Trail

if TYPE_CHECKING:
    from collections.abc import Callable

PRUDENCE = (
    "A mean curve is not a protection limit: where it could lead to harm, local codes and "
    "licensed practice decide."
)


def curve_lines(made: Curve) -> list[str]:
    """Return what a person should read first about a curve, one fact a line."""
    settings, engine = made.settings, made.trace["engine"]
    lines = [f"{settings['y']} against {settings['x']}", *row_lines(made.trace)]
    if settings["block"] is not None:
        lines.append(_block_line(made))
    lines += _width_lines(made)
    lines.append(
        f"band       {_band_words(made)}; rows scatter around "
        f"the curve by {engine['residual_sd']:.4g} (residual sd"
        + (" of a row of weight 1)" if settings["weight"] is not None else ")")
    )
    lines.append(_fit_line(made))
    lines += _robust_lines(made)
    lines += _limit_lines(made)
    lines += _landmark_lines(made)
    counts = ", ".join(f"{n:,} {name}" for name, n in status_counts(made).items() if n)
    ends = f"{made.axis.label(float(made.x[0]))} to {made.axis.label(float(made.x[-1]))}"
    lines.append(f"points     {made.x.shape[0]:,} from {ends}: {counts}")
    lines.append(_engine_line(engine))
    lines += [f"caution    {caution.text}" for caution in made.cautions]
    return lines


def search_lines(made: Curve) -> list[str]:
    """Return the search as a table for people."""
    found = made.search
    names = list(found.trails)
    lines = [f"{made.settings['y']} against {made.settings['x']}", *row_lines(made.trace)]
    shown = "" if found.criterion != "plug-in" else "; the table shows leave-one-out"
    kernel = "" if made.by_neighbours else f", kernel {found.kernel}"
    lines.append(f"criterion  {found.criterion}{kernel}{shown}")
    lines.append("")
    lines.append(f"{made.width_word:>22}" + "".join(f"{name:>18}" for name in names))
    grid = found.trails[names[0]].bandwidths
    best = {name: int(np.argmin(found.trails[name].values(found.criterion))) for name in names}
    for place, width in enumerate(grid.tolist()):
        cells = ""
        for name in names:
            value = float(found.trails[name].values(found.criterion)[place])
            mark = "<" if place == best[name] else " "
            text = "none" if not math.isfinite(value) else f"{value:.6g}"
            cells += f"{text:>17}{mark}"
        lines.append(f"{made.width_label(width):>22}{cells}")
    lines.append("")
    for name in names:
        trail = found.trails[name]
        low, high = trail.flat_zone
        lines.append(
            f"{name:<16} chooses {made.width_label(trail.bandwidth)}; within one standard error: "
            f"{made.width_label(low)} to {made.width_label(high)}"
        )
    lines += [f"caution    {caution.text}" for caution in made.cautions]
    return lines


def curve_facts(made: Curve) -> dict[str, Any]:
    """Return what `curve_lines` tells as plain data for JSON."""
    trail = made.search.trails[made.settings["estimator"]]
    return {
        "settings": made.settings,
        "rows": made.trace["rows"],
        "blocks": made.trace["blocks"],
        "folds_with_rows": made.trace.get("folds_with_rows"),
        "files": len(made.trace["files"]),
        "bandwidth": made.bandwidth,
        "chosen_by": "caller" if made.width_given else made.search.criterion,
        "flat_zone": list(trail.flat_zone),
        "search": search_facts(made.search),
        "points": status_counts(made),
        "engine": made.trace["engine"],
        "fit": made.trace["fit"],
        "robust": made.trace.get("robust"),
        "fit_definitions": DEFINITIONS,
        "landmarks": made.trace["landmarks"],
        "landmark_stretches": made.trace.get("landmark_stretches"),
        "limits": None
        if made.limits is None
        else {
            "levels": list(made.limits.levels),
            "coverage": list(made.limits.coverage),
            "rows_judged": made.limits.rows_judged,
        },
        "serial_correlation": made.trace["serial"],
        "cautions": [caution._asdict() for caution in made.cautions],
    }


def search_facts(found: Search) -> dict[str, Any]:
    """Return choices, scores and flat zones per estimator as plain data for JSON."""

    def facts(trail: Trail) -> dict[str, Any]:
        return {
            "bandwidth": trail.bandwidth,
            "leave_one_out": trail.score if math.isfinite(trail.score) else None,
            "equivalent_parameters": trail.trace,
            "flat_zone": list(trail.flat_zone),
            "minima": trail.minima,
        }

    return {name: facts(trail) for name, trail in found.trails.items()}


def status_counts(made: Curve) -> dict[str, int]:
    """Return how many points have each status."""
    counts = np.bincount(made.status, minlength=len(STATUSES)).tolist()
    return dict(zip(STATUSES, counts, strict=True))


def _fit_line(made: Curve) -> str:
    fit = made.trace["fit"]

    def percent(name: str) -> str:
        # Adding zero turns a negative one into a plain one.
        return "none" if fit[name] is None else f"{round(100 * fit[name], 6) + 0.0:.3g} %"

    r2 = "none" if fit["r2_left_out"] is None else f"{fit['r2_left_out']:.4g}"
    return (
        f"fit        R2 {r2} on left-out rows, CV(RMSE) {percent('cv_rmse')}, "
        f"NMBE {percent('nmbe')}"
        + ("; rows far off weigh less in these, too" if _is_reweighted(made) else "")
    )


def _is_reweighted(made: Curve) -> bool:
    facts = made.trace.get("robust")
    return facts is not None and bool(facts["rounds"])


def _limit_lines(made: Curve) -> list[str]:
    limits = made.limits
    if limits is None:
        return []
    told = ", ".join(f"{100 * level:g} %" for level in limits.levels)
    # Limits go with the scatter: those of rows of weight 4 lie half as far from the curve.
    whose = (
        "; the values are for rows of weight 1 and lie 1/sqrt(w) times as far from the curve for "
        "rows of weight w"
        if made.settings["weight"] is not None
        else ""
    )
    empty = [
        f"{100 * level:g} %"
        for level, values in zip(limits.levels, limits.values, strict=True)
        if not np.isfinite(values).any()
    ]
    if empty:
        whose += f"; none at {', '.join(empty)}, for too few rows lie beyond"
    if not limits.rows_judged:
        return [f"limits     {told}{whose}"]
    found = ", ".join(f"{100 * share:.3g} %" for share in limits.coverage)
    return [
        f"limits     {told} of rows below; of {limits.rows_judged:,} rows held against limits made "
        f"without them {found}{whose}"
    ]


def _robust_lines(made: Curve) -> list[str]:
    facts = made.trace.get("robust")
    if facts is None:
        return []
    if not facts["rounds"]:
        return [f"robust     every row has its full weight: {facts['reason']}"]
    judged = max(facts["rows_judged"], 1)
    text = (
        f"robust     {facts['rows_down_weighted']:,} rows "
        f"({facts['rows_down_weighted'] / judged:.2%}) count less than half, "
        f"{facts['rows_ignored']:,} of them not at all"
    )
    label = made.axis.label
    worst = [
        f"{label(one['low'])} to {label(one['high'])} ({one['down_weighted'] / one['rows']:.0%})"
        for one in worst_stretches(facts)
    ]
    if worst:
        text += "; most in " + ", ".join(worst)
    rounds = facts["rounds"]
    text += f"; {rounds} round{'s' if rounds > 1 else ''} of weights, the last moved the curve by "
    return [text + f"{facts['last_move_in_sd']:.2g} residual sd"]


def _block_line(made: Curve) -> str:
    settings, held = made.settings, made.trace.get("folds_with_rows")
    of = "" if held in (None, settings["folds"]) else f"{held} of "
    text = f"blocks     {made.trace['blocks']:,} by {settings['block']}, dealt to {of}"
    text += f"{settings['folds']} folds"
    by_fold = made.search.criterion == "leave-block-out" and not made.width_given
    if not _has_band(made):
        return text + ("; the width rests on leaving out folds" if by_fold else "")
    rests = "width and band rest" if by_fold else "the band rests"
    return f"{text}; {rests} on leaving out folds"


def _has_band(made: Curve) -> bool:
    return bool((np.isfinite(made.lower) & np.isfinite(made.upper)).any())


def _band_words(made: Curve) -> str:
    settings = made.settings
    if _has_band(made):
        kind = "local quadratic centre" if settings["bias"] == "corrected" else "bias ignored"
        return f"{settings['band']} {100 * settings['level']:g} %, {kind}"
    if not np.isfinite(made.estimate).any():
        return "none, because no point has rows near enough"
    if made.errors_by_fold:
        return "none, because no window meets enough folds to tell how much they differ"
    return "none, because no window holds enough places to tell its error"


def _landmark_lines(made: Curve) -> list[str]:
    if made.trace.get("landmark_stretches") == []:
        return ["landmark   none, because no point is supported: all are thin or outside"]
    return [_landmark_line(made, mark) for mark in made.trace["landmarks"] or []]


def _landmark_line(made: Curve, mark: dict[str, Any]) -> str:
    label = made.axis.label
    words = {
        "steepest": "steepest at",
        "lowest": "turns (lowest) at",
        "highest": "turns (highest) at",
        "crossing": f"crosses {mark['value']:g} at",
    }
    if made.scale == "log":
        words["steepest"] = "steepest (per factor of x) at"
    if mark["x"] is None:
        return f"landmark   {mark['value']:g} is not reached on any supported stretch"
    text = f"landmark   {words[mark['kind']]} {label(mark['x'])}"
    if mark["lower"] is None or mark["upper"] is None:
        return text + " (no interval: some folds decide whether it is there)"
    level = 100 * made.settings["level"]
    return text + f" ({level:g} % interval {label(mark['lower'])} to {label(mark['upper'])})"


def row_lines(trace: dict[str, Any]) -> list[str]:
    """Return what became of the rows that a result was made from."""
    rows = trace["rows"]
    stored = trace.get("store")
    files = len(trace["files"]) if stored is None else stored["files"]
    text = f"rows       {rows['used']:,} used of {rows['read']:,} read"
    if files:
        text += f" from {files:,} file{'s' if files > 1 else ''}"
    if stored is not None:
        text += " in a store"
    if stored is not None and stored["periods"]:
        text += ", " + " to ".join(dict.fromkeys(stored["periods"]))
    if rows["filtered"]:
        text += f"; {rows['filtered']:,} filtered by --where"
    lines = [text]
    if rows["refused"]:
        counts = ", ".join(f"{n:,} {reason}" for reason, n in rows["refused"].items())
        lines.append(f"refused    {counts}")
    return lines


def _width_lines(made: Curve) -> list[str]:
    settings = made.settings
    label: Callable[[float], str] = made.width_label
    mine = made.search.trails[settings["estimator"]]
    by = "given" if made.width_given else f"chosen by {made.search.criterion}"
    low, high = mine.flat_zone
    lines = [
        f"bandwidth  {label(made.bandwidth)} {by}; {settings['estimator']}, "
        f"{settings['kernel']} kernel"
        + (" (its standard deviation)" if settings["kernel"] == "gaussian" else "")
    ]
    if made.by_neighbours:
        lines = [f"width      the nearest {label(made.bandwidth)}, {by}; their mean"]
    if made.width_given:
        lines.append(f"           {made.search.criterion} would choose {label(mine.bandwidth)}")
    judges = ""
    if made.few_rows_vote:
        judges = f", by the {made.rows_counted - made.search.rows_alone:,.0f} rows that could judge"
    lines.append(f"           {label(low)} to {label(high)} would do as well (flat zone){judges}")
    by_row = mine.leave_one_out_bandwidth
    ratio = by_row / mine.bandwidth
    if made.widths_are_factors:
        ratio = math.log(by_row) / math.log(mine.bandwidth)
    alike = 0.95 < ratio < 1.05
    if made.search.criterion == "leave-block-out" and not alike:
        lines.append(
            f"           leave-one-out would choose {label(by_row)}: rows of one block resemble "
            f"each other, so it takes their common wander for signal"
            if by_row < low and not made.few_rows_vote
            else f"           leave-one-out would choose {label(by_row)}"
        )
    for other_name, other in made.search.trails.items():
        if other is mine or not (mine.score > 0.0 and math.isfinite(other.score)):
            continue
        away = other.score / mine.score - 1.0
        size = "about the same" if abs(away) < 5e-5 else f"{abs(away):.2%} "
        size += "" if abs(away) < 5e-5 else "larger" if away > 0.0 else "smaller"
        lines.append(
            f"           {other_name} would choose {label(other.bandwidth)}; its mean squared "
            f"prediction error is {size}"
        )
    return lines


def _engine_line(engine: dict[str, Any]) -> str:
    if engine["name"] == "exact":
        return f"engine     exact, sums over every row ({engine['reason']})"
    return (
        f"engine     binned, {engine['bins']:,} bins, {engine['bins_per_bandwidth']:.3g} to a "
        f"bandwidth, {_times(engine['passes'])} over the data"
        + _error_words(engine["error_in_noise_sd"])
    )


def _times(passes: int) -> str:
    return "one pass" if passes == 1 else f"{passes} passes"


def _error_words(error: float | None) -> str:
    if error is None:
        return ""
    if error < 1e-12:
        return "; no binning error"
    return f"; binning error about {error:.1g} residual sd"
