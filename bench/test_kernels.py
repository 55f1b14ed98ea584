"""Speed of the compiled kernels alone, and of compiling them.

Warm, one thread, set-up not timed, unless a test's docstring says otherwise. Results are checked
against closed forms: a table whose bins all hold the same rows, spread evenly, is a uniform
density, for which kernel sums are moments of the kernel function.
"""

import numpy as np
import pytest
from fastsmooth.kernels import accumulate, binned, localfit
from fastsmooth.kernels.shapes import SHAPES, Shape
from pytest_benchmark.fixture import BenchmarkFixture

from bench import fresh

_BINS = 8192
_FOLDS = 32
_ROWS_PER_BIN = 100.0
_ROWS = 1_000_000
_POINTS = 256
_SLOPE = 0.003  # of the response, per bin
_NOISE_VARIANCE = 2.0

_KERNELS = pytest.mark.parametrize("shape", SHAPES.values(), ids=list(SHAPES))


def even_rows() -> np.ndarray:
    """Sums of 1, v, v^2 over rows spread evenly in every bin, (3, bins)."""
    return np.repeat([[_ROWS_PER_BIN], [0.0], [_ROWS_PER_BIN / 12.0]], _BINS, axis=1)


def width_in_bins(shape: Shape) -> float:
    """As many bins as a bandwidth has at the coarse end of a level."""
    return float(shape.bins_per_bandwidth)


@pytest.mark.benchmark(group="kernels")
def test_accumulate_rows(benchmark: BenchmarkFixture) -> None:
    """Rows in random order into 8192 bins."""
    rng = np.random.default_rng(0)
    x, y = rng.uniform(0.0, _BINS, _ROWS), rng.normal(size=_ROWS)
    table = np.zeros((_BINS, accumulate.PLAIN_SLOTS))
    extent = np.array([np.inf, -np.inf])
    refused = np.zeros(len(accumulate.REASONS), np.int64)
    start = (0.0, 1.0, extent, refused)
    accumulate.accumulate_rows(table, x, y, *start)
    assert table[:, 0].sum() == _ROWS
    np.testing.assert_array_equal(table[:, 0], np.bincount(x.astype(int), minlength=_BINS))
    np.testing.assert_allclose(table[:, 6].sum(), (y * y).sum(), rtol=1e-10)
    benchmark(accumulate.accumulate_rows, table, x, y, *start)
    assert not refused.any()
    if benchmark.stats is not None:
        benchmark.extra_info["ns_a_row"] = benchmark.stats.stats.median / _ROWS * 1e9


@pytest.mark.benchmark(group="kernels")
@_KERNELS
def test_bin_sums(benchmark: BenchmarkFixture, shape: Shape) -> None:
    """S_0 to S_2 at 8192 bin centres, for one bandwidth."""
    h = width_in_bins(shape)
    reach = int(np.ceil(shape.support * h + 0.5))
    stencil = np.empty((3, 3, reach + 1))
    binned.fill_stencil(shape.code, h, 1, stencil)
    padded = np.zeros((3, _BINS + 2 * reach))
    padded[:, reach : reach + _BINS] = even_rows()
    out = np.empty((3, _BINS))
    benchmark(binned.bin_sums, padded, stencil, out)
    for power in range(3):
        inside = out[power, reach:-reach]
        expected = _ROWS_PER_BIN * h * shape.moment(power)
        np.testing.assert_allclose(inside, expected, rtol=1e-6, atol=1e-6 * _ROWS_PER_BIN * h)


@pytest.mark.benchmark(group="kernels")
@_KERNELS
def test_point_sums(benchmark: BenchmarkFixture, shape: Shape) -> None:
    """All twenty sums at 256 points, for one bandwidth."""
    h = width_in_bins(shape)
    weight = even_rows()
    centres = np.arange(_BINS) + 0.5
    # y = slope x: sums of y, y v, y v^2 over evenly spread rows.
    response = np.stack(
        [
            _SLOPE * centres * weight[0],
            _SLOPE * weight[2],
            _SLOPE * centres * weight[2],
        ]
    )
    margin = shape.support * h + 1.0
    points = np.linspace(margin, _BINS - margin, _POINTS)
    out = np.empty((binned.POINT_ROWS, _POINTS))
    benchmark(
        binned.point_sums, shape.code, h, points, weight, response, _NOISE_VARIANCE * weight,
        weight, out,
    )  # fmt: skip
    mass = _ROWS_PER_BIN * h
    np.testing.assert_allclose(out[binned.S], mass, rtol=1e-5)
    np.testing.assert_allclose(out[binned.S + 1], 0.0, atol=1e-5 * mass)
    np.testing.assert_allclose(out[binned.S + 2], mass * shape.moment(2), rtol=1e-5)
    np.testing.assert_allclose(out[binned.T], mass * _SLOPE * points, rtol=1e-5)
    np.testing.assert_allclose(out[binned.V], mass * _NOISE_VARIANCE * shape.roughness, rtol=1e-5)
    np.testing.assert_allclose(out[binned.U], mass * shape.roughness, rtol=1e-5)


@pytest.mark.benchmark(group="kernels")
def test_fold_scores(benchmark: BenchmarkFixture) -> None:
    """Criterion of 32 folds from 8192 bins."""
    rng = np.random.default_rng(1)
    folds = rng.normal(size=(_FOLDS, 7, _BINS))
    coefficients = rng.normal(size=(7, _BINS))
    out = np.empty(_FOLDS)
    benchmark(localfit.fold_scores, folds, coefficients, out)
    used = [0, 1, 2, 3, 4, 6]  # v^2 e has no part in squared residuals
    expected = np.einsum("frb,rb->f", folds[:, used], coefficients[used])
    np.testing.assert_allclose(out, expected, rtol=0.0, atol=1e-9)


@pytest.mark.benchmark(group="compiling")
def test_compiling(benchmark: BenchmarkFixture) -> None:
    """Cold. A fresh process that compiles every kernel of the curve into an empty cache."""
    compiling = []
    benchmark.pedantic(
        lambda: compiling.append(fresh.compile_kernels()), rounds=2, iterations=1, warmup_rounds=0
    )
    loading = [fresh.load_kernels() for _ in range(3)]
    assert min(compiling) > 2.0 * min(loading)


@pytest.mark.benchmark(group="compiling")
def test_loading(benchmark: BenchmarkFixture) -> None:
    """Warm. A fresh process that loads every kernel of the curve from the cache."""
    benchmark.pedantic(fresh.load_kernels, rounds=5, iterations=1, warmup_rounds=1)
