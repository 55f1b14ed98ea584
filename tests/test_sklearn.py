"""The regressor within scikit-learn's own tools."""

import json
import os
import pickle
import subprocess
import sys

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sklearn.base import clone
from sklearn.datasets import make_regression
from sklearn.model_selection import GridSearchCV, KFold, cross_val_predict
from sklearn.pipeline import make_pipeline
from sklearn.preprocessing import StandardScaler

from fastsmooth.api import make_curve
from fastsmooth.settings import Band, Reading, Smoothing
from fastsmooth.sklearn import CurveRegressor
from tests import cases

ROWS = cases.make_rows("uniform", 1500, seed=4)
X = ROWS.wet_bulb_c.reshape(-1, 1)
Y = ROWS.power_kw

CHECKS = """
import json, warnings
warnings.simplefilter("ignore")
from sklearn.utils.estimator_checks import check_estimator
from fastsmooth.sklearn import CurveRegressor
told = check_estimator(CurveRegressor(), on_skip=None, on_fail=None)
print(json.dumps([(one["check_name"], one["status"], repr(one["exception"])) for one in told]))
"""


def test_every_check_of_scikit_learn_passes():
    # One of the checks needs this variable before SciPy is imported.
    ran = subprocess.run(
        [sys.executable, "-c", CHECKS],
        env=os.environ | {"SCIPY_ARRAY_API": "1"},
        capture_output=True,
        text=True,
        check=True,
    )
    told = json.loads(ran.stdout)
    assert [one for one in told if one[1] != "passed"] == []
    assert len(told) > 50


def test_score_on_the_data_of_scikit_learns_check_along_the_column_that_matters():
    # One feature cannot reach the score that the check asks of all; hence the tag.
    features, target, slopes = make_regression(
        n_samples=200, n_features=10, n_informative=1, bias=5.0, noise=20, random_state=42,
        coef=True,
    )  # fmt: skip
    best = int(np.argmax(np.abs(slopes)))
    assert CurveRegressor(feature=best).fit(features, target).score(features, target) > 0.5


def test_predicts_the_curve():
    model = CurveRegressor().fit(X, Y)
    columns = {"x": X[:, 0], "y": Y}
    made = make_curve(columns, "x", "y")
    assert model.bandwidth_ == made.bandwidth
    places = np.linspace(X.min(), X.max(), 37)
    exact = make_curve(columns, "x", "y", band=Band(at=tuple(places)))
    predicted, std_error = model.predict(places.reshape(-1, 1), return_std=True)
    assert np.all(np.abs(predicted - exact.estimate) < 0.02 * exact.std_error)
    assert std_error == pytest.approx(exact.std_error, rel=0.02)
    assert model.score(X, Y) > 0.9
    assert model.mean_ == pytest.approx(Y.mean())


def test_narrow_windows_are_predicted_as_well():
    x = np.linspace(0.0, 1.0, 6000)
    y = np.sin(400.0 * x)
    model = CurveRegressor(bandwidth=0.004).fit(x.reshape(-1, 1), y)
    exact = make_curve(
        {"x": x, "y": y}, "x", "y",
        smoothing=Smoothing(bandwidth=0.004), band=Band(at=tuple(x[1000:1200:7])),
    )  # fmt: skip
    assert model.predict(x[1000:1200:7].reshape(-1, 1)) == pytest.approx(exact.estimate, abs=2e-3)


@pytest.mark.parametrize("options", [{}, {"estimator": "local-constant", "kernel": "tricube"}])
def test_weight_means_repeats(options):
    weights = np.random.default_rng(1).integers(0, 4, Y.size)
    weighted = CurveRegressor(**options).fit(X, Y, sample_weight=weights)
    repeated = CurveRegressor(**options).fit(np.repeat(X, weights, axis=0), np.repeat(Y, weights))
    assert weighted.bandwidth_ == pytest.approx(repeated.bandwidth_, rel=1e-6)
    assert weighted.predict(X) == pytest.approx(repeated.predict(X), rel=1e-7)
    assert weighted.mean_ == pytest.approx(repeated.mean_)
    plain = CurveRegressor(**options).fit(X, Y)
    assert np.max(np.abs(weighted.predict(X) - plain.predict(X))) > 0.01


def test_fractions_of_rows():
    weights = np.random.default_rng(1).uniform(0.5, 1.5, Y.size)
    model = CurveRegressor(bandwidth=3.0).fit(X, Y, sample_weight=weights)
    made = make_curve(
        {"x": X[:, 0], "y": Y, "n": weights}, "x", "y", count="n",
        smoothing=Smoothing(bandwidth=3.0),
    )  # fmt: skip
    assert model.predict(made.x[20:30].reshape(-1, 1)) == pytest.approx(
        made.estimate[20:30], rel=1e-6
    )


@pytest.mark.parametrize(
    ("weights", "told"),
    [
        (-np.ones(Y.size), "sample_weight must not be negative, but it holds -1"),
        (np.zeros(Y.size), "sample_weight must hold a positive weight, but all are zero"),
        (np.full(Y.size, 0.5), "mean of the positive weights is 0.5; multiply all by one number"),
        (np.ones((Y.size, 1)), "must be 1D, but it has 2 dimensions"),
        (np.ones(3), "inconsistent numbers of samples"),
        (np.full(Y.size, np.nan), "sample_weight contains NaN"),
    ],
)  # fmt: skip
def test_bad_weights(weights, told):
    with pytest.raises(ValueError, match=told):
        CurveRegressor().fit(X, Y, sample_weight=weights)


def test_clones_and_pickles():
    model = CurveRegressor(kernel="tricube", bandwidth=2.5, outside="nan", feature=0, threads=2)
    twin = clone(model)
    assert twin.get_params() == model.get_params()
    assert not hasattr(twin.fit(X, Y), "none")
    again = pickle.loads(pickle.dumps(twin))
    assert np.array_equal(again.predict(X), twin.predict(X))
    assert again.curve_.cautions == twin.curve_.cautions
    assert repr(CurveRegressor(bandwidth=2.0)) == "CurveRegressor(bandwidth=2.0)"


def test_pipeline_and_search_of_the_bandwidth():
    x, y = X[:500], Y[:500]
    steps = make_pipeline(StandardScaler(), CurveRegressor())
    widths = [0.05, 0.2, 2.0]
    folds = KFold(3, shuffle=True, random_state=0)
    found = GridSearchCV(steps, {"curveregressor__bandwidth": widths}, cv=folds).fit(x, y)
    scores = []
    for width in widths:
        of_width = []
        for train, test in folds.split(x):
            model = clone(steps).set_params(curveregressor__bandwidth=width)
            residuals = y[test] - model.fit(x[train], y[train]).predict(x[test])
            of_width.append(1.0 - np.mean(residuals**2) / np.var(y[test]))
        scores.append(np.mean(of_width))
    assert found.cv_results_["mean_test_score"] == pytest.approx(scores)
    assert found.best_params_["curveregressor__bandwidth"] == widths[int(np.argmax(scores))] == 0.2
    # The width that leave-one-out chooses lies near the best of so coarse a grid.
    assert 0.05 < steps.fit(x, y)[-1].bandwidth_ < 0.8


def test_cross_val_predict():
    predicted = cross_val_predict(CurveRegressor(), X, Y, cv=KFold(5))
    for train, test in KFold(5).split(X):
        model = CurveRegressor().fit(X[train], Y[train])
        assert np.array_equal(predicted[test], model.predict(X[test]))
    assert np.mean((Y - predicted) ** 2) < 1.2 * cases.NOISE_SD_KW**2


def test_outside_the_data():
    gap = (X[:, 0] < 5.0) | (X[:, 0] > 15.0)
    x, y = X[gap], Y[gap]
    away = np.array([[-100.0], [8.0], [12.0], [1e6]])
    fit = {
        word: CurveRegressor(bandwidth=1.0, outside=word).fit(x, y) for word in ("nearest", "nan")
    }
    assert np.isnan(fit["nan"].predict(away)).all()
    near, std_error = fit["nearest"].predict(away, return_std=True)
    curve = fit["nearest"].curve_
    carried = np.flatnonzero(np.isfinite(curve.estimate))
    before = carried[curve.x[carried] < 10.0][-1]
    after = carried[curve.x[carried] > 10.0][0]
    assert near == pytest.approx(curve.estimate[[carried[0], before, after, carried[-1]]])
    assert np.isnan(std_error).all()
    inside = np.array([[2.0], [20.0]])
    assert np.array_equal(fit["nan"].predict(inside), fit["nearest"].predict(inside))
    strict = CurveRegressor(bandwidth=1.0, outside="raise").fit(x, y)
    assert np.array_equal(strict.predict(inside), fit["nan"].predict(inside))
    with pytest.raises(
        ValueError, match="data carry the curve, but 4 of 4 values do not, such as -100"
    ):
        strict.predict(away)


@settings(max_examples=25)
@given(
    x=st.lists(st.floats(-1e3, 1e3), min_size=6, max_size=30, unique=True),
    places=st.lists(st.floats(-1e6, 1e6), min_size=1, max_size=5),
)
def test_predictions_are_finite_and_do_not_depend_on_their_company(x, places):
    x = np.array(x)
    # A plain loop: distinct places must lie apart for floats to tell them.
    if np.min(np.diff(np.sort(x))) < 1e-6:
        x = np.arange(x.size) * 1.0
    y = np.sin(x) + x
    model = CurveRegressor().fit(x.reshape(-1, 1), y)
    together = model.predict(np.array(places).reshape(-1, 1))
    assert np.isfinite(together).all()
    assert np.array_equal(together, [float(model.predict([[one]])[0]) for one in places])


@pytest.mark.parametrize("places", [1, 2, 3])
def test_too_few_places_give_the_mean_and_say_so(places):
    x = np.repeat(np.arange(places), 4).reshape(-1, 1)
    y = np.arange(4.0 * places)
    with pytest.warns(UserWarning, match=f"has {places} distinct values?, but a curve takes 4"):
        model = CurveRegressor().fit(x, y)
    predicted, std_error = model.predict([[0.5], [7.0]], return_std=True)
    assert predicted.tolist() == [y.mean()] * 2
    assert np.isnan(std_error).all()
    assert np.isnan(model.bandwidth_)
    assert model.curve_ is None


def test_four_places_are_enough():
    model = CurveRegressor().fit([[0.0], [1.0], [2.0], [3.0]], [0.0, 1.0, 2.0, 3.0])
    assert model.predict([[1.5]]) == pytest.approx([1.5])


def test_one_row_is_too_few():
    with pytest.raises(ValueError, match="1 sample"):
        CurveRegressor().fit([[1.0]], [1.0])


def test_column_along_the_axis():
    frame = pd.DataFrame({"humidity": ROWS.wet_bulb_c[::-1], "wet_bulb_c": ROWS.wet_bulb_c})
    named = CurveRegressor(feature="wet_bulb_c").fit(frame, Y)
    alone = CurveRegressor().fit(X, Y)
    for model in (
        named,
        CurveRegressor(feature=1).fit(frame, Y),
        CurveRegressor(feature=-1).fit(frame, Y),
    ):
        assert model.feature_ == 1
        assert np.array_equal(model.predict(frame), alone.predict(X))
    with pytest.warns(UserWarning, match="X has 2 columns, but a curve runs along one: the first"):
        first = CurveRegressor().fit(frame, Y)
    assert first.feature_ == 0
    assert first.score(frame, Y) < 0.5
    with pytest.raises(ValueError, match="must name a column of X, but 'wet_bulb' is none"):
        CurveRegressor(feature="wet_bulb").fit(frame, Y)
    for wrong in (2, -3):
        with pytest.raises(ValueError, match=f"number of one of 2 columns, but it is {wrong}"):
            CurveRegressor(feature=wrong).fit(frame, Y)
    with pytest.raises(ValueError, match="X has 1 features, but CurveRegressor is expecting 2"):
        CurveRegressor(feature=1).fit(frame.to_numpy(), Y).predict(X)


def test_blocks_choose_the_width_and_travel_through_cross_validation():
    rng = np.random.default_rng(2)
    day = np.repeat(np.arange(50), 30)
    y = Y + np.repeat(rng.normal(0.0, 1.0, 50), 30)
    made = make_curve(
        {"x": X[:, 0], "y": y, "day": day}, "x", "y", reading=Reading(block="day", threads=1)
    )
    found = GridSearchCV(CurveRegressor(), {"kernel": ["biweight"]}, cv=KFold(2))
    model = found.fit(X, y, block=day).best_estimator_
    assert model.bandwidth_ == made.bandwidth
    assert model.curve_.search.criterion == "leave-block-out"


def test_log_scale():
    rows = cases.make_rows("log spread", 1000, seed=1)
    x = rows.wet_bulb_c.reshape(-1, 1)
    model = CurveRegressor(scale="log", bandwidth=1.3).fit(x, rows.power_kw)
    assert model.curve_.scale == "log"
    assert model.score(x, rows.power_kw) > 0.5
    x[0] = -1.0
    with pytest.raises(ValueError, match="1 x not positive"):
        CurveRegressor(scale="log").fit(x, rows.power_kw)


@pytest.mark.parametrize(
    ("options", "told"),
    [
        ({"outside": "zero"}, "outside must be one of nearest, nan, raise, but it is 'zero'"),
        ({"estimator": "linear"}, "estimator must be one of local-linear, local-constant"),
        (
            {"estimator": "nearest"},
            "estimator must be one of local-linear, local-constant, but it is 'nearest'",
        ),
        ({"bandwidth": -1.0}, "--bandwidth must be positive, but it is -1"),
        ({"kernel": "box"}, "--kernel must be one of"),
        ({"criterion": "leave-block-out"}, "must come with --block"),
        ({"threads": 0}, "--threads must be at least 1"),
    ],
)
def test_wrong_parameters_are_value_errors(options, told):
    with pytest.raises(ValueError, match=told):
        CurveRegressor(**options).fit(X, Y)
