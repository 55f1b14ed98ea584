"""The command line: what it prints, what it leaves behind, how it refuses."""

import json
import os
import re
import subprocess
import sys

import numpy as np
import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fastsmooth import load_curve
from fastsmooth.cli import main


@pytest.fixture(scope="module")
def plant(tmp_path_factory):
    """Two months of one plant: 6,000 rows in two files."""
    folder = tmp_path_factory.mktemp("plant")
    rng = np.random.default_rng(7)
    for month in range(2):
        x = rng.normal(12.0, 5.0, 3000)
        stamps = np.datetime64("2025-01-01", "s") + np.arange(3000) * 600 + month * 3000 * 600
        table = pa.table(
            {
                "logged_at": stamps,
                "plant": ["northmoor"] * 3000,
                "wet_bulb_c": x,
                "power_kw": 30.0 + 2.0 * np.tanh((x - 12.0) / 4.0) + rng.normal(0.0, 0.5, 3000),
                "shift": np.arange(3000) % 3,
                "three": np.arange(3000) % 3 + 0.0,
                "constant": np.full(3000, 4.0),
                "signed": rng.normal(0.0, 1.0, 3000),
                "site:batch": (np.arange(3000) + 3000 * month) // 150,
                "logged_on": stamps.astype("datetime64[D]"),
            }
        )
        pq.write_table(table, folder / f"{month}.parquet", row_group_size=1000)
    return folder


def run(capsys, *arguments):
    code = main([str(one) for one in arguments])
    printed = capsys.readouterr()
    return code, printed.out, printed.err


def test_curve_leaves_a_table_and_a_picture(plant, tmp_path, capsys):
    out, plot = tmp_path / "curve.parquet", tmp_path / "curve.png"
    code, told, complaints = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--out", out, "--plot", plot
    )
    assert (code, complaints) == (0, "")
    assert "6,000 used of 6,000 read from 2 files" in told
    assert "not a protection limit" in told
    made = load_curve(out)
    assert made.x.shape == (256,)
    middle = made.at(12.0)[0]
    assert abs(middle - 30.0) < 0.2
    assert plot.read_bytes().startswith(b"\x89PNG")
    assert sorted(os.listdir(tmp_path)) == ["curve.parquet", "curve.png"]


def test_json_holds_the_same_facts_as_the_summary(plant, capsys):
    code, told, _ = run(capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--json")
    facts = json.loads(told)
    assert code == 0
    assert facts["rows"] == {"read": 6000, "filtered": 0, "refused": {}, "used": 6000}
    low, high = facts["flat_zone"]
    assert low <= facts["bandwidth"] <= high
    assert set(facts["search"]) == {"local-linear", "local-constant"}
    assert sum(facts["points"].values()) == 256


def test_quiet_prints_nothing(plant, tmp_path, capsys):
    out = tmp_path / "curve.csv"
    answer = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--quiet", "--out", out
    )
    assert answer == (0, "", "")
    assert pl.read_csv(out).height == 256


def test_search_shows_and_writes_the_criterion(plant, tmp_path, capsys):
    out = tmp_path / "search.parquet"
    code, told, _ = run(
        capsys,
        "search",
        plant,
        "--x",
        "wet_bulb_c",
        "--y",
        "power_kw",
        "--widths",
        12,
        "--out",
        out,
    )
    assert code == 0
    assert told.count("<") == 2  # one mark for the best of each estimator
    table = pl.read_parquet(out)
    assert table.height == 24
    best = table.group_by("estimator").agg(
        pl.col("bandwidth").sort_by("leave_one_out", nulls_last=True).first()
    )
    assert best["bandwidth"].is_between(0.5, 8.0).all()


def test_block_and_landmarks(plant, capsys):
    code, told, _ = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--block", "logged_at:day",
        "--landmarks", "--crossing", "30.5", "--band", "simultaneous",
    )  # fmt: skip
    assert code == 0
    assert "chosen by leave-block-out" in told
    assert "42 by logged_at:day" in told
    assert "steepest at" in told
    assert "crosses 30.5 at" in told


def curve_lines_of(plant, capsys, *options):
    code, told, complaints = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", *options
    )
    assert (code, complaints) == (0, "")
    # Long lines go on below their text.
    return " ".join(told.split())


@pytest.mark.parametrize("block", ['"site:batch"', '"logged_at":day', "logged_at:day"])
def test_a_block_in_quotes(plant, capsys, block):
    told = curve_lines_of(plant, capsys, "--block", block)
    said = block if ":b" in block else "logged_at:day"
    assert f" by {said}, dealt to " in told
    assert f"blocks {40 if ':b' in block else 42} by" in told


def test_units_in_quotes(plant, tmp_path, capsys):
    out = tmp_path / "curves.parquet"
    code, _, _ = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--by", '"site:batch"',
        "--bandwidth", "5", "--out", out, "--quiet",
    )  # fmt: skip
    assert code == 0
    assert list(load_curve(out).curves) == [(batch,) for batch in range(40)]


def test_folds_that_hold_rows_are_counted(plant, capsys):
    told = curve_lines_of(plant, capsys, "--block", "logged_at:month", "--landmarks")
    assert (
        "blocks 2 by logged_at:month, dealt to 2 of 32 folds; the width rests on leaving out folds"
    ) in told
    assert "band none, because no window meets enough folds to tell how much they differ; " in told
    assert "pointwise" not in told
    assert "landmark none, because no point is supported: all are thin or outside" in told


def test_what_is_supported_has_a_band_and_all_folds(plant, capsys):
    told = curve_lines_of(plant, capsys, "--block", '"site:batch"', "--crossing", "1000")
    assert "width and band rest on leaving out folds" in told
    assert "band pointwise 95 %" in told
    assert "1000 is not reached on any supported stretch" in told


def test_nothing_supported_is_no_missed_crossing(plant, capsys):
    few = ("--block", "logged_at:day", "--folds", "4", "--crossing", "30.5")
    told = curve_lines_of(plant, capsys, *few)
    assert "landmark none, because no point is supported" in told
    assert "is not reached" not in told
    code, facts, _ = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--json", *few
    )
    assert code == 0
    assert json.loads(facts)["landmark_stretches"] == []
    assert (json.loads(facts)["blocks"], json.loads(facts)["folds_with_rows"]) == (42, 4)


def test_a_curve_of_no_rows_near_any_point_has_no_band(plant, capsys):
    told = curve_lines_of(plant, capsys, "--at", "-1000,1000")
    assert "band none, because no point has rows near enough; " in told


def test_rows_that_could_judge_are_counted(plant, capsys):
    code, told, _ = run(
        capsys, "curve", plant, "--x", "logged_at", "--y", "power_kw", "--block", "logged_at:day",
        "--bandwidth", "4h",
    )  # fmt: skip
    told = " ".join(told.split())
    assert code == 0
    assert re.search(r"would do as well \(flat zone\), by the \d+ rows that could judge", told)
    assert "caution Only " in told
    assert "resemble each other" not in told


def test_large_counts_have_separators(plant, tmp_path, capsys):
    out = tmp_path / "curve.arrow"
    told = curve_lines_of(plant, capsys, "--points", "2000", "--engine", "binned", "--out", out)
    assert "points 2,000 from" in told
    assert "engine binned, 8,192 bins" in told
    code, told, _ = run(capsys, "info", out)
    told = " ".join(told.split())
    assert code == 0
    assert ", points 2,000, landmarks False" in told
    assert re.search(r"0.parquet \(\d+,\d{3} bytes, 3,000 rows\)", told)


@pytest.mark.parametrize("command", ["curve", "search", "compare", "update"])
def test_help_tells_of_zones(capsys, command):
    code, told, _ = run(capsys, command, "--help")
    assert code == 0
    assert "--block COLUMN[:UNIT[@ZONE]]" in told


def test_help_tells_when_days_begin_and_how_to_quote(capsys):
    told = " ".join(run(capsys, "curve", "--help")[1].split())
    assert "midnight of the column's own zone, which is UTC for CSV times with an offset" in told
    assert "logged_at:day@Europe/Madrid" in told
    assert """'"logged:at":day'""" in told


def test_info_of_data_and_of_a_curve(plant, tmp_path, capsys):
    code, told, _ = run(capsys, "info", plant)
    assert code == 0
    assert told.startswith("6,000 rows in 2 files")
    assert "wet_bulb_c  double" in told
    out = tmp_path / "curve.arrow"
    run(capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--quiet", "--out", out)
    code, told, _ = run(capsys, "info", out)
    assert code == 0
    assert "0.parquet" in told
    assert "cv_rmse = sqrt(sum (y - m)^2 / (n - p)) / mean(y)" in " ".join(told.split())
    code, told, _ = run(capsys, "info", out, "--json")
    assert json.loads(told)["kind"] == "curve"


def test_demo_leaves_its_files_and_repeats_to_the_bit_in_one_folder(tmp_path, capsys):
    tables = []
    for _ in range(2):
        code, told, complaint = run(capsys, "demo", tmp_path / "demo")
        assert code == 0, complaint
        assert "invented" in told
        assert (tmp_path / "demo" / "curve.png").stat().st_size > 20_000
        tables.append((tmp_path / "demo" / "curve.csv").read_bytes())
    assert tables[0] == tables[1]


def test_demo_refuses_a_folder_that_cannot_be_made(tmp_path, capsys):
    (tmp_path / "notes").write_text("mine")
    code, _, complaint = run(capsys, "demo", tmp_path / "notes")
    assert (code, (tmp_path / "notes").read_text()) == (2, "mine")
    assert complaint.startswith("fastsmooth: FOLDER must be a folder that can be made and written")


REFUSALS = {
    "missing file": (["nowhere.parquet", "--x", "a", "--y", "b"], "DATA must be an existing file"),
    "near column": (["{}", "--x", "wetbulb", "--y", "power_kw"], "use 'wet_bulb_c'"),
    "text column": (["{}", "--x", "plant", "--y", "power_kw"], "is text"),
    "all filtered": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--where", "wet_bulb_c > 1e6"],
        "every row was filtered or refused",
    ),
    "constant x": (["{}", "--x", "constant", "--y", "power_kw"], "must name a column that varies"),
    "three x": (["{}", "--x", "three", "--y", "power_kw"], "at least 4 distinct values"),
    "negative weight": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--weight", "signed"],
        "--weight must name a column of positive finite numbers",
    ),
    "range descends": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--range", "9", "3"], "--range must ascend",
    ),
    "range empty": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--range", "900", "901"],
        "6,000 x below range",
    ),
    "no condition": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--where", "power_kw + 1"],
        "--where must be a condition",
    ),
    "names a file": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--where",
         "power_kw IN (SELECT a FROM read_csv('secret.csv'))"],
        "subquery",
    ),
    "kernel": (["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--kernel", "gausian"], "'gaussian'"),
    "bandwidth": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--bandwidth", "0"], "be positive",
    ),
    "factor": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--where", "wet_bulb_c > 0", "--scale",
         "log",
         "--bandwidth", "0.9"],
        "be a factor above 1",
    ),
    "log of times": (
        ["{}", "--x", "logged_at", "--y", "power_kw", "--scale", "log"], "be linear for times",
    ),
    "one block": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--block", "plant"],
        "--block must tell at least two blocks apart",
    ),
    "block unit": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--block", "logged_at:dy"], "use 'day'",
    ),
    "hours of dates": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--block", "logged_on:hour"],
        "--block must name a column of times when the unit is an hour, but 'logged_on' holds "
        "date32[day], which tells no hours; write --block logged_on:day.",
    ),
    "colon without quotes": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--block", "site:batch"],
        """'batch' is no unit; use one of 'hour', 'day', 'week', 'month', or put quotes around a """
        """name that holds a colon, as in '"site:batch"'.""",
    ),
    "unit of another option": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--by", "site:batch"],
        """--by must name a column""",
    ),
    "criterion needs block": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--criterion", "leave-block-out"],
        "come with --block",
    ),
    "missing option": (
        ["{}", "--x", "wet_bulb_c"],
        "--y must be given, but it is missing; see 'fastsmooth curve --help'.",
    ),
    "missing data": (
        ["--x", "a", "--y", "b"],
        "DATA must be given, but it is missing; see 'fastsmooth curve --help'.",
    ),
    "unknown option": (
        ["{}", "--x", "a", "--y", "b", "--fodls", "3"],
        "--fodls must be an option of 'fastsmooth curve', but there is none of this name; use "
        "'--folds'.",
    ),
    "option unlike any": (
        ["{}", "--x", "a", "--y", "b", "--zzz"], "see 'fastsmooth curve --help'.",
    ),
    "no whole number": (
        ["{}", "--x", "a", "--y", "b", "--folds", "ten"],
        "--folds must be a whole number, but 'ten' is not a valid integer; see 'fastsmooth curve "
        "--help'.",
    ),
    "no number": (
        ["{}", "--x", "a", "--y", "b", "--level", "high"],
        "--level must be a number, but 'high' is not a valid float; see 'fastsmooth curve --help'.",
    ),
    "one value of two": (
        ["{}", "--x", "a", "--y", "b", "--out", "curve.parquet", "--range", "3"],
        "Option '--range' requires 2 arguments; see 'fastsmooth",
    ),
    "width vanishes": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--bandwidth", "1e-300"],
        "--bandwidth must be comparable with the range of x",
    ),
    "suffix": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--out", "curve.xls"],
        "--out must name a file that ends in",
    ),
    "folder": (
        ["{}", "--x", "wet_bulb_c", "--y", "power_kw", "--plot", "nowhere/curve.png"],
        "--plot must lie in a folder that exists",
    ),
}  # fmt: skip


@pytest.mark.parametrize("case", list(REFUSALS))
def test_refusals_are_one_sentence_and_write_nothing(plant, tmp_path, monkeypatch, capsys, case):
    monkeypatch.chdir(tmp_path)
    arguments, expected = REFUSALS[case]
    arguments = [one.format(plant) if one == "{}" else one for one in arguments]
    extra = [] if "--out" in arguments else ["--out", "curve.parquet"]
    code, told, complaint = run(capsys, "curve", *arguments, *extra)
    assert (code, told) == (2, "")
    assert expected in complaint
    assert complaint.startswith("fastsmooth: ")
    assert complaint.count("\n") == 1
    assert os.listdir(tmp_path) == []


def test_strict_refuses_what_is_otherwise_counted(plant, tmp_path, capsys):
    table = pq.read_table(plant / "0.parquet", columns=["wet_bulb_c", "power_kw"])
    holes = table["power_kw"].to_numpy().copy()
    holes[5], holes[6] = np.nan, np.inf
    pq.write_table(pa.table({"x": table["wet_bulb_c"], "y": holes}), tmp_path / "holes.parquet")
    code, told, _ = run(capsys, "curve", tmp_path, "--x", "x", "--y", "y", "--json")
    assert code == 0
    assert json.loads(told)["rows"]["refused"] == {"y NaN": 1, "y infinite": 1}
    code, _, complaint = run(capsys, "curve", tmp_path, "--x", "x", "--y", "y", "--strict")
    assert code == 2
    assert "1 y NaN, 1 y infinite" in complaint


def test_data_are_never_written_over(plant, tmp_path, capsys):
    data = tmp_path / "0.parquet"
    data.write_bytes((plant / "0.parquet").read_bytes())
    link = tmp_path / "link.parquet"
    link.symlink_to(data)
    before = data.read_bytes()
    for out in (data, link):
        for command in ("curve", "search"):
            code, _, complaint = run(
                capsys, command, data, "--x", "wet_bulb_c", "--y", "power_kw", "--out", out
            )
            assert code == 2
            assert "is one of the files that were read" in complaint
    assert data.read_bytes() == before


@pytest.mark.parametrize("data", ["", "/*.parquet"])
def test_an_output_is_never_read_as_data_next_time(plant, tmp_path, capsys, data):
    (tmp_path / "0.parquet").write_bytes((plant / "0.parquet").read_bytes())
    answer = run(
        capsys, "curve", f"{tmp_path}{data}", "--x", "wet_bulb_c", "--y", "power_kw",
        "--out", tmp_path / "curve.parquet",
    )  # fmt: skip
    assert answer[0] == 2
    assert "would be read as data next time" in answer[2]
    assert os.listdir(tmp_path) == ["0.parquet"]


def test_figures_belong_to_the_width_that_was_given(plant, capsys):
    def r2(*options):
        _, told, _ = run(
            capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--json", *options
        )
        return json.loads(told)["fit"]["r2_left_out"]

    assert r2("--bandwidth", "20") < r2() - 0.05


def test_a_crossing_that_is_not_reached_is_told(plant, capsys):
    _, told, _ = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--crossing", "1000"
    )
    assert "1000 is not reached on any supported stretch" in told


def test_interruption_leaves_nothing(plant, tmp_path, monkeypatch, capsys):
    def interrupt(*_):
        raise KeyboardInterrupt

    monkeypatch.setattr("fastsmooth.curve.Curve.table", interrupt)
    code, _, complaint = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--out", tmp_path / "c.csv"
    )
    assert code == 130
    assert "nothing was left half-written" in complaint
    assert os.listdir(tmp_path) == []


def test_help_is_quick_to_load():
    # Loading, not time: the heavy libraries must stay out until they are used.
    script = (
        "import sys, fastsmooth.cli as c; c.main(['--help']); import fastsmooth;"
        "heavy = ('numba', 'scipy', 'matplotlib', 'pyarrow', 'polars');"
        "print([m for m in heavy if m in sys.modules])"
    )
    done = subprocess.run(
        [sys.executable, "-c", script], capture_output=True, text=True, check=True
    )
    assert done.stdout.strip().endswith("[]")


def test_an_own_width_is_compared_with_the_choice(plant, capsys):
    code, told, _ = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--bandwidth", "20"
    )
    assert code == 0
    assert "20 given" in told
    assert "lies outside the flat zone" in told


def test_a_command_that_is_none_is_answered_with_a_near_one(capsys):
    assert run(capsys, "curv") == (
        2, "", "fastsmooth: No such command 'curv'. Did you mean 'curve'?\n",
    )  # fmt: skip


def test_a_point_far_away_is_outside_without_a_warning(plant, capsys):
    """Warnings are errors here."""
    code, told, complaint = run(
        capsys, "curve", plant, "--x", "wet_bulb_c", "--y", "power_kw", "--at", "10,1e300"
    )
    assert (code, complaint) == (0, "")
    assert "1 outside" in told
