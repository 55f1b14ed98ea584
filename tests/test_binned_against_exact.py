"""Binned against exact over the whole crossing: kernels, estimators, designs, sizes, widths.

The accuracy contract where plain loops cannot reach, and the word that every binned curve says
about its own error. Errors of curves are in standard deviations of the noise.
"""

import math
from dataclasses import replace

import numpy as np
import pytest
from fastsmooth.kernels.shapes import SHAPES

from fastsmooth import Band, Reading, Smoothing, make_curve
from fastsmooth.search import search_table
from tests import cases, sweep

SMOOTH = ("biweight", "triweight", "tricube", "gaussian")
KINKED = ("triangular", "epanechnikov")
COMPACT = tuple(name for name in SHAPES if name != "gaussian")
# What a curve keeps to where it says that it has rows enough.
CONTRACT = {name: 1e-6 if name in SMOOTH else 1e-4 for name in (*SMOOTH, *KINKED)}
# With eight times as many bins errors fall by at least so much.
LEAST_FALL = {name: 150.0 if name in SMOOTH else 10.0 for name in SHAPES} | {"uniform": 2.5}
SEED = 17


@pytest.fixture(scope="module")
def crossing():
    return list(sweep.sweep(seed=SEED))


@pytest.fixture(scope="module")
def data():
    """Each design at a size, made when it is first asked for."""
    made = {}

    def of(design, rows):
        if (design, rows) not in made:
            made[design, rows] = sweep.Data.of(design, rows, SEED)
        return made[design, rows]

    return of


def of_kernel(crossing, kernel):
    return [figures for figures in crossing if figures.case.kernel == kernel]


def test_the_crossing_is_complete(crossing):
    met = {figures.case[:4] for figures in crossing}
    assert len(met) == len(cases.ALL_DESIGNS) * len(sweep.SIZES) * len(SHAPES) * 2
    # Widths are left out only where a design's rows support none.
    assert len(crossing) > 0.98 * len(met) * len(sweep.WIDTHS_IN_BINS)
    assert np.isfinite([(figures.error, figures.estimated) for figures in crossing]).all()


@pytest.mark.parametrize("kernel", CONTRACT)
def test_curves_keep_the_contract(crossing, kernel):
    coarsest = sweep.widths_in_bins(kernel)[0]
    errors = {False: [], True: []}
    for figures in of_kernel(crossing, kernel):
        errors[figures.case.bins_per_bandwidth == coarsest].append(figures.supported_error)
    assert max(errors[False]) <= CONTRACT[kernel]
    # At the fewest bins the sparsest windows of a curve in fifty go beyond it.
    assert np.mean(np.array(errors[True]) <= CONTRACT[kernel]) >= 0.95
    assert max(errors[True]) <= 2.0 * CONTRACT[kernel]


@pytest.mark.parametrize("kernel", SHAPES)
def test_the_estimate_bounds_the_error(crossing, kernel):
    figures = of_kernel(crossing, kernel)
    assert len(figures) > 150
    assert np.mean([one.bounded for one in figures]) >= 0.95
    # It is no idle bound either.
    above = [one.estimated / one.error for one in figures if one.error > 1e-12]
    assert np.median(above) < 20.0


@pytest.mark.parametrize("kernel", SHAPES)
def test_the_estimate_falls_as_the_error_does(crossing, kernel):
    """Medians over designs, sizes and estimators, with eight times as many bins."""
    coarsest, *_, finest = sweep.widths_in_bins(kernel)
    figures = [one for one in of_kernel(crossing, kernel) if one.case.design != "lattice"]
    for name in ("error", "estimated"):
        before, after = (
            np.median([getattr(o, name) for o in figures if o.case.bins_per_bandwidth == bins])
            for bins in (coarsest, finest)
        )
        assert before / after > LEAST_FALL[kernel], name


@pytest.mark.parametrize("estimator", sweep.ESTIMATORS)
@pytest.mark.parametrize("kernel", COMPACT)
def test_a_curve_beyond_the_contract_says_so(data, kernel, estimator):
    """Outliers left in the range: windows so wide that the bulk of the rows lies in a few bins."""
    rows = data("outliers", 2_500)
    bins = 2 * math.ceil(32 * (rows.x[-1] - rows.x[0]) / rows.well_seen)
    coarse = replace(rows, bins=bins)
    level = coarse.pyramid.levels[0]
    figures = coarse.compare(level, SHAPES[kernel], 64 * level.width, estimator)
    assert CONTRACT.get(kernel, 1e-4) < figures.error <= figures.estimated


@pytest.mark.parametrize("kernel", ["biweight", "epanechnikov", "gaussian"])
@pytest.mark.parametrize("design", cases.DESIGNS)
def test_a_finished_curve_carries_the_estimate(data, design, kernel):
    """Bins, level and noise as the product chooses them; the width too."""
    rows = data(design, 20_000)
    made = make_curve(
        {"wet_bulb_c": rows.x, "power_kw": rows.y},
        "wet_bulb_c",
        "power_kw",
        reading=Reading(folds=4, threads=1),
        smoothing=Smoothing(kernel=kernel, widths=12, engine="binned"),
        band=Band(points=sweep.PLACES),
    )
    assert made.trace["engine"]["name"] == "binned"
    seen = np.isfinite(made.estimate)
    exact = rows.exact(made.x[seen], SHAPES[kernel], made.bandwidth, "local-linear")
    error = np.abs(made.estimate[seen] - exact) / made.residual_sd[seen]
    assert error.max() <= made.trace["engine"]["error_in_noise_sd"] <= CONTRACT[kernel]


# Largest relative error of a criterion (of the logarithm aicc absolute): on data without ties;
# where some thirty rows make a window, so that leaving one out magnifies; and where ties by the
# dozen meet the kink of kinked kernels, or the uniform's jump.
CRITERIA = {
    "ordinary": {
        "biweight": 2.5e-5, "triweight": 2.5e-5, "tricube": 2.5e-5,
        "epanechnikov": 1e-4, "triangular": 4e-4, "uniform": 3e-3,
    },
    "few rows": {
        "biweight": 1e-4, "triweight": 1e-4, "tricube": 1e-4,
        "epanechnikov": 1e-3, "triangular": 1e-3, "uniform": 3e-2,
    },
    "ties": {
        "biweight": 4e-5, "triweight": 1.2e-5, "tricube": 1.2e-5,
        "epanechnikov": 2e-3, "triangular": 2e-3, "uniform": 0.2,
    },
}  # fmt: skip
# And typically, on ordinary data.
TYPICAL_CRITERIA = {
    "biweight": 2e-7, "triweight": 2e-7, "tricube": 2e-7,
    "epanechnikov": 5e-7, "triangular": 1e-5, "uniform": 5e-5,
}  # fmt: skip


def supported(rows):
    """The interval of widths over which criteria are compared, or None."""
    high = rows.x[-1] - rows.x[0]
    return (rows.well_seen, high) if rows.well_seen < high / 1.5 else None


@pytest.mark.parametrize("kernel", COMPACT)
def test_criteria_are_those_over_all_rows(data, kernel):
    shape = SHAPES[kernel]
    errors = {kind: [] for kind in CRITERIA}
    for design in cases.ALL_DESIGNS:
        for size in sweep.SIZES:
            rows = data(design, size)
            if (bounds := supported(rows)) is None:
                assert design == "outliers"
                continue
            found = search_table(rows.table, rows.pyramid, shape, widths=4, bounds=bounds)
            assert found.rows_alone == 0.0
            kind = "ties" if design == "lattice" else "few rows" if size < 1_000 else "ordinary"
            widths = found.trails["local-linear"].bandwidths.tolist()
            for place, bandwidth in enumerate(widths):
                exact = rows.criteria(shape, bandwidth)
                for estimator in sweep.ESTIMATORS:
                    trail = found.trails[estimator]
                    for criterion, value in exact[estimator].items():
                        error = abs(trail.values(criterion)[place] - value)
                        relative = error if criterion == "aicc" else error / value
                        errors[kind].append((relative, design, size, criterion))
    assert len(errors["ordinary"]) > 300
    for kind, of_kind in errors.items():
        assert max(of_kind)[0] <= CRITERIA[kind][kernel], max(of_kind)
    assert np.median([one[0] for one in errors["ordinary"]]) <= TYPICAL_CRITERIA[kernel]


@pytest.mark.parametrize("kernel", [name for name in COMPACT if name != "uniform"])
def test_the_choice_is_the_best_over_all_rows(data, kernel):
    shape = SHAPES[kernel]
    compared = 0
    for design in cases.ALL_DESIGNS:
        for size in (300, 2_500, 20_000):
            rows = data(design, size)
            if (bounds := supported(rows)) is None:
                continue
            found = search_table(rows.table, rows.pyramid, shape, widths=20, bounds=bounds)
            for estimator, trail in found.trails.items():
                best = rows.best(shape, estimator, *bounds, widths=20)
                at_best, at_chosen = (
                    rows.criteria(shape, width)[estimator]["leave-one-out"]
                    for width in (best, trail.bandwidth)
                )
                # No width that all rows would prefer is missed by more than this.
                assert at_chosen <= at_best * (1.0 + 1e-5), (design, size, estimator)
                if kernel in SMOOTH:
                    # The criterion of kinked kernels is jagged in h: many widths are as good.
                    assert trail.bandwidth == pytest.approx(best, rel=5e-3), (design, size)
                compared += 1
    assert compared >= 30


def test_the_choice_among_many_rows(data):
    """200,000 rows: where bins stand for the most rows each."""
    shape = SHAPES["biweight"]
    for design in cases.ALL_DESIGNS:
        rows = data(design, 200_000)
        bounds = supported(rows)
        found = search_table(rows.table, rows.pyramid, shape, widths=16, bounds=bounds)
        for estimator, trail in found.trails.items():
            best = rows.best(shape, estimator, *bounds, widths=16)
            assert trail.bandwidth == pytest.approx(best, rel=5e-3), (design, estimator)
