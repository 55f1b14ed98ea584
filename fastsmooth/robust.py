"""Curves that shrug off gross outliers: rows far from the curve weigh less, in further passes.

Iterated bisquare weights (Cleveland 1979, J. Am. Stat. Assoc. 74:829), with three differences that
streams ask for. The first weights come from running medians of a sample, which half of the rows
cannot spoil, in place of a fit that one outlier can. Residuals are measured in their own local
scale, so that noise which changes along x is no outlier. And the scale is that of the sample's
rows, so that a round costs one pass.
"""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.curve import OK
from fastsmooth.lookup import CurvePoints
from fastsmooth.reweighted import MEDIAN_TO_SD, STRETCHES

if TYPE_CHECKING:
    from fastsmooth.plan import Sample

Floats = NDArray[np.float64]

ROUNDS = 3
# A round that moves the curve by less than this many standard deviations of a row is the last.
ENOUGH = 0.02
POINTS = 256
# Windows of running medians hold this share of the sample, within these numbers of rows.
_SHARE_OF_SAMPLE = 1.0 / 20.0
_FEWEST_ROWS, _MOST_ROWS = 25, 2000
# A stuck sensor's stretch has no scatter at all; it must not make all others outliers.
_LEAST_OF_TYPICAL = 0.05
_TOLD_STRETCHES = 3
# The facts of rows that could not be weighed.
NOT_WEIGHED = {"rounds": 0, "reason": "half of the rows lie on the curve"}


@dataclass(frozen=True)
class Core:
    """Where most rows lie.

    Attributes
    ----------
    x : (k,) float64
        Places, ascending, on the plan's scale.
    value : (k,) float64
        Their middle.
    sd : (k,) float64
        Their scatter: 1.4826 times the median absolute residual, a standard deviation if normal.
    """

    x: Floats
    value: Floats
    sd: Floats

    def sd_at(self, x: Floats) -> Floats:
        """Return the scatter at other places."""
        return np.interp(x, self.x, self.sd)

    def points(self, log: bool) -> CurvePoints:
        """Return what rows are held against."""
        x = np.exp(self.x) if log else self.x
        return CurvePoints(x, self.value, self.sd, np.full(x.shape[0], OK))


def core_of(sample: Sample, places: Floats, curve: Floats | None = None) -> Core | None:
    """Find where most rows of a sample lie.

    Parameters
    ----------
    sample : Sample
        Rows, x on the plan's scale.
    places : (k,) float64
        Ascending, on the plan's scale.
    curve : (k,) float64 or None
        The middle, if it is known; NaN where it is not. None takes running medians.

    Returns
    -------
    Core or None
        None where there is no scatter to measure by: half of the rows lie on the curve, or there
        are fewer than four.
    """
    order = np.argsort(sample.x, kind="stable")
    x, y = sample.x[order], sample.y[order]
    if x.size < 4:
        return None
    rows = int(np.clip(x.size * _SHARE_OF_SAMPLE, _FEWEST_ROWS, _MOST_ROWS))
    middle = running_medians(places, x, y, rows)
    if curve is not None:
        middle = np.where(np.isfinite(curve), curve, middle)
    away = np.abs(y - np.interp(x, places, middle))
    sd = MEDIAN_TO_SD * running_medians(places, x, away, rows)
    typical = MEDIAN_TO_SD * float(np.median(away))
    if not typical > 0.0:
        return None
    return Core(places, middle, np.maximum(sd, _LEAST_OF_TYPICAL * typical))


def running_medians(places: Floats, x: Floats, values: Floats, rows: int) -> Floats:
    """Return the median of the values of the rows nearest in rank to each place.

    Parameters
    ----------
    places : (k,) float64
        Where.
    x : (n,) float64
        Ascending, n > 0.
    values : (n,) float64
        Of each row.
    rows : int
        In a window; fewer if there are not so many.
    """
    n = x.shape[0]
    rows = min(rows, n)
    first = np.clip(np.searchsorted(x, places) - rows // 2, 0, n - rows)
    windows = np.lib.stride_tricks.sliding_window_view(values, rows)
    return np.asarray(np.median(windows[first], axis=1))


def farthest_move(before: Core, after: Core) -> float:
    """Return the largest distance between two middles, in standard deviations of a row."""
    return float(np.max(np.abs(after.value - before.value) / after.sd))


def robust_facts(
    core: Core, counts: tuple[NDArray[np.int64], ...], rounds: int, moved: float
) -> dict[str, Any]:
    """Return what the weights did, as plain data.

    Parameters
    ----------
    core : Core
        Of the last round.
    counts : three of (STRETCHES,) int64
        Rows, rows that count less than half, rows that do not count, by stretch of x.
    rounds : int
        Passes with weights.
    moved : float
        How far the last one moved the curve, in standard deviations of a row.
    """
    rows, down, ignored = counts
    edges = np.linspace(core.x[0], core.x[-1], STRETCHES + 1)
    where = [
        {"low": float(low), "high": float(high), "rows": seen, "down_weighted": fewer}
        for low, high, seen, fewer in zip(
            edges[:-1], edges[1:], rows.tolist(), down.tolist(), strict=True
        )
    ]
    return {
        "rounds": rounds, "last_move_in_sd": moved, "rows_judged": int(rows.sum()),
        "rows_down_weighted": int(down.sum()), "rows_ignored": int(ignored.sum()), "where": where,
    }  # fmt: skip


def worst_stretches(facts: dict[str, Any]) -> Iterator[dict[str, Any]]:
    """Yield the stretches where more rows are far from the curve than twice the usual share."""
    judged = facts["rows_judged"]
    usual = facts["rows_down_weighted"] / judged if judged else 0.0
    far = [one for one in facts["where"] if one["down_weighted"] > 2.0 * usual * one["rows"] > 0.0]
    yield from sorted(far, key=lambda one: -one["down_weighted"])[:_TOLD_STRETCHES]
