"""The bin table: sums per fold and bin that add up, and the levels made of them."""

from __future__ import annotations

import base64
import json
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.blocks import Dealer, merge_keys
from fastsmooth.errors import InputError
from fastsmooth.plan import Plan

if TYPE_CHECKING:
    import pyarrow as pa

    from fastsmooth.source import Chunk

Floats = NDArray[np.float64]

_PILOT = 7
_FIRST = (0, 1, 2, 3, 4, 5, 6)
_SECOND = (9, 10, 11, 12, 13, 14)
_PLAIN_NAMES = ("w", "wv", "wv2", "we", "wve", "wv2e", "we2")
_WEIGHTED_NAMES = (*_PLAIN_NAMES, "", "count", "w2", "w2v", "w2v2", "w2e", "w2ve", "w2e2")
_TABLE_KEY = b"fastsmooth.bin_table"
# A coarser level than this gains no time; wide windows keep their accuracy.
_FEWEST_BINS = 512


@dataclass
class Tally:
    """What became of the rows.

    Attributes
    ----------
    read : int
        Rows read, before anything was dropped.
    filtered : int
        Rows that the row filter dropped.
    refused : dict of str to int
        Rows refused, by reason.
    """

    read: int = 0
    filtered: int = 0
    refused: dict[str, int] = field(default_factory=dict)

    @property
    def used(self) -> int:
        """Rows in the table."""
        return self.read - self.filtered - sum(self.refused.values())

    def refuse(self, reason: str, rows: int) -> None:
        """Count refused rows."""
        if rows:
            self.refused[reason] = self.refused.get(reason, 0) + rows

    def add(self, other: Tally) -> None:
        """Add another tally to this one."""
        self.read += other.read
        self.filtered += other.filtered
        for reason, rows in other.refused.items():
            self.refuse(reason, rows)

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {
            "read": self.read,
            "filtered": self.filtered,
            "refused": dict(sorted(self.refused.items())),
            "used": self.used,
        }


def sum_names(plan: Plan) -> dict[str, int]:
    """Return the names of the sums in tables of a plan, each with its slot, in order."""
    names = _PLAIN_NAMES if plan.columns.weight is None else _WEIGHTED_NAMES
    return {name: slot for slot, name in enumerate(names) if name}


class BinTable:
    """Moment sums of rows per fold and bin; see `fastsmooth.kernels.accumulate` for the sums.

    Parameters
    ----------
    plan : Plan
        What all tables that are to be added must share.

    Attributes
    ----------
    sums : dict of int to (bins, slots) float64
        Per fold that has met a row.
    extent : (2,) float64
        Lowest and highest x accepted, on the plan's scale; (infinity, -infinity) when empty.
    tally : Tally
        What became of the rows.
    blocks : set
        Keys of the blocks met, up to a limit; empty without blocks.

    Examples
    --------
    >>> from fastsmooth.plan import Plan
    >>> plan = Plan.simple(low=0.0, high=10.0, bins=1024, folds=2)
    >>> table = BinTable(plan)
    >>> table.add_rows(fold=0, x=np.array([1.0, 2.0]), y=np.array([5.0, 6.0]))
    >>> float(table.total()[:, 0].sum())
    2.0
    """

    def __init__(self, plan: Plan) -> None:
        self.plan = plan
        self.sums: dict[int, Floats] = {}
        self.extent = np.array([np.inf, -np.inf])
        self.tally = Tally()
        self.blocks: set[Any] = set()

    @property
    def slots(self) -> int:
        """Sums per bin, padding included."""
        return 16 if self.plan.columns.weight is not None else 8

    def update(
        self, chunk: Chunk, task_index: int, row_in_task: int, dealer: Dealer | None = None
    ) -> None:
        """Add the rows of one chunk, each to the fold of its block or else of its run.

        Parameters
        ----------
        chunk : Chunk
            Rows in the file's own order; with a dealer, its first extra column is the block.
        task_index : int
            Place of the chunk's task among all tasks.
        row_in_task : int
            Rows of the task, after filters, that came before the chunk.
        dealer : Dealer or None
            Deals blocks to folds; None deals runs of consecutive rows.
        """
        self.tally.add(Tally(chunk.rows, chunk.filtered, dict(chunk.refused)))
        x, y, weight, count = chunk.x, chunk.y, chunk.weight, chunk.count
        if dealer is None:
            stretches = self.plan.run_stretches(task_index, row_in_task, x.shape[0])
        else:
            per_row, keys = dealer.deal(chunk.extra[0])
            self.blocks = merge_keys(self.blocks, keys)
            stretches = _stretches(per_row)
            if len(stretches) > max(4 * self.plan.folds, 8):
                # Blocks interleaved row by row: sorted by fold, each fold is one stretch.
                order = np.argsort(per_row, kind="stable")
                x, y = x[order], y[order]
                weight = None if weight is None else weight[order]
                count = None if count is None else count[order]
                stretches = _stretches(per_row[order])
        for fold, start, stop in stretches:
            if fold < 0:
                self.tally.refuse("block null", stop - start)
            else:
                self.add_rows(
                    fold, x[start:stop], y[start:stop],
                    None if weight is None else weight[start:stop],
                    None if count is None else count[start:stop], tallied=True,
                )  # fmt: skip

    def add_rows(
        self,
        fold: int,
        x: Floats,
        y: Floats,
        weight: Floats | None = None,
        count: Floats | None = None,
        *,
        tallied: bool = False,
    ) -> None:
        """Add rows to one fold; rows that cannot be used are counted in `tally`.

        Parameters
        ----------
        fold : int
            In [0, plan.folds).
        x, y : (rows,) float64
            C-contiguous; x in the column's own terms (before a log scale).
        weight, count : (rows,) float64 or None
            Precision and repeat count; None means 1.
        tallied : bool
            Whether the caller has counted the rows as read.
        """
        from fastsmooth.kernels import accumulate

        if not tallied:
            self.tally.read += x.shape[0]
        table = self.of_fold(fold)
        if self.plan.scale == "log":
            none = x <= 0.0
            self.tally.refuse("x not positive", int(np.count_nonzero(none)))
            x, y = np.log(x[~none]), y[~none]
            weight = None if weight is None else weight[~none]
            count = None if count is None else count[~none]
        refused = np.zeros(len(accumulate.REASONS), np.int64)
        start = (self.plan.origin, 1.0 / self.plan.width, self.extent, refused)
        if self.plan.columns.weight is not None:
            ones = np.ones(x.shape[0])
            accumulate.accumulate_weighted(
                table, x, y, ones if weight is None else weight, ones if count is None else count,
                *start,
            )  # fmt: skip
        elif count is not None:
            accumulate.accumulate_counted(table, x, y, count, *start)
        else:
            accumulate.accumulate_rows(table, x, y, *start)
        if refused.any():
            for reason, rows in zip(accumulate.REASONS, refused.tolist(), strict=True):
                self.tally.refuse(reason, rows)

    def of_fold(self, fold: int) -> Floats:
        """Return the sums of one fold, (bins, slots), to be added to; empty at first."""
        table = self.sums.get(fold)
        if table is None:
            table = np.zeros((self.plan.bins, self.slots))
            table[:, _PILOT] = self.plan.pilot_per_bin
            self.sums[fold] = table
        return table

    def merge(self, other: BinTable) -> None:
        """Add another table of the same plan to this one; the other is left as it was.

        Raises
        ------
        InputError
            The plans differ.
        """
        if other.plan != self.plan:
            raise InputError(
                "the tables",
                "share one plan",
                "their bins, folds or columns differ",
                "make both from the same plan",
            )
        self.tally.add(other.tally)
        self.blocks = merge_keys(self.blocks, other.blocks)
        low, high = other.extent
        self.extent = np.array([min(self.extent[0], low), max(self.extent[1], high)])
        if low > high:
            return
        bins = slice(self.plan.bin_of(low), self.plan.bin_of(high) + 1)
        for fold in sorted(other.sums):
            mine = self.sums.get(fold)
            if mine is None:
                # A fold of which every row was refused is no part of the data.
                if other.sums[fold][bins, 0].any():
                    self.sums[fold] = other.sums[fold].copy()
                continue
            # Sums that overflow are refused once all rows are in.
            with np.errstate(over="ignore", invalid="ignore"):
                mine[bins] += other.sums[fold][bins]
            mine[bins, _PILOT] = self.plan.pilot_per_bin[bins]

    def total(self) -> Floats:
        """Return the sums over all folds, (bins, slots); slot 7 holds the pilot."""
        total = np.zeros((self.plan.bins, self.slots))
        with np.errstate(over="ignore", invalid="ignore"):
            for fold in sorted(self.sums):
                total += self.sums[fold]
        total[:, _PILOT] = self.plan.pilot_per_bin
        return total

    def to_arrow(self) -> pa.Table:
        """Write the non-empty bins as an Arrow table, with the plan in its metadata.

        Returns
        -------
        pyarrow.Table
            Columns ``fold``, ``bin`` and one float64 column per sum.
        """
        import pyarrow as pa

        folds, bins, rows = [], [], []
        for fold in sorted(self.sums):
            used = np.flatnonzero(self.sums[fold][:, 0])
            folds.append(np.full(used.shape[0], fold, np.int32))
            bins.append(used.astype(np.int32))
            rows.append(self.sums[fold][used])
        sums = np.concatenate(rows) if rows else np.empty((0, self.slots))
        columns: dict[str, Any] = {
            "fold": np.concatenate(folds) if folds else np.empty(0, np.int32),
            "bin": np.concatenate(bins) if bins else np.empty(0, np.int32),
        }
        names = _WEIGHTED_NAMES if self.slots == 16 else _PLAIN_NAMES
        columns |= {name: sums[:, slot].copy() for slot, name in enumerate(names) if name}
        told = {
            "plan": self.plan.to_dict(),
            "extent": [base64.b64encode(self.extent.tobytes()).decode()],
            "tally": {k: v for k, v in self.tally.to_dict().items() if k != "used"},
        }
        return pa.table(columns).replace_schema_metadata({_TABLE_KEY: json.dumps(told).encode()})

    @classmethod
    def from_arrow(cls, table: pa.Table) -> BinTable:
        """Build a bin table from what `to_arrow` returned.

        Raises
        ------
        InputError
            The Arrow table is not a bin table.
        """
        metadata = table.schema.metadata or {}
        if _TABLE_KEY not in metadata:
            raise InputError(
                "the Arrow table",
                "be a bin table",
                "its metadata hold no plan",
                "write it with BinTable.to_arrow",
            )
        told = json.loads(metadata[_TABLE_KEY])
        made = cls(Plan.from_dict(told["plan"]))
        made.extent = np.frombuffer(base64.b64decode(told["extent"][0])).copy()
        made.tally = Tally(**told["tally"])
        names = _WEIGHTED_NAMES if made.slots == 16 else _PLAIN_NAMES
        folds = table["fold"].to_numpy()
        bins = table["bin"].to_numpy()
        for fold in np.unique(folds).tolist():
            rows = folds == fold
            sums = np.zeros((made.plan.bins, made.slots))
            sums[:, _PILOT] = made.plan.pilot_per_bin
            for slot, name in enumerate(names):
                if name:
                    sums[bins[rows], slot] = table[name].to_numpy()[rows]
            made.sums[int(fold)] = sums
        return made


def _stretches(per_row: NDArray[np.int64]) -> list[tuple[int, int, int]]:
    """Fold, first and last row (exclusive) of each stretch of rows of one fold."""
    if not per_row.size:
        return []
    starts = np.concatenate(([0], np.flatnonzero(per_row[1:] != per_row[:-1]) + 1))
    stops = np.append(starts[1:], per_row.size)
    return list(zip(per_row[starts].tolist(), starts.tolist(), stops.tolist(), strict=True))


@dataclass(frozen=True)
class Level:
    """All sums of a table at one bin width, laid out one array per sum.

    Attributes
    ----------
    origin, width : float
        Left end of the first bin and width of the bins, on the plan's scale.
    first : (7, bins)
        Sums of w (1, v, v^2, e, v e, v^2 e, e^2), e = y - reference - pilot.
    second : (6, bins) or (6, 0)
        Sums of w^2 (1, v, v^2, e, v e, e^2); without columns when every weight is 1.
    count : (bins,)
        Rows (sum of repeat counts).
    pilot : (bins,)
        Pilot less the plan's reference.
    folds : (folds, 7, bins)
        `first` of each fold that has rows.
    """

    origin: float
    width: float
    first: Floats
    second: Floats
    count: Floats
    pilot: Floats
    folds: Floats

    @property
    def bins(self) -> int:
        """Number of bins."""
        return self.first.shape[1]

    @cached_property
    def response(self) -> Floats:
        """Sums of w (y - reference) (1, v, v^2), (3, bins)."""
        return np.ascontiguousarray(self.first[3:6] + self.pilot * self.first[0:3])

    @property
    def centres(self) -> Floats:
        """Bin centres on the plan's scale."""
        return np.asarray(self.origin + self.width * (np.arange(self.bins) + 0.5))

    @property
    def squares(self) -> Floats:
        """Sums of w^2 (1, v, v^2), (3, bins)."""
        source = self.second if self.second.shape[1] else self.first
        return np.ascontiguousarray(source[0:3])

    def coarser(self) -> Level:
        """Return the level of twice the bin width."""
        from fastsmooth.kernels import pyramid

        half = self.bins // 2
        pilot = np.empty(half)
        pyramid.coarsen_pilot(self.first, self.pilot, pilot)
        folds = np.empty((self.folds.shape[0], 7, half))
        for fold in range(folds.shape[0]):
            pyramid.coarsen_first(self.folds[fold], self.pilot, pilot, folds[fold])
        first = np.empty((7, half))
        pyramid.coarsen_first(self.first, self.pilot, pilot, first)
        second = np.empty((6, half if self.second.shape[1] else 0))
        if second.shape[1]:
            pyramid.coarsen_second(self.second, self.pilot, pilot, second)
            count = self.count.reshape(half, 2).sum(axis=1)
        else:
            count = first[0]
        return Level(self.origin, 2.0 * self.width, first, second, count, pilot, folds)


class Pyramid:
    """The levels of a bin table, each bin of a level the exact merge of two below.

    Parameters
    ----------
    table : BinTable
        Finished table; it is not changed.
    keep : (bins,) or (folds, bins) bool or None
        Bins of the finest level (of each fold with rows) whose rows take part; None means all.
    """

    def __init__(self, table: BinTable, keep: NDArray[np.bool_] | None = None) -> None:
        self.plan = table.plan
        self.levels = [_finest(table, keep)]
        while self.levels[-1].bins > _FEWEST_BINS and self.levels[-1].bins % 2 == 0:
            self.levels.append(self.levels[-1].coarser())

    def level_for(self, bandwidth: float, bins_per_bandwidth: int) -> int:
        """Return the coarsest level at which the bandwidth still spans so many bins.

        Parameters
        ----------
        bandwidth : float
            On the plan's scale.
        bins_per_bandwidth : int
            Least number of bins; the finest level is taken when none has as many.
        """
        for index in range(len(self.levels) - 1, 0, -1):
            if bandwidth >= bins_per_bandwidth * self.levels[index].width:
                return index
        return 0


def _finest(table: BinTable, keep: NDArray[np.bool_] | None) -> Level:
    plan = table.plan
    used = sorted(table.sums)
    folds = np.empty((len(used), 7, plan.bins))
    second = np.zeros((6, plan.bins if table.slots == 16 else 0))
    count = np.zeros(plan.bins)
    for place, fold in enumerate(used):
        sums = table.sums[fold]
        if keep is not None:
            sums = sums * (keep[place] if keep.ndim == 2 else keep)[:, np.newaxis]
        folds[place] = sums[:, _FIRST].T
        if table.slots == 16:
            second += sums[:, _SECOND].T
            count += sums[:, 8]
    first = np.zeros((7, plan.bins))
    for fold in range(folds.shape[0]):
        first += folds[fold]
    if table.slots == 8:
        count = first[0]
    pilot = plan.pilot_per_bin - plan.reference
    return Level(plan.origin, plan.width, first, second, count, pilot, folds)
