"""Counts, runs and standard errors of scored rows against plain loops."""

import math
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth.lookup import ScoredRows
from fastsmooth.tally import Stretches, Tally
from tests.scored_rows import (
    tally_by_hand,
)


@given(
    rows=st.lists(st.tuples(st.integers(0, 2), st.sampled_from([0, 0, 1, 1, 1, 2, 3, 5])),
                  max_size=40),
    cuts=st.lists(st.integers(0, 40), max_size=5),
    grouped=st.booleans(),
)  # fmt: skip
def test_tally_of_parts_is_that_of_the_whole(rows, cuts, grouped):
    unit = np.array([one for one, _ in rows], np.int64)
    status = np.array([one for _, one in rows], np.int8)
    residual = np.where(status < 3, np.arange(status.size) - 3.0, np.nan)
    ends = [0, *sorted(min(cut, status.size) for cut in cuts), status.size]
    parts = []
    for begin, end in pairwise(ends):
        part = Tally(4)
        own = slice(begin, end)
        piece = ScoredRows(residual[own], residual[own], residual[own], status[own])
        alone = end > begin and np.unique(unit[own]).size == 1
        part.add(piece, int(unit[begin]) if alone else unit[own])
        parts.append(part)
    if grouped and len(parts) > 2:
        # (a + b) + c = a + (b + c)
        parts[1].merge(parts.pop(2))
    whole = Tally(4)
    for part in parts:
        whole.merge(part)
    for u, (counts, runs, longest) in enumerate(tally_by_hand(4, status.tolist(), unit.tolist())):
        assert whole.counts[u].tolist() == counts
        assert (whole.runs[u], whole.longest[u]) == (runs, longest)
        own = [r for r, s, one in zip(residual.tolist(), status, unit, strict=True)
               if one == u and s < 3]  # fmt: skip
        assert whole.sums[u] == pytest.approx(sum(own))
        assert whole.judged()[u] == len(own)


def error_by_hand(residual, groups):
    """Batch means over `groups` equal stretches."""
    size = len(residual) // groups
    means = [sum(residual[g * size : (g + 1) * size]) / size for g in range(groups)]
    middle = sum(means) / groups
    return math.sqrt(sum((one - middle) ** 2 for one in means) / (groups - 1) / groups)


def add_all(residual, rows_per_batch, unit=0, units=2):
    tally = Tally(units)
    for begin in range(0, residual.size, rows_per_batch):
        part = residual[begin : begin + rows_per_batch]
        tally.add(ScoredRows(part, part, part, np.zeros(part.size, np.int8)), unit)
    return tally


def test_standard_error_is_that_of_batch_means():
    residual = np.random.default_rng(5).normal(size=64 * 30 * 10)
    # 30 batches of 640 rows, each cut into 64 stretches of 10 rows.
    tally = add_all(residual, 640)
    assert tally.std_errors()[0] == pytest.approx(error_by_hand(residual.tolist(), 30))
    assert math.isnan(tally.std_errors()[1])
    assert tally.means()[0] == pytest.approx(residual.mean())


def test_standard_error_covers_the_mean_of_alike_neighbours():
    # An autoregressive series: rho 0.98 makes the mean's variance 99 times that of white noise.
    rng = np.random.default_rng(6)
    inside, naive, runs = 0, 0, 200
    for _ in range(runs):
        noise = rng.normal(size=30_000)
        series = np.empty(noise.size)
        level = rng.normal() / math.sqrt(1.0 - 0.98**2)
        for place, one in enumerate(noise.tolist()):
            level = 0.98 * level + one
            series[place] = level
        tally = add_all(series, 4096)
        inside += abs(tally.means()[0]) < 2.045 * tally.std_errors()[0]
        naive += abs(tally.means()[0]) < 1.96 * series.std() / math.sqrt(series.size)
    # 95 % of 200 is 190, give or take 3.1.
    assert inside >= 180
    assert naive < 60


def test_few_rows_have_no_standard_error():
    assert math.isnan(add_all(np.ones(9), 9).std_errors()[0])
    assert add_all(np.ones(10), 10).std_errors()[0] == 0.0


def test_stretches_are_joined_when_there_are_many(monkeypatch):
    monkeypatch.setattr("fastsmooth.tally._MOST_HELD", 400)
    rng = np.random.default_rng(7)
    held, given_rows, given_sums = Stretches(), np.zeros(3, int), np.zeros(3)
    for _ in range(2000):
        unit = np.sort(rng.integers(0, 3, 8))
        rows = rng.integers(1, 9, 8)
        sums = rng.normal(size=8) * np.sqrt(rows)
        held.append(unit, rows, sums)
        assert held._held <= 408
        np.add.at(given_rows, unit, rows)
        np.add.at(given_sums, unit, sums)
    unit, rows, sums = held._sorted()
    for u in range(3):
        own = rows[unit == u]
        assert own.sum() == given_rows[u]
        assert sums[unit == u].sum() == pytest.approx(given_sums[u])
        # None holds more than a few of the sixty parts that are kept.
        assert own.max() < given_rows[u] / 20
    np.testing.assert_allclose(held.std_errors(3), 1.0 / np.sqrt(given_rows), rtol=0.4)
