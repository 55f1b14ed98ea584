"""What is measured: memory, Parquet, whole curves, and each kernel alone.

Every function returns the pieces of work of one stage. Arrays are made when the first piece runs,
and are freed with the last one.
"""

from __future__ import annotations

from collections.abc import Sequence
from functools import cache, partial

import numpy as np

from fastsmooth.measure.figures import (
    ACCUMULATION,
    COPY,
    CURVE,
    EXACT,
    NEIGHBOURS,
    RANDOM,
    READ,
    SCAN,
    SCAN_BYTES,
    SEARCH,
    SENSOR,
)
from fastsmooth.measure.invented import HIGH_C, LOW_C, X, Y, random_rows, sorted_rows
from fastsmooth.measure.sizes import MILLION, Sizes
from fastsmooth.measure.timing import Crew, Work

_PIECE_BYTES = 4 * (1 << 20)
_ROW_BYTES = 16
# Rows that one thread takes at a time in the exact figures: many times what a window begins with.
_PART_ROWS = 16_384
_PARTS_PER_THREAD = 8
_KERNELS = ("biweight", "epanechnikov")
_BINS = 8192


def thread_counts(most: int) -> list[int]:
    """Return 1, 2, 4, ... and the most threads."""
    return sorted({*(1 << power for power in range(most.bit_length()) if 1 << power <= most), most})


def memory_works(sizes: Sizes, counts: Sequence[int], crew: Crew) -> list[Work]:
    """Copies and sums of arrays beyond all caches, in pieces of four mebibytes."""
    items = sizes.copied_bytes // 8
    piece = _PIECE_BYTES // 8
    pieces = [slice(start, min(start + piece, items)) for start in range(0, items, piece)]

    @cache
    def arrays() -> tuple[np.ndarray, np.ndarray]:
        return np.ones(items), np.zeros(items)

    def copy(threads: int) -> float:
        source, target = arrays()
        crew.map(threads, lambda one: np.copyto(target[one], source[one]), pieces)
        return float(target[0] + target[-1])

    def read(threads: int) -> float:
        source, _ = arrays()
        return sum(crew.map(threads, lambda one: float(source[one].sum()), pieces))

    taken = {"bytes": sizes.copied_bytes}
    gigabytes = sizes.copied_bytes / 1e9
    return [
        *(
            Work(COPY, "one array to another", "GB/s", n, 2.0 * gigabytes, partial(copy, n),
                 lambda found: found == 2.0, taken)
            for n in counts
        ),
        *(
            Work(READ, "one array", "GB/s", n, gigabytes, partial(read, n),
                 lambda found: found == items, taken)
            for n in counts
        ),
    ]  # fmt: skip


def scan_works(
    files: dict[str, list[str]], sizes: Sizes, counts: Sequence[int], crew: Crew
) -> list[Work]:
    """Parquet files decoded, a row group at a time, and nothing else done with them."""
    import pyarrow.parquet as pq

    from fastsmooth.source import CHUNK_ROWS

    def read(task: tuple[str, int]) -> int:
        with pq.ParquetFile(task[0], pre_buffer=True) as opened:
            batches = opened.iter_batches(
                CHUNK_ROWS, row_groups=[task[1]], columns=[X, Y], use_threads=False
            )
            return sum(batch.num_rows for batch in batches)

    @cache
    def tasks(kind: str) -> list[tuple[str, int]]:
        return [
            (file, group)
            for file in files[kind]
            for group in range(pq.read_metadata(file).num_row_groups)
        ]

    def scan(kind: str, threads: int) -> int:
        return sum(crew.map(threads, read, tasks(kind)))

    rows = sizes.files * sizes.rows_per_file
    return [
        Work(SCAN, kind, "million rows/s", n, rows / 1e6, partial(scan, kind, n),
             lambda found: found == rows, {"rows": rows},
             also=(SCAN_BYTES, "GB/s", rows * _ROW_BYTES / 1e9))
        for kind in (RANDOM, SENSOR) for n in counts
    ]  # fmt: skip


def curve_works(files: dict[str, list[str]], sizes: Sizes, counts: Sequence[int]) -> list[Work]:
    """Whole curves with their bands, from files; fewer rows too, with all threads."""
    from fastsmooth.api import make_curve
    from fastsmooth.settings import Reading

    def used(kind: str, taken: int, threads: int) -> int:
        made = make_curve(files[kind][:taken], X, Y, reading=Reading(threads=threads))
        return int(made.trace["rows"]["used"])

    def work(kind: str, taken: int, threads: int) -> Work:
        rows = taken * sizes.rows_per_file
        case = kind if taken == sizes.files else f"{kind}, {rows:,} rows"
        return Work(
            CURVE, case, "million rows/s", threads, rows / 1e6, partial(used, kind, taken, threads),
            lambda found: found == rows, {"rows": rows},
        )  # fmt: skip

    return [
        *(work(kind, sizes.files, n) for kind in (RANDOM, SENSOR) for n in counts),
        *(work(SENSOR, taken, counts[-1]) for taken in sizes.curve_files if taken < sizes.files),
    ]


def accumulation_works(sizes: Sizes, counts: Sequence[int], crew: Crew) -> list[Work]:
    """Rows that lie in a near cache into a table of bins; each thread has its own of both."""
    from fastsmooth.bintable import BinTable
    from fastsmooth.plan import Plan
    from fastsmooth.source import CHUNK_ROWS

    chunk = min(CHUNK_ROWS, sizes.accumulated_rows)
    turns = sizes.accumulated_rows // chunk

    @cache
    def hands() -> list[tuple[BinTable, np.ndarray, np.ndarray]]:
        plan = Plan.simple(low=LOW_C, high=HIGH_C, bins=_BINS, folds=2)
        made = []
        for seed in range(counts[-1]):
            rows = random_rows(chunk, seed)
            made.append((BinTable(plan), rows[X], rows[Y]))
        return made

    def add(hand: tuple[BinTable, np.ndarray, np.ndarray]) -> int:
        table, x, y = hand
        before = table.tally.used
        for _ in range(turns):
            table.add_rows(0, x, y)
        return table.tally.used - before

    def run(threads: int) -> int:
        return sum(crew.map(threads, add, hands()[:threads]))

    def work(threads: int) -> Work:
        rows = threads * turns * chunk
        return Work(
            ACCUMULATION, f"{_BINS:,} bins", "ns per row", threads, rows, partial(run, threads),
            lambda found: found == rows, {"rows": rows, "bins": _BINS},
        )  # fmt: skip

    return [work(n) for n in counts]


def _parts(rows: int, most_threads: int) -> list[tuple[int, int]]:
    """Ranges of rows, the same for any number of threads."""
    length = max(_PART_ROWS, -(-rows // (_PARTS_PER_THREAD * most_threads)))
    return [(start, min(start + length, rows)) for start in range(0, rows, length)]


def _main_rows(sizes: Sizes) -> int:
    """Rows at which bandwidths, numbers of neighbours and threads are varied: a million."""
    fitting = [n for n in sizes.exact_rows if n <= MILLION]
    return fitting[-1] if fitting else sizes.exact_rows[0]


def exact_works(rows: int, sizes: Sizes, counts: Sequence[int], crew: Crew) -> list[Work]:
    """Exact leave-one-out of both estimators over sorted rows: over n, kernels, h and threads."""
    from fastsmooth.kernels.shapes import SHAPES
    from fastsmooth.kernels.windows import score_windows

    none, everyone = np.empty(0), np.empty(0, bool)
    parts = _parts(rows, counts[-1])

    @cache
    def made() -> tuple[np.ndarray, np.ndarray]:
        return sorted_rows(rows)

    def score(name: str, share: float, threads: int) -> np.ndarray:
        x, y = made()
        coefficients = np.array(SHAPES[name].coefficients)

        def one(part: tuple[int, int]) -> np.ndarray:
            out = np.zeros((2, 5))
            score_windows(x, y, none, none, everyone, coefficients, share, *part, out)
            return out

        return np.sum(crew.map(threads, one, parts), axis=0)

    def is_right(found: np.ndarray) -> bool:
        # The noise has variance 1, and no window is empty but for the row itself.
        return bool(np.isfinite(found).all() and (found[:, 0] > 0.5 * (rows - found[:, 3])).all())

    main = rows == _main_rows(sizes)
    works = []
    for name in _KERNELS:
        for share in sorted(sizes.bandwidth_shares if main else sizes.bandwidth_shares[:1]):
            varied = counts if share == sizes.bandwidth_shares[0] and main else _ends(rows, counts)
            case = f"{name}, {rows:,} rows, h {100 * share:g} % of x"
            works += [
                Work(EXACT, case, "ns per point and bandwidth", n, rows,
                     partial(score, name, share, n), is_right, {"rows": rows})
                for n in varied
            ]  # fmt: skip
    return works


def neighbour_works(rows: int, sizes: Sizes, counts: Sequence[int], crew: Crew) -> list[Work]:
    """Nearest-neighbour means without the row itself over sorted rows: over n, k and threads."""
    from fastsmooth.kernels.neighbours import score_neighbours

    everyone = np.empty(0, bool)
    parts = _parts(rows, counts[-1])

    @cache
    def made() -> tuple[np.ndarray, np.ndarray]:
        return sorted_rows(rows)

    def score(k: int, threads: int) -> float:
        x, y = made()
        grid = np.array([k], np.int64)

        def one(part: tuple[int, int]) -> float:
            out = np.zeros(1)
            score_neighbours(x, y, everyone, grid, *part, out)
            return float(out[0])

        return sum(crew.map(threads, one, parts))

    main = rows == _main_rows(sizes)
    works = []
    for k in sorted(sizes.neighbours if main else sizes.neighbours[:1]):
        if k >= rows:
            continue
        varied = counts if k == sizes.neighbours[0] and main else _ends(rows, counts)
        works += [
            Work(NEIGHBOURS, f"k {k:,}, {rows:,} rows", "ns per point and k", n, rows,
                 partial(score, k, n), lambda found: found > 0.5 * rows, {"rows": rows})
            for n in varied
        ]  # fmt: skip
    return works


def _ends(rows: int, counts: Sequence[int]) -> list[int]:
    """One thread, and all of them where there are rows enough for them."""
    enough = rows // _PART_ROWS >= 2 * counts[-1]
    return sorted({1, counts[-1]}) if enough else [1]


def search_works(sizes: Sizes, counts: Sequence[int]) -> list[Work]:
    """The search of both estimators on a table of bins."""
    from fastsmooth.bintable import BinTable, Pyramid
    from fastsmooth.kernels.shapes import SHAPES
    from fastsmooth.passes import count_rows
    from fastsmooth.search import search_table
    from fastsmooth.settings import ESTIMATORS, Reading, Smoothing
    from fastsmooth.source import Columns, open_source

    @cache
    def made() -> tuple[BinTable, Pyramid]:
        with open_source(random_rows(sizes.search_rows, 0), Columns(X, Y)) as source:
            table = count_rows(source, Reading(threads=counts[-1])).table
        return table, Pyramid(table)

    def search(threads: int) -> bool:
        found = search_table(
            *made(), SHAPES[Smoothing().kernel], widths=sizes.search_widths, threads=threads
        )
        widths = [found.trails[name].bandwidth for name in ESTIMATORS]
        return all(0.0 < width < HIGH_C - LOW_C for width in widths)

    return [
        Work(SEARCH, f"{_BINS:,} bins, {sizes.search_widths} widths", "ms", n, 1.0,
             partial(search, n), lambda found: found,
             {"rows": sizes.search_rows, "bins": _BINS, "widths": sizes.search_widths})
        for n in counts
    ]  # fmt: skip
