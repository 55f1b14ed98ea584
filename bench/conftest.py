"""Options and data of the benchmarks: `pytest bench --rows 5`."""

import pytest

from bench.data import MILLION, parquet_files


def pytest_addoption(parser: pytest.Parser) -> None:
    parser.addoption("--rows", type=int, default=5, help="million rows in the benchmark files")


@pytest.fixture(scope="session")
def million_rows(request: pytest.FixtureRequest) -> int:
    return int(request.config.getoption("--rows"))


@pytest.fixture(scope="session")
def files(million_rows: int) -> list[str]:
    """Full-precision readings."""
    return parquet_files("full precision", million_rows * MILLION)


@pytest.fixture(scope="session")
def rounded_files(million_rows: int) -> list[str]:
    """Rounded, compressed readings."""
    return parquet_files("rounded", million_rows * MILLION)
