"""One bandwidth on one level of a bin table: fits at all bin centres, and their criteria."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Level, Pyramid
from fastsmooth.settings import ESTIMATORS

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

# A window whose kernel weights sum to less than this share of one row's at the centre is empty.
_LEAST_WINDOW = 1e-6
# Rows that spread by less than this many bins (standard deviation) carry no slope.
_LEAST_SPREAD_BINS = 1.0 / 16.0
# Bins on either side that the curve at a bin may be drawn from; see `localfit.chords`.
_CHORD_REACH = 3
# Over a window of so many ranges every kernel is flat to rounding: wider ones change nothing.
WIDEST_RANGES = 1e6


@dataclass(frozen=True)
class Fits:
    """Both estimators at the bin centres of one level, for one bandwidth.

    Attributes
    ----------
    level : Level
        Where the fits were made.
    bandwidth_bins : float
        h in bins of the level.
    values : dict of str to (bins,)
        Fitted mean less the plan's reference, per estimator; NaN in empty windows.
    chords : dict of str to (3, bins)
        Value, slope per bin and unit leverage of the line that stands for the curve among the
        rows of each bin.
    unit_leverages : dict of str to (bins,)
        Leverage of a row of weight 1 at the bin's centre.
    sums : (3, bins)
        S_0, S_1, S_2.
    """

    level: Level
    bandwidth_bins: float
    values: dict[str, Floats]
    chords: dict[str, Floats]
    unit_leverages: dict[str, Floats]
    sums: Floats


@dataclass(frozen=True)
class Scores:
    """Criterion sums of one estimator at one bandwidth.

    Attributes
    ----------
    score : float
        Sum over rows of w (r / (1 - L))^2.
    residual : float
        Sum over rows of w r^2.
    trace : float
        Sum of the leverages.
    lost : float
        Weight of rows without a leave-one-out prediction.
    coefficients : (7, bins)
        Turn a fold's sums into its share of `score`.
    """

    score: float
    residual: float
    trace: float
    lost: float
    coefficients: Floats


def least_weight(pyramid: Pyramid, shape: Shape) -> float:
    """Return the sum of kernel weights up to which a window counts as empty."""
    top = pyramid.levels[-1]
    weight, rows = float(top.first[0].sum()), float(top.count.sum())
    return _LEAST_WINDOW * shape.at_zero * (weight / rows if rows else 1.0)


def kernel_sums(
    moments: Floats, shape: Shape, bandwidth_bins: float, powers: int, squared: bool
) -> Floats:
    """Return kernel sums at all bin centres.

    Parameters
    ----------
    moments : (3, bins)
        Bin sums of a, a v, a v^2.
    shape : Shape
        Kernel function.
    bandwidth_bins : float
        h in bins.
    powers : int
        Sums of K u^0 up to u^(powers - 1).
    squared : bool
        Whether to use K^2 in place of K.
    """
    from fastsmooth.kernels import binned

    bins = moments.shape[1]
    reach = min(math.ceil(shape.support * bandwidth_bins + 0.5), bins)
    stencil = np.empty((powers, 3, reach + 1))
    binned.fill_stencil(shape.code, bandwidth_bins, 2 if squared else 1, stencil)
    padded = np.zeros((3, bins + 2 * reach))
    padded[:, reach : reach + bins] = moments
    out = np.empty((powers, bins))
    binned.bin_sums(padded, stencil, out)
    return out


def least_spread(bandwidth_bins: float) -> float:
    """Return the variance of u in a window up to which its rows carry no slope."""
    return min((_LEAST_SPREAD_BINS / bandwidth_bins) ** 2, 1e-2)


def width_in_bins(bandwidth: float, level: Level) -> float:
    """Return a bandwidth in bins of the level, cut where all wider ones fit the same line."""
    return min(bandwidth / level.width, WIDEST_RANGES * level.bins)


def fit_level(level: Level, shape: Shape, bandwidth: float, empty: float) -> Fits:
    """Fit both estimators at the bin centres of a level.

    Parameters
    ----------
    level : Level
        Bin moments.
    shape : Shape
        Kernel function.
    bandwidth : float
        h on the plan's scale.
    empty : float
        See `least_weight`.
    """
    from fastsmooth.kernels import localfit

    h = width_in_bins(bandwidth, level)
    s = kernel_sums(level.first[0:3], shape, h, 3, squared=False)
    t = kernel_sums(level.response, shape, h, 2, squared=False)
    out = np.empty((6, level.bins))
    localfit.fit_bins(s, t, shape.at_zero, empty, least_spread(h), out)
    values = {"local-constant": out[0], "local-linear": out[3]}
    leverages = {"local-constant": out[2], "local-linear": out[5]}
    chords = {name: chords_of(level, values[name], leverages[name]) for name in ESTIMATORS}
    return Fits(level, h, values, chords, leverages, s)


def chords_of(level: Level, value: Floats, unit_leverage: Floats) -> Floats:
    """Return value, slope per bin and unit leverage among the rows of each bin, (3, bins).

    Parameters
    ----------
    level : Level
        Where its rows lie.
    value, unit_leverage : (bins,) float64
        Fit at the bin centres.
    """
    from fastsmooth.kernels import localfit

    out = np.empty((3, level.bins))
    localfit.chords(level.first, value, unit_leverage, out)
    return out


def score_level(fits: Fits, estimator: str, scored: Level) -> Scores:
    """Sum the criteria of one estimator over the rows of `scored`, a level of the same bins."""
    from fastsmooth.kernels import localfit

    coefficients = np.empty((7, scored.bins))
    out = np.empty(4)
    localfit.score_bins(
        scored.first, scored.second, scored.pilot, *fits.chords[estimator], coefficients, out,
    )  # fmt: skip
    return Scores(float(out[0]), float(out[1]), float(out[2]), float(out[3]), coefficients)


def fold_sums(scored: Level, scores: Scores) -> Floats:
    """Return each fold's share of the leave-one-out sum, (folds,)."""
    from fastsmooth.kernels import localfit

    out = np.empty(scored.folds.shape[0])
    localfit.fold_scores(scored.folds, scores.coefficients, out)
    return out


def others(parts: Floats) -> Floats:
    """Return for each part the sum of all the others, without subtraction.

    Parameters
    ----------
    parts : (k, ...) float64
        Summed along the first axis.
    """
    out = np.zeros_like(parts)
    # Adding whole rows takes an eighth of the time of a cumulated sum down the columns.
    before, after = np.zeros(parts.shape[1:]), np.zeros(parts.shape[1:])
    for place in range(1, parts.shape[0]):
        before += parts[place - 1]
        out[place] = before
    for place in range(parts.shape[0] - 2, -1, -1):
        after += parts[place + 1]
        out[place] += after
    return out


def _reached(sums: Floats, reach: int) -> tuple[int, int] | None:
    """The first bin, and the one after the last, within reach of those that hold rows."""
    filled = sums[0].nonzero()[0]
    if not filled.size:
        return None
    return max(int(filled[0]) - reach, 0), min(int(filled[-1]) + 1 + reach, sums.shape[1])


def _sums_by_fold(level: Level, shape: Shape, bandwidth_bins: float) -> tuple[Floats, Floats]:
    """Return each fold's `kernel_sums` of weight and response, (folds, 3, bins), (folds, 2, bins).

    Blocks last days, so that a fold fills few of the bins: sums are zero out of its reach.
    """
    from fastsmooth.kernels import binned

    folds, bins = level.folds.shape[0], level.bins
    reach = min(math.ceil(shape.support * bandwidth_bins + 0.5), bins)
    stencil = np.empty((3, 3, reach + 1))
    binned.fill_stencil(shape.code, bandwidth_bins, 1, stencil)
    s, t = np.zeros((folds, 3, bins)), np.zeros((folds, 2, bins))
    for fold in range(folds):
        reached = _reached(level.folds[fold], reach)
        if reached is None:
            continue
        first, stop = reached
        own = level.folds[fold, :, first:stop]
        padded = np.zeros((3, stop - first + 2 * reach))
        inside = padded[:, reach : reach + stop - first]
        out = np.empty((3, stop - first))
        inside[:] = own[0:3]
        binned.bin_sums(padded, stencil, out)
        s[fold, :, first:stop] = out
        inside *= level.pilot[first:stop]
        inside += own[3:6]
        binned.bin_sums(padded, stencil[0:2], out[0:2])
        t[fold, :, first:stop] = out[0:2]
    return s, t


def left_out_fold_scores(
    level: Level, scored: Level, shape: Shape, bandwidth: float, empty: float
) -> dict[str, tuple[Floats, float]]:
    """Score the rows of each fold against fits to all other folds.

    Parameters
    ----------
    level, scored : Level
        Rows that make the fits, and rows that are scored; same bins, same folds.
    shape : Shape
        Kernel function.
    bandwidth : float
        h on the plan's scale.
    empty : float
        See `least_weight`.

    Returns
    -------
    dict
        Per estimator: sum of w (y - m_without_fold)^2 per fold, and the weight of rows that the
        other folds cannot predict.
    """
    from fastsmooth.kernels import localfit

    folds, h = level.folds.shape[0], width_in_bins(bandwidth, level)
    s, t = (others(sums) for sums in _sums_by_fold(level, shape, h))
    scores = {name: np.zeros(folds) for name in ESTIMATORS}
    lost = dict.fromkeys(ESTIMATORS, 0.0)
    at_zero, spread, none = shape.at_zero, least_spread(h), np.empty((6, 0))
    for fold in range(folds):
        reached = _reached(scored.folds[fold], _CHORD_REACH)
        if reached is None:
            continue
        here = slice(*reached)
        # Contiguous copies of a few bins cost less than passing over all.
        places, rows = level.first[:, here].copy(), scored.folds[fold][:, here].copy()
        bins = rows.shape[1]
        fit, chord, coefficients = np.empty((6, bins)), np.empty((3, bins)), np.empty((7, bins))
        no_leverage, pilot, found = np.zeros(bins), scored.pilot[here], np.empty(4)
        localfit.fit_bins(
            s[fold][:, here].copy(), t[fold][:, here].copy(), at_zero, empty, spread, fit
        )
        for row, name in ((0, "local-constant"), (3, "local-linear")):
            localfit.chords(places, fit[row], no_leverage, chord)
            localfit.score_bins(rows, none, pilot, *chord, coefficients, found)
            scores[name][fold] = found[0]
            lost[name] += float(found[3])
    return {name: (scores[name], lost[name]) for name in ESTIMATORS}
