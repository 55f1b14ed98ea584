"""Rows scored one at a time by plain loops, and data that the tests of scoring share."""

import functools
import math
from dataclasses import replace
from datetime import date, timedelta
from decimal import Decimal

import numpy as np
import pyarrow as pa
import pytest
from scipy.interpolate import CubicSpline

from fastsmooth.curve import Curve
from fastsmooth.lookup import ROW_STATUSES, CurvePoints, Lookup
from fastsmooth.score import DEFAULT_Z_LIMIT
from tests.curves import START_US, build, cooling, temperatures

NEW = ["expected", "residual", "z", "status"]


def expected_at(curve: Curve, x: float):
    """Value, residual sd and support at one place."""
    xs, values = curve.x.tolist(), curve.estimate.tolist()
    log = curve.scale == "log"
    if not xs[0] <= x <= xs[-1]:
        return None
    for k, point in enumerate(xs):
        if x == point:
            if math.isnan(values[k]):
                return None
            return values[k], curve.residual_sd[k], curve.statuses[k]
    k = max(k for k, point in enumerate(xs) if point < x)
    if math.isnan(values[k]) or math.isnan(values[k + 1]):
        return None
    first, last = k, k + 1
    while first > 0 and not math.isnan(values[first - 1]):
        first -= 1
    while last + 1 < len(xs) and not math.isnan(values[last + 1]):
        last += 1
    knots = [math.log(one) if log else one for one in xs[first : last + 1]]
    place = math.log(x) if log else x
    value = float(CubicSpline(knots, values[first : last + 1])(place))
    left = math.log(xs[k]) if log else xs[k]
    right = math.log(xs[k + 1]) if log else xs[k + 1]
    share = (place - left) / (right - left)
    sd = curve.residual_sd[k] + share * (curve.residual_sd[k + 1] - curve.residual_sd[k])
    both = (curve.statuses[k], curve.statuses[k + 1])
    return value, sd, "thin" if "thin" in both else "ok"


def row_by_hand(curve, x, y, z_limit, weight=1.0):
    """expected, residual, z, status of one row."""
    if curve is None:
        return None, None, None, "no curve"
    if curve == "unknown":
        return None, None, None, "unknown unit"
    for value in (x, y, weight):
        if value is None or not math.isfinite(value):
            return None, None, None, "no reading"
    if weight <= 0.0:
        return None, None, None, "no reading"
    found = expected_at(curve, x)
    if found is None:
        return None, None, None, "no support"
    value, sd, support = found
    residual = y - value
    z = residual / sd * math.sqrt(weight) if sd > 0.0 else None
    if support == "thin" or z is None:
        return value, residual, z, "thin"
    return value, residual, z, "above" if z > z_limit else "below" if z < -z_limit else "inside"


def assert_rows(table, by_hand, tolerance=1e-9):
    assert table.num_rows == len(by_hand)
    assert table["status"].to_pylist() == [row[3] for row in by_hand]
    for place, name in enumerate(("expected", "residual", "z")):
        got, wanted = table[name].to_pylist(), [row[place] for row in by_hand]
        assert [one is None for one in got] == [one is None for one in wanted]
        for a, b in zip(got, wanted, strict=True):
            assert a is None or a == pytest.approx(b, rel=tolerance, abs=tolerance)


def by_hand(table, curve, z_limit=DEFAULT_Z_LIMIT):
    x, y = table["wet_bulb_c"].to_pylist(), table["power_kw"].to_pylist()
    return [row_by_hand(curve, *row, z_limit) for row in zip(x, y, strict=True)]


def tally_by_hand(units, status, unit):
    """Counts, number of runs, longest run of each unit."""
    told = []
    for u in range(units):
        own = [s for s, one in zip(status, unit, strict=True) if one == u]
        counts = [own.count(code) for code in range(len(ROW_STATUSES))]
        runs, longest, length, before = 0, 0, 0, 0
        for code in own:
            if code in (1, 2):
                length = length + 1 if code == before else 1
                runs += length == 1
                longest = max(longest, length)
            else:
                length = 0
            before = code
        told.append((counts, runs, longest))
    return told


def sound(curve: Curve) -> Curve:
    """The curve with a scatter of at least 0.5: two rows alone have none but rounding."""
    settings = {**curve.trace["settings"], "weight": None, "where": None}
    return replace(
        curve, residual_sd=np.maximum(curve.residual_sd, 0.5),
        trace={**curve.trace, "settings": settings},
    )  # fmt: skip


@functools.cache
def support_curve() -> Curve:
    """Return a curve with all kinds of support."""
    x = np.concatenate((np.clip(temperatures(), 0.0, 25.0), [27.0, 27.5, 28.0]))
    x = x[(x < 11.0) | (x > 16.5)]
    return sound(build(x, cooling(x), 1.1))


def readings(n: int, seed: int = 0) -> pa.Table:
    """Rows with columns of many types."""
    rng = np.random.default_rng(seed)
    x = rng.uniform(-2.0, 30.0, n)
    y = cooling(x, seed=seed)
    y[::50] += 60.0
    numbers = np.arange(n)
    x_nulls, y_nulls = numbers % 37 == 5, numbers % 41 == 7
    stamps = START_US + numbers * 1_000_000
    return pa.table({
        "logged_at": pa.array(stamps).cast(pa.timestamp("us", "Europe/Madrid")),
        "wet_bulb_c": pa.array(x, mask=x_nulls),
        "power_kw": pa.array(y, mask=y_nulls),
        "plant": pa.array([("northmoor", "eastfield", None)[k % 3] for k in range(n)])
        .dictionary_encode(),
        "price": pa.array([Decimal(k) / 100 for k in range(n)], pa.decimal128(9, 2)),
        "phases": pa.array([[k, None] if k % 5 else None for k in range(n)], pa.list_(pa.int16())),
        "meter": pa.array([{"id": k, "name": f"m{k}"} for k in range(n)]),
        "day": pa.array([date(2026, 1, 1) + timedelta(k % 20) for k in range(n)]),
        "running": pa.array([k % 2 == 0 for k in range(n)]),
        "since": pa.array(numbers).cast(pa.duration("ms")),
        "raw": pa.array([bytes([k % 256]) for k in range(n)]),
        "small": pa.array(numbers % 100, pa.int8()),
        "half": pa.array(x.astype(np.float16)),
    }).replace_schema_metadata({"site": "north"})  # fmt: skip


def looked_up(curve):
    return Lookup([CurvePoints.of(curve)], curve.scale == "log")
