"""Two curves on one grid, each with its folds: what differences and sums over them share."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fastsmooth.bands import FEWEST_DEGREES
from fastsmooth.curve import EDGE, OK, OUTSIDE, Curve
from fastsmooth.foldcurves import FoldCurves

Floats = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class FoldedCurve:
    """The centre of a band at some points, and its errors by folds.

    Attributes
    ----------
    t : (n,) float64
        Places on the scale of the fit (log x on a log scale), ascending.
    centre : (n,) float64
        Mean of y there.
    moved : (k, n) float64
        Centre without each fold less the centre with all.
    shares : (k, n) float64
        Each fold's share of the window's kernel weight.
    folds : (k,) int64
        Which folds.
    degrees : (n,) float64
        Degrees of freedom of the error from folds.
    good : (n,) bool
        Where the curve is supported (``ok`` or ``edge``) and its error is known.
    """

    t: Floats
    centre: Floats
    moved: Floats
    shares: Floats
    folds: NDArray[np.int64]
    degrees: Floats
    good: NDArray[np.bool_]

    @classmethod
    def of(cls, curve: Curve, kept: FoldCurves, shift: float = 0.0) -> FoldedCurve:
        """Take a curve's folds; `shift` is added to its x."""
        x = curve.x + shift
        supported = (curve.status == OK) | (curve.status == EDGE)
        # Outside its support a fit may still be computed; it is no curve.
        centre = np.where(curve.status == OUTSIDE, np.nan, kept.centre)
        return cls(
            np.log(x) if curve.scale == "log" else x, centre, kept.moved, kept.shares,
            kept.folds, kept.degrees, supported & kept.known & (kept.degrees >= FEWEST_DEGREES),
        )  # fmt: skip

    def at(self, t: Floats) -> FoldedCurve:
        """Return the curve at other places, by cubic splines through its supported stretches."""
        n = t.shape[0]
        values = np.full((1 + self.moved.shape[0], n), np.nan)
        degrees, shares = np.full(n, np.nan), np.zeros((self.shares.shape[0], n))
        for start, stop in stretches(self.good):
            knots = self.t[start:stop]
            here = (t >= knots[0]) & (t <= knots[-1])
            both = np.concatenate((self.centre[np.newaxis], self.moved))[:, start:stop]
            values[:, here] = spline(knots, both, t[here])[0]
            degrees[here] = np.interp(t[here], knots, self.degrees[start:stop])
            for fold, own in enumerate(self.shares[:, start:stop]):
                shares[fold, here] = np.interp(t[here], knots, own)
        return FoldedCurve(
            t, values[0], values[1:], shares, self.folds, degrees, np.isfinite(values[0])
        )


def stretches(good: NDArray[np.bool_]) -> list[tuple[int, int]]:
    """Return first and last (exclusive) index of each run of True that holds two points or more."""
    ends = np.flatnonzero(np.diff(np.concatenate(([0], good.astype(int), [0])))).reshape(-1, 2)
    return [(start, stop) for start, stop in ends.tolist() if stop - start > 1]


def spline(knots: Floats, values: Floats, at: Floats) -> tuple[Floats, Floats]:
    """Return values, (..., m), and slopes of cubic splines through `values`, (..., n)."""
    from scipy.interpolate import CubicSpline

    made = CubicSpline(knots, values, axis=-1)
    return np.asarray(made(at)), np.asarray(made(at, 1))


def joint_degrees(variances: tuple[Floats, Floats], degrees: tuple[Floats, Floats]) -> Floats:
    """Return the degrees of freedom of a sum of two independent variances.

    (v_1 + v_2)^2 / (v_1^2 / nu_1 + v_2^2 / nu_2) (Welch 1947, Biometrika 34:28); the smaller of
    the two where both variances vanish.
    """
    a, b = variances
    with np.errstate(invalid="ignore", divide="ignore"):
        joint = (a + b) ** 2 / (a**2 / degrees[0] + b**2 / degrees[1])
    return np.where(np.isfinite(joint), joint, np.minimum(*degrees))
