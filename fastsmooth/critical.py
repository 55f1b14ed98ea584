"""Critical values of bands: one point at a time, or the whole curve at once."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]


def pointwise_value(level: float, degrees: Floats) -> Floats:
    """Return two-sided t quantiles, (n,); infinite without degrees of freedom."""
    from scipy.special import stdtrit

    with np.errstate(invalid="ignore"):
        return np.where(
            degrees > 0.0, stdtrit(np.maximum(degrees, 1e-9), 0.5 + 0.5 * level), np.inf
        )


def simultaneous_value(
    level: float, arc_length: float, stretches: int, degrees: float, *, own_scale: bool
) -> float:
    """Return the critical value with which a band covers whole stretches of a curve.

    Solves alpha = (k / pi) tail(c) + stretches P(|t| > c), k the arc length of the curve's
    standardised weights. With one scale for all points tail(c) = (1 + c^2 / nu)^(-nu / 2)
    (Sun & Loader 1994, Ann. Stat. 22:1328). Where every point is studentised by its own standard
    error, as with folds, the ratio is a t field, and tail(c) = (1 + c^2 / nu)^(-(nu - 1) / 2)
    (Worsley 1994, Adv. Appl. Prob. 26:13).

    Parameters
    ----------
    level : float
        Confidence level.
    arc_length : float
        k; 0 gives the pointwise value for one stretch.
    stretches : int
        Separate supported stretches, at least 1.
    degrees : float
        Degrees of freedom; infinity is allowed.
    own_scale : bool
        Whether every point has its own standard error.

    Examples
    --------
    >>> round(simultaneous_value(0.95, 6.01, 1, math.inf, own_scale=False), 3)
    2.747
    """
    from scipy.optimize import brentq
    from scipy.stats import norm, t

    alpha = 1.0 - level
    power = (degrees - 1.0) / 2.0 if own_scale else degrees / 2.0

    def excess(c: float) -> float:
        if math.isinf(degrees):
            return (
                arc_length / math.pi * math.exp(-c * c / 2.0) + stretches * 2.0 * norm.sf(c) - alpha
            )
        tail = math.exp(-power * math.log1p(c * c / degrees))
        return arc_length / math.pi * tail + stretches * 2.0 * float(t.sf(c, degrees)) - alpha

    high = 2.0
    while excess(high) > 0.0:
        high *= 2.0
        if high > 1e6:
            return math.inf
    return float(brentq(excess, 0.0, high, xtol=1e-6))


def arc_length_of(vectors: Floats) -> float:
    """Return the length of the path that unit vectors take, from point to point.

    Parameters
    ----------
    vectors : (k, n) float64
        One vector per point, in columns; they are scaled to unit length here. The chords
        between neighbours are summed, so points must lie closer than the vectors turn.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        unit = vectors / np.sqrt((vectors**2).sum(axis=0))
    chords = np.sqrt((np.diff(unit, axis=1) ** 2).sum(axis=0))
    return float(np.nansum(chords))
