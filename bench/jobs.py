"""What is timed, each piece of work with a check of its result.

`whole_jobs` go from Parquet files to a result: bare scans and GROUP BYs by general-purpose
engines, the references, and the whole curve. `table_jobs` start from readings or a bin table in
memory. `test_curve.py` times them one by one; `ratios.py` in turn, against one another.

Every job is prepared before it is timed. Files are warm: they have been read before and lie in
the operating system's cache. Kernels are compiled and loaded.
"""

from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import partial
from typing import Any, NamedTuple

import duckdb
import numpy as np
import polars as pl
import pyarrow as pa
import pyarrow.parquet as pq
from fastsmooth.kernels.shapes import SHAPES

from bench.data import full_precision
from bench.names import X, Y
from fastsmooth import Band, Curve, Reading, Search, Smoothing, make_curve
from fastsmooth.bands import Occupied, Points, estimate_noise, fit_points
from fastsmooth.bintable import BinTable, Pyramid
from fastsmooth.passes import count_rows
from fastsmooth.search import search_table
from fastsmooth.settings import ESTIMATORS, usable_cores
from fastsmooth.smoother import fit_level, least_weight
from fastsmooth.source import CHUNK_ROWS, Columns, open_source
from tests.cases import mean_power_kw

BINS = 8192
SEARCH_ROWS = 2_000_000
ACCUMULATED_ROWS = 2_000_000
PLACES = 1_000_000
# Means of independent rows stay within this many of their standard errors.
_STANDARD_ERRORS = 6.0
_STRETCHES = 64


@dataclass(frozen=True)
class Job:
    """One piece of work and what its result must be.

    Attributes
    ----------
    name : str
        What the job does.
    run : callable
        The timed part, without arguments.
    check : callable
        Takes the result; an AssertionError says that it is wrong.
    rows : int or None
        Rows that the job goes through, where a time per row means something.
    """

    name: str
    run: Callable[[], Any]
    check: Callable[[Any], None]
    rows: int | None = None


class Bins(NamedTuple):
    """Equal bins: number `floor((x - origin) * per_unit)`."""

    origin: float
    per_unit: float

    @classmethod
    def of(cls, curve: Curve) -> "Bins":
        """The bins into which a curve's rows were counted."""
        plan = curve.trace["plan"]
        return cls(plan["origin"], 1.0 / plan["width"])


class Means(NamedTuple):
    """Rows and mean of y of each bin that has rows, ascending by bin."""

    bins: np.ndarray
    rows: np.ndarray
    mean: np.ndarray


def scan_pyarrow(files: Sequence[str], threads: int) -> int:
    """Decode both columns, a row group at a time on a thread pool, and count the rows."""
    footers = [pq.read_metadata(file) for file in files]
    tasks = [
        (file, footer, group)
        for file, footer in zip(files, footers, strict=True)
        for group in range(footer.num_row_groups)
    ]

    def read(task: tuple[str, pq.FileMetaData, int]) -> int:
        file, footer, group = task
        with pq.ParquetFile(file, metadata=footer, pre_buffer=True) as opened:
            batches = opened.iter_batches(
                CHUNK_ROWS, row_groups=[group], columns=[X, Y], use_threads=False
            )
            return sum(batch.num_rows for batch in batches)

    with ThreadPoolExecutor(threads) as pool:
        return sum(pool.map(read, tasks))


def scan_polars(files: Sequence[str]) -> int:
    """Decode both columns, batch by batch, and count the rows."""
    heights: list[int] = []

    def count(batch: pl.DataFrame) -> None:
        heights.append(batch.height)

    pl.scan_parquet(list(files)).select(X, Y).sink_batches(count)
    return sum(heights)


def means_polars(files: Sequence[str], bins: Bins) -> pl.DataFrame:
    """GROUP BY bin: number of rows and mean of y."""
    place = ((pl.col(X) - bins.origin) * bins.per_unit).floor().cast(pl.Int32)
    return (
        pl.scan_parquet(list(files))
        .group_by(place.alias("bin"))
        .agg(pl.len().alias("rows"), pl.col(Y).mean().alias("mean"))
        .collect(engine="streaming")
    )


def means_duckdb(
    connection: duckdb.DuckDBPyConnection, files: Sequence[str], bins: Bins
) -> pa.Table:
    """GROUP BY bin: number of rows and mean of y.

    One connection serves all rounds: whatever the engine keeps between queries is to its good.
    """
    query = f"""
        SELECT CAST(floor(({X} - CAST($origin AS DOUBLE)) * CAST($per_unit AS DOUBLE)) AS INTEGER)
            AS bin, count(*) AS rows, avg({Y}) AS mean
        FROM read_parquet($files) GROUP BY bin
    """  # The names are constants of ours.
    given = {"files": list(files), "origin": bins.origin, "per_unit": bins.per_unit}
    return connection.sql(query, params=given).to_arrow_table()


def whole_curve(files: Sequence[str], threads: int) -> Curve:
    """Read, count, search both estimators at 48 widths, and evaluate the curve with its band."""
    return make_curve(list(files), X, Y, reading=Reading(threads=threads))


def whole_jobs(files: Sequence[str]) -> list[Job]:
    """From files to results: references, and the curve with one and with all processors.

    The first curve made here fixes the bins of the GROUP BYs and compiles or loads the kernels.
    """
    rows = sum(pq.read_metadata(file).num_rows for file in files)
    cores = usable_cores()
    first = whole_curve(files, cores)
    bins = Bins.of(first)
    expected = sorted_means(means_polars(files, bins))
    connection = duckdb.connect()

    def right_rows(counted: int) -> None:
        assert counted == rows

    def right_means(table: Any) -> None:
        means = sorted_means(table)
        assert means.rows.sum() == rows
        np.testing.assert_array_equal(means.bins, expected.bins)
        np.testing.assert_array_equal(means.rows, expected.rows)
        np.testing.assert_allclose(means.mean, expected.mean, rtol=1e-9)

    def right_curve(made: Curve) -> None:
        check_curve(made, rows, expected)
        # Whatever the number of threads, to the last bit.
        np.testing.assert_array_equal(made.estimate, first.estimate)
        np.testing.assert_array_equal(made.std_error, first.std_error)

    return [
        Job("scan, pyarrow", lambda: scan_pyarrow(files, cores), right_rows, rows),
        Job("scan, polars", lambda: scan_polars(files), right_rows, rows),
        Job("GROUP BY, polars", lambda: means_polars(files, bins), right_means, rows),
        Job("GROUP BY, duckdb", lambda: means_duckdb(connection, files, bins), right_means, rows),
        *(
            Job(curve_name(t), partial(whole_curve, files, t), right_curve, rows)
            for t in dict.fromkeys((1, 2, cores))
        ),
    ]


def curve_name(threads: int) -> str:
    """Return the name of the job that makes the whole curve."""
    return f"curve, {threads} thread{'s' if threads > 1 else ''}"


def rounded_job(files: Sequence[str], name: str = "curve, rounded readings") -> Job:
    """The whole curve of rounded, compressed readings, with all processors."""
    rows = sum(pq.read_metadata(file).num_rows for file in files)
    cores = usable_cores()
    expected = sorted_means(means_polars(files, Bins.of(whole_curve(files, cores))))
    return Job(
        name,
        lambda: whole_curve(files, cores),
        lambda made: check_curve(made, rows, expected),
        rows,
    )


def sorted_means(table: Any) -> Means:
    """Bring the result of a GROUP BY, in whatever order, into one form."""
    columns = {name: table[name].to_numpy() for name in ("bin", "rows", "mean")}
    order = np.argsort(columns["bin"])
    return Means(*(columns[name][order] for name in ("bin", "rows", "mean")))


def check_curve(made: Curve, rows: int, means: Means) -> None:
    """Assert that every row was used and that the curve runs through the means of the rows.

    Compared over stretches of a sixty-fourth of the range, whose means are sharp.
    """
    assert made.trace["rows"]["used"] == rows
    plan = made.trace["plan"]
    centres = plan["origin"] + plan["width"] * (means.bins + 0.5)
    away = made.at(centres) - means.mean
    seen = np.isfinite(away)
    assert means.rows[seen].sum() > 0.999 * rows
    stretch = means.bins[seen] * _STRETCHES // plan["bins"]
    within = np.bincount(stretch, means.rows[seen], _STRETCHES)
    total = np.bincount(stretch, (means.rows * away)[seen], _STRETCHES)
    # Rounded readings need not lie in the middle of their bin.
    off_centre = np.nanmax(np.abs(made.slope)) * plan["width"] / 2.0
    allowed = _STANDARD_ERRORS * np.nanmax(made.residual_sd) * np.sqrt(within) + off_centre * within
    assert (np.abs(total) <= allowed).all()


def table_jobs() -> list[Job]:
    """From memory: accumulation, pyramid, searches, curve evaluation.

    The table has 8192 bins and all of its 32 folds hold rows; the cost of what is done with it
    does not depend on the number of rows.
    """
    given = full_precision(SEARCH_ROWS, seed=0)
    shape = SHAPES[Smoothing().kernel]
    with open_source(given.columns(), Columns(X, Y)) as source:
        table = count_rows(source, Reading()).table
    assert table.plan.bins == BINS
    assert len(table.sums) == table.plan.folds
    pyramid = Pyramid(table)
    cores = usable_cores()

    def search(widths: int, threads: int) -> Search:
        return search_table(table, pyramid, shape, widths=widths, threads=threads)

    def pyramid_and_search() -> Search:
        return search_table(table, Pyramid(table), shape, widths=64, threads=cores)

    chosen = {name: trail.bandwidth for name, trail in search(48, cores).trails.items()}

    def right_search(found: Search) -> None:
        assert set(found.trails) == set(ESTIMATORS)
        for name, trail in found.trails.items():
            assert abs(np.log(trail.bandwidth / chosen[name])) < 0.02
            assert np.isfinite(trail.excess_std_error).all()

    def right_pyramid(made: Pyramid) -> None:
        for level in made.levels:
            assert level.count.sum() == SEARCH_ROWS

    return [
        _accumulation(table),
        Job("pyramid", lambda: Pyramid(table), right_pyramid),
        *(
            Job(search_name(widths, threads), partial(search, widths, threads), right_search)
            for widths in (48, 64)
            for threads in dict.fromkeys((1, cores))
        ),
        Job("pyramid and search, 64 widths", pyramid_and_search, right_search),
        _evaluation(table, pyramid, chosen["local-linear"]),
        _reading_off(given.columns()),
    ]


def search_name(widths: int, threads: int) -> str:
    """Return the name of the job that searches both estimators."""
    return f"search, {widths} widths, {threads} thread{'s' if threads > 1 else ''}"


def _accumulation(planned: BinTable) -> Job:
    """Rows in memory into one table, a run at a time, in one thread."""
    given = full_precision(ACCUMULATED_ROWS, seed=1)
    plan = planned.plan
    # Readings of another seed may lie a hair beyond the planned range.
    inside = (given.wet_bulb_c >= planned.extent[0]) & (given.wet_bulb_c <= planned.extent[1])
    x, y = given.wet_bulb_c[inside], given.power_kw[inside]
    runs = [slice(start, start + CHUNK_ROWS) for start in range(0, x.shape[0], CHUNK_ROWS)]
    folds = 4  # as many as one row group meets

    def accumulate() -> BinTable:
        table = BinTable(plan)
        for run, rows in enumerate(runs):
            table.add_rows(run % folds, x[rows], y[rows])
        return table

    def right_sums(table: BinTable) -> None:
        assert table.tally.used == x.shape[0]
        total = table.total()
        assert total[:, 0].sum() == x.shape[0]
        np.testing.assert_allclose(
            (total[:, 3] + total[:, 0] * total[:, 7]).sum(), y.sum(), rtol=1e-9
        )

    return Job("accumulation", accumulate, right_sums, x.shape[0])


def _evaluation(table: BinTable, pyramid: Pyramid, bandwidth: float) -> Job:
    """Residual variance, curve and band at as many points as a curve has by default.

    On the finest level, where windows span the most bins.
    """
    shape = SHAPES[Smoothing().kernel]
    finest = pyramid.levels[0]
    band = Band()
    extent = (float(table.extent[0]), float(table.extent[1]))
    x = np.linspace(*extent, band.points)
    occupied = Occupied(finest.origin, finest.width, np.flatnonzero(finest.count))

    def evaluate() -> Points:
        fits = fit_level(finest, shape, bandwidth, least_weight(pyramid, shape))
        noise = estimate_noise(fits, "local-linear", shape, band.noise)
        return fit_points(
            x, fits, noise, shape, estimator="local-linear", reference=table.plan.reference,
            band=band, by_block=False, extent=extent, occupied=occupied,
        )  # fmt: skip

    def right_points(points: Points) -> None:
        errors = np.abs(points.estimate - mean_power_kw(x)) / points.std_error
        assert (errors < _STANDARD_ERRORS).all()

    return Job("curve and band", evaluate, right_points)


def _reading_off(columns: dict[str, np.ndarray]) -> Job:
    """A finished curve read off at a million places."""
    made = make_curve(columns, X, Y)
    places = np.random.default_rng(2).uniform(0.0, 25.0, PLACES)

    def right_values(values: np.ndarray) -> None:
        np.testing.assert_allclose(values, mean_power_kw(places), atol=0.1)

    return Job("curve read off", lambda: made.at(places), right_values, PLACES)
