"""The result itself: reading it at other places, its table, its labels."""

import json
from dataclasses import replace

import numpy as np
import pyarrow as pa
import pytest

from fastsmooth import Band, Curve, InputError, Reading, Smoothing, make_curve
from fastsmooth.curve import CURVE_KEY, STATUSES
from fastsmooth.errors import WriteError
from tests import cases

COLUMNS = (
    "x", "estimate", "slope", "slope_std_error", "std_error", "lower", "upper",
    "effective_rows", "residual_sd", "status",
)  # fmt: skip


def make(design="uniform", n=3000, *, data=None, **options):
    data = data or cases.make_rows(design, n, seed=2).columns()
    return make_curve(data, "wet_bulb_c", "power_kw", **options)


@pytest.fixture(scope="module")
def curve():
    return make()


@pytest.fixture(scope="module")
def curve_with_a_gap():
    return make("gap")


def test_reading_between_the_points_is_close_to_the_curve_itself(curve):
    places = np.linspace(-4.0, 27.0, 97)
    exact = make(
        smoothing=Smoothing(bandwidth=curve.bandwidth), band=Band(at=tuple(places.tolist()))
    )  # fmt: skip
    away = np.abs(curve.at(places) - exact.estimate)
    assert away.max() < 0.02 * exact.std_error.min()


def test_reading_at_the_points_is_the_estimate(curve):
    assert curve.at(curve.x) == pytest.approx(curve.estimate, rel=1e-12)
    assert curve.at(12.5).shape == (1,)
    assert curve.at([3.0, 4.0]).shape == (2,)


def test_nothing_is_read_outside_or_in_the_gap(curve_with_a_gap):
    """Rows end at 11 and begin again at 15; windows reach less than two degrees."""
    curve = curve_with_a_gap
    assert curve.bandwidth < 2.0
    assert np.isnan(curve.at([-5.5, 13.0, 29.0, np.nan])).all()
    assert np.isfinite(curve.at([-4.0, 10.0, 16.0, 27.0])).all()


def test_points_of_ones_own_are_not_read_between():
    made = make(band=Band(at=(-90.0, 10.0, 90.0)))
    assert made.statuses == ["outside", "ok", "outside"]
    with pytest.raises(InputError, match="the curve must have evenly spaced points"):
        made.at([10.0])


def test_default_points_run_from_end_to_end(curve):
    x = cases.make_rows("uniform", 3000, seed=2).wet_bulb_c
    assert curve.x.shape == (256,)
    assert (curve.x[0], curve.x[-1]) == (x.min(), x.max())
    assert np.diff(curve.x) == pytest.approx(np.full(255, np.ptp(x) / 255))


def test_points_of_ones_own_are_sorted():
    made = make(band=Band(at=(20.0, 3.0, "11.5")))
    assert made.x.tolist() == [3.0, 11.5, 20.0]
    assert np.isfinite(made.estimate).all()
    again = make(band=Band(at=np.array([3.0, 11.5, 20.0])))
    assert again.estimate.tolist() == made.estimate.tolist()


# The table.


def test_table_has_the_columns_and_the_trace(curve):
    table = curve.table()
    assert tuple(table.column_names) == COLUMNS
    assert table.num_rows == 256
    assert table.schema.field("status").type == pa.string()
    assert set(table["status"].to_pylist()) <= set(STATUSES)
    told = json.loads(table.schema.metadata[CURVE_KEY])
    assert told["trace"] == json.loads(json.dumps(curve.trace))


def test_what_has_no_support_is_null(curve_with_a_gap):
    table = curve_with_a_gap.table()
    nothing = np.array(table["status"].to_pylist()) == "outside"
    assert nothing.any()
    for name in COLUMNS[1:-1]:
        missing = table[name].is_null().to_numpy()
        assert missing[nothing].all(), name
        assert not missing[~nothing].any(), name
    assert table["x"].null_count == 0


@pytest.mark.parametrize("design", ["uniform", "gap"])
def test_a_curve_returns_from_its_table(design):
    made = make(design)
    back = Curve.from_table(made.table())
    for name in (*COLUMNS[:-1], "status"):
        assert np.array_equal(getattr(back, name), getattr(made, name), equal_nan=True), name
    assert back.table().equals(made.table(), check_metadata=True)
    assert back.bandwidth == made.bandwidth
    assert back.axis == made.axis
    assert back.cautions == made.cautions
    assert back.search.to_dict() == made.search.to_dict()


def test_strangers_and_newer_formats_are_refused(curve):
    with pytest.raises(InputError) as caught:
        Curve.from_table(pa.table({"x": [1.0]}), "'a.parquet'")
    assert str(caught.value) == (
        "CURVE must be a curve that fastsmooth wrote, but 'a.parquet' carries no trace; "
        "name a file that 'fastsmooth curve --out' made."
    )
    table = curve.table()
    told = json.loads(table.schema.metadata[CURVE_KEY]) | {"format": 99}
    newer = table.replace_schema_metadata({CURVE_KEY: json.dumps(told).encode()})
    with pytest.raises(InputError, match="has format 99; make the curve again"):
        Curve.from_table(newer)


# Times and logarithms.


def test_times_stay_times():
    start = np.datetime64("2026-03-01T00:00:00", "us")
    rows = cases.make_rows("uniform", 2000)
    seconds = (rows.wet_bulb_c + 5.0) * 3600.0
    logged_at = start + (seconds * 1e6).astype("timedelta64[us]")
    made = make_curve(
        {"logged_at": logged_at, "power_kw": rows.power_kw},
        "logged_at",
        "power_kw",
        smoothing=Smoothing(bandwidth="1 h 30 min"),
        band=Band(at=("2026-03-01 06:00", "2026-03-02")),
    )
    assert made.bandwidth == 5400.0
    assert made.width_label(made.bandwidth) == "1 h 30 min"
    table = made.table()
    assert table["x"].type == pa.timestamp("us")
    assert [str(one) for one in table["x"].to_pylist()] == [
        "2026-03-01 06:00:00", "2026-03-02 00:00:00",
    ]  # fmt: skip
    plain = make_curve(
        (seconds, rows.power_kw), "x", "y", smoothing=Smoothing(bandwidth=5400.0),
        band=Band(at=(6 * 3600.0, 24 * 3600.0)),
    )  # fmt: skip
    assert made.estimate == pytest.approx(plain.estimate, abs=1e-6)
    # Per second, as said.
    assert made.slope == pytest.approx(plain.slope, abs=1e-9)


def test_log_scale_is_the_curve_of_the_logarithm():
    rows = cases.make_rows("log spread", 3000)
    log_x = np.log(rows.wet_bulb_c)
    at = (0.5, 2.0, 9.0)
    made = make_curve(
        (rows.wet_bulb_c, rows.power_kw), "x", "y", reading=Reading(scale="log"),
        smoothing=Smoothing(bandwidth=1.4), band=Band(at=at),
    )  # fmt: skip
    plain = make_curve(
        (log_x, rows.power_kw), "x", "y", smoothing=Smoothing(bandwidth=float(np.log(1.4))),
        band=Band(at=tuple(np.log(at).tolist())),
    )  # fmt: skip
    assert made.x == pytest.approx(at)
    assert made.bandwidth == pytest.approx(1.4)
    assert made.width_label(made.bandwidth) == "factor 1.4"
    assert made.estimate == pytest.approx(plain.estimate, abs=1e-7)
    assert made.std_error == pytest.approx(plain.std_error, rel=1e-6)
    # d/dx = (1 / x) d/d log x.
    assert made.slope == pytest.approx(plain.slope / np.array(at), rel=1e-5)
    assert made.slope_std_error == pytest.approx(plain.slope_std_error / np.array(at), rel=1e-5)
    trail = made.search.trails["local-linear"]
    assert (trail.bandwidths > 1.0).all()
    assert np.log(trail.bandwidth) == pytest.approx(
        plain.search.trails["local-linear"].bandwidth, rel=1e-3
    )
    assert trail.flat_zone[0] <= trail.bandwidth <= trail.flat_zone[1]


# The rows that lie behind it.


def test_density_counts_every_row_once(curve):
    density = curve.density
    assert density.rows.sum() == 3000.0
    assert density.x_edges.shape == (density.rows.size + 1,)
    assert (np.diff(density.x_edges) > 0.0).all()
    assert (np.diff(density.y_edges) > 0.0).all()
    x = cases.make_rows("uniform", 3000, seed=2).wet_bulb_c
    counted, _ = np.histogram(x, density.x_edges)
    # A bin's rows stand together: a few may sit on the other side of an edge.
    assert np.abs(density.rows - counted).max() <= 3


def test_settings_and_scale_are_told(curve):
    assert curve.settings["x"] == "wet_bulb_c"
    assert curve.settings["kernel"] == "biweight"
    assert curve.settings["bandwidth"] is None
    assert curve.scale == "linear"
    changed = curve.settings
    changed["x"] = "other"
    assert curve.settings["x"] == "wet_bulb_c"


def test_a_curve_does_not_change(curve):
    with pytest.raises(AttributeError):
        curve.bandwidth = 3.0
    assert replace(curve, bandwidth=3.0).bandwidth == 3.0


# Places in the column's own terms.


@pytest.fixture(scope="module")
def curve_over_time():
    stamps = np.datetime64("2026-01-01", "us") + np.arange(3000) * np.timedelta64(600, "s")
    table = pa.table({
        "logged_at": pa.array(stamps).cast(pa.timestamp("us", "Europe/Madrid")),
        "power_kw": 30.0 + np.sin(np.arange(3000) / 300.0),
    })  # fmt: skip
    return make_curve(table, "logged_at", "power_kw", smoothing=Smoothing(widths=8))


def test_times_are_read_in_the_columns_zone(curve_over_time):
    """Noon in Madrid is 11 o'clock in the winter of UTC, 10 days after the origin."""
    from datetime import UTC, datetime

    told = curve_over_time.at([10 * 86_400.0 + 11 * 3600.0])
    assert np.isfinite(told).all()
    noon_utc = datetime(2026, 1, 11, 11, 0, tzinfo=UTC)
    for same in (
        "2026-01-11 12:00",
        ["2026-01-11T12:00"],
        np.array(["2026-01-11T12:00"], "M8[s]"),
        np.array(["2026-01-11T12"], "M8[h]"),
        np.datetime64("2026-01-11T12:00", "ns"),
        noon_utc,
        [noon_utc],
        pa.array([noon_utc], pa.timestamp("us", "UTC")),
        pa.array([noon_utc], pa.timestamp("us", "Europe/Madrid")),
    ):
        assert curve_over_time.at(same).tolist() == told.tolist()


def test_a_curve_reads_its_own_table(curve_over_time):
    told = curve_over_time.at(curve_over_time.table()["x"])
    assert told == pytest.approx(curve_over_time.estimate, rel=1e-9, nan_ok=True)


@pytest.mark.parametrize(
    ("place", "shown"),
    [("soon", "'soon'"), (np.datetime64("NaT"), "'NaT'"), (None, "None"), (True, "True")],
)
def test_what_is_no_time_is_refused(curve_over_time, place, shown):
    with pytest.raises(InputError) as caught:
        curve_over_time.at([place])
    assert str(caught.value).startswith(
        f"a value of x must be a timestamp, but {shown} was given; write it as in 2026-01-31"
    )


@pytest.mark.parametrize(
    "place",
    [np.datetime64("2026"), np.timedelta64(5, "ns"), np.timedelta64(5, "s"), "warm", True, 1j],
)
def test_what_is_no_number_is_refused_on_a_number_axis(curve, place):
    with pytest.raises(InputError, match=r"^a value of x must be a (finite )?number, but "):
        curve.at([place])


def test_numbers_as_texts_are_numbers(curve):
    assert curve.at(["10", "12.5"]).tolist() == curve.at([10.0, 12.5]).tolist()


def test_a_span_of_nanoseconds_is_no_number_of_seconds():
    spans = np.arange(500) * np.timedelta64(1, "ms")
    data = {"since_start": spans, "power_kw": np.arange(500.0)}
    made = make_curve(data, "since_start", "power_kw", smoothing=Smoothing(widths=8))
    assert made.at(np.array([250_000_000], "m8[ns]")).tolist() == made.at([0.25]).tolist()


def test_curves_are_told_apart_by_identity(curve):
    same = curve
    assert curve == same
    assert curve != make()
    assert len({curve, same}) == 1


@pytest.mark.parametrize(("method", "option"), [("save", "--out"), ("plot", "--plot")])
def test_a_result_goes_to_a_path(curve, method, option):
    with pytest.raises(WriteError) as caught:
        getattr(curve, method)(None)
    assert str(caught.value) == f"{option} must name a file, but it is None; give a path."


def test_a_bias_of_nothing_has_no_sign(curve):
    from fastsmooth.summary import curve_lines

    fit = {**curve.trace["fit"], "nmbe": -1e-17}
    lines = curve_lines(replace(curve, trace={**curve.trace, "fit": fit}))
    assert next(line for line in lines if line.startswith("fit ")).endswith("NMBE 0 %")
