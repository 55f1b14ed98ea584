import builtins
import errno
import json
import os
import stat
import threading

import numpy as np
import pyarrow as pa
import pyarrow.csv
import pyarrow.parquet as pq
import pytest

from fastsmooth.curve import CURVE_KEY, Curve
from fastsmooth.errors import InputError, ReadError, WriteError
from fastsmooth.files_out import (
    PICTURE_SUFFIXES,
    TABLE_SUFFIXES,
    check_writable,
    load_curve,
    write_atomically,
    write_curve,
    write_table,
)
from tests.curves import CASES, build, gap, plain

FLOATS = (
    "x", "estimate", "slope", "std_error", "lower", "upper", "effective_rows", "residual_sd",
)  # fmt: skip


def put(content):
    return lambda stream: stream.write(content)


def fail_with(error):
    def writer(stream):
        stream.write(b"half")
        stream.flush()
        raise error

    return writer


def assert_same(left: Curve, right: Curve):
    for name in (*FLOATS, "status"):
        a, b = getattr(left, name), getattr(right, name)
        assert a.dtype == b.dtype
        np.testing.assert_array_equal(np.isnan(a), np.isnan(b))
        known = ~np.isnan(a)
        assert a[known].tobytes() == b[known].tobytes()
    assert left.to_dict() == right.to_dict()
    assert left.axis == right.axis
    for name in ("x_edges", "rows", "y_edges", "sampled"):
        np.testing.assert_array_equal(getattr(left.density, name), getattr(right.density, name))


# -- write_atomically


def test_new_file_is_written_whole(tmp_path):
    write_atomically(tmp_path / "a.bin", put(b"abc"))
    assert (tmp_path / "a.bin").read_bytes() == b"abc"
    assert os.listdir(tmp_path) == ["a.bin"]


def test_new_file_has_the_mode_that_open_would_give(tmp_path):
    (tmp_path / "usual").write_bytes(b"")
    write_atomically(tmp_path / "ours", put(b""))
    modes = [stat.S_IMODE((tmp_path / name).stat().st_mode) for name in ("usual", "ours")]
    assert modes[0] == modes[1]


@pytest.mark.parametrize("mode", [0o600, 0o644, 0o666, 0o755])
def test_replaced_file_keeps_its_mode(tmp_path, mode):
    path = tmp_path / "a.bin"
    path.write_bytes(b"old")
    path.chmod(mode)
    write_atomically(path, put(b"new"))
    assert path.read_bytes() == b"new"
    assert stat.S_IMODE(path.stat().st_mode) == mode


def test_link_keeps_pointing_where_it_did(tmp_path):
    (tmp_path / "there").mkdir()
    real, link = tmp_path / "there" / "real.bin", tmp_path / "link.bin"
    real.write_bytes(b"old")
    link.symlink_to(real)
    write_atomically(link, put(b"new"))
    assert link.is_symlink()
    assert real.read_bytes() == b"new"
    assert os.listdir(tmp_path / "there") == ["real.bin"]


@pytest.mark.parametrize("error", [KeyboardInterrupt(), ValueError("no"), SystemExit(3)])
@pytest.mark.parametrize("existed", [True, False])
def test_failure_leaves_everything_as_it_was(tmp_path, error, existed):
    path = tmp_path / "a.bin"
    if existed:
        path.write_bytes(b"old")
    with pytest.raises(type(error)):
        write_atomically(path, fail_with(error))
    assert os.listdir(tmp_path) == (["a.bin"] if existed else [])
    if existed:
        assert path.read_bytes() == b"old"


def test_full_disk_is_one_sentence(tmp_path):
    path = tmp_path / "a.bin"
    error = OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
    with pytest.raises(WriteError) as caught:
        write_atomically(path, fail_with(error), "--plot")
    assert str(caught.value) == (
        f"--plot must be written whole, but writing '{path}' failed: No space left on device; "
        "free some space, or name another folder."
    )
    assert os.listdir(tmp_path) == []


def test_file_takes_its_name_only_after_its_bytes_reached_the_disk(tmp_path, monkeypatch):
    steps = []
    for name in ("fsync", "replace"):
        original = getattr(os, name)

        def spy(*given, name=name, original=original):
            steps.append((name, (tmp_path / "a.bin").exists()))
            return original(*given)

        monkeypatch.setattr(os, name, spy)
    write_atomically(tmp_path / "a.bin", put(b"abc"))
    assert steps == [("fsync", False), ("replace", False), ("fsync", True)]


def test_failing_rename_leaves_the_former_file(tmp_path, monkeypatch):
    path = tmp_path / "a.bin"
    path.write_bytes(b"old")

    def replace(*given):
        raise OSError(errno.EIO, os.strerror(errno.EIO))

    monkeypatch.setattr(os, "replace", replace)
    with pytest.raises(WriteError, match="Input/output error"):
        write_atomically(path, put(b"new"))
    assert path.read_bytes() == b"old"
    assert os.listdir(tmp_path) == ["a.bin"]


@pytest.mark.parametrize(("code", "refused"), [(errno.EINVAL, False), (errno.EIO, True)])
def test_folder_that_cannot_be_synced(tmp_path, monkeypatch, code, refused):
    original = os.fsync

    def fsync(descriptor):
        if stat.S_ISDIR(os.fstat(descriptor).st_mode):
            raise OSError(code, os.strerror(code))
        original(descriptor)

    monkeypatch.setattr(os, "fsync", fsync)
    if refused:
        with pytest.raises(WriteError):
            write_atomically(tmp_path / "a.bin", put(b"abc"))
    else:
        write_atomically(tmp_path / "a.bin", put(b"abc"))
    # Either way the file is there, whole: only a power cut could still undo it.
    assert (tmp_path / "a.bin").read_bytes() == b"abc"


def test_reader_never_sees_a_half_written_file(tmp_path):
    path = tmp_path / "a.bin"
    contents = [bytes([65 + place]) * 50_000 for place in range(4)]
    write_atomically(path, put(contents[0]))
    seen, stop = set(), threading.Event()

    def watch():
        while not stop.is_set():
            seen.add(path.read_bytes())

    watcher = threading.Thread(target=watch)
    watcher.start()
    for round_ in range(40):
        content = contents[round_ % 4]

        def writer(stream, content=content):
            for start in range(0, len(content), 1000):
                stream.write(content[start : start + 1000])

        write_atomically(path, writer)
    stop.set()
    watcher.join()
    assert seen <= set(contents)


# -- check_writable


def refused(path, argument="--out", suffixes=TABLE_SUFFIXES):
    with pytest.raises(WriteError) as caught:
        check_writable(path, argument, suffixes)
    return str(caught.value)


def test_known_suffix_is_returned_in_lower_case(tmp_path):
    assert check_writable(tmp_path / "a.PARQUET", "--out", TABLE_SUFFIXES) == ".parquet"
    assert check_writable(tmp_path / "a.b.svg", "--plot", PICTURE_SUFFIXES) == ".svg"
    assert os.listdir(tmp_path) == []


def test_unknown_suffix():
    assert refused("curve.xls") == (
        "--out must name a file that ends in .parquet, .arrow, .csv or .json, but 'curve.xls' "
        "ends in '.xls'; choose one of these endings."
    )
    assert refused("curve", "--plot", PICTURE_SUFFIXES) == (
        "--plot must name a file that ends in .png, .svg or .pdf, but 'curve' has no such "
        "ending; choose one of these endings."
    )


def test_missing_folder_names_a_near_one(tmp_path):
    (tmp_path / "curves").mkdir()
    path = tmp_path / "curvs" / "a.csv"
    assert refused(path) == (
        f"--out must lie in a folder that exists, but '{tmp_path / 'curvs'}' does not exist; "
        f"use '{tmp_path / 'curves'}'."
    )
    path = tmp_path / "elsewhere" / "deep" / "a.csv"
    assert refused(path).endswith(f"'{path.parent}' does not exist; make it first.")


def test_file_in_place_of_a_folder(tmp_path):
    (tmp_path / "curves").write_bytes(b"")
    path = tmp_path / "curves" / "a.csv"
    assert refused(path) == (
        f"--out must lie in a folder that exists, but '{tmp_path / 'curves'}' is no folder; "
        "name another folder."
    )


def test_folder_in_place_of_a_file(tmp_path):
    (tmp_path / "a.csv").mkdir()
    path = tmp_path / "a.csv"
    assert refused(path) == (
        f"--out must name a file, but '{path}' is a folder; add a file name to it."
    )
    assert f"'{tmp_path}' is a folder" in refused(tmp_path)


def test_pipe_in_place_of_a_file(tmp_path):
    os.mkfifo(tmp_path / "a.csv")
    assert "is a device or a pipe" in refused(tmp_path / "a.csv")


def test_closed_folder_and_protected_file(tmp_path, monkeypatch):
    path = tmp_path / "a.csv"
    path.write_bytes(b"old")
    closed = {str(tmp_path)}
    original = os.access
    # The superuser passes permission bits, so the system's answer is set here.
    monkeypatch.setattr(os, "access", lambda p, m: str(p) not in closed and original(p, m))
    assert refused(path) == (
        f"--out must lie in a folder that may be written, but '{tmp_path}' may not; "
        "name another folder."
    )
    closed.add(str(path))
    assert refused(path) == (
        f"--out must name a file that may be replaced, but '{path}' is write-protected; "
        "name another file, or lift the protection."
    )
    with pytest.raises(WriteError):
        write_atomically(path, put(b"new"))
    assert path.read_bytes() == b"old"


def test_relative_path_in_the_working_folder(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    write_atomically("a.bin", put(b"abc"))
    assert os.listdir() == ["a.bin"]
    assert refused("nowhere/a.csv").startswith(
        "--out must lie in a folder that exists, but 'nowhere' does not exist"
    )


# -- curves


@pytest.mark.parametrize("suffix", [".parquet", ".arrow", ".json"])
@pytest.mark.parametrize("case", list(CASES))
def test_curve_comes_back_to_the_last_bit(tmp_path, case, suffix):
    curve = CASES[case]()
    path = tmp_path / f"curve{suffix}"
    write_curve(curve, path)
    assert_same(curve, load_curve(path))


@pytest.mark.parametrize("suffix", TABLE_SUFFIXES)
def test_same_curve_gives_the_same_bytes(tmp_path, suffix):
    for name in ("a", "b"):
        write_curve(plain(), tmp_path / f"{name}{suffix}")
    assert (tmp_path / f"a{suffix}").read_bytes() == (tmp_path / f"b{suffix}").read_bytes()


def test_save_goes_the_same_way(tmp_path):
    plain().save(tmp_path / "a.parquet")
    write_curve(plain(), tmp_path / "b.parquet")
    assert (tmp_path / "a.parquet").read_bytes() == (tmp_path / "b.parquet").read_bytes()


def test_parquet_pages_carry_checksums_and_the_schema_the_trace(tmp_path):
    write_curve(gap(), tmp_path / "a.parquet")
    with pq.ParquetFile(tmp_path / "a.parquet") as file:
        assert file.metadata.format_version == "2.6"
        assert {
            file.metadata.row_group(0).column(place).compression
            for place in range(file.metadata.num_columns)
        } == {"ZSTD"}
        assert CURVE_KEY in file.schema_arrow.metadata
        at = file.metadata.row_group(0).column(1).data_page_offset
    spoilt = bytearray((tmp_path / "a.parquet").read_bytes())
    spoilt[at + 200] ^= 1
    (tmp_path / "a.parquet").write_bytes(spoilt)
    with pytest.raises(ReadError, match=r"CURVE must be readable, but reading '.*' failed: "):
        load_curve(tmp_path / "a.parquet")


def test_json_is_plain_for_other_readers(tmp_path):
    curve = gap()
    write_curve(curve, tmp_path / "a.json")
    told = json.loads((tmp_path / "a.json").read_text())
    assert told["trace"]["settings"]["y"] == "power_kw"
    assert told["columns"]["status"] == curve.statuses
    for one, value in zip(told["columns"]["estimate"], curve.estimate, strict=True):
        assert (one is None) == np.isnan(value)
        assert one is None or one == value


def test_json_times_are_text_in_the_zone(tmp_path):
    write_curve(CASES["times"](), tmp_path / "a.json")
    told = json.loads((tmp_path / "a.json").read_text())
    assert told["columns"]["x"][0].startswith("2026-01-01 01:")
    assert told["columns"]["x"][0].endswith("+0100")


def test_durations_are_seconds_in_text(tmp_path):
    curve = CASES["durations"]()
    write_curve(curve, tmp_path / "a.csv")
    read = pa.csv.read_csv(tmp_path / "a.csv")
    np.testing.assert_array_equal(read["x"].to_numpy(), np.rint(curve.x))
    table = pa.table({"x": pa.array([1500, None], pa.duration("ms"))})
    write_table(table, tmp_path / "b.json")
    assert json.loads((tmp_path / "b.json").read_text()) == {"columns": {"x": [1.5, None]}}


def test_csv_holds_the_table_alone(tmp_path):
    curve = gap()
    write_curve(curve, tmp_path / "a.csv")
    read = pa.csv.read_csv(tmp_path / "a.csv")
    assert read.column_names == curve.table().column_names
    for name in FLOATS:
        values = read[name].to_numpy()
        np.testing.assert_array_equal(values, getattr(curve, name))
    with pytest.raises(InputError) as caught:
        load_curve(tmp_path / "a.csv")
    assert str(caught.value) == (
        f"CURVE must end in .parquet, .arrow or .json, but '{tmp_path / 'a.csv'}' holds the "
        "table alone; save the curve as .parquet too and name that file."
    )


def test_table_json_has_no_number_that_json_lacks(tmp_path):
    table = pa.table({"z": pa.array([1.5, float("inf"), float("nan"), None]), "n": [1, 2, 3, 4]})
    table = table.replace_schema_metadata({"fastsmooth.score": '{"rows": 4}', "other": "text"})
    write_table(table, tmp_path / "a.json", "--out")
    assert json.loads((tmp_path / "a.json").read_text()) == {
        "rows": 4, "columns": {"z": [1.5, None, None, None], "n": [1, 2, 3, 4]},
    }  # fmt: skip


def test_empty_table(tmp_path):
    table = pa.table({"z": pa.array([], pa.float64()), "t": pa.array([], pa.timestamp("s"))})
    for suffix in TABLE_SUFFIXES:
        write_table(table, tmp_path / f"a{suffix}")
    assert pq.read_table(tmp_path / "a.parquet").num_rows == 0
    assert json.loads((tmp_path / "a.json").read_text()) == {"columns": {"z": [], "t": []}}


# -- load_curve


def not_loaded(path, error=InputError):
    with pytest.raises(error) as caught:
        load_curve(path)
    return str(caught.value)


def test_missing_file_names_a_near_one(tmp_path):
    write_curve(plain(), tmp_path / "plant_7.parquet")
    path = tmp_path / "plant_07.parquet"
    assert not_loaded(path) == (
        f"CURVE must name a file, but '{path}' does not exist; "
        f"use '{tmp_path / 'plant_7.parquet'}'."
    )
    assert not_loaded(tmp_path / "gone" / "a.json").endswith("does not exist; check the path.")
    (tmp_path / "b.json").mkdir()
    assert "is a folder" in not_loaded(tmp_path / "b.json")


@pytest.mark.parametrize("suffix", [".parquet", ".arrow", ".json"])
def test_table_without_a_trace_is_no_curve(tmp_path, suffix):
    path = tmp_path / f"a{suffix}"
    write_table(pa.table({"x": [1.0]}), path)
    assert not_loaded(path) == (
        f"CURVE must be a curve that fastsmooth wrote, but '{path}' carries no trace; "
        "name a file that 'fastsmooth curve --out' made."
    )


@pytest.mark.parametrize("suffix", [".parquet", ".arrow", ".json"])
@pytest.mark.parametrize("content", [b"", b"PAR1", b"{", b"\xff\xfe\x00"])
def test_damaged_file(tmp_path, suffix, content):
    path = tmp_path / f"a{suffix}"
    path.write_bytes(content)
    assert not_loaded(path, ReadError).startswith(
        f"CURVE must be readable, but reading '{path}' failed: "
    )


@pytest.mark.parametrize("suffix", [".parquet", ".arrow", ".json"])
def test_every_cut_of_a_file_is_refused(tmp_path, suffix):
    write_curve(
        build(np.arange(40.0), np.arange(40.0), 8.0, points=[20.0]), tmp_path / f"a{suffix}"
    )
    whole = (tmp_path / f"a{suffix}").read_bytes().rstrip()
    path = tmp_path / f"cut{suffix}"
    for length in np.linspace(0, len(whole) - 1, 25).astype(int):
        path.write_bytes(whole[:length])
        assert "failed" in not_loaded(path, ReadError)


def test_column_or_rows_taken_out(tmp_path):
    table = plain().table()
    write_table(table.drop_columns(["slope"]), tmp_path / "a.parquet")
    assert "a.parquet' lacks " in not_loaded(tmp_path / "a.parquet")
    write_table(table.slice(0, 10), tmp_path / "b.arrow")
    assert "b.arrow' holds 10 of 256 points" in not_loaded(tmp_path / "b.arrow")


def test_json_with_a_spoilt_column(tmp_path):
    write_curve(plain(), tmp_path / "a.json")
    told = json.loads((tmp_path / "a.json").read_text())
    told["columns"]["slope"][3] = "steep"
    (tmp_path / "a.json").write_text(json.dumps(told))
    assert "failed" in not_loaded(tmp_path / "a.json", ReadError)


def test_unreadable_file(tmp_path, monkeypatch):
    write_curve(plain(), tmp_path / "a.json")
    original = builtins.open

    def closed(path, *rest, **named):
        if str(path).endswith("a.json"):
            raise PermissionError(errno.EACCES, os.strerror(errno.EACCES), path)
        return original(path, *rest, **named)

    monkeypatch.setattr(builtins, "open", closed)
    assert "failed: Permission denied; " in not_loaded(tmp_path / "a.json", ReadError)
