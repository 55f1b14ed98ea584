"""General-purpose references for the exact kernels, and the kernels with the same arguments.

All take rows sorted by x and give what they can be compared by. The dense loops are compiled with
the project's own flags and share their work between threads as the project does; they know that
windows end, but not where.
"""

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass

import numpy as np
from fastsmooth.kernels import neighbours, windows
from fastsmooth.kernels.compiled import READ_1D, WRITE_1D, sum_kernel, types
from fastsmooth.kernels.localfit import SCORE
from fastsmooth.kernels.shapes import SHAPES

from fastsmooth import Reading, Smoothing, make_curve
from tests.cases import make_rows

# Below this share of (1 - leverage) a row has no prediction without itself, as in the kernels.
_LEAST_ROOM = 1e-10
_NO_LINE = 1e-10
_NONE, _ALL = np.empty(0), np.empty(0, bool)


@dataclass(frozen=True)
class Sorted:
    """Rows of the shared case table, sorted by x.

    Attributes
    ----------
    x, y : (n,) float64
        y less its mean.
    """

    x: np.ndarray
    y: np.ndarray

    @classmethod
    def of(cls, rows: int, design: str = "uniform", seed: int = 41) -> "Sorted":
        """Draw rows; they are the same for the same arguments."""
        made = make_rows(design, rows, seed)
        order = np.argsort(made.wet_bulb_c, kind="stable")
        y = made.power_kw[order]
        return cls(made.wet_bulb_c[order], y - y.mean())

    @property
    def span(self) -> float:
        """Range of x."""
        return float(self.x[-1] - self.x[0])


def in_ranges(work: Callable[[int, int], np.ndarray], rows: int, threads: int) -> np.ndarray:
    """Do the work on a range of rows per thread and add up."""
    if threads == 1:
        return work(0, rows)
    ends = [rows * part // threads for part in range(threads + 1)]
    with ThreadPoolExecutor(threads) as pool:
        parts = list(pool.map(work, ends[:-1], ends[1:]))
    return np.sum(parts, axis=0)


def window_scores(
    data: Sorted, kernel: str, widths: Sequence[float], threads: int = 1
) -> np.ndarray:
    """Leave-one-out sums of squares by the exact kernels, (widths, 2 estimators)."""
    coefficients = np.array(SHAPES[kernel].coefficients)

    def work(begin: int, end: int) -> np.ndarray:
        out = np.empty((len(widths), 2))
        sums = np.empty((2, windows.STAND_INS + 1))
        for place, h in enumerate(widths):
            windows.score_windows(
                data.x, data.y, _NONE, _NONE, _ALL, coefficients, h, begin, end, sums
            )
            out[place] = sums[:, SCORE]
        return out

    return in_ranges(work, data.x.size, threads)


@sum_kernel(
    types.void(READ_1D, READ_1D, types.float64, types.float64, types.int64, types.int64, WRITE_1D)
)
def _dense_scores(x, y, bandwidth, power, begin, end, out):
    """Leave-one-out sums of both estimators, K = (1 - u^2)^power: every row meets every other."""
    n = x.shape[0]
    per_unit = 1.0 / bandwidth
    out[:] = 0.0
    for i in range(begin, end):
        s0 = s1 = s2 = t0 = t1 = 0.0
        place = x[i]
        for j in range(n):
            u = (x[j] - place) * per_unit
            g = max(1.0 - u * u, 0.0)
            if power == 2.0:
                g *= g
            gu = g * u
            s0 += g
            s1 += gu
            s2 += gu * u
            t0 += g * y[j]
            t1 += gu * y[j]
        room = 1.0 - 1.0 / s0
        r = y[i] - t0 / s0
        out[0] += (r / room) ** 2 if room > _LEAST_ROOM else 0.0
        determinant = s0 * s2 - s1 * s1
        if determinant > _NO_LINE * s0 * s2:
            r = y[i] - (s2 * t0 - s1 * t1) / determinant
            room = 1.0 - s2 / determinant
        out[1] += (r / room) ** 2 if room > _LEAST_ROOM else 0.0


@sum_kernel(
    types.void(READ_1D, READ_1D, types.float64, types.float64, types.int64, types.int64, WRITE_1D)
)
def _direct_scores(x, y, bandwidth, power, begin, end, out):
    """As `_dense_scores`, but each row meets only the rows of its window, whose ends move on."""
    n = x.shape[0]
    per_unit = 1.0 / bandwidth
    out[:] = 0.0
    low = 0
    high = 0
    for i in range(begin, end):
        place = x[i]
        while place - x[low] > bandwidth:
            low += 1
        while high < n and x[high] - place <= bandwidth:
            high += 1
        xs = x[low:high]
        ys = y[low:high]
        s0 = s1 = s2 = t0 = t1 = 0.0
        for j in range(high - low):
            u = (xs[j] - place) * per_unit
            g = max(1.0 - u * u, 0.0)
            if power == 2.0:
                g *= g
            gu = g * u
            s0 += g
            s1 += gu
            s2 += gu * u
            t0 += g * ys[j]
            t1 += gu * ys[j]
        room = 1.0 - 1.0 / s0
        r = y[i] - t0 / s0
        out[0] += (r / room) ** 2 if room > _LEAST_ROOM else 0.0
        determinant = s0 * s2 - s1 * s1
        if determinant > _NO_LINE * s0 * s2:
            r = y[i] - (s2 * t0 - s1 * t1) / determinant
            room = 1.0 - s2 / determinant
        out[1] += (r / room) ** 2 if room > _LEAST_ROOM else 0.0


_POWERS = {"epanechnikov": 1.0, "biweight": 2.0}


def dense_scores(
    data: Sorted, kernel: str, widths: Sequence[float], threads: int = 1
) -> np.ndarray:
    """`window_scores`, every row against every other."""
    return _loop_scores(_dense_scores, data, kernel, widths, threads)


def direct_scores(
    data: Sorted, kernel: str, widths: Sequence[float], threads: int = 1
) -> np.ndarray:
    """`window_scores`, every row against those of its window."""
    return _loop_scores(_direct_scores, data, kernel, widths, threads)


def _loop_scores(
    loop: Callable[..., None], data: Sorted, kernel: str, widths: Sequence[float], threads: int
) -> np.ndarray:
    def work(begin: int, end: int) -> np.ndarray:
        out = np.empty((len(widths), 2))
        for place, h in enumerate(widths):
            loop(data.x, data.y, h, _POWERS[kernel], begin, end, out[place])
        return out

    return in_ranges(work, data.x.size, threads)


def kernel_regression_scores(data: Sorted, widths: Sequence[float]) -> np.ndarray:
    """Leave-one-out sums of squares by statsmodels, Gaussian kernel, (widths, 2 estimators)."""
    from statsmodels.nonparametric.kernel_regression import KernelReg

    out = np.empty((len(widths), 2))
    for column, kind in enumerate(("lc", "ll")):
        # The generator is not used; without one, the library warns of its coming default.
        made = KernelReg(
            data.y, data.x[:, np.newaxis], "c", reg_type=kind, bw=[widths[0]],
            rng=np.random.default_rng(0),
        )  # fmt: skip
        for place, h in enumerate(widths):
            out[place, column] = data.x.size * np.squeeze(
                made.cv_loo(np.array([h]), made.est[kind])
            )
    return out


def neighbour_scores(data: Sorted, grid: Sequence[int], threads: int = 1) -> np.ndarray:
    """Leave-one-out sums of squares for every k, by the neighbour kernels, (k,)."""
    wanted = np.asarray(grid, np.int64)

    def work(begin: int, end: int) -> np.ndarray:
        out = np.empty(wanted.size)
        neighbours.score_neighbours(data.x, data.y, _ALL, wanted, begin, end, out)
        return out

    return in_ranges(work, data.x.size, threads)


def neighbour_scores_sklearn(data: Sorted, grid: Sequence[int]) -> np.ndarray:
    """`neighbour_scores` by scikit-learn, which leaves each row out of its own neighbours."""
    from sklearn.neighbors import KNeighborsRegressor

    out = np.empty(len(grid))
    for place, k in enumerate(grid):
        made = KNeighborsRegressor(k, algorithm="kd_tree").fit(data.x[:, np.newaxis], data.y)
        out[place] = np.sum((data.y - made.predict(None)) ** 2)
    return out


def neighbour_lines(data: Sorted, k: int) -> np.ndarray:
    """Local lines of k neighbours at all rows, tricube weights, (n,)."""
    n = data.x.size
    out = np.empty((neighbours.RADIUS + 1, n))
    neighbours.fit_lines(data.x, data.x, np.ones(n), data.y, k, out)
    return out[neighbours.VALUE]


def neighbour_lines_statsmodels(data: Sorted, k: int) -> np.ndarray:
    """`neighbour_lines` by statsmodels' lowess without robustness rounds."""
    from statsmodels.nonparametric.smoothers_lowess import lowess

    share = (k + 0.5) / data.x.size  # of which the whole rows count
    return lowess(data.y, data.x, frac=share, it=0, delta=0.0, return_sorted=False)


def smooth_by_spline(data: Sorted) -> np.ndarray:
    """Another smoother with a width of its own choice: scipy's cubic spline by GCV, at all rows."""
    from scipy.interpolate import make_smoothing_spline

    return make_smoothing_spline(data.x, data.y)(data.x)


def smooth_with_own_width(data: Sorted) -> np.ndarray:
    """Our curve with its band, the exact engine, width by leave-one-out; read off at all rows."""
    made = make_curve(
        {"wet_bulb_c": data.x, "power_kw": data.y},
        "wet_bulb_c",
        "power_kw",
        reading=Reading(threads=1),
        smoothing=Smoothing(engine="exact"),
    )
    return made.at(data.x)
