"""Figures of fresh processes: start-up, peak memory, first run ever and second run."""

import json
import os
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TypeVar

from bench.names import X, Y

T = TypeVar("T")

_ROOT = Path(__file__).parents[1]
_ENTRY = "from fastsmooth.cli import run; run()"
# What the compiled kernels and their modules cost to load, without any work.
_LOAD_KERNELS = (
    "from fastsmooth.kernels import accumulate, binned, localfit, pyramid; "
    "assert len(accumulate.accumulate_rows.signatures) == 1"
)


@dataclass(frozen=True)
class Peak:
    """Memory of one process that made a curve."""

    peak_bytes: int
    rows: int
    passes: int


@dataclass(frozen=True)
class Runs:
    """Seconds of whole processes that made and wrote a curve, picture aside."""

    first: float
    second: float


def seconds(arguments: Sequence[str], environment: Mapping[str, str] | None = None) -> float:
    """Run the interpreter with these arguments to its end; it must succeed."""
    start = time.perf_counter()
    subprocess.run(
        [sys.executable, *arguments], check=True, cwd=_ROOT, stdout=subprocess.DEVNULL,
        env=environment,
    )  # fmt: skip
    return time.perf_counter() - start


def start_up(rounds: int) -> dict[str, list[float]]:
    """Time start-ups, in turn, files in the operating system's cache.

    Returns
    -------
    dict of str to list of float
        Seconds of whole processes, one per round.
    """
    commands = {
        "interpreter": ["-c", "pass"],
        "import fastsmooth": ["-c", "import fastsmooth"],
        "fastsmooth --help": ["-c", _ENTRY, "--help"],
        "import make_curve": ["-c", "from fastsmooth import make_curve"],
        "load kernels": ["-c", _LOAD_KERNELS],
    }
    for arguments in commands.values():
        seconds(arguments)
    times: dict[str, list[float]] = {name: [] for name in commands}
    for _ in range(rounds):
        for name, arguments in commands.items():
            times[name].append(seconds(arguments))
    return times


def peak(files: Sequence[str]) -> Peak:
    """Return the peak memory of a fresh process that makes the curve of the files."""
    done = subprocess.run(
        [sys.executable, "-m", "bench.peak", *files],
        check=True, cwd=_ROOT, stdout=subprocess.PIPE, text=True,
    )  # fmt: skip
    told = json.loads(done.stdout)
    if told["code"] != 0:
        raise RuntimeError(f"the curve failed with exit code {told['code']}")
    return Peak(told["peak_bytes"], told["rows"], told["passes"])


def compile_kernels() -> float:
    """Return the seconds of a process that compiles every kernel, from an empty cache."""
    return _with_empty_cache(lambda environment: seconds(["-c", _LOAD_KERNELS], environment))


def load_kernels() -> float:
    """Return the seconds of a process that loads every kernel from the cache."""
    return seconds(["-c", _LOAD_KERNELS])


def first_and_second_run(files: Sequence[str]) -> Runs:
    """Time the first run ever, from an empty compile cache, and the run after it."""

    def both(environment: Mapping[str, str]) -> Runs:
        with tempfile.TemporaryDirectory() as folder:
            out = f"{folder}/curve.parquet"
            command = ["-c", _ENTRY, "curve", *files, "--x", X, "--y", Y, "--out", out, "--quiet"]
            return Runs(seconds(command, environment), seconds(command, environment))

    return _with_empty_cache(both)


def _with_empty_cache(work: Callable[[Mapping[str, str]], T]) -> T:
    with tempfile.TemporaryDirectory() as cache:
        # The other variable would win over the temporary folder.
        kept = {name: value for name, value in os.environ.items() if name != "NUMBA_CACHE_DIR"}
        result = work({**kept, "XDG_CACHE_HOME": cache})
        if not any(Path(cache).rglob("*.nbi")):
            raise RuntimeError("no kernel was compiled into the empty cache")
        return result
