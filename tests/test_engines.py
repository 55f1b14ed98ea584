"""Every engine makes the table that this process makes, and so the same curve."""

import json
import math
import os
import signal
import sqlite3
import sys
from dataclasses import replace

import duckdb
import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import fastsmooth
from fastsmooth import Band, Block, InputError, ReadError, Reading, Smoothing
from fastsmooth.bintable import BinTable
from fastsmooth.cli import main
from fastsmooth.engines import dask as by_dask
from fastsmooth.engines import spark as by_spark
from fastsmooth.engines.parts import block_of, open_planned
from fastsmooth.engines.sql import read_result, statement
from fastsmooth.passes import count_pass
from fastsmooth.plan import Plan
from tests import cases

PLANTS = ("Avila", "Soria", "Lugo")
ROWS = 9_000
X, Y = "wet_bulb_c", "power_kw"
# What a table must equal, relative to the size of a sum's terms: sums of opposite signs cancel.
OF_TERMS = 1e-12


def make_readings(seed=7):
    """Readings of all plants with everything that can be wrong with a row."""
    rng = np.random.default_rng(seed)
    rows = cases.make_rows("uniform", ROWS, seed)
    x, y = rows.wet_bulb_c.copy(), rows.power_kw + 1000.0
    x[5], x[6], x[7] = math.nan, math.inf, -math.inf
    y[8], y[9], y[10] = math.nan, math.inf, -math.inf
    repeats, precisions = cases.repeats(ROWS, seed), cases.precisions(ROWS, seed)
    repeats[[20, 21]] = 0.0, math.nan
    precisions[[22, 23]] = 0.0, math.nan
    start = np.datetime64("2026-03-20T00:00:00", "us")
    logged_at = start + np.arange(ROWS) * np.timedelta64(397_000_000, "us")

    def some_missing(values):
        return pa.array(values, mask=rng.random(ROWS) < 0.003)

    return pa.table({
        X: some_missing(x), Y: some_missing(y), "sharpness": precisions, "times": repeats,
        "logged_at": some_missing(logged_at), "plant": rng.choice(PLANTS, ROWS),
    })  # fmt: skip


@pytest.fixture(scope="module")
def readings():
    return make_readings()


@pytest.fixture(scope="module")
def folder(readings, tmp_path_factory):
    """The readings as Parquet, a folder for each plant, several row groups in a file."""
    top = tmp_path_factory.mktemp("fleet")
    plants = np.array(readings["plant"])
    for plant in PLANTS:
        mine = readings.filter(pa.array(plants == plant)).drop_columns("plant")
        (top / f"plant={plant}").mkdir()
        pq.write_table(mine, top / f"plant={plant}" / "part.parquet", row_group_size=700)
    return str(top)


@pytest.fixture(scope="module")
def cluster():
    from distributed import Client, LocalCluster

    with (
        LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=":0"
        ) as made,
        Client(made) as client,
    ):
        yield client


@pytest.fixture(scope="module")
def session():
    from pyspark.sql import SparkSession

    former = os.environ.get("PYSPARK_PYTHON")
    # The workers need this environment's packages.
    os.environ["PYSPARK_PYTHON"] = sys.executable
    made = (
        SparkSession.builder.master("local[2]")
        .config("spark.ui.enabled", "false")
        .config("spark.ui.showConsoleProgress", "false")
        .config("spark.driver.host", "127.0.0.1")
        .config("spark.driver.bindAddress", "127.0.0.1")
        .config("spark.sql.shuffle.partitions", "2")
        # Days must begin where the plan says, not where the session happens to be.
        .config("spark.sql.session.timeZone", "America/New_York")
        .getOrCreate()
    )
    yield made
    made.stop()
    if former is None:
        del os.environ["PYSPARK_PYTHON"]
    else:
        os.environ["PYSPARK_PYTHON"] = former


@pytest.fixture(scope="module")
def spark_frame(session, folder):
    frame = session.read.parquet(folder).repartition(3, "plant").cache()
    frame.createOrReplaceTempView("readings")
    return frame


@pytest.fixture(scope="module")
def duck(readings):
    with duckdb.connect() as connection:
        connection.register("arrow_readings", readings)
        connection.execute("CREATE TABLE readings AS SELECT * FROM arrow_readings")
        yield connection


def fill_sqlite(table):
    connection = sqlite3.connect(":memory:")
    names = ", ".join(table.column_names)
    connection.execute(f"CREATE TABLE readings ({names})")
    columns = [
        [None if one is None else one.isoformat(" ") for one in column.to_pylist()]
        if pa.types.is_timestamp(column.type)
        else column.to_pylist()
        for column in table.columns
    ]
    marks = ", ".join("?" for _ in table.column_names)
    connection.executemany(f"INSERT INTO readings VALUES ({marks})", zip(*columns, strict=True))
    return connection


@pytest.fixture(scope="module")
def lite(readings):
    connection = fill_sqlite(readings)
    yield connection
    connection.close()


@pytest.fixture
def engines(request, folder):
    """Each engine as a function from plan to table; none is started before it is asked for."""
    ask = request.getfixturevalue
    return {
        "dask": lambda plan: by_dask.bin_table(folder, plan, ask("cluster"), rows_per_part=1500),
        "spark": lambda plan: by_spark.bin_table(ask("spark_frame"), plan),
        "duckdb": lambda plan: read_result(
            plan, ask("duck").sql(statement(plan, "readings", "duckdb"))
        ),
        "sqlite": lambda plan: read_result(
            plan, ask("lite").execute(statement(plan, "readings", "sqlite"))
        ),
        "spark sql": lambda plan: read_result(
            plan,
            (ask("spark_frame") and ask("session"))
            .sql(statement(plan, "readings", "spark"))
            .toArrow(),
        ),
    }


ENGINES = ("dask", "spark", "duckdb", "sqlite", "spark sql")
READINGS = {
    "runs of rows": (Reading(range=(-4.0, 27.0), folds=8), {}),
    "days, filtered": (
        Reading(range=(-4.0, 27.0), block="logged_at:day",
                where="power_kw > 1020.5 AND plant <> 'Lugo'"), {},
    ),
    "text, weights and counts": (
        Reading(range=(-4.0, 27.0), block="plant", folds=5),
        {"weight": "sharpness", "count": "times"},
    ),
    "hours, counts": (Reading(range=(-4.0, 27.0), block="logged_at:hour"), {"count": "times"}),
    "months, log scale": (
        Reading(range=(0.5, 27.0), block="logged_at:month", scale="log", folds=4), {},
    ),
}  # fmt: skip


def local_table(data, plan):
    with open_planned(data, plan) as source:
        return count_pass(source, plan, Reading(block=block_of(plan), threads=2))[0]


def size_of_terms(sums):
    """An upper bound of the sums of absolute terms, by Cauchy and Schwarz; |v| is at most 1/2."""
    size = np.zeros_like(sums)
    for first, squares in ((0, 6), (9, 14))[: sums.shape[1] // 8]:
        weight, spread = sums[:, first], np.sqrt(sums[:, first] * sums[:, squares])
        powers = (weight, weight / 2, weight / 4, spread, spread / 2, spread / 4)
        if first:
            size[:, 9:14] = np.stack(powers[:5], axis=1)
        else:
            size[:, :6] = np.stack(powers, axis=1)
        size[:, squares] = sums[:, squares]
    if sums.shape[1] == 16:
        size[:, 8] = sums[:, 8]
    return size


def assert_same_sums(mine, local, tolerance=OF_TERMS):
    allowed = tolerance * size_of_terms(local)
    allowed[:, 7] = 0.0
    assert (np.abs(mine - local) <= allowed).all()


def assert_same_table(table, local, by_fold, tolerance=OF_TERMS):
    assert table.tally == local.tally
    assert_same_sums(table.total(), local.total(), tolerance)
    if by_fold:
        assert sorted(table.sums) == sorted(local.sums)
        for fold, sums in local.sums.items():
            assert_same_sums(table.sums[fold], sums, tolerance)
        assert table.blocks == local.blocks


def with_nan_as_null(local):
    """SQLite stores a NaN as null."""
    table = BinTable(local.plan)
    table.merge(local)
    refused = local.tally.refused
    table.tally.refused = {}
    for reason, rows in refused.items():
        table.tally.refuse(reason.replace("NaN", "null"), rows)
    return table


@pytest.fixture(scope="module")
def here(folder):
    """Plan, table and curve that this process makes for each of the readings, made once."""
    made = {}

    def make(name):
        if name not in made:
            reading, roles = READINGS[name]
            plan = fastsmooth.plan_for(folder, X, Y, reading=reading, **roles)
            # A plan travels as plain data.
            plan = Plan.from_dict(json.loads(json.dumps(plan.to_dict())))
            table = local_table(folder, plan)
            made[name] = plan, table, small_curve(table)
        return made[name]

    return make


def small_curve(table):
    return fastsmooth.curve_from_table(
        table, smoothing=Smoothing(widths=12), band=Band(points=24), threads=1
    )


@pytest.mark.parametrize("name", READINGS)
@pytest.mark.parametrize("engine", ENGINES)
def test_every_engine_makes_the_local_table_and_curve(engine, name, engines, here):
    plan, local, theirs = here(name)
    table = engines[engine](plan)
    if engine == "sqlite":
        local = with_nan_as_null(local)
    assert local.tally.used > 3000
    # A logarithm differs in its last bit from one library to another.
    own_log = plan.scale == "log" and engine in ("duckdb", "sqlite", "spark sql")
    same_folds = engine == "dask" or plan.block is not None
    assert_same_table(table, local, same_folds, 1e-10 if own_log else OF_TERMS)
    assert table.extent == pytest.approx(local.extent, rel=1e-15)
    mine = small_curve(table)
    columns = ["estimate", "slope", "effective_rows"]
    if same_folds:
        # How smooth the residual variance is, is chosen by leaving out folds.
        columns += ["std_error", "lower", "upper"]
    assert mine.bandwidth == pytest.approx(theirs.bandwidth, rel=1e-10)
    for column in columns:
        np.testing.assert_allclose(getattr(mine, column), getattr(theirs, column), 1e-10, 1e-12)


# Times with a zone.


@pytest.fixture(scope="module")
def zoned(readings, tmp_path_factory):
    """One file whose instants carry a zone, over the night when the clocks change."""
    zone = pa.timestamp("us", "UTC")
    at = readings.schema.get_field_index("logged_at")
    table = readings.set_column(at, "logged_at", readings["logged_at"].cast(zone))
    path = str(tmp_path_factory.mktemp("zoned") / "a.parquet")
    pq.write_table(table, path, row_group_size=2000)
    return path


@pytest.mark.parametrize("block", ["logged_at:day@Europe/Madrid", "logged_at:hour@Asia/Kolkata"])
def test_days_begin_where_the_plan_says(block, zoned, cluster, session):
    plan = fastsmooth.plan_for(zoned, X, Y, reading=Reading(range=(-4, 27), block=block))
    local = local_table(zoned, plan)
    assert_same_table(by_dask.bin_table(zoned, plan, cluster), local, True)
    frame = session.read.parquet(zoned)
    frame.createOrReplaceTempView("zoned")
    assert_same_table(by_spark.bin_table(frame, plan), local, True)
    told = session.sql(statement(plan, "zoned", "spark")).toArrow()
    assert_same_table(read_result(plan, told), local, True)
    with duckdb.connect() as connection:
        connection.execute("SET TimeZone = 'America/New_York'")
        told = connection.sql(statement(plan, f"'{zoned}'", "duckdb"))
        assert_same_table(read_result(plan, told), local, True)


def test_a_plan_names_the_zone_of_its_days(zoned, folder):
    """Engines hand instants over in zones of their own."""
    reading = Reading(block="logged_at:day")
    assert fastsmooth.plan_for(zoned, X, Y, reading=reading).block == "logged_at:day@UTC"
    assert fastsmooth.plan_for(folder, X, Y, reading=reading).block == "logged_at:day"


def test_x_may_be_a_time(readings, folder, cluster, session, spark_frame, duck):
    reading = Reading(block="plant", folds=3, where="logged_at IS NOT NULL")
    plan = fastsmooth.plan_for(folder, "logged_at", Y, reading=reading)
    local = local_table(folder, plan)
    assert local.tally.used > 8000
    assert_same_table(by_dask.bin_table(folder, plan, cluster), local, True)
    assert_same_table(by_spark.bin_table(spark_frame, plan), local, True)
    told = session.sql(statement(plan, "readings", "spark")).toArrow()
    assert_same_table(read_result(plan, told), local, True)
    told = duck.sql(statement(plan, "readings", "duckdb"))
    assert_same_table(read_result(plan, told), local, True)
    with pytest.raises(InputError) as caught:
        statement(plan, "readings", "sqlite")
    assert str(caught.value) == (
        "--x must be a number where sqlite counts, but 'logged_at' holds timestamps of us; make a "
        "view with seconds as a number, and the plan of that."
    )


def test_weekdays_are_counted_alike(folder, session, spark_frame, duck):
    where = "EXTRACT(DOW FROM logged_at) < 3 OR EXTRACT(ISODOW FROM logged_at) = 7"
    plan = fastsmooth.plan_for(folder, X, Y, reading=Reading(block="plant", where=where, folds=3))
    local = local_table(folder, plan)
    assert 1000 < local.tally.filtered < 8000
    told = session.sql(statement(plan, "readings", "spark")).toArrow()
    assert_same_table(read_result(plan, told), local, True)
    assert_same_table(read_result(plan, duck.sql(statement(plan, "readings", "duckdb"))), local,
                      True)  # fmt: skip


# Dask.


def test_a_killed_worker_loses_nothing(folder):
    from distributed import Client, LocalCluster

    plan = fastsmooth.plan_for(folder, X, Y, reading=Reading(folds=8))
    reports, killed = [], []
    with (
        LocalCluster(
            n_workers=2, threads_per_worker=1, processes=True, dashboard_address=":0"
        ) as made,
        Client(made) as client,
    ):
        whole = by_dask.bin_table(folder, plan, client, rows_per_part=300)

        def kill_one(stage, done, of):
            reports.append(done)
            if len(reports) == 2:
                worker = max(made.workers.values(), key=lambda one: one.pid)
                killed.append(worker.pid)
                os.kill(worker.pid, signal.SIGKILL)

        again = by_dask.bin_table(folder, plan, client, progress=kill_one, rows_per_part=300)
    assert killed
    assert len(reports) > 3
    assert again.tally == whole.tally
    assert again.extent.tolist() == whole.extent.tolist()
    for fold, sums in whole.sums.items():
        np.testing.assert_array_equal(again.sums[fold], sums)


def test_the_command_line_counts_on_a_cluster(folder, cluster, tmp_path, capsys):
    address = cluster.scheduler.address
    shared = ["curve", folder, "--x", X, "--y", Y, "--block", "logged_at:day", "--quiet"]
    for name, more in (("here", []), ("there", ["--cluster", address])):
        assert main([*shared, *more, "--out", str(tmp_path / f"{name}.parquet")]) == 0
    here, there = (
        fastsmooth.load_curve(tmp_path / f"{name}.parquet") for name in ("here", "there")
    )
    np.testing.assert_allclose(there.estimate, here.estimate, 1e-7)
    np.testing.assert_allclose(there.upper, here.upper, 1e-7)
    assert there.trace["rows"] == here.trace["rows"]
    assert there.density.sampled.sum() == here.density.sampled.sum()
    assert main([*shared, "--cluster", "tcp://127.0.0.1:9"]) == 2
    assert capsys.readouterr().err.startswith(
        "fastsmooth: --cluster must be the address of a running Dask scheduler, but "
        "'tcp://127.0.0.1:9' gave "
    )


def test_progress_reaches_all_rows(folder, cluster):
    plan = fastsmooth.plan_for(folder, X, Y)
    told = []
    by_dask.bin_table(folder, plan, cluster, progress=lambda *one: told.append(one),
                      rows_per_part=1000)  # fmt: skip
    assert [stage for stage, _, _ in told] == ["reading"] * len(told)
    done = [rows for _, rows, _ in told]
    assert done == sorted(done)
    assert done[-1] == ROWS
    assert {of for _, _, of in told} == {ROWS}


@pytest.mark.parametrize("folds", [2, 8, 32])
@pytest.mark.parametrize("rows_per_part", [1, 2000, 10**9])
def test_parts_hold_every_task_once(folder, folds, rows_per_part):
    plan = fastsmooth.plan_for(folder, X, Y, reading=Reading(folds=folds))
    with open_planned(folder, plan) as source:
        parts = by_dask.cut(source, plan, rows_per_part)
        seen = []
        for part in parts:
            with open_planned([file.path for file in part.files], plan) as some:
                for number, index in part.tasks:
                    assert some.tasks[number].label == source.tasks[index].label
                    seen.append(index)
        assert sorted(seen) == list(range(len(source.tasks)))
        assert sum(part.rows for part in parts) == ROWS


def test_data_in_memory_are_refused(cluster, readings):
    plan = fastsmooth.plan_for(readings, X, Y)
    with pytest.raises(InputError) as caught:
        by_dask.bin_table(readings, plan, cluster)
    assert str(caught.value) == (
        "DATA must be files where a cluster counts, but they are in this process' memory; write "
        "them to Parquet where the workers can read them."
    )


def test_a_refusal_of_a_worker_arrives(tmp_path, cluster, session):
    table = pa.table({X: pa.array([1, 2, 2**53 + 1]), Y: [1.0, 2.0, 3.0]})
    path = str(tmp_path / "a.parquet")
    pq.write_table(table, path)
    plan = replace(Plan.simple(0.0, 30.0, bins=64, folds=2), columns=fastsmooth.plan_for(
        {X: np.arange(9.0), Y: np.arange(9.0)}, X, Y).columns)  # fmt: skip
    told = (
        "--x must hold integers of at most 2^53 (9,007,199,254,740,992), which a float64 keeps "
        "exactly, but 'wet_bulb_c' has 9,007,199,254,740,993; subtract an offset from the column, "
        "or divide it, first."
    )
    with pytest.raises(InputError) as caught:
        by_dask.bin_table(path, plan, cluster)
    assert str(caught.value) == told
    with pytest.raises(InputError) as caught:
        by_spark.bin_table(session.read.parquet(path), plan)
    assert str(caught.value) == told


def test_a_worker_that_sees_another_file_says_so(folder, tmp_path, cluster):
    plan = fastsmooth.plan_for(folder, X, Y)
    with open_planned(folder, plan) as source:
        part = by_dask.cut(source, plan, 10**9)[0]
        other = replace(part.files[0], modified_ns=1)
        with pytest.raises(ReadError) as caught:
            by_dask.count_part(replace(part, files=(other, *part.files[1:])), plan, source.fixed, 0)
    assert str(caught.value) == (
        f"DATA must be the same files on every worker, but a worker sees '{other.path}' with "
        "another size, time or number of rows; let all workers mount one folder."
    )


# Spark.


def test_an_empty_frame_gives_an_empty_table(spark_frame, folder):
    plan = fastsmooth.plan_for(folder, X, Y)
    table = by_spark.bin_table(spark_frame.filter("plant = 'none'"), plan)
    assert table.tally.read == 0
    assert not table.total()[:, :7].any()


@pytest.mark.parametrize(
    ("changed", "told"),
    [
        (
            {X: "wetbulb"},
            "--x must name a column of DATA, but 'wet_bulb_c' is none; use 'wetbulb'.",
        ),
        ({Y: "plant"}, None),
    ],
)
def test_a_frame_that_does_not_suit_the_plan(changed, told, spark_frame, folder):
    plan = fastsmooth.plan_for(folder, X, Y)
    frame = spark_frame
    if told is None:
        frame = frame.drop(Y).withColumnRenamed("plant", Y)
        told = (
            "--y must name a column of numbers, but 'power_kw' in the Spark frame is text; cast "
            "the column to a number."
        )
    else:
        frame = frame.withColumnsRenamed(changed)
    with pytest.raises(InputError) as caught:
        by_spark.bin_table(frame, plan)
    assert str(caught.value) == told


# SQL.

ODD = [0.0, -0.0, 1.0, 0.5, -1.0, 5e-324, 1e308, -1e308, math.nan, math.inf, -math.inf, None]
SOME = st.one_of(st.sampled_from(ODD), st.floats(-2.0, 3.0, width=32), st.floats())
LEVELS = st.floats(-1e6, 1e6)


# Each example writes and runs a statement of its own.
@settings(max_examples=25)
@given(
    rows=st.lists(st.tuples(SOME, SOME, SOME, SOME, st.integers(-3, 3)), max_size=30),
    pilot=st.lists(LEVELS, min_size=1, max_size=4),
    low=st.floats(-2.0, 0.0), span=st.floats(0.01, 3.0),
    where=st.sampled_from([None, "power_kw > 0.5", "NOT (wet_bulb_c >= power_kw)",
                           "power_kw BETWEEN -1 AND 1 OR wet_bulb_c <> power_kw",
                           "0.25 < ABS(wet_bulb_c) / 2", "power_kw IN (1, 0.5)"]),
    weighted=st.booleans(), counted=st.booleans(), log=st.booleans(),
)  # fmt: skip
def test_generated_rows_in_databases(rows, pilot, low, span, where, weighted, counted, log):
    names = (X, Y, "sharpness", "times", "batch")
    # A column without a value is refused before anything is counted.
    rows = [*rows, (0.5, 0.5, 1.0, 1.0, 0)]
    types = [pa.float64()] * 4 + [pa.int64()]
    table = pa.table([pa.array([row[n] for row in rows], types[n]) for n in range(5)], list(names))
    columns = fastsmooth.plan_for(
        {name: np.arange(9.0) for name in names}, X, Y, weight="sharpness" if weighted else None,
        count="times" if counted else None, reading=Reading(block="batch"),
    ).columns  # fmt: skip
    plan = replace(
        Plan.simple(low, low + span, bins=16, folds=4), columns=columns, block="batch",
        pilot=tuple(pilot), where=where, scale="log" if log else "linear",
    )  # fmt: skip
    local = local_table(table, plan)
    tolerance = 1e-6 if log else OF_TERMS
    with duckdb.connect() as connection:
        connection.register("readings", table)
        told = connection.sql(statement(plan, "readings", "duckdb"))
        found = read_result(plan, told)
    if not np.isfinite(local.total()).all():
        return
    assert_same_table(found, local, True, tolerance)


def test_sqlite_tells_text_from_numbers(folder):
    plan = replace(fastsmooth.plan_for(folder, X, Y, reading=Reading(range=(0, 9))), block=None)
    connection = sqlite3.connect(":memory:")
    connection.execute(f"CREATE TABLE readings ({X}, {Y})")
    rows = [(1, 2.0), ("3.5", 1.0), (2.0, "warm"), (None, 1), (4.0, b"5")]
    connection.executemany("INSERT INTO readings VALUES (?, ?)", rows)
    table = read_result(plan, connection.execute(statement(plan, "readings", "sqlite")))
    connection.close()
    assert table.tally.refused == {"x no number": 1, "y no number": 2, "x null": 1}
    assert table.tally.used == 1


def test_a_fold_of_ones_own(folder, duck):
    plan = fastsmooth.plan_for(folder, X, Y, reading=Reading(folds=4))
    text = statement(plan, "readings", "duckdb", fold="length(plant) % 4")
    table = read_result(plan, duck.sql(text))
    assert sorted(table.sums) == [0, 1]
    assert_same_sums(table.total(), local_table(folder, plan).total())
    with pytest.raises(InputError) as caught:
        read_result(plan, duck.sql(statement(plan, "readings", "duckdb", fold="length(plant)")))
    assert str(caught.value) == (
        "the result must be what the statement of this plan gives, but a fold lies outside 0 to 3; "
        "hand over all columns and rows that the statement gives."
    )


def test_names_that_need_quotes(tmp_path):
    table = pa.table({"wet bulb": np.arange(50.0), 'power "kw"': np.arange(50.0), "order":
                      np.arange(50) % 5})  # fmt: skip
    reading = Reading(block="order", where='"wet bulb" < 40', folds=3)
    plan = fastsmooth.plan_for(table, "wet bulb", 'power "kw"', reading=reading)
    local = local_table(table, plan)
    with duckdb.connect() as connection:
        connection.register("select", table)
        told = connection.sql(statement(plan, '"select"', "duckdb"))
        assert_same_table(read_result(plan, told), local, True)
    connection = sqlite3.connect(":memory:")
    connection.execute('CREATE TABLE "select" ("wet bulb", "power ""kw""", "order")')
    connection.executemany('INSERT INTO "select" VALUES (?, ?, ?)', [
        tuple(row.values()) for row in table.to_pylist()])  # fmt: skip
    told = connection.execute(statement(plan, '"select"', "sqlite")).fetchall()
    connection.close()
    assert_same_table(read_result(plan, told), local, True)


@pytest.mark.parametrize("dialect", ["postgres", "snowflake", "bigquery", "trino", "clickhouse"])
def test_other_dialects_are_written(dialect, folder):
    plan = fastsmooth.plan_for(folder, X, Y, reading=Reading(block="logged_at:day"))
    text = statement(plan, "plant_readings", dialect)
    assert text.count("GROUP BY") == 1
    assert "plant_readings" in text
    assert "open_" not in text


@pytest.mark.parametrize(
    ("dialect", "reading", "options", "told"),
    [
        ("ducdb", {}, {}, "dialect= must be a dialect that sqlglot writes, but 'ducdb' is none; "
         "use 'duckdb' or 'druid'."),
        ("postgres", {}, {}, "fold= must say what makes a fold, because postgres does not number "
         "rows, but it is missing; make the plan with a block, or give an expression such as "
         "batch_number % 32."),
        ("duckdb", {"block": "plant"}, {"fold": "1"}, "fold= must be left out where the plan has "
         "a block, but the plan deals plant to folds; leave it out."),
        ("sqlite", {"where": "plant LIKE 'A%'"}, {}, "--where must mean the same in the database, "
         "but LIKE does not mind the case in sqlite; compare with = or IN."),
        ("sqlite", {"where": "EXTRACT(HOUR FROM logged_at) < 3"}, {}, "--where must mean the same "
         "in the database, but sqlite has no parts of times; make a column of them."),
        ("mysql", {"where": "EXTRACT(DOW FROM logged_at) < 3", "block": "plant"}, {}, "--where "
         "must mean the same in the database, but weekdays are counted otherwise in mysql; make a "
         "column of them."),
    ],
)  # fmt: skip
def test_refused_statements(dialect, reading, options, told, folder):
    plan = fastsmooth.plan_for(folder, X, Y, reading=Reading(**reading))
    with pytest.raises(InputError) as caught:
        statement(plan, "readings", dialect, **options)
    assert str(caught.value) == told


def test_a_zone_is_refused_where_there_are_none(zoned):
    plan = fastsmooth.plan_for(zoned, X, Y, reading=Reading(block="logged_at:day"))
    with pytest.raises(InputError, match="names a zone; make a column of local"):
        statement(plan, "readings", "sqlite")


ROW = (0, 0, 5, 1, 1.0, 1.0, 1.0, 0.0, 0.0, 1.0, 0.0, 0.0, 1.0)


@pytest.mark.parametrize(
    ("result", "told"),
    [
        ([ROW[:-1]], "a row does not hold 13 values"),
        (7, "int cannot be read"),
        (pa.table({"reason": [0]}), "column 'fold' is missing"),
        ([(99, *ROW[1:])], "it names an unknown reason, or fewer than no rows"),
        ([(0, 0, 10**6, *ROW[3:])], "a bin lies outside 0 to 8191"),
        ([(0, None, *ROW[2:])], "'fold' is null in 1 rows"),
        ([(*ROW[:-1], "much")], "'we2' holds string (Failed to parse string: 'much' as a scalar of "
         "type double)"),
    ],
)  # fmt: skip
def test_results_that_are_none(result, told):
    with pytest.raises(InputError) as caught:
        read_result(Plan.simple(0.0, 30.0), result)
    assert str(caught.value) == (
        f"the result must be what the statement of this plan gives, but {told}; hand over all "
        "columns and rows that the statement gives."
    )


# Plans, and curves of tables.


def test_a_function_does_not_travel(folder):
    block = Block("plant", key=lambda column: column)
    with pytest.raises(InputError) as caught:
        fastsmooth.plan_for(folder, X, Y, reading=Reading(block=block))
    assert str(caught.value) == (
        "--block must be a column, or a time column with a unit, where other processes count, but "
        "it is made by a function (plant by <lambda>); write the keys to a column of their own."
    )


def test_a_sample_with_the_number_of_rows_plans_long_runs(readings):
    some = readings.slice(0, 500)
    reading = Reading(range=(-5.0, 28.0))
    assert fastsmooth.plan_for(some, X, Y, reading=reading).rows_per_run == 500 // 128
    plan = fastsmooth.plan_for(some, X, Y, reading=reading, rows=10**12)
    assert plan.rows_per_run == 65_536
    assert (plan.origin, plan.high) == (-5.0, pytest.approx(28.0))


def test_a_plan_may_have_more_bins(readings):
    assert fastsmooth.plan_for(readings, X, Y, bins=16_384).bins == 16_384
    with pytest.raises(
        InputError, match=r"^bins= must be between 512 and [0-9,]+, but it is 4; leave"
    ):
        fastsmooth.plan_for(readings, X, Y, bins=4)


def test_a_curve_from_sums_alone_says_so(folder):
    plan = fastsmooth.plan_for(folder, X, Y, reading=Reading(block="plant", folds=3))
    table = local_table(folder, plan)
    alone = fastsmooth.curve_from_table(table)
    assert alone.cautions[0].code == "no rows at hand"
    assert alone.trace["rows_at_hand"] == 0
    assert alone.trace["serial"] is None
    assert alone.trace["files"] == []
    assert alone.density.sampled.sum() == 0
    seen = fastsmooth.curve_from_table(table, folder)
    assert "no rows at hand" not in [one.code for one in seen.cautions]
    assert seen.trace["rows_at_hand"] > 1000
    assert len(seen.trace["files"]) == 3
    assert seen.density.sampled.sum() > 1000
    np.testing.assert_array_equal(seen.estimate, alone.estimate)
    whole = fastsmooth.make_curve(
        folder, X, Y, reading=Reading(block="plant", folds=3), smoothing=Smoothing(engine="binned")
    )
    np.testing.assert_array_equal(whole.estimate, alone.estimate)
    np.testing.assert_array_equal(whole.lower, alone.lower)


def test_rows_outside_the_plan_are_told(folder):
    plan = fastsmooth.plan_for(folder, X, Y, reading=Reading(range=(5, 10), folds=4))
    made = fastsmooth.curve_from_table(local_table(folder, plan))
    told = {one.code: one.text for one in made.cautions}
    assert "outside the plan's range 5 to 10 and were left out" in told["rows outside the plan"]


@pytest.mark.parametrize(
    "asked",
    [
        {"smoothing": Smoothing(estimator="nearest")},
        {"smoothing": Smoothing(engine="exact")},
        {"smoothing": Smoothing(robust=True)},
        {"band": fastsmooth.Band(limits=(0.05, 0.95))},
    ],
)
def test_what_needs_rows_is_refused(folder, asked):
    table = local_table(folder, fastsmooth.plan_for(folder, X, Y))
    with pytest.raises(InputError, match=r"must come with data files, but a table keeps no rows"):
        fastsmooth.curve_from_table(table, **asked)


def test_an_empty_table_is_refused(folder):
    with pytest.raises(InputError, match=r"^DATA must hold rows with"):
        fastsmooth.curve_from_table(BinTable(fastsmooth.plan_for(folder, X, Y)))


def test_a_result_of_another_plan_is_refused():
    """A statement may be kept for long; its result must not be read with another plan."""
    rng = np.random.default_rng(3)
    rows = pa.table({"x": rng.uniform(0.0, 25.0, 500), "y": rng.normal(size=500)})
    one, other = (
        fastsmooth.plan_for(rows, "x", "y", reading=fastsmooth.Reading(range=ends))
        for ends in ((0.0, 26.0), (-1.0, 30.0))
    )
    connection = duckdb.connect()
    connection.register("readings", rows)
    text = statement(one, "readings", "duckdb", fold="0")
    assert read_result(one, connection.sql(text)).tally.used == 500
    with pytest.raises(InputError, match="x lies in other bins: another plan made the statement"):
        read_result(other, connection.sql(text))
