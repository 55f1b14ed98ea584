"""Scored rows are whole or absent, and nothing else is ever written over."""

import json
import math
import os
import signal
import subprocess
import sys
import time

import pyarrow as pa
import pyarrow.parquet as pq
import pytest

from fastsmooth.errors import InputError, ReadError, WriteError
from fastsmooth.rows_out import SCORED_KEY
from fastsmooth.score import score_rows
from tests.scored_rows import (
    NEW,
    assert_rows,
    by_hand,
    readings,
    support_curve,
)


@pytest.fixture(scope="module")
def curve():
    return support_curve()


@pytest.fixture(scope="module")
def curve_file(curve, tmp_path_factory):
    path = tmp_path_factory.mktemp("curve") / "curve.parquet"
    curve.save(path)
    return path


@pytest.fixture(scope="module")
def plant_rows():
    return readings(700)


def stop_after(rows):
    def progress(stage, done, of):
        if done >= rows:
            raise KeyboardInterrupt

    return progress


@pytest.mark.parametrize("threads", [1, 2])
@pytest.mark.parametrize("single", [True, False])
def test_interruption_leaves_nothing(curve, tmp_path, threads, single):
    folder = tmp_path / "new"
    folder.mkdir()
    for k in range(1 if single else 4):
        pq.write_table(readings(400, k), folder / f"{k}.parquet", row_group_size=50)
    data = folder / "0.parquet" if single else folder
    out = tmp_path / ("scored.parquet" if single else "scored")
    with pytest.raises(KeyboardInterrupt):
        score_rows(data, curve, out=out, threads=threads, progress=stop_after(250))
    assert os.listdir(tmp_path) == ["new"]


@pytest.mark.parametrize("threads", [1, 3])
@pytest.mark.parametrize("single", [True, False])
def test_damaged_file_leaves_nothing_and_the_former_result(curve, tmp_path, threads, single):
    folder = tmp_path / "new"
    folder.mkdir()
    for k in range(1 if single else 3):
        pq.write_table(readings(4000, k), folder / f"{k}.parquet", row_group_size=500,
                       write_page_checksum=True)  # fmt: skip
    data = folder / "0.parquet" if single else folder
    out = tmp_path / ("scored.parquet" if single else "scored")
    score_rows(data, curve, out=out)
    before = {one: one.read_bytes() for one in tmp_path.rglob("*") if one.is_file()}
    damaged = sorted(folder.iterdir())[-1]
    content = bytearray(damaged.read_bytes())
    column = pq.ParquetFile(damaged).metadata.row_group(5).column(1)
    content[column.data_page_offset + 200] ^= 0xFF
    damaged.write_bytes(content)
    with pytest.raises(ReadError, match="DATA must be readable whole"):
        score_rows(data, curve, out=out, threads=threads)
    after = {one: one.read_bytes() for one in tmp_path.rglob("*") if one.is_file()}
    before.pop(damaged)
    after.pop(damaged)
    assert before == after
    # The untouched result may be replaced by a good run.
    pq.write_table(readings(10), damaged)
    score_rows(data, curve, out=out)
    written = pq.read_table(out if single else out / damaged.name)
    assert written.num_rows == 10


def test_full_disk_leaves_nothing(curve, tmp_path, monkeypatch):
    folder = tmp_path / "new"
    folder.mkdir()
    for k in range(2):
        pq.write_table(readings(100, k), folder / f"{k}.parquet")

    def full(*_):
        raise OSError(28, "No space left on device")

    monkeypatch.setattr("fastsmooth.rows_out.ParquetRows.close", full)
    for data, out in ((folder, "scored"), (folder / "0.parquet", "scored.parquet")):
        with pytest.raises(WriteError) as refused:
            score_rows(data, curve, out=tmp_path / out)
        assert str(refused.value) == (
            f"--out must be written whole, but writing '{tmp_path / out}' failed: No space left "
            "on device; free some space, or name another folder."
        )
        assert os.listdir(tmp_path) == ["new"]


def test_killed_run_leaves_no_result(curve_file, tmp_path):
    folder = tmp_path / "new"
    folder.mkdir()
    for k in range(3):
        pq.write_table(readings(3000, k), folder / f"{k}.parquet", row_group_size=500)
    code = (
        "import sys, time\n"
        "from fastsmooth.score import score_rows\n"
        "def wait(stage, rows, of):\n"
        "    if rows > 4000:\n"
        "        print('working', flush=True)\n"
        "        time.sleep(60)\n"
        "score_rows(sys.argv[1], sys.argv[2], out=sys.argv[3], progress=wait, threads=1)\n"
    )
    arguments = [sys.executable, "-c", code, folder, curve_file, tmp_path / "scored"]
    with subprocess.Popen(arguments, stdout=subprocess.PIPE, text=True) as child:
        assert child.stdout.readline() == "working\n"
        child.send_signal(signal.SIGKILL)
    left = sorted(os.listdir(tmp_path))
    assert "scored" not in left
    # What stays is hidden from every reader of folders.
    assert all(name == "new" or name.startswith(".") for name in left)


def test_file_that_changes_meanwhile_is_refused(curve, tmp_path):
    source = tmp_path / "new.parquet"
    pq.write_table(readings(400), source, row_group_size=100)

    def touch(stage, rows, of):
        if rows == 100:
            later = time.time_ns() + 10**9
            os.utime(source, ns=(later, later))

    with pytest.raises(ReadError, match="DATA must stay as it is while it is read"):
        score_rows(source, curve, out=tmp_path / "scored.parquet", threads=1, progress=touch)
    assert os.listdir(tmp_path) == ["new.parquet"]


@pytest.fixture
def new_folder(tmp_path):
    folder = tmp_path / "new"
    folder.mkdir()
    for k in range(2):
        rows = readings(30, k).select(["wet_bulb_c", "power_kw", "small"])
        pq.write_table(rows, folder / f"{k}.parquet")
    return folder


def refusal(*arguments, **options):
    with pytest.raises(InputError) as refused:
        score_rows(*arguments, **options)
    return str(refused.value)


def test_data_are_never_written_over(new_folder, curve):
    one = new_folder / "0.parquet"
    before = one.read_bytes()
    assert refusal(one, curve, out=one) == (
        f"--out must leave the data alone, but '{one}' holds '{one}', which is read; name another "
        "place."
    )
    link = new_folder.parent / "link.parquet"
    link.symlink_to(one)
    assert "must leave the data alone" in refusal(one, curve, out=link)
    assert "must leave the data alone" in refusal(new_folder, curve, out=new_folder)
    assert "must leave the data alone" in refusal(new_folder, curve, out=new_folder.parent)
    assert refusal(new_folder, curve, out=new_folder / "scored") == (
        f"--out must lie outside DATA, but '{new_folder / 'scored'}' would be read as data next "
        "time; name another folder."
    )
    link.unlink()
    deep = new_folder.parent / "**" / "*.parquet"
    assert "lie outside DATA" in refusal(deep, curve, out=new_folder.parent / "scored")
    assert one.read_bytes() == before


def test_only_scored_rows_are_replaced(new_folder, curve, tmp_path):
    out = tmp_path / "scored"
    score_rows(new_folder, curve, out=out)
    score_rows(new_folder, curve, out=out, z_limit=1.0)
    kept = json.loads(pq.read_schema(out / "1.parquet").metadata[SCORED_KEY])
    assert kept["settings"]["z_limit"] == 1.0
    (out / "notes.txt").write_text("mine")
    assert refusal(new_folder, curve, out=out) == (
        "--out must be new, or hold scored rows and nothing else, but "
        f"'{out / 'notes.txt'}' does not say that it holds scored rows; name another place, or "
        "remove it yourself."
    )
    assert (out / "notes.txt").read_text() == "mine"
    other = tmp_path / "other.parquet"
    pq.write_table(readings(3), other)
    assert "hold scored rows and nothing else" in refusal(
        new_folder / "0.parquet", curve, out=other
    )
    table = tmp_path / "scored.csv"
    score_rows(new_folder / "0.parquet", curve, out=table)
    assert "hold scored rows and nothing else" in refusal(
        new_folder / "0.parquet", curve, out=table
    )
    empty = tmp_path / "empty"
    empty.mkdir()
    score_rows(new_folder, curve, out=empty)
    assert sorted(os.listdir(empty)) == ["0.parquet", "1.parquet"]
    assert sorted(os.listdir(tmp_path)) == [
        "empty", "new", "other.parquet", "scored", "scored.csv",
    ]  # fmt: skip


def test_place_must_fit_the_data(new_folder, curve, tmp_path):
    one = new_folder / "0.parquet"
    folder = tmp_path / "there"
    folder.mkdir()
    assert f"but '{folder}' is a folder; add a file name to it." in refusal(one, curve, out=folder)
    assert "--out must name a file that ends in .parquet, .arrow or .csv" in refusal(
        one, curve, out=tmp_path / "scored.txt"
    )
    score_rows(one, curve, out=tmp_path / "scored.parquet")
    assert "--out must name a folder, as DATA are several files" in refusal(
        new_folder, curve, out=tmp_path / "scored.parquet"
    )
    assert "--out must lie in a folder that exists" in refusal(
        new_folder, curve, out=tmp_path / "no" / "such"
    )
    assert "--out must name a place, but it is 5" in refusal(one, curve, out=5)


def test_new_names_must_be_free(new_folder, curve, tmp_path):
    score_rows(new_folder, curve, out=tmp_path / "once")
    assert refusal(tmp_path / "once", curve, out=tmp_path / "twice") == (
        f"DATA must have no column called 'expected', which is added, but "
        f"'{tmp_path / 'once' / '0.parquet'}' has one; give the new columns other names, as in "
        "--prefix new_."
    )
    score_rows(tmp_path / "once", curve, out=tmp_path / "twice", prefix="new_")
    names = pq.read_schema(tmp_path / "twice/0.parquet").names
    assert names == ["wet_bulb_c", "power_kw", "small", *NEW, *(f"new_{one}" for one in NEW)]
    # A column that is not kept is no obstacle.
    score_rows(tmp_path / "once", curve, out=tmp_path / "thrice", keep=["small"])
    assert pq.read_schema(tmp_path / "thrice/0.parquet").names == ["small", *NEW]


def test_arguments_are_checked(new_folder, curve, tmp_path):
    assert "--beyond must be above 0, but it is -1.0" in refusal(new_folder, curve, z_limit=-1)
    assert "--beyond must be a finite number" in refusal(new_folder, curve, z_limit=math.nan)
    assert "--only must be one of outside-limits" in refusal(new_folder, curve, only="outside")
    assert refusal(new_folder, curve, keep=["smal"]) == (
        "--keep must name columns of DATA, but 'smal' is none; use 'small'."
    )
    assert "--keep must hold names of columns" in refusal(new_folder, curve, keep="small")
    assert "--threads must be at least 1" in refusal(new_folder, curve, threads=0)
    assert "--x must name a column of DATA, but 'wetbulb' is none" in refusal(
        new_folder, curve, x="wetbulb"
    )
    assert "--curve must be a Curve, a Fleet, or the path of either" in refusal(new_folder, 3)
    assert "CURVE must name a file" in refusal(new_folder, tmp_path / "none.parquet")


def test_columns_may_have_other_names(plant_rows, curve):
    other = plant_rows.rename_columns(
        ["t" if name == "wet_bulb_c" else "p" if name == "power_kw" else name
         for name in plant_rows.column_names]
    )  # fmt: skip
    told = score_rows(other, curve, x="t", y="p")
    assert_rows(told.table, by_hand(plant_rows, curve))


def test_two_columns_of_one_name_are_refused(curve):
    rows = pa.table([[1.0], [2.0], [3.0], [4.0]], ["wet_bulb_c", "power_kw", "a", "a"])
    assert refusal(rows, curve) == (
        "DATA must name each column once, but 'the table' has several called 'a'; rename all but "
        "one, or leave them out with --keep."
    )
    assert score_rows(rows, curve, keep=["power_kw"]).table.column_names == ["power_kw", *NEW]
