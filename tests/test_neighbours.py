"""Nearest neighbours: means, leave-one-out over a grid of k, and tricube lines."""

import math

import numpy as np
import pytest
import statsmodels.api as sm
from fastsmooth.kernels import neighbours
from fastsmooth.kernels.neighbours import RADIUS, SLOPE, UNIT_LEVERAGE, VALUE
from hypothesis import given
from hypothesis import strategies as st
from sklearn.datasets import load_diabetes
from sklearn.model_selection import LeaveOneOut, cross_val_predict
from sklearn.neighbors import KNeighborsRegressor

from tests.oracle.windows import neighbours_left_out, neighbours_mean

NONE = np.empty(0)
ALL = np.empty(0, dtype=bool)


class Groups:
    """What `group_rows` makes of sorted rows."""

    def __init__(self, x, y, repeats=NONE):
        made = [np.full(len(x), np.nan) for _ in range(4)]
        n = neighbours.group_rows(
            np.asarray(x, float), np.asarray(y, float), np.asarray(repeats, float), *made
        )
        self.x, self.count, self.total, self.within = (one[:n].copy() for one in made)

    def means(self, points, k):
        points = np.asarray(points, float)
        out = np.full((3, points.size), -1.0)
        neighbours.neighbour_means(points, self.x, self.count, self.total, k, out)
        return out

    def scores(self, grid, begin=0, end=None, scored=None):
        out = np.full(len(grid), -1.0)
        scored = scored or self
        neighbours.score_groups(
            self.x, self.count, self.total, scored.count, scored.total, scored.within,
            np.asarray(grid, np.int64), begin, self.x.size if end is None else end, out,
        )  # fmt: skip
        return out

    def lines(self, points, k):
        points = np.asarray(points, float)
        out = np.full((4, points.size), -1.0)
        neighbours.fit_lines(points, self.x, self.count, self.total, k, out)
        return out


def scores(x, y, grid, scored=ALL, begin=0, end=None):
    out = np.full(len(grid), -1.0)
    neighbours.score_neighbours(
        x, y, scored, np.asarray(grid, np.int64), begin, len(x) if end is None else end, out
    )
    return out


def tricube_line(place, x, y, counts, k):
    """Cleveland (1979), by the formulas: value, slope, leverage of a row at the place, radius."""
    copies = sorted(
        abs(one - place) for one, c in zip(x, counts, strict=True) for _ in range(int(c))
    )
    radius = copies[k - 1]
    if radius == 0.0:
        rows = [i for i, one in enumerate(x) if one == place]
        n = math.fsum(counts[i] for i in rows)
        return math.fsum(counts[i] * y[i] for i in rows) / n, 0.0, 1.0 / n, 0.0
    w = [
        c * (1.0 - min(abs(one - place) / radius, 1.0) ** 3) ** 3
        for one, c in zip(x, counts, strict=True)
    ]
    s0 = math.fsum(w)
    if s0 == 0.0:
        return math.nan, math.nan, math.nan, radius
    middle = math.fsum(a * (one - place) for a, one in zip(w, x, strict=True)) / s0
    mean = math.fsum(a * z for a, z in zip(w, y, strict=True)) / s0
    spread = math.fsum(a * (one - place - middle) ** 2 for a, one in zip(w, x, strict=True))
    second = math.fsum(a * (one - place) ** 2 for a, one in zip(w, x, strict=True))
    if spread <= 1e-10 * second:
        return mean, 0.0, 1.0 / s0, radius
    slope = (
        math.fsum(
            a * (one - place - middle) * (z - mean) for a, one, z in zip(w, x, y, strict=True)
        )
        / spread
    )
    return mean - middle * slope, slope, 1.0 / s0 + middle**2 / spread, radius


@st.composite
def rows(draw, largest=30):
    """Sorted x with ties, even steps (equal distances on both sides) and free places; y; counts."""
    n = draw(st.integers(1, largest))
    step = draw(st.sampled_from([1.0, 0.25]))
    places = st.one_of(
        st.integers(0, 10).map(float), st.integers(0, 10 * 2**20).map(lambda v: v / 2.0**20)
    )
    offset = draw(st.sampled_from([0.0, 1e9]))
    x = sorted(offset + step * place for place in draw(st.lists(places, min_size=n, max_size=n)))
    y = draw(st.lists(st.floats(-9.0, 9.0), min_size=n, max_size=n))
    counts = draw(st.lists(st.integers(1, 3), min_size=n, max_size=n))
    return x, y, counts


@given(rows(), st.data())
def test_generated_means(made, data):
    x, y, counts = made
    k = data.draw(st.integers(1, sum(counts)))
    groups = Groups(x, y, counts)
    points = sorted({*x, x[0] - 1.0, x[0] + 2.5, x[-1] + 7.0})
    found = groups.means(points, k)
    for i, place in enumerate(points):
        expected = neighbours_mean(place, x, y, counts, k)
        assert found[:, i] == pytest.approx(expected, rel=1e-12, abs=1e-12)


@given(rows(largest=14), st.booleans())
def test_generated_leave_one_out(made, counted):
    x, y, counts = made
    counts = counts if counted else [1] * len(x)
    grid = list(range(1, sum(counts) + 2))
    found = Groups(x, y, counts).scores(grid)
    for k, score in zip(grid, found, strict=True):
        if k >= sum(counts):
            assert math.isnan(score)
        else:
            assert score == pytest.approx(
                neighbours_left_out(x, y, counts, k), rel=1e-11, abs=1e-11
            )


@given(rows(), st.data())
def test_distinct_rows_are_groups_of_one(made, data):
    """The fast case and the general one give the same, on rows that are all distinct."""
    x, y, _ = made
    x, y = np.array(sorted(set(x))), np.array(y)[: len(set(x))]
    scored = np.array(data.draw(st.lists(st.booleans(), min_size=x.size, max_size=x.size)))
    grid = list(range(1, x.size + 2))
    groups = Groups(x, y)
    assert scores(x, y, grid) == pytest.approx(
        groups.scores(grid), rel=1e-11, abs=1e-11, nan_ok=True
    )
    part = Groups(x, y)
    part.count, part.total = scored.astype(float), np.where(scored, y, 0.0)
    assert scores(x, y, grid, scored) == pytest.approx(
        groups.scores(grid, scored=part), rel=1e-11, abs=1e-11, nan_ok=True
    )


@pytest.mark.parametrize("kind", ["random", "even", "skewed", "far apart"])
def test_long_data(kind):
    """Several slots and anchors, windows short and long, jumps of the window."""
    rng = np.random.default_rng(2)
    n = 6000
    x = {
        "random": lambda: rng.uniform(size=n),
        "even": lambda: np.arange(n) / 8.0,
        "skewed": lambda: rng.exponential(1.0, n) ** 3,
        "far apart": lambda: np.r_[rng.uniform(size=n - 10), rng.uniform(50.0, 60.0, 10)],
    }[kind]()
    x, y = np.sort(x), rng.normal(size=n)
    grid = [1, 2, 7, 15, 16, 17, 90, 1000, 4097, n - 1, n]
    general = Groups(x, y).scores(grid)
    assert scores(x, y, grid) == pytest.approx(general, rel=1e-11, nan_ok=True)
    for k, score in zip(grid[2:9:3], general[2:9:3], strict=True):
        picked = range(0, n, 61)
        squares = []
        for i in picked:
            distance = np.abs(np.delete(x, i) - x[i])
            radius = np.partition(distance, k - 1)[k - 1]
            others = np.delete(y, i)
            inside, border = others[distance < radius], others[distance == radius]
            mean = (inside.sum() + (k - inside.size) * border.mean()) / k
            squares.append((y[i] - mean) ** 2)
            alone = scores(x, y, [k], begin=i, end=i + 1)[0]
            assert alone == pytest.approx(squares[-1], rel=1e-10)
        mask = np.zeros(n, dtype=bool)
        mask[picked] = True
        assert scores(x, y, [k], mask)[0] == pytest.approx(math.fsum(squares), rel=1e-11)
        assert score > math.fsum(squares)


def test_ranges_add_up():
    rng = np.random.default_rng(5)
    x, y = np.sort(rng.uniform(size=5000)), rng.normal(size=5000)
    groups = Groups(np.round(x, 3), y)
    grid = [3, 40, 900]
    whole = scores(x, y, grid)
    parts = sum(scores(x, y, grid, begin=a, end=a + 1250) for a in range(0, 5000, 1250))
    assert parts == pytest.approx(whole, rel=1e-11)
    cut = groups.x.size // 3
    parts = groups.scores(grid, end=cut) + groups.scores(grid, begin=cut)
    assert parts == pytest.approx(groups.scores(grid), rel=1e-11)


def test_one_huge_value_stays_in_its_windows():
    rng = np.random.default_rng(7)
    x, y = np.sort(rng.uniform(size=4000)), rng.normal(size=4000)
    spoilt = y.copy()
    spoilt[2222] = 1e33
    for k in (5, 16, 700):
        clean, dirty = Groups(x, y).means(x, k), Groups(x, spoilt).means(x, k)
        meets = np.abs(x - x[2222]) <= clean[2]
        assert np.array_equal(dirty[0, ~meets], clean[0, ~meets])
        assert np.all(dirty[0, meets] > 1e29)
        for rest in (slice(0, 1000), slice(3500, 4000)):
            args = {"begin": rest.start, "end": rest.stop}
            assert np.array_equal(scores(x, y, [k], **args), scores(x, spoilt, [k], **args))


def test_shift_and_order_do_not_matter():
    rng = np.random.default_rng(8)
    x = np.sort(rng.integers(0, 900, 2000) / 4.0)
    y = rng.normal(size=2000)
    order = np.lexsort((rng.random(2000), x))
    grid = [1, 5, 60]
    here = Groups(x, y).scores(grid)
    assert np.array_equal(Groups(x + 2.0**46, y).scores(grid), here)
    assert Groups(x, y[order]).scores(grid) == pytest.approx(here, rel=1e-12)


def test_groups():
    made = Groups([1.0, 1.0, 4.0, 5.0, 5.0, 5.0], [1.0, 3.0, 7.0, 1.0, 2.0, 6.0])
    assert made.x.tolist() == [1.0, 4.0, 5.0]
    assert made.count.tolist() == [2.0, 1.0, 3.0]
    assert made.total.tolist() == [4.0, 7.0, 9.0]
    assert made.within.tolist() == [2.0, 0.0, 14.0]
    counted = Groups([1.0, 4.0, 4.0], [2.0, 7.0, 1.0], [3.0, 2.0, 1.0])
    assert counted.count.tolist() == [3.0, 3.0]
    assert counted.total.tolist() == [6.0, 15.0]
    assert counted.within.tolist() == [0.0, 24.0]
    assert Groups([], []).x.size == 0


@pytest.mark.parametrize("n", [0, 1, 2, 3])
def test_hardly_any_rows(n):
    x, y = np.arange(float(n)), np.arange(float(n)) ** 2
    groups = Groups(x, y)
    expected = {0: [], 1: [], 2: [2.0], 3: [1.0 + 1.0 + 9.0 + 3.0, 0.5**2 + 1.0 + 3.5**2]}[n]
    if n == 3:
        # Row 1 lies half way: its nearest is half row 0, half row 2.
        expected[0] = 1.0 + (1.0 - 2.0) ** 2 + 9.0
        expected[1] = 2.5**2 + 1.0 + 3.5**2
    for found in (scores(x, y, [1, 2, 3]), groups.scores([1, 2, 3])):
        assert found[: len(expected)].tolist() == pytest.approx(expected)
        assert np.isnan(found[max(n - 1, 0) :]).all()
    assert np.isnan(groups.means([0.0], n + 1)).all()
    assert np.isnan(groups.lines([0.0], n + 1)).all()
    assert groups.means([], 1).shape == (3, 0)


def test_all_rows_tied():
    y = np.array([1.0, 4.0, 5.0, 10.0])
    groups = Groups(np.full(4, 3.0), y)
    assert groups.means([3.0, 8.0], 2).T.tolist() == [[5.0, 0.25, 0.0], [5.0, 0.5, 5.0]]
    left_out = math.fsum((one - (20.0 - one) / 3.0) ** 2 for one in y)
    assert groups.scores([1, 2, 3]) == pytest.approx([left_out] * 3)


# Lines.


@given(rows(largest=20), st.data())
def test_generated_lines(made, data):
    x, y, counts = made
    k = data.draw(st.integers(1, sum(counts)))
    groups = Groups(x, y, counts)
    points = sorted({*x, x[0] + 2.625, x[-1] + 7.0})
    found = groups.lines(points, k)
    for i, place in enumerate(points):
        value, slope, leverage, radius = tricube_line(place, x, y, counts, k)
        assert found[RADIUS, i] == radius
        if math.isnan(value):
            assert np.isnan(found[:3, i]).all()
            continue
        if radius > 0.0 and leverage > 1e6:
            continue  # all weight at the very end of the window, where rounding decides it
        assert found[VALUE, i] == pytest.approx(value, rel=1e-8, abs=1e-8)
        assert found[SLOPE, i] == pytest.approx(slope, rel=1e-6, abs=1e-7)
        assert found[UNIT_LEVERAGE, i] == pytest.approx(leverage, rel=1e-8)


# Other people's code.


def body_mass():
    """442 patients: progression of diabetes on body mass index (Efron et al. 2004)."""
    bunch = load_diabetes(scaled=False)
    order = np.argsort(bunch.data[:, 2], kind="stable")
    return bunch.data[order, 2].copy(), bunch.target[order].copy()


def nile():
    data = sm.datasets.nile.load_pandas().data
    return data["year"].to_numpy(float), data["volume"].to_numpy(float)


@pytest.mark.parametrize("k", [1, 4, 25, 99])
def test_leave_one_out_of_scikit_learn(k):
    rng = np.random.default_rng(k)
    x, y = np.sort(rng.normal(size=150)), rng.normal(size=150)
    guess = cross_val_predict(KNeighborsRegressor(k), x[:, None], y, cv=LeaveOneOut())
    expected = math.fsum((y - guess) ** 2)
    assert scores(x, y, [k])[0] == pytest.approx(expected, rel=1e-12)
    fit = KNeighborsRegressor(k).fit(x[:, None], y)
    points = np.linspace(-4.0, 4.0, 33)
    assert Groups(x, y).means(points, k)[0] == pytest.approx(
        fit.predict(points[:, None]), abs=1e-12
    )


@pytest.mark.parametrize(("read", "k"), [(nile, 12), (nile, 77), (body_mass, 40)])
def test_lines_are_those_of_statsmodels(read, k):
    """Its locally weighted regression without robustness rounds (Cleveland 1979)."""
    x, y = read()
    n = x.size
    expected = sm.nonparametric.lowess(
        y, x, frac=(k + 0.5) / n, it=0, delta=0.0, return_sorted=False
    )
    groups = Groups(x, y)
    found = groups.lines(groups.x, k)[VALUE]
    assert found == pytest.approx(expected[np.searchsorted(x, groups.x)], rel=1e-11)
