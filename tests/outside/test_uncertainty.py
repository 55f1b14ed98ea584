"""Standard errors, autocorrelation and critical values against published figures and libraries."""

import csv
import math
from pathlib import Path

import numpy as np
import pytest
import statsmodels.api as sm
from fastsmooth.kernels import arcs
from fastsmooth.kernels.shapes import SHAPES
from scipy import optimize, stats

from fastsmooth import Band, Reading, Smoothing, make_curve
from fastsmooth.critical import pointwise_value, tail_for_all
from fastsmooth.serial import autocorrelation

# A uniform window that holds all rows wherever it stands: the local line is least squares.
ALL_ROWS = 1e3


def straight(x, y, at, *, estimator="local-linear", block=None, folds=32):
    data = {"x": x, "y": y} | ({} if block is None else {"block": block})
    return make_curve(
        data, "x", "y",
        reading=Reading(block=None if block is None else "block", folds=folds, threads=1),
        smoothing=Smoothing(estimator, "uniform", ALL_ROWS, widths=8),
        band=Band(at=tuple(at), bias="ignored", noise="constant", least_rows=0.0),
    )  # fmt: skip


# Cluster-robust errors of least squares.


def clusters(groups=32, rows=40, seed=1):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 10.0, groups * rows)
    group = np.arange(groups).repeat(rows)
    y = 1.0 + 0.3 * x + 0.5 * rng.normal(size=groups)[group] + rng.normal(size=x.size)
    return x, y, group


def test_equal_clusters_of_a_mean_have_the_error_of_the_sandwich():
    # For a mean of G equal clusters the jackknife is the sandwich times G / (G - 1), and that is
    # the small-sample factor G / (G - 1) (n - 1) / (n - 1) of the library's default.
    x, y, group = clusters()
    made = straight(x, y, [5.0], estimator="local-constant", block=group)
    fit = sm.OLS(y, np.ones(y.size)).fit(cov_type="cluster", cov_kwds={"groups": group})
    assert made.estimate[0] == pytest.approx(fit.params[0], rel=1e-9)
    assert made.std_error[0] == pytest.approx(fit.bse[0], rel=1e-6)


def test_a_line_refitted_without_each_cluster():
    x, y, group = clusters(seed=2)
    at = [0.5, 5.0, 9.5]
    made = straight(x, y, at, block=group)
    design, places = sm.add_constant(x), sm.add_constant(np.array(at))
    whole = places @ sm.OLS(y, design).fit().params
    squares = np.zeros(3)
    for one in range(32):
        kept = group != one
        squares += (places @ sm.OLS(y[kept], design[kept]).fit().params - whole) ** 2
    np.testing.assert_allclose(made.estimate, whole, rtol=1e-9)
    np.testing.assert_allclose(made.std_error, np.sqrt(31.0 / 32.0 * squares), rtol=1e-6)


def test_a_line_agrees_with_the_sandwich_up_to_small_sample_factors():
    # The sandwich S sums squares of (X'X)^-1 X_g' e_g. The jackknife has (G - 1) / G times those
    # of (X'X)^-1 X_g' (I - H_gg)^-1 e_g. H_gg has eigenvalues from 0 to h, so to first order the
    # ratio lies between (G - 1) / G and (G - 1) / G / (1 - h)^2.
    x, y, group = clusters(seed=3)
    at = [0.5, 5.0, 9.5]
    made = straight(x, y, at, block=group)
    design, places = sm.add_constant(x), sm.add_constant(np.array(at))
    fit = sm.OLS(y, design).fit(
        cov_type="cluster", cov_kwds={"groups": group, "use_correction": False}
    )
    sandwich = np.einsum("ij,jk,ik->i", places, fit.cov_params(), places)
    inverse = np.linalg.inv(design.T @ design)
    h = max(
        float(np.linalg.eigvals(inverse @ design[group == g].T @ design[group == g]).real.max())
        for g in range(32)
    )
    ratio = made.std_error**2 / sandwich
    assert h < 0.1
    assert np.all(ratio > 31.0 / 32.0)
    assert np.all(ratio < 31.0 / 32.0 / (1.0 - h) ** 2)


def test_days_agree_with_weights_that_fall_with_the_lag():
    # The mean of an autoregression: days as blocks and the estimator of Newey & West (1987,
    # Econometrica 55:703) estimate the same variance from the same residuals.
    rng = np.random.default_rng(4)
    n, rho = 12_800, 0.9
    news = math.sqrt(1.0 - rho * rho) * rng.normal(size=n)
    y = np.empty(n)
    y[0] = rng.normal()
    for place in range(1, n):
        y[place] = rho * y[place - 1] + news[place]
    x, day = rng.uniform(0.0, 10.0, n), np.arange(n) // 200
    made = straight(x, y, [5.0], estimator="local-constant", block=day, folds=64)
    fit = sm.OLS(y, np.ones(n)).fit(cov_type="HAC", cov_kwds={"maxlags": 100})
    independent = sm.OLS(y, np.ones(n)).fit()
    # Theory: sd sqrt((1 + rho) / (1 - rho) / n). Either has a standard error of some ten percent.
    theory = math.sqrt((1.0 + rho) / (1.0 - rho) / n)
    assert fit.bse[0] == pytest.approx(theory, rel=0.3)
    assert made.std_error[0] == pytest.approx(theory, rel=0.3)
    assert made.std_error[0] == pytest.approx(fit.bse[0], rel=0.25)
    assert made.std_error[0] > 3.0 * independent.bse[0]


# NIST Statistical Reference Datasets, Lew: certified lag-one autocorrelation.


def test_the_autocorrelation_of_the_beam_deflections():
    path = Path(__file__).parent / "data" / "lew.csv"
    with path.open() as lines:
        rows = [row for row in csv.reader(lines) if not row[0].startswith("#")]
    y = np.array([float(row[0]) for row in rows[1:]])
    assert y.size == 200
    assert y.mean() == pytest.approx(-177.435, rel=1e-14)
    z = y - y.mean()
    found = autocorrelation(z, np.zeros(200, np.int64), np.arange(200), 1)
    # NIST divides the sum of 199 products by the sum of 200 squares; here means are compared.
    assert found[1] * 199.0 / 200.0 == pytest.approx(-0.307304800605679, rel=1e-13)


# Simultaneous bands.


def value_for_all(arc_length, degrees):
    degrees = np.array([degrees])
    tail = tail_for_all(0.95, np.array([arc_length]), degrees, 1, own_scale=False)
    return float(pointwise_value(1.0 - tail, degrees)[0])


@pytest.mark.parametrize(
    ("arc_length", "value"),
    # The equation of Sun & Loader (1994, Ann. Stat. 22:1328), solved once by other means, at the
    # arc lengths of a local line with h = 0.3, 0.15, 0.08 over a unit interval.
    [(6.01, 2.747), (11.28, 2.946), (20.50, 3.133)],
)
def test_critical_values_are_those_of_the_tube_formula(arc_length, value):
    assert value_for_all(arc_length, math.inf) == pytest.approx(value, abs=6e-4)


@pytest.mark.parametrize("arc_length", [6.01, 11.28, 20.50])
def test_with_an_estimated_scale_the_tails_are_those_of_t(arc_length):
    def excess(c):
        return arc_length / math.pi * (1.0 + c * c / 20.0) ** -10.0 + 2.0 * stats.t.sf(c, 20) - 0.05

    assert value_for_all(arc_length, 20.0) == pytest.approx(
        optimize.bisect(excess, 1.0, 10.0, xtol=1e-10), abs=1e-6
    )


def arc_of(kernel, bandwidth, points, design, degree):
    """Arc length of the weights of a local fit to equispaced rows, one to a bin."""
    shape = SHAPES[kernel]
    coefficients = np.zeros((3, points.size))
    for place, at in enumerate(points.tolist()):
        if degree == 0:
            coefficients[0, place] = 1.0
            continue
        u = (design[np.abs(design - at) < 6.0 * bandwidth] - at) / bandwidth
        weight = np.array([shape(one) for one in u.tolist()])
        s = [float(np.sum(weight * u**power)) for power in range(3)]
        coefficients[:2, place] = s[2], -s[1]
    chords = np.empty(points.size - 1)
    arcs.weight_chords(shape.code, bandwidth, points, coefficients, np.ones(design.size), chords)
    return float(chords.sum())


@pytest.mark.parametrize(
    ("kernel", "per_bandwidth"),
    # sqrt(R(K') / R(K)): Sun & Loader (1994); roughnesses of Wand & Jones (1995), appendix B.
    [
        ("epanechnikov", math.sqrt(1.5 / 0.6)), ("biweight", math.sqrt((15 / 7) / (5 / 7))),
        ("triangular", math.sqrt(2.0 / (2.0 / 3.0))),
        ("triweight", math.sqrt((35 / 11) / (350 / 429))),
        ("tricube", math.sqrt((420 / 187) / (175 / 247))), ("gaussian", math.sqrt(0.5)),
    ],
)  # fmt: skip
def test_inside_the_arc_grows_by_a_constant_of_the_kernel(kernel, per_bandwidth):
    h, bandwidths = 250.0, 4.0
    design = np.arange(4000) + 0.5
    points = np.linspace(1500.0, 1500.0 + bandwidths * h, 801)
    found = arc_of(kernel, h, points, design, 0)
    assert found == pytest.approx(bandwidths * per_bandwidth, rel=3e-3)


@pytest.mark.parametrize(("h", "arc_length"), [(0.3, 6.01), (0.15, 11.28), (0.08, 20.50)])
def test_a_local_line_with_both_ends_has_the_known_arc(h, arc_length):
    # 400 equispaced rows on a unit interval, Epanechnikov.
    design = np.arange(400) + 0.5
    points = np.linspace(0.5, 399.5, 1 + math.ceil(200 / h))
    assert arc_of("epanechnikov", 400.0 * h, points, design, 1) == pytest.approx(
        arc_length, rel=6e-3
    )
