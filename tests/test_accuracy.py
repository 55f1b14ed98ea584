"""The accuracy contract: binned results against every row, summed by plain loops.

`test_binned_against_exact.py` widens it to large data, with the exact kernels in the loops' place.

Widths of at least 64 bins (16 for the Gaussian). Errors are in standard deviations of the noise.
Smooth kernels keep within 1e-6, kernels with a kink at the ends of their window within 1e-4. The
uniform kernel jumps there: what holds is that no more than the rows of its two end bins go astray.
"""

import numpy as np
import pytest
from fastsmooth.kernels.shapes import SHAPES

from fastsmooth import Band, Reading, Smoothing, make_curve
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.plan import Plan
from fastsmooth.search import search_table
from tests import cases
from tests.oracle import many_rows

SMOOTH = ("biweight", "triweight", "tricube", "gaussian")
KINKED = ("triangular", "epanechnikov")
DEGREES = {"local-constant": 0, "local-linear": 1}
# Not a multiple of the lattice's half degree: rows exactly at the end of a uniform window are
# decided by rounding.
NARROW_C, WIDE_C = 1.37, 5.83
PLACES = 31
# Folds and threads do not change the curve; few of them save time.
FEW = Reading(folds=4, threads=1)


def curve_of(rows, kernel, estimator, width_c, **columns):
    x = rows.wet_bulb_c
    data = {**rows.columns(), **columns}
    at = tuple(np.linspace(x.min(), x.max(), PLACES).tolist())
    names = {name: name for name in columns}
    return make_curve(
        data,
        "wet_bulb_c",
        "power_kw",
        reading=FEW,
        smoothing=Smoothing(
            kernel=kernel, estimator=estimator, bandwidth=width_c, widths=8, engine="binned"
        ),
        band=Band(at=at, bias="ignored", noise="constant"),
        **names,
    )


def errors_of(made, rows, kernel, estimator, width_c, weights=None):
    expected = many_rows.fit_many(
        made.x, rows.wet_bulb_c, rows.power_kw, width_c, kernel, DEGREES[estimator], weights
    )[0]
    error = np.abs(made.estimate - expected) / rows.noise_sd_kw
    return error[np.isfinite(made.estimate)]


SWEEP = [
    (design, kernel, estimator, width_c)
    for design in cases.DESIGNS
    for kernel in (*SMOOTH, *KINKED)
    for estimator, width_c in (("local-linear", NARROW_C), ("local-constant", WIDE_C))
]


@pytest.fixture(scope="module")
def designs():
    return {design: cases.make_rows(design, 2500, seed=17) for design in cases.DESIGNS}


@pytest.fixture(scope="module")
def sweep(designs):
    """True errors and the curve's own estimate of them, per case."""
    figures = {}
    for design, kernel, estimator, width_c in SWEEP:
        made = curve_of(designs[design], kernel, estimator, width_c)
        assert made.trace["engine"]["bins_per_bandwidth"] >= (16 if kernel == "gaussian" else 64)
        errors = errors_of(made, designs[design], kernel, estimator, width_c)
        assert errors.size > PLACES // 2
        own = made.trace["engine"]["error_in_noise_sd"]
        figures[design, kernel, estimator, width_c] = (float(errors.max()), own)
    return figures


@pytest.mark.parametrize("kernel", SMOOTH)
def test_smooth_kernels_keep_within_a_millionth_of_the_noise(sweep, kernel):
    worst = max((figures[0], case) for case, figures in sweep.items() if case[1] == kernel)
    assert worst[0] <= 1e-6, worst


@pytest.mark.parametrize("kernel", KINKED)
def test_kinked_kernels_keep_within_a_ten_thousandth_of_the_noise(sweep, kernel):
    worst = max((figures[0], case) for case, figures in sweep.items() if case[1] == kernel)
    assert worst[0] <= 1e-4, worst


def test_the_curves_own_error_estimate_bounds_the_true_one(sweep):
    # 1e-12: what plain sums of thousands of terms lose themselves.
    bounded = [true <= own + 1e-12 for true, own in sweep.values()]
    assert np.mean(bounded) >= 0.95
    # And it is no idle bound: it is not much larger than what it bounds.
    loose = [own / true for true, own in sweep.values() if true > 1e-10]
    assert np.median(loose) < 50.0


@pytest.mark.parametrize("estimator", DEGREES)
@pytest.mark.parametrize("design", [name for name in cases.DESIGNS if name != "lattice"])
def test_uniform_kernel_misplaces_no_more_than_its_end_bins(designs, design, estimator):
    rows, h = designs[design], WIDE_C
    made = curve_of(rows, "uniform", estimator, h)
    bin_c = h / made.trace["engine"]["level_bins_per_bandwidth"]
    x, y = rows.wet_bulb_c, rows.power_kw
    for at, estimate in zip(made.x, made.estimate, strict=True):
        if not np.isfinite(estimate):
            continue
        value = many_rows.fit_many([at], x, y, h, "uniform", DEGREES[estimator])[0, 0]
        u = (x - at) / h
        seen = np.abs(u) <= 1.0
        s0, s1, s2 = (float(np.sum(u[seen] ** j)) for j in range(3))
        share = 1.0 / s0 if estimator == "local-constant" else (s2 - s1 * u) / (s0 * s2 - s1**2)
        end = np.abs(np.abs(x - at) - h) <= bin_c
        astray = float(np.sum(np.abs(share * (y - value))[end])) if end.any() else 0.0
        assert abs(estimate - value) <= 1.2 * astray + 1e-9


@pytest.mark.parametrize("estimator", DEGREES)
@pytest.mark.parametrize("design", cases.DESIGNS)
def test_weights_and_counts_keep_the_contract(designs, design, estimator):
    rows = designs[design]
    n = rows.wet_bulb_c.size
    weight, count = cases.precisions(n), cases.repeats(n)
    made = curve_of(rows, "biweight", estimator, WIDE_C, weight=weight, count=count)
    errors = errors_of(made, rows, "biweight", estimator, WIDE_C, weight * count)
    assert errors.max() <= 1e-6


@pytest.mark.parametrize("estimator", DEGREES)
@pytest.mark.parametrize("offset_kw", [1e9, -1e12])
def test_a_large_y_loses_no_more_than_its_own_digits(designs, estimator, offset_kw):
    rows = designs["uniform"]
    y = rows.power_kw + offset_kw
    lifted = cases.Rows(rows.wet_bulb_c, y, rows.noise_sd_kw)
    made = curve_of(lifted, "biweight", estimator, WIDE_C)
    # The offset is taken off again exactly; what y lost when it was put on is not ours.
    back = cases.Rows(rows.wet_bulb_c, y - offset_kw, rows.noise_sd_kw)
    expected = many_rows.fit_many(
        made.x, back.wet_bulb_c, back.power_kw, WIDE_C, "biweight", DEGREES[estimator]
    )[0]
    spacing = np.spacing(abs(offset_kw))
    away = np.abs((made.estimate - offset_kw) - expected)
    assert away.max() <= 1e-6 * rows.noise_sd_kw + 2.0 * spacing
    smoothing = Smoothing(estimator=estimator, widths=8, engine="binned")
    small = make_curve(back.columns(), "wet_bulb_c", "power_kw", smoothing=smoothing)
    large = make_curve(lifted.columns(), "wet_bulb_c", "power_kw", smoothing=smoothing)
    # The standard error and the chosen width do not see the offset.
    loss = spacing / rows.noise_sd_kw
    assert large.bandwidth == pytest.approx(small.bandwidth, rel=2e-3)
    assert large.trace["engine"]["residual_sd"] == pytest.approx(
        small.trace["engine"]["residual_sd"], rel=1e-6 + loss
    )


# The criterion, over all rows: the narrowest width is wide enough for each.
BOUNDS_C = {
    "uniform": (0.9, 12.0), "clustered": (1.6, 12.0), "lattice": (1.1, 12.0),
    "log spread": (2.0, 12.0), "gap": (0.9, 12.0),
}  # fmt: skip


def table_of(rows):
    x, y = rows.wet_bulb_c, rows.power_kw
    table = BinTable(Plan.simple(float(x.min()), float(x.max())))
    for fold in range(4):
        table.add_rows(fold, x[fold::4].copy(), y[fold::4].copy())
    return table


@pytest.fixture(scope="module")
def tables():
    rows = {design: cases.make_rows(design, 1200, seed=23) for design in cases.DESIGNS}
    return {design: (one, *tabled(one)) for design, one in rows.items()}


def tabled(rows):
    table = table_of(rows)
    return table, Pyramid(table)


@pytest.mark.parametrize("kernel", [*SMOOTH, *KINKED])
@pytest.mark.parametrize("design", cases.DESIGNS)
def test_criteria_are_those_over_all_rows(tables, design, kernel):
    rows, table, pyramid = tables[design]
    scale = 0.4 if kernel == "gaussian" else 1.0
    bounds = tuple(scale * end for end in BOUNDS_C[design])
    found = search_table(table, pyramid, SHAPES[kernel], widths=8, bounds=bounds)
    assert found.rows_alone == 0.0
    for estimator, degree in DEGREES.items():
        trail = found.trails[estimator]
        for place in (0, 3, 7):
            exact = many_rows.criteria_many(
                rows.wet_bulb_c, rows.power_kw, trail.bandwidths[place], kernel, degree
            )
            # Kinked windows meet the lattice's ties at their kink.
            share = {"gaussian": 2.5e-5}.get(kernel, 1e-5 if kernel in SMOOTH else 4e-4)
            close = {
                "leave-one-out": trail.leave_one_out, "gcv": trail.gcv, "aicc": trail.aicc,
            }  # fmt: skip
            for criterion, values in close.items():
                size = 1.0 if criterion == "aicc" else abs(exact[criterion])
                error = abs(values[place] - exact[criterion]) / size
                # Leaving out divides by 1 - leverage, so thin windows magnify.
                most = share * (4.0 if criterion == "leave-one-out" and place == 0 else 1.0)
                assert error <= most, (criterion, estimator, trail.bandwidths[place])


@pytest.mark.parametrize("criterion", ["leave-one-out", "gcv", "aicc"])
@pytest.mark.parametrize("design", cases.DESIGNS)
def test_choice_is_the_best_over_all_rows(tables, design, criterion):
    rows, table, pyramid = tables[design]
    low, high = BOUNDS_C[design]
    found = search_table(
        table, pyramid, SHAPES["biweight"], criterion=criterion, bounds=(low, high)
    )
    x, y = rows.wet_bulb_c, rows.power_kw
    for estimator, degree in DEGREES.items():
        chosen = found.trails[estimator].bandwidth
        best = many_rows.best_bandwidth(x, y, "biweight", degree, low, high, criterion, widths=20)
        assert chosen == pytest.approx(best, rel=5e-3)
