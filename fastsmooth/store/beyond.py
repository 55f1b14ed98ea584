"""Values of x that lie beyond the bins, kept to decide whether the bins shall reach them."""

from __future__ import annotations

import math
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Values that are kept; above, every other one.
_MOST_BEYOND = 65_536


@dataclass
class Beyond:
    """Values of x beyond the bins.

    Attributes
    ----------
    values : list of (n,) float64
        All of them, or a selection.
    stride : int
        How many each of them stands for.
    low, high : float
        The extremes.
    """

    values: list[Floats] = field(default_factory=list)
    stride: int = 1
    low: float = math.inf
    high: float = -math.inf

    def add(self, values: Floats) -> None:
        """Add values."""
        if not values.size:
            return
        self.low = min(self.low, float(values.min()))
        self.high = max(self.high, float(values.max()))
        self.values.append(values[:: self.stride])
        self._thin()

    def merge(self, other: Beyond) -> None:
        """Add what another has noted."""
        self.low, self.high = min(self.low, other.low), max(self.high, other.high)
        while self.stride < other.stride:
            self._halve()
        self.values.extend(one[:: self.stride // other.stride] for one in other.values)
        self._thin()

    def _thin(self) -> None:
        while sum(one.size for one in self.values) > _MOST_BEYOND:
            self._halve()

    def _halve(self) -> None:
        if self.values:
            self.values = [np.sort(np.concatenate(self.values))[::2]]
        self.stride *= 2

    def all(self) -> Floats:
        """Return the selection, extremes included."""
        if self.low > self.high:
            return np.empty(0)
        return np.concatenate([*self.values, [self.low, self.high]])
