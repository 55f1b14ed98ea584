"""Critical values: quantiles, published formulas, and paths simulated to see how high they go."""

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy import optimize, stats

from fastsmooth import Band, InputError, Reading, Smoothing, make_curve
from fastsmooth.blocks import fold_of_number
from fastsmooth.critical import chords_of_path, pointwise_value, simulated_tail, tail_for_all
from fastsmooth.curve import OUTSIDE, THIN
from tests.oracle import local
from tests.oracle.folds import without

INFINITE = math.inf


def value_for_all(level, arc_length, stretches, degrees, own_scale=False):
    """The critical value at points of the same degrees, from a path in four pieces."""
    chords = arc_length * np.array([0.1, 0.2, 0.3, 0.4])
    nu = np.full(4, degrees)
    tail = tail_for_all(level, chords, nu, stretches, own_scale=own_scale)
    return float(pointwise_value(1.0 - tail, nu)[0])


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
    c = value_for_all(level, arc_length, stretches, degrees, own_scale)
    if math.isfinite(c):
        assert excess(c, arc_length, stretches, degrees, own_scale) == pytest.approx(
            1.0 - level, rel=1e-4
        )
    else:
        # Only where the tail is so heavy that no value in reach would do.
        assert excess(1e3, arc_length, stretches, degrees, own_scale) > 1.0 - level


@given(st.floats(0.5, 0.999), st.one_of(st.just(INFINITE), st.floats(2.5, 500.0)), st.booleans())
def test_a_curve_that_does_not_turn_is_one_point(level, degrees, own_scale):
    c = value_for_all(level, 0.0, 1, degrees, own_scale)
    assert c == pytest.approx(stats.t.ppf(0.5 + level / 2.0, degrees), abs=1e-4)


def test_longer_paths_more_stretches_and_fewer_degrees_need_wider_bands():
    def value(arc_length=10.0, stretches=1, degrees=30.0, own_scale=False):
        return value_for_all(0.95, arc_length, stretches, degrees, own_scale)

    assert value(arc_length=20.0) > value()
    assert value(stretches=3) > value()
    assert value(degrees=10.0) > value()
    assert value(own_scale=True) > value()
    assert value(degrees=1e7) == pytest.approx(value(degrees=INFINITE), abs=1e-4)


def test_hopeless_degrees_give_an_endless_band():
    # With one degree and errors of its own at every point the tail never falls below 5 %.
    assert value_for_all(0.95, 10.0, 1, 1.0, own_scale=True) == math.inf


def test_degrees_that_change_along_the_path_change_the_value_with_them():
    chords, degrees = np.array([4.0, 6.0]), np.array([8.0, 30.0])
    tail = tail_for_all(0.95, chords, degrees, 2, own_scale=True)
    c = stats.t.isf(tail / 2.0, degrees)
    np.testing.assert_allclose(pointwise_value(1.0 - tail, degrees), c, rtol=1e-9)
    pieces = chords / math.pi * (1.0 + c**2 / degrees) ** (-(degrees - 1.0) / 2.0)
    assert pieces.sum() + 2.0 * tail == pytest.approx(0.05, rel=1e-6)
    # It lies between what either would give alone.
    alone = [tail_for_all(0.95, chords, np.full(2, nu), 2, own_scale=True) for nu in degrees]
    assert alone[0] < tail < alone[1]


# Arc length.


def test_the_arc_of_a_half_circle_is_pi():
    angle = np.linspace(0.0, math.pi, 2001)
    radius = 1.0 + np.cos(7.0 * angle) ** 2
    # Only directions count.
    vectors = radius * np.stack((np.cos(angle), np.sin(angle), np.zeros_like(angle)))
    assert chords_of_path(vectors).sum() == pytest.approx(math.pi, rel=1e-6)


def test_a_straight_quarter_turn_is_one_chord():
    assert chords_of_path(np.array([[1.0, 0.0], [0.0, 5.0]])) == pytest.approx([math.sqrt(2.0)])


def test_places_without_deviations_have_no_length():
    vectors = np.array([[1.0, 0.0, 0.0, 1.0], [0.0, 0.0, 2.0, 2.0]])
    # Only the last chord, from (0, 1) to (1, 2) / sqrt 5, joins two known directions.
    expected = math.hypot(math.sqrt(0.2), 1.0 - 2.0 * math.sqrt(0.2))
    assert chords_of_path(vectors).tolist() == pytest.approx([0.0, 0.0, expected])
    assert chords_of_path(np.ones((3, 1))).size == 0


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
    c = value_for_all(0.95, arc_length, 1, INFINITE)
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
        arcs += [chords_of_path(one[1:]).sum() for one in paths[:40]]
    high = np.concatenate(high)
    c = value_for_all(0.95, arc_length, 1, degrees, own_scale=True)
    # Four standard errors of a share of 0.05 in 2500 runs are 0.0174.
    assert 0.0276 < np.mean(high > c) < 0.0674
    # The value for one common scale would be crossed more often than that.
    common = value_for_all(0.95, arc_length, 1, degrees, own_scale=False)
    assert np.mean(high > common) > np.mean(high > c)
    # The paths behind the error tell the arc length themselves, without bias: the direction of
    # nu normal paths turns by sqrt(lambda) chi_(nu-1) / chi_nu, whose mean is sqrt(lambda).
    assert np.mean(arcs) == pytest.approx(arc_length, rel=0.03)


# Simulated fields.


def common_and_own(rng, runs, copies):
    """Normal fields with three quarters of their variance common to all points."""
    paths, _ = smooth_paths(rng, runs, copies)
    common = rng.normal(size=(runs, copies, 1))
    return math.sqrt(0.75) * common + 0.5 * paths[:, :, ::3]


def test_simulated_fields_cross_as_often_as_they_may():
    rng = np.random.default_rng(11)
    folds, runs = 10, 250
    fields = common_and_own(rng, runs, folds)
    crossed, crossed_counting = 0, 0
    for field in fields:
        # The mean of the folds over its jackknife error: degrees folds - 1, truth 0.
        mean = field.mean(axis=0)
        moved = (mean - field) / (folds - 1)
        error = np.sqrt((folds - 1) / folds * np.sum(moved**2, axis=0))
        highest = np.max(np.abs(mean / error))
        tail = simulated_tail(0.90, moved, folds - 1.0)
        crossed += highest > stats.t.isf(tail / 2.0, folds - 1)
        chords = chords_of_path(moved)
        counting = tail_for_all(0.90, chords, np.full(chords.size, folds - 1.0), 1, own_scale=True)
        crossed_counting += highest > stats.t.isf(counting / 2.0, folds - 1)
    # Three standard errors of a share of 0.1 in 250 runs are 0.057.
    assert 0.043 < crossed / runs < 0.157
    assert crossed_counting < crossed


def test_simulation_agrees_with_counting_where_crossings_are_rare_and_apart():
    paths, _ = smooth_paths(np.random.default_rng(12), 1, 40)
    counting = tail_for_all(
        0.98, chords_of_path(paths[0]), np.full(paths.shape[2] - 1, 39.0), 1, own_scale=True
    )
    # Some eighty of four thousand draws lie beyond: their number is known to a ninth.
    assert simulated_tail(0.98, paths[0], 39.0) == pytest.approx(counting, rel=0.4)


def test_simulation_is_the_same_every_time_and_knows_its_limits():
    vectors = common_and_own(np.random.default_rng(13), 1, 16)[0]
    assert simulated_tail(0.95, vectors, 15.0) == simulated_tail(0.95, vectors, 15.0)
    holed = np.concatenate((vectors, np.zeros((16, 1)), np.full((16, 1), math.nan)), axis=1)
    assert simulated_tail(0.95, holed, 15.0) == pytest.approx(
        simulated_tail(0.95, vectors, 15.0), rel=1e-9
    )
    assert simulated_tail(0.995, vectors, 15.0) == 0.0
    assert simulated_tail(0.95, np.zeros((16, 5)), 15.0) == 0.0
    # A single point needs the pointwise value.
    assert simulated_tail(0.95, vectors[:, :1], 15.0) == pytest.approx(0.05, rel=0.25)


# Through the whole engine.


def readings(days=40, rows_per_day=6, seed=9):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 24.0, days * rows_per_day)
    shift = (0.5 * rng.normal(size=days)).repeat(rows_per_day)
    y = np.sin(x / 4.0) + shift + 0.2 * rng.normal(size=x.size)
    return x, y, np.arange(days).repeat(rows_per_day)


def curve_of(x, y, day, kind, block="day", **band):
    return make_curve(
        {"wet_bulb_c": x, "power_kw": y, "day": day}, "wet_bulb_c", "power_kw",
        reading=Reading(block=block, folds=16, threads=1),
        smoothing=Smoothing(bandwidth=8.0, widths=8), band=Band(kind=kind, least_rows=0.0, **band),
    )  # fmt: skip


def half_over_error(made):
    return (made.upper - made.lower) / 2.0 / made.std_error


def highest_of_t_fields(rng, units, nu, draws):
    """The highest points of so many t fields, one after the other; `units` has a row per place."""
    highest = []
    for _ in range(draws):
        fit, *errors = (units @ rng.normal(size=units.shape[1]) for _ in range(nu + 1))
        square = sum(one * one for one in errors) / nu
        highest.append(float(np.max(np.abs(fit) / np.sqrt(square))))
    return highest


def test_the_band_for_all_solves_the_equation_of_refitted_paths():
    x, y, day = readings()
    pointwise, for_all = (curve_of(x, y, day, kind) for kind in ("pointwise", "simultaneous"))
    # Beyond 99 % crossings are counted, below it fields are simulated.
    stricter = curve_of(x, y, day, "simultaneous", level=0.995)
    lists = x.tolist(), y.tolist()
    folds = [fold_of_number(one, 16) for one in day.tolist()]
    # Points of the band, and places half-way for the path.
    places = np.linspace(float(x.min()), float(x.max()), 61).tolist()

    def parts(at):
        whole = local.fit_at(at, *lists, 8.0, "biweight", 2)
        moved = [
            local.fit_at(
                at, *(without(one, folds, fold) for one in lists), 8.0, "biweight", 2
            ).value
            - whole.value
            for fold in range(16)
        ]
        shares = [
            math.fsum(w * w for w, own in zip(whole.smoothing, folds, strict=True) if own == fold)
            for fold in range(16)
        ]
        shares = [one / math.fsum(shares) for one in shares]
        degrees = math.exp(-math.fsum(one * math.log(one) for one in shares)) - 1.0
        length = math.sqrt(math.fsum(one * one for one in moved))
        return [one / length for one in moved], degrees

    units, degrees = zip(*(parts(at) for at in places), strict=True)
    degrees = np.array(degrees)
    chords = np.array([math.dist(a, b) for a, b in pairwise(units)])
    between = (degrees[1:] + degrees[:-1]) / 2.0

    def excess_of(log_p):
        c = stats.t.isf(math.exp(log_p) / 2.0, between)
        tails = (1.0 + c**2 / between) ** (-(between - 1.0) / 2.0)
        return chords @ tails / math.pi + math.exp(log_p) - 0.005

    p = math.exp(optimize.bisect(excess_of, math.log(1e-8), math.log(0.005)))
    own = np.interp(for_all.x, places, degrees)
    assert (for_all.status != OUTSIDE).all()
    assert (for_all.status != THIN).all()
    np.testing.assert_allclose(half_over_error(pointwise), stats.t.isf(0.025, own), rtol=2e-2)
    np.testing.assert_allclose(half_over_error(stricter), stats.t.isf(p / 2.0, own), rtol=2e-2)
    nu = round(float(np.median(own)))
    highest = highest_of_t_fields(np.random.default_rng(1), np.array(units), nu, 4000)
    p = 2.0 * stats.t.sf(np.quantile(highest, 0.95), nu)
    # The quantile of 4000 draws has a standard error of some two percent.
    np.testing.assert_allclose(half_over_error(for_all), stats.t.isf(p / 2.0, own), rtol=5e-2)
    np.testing.assert_allclose(for_all.std_error, pointwise.std_error, rtol=1e-12)
    np.testing.assert_allclose(for_all.estimate, pointwise.estimate, rtol=1e-12)


@pytest.mark.parametrize("block", ["day", None])
def test_a_band_for_all_is_wider_and_a_higher_level_wider_still(block):
    x, y, day = readings()
    pointwise = curve_of(x, y, day, "pointwise", block)
    for_all = curve_of(x, y, day, "simultaneous", block)
    strict = curve_of(x, y, day, "simultaneous", block, level=0.99)
    known = np.isfinite(pointwise.lower)
    assert known.sum() > 200
    assert np.all(half_over_error(for_all)[known] > half_over_error(pointwise)[known])
    assert np.all(half_over_error(strict)[known] > half_over_error(for_all)[known])


def test_a_kernel_with_a_jump_has_no_band_for_all():
    x, y, _ = readings()
    data = {"wet_bulb_c": x, "power_kw": y}
    smoothing = Smoothing(kernel="uniform", widths=8)
    with pytest.raises(InputError) as caught:
        make_curve(
            data, "wet_bulb_c", "power_kw", smoothing=smoothing, band=Band(kind="simultaneous")
        )
    assert str(caught.value) == (
        "--band simultaneous must come with a kernel without a jump, but --kernel is uniform; "
        "leave --kernel out."
    )
    made = make_curve(data, "wet_bulb_c", "power_kw", smoothing=smoothing, band=Band(points=9))
    assert np.isfinite(made.lower).all()
