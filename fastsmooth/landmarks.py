"""Places of interest on a curve: steepest, turning, crossing a level; each with an interval."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bintable import Level
from fastsmooth.critical import pointwise_value
from fastsmooth.jackknife import fold_sums_at
from fastsmooth.localweights import CONSTANT, LINE, slope_weights, weights_of
from fastsmooth.smoother import others

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

_POINTS_PER_BANDWIDTH = 6
_MOST_POINTS = 600
# A swing between turning points counts when chance makes one as large so rarely: three of its own
# standard errors, or more where few folds tell these.
_REAL_SWING = 0.9973
# Without a fold, a place is looked for within so many bandwidths of where all data have it.
_SEARCHED_BANDWIDTHS = 3.0
_SAME_SLOPE = 1e-6


class Landmark(NamedTuple):
    """One place on the curve.

    Attributes
    ----------
    kind : str
        ``steepest`` (on a log scale, per factor of x), ``lowest``, ``highest`` (turning
        points) or ``crossing``.
    x : float
        Where, on the plan's scale.
    lower, upper : float
        Its confidence interval; NaN where leaving out a fold loses the place.
    value : float
        The curve there (for a crossing: the level).
    """

    kind: str
    x: float
    lower: float
    upper: float
    value: float

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {k: v if isinstance(v, str) or np.isfinite(v) else None for k, v in
                self._asdict().items()}  # fmt: skip


def find_landmarks(
    stretches: list[tuple[float, float]],
    level: Level,
    shape: Shape,
    bandwidth_bins: float,
    *,
    estimator: str,
    reference: float,
    confidence: float,
    crossings: tuple[float, ...],
) -> list[Landmark]:
    """Find landmarks within supported stretches; intervals by leaving out folds.

    A place found without fold f is x_f; its variance is the delete-a-group jackknife's,
    (G - 1) / G sum (x_f - x)^2 (Kott 2001), and the interval uses t quantiles.

    Parameters
    ----------
    stretches : list of (float, float)
        Supported stretches, on the plan's scale.
    level : Level
        Bin moments of all folds.
    shape : Shape
        Kernel function.
    bandwidth_bins : float
        h in bins.
    estimator : str
        ``local-linear`` or ``local-constant``.
    reference : float
        The plan's reference.
    confidence : float
        Confidence level of the intervals.
    crossings : tuple of float
        Values of y whose crossings are sought.

    Returns
    -------
    list of Landmark
        In order of x; a crossing that is not reached has x NaN and comes last.
    """
    found: list[Landmark] = []
    steepest: tuple[float, _Stretch] | None = None
    for low, high in stretches:
        here = _Stretch(low, high, level, shape, bandwidth_bins, estimator)
        if here.x.shape[0] < 3:
            continue
        if not np.isfinite(here.slope[0]).any():
            continue
        top, least = (float(f(np.abs(here.slope[0]))) for f in (np.nanmax, np.nanmin))
        # A straight line is equally steep everywhere.
        bent = top - least > _SAME_SLOPE * top
        if bent and (steepest is None or top > steepest[0]):
            steepest = (top, here)
        for place, kind in here.turning_points():
            found.append(
                here.landmark(kind, place, lambda one, x: one.zero_of_slope(x), confidence)
            )
        for wanted in crossings:
            target = wanted - reference
            for place in _zeros(here.x, here.value[0] - target):
                mark = here.landmark(
                    "crossing", place, lambda one, x, t=target: one.zero_of_value(x, t), confidence
                )
                found.append(mark._replace(value=target))
    if steepest is not None:
        _, here = steepest
        found.append(
            here.landmark(
                "steepest", here.row(0).steepest(), lambda one, x: one.peak_of_slope(x), confidence
            )
        )
    reached = {mark.value for mark in found if mark.kind == "crossing"}
    for wanted in crossings:
        if wanted - reference not in reached:
            found.append(Landmark("crossing", np.nan, np.nan, np.nan, wanted - reference))
    found.sort(key=lambda mark: mark.x)
    return [mark._replace(value=mark.value + reference) for mark in found]


class _Row(NamedTuple):
    """One version of the curve: all folds, or all but one."""

    x: Floats
    value: Floats
    slope: Floats
    window: float

    def zero_of_slope(self, near: float) -> float:
        return self._nearest(_zeros(self.x, self.slope), near)

    def zero_of_value(self, near: float, target: float) -> float:
        return self._nearest(_zeros(self.x, self.value - target), near)

    def steepest(self) -> float:
        """The steepest place of the whole stretch, to the grid."""
        place = float(self.x[int(np.nanargmax(np.abs(self.slope)))])
        refined = self.peak_of_slope(place)
        return refined if np.isfinite(refined) else place

    def peak_of_slope(self, near: float) -> float:
        """The steepest place near another; NaN if it is an end of what is looked at."""
        close = np.flatnonzero(np.abs(self.x - near) <= self.window)
        size = np.abs(self.slope)
        if not np.isfinite(size[close]).any():
            return np.nan
        top = int(close[np.nanargmax(size[close])])
        if top in (close[0], close[-1]):
            return np.nan
        left, middle, right = size[top - 1 : top + 2]
        bend = left - 2.0 * middle + right
        shift = 0.5 * (left - right) / bend if bend < 0.0 else 0.0
        return float(self.x[top] + shift * (self.x[1] - self.x[0]))

    def _nearest(self, places: list[float], near: float) -> float:
        close = [place for place in places if abs(place - near) <= self.window]
        return min(close, key=lambda place: abs(place - near)) if close else np.nan


class _Stretch:
    """The curve on a fine grid, with all folds (row 0) and without each fold (rows 1 on)."""

    def __init__(
        self, low: float, high: float, level: Level, shape: Shape, h: float, estimator: str
    ) -> None:
        width = h * level.width
        steps = int(np.clip((high - low) / width * _POINTS_PER_BANDWIDTH, 2, _MOST_POINTS))
        self.x = np.linspace(low, high, steps + 1)
        self.window = _SEARCHED_BANDWIDTHS * width
        s, t, _ = fold_sums_at((self.x - level.origin) / level.width, level, shape, h)
        kind = CONSTANT if estimator == "local-constant" else LINE
        sums = [(s.sum(axis=0), t.sum(axis=0)), *zip(others(s), others(t), strict=True)]
        self.value = np.array([weights_of(a, h, kind).apply(b) for a, b in sums])
        self.slope = np.array([slope_weights(a, h).apply(b) / level.width for a, b in sums])
        self.met = int(np.median(np.count_nonzero(s[:, 0] > 0.0, axis=0)))

    def row(self, index: int) -> _Row:
        return _Row(self.x, self.value[index], self.slope[index], self.window)

    def turning_points(self) -> list[tuple[float, str]]:
        """Zeros of the slope between real swings of the curve."""
        folds = self.value.shape[0] - 1
        moved = self.value[1:] - self.value[0]
        # Where some fold cannot be left out, the error is not known and no swing is real.
        known = np.isfinite(moved).all(axis=0)
        error = np.sqrt((folds - 1.0) / folds * np.sum(moved**2, axis=0, where=known))
        error = np.where(known, error, np.inf)
        zeros = _zeros(self.x, self.slope[0])
        ends = [float(self.x[0]), *zeros, float(self.x[-1])]
        heights = [float(v) for v in np.interp(ends, self.x, self.value[0])]
        errors = [float(v) for v in np.interp(ends, self.x, error)]
        real = float(pointwise_value(_REAL_SWING, np.array([self.met - 1.0]))[0])
        while len(ends) > 2:
            swings = [
                abs(heights[i + 1] - heights[i]) / max(np.hypot(errors[i], errors[i + 1]), 1e-300)
                for i in range(len(ends) - 1)
            ]
            least = int(np.argmin(swings))
            if swings[least] >= real:
                break
            # A swing that is not real takes both its turning points with it, or the inner one
            # where it ends at the end of the stretch.
            drop = {least, least + 1} - {0, len(ends) - 1}
            ends, heights, errors = (
                [one for i, one in enumerate(items) if i not in drop]
                for items in (ends, heights, errors)
            )
        return [
            (ends[i], "lowest" if heights[i] < heights[i - 1] else "highest")
            for i in range(1, len(ends) - 1)
        ]

    def landmark(self, kind: str, place: float, find: Any, confidence: float) -> Landmark:
        without = np.array([find(self.row(f), place) for f in range(1, self.value.shape[0])])
        value = float(np.interp(place, self.x, self.value[0]))
        met = max(self.met, 2)
        if not np.isfinite(without).all() or not np.isfinite(find(self.row(0), place)):
            return Landmark(kind, place, np.nan, np.nan, value)
        error = np.sqrt((met - 1.0) / met * float(((without - place) ** 2).sum()))
        half = float(pointwise_value(confidence, np.array([met - 1.0]))[0]) * error
        low, high = float(self.x[0]), float(self.x[-1])
        return Landmark(kind, place, max(place - half, low), min(place + half, high), value)


def _zeros(x: Floats, y: Floats) -> list[float]:
    """Places where a sampled function changes sign, by linear interpolation."""
    left, right = y[:-1], y[1:]
    with np.errstate(invalid="ignore"):
        at = np.flatnonzero((left * right < 0.0) | ((left == 0.0) & (right != 0.0)))
    share = left[at] / (left[at] - right[at])
    return [float(one) for one in x[at] + share * (x[at + 1] - x[at])]
