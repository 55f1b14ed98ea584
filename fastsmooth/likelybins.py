"""How many bins the curves of many units will ask for, guessed from a sample before the pass.

A guess costs a few milliseconds; bins that turn out too coarse cost a second pass, and bins that
are too fine slow down the pass and every search. Nothing in a result rests on the guess: each
unit's width is chosen on its own bins, and units whose width asks for finer ones are counted again.
"""

from __future__ import annotations

import math
from dataclasses import replace
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.errors import InputError
from fastsmooth.plan import Plan, Sample
from fastsmooth.search import search_table

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

_BINS = 1024
_WIDTHS = 16
_FEWEST_ROWS = 1000
_MARGIN = 1.1
_LEAST, _MOST = 128, 1 << 30


def likely_bins(
    sample: Sample,
    code: NDArray[np.int64],
    plan: Plan,
    shape: Shape,
    estimator: str,
    rows_per_unit: float,
) -> int | None:
    """Return how many bins a typical unit's width will ask for.

    The widths that leave-one-out allows on the sample, each unit's mean taken off, are carried over
    to the rows of one unit by the rate n^(-1/5) (Wand & Jones 1995, section 5.8).

    Parameters
    ----------
    sample : Sample
        Usable rows of all units, x on the plan's scale.
    code : (rows,) int64
        Unit of each.
    plan : Plan
        For the range and the scale of all units.
    shape : Shape
        Kernel function.
    estimator : str
        ``local-linear`` or ``local-constant``.
    rows_per_unit : float
        Expected rows of a unit.

    Returns
    -------
    int or None
        None where the sample does not tell.
    """
    if sample.x.size < _FEWEST_ROWS:
        return None
    counts = np.bincount(code)
    with np.errstate(invalid="ignore", divide="ignore", over="ignore"):
        away = sample.y - (np.bincount(code, sample.y) / counts)[code]
    low, high = plan.origin, plan.high
    trial = replace(
        Plan.simple(low, high, _BINS, 2), columns=replace(plan.columns, weight=None, count=None)
    )
    table = BinTable(trial)
    half = sample.x.size // 2
    table.add_rows(0, sample.x[:half], away[:half])
    table.add_rows(1, sample.x[half:], away[half:])
    try:
        found = search_table(table, Pyramid(table), shape, widths=_WIDTHS)
    except InputError:
        return None
    # The narrow end of what would do as well: units differ, and a pass too many costs more than
    # finer bins.
    width = found.trails[estimator].flat_zone[0] * (rows_per_unit / sample.x.size) ** -0.2
    return bins_for_width(width, low, high, shape)


def bins_for_width(width: float, low: float, high: float, shape: Shape) -> int:
    """Return how many bins over a range let a width span enough of them.

    Quarters of an octave, so that bins can be merged two into one several times.
    """
    wanted = _MARGIN * shape.fewest_bins_per_bandwidth * (high - low) / width
    if not wanted < _MOST:
        # Such a width is refused once the range is known.
        return _MOST
    step = max(_LEAST, 1 << math.ceil(math.log2(max(wanted, 1.0)))) // 8
    return step * max(4, math.ceil(wanted / step))
