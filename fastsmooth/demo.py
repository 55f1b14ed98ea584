"""Invented data of milk-cooling plants, for the demo and for nothing else."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from fastsmooth.curve import Curve
from fastsmooth.errors import WriteError
from fastsmooth.files_out import write_table
from fastsmooth.passes import Progress, silent

if TYPE_CHECKING:
    from fastsmooth.comparison import CurveComparison
    from fastsmooth.fleet import Fleet
    from fastsmooth.score import Scored
    from fastsmooth.store.update import Updated

SEED = 20_260_101
MINUTES = 365 * 24 * 60
FAULT_CODE = -9999.0
WHERE = "power_kw <> -9999"
BLOCK = "logged_at:day"
LIMITS = (0.005, 0.995)
HOURS_PER_ROW = 1.0 / 6.0
# Plants and their size.
PLANTS = {
    "northmoor": 1.0, "southmere": 1.1, "eastley": 0.8, "westbrook": 1.4, "hillfoot": 0.9,
    "lakeside": 1.0,
}  # fmt: skip


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
    rng = np.random.default_rng(SEED)
    minute = np.arange(MINUTES)
    wet_bulb_c = _weather(rng, minute, 1)
    power_kw = true_power_kw(wet_bulb_c) + _scatter(rng, wet_bulb_c, 0.997)
    data = folder / "data"
    _write_months(rng, data, "northmoor", _stamps("2025-01-01", minute), wet_bulb_c, power_kw)
    return data


def write_demo_fleet(folder: Path) -> tuple[Path, Path]:
    """Write ten-minute readings of six plants: a year, and a month of the year after.

    In June 2026 the condenser of southmere is fouled, more so in warm weather; the power meter of
    eastley was stuck for eleven days in August 2025; hillfoot had only just begun to log.

    Parameters
    ----------
    folder : Path
        Where; made if it does not exist.

    Returns
    -------
    year, month : Path
        The folders that hold the files, one for each plant and month.
    """
    year, month = folder / "fleet" / "2025", folder / "fleet" / "2026-06"
    for place, (plant, size) in enumerate(PLANTS.items()):
        rng = np.random.default_rng((SEED, place))
        for out, start, first, days in (
            (year, "2025-01-01", 0, 365),
            (month, "2026-06-01", 151, 30),
        ):
            minute = np.arange(first * 1440, (first + days) * 1440, 10)
            wet_bulb_c = _weather(rng, minute, 10)
            power_kw = size * true_power_kw(wet_bulb_c) + _scatter(rng, wet_bulb_c, 0.97)
            stamps = _stamps(start, minute - minute[0])
            if plant == "southmere" and out is month:
                power_kw *= 1.0 + 0.004 * np.clip(wet_bulb_c - 8.0, 0.0, None)
            if plant == "eastley" and out is year:
                day = minute / 1440.0
                stuck = (day >= 220.0) & (day < 231.0)
                power_kw[stuck] = power_kw[stuck][0]
            kept = slice(-144, None) if plant == "hillfoot" and out is year else slice(None)
            _write_months(rng, out, plant, stamps[kept], wet_bulb_c[kept], power_kw[kept])
    return year, month


def _weather(rng: np.random.Generator, minute: np.ndarray, step: int) -> np.ndarray:
    """Wet-bulb temperature: seasons, days and weather, every so many minutes."""
    day = minute / 1440.0
    hours = -(-minute.shape[0] * step // 60)
    weather = np.repeat(_wander(rng, hours, 0.985, 2.6), 60 // step)[: minute.shape[0]]
    return (
        9.0
        - 8.5 * np.cos(2.0 * np.pi * (day - 18.0) / 365.0)
        - 2.4 * np.cos(2.0 * np.pi * (day - 0.16))
        + weather
        + rng.normal(0.0, 0.15, minute.shape[0])
    )


def _scatter(rng: np.random.Generator, wet_bulb_c: np.ndarray, memory: float) -> np.ndarray:
    """Dirt, door openings, a slow controller: readings of one day resemble each other."""
    n = wet_bulb_c.shape[0]
    spread = 1.6 + 0.11 * np.clip(wet_bulb_c, 0.0, None)
    habits = _wander(rng, n, memory, 1.3)
    return habits + spread * rng.standard_normal(n)


def _stamps(start: str, minute: np.ndarray) -> np.ndarray:
    return np.datetime64(f"{start}T00:00:00", "s") + minute.astype("timedelta64[m]")


def _write_months(
    rng: np.random.Generator, folder: Path, plant: str, stamps: np.ndarray,
    wet_bulb_c: np.ndarray, power_kw: np.ndarray,
) -> None:  # fmt: skip
    """Write one plant's readings, with some lost and some fault codes, one file a month."""
    import pyarrow as pa

    n = stamps.shape[0]
    wet_bulb_c, power_kw = wet_bulb_c.round(2), power_kw.round(2)
    missing = rng.random(n) < 2e-4
    power_kw[rng.random(n) < 3e-4] = FAULT_CODE
    table = pa.table(
        {
            "logged_at": pa.array(stamps, pa.timestamp("s", "UTC")),
            "plant": pa.array(np.full(n, plant)),
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
    _make_folder(folder)
    month = stamps.astype("datetime64[M]")
    for one in np.unique(month):
        rows = np.flatnonzero(month == one)
        part = table.slice(int(rows[0]), rows.size)
        write_table(part, folder / f"{plant}-{one}.parquet", "FOLDER")


def _make_folder(folder: Path) -> None:
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise WriteError(
            "FOLDER", "be a folder that can be made and written",
            f"making '{folder}' failed: {error.strerror}", "name another one",
        ) from error  # fmt: skip


def _wander(rng: np.random.Generator, n: int, memory: float, sd: float) -> np.ndarray:
    """A slow wander around zero with this standard deviation (first-order autoregression)."""
    from scipy.signal import lfilter

    steps = rng.normal(0.0, sd * np.sqrt(1.0 - memory**2), n)
    return np.asarray(lfilter([1.0], [1.0, -memory], steps))


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


class Night(NamedTuple):
    """What a night's work on the fleet gives.

    Attributes
    ----------
    updated : Updated
        The store of the year's sums.
    fleet : Fleet
        Curves of the year, robust, with limits.
    scored : Scored
        The month's rows outside the limits.
    compared : CurveComparison
        What the month cost beyond the year's curves.
    """

    updated: Updated
    fleet: Fleet
    scored: Scored
    compared: CurveComparison


def run_night(folder: Path, progress: Progress = silent) -> Night:
    """Write the fleet's data and do a night's work on them; everything is left in the folder.

    Raises
    ------
    WriteError
        The folder cannot be written.
    """
    from fastsmooth.compare import compare_curves
    from fastsmooth.manyunits import make_fleet
    from fastsmooth.report.page import write_page
    from fastsmooth.score import score_rows
    from fastsmooth.settings import Band, Reading, Smoothing
    from fastsmooth.store.settings import StoreSettings
    from fastsmooth.store.update import update_store

    year, month = write_demo_fleet(folder)
    store = folder / "plants.store"
    settings = StoreSettings(
        "wet_bulb_c", "power_kw", by=("plant",), block=BLOCK, period="logged_at:month", where=WHERE
    )
    # The files were just written anew, so a store of an earlier demo must count them anew.
    updated = update_store(store, year, settings, replace_changed=True, progress=progress)
    fleet = make_fleet(
        year, "wet_bulb_c", "power_kw", by="plant", reading=Reading(where=WHERE, block=BLOCK),
        smoothing=Smoothing(robust=True), band=Band(limits=LIMITS), progress=progress,
    )  # fmt: skip
    fleet.save(folder / "curves.parquet")
    write_page(fleet, folder / "fleet.html")
    scored = score_rows(
        month, folder / "curves.parquet", out=folder / "flagged", only="outside-limits",
        where=WHERE, progress=progress,
    )  # fmt: skip
    compared = compare_curves(
        folder / "curves.parquet", month, hours_per_row=HOURS_PER_ROW, progress=progress
    )
    compared.save_units(folder / "excess.csv")
    compared.plot(folder / "drift.png")
    return Night(updated, fleet, scored, compared)


def night_commands(folder: str) -> list[str]:
    """Return the commands that do a night's work, in order."""
    year, month = f"{folder}/fleet/2025", f"{folder}/fleet/2026-06"
    where = f'--where "{WHERE}"'
    curves = f"{folder}/curves.parquet"
    return [
        f"fastsmooth update {folder}/plants.store {year} --x wet_bulb_c --y power_kw \\\n"
        f"    --by plant --block {BLOCK} --period logged_at:month {where}",
        f"fastsmooth search {folder}/plants.store --last '12 months'",
        f"fastsmooth curve {year} --x wet_bulb_c --y power_kw --by plant {where} \\\n"
        f"    --block {BLOCK} --robust --limits {','.join(str(one) for one in LIMITS)} \\\n"
        f"    --out {curves} --page {folder}/fleet.html",
        f"fastsmooth score {month} --curve {curves} {where} \\\n"
        f"    --only outside-limits --out {folder}/flagged",
        f"fastsmooth compare {curves} {month} --hours-per-row {HOURS_PER_ROW:.6g} \\\n"
        f"    --units-out {folder}/excess.csv --plot {folder}/drift.png",
        f"fastsmooth info {curves}",
    ]
