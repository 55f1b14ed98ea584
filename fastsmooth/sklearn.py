"""A reference curve as a scikit-learn regressor."""

from __future__ import annotations

import warnings
from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.curve import Curve
from fastsmooth.errors import InputError
from fastsmooth.settings import ESTIMATORS, Band, Reading, Smoothing, one_of

try:
    from sklearn.base import BaseEstimator, RegressorMixin
    from sklearn.utils import Tags, check_array, check_consistent_length
    from sklearn.utils.validation import check_is_fitted, validate_data
except ImportError as error:
    raise ImportError(
        "fastsmooth.sklearn needs scikit-learn; install fastsmooth[sklearn]"
    ) from error

Floats = NDArray[np.float64]

OUTSIDE = ("nearest", "nan", "raise")
# A width cannot be chosen, nor a band given, from fewer places.
FEWEST_PLACES = 4


class CurveRegressor(RegressorMixin, BaseEstimator):
    """The mean of y along one feature: a local regression whose width the data choose.

    Parameters
    ----------
    estimator : str
        ``local-linear`` or ``local-constant``.
    kernel : str
        One of `fastsmooth.settings.KERNELS`.
    bandwidth : float or None
        Half-width of the window in units of the feature (standard deviation of the Gaussian; a
        factor above 1 on a log scale); None lets the criterion choose.
    criterion : str or None
        One of `fastsmooth.settings.CRITERIA`; None means ``leave-block-out`` where `fit` is given
        blocks, else ``leave-one-out``.
    scale : str
        ``linear``, or ``log`` for a feature spread over decades.
    feature : int or str or None
        The column along the axis, by number or name. None takes the only column; if there are
        several, it takes the first and warns, for the others are not looked at.
    outside : str
        What is predicted where the data do not carry the curve, beyond its ends and in gaps:
        ``nearest`` repeats the nearest value of the curve (for scikit-learn's tools, which expect
        finite values), ``nan`` says nothing, ``raise`` refuses.
    threads : int
        Processors for one fit.

    Attributes
    ----------
    curve_ : fastsmooth.Curve or None
        The curve with band, search and cautions; None if the feature has fewer than four distinct
        values, which carry no curve: the mean of y is then predicted, with a warning.
    bandwidth_ : float
        The width used; NaN without a curve.
    mean_ : float
        Mean of y, weighted by `sample_weight`.
    feature_ : int
        Number of the column along the axis.
    n_features_in_, feature_names_in_
        As everywhere in scikit-learn.

    Examples
    --------
    >>> import numpy as np
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, (500, 1))
    >>> power_kw = 20.0 + 0.04 * wet_bulb_c[:, 0] ** 2 + rng.normal(0.0, 0.1, 500)
    >>> model = CurveRegressor().fit(wet_bulb_c, power_kw)
    >>> model.predict([[5.0], [10.0]]).round(1)
    array([21., 24.])
    >>> bool(model.score(wet_bulb_c, power_kw) > 0.99)
    True
    """

    def __init__(
        self,
        *,
        estimator: str = "local-linear",
        kernel: str = "biweight",
        bandwidth: float | None = None,
        criterion: str | None = None,
        scale: str = "linear",
        feature: int | str | None = None,
        outside: str = "nearest",
        threads: int = 1,
    ) -> None:
        self.estimator = estimator
        self.kernel = kernel
        self.bandwidth = bandwidth
        self.criterion = criterion
        self.scale = scale
        self.feature = feature
        self.outside = outside
        self.threads = threads

    def __sklearn_tags__(self) -> Tags:
        """Tell that one feature among many is too little for scikit-learn's own test data."""
        tags = super().__sklearn_tags__()
        tags.regressor_tags.poor_score = True
        return tags

    def fit(
        self, X: Any, y: Any, sample_weight: Any = None, *, block: Any = None
    ) -> CurveRegressor:
        """Fit the curve.

        Parameters
        ----------
        X : (n, k) array_like
            Features, of which one is used.
        y : (n,) array_like
            What is predicted.
        sample_weight : (n,) array_like or None
            How many equal rows each row stands for; rows of weight 0 are left out.
        block : (n,) array_like or None
            Rows of one block may depend on each other: the width is chosen, and standard errors
            are computed, by leaving out whole blocks.

        Returns
        -------
        CurveRegressor
            Itself.

        Raises
        ------
        ValueError
            A parameter or the data cannot be used.
        """
        X, y = validate_data(self, X, y, dtype=np.float64, y_numeric=True, ensure_min_samples=2)
        y = np.asarray(y, np.float64)
        with _refusals_as_value_errors():
            one_of("outside", self.outside, OUTSIDE)
            one_of("estimator", self.estimator, ESTIMATORS)
            smoothing = Smoothing(self.estimator, self.kernel, self.bandwidth, self.criterion)
            blocked = None if block is None else "block"
            reading = Reading(scale=self.scale, strict=True, threads=self.threads, block=blocked)
        self.feature_ = self._find_feature(X.shape[1])
        data: dict[str, Any] = {"x": X[:, self.feature_], "y": y}
        if block is not None:
            data["block"] = np.asarray(block)
        if sample_weight is not None:
            data["count"] = _checked_weights(sample_weight, y)
            kept = data["count"] > 0.0
            data = {name: values[kept] for name, values in data.items()}
        self.mean_ = float(np.average(data["y"], weights=data.get("count")))
        self.curve_ = self._fit_curve(data, smoothing, reading)
        self.bandwidth_ = np.nan if self.curve_ is None else self.curve_.bandwidth
        return self

    def predict(self, X: Any, return_std: bool = False) -> Floats | tuple[Floats, Floats]:
        """Read the curve.

        Parameters
        ----------
        X : (m, k) array_like
            Features.
        return_std : bool
            Whether to give standard errors of the mean as well.

        Returns
        -------
        (m,) float64, or two of them
            Predictions; and their standard errors, NaN where the data do not carry the curve.

        Raises
        ------
        ValueError
            X does not fit, or with ``outside="raise"`` lies where the data do not carry the curve.
        """
        check_is_fitted(self)
        x = validate_data(self, X, dtype=np.float64, reset=False)[:, self.feature_]
        if self.curve_ is None:
            predicted = np.full(x.shape, self.mean_)
            return (predicted, np.full(x.shape, np.nan)) if return_std else predicted
        predicted = self.curve_.at(x)
        away = np.isnan(predicted)
        if away.any():
            if self.outside == "raise":
                raise ValueError(
                    "X must lie where the data carry the curve, but "
                    f"{np.count_nonzero(away):,} of {x.size:,} values do not, such as "
                    f'{x[away][0]:g}; set outside="nearest" or outside="nan"'
                )
            if self.outside == "nearest":
                predicted[away] = _nearest_value(self.curve_, x[away])
        if not return_std:
            return predicted
        std_error = np.interp(x, self.curve_.x, self.curve_.std_error)
        std_error[away] = np.nan
        return predicted, std_error

    def _find_feature(self, columns: int) -> int:
        """Return the number of the column along the axis."""
        if self.feature is None:
            if columns > 1:
                warnings.warn(
                    f"X has {columns} columns, but a curve runs along one: the first is used and "
                    "the others are not looked at; set feature=0, or choose another",
                    UserWarning,
                    stacklevel=3,
                )
            return 0
        if isinstance(self.feature, str):
            names = list(getattr(self, "feature_names_in_", ()))
            if self.feature not in names:
                raise ValueError(f"feature must name a column of X, but '{self.feature}' is none")
            return names.index(self.feature)
        if not -columns <= self.feature < columns:
            raise ValueError(
                f"feature must be the number of one of {columns} columns, but it is {self.feature}"
            )
        return self.feature % columns

    def _fit_curve(
        self, data: dict[str, Any], smoothing: Smoothing, reading: Reading
    ) -> Curve | None:
        from fastsmooth.api import make_curve

        places = np.unique(data["x"]).size
        if places < FEWEST_PLACES:
            warnings.warn(
                f"the feature has {places} distinct value{'s' if places > 1 else ''}, but a curve "
                f"takes {FEWEST_PLACES}: the mean of y is predicted",
                UserWarning,
                stacklevel=3,
            )
            return None
        count = "count" if "count" in data else None
        band = Band(points=None, keep_folds=False)
        with _refusals_as_value_errors():
            return make_curve(
                data, "x", "y", count=count, reading=reading, smoothing=smoothing, band=band
            )


def _checked_weights(sample_weight: Any, y: Floats) -> Floats:
    """Return weights as floats, or refuse them."""
    weights: Floats = check_array(
        sample_weight, ensure_2d=False, dtype=np.float64, input_name="sample_weight"
    )
    if weights.ndim != 1:
        raise ValueError(f"sample_weight must be 1D, but it has {weights.ndim} dimensions")
    check_consistent_length(weights, y)
    if weights.min() < 0.0:
        raise ValueError(f"sample_weight must not be negative, but it holds {weights.min():g}")
    if not weights.any():
        raise ValueError("sample_weight must hold a positive weight, but all are zero")
    mean = weights[weights > 0.0].mean()
    if mean < 1.0 - 1e-9:
        raise ValueError(
            f"sample_weight must tell how often each row stands, on average once or more, but the "
            f"mean of the positive weights is {mean:g}; multiply all by one number"
        )
    return weights


@contextmanager
def _refusals_as_value_errors() -> Iterator[None]:
    """Raise what scikit-learn expects."""
    try:
        yield
    except InputError as error:
        raise ValueError(str(error)) from error


def _nearest_value(curve: Curve, x: Floats) -> Floats:
    """Return the value of the nearest point that the data carry; of two, the lower in x."""
    carried = np.isfinite(curve.estimate)
    knots, values = curve.x[carried], curve.estimate[carried]
    after = np.clip(np.searchsorted(knots, x), 1, max(1, knots.size - 1))
    after = np.minimum(after, knots.size - 1)
    before = np.maximum(after - 1, 0)
    nearest = np.where(x - knots[before] <= knots[after] - x, before, after)
    result: Floats = values[nearest]
    return result
