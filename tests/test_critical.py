"""Critical values: quantiles, published formulas, and paths simulated to see how high they go."""

import math

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import stats

from fastsmooth.critical import arc_length_of, pointwise_value, simultaneous_value

INFINITE = math.inf


def test_pointwise_values_are_t_quantiles():
    # Student's t, two-sided 95 %: any table.
    values = pointwise_value(0.95, np.array([1.0, 5.0, 10.0, 30.0]))
    np.testing.assert_allclose(values, [12.706, 2.571, 2.228, 2.042], atol=5e-4)


def test_without_degrees_nothing_is_excluded():
    assert pointwise_value(0.95, np.array([0.0, -1.0])).tolist() == [math.inf, math.inf]


def excess(c, arc_length, stretches, degrees, own_scale):
    """How much likelier than it may the path exceeds c: the formula as it is printed."""
    power = (degrees - 1.0) / 2.0 if own_scale else degrees / 2.0
    if math.isinf(degrees):
        tail, beyond = math.exp(-c * c / 2.0), 2.0 * stats.norm.sf(c)
    else:
        tail, beyond = (1.0 + c * c / degrees) ** -power, 2.0 * stats.t.sf(c, degrees)
    return arc_length / math.pi * tail + stretches * beyond


@given(
    st.floats(0.5, 0.999),
    st.floats(0.0, 500.0),
    st.integers(1, 6),
    st.one_of(st.just(INFINITE), st.floats(3.0, 500.0)),
    st.booleans(),
)
def test_the_value_solves_its_equation(level, arc_length, stretches, degrees, own_scale):
    c = simultaneous_value(level, arc_length, stretches, degrees, own_scale=own_scale)
    if c > 0.0:
        assert excess(c, arc_length, stretches, degrees, own_scale) == pytest.approx(
            1.0 - level, rel=1e-4
        )


@given(st.floats(0.5, 0.999), st.one_of(st.just(INFINITE), st.floats(2.5, 500.0)), st.booleans())
def test_a_curve_that_does_not_turn_is_one_point(level, degrees, own_scale):
    c = simultaneous_value(level, 0.0, 1, degrees, own_scale=own_scale)
    assert c == pytest.approx(stats.t.ppf(0.5 + level / 2.0, degrees), abs=1e-4)


def test_longer_paths_more_stretches_and_fewer_degrees_need_wider_bands():
    def value(arc_length=10.0, stretches=1, degrees=30.0, own_scale=False):
        return simultaneous_value(0.95, arc_length, stretches, degrees, own_scale=own_scale)

    assert value(arc_length=20.0) > value()
    assert value(stretches=3) > value()
    assert value(degrees=10.0) > value()
    assert value(own_scale=True) > value()
    assert value(degrees=1e7) == pytest.approx(value(degrees=INFINITE), abs=1e-4)


def test_hopeless_degrees_give_an_endless_band():
    # With one degree and errors of its own at every point the tail never falls below 5 %.
    assert simultaneous_value(0.95, 10.0, 1, 1.0, own_scale=True) == math.inf


# Arc length.


def test_the_arc_of_a_half_circle_is_pi():
    angle = np.linspace(0.0, math.pi, 2001)
    radius = 1.0 + np.cos(7.0 * angle) ** 2
    # Only directions count.
    vectors = radius * np.stack((np.cos(angle), np.sin(angle), np.zeros_like(angle)))
    assert arc_length_of(vectors) == pytest.approx(math.pi, rel=1e-6)


def test_a_straight_quarter_turn_is_one_chord():
    assert arc_length_of(np.array([[1.0, 0.0], [0.0, 5.0]])) == pytest.approx(math.sqrt(2.0))


def test_places_without_deviations_have_no_length():
    vectors = np.array([[1.0, 0.0, 0.0, 1.0], [0.0, 0.0, 2.0, 2.0]])
    # Only the last chord, from (0, 1) to (1, 2) / sqrt 5, joins two known directions.
    expected = math.hypot(math.sqrt(0.2), 1.0 - 2.0 * math.sqrt(0.2))
    assert arc_length_of(vectors) == pytest.approx(expected)
    assert arc_length_of(np.ones((3, 1))) == 0.0


# Simulated paths.


def smooth_paths(rng, runs, copies):
    """Gaussian paths of variance one on a fine grid, `copies` to a run, and their arc length.

    A moving sum of normal noise with bell weights: the correlation is exp(-d^2 / 4) at distance
    d, so the path turns by sqrt(1 / 2) per unit.
    """
    step, length = 0.1, 15.0
    reach = np.arange(-5.0, 5.0 + step / 2, step)
    bell = np.exp(-0.5 * reach**2)
    bell /= math.sqrt(np.sum(bell**2))
    points = round(length / step) + 1
    noise = rng.normal(size=(runs, copies, points + bell.size - 1))
    windows = np.lib.stride_tricks.sliding_window_view(noise, bell.size, axis=2)
    return windows @ bell, length * math.sqrt(0.5)


def test_normal_paths_cross_the_value_as_often_as_they_may():
    paths, arc_length = smooth_paths(np.random.default_rng(1), 6000, 1)
    c = simultaneous_value(0.95, arc_length, 1, INFINITE, own_scale=False)
    share = np.mean(np.abs(paths[:, 0]).max(axis=1) > c)
    # Four standard errors of a share of 0.05 in 6000 runs are 0.0113; the formula is an upper
    # bound in one dimension, and a grid misses a few peaks.
    assert 0.034 < share < 0.0613


@pytest.mark.parametrize("degrees", [11, 30])
def test_paths_with_errors_of_their_own_cross_as_often_as_they_may(degrees):
    """A t path: one normal path over the root mean square of others (Worsley 1994)."""
    rng = np.random.default_rng(2)
    runs, high, arcs = 2500, [], []
    for _ in range(5):
        paths, arc_length = smooth_paths(rng, runs // 5, degrees + 1)
        error = np.sqrt(np.mean(paths[:, 1:] ** 2, axis=1))
        high.append(np.abs(paths[:, 0] / error).max(axis=1))
        arcs += [arc_length_of(one[1:]) for one in paths[:40]]
    high = np.concatenate(high)
    c = simultaneous_value(0.95, arc_length, 1, degrees, own_scale=True)
    # Four standard errors of a share of 0.05 in 2500 runs are 0.0174.
    assert 0.0276 < np.mean(high > c) < 0.0674
    # The value for one common scale would be crossed more often than that.
    common = simultaneous_value(0.95, arc_length, 1, degrees, own_scale=False)
    assert np.mean(high > common) > np.mean(high > c)
    # The paths behind the error tell the arc length themselves, without bias: the direction of
    # nu normal paths turns by sqrt(lambda) chi_(nu-1) / chi_nu, whose mean is sqrt(lambda).
    assert np.mean(arcs) == pytest.approx(arc_length, rel=0.03)
