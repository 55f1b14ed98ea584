"""Plug-in bandwidths against published constants, the exact optimum, and the rule on raw rows."""

import math
import time

import numpy as np
import pytest
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import given, settings
from hypothesis import strategies as st

from fastsmooth import plugin
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.errors import InputError
from fastsmooth.plan import Columns, Plan
from fastsmooth.plugin import pilot_constants, plug_in_bandwidth, rule_of_thumb
from tests.oracle import plugin as oracle

EPANECHNIKOV = SHAPES["epanechnikov"]

# Name: mean of y over x in [0, 1], its second derivative, standard deviation of the noise.
CURVES = {
    "one wave": (lambda x: np.sin(2 * np.pi * x), 0.3),
    "bump": (lambda x: x + 2 * np.exp(-16 * (2 * x - 1) ** 2), 0.3),
    "five half waves": (lambda x: np.sin(5 * np.pi * x), 0.5),
}


def make_pyramid(x, y, bins=8192, weight=None, count=None):
    plan = Plan.simple(low=float(x.min()), high=float(x.max()), bins=bins, folds=2)
    if weight is not None:
        parts = {**vars(plan), "columns": Columns("x", "y", weight="w")}
        plan = Plan(**{name: parts[name] for name in Plan.__dataclass_fields__})
    table = BinTable(plan)
    table.add_rows(0, x, y, weight, count)
    assert table.tally.used == x.shape[0]
    return Pyramid(table)


def draw(curve, n, seed):
    mean, sd = CURVES[curve]
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 1.0, n)
    return x, mean(x) + sd * rng.normal(size=n)


def plug_in(x, y, shape=EPANECHNIKOV, **options):
    return plug_in_bandwidth(make_pyramid(x, y, **options), shape, "local-linear")


# Constants.


# Gaussian: Ruppert, Sheather & Wand (1995). Others follow from the equivalent kernels of Fan &
# Gijbels (1996), section 3.2, and were worked out apart from this code, by computer algebra.
PUBLISHED = {
    "uniform": (2.06014, 2.34826, 1.86274),
    "triangular": (2.34063, 2.66797, 2.57077),
    "epanechnikov": (2.27458, 2.59269, 2.34294),
    "biweight": (2.52492, 2.87803, 2.77213),
    "triweight": (2.76095, 3.14707, 3.14677),
    "tricube": (2.59985, 2.96344, 2.76170),
    "gaussian": (0.80101, 0.91303, 1.05551),
}


@pytest.mark.parametrize("name", SHAPES)
def test_constants_have_all_published_digits(name):
    got = pilot_constants(SHAPES[name])
    values = (got.curvature_negative, got.curvature_positive, got.noise)
    np.testing.assert_allclose(values, PUBLISHED[name], rtol=0.0, atol=5.001e-6)


def test_gaussian_constants_are_the_published_closed_forms():
    # Ruppert, Sheather & Wand (1995), section 3.
    got = pilot_constants(SHAPES["gaussian"])
    assert got.curvature_negative == pytest.approx((3 / (8 * math.sqrt(math.pi))) ** (1 / 7), 1e-13)
    assert got.curvature_positive == pytest.approx(
        (15 / (16 * math.sqrt(math.pi))) ** (1 / 7), 1e-13
    )
    twicing = 0.5 + 2 * math.sqrt(2) - 4 * math.sqrt(3) / 3
    assert got.noise == pytest.approx((4 * twicing / math.sqrt(2 * math.pi)) ** (1 / 9), 1e-13)


@pytest.mark.parametrize(
    ("name", "twicing", "mu2"),
    [
        ("uniform", 5 / 6, 1 / 3),
        ("triangular", 298 / 315, 1 / 6),
        ("epanechnikov", 8387 / 9856, 1 / 5),
        ("biweight", 1.006638558, 1 / 7),
        ("triweight", 1.152790866, 1 / 9),
        ("tricube", 1.005497903, 35 / 243),
    ],
)
def test_noise_constant_rests_on_the_exact_roughness(name, twicing, mu2):
    # R(2 K - K*K) by exact integration of the piecewise polynomials.
    assert pilot_constants(SHAPES[name]).noise ** 9 * mu2**4 / 4 == pytest.approx(twicing, 1e-9)


@pytest.mark.parametrize("name", SHAPES)
def test_constants_equal_sums_over_a_fine_grid(name):
    shape = SHAPES[name]
    step = shape.support / 4000
    u = (np.arange(8000) + 0.5) * step - shape.support
    k = np.array([shape(one) for one in u.tolist()])
    powers = np.array([u**j for j in range(4)])
    second = (np.linalg.inv((powers * k) @ powers.T * step) @ powers)[2] * k
    roughness, bias = np.sum(second**2) * step, np.sum(u**4 * second) * step
    sums_of_two = (np.arange(15_999) + 1) * step - 2 * shape.support
    at_sums = np.array([shape(one) for one in sums_of_two.tolist()])
    twicing = np.sum((2 * at_sums - np.convolve(k, k) * step) ** 2) * step
    got = pilot_constants(shape)
    assert got.curvature_negative == pytest.approx((24 * roughness / bias) ** (1 / 7), 1e-4)
    assert got.curvature_positive == pytest.approx((60 * roughness / bias) ** (1 / 7), 1e-4)
    mu2 = np.sum(u**2 * k) * step
    assert got.noise == pytest.approx((4 * twicing / mu2**4) ** (1 / 9), 1e-4)


# How near the best bandwidth.


def optimum(x, curve):
    """Bandwidth with the least mean of squared bias plus variance at these x; Epanechnikov."""
    mean, sd = CURVES[curve]
    errors = []
    grid = np.geomspace(0.7, 1.4, 7) * {"one wave": 0.064, "bump": 0.040}.get(curve, 0.037)
    for h in grid:
        u = (x - x[:, None]) / h
        k = oracle.epanechnikov(u)
        s0, s1, s2 = k.sum(1), (k * u).sum(1), (k * u * u).sum(1)
        lines = k * (s2[:, None] - s1[:, None] * u) / (s0 * s2 - s1**2)[:, None]
        errors.append(np.mean((lines @ mean(x) - mean(x)) ** 2 + sd**2 * np.sum(lines**2, axis=1)))
    best = int(np.argmin(errors))
    assert 0 < best < len(grid) - 1
    a, b, c = errors[best - 1 : best + 2]
    return grid[best] * (grid[1] / grid[0]) ** (0.5 * (a - c) / (a - 2 * b + c))


@pytest.mark.parametrize(
    ("curve", "expected", "thumb"),
    [("one wave", 0.98, 0.92), ("bump", 1.04, 1.34), ("five half waves", 1.00, 2.61)],
)
def test_bandwidth_is_near_the_exact_optimum(curve, expected, thumb):
    # Expected ratios: means of other samples of the same design and noise, computed elsewhere.
    mean, sd = CURVES[curve]
    rng = np.random.default_rng(1995)
    x = np.sort(rng.uniform(0.0, 1.0, 1600))
    best = optimum(x, curve)
    ratios, thumbs = [], []
    for _ in range(6):
        pyramid = make_pyramid(x, mean(x) + sd * rng.normal(size=x.size))
        ratios.append(plug_in_bandwidth(pyramid, EPANECHNIKOV, "local-linear") / best)
        thumbs.append(rule_of_thumb(pyramid, EPANECHNIKOV) / best)
    assert np.mean(ratios) == pytest.approx(expected, abs=0.07)
    assert min(ratios) > 0.8
    assert max(ratios) < 1.2
    assert np.mean(thumbs) == pytest.approx(thumb, rel=0.12)


def test_a_thousand_million_rows_meet_the_asymptotic_formula():
    # Rows in pairs at m - sd and m + sd: variance sd^2, and a mean without noise.
    x = np.repeat((np.arange(20_000) + 0.5) / 20_000, 2)
    y = np.sin(2 * np.pi * x) + 0.3 * np.tile([-1.0, 1.0], 20_000)
    count = np.full(40_000, 25_000.0)
    inner = np.abs(x - 0.5) <= 0.45
    theta22 = np.mean(inner * ((2 * np.pi) ** 2 * np.sin(2 * np.pi * x)) ** 2)
    expected = (15 * 0.3**2 * 0.9 / (theta22 * 1e9)) ** 0.2
    assert plug_in(x, y, count=count) == pytest.approx(expected, rel=0.01)


def test_time_does_not_depend_on_rows():
    x, y = draw("bump", 100_000, 1)
    pyramid = make_pyramid(x, y, count=np.full(x.size, 1e4))
    seconds = []
    for _ in range(7):
        start = time.thread_time()
        plug_in_bandwidth(pyramid, SHAPES["biweight"], "local-linear")
        seconds.append(time.thread_time() - start)
    assert min(seconds) < 0.03


# Against the rule on raw rows.


@pytest.mark.parametrize(
    ("curve", "n", "name"),
    [
        *(("bump", n, "epanechnikov") for n in (150, 400)),
        *((curve, 2000, name) for curve in CURVES for name in oracle.KERNELS),
        *((curve, 5000, "biweight") for curve in CURVES),
        ("one wave", 20_000, "epanechnikov"),
        ("five half waves", 8000, "gaussian"),
    ],
)
def test_bins_agree_with_raw_rows(curve, n, name):
    x, y = draw(curve, n, n + 2)
    expected = oracle.plug_in(x, y, name, every=max(1, n // 1000))
    # Few rows hardly share bins; and there the noise's degrees of freedom show.
    assert plug_in(x, y, SHAPES[name]) == pytest.approx(expected, rel=0.01 if n > 400 else 5e-4)


def test_lone_places_agree_with_raw_rows():
    # Windows around the lone places hold no other, so that they have no line.
    rng = np.random.default_rng(4)
    x = np.concatenate([np.linspace(0.0, 0.3, 500), np.arange(0.33, 1.01, 0.03)])
    y = np.sin(5 * np.pi * x) + 0.1 * rng.normal(size=x.size)
    data = plugin._data(make_pyramid(x, y))
    pilot = plugin._blocked_quartics(data, 5)
    weight_and_window = (np.ones(x.size), oracle.epanechnikov, 1.0, 0.02)
    got = plugin._local_variance(data, EPANECHNIKOV, 0.02, pilot)
    assert got == pytest.approx(oracle.line_variance(x, y, *weight_and_window), rel=1e-3)
    # Nor have they a cubic: there the quartic's own second derivative stands in.
    inner, lone = np.abs(data.z(x)) <= 0.9, x > 0.31
    cubic = [oracle.second_derivative(x, y, *weight_and_window, here) for here in x[inner & ~lone]]
    expected = np.sum(np.square(cubic)) * data.half**4 + np.sum(pilot.curvature[inner & lone] ** 2)
    got = plugin._local_theta22(data, EPANECHNIKOV, 0.02, pilot)
    # Where the dense rows end the cubic changes fast, and a bin's centre is not its row's place.
    assert got == pytest.approx(expected / x.size, rel=0.02)


def test_rows_without_degrees_of_freedom_take_the_pilots_noise():
    x = np.array([0.0, 0.2, 0.4, 0.6, 0.8, 1.0])
    data = plugin._data(make_pyramid(x, np.array([0.0, 3.0, 1.0, 2.0, 5.0, 4.0])))
    pilot = plugin._blocked_quartics(data, 5)
    assert plugin._local_variance(data, EPANECHNIKOV, 0.1, pilot) == pilot.variance > 0.0


@pytest.mark.parametrize("name", oracle.KERNELS)
def test_rule_of_thumb_agrees_with_raw_rows(name):
    x, y = draw("bump", 3000, 8)
    order = np.argsort(x)
    expected = oracle.rule_of_thumb(x[order], y[order], name)
    assert rule_of_thumb(make_pyramid(x, y), SHAPES[name]) == pytest.approx(expected, rel=1e-3)


def test_rounded_x_agrees_with_raw_rows():
    x, y = draw("bump", 4000, 3)
    x = np.round(x, 3)
    assert plug_in(x, y) == pytest.approx(oracle.plug_in(x, y, "epanechnikov"), rel=0.01)


def test_weights_agree_with_raw_rows():
    rng = np.random.default_rng(6)
    x = rng.uniform(0.0, 1.0, 3000)
    weight = rng.gamma(4.0, 0.25, 3000) * np.where(x > 0.5, 3.0, 1.0)
    y = CURVES["bump"][0](x) + 0.4 * rng.normal(size=3000) / np.sqrt(weight)
    expected = oracle.plug_in(x, y, "epanechnikov", weight)
    got = plug_in(x, y, weight=weight)
    assert got == pytest.approx(expected, rel=0.01)
    assert abs(plug_in(x, y) / expected - 1) > 0.03  # the weights do matter
    assert plug_in(x, y, weight=1000.0 * weight) == pytest.approx(got, rel=1e-9)


def test_counts_are_repeated_rows():
    x, y = draw("five half waves", 1500, 5)
    count = np.random.default_rng(5).integers(1, 5, x.size)
    repeated = plug_in(np.repeat(x, count), np.repeat(y, count))
    assert plug_in(x, y, count=count.astype(float)) == pytest.approx(repeated, rel=1e-9)
    both = plug_in(x, y, weight=np.ones(x.size), count=count.astype(float))
    assert both == pytest.approx(repeated, rel=1e-9)


# What must not matter.


@settings(max_examples=25, deadline=None)
@given(
    st.floats(-1e3, 1e3), st.floats(1e-3, 1e6), st.floats(-100.0, 100.0),
    st.floats(1e-6, 1e6), st.sampled_from([-1.0, 1.0]),
)  # fmt: skip
def test_shift_and_scale_of_x_and_y_do_not_matter(x_shift, x_scale, y_shift, y_scale, sign):
    x, y = draw("bump", 1000, 9)
    expected = plug_in(x, y)
    moved = plug_in((x + x_shift) * x_scale, sign * (y + y_shift) * y_scale)
    assert moved / x_scale == pytest.approx(expected, rel=1e-3)


def test_a_slope_does_not_matter():
    x, y = draw("bump", 5000, 9)
    expected = plug_in(x, y, bins=1024)
    assert plug_in(x, y + 500.0 * x, bins=1024) == pytest.approx(expected, rel=1e-3)


def test_seconds_since_1970_are_as_good_as_days():
    x, y = draw("bump", 3000, 2)
    assert plug_in(1.7e9 + 86_400.0 * x, y) / 86_400 == pytest.approx(plug_in(x, y), rel=1e-3)


def test_kernels_agree_on_the_canonical_scale():
    x, y = draw("one wave", 30_000, 4)
    pyramid = make_pyramid(x, y)
    on_scale = [
        plug_in_bandwidth(pyramid, shape, "local-linear") / shape.canonical_bandwidth
        for shape in SHAPES.values()
    ]
    assert max(on_scale) < 1.01 * min(on_scale)


def test_number_of_bins_does_not_matter():
    x, y = draw("bump", 50_000, 7)
    assert plug_in(x, y, bins=1024) == pytest.approx(plug_in(x, y, bins=65_536), rel=0.01)


def test_both_estimators_get_the_same_bandwidth():
    pyramid = make_pyramid(*draw("bump", 1000, 1))
    linear = plug_in_bandwidth(pyramid, EPANECHNIKOV, "local-linear")
    assert plug_in_bandwidth(pyramid, EPANECHNIKOV, "local-constant") == linear


# Data without curvature or noise, and data that do not suffice.


@pytest.mark.parametrize("offset", [0.0, 7e3])
def test_a_straight_line_gets_half_the_range(offset):
    x = np.linspace(0.0, 10.0, 2000)
    pyramid = make_pyramid(x, 3.0 * x + offset)
    assert plug_in_bandwidth(pyramid, EPANECHNIKOV, "local-linear") == pytest.approx(5.0)
    assert rule_of_thumb(pyramid, EPANECHNIKOV) == pytest.approx(5.0)


def test_constant_y_gets_half_the_range():
    x = np.linspace(0.0, 10.0, 2000)
    assert plug_in(x, np.zeros(2000)) == pytest.approx(5.0)


def test_a_quartic_without_noise_gets_five_gaps():
    x = np.linspace(-1.0, 1.0, 501)
    assert plug_in(x, x**4) == pytest.approx(5.0 * 0.004, rel=1e-6)


def test_gaps_narrower_than_a_bin_count_as_a_bin():
    # Pairs of places on either side of a bin's edge: more than half of the gaps are tiny.
    edges = np.arange(1, 512) / 512
    x = np.sort(np.concatenate([edges - 1e-6, edges + 1e-6]))
    assert np.median(np.diff(x)) < 1e-5
    table = BinTable(Plan.simple(low=0.0, high=1.0, bins=1024, folds=2))
    table.add_rows(0, x, x**4)
    h = plug_in_bandwidth(Pyramid(table), EPANECHNIKOV, "local-linear")
    assert h == pytest.approx(5.0 / 1024, rel=1e-6)


def test_a_middle_without_curvature_leaves_the_rule_of_thumb():
    # Local cubics in the middle see zeros only; the quartic also bends for the ends.
    x = np.concatenate([np.zeros(30), np.linspace(0.3, 0.7, 2000), np.ones(30)])
    y = np.where((x < 0.2) | (x > 0.8), 1.0, 0.0) + np.tile([-0.001, 0.001], 1030) * (x > 0.8)
    pyramid = make_pyramid(x, y)
    expected = rule_of_thumb(pyramid, EPANECHNIKOV)
    assert expected < 0.4
    assert plug_in_bandwidth(pyramid, EPANECHNIKOV, "local-linear") == expected


@pytest.mark.parametrize("slope", [0.0, 3.0])
def test_noise_around_a_line_gets_a_wide_window(slope):
    rng = np.random.default_rng(3)
    for _ in range(5):
        x = rng.uniform(0.0, 10.0, 2000)
        h = plug_in(x, slope * x + rng.normal(size=2000))
        assert 0.8 < h <= 5.0


@pytest.mark.parametrize(
    ("clumps", "n", "share"), [(40, 20_000, 0.02), (12, 400_000, 0.02), (12, 400_000, 0.12)]
)
def test_rows_in_narrow_clumps(clumps, n, share):
    # A pilot window over the twelve clumps holds one: too narrow for a cubic, so the quartic
    # stands in. The cubic's noise would give a width twenty times too narrow.
    rng = np.random.default_rng(2)
    x = (rng.integers(0, clumps, n) + rng.uniform(0.0, share, n)) / clumps
    y = np.sin(2 * np.pi * x) + 0.3 * rng.normal(size=n)
    asymptotic = (15 * 0.3**2 / (8 * math.pi**4 * n)) ** 0.2
    assert plug_in(x, y) == pytest.approx(asymptotic, rel=0.2)


def test_half_the_rows_at_one_place():
    # A block of such rows alone has no quartic, so fewer blocks must do.
    x, y = draw("one wave", 4000, 11)
    x[::2] = 0.5
    y[::2] -= y[::2].mean()
    inner = np.abs(x - 0.5) <= 0.45
    theta22 = np.mean(inner * ((2 * np.pi) ** 2 * np.sin(2 * np.pi * x)) ** 2)
    noise = 0.3**2 * 0.5 + np.var(y[::2]) * 0.5
    expected = (15 * noise * 0.9 / (theta22 * x.size)) ** 0.2
    assert plug_in(x, y) == pytest.approx(expected, rel=0.2)


places = st.one_of(
    st.floats(-5.0, 5.0),
    st.integers(-5, 5).map(float),
    st.integers(0, 9).map(lambda k: 1.0 + k * 2.0**-52),
)


@settings(max_examples=150, deadline=None)
@given(
    st.lists(st.tuples(places, st.floats(-1e6, 1e6)), min_size=2, max_size=60),
    st.sampled_from(sorted(SHAPES)),
    st.sampled_from([16, 1024]),
)
def test_any_rows_give_a_width_within_limits_or_are_refused(rows, name, bins):
    x, y = np.array(rows).T.copy()
    if np.ptp(x) <= 1e-9:
        x[0] += 1.0
    pyramid = make_pyramid(x, y, bins=bins)
    half, width = np.ptp(x) / 2, pyramid.plan.width
    for rule in (lambda p, s: plug_in_bandwidth(p, s, "local-linear"), rule_of_thumb):
        try:
            h = rule(pyramid, SHAPES[name])
        except InputError as error:
            refusal = str(error)
        else:
            assert np.unique(x).size >= 6
            assert min(5.0 * width, half - width) * (1 - 1e-9) <= h <= half * (1 + 1e-9)
            continue
        if "lie there" in refusal:
            assert np.mean(np.abs(x - x.min() - half) <= 0.9 * half - width) < 0.5
        else:
            assert "lie at" in refusal
            assert np.unique(np.floor((x - x.min()) / width)).size <= 6


def test_too_few_places_are_refused():
    x = np.repeat(np.arange(5.0), 20)
    with pytest.raises(InputError) as refusal:
        plug_in(x, np.sin(x))
    assert str(refusal.value) == (
        "DATA must hold rows at 6 or more places of x for a plug-in bandwidth, but the 100 rows "
        "lie at 5; use --criterion leave-one-out or give --bandwidth."
    )


def test_an_empty_table_is_refused():
    pyramid = Pyramid(BinTable(Plan.simple(low=0.0, high=1.0, bins=1024, folds=2)))
    with pytest.raises(InputError, match="the 0 rows lie at 0"):
        rule_of_thumb(pyramid, EPANECHNIKOV)


def test_rows_at_the_ends_only_are_refused():
    x = np.append(np.linspace(0.0, 1.0, 999), 1000.0)
    with pytest.raises(InputError) as refusal:
        plug_in(x, np.sin(x))
    assert str(refusal.value) == (
        "DATA must hold most rows in the middle nine tenths of the range of x for a plug-in "
        "bandwidth, but 0.0% of them lie there; narrow --range or use --criterion leave-one-out."
    )


def test_an_unknown_estimator_is_refused():
    pyramid = make_pyramid(*draw("bump", 100, 1))
    with pytest.raises(InputError, match="--estimator must be one of local-linear"):
        plug_in_bandwidth(pyramid, EPANECHNIKOV, "local-quadratic")
