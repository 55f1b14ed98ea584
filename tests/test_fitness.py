"""How well a curve predicts, against plain sums over rows."""

import numpy as np
import pytest

from fastsmooth import Smoothing, make_curve


def test_figures_are_those_of_the_rows():
    rng = np.random.default_rng(11)
    x = rng.uniform(0.0, 10.0, 400)
    y = 50.0 + 5.0 * np.sin(x) + rng.normal(0.0, 1.0, 400)
    h = 1.2
    made = make_curve((x, y), "x", "y", smoothing=Smoothing(bandwidth=h, widths=8))
    told = made.trace["fit"]
    k = np.clip(1.0 - ((x[:, None] - x[None, :]) / h) ** 2, 0.0, None) ** 2
    u = (x[None, :] - x[:, None]) / h
    s0, s1, s2 = (np.sum(k * u**j, axis=1) for j in range(3))
    weights = k * (s2[:, None] - s1[:, None] * u) / (s0 * s2 - s1**2)[:, None]
    fitted, leverage = weights @ y, np.diag(weights)
    n, trace = 400, leverage.sum()
    left_out = (y - fitted) / (1.0 - leverage)
    assert told["equivalent_parameters"] == pytest.approx(trace, rel=1e-4)
    assert told["mean_y"] == pytest.approx(y.mean(), rel=1e-12)
    assert told["sum_squared_residuals"] == pytest.approx(np.sum((y - fitted) ** 2), rel=1e-4)
    assert told["sum_residuals"] == pytest.approx(np.sum(y - fitted), abs=2e-3)
    assert told["cv_rmse"] == pytest.approx(
        np.sqrt(np.sum((y - fitted) ** 2) / (n - trace)) / y.mean(), rel=1e-4
    )
    assert told["nmbe"] == pytest.approx(np.sum(fitted - y) / ((n - trace) * y.mean()), abs=1e-7)
    assert told["r2_left_out"] == pytest.approx(1.0 - np.mean(left_out**2) / np.var(y), rel=1e-4)


def test_a_mean_of_zero_has_no_relative_figures():
    x = np.linspace(0.0, 1.0, 200)
    y = np.where(np.arange(200) % 2 == 0, 1.0, -1.0)
    told = make_curve((x, y), "x", "y", smoothing=Smoothing(bandwidth=0.3, widths=8)).trace["fit"]
    assert told["mean_y"] == pytest.approx(0.0, abs=1e-12)
    assert told["cv_rmse"] is None or told["cv_rmse"] > 1e10
