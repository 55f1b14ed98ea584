"""Bin moments into kernel sums, against plain loops over the rows themselves."""

import math

import numpy as np
import pytest
from fastsmooth.kernels import binned
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth.smoother import kernel_sums
from tests.oracle.local import KERNELS

BINS = 300
# Largest error of a sum over its rows' absolute terms at 64 bins a bandwidth (16 for the
# Gaussian), rows at random: the edge bins' share of rows times what the kernel leaves there.
AT_RANDOM = {
    "uniform": 3e-2, "triangular": 2e-4, "epanechnikov": 3e-4, "biweight": 5e-6, "triweight": 1e-6,
    "tricube": 2e-6, "gaussian": 3e-6,
}  # fmt: skip


def moments(x, a):
    """Sums of a, a v, a v^2 of every bin; bins of width 1 from 0."""
    out = np.zeros((3, BINS))
    for xi, ai in zip(x.tolist(), a.tolist(), strict=True):
        b = int(xi)
        v = xi - b - 0.5
        for power in range(3):
            out[power, b] += ai * v**power
    return out


def plain_sums(x, a, at, h, name, powers, squared=False):
    """Sums of a K(u) u^j, or a K(u)^2 u^j, and of their absolute values."""
    kernel = KERNELS[name]
    exact, size = [], []
    for j in range(powers):
        terms = [
            ai * kernel((xi - at) / h) ** (2 if squared else 1) * ((xi - at) / h) ** j
            for xi, ai in zip(x.tolist(), a.tolist(), strict=True)
        ]
        exact.append(math.fsum(terms))
        size.append(math.fsum(map(abs, terms)))
    return exact, size


@pytest.fixture(scope="module")
def random_rows():
    rng = np.random.default_rng(5)
    x = rng.uniform(0.0, BINS, 4000)
    return x, 3.0 + rng.normal(size=x.size)


@pytest.mark.parametrize("squared", [False, True])
@pytest.mark.parametrize("name", SHAPES)
def test_sums_at_bin_centres(name, squared, random_rows):
    x, a = random_rows
    h = 20.3 if name == "gaussian" else 70.3
    made = kernel_sums(moments(x, a), SHAPES[name], h, 3, squared)
    for b in (0, 1, 70, 150, 240, BINS - 1):
        exact, size = plain_sums(x, a, b + 0.5, h, name, 3, squared)
        for j in range(3):
            assert abs(made[j, b] - exact[j]) <= AT_RANDOM[name] * size[j], (b, j)


@pytest.mark.parametrize("name", ["uniform", "epanechnikov"])
def test_sums_are_exact_where_windows_end_between_bins(name, random_rows):
    """K u^j of degree at most two is its own least-squares fit over whole bins."""
    x, a = random_rows
    h = 40.5
    powers = 3 if name == "uniform" else 1
    made = kernel_sums(moments(x, a), SHAPES[name], h, powers, squared=False)
    for b in (0, 17, 150, BINS - 1):
        exact, size = plain_sums(x, a, b + 0.5, h, name, powers)
        for j in range(powers):
            assert made[j, b] == pytest.approx(exact[j], abs=1e-13 * size[j])


@pytest.mark.parametrize("name", SHAPES)
def test_windows_wider_than_the_table_hold_every_row(name, random_rows):
    x, a = random_rows
    made = kernel_sums(moments(x, a), SHAPES[name], 5000.0, 3, squared=False)
    exact, size = plain_sums(x, a, 150.5, 5000.0, name, 3)
    for j in range(3):
        # The triangular kernel has its kink in the middle of the point's own bin.
        share = 1e-7 if name == "triangular" else 1e-11
        assert made[j, 150] == pytest.approx(exact[j], abs=share * size[j])


@pytest.mark.parametrize("name", SHAPES)
@given(shift=st.integers(1, 80), seed=st.integers(0, 1000))
def test_shifted_and_mirrored_rows_give_shifted_and_mirrored_sums(name, shift, seed):
    rng = np.random.default_rng(seed)
    table = np.zeros((3, BINS))
    table[:, :100] = rng.normal(size=(3, 100)) * (rng.uniform(size=100) < 0.5)
    h = float(rng.uniform(0.4, 60.0))
    made = kernel_sums(table, SHAPES[name], h, 3, squared=False)
    shifted = kernel_sums(np.roll(table, shift, axis=1), SHAPES[name], h, 3, squared=False)
    scale = np.abs(made).max() + 1.0
    assert shifted[:, shift:] == pytest.approx(made[:, : BINS - shift], abs=1e-13 * scale)
    mirrored_table = np.ascontiguousarray(table[:, ::-1] * np.array([[1.0], [-1.0], [1.0]]))
    mirrored = kernel_sums(mirrored_table, SHAPES[name], h, 3, squared=False)
    sign = np.array([[1.0], [-1.0], [1.0]])
    assert mirrored[:, ::-1] == pytest.approx(sign * made, abs=1e-12 * scale)


@pytest.mark.parametrize("bins", [1, 2, 1023, 1024, 1025, 2500])
def test_blocks_of_bins_join_without_a_seam(bins):
    rng = np.random.default_rng(bins)
    reach, powers = 3, 2
    stencil = rng.normal(size=(powers, 3, reach + 1))
    table = rng.normal(size=(3, bins))
    padded = np.zeros((3, bins + 2 * reach))
    padded[:, reach : reach + bins] = table
    out = np.full((powers, bins), np.nan)
    binned.bin_sums(padded, stencil, out)
    for j in range(powers):
        for b in {0, bins // 2, bins - 1, min(bins - 1, 1023), min(bins - 1, 1024)}:
            terms = []
            for k in range(-reach, reach + 1):
                if 0 <= b + k < bins:
                    for q in range(3):
                        sign = (-1) ** (j + q) if k < 0 else 1
                        terms.append(sign * stencil[j, q, abs(k)] * table[q, b + k])
            assert out[j, b] == pytest.approx(math.fsum(terms), abs=1e-12)


def all_sums(points, name, h, weight, response, variance, squares):
    out = np.full((binned.POINT_ROWS, len(points)), np.nan)
    binned.point_sums(
        SHAPES[name].code, h, np.array(points), weight, response, variance, squares, out
    )
    return out


@pytest.mark.parametrize("h", [2.7, 40.3])
@pytest.mark.parametrize("name", SHAPES)
def test_rows_at_one_place_of_each_bin_are_summed_exactly(name, h):
    """Rounded readings: every kernel, also at the very end of its window."""
    rng = np.random.default_rng(11)
    places = np.sort(rng.choice(BINS, 60, replace=False)) + rng.uniform(0.05, 0.95, 60)
    x = np.repeat(places, 5)
    y, w, s2 = rng.normal(size=x.size), rng.gamma(2.0, 0.5, x.size), rng.gamma(2.0, 0.5, x.size)
    points = [-1.0, 0.0, 33.4, 150.0, float(places[30]), 299.9, 305.0]
    sets = [moments(x, a) for a in (w, w * y, w * s2, w * w)]
    made = all_sums(points, name, h, *sets)
    for p, at in enumerate(points):
        for rows, a, powers, squared in (
            (binned.S, w, 5, False), (binned.T, w * y, 3, False),
            (binned.V, w * s2, 5, True), (binned.U, w * w, 5, True),
        ):  # fmt: skip
            exact, size = plain_sums(x, a, at, h, name, powers, squared)
            for j in range(powers):
                assert made[rows + j, p] == pytest.approx(exact[j], abs=3e-9 * size[j] + 1e-15)


@pytest.mark.parametrize("name", SHAPES)
def test_sums_at_points(name, random_rows):
    x, a = random_rows
    h = 20.3 if name == "gaussian" else 70.3
    ones = np.ones_like(x)
    made = all_sums(
        [0.0, 0.37, 71.21, 150.0, 299.99], name, h,
        moments(x, ones), moments(x, a), moments(x, a * a), moments(x, ones),
    )  # fmt: skip
    for p, at in enumerate([0.0, 0.37, 71.21, 150.0, 299.99]):
        for rows, values, powers, squared in (
            (binned.S, ones, 5, False), (binned.T, a, 3, False),
            (binned.V, a * a, 5, True), (binned.U, ones, 5, True),
        ):  # fmt: skip
            exact, size = plain_sums(x, values, at, h, name, powers, squared)
            for j in range(powers):
                assert abs(made[rows + j, p] - exact[j]) <= AT_RANDOM[name] * size[j], (at, j)


@pytest.mark.parametrize("name", [name for name in SHAPES if name != "uniform"])
def test_sums_with_the_kernels_slope_are_derivatives(name, random_rows):
    """d/dx sum K((x_i - x) / h) = -(1 / h) sum K'(u_i), by central differences of plain sums."""
    x, a = random_rows
    h, at, step = 31.7, 120.23, 1e-4
    made = all_sums([at], name, h, *(moments(x, one) for one in (np.ones_like(x), a, a, a)))
    for row, values in ((binned.DS, np.ones_like(x)), (binned.DT, a)):
        up, size = plain_sums(x, values, at + step, h, name, 1)
        down, _ = plain_sums(x, values, at - step, h, name, 1)
        expected = -h * (up[0] - down[0]) / (2.0 * step)
        # The triangular kernel's slope jumps: its end bins and own bin are left to chance.
        share = 1e-2 if name == "triangular" else 3e-3
        assert made[row, 0] == pytest.approx(expected, abs=share * size[0])


def test_empty_windows_and_empty_tables_give_zeros():
    none = np.zeros((3, BINS))
    made = all_sums([-50.0, 3.0, 1e6], "biweight", 5.0, none, none, none, none)
    assert not made.any()
    assert not kernel_sums(none, SHAPES["gaussian"], 5.0, 3, squared=False).any()
    one = moments(np.array([150.2]), np.ones(1))
    made = all_sums([100.0, 200.0], "biweight", 5.0, one, one, one, one)
    assert not made.any()


@pytest.mark.parametrize("power", [1, 2])
@pytest.mark.parametrize("name", SHAPES)
def test_stencil_integrates_the_kernel_for_rows_spread_evenly(name, power):
    """Rows spread evenly have moments (1, 0, 1/12) in every bin; h = 25.25 cuts its end bins."""
    h, shape = 25.25, SHAPES[name]
    stencil = np.empty((3, 3, math.ceil(shape.support * h + 0.5) + 1))
    binned.fill_stencil(shape.code, h, power, stencil)
    both_sides = 2.0 * stencil.sum(axis=2) - stencil[:, :, 0]
    even = both_sides[:, 0] + both_sides[:, 2] / 12.0
    if power == 1:
        assert even[0] == pytest.approx(h, rel=1e-11)
        assert even[2] == pytest.approx(h * shape.moment(2), rel=1e-11)
    else:
        assert even[0] == pytest.approx(h * shape.roughness, rel=1e-11)
