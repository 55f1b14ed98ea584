"""Two arrays in, one array out."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.api import make_curve
from fastsmooth.errors import InputError
from fastsmooth.settings import Band, Reading, Smoothing


def smooth(
    x: Any,
    y: Any,
    at: Any = None,
    *,
    weight: Any = None,
    count: Any = None,
    reading: Reading | None = None,
    smoothing: Smoothing | None = None,
) -> NDArray[np.float64]:
    """Estimate the mean of y along x at the places named; for the band, use `make_curve`.

    Parameters
    ----------
    x, y : (n,) array_like
        Readings; x may hold numbers, times, dates or durations. NaN and missing values are left
        out.
    at : array_like or None
        Places, in the terms of x; None takes those of x.
    weight : (n,) array_like or None
        Precision of each row: its variance is proportional to 1 / weight.
    count : (n,) array_like or None
        How many equal rows each row stands for.
    reading : Reading or None
        Which rows are used, and how. The columns are called ``x`` and ``y``.
    smoothing : Smoothing or None
        How the mean is estimated.

    Returns
    -------
    float64 array of the shape of `at`
        Estimates; NaN where the data do not carry the curve. They are read off a curve whose
        points lie so close to each other that what lies between them does not matter.

    Raises
    ------
    InputError
        The arrays or the settings cannot be used; a single array is refused by name.

    Examples
    --------
    >>> rng = np.random.default_rng(1)
    >>> wet_bulb_c = rng.uniform(0.0, 25.0, 2000)
    >>> power_kw = 20.0 + 0.04 * wet_bulb_c**2 + rng.normal(0.0, 0.1, 2000)
    >>> smooth(wet_bulb_c, power_kw, at=[5.0, 10.0, 40.0]).round(1)
    array([21., 24., nan])
    """
    data = {"x": x, "y": y}
    for name, values in {"weight": weight, "count": count}.items():
        if values is not None:
            data[name] = values
    for name, values in data.items():
        if isinstance(values, str) or np.ndim(values) != 1:
            raise InputError(
                name, "be one-dimensional", f"it is of type {type(values).__name__} with "
                f"{np.ndim(values)} dimensions", "hand in one value for every row",
            )  # fmt: skip
    made = make_curve(
        data, "x", "y",
        weight=None if weight is None else "weight", count=None if count is None else "count",
        reading=reading, smoothing=smoothing, band=Band(points=None, keep_folds=False),
    )  # fmt: skip
    places = x if at is None else at
    return made.at(np.ravel(places)).reshape(np.shape(places))
