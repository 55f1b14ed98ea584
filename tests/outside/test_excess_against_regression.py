"""In the limit of a very wide window a curve is a regression line: statsmodels knows its errors."""

import numpy as np
import pytest
import statsmodels.api as sm
from fastsmooth.kernels.shapes import SHAPES
from scipy import stats
from statsmodels.stats.multitest import multipletests

from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.compare import adjusted
from fastsmooth.comparison import COMPARED, UnitComparison
from fastsmooth.excess import Excess, excess_of
from fastsmooth.foldsums import FoldedCurve
from fastsmooth.jackknife import keep_fold_curves
from fastsmooth.localweights import LINE
from fastsmooth.plan import Plan

WIDE = 1e6


def table_of(x, y, folds):
    plan = Plan.simple(0.0, 20.0, bins=4096, folds=int(max(folds)) + 1)
    table = BinTable(plan)
    for fold in np.unique(folds).tolist():
        own = folds == fold
        table.add_rows(fold, x[own].copy(), y[own].copy())
    return table


def baseline(x, y, folds):
    """The curve of a window a million wide, and its folds."""
    table = table_of(x, y, folds)
    at = np.linspace(0.0, 20.0, 65)
    kept = keep_fold_curves(at, Pyramid(table), sorted(table.sums), SHAPES["uniform"], WIDE, LINE)
    return FoldedCurve(
        at, kept.centre, kept.moved, kept.shares, kept.folds, kept.degrees, kept.known
    )


def excess(base, x, y, folds, **how):
    table = table_of(x, y, folds)
    how = {"confidence": 0.95, "per_row": 1.0, "paired": False, **how}
    return excess_of(base, Pyramid(table).levels[0], 0.0, np.array(sorted(table.sums)), **how)


def rows(seed, n, sd=1.0):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.5, 19.5, n)
    return x, 20.0 + 0.7 * x + rng.normal(0.0, sd, n)


def test_line_and_expected_sum_are_those_of_least_squares():
    x, y = rows(1, 300)
    base = baseline(x, y, np.arange(300) % 30)
    fit = sm.OLS(y, sm.add_constant(x)).fit()
    np.testing.assert_allclose(base.centre, fit.predict(sm.add_constant(base.t)), rtol=1e-9)
    now_x, now_y = rows(2, 120)
    found = excess(base, now_x, now_y, np.arange(120) % 12)
    expected = float(fit.predict(sm.add_constant(now_x)).sum())
    assert found.expected == pytest.approx(expected, rel=1e-9)
    assert found.amount == pytest.approx(float(now_y.sum()) - expected, rel=1e-6)


def test_a_fold_for_every_row_gives_the_hc3_error_of_the_expected_sum():
    # Leaving out one row at a time is MacKinnon & White (1985, J. Econometrics 29:305): HC3.
    x, y = rows(3, 200, sd=2.0)
    base = baseline(x, y, np.arange(200))
    now_x, now_y = rows(4, 150)
    found = excess(base, now_x, now_y, np.arange(150) % 15)
    covariance = sm.OLS(y, sm.add_constant(x)).fit(cov_type="HC3").cov_params()
    total = sm.add_constant(now_x).sum(axis=0)
    variance = 199 / 200 * float(total @ covariance @ total)
    assert found.base_std_error == pytest.approx(np.sqrt(variance), rel=1e-4)


def test_the_scatter_of_the_current_rows_is_the_cluster_form():
    x, y = rows(5, 400)
    base = baseline(x, y, np.arange(400) % 40)
    rng = np.random.default_rng(6)
    now_x, now_y = rows(7, 250)
    folds = rng.integers(0, 25, 250)
    now_y = now_y + rng.normal(0.0, 1.5, 25)[folds]
    found = excess(base, now_x, now_y, folds)
    residual = now_y - np.interp(now_x, base.t, base.centre)
    design = sm.add_constant(now_x)
    fit = sm.OLS(residual, design).fit(cov_type="cluster", cov_kwds={"groups": folds})
    total = design.sum(axis=0)
    # statsmodels scales by G / (G - 1) (n - 1) / (n - 2); here two parameters cost two folds.
    groups = np.unique(folds).size
    theirs = float(total @ fit.cov_params() @ total) / (groups / (groups - 1) * 249 / 248)
    assert found.now_std_error == pytest.approx(np.sqrt(theirs * groups / (groups - 2)), rel=1e-9)
    assert found.amount == pytest.approx(float(total @ fit.params), rel=1e-9)


def test_independent_rows_give_the_prediction_interval_of_a_sum():
    # Var of a sum of m new rows: m sigma^2 + (sum x)' Cov (sum x).
    x, y = rows(8, 4000)
    now_x, now_y = rows(9, 3000)
    base = baseline(x, y, np.arange(4000) % 500)
    found = excess(base, now_x, now_y, np.arange(3000) % 500)
    fit = sm.OLS(y, sm.add_constant(x)).fit()
    total = sm.add_constant(now_x).sum(axis=0)
    of_mean = float(total @ fit.cov_params() @ total)
    # A standard error from 500 folds has a spread of 3 %.
    assert found.base_std_error == pytest.approx(np.sqrt(of_mean), rel=0.13)
    assert found.std_error == pytest.approx(np.sqrt(3000 * fit.mse_resid + of_mean), rel=0.1)
    half = stats.t.ppf(0.975, fit.df_resid) * np.sqrt(3000 * fit.mse_resid + of_mean)
    assert found.upper - found.amount == pytest.approx(half, rel=0.1)
    assert found.independent_rows == pytest.approx(3000, rel=0.2)


def unit(key, p):
    nothing = dict.fromkeys(
        (
            "std_error", "lower", "upper", "now_std_error", "base_std_error", "degrees", "share",
            "share_std_error", "share_lower", "share_upper", "independent_rows",
        )
    )  # fmt: skip
    told = Excess(
        rows=1.0, rows_outside=0.0, rows_thin=0.0, actual=1.0, expected=1.0, amount=float(key),
        p_value=p, folds=9, level=0.95, **nothing,
    )  # fmt: skip
    return UnitComparison((key,), COMPARED, None, 1, 1, 1.0, None, told, None, ())


def test_p_values_are_adjusted_as_by_benjamini_and_hochberg():
    # The fifteen p values of Benjamini & Hochberg (1995, JRSSB 57:289), section 4.1: at q = 0.05
    # the four smallest are rejected.
    values = [
        0.0001, 0.0004, 0.0019, 0.0095, 0.0201, 0.0278, 0.0298, 0.0344, 0.0459, 0.3240, 0.4262,
        0.5719, 0.6528, 0.7590, 1.0000,
    ]  # fmt: skip
    found = {
        one.key[0]: one.adjusted_p_value
        for one in adjusted([unit(place, value) for place, value in enumerate(values)])
    }
    theirs = multipletests(values, method="fdr_bh")[1]
    np.testing.assert_allclose([found[place] for place in range(15)], theirs, rtol=1e-12)
    assert sum(value <= 0.05 for value in found.values()) == 4


def test_units_without_a_p_value_take_no_part():
    found = {one.key[0]: one.adjusted_p_value for one in adjusted([unit(1, 0.02), unit(2, None)])}
    assert found == {1: pytest.approx(0.02), 2: None}
