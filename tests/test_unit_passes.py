"""Further passes over many units: robust weights and limits."""

import numpy as np
import pytest

from fastsmooth import (
    Band,
    InputError,
    Reading,
    Smoothing,
    load_curve,
    make_curve,
    make_fleet,
    score_rows,
)
from fastsmooth.fleetwords import fleet_lines
from fastsmooth.summary import curve_lines
from tests.conftest import write_parquet

ROBUST = Smoothing(robust=True)
SD = 0.5
PLANTS = ("aldea", "brezo", "carrasca")


def mean(x, unit):
    return 20.0 + 3.0 * np.sin(x / 2.0) + 5.0 * unit


def rows(n=15_000, seed=0):
    """Three plants; the second has faults in a tenth of its rows."""
    rng = np.random.default_rng(seed)
    unit = rng.integers(0, 3, n)
    x = rng.uniform(0.0, 25.0, n)
    y = mean(x, unit) + rng.normal(0.0, SD, n)
    bad = (rng.random(n) < 0.1) & (unit == 1)
    y[bad] = -9999.0
    return {"x": x, "y": y, "plant": np.array(PLANTS)[unit], "bad": bad}


def fleet(data, **options):
    return make_fleet(data, "x", "y", by="plant", **options)


def test_each_unit_is_weighed_by_its_own_curve():
    data = rows()
    made = fleet(data, smoothing=ROBUST)
    for unit, plant in enumerate(PLANTS):
        curve = made.curves[(plant,)]
        inside = curve.status == 0
        assert np.abs(curve.estimate - mean(curve.x, unit))[inside].max() < 0.5 * SD
        facts = curve.trace["robust"]
        ignored = int(data["bad"][data["plant"] == plant].sum())
        assert ignored <= facts["rows_ignored"] <= ignored + 5
        assert facts["rows_judged"] == (data["plant"] == plant).sum()
        assert any(line.startswith("robust") for line in curve_lines(curve))
    line = next(one for one in fleet_lines(made) if one.startswith("robust"))
    assert f"{sum(one[2] for one in made.trace['robust']):,} of them not at all" in line
    assert "most in brezo" in line
    # A unit whose width asks for finer bins is counted once more.
    assert made.trace["engine"]["passes"] >= 1 + max(
        curve.trace["robust"]["rounds"] for curve in made.curves.values()
    )


def test_units_are_near_what_they_are_alone():
    data = rows()
    made = fleet(data, smoothing=Smoothing(robust=True, bandwidth=1.5))
    for plant in PLANTS:
        own = {name: values[data["plant"] == plant] for name, values in data.items()}
        alone = make_curve(own, "x", "y", smoothing=Smoothing(robust=True, bandwidth=1.5))
        both = made.curves[(plant,)]
        places = np.linspace(1.0, 24.0, 50)
        assert np.abs(both.at(places) - alone.at(places)).max() < 0.1 * SD


def test_a_unit_with_too_few_rows_keeps_its_reason():
    data = rows()
    few = {"x": np.ones(3), "y": np.ones(3), "plant": np.full(3, "dehesa"),
           "bad": np.zeros(3, bool)}  # fmt: skip
    data = {name: np.concatenate((values, few[name])) for name, values in data.items()}
    made = fleet(data, smoothing=ROBUST, band=Band(limits=(0.05, 0.95)))
    assert [unit.status for unit in made.units] == ["made"] * 3 + ["x constant"]
    assert made.units[3].curve is None


def test_limits_of_each_unit(tmp_path):
    data = rows(30_000)
    data["y"] = np.where(data["bad"], mean(data["x"], 1), data["y"])
    made = fleet(data, band=Band(limits=(0.05, 0.95)))
    for curve in made.curves.values():
        assert curve.limits.coverage == pytest.approx((0.05, 0.95), abs=0.01)
    line = next(one for one in fleet_lines(made) if one.startswith("limits"))
    assert line.startswith("limits     5 %, 95 % of rows below; of 30,000 rows held against")
    few = fleet(data, band=Band(limits=(0.00001, 0.5)))
    line = next(one for one in fleet_lines(few) if one.startswith("limits"))
    assert line.endswith("; 3 units have none at 0.001 %, for too few rows")
    names = made.table().column_names
    assert names.index("limit_0.95") == names.index("limit_0.05") + 1
    made.save(tmp_path / "fleet.parquet")
    again = load_curve(tmp_path / "fleet.parquet")
    for key, curve in made.curves.items():
        assert again.curves[key].limits.values.tobytes() == curve.limits.values.tobytes()
    scored = score_rows(data, again)
    for told in scored.units.to_pylist():
        assert told["share_outside"] == pytest.approx(0.1, abs=0.015)


def test_threads_and_files_do_not_matter(tmp_path):
    write_parquet(tmp_path / "rows.parquet", rows(6000), rows_per_group=700)
    one, two = (
        fleet(tmp_path / "rows.parquet", smoothing=ROBUST, band=Band(limits=(0.1, 0.9)),
              reading=Reading(threads=n))
        for n in (1, 2)
    )  # fmt: skip
    for key, curve in one.curves.items():
        assert two.curves[key].estimate.tobytes() == curve.estimate.tobytes()
        assert two.curves[key].limits.values.tobytes() == curve.limits.values.tobytes()
        assert two.curves[key].trace["robust"] == curve.trace["robust"]


@pytest.mark.parametrize(
    ("smoothing", "told"),
    [
        (Smoothing(estimator="nearest"), "--estimator nearest must be left out with --by"),
        (Smoothing(engine="exact"), "--engine exact must be left out with --by"),
    ],
)
def test_what_needs_rows_in_memory_is_refused(smoothing, told):
    with pytest.raises(InputError) as caught:
        fleet(rows(300), smoothing=smoothing)
    assert told in str(caught.value)
