"""Critical values of bands: one point at a time, or the whole curve at once."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# A band whose points may miss less often than this is no band.
_LEAST_TAIL = 1e-12
# Of a thousand fields fifty lie beyond the value of a 95 % band, ten beyond that of a 99 % band.
_LEAST_SIMULATED = 0.01
_DRAWS = (1000, 4000)
_SIMULATED_VALUES = 300_000
_DRAWN_AT_A_TIME = 100


def pointwise_value(level: float, degrees: Floats) -> Floats:
    """Return two-sided t quantiles, (n,); infinite without degrees of freedom."""
    from scipy.special import stdtrit

    with np.errstate(invalid="ignore"):
        return np.where(
            degrees > 0.0, stdtrit(np.maximum(degrees, 1e-9), 0.5 + 0.5 * level), np.inf
        )


def tail_for_all(
    level: float, chords: Floats, degrees: Floats, stretches: int, *, own_scale: bool
) -> float:
    """Return the two-sided tail probability at each point with which a band covers all of them.

    Solves alpha = (1 / pi) sum_k chord_k tail(c_k) + stretches p, where c_k is the t quantile
    that leaves p, and the chords add up to the path of the curve's standardised weights. With
    one scale for all points tail(c) = (1 + c^2 / nu)^(-nu / 2) (Sun & Loader 1994, Ann. Stat.
    22:1328). Where every point is studentised by its own standard error, as with folds, the
    ratio is a t field, and tail(c) = (1 + c^2 / nu)^(-(nu - 1) / 2) (Worsley 1994, Adv. Appl.
    Prob. 26:13). Degrees of freedom may change along the curve; c_k then changes with them.

    Parameters
    ----------
    level : float
        Confidence level.
    chords : (k,) float64
        Pieces of the path; without any, or with length 0, points stand for whole stretches.
    degrees : (k,) float64
        Degrees of freedom at each piece; infinity is allowed.
    stretches : int
        Separate supported stretches, at least 1.
    own_scale : bool
        Whether every point has its own standard error.

    Returns
    -------
    float
        p; 0 where no band is wide enough. `pointwise_value(1 - p, degrees)` has the values.

    Examples
    --------
    >>> p = tail_for_all(0.95, np.array([6.01]), np.array([np.inf]), 1, own_scale=False)
    >>> round(float(pointwise_value(1.0 - p, np.array([np.inf]))[0]), 3)
    2.747
    """
    from scipy.optimize import brentq

    alpha = 1.0 - level
    finite = np.isfinite(degrees)
    nu = np.where(finite, degrees, 1.0)
    power = 0.5 * (nu - 1.0 if own_scale else nu)

    def excess(log_p: float) -> float:
        p = math.exp(log_p)
        c = _quantile(0.5 * p, degrees)
        tail = np.where(finite, np.exp(-power * np.log1p(c * c / nu)), np.exp(-0.5 * c * c))
        return float(chords @ tail) / math.pi + stretches * p - alpha

    lowest, highest = math.log(_LEAST_TAIL), math.log(alpha / stretches)
    if excess(lowest) > 0.0:
        return 0.0
    # Rounding may leave a hair below zero where the path has no length.
    if excess(highest) <= 0.0:
        return alpha / stretches
    return math.exp(float(brentq(excess, lowest, highest, xtol=1e-9)))


def _quantile(tail: float, degrees: Floats) -> Floats:
    """Upper t quantile, precise far out."""
    from scipy.special import ndtri, stdtrit

    known = np.where(np.isfinite(degrees), np.maximum(degrees, 1e-9), 1.0)
    return np.asarray(np.where(np.isfinite(degrees), -stdtrit(known, tail), -ndtri(tail)))


def chords_of_path(vectors: Floats) -> Floats:
    """Return how far unit vectors move from each point to the next, (n - 1,).

    Taken from fold deviations, the sum estimates the path's length without bias: the direction of
    nu normal fields turns by sqrt(lambda) chi_(nu-1) / chi_nu, whose mean is sqrt(lambda).

    Parameters
    ----------
    vectors : (k, n) float64
        One vector per point, in columns; they are scaled to unit length here. Points must lie
        closer than the vectors turn.

    Returns
    -------
    (n - 1,) float64
        0 next to a vector without direction.
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        unit = vectors / np.sqrt((vectors**2).sum(axis=0))
    chords = np.sqrt((np.diff(unit, axis=1) ** 2).sum(axis=0))
    return np.nan_to_num(chords)


def simulated_tail(level: float, vectors: Floats, degrees: float) -> float:
    """Return the two-sided tail probability at each point, from simulated t fields.

    The crossings that `tail_for_all` counts come in clusters where part of the deviation is
    common to all points, as when every day has a level of its own: its band is then wider than it
    need be. Here fields are drawn with the correlation that the fold deviations show (Montiel
    Olea & Plagborg-Moller 2019, J. Appl. Econometrics 34:1, for normal fields), each over the
    root mean square of as many more as there are degrees of freedom (Worsley 1994). Draws are the
    same every time.

    Parameters
    ----------
    level : float
        Confidence level.
    vectors : (folds, n) float64
        Fold deviations at points that lie closer than they turn; points without any are left out.
    degrees : float
        Degrees of freedom, finite; taken as a whole number.

    Returns
    -------
    float
        p; 0 (nothing learnt) beyond a level of 0.99, where draws are too few.
    """
    alpha = 1.0 - level
    size = np.sqrt((vectors**2).sum(axis=0))
    known = np.isfinite(size) & (size > 0.0)
    if alpha < _LEAST_SIMULATED or not known.any():
        return 0.0
    unit = vectors[:, known] / size[known]
    nu = max(1, round(degrees))
    draws = int(np.clip(_SIMULATED_VALUES // unit.shape[1], *_DRAWS))
    random = np.random.default_rng(0)
    highest = np.empty(draws)
    for start in range(0, draws, _DRAWN_AT_A_TIME):
        part = highest[start : start + _DRAWN_AT_A_TIME]
        seeds = random.standard_normal((part.shape[0] * (nu + 1), unit.shape[0]))
        fields = (seeds @ unit).reshape(part.shape[0], nu + 1, -1)
        error = np.sqrt(np.mean(fields[:, 1:] ** 2, axis=1))
        part[:] = np.abs(fields[:, 0] / error).max(axis=1)
    from scipy.special import stdtr

    return 2.0 * float(stdtr(nu, -np.quantile(highest, level)))
