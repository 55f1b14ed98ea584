"""What the tests of stores share."""

from datetime import datetime

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from fastsmooth.store.settings import StoreSettings

DAY = StoreSettings("wet_bulb_c", "power_kw", block="logged_at:day", period="logged_at:month")
UNITS = StoreSettings(
    "wet_bulb_c", "power_kw", by=("plant",), block="logged_at:day", period="logged_at:month",
    bins=1024,
)  # fmt: skip
BEGIN = datetime(2025, 1, 28)


def write_day(folder, day, rows=240, plants=("northmoor", "eastholm", None), seed=0, **own):
    """One file of readings of one day, the plants' rows interleaved at random."""
    rng = np.random.default_rng(1000 * seed + day)
    seconds = np.sort(rng.integers(0, 86_400, rows)) + day * 86_400
    x = 8.0 + 0.6 * day + rng.normal(0.0, 2.0, rows)
    columns = {
        "logged_at": np.datetime64(BEGIN, "s") + seconds,
        "plant": pa.array([plants[n] for n in rng.integers(0, len(plants), rows)], pa.string()),
        "wet_bulb_c": x,
        "power_kw": 20.0 + 0.04 * x**2 + rng.normal(0.0, 0.5, rows),
        "precision": rng.uniform(0.5, 2.0, rows),
        "repeats": rng.integers(1, 4, rows).astype(float),
    } | own
    path = folder / f"day{day:02d}.parquet"
    pq.write_table(pa.table(columns), path, row_group_size=100)
    return path
