"""Kernel constants against the published tables."""

import math
from fractions import Fraction

import numpy as np
import pytest
from fastsmooth.kernels.shapes import SHAPES
from scipy.integrate import quad

COMPACT = [name for name in SHAPES if name != "gaussian"]


def efficiency(name):
    """Silverman's (1986) efficiency: sample sizes for equal error, Epanechnikov over the kernel."""
    best, shape = SHAPES["epanechnikov"], SHAPES[name]
    return (math.sqrt(best.moment(2)) * best.roughness) / (
        math.sqrt(shape.moment(2)) * shape.roughness
    )


@pytest.mark.parametrize(
    ("name", "published"),
    [
        # Silverman (1986), Density Estimation, Table 3.1: exact efficiencies.
        ("epanechnikov", 1.0),
        ("biweight", math.sqrt(3087 / 3125)),
        ("triangular", math.sqrt(243 / 250)),
        ("gaussian", math.sqrt(36 * math.pi / 125)),
        ("uniform", math.sqrt(108 / 125)),
    ],
)
def test_efficiencies_are_silvermans(name, published):
    assert efficiency(name) == pytest.approx(published, rel=1e-14)


@pytest.mark.parametrize(
    ("name", "published"),
    [
        # Wand & Jones (1995), Kernel Smoothing, Table 2.1: efficiencies to three decimals.
        ("epanechnikov", 1.000), ("biweight", 0.994), ("triweight", 0.987),
        ("gaussian", 0.951), ("triangular", 0.986), ("uniform", 0.930),
    ],
)  # fmt: skip
def test_efficiencies_are_those_of_wand_and_jones(name, published):
    assert round(efficiency(name), 3) == published


@pytest.mark.parametrize(
    ("name", "roughness", "second", "fourth"),
    [
        # Closed forms: Wand & Jones (1995), appendix B; Fan & Gijbels (1996), section 3.2.
        ("uniform", Fraction(1, 2), Fraction(1, 3), Fraction(1, 5)),
        ("triangular", Fraction(2, 3), Fraction(1, 6), Fraction(1, 15)),
        ("epanechnikov", Fraction(3, 5), Fraction(1, 5), Fraction(3, 35)),
        ("biweight", Fraction(5, 7), Fraction(1, 7), Fraction(1, 21)),
        ("triweight", Fraction(350, 429), Fraction(1, 9), Fraction(1, 33)),
        ("tricube", Fraction(175, 247), Fraction(35, 243), Fraction(1, 22)),
    ],
)
def test_roughness_and_moments_are_the_closed_forms(name, roughness, second, fourth):
    shape = SHAPES[name]
    assert shape.roughness == pytest.approx(float(roughness), rel=1e-14)
    assert shape.moment(2) == pytest.approx(float(second), rel=1e-14)
    assert shape.moment(4) == pytest.approx(float(fourth), rel=1e-14)


def test_gaussian_roughness_and_moments():
    shape = SHAPES["gaussian"]
    assert shape.roughness == pytest.approx(0.5 / math.sqrt(math.pi), rel=1e-15)
    assert [shape.moment(order) for order in (0, 2, 4, 6)] == [1.0, 1.0, 3.0, 15.0]


@pytest.mark.parametrize(
    ("name", "published"),
    [
        # Canonical bandwidths, Marron & Nolan (1988, Stat. Prob. Letters 7:195), Table 1.
        ("gaussian", 0.7764), ("uniform", 1.3510), ("epanechnikov", 1.7188),
        ("biweight", 2.0362), ("triweight", 2.3122),
    ],
)  # fmt: skip
def test_canonical_bandwidths_are_marron_and_nolans(name, published):
    assert SHAPES[name].canonical_bandwidth == pytest.approx(published, abs=5e-5)


@pytest.mark.parametrize(
    ("name", "published"),
    [
        # C_{0,1} of Fan & Gijbels (1996), Table 3.2: the local line's constant is delta_0.
        ("gaussian", 0.776), ("uniform", 1.351), ("epanechnikov", 1.719), ("biweight", 2.036),
        ("triweight", 2.312),
    ],
)  # fmt: skip
def test_canonical_bandwidths_are_those_of_fan_and_gijbels(name, published):
    assert SHAPES[name].canonical_bandwidth == pytest.approx(published, abs=6e-4)


@pytest.mark.parametrize("name", COMPACT)
def test_half_moments_are_the_integrals(name):
    shape = SHAPES[name]
    for order in range(7):
        integral, _ = quad(lambda u, k: u**k * shape(u), 0.0, 1.0, (order,), epsabs=1e-14)
        assert shape.half_moment(order) == pytest.approx(integral, abs=1e-13)


@pytest.mark.parametrize("name", SHAPES)
def test_kernels_integrate_to_one_and_are_even(name):
    shape = SHAPES[name]
    integral, _ = quad(shape, -shape.support, shape.support, points=[0.0], epsabs=1e-13)
    assert integral == pytest.approx(1.0, abs=1e-12)
    for u in np.linspace(0.0, 1.2 * shape.support, 50):
        assert shape(u) == shape(-u)
    assert shape(1.001 * shape.support) == 0.0
