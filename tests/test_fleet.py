"""Curves of many units: statuses, widths, files, refusals and commands."""

import json
import math

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from fastsmooth.kernels.shapes import SHAPES

from fastsmooth import (
    Band,
    InputError,
    Reading,
    Smoothing,
    Unit,
    load_curve,
    make_curve,
    make_fleet,
    units_of,
)
from fastsmooth.bintable import Pyramid
from fastsmooth.cli import main
from fastsmooth.fleet import MADE, arrow_type, column_of
from fastsmooth.fleetpass import count_fleet
from fastsmooth.grouping import Grouping
from fastsmooth.packing import pack, unpack
from fastsmooth.search import search_table
from fastsmooth.sharedwidth import lowest_width
from fastsmooth.source import Columns, open_source
from tests.fleet_tools import X, Y, readings, write

# Curves.


@pytest.fixture(scope="module")
def odd():
    """Two ordinary plants, and units of every kind of trouble."""
    rng = np.random.default_rng(7)
    parts = {
        "north": (rng.uniform(0.0, 25.0, 4000), None),
        "south": (rng.uniform(0.0, 25.0, 3000), None),
        "far": (rng.uniform(500.0, 501.0, 3000), None),
        "stuck": (np.full(40, 3.0), np.arange(40.0)),
        "one": (np.array([4.0]), np.array([1.0])),
        "two": (np.array([1.0, 2.0]), np.array([1.0, 2.0])),
        "blind": (np.linspace(0.0, 9.0, 5), np.full(5, math.nan)),
        "huge": (np.linspace(0.0, 20.0, 50), np.full(50, 1e200)),
        "five": (np.array([1.0, 5.0, 9.0, 14.0, 20.0]), np.arange(5.0)),
    }
    x = np.concatenate([one for one, _ in parts.values()])
    y = np.concatenate(
        [np.sin(a) + rng.normal(0.0, 0.3, a.size) if b is None else b for a, b in parts.values()]
    )
    plant = np.repeat(list(parts), [one.size for one, _ in parts.values()])
    order = rng.permutation(x.size)
    return {X: x[order], Y: y[order], "plant": pa.array(plant[order].tolist())}


@pytest.fixture(scope="module")
def made(odd):
    return make_fleet(odd, X, Y, by="plant")


def test_units_with_too_little_data_say_so(made):
    told = {unit.key[0]: (unit.status, unit.reason, unit.rows) for unit in made.units}
    assert told == {
        "blind": ("no usable rows", "Every row was refused (5 y NaN).", 0),
        "far": (MADE, None, 3000),
        "five": (MADE, None, 5),
        "huge": (
            "data refused",
            "--y must stay below 1e70 in size, but 'power_kw' goes beyond it; leave such rows "
            "out with --where 'ABS(power_kw) < 1e70'.",
            50,
        ),
        "north": (MADE, None, 4000),
        "one": ("x constant", "There is one row only.", 1),
        "south": (MADE, None, 3000),
        "stuck": ("x constant", "wet_bulb_c is the same in all 40 rows.", 40),
        "two": (
            "too few distinct x",
            "2 rows hold fewer than 4 distinct wet_bulb_c that bins tell apart.",
            2,
        ),
    }
    assert list(told) == sorted(told)
    assert {key[0] for key in made.curves} == {"far", "five", "north", "south"}
    assert made.status_counts()[MADE] == 4


def test_a_block_that_never_changes_is_a_status():
    n = 400
    rng = np.random.default_rng(8)
    x = rng.uniform(0.0, 10.0, n)
    plant = np.array(["north", "south"])[np.arange(n) % 2]
    day = np.where(plant == "north", 0, np.arange(n) // 20)
    data = {"x": x, "y": np.sin(x) + rng.normal(size=n), "plant": plant, "day": day}
    found = make_fleet(
        data, "x", "y", by="plant", reading=Reading(block="day"), smoothing=Smoothing(widths=8)
    )
    assert [(unit.key[0], unit.status) for unit in found.units] == [
        ("north", "one block only"), ("south", MADE),
    ]  # fmt: skip
    assert found.units[0].reason.startswith("day is the same in all 200 rows")


def test_a_unit_of_a_narrow_range_is_counted_again_with_bins_of_its_own(made):
    far, north = (made.curves[(name,)] for name in ("far", "north"))
    assert far.trace["engine"]["passes"] == made.trace["engine"]["passes"] == 2
    assert far.trace["plan"]["origin"] == far.x[0]
    assert far.trace["engine"]["bins_per_bandwidth"] >= 32
    assert north.trace["engine"]["bins_per_bandwidth"] >= 32
    assert made.curves[("five",)].trace["engine"]["passes"] == 1


def test_each_curve_is_close_to_that_of_its_unit_alone(odd, made):
    for name in ("north", "south", "far"):
        mine = made.curves[(name,)]
        alone = make_curve(
            odd, X, Y, reading=Reading(where=f"plant = '{name}'"),
            smoothing=Smoothing(engine="binned"),
        )  # fmt: skip
        assert mine.bandwidth == pytest.approx(alone.bandwidth, rel=0.02)
        assert mine.x.tolist() == alone.x.tolist()
        away = np.abs(mine.estimate - alone.estimate) / alone.std_error
        assert np.nanmax(away) < 0.05
        assert mine.trace["rows"]["used"] == alone.trace["rows"]["used"]
        assert mine.trace["unit"] == [name]
        assert mine.settings["by"] == ["plant"]
        assert mine.density.rows.sum() == alone.density.rows.sum()
        assert mine.density.sampled.sum() > 0


def test_neighbouring_rows_of_a_unit_are_compared_though_others_lie_between():
    n, plants = 40_000, 4
    rng = np.random.default_rng(9)
    noise = np.empty((n // plants, plants))
    noise[0] = rng.normal(size=plants)
    for row in range(1, n // plants):
        noise[row] = 0.9 * noise[row - 1] + math.sqrt(1 - 0.81) * rng.normal(size=plants)
    x = rng.uniform(0.0, 10.0, n)
    data = {"x": x, "y": np.sin(x) + noise.ravel(), "plant": np.arange(n) % plants}
    found = make_fleet(data, "x", "y", by="plant", smoothing=Smoothing(widths=8))
    for curve in found.curves.values():
        assert curve.trace["serial"]["lag_one"] == pytest.approx(0.9, abs=0.1)
        assert "neighbouring rows alike" in [caution.code for caution in curve.cautions]


def test_far_outliers_are_left_out_for_all_and_told(odd):
    x = np.append(odd[X], [-9999.0, 1e6])
    plant = pa.array([*odd["plant"].to_pylist(), "north", "south"])
    data = {X: np.where(x > 400.0, 20.0, x), Y: np.append(odd[Y], [0.0, 0.0]), "plant": plant}
    data[X][-1] = 1e6
    found = make_fleet(data, X, Y, by="plant", smoothing=Smoothing(widths=8))
    assert [caution.code for caution in found.cautions] == ["range trimmed"]
    assert found.curves[("north",)].trace["rows"]["refused"] == {"x below range": 1}
    assert found.curves[("south",)].trace["rows"]["refused"] == {"x above range": 1}


def test_many_small_units():
    units, rows = 200, 30
    rng = np.random.default_rng(10)
    n = units * rows
    plant = rng.permutation(np.repeat(np.arange(units), rows))
    x = rng.uniform(0.0, 10.0, n)
    y = 0.5 * x + plant % 7 + rng.normal(0.0, 0.1, n)
    found = make_fleet(
        {"x": x, "y": y, "plant": plant}, "x", "y", by="plant",
        smoothing=Smoothing(bandwidth=20.0, widths=8), band=Band(points=4, keep_folds=False),
    )  # fmt: skip
    assert [unit.key[0] for unit in found.units] == list(range(units))
    assert {unit.rows for unit in found.units} == {rows}
    assert found.status_counts()[MADE] == units
    for unit in found.units[::17]:
        mine = plant == unit.key[0]
        slope, level = np.polyfit(x[mine], y[mine], 1)
        line = level + slope * unit.curve.x
        assert unit.curve.estimate == pytest.approx(line, abs=0.05)


# One width for all.


def test_a_shared_width_is_the_best_for_all_together(odd):
    data = {
        name: np.asarray(odd[name])[np.isin(np.asarray(odd["plant"]), ["north", "south"])]
        for name in (X, Y, "plant")
    }
    found = make_fleet(data, X, Y, by="plant", shared_bandwidth=True)
    told = found.trace["shared_bandwidth"]
    assert {curve.bandwidth for curve in found.curves.values()} == {told["bandwidth"]}
    assert told["units_judging"] == 2
    assert told["rows_judging"] == 7000
    # The same sum from each unit's own table, by hand.
    bins = found.trace["engine"]["bins"]
    with open_source(data, Columns(X, Y), units=("plant",)) as source:
        counted = count_fleet(
            source, Reading(), Grouping.parse("plant"), likely=lambda *about: bins
        )
    widths, loss = np.array(told["widths"]), 0.0
    for table in counted.units.tables().values():
        values = (
            search_table(table, Pyramid(table), SHAPES["biweight"], bounds=(widths[0], widths[-1]))
            .trails["local-linear"]
            .leave_one_out
        )
        loss = loss + table.tally.used * values / values.min()
    loss = loss / 7000
    assert told["relative_loss"] == pytest.approx(loss.tolist(), rel=1e-12)
    best = int(np.argmin(loss))
    assert widths[best - 1] < told["bandwidth"] < widths[best + 1]
    own = make_fleet(data, X, Y, by="plant")
    chosen = sorted(curve.bandwidth for curve in own.curves.values())
    assert chosen[0] * 0.99 <= told["bandwidth"] <= chosen[1] * 1.01


def test_a_unit_too_thin_to_judge_gets_the_shared_width_too(odd):
    found = make_fleet(odd, X, Y, by="plant", shared_bandwidth=True)
    told = found.trace["shared_bandwidth"]
    assert told["units_judging"] == 3
    assert {key[0] for key in found.curves} == {"far", "five", "north", "south"}
    assert len({curve.bandwidth for curve in found.curves.values()}) == 1


@pytest.mark.parametrize("criterion", ["gcv", "aicc", "plug-in"])
def test_every_criterion_can_choose_for_all(odd, criterion):
    keep = np.isin(np.asarray(odd["plant"]), ["north", "south"])
    data = {name: np.asarray(odd[name])[keep] for name in (X, Y, "plant")}
    smoothing = Smoothing(criterion=criterion, widths=24)
    own = make_fleet(data, X, Y, by="plant", smoothing=smoothing)
    both = make_fleet(data, X, Y, by="plant", smoothing=smoothing, shared_bandwidth=True)
    chosen = sorted(curve.bandwidth for curve in own.curves.values())
    shared = both.trace["shared_bandwidth"]["bandwidth"]
    assert chosen[0] * 0.97 <= shared <= chosen[1] * 1.03


def test_a_shared_width_needs_somebody_to_judge(odd):
    keep = np.isin(np.asarray(odd["plant"]), ["two", "five"])
    data = {name: np.asarray(odd[name])[keep] for name in (X, Y, "plant")}
    data["plant"] = np.where(np.arange(7) < 4, "first", "second")
    data[X] = np.array([1.0, 1.0, 2.0, 2.0, 3.0, 4.0, 4.0])
    with pytest.raises(InputError) as caught:
        make_fleet(data, X, Y, by="plant", shared_bandwidth=True)
    assert str(caught.value) == (
        "--shared-bandwidth must find a unit with rows enough to judge a width, but none of 2 "
        "has; give --bandwidth."
    )


def test_the_lowest_point_between_grid_widths():
    grid = np.geomspace(0.1, 10.0, 21)
    loss = 1.0 + (np.log(grid) - math.log(0.7)) ** 2
    assert lowest_width(grid, loss) == pytest.approx(0.7, rel=1e-9)
    loss[:3] = math.inf
    assert lowest_width(grid, np.where(grid < 0.72, math.inf, loss)) == grid[9]
    assert lowest_width(grid, -grid) == grid[-1]
    with pytest.raises(InputError, match="find a width at which all units can be judged"):
        lowest_width(grid, np.full(21, math.inf))


# Files.


def test_a_saved_fleet_comes_back_to_the_last_bit(made, tmp_path):
    for suffix in (".parquet", ".arrow", ".json"):
        made.save(tmp_path / f"f{suffix}")
        again = load_curve(tmp_path / f"f{suffix}")
        assert again.table().equals(made.table(), check_metadata=True)
        for key, curve in made.curves.items():
            assert again.curves[key].table().equals(curve.table(), check_metadata=True)
            assert again.curves[key].to_dict() == curve.to_dict()
        for one, other in zip(made.units, again.units, strict=True):
            assert repr(one) == repr(other)
            assert one.reason == other.reason
            assert one.bandwidth == other.bandwidth
            assert one.caution_codes == other.caution_codes


def test_a_csv_file_holds_the_table_alone(made, tmp_path):
    made.save(tmp_path / "f.csv")
    lines = (tmp_path / "f.csv").read_text().splitlines()
    assert lines[0].startswith('"plant","x","estimate"')
    assert "facts" not in lines[0]
    # A unit without a curve is a row that says so, not a gap.
    assert '"blind",,,,,,,,,,"no usable rows"' in lines
    assert len(lines) == 1 + 4 * 256 + 5
    with pytest.raises(InputError, match="holds the table alone"):
        load_curve(tmp_path / "f.csv")


def test_the_table_joins_by_the_key_columns(made):
    table = made.table()
    north = table.filter(pa.compute.equal(table["plant"], "north"))
    curve = made.curves[("north",)]
    assert north["estimate"].to_numpy().tolist() == curve.estimate.tolist()
    assert north["status"].to_pylist() == curve.statuses
    assert north["x"].to_numpy().tolist() == curve.x.tolist()


def test_rows_that_were_taken_out_are_noticed(made, tmp_path):
    whole = made.table()
    pq.write_table(whole.slice(5), tmp_path / "cut.parquet")
    with pytest.raises(InputError) as caught:
        load_curve(tmp_path / "cut.parquet")
    assert "must be as fastsmooth wrote it" in str(caught.value)
    pq.write_table(whole.slice(0, 400), tmp_path / "less.parquet")
    with pytest.raises(InputError, match="units"):
        load_curve(tmp_path / "less.parquet")
    kept = pa.array(np.arange(whole.num_rows) != 20)
    pq.write_table(whole.filter(kept), tmp_path / "one.parquet")
    with pytest.raises(InputError, match="points"):
        load_curve(tmp_path / "one.parquet")


def test_another_format_is_refused(made, tmp_path):
    table = made.table()
    told = json.loads(table.schema.metadata[b"fastsmooth.fleet"])
    told["format"] = 99
    pq.write_table(
        table.replace_schema_metadata({b"fastsmooth.fleet": json.dumps(told)}),
        tmp_path / "new.parquet",
    )
    with pytest.raises(InputError, match=r"must have format 1, but .* has format 99"):
        load_curve(tmp_path / "new.parquet")


def test_data_are_never_written_over(tmp_path):
    data = write(tmp_path / "data", readings(900, 2), 1, 900)
    found = make_fleet(data, X, Y, by="plant", smoothing=Smoothing(widths=8))
    with pytest.raises(InputError, match="must leave the data alone"):
        found.save(data / "000.parquet")


def test_key_columns_never_clash_with_those_of_a_curve():
    n = 300
    rng = np.random.default_rng(11)
    x = rng.uniform(0.0, 10.0, n)
    status = np.array(["run", "idle"])[np.arange(n) % 2]
    found = make_fleet(
        {"a": x, "y": np.sin(x), "status": status, "x": np.arange(n) % 2}, "a", "y",
        by=["status", "x"], smoothing=Smoothing(widths=8),
    )  # fmt: skip
    assert found.table().column_names[:3] == ["unit_status", "unit_x", "x"]
    assert column_of("plant") == "plant"
    assert [unit.key for unit in found.units] == [("idle", 1), ("run", 0)]


def test_curves_are_opened_when_asked_for(made):
    unit = made.units[1]
    assert unit.curve is unit.curve
    assert units_of(made)[("far",)].bandwidth == unit.bandwidth
    assert ("nobody",) not in made.curves
    one = unit.curve
    assert units_of(one) == {(): one}
    assert Unit(("a",), MADE, None, 3, one).curve is one
    assert Unit(("a",), MADE, None, 3, one).bandwidth == one.bandwidth
    assert repr(unit).startswith("Unit(far: made, 3")


@pytest.mark.parametrize(
    "kind",
    [
        pa.string(), pa.int8(), pa.timestamp("us"), pa.timestamp("ns", "Europe/Madrid"),
        pa.decimal128(10, -2), pa.binary(4), pa.duration("ms"), pa.time64("us"), pa.null(),
        pa.bool_(), pa.date32(), pa.large_string(), pa.float64(),
    ],
)  # fmt: skip
def test_types_are_read_back_from_their_names(kind):
    assert arrow_type(str(kind)) == kind


@pytest.mark.parametrize(
    "plain",
    [
        {}, [], None, [1.0] * 20, [1] * 20, [1.0, None] * 10, [[1.0, 2.0]] * 9, [[1, 2]] * 9,
        [True] * 20, [1, 2.0] * 10, ["a"] * 20, [None] * 20, [2**70] * 9, [[]] * 9,
        [[1.0], [1.0, 2.0]] * 8, [[None, 1.0]] * 9, {"a": {"b": [0.1] * 8}, "c": [-0.0] * 9},
        [5e-324] * 8, [[[1.0]] * 9] * 9,
    ],
)  # fmt: skip
def test_plain_data_come_back_as_they_were_packed(plain):
    again = unpack(pack(plain))
    assert again == plain
    assert json.dumps(again) == json.dumps(plain)


def test_packed_data_that_are_cut_short_are_noticed():
    with pytest.raises(ValueError, match="cut short"):
        unpack(b"abc")


# Refusals.


@pytest.mark.parametrize(
    ("options", "message"),
    [
        (
            {"by": "plnt"},
            "--by must name a column of DATA, but 'plnt' is none; use 'plant'.",
        ),
        ({"by": []}, "--by must name a column of DATA, but it is []; name one or several columns, "
                     "as in --by plant."),
        ({"by": ["plant", "plant"]}, "--by must name each column once, but it is plant, plant; "
                                     "leave out the double."),
        ({"by": "plant:day"}, "--by must name a time column when a unit is given, but 'plant' "
                              "holds string; write --by plant."),
        ({"by": "plant", "smoothing": Smoothing(estimator="nearest")},
         "--estimator nearest must be left out with --by, but it needs all rows in memory; make "
         "one unit at a time with --where, or leave it out."),
        ({"by": "plant", "smoothing": Smoothing(engine="exact")},
         "--engine exact must be left out with --by, but it needs all rows in memory; make "
         "one unit at a time with --where, or leave it out."),
        ({"by": "plant", "smoothing": Smoothing(bandwidth=2.0), "shared_bandwidth": True},
         "--shared-bandwidth must be left out with --bandwidth, but a width is given; leave out "
         "one of them."),
        ({"by": "plant", "reading": Reading(strict=True)},
         "DATA must hold usable rows only with --strict, but some were refused (5 y NaN); clean "
         "the data, filter with --where, or leave --strict out."),
        ({"by": "plant", "reading": Reading(where="plant = 'one' OR plant = 'two'")},
         "DATA must hold a unit with rows enough for a curve, but none of 2 has (the first, one: "
         "x constant); check --by, --where and the columns."),
    ],
)  # fmt: skip
def test_refusals(odd, options, message):
    with pytest.raises(InputError) as caught:
        make_fleet(odd, X, Y, **options)
    assert str(caught.value) == message


def test_a_key_column_of_two_kinds_is_refused(tmp_path):
    for name, plant in (("a", ["north"] * 20), ("b", list(range(20)))):
        table = pa.table({"x": np.arange(20.0), "y": np.arange(20.0), "plant": plant})
        pq.write_table(table, tmp_path / f"{name}.parquet")
    with pytest.raises(InputError) as caught:
        make_fleet(tmp_path, "x", "y", by="plant")
    assert str(caught.value) == (
        "--by must name a column of one kind in every file, but 'plant' holds text in some and "
        "integers in others; write the files alike."
    )


# Commands.


def test_the_command_writes_one_table_and_tells_the_units(tmp_path, capsys):
    data = write(tmp_path / "data", readings(4000, 3), 2, 500)
    out = tmp_path / "curves.parquet"
    arguments = ["curve", str(data), "--x", X, "--y", Y, "--by", "plant", "--out", str(out)]
    assert main(arguments) == 0
    told = capsys.readouterr().out
    assert f"{Y} against {X}, by plant" in told
    assert "units      3: 3 made" in told
    assert "plant 0" in told
    assert "each unit's own, chosen by" in " ".join(told.split())
    assert f"wrote      {out}" in told
    assert len(load_curve(out).curves) == 3
    assert main(["info", str(out)]) == 0
    assert "units      3: 3 made" in capsys.readouterr().out
    assert main([*arguments, "--json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert [unit["key"] for unit in facts["units"]] == [["plant 0"], ["plant 1"], [None]]
    assert facts["status_counts"][MADE] == 3
    assert facts["written"] == [str(out)]
    assert main([*arguments, "--shared-bandwidth", "--quiet"]) == 0
    assert capsys.readouterr().out == ""
    assert main([*arguments, "--shared-bandwidth"]) == 0
    assert "for all, chosen by leave-one-out summed over 3 units" in " ".join(
        capsys.readouterr().out.split()
    )


def test_the_summary_holds_odd_names_on_one_line_each():
    from fastsmooth.fleetwords import fleet_lines

    rng = np.random.default_rng(4)
    names = ["a" * 300, "", "null", "line\nbreak", " led", None, "ö/ü"]
    n = 60 * len(names)
    x = rng.uniform(0.0, 10.0, n)
    plant = [names[row % len(names)] for row in range(n)]
    data = pa.table({"x": x, "y": x + rng.normal(0.0, 0.1, n), "plant": pa.array(plant)})
    made = make_fleet(data, "x", "y", by="plant", smoothing=Smoothing(bandwidth=3.0))
    lines = [one for one in fleet_lines(made) if " 60 rows  bandwidth 3" in one]
    assert [one[2:34].strip() for one in lines] == [
        '""', '" led"', "a" * 16 + "…" + "a" * 15, "line break", '"null"', "ö/ü", "null",
    ]  # fmt: skip
    assert {one.index(" rows  bandwidth") for one in lines} == {49}


def test_the_summary_tells_units_without_a_curve(made):
    from fastsmooth.fleetwords import caution_counts, fleet_lines

    text = "\n".join(fleet_lines(made))
    assert (
        "units      9: 4 made, 1 no usable rows, 2 x constant, 1 too few distinct x, 1 data refused"
    ) in text
    assert "no curve, x constant: wet_bulb_c is the same in all 40 rows." in text
    counts = caution_counts(made)
    assert counts["mostly thin"] == 1
    assert "cautions   1 unit: mostly thin" in text


@pytest.mark.parametrize(
    ("more", "message"),
    [
        (["--by", "plant", "--plot", "a.png"], "--plot must be left out with --by, but it is "
         "'a.png'; make one unit's curve with --where for it."),
        (["--shared-bandwidth"], "--shared-bandwidth must come with --by, but there is one unit; "
         "name what tells units apart, as in --by plant."),
    ],
)  # fmt: skip
def test_the_command_refuses(tmp_path, capsys, monkeypatch, more, message):
    monkeypatch.chdir(tmp_path)
    data = write(tmp_path / "data", readings(900, 2), 1, 900)
    assert main(["curve", str(data), "--x", X, "--y", Y, *more]) == 2
    assert capsys.readouterr().err == f"fastsmooth: {message}\n"
    assert not (tmp_path / "a.png").exists()
