"""How much is measured: sizes that suit the machine, and what they need of it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

from fastsmooth.machine import Machine

MIB = 1 << 20
MILLION = 1_000_000

# Random digits take 16 bytes a row, sensor-like rows four; with page headers and dictionaries.
_DISK_BYTES_PER_ROW = 24
# Rows being made and written: some ten arrays of a file's rows.
_WRITER_BYTES_PER_ROW = 100
_MOST_WRITERS = 16
# Sorted rows, their powers, and what the generator needs.
_EXACT_BYTES_PER_ROW = 60
# The process itself, compiled code, and a table of 8192 bins and 32 folds per thread.
_BASE_BYTES = 400 * MIB
_TABLE_BYTES = 20 * MIB
_CACHES_OVER = 4
_LARGEST_COPY_BYTES = 2048 * MIB
_SLOW_ROUNDS, _HURRIED_ROUNDS = 3, 2
_MOST_ROUNDS = 200


@dataclass(frozen=True)
class Sizes:
    """What is measured, and how long.

    Attributes
    ----------
    copied_bytes : int
        Size of each of two arrays for the memory figures.
    files : int
        Parquet files of each kind.
    rows_per_file : int
        Rows in each, in two row groups.
    curve_files : tuple of int
        How many files the whole curve takes beside all of them.
    accumulated_rows : int
        Rows that each thread accumulates in a round.
    exact_rows : tuple of int
        Rows of the exact figures, ascending; the last but one also for other bandwidths.
    bandwidth_shares : tuple of float
        Bandwidths of the exact figures over the range of x; the first is the main one.
    neighbours : tuple of int
        Numbers of neighbours; the first is the main one.
    search_rows : int
        Rows behind the bin table that is searched.
    search_widths : int
        Bandwidths of the search.
    least_rounds : int
        A figure is timed at least so often.
    least_seconds : float
        A figure is timed until so much time has been spent on it.
    patience_seconds : float
        When all has taken so long, two rounds a figure must do.
    """

    copied_bytes: int
    files: int
    rows_per_file: int
    curve_files: tuple[int, ...]
    accumulated_rows: int
    exact_rows: tuple[int, ...]
    bandwidth_shares: tuple[float, ...]
    neighbours: tuple[int, ...]
    search_rows: int
    search_widths: int
    least_rounds: int
    least_seconds: float
    patience_seconds: float

    def is_enough(self, seconds: Sequence[float], elapsed_seconds: float = 0.0) -> bool:
        """Whether these rounds suffice: three of slow work, two once the patience is over.

        Busy processors stretch everything; what is measured then is rough however long it takes.
        """
        rounds, spent = len(seconds), sum(seconds)
        if rounds >= _HURRIED_ROUNDS and elapsed_seconds > self.patience_seconds:
            return True
        if rounds >= _MOST_ROUNDS or (rounds >= _SLOW_ROUNDS and spent >= 4 * self.least_seconds):
            return True
        return rounds >= self.least_rounds and spent >= self.least_seconds

    @property
    def disk_bytes(self) -> int:
        """Free space that the temporary files need."""
        return self.files * self.rows_per_file * _DISK_BYTES_PER_ROW

    @property
    def writers(self) -> int:
        """Most files written at a time."""
        return min(self.files, _MOST_WRITERS)

    def memory_bytes(self, threads: int) -> int:
        """Return the free memory needed: the largest stage, with the files in the cache."""
        return _BASE_BYTES + threads * _TABLE_BYTES + max(
            2 * self.copied_bytes,
            self.disk_bytes + min(threads, self.writers) * self.rows_per_file
            * _WRITER_BYTES_PER_ROW,
            self.disk_bytes + max(self.exact_rows) * _EXACT_BYTES_PER_ROW,
        )  # fmt: skip


def choose_sizes(machine: Machine, threads: int, quick: bool, available: int | None) -> Sizes:
    """Choose sizes for a machine.

    Parameters
    ----------
    machine : Machine
        Its caches decide how much is copied.
    threads : int
        Most threads; each gets two Parquet row groups or more.
    quick : bool
        Whether ten seconds must do.
    available : int or None
        Free memory in bytes; where it is short, ten million sorted rows are left out first, and
        then fewer Parquet files are written.

    Returns
    -------
    Sizes
        The sizes.
    """
    # Beyond all caches, or it would be them that are measured.
    copied = max((128 if quick else 256) * MIB, _CACHES_OVER * machine.last_cache_bytes)
    copied = min(copied, _LARGEST_COPY_BYTES, *(() if available is None else (available // 8,)))
    files, fewer = (max(n, 2 * threads) for n in ((10, 4) if quick else (48, 12)))
    exact = (100_000, MILLION) if quick else (100_000, MILLION, 10 * MILLION)
    made = Sizes(
        copied_bytes=copied // 4096 * 4096,
        files=files,
        rows_per_file=MILLION,
        curve_files=(1,) if quick else (1, 10),
        accumulated_rows=2 * MILLION,
        exact_rows=exact,
        bandwidth_shares=(0.03,) if quick else (0.03, 0.0003, 0.003, 0.3),
        neighbours=(100,) if quick else (100, 1, 10, 1000, 10_000),
        search_rows=2 * MILLION,
        search_widths=64,
        least_rounds=3 if quick else 5,
        least_seconds=0.05 if quick else 0.4,
        patience_seconds=10.0 if quick else 60.0,
    )
    if available is not None and made.memory_bytes(threads) > available:
        made = replace(made, exact_rows=tuple(n for n in exact if n <= MILLION))
    if available is not None and made.memory_bytes(threads) > available:
        made = replace(made, files=fewer)
    return made
