"""Speed of the exact kernels, general-purpose references beside them in the same run.

Run by `pytest bench`. Warm: compiled and loaded, one untimed round first, data drawn and sorted
before. One thread, unless a test's docstring says otherwise. Every result is held to another way of
computing it. `bench.exact` takes turns between ours and theirs and prints ratios.
"""

import numpy as np
import pytest
from pytest_benchmark.fixture import BenchmarkFixture

from bench.references import (
    Sorted,
    dense_scores,
    direct_scores,
    kernel_regression_scores,
    neighbour_lines,
    neighbour_lines_statsmodels,
    neighbour_scores,
    neighbour_scores_sklearn,
    smooth_by_spline,
    smooth_with_own_width,
    window_scores,
)
from fastsmooth.settings import usable_cores
from tests import cases
from tests.cases import NOISE_SD_KW, mean_power_kw
from tests.oracle import many_rows

# Shares of the range of x, from a few rows in a window to most of them.
SHARES = (0.003, 0.01, 0.03, 0.1, 0.3)
NEIGHBOURS = (5, 20, 100)
# Every row meets every other: beyond this, for minutes.
MOST_DENSE = 10_000
_ROUNDS = 3

_KERNELS = pytest.mark.parametrize("kernel", ["epanechnikov", "biweight"])
_SIZES = pytest.mark.parametrize("rows", [500, 2_000, MOST_DENSE, 100_000, 1_000_000])
_DENSE_SIZES = pytest.mark.parametrize("rows", [500, 2_000, MOST_DENSE])


@pytest.fixture(scope="module")
def data():
    """Rows of a size and design, drawn when they are first asked for."""
    made: dict[tuple[int, str], Sorted] = {}

    def of(rows: int, design: str = "uniform") -> Sorted:
        if (rows, design) not in made:
            made[rows, design] = Sorted.of(rows, design)
        return made[rows, design]

    return of


def widths(rows: Sorted) -> list[float]:
    return [share * rows.span for share in SHARES]


def timed(benchmark: BenchmarkFixture, work, *arguments, results: int):
    """Time after one untimed round; `results` is how many points and widths come out."""
    result = benchmark.pedantic(work, args=arguments, rounds=_ROUNDS, warmup_rounds=1)
    if benchmark.stats is not None:
        benchmark.extra_info["ns_each"] = benchmark.stats.stats.median / results * 1e9
    return result


def group(benchmark: BenchmarkFixture, *words: object) -> None:
    """What is timed on the same rows stands in one group of the report."""
    benchmark.group = ", ".join(str(word) for word in words)


@_KERNELS
@_SIZES
def test_leave_one_out(benchmark: BenchmarkFixture, data, kernel: str, rows: int) -> None:
    """Both estimators over a grid of widths."""
    group(benchmark, "leave-one-out", kernel, rows)
    given = data(rows)
    found = timed(
        benchmark, window_scores, given, kernel, widths(given), results=rows * len(SHARES)
    )
    if rows <= 100_000:
        np.testing.assert_allclose(found[:1], direct_scores(given, kernel, widths(given)[:1]), 1e-9)
    else:
        # The noise that was put on, and little else, where windows are narrow.
        np.testing.assert_allclose(found[0] / rows, NOISE_SD_KW**2, rtol=0.01)


@_KERNELS
@_DENSE_SIZES
def test_leave_one_out_dense(benchmark: BenchmarkFixture, data, kernel: str, rows: int) -> None:
    """Reference: every row meets every other."""
    group(benchmark, "leave-one-out", kernel, rows)
    given = data(rows)
    found = timed(benchmark, dense_scores, given, kernel, widths(given), results=rows * len(SHARES))
    np.testing.assert_allclose(found, window_scores(given, kernel, widths(given)), rtol=1e-9)


@_KERNELS
@_DENSE_SIZES
def test_leave_one_out_direct(benchmark: BenchmarkFixture, data, kernel: str, rows: int) -> None:
    """Reference: every row meets the rows of its window."""
    group(benchmark, "leave-one-out", kernel, rows)
    given = data(rows)
    found = timed(
        benchmark, direct_scores, given, kernel, widths(given), results=rows * len(SHARES)
    )
    np.testing.assert_allclose(found, window_scores(given, kernel, widths(given)), rtol=1e-9)


@pytest.mark.parametrize("design", [name for name in cases.ALL_DESIGNS if name != "uniform"])
def test_leave_one_out_of_other_designs(benchmark: BenchmarkFixture, data, design: str) -> None:
    """Both estimators, biweight, 100,000 rows: clusters, ties, gaps, stragglers."""
    group(benchmark, "leave-one-out", "biweight", "designs")
    given = data(100_000, design)
    found = timed(
        benchmark, window_scores, given, "biweight", widths(given), results=100_000 * len(SHARES)
    )
    expected = direct_scores(given, "biweight", widths(given)[:1])
    np.testing.assert_allclose(found[:1], expected, rtol=1e-8)


@pytest.mark.parametrize("work", [window_scores, dense_scores], ids=["windows", "dense"])
def test_leave_one_out_with_all_cores(benchmark: BenchmarkFixture, data, work) -> None:
    """As many threads as processors, ranges of rows shared out alike."""
    group(benchmark, "leave-one-out", "biweight", MOST_DENSE, "all cores")
    given = data(MOST_DENSE)
    found = timed(
        benchmark, work, given, "biweight", widths(given), usable_cores(),
        results=MOST_DENSE * len(SHARES),
    )  # fmt: skip
    np.testing.assert_allclose(found, window_scores(given, "biweight", widths(given)), rtol=1e-9)


def test_kernel_regression(benchmark: BenchmarkFixture, data) -> None:
    """Reference: statsmodels' kernel regression, Gaussian kernel, leave-one-out at two widths."""
    group(benchmark, "leave-one-out", "biweight", 500)
    given = data(500)
    two = widths(given)[2:4]
    found = timed(benchmark, kernel_regression_scores, given, two, results=500 * len(two))
    for sums, h in zip(found, two, strict=True):
        for degree, total in enumerate(sums):
            plain = many_rows.criteria_many(given.x, given.y, h, "gaussian", degree)
            assert total / 500 == pytest.approx(plain["leave-one-out"], rel=1e-9)


@_SIZES
def test_neighbours(benchmark: BenchmarkFixture, data, rows: int) -> None:
    """Leave-one-out of nearest-neighbour means over a grid of k."""
    group(benchmark, "neighbours, leave-one-out", rows)
    given = data(rows)
    found = timed(benchmark, neighbour_scores, given, NEIGHBOURS, results=rows * len(NEIGHBOURS))
    # A mean of k others has the variance 1 / k: (1 + 1 / k) sd^2 where the curve hardly bends.
    if rows >= 10_000:
        expected = NOISE_SD_KW**2 * (1.0 + 1.0 / np.array(NEIGHBOURS))
        np.testing.assert_allclose(found / rows, expected, rtol=0.05)
    else:
        np.testing.assert_allclose(found, neighbour_scores_sklearn(given, NEIGHBOURS), rtol=1e-9)


@pytest.mark.parametrize("rows", [500, 2_000, 10_000])
def test_neighbours_sklearn(benchmark: BenchmarkFixture, data, rows: int) -> None:
    """Reference: scikit-learn's nearest neighbours, each row left out of its own."""
    group(benchmark, "neighbours, leave-one-out", rows)
    given = data(rows)
    found = timed(
        benchmark, neighbour_scores_sklearn, given, NEIGHBOURS, results=rows * len(NEIGHBOURS)
    )
    np.testing.assert_allclose(found, neighbour_scores(given, NEIGHBOURS), rtol=1e-9)


@pytest.mark.parametrize("work", [neighbour_lines, neighbour_lines_statsmodels])
@pytest.mark.parametrize("rows", [500, 2_000, 10_000])
def test_neighbour_lines(benchmark: BenchmarkFixture, data, work, rows: int) -> None:
    """Tricube lines at all rows, a twentieth of them in a window: ours and statsmodels' lowess."""
    group(benchmark, "neighbour lines", rows)
    given = data(rows)
    found = timed(benchmark, work, given, rows // 20, results=rows)
    other = neighbour_lines if work is neighbour_lines_statsmodels else neighbour_lines_statsmodels
    np.testing.assert_allclose(found, other(given, rows // 20), rtol=0.0, atol=1e-9)


@pytest.mark.parametrize("work", [smooth_with_own_width, smooth_by_spline])
def test_smoothing_with_own_width(benchmark: BenchmarkFixture, data, work) -> None:
    """From 2,000 rows to values at all of them: our curve and scipy's spline choose themselves."""
    group(benchmark, "smoothing with its own width", 2_000)
    given = data(2_000)
    found = timed(benchmark, work, given, results=2_000)
    truth = mean_power_kw(given.x)
    away = found - (truth - truth.mean())
    # Both follow the mean far closer than the noise scatters.
    assert np.sqrt(np.mean(away**2)) < 0.25 * NOISE_SD_KW
