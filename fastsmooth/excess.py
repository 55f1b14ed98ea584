"""The excess: what the current rows add up to beyond what the baseline expects, with its error."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Level
from fastsmooth.critical import pointwise_value
from fastsmooth.foldsums import FoldedCurve, joint_degrees, spline, stretches

Floats = NDArray[np.float64]

# Sums of fewer folds say nothing about how much they differ around a straight line.
FEWEST_FOLDS = 4


@dataclass(frozen=True)
class Excess:
    """Sum over the current rows of (actual - expected from the baseline).

    Amounts are in units of y times what a row stands for. Without an error (fewer than four
    folds) everything that rests on it is None.

    Attributes
    ----------
    rows : float
        Rows added up (repeats counted).
    rows_outside, rows_thin : float
        Rows left out: where the baseline has no rows near enough, or too few.
    actual, expected, amount : float
        Sum of y, of the baseline at the same x, and their difference.
    std_error, lower, upper : float or None
        Of the amount.
    now_std_error, base_std_error : float or None
        Its parts: scatter of the current rows, and error of the baseline.
    degrees : float or None
        Degrees of freedom of the standard error.
    p_value : float or None
        Of the t test that the excess is 0, two-sided.
    share, share_std_error, share_lower, share_upper : float or None
        Amount over expected; None where nothing positive is expected.
    independent_rows : float or None
        n': how many independent rows would be as uncertain as the current ones are.
    folds : int
        Folds with current rows.
    level : float
        Confidence level of the intervals.
    """

    rows: float
    rows_outside: float
    rows_thin: float
    actual: float
    expected: float
    amount: float
    std_error: float | None
    lower: float | None
    upper: float | None
    now_std_error: float | None
    base_std_error: float | None
    degrees: float | None
    p_value: float | None
    share: float | None
    share_std_error: float | None
    share_lower: float | None
    share_upper: float | None
    independent_rows: float | None
    folds: int
    level: float

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return dict(vars(self))


@dataclass(frozen=True)
class _Sums:
    """Sums of residuals against the baseline over the bins used.

    Attributes
    ----------
    rows, residual : (k,) float64
        Of each fold; residuals around a straight line of their own.
    excess, expected : float
        Over all folds, before a row is given a value.
    squares : float
        Sum of squared residuals around the line.
    moved : (g,) float64
        Expected sum without each fold of the baseline, less with all.
    """

    rows: Floats
    residual: Floats
    excess: float
    expected: float
    squares: float
    moved: Floats


def excess_of(
    base: FoldedCurve, level: Level, reference: float, folds: NDArray[np.int64], *,
    confidence: float, per_row: float, paired: bool,
) -> Excess:  # fmt: skip
    """Add up the excess of the rows in a table and its standard error.

    E = sum (y_i - m(x_i)) with m the centre of the baseline's band. Its variance has two parts:

    - of the current rows: G / (G - 2) sum_g V_g^2, V_g the sum over fold g of residuals around a
      straight line in x, so that a drift that grows with x is not taken for scatter (the cluster
      form of Liang & Zeger 1986, Biometrika 73:13, for a regression of the residuals on x);
    - of the baseline: (F - 1) / F sum_f D_f^2, D_f the change of sum m(x_i) when fold f of the
      baseline is left out (Kott 2001, J. Official Statistics 17:521).

    Where a fold holds the same blocks in both (`paired`), V and D are added fold by fold first.
    The interval takes the t quantile with the degrees of freedom of both (Welch 1947, Biometrika
    34:28): the effective number of folds less 2, and those of the baseline's curve averaged over
    the rows. n' = n^2 sigma^2 / variance of the current rows' part, at most n.

    Parameters
    ----------
    base : FoldedCurve
        The baseline.
    level : Level
        Finest level of the current rows' table, on the baseline's scale of x.
    reference : float
        What the level's pilot and response leave out of y.
    folds : (k,) int64
        The level's folds.
    confidence : float
        Level of the intervals.
    per_row : float
        What a row stands for, such as hours.
    paired : bool
        Whether a fold of the one holds the same blocks as that fold of the other.
    """
    used = np.flatnonzero(level.first[0] > 0.0)
    mean_t = level.origin + level.width * (used + 0.5 + level.first[1, used] / level.first[0, used])
    rows = level.count[used]
    inside, centre, slope, moved = _baseline(base, level, used, mean_t)
    outside = rows[~np.isin(used, inside) & ~_meets_curve(base, mean_t)].sum()
    summed = _add_up(level, inside, centre - reference, slope, moved)
    counted = float(level.count[inside].sum())
    return _finish(
        summed, counted, float(outside), float(rows.sum() - counted - outside),
        counted * reference, _mean_degrees(base, level, inside), base.folds, folds,
        confidence, per_row, paired,
    )  # fmt: skip


def _baseline(
    base: FoldedCurve, level: Level, used: NDArray[np.int64], mean_t: Floats
) -> tuple[NDArray[np.int64], Floats, Floats, Floats]:
    """Bins with rows where the baseline is supported; its centre and slope per bin; deviations."""
    bins, centres, slopes, moves = [], [], [], []
    for start, stop in stretches(base.good):
        knots = base.t[start:stop]
        here = (mean_t >= knots[0]) & (mean_t <= knots[-1])
        at = level.origin + level.width * (used[here] + 0.5)
        value, slope = spline(knots, base.centre[start:stop], at)
        bins.append(used[here])
        centres.append(value)
        slopes.append(slope * level.width)
        moves.append(spline(knots, base.moved[:, start:stop], mean_t[here])[0])
    if not bins:
        none = np.empty(0)
        return np.empty(0, np.int64), none, none, np.empty((base.folds.shape[0], 0))
    return (
        np.concatenate(bins), np.concatenate(centres), np.concatenate(slopes),
        np.concatenate(moves, axis=1),
    )  # fmt: skip


def _meets_curve(base: FoldedCurve, t: Floats) -> NDArray[np.bool_]:
    """Whether the baseline has a value, if a thin one, on both sides."""
    right = np.clip(np.searchsorted(base.t, t), 1, base.t.shape[0] - 1)
    known = np.isfinite(base.centre)
    inside = (t >= base.t[0]) & (t <= base.t[-1])
    return np.asarray(inside & known[right - 1] & known[right])


def _mean_degrees(base: FoldedCurve, level: Level, bins: NDArray[np.int64]) -> float:
    if not bins.size:
        return math.nan
    at = level.origin + level.width * (bins + 0.5)
    degrees = np.interp(at, base.t[base.good], base.degrees[base.good])
    return float(np.average(degrees, weights=level.first[0, bins]))


def _add_up(
    level: Level, bins: NDArray[np.int64], centre: Floats, slope: Floats, moved: Floats
) -> _Sums:
    w, wv, we = (level.folds[:, row, bins] for row in (0, 1, 3))
    n, nv, nv2, ne, nve, _, ne2 = (level.first[row, bins] for row in range(7))
    away = centre - level.pilot[bins]
    # Residuals and their products with x, per bin; x in bins from the mean of the rows used.
    residual = ne - away * n - slope * nv
    total = float(n.sum())
    place = bins + 0.5
    mean = float((place * n + nv).sum()) / total if total else 0.0
    z = place - mean
    zz = float((z * z * n + 2.0 * z * nv + nv2).sum())
    zr = float((z * residual + nve - away * nv - slope * nv2).sum())
    excess = float(residual.sum())
    height = excess / total if total else 0.0
    tilt = zr / zz if zz > 0.0 else 0.0
    value, rise = away + height + tilt * z, slope + tilt
    squares = ne2 - 2.0 * value * ne - 2.0 * rise * nve + value**2 * n + 2.0 * value * rise * nv
    squares = squares + rise**2 * nv2
    return _Sums(
        rows=w.sum(axis=1),
        residual=(we - value * w - rise * wv).sum(axis=1),
        excess=excess,
        expected=float((centre * n + slope * nv).sum()),
        squares=float(squares.sum()),
        moved=moved @ n,
    )


def _finish(
    summed: _Sums, rows: float, outside: float, thin: float, offset: float, base_degrees: float,
    base_folds: NDArray[np.int64], now_folds: NDArray[np.int64], confidence: float,
    per_row: float, paired: bool,
) -> Excess:  # fmt: skip
    expected = summed.expected + offset
    met = summed.rows > 0.0
    groups = int(np.count_nonzero(met))
    known = rows > 0.0 and groups >= FEWEST_FOLDS and bool(np.isfinite(summed.moved).all())
    share = summed.excess / expected if expected > 0.0 else None
    if not known:
        return Excess(
            rows, outside, thin, (expected + summed.excess) * per_row, expected * per_row,
            summed.excess * per_row, *(None,) * 7, share, *(None,) * 4, groups, confidence,
        )  # fmt: skip
    scatter = summed.residual[met]
    now_scale, base_scale = _scales(groups, base_folds.shape[0])
    now_variance = now_scale * float(scatter @ scatter)
    base_variance = base_scale * float(summed.moved @ summed.moved)
    now_degrees = _effective(summed.rows[met]) - 2.0
    ratio = 1.0 if share is None else 1.0 + share
    if paired:
        order = np.union1d(base_folds, now_folds)
        both = np.zeros((2, order.shape[0]))
        both[0, np.searchsorted(order, now_folds)] = summed.residual * math.sqrt(now_scale)
        both[1, np.searchsorted(order, base_folds)] = summed.moved * math.sqrt(base_scale)
        variance = float(np.sum((both[0] + both[1]) ** 2))
        share_variance = float(np.sum((both[0] + ratio * both[1]) ** 2))
        degrees = min(now_degrees, base_degrees)
    else:
        variance = now_variance + base_variance
        share_variance = now_variance + ratio**2 * base_variance
        degrees = float(
            joint_degrees(
                (np.array(now_variance), np.array(base_variance)),
                (np.array(now_degrees), np.array(base_degrees)),
            )
        )
    error = math.sqrt(variance)
    quantile = float(pointwise_value(confidence, np.array(degrees)))
    half = quantile * error
    share_error = None if share is None else math.sqrt(share_variance) / expected
    independent = rows * summed.squares
    return Excess(
        rows=rows, rows_outside=outside, rows_thin=thin,
        actual=(expected + summed.excess) * per_row, expected=expected * per_row,
        amount=summed.excess * per_row, std_error=error * per_row,
        lower=_finite((summed.excess - half) * per_row),
        upper=_finite((summed.excess + half) * per_row),
        now_std_error=math.sqrt(now_variance) * per_row,
        base_std_error=math.sqrt(base_variance) * per_row, degrees=degrees,
        p_value=_p_value(summed.excess, error, degrees), share=share,
        share_std_error=share_error,
        share_lower=None if share is None or share_error is None
        else _finite(share - quantile * share_error),
        share_upper=None if share is None or share_error is None
        else _finite(share + quantile * share_error),
        independent_rows=min(rows, independent / now_variance) if now_variance > 0.0 else rows,
        folds=groups, level=confidence,
    )  # fmt: skip


def _scales(now: int, base: int) -> tuple[float, float]:
    return now / (now - 2.0), (base - 1.0) / base


def _effective(rows: Floats) -> float:
    """Effective number of folds, exp(-sum v log v) (Hill 1973, Ecology 54:427)."""
    shares = rows / rows.sum()
    return math.exp(-float(np.sum(shares * np.log(shares))))


def _p_value(excess: float, error: float, degrees: float) -> float | None:
    from scipy.special import stdtr

    if not degrees > 0.0:
        return None
    if error == 0.0:
        return 1.0 if excess == 0.0 else 0.0
    return 2.0 * float(stdtr(degrees, -abs(excess) / error))


def _finite(value: float) -> float | None:
    return value if math.isfinite(value) else None
