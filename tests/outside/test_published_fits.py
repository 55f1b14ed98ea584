"""Local fits against other people's code and against reference values in 40 digits."""

import math
from pathlib import Path

import numpy as np
import pytest
import statsmodels.api as sm
from fastsmooth.kernels.shapes import SHAPES
from scipy.signal import savgol_coeffs
from sklearn.datasets import load_diabetes
from statsmodels.nonparametric.kernel_regression import KernelReg

from fastsmooth import Band, Smoothing, make_curve
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.plan import Plan
from fastsmooth.search import search_table

# Not drawn from here; without it statsmodels warns of a change of its default.
SEEDED = np.random.default_rng(0)
DEGREES = {"local-constant": 0, "local-linear": 1}


def curve(x, y, h, at, *, kernel, estimator="local-linear", bias="ignored"):
    return make_curve(
        (np.asarray(x, float), np.asarray(y, float)),
        "x",
        "y",
        smoothing=Smoothing(kernel=kernel, estimator=estimator, bandwidth=h, widths=8),
        band=Band(at=tuple(at), bias=bias, noise="constant", least_rows=0.0),
    )


def search(x, y, low, high, kernel, widths=8):
    x, y = np.asarray(x, float), np.asarray(y, float)
    table = BinTable(Plan.simple(float(x.min()), float(x.max()), folds=4))
    for fold in range(4):
        table.add_rows(fold, x[fold::4].copy(), y[fold::4].copy())
    return search_table(table, Pyramid(table), SHAPES[kernel], bounds=(low, high), widths=widths)


# Savitzky & Golay (1964, Anal. Chem. 36:1627): the local polynomial with the uniform kernel on an
# even grid, as scipy.signal.savgol_coeffs computes it. A window of 2 M + 1 points has h = M + 1/2.


@pytest.mark.parametrize("half", [2, 5, 12])
@pytest.mark.parametrize(("estimator", "degree"), DEGREES.items())
def test_even_grid_in_the_middle(half, estimator, degree):
    rng = np.random.default_rng(half)
    y = rng.normal(size=61)
    made = curve(np.arange(61.0), y, half + 0.5, [30.0], kernel="uniform", estimator=estimator)
    window = y[30 - half : 31 + half]
    weights = savgol_coeffs(2 * half + 1, degree, use="dot")
    assert made.estimate[0] == pytest.approx(float(weights @ window), abs=1e-8)
    assert made.effective_rows[0] == pytest.approx(1.0 / float(weights @ weights), rel=1e-7)
    if degree:
        slope = savgol_coeffs(2 * half + 1, 1, deriv=1, use="dot")
        assert made.slope[0] == pytest.approx(float(slope @ window), abs=1e-8)


@pytest.mark.parametrize("half", [3, 8])
def test_even_grid_at_the_end(half):
    """At the first point the window holds the half + 1 rows to its right."""
    rng = np.random.default_rng(half)
    y = rng.normal(size=61)
    made = curve(np.arange(61.0), y, half + 0.5, [0.0], kernel="uniform")
    length = half + 1 + (half % 2)
    if length == half + 1:
        weights = savgol_coeffs(length, 1, pos=0, use="dot")
    else:
        # The published form takes windows of odd length: one row more.
        made = curve(np.arange(61.0), y, half + 1.5, [0.0], kernel="uniform")
        weights = savgol_coeffs(length, 1, pos=0, use="dot")
    assert made.estimate[0] == pytest.approx(float(weights @ y[:length]), abs=1e-8)


@pytest.mark.parametrize("half", [4, 12])
def test_even_grid_corrected_band(half):
    """The corrected band's middle is the parabola of the same window."""
    rng = np.random.default_rng(half)
    y = rng.normal(size=61)
    made = curve(np.arange(61.0), y, half + 0.5, [30.0], kernel="uniform", bias="corrected")
    weights = savgol_coeffs(2 * half + 1, 2, use="dot")
    middle = (made.lower[0] + made.upper[0]) / 2.0
    assert middle == pytest.approx(float(weights @ y[30 - half : 31 + half]), abs=1e-7)
    share = made.std_error[0] / made.residual_sd[0]
    assert share == pytest.approx(math.sqrt(float(weights @ weights)), rel=1e-6)


# statsmodels' kernel regression, Gaussian kernel, standard deviation h.


def nile():
    data = sm.datasets.nile.load_pandas().data
    return data["year"].to_numpy(float), data["volume"].to_numpy(float)


def engel():
    data = sm.datasets.engel.load_pandas().data
    return data["income"].to_numpy(float), data["foodexp"].to_numpy(float)


def body_mass():
    """442 patients: progression of diabetes on body mass index (Efron et al. 2004)."""
    bunch = load_diabetes(scaled=False)
    return bunch.data[:, 2].copy(), bunch.target.copy()


DATA = {"nile": (nile, 6.0), "engel": (engel, 180.0), "body mass": (body_mass, 2.5)}


@pytest.mark.parametrize(("estimator", "code"), [("local-constant", "lc"), ("local-linear", "ll")])
@pytest.mark.parametrize("name", DATA)
def test_gaussian_fits_are_those_of_statsmodels(name, estimator, code):
    read, h = DATA[name]
    x, y = read()
    model = KernelReg(y, x[:, None], "c", reg_type=code, bw=[h], rng=SEEDED)
    places = np.quantile(x, [0.02, 0.2, 0.5, 0.8, 0.95])
    value, slope = model.fit(places[:, None])
    made = curve(x, y, h, places.tolist(), kernel="gaussian", estimator=estimator)
    noise = float(made.residual_sd[0])
    assert np.abs(made.estimate - value).max() < 1e-6 * noise
    if estimator == "local-linear":
        # Its derivative of the local constant is another (2 / n times the curve's).
        assert np.abs(made.slope - slope[:, 0]).max() * h < 1e-5 * noise


@pytest.mark.parametrize(("estimator", "code"), [("local-constant", "lc"), ("local-linear", "ll")])
@pytest.mark.parametrize("name", ["nile", "body mass"])
def test_leave_one_out_is_that_of_statsmodels(name, estimator, code):
    read, h = DATA[name]
    x, y = read()
    model = KernelReg(y, x[:, None], "c", reg_type=code, bw=[h], rng=SEEDED)
    expected = float(np.squeeze(model.cv_loo(np.array([h]), model.est[code])))
    found = search(x, y, h, 3.0 * h, "gaussian")
    assert found.rows_alone == 0.0
    assert found.trails[estimator].leave_one_out[0] == pytest.approx(expected, rel=3e-5)


# The motorcycle data of Silverman (1985, J. R. Stat. Soc. B 47:1), statsmodels' copy. Reference
# values: direct sums over all rows in 40-digit arithmetic, Epanechnikov kernel.


def motorcycle():
    path = Path(sm.__file__).parent / "gam/tests/results/motorcycle.csv"
    rows = np.genfromtxt(path, delimiter=",", skip_header=1)
    assert rows.shape == (133, 2)
    return rows[:, 0].copy(), rows[:, 1].copy()


@pytest.mark.parametrize(
    ("estimator", "h", "values", "trace", "leave_one_out", "gcv", "aicc"),
    [
        (
            "local-linear", 3.0, (-23.3257688704, -107.263675155, 27.1865299951, -4.35932215874),
            16.16073183, 577.245858572, 601.033024457, 7.43841527819,
        ),
        (
            "local-linear", 5.0, (-29.2497645655, -98.9138838535, 17.8167939233, -6.50351249455),
            10.11441913, 598.393979199, 625.991243604, 7.46502878738,
        ),
        (
            "local-constant", 3.0, (-34.3651745448, -104.047504425, 24.1202294056, -7.44200542005),
            14.08925849, 622.038903001, 657.203202206, 7.52217425327,
        ),
    ],
)  # fmt: skip
def test_motorcycle_reference_values(estimator, h, values, trace, leave_one_out, gcv, aicc):
    x, y = motorcycle()
    made = curve(x, y, h, [15.0, 20.0, 30.0, 50.0], kernel="epanechnikov", estimator=estimator)
    # All rows of a bin share one of the 94 times, so the sums are exact.
    assert made.estimate == pytest.approx(values, abs=2e-6)
    assert made.trace["fit"]["equivalent_parameters"] == pytest.approx(trace, rel=2e-4)
    trail = search(x, y, h, 20.0, "epanechnikov").trails[estimator]
    # Times differ by multiples of 0.2, so rows lie at the very kink of each other's window.
    assert trail.leave_one_out[0] == pytest.approx(leave_one_out, rel=3e-4)
    assert trail.gcv[0] == pytest.approx(gcv, rel=3e-4)
    assert trail.aicc[0] == pytest.approx(aicc, abs=3e-4)


def test_motorcycle_rows_without_neighbours():
    """At h = 2 one row has no other in its window, and one more has a single one."""
    x, y = motorcycle()
    assert search(x, y, 2.0, 20.0, "epanechnikov").rows_alone == 2.0
    assert search(x, y, 3.0, 20.0, "epanechnikov").rows_alone == 0.0


def test_engel_slope_is_least_squares_in_a_wide_window():
    """Engel's food expenditure: ordinary least squares of statsmodels is the limit."""
    x, y = engel()
    fitted = sm.OLS(y, sm.add_constant(x)).fit()
    made = curve(x, y, 1e9, [1000.0], kernel="uniform")
    assert made.slope[0] == pytest.approx(fitted.params[1], rel=1e-10)
    assert made.slope_std_error[0] == pytest.approx(fitted.bse[1], rel=1e-7)
    predicted = fitted.get_prediction([[1.0, 1000.0]])
    assert made.estimate[0] == pytest.approx(float(predicted.predicted_mean[0]), rel=1e-11)
    assert made.std_error[0] == pytest.approx(float(predicted.se_mean[0]), rel=1e-7)
    interval = predicted.conf_int()[0]
    assert [made.lower[0], made.upper[0]] == pytest.approx(interval.tolist(), rel=1e-8)
