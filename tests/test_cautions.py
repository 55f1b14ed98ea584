"""Every caution on data made to raise it, and none on clean data."""

import math

import numpy as np
import pytest

from fastsmooth import Band, Reading, Smoothing, make_curve
from fastsmooth.blocks import fold_of_key
from fastsmooth.curve import OUTSIDE, THIN
from fastsmooth.store.settings import StoreSettings
from fastsmooth.store.update import update_store
from tests import cases
from tests.store_tools import write_day


def curve_of(x, y, *, reading=None, smoothing=None, band=None, **columns):
    data = {"wet_bulb_c": np.asarray(x, float), "power_kw": np.asarray(y, float), **columns}
    return make_curve(
        data, "wet_bulb_c", "power_kw", reading=reading, smoothing=smoothing, band=band
    )  # fmt: skip


def codes(made):
    return [caution.code for caution in made.cautions]


def text(made, code):
    return next(caution.text for caution in made.cautions if caution.code == code)


def clean(n=4000, seed=0, design="uniform"):
    rows = cases.make_rows(design, n, seed=seed)
    return rows.wet_bulb_c, rows.power_kw


@pytest.mark.parametrize("design", [name for name in cases.DESIGNS if name != "lattice"])
@pytest.mark.parametrize("seed", range(3))
def test_clean_data_raise_none(design, seed):
    assert codes(curve_of(*clean(4000, seed, design))) == []


@pytest.mark.parametrize("seed", range(3))
def test_coarsely_rounded_x_may_bound_the_width_from_below(seed):
    """Rounded to half a degree, windows need two steps to either side, which may be too wide."""
    found = codes(curve_of(*clean(4000, seed, "lattice")))
    assert found in ([], ["width at the lower end"])
    assert codes(curve_of(*clean(1200, seed, "lattice"))) == []


@pytest.mark.parametrize("estimator", ["local-linear", "local-constant"])
@pytest.mark.parametrize("kernel", ["epanechnikov", "gaussian", "uniform"])
def test_clean_data_raise_none_with_any_kernel(estimator, kernel):
    smoothing = Smoothing(estimator=estimator, kernel=kernel)
    assert codes(curve_of(*clean(), smoothing=smoothing)) == []


@pytest.mark.parametrize("band", [Band(at=(2.0, 12.0, 20.0)), Band(points=20)])
def test_few_points_of_ones_own_raise_none(band):
    """Rows sorted by x: a curve read between three points would look correlated."""
    x, y = clean()
    order = np.argsort(x)
    made = curve_of(x[order], y[order], band=band)
    assert codes(made) == []
    assert abs(made.trace["serial"]["lag_one"]) < 0.05


def test_many_rows_refused():
    x, y = clean(1000)
    y[:120] = math.nan
    x[120:130] = math.inf
    made = curve_of(x, y)
    assert codes(made) == ["many rows refused"]
    assert "13% of the rows could not be used (10 x infinite, 120 y NaN)" in text(
        made, "many rows refused"
    ).replace("120 y NaN, 10 x infinite", "10 x infinite, 120 y NaN")
    y[8:] = clean(1000)[1][8:]
    x[120:130] = 3.0
    assert codes(curve_of(x, y)) == []


def test_rows_out_of_a_range_of_ones_own_are_no_refusals():
    assert "many rows refused" not in codes(curve_of(*clean(), reading=Reading(range=(0, 10))))


def test_one_fold_dominates():
    """One row stands for as many as all others."""
    x, y = clean(2000)
    count = np.ones(2000)
    count[:10] = 1000.0
    made = make_curve({"x": x, "y": y, "rows": count}, "x", "y", count="rows")
    assert "one fold dominates" in codes(made)
    assert "of 32 folds holds" in text(made, "one fold dominates")


def test_range_trimmed():
    x, y = clean()
    made = curve_of(np.append(x, 1e6), np.append(y, 20.0))
    assert codes(made) == ["range trimmed"]
    assert "0 rows lie below and 1 above it and were left out" in text(made, "range trimmed")


@pytest.mark.parametrize("width_c", [0.4, 8.0])
def test_width_outside_the_flat_zone(width_c):
    made = curve_of(*clean(), smoothing=Smoothing(bandwidth=width_c))
    assert codes(made) == ["width outside the flat zone"]
    assert f"The given bandwidth {width_c:.4g} lies outside" in text(
        made, "width outside the flat zone"
    )


def test_a_given_width_inside_the_flat_zone_raises_none():
    chosen = curve_of(*clean()).bandwidth
    assert codes(curve_of(*clean(), smoothing=Smoothing(bandwidth=chosen))) == []


def test_width_at_the_lower_end():
    """Every row ten times: the copies predict each other best in the narrowest window."""
    x, y = clean(300)
    made = curve_of(np.tile(x, 10), np.tile(y, 10))
    assert "width at the lower end" in codes(made)
    assert "is the narrowest searched" in text(made, "width at the lower end")


@pytest.mark.parametrize(
    ("estimator", "words"), [("local-linear", "a straight line"), ("local-constant", "a constant")]
)
def test_width_at_the_upper_end(estimator, words):
    x, _ = clean(1000)
    y = 20.0 + (0.3 * x if estimator == "local-linear" else 0.0 * x)
    y += 1e-3 * np.random.default_rng(2).normal(size=1000)
    made = curve_of(x, y, smoothing=Smoothing(estimator=estimator))
    assert "width at the upper end" in codes(made)
    assert f"the data look like {words}" in text(made, "width at the upper end")


def test_several_minima():
    """Slow and fast waves: smoothing over the fast ones is nearly as good as following them."""
    rng = np.random.default_rng(2)
    x = np.linspace(0.0, 1.0, 3000)
    y = np.sin(2 * math.pi * x) + 0.35 * np.sin(2 * math.pi * 90 * x) + rng.normal(size=3000)
    order = rng.permutation(3000)
    made = curve_of(x[order], y[order])
    assert codes(made) == ["several minima"]
    assert "The criterion has 2 separate minima" in text(made, "several minima")


def test_flat_criterion():
    """Nothing varies: every width is as good as any other."""
    made = curve_of(clean(500)[0], np.full(500, 41.0))
    assert codes(made) == ["width at the upper end", "flat criterion"]


def test_rows_alone():
    """One row in twenty-five stands by itself, beyond the narrowest window of the others."""
    x, y = clean(1000)
    far = 40.0 + 5.0 * np.arange(40.0)
    made = curve_of(np.append(x, far), np.append(y, np.full(40, 20.0)))
    assert "rows alone" in codes(made)
    assert made.search.rows_alone == pytest.approx(40.0, abs=15)
    assert "have no neighbour within the narrowest width" in text(made, "rows alone")


def test_coarse_bins():
    """A width of less than a thousandth of the range, and folds that leave no room for bins."""
    made = curve_of(
        *clean(), reading=Reading(folds=128),
        smoothing=Smoothing(bandwidth=0.03, widths=8, engine="binned"),
    )  # fmt: skip
    assert "coarse bins" in codes(made)
    bins = made.trace["engine"]["bins_per_bandwidth"]
    assert f"spans only {bins:.1f} bins within the memory cap" in text(made, "coarse bins")
    fine = curve_of(
        *clean(), reading=Reading(folds=4), smoothing=Smoothing(bandwidth=0.03, engine="binned")
    )
    assert "coarse bins" not in codes(fine)


def test_mostly_thin():
    x, y = clean(150)
    made = curve_of(x, y, smoothing=Smoothing(bandwidth=0.5))
    assert "mostly thin" in codes(made)
    assert "% of the points have too few rows. The curve says little there." in text(
        made, "mostly thin"
    )
    assert "folds" not in text(made, "mostly thin")
    gentle = curve_of(x, y, smoothing=Smoothing(bandwidth=0.5), band=Band(least_rows=0.0))
    assert "mostly thin" not in codes(gentle)


def correlated(n, rho, seed=5):
    rng = np.random.default_rng(seed)
    noise = np.empty(n)
    state = 0.0
    for i, step in enumerate(rng.normal(size=n)):
        state = rho * state + math.sqrt(1.0 - rho * rho) * step
        noise[i] = state
    wet_bulb_c = 12.0 + 10.0 * np.sin(np.arange(n) * 2.0 * math.pi / 997.0)
    return wet_bulb_c, cases.mean_power_kw(wet_bulb_c) + noise


def test_neighbouring_rows_alike():
    made = curve_of(*correlated(6000, 0.8))
    assert "neighbouring rows alike" in codes(made)
    serial = made.trace["serial"]
    assert serial["lag_one"] == pytest.approx(0.8, abs=0.05)
    # AR(1): n (1 - rho) / (1 + rho) rows' worth (Bayley & Hammersley 1946).
    assert serial["worth_rows"] == pytest.approx(6000 / 9.0, rel=0.25)
    assert "Give --block" in text(made, "neighbouring rows alike")
    assert "neighbouring rows alike" not in codes(curve_of(*correlated(6000, 0.0)))


def test_rows_dropped_in_between_are_no_neighbours():
    """Every other row is missing: lag one is lag two of the process."""
    x, y = correlated(12_000, 0.8)
    x[1::2] = math.nan
    made = curve_of(x, y)
    assert made.trace["serial"] is None or abs(made.trace["serial"]["lag_one"] - 0.8) < 0.06


@pytest.mark.parametrize("code_kw", [-9999.0, 0.0, 1e9])
def test_repeated_far_value(code_kw):
    x, y = clean()
    y[::200] = code_kw
    made = curve_of(x, 0.1 * y + 30.0 if code_kw == 0.0 else y)
    if code_kw == 0.0:
        y = 0.1 * clean()[1] + 30.0
        y[::200] = 0.0
        made = curve_of(x, y)
    assert "repeated far value" in codes(made)
    said = text(made, "repeated far value")
    assert f"power_kw is {code_kw:g} in 20 of 4,000 sampled rows" in said
    assert f"--where 'power_kw <> {code_kw:g}'" in said


def test_single_spikes_and_rounded_readings_are_no_codes():
    x, y = clean()
    y[5] = 900.0
    assert "repeated far value" not in codes(curve_of(x, y))
    assert "repeated far value" not in codes(curve_of(x, np.round(clean()[1])))


def test_few_blocks():
    x, y = clean(3000)
    day = np.repeat(np.arange(5), 600)
    made = curve_of(x, y, reading=Reading(block="day"), day=day)
    assert {"few blocks", "mostly thin"} <= set(codes(made))
    assert "few folds" not in codes(made)
    assert text(made, "few blocks") == (
        "There are only 5 blocks by day: fewer than 12 say little about how much blocks differ, so "
        "every point is thin and the flat zone rests on next to nothing."
    )
    ten = curve_of(x, y, reading=Reading(block="day"), day=np.repeat(np.arange(10), 300))
    assert text(ten, "few blocks").endswith("so every point is thin.")
    many = curve_of(x, y, reading=Reading(block="day"), day=np.repeat(np.arange(60), 50))
    assert codes(many) == []


def by_day(folds, days=60, n=6000, key=None):
    x, y = clean(n)
    day = np.repeat(np.arange(days), n // days)
    return curve_of(
        x, y, reading=Reading(block="day", folds=folds), day=day if key is None else key(day)
    )


@pytest.mark.parametrize(
    ("folds", "so"),
    [
        (4, "every point is thin and the flat zone rests on next to nothing"),
        (7, "every point is thin and the flat zone rests on next to nothing"),
        (8, "every point is thin"),
        (11, "every point is thin"),
    ],
)
def test_few_folds_of_many_blocks_are_the_reason_and_are_named(folds, so):
    """Rows are many: what thins the curve are the folds, and the sentence must say so."""
    made = by_day(folds)
    assert codes(made) == ["few folds", "mostly thin"]
    assert text(made, "few folds") == (
        f"The 60 blocks by day lie in only {folds} folds, so {so}. Leave out --folds."
    )
    assert (made.status[made.status != OUTSIDE] == THIN).all()
    assert (made.effective_rows[10:-10] > 30.0).all()
    said = text(made, "mostly thin")
    assert said.endswith(
        "% of the points have rows enough, but of too few folds (fewer than 12, or so unequal that "
        "their error has fewer than 4 degrees of freedom). The curve says little there."
    )


def test_folds_enough_raise_none():
    assert codes(by_day(12)) == []


def test_blocks_that_chance_deals_to_few_folds_ask_for_a_finer_block():
    """Fourteen names, of which some share a fold."""
    made = by_day(32, days=14, n=7000, key=lambda day: np.array([f"batch {one}" for one in day]))
    held = made.trace["folds_with_rows"]
    assert held == len({fold_of_key(f"batch {one}", 32) for one in range(14)}) < 12
    assert text(made, "few folds") == (
        f"The 14 blocks by day lie in only {held} folds, so every point is thin. Name a finer "
        "block."
    )


@pytest.mark.parametrize("folds", [2, 7])
def test_a_flat_zone_of_few_folds_rests_on_next_to_nothing(folds):
    made = curve_of(*clean(), reading=Reading(folds=folds))
    assert codes(made) == ["few folds"]
    assert text(made, "few folds") == (
        f"The rows lie in only {folds} folds, so the flat zone rests on next to nothing. Leave out "
        "--folds."
    )
    assert codes(curve_of(*clean(), reading=Reading(folds=8))) == []


def test_robust_errors_need_folds_too():
    made = curve_of(*clean(), reading=Reading(folds=9), smoothing=Smoothing(robust=True))
    assert "so every point is thin. Leave out --folds." in text(made, "few folds")
    assert "but of too few folds" in text(made, "mostly thin")


@pytest.mark.parametrize("named", [False, True])
def test_unequal_folds(named):
    """Batch 5 is as long as twenty others: what width and band rest on are few equal folds."""
    lengths = np.full(40, 100)
    lengths[[5, 17, 29]] = 2000
    batch = np.repeat(np.arange(40), lengths)
    x, y = clean(batch.size)
    key = np.array([f"batch {one}" for one in batch]) if named else batch
    made = curve_of(x, y, reading=Reading(block="batch"), batch=key)
    assert "unequal folds" in codes(made)
    said = text(made, "unequal folds")
    held = made.trace["folds_with_rows"]
    deal = {}
    for one, rows in enumerate(lengths.tolist()):
        fold = fold_of_key(f"batch {one}" if named else one, 32)
        deal[fold] = deal.get(fold, 0) + rows
    worth = batch.size**2 / sum(rows**2 for rows in deal.values())
    assert said.startswith(
        f"The blocks by batch fill {held} folds so unevenly that these are worth {worth:.0f} equal "
        "ones, which is what width and band rest on. "
    )
    assert said.endswith(
        "Whole numbers or times as blocks are dealt more evenly than other values."
        if named
        else "Name a block of more even size."
    )
    even = curve_of(x, y, reading=Reading(block="batch"), batch=np.arange(batch.size) // 245)
    assert codes(even) == []


def times(days=30, per_day=96):
    """Readings over time: a trend, a level of each day, noise."""
    rng = np.random.default_rng(8)
    n = days * per_day
    stamps = np.datetime64("2026-03-01", "s") + np.arange(n) * (86_400 // per_day)
    share = np.arange(n) / n
    level = np.repeat(rng.normal(0.0, 0.3, days), per_day)
    return stamps, 20.0 + np.sin(6.0 * share) + level + rng.normal(0.0, 0.5, n)


def test_days_of_a_curve_over_time_leave_most_rows_without_a_vote():
    stamps, y = times()
    data = {"logged_at": stamps, "power_kw": y}
    reading = Reading(block="logged_at:day")
    made = make_curve(data, "logged_at", "power_kw", reading=reading)
    assert "few rows vote" in codes(made)
    assert "rows alone" not in codes(made)
    voting = 2880 - made.search.rows_alone
    assert 0 < voting < 1440
    assert text(made, "few rows vote") == (
        f"Only {voting:,.0f} of 2,880 rows have rows of other folds on both sides within the "
        "narrowest width, so the choice of the bandwidth and its flat zone rest on these few. This "
        "is so where x runs along with the blocks, as time does with its days: they cannot choose "
        "it there, so give --bandwidth."
    )
    given = make_curve(
        data, "logged_at", "power_kw", reading=reading, smoothing=Smoothing(bandwidth="4h")
    )
    low, _ = given.search.trails["local-linear"].flat_zone
    assert given.bandwidth < low
    # The caller may well be right: hardly a row was asked.
    assert "width outside the flat zone" not in codes(given)
    assert "few rows vote" in codes(given)
    across = curve_of(
        np.random.default_rng(1).permutation(y.size), y, reading=reading, logged_at=stamps
    )
    assert "few rows vote" not in codes(across)


def test_votes_are_those_of_the_criterion_that_chose():
    """All rows vote on leave-one-out, whatever leaving out days would ask."""
    stamps, y = times()
    made = make_curve(
        {"logged_at": stamps, "power_kw": y}, "logged_at", "power_kw",
        reading=Reading(block="logged_at:day"), smoothing=Smoothing(criterion="leave-one-out"),
    )  # fmt: skip
    assert made.search.rows_alone == 0.0
    assert "few rows vote" not in codes(made)


def test_votes_are_counted_in_rows_whatever_their_weight():
    stamps, y = times()
    weighed = {"logged_at": stamps, "power_kw": y, "precision": np.full(y.size, 0.01)}
    alone = [
        make_curve(
            weighed, "logged_at", "power_kw", weight=weight, reading=Reading(block="logged_at:day"),
            smoothing=Smoothing(engine="binned", bandwidth="1d"),
        ).search.rows_alone
        for weight in (None, "precision")
    ]  # fmt: skip
    assert alone[1] == pytest.approx(alone[0], rel=1e-9)
    assert alone[0] > 1000.0


def test_likeness_along_time_is_not_answered_with_days():
    stamps, _ = times()
    noise = correlated(stamps.size, 0.9)[1]
    made = make_curve({"logged_at": stamps, "power_kw": noise}, "logged_at", "power_kw",
                      smoothing=Smoothing(bandwidth="5d"))  # fmt: skip
    assert text(made, "neighbouring rows alike").endswith(
        "Give --bandwidth, and --block with times that last longer than that and are short beside "
        "it."
    )


def test_cautions_are_in_the_table_and_come_back():
    from fastsmooth.curve import Curve

    x, y = clean()
    made = curve_of(np.append(x, 1e6), np.append(y, 20.0))
    assert Curve.from_table(made.table()).cautions == made.cautions


def test_the_remedy_for_a_far_value_can_be_pasted():
    x, y = clean()
    y = y.copy()
    y[:40] = -9999.0
    made = make_curve({"x": x, "code d": y}, "x", "code d")
    assert """--where '"code d" <> -9999'""" in text(made, "repeated far value")


def test_a_store_of_few_folds_asks_for_another_store(tmp_path):
    """Its rows were dealt when they were counted."""
    data = tmp_path / "data"
    data.mkdir()
    for day in range(3):
        write_day(data, day)
    settings = StoreSettings("wet_bulb_c", "power_kw", folds=4)
    update_store(tmp_path / "store", data, settings)
    made = make_curve(tmp_path / "store")
    assert text(made, "few folds").endswith("Make another store without --folds.")


def test_equal_rows_predict_each_other():
    """Three equal rows to a row: leave-one-out sees twins; with one to a row there is no word."""
    x, y = clean(2000)
    for repeats, told in ((3, True), (1, False)):
        data = {"x": x, "y": y, "n": np.full(2000, repeats)}
        made = make_curve(data, "x", "y", count="n")
        assert ("equal rows" in codes(made)) == told
