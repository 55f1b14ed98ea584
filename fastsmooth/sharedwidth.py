"""One width for all units, chosen jointly."""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Pyramid
from fastsmooth.errors import InputError
from fastsmooth.grouping import Key
from fastsmooth.search import narrowest_width, search_table
from fastsmooth.unitjob import Job, Tables, spread

Floats = NDArray[np.float64]

# The common width must be one at which units with this share of the rows can be judged.
_SHARE_JUDGED = 0.95
_COARSEST_BINS_PER_BANDWIDTH = 8


def shared_width(job: Job, tables: Tables, keys: Sequence[Key]) -> dict[str, Any]:
    """Choose one width for all units by the criterion summed over them.

    The sum runs over units of rows times criterion over the unit's own lowest value: every unit's
    loss counts in units of its own noise, so that noisy meters do not decide for all. (AICc is a
    log-likelihood already: rows times its value.) Between the widths of the grid the lowest point
    of a parabola through three neighbours in log h is taken. With the plug-in rule, which has no
    sum over rows, it is the mean of the logarithms of the units' widths, weighted by rows.
    """
    low, high, judges = _common_interval(tables, keys)
    estimator, criterion = job.smoothing.estimator, job.criterion

    def judge(key: Key) -> tuple[float, Floats, Floats, float] | None:
        table = tables.table(key)
        try:
            found = search_table(
                table, Pyramid(table), job.shape, criterion=criterion,
                by_block=job.reading.block is not None, widths=job.smoothing.widths,
                bounds=(low, high),
            )  # fmt: skip
        except InputError:
            return None  # too few rows to judge; the unit's own search tells
        trail = found.trails[estimator]
        return float(table.tally.used), trail.bandwidths, trail.values(criterion), trail.bandwidth

    told = [one for one in spread(judge, judges, job.reading.threads) if one is not None]
    if not told:
        raise InputError(
            "--shared-bandwidth", "find a unit with rows enough to judge a width",
            f"none of {len(keys):,} has", "give --bandwidth",
        )  # fmt: skip
    rows = np.array([one[0] for one in told])
    grid = told[0][1]
    loss = np.zeros(grid.shape[0])
    for own, (_, _, values, _) in zip(rows, told, strict=True):
        loss += own * _relative(values, criterion)
    loss /= rows.sum()
    if criterion == "plug-in":
        bandwidth = math.exp(float(rows @ np.log([one[3] for one in told])) / float(rows.sum()))
    else:
        bandwidth = lowest_width(grid, loss)
    log = job.reading.scale == "log"
    return {
        "bandwidth": math.exp(bandwidth) if log else bandwidth,
        "bandwidth_on_scale": bandwidth, "criterion": criterion,
        "widths": (np.exp(grid) if log else grid).tolist(),
        "relative_loss": [one if math.isfinite(one) else None for one in loss.tolist()],
        "units_judging": len(told), "rows_judging": int(rows.sum()),
    }  # fmt: skip


def _common_interval(tables: Tables, keys: Sequence[Key]) -> tuple[float, float, list[Key]]:
    """The widths to compare, and the units that can judge all of them."""
    narrow, rows, high = np.full(len(keys), np.inf), np.zeros(len(keys)), 0.0
    for place, key in enumerate(keys):
        table = tables.table(key)
        try:
            own = narrowest_width(table)
        except InputError:
            continue  # too few distinct x to judge any width; the unit's own search tells
        narrow[place] = max(own, _COARSEST_BINS_PER_BANDWIDTH * table.plan.width)
        rows[place] = table.tally.used
        high = max(high, float(table.extent[1] - table.extent[0]))
    if not rows.any():
        raise _nobody_judges(keys)
    order = np.argsort(narrow, kind="stable")
    share = np.cumsum(rows[order]) / rows.sum()
    low = float(narrow[order[int(np.argmax(share >= _SHARE_JUDGED * (1.0 - 1e-12)))]])
    judges = [key for place, key in enumerate(keys) if narrow[place] <= low]
    return low, max(high, 2.0 * low), judges


def _nobody_judges(keys: Sequence[Key]) -> InputError:
    return InputError(
        "--shared-bandwidth", "find a unit with rows enough to judge a width",
        f"none of {len(keys)} has", "give --bandwidth",
    )  # fmt: skip


def _relative(values: Floats, criterion: str) -> Floats:
    if criterion == "aicc":
        return values
    best = float(values.min())
    # A unit without noise has nothing to weigh its loss by.
    return values / best if 0.0 < best < math.inf else np.where(values > best, math.inf, 1.0)


def lowest_width(grid: Floats, loss: Floats) -> float:
    """The width of the lowest loss, refined between grid points by a parabola in log h."""
    if not np.isfinite(loss).any():
        raise InputError(
            "--shared-bandwidth", "find a width at which all units can be judged",
            "there is none", "leave it out, or give --bandwidth",
        )  # fmt: skip
    place = int(np.flatnonzero(loss == loss.min())[-1])
    logs = np.log(grid)
    around = slice(place - 1, place + 2)
    if not 0 < place < grid.shape[0] - 1 or not np.isfinite(loss[around]).all():
        return float(grid[place])
    left, middle, right = loss[around].tolist()
    bend = left - 2.0 * middle + right
    step = 0.5 * (left - right) / bend if bend > 0.0 else 0.0
    return math.exp(float(logs[place]) + step * float(logs[1] - logs[0]))
