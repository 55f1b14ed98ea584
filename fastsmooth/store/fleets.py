"""The curves of a store's units: from its sums, without reading a row again."""

from __future__ import annotations

import os
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.api import check_band, criterion_of, own_bandwidth, own_points
from fastsmooth.bintable import BinTable
from fastsmooth.fleet import Fleet
from fastsmooth.fromtable import check_rows_spared
from fastsmooth.grouping import Grouping, Key
from fastsmooth.manyunits import fleet_of_tables
from fastsmooth.passes import Counted, Progress, silent
from fastsmooth.plan import Sample
from fastsmooth.settings import Band, Reading, Smoothing
from fastsmooth.store.curves import told_of
from fastsmooth.store.opening import Store, Window, reading_of, with_store
from fastsmooth.store.settings import StoreSettings
from fastsmooth.unitjob import Job


@dataclass(frozen=True)
class StoredTables:
    """The tables of all units of a store.

    Attributes
    ----------
    counted : dict of tuple to Counted
        By unit.
    """

    counted: dict[Key, Counted]

    def table(self, key: Key) -> BinTable:
        """Return the table of a unit."""
        return self.counted[key].table

    def sample(self, key: Key) -> Sample:
        """Return some of its rows, in runs."""
        return self.counted[key].sample

    def shown(self, key: Key) -> NDArray[np.float64]:
        """Return x and y of a thin selection of its rows, (2, n)."""
        return self.counted[key].shown


def fleet_of_store(
    path: str | os.PathLike[str],
    asked: StoreSettings,
    by: Grouping,
    shared_bandwidth: bool,
    reading: Reading,
    smoothing: Smoothing,
    band: Band,
    progress: Progress = silent,
) -> Fleet:
    """Make the curve of every unit of a store, or of its last periods.

    Parameters
    ----------
    path : path
        The store's folder.
    asked : StoreSettings
        Columns that the caller named; they may only repeat the store's.
    by : Grouping
        Some of the columns by which the store keeps units apart; units that agree in them are
        taken together.
    shared_bandwidth : bool
        Whether all units get one width, chosen jointly.
    reading, smoothing, band
        As for `fastsmooth.store.curves.curve_of_store`.
    progress : callable
        Called as ``progress(stage, rows_done, rows_expected)``.

    Returns
    -------
    Fleet
        Widths are chosen among those that the store's bins resolve. The trace tells of the store
        under ``store``.

    Raises
    ------
    InputError
        A setting contradicts the store's, or needs every row.
    ReadError
        The store is damaged.
    """
    check_rows_spared(smoothing, band, "a store")

    def make(store: Store) -> Fleet:
        store.settings.check_agrees(asked)
        own = reading_of(store.settings, reading)
        check_band(smoothing, band)
        progress("opening", 0, None)
        window = Window(reading.last)
        counted = store.counted(window, by=by.words, threads=own.threads)
        source: Any = store.source
        job = Job(
            source, own, smoothing, band, by, criterion_of(own, smoothing),
            own_bandwidth(source, own, smoothing), own_points(source, own, band), shared_bandwidth,
        )  # fmt: skip
        table = BinTable(store.plan)
        table.tally.add(store.early(window))
        for one in counted.values():
            table.tally.add(one.table.tally)
        few = next(iter(counted.values()))
        together = Counted(table, few.sample, few.shown, few.cautions, 0)
        layout = {"bins": store.plan.bins, "folds": store.plan.folds}
        made = fleet_of_tables(
            job, StoredTables(counted), list(counted), together, layout, None, progress
        )
        return replace(made, trace={**made.trace, "store": told_of(store, reading.last)})

    return with_store(path, make)
