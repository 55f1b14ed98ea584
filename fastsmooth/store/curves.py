"""The curve of a store: from its sums, without reading a row again."""

from __future__ import annotations

import os
from dataclasses import replace
from typing import Any

from fastsmooth.api import check_band, criterion_of
from fastsmooth.curve import Curve
from fastsmooth.fromtable import check_rows_spared, curve_of_counted
from fastsmooth.passes import Progress, check_rows, silent
from fastsmooth.settings import Band, Reading, Smoothing
from fastsmooth.store.opening import Store, Window, reading_of, with_store
from fastsmooth.store.settings import StoreSettings


def curve_of_store(
    path: str | os.PathLike[str],
    asked: StoreSettings,
    reading: Reading,
    smoothing: Smoothing,
    band: Band,
    progress: Progress = silent,
) -> Curve:
    """Make the curve of all rows of a store, or of those of its last periods.

    Parameters
    ----------
    path : path
        The store's folder.
    asked : StoreSettings
        Columns that the caller named; they may only repeat the store's.
    reading : Reading
        Filter, range, scale, folds and block may only repeat the store's too; `last` chooses
        periods.
    smoothing, band : Smoothing, Band
        As for `fastsmooth.make_curve`; engines that need every row are refused.
    progress : callable
        Called as ``progress(stage, rows_done, rows_expected)``.

    Returns
    -------
    Curve
        Units are taken together. The trace tells of the store under ``store``.

    Raises
    ------
    InputError
        A setting contradicts the store's, or needs every row.
    ReadError
        The store is damaged.
    """
    check_rows_spared(smoothing, band, "a store")

    def make(store: Store) -> Curve:
        store.settings.check_agrees(asked)
        own = reading_of(store.settings, reading)
        criterion_of(own, smoothing)
        check_band(smoothing, band)
        progress("opening", 0, None)
        counted = store.counted(Window(reading.last), threads=own.threads)[()]
        source: Any = store.source
        check_rows(counted.table, source, own)
        progress("searching", 0, None)
        made = curve_of_counted(
            counted, source, own, smoothing, band, "the rows were counted into a store"
        )
        return replace(made, trace={**made.trace, "store": told_of(store, reading.last)})

    return with_store(path, make)


def told_of(store: Store, last: str | None) -> dict[str, Any]:
    """Return what a trace tells of the store."""
    periods = store.period_labels(store.periods(Window(last)))
    return {
        "path": store.path, "generation": store.manifest.generation, "files": len(store.entries),
        "last": last, "periods": [periods[0], periods[-1]] if periods else None,
    }  # fmt: skip
