"""Which rows a store keeps: a thin selection of all, and some files' first rows in their order."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

from fastsmooth.store.ledger import Basis

Integers = NDArray[np.int64]

_MASK = (1 << 64) - 1
_RUN_ROWS = 4096
_RUN_ROWS_OF_UNIT = 512
_SHOWN_ROWS = 50_000
_SHOWN_ROWS_OF_UNITS = 200_000


def shown_cap(basis: Basis) -> int:
    """Return how many rows a store keeps to be shown, about."""
    return _SHOWN_ROWS_OF_UNITS if basis.settings.by else _SHOWN_ROWS


def run_rows(basis: Basis) -> int:
    """Return how many of a file's first rows are kept as they follow one another."""
    return _RUN_ROWS_OF_UNIT if basis.settings.by else _RUN_ROWS


def level_for(rows: int, basis: Basis) -> int:
    """Return the level at which so many rows leave at most as many as a store keeps to be shown."""
    return max(0, math.ceil(math.log2(max(rows, 1) / shown_cap(basis))))


def offset_of(number: int) -> int:
    """Return a random number below 2^48 that depends on a number alone (SplitMix64).

    Rows of a row group are numbered from it on: the selection of every so many rows then begins
    anywhere.
    """
    state = (number + 1) * 0x9E3779B97F4A7C15 & _MASK
    state = (state ^ (state >> 30)) * 0xBF58476D1CE4E5B9 & _MASK
    state = (state ^ (state >> 27)) * 0x94D049BB133111EB & _MASK
    return (state ^ (state >> 31)) >> 16


def levels_of(marks: Integers) -> NDArray[np.int16]:
    """Return how many zeros each number ends in: one in two to the power l has l or more."""
    lowest = np.maximum(marks & -marks, 1)
    return np.log2(lowest.astype(np.float64)).astype(np.int16)


def keeps_run(ordinal: int, files_of_unit: float, basis: Basis) -> bool:
    """Tell whether a file's first rows are kept: of all files that hold a unit about sixteen do.

    Parameters
    ----------
    ordinal : int
        Place of the file in the ledger.
    files_of_unit : float
        How many files hold rows of a unit, on average.
    basis : Basis
        Stores of many units keep eight for each.
    """
    if ordinal == 0:
        return True
    level = math.floor(math.log2(max(1.0, files_of_unit / (8 if basis.settings.by else 16))))
    return offset_of(ordinal) & ((1 << level) - 1) == 0
