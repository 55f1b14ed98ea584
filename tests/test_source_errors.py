"""Every refusal of data is one sentence."""

import gzip
import os
import random
import zlib

import numpy as np
import pyarrow as pa
import pyarrow.ipc as ipc
import pyarrow.parquet as pq
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth.errors import InputError, ReadError
from fastsmooth.near import advise, find_near
from fastsmooth.source import Columns, open_source
from tests.source_tools import gather

XY = Columns("wet_bulb_c", "power_kw")
SUFFIXES = ".parquet, .pq, .arrow, .feather, .ipc, .csv, .csv.gz"


def write(path, names=("wet_bulb_c", "power_kw"), rows=1000, **options):
    random_numbers = np.random.default_rng(1)
    table = pa.table({name: random_numbers.normal(size=rows) for name in names})
    pq.write_table(table, path, row_group_size=250, **options)
    return path


def refusal(data, columns=XY, error=InputError, **options):
    with pytest.raises(error) as caught, open_source(data, columns, **options) as source:
        gather(source)
    assert type(caught.value) is error
    assert str(caught.value).count("\n") == 0
    return str(caught.value)


def test_missing_file_names_near_ones(tmp_path):
    write(tmp_path / "plant_07.parquet")
    write(tmp_path / "readme.pq")
    assert refusal(tmp_path / "plant_7.parquet") == (
        "DATA must be an existing file, folder or glob, but "
        f"'{tmp_path}/plant_7.parquet' does not exist; use 'plant_07.parquet' in '{tmp_path}'."
    )
    assert refusal(tmp_path / "zzzz") == (
        f"DATA must be an existing file, folder or glob, but '{tmp_path}/zzzz' does not exist; "
        f"use one of 'plant_07.parquet', 'readme.pq' in '{tmp_path}'."
    )


def test_missing_folder_names_near_ones_of_the_last_that_exists(tmp_path):
    (tmp_path / "plants").mkdir()
    assert refusal(tmp_path / "plant" / "2026" / "a.parquet") == (
        "DATA must be an existing file, folder or glob, but "
        f"'{tmp_path}/plant/2026/a.parquet' does not exist; use 'plants' in '{tmp_path}'."
    )
    assert refusal(tmp_path / "plants" / "a.parquet").endswith(
        f"does not exist; there are no data files in '{tmp_path}/plants'."
    )


def test_what_is_no_data_is_not_suggested(tmp_path):
    for name in ("readings.py", "readings.png", "readings.md"):
        (tmp_path / name).touch()
    assert refusal(tmp_path / "readings.parquet").endswith(
        f"does not exist; there are no data files in '{tmp_path}'."
    )
    (tmp_path / "power.csv").touch()
    assert refusal(tmp_path / "readings.parquet").endswith(
        f"use one of 'power.csv' in '{tmp_path}'."
    )
    (tmp_path / "readings").mkdir()
    assert refusal(tmp_path / "readings.parquet").endswith(
        f"does not exist; use 'readings' in '{tmp_path}'."
    )


def test_missing_relative_file(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    write("a.parquet")
    assert refusal("b.parquet").endswith("'b.parquet' does not exist; use 'a.parquet' in '.'.")


def test_folder_without_data_files(tmp_path):
    (tmp_path / "notes.txt").write_text("x")
    write(tmp_path / "_draft.parquet")
    assert refusal(tmp_path) == (
        f"DATA must hold data files, but the folder '{tmp_path}' has none; "
        f"name a folder with files that end in {SUFFIXES}."
    )


def test_glob_without_match(tmp_path):
    assert refusal(tmp_path / "*.parquet") == (
        f"DATA must match data files, but '{tmp_path}/*.parquet' matches none; check the pattern."
    )


def test_no_file_at_all():
    assert refusal([]) == ("DATA must name at least one file, but the list is empty; name a file.")


def test_unknown_suffix(tmp_path):
    (tmp_path / "a.xlsx").write_text("x")
    for data in (tmp_path / "a.xlsx", tmp_path / "a.*"):
        assert refusal(data) == (
            f"DATA must end in one of {SUFFIXES}, but '{tmp_path}/a.xlsx' does not; "
            "rename the file if it is of one of these formats."
        )


def test_mixed_formats(tmp_path):
    write(tmp_path / "a.parquet")
    (tmp_path / "b.csv").write_text("wet_bulb_c,power_kw\n1,2\n")
    assert refusal(tmp_path) == (
        f"DATA must hold files of one format, but there are '{tmp_path}/a.parquet' (parquet) and "
        f"'{tmp_path}/b.csv' (csv); name one kind, as in '*.csv'."
    )


def test_file_named_twice(tmp_path):
    path = write(tmp_path / "a.parquet")
    (tmp_path / "b.parquet").symlink_to(path)
    assert refusal([path, tmp_path / "*.parquet"]) == (
        f"DATA must name each file once, but '{path}' is named twice; leave one of them out."
    )
    assert refusal(tmp_path) == (
        f"DATA must name each file once, but '{tmp_path}/b.parquet' and '{path}' are one file; "
        "leave one of them out."
    )


@pytest.mark.parametrize("suffix", ["parquet", "arrow", "csv"])
def test_no_permission(tmp_path, suffix):
    # The super-user may read anything, so the test steps down for a moment.
    path = tmp_path / f"a.{suffix}"
    path.write_text("wet_bulb_c,power_kw\n1,2\n")
    path.chmod(0)
    user = os.geteuid()
    for folder in [tmp_path, *tmp_path.parents][:3]:
        folder.chmod(0o755)
    refusal({"wet_bulb_c": [1.0], "power_kw": [1.0]}, Columns("a", "b"))  # loads every module
    if user == 0:
        os.seteuid(65_534)
    try:
        message = refusal(path)
    finally:
        os.seteuid(user)
    assert message == (
        f"DATA must be readable, but there is no permission for '{path}'; ask for it."
    )


def test_folder_without_permission(tmp_path):
    folder = tmp_path / "plants"
    folder.mkdir()
    folder.chmod(0)
    user = os.geteuid()
    for above in [tmp_path, *tmp_path.parents][:3]:
        above.chmod(0o755)
    if user == 0:
        os.seteuid(65_534)
    try:
        message = refusal(folder)
    finally:
        os.seteuid(user)
        folder.chmod(0o755)
    assert message == (
        f"DATA must be readable, but there is no permission for '{folder}'; ask for it."
    )


@pytest.mark.parametrize(
    ("name", "remedy"),
    [
        ("POWER_KW", "use 'power_kw'"),
        ("power", "use 'power_kw'"),
        ("powr_kw", "use 'power_kw'"),
        ("zzz", "use one of 'wet_bulb_c', 'power_kw'"),
    ],
)
def test_missing_column(tmp_path, name, remedy):
    path = write(tmp_path / "a.parquet")
    for data in (path, pq.read_table(path)):
        assert refusal(data, Columns("wet_bulb_c", name)) == (
            f"--y must name a column of DATA, but '{name}' is none; {remedy}."
        )


def test_missing_extra_column(tmp_path):
    path = write(tmp_path / "a.parquet")
    assert refusal(path, Columns(*("wet_bulb_c", "power_kw"), extra=("plant",))) == (
        "DATA must hold each named column, but 'plant' is none; "
        "use one of 'wet_bulb_c', 'power_kw'."
    )


def test_column_missing_from_one_file(tmp_path):
    write(tmp_path / "a.parquet", names=("wet_bulb_c", "power_kw", "plant"))
    write(tmp_path / "b.parquet")
    assert refusal(tmp_path, Columns("wet_bulb_c", "power_kw", weight="plant")) == (
        f"--weight must name a column of every file, but 'plant' is missing from "
        f"'{tmp_path}/b.parquet'; leave the file out or write the column to it."
    )
    assert refusal(tmp_path, Columns("wet_bulb_c", "power_kw", extra=("plant",))) == (
        f"DATA must hold each named column in every file, but 'plant' is missing from "
        f"'{tmp_path}/b.parquet'; leave the file out or write the column to it."
    )
    assert refusal(tmp_path, where="plant > 0") == (
        f"--where must name columns of every file, but 'plant' is missing from "
        f"'{tmp_path}/b.parquet'; leave the file out or write the column to it."
    )


def test_column_that_occurs_twice(tmp_path):
    path = tmp_path / "a.parquet"
    table = pa.table([[1.0], [2.0], [3.0]], names=["wet_bulb_c", "power_kw", "power_kw"])
    pq.write_table(table, path)
    assert refusal(path) == (
        f"--y must name a column of DATA, but '{path}' has 2 columns called 'power_kw'; "
        "rename all but one."
    )


def damaged(path, remedy_start="DATA must be readable whole, but "):
    message = refusal(path, error=ReadError)
    assert message.startswith(f"{remedy_start}'{path}' is damaged (")
    assert message.endswith("; copy or write the file again.")
    return message


@pytest.mark.parametrize("suffix", ["parquet", "arrow", "csv"])
def test_empty_file(tmp_path, suffix):
    path = tmp_path / f"a.{suffix}"
    path.write_bytes(b"")
    damaged(path)


def test_truncated_file(tmp_path):
    path = write(tmp_path / "a.parquet")
    whole = path.read_bytes()
    for length in (4, 100, len(whole) // 2, len(whole) - 1):
        path.write_bytes(whole[:length])
        damaged(path)


def test_bad_magic(tmp_path):
    path = write(tmp_path / "a.parquet")
    path.write_bytes(path.read_bytes()[:-4] + b"XXXX")
    assert "Parquet magic bytes not found in footer" in damaged(path)
    path.write_bytes(b"wet_bulb_c,power_kw\n1,2\n" * 10)
    damaged(path)


def test_bytes_missing_in_the_middle(tmp_path):
    path = write(tmp_path / "a.parquet", rows=20_000)
    whole = path.read_bytes()
    path.write_bytes(whole[:50_000] + whole[60_000:])
    damaged(path)


@pytest.mark.parametrize("seed", range(5))
def test_flipped_bit_in_a_page_with_a_checksum(tmp_path, seed):
    path = write(
        tmp_path / "a.parquet", write_page_checksum=True, use_dictionary=False, compression="none"
    )
    column = pq.read_metadata(path).row_group(1).column(1)
    # Far enough from the page header to lie in the values.
    place = column.data_page_offset + column.total_compressed_size - 8
    place -= random.Random(seed).randrange(200)
    whole = bytearray(path.read_bytes())
    whole[place] ^= 1 << (seed % 8)
    path.write_bytes(whole)
    assert "CRC" in damaged(path)


def test_damaged_arrow_files(tmp_path):
    table = pa.table({"wet_bulb_c": np.arange(1000.0), "power_kw": np.arange(1000.0)})
    path = tmp_path / "a.arrow"
    with ipc.new_file(path, table.schema) as writer:
        writer.write_table(table, max_chunksize=100)
    whole = path.read_bytes()
    for length in (3, 5, 100, len(whole) // 2, len(whole) - 1):
        path.write_bytes(whole[:length])
        damaged(path)
    path.write_bytes(b"FEA1" + bytes(100))
    assert refusal(path, error=ReadError) == (
        f"DATA must be Arrow IPC files of format version 4 or later, but '{path}' is of the first "
        "Feather version; write the file again as Arrow IPC or Parquet."
    )


def test_arrow_file_that_states_more_rows_than_it_holds(tmp_path):
    table = pa.table({"wet_bulb_c": np.full(101, 0.5), "power_kw": np.full(101, 0.5)})
    path = tmp_path / "a.arrow"
    with ipc.new_file(path, table.schema) as writer:
        writer.write_table(table)
    # Nothing but the lengths in the record batch's header reads as this integer.
    stated, wrong = ((101).to_bytes(8, "little"), (10_001).to_bytes(8, "little"))
    whole = path.read_bytes()
    assert whole.count(stated) == 3
    path.write_bytes(whole.replace(stated, wrong))
    assert "too small" in damaged(path)


def test_damaged_csv_files(tmp_path):
    path = tmp_path / "a.csv"
    path.write_text("wet_bulb_c,power_kw\n1,2\n1,2,3\n")
    assert "Expected 2 columns, got 3: 1,2,3" in damaged(path)
    path = tmp_path / "a.csv.gz"
    text = "".join(f"{n},{zlib.crc32(str(n).encode())}\n" for n in range(1000))
    path.write_bytes(gzip.compress(f"wet_bulb_c,power_kw\n{text}".encode())[:-20])
    damaged(path)


def test_arrays_that_are_no_columns():
    assert refusal({"wet_bulb_c": [1.0, 2.0], "power_kw": [1.0]}) == (
        "DATA must hold arrays of equal length, but 'wet_bulb_c' has 2 values and 'power_kw' has "
        "1; hand in one value of each for every row."
    )
    assert refusal({"wet_bulb_c": np.ones((2, 2)), "power_kw": [1.0]}) == (
        "DATA must hold one-dimensional arrays, but 'wet_bulb_c' has 2 dimensions; hand in one "
        "column at a time."
    )
    assert refusal({"wet_bulb_c": 1.0, "power_kw": [1.0]}) == (
        "DATA must hold one-dimensional arrays, but 'wet_bulb_c' has 0 dimensions; hand in one "
        "column at a time."
    )
    assert refusal({"wet_bulb_c": np.array([1j]), "power_kw": [1.0]}) == (
        "DATA must hold arrays of numbers, times or text, but 'wet_bulb_c' is of type complex128; "
        "convert it first."
    )
    assert refusal({}) == "DATA must hold at least one array, but it holds none; hand in x and y."
    assert refusal((np.ones(3),)) == (
        "DATA must hold one array for each named column, but it holds 1 arrays for 'wet_bulb_c', "
        "'power_kw'; hand in a dict of name to array."
    )


def test_other_objects():
    assert refusal(5) == (
        "DATA must be a path, arrays or a frame, but it is a int; hand in a path, a dict of "
        "arrays, or a frame with __arrow_c_stream__."
    )


def test_spark_frames_are_not_gathered():
    frame = type("DataFrame", (), {"__module__": "pyspark.sql.classic.dataframe"})()
    assert refusal(frame) == (
        "DATA must be read where it lies, but a Spark frame would be gathered in this process "
        "whole; write it to Parquet files and name their folder."
    )


def test_bad_condition_is_refused_when_opening(tmp_path):
    path = write(tmp_path / "a.parquet")
    assert refusal(path, where="plant = 1") == (
        "--where must be a condition on columns of DATA, but 'plant' is no column of DATA; use one "
        "of 'wet_bulb_c', 'power_kw'."
    )


def test_near_names():
    names = ["wet_bulb_c", "power_kw", "Power_KW", "plant", "logged_at"]
    assert find_near("POWER_KW", names)[:2] == ("power_kw", "Power_KW")
    assert find_near("wetbulb", names) == ("wet_bulb_c",)
    assert find_near("bulb", names) == ("wet_bulb_c",)
    assert find_near("xyz", names) == ()
    assert advise("xyz", []) == "there is none to choose from"
    many = [f"column_{n}" for n in range(12)]
    assert advise("xyz", many).endswith("'column_8', 'column_9' (and 2 more)")


@given(name=st.text(max_size=8), names=st.lists(st.text(max_size=8), max_size=8))
def test_near_names_are_names(name, names):
    near = find_near(name, names)
    assert set(near) <= set(names)
    assert len(near) == len(set(near)) <= 3
    if name in names:
        assert name in near or sum(n.casefold() == name.casefold() for n in set(names)) > 3


def test_a_frame_with_two_columns_of_one_name():
    import pandas

    frame = pandas.DataFrame([[1.0, 2.0, 3.0]], columns=["wet_bulb_c", "power_kw", "power_kw"])
    assert refusal(frame) == (
        "DATA must name each column once, but 2 columns are called 'power_kw'; rename all but one."
    )


@pytest.mark.parametrize("bad", [0, 500_000])
def test_a_query_that_fails_in_the_stream(bad):
    import duckdb

    relation = duckdb.connect().sql(
        f"SELECT range::DOUBLE AS wet_bulb_c, CASE WHEN range >= {bad} THEN error('no such sensor')"
        "::DOUBLE ELSE 1.0 END AS power_kw FROM range(600000)"
    )

    def read():
        with open_source(relation, XY) as source:
            gather(source)

    with pytest.raises(ReadError) as caught:
        read()
    told = str(caught.value)
    assert told.startswith("DATA must deliver every row, but the stream broke off (")
    assert told.endswith(
        "Invalid Input Error: no such sensor); check what it holds, or write it to a Parquet file "
        "and name that."
    )
