"""How every kernel is compiled: the only place where compile flags stand.

Kernels have explicit signatures, so that each is compiled once, accepts read-only views of Arrow
buffers, and releases the interpreter lock. Compiled code is kept on disk in a folder whose name
hashes all of `kernels/` and the numba version, because numba's own stamp covers only the file
that defines a function and would serve stale code after an edit to a callee elsewhere.
"""

import hashlib
import os
import pickle
import shutil
import tempfile
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numba
from numba import types

# Read-only views and writable arrays both pass through these.
READ_1D = types.Array(types.float64, 1, "C", readonly=True)
READ_2D = types.Array(types.float64, 2, "C", readonly=True)
READ_3D = types.Array(types.float64, 3, "C", readonly=True)
READ_INT_1D = types.Array(types.int64, 1, "C", readonly=True)
READ_BOOL_1D = types.Array(types.boolean, 1, "C", readonly=True)
READ_SMALL_1D = types.Array(types.int16, 1, "C", readonly=True)
WRITE_1D = types.float64[::1]
WRITE_2D = types.float64[:, ::1]
WRITE_3D = types.float64[:, :, ::1]
WRITE_INT_1D = types.int64[::1]
WRITE_BOOL_1D = types.boolean[::1]

# "contract" allows fused multiply-add only: no sum is reordered, NaN and infinity keep their
# meaning, and the same machine gives the same bits whatever the number of threads.
_FLAGS = {"contract"}
# Adds "reassoc" for plain sums of independent terms, which vectorise only if they may be
# reordered. The order is fixed at compile time, so results still do not depend on threads.
_SUM_FLAGS = {"contract", "reassoc"}


def cache_folder() -> Path | None:
    """Return the writable folder for compiled code, or None when there is no such place."""
    digest = hashlib.sha256(numba.__version__.encode())
    for file in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(file.name.encode())
        digest.update(file.read_bytes())
    home = os.environ.get("NUMBA_CACHE_DIR") or os.environ.get("XDG_CACHE_HOME")
    try:
        root = Path(home) if home else Path.home() / ".cache"
        folder = root / "fastsmooth" / digest.hexdigest()[:16]
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            return folder
    except (OSError, RuntimeError):
        return None


_FOLDER = cache_folder()


def _compile(function: Callable[..., Any], signature: Any, flags: set[str]) -> Any:
    def build(cache: bool) -> Any:
        return numba.njit(
            signature,
            nogil=True,
            cache=cache,
            fastmath=flags,
            error_model="numpy",
            boundscheck=False,
        )(function)

    if _FOLDER is None:
        return build(cache=False)
    former = numba.config.CACHE_DIR
    numba.config.CACHE_DIR = str(_FOLDER)
    try:
        return build(cache=True)
    except (pickle.UnpicklingError, EOFError, OSError, KeyError, ValueError):
        # A damaged or half-written cache: start it afresh, and do without when that fails too.
        shutil.rmtree(_FOLDER, ignore_errors=True)
        return build(cache=False)
    finally:
        numba.config.CACHE_DIR = former


def kernel(signature: Any) -> Callable[[Callable[..., Any]], Any]:
    """Compile a function for one signature: no sum is reordered, fused multiply-add allowed."""
    return lambda function: _compile(function, signature, _FLAGS)


def sum_kernel(signature: Any) -> Callable[[Callable[..., Any]], Any]:
    """Compile as `kernel` does, and let the compiler reorder sums (fixed at compile time)."""
    return lambda function: _compile(function, signature, _SUM_FLAGS)


def helper(function: Callable[..., Any]) -> Any:
    """Compile a function that only other kernels call; it is inlined into them."""
    return numba.njit(nogil=True, error_model="numpy", inline="always")(function)
