"""Invented readings for the measurements: compressor power against wet-bulb temperature."""

from __future__ import annotations

import os
from collections.abc import Callable
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from fastsmooth.errors import WriteError
from fastsmooth.measure.figures import RANDOM, SENSOR
from fastsmooth.measure.sizes import Sizes

Floats = NDArray[np.float64]
Columns = dict[str, Floats]

X, Y = "wet_bulb_c", "power_kw"
LOW_C, HIGH_C = -5.0, 28.0
# Wide scatter, so that the chosen width stays wide enough for a single pass over the data.
NOISE_SD_KW = 3.0
_SECONDS_BETWEEN_READINGS = 10.0
_GROUPS_PER_FILE = 2


def mean_power_kw(wet_bulb_c: Floats) -> Floats:
    """Return the mean behind the readings: it climbs with the heat, over two humps."""
    return 20.0 + 0.02 * np.clip(wet_bulb_c, 0.0, None) ** 2 + 3.0 * np.sin(0.5 * wet_bulb_c)


def random_rows(rows: int, seed: int) -> Columns:
    """Return independent readings with all their digits: they compress badly, in random order."""
    rng = np.random.default_rng([seed, 1])
    wet_bulb_c = rng.uniform(LOW_C, HIGH_C, rows)
    return {X: wet_bulb_c, Y: mean_power_kw(wet_bulb_c) + NOISE_SD_KW * rng.standard_normal(rows)}


def sensor_rows(rows: int, seed: int) -> Columns:
    """Return readings of one plant through days and seasons, in steps of 0.01, as sensors log."""
    rng = np.random.default_rng([seed, 2])
    hours = np.arange(rows) * (_SECONDS_BETWEEN_READINGS / 3600.0)
    season = np.sin(2.0 * np.pi * (hours / (24.0 * 365.25) + rng.uniform()))
    day = np.sin(2.0 * np.pi * hours / 24.0)
    wet_bulb_c = 11.0 + 9.0 * season + 4.0 * day + 0.3 * rng.standard_normal(rows)
    power_kw = mean_power_kw(wet_bulb_c) + NOISE_SD_KW * rng.standard_normal(rows)
    return {X: wet_bulb_c.round(2), Y: power_kw.round(2)}


def sorted_rows(rows: int) -> tuple[Floats, Floats]:
    """Return x, ascending and all different, over [0, 1], and y with unit noise."""
    rng = np.random.default_rng([rows, 3])
    # Sums of exponential gaps are uniform values in order, and spare the sorting.
    x = np.cumsum(rng.standard_exponential(rows))
    x /= x[-1]
    return x, np.sin(12.0 * x) + rng.standard_normal(rows)


@dataclass(frozen=True)
class _Kind:
    make: Callable[[int, int], Columns]
    compression: str
    dictionary: bool


_KINDS = {
    RANDOM: _Kind(random_rows, "snappy", False),
    SENSOR: _Kind(sensor_rows, "zstd", True),
}


def write_files(folder: Path, sizes: Sizes, threads: int) -> dict[str, list[str]]:
    """Write the Parquet files of both kinds.

    Parameters
    ----------
    folder : Path
        Where; empty before.
    sizes : Sizes
        How many files and rows.
    threads : int
        Files written at a time, at most.

    Returns
    -------
    dict of str to list of str
        Paths by kind (`RANDOM`, `SENSOR`).

    Raises
    ------
    WriteError
        The folder does not take them.
    """
    paths = {
        kind: [str(folder / f"plant-{place}-{number}.parquet") for number in range(sizes.files)]
        for place, kind in enumerate(_KINDS)
    }
    jobs = [
        partial(_write, kind, sizes.rows_per_file, number, path)
        for kind, files in paths.items()
        for number, path in enumerate(files)
    ]
    try:
        with ThreadPoolExecutor(min(threads, sizes.writers)) as pool:
            # What was not begun is called off when one fails or the user interrupts.
            for _ in pool.map(lambda job: job(), jobs):
                pass
    except OSError as error:
        raise WriteError(
            "--folder", "take the temporary files",
            f"writing to '{os.fspath(folder.parent)}' failed: {error.strerror or error}",
            "free some space, or name another folder",
        ) from error  # fmt: skip
    return paths


def _write(kind: str, rows: int, number: int, path: str) -> None:
    import pyarrow as pa
    import pyarrow.parquet as pq

    how = _KINDS[kind]
    pq.write_table(
        pa.table(how.make(rows, number)), path, row_group_size=-(-rows // _GROUPS_PER_FILE),
        compression=how.compression, use_dictionary=how.dictionary,
    )  # fmt: skip
