"""Readings in Parquet for the benchmarks, made once and kept.

Two kinds, both power against wet-bulb temperature of milk-cooling plants:

- ``full precision``: independent uniform readings with all their digits, Parquet defaults with
  snappy. They compress badly and hit the bins in random order: the hard case.
- ``rounded``: ten-second readings of one plant a file, through days and seasons, in steps of
  0.01, dictionary and zstd: what sensors log.

File k of a kind is the same whatever the number of rows asked for, so a larger set extends a
smaller one. `python -m bench.data --rows 50` makes the files beforehand.
"""

import argparse
import os
import tempfile
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from tests.cases import Rows, make_rows, mean_power_kw

ROWS_PER_FILE = 5_000_000
ROWS_PER_GROUP = 1_000_000
# Compressors that cycle scatter widely. It also keeps the chosen width above 32 of 8192 bins at
# 500 million rows, so that every size is read in one pass and memory is compared like with like;
# with much less noise the engine would read again with finer bins.
NOISE_SD_KW = 3.0
MILLION = 1_000_000
_SECONDS_BETWEEN_READINGS = 10
# Part of the folder's name: raise it when the readings change, or old files would be used.
_EDITION = 1


def full_precision(rows: int, seed: int) -> Rows:
    """Independent uniform readings."""
    return make_rows("uniform", rows, seed, NOISE_SD_KW)


def rounded(rows: int, seed: int) -> Rows:
    """Readings of one plant in the order of time, in steps of 0.01."""
    rng = np.random.default_rng([seed, 31])
    hours = np.arange(rows) * (_SECONDS_BETWEEN_READINGS / 3600.0)
    wet_bulb_c = (
        11.0
        + 9.0 * np.sin(2.0 * np.pi * (hours / (24.0 * 365.25) + rng.uniform()))
        + 4.0 * np.sin(2.0 * np.pi * hours / 24.0)
        + 0.3 * rng.normal(size=rows)
    )
    power_kw = mean_power_kw(wet_bulb_c) + NOISE_SD_KW * rng.normal(size=rows)
    return Rows(np.round(wet_bulb_c, 2), np.round(power_kw, 2), NOISE_SD_KW)


@dataclass(frozen=True)
class Kind:
    """How readings are made and written."""

    name: str
    make: Callable[[int, int], Rows]
    compression: str


KINDS = {
    kind.name: kind
    for kind in (
        Kind("full precision", full_precision, "snappy"),
        Kind("rounded", rounded, "zstd"),
    )
}


def data_folder() -> Path:
    """Return where the files are kept: $FASTSMOOTH_BENCH_DATA, or a temporary folder."""
    given = os.environ.get("FASTSMOOTH_BENCH_DATA")
    return Path(given) if given else Path(tempfile.gettempdir()) / "fastsmooth-bench"


def parquet_files(kind: str, rows: int) -> list[str]:
    """Return the files of one kind that hold so many rows, making those that are missing."""
    folder = data_folder() / f"{kind.replace(' ', '-')}-{_EDITION}"
    folder.mkdir(parents=True, exist_ok=True)
    files = []
    for number, start in enumerate(range(0, rows, ROWS_PER_FILE)):
        size = min(ROWS_PER_FILE, rows - start)
        path = folder / f"plant-{number:04d}-{size}.parquet"
        if not path.exists():
            _write(KINDS[kind], size, number, path)
        files.append(str(path))
    return files


def _write(kind: Kind, rows: int, seed: int, path: Path) -> None:
    table = pa.table(kind.make(rows, seed).columns())
    # Under another name first: an interrupted run must not leave a file that looks finished.
    unfinished = path.with_suffix(".unfinished")
    pq.write_table(table, unfinished, row_group_size=ROWS_PER_GROUP, compression=kind.compression)
    os.replace(unfinished, path)


def main() -> None:
    """Make the files of both kinds and say where they are."""
    parser = argparse.ArgumentParser(prog="python -m bench.data", description=__doc__)
    parser.add_argument("--rows", type=int, default=50, help="million rows of each kind")
    options = parser.parse_args()
    for kind in KINDS:
        files = parquet_files(kind, options.rows * MILLION)
        size = sum(Path(file).stat().st_size for file in files)
        print(f"{kind}: {len(files)} files, {size / 1e6:.0f} MB in {Path(files[0]).parent}")


if __name__ == "__main__":
    main()
