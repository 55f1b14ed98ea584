"""Robust curves: rows far from the curve weigh less."""

import numpy as np
import pytest
import statsmodels.api as sm
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth import InputError, Reading, Smoothing, make_curve
from fastsmooth.plan import Sample
from fastsmooth.reweighted import CUTOFF, LEAST_WEIGHT, bisquare
from fastsmooth.robust import core_of, running_medians
from fastsmooth.summary import curve_lines
from tests.conftest import write_parquet

ROBUST = Smoothing(robust=True)
SD = 0.5


def mean(x):
    return 20.0 + 3.0 * np.sin(x / 2.0)


def rows(n=6000, spoilt=0.1, seed=0):
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 25.0, n)
    y = mean(x) + rng.normal(0.0, SD, n)
    bad = rng.random(n) < spoilt
    y[bad] = rng.choice([-9999.0, 0.0, 300.0], int(bad.sum()))
    return {"x": x, "y": y, "bad": bad}


def curve(data, smoothing=ROBUST, **options):
    return make_curve(data, "x", "y", smoothing=smoothing, **options)


def test_ten_percent_of_gross_outliers_hardly_move_it():
    data = rows()
    made = curve(data)
    clean = {name: values[~data["bad"]] for name, values in data.items()}
    plain = curve(clean, Smoothing(engine="binned", bandwidth=made.bandwidth))
    inside = made.status == 0
    assert np.abs(made.estimate - plain.estimate)[inside].max() < 0.2 * SD
    assert np.abs(curve(data, Smoothing()).estimate - mean(made.x))[inside].max() > 100.0 * SD
    assert made.residual_sd[inside] == pytest.approx(np.full(inside.sum(), SD), rel=0.35)
    truth = mean(made.x)
    assert np.mean((made.lower <= truth)[inside] & (truth <= made.upper)[inside]) > 0.85


def test_it_says_what_it_did():
    data = rows()
    made = curve(data)
    facts = made.trace["robust"]
    assert 1 <= facts["rounds"] <= 3
    assert made.trace["engine"]["passes"] == 1 + facts["rounds"]
    assert facts["rows_judged"] == 6000
    assert facts["rows_ignored"] == data["bad"].sum()
    assert facts["rows_down_weighted"] >= facts["rows_ignored"]
    assert sum(one["down_weighted"] for one in facts["where"]) == facts["rows_down_weighted"]
    assert made.settings["weight"] is None
    line = next(one for one in curve_lines(made) if one.startswith("robust"))
    assert f"{facts['rows_ignored']:,} of them not at all" in line


def test_its_fit_is_told_to_be_a_weighted_one():
    data = rows()
    told = "; rows far off weigh less in these, too"
    fit = [one for one in curve_lines(curve(data)) if one.startswith("fit")]
    assert len(fit) == 1
    assert fit[0].endswith(told)
    assert not any(told in one for one in curve_lines(curve(data, Smoothing())))


def test_a_stuck_sensor_is_told_where_it_stuck():
    data = rows(spoilt=0.0)
    stuck = (data["x"] > 10.0) & (data["x"] < 11.0) & (np.arange(6000) % 3 == 0)
    data["y"][stuck] = 0.0
    made = curve(data)
    assert np.abs(made.estimate - mean(made.x))[made.status == 0].max() < 0.6 * SD
    line = next(one for one in curve_lines(made) if one.startswith("robust"))
    assert "most in 10" in line


def test_noise_that_changes_along_x_is_no_outlier():
    rng = np.random.default_rng(4)
    x = rng.uniform(0.0, 25.0, 8000)
    data = {"x": x, "y": mean(x) + rng.normal(0.0, 0.1 + 0.1 * x)}
    facts = curve(data).trace["robust"]
    # Normal rows beyond 2.2 standard deviations count less than half: 2.9 percent.
    assert facts["rows_down_weighted"] / 8000 == pytest.approx(0.029, abs=0.01)


def test_clean_data_give_nearly_the_plain_curve():
    data = rows(spoilt=0.0)
    made = curve(data)
    plain = curve(data, Smoothing(engine="binned", bandwidth=made.bandwidth))
    assert np.abs(made.estimate - plain.estimate).max() < 0.25 * SD
    assert made.residual_sd == pytest.approx(plain.residual_sd, rel=0.35)


def test_files_threads_and_blocks(tmp_path):
    data = rows()
    data["day"] = np.arange(6000) // 60
    write_parquet(tmp_path / "rows.parquet", data, rows_per_group=500)
    one, two = (
        curve(tmp_path / "rows.parquet", reading=Reading(threads=n, block="day")) for n in (1, 2)
    )
    assert one.estimate.tobytes() == two.estimate.tobytes()
    assert one.trace["robust"] == two.trace["robust"]
    assert one.search.criterion == "leave-block-out"


def test_own_precisions_are_refused():
    with pytest.raises(InputError) as caught:
        curve({**rows(), "weight": np.ones(6000)}, weight="weight")
    assert "--weight must be left out with --robust" in str(caught.value)


def test_counted_rows_are_rows():
    data = rows(2000)
    smoothing = Smoothing(robust=True, bandwidth=1.0)
    counted = curve({**data, "repeats": np.full(2000, 2)}, smoothing, count="repeats")
    plain = curve(data, smoothing)
    inside = counted.status == 0
    assert np.abs(counted.estimate - plain.estimate)[inside].max() < 0.02 * SD


def test_a_log_scale():
    data = rows()
    data["x"] = np.exp(data["x"] / 10.0)
    made = curve(data, reading=Reading(scale="log"))
    assert np.abs(made.estimate - mean(10.0 * np.log(made.x)))[made.status == 0].max() < 0.7 * SD
    ends = [
        made.trace["robust"]["where"][place][name] for place, name in ((0, "low"), (-1, "high"))
    ]
    assert ends == pytest.approx([data["x"].min(), data["x"].max()])


def test_rows_on_the_curve_stop_it():
    x = np.linspace(0.0, 10.0, 500)
    made = curve({"x": x, "y": 2.0 * x})
    assert made.trace["robust"]["rounds"] == 0 or made.estimate == pytest.approx(2.0 * made.x)
    constant = np.where(np.arange(500) % 3 == 0, 7.0, 5.0)
    made = curve({"x": x, "y": constant})
    assert made.trace["robust"] == {"rounds": 0, "reason": "half of the rows lie on the curve"}
    assert any("every row has its full weight" in one for one in curve_lines(made))


@pytest.mark.parametrize(
    ("settings", "told"),
    [
        ({"engine": "exact"}, "--robust must come with the binned engine, but --engine is exact"),
        ({"estimator": "nearest"}, "--robust must come with another estimator"),
        ({"robust": "yes"}, "--robust must be True or False"),
    ],
)
def test_what_does_not_go_with_it_is_refused(settings, told):
    with pytest.raises(InputError) as caught:
        Smoothing(**{"robust": True, **settings})
    assert told in str(caught.value)


# Against the outside.


def test_a_straight_line_is_that_of_statsmodels():
    """RLM with Tukey's bisquare at the same cutoff (statsmodels 0.14); scales differ a little."""
    data = rows(spoilt=0.0)
    rng = np.random.default_rng(6)
    data["y"] = 5.0 + 0.7 * data["x"] + rng.standard_t(2.0, 6000)
    made = curve(data, Smoothing(robust=True, bandwidth=1e6))
    design = sm.add_constant(data["x"])
    model = sm.RLM(data["y"], design, M=sm.robust.norms.TukeyBiweight(c=CUTOFF)).fit()
    expected = model.predict(sm.add_constant(made.x))
    error = np.sqrt(np.einsum("ij,jk,ik->i", sm.add_constant(made.x), model.cov_params(),
                              sm.add_constant(made.x)))  # fmt: skip
    assert (np.abs(made.estimate - expected) < 0.5 * error).all()
    plain = sm.OLS(data["y"], design).fit().predict(sm.add_constant(made.x))
    assert np.abs(made.estimate - expected).max() < 0.3 * np.abs(plain - expected).max()


def test_the_curve_is_near_that_of_lowess():
    """lowess(it=3) of statsmodels, the method's own rounds, on evenly spread x."""
    data = rows(3000, seed=2)
    data["x"] = np.sort(data["x"])
    data["y"] = np.where(data["bad"], 60.0, mean(data["x"]) + (data["y"] - mean(data["x"])) * 1.0)
    made = curve(data, Smoothing(robust=True, kernel="tricube", bandwidth=1.5))
    expected = sm.nonparametric.lowess(
        data["y"], data["x"], frac=0.12, it=3, delta=0.0, xvals=made.x
    )
    inside = (made.x > 2.0) & (made.x < 23.0)
    assert np.abs(made.estimate - expected)[inside].max() < 0.15 * SD


# The parts.


@given(st.lists(st.floats(-20.0, 20.0), max_size=20))
def test_bisquare_is_its_definition(values):
    z = np.array([*values, np.nan, np.inf, -np.inf, CUTOFF, 0.0])
    for weight, one in zip(bisquare(z), z, strict=True):
        if np.isnan(one):
            assert weight == 1.0
        elif abs(one) >= CUTOFF:
            assert weight == LEAST_WEIGHT
        else:
            assert weight == pytest.approx(max((1 - (one / CUTOFF) ** 2) ** 2, LEAST_WEIGHT))


@given(
    st.lists(st.tuples(st.floats(-5.0, 5.0), st.floats(-5.0, 5.0)), min_size=1, max_size=30),
    st.lists(st.floats(-6.0, 6.0), min_size=1, max_size=5),
    st.integers(1, 12),
)
def test_running_medians_are_those_of_plain_windows(pairs, places, wanted):
    pairs = sorted(pairs)
    x, y = [one[0] for one in pairs], [one[1] for one in pairs]
    made = running_medians(np.array(places), np.array(x), np.array(y), wanted)
    size = min(wanted, len(x))
    for place, value in zip(places, made, strict=True):
        before = sum(1 for one in x if one < place)
        first = min(max(before - size // 2, 0), len(x) - size)
        window = sorted(y[first : first + size])
        middle = (window[(size - 1) // 2] + window[size // 2]) / 2.0
        assert value == pytest.approx(middle, abs=1e-12)


def test_a_sample_without_scatter_has_no_core():
    none = np.zeros(3, np.int64)
    few = Sample(np.arange(3.0), np.arange(3.0), none, none)
    assert core_of(few, np.linspace(0.0, 2.0, 5)) is None
