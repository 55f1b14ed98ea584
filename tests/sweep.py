"""One crossing of kernels, estimators, designs, sizes and widths: binned results against all rows.

Tests hold the crossing to the accuracy contract; `bench/errors.py` prints it as tables. Exact
figures come from sums over every row: for compact kernels from the exact kernels, which have tests
of their own against plain loops; for the Gaussian from the definition, written out below.
"""

import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cached_property
from typing import NamedTuple

import numpy as np
from fastsmooth.kernels import windows
from fastsmooth.kernels.localfit import LOST, RESIDUAL, SCORE, TRACE
from fastsmooth.kernels.shapes import SHAPES, Shape

from fastsmooth import Band, Reading
from fastsmooth.assemble import binning_error
from fastsmooth.bands import Noise, Occupied, Points, fit_points
from fastsmooth.bintable import BinTable, Level, Pyramid
from fastsmooth.curve import EDGE, OK
from fastsmooth.passes import count_finer, count_rows
from fastsmooth.plan import BINS
from fastsmooth.search import narrowest_width
from fastsmooth.smoother import Fits, width_in_bins
from fastsmooth.source import Columns, open_source
from tests import cases
from tests.oracle import many_rows

ESTIMATORS = ("local-constant", "local-linear")
SIZES = (300, 2_500, 20_000, 200_000)
PLACES = 41
# Bin widths in h. The Gaussian's window is over three times as wide for the same h.
WIDTHS_IN_BINS = (64, 128, 256, 512)
GAUSSIAN_WIDTHS_IN_BINS = (16, 32, 64, 128)
# A window reaches at most so far, as a share of the range: a wider one is no local fit any more.
_WIDEST = 0.25
# Beyond so many standard deviations the Gaussian is below 1e-20 of its peak.
_GAUSSIAN_REACH = 9.6
_MANY_ROWS, _BEYOND_TIES = 30, 1.13
_NONE, _ALL = np.empty(0), np.empty(0, bool)


class Case(NamedTuple):
    """One curve of the crossing."""

    design: str
    rows: int
    kernel: str
    estimator: str
    bins_per_bandwidth: int


class Figures(NamedTuple):
    """How far a binned curve lies from the exact one, in standard deviations of the noise.

    Attributes
    ----------
    case : Case
        Which curve.
    error : float
        Largest error at all places that have a value.
    supported_error : float
        Largest error where the curve says `ok` or `edge`; 0 where it says so nowhere.
    estimated : float
        The curve's own estimate of its error.
    """

    case: Case
    error: float
    supported_error: float
    estimated: float

    @property
    def bounded(self) -> bool:
        """Whether the estimate bounds the error."""
        return self.error <= self.estimated


def widths_in_bins(kernel: str) -> tuple[int, ...]:
    """Return the widths of the crossing, in bins."""
    return GAUSSIAN_WIDTHS_IN_BINS if kernel == "gaussian" else WIDTHS_IN_BINS


@dataclass(frozen=True)
class Data:
    """Rows of one design, sorted."""

    design: str
    x: np.ndarray
    y: np.ndarray
    noise_sd_kw: float
    bins: int = BINS

    @classmethod
    def of(cls, design: str, rows: int, seed: int) -> "Data":
        """Draw rows."""
        made = cases.make_rows(design, rows, seed=seed)
        order = np.argsort(made.wet_bulb_c, kind="stable")
        return cls(design, made.wet_bulb_c[order], made.power_kw[order], made.noise_sd_kw)

    @cached_property
    def table(self) -> BinTable:
        """The rows in bins over all of their range, planned as for a curve."""
        # Folds and threads change no curve; few of them save time.
        reading = Reading(range=(self.x[0], self.x[-1]), folds=2, threads=1)
        columns = {"wet_bulb_c": self.x, "power_kw": self.y}
        with open_source(columns, Columns("wet_bulb_c", "power_kw")) as source:
            counted = count_rows(source, reading)
            if self.bins != BINS:
                counted = count_finer(source, counted, reading, self.bins)
            table = counted.table
        assert table.tally.used == self.x.size
        return table

    @cached_property
    def pyramid(self) -> Pyramid:
        """The table at all bin widths."""
        return Pyramid(self.table)

    @cached_property
    def places(self) -> np.ndarray:
        """Where curves are compared."""
        return np.linspace(self.x[0], self.x[-1], PLACES)

    @cached_property
    def narrowest(self) -> float:
        """The narrowest width that a search would look at."""
        return narrowest_width(self.table)

    @cached_property
    def well_seen(self) -> float:
        """The narrowest width at which every window holds many rows, and the table enough bins."""
        reached = self.width_for_rows(_MANY_ROWS)
        # In a window that just reaches the next ties, these have hardly any weight.
        return max(
            reached, _BEYOND_TIES * self.narrowest, WIDTHS_IN_BINS[0] * self.table.plan.width
        )

    def width_for_rows(self, rows: int) -> float:
        """The narrowest width whose window holds so many others from every row."""
        x = self.x
        nearest = np.full(x.size, np.inf)
        for left in range(rows + 1):
            first = np.concatenate((np.full(left, np.inf), x[left:] - x[: x.size - left]))
            right = rows - left
            last = np.concatenate((x[right:] - x[: x.size - right], np.full(right, np.inf)))
            nearest = np.minimum(nearest, np.maximum(first, last))
        return float(nearest.max())

    def level_for(self, shape: Shape, bins: float) -> Level | None:
        """The finest level at which so many bins make a bandwidth that the rows support."""
        for level in self.pyramid.levels[:-2]:
            reach = shape.reach * bins * level.width
            if self.narrowest <= reach <= _WIDEST * (self.x[-1] - self.x[0]):
                return level
        return None

    def binned(self, level: Level, shape: Shape, bandwidth: float, estimator: str) -> Points:
        """The curve at the places from bins; the noise is as it was put on."""
        known = np.full(level.bins, self.noise_sd_kw**2)
        noise = Noise(known, np.full(level.bins, 1e3), self.noise_sd_kw**2, None)
        finest = self.pyramid.levels[0]
        # Fits at the bin centres serve only to estimate the noise.
        fits = Fits(level, width_in_bins(bandwidth, level), {}, {}, {}, _NONE)
        return fit_points(
            self.places, fits, noise, shape, estimator=estimator,
            reference=self.table.plan.reference, band=Band(bias="ignored", noise="constant"),
            by_block=False, extent=(self.x[0], self.x[-1]),
            occupied=Occupied(finest.origin, finest.width, np.flatnonzero(finest.count)),
        )  # fmt: skip

    def exact(
        self, places: np.ndarray, shape: Shape, bandwidth: float, estimator: str
    ) -> np.ndarray:
        """The curve from every row."""
        degree, middle = ESTIMATORS.index(estimator), self.y.mean()
        if not shape.coefficients:
            return middle + gaussian_fits(places, self.x, self.y - middle, bandwidth, degree)
        out = np.empty((windows.DEGREE + 1, places.size))
        windows.fit_points(
            places, self.x, self.y - middle, _NONE, _NONE, _NONE, np.array(shape.coefficients),
            bandwidth, degree, out,
        )  # fmt: skip
        return middle + out[0]

    def figures(self, kernel: str, estimator: str, bins: int) -> Figures | None:
        """Compare one curve; None where the rows support no such width."""
        shape = SHAPES[kernel]
        level = self.level_for(shape, bins)
        if level is None:
            return None
        return self.compare(level, shape, bins * level.width, estimator)

    def compare(self, level: Level, shape: Shape, bandwidth: float, estimator: str) -> Figures:
        """Compare the curve of a level with the exact one."""
        points = self.binned(level, shape, bandwidth, estimator)
        reference = self.table.plan.reference
        seen = np.isfinite(points.estimate)
        error = np.zeros(self.places.size)
        exact = self.exact(self.places[seen], shape, bandwidth, estimator)
        error[seen] = np.abs(points.estimate[seen] - exact) / self.noise_sd_kw
        supported = (points.status == OK) | (points.status == EDGE)
        bins = round(bandwidth / level.width)
        return Figures(
            Case(self.design, self.x.size, shape.name, estimator, bins),
            float(error.max()),
            float(error[supported].max(initial=0.0)),
            binning_error(points, self.places, level, bandwidth, shape, estimator, reference),
        )

    def leave_one_out(self, shape: Shape, bandwidth: float, estimator: str) -> float:
        """Leave-one-out from every row; for the Gaussian every row meets every other."""
        if shape.coefficients:
            return self.criteria(shape, bandwidth)[estimator]["leave-one-out"]
        degree = ESTIMATORS.index(estimator)
        return many_rows.criteria_many(self.x, self.y, bandwidth, shape.name, degree)[
            "leave-one-out"
        ]

    def criteria(self, shape: Shape, bandwidth: float) -> dict[str, dict[str, float]]:
        """Leave-one-out, gcv and aicc of both estimators from every row, for a compact kernel.

        Formulas: Craven & Wahba (1979, Numer. Math. 31:377); Hurvich, Simonoff & Tsai (1998,
        JRSSB 60:271). All weights are 1. Infinite where a row has no prediction from the others.
        """
        sums = np.empty((2, windows.STAND_INS + 1))
        n = self.x.size
        windows.score_windows(
            self.x, self.y - self.y.mean(), _NONE, _NONE, _ALL, np.array(shape.coefficients),
            bandwidth, 0, n, sums,
        )  # fmt: skip
        criteria = {}
        for name, row in zip(ESTIMATORS, sums, strict=True):
            variance, trace = row[RESIDUAL] / n, row[TRACE]
            criteria[name] = {
                "leave-one-out": float(row[SCORE] / n) if row[LOST] == 0.0 else np.inf,
                "gcv": float(variance / (1.0 - trace / n) ** 2),
                "aicc": float(np.log(variance) + 1.0 + 2.0 * (trace + 1.0) / (n - trace - 2.0)),
            }
        return criteria

    def best(self, shape: Shape, estimator: str, low: float, high: float, widths: int) -> float:
        """The width of least leave-one-out over all rows: a grid in log h, then golden section."""

        def score(log_h: float) -> float:
            return self.leave_one_out(shape, math.exp(log_h), estimator)

        grid = np.linspace(math.log(low), math.log(high), widths)
        place = int(np.argmin([score(one) for one in grid]))
        return math.exp(least(score, grid[max(place - 1, 0)], grid[min(place + 1, widths - 1)]))


def least(score: Callable[[float], float], left: float, right: float) -> float:
    """Where a function has its minimum, by golden section, to 1e-4 (Kiefer 1953)."""
    share = (math.sqrt(5.0) - 1.0) / 2.0
    a, b = right - share * (right - left), left + share * (right - left)
    at_a, at_b = score(a), score(b)
    while right - left > 1e-4:
        if at_a <= at_b:
            right, b, at_b = b, a, at_a
            a = right - share * (right - left)
            at_a = score(a)
        else:
            left, a, at_a = a, b, at_b
            b = left + share * (right - left)
            at_b = score(b)
    return 0.5 * (left + right)


def gaussian_fits(
    places: np.ndarray, x: np.ndarray, y: np.ndarray, bandwidth: float, degree: int
) -> np.ndarray:
    """Local constant or local line with Gaussian weights; x ascending.

    The line is taken about the weighted mean of x: m = mean y - slope (mean x - place), slope =
    sum K (x - mean x) (y - mean y) / sum K (x - mean x)^2 (Fan & Gijbels 1996, section 3.2). Where
    all weight lies at one x, the mean.
    """
    values = np.empty(places.size)
    reach = _GAUSSIAN_REACH * bandwidth
    starts = np.searchsorted(x, places - reach)
    stops = np.searchsorted(x, places + reach, side="right")
    for p, (start, stop) in enumerate(zip(starts, stops, strict=True)):
        u, ys = (x[start:stop] - places[p]) / bandwidth, y[start:stop]
        k = np.exp(-0.5 * u * u)
        k /= k.sum()
        mean_u, mean_y = (k * u).sum(), (k * ys).sum()
        v = u - mean_u
        spread = (k * v * v).sum()
        slope = (k * v * (ys - mean_y)).sum() / spread if degree == 1 and spread > 0.0 else 0.0
        values[p] = mean_y - slope * mean_u
    return values


def sweep(sizes: tuple[int, ...] = SIZES, seed: int = 17) -> Iterator[Figures]:
    """Go through the crossing; a width that the rows of a design do not support is left out."""
    for design in cases.ALL_DESIGNS:
        for rows in sizes:
            data = Data.of(design, rows, seed)
            for kernel in SHAPES:
                for bins in widths_in_bins(kernel):
                    for estimator in ESTIMATORS:
                        figures = data.figures(kernel, estimator, bins)
                        if figures is not None:
                            yield figures
