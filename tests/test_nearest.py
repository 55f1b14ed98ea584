"""The estimator `nearest` as a caller meets it."""

import numpy as np
import pytest
from sklearn.datasets import load_diabetes
from sklearn.model_selection import LeaveOneOut, cross_val_predict
from sklearn.neighbors import KNeighborsRegressor

from fastsmooth import Band, InputError, Reading, Smoothing, load_curve, make_curve
from fastsmooth.exact import Rows
from fastsmooth.nearest import Neighbours, NeighbourScoring
from fastsmooth.summary import curve_lines, search_lines
from tests import cases

NEAREST = Smoothing(estimator="nearest")
ROWS = cases.make_rows("clustered", 3000, seed=9)
DATA = {**ROWS.columns(), "day": np.arange(3000) // 25}


def curve(data=None, smoothing=NEAREST, **options):
    return make_curve(
        DATA if data is None else data, "wet_bulb_c", "power_kw", smoothing=smoothing, **options
    )


def nearest_mean(place, x, y, k):
    """Mean over the k rows nearest to a place; rows tied at the farthest distance share."""
    distance = sorted(abs(one - place) for one in x)[k - 1]
    inner = [b for a, b in zip(x, y, strict=True) if abs(a - place) < distance]
    tied = [b for a, b in zip(x, y, strict=True) if abs(a - place) == distance]
    return (sum(inner) + (k - len(inner)) * sum(tied) / len(tied)) / k


def test_the_curve_is_the_mean_of_the_nearest_rows():
    made = curve(smoothing=Smoothing(estimator="nearest", neighbours=25))
    assert made.bandwidth == 25.0
    assert (made.effective_rows == 25.0).all()
    x, y = ROWS.wet_bulb_c.tolist(), ROWS.power_kw.tolist()
    for place in range(0, 256, 37):
        expected = nearest_mean(float(made.x[place]), x, y, 25)
        assert made.estimate[place] == pytest.approx(expected, rel=1e-12)


def test_leave_one_out_is_that_of_scikit_learn():
    """KNeighborsRegressor, every row really left out, over several k (scikit-learn 1.5)."""
    data = load_diabetes()
    # Noise far below the distances parts ties, which scikit-learn breaks by order.
    x = data.data[:, 2] + np.random.default_rng(4).uniform(0.0, 1e-9, data.data.shape[0])
    found = make_curve((x, data.target), "x", "y", smoothing=NEAREST)
    trail = found.search.trails["nearest"]
    for place in (2, 15, 30):
        k = int(trail.bandwidths[place])
        model = KNeighborsRegressor(n_neighbors=k)
        predicted = cross_val_predict(model, x[:, None], data.target, cv=LeaveOneOut())
        expected = np.mean((predicted - data.target) ** 2)
        assert trail.leave_one_out[place] == pytest.approx(expected, rel=1e-9)


def test_the_choice_is_the_best_of_its_grid_and_whole():
    made = curve()
    trail = made.search.trails["nearest"]
    assert made.bandwidth == round(made.bandwidth)
    assert trail.score <= trail.leave_one_out.min() * (1.0 + 1e-12)
    assert trail.flat_zone[0] <= made.bandwidth <= trail.flat_zone[1]
    assert np.isinf(trail.gcv).all()
    truth = cases.mean_power_kw(made.x)
    ok = made.status == 0
    assert ok.sum() > 100
    assert np.mean((made.lower <= truth)[ok] & (truth <= made.upper)[ok]) > 0.85


@pytest.mark.parametrize("repeated", [False, True])
def test_leave_block_out_predicts_from_other_folds_alone(repeated):
    rng = np.random.default_rng(3)
    x = np.sort(np.round(rng.uniform(0.0, 10.0, 60), 1 if repeated else 12))
    y = rng.normal(0.0, 1.0, 60)
    fold = (np.arange(60) % 4).astype(np.int16)
    repeats = np.ones(60) if not repeated else rng.integers(1, 3, 60).astype(float)
    rows = Rows(x, y, np.empty(0), repeats if repeated else np.empty(0), fold, 4)
    scoring = NeighbourScoring(Neighbours.of(rows))
    points, lost = scoring.left_out_points([3.0, 8.0], map)
    for place, k in enumerate((3, 8)):
        total, heard, expected_lost = 0.0, 0.0, 0.0
        for i in range(60):
            others = [j for j in range(60) if fold[j] != fold[i]]
            if not x[others].min() <= x[i] <= x[others].max():
                expected_lost += repeats[i]
                continue
            xs = [one for j in others for one in [x[j]] * int(repeats[j])]
            ys = [one for j in others for one in [y[j]] * int(repeats[j])]
            total += repeats[i] * (y[i] - nearest_mean(x[i], xs, ys, k)) ** 2
            heard += repeats[i]
        assert points[place]["nearest"].criteria["leave-block-out"] == pytest.approx(total / heard)
        assert points[place]["nearest"].shares.sum() == pytest.approx(1.0)
        assert lost == expected_lost


def test_a_block_chooses_and_carries_the_band():
    made = curve(reading=Reading(block="day"))
    assert made.search.criterion == "leave-block-out"
    lines = "\n".join(curve_lines(made))
    assert "leaving out folds" in lines
    k = int(made.bandwidth)
    by_one = Smoothing(estimator="nearest", neighbours=k, criterion="leave-one-out")
    alike = curve(smoothing=by_one, reading=Reading(block="day"))
    assert alike.estimate.tobytes() == made.estimate.tobytes()
    # Independent rows: folds see about the same error as rows do.
    by_row = curve(smoothing=Smoothing(estimator="nearest", neighbours=int(made.bandwidth)))
    both = np.isfinite(made.std_error) & np.isfinite(by_row.std_error) & (made.status == 0)
    ratio = np.median(made.std_error[both] / by_row.std_error[both])
    assert 0.8 < ratio < 1.25


def test_days_with_a_level_of_their_own_widen_the_band():
    level = np.random.default_rng(1).normal(0.0, 3.0 * ROWS.noise_sd_kw, 120)[DATA["day"]]
    data = {**DATA, "power_kw": DATA["power_kw"] + level}
    k = Smoothing(estimator="nearest", neighbours=1000)
    wide, narrow = curve(data, k, reading=Reading(block="day")), curve(data, k)
    ok = (wide.status == 0) & (narrow.status == 0)
    # A thousand rows of 120 days: the days' common levels count, not the rows.
    assert np.median(wide.std_error[ok] / narrow.std_error[ok]) > 1.35


def test_counts_are_rows():
    repeats = np.random.default_rng(8).integers(1, 4, 3000)
    smoothing = Smoothing(estimator="nearest", neighbours=40)
    counted = curve({**DATA, "repeats": repeats}, smoothing, count="repeats")
    again = {name: np.repeat(values, repeats) for name, values in DATA.items()}
    written = curve(again, smoothing)
    assert counted.estimate == pytest.approx(written.estimate, rel=1e-12)
    grid = [one.search.trails["nearest"] for one in (counted, written)]
    assert grid[0].leave_one_out == pytest.approx(grid[1].leave_one_out, rel=1e-9)


def test_bias_ignored_centres_the_band_on_the_curve():
    made = curve(band=Band(bias="ignored"), smoothing=Smoothing(estimator="nearest", neighbours=60))
    middle = 0.5 * (made.lower + made.upper)
    known = np.isfinite(middle)
    assert middle[known] == pytest.approx(made.estimate[known], rel=1e-9)
    # One window's mean: sd / sqrt(k).
    ok = made.status == 0
    ratio = np.median(made.std_error[ok] * np.sqrt(60.0) / made.residual_sd[ok])
    assert ratio == pytest.approx(1.0, rel=0.05)


def test_a_gap_is_thin_and_the_ends_are_edges():
    x = np.concatenate((np.linspace(0.0, 10.0, 500), np.linspace(30.0, 40.0, 500)))
    y = x + np.random.default_rng(0).normal(0.0, 0.1, 1000)
    made = make_curve((x, y), "x", "y", smoothing=Smoothing(estimator="nearest", neighbours=50))
    gap = (made.x > 14.0) & (made.x < 26.0)
    assert {made.statuses[i] for i in np.flatnonzero(gap)} == {"thin"}
    assert made.statuses[0] == "edge"
    assert made.statuses[-1] == "edge"
    assert made.statuses[64] == "ok" or made.x[64] > 9.0


def test_it_is_written_and_read_and_told(tmp_path):
    made = curve()
    made.save(tmp_path / "curve.parquet")
    again = load_curve(tmp_path / "curve.parquet")
    assert again.estimate.tobytes() == made.estimate.tobytes()
    lines = curve_lines(again)
    assert (
        f"width      the nearest {made.bandwidth:.0f} rows, chosen by leave-one-out; their mean"
        in lines
    )
    assert not any("kernel" in one for one in lines)
    assert any("number of neighbours" in one for one in search_lines(again))
    made.plot(tmp_path / "curve.png")
    assert (tmp_path / "curve.png").stat().st_size > 10_000


def test_a_log_scale_measures_distance_in_logarithms():
    x = np.exp(ROWS.wet_bulb_c / 10.0)
    smoothing = Smoothing(estimator="nearest", neighbours=30)
    made = make_curve((x, ROWS.power_kw), "x", "y", smoothing=smoothing,
                      reading=Reading(scale="log"))  # fmt: skip
    plain = make_curve((np.log(x), ROWS.power_kw), "x", "y", smoothing=smoothing)
    assert made.bandwidth == 30.0
    assert made.estimate == pytest.approx(plain.estimate, rel=1e-9)


@pytest.mark.parametrize(
    ("settings", "told"),
    [
        ({"bandwidth": 2.0}, "--bandwidth must be left out with --estimator nearest"),
        ({"criterion": "gcv"}, "--criterion must be leave-one-out or leave-block-out with"),
        ({"engine": "binned"}, "--engine binned must come with another estimator"),
        ({"neighbours": 0}, "--neighbours must be at least 1"),
    ],
)
def test_what_does_not_go_with_it_is_refused(settings, told):
    with pytest.raises(InputError) as caught:
        Smoothing(estimator="nearest", **settings)
    assert told in str(caught.value)


def test_neighbours_go_with_nothing_else():
    with pytest.raises(InputError) as caught:
        Smoothing(neighbours=5)
    assert "--neighbours must come with --estimator nearest" in str(caught.value)


@pytest.mark.parametrize(
    ("options", "told"),
    [
        ({"weight": "day"}, "--weight must be left out with --estimator nearest"),
        ({"band": Band(landmarks=True)}, "--landmarks and --crossing must be left out"),
        ({"band": Band(kind="simultaneous")}, "--band simultaneous must be left out"),
        (
            {"smoothing": Smoothing(estimator="nearest", neighbours=3000)},
            "--neighbours must be below the number of rows, 3,000, but it is 3,000",
        ),
        (
            {"smoothing": Smoothing(estimator="nearest", memory_gigabytes=1e-4)},
            "--estimator nearest must stay within --memory 0.0001 (gigabytes)",
        ),
    ],
)
def test_what_cannot_be_done_is_refused(options, told):
    with pytest.raises(InputError) as caught:
        curve(**options)
    assert told in str(caught.value)
