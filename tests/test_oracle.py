"""The oracles against a library's least squares, against each other, and against the identity."""

import math

import numpy as np
import pytest

from tests import cases
from tests.oracle import local, many_rows

ROWS = cases.make_rows("clustered", 60, seed=3)
X, Y = ROWS.wet_bulb_c.tolist(), ROWS.power_kw.tolist()
W = cases.precisions(60).tolist()
C = cases.repeats(60).tolist()


@pytest.mark.parametrize("degree", [0, 1, 2])
@pytest.mark.parametrize("kernel", local.KERNELS)
def test_fit_is_weighted_least_squares(kernel, degree):
    at, h = 8.0, 6.0
    fit = local.fit_at(at, X, Y, h, kernel, degree, W, C)
    u = (np.array(X) - at) / h
    mass = np.sqrt([c * w * local.KERNELS[kernel](v) for c, w, v in zip(C, W, u, strict=True)])
    design = np.vander(u, degree + 1, increasing=True)
    answer, *_ = np.linalg.lstsq(design * mass[:, None], np.array(Y) * mass, rcond=None)
    assert fit.value == pytest.approx(answer[0], rel=1e-11)
    if degree:
        assert fit.slope == pytest.approx(answer[1] / h, rel=1e-9)
    assert math.fsum(fit.smoothing) == pytest.approx(1.0, abs=1e-12)


@pytest.mark.parametrize("degree", [0, 1])
@pytest.mark.parametrize("kernel", ["biweight", "uniform", "gaussian"])
@pytest.mark.parametrize("weights", [None, W])
def test_identity_is_leaving_out(kernel, degree, weights):
    h = 12.0
    made = local.criteria(X, Y, h, kernel, degree, weights)
    left_out = local.leave_one_out_for_real(X, Y, h, kernel, degree, weights)
    assert made.lost == 0
    assert made.leave_one_out == pytest.approx(left_out, rel=1e-10)


@pytest.mark.parametrize("degree", [0, 1])
@pytest.mark.parametrize("kernel", local.KERNELS)
def test_compiled_loops_are_the_plain_ones(kernel, degree):
    h = 9.0
    plain = local.criteria(X, Y, h, kernel, degree, W)
    compiled = many_rows.criteria_many(X, Y, h, kernel, degree, W)
    assert compiled["leave-one-out"] == pytest.approx(plain.leave_one_out, rel=1e-10)
    assert compiled["gcv"] == pytest.approx(plain.gcv, rel=1e-10)
    assert compiled["aicc"] == pytest.approx(plain.aicc, rel=1e-10)
    assert compiled["trace"] == pytest.approx(plain.trace, rel=1e-10)
    at = 5.0
    fit = local.fit_at(at, X, Y, h, kernel, degree, W)
    value, slope, leverage, squares = many_rows.fit_many([at], X, Y, h, kernel, degree, W)[:, 0]
    assert value == pytest.approx(fit.value, rel=1e-12)
    assert leverage == pytest.approx(fit.unit_leverage, rel=1e-11)
    assert squares == pytest.approx(fit.sum_of_squares, rel=1e-11)
    if degree:
        assert slope == pytest.approx(fit.slope, rel=1e-9)


@pytest.mark.parametrize("degree", [0, 1])
def test_a_count_is_so_many_equal_rows(degree):
    expanded_x = [x for x, c in zip(X, C, strict=True) for _ in range(int(c))]
    expanded_y = [y for y, c in zip(Y, C, strict=True) for _ in range(int(c))]
    counted = local.criteria(X, Y, 9.0, "biweight", degree, counts=C)
    repeated = local.criteria(expanded_x, expanded_y, 9.0, "biweight", degree)
    assert counted.leave_one_out == pytest.approx(repeated.leave_one_out, rel=1e-10)
    assert counted.gcv == pytest.approx(repeated.gcv, rel=1e-10)
    assert counted.degrees == pytest.approx(repeated.degrees, rel=1e-10)
