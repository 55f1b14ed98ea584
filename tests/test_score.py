"""Scoring: what is written and told, in every format, on every kind of axis."""

import json
import math
import os
from dataclasses import replace

import numpy as np
import polars as pl
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv as csv
import pyarrow.dataset as ds
import pyarrow.ipc as ipc
import pyarrow.parquet as pq
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth import scorepass
from fastsmooth.cli import main
from fastsmooth.errors import InputError, WriteError
from fastsmooth.lookup import ROW_STATUSES
from fastsmooth.rows_out import COUNTS_KEY, SCORED_KEY
from fastsmooth.score import DEFAULT_Z_LIMIT, score_rows
from tests.curves import CASES, START_US
from tests.scored_rows import (
    NEW,
    assert_rows,
    by_hand,
    readings,
    row_by_hand,
    sound,
    support_curve,
    tally_by_hand,
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


def test_file_keeps_rows_columns_and_types(plant_rows, curve, curve_file, tmp_path):
    source, out = tmp_path / "new.parquet", tmp_path / "scored.parquet"
    pq.write_table(plant_rows, source, row_group_size=150)
    told = score_rows(source, curve_file, out=out)
    table = pq.read_table(out)
    assert table.column_names == [*plant_rows.column_names, *NEW]
    assert table.select(plant_rows.column_names).equals(pq.read_table(source))
    assert table.schema.metadata[b"site"] == b"north"
    assert_rows(table, by_hand(plant_rows, curve))
    assert pq.ParquetFile(out).num_row_groups == pq.ParquetFile(source).num_row_groups
    assert told.trace["rows"]["written"] == 700
    assert sorted(os.listdir(tmp_path)) == ["new.parquet", "scored.parquet"]
    assert set(table["status"].to_pylist()) >= {"inside", "above", "thin", "no support",
                                                "no reading"}  # fmt: skip


def test_summary_is_as_by_hand(plant_rows, curve):
    told = score_rows(plant_rows, curve, z_limit=2.0)
    rows = by_hand(plant_rows, curve, 2.0)
    words = [row[3] for row in rows]
    judged = [row for row in rows if row[3] in ("inside", "above", "below")]
    (unit,) = told.units.to_pylist()
    assert unit["rows"] == 700
    assert unit["scored"] == len(judged)
    assert unit["above"] == words.count("above")
    assert unit["below"] == words.count("below")
    assert unit["outside"] == words.count("above") + words.count("below")
    assert unit["share_outside"] == unit["outside"] / len(judged)
    assert unit["mean_residual"] == pytest.approx(sum(row[1] for row in judged) / len(judged))
    assert unit["thin"] == words.count("thin")
    assert unit["no_support"] == words.count("no support")
    assert unit["no_reading"] == words.count("no reading")
    codes = [ROW_STATUSES.index(word) for word in words]
    (_, runs, longest), _ = tally_by_hand(2, codes, [0] * 700)
    assert (unit["runs"], unit["longest_run"]) == (runs, longest)
    assert told.trace["rows"]["by_status"] == {word: words.count(word) for word in ROW_STATUSES}
    assert_rows(told.table, rows)


@given(batch_rows=st.integers(1, 400), rows_per_group=st.integers(1, 400))
def test_chunk_boundaries_do_not_matter(batch_rows, rows_per_group):
    curve = sound(CASES["gap"]())
    rows = readings(300).select(["wet_bulb_c", "power_kw"])
    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(scorepass, "BATCH_ROWS", 10**6)
        whole = score_rows(rows, curve)
        patch.setattr(scorepass, "BATCH_ROWS", batch_rows)
        cut = score_rows(pa.Table.from_batches(rows.to_batches(rows_per_group)), curve)
    assert whole.table.equals(cut.table)
    first, second = whole.units.to_pylist()[0], cut.units.to_pylist()[0]
    for name in first:
        if name == "mean_residual":
            assert first[name] == pytest.approx(second[name])
        elif name != "mean_residual_std_error":
            assert first[name] == second[name]


@pytest.mark.parametrize("files", [1, 5])
def test_any_number_of_threads_gives_the_same_bits(curve, tmp_path, files):
    folder = tmp_path / "new"
    folder.mkdir()
    for k in range(files):
        pq.write_table(readings(900, k), folder / f"{k}.parquet", row_group_size=70)
    data = folder if files > 1 else folder / "0.parquet"
    told = []
    for threads in (1, 2, 7):
        out = tmp_path / (f"scored{threads}" + ("" if files > 1 else ".parquet"))
        scored = score_rows(data, curve, out=out, threads=threads, z_limit=1.5)
        written = sorted(out.rglob("*.parquet")) if files > 1 else [out]
        told.append((scored.units, [pq.read_table(one) for one in written]))
        assert len(written) == files
    for units, tables in told[1:]:
        assert units.equals(told[0][0])
        assert all(a.equals(b) for a, b in zip(tables, told[0][1], strict=True))


def test_partition_layout_is_kept(plant_rows, curve, tmp_path):
    folder = tmp_path / "new"
    for plant in (7, 12):
        for month in ("2026-01", "2026-02"):
            place = folder / f"plant_no={plant}" / f"month={month}"
            place.mkdir(parents=True)
            pq.write_table(plant_rows.slice(plant, 50), place / "part.parquet")
    out = tmp_path / "scored"
    told = score_rows(folder, curve, out=out)
    names = [sorted(str(one.relative_to(root)) for one in root.rglob("*") if one.is_file())
             for root in (folder, out)]  # fmt: skip
    assert names[0] == names[1]
    assert len(told.trace["files"]) == 4
    inside = pq.ParquetFile(out / "plant_no=7" / "month=2026-01" / "part.parquet").schema_arrow
    assert "plant_no" not in inside.names
    again = ds.dataset(out, partitioning="hive").to_table()
    assert again.num_rows == 200
    assert sorted(set(again["plant_no"].to_pylist())) == [7, 12]


def test_key_of_a_folder_above_becomes_a_column(plant_rows, curve, tmp_path):
    place = tmp_path / "plant_no=7"
    place.mkdir()
    pq.write_table(plant_rows.slice(0, 50), place / "part.parquet")
    score_rows(place / "part.parquet", curve, out=tmp_path / "one.parquet")
    assert pq.ParquetFile(tmp_path / "one.parquet").read()["plant_no"].to_pylist() == [7] * 50
    score_rows(place, curve, out=tmp_path / "scored")
    assert (
        pq.ParquetFile(tmp_path / "scored/part.parquet").read()["plant_no"].to_pylist() == [7] * 50
    )
    kept = score_rows(tmp_path / "plant_no=*", curve, out=tmp_path / "by_glob")
    assert "plant_no" not in pq.ParquetFile(
        tmp_path / "by_glob/plant_no=7/part.parquet").schema_arrow.names  # fmt: skip
    assert kept.trace["rows"]["read"] == 50
    assert score_rows(place, curve).table["plant_no"].to_pylist() == [7] * 50


def test_only_flagged_rows_are_written_and_all_are_counted(plant_rows, curve, tmp_path):
    source, out = tmp_path / "new.parquet", tmp_path / "flagged.parquet"
    pq.write_table(plant_rows, source, row_group_size=100)
    told = score_rows(source, curve, out=out, only="outside-limits", keep=["day", "wet_bulb_c"])
    rows = by_hand(plant_rows, curve)
    flagged = [k for k, row in enumerate(rows) if row[3] in ("above", "below")]
    table = pq.read_table(out)
    assert table.column_names == ["wet_bulb_c", "day", *NEW]
    assert table["day"].to_pylist() == plant_rows["day"].take(flagged).to_pylist()
    assert_rows(table, [rows[k] for k in flagged])
    assert told.trace["rows"]["read"] == 700
    assert told.trace["rows"]["written"] == len(flagged) > 5
    assert told.units["rows"].to_pylist() == [700]
    assert pq.ParquetFile(out).num_row_groups == 1


def test_where_leaves_rows_out_of_file_and_counts(plant_rows, curve, tmp_path):
    source, out = tmp_path / "new.parquet", tmp_path / "scored.parquet"
    pq.write_table(plant_rows, source, row_group_size=100)
    told = score_rows(source, curve, out=out, where="wet_bulb_c > 8")
    kept = [k for k, x in enumerate(plant_rows["wet_bulb_c"].to_pylist()) if x and x > 8]
    table = pq.read_table(out)
    assert table["price"].to_pylist() == plant_rows["price"].take(kept).to_pylist()
    assert table.schema.field("plant").type == plant_rows.schema.field("plant").type
    assert told.trace["rows"]["filtered"] == 700 - len(kept)
    assert told.units["rows"].to_pylist() == [len(kept)]
    # Row groups that cannot meet the condition are not read, and counted all the same.
    none = score_rows(source, curve, out=tmp_path / "none.parquet", where="small > 100")
    assert none.trace["rows"]["filtered"] == 700
    assert pq.read_table(tmp_path / "none.parquet").num_rows == 0


def test_filter_of_the_curve_is_recalled(plant_rows, curve):
    settings = {**curve.trace["settings"], "where": "power_kw <> -9999"}
    filtered = replace(curve, trace={**curve.trace, "settings": settings})
    told = score_rows(plant_rows, filtered)
    assert [one.code for one in told.cautions] == ["filter"]
    assert "power_kw <> -9999" in told.cautions[0].text
    assert not score_rows(plant_rows, filtered, where="power_kw <> -9999").cautions
    assert not score_rows(plant_rows, curve).cautions


def test_precision_of_rows_counts_where_the_curve_has_weights(plant_rows, curve):
    settings = {**curve.trace["settings"], "weight": "precision"}
    weighted = replace(curve, trace={**curve.trace, "settings": settings})
    weights = [(0.25, 4.0, 0.0, -1.0, None, math.inf, math.nan)[k % 7] for k in range(700)]
    told = score_rows(plant_rows.append_column("precision", pa.array(weights)), weighted)
    x, y = plant_rows["wet_bulb_c"].to_pylist(), plant_rows["power_kw"].to_pylist()
    rows = [
        row_by_hand(curve, *row[:2], DEFAULT_Z_LIMIT, row[2] if row[2] is not None else math.nan)
        for row in zip(x, y, weights, strict=True)
    ]
    assert_rows(told.table, rows)
    with pytest.raises(InputError, match=r"^--weight must name a column of DATA, but 'precision'"):
        score_rows(plant_rows, weighted)


def test_csv_in_csv_out(curve, tmp_path):
    table = readings(90).select(["logged_at", "wet_bulb_c", "power_kw", "small"])
    csv.write_csv(table, tmp_path / "new.csv")
    score_rows(tmp_path / "new.csv", curve, out=tmp_path / "scored.csv")
    back = csv.read_csv(
        tmp_path / "scored.csv",
        convert_options=csv.ConvertOptions(column_types={name: pa.float64() for name in NEW[:3]}),
    )
    assert back.column_names == [*table.column_names, *NEW]
    assert back["small"].to_pylist() == table["small"].to_pylist()
    rows = by_hand(table, curve)
    assert back["status"].to_pylist() == [row[3] for row in rows]
    assert [one is None for one in back["z"].to_pylist()] == [row[2] is None for row in rows]
    # The suffix of a single file decides.
    score_rows(tmp_path / "new.csv", curve, out=tmp_path / "scored.parquet")
    assert_rows(pq.read_table(tmp_path / "scored.parquet"), rows)


def test_compressed_csv_in_a_folder_stays_compressed(curve, tmp_path):
    folder = tmp_path / "new"
    folder.mkdir()
    table = readings(60).select(["wet_bulb_c", "power_kw"])
    with pa.CompressedOutputStream(str(folder / "a.csv.gz"), "gzip") as stream:
        csv.write_csv(table, stream)
    score_rows(folder, curve, out=tmp_path / "scored")
    written = tmp_path / "scored" / "a.csv.gz"
    assert written.read_bytes()[:2] == b"\x1f\x8b"
    assert csv.read_csv(written)["status"].to_pylist() == [r[3] for r in by_hand(table, curve)]


def test_arrow_in_arrow_out_with_growing_dictionaries(curve, tmp_path):
    table = readings(90)
    plants = [["a", "b"], ["b", "c", "a"], ["d"]]
    batches = []
    for k, names in enumerate(plants):
        part = table.slice(30 * k, 30)
        column = pa.array([names[j % len(names)] for j in range(30)]).dictionary_encode()
        part = part.set_column(3, "plant", column)
        batches += part.combine_chunks().to_batches()
    with ipc.new_stream(tmp_path / "new.arrow", batches[0].schema) as stream:
        for batch in batches:
            stream.write_batch(batch)
    told = score_rows(tmp_path / "new.arrow", curve, out=tmp_path / "scored.arrow")
    with ipc.open_file(tmp_path / "scored.arrow") as file:
        back = file.read_all()
    wanted = pa.Table.from_batches(batches)
    for name in wanted.column_names:
        assert back.schema.field(name).type == wanted.schema.field(name).type
        assert back[name].to_pylist() == wanted[name].to_pylist()
    assert_rows(back, by_hand(table, curve))
    assert json.loads(back.schema.metadata[SCORED_KEY])["settings"]["x"] == "wet_bulb_c"
    assert told.trace["rows"]["written"] == 90


def test_arrow_views_runs_and_extensions_survive_a_filter(curve, tmp_path):
    rows = readings(60).select(["wet_bulb_c", "power_kw", "small"])
    texts = pa.array([f"meter number {k}" for k in range(60)], pa.string_view())
    runs = pc.run_end_encode(pa.array([k // 10 for k in range(60)]))
    rows = rows.append_column("text", texts).append_column("run", runs)
    with ipc.new_file(tmp_path / "new.arrow", rows.schema) as file:
        file.write_table(rows)
    score_rows(tmp_path / "new.arrow", curve, out=tmp_path / "scored.arrow", where="small < 30")
    with ipc.open_file(tmp_path / "scored.arrow") as file:
        back = file.read_all()
    assert back.schema.field("text").type == pa.string_view()
    assert back["text"].to_pylist() == texts.to_pylist()[:30]
    assert back.schema.field("run").type == runs.type
    assert back["run"].to_pylist() == [k // 10 for k in range(30)]


def test_nested_columns_do_not_fit_csv(plant_rows, curve, tmp_path):
    pq.write_table(plant_rows, tmp_path / "new.parquet")
    with pytest.raises(WriteError) as refused:
        score_rows(tmp_path / "new.parquet", curve, out=tmp_path / "scored.csv")
    assert str(refused.value) == (
        "--out must be of a format that holds every column (.parquet, .arrow, .csv), but "
        f"'{tmp_path / 'scored.csv'}' cannot: 'phases' is nested; name a file of another format, "
        "or leave columns out with --keep."
    )
    assert os.listdir(tmp_path) == ["new.parquet"]
    kept = ["logged_at", "since", "plant", "price", "half"]
    score_rows(tmp_path / "new.parquet", curve, out=tmp_path / "scored.csv", keep=kept)
    back = csv.read_csv(tmp_path / "scored.csv")
    assert back["since"].to_pylist()[:3] == [0, 0.001, 0.002]


def test_frames_and_arrays_are_scored_in_memory(plant_rows, curve):
    rows = by_hand(plant_rows, curve)
    plain = plant_rows.select(["small", "wet_bulb_c", "power_kw"])
    frame = pl.from_arrow(plain)
    arrays = {name: plain[name] for name in plain.column_names}
    for data in (frame, frame.lazy(), arrays, plain.to_reader(max_chunksize=33)):
        table = score_rows(data, curve).table
        assert table.column_names == ["small", "wet_bulb_c", "power_kw", *NEW]
        assert table["small"].to_pylist() == plain["small"].to_pylist()
        assert_rows(table, rows)


def test_frame_can_be_written(plant_rows, curve, tmp_path):
    frame = pl.from_arrow(plant_rows.select(["wet_bulb_c", "power_kw"]))
    told = score_rows(frame, curve, out=tmp_path / "scored.parquet")
    assert told.table is None
    assert_rows(pq.read_table(tmp_path / "scored.parquet"), by_hand(plant_rows, curve))


def test_empty_files_give_empty_files(curve, tmp_path):
    folder = tmp_path / "new"
    folder.mkdir()
    rows = readings(20).select(["wet_bulb_c", "power_kw"])
    pq.write_table(rows.slice(0, 0), folder / "a.parquet")
    pq.write_table(rows, folder / "b.parquet")
    told = score_rows(folder, curve, out=tmp_path / "scored")
    assert pq.read_table(tmp_path / "scored/a.parquet").column_names == [*rows.column_names, *NEW]
    assert told.trace["rows"]["written"] == 20
    nothing = score_rows(rows.slice(0, 0), curve)
    assert nothing.units["mean_residual"].to_pylist() == [None]
    assert "outside    nothing could be scored" in nothing.lines()


def test_column_of_nulls_only_is_no_reading(curve):
    rows = pa.table({"wet_bulb_c": pa.array([9.0, 8.0]), "power_kw": pa.nulls(2)})
    told = score_rows(rows, curve)
    assert told.table["status"].to_pylist() == ["no reading"] * 2
    assert [one.code for one in told.cautions] == ["few"]


def test_log_scale_through_files(tmp_path):
    made = sound(CASES["log_scale"]())
    x = [0.0, -1.0, 0.5, 20.0, 300.0, 1e9, None]
    rows = pa.table({"flow_l_per_h": pa.array(x), "power_kw": pa.array([40.0] * 7)})
    by_loops = [row_by_hand(made, one, 40.0, DEFAULT_Z_LIMIT) for one in x]
    assert_rows(score_rows(rows, made).table, by_loops)
    assert [row[3] for row in by_loops][:2] == ["no support"] * 2


@pytest.mark.parametrize("unit", ["s", "ms", "us", "ns"])
def test_times_of_any_unit_meet_the_curve_at_the_same_place(unit):
    made = sound(CASES["times"]())
    seconds = np.array([0, 10, 20, 30]) * 86_400 + 4321
    per_second = {"s": 1, "ms": 10**3, "us": 10**6, "ns": 10**9}[unit]
    ticks = (START_US // 10**6 + seconds) * per_second
    # The zone of the data does not matter: instants are compared.
    stamps = pa.array(ticks).cast(pa.timestamp(unit, "Asia/Tokyo"))
    rows = pa.table({"logged_at": stamps, "power_kw": pa.array([80.0] * 4)})
    wanted = [row_by_hand(made, float(one), 80.0, DEFAULT_Z_LIMIT) for one in seconds]
    assert_rows(score_rows(rows, made).table, wanted)


def test_dates_and_durations_are_scored():
    made = sound(CASES["dates"]())
    days = [20_454 + 100, 20_454 + 400, 20_454 - 50, None]
    rows = pa.table({"day": pa.array(days, pa.int32()).cast(pa.date32()),
                     "power_kw": pa.array([80.0] * 4)})  # fmt: skip
    x = [None if one is None else (one - 20_454) * 86_400.0 for one in days]
    wanted = [row_by_hand(made, one, 80.0, DEFAULT_Z_LIMIT) for one in x]
    assert_rows(score_rows(rows, made).table, wanted)
    made = sound(CASES["durations"]())
    rows = pa.table({"since_milking": pa.array([600_500, 5_000_000]).cast(pa.duration("ms")),
                     "power_kw": pa.array([50.0, 40.0])})  # fmt: skip
    wanted = [row_by_hand(made, *row, DEFAULT_Z_LIMIT) for row in ((600.5, 50.0), (5000.0, 40.0))]
    assert_rows(score_rows(rows, made).table, wanted)


def test_other_kinds_of_x_are_refused(curve):
    made = sound(CASES["times"]())
    with pytest.raises(InputError) as refused:
        score_rows({"logged_at": np.array([1.0]), "power_kw": np.array([1.0])}, made)
    assert str(refused.value) == (
        "--x must hold timestamps, as in the data of the curve, but 'logged_at' in 'the arrays' "
        "holds numbers; cast the column."
    )
    stamps = np.array(["2026-01-02"], "datetime64[us]")
    with pytest.raises(InputError) as refused:
        score_rows({"logged_at": stamps, "power_kw": np.array([1.0])}, made)
    assert str(refused.value) == (
        "--x must hold times with a zone, as in the data of the curve, but 'logged_at' in "
        "'the arrays' holds times without a zone; write the zone to the column."
    )
    with pytest.raises(InputError, match=r"^--y must name a column of numbers, but 'power_kw'"):
        score_rows(pa.table({"wet_bulb_c": [1.0], "power_kw": ["a"]}), curve)


@pytest.fixture
def new_folder(tmp_path):
    folder = tmp_path / "new"
    folder.mkdir()
    for k in range(2):
        rows = readings(30, k).select(["wet_bulb_c", "power_kw", "small"])
        pq.write_table(rows, folder / f"{k}.parquet")
    return folder


def test_written_file_tells_how_it_was_made(new_folder, curve_file, tmp_path):
    out = tmp_path / "scored"
    told = score_rows(new_folder, curve_file, out=out, only="outside-limits")
    trace = json.loads(pq.read_schema(out / "0.parquet").metadata[SCORED_KEY])
    assert trace["curve"]["path"] == str(curve_file)
    assert trace["curve"]["size_bytes"] == os.path.getsize(curve_file)
    assert trace["file"]["path"] == str(new_folder / "0.parquet")
    assert trace["settings"]["only"] == "outside-limits"
    footer = pq.read_metadata(out / "0.parquet")
    counts = json.loads(footer.metadata[COUNTS_KEY])
    assert counts["written"] == footer.num_rows
    assert counts["read"] == sum(counts["by_status"].values()) == 30
    assert set(trace["versions"]) == {"fastsmooth", "numpy", "pyarrow"}
    json.dumps(told.to_dict())
    assert told.to_dict()["rows"]["read"] == 60


def test_units_of_readings_are_passed_on(curve):
    schema = pa.schema([
        pa.field("wet_bulb_c", pa.float64()),
        pa.field("power_kw", pa.float64(), metadata={"unit": "kW"}),
    ])  # fmt: skip
    table = score_rows(pa.table([[9.0], [60.0]], schema=schema), curve).table
    assert table.schema.field("residual").metadata == {b"unit": b"kW"}
    assert table.schema.field("z").metadata is None


def test_command_line(new_folder, curve_file, tmp_path, capsys):
    out = tmp_path / "scored"
    arguments = ["score", str(new_folder), "--curve", str(curve_file), "--out", str(out)]
    assert main(arguments) == 0
    told = capsys.readouterr()
    assert told.err == ""
    assert "power_kw against wet_bulb_c, held against one curve" in told.out
    assert "rows       60 read from 2 files; 60 written" in told.out
    assert "limits     3.291 residual sd" in told.out
    assert f"wrote      {out}" in told.out
    assert "not a protection limit" in told.out
    assert main([*arguments, "--json", "--keep", "small", "--beyond", "1.5"]) == 0
    plain = json.loads(capsys.readouterr().out)
    assert plain["settings"]["z_limit"] == 1.5
    assert plain["units"][0]["rows"] == 60
    assert pq.read_schema(out / "0.parquet").names == ["small", *NEW]
    assert main([*arguments[:-1], str(new_folder), "--quiet"]) == 2
    told = capsys.readouterr()
    assert told.out == ""
    assert told.err.startswith("fastsmooth: --out must leave the data alone")
    assert main(["score", str(new_folder), "--out", str(out)]) == 2
    assert "--curve must be given" in capsys.readouterr().err
