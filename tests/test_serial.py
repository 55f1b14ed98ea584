"""Serial correlation: in the files' own row order, over pairs that really were neighbours."""

import math

import numpy as np
import pyarrow as pa
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth import Band, Reading, Smoothing, make_curve
from fastsmooth.plan import Sample
from fastsmooth.serial import autocorrelation, serial_facts
from tests import cases
from tests.oracle import serial as oracle


def autoregressive(rng, n, rho):
    """AR(1) of variance one."""
    news = math.sqrt(1.0 - rho * rho) * rng.normal(size=n)
    z = np.empty(n)
    z[0] = rng.normal()
    for place in range(1, n):
        z[place] = rho * z[place - 1] + news[place]
    return z


def sample_of(z, run=None, place=None):
    run = np.zeros(z.size, np.int64) if run is None else run
    place = np.arange(z.size) if place is None else place
    return Sample(np.zeros(z.size), z, run, place)


@st.composite
def runs_with_gaps(draw):
    """Residuals in up to four runs, places ascending with gaps, some residuals unknown."""
    z, run, place = [], [], []
    for number in range(draw(st.integers(1, 4))):
        at = 0
        for _ in range(draw(st.integers(1, 15))):
            value = st.one_of(st.just(math.nan), st.floats(-9.0, 9.0).map(lambda v: round(v, 3)))
            z.append(draw(value))
            run.append(number)
            place.append(at)
            at += draw(st.sampled_from([1, 1, 1, 2, 5]))
    return np.array(z), np.array(run), np.array(place)


@given(runs_with_gaps(), st.integers(1, 6))
def test_only_pairs_of_one_run_count(rows, lags):
    z, run, place = rows
    found = autocorrelation(z, run, place, lags)
    known = z[np.isfinite(z)]
    if not known.size or not np.any(known):
        assert np.isnan(found[1:]).all()
        return
    assert found.shape == (lags + 1,)
    assert found[0] == 1.0
    for lag in range(1, lags + 1):
        expected, pairs = oracle.autocorrelation(z.tolist(), run.tolist(), place.tolist(), lag)
        if pairs == 0:
            assert math.isnan(found[lag])
        else:
            assert found[lag] == pytest.approx(expected, rel=1e-9, abs=1e-12)


def test_lags_with_too_few_pairs_are_unknown_in_long_samples():
    z = autoregressive(np.random.default_rng(0), 400, 0.5)
    # Runs of four rows: three pairs each at lag one, one at lag three, none at lag four.
    run = np.arange(400) // 4
    found = autocorrelation(z, run, np.arange(400) % 4, 4)
    assert np.isfinite(found[:4]).all()
    assert math.isnan(found[4])
    few = autocorrelation(z[:396], run[:396], np.arange(396) % 4, 3)
    assert math.isnan(few[3])  # 99 pairs


def test_gaps_are_not_closed():
    # Every second row dropped: what are neighbours now were two places apart.
    z = autoregressive(np.random.default_rng(1), 8000, 0.6)[::2]
    place = 2 * np.arange(z.size)
    found = autocorrelation(z, np.zeros(z.size, np.int64), place, 4)
    assert math.isnan(found[1])
    assert math.isnan(found[3])
    assert found[2] == pytest.approx(0.36, abs=0.05)
    assert serial_facts(z, sample_of(z, place=place), z.size) is None


@pytest.mark.parametrize("rho", [0.3, 0.5, 0.9])
def test_an_autoregression_is_recognised(rho):
    rows, n = 10**6, 60_000
    z = autoregressive(np.random.default_rng(2), n, rho)
    facts = serial_facts(z, sample_of(z), rows)
    # The standard error of an autocorrelation is below 1 / sqrt(n) (Bartlett 1946).
    assert facts["lag_one"] == pytest.approx(rho, abs=5.0 / math.sqrt(n))
    assert facts["pairs"] == n - 1
    # rho^k fades below 0.05 at k = log 0.05 / log rho.
    assert facts["reach_rows"] == pytest.approx(math.log(0.05) / math.log(rho), rel=0.15, abs=1.0)
    # n (1 - rho) / (1 + rho) rows of an AR(1) tell as much about a mean (Bayley & Hammersley 1946).
    assert facts["worth_rows"] == pytest.approx(rows * (1.0 - rho) / (1.0 + rho), rel=0.15)


def test_reach_is_the_first_faded_lag():
    z = autoregressive(np.random.default_rng(3), 3000, 0.8)
    facts = serial_facts(z, sample_of(z), 3000)
    clipped = np.clip(z, -5.0, 5.0).tolist()
    places, run = list(range(3000)), [0] * 3000
    rho = [oracle.autocorrelation(clipped, run, places, lag)[0] for lag in range(60)]
    reach = oracle.reach(rho, 0.05)
    assert facts["reach_rows"] == reach
    total = 1.0 + 2.0 * math.fsum(max(one, 0.0) for one in rho[1:reach])
    assert facts["worth_rows"] == pytest.approx(3000 / total, rel=1e-9)


def test_independent_rows_are_worth_themselves():
    z = np.random.default_rng(4).normal(size=20_000)
    facts = serial_facts(z, sample_of(z), 20_000)
    assert abs(facts["lag_one"]) < 0.03
    assert facts["reach_rows"] == 1
    assert facts["worth_rows"] == 20_000


def test_alternating_rows_are_not_worth_more_than_themselves():
    z = np.tile([1.0, -1.0], 500)
    facts = serial_facts(z, sample_of(z), 1000)
    assert facts["lag_one"] == pytest.approx(-1.0)
    assert facts["worth_rows"] == 1000


def test_a_few_wild_readings_do_not_hide_the_likeness():
    z = autoregressive(np.random.default_rng(5), 20_000, 0.7)
    z[::2000] = 1e6
    facts = serial_facts(z, sample_of(z), 20_000)
    assert facts["lag_one"] == pytest.approx(0.7, abs=0.05)


def test_too_few_pairs_say_nothing():
    z = autoregressive(np.random.default_rng(6), 100, 0.9)
    assert serial_facts(z, sample_of(z), 100) is None
    assert serial_facts(np.full(500, math.nan), sample_of(np.zeros(500)), 500) is None


# Through the whole engine.


def readings(rho, n=20_000, seed=7):
    rng = np.random.default_rng(seed)
    wet_bulb_c = rng.uniform(-5.0, 28.0, n)
    power_kw = cases.mean_power_kw(wet_bulb_c) + autoregressive(rng, n, rho)
    return {"wet_bulb_c": wet_bulb_c, "power_kw": power_kw, "number": np.arange(n)}


def curve_of(data, **options):
    return make_curve(
        data, "wet_bulb_c", "power_kw", reading=Reading(threads=1, **options),
        smoothing=Smoothing(widths=8), band=Band(points=21),
    )  # fmt: skip


def codes(made):
    return {caution.code for caution in made.cautions}


def test_correlated_rows_bring_a_caution_with_its_remedy():
    made = curve_of(readings(0.8))
    assert made.trace["serial"]["lag_one"] == pytest.approx(0.8, abs=0.05)
    caution = next(one for one in made.cautions if one.code == "neighbouring rows alike")
    assert "are correlated (0." in caution.text
    assert "independent ones" in caution.text
    assert "Give --block, as in --block logged_at:day." in caution.text


def test_independent_rows_bring_none():
    made = curve_of(readings(0.0))
    assert abs(made.trace["serial"]["lag_one"]) < 0.05
    assert "neighbouring rows alike" not in codes(made)


def test_a_block_silences_the_caution_but_not_the_figure():
    data = readings(0.8)
    made = curve_of({**data, "batch": data["number"] // 200}, block="batch")
    assert made.trace["serial"]["lag_one"] == pytest.approx(0.8, abs=0.05)
    assert "neighbouring rows alike" not in codes(made)


@pytest.mark.parametrize("by", ["where", "null"])
def test_filters_do_not_join_rows_that_were_apart(by):
    # Every third row stays: among those left, neighbours were three rows apart.
    data = readings(0.8)
    if by == "where":
        data["kept"] = np.where(data["number"] % 3 == 0, 1, 0)
        made = curve_of(data, where="kept = 1")
    else:
        gone = data["number"] % 3 != 0
        table = pa.table({**data, "power_kw": pa.array(data["power_kw"], mask=gone)})
        made = curve_of(table)
    assert made.trace["serial"] is None
    assert "neighbouring rows alike" not in codes(made)


def test_gaps_of_a_filter_leave_the_other_pairs():
    data = readings(0.8)
    data["kept"] = np.where(data["number"] % 4 == 3, 0, 1)
    made = curve_of(data, where="kept = 1")
    assert made.trace["serial"]["lag_one"] == pytest.approx(0.8, abs=0.05)
