"""Rows scored against a curve's own limits."""

import numpy as np
import pytest

from fastsmooth import Band, Smoothing, make_curve, score_rows


def rows(n, seed):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 25.0, n)
    # Skewed noise: limits are not symmetric about the mean.
    return {"x": x, "y": 20.0 + x + rng.exponential(1.0 + 0.05 * x)}


@pytest.fixture(scope="module")
def curve():
    return make_curve(
        rows(80_000, 1), "x", "y", smoothing=Smoothing(engine="binned", bandwidth=3.0),
        band=Band(limits=(0.1, 0.5, 0.95)),
    )  # fmt: skip


def test_rows_are_judged_by_the_curves_own_limits(curve):
    new = rows(20_000, 2)
    told = score_rows(new, curve)
    status = np.array(told.table["status"].to_pylist())
    assert np.mean(status == "above") == pytest.approx(0.05, abs=0.006)
    assert np.mean(status == "below") == pytest.approx(0.1, abs=0.01)
    # On straight lines between points, in residual standard deviations.
    limits = (curve.limits.values - curve.estimate) / curve.residual_sd
    z = told.table["z"].to_numpy(zero_copy_only=False)
    low, high = (np.interp(new["x"], curve.x, limits[row]) for row in (0, 2))
    judged = np.isin(status, ("inside", "above", "below"))
    expected = np.where(z > high, "above", np.where(z < low, "below", "inside"))
    clear = judged & (np.abs(z - high) > 1e-9) & (np.abs(z - low) > 1e-9)
    assert judged.mean() > 0.95
    assert (status == expected)[clear].all()
    assert told.trace["settings"]["limits"] == (0.1, 0.95)
    assert told.trace["settings"]["z_limit"] is None
    assert any("the curves' own: 10 % of rows below, 5 % above" in one for one in told.lines())


def test_a_limit_of_ones_own_goes_before(curve):
    told = score_rows(rows(5000, 3), curve, z_limit=4.0)
    assert told.trace["settings"]["z_limit"] == 4.0
    assert told.trace["settings"]["limits"] is None


def test_where_the_limits_are_not_known_rows_are_thin():
    small = rows(3000, 4)
    made = make_curve(
        small, "x", "y", smoothing=Smoothing(bandwidth=3.0), band=Band(limits=(0.0001, 0.9999))
    )
    assert np.isnan(made.limits.values).all()
    told = score_rows(small, made)
    assert set(told.table["status"].to_pylist()) <= {"thin"}


def test_one_limit_alone_is_no_pair():
    made = make_curve(
        rows(3000, 5), "x", "y", smoothing=Smoothing(bandwidth=3.0), band=Band(limits=(0.9,))
    )
    told = score_rows(rows(100, 6), made)
    assert told.trace["settings"]["z_limit"] == pytest.approx(3.29, abs=0.01)
