"""Places of interest on a curve, against truths whose places are known."""

import numpy as np
import pytest

from fastsmooth import Band, Reading, Smoothing, make_curve
from fastsmooth.curve import EDGE, OK

DAYS, PER_DAY = 64, 40


def rows(seed, truth, x=None, noise=0.5, day_sd=0.0):
    rng = np.random.default_rng(seed)
    n = DAYS * PER_DAY
    x = rng.uniform(0.0, 10.0, n) if x is None else x
    day = np.repeat(np.arange(DAYS), PER_DAY)
    y = truth(x) + rng.normal(0.0, noise, n) + rng.normal(0.0, day_sd, DAYS)[day]
    return {"x": x, "y": y, "day": day}


def marks(data, *, crossings=(), block=None, folds=32, **smoothing):
    made = make_curve(
        data, "x", "y", reading=Reading(block=block, folds=folds, threads=1),
        smoothing=Smoothing(**{"bandwidth": 1.0, "widths": 8, **smoothing}),
        band=Band(landmarks=True, crossings=crossings),
    )  # fmt: skip
    found = {}
    for mark in made.trace["landmarks"]:
        found.setdefault(mark["kind"], []).append(mark)
    return found


def step(x):
    return 3.0 * np.tanh(x - 5.0)


def wave(x):
    return 3.0 * np.sin(x)


def test_a_step_is_steepest_in_its_middle_and_crossed_there():
    found = marks(rows(1, step), crossings=(0.0, 1.5))
    assert found["steepest"][0]["x"] == pytest.approx(5.0, abs=0.25)
    assert [mark["x"] for mark in found["crossing"]] == pytest.approx(
        [5.0, 5.0 + np.arctanh(0.5)], abs=0.1
    )
    assert "lowest" not in found
    assert "highest" not in found
    for kind in found.values():
        for mark in kind:
            assert mark["lower"] < mark["x"] < mark["upper"]


def test_a_wave_turns_where_it_should():
    found = marks(rows(2, wave))
    tops = [mark["x"] for mark in found["highest"]]
    bottoms = [mark["x"] for mark in found["lowest"]]
    assert tops == pytest.approx([np.pi / 2, 5 * np.pi / 2], abs=0.15)
    assert bottoms == pytest.approx([3 * np.pi / 2], abs=0.15)
    assert found["highest"][0]["value"] > 2.5


@pytest.mark.parametrize("day_sd", [0.0, 0.5])
def test_intervals_of_a_crossing_hold_the_place_as_often_as_they_claim(day_sd):
    runs, held, width = 40, 0, 0.0
    for seed in range(runs):
        found = marks(
            rows(100 + seed, step, day_sd=day_sd), crossings=(0.0,), block="day", bandwidth=0.6
        )
        mark = found["crossing"][0]
        held += mark["lower"] <= 5.0 <= mark["upper"]
        width += mark["upper"] - mark["lower"]
    # 0.95 within three standard errors of 40 runs; and not by being endlessly wide.
    assert held >= 0.95 * runs - 3.0 * np.sqrt(0.05 * 0.95 * runs)
    assert width / runs < 0.25


def test_noise_around_a_straight_line_turns_nowhere():
    for seed in range(10):
        found = marks(rows(seed, lambda x: 2.0 * x))
        assert "lowest" not in found
        assert "highest" not in found


@pytest.mark.parametrize("folds", [2, 3, 4])
def test_few_folds_make_no_turns_out_of_noise(folds):
    """Two folds that happen to agree are no proof: their error has one degree of freedom."""
    turns = 0
    for seed in range(20):
        found = marks(rows(seed, lambda x: 0.0 * x), folds=folds, bandwidth=0.5)
        turns += len(found.get("lowest", [])) + len(found.get("highest", []))
    # A swing as large comes by chance in three of a thousand; each run has some twenty.
    assert turns <= 4


def test_few_folds_still_see_a_wave_that_stands_out():
    found = marks(rows(2, wave, noise=0.05), folds=8)
    assert [mark["x"] for mark in found["lowest"]] == pytest.approx([3 * np.pi / 2], abs=0.1)


def test_where_landmarks_were_looked_for_is_told():
    data = rows(7, step)
    made = make_curve(
        data, "x", "y", reading=Reading(block="day"), smoothing=Smoothing(bandwidth=1.0, widths=8),
        band=Band(landmarks=True),
    )  # fmt: skip
    ((low, high),) = made.trace["landmark_stretches"]
    good = made.x[(made.status == OK) | (made.status == EDGE)]
    assert (low, high) == (good[0], good[-1])
    made = make_curve(
        data, "x", "y", reading=Reading(block="day", folds=4),
        smoothing=Smoothing(bandwidth=1.0, widths=8), band=Band(landmarks=True, crossings=(0.0,)),
    )  # fmt: skip
    assert made.trace["landmark_stretches"] == []
    assert make_curve(data, "x", "y").trace["landmark_stretches"] is None


def test_a_line_without_noise_is_steepest_nowhere():
    found = marks(rows(3, lambda x: 2.0 * x, noise=0.0), crossings=(7.0,))
    assert "steepest" not in found
    assert found["crossing"][0]["x"] == pytest.approx(3.5, abs=1e-6)


def test_what_is_not_reached_is_told():
    found = marks(rows(4, step), crossings=(50.0,))
    assert found["crossing"] == [
        {"kind": "crossing", "x": None, "lower": None, "upper": None, "value": 50.0}
    ]


def test_nothing_is_found_in_a_gap_even_with_points_of_ones_own():
    rng = np.random.default_rng(5)
    x = np.where(rng.random(DAYS * PER_DAY) < 0.5, rng.uniform(0, 3, DAYS * PER_DAY),
                 rng.uniform(7, 10, DAYS * PER_DAY))  # fmt: skip
    data = rows(5, step, x=x)
    made = make_curve(
        data, "x", "y", smoothing=Smoothing(bandwidth=0.8, widths=8),
        band=Band(at=(1.0, 9.0), landmarks=True, crossings=(0.0,)),
    )  # fmt: skip
    for mark in made.trace["landmarks"]:
        assert mark["x"] is None or not 3.8 < mark["x"] < 6.2


def test_a_log_scale_gives_places_in_terms_of_x():
    data = rows(6, step)
    data["x"] = np.exp(data["x"] / 2.0)
    made = make_curve(
        data, "x", "y", reading=Reading(scale="log"),
        smoothing=Smoothing(bandwidth=float(np.exp(0.5)), widths=8), band=Band(crossings=(0.0,)),
    )  # fmt: skip
    place = next(m for m in made.trace["landmarks"] if m["kind"] == "crossing")
    assert place["x"] == pytest.approx(np.exp(2.5), rel=0.05)
    assert place["lower"] < place["x"] < place["upper"]
    ((low, high),) = made.trace["landmark_stretches"]
    assert low == pytest.approx(1.0, abs=0.02)
    assert high == pytest.approx(np.exp(5.0), rel=0.02)
