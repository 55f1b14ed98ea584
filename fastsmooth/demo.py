"""Invented data of one milk-cooling plant, for the demo and for nothing else."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from fastsmooth.curve import Curve
from fastsmooth.files_out import write_table
from fastsmooth.passes import Progress, silent

SEED = 20_260_101
MINUTES = 365 * 24 * 60
FAULT_CODE = -9999.0
WHERE = "power_kw <> -9999"
BLOCK = "logged_at:day"


def true_power_kw(wet_bulb_c: np.ndarray) -> np.ndarray:
    """Return the mean compressor power behind the invented data, in kW."""
    # A base load, a climb that sets in near 9 degC, and a ceiling as the last stage comes in.
    climb = 46.0 / (1.0 + np.exp(-(wet_bulb_c - 15.5) / 2.6))
    return 31.0 + 0.18 * wet_bulb_c + climb - 4.0 * np.exp(-0.5 * ((wet_bulb_c - 7.0) / 1.8) ** 2)


def write_demo_data(folder: Path) -> Path:
    """Write a year of minute readings of one plant, one Parquet file a month.

    Parameters
    ----------
    folder : Path
        Where; made if it does not exist.

    Returns
    -------
    Path
        The folder that holds the files.
    """
    import pyarrow as pa

    rng = np.random.default_rng(SEED)
    minute = np.arange(MINUTES)
    day = minute / 1440.0
    weather = np.repeat(_wander(rng, MINUTES // 60, 0.985, 2.6), 60)
    wet_bulb_c = (
        9.0
        - 8.5 * np.cos(2.0 * np.pi * (day - 18.0) / 365.0)
        - 2.4 * np.cos(2.0 * np.pi * (day - 0.16))
        + weather
        + rng.normal(0.0, 0.15, MINUTES)
    )
    spread = 1.6 + 0.11 * np.clip(wet_bulb_c, 0.0, None)
    # Dirt, door openings, a slow controller: minutes of one day resemble each other.
    habits = _wander(rng, MINUTES, 0.997, 1.3)
    power_kw = true_power_kw(wet_bulb_c) + habits + spread * rng.standard_normal(MINUTES)
    wet_bulb_c, power_kw = wet_bulb_c.round(2), power_kw.round(2)
    missing = rng.random(MINUTES) < 2e-4
    power_kw[rng.random(MINUTES) < 3e-4] = FAULT_CODE
    start = np.datetime64("2025-01-01T00:00:00", "s")
    stamps = start + minute.astype("timedelta64[m]")
    table = pa.table(
        {
            "logged_at": pa.array(stamps, pa.timestamp("s", "UTC")),
            "plant": pa.array(np.full(MINUTES, "northmoor")),
            "wet_bulb_c": pa.array(wet_bulb_c, mask=missing),
            "power_kw": power_kw,
        },
        schema=pa.schema(
            [
                ("logged_at", pa.timestamp("s", "UTC")),
                ("plant", pa.string()),
                pa.field("wet_bulb_c", pa.float64(), metadata={"unit": "degC"}),
                pa.field("power_kw", pa.float64(), metadata={"unit": "kW"}),
            ]
        ),
    )
    data = folder / "data"
    data.mkdir(parents=True, exist_ok=True)
    month = stamps.astype("datetime64[M]")
    for one in np.unique(month):
        rows = np.flatnonzero(month == one)
        part = table.slice(int(rows[0]), rows.size)
        write_table(part, data / f"northmoor-{one}.parquet", "FOLDER")
    return data


def _wander(rng: np.random.Generator, n: int, memory: float, sd: float) -> np.ndarray:
    """A slow wander around zero with this standard deviation (first-order autoregression)."""
    steps = rng.normal(0.0, sd * np.sqrt(1.0 - memory**2), n)
    out = np.empty(n)
    value = 0.0
    for i, step in enumerate(steps.tolist()):
        value = memory * value + step
        out[i] = value
    return out


def run_demo(folder: Path, progress: Progress = silent) -> Curve:
    """Write the data, make the curve, and leave table and picture in the folder.

    Raises
    ------
    WriteError
        The folder cannot be written.
    """
    from fastsmooth.api import make_curve
    from fastsmooth.settings import Reading

    data = write_demo_data(folder)
    made = make_curve(
        data, "wet_bulb_c", "power_kw", reading=Reading(where=WHERE, block=BLOCK),
        progress=progress,
    )  # fmt: skip
    for name in ("curve.parquet", "curve.csv"):
        made.save(folder / name)
    made.plot(folder / "curve.png")
    return made
