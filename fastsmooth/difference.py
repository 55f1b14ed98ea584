"""How two curves differ along x: bands, a test, and the stretches where they really do."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import FEWEST_DEGREES
from fastsmooth.critical import chords_of_path, pointwise_value, simulated_tail, tail_for_all
from fastsmooth.foldsums import FoldedCurve, joint_degrees, spline, stretches

Floats = NDArray[np.float64]

FLIPS = 999
_SEED = 20
# Fold deviations are followed this closely along x.
_POINTS_PER_BANDWIDTH = 10
_MOST_POINTS = 2000
# A fold that makes nearly all of a fit has no news that others could confirm.
_LARGEST_SHARE = 0.98


class Stretch(NamedTuple):
    """A stretch of x where the band for the whole curve excludes no difference.

    Attributes
    ----------
    low, high : float
        Its ends, on the scale of the fit.
    mean_difference : float
        Mean of the difference along it.
    """

    low: float
    high: float
    mean_difference: float


@dataclass(frozen=True, eq=False)
class Difference:
    """The difference of two curves along x, now less base.

    Attributes
    ----------
    t : (n,) float64
        Places on the scale of the fit.
    base, now : (n,) float64
        Both curves: the centres of their bands.
    difference, std_error, degrees : (n,) float64
        Of now less base; NaN where not both are supported.
    lower, upper : (n,) float64
        Pointwise band.
    lower_all, upper_all : (n,) float64
        Band for the whole curve at once.
    statistic : float
        Largest |difference| / std_error.
    p_value : float
        Of the test that there is no difference anywhere.
    flips : int
        Sign flips behind it.
    stretches : tuple of Stretch
        Where the band for the whole curve excludes 0.
    """

    t: Floats
    base: Floats
    now: Floats
    difference: Floats
    std_error: Floats
    degrees: Floats
    lower: Floats
    upper: Floats
    lower_all: Floats
    upper_all: Floats
    statistic: float
    p_value: float
    flips: int
    stretches: tuple[Stretch, ...]

    @property
    def compared(self) -> NDArray[np.bool_]:
        """Where both curves are supported, (n,)."""
        return np.isfinite(self.difference)

    def test(self) -> dict[str, Any]:
        """Return the test as plain data."""
        return {
            "statistic": self.statistic, "p_value": self.p_value, "sign_flips": self.flips,
            "points": int(np.count_nonzero(self.compared)),
        }  # fmt: skip


def difference_of(
    base: FoldedCurve, now: FoldedCurve, bandwidth: float, level: float, *, paired: bool
) -> Difference | None:
    """Compare two curves with the same kernel and bandwidth on one grid; None if nowhere possible.

    Standard errors come from leaving out folds of either data set; they add up where the two are
    independent, and are taken from the folds' differences where both hold the same blocks
    (`paired`). The band for all x is that of `fastsmooth.critical`, with the deviations of both.

    The test takes the largest |difference| / standard error. With no difference, what each fold
    pulls the curves away from their common mean might as well have had the other sign: signs are
    flipped at random, fold by fold, around that mean (wild bootstrap by clusters with the null
    imposed: Cameron, Gelbach & Miller 2008, Rev. Econ. Stat. 90:414), and the standard error is
    taken anew each time. p = (1 + number of flips that reach the statistic) / (flips + 1); flips
    are the same every time.

    Parameters
    ----------
    base, now : FoldedCurve
        On the same places.
    bandwidth : float
        h on the scale of the fit.
    level : float
        Confidence level of both bands.
    paired : bool
        Whether a fold of the one holds the same blocks as that fold of the other.
    """
    good = base.good & now.good
    if not stretches(good):
        return None
    good = _runs_only(good)
    centre = np.where(good, now.centre - base.centre, np.nan)
    sides = _sides(base, now, good, paired)
    variances = [np.where(good, side.variance, np.nan) for side in sides]
    variance = np.sum(variances, axis=0)
    degrees = np.minimum(base.degrees, now.degrees)
    if not paired:
        degrees = joint_degrees((variances[0], variances[1]), (base.degrees, now.degrees))
    std_error = np.sqrt(variance)
    degrees = np.where(good, np.maximum(degrees, FEWEST_DEGREES), np.nan)
    one = pointwise_value(level, degrees) * std_error
    tail = _tail(base.t, good, sides, degrees, bandwidth, level)
    with np.errstate(invalid="ignore"):
        every = pointwise_value(1.0 - tail, degrees) * std_error
        # Equal to the last digit is no difference, however exact the folds agree.
        statistics = np.where(centre == 0.0, 0.0, np.abs(centre) / std_error)[good]
    statistic = float(np.nanmax(statistics))
    lower_all, upper_all = centre - every, centre + every
    return Difference(
        base.t, base.centre, now.centre, centre, std_error, degrees, centre - one, centre + one,
        lower_all, upper_all, statistic,
        _flipped(statistic, centre[good], [side.take(good) for side in sides]), FLIPS,
        tuple(_excluding_zero(base.t, centre, lower_all, upper_all, good)),
    )  # fmt: skip


@dataclass(frozen=True)
class _Side:
    """Folds that pull the difference about.

    Attributes
    ----------
    moved : (k, n) float64
        The difference without each fold less the difference with all; 0 where not compared.
    shares : (k, n) float64
        Each fold's share of the kernel weight.
    """

    moved: Floats
    shares: Floats

    @property
    def factor(self) -> Floats:
        """(G - 1) / G of the folds that each window meets, (n,)."""
        met = np.count_nonzero(self.moved, axis=0)
        return np.asarray(np.maximum(met - 1.0, 0.0) / np.maximum(met, 1))

    @property
    def variance(self) -> Floats:
        """Jackknife variance, (n,)."""
        return np.asarray(self.factor * (self.moved**2).sum(axis=0))

    def take(self, points: NDArray[np.bool_]) -> _Side:
        """Return the side at some of its points."""
        return _Side(self.moved[:, points], self.shares[:, points])


def _runs_only(good: NDArray[np.bool_]) -> NDArray[np.bool_]:
    kept = np.zeros_like(good)
    for start, stop in stretches(good):
        kept[start:stop] = True
    return kept


def _sides(
    base: FoldedCurve, now: FoldedCurve, good: NDArray[np.bool_], paired: bool
) -> list[_Side]:
    """Independent sets of folds: one of both curves together if they are paired, else two."""
    if not paired:
        return [
            _Side(np.where(good, -base.moved, 0.0), base.shares),
            _Side(np.where(good, now.moved, 0.0), now.shares),
        ]
    folds = np.union1d(base.folds, now.folds)
    moved, shares = np.zeros((2, folds.shape[0], base.t.shape[0]))
    for curve, sign in ((now, 1.0), (base, -1.0)):
        own = np.searchsorted(folds, curve.folds)
        moved[own] += sign * curve.moved
        shares[own] += 0.5 * curve.shares
    return [_Side(np.where(good, moved, 0.0), shares)]


def _tail(
    t: Floats, good: NDArray[np.bool_], sides: list[_Side], degrees: Floats,
    bandwidth: float, level: float,
) -> float:  # fmt: skip
    """Two-sided tail probability at each point with which the band covers all stretches."""
    stacked = np.concatenate([side.moved * np.sqrt(side.factor) for side in sides])
    chords, known, vectors = [], [], []
    for start, stop in stretches(good):
        knots = t[start:stop]
        steps = math.ceil((knots[-1] - knots[0]) / bandwidth * _POINTS_PER_BANDWIDTH)
        fine = np.linspace(knots[0], knots[-1], min(max(steps, 1), _MOST_POINTS) + 1)
        along = spline(knots, stacked[:, start:stop], fine)[0]
        vectors.append(along)
        chords.append(chords_of_path(along))
        between = np.interp(fine, knots, degrees[start:stop])
        known.append(0.5 * (between[1:] + between[:-1]))
    tail = tail_for_all(
        level, np.concatenate(chords), np.concatenate(known), len(chords), own_scale=True
    )
    typical = float(np.median(degrees[good]))
    # Counting crossings never gives too much: what simulation gives beyond it is safe.
    return max(tail, simulated_tail(level, np.concatenate(vectors, axis=1), typical))


def _flipped(statistic: float, difference: Floats, sides: list[_Side]) -> float:
    """Share of sign flips whose largest ratio reaches the statistic, this one counted in."""
    random = np.random.default_rng(_SEED)
    n = difference.shape[0]
    total, variance = np.zeros((FLIPS, n)), np.zeros((FLIPS, n))
    variances = np.array([side.variance for side in sides])
    everything = variances.sum(axis=0)
    # The common mean lies nearer to the better known curve.
    lean = variances / np.where(everything > 0.0, everything, 1.0)
    for side, own in zip(sides, lean, strict=True):
        share = np.clip(side.shares, 0.0, _LARGEST_SHARE)
        # What the fold pulls from the common mean: its part of the side's own distance to it, and
        # its own distance to the side's curve.
        pull = share * own * difference - (1.0 - share) * side.moved
        signs = random.integers(0, 2, (FLIPS, pull.shape[0])) * 2.0 - 1.0
        sums = signs @ pull
        # Without a fold the flipped curve moves by -(s pull - share sum) / (1 - share).
        scale = side.factor / (1.0 - share) ** 2
        squares = (scale * pull**2).sum(axis=0) - 2.0 * sums * (signs @ (scale * pull * share))
        total += sums
        variance += np.clip(squares + sums**2 * (scale * share**2).sum(axis=0), 0.0, None)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratios = np.where(total == 0.0, 0.0, np.abs(total) / np.sqrt(variance))
    reached = int(np.count_nonzero(ratios.max(axis=1) >= statistic * (1.0 - 1e-12)))
    return (1.0 + reached) / (FLIPS + 1.0)


def _excluding_zero(
    t: Floats, centre: Floats, lower: Floats, upper: Floats, good: NDArray[np.bool_]
) -> list[Stretch]:
    """Stretches where the band lies on one side of 0; ends by straight lines between points."""
    found = []
    for start, stop in stretches(good):
        for side, bound in ((1.0, lower), (-1.0, -upper)):
            beyond = bound[start:stop] > 0.0
            ends = np.flatnonzero(np.diff(np.concatenate(([0], beyond.astype(int), [0]))))
            for first, last in ends.reshape(-1, 2).tolist():
                first, last = start + first, start + last - 1
                low = _zero(t, bound, first - 1, first) if first > start else float(t[first])
                high = _zero(t, bound, last, last + 1) if last + 1 < stop else float(t[last])
                mean = float(np.mean(centre[first : last + 1]))
                assert mean * side > 0.0
                found.append(Stretch(low, high, mean))
    return sorted(found)


def _zero(t: Floats, bound: Floats, left: int, right: int) -> float:
    a, b = float(bound[left]), float(bound[right])
    if not (math.isfinite(a) and math.isfinite(b)) or a == b:
        return float(t[left if a > 0.0 else right])
    share = a / (a - b)
    return float(t[left] + share * (t[right] - t[left]))
