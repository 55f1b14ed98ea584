"""Curves made from rows by plain NumPy, for tests of what is done with a curve."""

from __future__ import annotations

import functools
from collections.abc import Callable, Iterable
from dataclasses import replace
from typing import Any

import numpy as np

from fastsmooth.axis import Axis
from fastsmooth.curve import EDGE, OK, OUTSIDE, THIN, Caution, Curve, Density
from fastsmooth.trail import Search, Trail

NUMBER = Axis("number", "double", "", None, 0)
START_US = 1_767_225_600_000_000  # 2026-01-01
TIMES = Axis("timestamp", "timestamp[us, tz=Europe/Madrid]", "us", "Europe/Madrid", START_US)
DATES = Axis("date", "date32[day]", "day", None, 20_454)
DURATIONS = Axis("duration", "duration[s]", "s", None, 0)
CELLS_X, CELLS_Y = 160, 96
NORMAL_975 = 1.959963984540054


def build(
    x: np.ndarray,
    y: np.ndarray,
    bandwidth: float,
    /,
    *,
    axis: Axis = NUMBER,
    points: Iterable[float] | None = None,
    trails: dict[str, Trail] | None = None,
    cautions: Iterable[Caution] = (),
    y_edges: tuple[float, float] | None = None,
    **settings: Any,
) -> Curve:
    """Smooth rows by a local line with the biweight kernel and wrap the result."""
    told = {
        "x": "wet_bulb_c", "y": "power_kw", "x_unit": "°C", "y_unit": "kW", "scale": "linear",
        "kernel": "biweight", "estimator": "local-linear", "criterion": "leave-one-out",
        "bandwidth": None, "level": 0.95, "band": "pointwise", "block": None,
        "bias": "corrected", "noise": "local",
        "least_rows": 30.0, **settings,
    }  # fmt: skip
    log = told["scale"] == "log"
    at = np.log(x) if log else x
    h = np.log(bandwidth) if log else bandwidth
    low, high = at.min(), at.max()
    if points is None:
        places = np.linspace(low, high, 256)
    else:
        places = np.array(list(points), float)
    columns: dict[str, list[float]] = {
        name: []
        for name in (
            "estimate",
            "slope",
            "slope_std_error",
            "std_error",
            "effective_rows",
            "residual_sd",
        )
    }
    status = []
    for place in places:
        u = (at - place) / h
        k = np.where(np.abs(u) < 1.0, (1.0 - u * u) ** 2, 0.0)
        cut = place - h < low or place + h > high
        bracketed = (u[k > 0] <= 0).any() and (u[k > 0] >= 0).any()
        s0, s1, s2 = (float(np.sum(k * u**j)) for j in range(3))
        room = s0 * s2 - s1 * s1
        if not bracketed or not room > 1e-9 * s0 * s2:
            status.append(OUTSIDE)
            for column in columns.values():
                column.append(np.nan)
            continue
        weights = k * (s2 - s1 * u) / room
        mean = float(weights @ y)
        slope = float((k * (s0 * u - s1) / room) @ y) / h
        sd = float(np.sqrt(np.sum(k * (y - mean - slope * u * h) ** 2) / s0))
        effective = 1.0 / float(weights @ weights)
        columns["estimate"].append(mean)
        columns["slope"].append(slope)
        columns["std_error"].append(sd / np.sqrt(effective))
        columns["slope_std_error"].append(sd / np.sqrt(effective))
        columns["effective_rows"].append(effective)
        columns["residual_sd"].append(sd)
        status.append(THIN if effective < told["least_rows"] else EDGE if cut else OK)
    made = {name: np.array(values) for name, values in columns.items()}
    half = NORMAL_975 * made["std_error"]
    edges = np.linspace(low, high, CELLS_X + 1)
    bottom, top = y_edges or (y.min(), y.max())
    cells = np.linspace(bottom, top if top > bottom else bottom + 1.0, CELLS_Y + 1)
    sampled, _, _ = np.histogram2d(at, y, bins=(edges, cells))
    rows, _ = np.histogram(at, bins=edges)
    if trails is None:
        trails = {
            name: valley(name, best, low=h / 12, high=h * 12, log=log)
            for name, best in (("local-constant", 0.7 * h), ("local-linear", h))
        }
    return Curve(
        x=np.exp(places) if log else places,
        **made,
        lower=made["estimate"] - half,
        upper=made["estimate"] + half,
        status=np.array(status, np.int64),
        bandwidth=bandwidth,
        axis=axis,
        density=Density(
            np.exp(edges) if log else edges, rows.astype(float), cells, sampled
        ),
        search=Search(told["criterion"], told["kernel"], trails, 0.0),
        cautions=tuple(cautions),
        trace={
            "files": [],
            "settings": told,
            "rows": {
                "read": x.size + 17, "filtered": 12, "refused": {"y null": 5}, "used": x.size,
            },
        },
    )  # fmt: skip


def valley(
    estimator: str, best: float, *, low: float, high: float, depth: float = 0.02,
    floor: float = 100.0, log: bool = False, share: float = 0.1,
    blocks: bool = False,
) -> Trail:  # fmt: skip
    """Return a criterion like floor (1 + depth (4/5 best/h + 1/5 (h/best)^4)), least at `best`.

    Its flat zone reaches as far as the rise stays under `share` of the depth.
    """
    grid = np.geomspace(low, high, 48)

    def rise(h: np.ndarray) -> np.ndarray:
        u = h / best
        return floor * depth * (0.8 / u + 0.2 * u**4 - 1.0)

    flat = grid[rise(grid) <= share * floor * depth]
    ends = (float(flat[0]), float(flat[-1])) if flat.size else (best, best)
    values = floor * (1.0 + depth) + rise(grid)

    logs = np.log(values, out=np.full(values.size, np.inf), where=values > 0.0)

    def shown(width: Any) -> Any:
        return np.exp(width) if log else width

    return Trail(
        estimator=estimator,
        bandwidths=shown(grid),
        leave_one_out=values,
        gcv=values * 1.001,
        aicc=logs,
        leave_block_out=values * 1.1 if blocks else np.empty(0),
        excess=rise(grid),
        excess_std_error=np.full(grid.size, share * floor * depth),
        bandwidth=float(shown(best)),
        leave_one_out_bandwidth=float(shown(best)),
        score=floor * (1.0 + depth),
        trace=12.0,
        flat_zone=(float(shown(ends[0])), float(shown(ends[1]))),
        minima=1,
    )


def cooling(x: np.ndarray, noise: float = 6.0, seed: int = 3) -> np.ndarray:
    """Compressor power (kW) over wet-bulb temperature (°C), with scatter."""
    rng = np.random.default_rng(seed)
    return 60.0 + 0.09 * np.clip(x - 4.0, 0.0, None) ** 2 + noise * rng.normal(size=x.size)


def temperatures(n: int = 4000, seed: int = 2) -> np.ndarray:
    """Wet-bulb temperatures (°C) of two seasons."""
    rng = np.random.default_rng(seed)
    return np.where(rng.random(n) < 0.6, rng.normal(8.0, 3.0, n), rng.normal(18.0, 2.5, n))


def plain() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    return build(x, cooling(x), 1.35)


def gap() -> Curve:
    x = temperatures(6000)
    x = x[(x < 11.0) | (x > 16.5)]
    return build(x, cooling(x), 1.1)


def thin_ends() -> Curve:
    rng = np.random.default_rng(5)
    x = np.concatenate((rng.normal(12.0, 2.0, 3000), rng.uniform(0.0, 25.0, 60)))
    return build(x, cooling(x), 0.9)


def log_scale() -> Curve:
    rng = np.random.default_rng(7)
    x = np.exp(rng.normal(3.0, 1.6, 4000))
    y = 20.0 + 12.0 * np.log1p(x) + 5.0 * rng.normal(size=x.size)
    return build(x, y, 1.6, scale="log", x="flow_l_per_h", x_unit="l/h")


def times() -> Curve:
    rng = np.random.default_rng(11)
    x = np.sort(rng.uniform(0.0, 86_400.0 * 40, 4000))
    y = 80.0 + 15.0 * np.sin(x / 86_400.0 * 0.4) + 4.0 * rng.normal(size=x.size)
    return build(x, y, 2.0 * 86_400, axis=TIMES, x="logged_at", x_unit="")


def one_morning() -> Curve:
    rng = np.random.default_rng(12)
    x = np.sort(rng.uniform(21_600.0, 28_800.0, 3000))
    y = 80.0 + x / 3600.0 + 2.0 * rng.normal(size=x.size)
    return build(x, y, 900.0, axis=TIMES, x="logged_at", x_unit="")


def dates() -> Curve:
    rng = np.random.default_rng(13)
    x = rng.integers(0, 730, 4000) * 86_400.0
    y = 80.0 + 20.0 * np.cos(x / 86_400.0 / 58.0) + 4.0 * rng.normal(size=x.size)
    return build(x, y, 86_400.0 * 30, axis=DATES, x="day", x_unit="")


def durations() -> Curve:
    rng = np.random.default_rng(14)
    x = rng.uniform(0.0, 9_000.0, 3000)
    y = 30.0 + 40.0 * np.exp(-x / 2000.0) + 3.0 * rng.normal(size=x.size)
    return build(x, y, 600.0, axis=DURATIONS, x="since_milking", x_unit="")


def large_numbers() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    return build(x + 1e9, 1e9 + cooling(x) / 1000.0, 1.35, x_unit="", y_unit="")


def millions() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    return build(x * 1e-6, cooling(x) * 1e6, 1.35e-6, x_unit="m", y_unit="W")


def constant() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    flat = {
        name: replace(valley(name, 2.0, low=0.1, high=25.0, floor=0.0), flat_zone=(0.1, 25.0))
        for name in ("local-constant", "local-linear")
    }
    return build(x, np.full(x.size, 42.0), 2.0, trails=flat)


def outlier() -> Curve:
    made = plain()
    cells = np.linspace(0.0, 1e6, CELLS_Y + 1)
    sampled = np.zeros((CELLS_X, CELLS_Y))
    sampled[:, 0] = made.density.sampled.sum(axis=1)
    sampled[40, -1] = 1.0
    return replace(made, density=replace(made.density, y_edges=cells, sampled=sampled))


def stray_rows() -> Curve:
    made = plain()
    cells = np.linspace(0.0, 1000.0, CELLS_Y + 1)
    x = np.clip(temperatures(), 0.0, 25.0)
    y = cooling(x)
    y[::1500] = 990.0
    sampled, _, _ = np.histogram2d(x, y, bins=(made.density.x_edges, cells))
    return replace(made, density=replace(made.density, y_edges=cells, sampled=sampled))


def one_flat() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    trail = valley("local-linear", 4.0, low=0.1, high=25.0, depth=1e-6)
    trail = replace(trail, flat_zone=(0.1, 25.0))
    return build(x, cooling(x), 4.0, trails={"local-linear": trail})


def infinite_criteria() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    trails = {}
    for name, best in (("local-constant", 0.9), ("local-linear", 1.35)):
        trail = valley(name, best, low=0.02, high=25.0)
        values = trail.leave_one_out.copy()
        values[:6] = np.inf
        trails[name] = replace(trail, leave_one_out=values)
    return build(x, cooling(x), 1.35, trails=trails)


def one_all_infinite() -> Curve:
    made = plain()
    trails = dict(made.search.trails)
    nothing = np.full(48, np.inf)
    trails["local-constant"] = replace(trails["local-constant"], leave_one_out=nothing)
    return replace(made, search=replace(made.search, trails=trails))


def long_names() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    return build(
        x, cooling(x), 1.35,
        x="outdoor_wet_bulb_temperature_at_the_condenser_inlet_of_the_northern_roof_average_c",
        y="electrical_power_of_all_compressors_of_the_milk_cooling_plant_including_pumps_kw",
    )  # fmt: skip


def many_cautions() -> Curve:
    long = (
        "Residuals are correlated in row order (0.93 between neighbours), so that leave-one-out "
        "takes copies of a reading for proof and chooses too narrow a bandwidth, and the band is "
        "narrower than it should be. Name a block."
    )
    cautions = [
        Caution("correlated", long),
        Caution("trimmed", "The range was trimmed to 0 to 25, 17 rows are left out. Use --range."),
        Caution("spike", "4,211 rows hold -9999 exactly. Filter them."),
        Caution("end", "The best bandwidth is the widest searched. Look at the picture."),
        Caution("deep", "The criterion has two deep minima. Look at the picture."),
    ]  # fmt: skip
    return replace(plain(), cautions=tuple(cautions))


def no_band() -> Curve:
    made = plain()
    nothing = np.full(made.x.size, np.nan)
    return replace(made, lower=nothing, upper=nothing, std_error=nothing)


def no_curve() -> Curve:
    made = no_band()
    nothing = np.full(made.x.size, np.nan)
    status = np.full(made.x.size, OUTSIDE)
    return replace(made, estimate=nothing, slope=nothing, status=status)


def few_points() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    return build(x, cooling(x), 1.35, points=[2.0, 5.0, 8.0, 8.5, 19.5])


def one_point() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    return build(x, cooling(x), 1.35, points=[8.0])


def given() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    trails = {
        name: valley(name, best, low=0.1, high=25.0)
        for name, best in (("local-constant", 1.3), ("local-linear", 1.35))
    }
    return build(
        x, cooling(x), 3.0, trails=trails, bandwidth=3.0, kernel="gaussian",
        bias="ignored", noise="constant", level=0.9,
    )  # fmt: skip


def decades() -> Curve:
    rng = np.random.default_rng(17)
    x = np.concatenate((rng.normal(10.0, 0.3, 12_000), rng.uniform(0.0, 25.0, 400)))
    trails = {
        "local-constant": valley("local-constant", 0.4, low=0.01, high=25.0, depth=0.5),
        "local-linear": valley("local-linear", 0.5, low=0.01, high=25.0, depth=1e-4),
    }
    return build(x, cooling(x), 0.5, trails=trails)


def at_high_end() -> Curve:
    x = np.clip(temperatures(), 0.0, 25.0)
    trails = {
        name: replace(valley(name, best, low=0.1, high=25.0), bandwidth=25.0)
        for name, best in (("local-constant", 25.0), ("local-linear", 25.0))
    }
    return build(x, cooling(x, noise=20.0), 25.0, trails=trails)


CASES: dict[str, Callable[[], Curve]] = {
    make.__name__: functools.cache(make)
    for make in (
        plain, gap, thin_ends, log_scale, times, one_morning, dates, durations, large_numbers,
        millions, constant, outlier, stray_rows, one_flat, infinite_criteria, one_all_infinite,
        long_names, many_cautions, no_band, no_curve, few_points, one_point, given, decades,
        at_high_end,
    )
}  # fmt: skip
