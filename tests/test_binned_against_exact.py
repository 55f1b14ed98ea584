"""The binned criterion against the exact one, at a size that plain loops cannot reach."""

import numpy as np
import pytest
from fastsmooth.kernels import windows
from fastsmooth.kernels.shapes import SHAPES

from fastsmooth import Reading, Smoothing, search_bandwidth
from tests import cases

NONE, NO_MASK = np.empty(0), np.empty(0, bool)


@pytest.mark.parametrize("design", ["clustered", "uniform", "lattice"])
def test_the_binned_criterion_is_the_exact_one(design):
    """200,000 rows, widths over three decades: what the bins say against every row."""
    made = cases.make_rows(design, 200_000, seed=1)
    order = np.argsort(made.wet_bulb_c, kind="stable")
    x, y = made.wet_bulb_c[order], made.power_kw[order]
    found = search_bandwidth(
        (x, y), "x", "y", reading=Reading(threads=1), smoothing=Smoothing(widths=12)
    )
    assert found.rows_alone == 0.0
    fine = 64 * (x[-1] - x[0]) / 8192
    coefficients = np.array(SHAPES["biweight"].coefficients)
    exact = np.zeros((2, 5))
    for place, h in enumerate(found.trails["local-linear"].bandwidths.tolist()):
        windows.score_windows(
            x, y - y.mean(), NONE, NONE, NO_MASK, coefficients, h, 0, x.size, exact
        )
        for row, name in ((0, "local-constant"), (1, "local-linear")):
            binned = found.trails[name].leave_one_out[place]
            # Thin windows, where one row decides much, are the worst of it. Narrower widths only
            # tell the search to make finer bins.
            assert binned == pytest.approx(exact[row, 0] / x.size, rel=2e-5 if h >= fine else 1e-4)
