"""Curves of one or many units cut into cells, so that every row finds its own at once."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.curve import EDGE, OK, OUTSIDE, Curve
from fastsmooth.curve import THIN as THIN_POINT
from fastsmooth.errors import InputError

Floats = NDArray[np.float64]
Codes = NDArray[np.int8]
Units = int | NDArray[np.int64]

ROW_STATUSES = (
    "inside", "above", "below", "thin", "no support", "no reading", "no curve", "unknown unit",
)  # fmt: skip
INSIDE, ABOVE, BELOW, THIN, NO_SUPPORT, NO_READING, NO_CURVE, UNKNOWN_UNIT = range(8)
# Rows from here on have neither an expected value nor a residual.
FIRST_WITHOUT_VALUES = NO_SUPPORT

_BLOCK_ROWS = 65_536
# The last row may lie a hair beyond the last point.
_ROUNDING = 1e-9
# Points of a curve lie evenly on its scale; this many steps are rounding.
_UNEVEN_STEPS = 1e-6
# By the status of a point.
_SUPPORT_OF_POINT = np.empty(4, np.int8)
_SUPPORT_OF_POINT[[OK, EDGE, THIN_POINT, OUTSIDE]] = INSIDE, INSIDE, THIN, NO_SUPPORT


class ScoredRows(NamedTuple):
    """What the curve says of rows.

    Attributes
    ----------
    expected, residual, z : (n,) float64
        Mean of y at x; y less that; the residual in standard deviations of single rows at x. NaN
        where there is none.
    status : (n,) int8
        Index into `ROW_STATUSES`.
    """

    expected: Floats
    residual: Floats
    z: Floats
    status: Codes

    def part(self, rows: slice) -> ScoredRows:
        """Return a view of consecutive rows."""
        return ScoredRows(self.expected[rows], self.residual[rows], self.z[rows], self.status[rows])

    def put(self, rows: NDArray[np.int64], scored: ScoredRows) -> None:
        """Write over some rows."""
        self.expected[rows] = scored.expected
        self.residual[rows] = scored.residual
        self.z[rows] = scored.z
        self.status[rows] = scored.status


class CurvePoints(NamedTuple):
    """What of a curve rows are held against.

    Attributes
    ----------
    x, estimate, residual_sd : (n,) float64
        As in `Curve`.
    status : (n,) int64
        As in `Curve`.
    ends : (2, n) float64 or None
        Lowest and highest of the curve's limits; NaN where they are not known.
    """

    x: Floats
    estimate: Floats
    residual_sd: Floats
    status: NDArray[np.int64]
    ends: Floats | None = None

    @classmethod
    def of(cls, curve: Curve) -> CurvePoints:
        """Take the points of a curve, with its limits if there are two or more."""
        limits = curve.limits
        ends = None
        if limits is not None and len(limits.levels) > 1:
            ends = limits.values[[0, -1]]
        return cls(curve.x, curve.estimate, curve.residual_sd, curve.status, ends)


class Lookup:
    """Curves by unit number, ready for many rows.

    The value is that of `Curve.at`: a cubic spline through the points of each supported stretch.
    The standard deviation of single rows is joined by straight lines. A row between two points
    has the weaker support of both; a row on a point has that of the point.

    Parameters
    ----------
    curves : iterable of CurvePoints or None
        One for each unit, all of one axis; None for a unit without a curve. One unit more,
        numbered `unknown`, stands for those that are not known.
    log : bool
        Whether the points lie evenly on a log scale.

    Raises
    ------
    InputError
        The points of a curve do not lie evenly.
    """

    def __init__(self, curves: Iterable[CurvePoints | None], log: bool) -> None:
        self.log = log
        held = list(curves)
        self.unknown = len(held)
        self.units = self.unknown + 1
        sizes = np.array([0 if one is None else one.x.shape[0] for one in [*held, None]])
        made = [one for one in held if one is not None] or [_NO_POINTS]
        self._first = np.where(sizes > 0, np.cumsum(sizes) - sizes, 0)
        self._last = np.maximum(sizes - 1.0, 0.0)
        self._unscored = np.where(sizes > 0, INSIDE, NO_CURVE).astype(np.int8)
        self._unscored[-1] = UNKNOWN_UNIT
        self._x = np.concatenate([one.x for one in made])
        estimate = np.concatenate([one.estimate for one in made])
        sd = np.concatenate([one.residual_sd for one in made])
        status = np.concatenate([one.status for one in made])
        # The last point of each curve has no cell behind it.
        ends = np.cumsum([one.x.shape[0] for one in made]) - 1

        t = np.log(self._x) if log else self._x
        # NaN is inside nothing, so rows of units without a curve take the careful way.
        self._origin = np.full(self.units, np.nan)
        self._per_step = np.zeros(self.units)
        have = np.flatnonzero(sizes)
        low, high = t[self._first[have]], t[self._first[have] + sizes[have] - 1]
        self._origin[have] = low
        self._per_step[have] = np.divide(
            sizes[have] - 1, high - low, out=np.zeros(have.size), where=high > low
        )
        _check_even(t, self._first, sizes, self._origin, self._per_step)

        self._cubic = _cubic_cells(estimate, ends)
        self._spread = np.stack([sd, np.append(np.diff(sd), 0.0)])
        self._spread[1, ends] = 0.0
        self._at_point = _SUPPORT_OF_POINT[status]
        self._at_point[~np.isfinite(estimate)] = NO_SUPPORT
        self._between = np.maximum(self._at_point, np.append(self._at_point[1:], NO_SUPPORT))
        self._between[ends] = NO_SUPPORT
        fine = self._between == INSIDE
        # Where both neighbours are fine too, a cell too far is no harm.
        plain = fine & np.append(False, fine[:-1]) & np.append(fine[1:], False)
        # Elsewhere NaN spreads to z, which is within no limits.
        self._plain_cubic = np.where(plain, self._cubic[0], np.nan)
        self._limits = _limit_cells(made, ends)

    def score(
        self, x: Floats, y: Floats, unit: Units, z_limit: float | None,
        root_weight: Floats | None = None,
    ) -> ScoredRows:  # fmt: skip
        """Hold rows against the curves of their units.

        Parameters
        ----------
        x, y : (n,) float64
            Axis floats and readings; NaN where missing.
        unit : int or (n,) int64
            Number of each row's unit.
        z_limit : float or None
            A row whose z lies farther from 0 is outside the limits. None judges by the curves'
            own limits, which all of them must have.
        root_weight : (n,) float64 or None
            Square root of each row's precision, by which its z is larger.

        Returns
        -------
        ScoredRows
            n rows.
        """
        n = x.shape[0]
        if root_weight is not None:
            root_weight = np.where(root_weight > 0.0, root_weight, np.nan)
        rows = ScoredRows(np.empty(n), np.empty(n), np.empty(n), np.empty(n, np.int8))
        with np.errstate(all="ignore"):  # what is undefined becomes NaN, and is told by status
            for start in range(0, n, _BLOCK_ROWS):
                # What lies between two steps takes little memory, and stays in the cache.
                part = slice(start, start + _BLOCK_ROWS)
                self._score_block(
                    x[part], y[part], unit if isinstance(unit, int) else unit[part], z_limit,
                    None if root_weight is None else root_weight[part],
                    rows.part(part),
                )  # fmt: skip
        return rows

    def stretch(self, x: Floats, unit: Units, stretches: int) -> NDArray[np.int64]:
        """Return in which of so many equal stretches of its unit's curve x lies; -1 in none."""
        with np.errstate(all="ignore"):
            u = np.log(x) if self.log else x
            share = (u - self._origin[unit]) * self._per_step[unit] / self._last[unit]
            inside = (share >= -_ROUNDING) & (share <= 1.0 + _ROUNDING)
        place = np.where(inside, share * stretches, 0.0).astype(np.int64)
        return np.where(inside, np.clip(place, 0, stretches - 1), -1)

    def _score_block(
        self, x: Floats, y: Floats, unit: Units, z_limit: float | None, root_weight: Floats | None,
        out: ScoredRows,
    ) -> None:  # fmt: skip
        """Score rows as if all lay in plain cells and within limits; then the others with care."""
        u = np.log(x) if self.log else x
        u = (u - self._origin[unit]) * self._per_step[unit]
        # Neither the first nor the last cell is plain, and NaN stays NaN.
        np.clip(u, 0.0, self._last[unit], out=u)
        cell = u.astype(np.int64)
        u -= cell
        cell += self._first[unit]
        value = self._plain_cubic.take(cell, out=out.expected, mode="clip")
        term = np.empty_like(value)
        for coefficient in self._cubic[1:]:
            value *= u
            value += coefficient.take(cell, out=term, mode="clip")
        np.subtract(y, value, out=out.residual)
        sd = self._spread[1].take(cell, out=term, mode="clip")
        sd *= u
        sd += self._spread[0].take(cell, mode="clip")
        np.divide(out.residual, sd, out=out.z)
        if root_weight is not None:
            np.multiply(out.z, root_weight, out=out.z)
        if z_limit is None:
            low, high = self._limits_at(cell, u)
            inside = (out.z >= low) & (out.z <= high)
        else:
            inside = np.abs(out.z, out=term) <= z_limit
        out.status[:] = INSIDE
        if not inside.all():
            rows = np.flatnonzero(~inside)
            scored = self._score_with_care(
                x[rows], y[rows],
                np.full(rows.shape, unit) if isinstance(unit, int) else unit[rows], z_limit,
                None if root_weight is None else root_weight[rows],
            )  # fmt: skip
            out.put(rows, scored)

    def _limits_at(self, cell: NDArray[np.int64], u: Floats) -> tuple[Floats, Floats]:
        """The curves' own limits in z, joined by straight lines."""
        assert self._limits is not None
        low, high = (
            value.take(cell, mode="clip") + step.take(cell, mode="clip") * u
            for value, step in self._limits
        )
        return low, high

    def _score_with_care(
        self, x: Floats, y: Floats, unit: NDArray[np.int64], z_limit: float | None,
        root_weight: Floats | None,
    ) -> ScoredRows:  # fmt: skip
        """Score any rows: cells by comparison with the points themselves, not by rounding."""
        first, last = self._first[unit], self._last[unit].astype(np.int64)
        u = np.log(x) if self.log else x
        u = (u - self._origin[unit]) * self._per_step[unit]
        guess = np.clip(np.nan_to_num(u), 0, last).astype(np.int64)
        cell = first + guess
        cell -= (guess > 0) & (x < self._x[cell])
        after = np.minimum(cell + 1, first + last)
        cell = np.where(x >= self._x[after], after, cell)
        on_point = x == self._x[cell]
        u = np.where(on_point, 0.0, np.clip(u - (cell - first), 0.0, 1.0))
        a, b, c, d = (coefficient[cell] for coefficient in self._cubic)
        expected = ((a * u + b) * u + c) * u + d
        residual = y - expected
        sd = self._spread[0][cell] + np.where(on_point, 0.0, self._spread[1][cell]) * u
        z = np.where(sd > 0.0, residual / sd, np.nan)
        read = np.isfinite(x) & np.isfinite(y)
        if root_weight is not None:
            z = z * root_weight
            read &= np.isfinite(root_weight)

        support = np.where(on_point, self._at_point[cell], self._between[cell])
        support[(x < self._x[first]) | (x > self._x[first + last])] = NO_SUPPORT
        # Without a scatter to measure against there is no judgement either.
        support[(support == INSIDE) & np.isnan(z)] = THIN
        low, high = (-z_limit, z_limit) if z_limit is not None else self._limits_at(cell, u)
        support[(support == INSIDE) & np.isnan(low + high)] = THIN
        support[~read] = NO_READING
        unscored = self._unscored[unit]
        status = np.where(unscored != INSIDE, unscored, support).astype(np.int8)
        judged = status == INSIDE
        low, high = np.broadcast_to(low, z.shape), np.broadcast_to(high, z.shape)
        status[judged] = _side(z[judged], low[judged], high[judged])
        nothing = status >= FIRST_WITHOUT_VALUES
        expected[nothing] = residual[nothing] = z[nothing] = np.nan
        return ScoredRows(expected, residual, z, status)


def root_of(weight: Floats) -> Floats:
    """Return square roots of precisions, as `Lookup.score` takes them; NaN of negative ones."""
    with np.errstate(invalid="ignore"):  # a negative precision is no reading
        return np.sqrt(weight)


def _side(z: Floats, low: Floats, high: Floats) -> Codes:
    """Return `ABOVE` or `BELOW` for z beyond the limits, else `INSIDE`: the place that judges."""
    return (z > high) * np.int8(ABOVE) + (z < low) * np.int8(BELOW)


def _limit_cells(made: Sequence[CurvePoints], ends: NDArray[np.int64]) -> Floats | None:
    """Limits in z: value at each point and step to the next, (low and high, 2, points)."""
    parts = []
    for one in made:
        if one.ends is None:
            return None
        with np.errstate(all="ignore"):
            parts.append((one.ends - one.estimate) / one.residual_sd)
    z = np.concatenate(parts, axis=1)
    step = np.append(np.diff(z, axis=1), np.zeros((2, 1)), axis=1)
    step[:, ends] = 0.0
    return np.stack([z, step], axis=1)


def _check_even(
    t: Floats, first: NDArray[np.int64], sizes: NDArray[np.int64], origin: Floats, per_step: Floats
) -> None:
    """Refuse curves whose points do not lie evenly, which those made at own points do not."""
    unit = np.repeat(np.arange(sizes.size), sizes)
    step = np.arange(unit.size) - first[unit]
    if np.any(np.abs((t[: unit.size] - origin[unit]) * per_step[unit] - step) > _UNEVEN_STEPS):
        raise InputError(
            "--curve", "have evenly spaced points, between which rows can be scored",
            "it was made with --at", "make it without",
        )  # fmt: skip


def _cubic_cells(estimate: Floats, ends: NDArray[np.int64]) -> Floats:
    """Cubics of the share of a cell that lies behind, highest power first.

    A spline runs through each stretch of known values and never over the end of a curve. Steps
    are equal, so stretches of equal length are solved together.
    """
    from scipy.interpolate import CubicSpline

    cubic = np.zeros((4, estimate.shape[0]))
    cubic[3] = estimate
    known = np.isfinite(estimate)
    breaks = np.zeros(known.size + 1, np.bool_)
    breaks[0] = True
    breaks[ends + 1] = True
    begins = np.flatnonzero(known & (breaks[:-1] | ~np.append(False, known[:-1])))
    stops = np.flatnonzero(known & (breaks[1:] | ~np.append(known[1:], False))) + 1
    lengths = stops - begins
    for length in np.unique(lengths[lengths > 1]).tolist():
        places = begins[lengths == length]
        values = estimate[places + np.arange(length)[:, None]]
        # (power, cell, stretch)
        found = CubicSpline(np.arange(length), values).c
        cells = places + np.arange(length - 1)[:, None]
        cubic[:3, cells] = found[:3]
    return cubic


_NO_POINTS = CurvePoints(np.zeros(1), np.zeros(1), np.zeros(1), np.full(1, OUTSIDE))
