"""Rows of many units, and what the tests of fleets share."""

import math

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq

from tests import cases

X, Y = "wet_bulb_c", "power_kw"


def readings(n, units, seed=0, together=False):
    """Rows of some plants, one without a name, with nulls, NaN, infinities and a clock."""
    rng = np.random.default_rng([seed, 3])
    rows = cases.make_rows("uniform", n, seed)
    number = rng.integers(0, units, n)
    if together:
        number = np.sort(number)
    x, y = rows.wet_bulb_c.copy(), rows.power_kw + number
    x[rng.integers(0, n, n // 500 + 1)] = math.nan
    y[rng.integers(0, n, n // 500 + 1)] = math.inf
    return pa.table(
        {
            X: pa.array(x, mask=rng.random(n) < 0.005),
            Y: pa.array(y, mask=rng.random(n) < 0.005),
            "plant": pa.array([f"plant {one}" for one in number], mask=number == 2),
            "sharpness": cases.precisions(n, seed),
            "repeats": cases.repeats(n, seed),
            "logged_at": pa.array(np.arange(n) * 1200, pa.timestamp("s")),
        }
    )


def write(folder, table, files, rows_per_group):
    folder.mkdir(exist_ok=True)
    size = -(-table.num_rows // files)
    for number in range(files):
        pq.write_table(
            table.slice(number * size, size), folder / f"{number:03d}.parquet",
            row_group_size=rows_per_group,
        )  # fmt: skip
    return folder


def bits(table):
    sums = {fold: sums.tobytes() for fold, sums in table.sums.items()}
    return sums, table.extent.tolist(), table.tally, table.blocks


LAYOUTS = {
    # Rows of all plants in every row group, a fold for each row group.
    "mixed": (False, 8, 300, None),
    # The same with too few row groups: runs of each plant's own rows.
    "mixed, few row groups": (False, 1, 100_000, None),
    "one plant after the other": (True, 8, 300, None),
    "one plant after the other, few row groups": (True, 2, 100_000, None),
    "by day": (False, 4, 300, "logged_at:day"),
    "by day, one plant after the other": (True, 4, 100_000, "logged_at:day"),
}
