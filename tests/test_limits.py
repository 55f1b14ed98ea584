"""Limits: curves below which a share of the rows lies."""

import numpy as np
import pyarrow as pa
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st
from scipy.stats import norm

from fastsmooth import Band, InputError, Reading, Smoothing, load_curve, make_curve
from fastsmooth.limits import Layout, _quantiles, _share_below, widening
from fastsmooth.summary import curve_lines
from tests.conftest import write_parquet

LEVELS = (0.05, 0.5, 0.95)


def mean(x):
    return 20.0 + 3.0 * np.sin(x / 2.0)


def sd(x):
    return 0.5 + 0.02 * x


def rows(n=60_000, seed=0):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 25.0, n)
    return {"x": x, "y": mean(x) + rng.normal(0.0, 1.0, n) * sd(x)}


def curve(data, levels=LEVELS, smoothing=None, **options):
    smoothing = smoothing or Smoothing(engine="binned", bandwidth=1.5)
    return make_curve(data, "x", "y", smoothing=smoothing, band=Band(limits=levels), **options)


def test_limits_are_near_the_truth():
    made = curve(rows())
    for level, values in zip(made.limits.levels, made.limits.values, strict=True):
        truth = mean(made.x) + norm.ppf(level) * sd(made.x)
        assert np.abs(values - truth).max() < 0.15


def test_limits_are_numpys_quantiles_in_narrow_bins():
    data = rows(200_000)
    made = curve(data, smoothing=Smoothing(engine="binned", bandwidth=0.5))
    for place in range(20, 240, 20):
        near = np.abs(data["x"] - made.x[place]) < 0.1
        local = data["y"][near] - mean(data["x"][near]) + mean(made.x[place])
        for row, level in enumerate(LEVELS):
            share = np.mean(local <= made.limits.values[row, place])
            error = np.sqrt(level * (1.0 - level) / near.sum())
            assert abs(share - level) < 4.5 * error + 0.003


def test_a_straight_line_is_that_of_quantile_regression():
    """statsmodels QuantReg on straight lines with equal noise: both estimate the same line."""
    rng = np.random.default_rng(3)
    x = rng.uniform(0.0, 10.0, 20_000)
    data = {"x": x, "y": 4.0 + 0.5 * x + rng.exponential(1.0, 20_000)}
    made = curve(data, (0.1, 0.9), Smoothing(bandwidth=1e6))
    for row, level in enumerate((0.1, 0.9)):
        fitted = sm.QuantReg(data["y"], sm.add_constant(x)).fit(q=level)
        expected = fitted.predict(sm.add_constant(made.x))
        error = float(np.max(fitted.bse) * 5.0)
        assert np.abs(made.limits.values[row] - expected).max() < max(3.0 * error, 0.05)


def test_coverage_is_that_of_left_out_rows_and_told():
    data = {**rows(), "day": np.arange(60_000) // 500}
    made = curve(data, reading=Reading(block="day"))
    assert made.limits.rows_judged == 60_000
    assert made.limits.coverage == pytest.approx(LEVELS, abs=0.006)
    assert any(
        one.startswith("limits     5 %, 50 %, 95 % of rows below") for one in curve_lines(made)
    )
    assert made.trace["engine"]["passes"] == 2


def test_limits_of_weighted_rows_say_whose_they_are():
    data = rows() | {"precision": np.full(60_000, 4.0)}
    made = curve(data, (0.05, 0.95), weight="precision")
    plain = curve(data, (0.05, 0.95))
    told = next(one for one in curve_lines(made) if one.startswith("limits"))
    assert told.endswith(
        "; the values are for rows of weight 1 and lie 1/sqrt(w) times as far from the curve for "
        "rows of weight w"
    )
    line = next(one for one in curve_lines(plain) if one.startswith("limits"))
    assert "weight" not in line
    # As told: those of these rows, of weight 4, lie half as far from the curve.
    half = (made.limits.values - made.estimate) / 2.0
    assert half == pytest.approx(plain.limits.values - plain.estimate, abs=1e-6)


def test_limits_that_too_few_rows_lie_beyond_are_told():
    made = curve(rows(300), (0.001, 0.5))
    assert np.isnan(made.limits.values[0]).all()
    assert np.isfinite(made.limits.values[1]).any()
    told = next(one for one in curve_lines(made) if one.startswith("limits"))
    assert told.endswith("; none at 0.1 %, for too few rows lie beyond")


@pytest.mark.parametrize("seed", range(3))
def test_limits_never_cross(seed):
    data = rows(400, seed)
    made = curve(data, tuple(np.linspace(0.02, 0.98, 25)), Smoothing(engine="binned"))
    values = made.limits.values
    both = np.isfinite(values[1:]) & np.isfinite(values[:-1])
    assert both.any()
    assert (np.diff(values, axis=0)[both] >= 0.0).all()


def test_too_few_rows_beyond_a_level_give_none():
    made = curve(rows(500), (0.0001, 0.5))
    assert np.isnan(made.limits.values[0]).all()
    assert np.isfinite(made.limits.values[1]).any()


def test_weights_counts_and_bad_rows():
    data = rows(20_000)
    twice = {name: np.repeat(values, 2) for name, values in data.items()}
    counted = curve({**data, "repeats": np.full(20_000, 2)}, count="repeats")
    written = curve(twice)
    assert counted.limits.values == pytest.approx(written.limits.values, rel=1e-6)
    spoilt = {
        name: np.concatenate((values, [np.nan, np.inf, 5.0])) for name, values in data.items()
    }
    spoilt["y"][-1] = np.nan
    assert curve(spoilt).limits.rows_judged == 20_000
    # A row of precision 4 scatters half as much; limits are those of a row of weight 1.
    weight = np.where(np.arange(20_000) % 2 == 0, 1.0, 4.0)
    weighted = {**data, "weight": weight}
    weighted["y"] = mean(data["x"]) + (data["y"] - mean(data["x"])) / np.sqrt(weight)
    made = curve(weighted, weight="weight")
    truth = mean(made.x) + norm.ppf(0.95) * sd(made.x)
    assert np.abs(made.limits.values[2] - truth)[10:-10].max() < 0.25


def test_threads_and_files_do_not_matter(tmp_path):
    data = rows(6000)
    write_parquet(tmp_path / "rows.parquet", data, rows_per_group=500)
    one, two = (curve(tmp_path / "rows.parquet", reading=Reading(threads=n)) for n in (1, 2))
    assert one.limits.values.tobytes() == two.limits.values.tobytes()


def test_they_are_written_and_read(tmp_path):
    made = curve(rows(5000))
    table = made.table()
    assert [one for one in table.column_names if one.startswith("limit")] == [
        "limit_0.05", "limit_0.5", "limit_0.95",
    ]  # fmt: skip
    assert isinstance(table, pa.Table)
    made.save(tmp_path / "curve.parquet")
    again = load_curve(tmp_path / "curve.parquet")
    assert again.limits.values.tobytes() == made.limits.values.tobytes()
    assert again.limits.coverage == made.limits.coverage


def test_a_log_scale_and_neighbours():
    data = rows(30_000)
    log = curve({"x": np.exp(data["x"] / 10.0), "y": data["y"]}, smoothing=Smoothing(
        engine="binned", bandwidth=1.1), reading=Reading(scale="log"))  # fmt: skip
    x = 10.0 * np.log(log.x)
    assert np.abs(log.limits.values[2] - mean(x) - norm.ppf(0.95) * sd(x)).max() < 0.3
    near = curve(data, smoothing=Smoothing(estimator="nearest", neighbours=800))
    assert np.abs(near.limits.values[1] - mean(near.x))[10:-10].max() < 0.3


@pytest.mark.parametrize(
    ("limits", "told"),
    [
        ((0.0,), "--limits must hold shares between 0 and 1, but it holds 0"),
        ((0.5, 1.5), "--limits must hold shares between 0 and 1, but it holds 1.5"),
        (0.5, "--limits must hold shares between 0 and 1, but it is 0.5"),
        (("much",), "--limits must hold shares between 0 and 1, but it is 'much'"),
    ],
)
def test_levels_are_checked(limits, told):
    with pytest.raises(InputError) as caught:
        Band(limits=limits)
    assert told in str(caught.value)


def test_points_of_ones_own_are_refused():
    with pytest.raises(InputError) as caught:
        Band(limits=(0.5,), at=(1.0,))
    assert "--limits must come with evenly spaced points, but --at is given" in str(caught.value)


# The parts.


@given(
    st.lists(st.lists(st.integers(0, 5), min_size=4, max_size=4), min_size=1, max_size=4),
    st.floats(0.01, 0.99),
)
def test_quantiles_and_shares_are_inverse(counts, level):
    rows_in = np.array(counts, float)
    edges = np.linspace(-2.0, 2.0, 5)
    total = rows_in.sum(axis=1)
    found = _quantiles(rows_in, total, level, edges)
    back = _share_below(rows_in, found, edges)
    for row in range(len(counts)):
        if total[row]:
            assert back[row] == pytest.approx(level, abs=1e-6)
            cell = min(int(found[row] + 2.0), 3)
            before = sum(counts[row][:cell]) / total[row]
            after = sum(counts[row][: cell + 1]) / total[row]
            assert before - 1e-9 <= level <= after + 1e-9


def test_layouts_stay_within_the_cap():
    assert Layout.within_cap(1) == Layout(1)
    for units in (50, 1000, 10_001):
        made = Layout.within_cap(units)
        assert 8 * np.prod(made.shape) <= 256 << 20 or made.groups == 2
    assert widening((0.5,)) == pytest.approx((np.pi / 2.0) ** 0.2)
    assert widening((0.5, 0.99)) == pytest.approx(widening((0.99,)))


def test_the_picture_shows_limits():
    from fastsmooth.report.picture import figure

    made = curve(rows(5000))
    drawn = {line.get_gid() for panel in figure(made).axes for line in panel.lines}
    assert {"limit 0.05", "limit 0.5", "limit 0.95"} <= drawn
