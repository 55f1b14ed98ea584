"""The measurement of a machine, from the checks to the figures."""

from __future__ import annotations

import os
import secrets
import shutil
import tempfile
import time
from collections.abc import Iterator, Sequence
from contextlib import ExitStack, contextmanager
from datetime import UTC, datetime
from pathlib import Path

from fastsmooth.errors import InputError, WriteError
from fastsmooth.machine import (
    available_bytes,
    describe_machine,
    load_average,
    stolen_and_all_ticks,
)
from fastsmooth.measure.figures import JOBS, Figure, Loading, Measurement
from fastsmooth.measure.sizes import Sizes, choose_sizes
from fastsmooth.passes import Progress, silent
from fastsmooth.settings import check_flag, finite_number, usable_cores, whole_number

_FOLDER_PREFIX = "fastsmooth-bench-"


def measure_machine(
    *,
    threads: int | None = None,
    quick: bool = False,
    price_per_hour: float | None = None,
    folder: str | os.PathLike[str] | None = None,
    progress: Progress = silent,
) -> Measurement:
    """Measure this machine: memory, Parquet, whole curves, each kernel, over threads and rows.

    Takes about a minute on two processors. Invented Parquet files are written first and removed
    at the end, also after an error or an interruption.

    Parameters
    ----------
    threads : int or None
        Most threads; figures are taken with 1, 2, 4, ... up to it. None takes all processors.
    quick : bool
        Ten seconds and rough figures, at fewer sizes.
    price_per_hour : float or None
        What an hour of the machine costs, in any currency; kept for `Measurement.costs`.
    folder : path or None
        Where the temporary files go; None takes the system's place for them.
    progress : callable
        Told the stage, figures begun, and figures in all.

    Returns
    -------
    Measurement
        Figures with their spread, and what the machine is.

    Raises
    ------
    InputError
        A setting is of no use, or free memory does not suffice.
    WriteError
        The folder does not take the files.

    Examples
    --------
    >>> import fastsmooth
    >>> def machine_report():
    ...     found = fastsmooth.measure_machine(quick=True, price_per_hour=0.38)
    ...     found.save("this-machine.json")
    ...     return found.lines()
    """
    check_flag("--quick", quick)
    cores = usable_cores()
    most = cores if threads is None else whole_number("--threads", threads, 1, cores)
    if price_per_hour is not None:
        price_per_hour = check_price(price_per_hour)
    place = tempfile.gettempdir() if folder is None else os.fspath(folder)
    sizes = choose_sizes(describe_machine(), most, quick, available_bytes())
    check_room(sizes, most, place, available_bytes())
    return measure_sizes(sizes, most, quick, price_per_hour, place, progress)


def check_price(price: float) -> float:
    """Return a price per hour, or refuse what is none."""
    requirement, remedy = "be a positive number, a price per hour", "write 0.38, or leave it out"
    value = finite_number("--price", price, requirement, remedy)
    if not value > 0.0:
        raise InputError("--price", requirement, f"it is {value:g}", remedy)
    return value


def check_room(sizes: Sizes, threads: int, folder: str, available: int | None) -> None:
    """Refuse a folder or a machine that has no room for the measurement.

    Raises
    ------
    InputError
        Too little free memory.
    WriteError
        No such folder, one that cannot be written, or too little free space.
    """
    if not os.path.isdir(folder):
        what = "is no folder" if os.path.exists(folder) else "does not exist"
        raise WriteError(
            "--folder", "name a folder for temporary files", f"'{folder}' {what}",
            "make it first, or leave --folder out",
        )  # fmt: skip
    if not os.access(folder, os.W_OK | os.X_OK):
        raise WriteError(
            "--folder", "name a folder that may be written", f"'{folder}' may not",
            "name another folder",
        )  # fmt: skip
    free = shutil.disk_usage(folder).free
    if free < sizes.disk_bytes:
        raise WriteError(
            "--folder", f"have {_megabytes(sizes.disk_bytes)} free for temporary files",
            f"'{folder}' has {_megabytes(free)}",
            "free some space, name another folder, or give --quick",
        )  # fmt: skip
    needed = sizes.memory_bytes(threads)
    if available is not None and available < needed:
        raise InputError(
            "the machine", f"have {_megabytes(needed)} of free memory",
            f"it has {_megabytes(available)}",
            "end other programs, or give --quick or fewer --threads",
        )  # fmt: skip


def measure_sizes(
    sizes: Sizes, threads: int, quick: bool, price_per_hour: float | None, folder: str,
    progress: Progress,
) -> Measurement:  # fmt: skip
    """Measure at the sizes given; settings and room have been checked."""
    machine = describe_machine()
    load = load_average()
    ticks = stolen_and_all_ticks()
    measured_at = datetime.now(UTC).strftime("%Y-%m-%d %H:%M UTC")
    progress("loading the kernels (a first run compiles them)", 0, None)
    loading = load_kernels()
    progress("writing invented Parquet files", 0, None)
    with _temporary_folder(Path(folder)) as temporary:
        figures = _take_figures(sizes, threads, temporary, progress)
    return Measurement(
        machine=machine, measured_at=measured_at, threads=threads, quick=quick,
        price_per_hour=price_per_hour, loading=loading, load_average=load,
        stolen_share=_stolen_share(ticks, stolen_and_all_ticks()), figures=tuple(figures),
    )  # fmt: skip


@contextmanager
def _temporary_folder(parent: Path) -> Iterator[Path]:
    """Make a folder, and remove it whatever happens."""
    path = parent / f"{_FOLDER_PREFIX}{secrets.token_hex(8)}"
    # The name is known before the folder is made: no interruption finds one that nobody knows.
    try:
        path.mkdir(mode=0o700)
        yield path
    finally:
        if path.exists():
            shutil.rmtree(path)


def load_kernels() -> Loading:
    """Load all compiled kernels, compiling those that were never loaded, and tell the time."""
    import pkgutil
    import sys
    from importlib import import_module

    from fastsmooth import kernels

    names = [f"fastsmooth.kernels.{one.name}" for one in pkgutil.iter_modules(kernels.__path__)]
    present = all(name in sys.modules for name in names)
    start = time.perf_counter()
    from fastsmooth.kernels.compiled import cache_folder

    folder = cache_folder()
    before = _compiled_files(folder)
    for name in names:
        import_module(name)
    seconds = time.perf_counter() - start
    if present:
        return Loading(seconds, "present")
    # Without a folder that can be written, every run compiles.
    kept = folder is not None and _compiled_files(folder) == before
    return Loading(seconds, "loaded" if kept else "compiled")


def _compiled_files(folder: Path | None) -> int:
    return 0 if folder is None else sum(1 for _ in folder.rglob("*.nbc"))


def _take_figures(sizes: Sizes, threads: int, temporary: Path, progress: Progress) -> list[Figure]:
    from fastsmooth.measure import works
    from fastsmooth.measure.invented import write_files
    from fastsmooth.measure.timing import Crew, time_work

    start = time.monotonic()

    def is_enough(seconds: Sequence[float]) -> bool:
        return sizes.is_enough(seconds, time.monotonic() - start)

    files = write_files(temporary, sizes, threads)
    counts = works.thread_counts(threads)
    figures: list[Figure] = []
    with ExitStack() as stack:
        crew = stack.enter_context(Crew())
        stages = [
            works.memory_works(sizes, counts, crew),
            works.scan_works(files, sizes, counts, crew),
            works.curve_works(files, sizes, counts),
            works.accumulation_works(sizes, counts, crew),
            *(works.exact_works(rows, sizes, counts, crew) for rows in sizes.exact_rows),
            *(works.neighbour_works(rows, sizes, counts, crew) for rows in sizes.exact_rows),
            works.search_works(sizes, counts),
        ]
        total = sum(len(stage) for stage in stages)
        begun = 0
        while stages:
            # Taken out of the list, so that its arrays go before the next ones come.
            for work in stages.pop(0):
                progress(f"{work.job}, {work.case}", begun, total)
                figures += time_work(work, is_enough)
                begun += 1
    return sorted(figures, key=lambda one: JOBS.index(one.job))


def _stolen_share(before: tuple[int, int] | None, after: tuple[int, int] | None) -> float | None:
    if before is None or after is None or after[1] <= before[1]:
        return None
    return max(after[0] - before[0], 0) / (after[1] - before[1])


def _megabytes(size: float) -> str:
    return f"{size / 1e6:,.0f} MB"
