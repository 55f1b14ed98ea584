"""The command line of stores."""

import json
import os

import numpy as np
import pytest

from fastsmooth import InputError, load_curve
from fastsmooth import update_store as update
from fastsmooth.cli import main
from tests.store_tools import UNITS, write_day


@pytest.fixture(scope="module")
def days(tmp_path_factory):
    folder = tmp_path_factory.mktemp("days")
    return [str(write_day(folder, day)) for day in range(8)]


@pytest.fixture
def store(days, tmp_path):
    update(tmp_path / "store", days, UNITS)
    return tmp_path / "store"


def run(capsys, *arguments):
    code = main([str(one) for one in arguments])
    printed = capsys.readouterr()
    # Long lines are wrapped beside their label.
    return code, printed.out.replace("\n           ", " "), printed.err


def test_update_makes_a_store_and_goes_on_with_it(days, tmp_path, capsys):
    store = tmp_path / "store"
    code, told, complaints = run(
        capsys, "update", store, *days[:4], "--x", "wet_bulb_c", "--y", "power_kw", "--by", "plant",
        "--block", "logged_at:day", "--period", "logged_at:month",
    )  # fmt: skip
    assert (code, complaints) == (0, "")
    assert f"store      {store}: state 1" in told
    assert "960 used of 960 read" in told
    code, told, _ = run(capsys, "update", store, *days)
    assert code == 0
    assert "unchanged  4 files counted before" in told
    assert "compacted  2025-01" in told
    code, told, _ = run(capsys, "update", store, *days)
    assert (code, "nothing to do; it stays as it is" in told) == (0, True)
    code, told, _ = run(capsys, "update", store, "--forget-before", "2025-02-01")
    assert (code, "forgotten  2025-01" in told) == (0, True)
    code, told, _ = run(capsys, "update", store, days[0], "--json")
    assert json.loads(told)["unchanged"] == [days[0]]
    assert run(capsys, "update", store, *days, "--quiet") == (0, "", "")


def test_curve_and_search_take_a_store(store, tmp_path, capsys):
    out, plot = tmp_path / "curve.parquet", tmp_path / "curve.png"
    code, told, complaints = run(
        capsys, "curve", store, "--last", "1 month", "--out", out, "--plot", plot
    )
    assert (code, complaints) == (0, "")
    assert "rows       960 used of 960 read from 8 files in a store, 2025-02" in told
    made = load_curve(out)
    assert made.trace["store"]["last"] == "1 month"
    assert np.isfinite(made.estimate).any()
    assert plot.read_bytes().startswith(b"\x89PNG")
    code, told, _ = run(capsys, "search", store, "--json")
    assert (code, "local-linear" in json.loads(told)) == (0, True)


def test_info_shows_ledger_and_plan(store, days, capsys):
    code, told, _ = run(capsys, "info", store)
    assert code == 0
    assert "settings   x wet_bulb_c, y power_kw, by plant, block logged_at:day" in told
    assert "periods    2025-01 to 2025-02 (2)" in told
    assert told.count("\nfile       ") == 8
    code, told, _ = run(capsys, "info", store, "--json")
    facts = json.loads(told)
    assert facts["rows"] == {"used": 1920, "read": 1920}
    assert [one["path"] for one in facts["files"]] == days
    assert [one["key"] for one in facts["units"]] == [["eastholm"], ["northmoor"], [None]]


@pytest.mark.parametrize(
    ("arguments", "sentence"),
    [
        (["update", "STORE"], "DATA must be given, but there is nothing to do; name files, or give "
         "--forget-before."),
        (["update", "NEW", "DAY"], "--x must be given for a new store, but it is missing; name a "
         "column."),
        (["update", "STORE", "DAY", "--bins", "1000"], "--bins must be a power of two, but it is "
         "1000; give 512 or 1024."),
        (["update", "STORE", "DAY", "--scale", "log"], "--scale must agree with the store, but it "
         "is log and the store has linear; leave --scale out, or make another store."),
        (["update", "s3://bucket/store", "DAY"], "STORE must be a folder on this computer, but "
         "'s3://bucket/store' is an address; name a folder; DATA may lie elsewhere."),
        (["curve", "STORE", "--where", "plant = 'eastholm'"], "--where must agree with the store, "
         "but it is plant = 'eastholm' and the store has none; leave --where out, or make another "
         "store."),
        (["curve", "DAY", "--x", "wet_bulb_c", "--y", "power_kw", "--last", "1 month"], "--last "
         "must come with a store in place of DATA, but DATA are no store; choose rows with "
         "--where, or make a store with 'fastsmooth update'."),
        (["curve", "STORE", "--out", "STORE/curve.parquet"], "--out must lie outside DATA, but "
         "'STORE/curve.parquet' would be read as data next time; name another folder."),
    ],
)  # fmt: skip
def test_refusals_are_one_sentence(store, days, tmp_path, capsys, arguments, sentence):
    names = {"STORE": str(store), "NEW": str(tmp_path / "new"), "DAY": days[0]}
    for name, path in names.items():
        arguments = [one.replace(name, path) for one in arguments]
        sentence = sentence.replace(name, path) if name in sentence.split("'") else sentence
    sentence = sentence.replace("'STORE/", f"'{store}/")
    code, told, complaints = run(capsys, *arguments)
    assert (code, told, complaints) == (2, "", f"fastsmooth: {sentence}\n")
    assert not (tmp_path / "new").exists()


def test_only_files_can_be_entered(tmp_path):
    with pytest.raises(InputError) as refused:
        update(tmp_path / "store", {"wet_bulb_c": np.arange(3.0)}, UNITS)
    assert str(refused.value) == (
        "DATA must be files, which the ledger can name, but it is a dict; write it to a file first."
    )
    assert os.listdir(tmp_path) == []
