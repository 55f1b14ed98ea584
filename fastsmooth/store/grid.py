"""The bins of a store: widths that are powers of two, so that bins of any two grids nest.

Bin j of a grid covers [j 2^e, (j + 1) 2^e) on the plan's scale, whatever window of bins the grid
has at the time. A window that grew too small is moved, or the width doubled; sums at the former
width follow exactly (see `fastsmooth.kernels.pyramid` for the formulas), so no row is read again.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

NODES = 256
# A value further from all others than so many times their span is no reading but a code.
_FAR = 8.0
# More of the rows than this are no outliers.
_FAR_SHARE = 0.05
_NARROWEST = -1000
_WIDEST = 1000


@dataclass(frozen=True)
class Grid:
    """A window of bins.

    Attributes
    ----------
    exponent : int
        The width of a bin is two to this power, on the plan's scale.
    first : int
        Number of the leftmost bin, a multiple of bins / nodes.
    bins : int
        Number of bins, a power of two.
    pilot : tuple of float
        Offsets subtracted from y in equal stretches of the window.

    Examples
    --------
    >>> grid = Grid.over(0.0, 25.0, 1024, (0.0,) * 256)
    >>> grid.width, grid.holds(0.0, 25.0), grid.holds(0.0, 40.0)
    (0.03125, True, False)
    """

    exponent: int
    first: int
    bins: int
    pilot: tuple[float, ...]

    @classmethod
    def over(cls, low: float, high: float, bins: int, pilot: tuple[float, ...]) -> Grid:
        """Return the narrowest grid that covers [low, high]; the pilot is taken as it is."""
        span = high - low
        start = math.frexp(span / bins)[1] - 1 if span > 0.0 else _NARROWEST
        return _fit(max(start, _NARROWEST), low, high, bins, pilot)

    @property
    def width(self) -> float:
        """Width of the bins, on the plan's scale."""
        return math.ldexp(1.0, self.exponent)

    @property
    def origin(self) -> float:
        """Left end of the first bin."""
        return self.first * self.width

    @property
    def high(self) -> float:
        """Right end of the last bin."""
        return (self.first + self.bins) * self.width

    def holds(self, low: float, high: float) -> bool:
        """Tell whether both ends fall into the window."""
        return self.origin <= low and high < self.high

    def pilot_of(self, bins: Integers) -> Floats:
        """Return the pilot of numbered bins, those beyond the window too: the nearest one's."""
        cell = self.bins // len(self.pilot)
        place = np.clip(bins // cell - self.first // cell, 0, len(self.pilot) - 1)
        return np.asarray(self.pilot)[place]

    def grown(self, low: float, high: float) -> Grid:
        """Return this grid if it holds [low, high], else a moved or coarser one that does.

        Parameters
        ----------
        low, high : float
            Lowest and highest value to hold, those counted so far included.
        """
        if self.holds(low, high):
            return self
        bare = _fit(self.exponent, low, high, self.bins, self.pilot)
        return Grid(bare.exponent, bare.first, bare.bins, self._pilot_under(bare))

    def _pilot_under(self, other: Grid) -> tuple[float, ...]:
        """The mean pilot of this grid under each stretch of a coarser or moved one."""
        nodes = len(self.pilot)
        cell = self.bins // nodes
        doublings = other.exponent - self.exponent
        cells = other.first // cell + np.arange(nodes)
        own = self.first // cell
        # Python integers: far windows of narrow bins go beyond 64 bits when shifted.
        starts = [min(max((c << doublings) - own, 0), nodes - 1) for c in cells.tolist()]
        stops = [min(max(((c + 1) << doublings) - 1 - own, 0), nodes - 1) for c in cells.tolist()]
        sums = np.concatenate(([0.0], np.cumsum(self.pilot)))
        first, last = np.array(starts), np.array(stops) + 1
        return tuple(((sums[last] - sums[first]) / (last - first)).tolist())

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {"exponent": self.exponent, "first": self.first, "bins": self.bins,
                "pilot": list(self.pilot)}  # fmt: skip

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Grid:
        """Build a grid from what `to_dict` returned."""
        return cls(**{**plain, "pilot": tuple(plain["pilot"])})


def _fit(exponent: int, low: float, high: float, bins: int, pilot: tuple[float, ...]) -> Grid:
    cell = bins // len(pilot)
    while True:
        width = math.ldexp(1.0, exponent)
        lowest, highest = math.floor(low / width), math.floor(high / width)
        first = lowest // cell * cell
        slack = first + bins - 1 - highest
        if slack >= 0 and abs(first) + bins < 2**51:
            # As much room on the left as on the right, for what comes next.
            first -= slack // 2 // cell * cell
            return Grid(exponent, first, bins, pilot)
        exponent += 1
        if exponent > _WIDEST:
            raise OverflowError("the range of x cannot be cut into bins")


@dataclass(frozen=True)
class Hull:
    """The range that a grid shall hold, and what lies so far beyond that it is left out.

    Attributes
    ----------
    low, high : float
        Ends of the range, on the plan's scale.
    far : int
        Rows beyond it.
    """

    low: float
    high: float
    far: int


def widen(low: float, high: float, values: Floats, rows: int) -> Hull:
    """Widen a range by values outside it, but for the few that lie absurdly far from all others.

    Going outwards, a value joins the range unless it is further from it than eight times its
    span; what lies beyond such a gap is left out if it makes up less than a twentieth of the
    rows. Codes for missing readings (-9999, 1e30) are far in this sense, a cold night is not.

    Parameters
    ----------
    low, high : float
        The range so far.
    values : (n,) float64
        Finite values outside it.
    rows : int
        Rows that the values are part of.

    Examples
    --------
    >>> widen(0.0, 10.0, np.array([12.0, 40.0, -9999.0]), rows=1000)
    Hull(low=0.0, high=40.0, far=1)
    """
    above = np.sort(values[values > high])
    below = -np.sort(-values[values < low])
    ends = [low, high]
    taken = [0, 0]
    moved = True
    while moved:
        moved = False
        for side, sorted_values in ((0, below), (1, above)):
            while taken[side] < sorted_values.size:
                value = float(sorted_values[taken[side]])
                if abs(value - ends[side]) > _FAR * (ends[1] - ends[0]):
                    break
                ends[side] = value
                taken[side] += 1
                moved = True
    far = below.size + above.size - sum(taken)
    if far > _FAR_SHARE * rows:
        return Hull(min(low, float(values.min())), max(high, float(values.max())), 0)
    return Hull(ends[0], ends[1], far)


def core_range(values: Floats) -> tuple[float, float] | None:
    """Return the middle of some values that is wide enough to judge the others by.

    Parameters
    ----------
    values : (n,) float64
        Finite values.

    Returns
    -------
    (float, float) or None
        The narrowest of the middle half, four fifths, 98 % and all that has a width; None if all
        values are equal.
    """
    if not values.size:
        return None
    for aside in (0.25, 0.1, 0.01, 0.0):
        low, high = (float(q) for q in np.quantile(values, (aside, 1.0 - aside)))
        if high > low:
            return low, high
    return None
