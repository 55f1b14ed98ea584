"""How well a curve predicts: figures that reports ask for, with their definitions."""

from __future__ import annotations

import math
from typing import Any

import numpy as np

from fastsmooth.smoother import Fits, score_level

DEFINITIONS = (
    "r2_left_out = 1 - mean squared error of predicting left-out rows / variance of y; "
    "cv_rmse = sqrt(sum (y - m)^2 / (n - p)) / mean(y); "
    "nmbe = sum (m - y) / ((n - p) mean(y)); "
    "m the curve, n rows, p the curve's equivalent parameters (trace)"
)


def fit_facts(
    fits: Fits, estimator: str, left_out_error: float, reference: float
) -> dict[str, Any]:
    """Return the figures of `DEFINITIONS` and both residual sums.

    Parameters
    ----------
    fits : Fits
        The curve at the bin centres.
    estimator : str
        Which of the two.
    left_out_error : float
        Mean squared error of predicting left-out rows.
    reference : float
        The plan's reference.

    Returns
    -------
    dict
        ``r2_left_out``, ``cv_rmse``, ``nmbe``, ``sum_residuals``, ``sum_squared_residuals``,
        ``mean_y``, ``equivalent_parameters``; None where undefined (a mean of 0). Weighted
        data: weighted sums, n the sum of the weights.
    """
    level = fits.level
    scores = score_level(fits, estimator, level)
    n = float(level.first[0].sum())
    shifted = level.first[3] + level.pilot * level.first[0]
    mean = float(shifted.sum()) / n
    away = level.pilot - mean
    variance = (
        float((level.first[6] + 2.0 * away * level.first[3] + away**2 * level.first[0]).sum()) / n
    )
    value, slope, _ = fits.chords[estimator]
    known = np.isfinite(value)
    residual = level.first[3] - (value - level.pilot) * level.first[0] - slope * level.first[1]
    total = float(residual[known].sum())
    rows = float(level.count.sum())
    return facts_of(
        n, scores.trace * n / rows, left_out_error=left_out_error, mean_y=mean + reference,
        variance=variance, sum_residuals=total, sum_squared_residuals=scores.residual,
    ) | {"equivalent_parameters": scores.trace}  # fmt: skip


def facts_of(
    weight: float,
    parameters: float,
    *,
    left_out_error: float,
    mean_y: float,
    variance: float,
    sum_residuals: float,
    sum_squared_residuals: float,
) -> dict[str, Any]:
    """Return the figures of `DEFINITIONS` from sums; None where undefined."""
    freedom = weight - parameters
    usable = freedom > 0.0 and mean_y != 0.0
    cv_rmse = nmbe = math.nan
    if usable:
        cv_rmse = math.sqrt(sum_squared_residuals / freedom) / abs(mean_y)
        nmbe = -sum_residuals / (freedom * mean_y)
    facts = {
        "r2_left_out": 1.0 - left_out_error / variance if variance > 0.0 else math.nan,
        "cv_rmse": cv_rmse,
        "nmbe": nmbe,
        "sum_residuals": sum_residuals,
        "sum_squared_residuals": sum_squared_residuals,
        "mean_y": mean_y,
        "equivalent_parameters": parameters,
    }
    return {name: value if math.isfinite(value) else None for name, value in facts.items()}
