"""Settings of the generated tests, and data that several test files share."""

import numpy as np
import pyarrow as pa
import pyarrow.parquet as pq
import pytest
from hypothesis import settings

from tests import cases

# The machine's load must not decide whether a test passes; the seed of a failure is printed.
settings.register_profile("fastsmooth", deadline=None, max_examples=60, print_blob=True)
settings.load_profile("fastsmooth")


def write_parquet(path, columns, rows_per_group):
    """Write columns as one Parquet file with several row groups."""
    pq.write_table(pa.table(columns), path, row_group_size=rows_per_group)


@pytest.fixture(scope="session")
def plant_folder(tmp_path_factory):
    """Three Parquet files of one plant each, several row groups per file."""
    folder = tmp_path_factory.mktemp("plants")
    for plant in range(3):
        rows = cases.make_rows("uniform", 7000 + 900 * plant, seed=plant)
        columns = {**rows.columns(), "plant": np.full(rows.power_kw.size, plant)}
        write_parquet(folder / f"plant_{plant}.parquet", columns, rows_per_group=1500)
    return folder
