"""A curve without each fold: kept small, read back to the last bit, true to a part in thousands."""

import json

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

from fastsmooth import Band, InputError, Reading, load_curve, make_curve
from fastsmooth.foldcurves import FoldCurves
from tests import cases


@given(
    hnp.arrays(
        np.float64,
        st.tuples(st.integers(1, 9), st.integers(1, 12)),
        elements=st.floats(allow_nan=True, allow_infinity=True, width=64),
    )
)
def test_kept_deviations_are_true_to_their_steps_and_come_back_to_the_last_bit(moved):
    n = moved.shape[1]
    shares = np.full(moved.shape, 1.0 / moved.shape[0])
    kept = FoldCurves.of(
        np.arange(moved.shape[0]), np.linspace(0.0, 1.0, n), np.full(n, 9.0), moved, shares
    )
    known = np.isfinite(moved).all(axis=0)
    np.testing.assert_array_equal(kept.known, known)
    assert np.isnan(kept.centre[~known]).all()
    largest = np.abs(moved[:, known]).max(axis=0) if known.any() else np.empty(0)
    away = np.abs(kept.moved[:, known] - moved[:, known])
    assert (away <= largest / 32_767 * 0.5001 + 1e-300).all()
    np.testing.assert_allclose(kept.shares.sum(axis=0), 1.0)
    again = FoldCurves.from_dict(json.loads(json.dumps(kept.to_dict(), allow_nan=False)))
    for name, value in vars(kept).items():
        np.testing.assert_array_equal(getattr(again, name), value)


def made(**band):
    rows = cases.make_rows("uniform", 6000, seed=4)
    data = {**rows.columns(), "day": np.arange(6000) // 100}
    return make_curve(
        data, "wet_bulb_c", "power_kw", reading=Reading(block="day"), band=Band(**band)
    )


def test_the_kept_folds_give_the_curves_own_standard_error_and_centre():
    curve = made()
    kept = curve.without_folds
    assert kept.folds.tolist() == list(range(32))
    met = np.count_nonzero(kept.parts, axis=0)
    error = np.sqrt((met - 1.0) / met * (kept.moved**2).sum(axis=0))
    np.testing.assert_allclose(error, curve.std_error, rtol=0.01)
    away = np.abs(kept.centre - 0.5 * (curve.lower + curve.upper))
    assert np.nanmax(away / curve.std_error) < 1e-4


def test_curves_of_runs_keep_their_folds_too():
    rows = cases.make_rows("uniform", 3000, seed=5)
    curve = make_curve(rows.columns(), "wet_bulb_c", "power_kw")
    assert curve.without_folds.known.mean() > 0.9


@pytest.mark.parametrize("suffix", [".parquet", ".arrow", ".json"])
def test_folds_travel_with_the_file(suffix, tmp_path):
    curve = made()
    curve.save(tmp_path / f"curve{suffix}")
    again = load_curve(tmp_path / f"curve{suffix}").without_folds
    for name, value in vars(curve.without_folds).items():
        np.testing.assert_array_equal(getattr(again, name), value)


def test_folds_need_not_be_kept():
    assert made(keep_folds=False).without_folds is None
    with pytest.raises(InputError, match="keep_folds must be True or False, but it is 'no'"):
        Band(keep_folds="no")
