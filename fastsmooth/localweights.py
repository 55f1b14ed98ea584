"""Kernel sums at any points, and the linear weights of the local fits made of them."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np
from numpy.typing import NDArray

from fastsmooth.smoother import least_spread

if TYPE_CHECKING:
    from fastsmooth.kernels.shapes import Shape

Floats = NDArray[np.float64]

CONSTANT, LINE, PARABOLA = "constant", "line", "parabola"
DEGREES = {CONSTANT: 0, LINE: 1, PARABOLA: 2}


def kind_of_centre(estimator: str, bias: str) -> str:
    """Return the fit that a band is centred on.

    Parameters
    ----------
    estimator : str
        ``local-linear`` or ``local-constant``.
    bias : str
        ``corrected`` or ``ignored``.
    """
    if bias == "corrected":
        return PARABOLA
    return CONSTANT if estimator == "local-constant" else LINE


class PointSums(NamedTuple):
    """Kernel sums at points; see `fastsmooth.kernels.binned.point_sums`.

    Attributes
    ----------
    s : (5, n)
        sum w K u^j.
    t : (3, n)
        sum w y K u^j.
    v : (5, n)
        sum w sigma^2 K^2 u^j.
    u : (5, n)
        sum w^2 K^2 u^j.
    ds, dt : (n,)
        sum w K', sum w y K'.
    """

    s: Floats
    t: Floats
    v: Floats
    u: Floats
    ds: Floats
    dt: Floats


def sums_at(
    places: Floats,
    weight: Floats,
    response: Floats,
    shape: Shape,
    bandwidth_bins: float,
    variance: Floats,
    squares: Floats,
) -> PointSums:
    """Take all kernel sums at some places (in bins from the table's origin).

    `weight`, `response`, `variance` and `squares` are bin moments (3, bins) of w, w y,
    w sigma^2 and w^2.
    """
    from fastsmooth.kernels import binned

    out = np.empty((binned.POINT_ROWS, places.shape[0]))
    arrays = (np.ascontiguousarray(one) for one in (places, weight, response, variance, squares))
    binned.point_sums(shape.code, bandwidth_bins, *arrays, out)
    return PointSums(
        out[binned.S : binned.S + 5], out[binned.T : binned.T + 3], out[binned.V : binned.V + 5],
        out[binned.U : binned.U + 5], out[binned.DS], out[binned.DT],
    )  # fmt: skip


class Weights(NamedTuple):
    """Linear weights w K (c_0 + c_1 u + ...) / scale, for many points at once.

    Attributes
    ----------
    coefficients : tuple of (n,) float64
        c_0, c_1, ...
    scale : (n,) float64
        Common divisor; NaN where the window does not carry such a fit.
    """

    coefficients: tuple[Floats, ...]
    scale: Floats

    def apply(self, t: Floats) -> Floats:
        """Return the fitted values."""
        total = np.zeros_like(self.scale)
        for j, c in enumerate(self.coefficients):
            total += c * t[j]
        return total / self.scale

    def variance(self, v: Floats) -> Floats:
        """Return sum l_i^2 (or sum l_i^2 sigma_i^2), from sums over K^2."""
        total = np.zeros_like(self.scale)
        for i, a in enumerate(self.coefficients):
            for j, b in enumerate(self.coefficients):
                total += a * b * v[i + j]
        # Rounding can leave a hair below zero where the true value is zero.
        return np.clip(total, 0.0, None) / self.scale**2

    def or_else(self, other: Weights) -> Weights:
        """Take the other weights where these have no scale."""
        missing = ~np.isfinite(self.scale)
        padded = other.coefficients + (np.zeros_like(self.scale),) * (
            len(self.coefficients) - len(other.coefficients)
        )
        pairs = zip(self.coefficients, padded, strict=True)
        return Weights(
            tuple(np.where(missing, b, a) for a, b in pairs),
            np.where(missing, other.scale, self.scale),
        )


def weights_of(s: Floats, bandwidth_bins: float, kind: str) -> Weights:
    """Return the weights of a local fit (Fan & Gijbels 1996, section 3.1).

    Parameters
    ----------
    s : (5, n) float64
        Sums of w K u^j.
    bandwidth_bins : float
        h in bins.
    kind : str
        ``constant``; ``line`` (falls back to the constant where the window's rows have no
        spread); or ``parabola`` (NaN where they have too few places).
    """
    with np.errstate(invalid="ignore", divide="ignore"):
        constant = Weights((np.ones_like(s[0]),), np.where(s[0] > 0.0, s[0], np.nan))
        if kind == CONSTANT:
            return constant
        if kind == LINE:
            scale = s[0] * s[2] - s[1] ** 2
            least = np.maximum(1e-6 * s[0] * s[2], least_spread(bandwidth_bins) * s[0] ** 2)
            return Weights((s[2], -s[1]), np.where(scale > least, scale, np.nan)).or_else(constant)
        c0 = s[2] * s[4] - s[3] ** 2
        c1 = s[2] * s[3] - s[1] * s[4]
        c2 = s[1] * s[3] - s[2] ** 2
        scale = s[0] * c0 + s[1] * c1 + s[2] * c2
        return Weights((c0, c1, c2), np.where(scale > 1e-6 * s[0] * s[2] * s[4], scale, np.nan))


def slope_weights(s: Floats, bandwidth_bins: float) -> Weights:
    """Return the weights of the local line's slope, per bin; NaN where rows have no spread."""
    with np.errstate(invalid="ignore", divide="ignore"):
        scale = s[0] * s[2] - s[1] ** 2
        least = np.maximum(1e-6 * s[0] * s[2], least_spread(bandwidth_bins) * s[0] ** 2)
        scale = np.where(scale > least, scale, np.nan)
    return Weights((-s[1], s[0]), scale * bandwidth_bins)


def slope_of(sums: PointSums, shape: Shape, bandwidth_bins: float, estimator: str) -> Floats:
    """Return the slope per bin: the local line's, or the local constant curve's derivative.

    The latter is (T_0' S_0 - T_0 S_0') / S_0^2, which needs K'; NaN for the uniform kernel.
    """
    s, t = sums.s, sums.t
    if estimator == "local-linear":
        return slope_weights(s, bandwidth_bins).apply(t)
    if shape.smoothness == 0:
        return np.full_like(s[0], np.nan)
    with np.errstate(invalid="ignore", divide="ignore"):
        return np.asarray(-(sums.dt * s[0] - t[0] * sums.ds) / s[0] ** 2 / bandwidth_bins)
