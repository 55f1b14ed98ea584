"""make_curve and search_bandwidth as a caller meets them."""

import subprocess
import sys

import numpy as np
import polars as pl
import pyarrow as pa
import pytest

import fastsmooth
from fastsmooth import Band, InputError, Reading, Smoothing, make_curve, search_bandwidth
from tests import cases
from tests.conftest import write_parquet
from tests.oracle import many_rows

ROWS = cases.make_rows("uniform", 2500, seed=6)
X, Y = ROWS.wet_bulb_c, ROWS.power_kw


def refused(function=make_curve, data=None, **options):
    data = ROWS.columns() if data is None else data
    with pytest.raises(InputError) as caught:
        function(data, "wet_bulb_c", "power_kw", **options)
    return str(caught.value)


def test_the_curve_is_near_the_truth():
    made = make_curve(ROWS.columns(), "wet_bulb_c", "power_kw")
    truth = cases.mean_power_kw(made.x)
    assert (np.abs(made.estimate - truth) < 4.5 * made.std_error + 0.1).all()
    assert made.estimate == pytest.approx(
        many_rows.fit_many(made.x, X, Y, made.bandwidth, "biweight", 1)[0], abs=1e-5
    )
    assert made.residual_sd == pytest.approx(np.full(256, ROWS.noise_sd_kw), rel=0.2)


def test_the_chosen_width_is_used_and_told():
    made = make_curve(ROWS.columns(), "wet_bulb_c", "power_kw")
    found = search_bandwidth(ROWS.columns(), "wet_bulb_c", "power_kw")
    assert made.search.to_dict() == found.to_dict()
    assert made.bandwidth == found.trails["local-linear"].bandwidth
    constant = make_curve(
        ROWS.columns(), "wet_bulb_c", "power_kw", smoothing=Smoothing(estimator="local-constant")
    )
    assert constant.bandwidth == found.trails["local-constant"].bandwidth


@pytest.mark.parametrize("criterion", ["leave-one-out", "gcv", "aicc", "plug-in"])
def test_every_criterion_finds_a_width_of_the_same_order(criterion):
    smoothing = Smoothing(criterion=criterion)
    found = search_bandwidth(ROWS.columns(), "wet_bulb_c", "power_kw", smoothing=smoothing)
    assert found.criterion == criterion
    best = many_rows.best_bandwidth(X, Y, "biweight", 1, 0.5, 8.0, widths=12)
    assert best / 2.0 < found.trails["local-linear"].bandwidth < best * 2.0


@pytest.mark.parametrize("kernel", many_rows.CODES)
def test_every_kernel_chooses_by_its_own_scale(kernel):
    """Widths over canonical bandwidths agree (Marron & Nolan 1988)."""
    from fastsmooth.kernels.shapes import SHAPES

    chosen = {}
    for name in ("biweight", kernel):
        found = search_bandwidth((X, Y), "x", "y", smoothing=Smoothing(kernel=name))
        chosen[name] = found.trails["local-linear"].bandwidth / SHAPES[name].canonical_bandwidth
    assert chosen[kernel] == pytest.approx(chosen["biweight"], rel=0.25)


# The same rows in any container.


def test_containers_do_not_matter(tmp_path):
    write_parquet(tmp_path / "rows.parquet", ROWS.columns(), rows_per_group=10_000)
    containers = [
        (X, Y), ROWS.columns(), pa.table(ROWS.columns()), pl.DataFrame(ROWS.columns()),
        tmp_path / "rows.parquet", [str(tmp_path / "rows.parquet")],
    ]  # fmt: skip
    made = [
        make_curve(data, "wet_bulb_c", "power_kw", smoothing=Smoothing(widths=8))
        for data in containers
    ]
    for other in made[1:]:
        assert other.estimate.tobytes() == made[0].estimate.tobytes()
        assert other.search.to_dict() == made[0].search.to_dict()


def test_number_types_do_not_matter():
    whole = np.round(10.0 * X).astype(np.int32)
    smoothing = Smoothing(widths=8)
    ints = make_curve((whole, Y), "x", "y", smoothing=smoothing)
    floats = make_curve((whole.astype(float), Y), "x", "y", smoothing=smoothing)
    assert ints.estimate.tobytes() == floats.estimate.tobytes()
    short = make_curve((X, Y.astype(np.float32)), "x", "y", smoothing=smoothing)
    assert short.estimate == pytest.approx(make_curve((X, Y), "x", "y").estimate, abs=0.05)


def test_inputs_stay_as_they_were():
    x, y, weight = X.copy(), Y.copy(), cases.precisions(X.size)
    before = [one.copy() for one in (x, y, weight)]
    make_curve({"x": x, "y": y, "w": weight}, "x", "y", weight="w")
    for array, was in zip((x, y, weight), before, strict=True):
        assert array.tobytes() == was.tobytes()


def test_read_only_and_strided_inputs_are_accepted():
    both = np.column_stack([X, Y])
    both.setflags(write=False)
    made = make_curve((both[:, 0], both[:, 1]), "x", "y", smoothing=Smoothing(widths=8))
    plain = make_curve((X, Y), "x", "y", smoothing=Smoothing(widths=8))
    assert made.estimate.tobytes() == plain.estimate.tobytes()


def test_bad_rows_change_nothing_but_the_counts():
    bad_x = np.concatenate([X, [np.nan, 3.0, np.inf, 5.0]])
    bad_y = np.concatenate([Y, [20.0, np.nan, 20.0, -np.inf]])
    smoothing = Smoothing(widths=8)
    made = make_curve((bad_x, bad_y), "x", "y", smoothing=smoothing)
    plain = make_curve((X, Y), "x", "y", smoothing=smoothing)
    assert made.estimate == pytest.approx(plain.estimate, rel=1e-12)
    assert made.trace["rows"] == {
        "read": X.size + 4, "filtered": 0, "used": X.size,
        "refused": {"x NaN": 1, "x infinite": 1, "y NaN": 1, "y infinite": 1},
    }  # fmt: skip


def test_a_filter_is_the_same_as_leaving_rows_out():
    keep = X < 12.0
    made = make_curve(ROWS.columns(), "wet_bulb_c", "power_kw",
                      reading=Reading(where="wet_bulb_c < 12"))  # fmt: skip
    plain = make_curve((X[keep], Y[keep]), "x", "y")
    assert made.trace["rows"]["filtered"] == int((~keep).sum())
    assert made.x == pytest.approx(plain.x)
    # Runs, and so folds, count rows before the filter in one and after it in the other.
    assert made.estimate == pytest.approx(plain.estimate, abs=1e-9)


def test_a_range_is_the_same_as_leaving_rows_out():
    keep = (X >= 2.0) & (X <= 20.0)
    made = make_curve((X, Y), "x", "y", reading=Reading(range=(2, 20)))
    plain = make_curve((X[keep], Y[keep]), "x", "y")
    assert made.bandwidth == pytest.approx(plain.bandwidth, rel=5e-3)
    within = make_curve(
        (X[keep], Y[keep]), "x", "y", smoothing=Smoothing(bandwidth=made.bandwidth),
        band=Band(at=(3.0, 10.0, 19.0)),
    )  # fmt: skip
    assert made.at(within.x) == pytest.approx(within.estimate, abs=1e-3)


@pytest.mark.parametrize("offset", [2.0**31, -(2.0**40)])
def test_an_offset_of_x_moves_the_curve_and_nothing_else(offset):
    x = np.round(X * 256.0) / 256.0
    made = make_curve((x + offset, Y), "x", "y", smoothing=Smoothing(widths=8))
    plain = make_curve((x, Y), "x", "y", smoothing=Smoothing(widths=8))
    assert made.bandwidth == plain.bandwidth
    # The ends of the points are the data's; in between the last digits are lost to the offset.
    assert made.estimate == pytest.approx(plain.estimate, abs=1e-3)
    assert made.estimate[[0, -1]] == pytest.approx(plain.estimate[[0, -1]], abs=1e-9)


def test_an_offset_of_y_moves_the_curve_and_nothing_else():
    y = np.round(Y * 256.0) / 256.0
    made = make_curve((X, y + 2.0**30), "x", "y", smoothing=Smoothing(widths=8))
    plain = make_curve((X, y), "x", "y", smoothing=Smoothing(widths=8))
    assert made.estimate - 2.0**30 == pytest.approx(plain.estimate, abs=1e-6)
    assert made.std_error == pytest.approx(plain.std_error, rel=1e-9)
    assert made.bandwidth == pytest.approx(plain.bandwidth, rel=1e-9)


def test_a_huge_outlier_spoils_its_own_window_only():
    smoothing = Smoothing(bandwidth=2.0, widths=8)
    y = Y.copy()
    y[np.argmin(np.abs(X - 10.0))] = 1e33
    made = make_curve((X, y), "x", "y", smoothing=smoothing)
    plain = make_curve((X, Y), "x", "y", smoothing=smoothing)
    far = np.abs(plain.x - 10.0) > 2.2
    assert made.estimate[far] == pytest.approx(plain.estimate[far], abs=1e-6)
    assert (made.estimate[~far] > 1e28).any()


# What is told.


def test_the_trace_tells_what_made_the_curve(tmp_path):
    path = tmp_path / "rows.parquet"
    write_parquet(path, ROWS.columns(), rows_per_group=500)
    made = make_curve(path, "wet_bulb_c", "power_kw", reading=Reading(where="power_kw > 0"))
    trace = made.trace
    assert trace["settings"]["where"] == "power_kw > 0"
    assert trace["settings"]["criterion"] == "leave-one-out"
    assert trace["rows"]["read"] == 2500
    assert [record["path"] for record in trace["files"]] == [str(path)]
    assert trace["engine"]["name"] == "exact"
    assert trace["engine"]["passes"] >= 1
    assert trace["plan"]["bins"] == trace["engine"]["bins"]
    assert set(trace["versions"]) == {"python", "fastsmooth", "numpy", "numba", "pyarrow"}
    assert trace["versions"]["fastsmooth"] == "0.1.0"


def test_progress_goes_through_its_stages():
    told = []
    make_curve((X, Y), "x", "y", progress=lambda stage, rows, of: told.append(stage))
    assert list(dict.fromkeys(told)) == [
        "reading", "searching", "gathering", "sorting", "fitting",
    ]  # fmt: skip


# What is refused.


@pytest.mark.parametrize(
    ("build", "text"),
    [
        (
            lambda: Smoothing(estimator="local-linaer"),
            "--estimator must be one of local-linear, local-constant, nearest, but it is "
            "'local-linaer'; use 'local-linear' or 'local-constant'.",
        ),
        (
            lambda: Smoothing(kernel="gausian"),
            "--kernel must be one of biweight, epanechnikov, uniform, triangular, triweight, "
            "tricube, gaussian, but it is 'gausian'; use 'gaussian'.",
        ),
        (
            lambda: Smoothing(widths=3),
            "--widths must be between 8 and 1,000, but it is 3; leave it out.",
        ),
        (
            lambda: Band(level=95.0),
            "--level must lie between 0 and 1, but it is 95.0; write 0.95 for 95 percent.",
        ),
        (
            lambda: Band(least_rows=-1.0),
            "--least-rows must be 0 or more, but it is -1.0; leave it out.",
        ),
        (
            lambda: Band(least_rows=float("nan")),
            "--least-rows must be a finite number, 0 or more, but it is nan; leave it out.",
        ),
        (
            lambda: Band(points=1),
            "--points must be between 2 and 1,000,000, but it is 1; leave it out.",
        ),
        (
            lambda: Band(at=()),
            "--at must hold a point, but it is empty; give points or leave it out.",
        ),
        (lambda: Reading(threads=0), "--threads must be at least 1, but it is 0; leave it out."),
        (
            lambda: Reading(folds=1),
            "--folds must be between 2 and 1,024, but it is 1; leave it out.",
        ),
    ],
)  # fmt: skip
def test_settings_are_checked_when_they_are_made(build, text):
    with pytest.raises(InputError) as caught:
        build()
    assert str(caught.value) == text


@pytest.mark.parametrize("function", [make_curve, search_bandwidth])
@pytest.mark.parametrize(
    ("bandwidth", "scale", "text"),
    [
        (0.0, "linear", "--bandwidth must be positive, but it is 0; leave it out."),
        (-2, "linear", "--bandwidth must be positive, but it is -2; leave it out."),
        (
            1.0, "log",
            "--bandwidth must be a factor above 1 with --scale log, but it is 1; write 1.2 for "
            "windows that reach 20 percent up.",
        ),
        ("wide", "linear", "--bandwidth must be a number, but 'wide' was given; write a number."),
        (
            [2.0], "linear",
            "--bandwidth must be a finite number, but [2.0] was given; write a number.",
        ),
        (
            1e-300, "linear",
            "--bandwidth must be comparable with the range of x, but it is below 1e-12 of it; "
            "leave it out, or give a width that a picture could show.",
        ),
        (
            1.7e308, "linear",
            "--bandwidth must be comparable with the range of x, but it is too wide to be counted "
            "in bins; leave it out, or give a width that a picture could show.",
        ),
        (
            float("nan"), "linear",
            "--bandwidth must be a finite number, but nan was given; write a number.",
        ),
    ],
)  # fmt: skip
def test_bandwidths_that_mean_nothing_are_refused(function, bandwidth, scale, text):
    reading, smoothing = Reading(scale=scale), Smoothing(bandwidth=bandwidth)
    assert refused(function, reading=reading, smoothing=smoothing) == text


def test_points_that_mean_nothing_are_refused():
    log = Reading(scale="log")
    assert refused(reading=log, band=Band(at=(-1.0, 3.0))) == (
        "--at must be positive with --scale log, but it holds -1; leave such points out."
    )
    assert refused(band=Band(at=(float("inf"),))) == (
        "--at must be a finite number, but inf was given; write a number."
    )


@pytest.mark.parametrize("far", [1e300, -1.7e308])
def test_points_far_beyond_the_rows_are_outside_and_disturb_no_other(far):
    smoothing = Smoothing(bandwidth=2.0, widths=8)
    made = make_curve((X, Y), "x", "y", smoothing=smoothing, band=Band(at=(10.0, far)))
    plain = make_curve((X, Y), "x", "y", smoothing=smoothing, band=Band(at=(10.0,)))
    near = made.x.tolist().index(10.0)
    assert made.statuses[1 - near] == "outside"
    assert made.statuses[near] == "ok"
    assert (made.estimate[near], made.upper[near]) == (plain.estimate[0], plain.upper[0])


@pytest.mark.parametrize("kernel", ["biweight", "uniform", "gaussian"])
@pytest.mark.parametrize("width", [1e9, 1e300])
def test_a_width_far_beyond_the_range_is_a_straight_line(kernel, width):
    smoothing = Smoothing(kernel=kernel, bandwidth=width, widths=8)
    made = make_curve((X, Y), "x", "y", smoothing=smoothing, band=Band(bias="ignored"))
    slope, start = np.polyfit(X, Y, 1)
    assert made.estimate == pytest.approx(start + slope * made.x, rel=1e-8)
    assert made.slope == pytest.approx(np.full(256, slope), rel=1e-8)
    assert np.isfinite(made.upper).all()
    assert set(made.statuses) == {"edge"}
    assert made.bandwidth == made.trace["settings"]["bandwidth"] == width


# Sizes.


@pytest.mark.parametrize("power", [-200, 200])
def test_the_unit_of_y_changes_nothing_but_the_unit(power):
    smoothing = Smoothing(widths=8)
    made = make_curve((X, np.ldexp(Y, power)), "x", "y", smoothing=smoothing)
    plain = make_curve((X, Y), "x", "y", smoothing=smoothing)
    assert made.bandwidth == plain.bandwidth
    for name in ("estimate", "lower", "upper", "slope", "residual_sd"):
        rescaled = np.ldexp(getattr(made, name), -power)
        assert rescaled == pytest.approx(getattr(plain, name), rel=1e-9)


@pytest.mark.parametrize("options", [{"x": None}, {"y": 3}, {"weight": 5}, {"count": b"n"}])
def test_columns_are_named_by_texts(options):
    ((name, value),) = options.items()
    remedy = "name one" if name in "xy" else "leave it out"
    with pytest.raises(InputError) as caught:
        make_curve(ROWS.columns(), **{"x": "wet_bulb_c", "y": "power_kw"} | options)
    assert str(caught.value) == (
        f"--{name} must name a column of DATA, but it is {value!r}; {remedy}."
    )


def test_a_group_of_settings_in_place_of_another_is_refused():
    assert refused(reading=Smoothing()).startswith("reading= must be a Reading, but it is Smoothin")
    assert refused(band=5) == "band= must be a Band, but it is 5; write band=Band(...)."
    assert refused(smoothing="biweight") == (
        "smoothing= must be a Smoothing, but it is 'biweight'; write smoothing=Smoothing(...)."
    )


def test_a_criterion_by_block_needs_blocks():
    assert refused(smoothing=Smoothing(criterion="leave-block-out")) == (
        "--criterion leave-block-out must come with --block, but no block is given; name what "
        "makes rows belong together, as in --block logged_at:day."
    )


def test_constant_x_and_few_places_are_refused():
    data = {"wet_bulb_c": np.full(50, 7.0), "power_kw": np.arange(50.0)}
    assert refused(data=data) == (
        "--x must name a column that varies, but 'wet_bulb_c' lies between 7 and 7 everywhere; "
        "name another column, or check --where and --range."
    )
    data["wet_bulb_c"] = np.arange(50.0) % 3
    assert "hold at least 4 distinct values" in refused(data=data)


@pytest.mark.parametrize("n", [4, 5, 6, 8])
def test_a_handful_of_rows_gives_a_curve_or_a_refusal_but_no_spike(n):
    rng = np.random.default_rng(n)
    for _ in range(10):
        x, y = np.sort(rng.uniform(0.0, 10.0, n)), rng.uniform(0.0, 1.0, n)
        made = make_curve((x, y), "x", "y", band=Band(bias="ignored"))
        shown = np.isfinite(made.estimate)
        assert shown.any()
        assert (np.abs(made.estimate[shown] - 0.5) < 5.0).all()
        assert set(made.statuses) <= {"thin", "edge", "outside"}


# The package.


def test_public_names_are_there():
    for name in fastsmooth.__all__:
        assert getattr(fastsmooth, name) is not None
    with pytest.raises(AttributeError, match="no attribute 'smoothly'"):
        _ = fastsmooth.smoothly


def test_importing_loads_no_heavy_library():
    code = (
        "import sys, fastsmooth; "
        "print(sorted({'numpy', 'numba', 'scipy', 'pyarrow', 'polars', 'matplotlib'} "
        "& set(sys.modules)))"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
