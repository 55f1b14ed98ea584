"""Windows far wider than the data: the local line is the published straight line.

With the uniform kernel and h far beyond the range every row has the same weight, so that value,
slope, standard errors and residual deviation are those of ordinary least squares.
"""

from pathlib import Path

import numpy as np
import pytest
import scipy

from fastsmooth import Band, Smoothing, make_curve

WIDE = 1e6


def read_norris():
    """NIST StRD, linear regression, Norris: 36 rows y x from line 61 of scipy's copy."""
    path = Path(scipy.__file__).parent / "stats/tests/data/nist_linregress/Norris.dat"
    lines = path.read_text().splitlines()[60:]
    rows = np.array([[float(one) for one in line.split()] for line in lines if line.strip()])
    assert rows.shape == (36, 2)
    return rows[:, 1].copy(), rows[:, 0].copy()


# Joint Committee for Guides in Metrology, JCGM 100:2008 (GUM), table H.6: thermometer readings t
# and observed corrections b, in degrees Celsius.
GUM_T = [
    21.521, 22.012, 22.512, 23.003, 23.507, 23.999, 24.513, 25.002, 25.503, 26.010, 26.511,
]  # fmt: skip
GUM_B = [
    -0.171, -0.169, -0.166, -0.159, -0.164, -0.165, -0.156, -0.157, -0.159, -0.161, -0.160,
]  # fmt: skip


def line_of(x, y, at, estimator="local-linear"):
    return make_curve(
        (x, y),
        "x",
        "y",
        smoothing=Smoothing(kernel="uniform", estimator=estimator, bandwidth=WIDE, widths=8),
        band=Band(bias="ignored", noise="constant", at=tuple(at), least_rows=2.0),
    )


def test_norris():
    """Certified values: https://www.itl.nist.gov/div898/strd/lls/data/Norris.shtml."""
    intercept, slope = -0.262323073774029, 1.00211681802045
    intercept_sd, slope_sd = 0.232818234301152, 0.000429796848199937
    residual_sd = 0.884796396144373
    x, y = read_norris()
    places = [float(x.min()), 100.0, 500.0, float(x.max())]
    made = line_of(x, y, places)
    assert made.slope == pytest.approx(np.full(4, slope), rel=1e-11)
    assert made.estimate == pytest.approx([intercept + slope * at for at in places], rel=1e-11)
    assert made.residual_sd == pytest.approx(np.full(4, residual_sd), rel=1e-9)
    # u^2(a + b x) = u^2(b) (x - middle)^2 + s^2 / n, with u(b) and s certified.
    middle = float(x.mean())
    expected = [np.sqrt(slope_sd**2 * (at - middle) ** 2 + residual_sd**2 / 36.0) for at in places]
    assert made.std_error == pytest.approx(expected, rel=1e-8)
    at_nought = np.sqrt(slope_sd**2 * middle**2 + residual_sd**2 / 36.0)
    assert at_nought == pytest.approx(intercept_sd, rel=1e-9)
    assert made.slope_std_error == pytest.approx(np.full(4, slope_sd), rel=1e-8)
    assert made.effective_rows[1] < 36.0
    assert made.trace["fit"]["equivalent_parameters"] == pytest.approx(2.0, rel=1e-9)


def test_gum_thermometer_calibration():
    """JCGM 100:2008, H.3.3: line in t - 20, printed to the digits that are compared here."""
    t, b = np.array(GUM_T), np.array(GUM_B)
    places = [21.521, 24.0, 26.511]
    made = line_of(t, b, places)
    slope = float(made.slope[0])
    intercept = float(made.estimate[0]) - slope * (places[0] - 20.0)
    assert round(intercept, 4) == -0.1712
    assert round(slope, 5) == 0.00218
    assert round(float(made.residual_sd[0]), 4) == 0.0035
    assert round(float(made.slope_std_error[0]), 5) == 0.00067
    # Standard errors within the data and the published u(y1), u(y2), r tell of one line:
    # u^2(t) = u1^2 + (t - 20)^2 u2^2 + 2 (t - 20) r u1 u2, with u1 = 0.0029, r = -0.930.
    u1, u2, r = 0.0029, 0.00067, -0.930
    for at, error in zip(places, made.std_error, strict=True):
        d = at - 20.0
        assert error == pytest.approx(np.sqrt(u1**2 + d**2 * u2**2 + 2 * d * r * u1 * u2), rel=0.12)
    # The reading at 30 degrees, outside the data: -0.1494 with u = 0.0041, by the line itself.
    assert round(intercept + 10.0 * slope, 4) == -0.1494
    middle = float(t.mean())
    spread = float(made.residual_sd[0]) ** 2 / t.size
    at_30 = np.sqrt((30.0 - middle) ** 2 * float(made.slope_std_error[0]) ** 2 + spread)
    assert round(float(at_30), 4) == 0.0041


def test_nothing_is_said_outside_the_calibrated_range():
    made = line_of(np.array(GUM_T), np.array(GUM_B), [20.0, 30.0])
    assert made.statuses == ["outside", "outside"]
    assert np.isnan(made.estimate).all()


def test_the_constant_is_the_mean():
    """NIST StRD NumAcc4-like readings: mean 10000000.2, standard deviation 0.1 exactly.

    https://www.itl.nist.gov/div898/strd/univ/data/NumAcc4.html: 10000000.2, then 10000000.1 and
    10000000.3 in turn, 1001 values.
    """
    y = np.array([10_000_000.2] + [10_000_000.1, 10_000_000.3] * 500)
    made = line_of(np.arange(1001.0), y, [500.0], estimator="local-constant")
    assert made.estimate[0] == pytest.approx(10_000_000.2, rel=1e-15)
    assert made.residual_sd[0] == pytest.approx(0.1, rel=1e-8)
    assert made.std_error[0] == pytest.approx(0.1 / np.sqrt(1001.0), rel=1e-8)
