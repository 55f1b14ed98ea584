"""Standard errors, bands, effective rows and status, against plain sums and in simulations."""

import math

import numpy as np
import pytest
from scipy import stats

from fastsmooth import Band, Reading, Smoothing, make_curve
from tests import cases
from tests.oracle import local, many_rows

FEW = Reading(folds=8, threads=1)
DEGREES = {"local-constant": 0, "local-linear": 1}


def curve(x, y, h=None, *, estimator="local-linear", kernel="biweight", columns=None, **band):
    data = {"x": x, "y": y, **(columns or {})}
    names = {name: name for name in (columns or {})}
    smoothing = Smoothing(estimator=estimator, kernel=kernel, bandwidth=h, widths=8)
    return make_curve(data, "x", "y", reading=FEW, smoothing=smoothing, band=Band(**band), **names)


@pytest.fixture(scope="module")
def rows():
    made = cases.make_rows("uniform", 300, seed=8)
    return made.wet_bulb_c, made.power_kw


AT = (-4.9, -2.0, 3.3, 11.0, 20.0, 27.5)


@pytest.mark.parametrize("estimator", DEGREES)
@pytest.mark.parametrize("kernel", local.KERNELS)
def test_standard_errors_are_those_of_plain_sums(rows, kernel, estimator):
    """Constant noise: s^2 = RSS / (n - 2 tr L + tr L L'), standard error = s sqrt(sum l^2)."""
    x, y = rows
    h, degree = 4.37, DEGREES[estimator]
    made = curve(
        x, y, h, estimator=estimator, kernel=kernel, at=AT, bias="ignored", noise="constant"
    )
    exact = local.criteria(x.tolist(), y.tolist(), h, kernel, degree)
    variance = exact.residual / exact.degrees
    # Rows in the end bins of a uniform window count or not.
    close = 2e-2 if kernel == "uniform" else 2e-4
    assert made.residual_sd == pytest.approx(np.full(len(AT), math.sqrt(variance)), rel=close)
    quantile = stats.t.ppf(0.975, exact.degrees)
    for p, at in enumerate(AT):
        fit = local.fit_at(at, x.tolist(), y.tolist(), h, kernel, degree)
        error = math.sqrt(variance * fit.sum_of_squares)
        assert made.std_error[p] == pytest.approx(error, rel=close)
        assert made.effective_rows[p] == pytest.approx(1.0 / fit.sum_of_squares, rel=2 * close)
        half = (made.upper[p] - made.lower[p]) / 2.0
        assert half / made.std_error[p] == pytest.approx(quantile, rel=1e-4)
        middle = (made.upper[p] + made.lower[p]) / 2.0
        assert middle == pytest.approx(made.estimate[p], abs=1e-10)


@pytest.mark.parametrize("kernel", ["biweight", "tricube", "gaussian"])
def test_the_corrected_band_is_that_of_the_local_parabola(rows, kernel):
    x, y = rows
    h = 5.11
    made = curve(x, y, h, kernel=kernel, at=AT, bias="corrected", noise="constant")
    exact = local.criteria(x.tolist(), y.tolist(), h, kernel, 1)
    for p, at in enumerate(AT):
        parabola = local.fit_at(at, x.tolist(), y.tolist(), h, kernel, 2)
        middle = (made.upper[p] + made.lower[p]) / 2.0
        assert middle == pytest.approx(parabola.value, abs=2e-4)
        error = math.sqrt(exact.residual / exact.degrees * parabola.sum_of_squares)
        assert made.std_error[p] == pytest.approx(error, rel=3e-4)
        line = local.fit_at(at, x.tolist(), y.tolist(), h, kernel, 1)
        assert made.estimate[p] == pytest.approx(line.value, abs=1e-5)


@pytest.mark.parametrize("kernel", [k for k in local.KERNELS if k != "uniform"])
def test_slopes(rows, kernel):
    """The local line's own coefficient; of the local constant, the curve's derivative."""
    x, y = rows
    h = 4.37
    line = curve(x, y, h, kernel=kernel, at=AT)
    expected = many_rows.fit_many(AT, x, y, h, kernel, 1)[1]
    assert line.slope == pytest.approx(expected, abs=2e-3 if kernel == "epanechnikov" else 5e-4)
    constant = curve(x, y, h, kernel=kernel, estimator="local-constant", at=AT)
    step = 1e-5
    up, down = (many_rows.fit_many(np.array(AT) + s, x, y, h, kernel, 0)[0] for s in (step, -step))
    # The triangular kernel's own slope jumps at both ends and in the middle.
    close = {"triangular": 0.02, "epanechnikov": 0.02}.get(kernel, 2e-3)
    assert constant.slope == pytest.approx((up - down) / (2.0 * step), abs=close)


def test_the_uniform_kernels_constant_has_no_slope(rows):
    made = curve(*rows, 4.37, kernel="uniform", estimator="local-constant", at=AT)
    assert np.isnan(made.slope).all()
    assert np.isfinite(made.estimate).all()


# Weights.


def test_only_the_ratio_of_weights_matters(rows):
    x, y = rows
    weight = cases.precisions(x.size)
    one, other = (
        curve(x, y, 4.37, columns={"weight": scale * weight}, at=AT) for scale in (1.0, 1024.0)
    )
    for name in ("estimate", "slope", "std_error", "lower", "upper", "effective_rows"):
        assert getattr(other, name) == pytest.approx(getattr(one, name), rel=1e-9), name
    # A row of weight 1 is another row then.
    assert other.residual_sd == pytest.approx(32.0 * one.residual_sd, rel=1e-9)


def test_weighted_standard_errors_are_those_of_plain_sums(rows):
    x, y = rows
    weight = cases.precisions(x.size)
    made = curve(x, y, 4.37, columns={"weight": weight}, at=AT, bias="ignored", noise="constant")
    exact = local.criteria(x.tolist(), y.tolist(), 4.37, "biweight", 1, weight.tolist())
    # Squares l_i^2 / w_i are the variances of the rows' shares.
    share = [
        math.fsum(a * a / w for a, w in zip(fit.smoothing, weight.tolist(), strict=True))
        for fit in (
            local.fit_at(at, x.tolist(), y.tolist(), 4.37, "biweight", 1, weight.tolist())
            for at in AT
        )
    ]
    implied = made.std_error / np.sqrt(share)
    assert implied == pytest.approx(np.full(len(AT), implied[0]), rel=1e-4)
    assert made.residual_sd[0] == pytest.approx(implied[0], rel=1e-4)
    assert exact.residual / made.residual_sd[0] ** 2 == pytest.approx(
        x.size - exact.trace, rel=0.05
    )


def test_a_counted_row_is_so_many_rows(rows):
    x, y = rows
    count = cases.repeats(x.size)
    counted = curve(x, y, 4.37, columns={"count": count}, at=AT, noise="constant")
    times = count.astype(int)
    repeated = curve(np.repeat(x, times), np.repeat(y, times), 4.37, at=AT, noise="constant")
    for name in ("estimate", "slope", "std_error", "lower", "upper", "effective_rows"):
        assert getattr(counted, name) == pytest.approx(getattr(repeated, name), rel=1e-8), name
    assert counted.statuses == repeated.statuses


# Noise that changes along x.


def test_local_noise_follows_the_truth():
    rng = np.random.default_rng(6)
    x = rng.uniform(0.0, 10.0, 20_000)
    sd = 0.2 + 0.1 * x
    made = curve(x, np.sin(x) + sd * rng.normal(size=x.size), 0.6, points=40)
    inside = (made.x > 0.5) & (made.x < 9.5)
    truth = 0.2 + 0.1 * made.x
    assert np.abs(made.residual_sd / truth - 1.0)[inside].max() < 0.1
    even = curve(x, np.sin(x) + sd * rng.normal(size=x.size), 0.6, points=40, noise="constant")
    assert np.ptp(even.residual_sd) < 1e-9
    overall = math.sqrt(float(np.mean(sd**2)))
    assert even.residual_sd[0] == pytest.approx(overall, rel=0.02)


def test_even_noise_is_found_even():
    rng = np.random.default_rng(7)
    x = rng.uniform(0.0, 10.0, 20_000)
    made = curve(x, np.sin(x) + 0.5 * rng.normal(size=x.size), 0.6, points=40)
    assert made.residual_sd == pytest.approx(np.full(40, 0.5), rel=0.06)


# Coverage: sin(2 pi x), 400 rows, noise 0.3; nine points a run.

PLACES = np.linspace(0.1, 0.9, 9)


def coverage(runs, h, noise_of=None, kernel="epanechnikov", **band):
    """Share of the runs whose band holds the true sine, per point."""
    hits = np.zeros(PLACES.size)
    truth = np.sin(2.0 * math.pi * PLACES)
    for run in range(runs):
        rng = np.random.default_rng(1000 + run)
        x = rng.uniform(0.0, 1.0, 400)
        sd = 0.3 if noise_of is None else noise_of(x)
        y = np.sin(2.0 * math.pi * x) + sd * rng.normal(size=400)
        made = curve(x, y, h, kernel=kernel, at=tuple(PLACES.tolist()), **band)
        hits += (made.lower <= truth) & (truth <= made.upper)
    return hits / runs


def test_the_corrected_band_covers_the_mean():
    covered = coverage(150, 0.13)
    # Nine points of a run hang together; 0.9 % is a generous standard error of their mean.
    assert abs(covered.mean() - 0.95) < 0.03
    assert covered.min() > 0.90


def test_the_uncorrected_band_does_not():
    """At h = 0.13 the bias at the crest is several standard errors."""
    covered = coverage(50, 0.13, bias="ignored")
    assert covered.mean() < 0.85
    assert covered.min() < 0.6


def test_noise_that_changes_along_x_is_covered_where_it_is_taken_as_such():
    def noise_of(x):
        return 0.1 + 0.8 * x

    covered = coverage(100, 0.15, noise_of)
    assert abs(covered.mean() - 0.95) < 0.035
    assert covered.min() > 0.87
    constant = coverage(40, 0.15, noise_of, noise="constant")
    # Too wide where it is quiet, too narrow where it is loud.
    assert constant[0] == 1.0
    assert constant[-1] < 0.90


@pytest.mark.parametrize("level", [0.5, 0.8, 0.99])
def test_the_level_is_kept(rows, level):
    x, y = rows
    made = curve(x, y, 4.37, at=AT, level=level, noise="constant")
    degrees = local.criteria(x.tolist(), y.tolist(), 4.37, "biweight", 1).degrees
    half = (made.upper - made.lower) / 2.0
    quantile = stats.t.ppf(0.5 + level / 2.0, degrees)
    assert half / made.std_error == pytest.approx(np.full(len(AT), quantile), rel=1e-3)


def test_a_band_for_the_whole_curve_is_wider_by_the_tube_formula():
    """Local line, Epanechnikov, n = 400: c = 2.946 at h = 0.15 for known noise.

    Sun & Loader (1994, Ann. Stat. 22:1328); estimated noise adds a little.
    """
    rng = np.random.default_rng(0)
    x = (np.arange(400) + 0.5) / 400
    y = np.sin(2.0 * math.pi * x) + 0.3 * rng.normal(size=400)
    options = {"kernel": "epanechnikov", "bias": "ignored", "noise": "constant", "points": 200}
    made = curve(x, y, 0.15, kind="simultaneous", least_rows=5.0, **options)
    pointwise = curve(x, y, 0.15, kind="pointwise", least_rows=5.0, **options)
    value = (made.upper - made.lower) / 2.0 / made.std_error
    assert value == pytest.approx(np.full(200, value[0]), rel=1e-6)
    assert 2.93 < value[0] < 3.02
    assert made.std_error == pytest.approx(pointwise.std_error, rel=1e-12)
    assert ((pointwise.upper - pointwise.lower) < (made.upper - made.lower)).all()


# Status.


def test_status_along_a_gap():
    """Rows from 0 to 10 and from 20 to 30: nothing is claimed in the middle of the gap."""
    rng = np.random.default_rng(0)
    x = np.concatenate([rng.uniform(0.0, 10.0, 3000), rng.uniform(20.0, 30.0, 3000)])
    x = np.append(x, [0.0, 10.0, 20.0, 30.0])
    y = np.where(x < 15.0, 1.0, 5.0) + 0.1 * rng.normal(size=x.size)
    at = (-0.1, 0.0, 0.5, 5.0, 9.5, 11.0, 15.0, 19.0, 20.5, 25.0, 30.0, 30.1)
    made = curve(x, y, 2.0, at=at, least_rows=10.0)
    assert made.statuses == [
        "outside", "edge", "edge", "ok", "ok", "outside", "outside", "outside", "ok", "ok",
        "edge", "outside",
    ]  # fmt: skip
    nothing = made.status == 3
    for name in ("estimate", "slope", "std_error", "lower", "upper", "effective_rows"):
        assert np.isnan(getattr(made, name)[nothing]).all(), name
        assert np.isfinite(getattr(made, name)[~nothing]).all(), name


def test_a_window_that_reaches_across_a_gap_is_used():
    rng = np.random.default_rng(0)
    x = np.concatenate([rng.uniform(0.0, 10.0, 3000), rng.uniform(11.0, 20.0, 3000)])
    made = curve(x, 2.0 * x, 3.0, at=(10.5,), least_rows=10.0)
    assert made.statuses == ["ok"]
    assert made.estimate[0] == pytest.approx(21.0, abs=1e-4)


def test_nothing_beyond_the_data_even_within_reach():
    """A point must lie between rows of its window: no extrapolation, ever."""
    x = np.linspace(0.0, 10.0, 500)
    for kernel in ("biweight", "gaussian"):
        ends = (-1e-6, 0.0, 10.0, 10.0 + 1e-6)
        made = curve(x, x, 2.0, kernel=kernel, at=ends, least_rows=10.0)
        assert made.statuses == ["outside", "edge", "edge", "outside"]


def test_few_effective_rows_are_thin():
    x = np.concatenate([np.linspace(0.0, 10.0, 400), np.linspace(10.0, 20.0, 21)])
    y = np.sin(x) + 0.1 * np.cos(50.0 * np.arange(x.size))
    made = curve(x, y, 2.0, at=(5.0, 15.0))
    assert made.statuses == ["ok", "thin"]
    assert made.effective_rows[1] < 30.0 < made.effective_rows[0]
    # Thin is said, not hidden.
    assert np.isfinite(made.estimate).all()
    assert curve(x, y, 2.0, at=(5.0, 15.0), least_rows=3.0).statuses == ["ok", "ok"]


def test_effective_rows_of_a_full_uniform_window_are_its_rows():
    x = np.arange(2000) / 100.0
    made = curve(x, x, 2.005, kernel="uniform", estimator="local-constant", at=(10.0,))
    assert made.effective_rows[0] == pytest.approx(401.0, abs=1.0)
