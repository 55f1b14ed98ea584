"""Curves cut into cells: values and statuses of rows against plain loops."""

import math
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pytest

from fastsmooth.curve import Curve
from fastsmooth.errors import InputError
from fastsmooth.lookup import ROW_STATUSES, CurvePoints, Lookup
from fastsmooth.score import score_rows
from tests.curves import CASES
from tests.scored_rows import (
    NEW,
    assert_rows,
    looked_up,
    readings,
    row_by_hand,
    sound,
)

ON_A_LINE = [name for name in CASES if name not in ("few_points", "one_point", "no_curve")]


def rows_along(curve: Curve, n: int, seed: int = 1):
    """x in and around the curve, on its points and just beside them; y near and far from it."""
    rng = np.random.default_rng(seed)
    low, high = float(curve.x[0]), float(curve.x[-1])
    reach = 0.05 * (high - low)
    some = rng.choice(curve.x, n // 4)
    x = np.concatenate((
        rng.uniform(low - reach, high + reach, n), some, np.nextafter(some, math.inf),
        np.nextafter(some, -math.inf), [low, high, math.nan, math.inf, -math.inf, low],
    ))  # fmt: skip
    rng.shuffle(x)
    with np.errstate(all="ignore"):
        mean = np.nan_to_num(curve.at(x), nan=50.0)
    y = mean + np.nanmedian(curve.residual_sd) * rng.normal(0.0, 2.5, x.size)
    y[::41] = math.nan
    y[5::97] = math.inf
    return x, y


@pytest.mark.parametrize("name", ["plain", "gap", "thin_ends", "log_scale", "times", "constant"])
def test_rows_are_scored_as_by_hand(name):
    curve = sound(CASES[name]())
    x, y = rows_along(curve, 240)
    lookup = looked_up(curve)
    scored = lookup.score(x, y, 0, 2.0)
    by_hand = [row_by_hand(curve, *row, 2.0) for row in zip(x.tolist(), y.tolist(), strict=True)]
    table = pa.table({
        **{one: pa.array(getattr(scored, one), from_pandas=True) for one in NEW[:3]},
        "status": [ROW_STATUSES[code] for code in scored.status.tolist()],
    })  # fmt: skip
    assert_rows(table, by_hand)
    assert len(set(table["status"].to_pylist())) >= 3


@pytest.mark.parametrize("name", ON_A_LINE)
def test_expected_value_is_that_of_the_curve(name):
    curve = CASES[name]()
    x, y = rows_along(curve, 1000)
    scored = looked_up(curve).score(x, np.nan_to_num(y, posinf=0.0), 0, 3.0)
    read = np.isfinite(x)
    with np.errstate(all="ignore"):
        at = curve.at(np.where(read, x, curve.x[0]))
    at[~read] = np.nan
    np.testing.assert_array_equal(np.isnan(scored.expected), np.isnan(at))
    known = ~np.isnan(at)
    typical = float(np.nanmedian(curve.residual_sd))
    rounding = 4.0 * np.spacing(np.abs(at[known]).max())
    assert np.abs(scored.expected - at)[known].max() <= 1e-9 * typical + rounding


def test_row_between_points_has_the_weaker_support_and_row_on_a_point_its_own():
    curve = CASES["gap"]()
    known = np.flatnonzero(np.isfinite(curve.estimate))
    last = known[np.flatnonzero(np.diff(known) > 1)[0]]
    step = curve.x[last + 1] - curve.x[last]
    status = replace(curve, status=np.where(np.isfinite(curve.estimate), 0, 3)).status
    status[last] = 1
    curve = replace(curve, status=status)
    places = curve.x[last] + np.array([-1.0, -0.5, 0.0, 0.5]) * step
    places[0] = curve.x[last - 1]
    scored = looked_up(curve).score(places, np.full(4, 60.0), 0, 1e9)
    words = [ROW_STATUSES[code] for code in scored.status.tolist()]
    assert words == ["inside", "thin", "thin", "no support"]


def test_curve_without_scatter_judges_nothing():
    curve = replace(CASES["plain"](), residual_sd=np.zeros(256))
    scored = looked_up(curve).score(np.array([8.0]), np.array([90.0]), 0, 3.0)
    assert ROW_STATUSES[scored.status[0]] == "thin"
    assert math.isfinite(scored.residual[0])
    assert math.isnan(scored.z[0])


def test_curve_at_own_points_is_refused():
    told = (
        "--curve must have evenly spaced points, between which rows can be scored, but it was "
        "made with --at; make it without."
    )
    curve = sound(CASES["few_points"]())
    with pytest.raises(InputError) as refused:
        looked_up(curve)
    assert str(refused.value) == told
    # Also where own points happen to lie evenly.
    curve = sound(CASES["plain"]())
    settings = {**curve.trace["settings"], "at": ["2", "5"]}
    with pytest.raises(InputError) as refused:
        score_rows(readings(3), replace(curve, trace={**curve.trace, "settings": settings}))
    assert str(refused.value) == told


def test_many_curves_are_looked_up_as_each_alone():
    curves = [CASES[name]() for name in ("plain", "gap", "thin_ends", "one_point", "no_curve")]
    units = [CurvePoints.of(one) for one in curves]
    units.insert(2, None)
    together = Lookup(units, False)
    rng = np.random.default_rng(3)
    x, y = rng.uniform(-1.0, 27.0, 4000), rng.uniform(50.0, 90.0, 4000)
    x[:200] = 8.0
    unit = rng.integers(0, len(units) + 1, x.size)
    scored = together.score(x, y, unit, 2.0)
    for number, one in enumerate([*units, None]):
        own = unit == number
        alone = Lookup([one], False).score(x[own], y[own], 0 if number < 6 else 1, 2.0)
        for name in NEW[:3]:
            np.testing.assert_array_equal(getattr(scored, name)[own], getattr(alone, name))
        np.testing.assert_array_equal(scored.status[own], alone.status)
