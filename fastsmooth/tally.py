"""What scored rows add up to, unit by unit, over batches in row order."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from fastsmooth.lookup import ABOVE, BELOW, ROW_STATUSES, ScoredRows, Units

Floats = NDArray[np.float64]
Integers = NDArray[np.int64]

# Stretches that the standard error of a mean rests on (Schmeiser 1982: 10 to 30 do).
STRETCHES = 30
_FEWEST_STRETCHES = 10
_STRETCHES_PER_BATCH = 64
_MOST_HELD = 1 << 18


class Tally:
    """Counts, sums, runs and stretches of each unit.

    A run is an unbroken sequence of a unit's own rows on the same side outside the limits. Made
    empty, updated batch by batch, merged in row order; merging accepts empties.

    Parameters
    ----------
    units : int
        Number of units, the one for unknown ones included.

    Attributes
    ----------
    counts : (units, len(ROW_STATUSES)) int64
        Rows by status.
    sums : (units,) float64
        Sum of the residuals of judged rows (inside, above or below).
    runs, longest : (units,) int64
        Number of runs, and rows of the longest.
    stretches : Stretches
        Sums over consecutive rows.
    """

    def __init__(self, units: int) -> None:
        self.units = units
        self.counts = np.zeros((units, len(ROW_STATUSES)), np.int64)
        self.sums = np.zeros(units)
        self.runs = np.zeros(units, np.int64)
        self.longest = np.zeros(units, np.int64)
        # The run at either end, which a neighbouring part may go on with: its rows and its side.
        self._head = np.zeros((2, units), np.int64)
        self._tail = np.zeros((2, units), np.int64)
        self.stretches = Stretches()

    @property
    def rows(self) -> Integers:
        """Rows of each unit."""
        return np.asarray(self.counts.sum(axis=1))

    def add(self, rows: ScoredRows, unit: Units) -> None:
        """Add rows that follow those added before.

        Parameters
        ----------
        rows : ScoredRows
            n rows.
        unit : int or (n,) int64
            Number of each row's unit.
        """
        if not rows.status.size:
            return
        part = Tally(self.units)
        judged = rows.status <= BELOW
        residual = rows.residual if judged.all() else np.where(judged, rows.residual, 0.0)
        if isinstance(unit, int):
            part.counts[unit] = np.bincount(rows.status, minlength=len(ROW_STATUSES))
            order = None
        else:
            code = unit * len(ROW_STATUSES) + rows.status
            part.counts[:] = np.bincount(code, minlength=part.counts.size).reshape(
                part.counts.shape
            )
            # Small integers sort in linear time.
            small = np.int16 if self.units <= np.iinfo(np.int16).max else np.int64
            order = np.argsort(unit.astype(small), kind="stable")
            residual, judged = residual[order], judged[order]
        part._add_stretches(residual, judged)
        part._add_runs(rows.status if order is None else rows.status[order])
        self.merge(part)

    def _add_stretches(self, residual: Floats, judged: NDArray[np.bool_]) -> None:
        """Sum residuals of rows sorted by unit over each unit's rows cut into equal stretches."""
        rows = self.rows
        met = np.flatnonzero(rows)
        cuts = max(1, _STRETCHES_PER_BATCH // met.size)
        share = np.arange(cuts) * rows[met, None] // cuts
        starts = np.cumsum(rows[met]) - rows[met]
        # A unit with fewer rows than cuts would have empty stretches, which begin twice.
        begin, kept = np.unique((starts[:, None] + share).ravel(), return_index=True)
        owner = np.repeat(met, cuts)[kept]
        sums = np.add.reduceat(residual, begin)
        self.sums[:] = np.bincount(owner, sums, self.units)
        counts = np.add.reduceat(judged, begin, dtype=np.int64)
        self.stretches.append(owner[counts > 0], counts[counts > 0], sums[counts > 0])

    def _add_runs(self, status: NDArray[np.int8]) -> None:
        """Find the runs in rows sorted by unit."""
        out = np.flatnonzero((status == ABOVE) | (status == BELOW))
        if not out.size:
            return
        rows = self.rows
        ends = np.cumsum(rows)
        unit = np.searchsorted(ends, out, side="right")
        side = status[out].astype(np.int64)
        new = np.ones(out.size, np.bool_)
        new[1:] = (np.diff(out) != 1) | (np.diff(side) != 0) | (np.diff(unit) != 0)
        first = np.flatnonzero(new)
        length = np.diff(np.append(first, out.size))
        unit, side, begin = unit[first], side[first], out[first]
        self.runs[:] = np.bincount(unit, minlength=self.units)
        np.maximum.at(self.longest, unit, length)
        at_head = begin == (ends - rows)[unit]
        at_tail = begin + length == ends[unit]
        self._head[:, unit[at_head]] = length[at_head], side[at_head]
        self._tail[:, unit[at_tail]] = length[at_tail], side[at_tail]

    def merge(self, later: Tally) -> None:
        """Add what was tallied over the rows that follow."""
        joined = (self._tail[0] > 0) & (self._tail[1] == later._head[1])
        length = np.where(joined, self._tail[0] + later._head[0], 0)
        self.longest = np.maximum(np.maximum(self.longest, later.longest), length)
        self.runs += later.runs
        self.runs -= joined
        rows, rows_later = self.rows, later.rows
        # A run that fills the whole of a part goes on at its other end.
        through = (self._head[0] == rows) & (joined | (rows == 0))
        head = np.where(through, self._head[0] + later._head[0], self._head[0])
        through_later = (later._tail[0] == rows_later) & (joined | (rows_later == 0))
        tail = np.where(through_later, self._tail[0] + later._tail[0], later._tail[0])
        side = np.where(through, later._head[1], self._head[1])
        self._head = np.stack([head, np.where(head > 0, side, 0)])
        side = np.where(through_later & (later._tail[0] == 0), self._tail[1], later._tail[1])
        self._tail = np.stack([tail, np.where(tail > 0, side, 0)])
        self.counts += later.counts
        self.sums += later.sums
        self.stretches.extend(later.stretches)

    def judged(self) -> Integers:
        """Return how many rows of each unit were held against the limits."""
        return np.asarray(self.counts[:, : BELOW + 1].sum(axis=1))

    def means(self) -> Floats:
        """Return the mean residual of each unit's judged rows; NaN without any."""
        judged = self.judged()
        return np.divide(self.sums, judged, out=np.full(self.units, np.nan), where=judged > 0)

    def std_errors(self) -> Floats:
        """Return the standard error of `means`; NaN where too few stretches tell."""
        return self.stretches.std_errors(self.units)


class Stretches:
    """Sums over stretches of consecutive rows of each unit, in row order.

    When there are too many, neighbours are joined, so memory does not grow with the rows.
    """

    def __init__(self) -> None:
        self._parts: list[tuple[Integers, Integers, Floats]] = []
        self._held = 0
        self._most = _MOST_HELD

    def append(self, unit: Integers, rows: Integers, sums: Floats) -> None:
        """Add stretches that follow those added before, at least one row in each."""
        self._parts.append((unit, rows, sums))
        self._held += unit.size
        if self._held > self._most:
            self._join()

    def extend(self, later: Stretches) -> None:
        """Add the stretches of the rows that follow."""
        for part in later._parts:
            self.append(*part)

    def _sorted(self) -> tuple[Integers, Integers, Floats]:
        """All stretches by unit, in row order within each."""
        if not self._parts:
            none = np.empty(0, np.int64)
            return none, none, np.empty(0)
        unit, rows, sums = (np.concatenate(part) for part in zip(*self._parts, strict=True))
        order = np.argsort(unit, kind="stable")
        return unit[order], rows[order], sums[order]

    def _join(self) -> None:
        """Join each unit's stretches into long ones of about equally many rows."""
        unit, rows, sums = self._sorted()
        met = int(np.count_nonzero(np.diff(unit))) + 1
        wanted = max(2 * STRETCHES, _MOST_HELD // (2 * met))
        group = _equal_groups(unit, rows, wanted)
        begin = np.flatnonzero(np.append(True, np.diff(group) != 0))
        self._parts = [(unit[begin], np.add.reduceat(rows, begin), np.add.reduceat(sums, begin))]
        self._held = begin.size
        # With very many units room is made for some stretches of each.
        self._most = max(_MOST_HELD, 2 * self._held)

    def std_errors(self, units: int) -> Floats:
        """Return the standard error of each unit's mean, honest where neighbours are alike.

        Each unit's stretches are joined into at most `STRETCHES` of about equally many rows,
        long ones that have little to do with each other where rows resemble only those nearby:
        the method of batch means (Schmeiser 1982, Operations Research 30:556). For stretches of
        n_g rows with sum s_g, mean m and n rows in all the variance is
        G / (G - 1) sum_g (s_g - m n_g)^2 / n^2 (Cochran 1977, Sampling Techniques, 6.4).

        Parameters
        ----------
        units : int
            Number of units.

        Returns
        -------
        (units,) float64
            Standard errors; NaN with fewer than ten stretches.
        """
        unit, rows, sums = self._sorted()
        total = np.bincount(unit, rows, units)
        whole = np.bincount(unit, sums, units)
        mean = np.divide(whole, total, out=np.zeros(units), where=total > 0)
        group = _equal_groups(unit, rows, STRETCHES)
        n_g = np.bincount(group, rows, units * STRETCHES).reshape(units, STRETCHES)
        s_g = np.bincount(group, sums, units * STRETCHES).reshape(units, STRETCHES)
        groups = np.count_nonzero(n_g, axis=1)
        squares = np.sum((s_g - mean[:, None] * n_g) ** 2, axis=1)
        enough = groups >= _FEWEST_STRETCHES
        variance = np.full(units, np.nan)
        np.divide(squares * groups, (groups - 1) * total**2, out=variance, where=enough)
        return np.sqrt(variance)


def _equal_groups(unit: Integers, rows: Integers, groups: int) -> Integers:
    """Deal each unit's stretches to `groups` of about equally many rows, in order.

    Parameters
    ----------
    unit, rows : (n,) int64
        Unit, ascending, and number of rows of each stretch.
    groups : int
        Number of groups.

    Returns
    -------
    (n,) int64
        unit * groups + group, ascending. The middle of a stretch decides.
    """
    before = np.cumsum(rows) - rows
    first = np.searchsorted(unit, unit)
    last = np.searchsorted(unit, unit, side="right") - 1
    total = before[last] + rows[last] - before[first]
    middle = before - before[first] + 0.5 * rows
    return np.asarray((middle * groups / total).astype(np.int64) + unit * groups)
