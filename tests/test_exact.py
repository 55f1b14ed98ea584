"""The exact engine: sums over rows in memory, and when it runs."""

from itertools import pairwise

import numpy as np
import pyarrow as pa
import pytest
from fastsmooth.kernels import foldscores, windows
from fastsmooth.kernels.shapes import SHAPES
from hypothesis import given
from hypothesis import strategies as st

from fastsmooth import Band, InputError, Reading, Smoothing, make_curve
from fastsmooth.exact import AUTO_ROWS, ascends, bytes_per_row
from fastsmooth.source import Columns
from tests import cases
from tests.conftest import write_parquet
from tests.oracle import many_rows

EXACT = Smoothing(engine="exact")
ROWS = cases.make_rows("clustered", 4000, seed=3)


def curve(data=None, smoothing=EXACT, **options):
    data = ROWS.columns() if data is None else data
    return make_curve(data, "wet_bulb_c", "power_kw", smoothing=smoothing, **options)


def refusal(smoothing=EXACT, **options):
    with pytest.raises(InputError) as caught:
        curve(smoothing=smoothing, **options)
    return str(caught.value)


# Which engine runs.


def test_auto_is_exact_up_to_so_many_rows_and_says_why():
    few = curve(smoothing=Smoothing())
    assert few.trace["engine"]["name"] == "exact"
    assert few.trace["engine"]["reason"] == f"at most {AUTO_ROWS:,} rows"
    assert few.trace["engine"]["error_in_noise_sd"] == 0.0
    many = cases.make_rows("uniform", AUTO_ROWS + 1, seed=1).columns()
    made = curve(many, Smoothing(widths=8))
    assert made.trace["engine"]["name"] == "binned"
    assert made.trace["engine"]["reason"] == f"more than {AUTO_ROWS:,} rows"


def test_auto_bins_for_a_kernel_without_an_end():
    made = curve(smoothing=Smoothing(kernel="gaussian"))
    assert made.trace["engine"]["name"] == "binned"
    assert made.trace["engine"]["reason"] == "the gaussian kernel has no end"


def test_auto_bins_where_memory_is_short():
    made = curve(smoothing=Smoothing(memory_gigabytes=1e-4))
    assert made.trace["engine"]["name"] == "binned"
    assert made.trace["engine"]["reason"] == "--memory 0.0001"


def test_engines_can_be_asked_for():
    assert curve(smoothing=Smoothing(engine="binned")).trace["engine"]["name"] == "binned"
    assert curve().trace["engine"]["reason"] == "asked for"


def test_the_exact_engine_is_refused_beyond_its_memory():
    assert bytes_per_row(Columns("x", "y")) == 44
    assert refusal(Smoothing(engine="exact", memory_gigabytes=1e-4)) == (
        "--engine exact must stay within --memory 0.0001 (gigabytes), but 4,000 rows need "
        "0.000176; raise it to 0.00018, or take the binned engine."
    )


def test_the_exact_engine_is_refused_for_the_gaussian():
    assert refusal(Smoothing(engine="exact", kernel="gaussian")) == (
        "--engine exact must come with a kernel that ends, but --kernel is gaussian; "
        "take another kernel, or the binned engine."
    )


@pytest.mark.parametrize(
    ("settings", "told"),
    [
        ({"engine": "fast"}, "--engine must be one of auto, binned, exact"),
        ({"memory_gigabytes": 0}, "--memory must be a positive number of gigabytes"),
        ({"memory_gigabytes": "much"}, "--memory must be a positive number of gigabytes"),
    ],
)
def test_settings_are_checked(settings, told):
    with pytest.raises(InputError) as caught:
        Smoothing(**settings)
    assert told in str(caught.value)


# What it gives.


@pytest.mark.parametrize("estimator", ["local-linear", "local-constant"])
@pytest.mark.parametrize("kernel", [name for name in SHAPES if name != "gaussian"])
def test_the_curve_is_that_of_plain_loops(kernel, estimator):
    made = curve(smoothing=Smoothing(engine="exact", kernel=kernel, estimator=estimator))
    degree = 1 if estimator == "local-linear" else 0
    truth = many_rows.fit_many(
        made.x, ROWS.wet_bulb_c, ROWS.power_kw, made.bandwidth, kernel, degree
    )
    known = np.isfinite(made.estimate)
    assert known.sum() > 200
    scale = float(np.std(ROWS.power_kw))
    assert np.abs(made.estimate - truth[0])[known].max() < 1e-9 * scale


def test_the_criterion_is_that_of_really_leaving_each_row_out():
    rng = np.random.default_rng(5)
    x = np.sort(rng.uniform(0.0, 1.0, 150))
    y = np.sin(6.0 * x) + rng.normal(0.0, 0.2, 150)
    found = make_curve((x, y), "x", "y", smoothing=Smoothing(engine="exact", kernel="epanechnikov"))
    trail = found.search.trails["local-linear"]
    for place in (20, 35, 47):
        h = float(trail.bandwidths[place])
        total = 0.0
        for i in range(150):
            u = (np.delete(x, i) - x[i]) / h
            w = np.where(np.abs(u) <= 1.0, 0.75 * (1.0 - u * u), 0.0)
            s = [float((w * u**j).sum()) for j in range(3)]
            t = [float((w * u**j * np.delete(y, i)).sum()) for j in range(2)]
            total += (y[i] - (s[2] * t[0] - s[1] * t[1]) / (s[0] * s[2] - s[1] ** 2)) ** 2
        assert trail.leave_one_out[place] == pytest.approx(total / 150, rel=1e-10)


@pytest.mark.parametrize("block", [None, "plant"])
@pytest.mark.parametrize("bias", ["corrected", "ignored"])
def test_the_band_is_that_of_the_bins(bias, block):
    data = {**ROWS.columns(), "plant": np.arange(ROWS.power_kw.size) // 20}
    options = {"band": Band(bias=bias), "reading": Reading(block=block)}
    exact = curve(data, Smoothing(engine="exact", bandwidth=3.0), **options)
    binned = curve(data, Smoothing(engine="binned", bandwidth=3.0), **options)
    for name in ("lower", "upper", "std_error", "slope", "effective_rows", "residual_sd"):
        one, other = getattr(exact, name), getattr(binned, name)
        assert (np.isnan(one) == np.isnan(other)).mean() > 0.98
        both = np.isfinite(one) & np.isfinite(other)
        assert one[both] == pytest.approx(other[both], rel=2e-4, abs=2e-4), name


def test_the_fold_shares_add_up_and_the_flat_zone_agrees():
    exact, binned = (curve(smoothing=Smoothing(engine=one)) for one in ("exact", "binned"))
    for name in ("local-linear", "local-constant"):
        one, other = exact.search.trails[name], binned.search.trails[name]
        assert one.flat_zone == pytest.approx(other.flat_zone, rel=0.05)
        # Lone rows have no vote; from the bins, the others of their bins have none either.
        assert one.leave_one_out == pytest.approx(other.leave_one_out, rel=0.05)
        assert one.trace == pytest.approx(other.trace, rel=0.02)


def test_weights_and_counts(tmp_path):
    """A row of count 2 is two rows; precisions enter fits and band as in the binned engine."""
    rng = np.random.default_rng(2)
    repeats = rng.integers(1, 4, ROWS.power_kw.size)
    weight = rng.uniform(0.5, 2.0, ROWS.power_kw.size)
    data = {**ROWS.columns(), "repeats": repeats, "weight": weight}
    again = {name: np.repeat(values, repeats) for name, values in data.items()}
    smoothing = Smoothing(engine="exact", bandwidth=2.0)
    counted = curve(data, smoothing, count="repeats", weight="weight")
    written = curve(again, smoothing, weight="weight")
    assert counted.estimate == pytest.approx(written.estimate, rel=1e-9, nan_ok=True)
    assert counted.effective_rows == pytest.approx(written.effective_rows, rel=1e-9, nan_ok=True)
    assert counted.std_error == pytest.approx(written.std_error, rel=0.02, nan_ok=True)
    binned = curve(
        data, Smoothing(engine="binned", bandwidth=2.0), count="repeats", weight="weight"
    )
    assert counted.std_error == pytest.approx(binned.std_error, rel=1e-3, nan_ok=True)
    found = [one.search.trails["local-linear"].leave_one_out for one in (counted, binned)]
    assert found[0] == pytest.approx(found[1], rel=5e-3)


def test_files_arrays_threads_and_row_order_do_not_matter(tmp_path):
    write_parquet(tmp_path / "rows.parquet", ROWS.columns(), rows_per_group=300)
    one = curve(tmp_path / "rows.parquet", reading=Reading(threads=1))
    two = curve(tmp_path / "rows.parquet", reading=Reading(threads=2))
    assert one.estimate.tobytes() == two.estimate.tobytes()
    assert one.search.to_dict() == two.search.to_dict()
    order = np.random.default_rng(1).permutation(ROWS.power_kw.size)
    shuffled = {name: values[order] for name, values in ROWS.columns().items()}
    assert curve(shuffled).estimate == pytest.approx(one.estimate, rel=1e-6, nan_ok=True)


def test_bad_rows_are_left_out_as_from_the_bins():
    x, y = ROWS.wet_bulb_c.copy(), ROWS.power_kw.copy()
    x[::50], y[7::50], x[13::100] = np.nan, np.inf, 1e6
    data = {"wet_bulb_c": pa.array(x, mask=np.arange(x.size) % 11 == 0), "power_kw": y}
    exact = curve(pa.table(data), reading=Reading(range=(0.0, 30.0)))
    binned = curve(pa.table(data), Smoothing(engine="binned"), reading=Reading(range=(0.0, 30.0)))
    assert exact.trace["rows"] == binned.trace["rows"]
    keep = np.isfinite(x) & np.isfinite(y) & (np.arange(x.size) % 11 != 0)
    keep &= (x >= 0.0) & (x <= 30.0)
    clean = curve((x[keep], y[keep]), Smoothing(engine="exact", bandwidth=exact.bandwidth))
    assert exact.estimate == pytest.approx(clean.estimate, rel=1e-10, nan_ok=True)


def test_a_log_scale_has_the_same_windows():
    x = np.exp(ROWS.wet_bulb_c / 10.0)
    reading = Reading(scale="log")
    exact = make_curve((x, ROWS.power_kw), "x", "y", smoothing=EXACT, reading=reading)
    plain = make_curve((np.log(x), ROWS.power_kw), "x", "y", smoothing=EXACT)
    assert np.log(exact.bandwidth) == pytest.approx(plain.bandwidth, rel=1e-6)
    assert exact.estimate == pytest.approx(plain.estimate, rel=1e-7, nan_ok=True)


@given(st.lists(st.floats(-5.0, 5.0), max_size=30), st.integers(0, 3))
def test_ascending_is_noticed(values, times):
    x = np.array(values * times)
    assert ascends(x) == all(a <= b for a, b in pairwise(x.tolist()))


def test_ascending_is_noticed_beyond_the_first_stretch():
    x = np.arange(200_000.0)
    assert ascends(x)
    for place in (65_535, 65_536, 131_072, 199_998):
        broken = x.copy()
        broken[place + 1] = x[place] - 0.5
        assert not ascends(broken), place


# The kernel behind it.


@given(
    st.lists(st.tuples(st.integers(0, 12), st.floats(-5.0, 5.0), st.integers(1, 3)), min_size=1,
             max_size=40),
    st.floats(0.3, 20.0),
    st.booleans(),
)  # fmt: skip
def test_scores_by_fold_are_those_of_all_rows(rows, bandwidth, weighted):
    rows = sorted(rows)
    x = np.array([float(one[0]) for one in rows])
    y = np.array([one[1] for one in rows])
    repeats = np.array([float(one[2]) for one in rows]) if weighted else np.empty(0)
    weight = 0.5 * repeats if weighted else np.empty(0)
    fold = (np.arange(x.size) % 3).astype(np.int16)
    coefficients = np.array(SHAPES["epanechnikov"].coefficients)
    alone = np.zeros(x.size, bool)
    by_fold, out = np.empty((2, 3)), np.empty((2, 4))
    none = np.empty(0, bool)
    foldscores.score_folds(
        x, y, weight, repeats, none, fold, coefficients, bandwidth, 0.999, alone, by_fold, out
    )
    plain = np.empty((2, 5))
    windows.score_windows(x, y, weight, repeats, none, coefficients, bandwidth, 0, x.size, plain)
    assert out == pytest.approx(plain[:, :4], rel=1e-9, abs=1e-9)
    assert by_fold.sum(axis=1) == pytest.approx(plain[:, 0], rel=1e-9, abs=1e-9)
    for part in range(3):
        windows.score_windows(
            x, y, weight, repeats, fold == part, coefficients, bandwidth, 0, x.size, plain
        )
        assert by_fold[:, part] == pytest.approx(plain[:, 0], rel=1e-9, abs=1e-9)
    # A row is alone when no other x lies in its window, or one line through few rows meets it.
    for i in range(x.size):
        others = np.abs(np.delete(x, i) - x[i]) < bandwidth
        if not others.any() and not (weighted and repeats[i] > 1.0):
            assert alone[i]
