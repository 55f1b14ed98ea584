"""The data sets that tests and benchmarks share, one table.

All stay in one scenario: compressor power (`power_kw`) of milk-cooling plants against outdoor
wet-bulb temperature (`wet_bulb_c`).
"""

import zlib
from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

NOISE_SD_KW = 0.8


@dataclass(frozen=True)
class Rows:
    """Readings and the noise that was put on them."""

    wet_bulb_c: np.ndarray
    power_kw: np.ndarray
    noise_sd_kw: float

    def columns(self) -> dict[str, np.ndarray]:
        return {"wet_bulb_c": self.wet_bulb_c, "power_kw": self.power_kw}


def mean_power_kw(wet_bulb_c: np.ndarray) -> np.ndarray:
    """The true curve: flat when cold, steep when hot, with two humps of cycling machines."""
    return 20.0 + 0.02 * np.clip(wet_bulb_c, 0.0, None) ** 2 + 3.0 * np.sin(0.5 * wet_bulb_c)


def uniform(rng: np.random.Generator, n: int) -> np.ndarray:
    return rng.uniform(-5.0, 28.0, n)


def clustered(rng: np.random.Generator, n: int) -> np.ndarray:
    centre = rng.choice([2.0, 9.0, 21.0], n, p=[0.2, 0.5, 0.3])
    spread = rng.choice([0.6, 3.0], n)
    # Without far stragglers: how those fare is a matter of its own.
    return centre + spread * np.clip(rng.normal(size=n), -2.0, 2.0)


def lattice(rng: np.random.Generator, n: int) -> np.ndarray:
    """Readings rounded to half a degree: many ties."""
    return np.round(rng.uniform(-5.0, 28.0, n) * 2.0) / 2.0


def log_spread(rng: np.random.Generator, n: int) -> np.ndarray:
    """From dense to sparse over two decades."""
    return np.exp(rng.uniform(np.log(0.3), np.log(30.0), n))


def gap(rng: np.random.Generator, n: int) -> np.ndarray:
    """No reading between 11 and 15 degrees."""
    x = rng.uniform(-5.0, 24.0, n)
    return np.where(x > 11.0, x + 4.0, x)


DESIGNS: dict[str, Callable[[np.random.Generator, int], np.ndarray]] = {
    "uniform": uniform,
    "clustered": clustered,
    "lattice": lattice,
    "log spread": log_spread,
    "gap": gap,
}


def outliers(rng: np.random.Generator, n: int) -> np.ndarray:
    """A season's readings, and one in 500 (three at least) from a sensor that strays far off."""
    x = rng.normal(10.0, 3.0, n)
    far = max(n // 500, 3)
    x[:far] = rng.uniform(20.0, 60.0, far)
    return x


# With the one that not every test can use: by default, far outliers are cut off the range.
ALL_DESIGNS = {**DESIGNS, "outliers": outliers}


def make_rows(design: str, n: int, seed: int = 0, noise_sd_kw: float = NOISE_SD_KW) -> Rows:
    """Readings of one design; the same for the same arguments."""
    rng = np.random.default_rng([seed, zlib.crc32(design.encode())])
    wet_bulb_c = ALL_DESIGNS[design](rng, n)
    power_kw = mean_power_kw(wet_bulb_c) + noise_sd_kw * rng.normal(size=n)
    return Rows(wet_bulb_c, power_kw, noise_sd_kw)


def precisions(n: int, seed: int = 0) -> np.ndarray:
    """Weights of rows from good and worse meters, mean near 1."""
    return np.random.default_rng([seed, 77]).gamma(4.0, 0.25, n)


def repeats(n: int, seed: int = 0) -> np.ndarray:
    """Whole counts from 1 to 4."""
    return np.random.default_rng([seed, 78]).integers(1, 5, n).astype(float)
