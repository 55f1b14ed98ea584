"""Kernel sums into fits, chords and criteria, against plain loops."""

import math

import numpy as np
import pytest
from fastsmooth.kernels import localfit
from hypothesis import given
from hypothesis import strategies as st

from tests.oracle.local import KERNELS, fit_at

LEAST_WEIGHT, LEAST_SPREAD = 1e-9, 1e-12


def sums_of(x, y, at, h, kernel):
    u = [(one - at) / h for one in x]
    k = [KERNELS[kernel](one) for one in u]
    s = [math.fsum(a * v**j for a, v in zip(k, u, strict=True)) for j in range(3)]
    t = [math.fsum(a * v**j * b for a, v, b in zip(k, u, y, strict=True)) for j in range(2)]
    return s, t


def fits_of(s, t, at_zero, least_weight=LEAST_WEIGHT, least_spread=LEAST_SPREAD):
    out = np.empty((6, np.shape(s)[1]))
    localfit.fit_bins(
        np.ascontiguousarray(s), np.ascontiguousarray(t), at_zero, least_weight, least_spread, out
    )
    return out


@pytest.mark.parametrize("kernel", KERNELS)
def test_fits_are_those_of_plain_least_squares(kernel):
    rng = np.random.default_rng(2)
    x, y = rng.uniform(0.0, 30.0, 80).tolist(), (20.0 + rng.normal(size=80)).tolist()
    places, h = [0.0, 7.3, 15.0, 29.0], 6.0
    sums = [sums_of(x, y, at, h, kernel) for at in places]
    s = np.array([one[0] for one in sums]).T
    t = np.array([one[1] for one in sums]).T
    out = fits_of(s, t, KERNELS[kernel](0.0))
    for b, at in enumerate(places):
        constant = fit_at(at, x, y, h, kernel, 0)
        line = fit_at(at, x, y, h, kernel, 1)
        assert out[localfit.VALUE, b] == pytest.approx(constant.value, rel=1e-12)
        assert out[localfit.UNIT_LEVERAGE, b] == pytest.approx(constant.unit_leverage, rel=1e-12)
        assert math.isnan(out[localfit.SLOPE, b])
        assert out[3 + localfit.VALUE, b] == pytest.approx(line.value, rel=1e-11)
        assert out[3 + localfit.SLOPE, b] / h == pytest.approx(line.slope, rel=1e-9)
        assert out[3 + localfit.UNIT_LEVERAGE, b] == pytest.approx(line.unit_leverage, rel=1e-10)


def test_empty_windows_are_nan_and_one_place_gives_a_constant():
    s = np.array([[0.0, 2.0, LEAST_WEIGHT], [0.0, 0.6, 0.0], [0.0, 0.18, 0.0]])
    t = np.array([[0.0, 8.0, 1.0], [0.0, 2.4, 0.0]])
    out = fits_of(s, t, 0.75)
    assert np.isnan(out[:, [0, 2]]).all()
    # All weight at u = 0.3: no line, so the constant stands in for it, slope 0.
    assert out[:, 1].tolist() == pytest.approx([4.0, math.nan, 0.375, 4.0, 0.0, 0.375], nan_ok=True)


places = st.lists(st.floats(-0.49, 0.49), min_size=1, max_size=8)


@given(a=st.floats(-5, 5), g=st.floats(-3, 3), c=st.floats(-2, 2), rows=places)
@pytest.mark.parametrize("b", [0, 1, 3, 5])
def test_chord_of_a_parabola_has_its_mean_over_the_rows_and_its_slope_there(a, g, c, rows, b):
    centres = np.arange(6) - b
    value = a + g * centres + c * centres**2
    first = np.zeros((7, 6))
    first[0, b], first[1, b] = len(rows), math.fsum(rows)
    first[2, b] = math.fsum(v * v for v in rows)
    out = np.empty((3, 6))
    localfit.chords(first, value, np.zeros(6), out)
    middle = math.fsum(rows) / len(rows)
    assert out[1, b] == pytest.approx(g + 2.0 * c * middle, abs=1e-9)
    mean_of_curve = math.fsum(a + g * v + c * v * v for v in rows) / len(rows)
    assert out[0, b] + out[1, b] * middle == pytest.approx(mean_of_curve, abs=1e-9)


def test_chords_beside_empty_windows_take_what_there_is():
    nan = math.nan
    first = np.zeros((7, 8))
    first[0] = 1.0
    value = np.array([1.0, nan, 4.0, 6.0, nan, 9.0, 10.0, 12.0])
    out = np.empty((3, 8))
    localfit.chords(first, value, value / 20.0, out)
    assert out[0] == pytest.approx(value, nan_ok=True)
    # Alone: no slope; two neighbours: their line; three: the parabola's slope at its end.
    assert out[1, [0, 2, 3, 5, 6]].tolist() == pytest.approx([0.0, 2.0, 2.0, 0.5, 1.5])


@given(
    leverage=st.lists(st.floats(0.0, 1.0), min_size=3, max_size=12),
    place=st.floats(-0.5, 0.5),
)
def test_leverage_between_centres_stays_between_theirs(leverage, place):
    bins = len(leverage)
    unit = np.array(leverage)
    first = np.zeros((7, bins))
    first[0], first[1], first[2] = 2.0, 2.0 * place, 2.0 * place**2
    out = np.empty((3, bins))
    localfit.chords(first, unit, unit, out)
    for b in range(1, bins - 1):
        assert unit[b - 1 : b + 2].min() <= out[2, b] <= unit[b - 1 : b + 2].max()


def scored_rows(seed, weighted):
    """Rows of four bins with their moments, and some chord in each."""
    rng = np.random.default_rng(seed)
    pilot = np.array([19.0, 21.0, 22.0, 25.0])
    value, slope = pilot + rng.normal(size=4), rng.normal(size=4)
    unit = rng.uniform(0.01, 0.3, 4)
    rows = []
    for b in range(4):
        for _ in range(int(rng.integers(0, 6)) if b else 3):
            w = float(rng.gamma(4.0, 0.25)) if weighted else 1.0
            rows.append((b, float(rng.uniform(-0.5, 0.5)), float(pilot[b] + rng.normal()), w))
    first, second = np.zeros((7, 4)), np.zeros((6, 4 if weighted else 0))
    for b, v, y, w in rows:
        e = y - pilot[b]
        first[:, b] += [w, w * v, w * v * v, w * e, w * v * e, w * v * v * e, w * e * e]
        if weighted:
            ww = w * w
            second[:, b] += [ww, ww * v, ww * v * v, ww * e, ww * v * e, ww * e * e]
    return rows, first, second, pilot, value, slope, unit


@given(seed=st.integers(0, 5000))
def test_scores_of_equal_weights_are_sums_over_rows(seed):
    rows, first, second, pilot, value, slope, unit = scored_rows(seed, weighted=False)
    coefficients, out = np.empty((7, 4)), np.empty(4)
    localfit.score_bins(first, second, pilot, value, slope, unit, coefficients, out)
    residuals = [(y - value[b] - slope[b] * v, unit[b]) for b, v, y, _ in rows]
    expected = math.fsum((r / (1.0 - leverage)) ** 2 for r, leverage in residuals)
    assert out[localfit.SCORE] == pytest.approx(expected, rel=1e-11)
    assert out[localfit.RESIDUAL] == pytest.approx(
        math.fsum(r * r for r, _ in residuals), rel=1e-11
    )
    assert out[localfit.TRACE] == pytest.approx(math.fsum(unit[b] for b, *_ in rows), rel=1e-12)
    assert out[localfit.LOST] == 0.0
    assert (coefficients * first).sum() == pytest.approx(expected, rel=1e-9)


@given(seed=st.integers(0, 5000))
def test_scores_of_unequal_weights_are_right_to_first_order_in_the_leverage(seed):
    rows, first, second, pilot, value, slope, unit = scored_rows(seed, weighted=True)
    unit = unit * 1e-3
    coefficients, out = np.empty((7, 4)), np.empty(4)
    localfit.score_bins(first, second, pilot, value, slope, unit, coefficients, out)
    terms = [(w, y - value[b] - slope[b] * v, w * unit[b]) for b, v, y, w in rows]
    expected = math.fsum(w * (r / (1.0 - leverage)) ** 2 for w, r, leverage in terms)
    plain = math.fsum(w * r * r for w, r, _ in terms)
    assert out[localfit.RESIDUAL] == pytest.approx(plain, rel=1e-11)
    assert out[localfit.TRACE] == pytest.approx(math.fsum(one[2] for one in terms), rel=1e-12)
    largest = max(one[2] for one in terms)
    assert abs(out[localfit.SCORE] - expected) <= 4.0 * largest**2 * plain + 1e-12 * plain


def test_rows_without_a_prediction_are_counted_and_not_scored():
    first = np.zeros((7, 3))
    first[0] = [2.0, 3.0, 4.0]
    first[6] = 5.0
    coefficients, out = np.empty((7, 3)), np.empty(4)
    localfit.score_bins(
        first, np.empty((6, 0)), np.zeros(3), np.array([0.0, np.nan, 0.0]), np.zeros(3),
        np.array([1.0, 0.2, 0.5]), coefficients, out,
    )  # fmt: skip
    assert out[localfit.LOST] == 5.0
    assert out[localfit.SCORE] == 5.0 / 0.25
    assert not coefficients[:, :2].any()


@given(seed=st.integers(0, 1000))
def test_scores_of_folds_add_up_to_the_score(seed):
    rng = np.random.default_rng(seed)
    folds = rng.normal(size=(5, 7, 40))
    coefficients = rng.normal(size=(7, 40))
    coefficients[5] = 0.0
    out = np.empty(5)
    localfit.fold_scores(folds, coefficients, out)
    for fold in range(5):
        exact = math.fsum((folds[fold] * coefficients).ravel().tolist())
        assert out[fold] == pytest.approx(exact, abs=1e-11)
