"""Comparing current rows with a baseline, from data to what is printed, written and drawn."""

import json
import math
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pyarrow.csv as pc
import pyarrow.parquet as pq
import pytest

from fastsmooth import (
    Band,
    InputError,
    Reading,
    Smoothing,
    StoreSettings,
    compare_curves,
    make_curve,
    make_fleet,
    update_store,
)
from fastsmooth.cli import main
from fastsmooth.report.contrast import figure

DAY = Reading(block="logged_at:day", threads=1)
START = np.datetime64("2025-01-01", "s")
MANY = {"widths": 8}


def period(seed, days=40, first=0, drift=0.0, readings=48, day_sd=0.4):
    """Readings every half hour; every day has a level of its own."""
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.0, 20.0, (days, readings))
    noise = rng.normal(0.0, day_sd, (days, 1)) + rng.normal(0.0, 0.5, x.shape)
    y = (20.0 + 0.02 * x**2) * (1.0 + drift) + noise
    stamps = START + (np.arange(first * readings, (first + days) * readings) * 1800)
    return {"wet_bulb_c": x.ravel(), "power_kw": y.ravel(), "logged_at": stamps}


@pytest.fixture(scope="module")
def base():
    return make_curve(
        period(1, days=120), "wet_bulb_c", "power_kw", reading=DAY, smoothing=Smoothing(**MANY)
    )


@pytest.fixture(scope="module")
def drifted(base):
    return compare_curves(base, period(2, first=200, drift=0.03), hours_per_row=0.5)


# What is found.


def test_a_drift_of_three_percent_is_found_and_measured(drifted):
    unit = drifted.units[0]
    assert unit.excess.share_lower < 0.03 < unit.excess.share_upper
    assert unit.excess.share_lower > 0.0
    # The baseline's own range may end a hair before the last row.
    assert 40 * 48 - 4 <= unit.excess.rows <= 40 * 48
    total = 0.5 * period(2, first=200, drift=0.03)["power_kw"].sum()
    assert unit.excess.actual == pytest.approx(total, rel=3e-3)
    assert unit.difference.p_value < 0.05
    assert unit.difference.stretches
    assert all(one.mean_difference > 0.0 for one in unit.difference.stretches)
    assert unit.adjusted_p_value == unit.excess.p_value
    assert drifted.discoveries() == [unit]


def test_nothing_is_found_where_nothing_changed(base):
    found = compare_curves(base, period(3, first=200))
    unit = found.units[0]
    assert unit.excess.lower < 0.0 < unit.excess.upper
    assert unit.difference.p_value > 0.05
    assert unit.difference.stretches == ()
    assert found.discoveries() == []


def test_a_few_days_are_worth_far_fewer_rows_than_they_have(drifted):
    assert drifted.units[0].excess.independent_rows < 0.3 * drifted.units[0].excess.rows


def test_data_or_their_curve_are_the_same_baseline(base, tmp_path):
    now = period(4, first=200)
    by_data = compare_curves(
        period(1, days=120), now, "wet_bulb_c", "power_kw", reading=DAY,
        smoothing=Smoothing(**MANY, engine="binned"),
    )  # fmt: skip
    made = make_curve(
        period(1, days=120), "wet_bulb_c", "power_kw", reading=DAY,
        smoothing=Smoothing(**MANY, engine="binned"),
    )  # fmt: skip
    made.save(tmp_path / "curve.parquet")
    for given in (made, tmp_path / "curve.parquet"):
        found = compare_curves(given, now)
        assert found.units[0].excess == by_data.units[0].excess
        np.testing.assert_array_equal(
            found.units[0].difference.difference, by_data.units[0].difference.difference
        )


def test_two_curves_differ_as_their_data_do_but_have_no_excess(base):
    now = period(5, first=200, drift=0.02)
    curve = make_curve(
        now, "wet_bulb_c", "power_kw", reading=DAY,
        smoothing=Smoothing(bandwidth=base.bandwidth, **MANY),
    )  # fmt: skip
    by_curve, by_data = compare_curves(base, curve), compare_curves(base, now)
    assert by_curve.units[0].excess is None
    assert by_curve.units[0].adjusted_p_value is None
    mine, theirs = by_curve.units[0].difference, by_data.units[0].difference
    both = mine.compared & theirs.compared
    assert both.mean() > 0.9
    scale = theirs.std_error[both]
    assert (np.abs(mine.difference - theirs.difference)[both] < 0.02 * scale).all()
    np.testing.assert_allclose(mine.std_error[both], scale, rtol=0.05)
    assert "excess     none" in "\n".join(by_curve.lines())


def test_machines_on_the_same_days_are_compared_far_better_in_pairs():
    weather = np.random.default_rng(6).normal(0.0, 1.0, 60)

    def machine(seed, drift):
        rows = period(seed, days=60, drift=drift, day_sd=0.0)
        rows["power_kw"] = rows["power_kw"] + np.repeat(weather, 48)
        return rows

    both = machine(7, 0.0), machine(8, 0.01)
    how = {"reading": DAY, "smoothing": Smoothing(bandwidth=5.0, **MANY)}
    apart = compare_curves(*both, "wet_bulb_c", "power_kw", **how).units[0]
    paired = compare_curves(*both, "wet_bulb_c", "power_kw", paired=True, **how).units[0]
    assert paired.excess.amount == apart.excess.amount
    assert paired.excess.std_error < 0.4 * apart.excess.std_error
    assert paired.excess.p_value < 0.01 < apart.excess.p_value


def test_results_do_not_depend_on_threads(base):
    now = period(9, first=200)
    one = compare_curves(base, now, reading=DAY)
    two = compare_curves(base, now, reading=replace(DAY, threads=2))
    assert one.units[0].excess == two.units[0].excess
    np.testing.assert_array_equal(
        one.units[0].difference.upper_all, two.units[0].difference.upper_all
    )


def test_hot_rows_beyond_the_baseline_are_told(base):
    now = period(10, first=200)
    now["wet_bulb_c"] = now["wet_bulb_c"] + 8.0
    found = compare_curves(base, now)
    excess = found.units[0].excess
    assert excess.rows_outside == pytest.approx((now["wet_bulb_c"] > base.x[-1]).sum(), abs=3)
    assert excess.rows + excess.rows_outside + excess.rows_thin == now["wet_bulb_c"].size
    codes = [caution.code for caution in found.units[0].cautions]
    assert "rows without baseline" in codes
    assert "outside the baseline" in "\n".join(found.lines())


def test_the_excess_of_few_days_has_no_error_but_says_so(base):
    found = compare_curves(base, period(11, days=3, first=200))
    unit = found.units[0]
    assert unit.difference is None
    assert unit.excess.std_error is None
    assert {"few folds", "no difference along x", "few blocks"} <= {
        caution.code for caution in unit.cautions
    }
    assert found.units_table()["amount"][0].as_py() == unit.excess.amount
    assert found.table().num_rows == 0
    json.dumps(found.to_dict(), allow_nan=False)
    assert figure(found) is not None


def test_blocks_that_differ_are_told(base):
    found = compare_curves(base, period(12, first=200), reading=Reading(block="logged_at:hour"))
    assert "blocks differ" in [caution.code for caution in found.units[0].cautions]


def test_rows_without_a_block_of_their_own_take_the_baselines(base):
    now = period(12, first=200)
    found = compare_curves(base, now, reading=Reading(where="power_kw > 0"))
    assert found.trace["now"]["block"] == "logged_at:day"
    assert found.units[0].excess == compare_curves(base, now).units[0].excess


def test_rows_that_resemble_each_other_without_blocks_are_told():
    rows = period(13, days=60, day_sd=2.0)
    found = compare_curves(
        rows, period(14, days=60, day_sd=2.0), "wet_bulb_c", "power_kw",
        smoothing=Smoothing(bandwidth=5.0, **MANY),
    )  # fmt: skip
    told = [one.text for one in found.units[0].cautions if one.code == "neighbouring rows alike"]
    assert [text.split(":")[0] for text in told] == ["Base", "Now"]


# Other axes.


def test_a_log_axis_compares_factors():
    def spread(seed, drift):
        rows = period(seed, days=60)
        x = np.exp(rows["wet_bulb_c"] / 5.0)
        return {**rows, "wet_bulb_c": x, "power_kw": rows["power_kw"] * (1.0 + drift)}

    found = compare_curves(
        spread(15, 0.0), spread(16, 0.1), "wet_bulb_c", "power_kw",
        reading=replace(DAY, scale="log"), smoothing=Smoothing(bandwidth=2.0, **MANY),
    )  # fmt: skip
    unit = found.units[0]
    assert unit.excess.share_lower < 0.1 < unit.excess.share_upper
    x = found.table()["x"].to_numpy()
    assert x[0] == pytest.approx(1.0, rel=1e-2)
    assert x[-1] == pytest.approx(math.exp(4.0), rel=1e-2)
    assert "factor 2 for both" in "\n".join(found.lines())
    assert figure(found) is not None


def test_times_keep_their_places_though_the_sides_begin_at_other_times():
    rng = np.random.default_rng(17)

    def history(first_hour, hours, lift):
        stamp = np.datetime64("2026-03-01", "s") + np.arange(first_hour, hours) * 3600
        x = np.tile(stamp, 24)
        y = 5.0 + 0.01 * np.tile(np.arange(first_hour, hours), 24) + lift
        return {
            "logged_at": x, "power_kw": y + rng.normal(0.0, 0.2, x.size),
            "plant": np.repeat(np.arange(24), stamp.size),
        }  # fmt: skip

    how = {"reading": Reading(block="plant"), "smoothing": Smoothing(bandwidth="40 h", **MANY)}
    found = compare_curves(
        history(0, 300, 0.0), history(100, 400, 0.5), "logged_at", "power_kw", **how
    )
    unit = found.units[0]
    assert np.nanmax(np.abs(unit.difference.difference - 0.5)) < 0.2
    assert unit.excess.rows == pytest.approx(200 * 24, abs=48)
    assert unit.excess.amount == pytest.approx(0.5 * unit.excess.rows, rel=0.1)
    table = found.table()
    assert pa.types.is_timestamp(table["x"].type)
    real = [row for row in table.to_pylist() if row["real"]]
    assert str(real[0]["x"]) >= "2026-03-05"


# Many units.


def fleet_rows(seed, drifts, days=30, first=0):
    parts = []
    for place, (plant, drift) in enumerate(drifts.items()):
        rows = period(seed + place, days=days, first=first, drift=drift)
        parts.append({**rows, "plant": np.full(rows["power_kw"].size, plant)})
    return {name: np.concatenate([part[name] for part in parts]) for name in parts[0]}


@pytest.fixture(scope="module")
def plants():
    base = fleet_rows(20, {"alder": 0.0, "birch": 0.0, "cedar": 0.0, "elm": 0.0}, days=60)
    now = fleet_rows(
        30, {"alder": 0.0, "birch": 0.08, "cedar": -0.06, "oak": 0.0}, days=40, first=200
    )
    fleet = make_fleet(
        base, "wet_bulb_c", "power_kw", by="plant", reading=DAY,
        smoothing=Smoothing(bandwidth=5.0, **MANY),
    )  # fmt: skip
    return base, now, fleet, compare_curves(fleet, now)


def test_units_are_ranked_by_excess_and_matched_by_key(plants):
    found = plants[3]
    assert found.by == ("plant",)
    assert [unit.key for unit in found.units] == [
        ("birch",), ("alder",), ("cedar",), ("elm",), ("oak",)
    ]  # fmt: skip
    assert [unit.key[0] for unit in found.discoveries()] == ["birch", "cedar"]
    rest = {unit.key[0]: (unit.status, unit.reason) for unit in found.units[3:]}
    assert rest == {
        "elm": ("no rows now", "NOW holds no such unit."),
        "oak": ("no baseline", "BASE holds no such unit."),
    }
    table = found.units_table().to_pydict()
    assert table["rank"] == [1, 2, 3, None, None]
    assert table["plant"] == ["birch", "alder", "cedar", "elm", "oak"]


def test_a_unit_among_many_is_compared_as_alone(plants):
    base, now, _, found = plants
    alone = compare_curves(
        base, now, "wet_bulb_c", "power_kw",
        reading=replace(DAY, where="plant = 'birch'"),
        smoothing=Smoothing(bandwidth=5.0, **MANY),
    ).units[0]  # fmt: skip
    among = found.units[0]
    # Bins are laid over all units together, so they differ a little.
    assert among.excess.amount == pytest.approx(alone.excess.amount, rel=2e-3)
    assert among.excess.std_error == pytest.approx(alone.excess.std_error, rel=2e-2)
    assert among.now_rows == alone.now_rows


def test_adjusted_values_are_never_below_their_own(plants):
    ranked = [unit for unit in plants[3].units if unit.excess is not None]
    assert all(unit.adjusted_p_value >= unit.excess.p_value for unit in ranked)


def test_fleets_compare_with_fleets(plants):
    now, fleet = plants[1], plants[2]
    other = make_fleet(
        now, "wet_bulb_c", "power_kw", by="plant", reading=DAY,
        smoothing=Smoothing(bandwidth=5.0, **MANY),
    )  # fmt: skip
    found = compare_curves(fleet, other)
    told = {unit.key[0]: unit for unit in found.units}
    assert told["birch"].difference.p_value < 0.05
    assert told["birch"].excess is None
    assert told["elm"].status == "no rows now"
    assert told["oak"].status == "no baseline"
    by_line = replace(other, by=("line",))
    with pytest.raises(InputError, match="NOW must be made with --by plant, as BASE, but it was"):
        compare_curves(fleet, by_line)


def test_curves_of_one_and_of_many_do_not_mix(plants, base):
    with pytest.raises(InputError, match="NOW must hold the same units as BASE"):
        compare_curves(plants[2], base)


def test_a_picture_of_many_units_names_each(plants):
    texts = [text.get_text() for text in figure(plants[3]).texts if text.get_gid() == "unit"]
    assert texts == ["birch", "alder", "cedar"]


def test_lines_of_many_units_rank_and_explain(plants):
    lines = "\n".join(plants[3].lines())
    assert "3 compared of 5 by plant; 2 with a real excess" in lines
    assert "not ranked elm: NOW holds no such unit." in lines


# What is refused.


def refused(match, *given, **how):
    with pytest.raises(InputError, match=match):
        compare_curves(*given, **how)


def test_a_curve_without_its_folds_is_refused(base):
    refused("BASE must keep its curves without each fold", replace(base, without_folds=None), {})


def test_weights_have_no_excess():
    rows = period(40)
    rows["precision"] = np.full(rows["power_kw"].size, 2.0)
    made = make_curve(
        rows, "wet_bulb_c", "power_kw", weight="precision", smoothing=Smoothing(**MANY)
    )
    refused("BASE must be made without --weight for an excess", made, rows)


def test_other_methods_are_refused(base):
    rows = period(41)
    nearest = Smoothing(estimator="nearest")
    match = "--estimator must be one with a bandwidth"
    refused(match, rows, rows, "wet_bulb_c", "power_kw", smoothing=nearest)
    own = Smoothing(robust=True, bandwidth=base.bandwidth, **MANY)
    robust = make_curve(rows, "wet_bulb_c", "power_kw", smoothing=own)
    refused("NOW must be a plain mean to be compared", base, robust)
    kernel = make_curve(
        rows, "wet_bulb_c", "power_kw", smoothing=Smoothing(kernel="triweight", **MANY)
    )
    refused("--kernel must be the same for both curves, but BASE has biweight", base, kernel)
    width = make_curve(rows, "wet_bulb_c", "power_kw", smoothing=Smoothing(bandwidth=1.25, **MANY))
    refused(
        "--bandwidth must be the same for both curves, but BASE has .* and NOW 1.25", base, width
    )
    own = make_curve(
        rows, "wet_bulb_c", "power_kw", smoothing=Smoothing(**MANY), band=Band(at=(1.0, 2.0))
    )
    refused("BASE must have evenly spaced points to be compared", own, rows)


def test_a_robust_baseline_shrugs_off_its_faults():
    """Every fiftieth baseline row is a fault; the excess is that of a clean baseline."""
    rows, now = period(42), period(43)
    faulty = {**rows, "power_kw": rows["power_kw"].copy()}
    faulty["power_kw"][::50] = -9999.0
    told = {
        name: compare_curves(
            data, now, "wet_bulb_c", "power_kw", smoothing=Smoothing(robust=robust, **MANY)
        ).units[0]
        for name, data, robust in (("clean", rows, False), ("robust", faulty, True))
    }
    clean, robust = told["clean"].excess, told["robust"].excess
    assert abs(robust.amount - clean.amount) < 2.0 * clean.std_error
    assert "robust baseline" in [caution.code for caution in told["robust"].cautions]


def test_a_store_is_a_baseline_but_not_what_is_compared(files, tmp_path, capsys):
    store = tmp_path / "plants.store"
    told = {"block": "logged_at:day", "where": "plant = 'alder'"}
    update_store(store, files / "base.parquet", StoreSettings("wet_bulb_c", "power_kw", **told))
    code, told, complaints = run(capsys, store, files / "now.parquet", "--where", "plant = 'alder'")
    assert (code, complaints) == (0, "")
    assert "2,880 used of 11,520 read, 60 blocks by logged_at:day" in " ".join(told.split())
    assert "blocks by logged_at:day, where plant = 'alder'" in " ".join(told.split())
    # What is not given is as the store counted.
    again = run(capsys, store, files / "now.parquet")
    assert again == (0, told, "")
    code, _, complaint = run(capsys, store, files / "now.parquet", "--base-where", "plant = 'oak'")
    assert code == 2
    assert "--where must agree with the store, but it is plant = 'oak' and" in complaint
    code, _, complaint = run(capsys, files / "birch.parquet", store)
    assert code == 2
    assert "NOW must be data or a curve, but" in complaint


def test_a_curve_brings_its_own_settings(base):
    for name, own in (
        ("smoothing", Smoothing()), ("band", Band()), ("base_reading", Reading()), ("by", "plant"),
    ):  # fmt: skip
        refused(f"{name}= must be left out where BASE is a curve", base, {}, **{name: own})


def test_data_need_their_columns():
    refused("--x and --y must be given where BASE is data, but one is missing", {}, {}, "x")


def test_sides_apart_share_nothing(base):
    now = period(42, first=200)
    now["wet_bulb_c"] = now["wet_bulb_c"] + 100.0
    refused(
        r"NOW must share a stretch of x with BASE .* but BASE lies between 0\.00\d+ and 19\.9\d+ "
        r"and NOW lies between 100\.\d+ and 119\.\d+", base, now,
    )  # fmt: skip


def test_axes_of_other_kinds_and_units_are_refused(base, tmp_path):
    now = period(43)
    refused(
        "--x must hold one kind on both sides, but BASE holds numbers and NOW timestamps", base,
        now, x="logged_at", reading=Reading(),
    )  # fmt: skip
    table = pa.table(now)
    for name, option, own, other in (
        ("wet_bulb_c", "--x", b"degC", b"degF"), ("power_kw", "--y", b"kW", b"W"),
    ):  # fmt: skip
        place = table.schema.get_field_index(name)
        for unit, file in ((own, "base"), (other, "now")):
            told = table.schema.field(place).with_metadata({b"unit": unit})
            pq.write_table(table.cast(table.schema.set(place, told)), tmp_path / f"{file}.parquet")
        match = f"{option} must have one unit on both sides, but BASE is in {own.decode()} and NOW"
        refused(
            match, tmp_path / "base.parquet", tmp_path / "now.parquet", "wet_bulb_c", "power_kw",
            smoothing=Smoothing(bandwidth=5.0, **MANY),
        )  # fmt: skip


@pytest.mark.parametrize("hours", [0.0, -1.0, math.nan, "a day"])
def test_hours_are_positive_numbers(base, hours):
    refused("--hours-per-row must be a positive number of hours", base, {}, hours_per_row=hours)


def test_levels_flags_and_scales_are_checked(base):
    refused("--level must lie between 0 and 1", base, {}, level=1.5)
    refused("--paired must be True or False", base, {}, paired=1)
    refused(
        "--scale must be the same on both sides, but BASE is linear and NOW log", base, {},
        reading=Reading(scale="log"),
    )  # fmt: skip


# The command.


@pytest.fixture(scope="module")
def files(tmp_path_factory, plants):
    folder = tmp_path_factory.mktemp("plants")
    pq.write_table(pa.table(plants[0]), folder / "base.parquet")
    pq.write_table(pa.table(plants[1]), folder / "now.parquet")
    plants[2].curves[("birch",)].save(folder / "birch.parquet")
    plants[2].save(folder / "fleet.parquet")
    return folder


def run(capsys, *arguments):
    code = main(["compare", *map(str, arguments)])
    printed = capsys.readouterr()
    return code, printed.out, printed.err


def test_the_command_prints_writes_and_draws(files, tmp_path, capsys):
    out, plot, units = tmp_path / "d.csv", tmp_path / "d.png", tmp_path / "u.parquet"
    code, told, complaints = run(
        capsys, files / "birch.parquet", files / "now.parquet", "--where", "plant = 'birch'",
        "--hours-per-row", "0.5", "--out", out, "--units-out", units, "--plot", plot,
    )  # fmt: skip
    assert (code, complaints) == (0, "")
    assert "power_kw against wet_bulb_c: now less base" in told
    assert "power_kw x hours (+" in told
    assert "40 blocks by logged_at:day, where plant = 'birch'" in " ".join(told.split())
    assert plot.read_bytes().startswith(b"\x89PNG")
    assert pc.read_csv(out).column_names[:4] == ["x", "base", "now", "difference"]
    assert pq.read_table(units)["share"][0].as_py() == pytest.approx(0.08, abs=0.02)


def test_the_command_prints_json_and_leaves_data_alone(files, tmp_path, capsys):
    code, told, _ = run(capsys, files / "fleet.parquet", files / "now.parquet", "--json")
    assert code == 0
    plain = json.loads(told)
    assert [unit["key"] for unit in plain["units"]][:3] == [["birch"], ["alder"], ["cedar"]]
    code, _, complaint = run(
        capsys, files / "birch.parquet", files / "now.parquet", "--out", files / "now.parquet"
    )
    assert code == 2
    assert "--out must" in complaint


@pytest.mark.parametrize("option", ["--out", "--units-out"])
def test_a_curve_file_that_is_compared_is_never_written_over(files, option, tmp_path, capsys):
    curve = tmp_path / "curve.parquet"
    curve.write_bytes((files / "birch.parquet").read_bytes())
    code, _, complaint = run(capsys, curve, files / "now.parquet", option, curve)
    assert code == 2
    assert f"{option} must leave the data alone, but '{curve}' is one of" in complaint
    assert curve.read_bytes() == (files / "birch.parquet").read_bytes()


def test_the_command_compares_data_of_one_folder_by_two_conditions(files, capsys):
    code, told, complaints = run(
        capsys, files / "base.parquet", files / "base.parquet", "--x", "wet_bulb_c", "--y",
        "power_kw", "--block", "logged_at:day", "--bandwidth", "5", "--base-where",
        "logged_at < '2025-02-01'", "--where", "logged_at >= '2025-02-01'", "--level", "0.9",
    )  # fmt: skip
    assert (code, complaints) == (0, "")
    assert "where logged_at < '2025-02-01'" in told
    assert "90 % interval" in told


def test_the_command_compares_units_of_data(files, capsys):
    code, told, complaints = run(
        capsys, files / "base.parquet", files / "now.parquet", "--x", "wet_bulb_c", "--y",
        "power_kw", "--block", "logged_at:day", "--bandwidth", "5", "--by", "plant", "--quiet",
    )  # fmt: skip
    assert (code, told, complaints) == (0, "", "")


def test_the_command_refuses_in_one_sentence(files, capsys):
    code, told, complaint = run(
        capsys, files / "birch.parquet", files / "now.parquet", "--bandwidth", "4"
    )
    assert (code, told) == (2, "")
    assert complaint == (
        "fastsmooth: smoothing= must be left out where BASE is a curve, but a curve brings its "
        "own; leave it out.\n"
    )
