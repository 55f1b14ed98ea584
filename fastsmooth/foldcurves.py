"""A curve without each fold in turn, small enough to travel with the curve.

What a curve's errors at different places have in common is lost in a table of standard errors. It
is kept here: sums over the curve, and differences to another one, can be given an honest error
long after the rows are gone.
"""

from __future__ import annotations

import base64
import math
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]

# Deviations are kept as whole parts of the largest at their place: one in thirty thousand is far
# below what thirty folds can know of an error.
_STEPS = 32_767
# Shares are kept by their square roots: one fold in thirty is told to a percent.
_SHARE_STEPS = 255


@dataclass(frozen=True, eq=False)
class FoldCurves:
    """How far the centre of the band moves at each point when each fold is left out.

    Attributes
    ----------
    folds : (k,) int64
        The folds that held rows.
    centre : (n,) float64
        Centre of the band with all folds; NaN where there is none.
    degrees : (n,) float64
        Degrees of freedom of the error from folds.
    scale : (n,) float64
        Largest deviation at each point, in units of y; NaN where a fold cannot be left out.
    parts : (k, n) int16
        Deviations in 32,767ths of `scale`; 0 where the fold has no row in the window.
    roots : (k, n) uint8
        Square root of each fold's share of the window's kernel weight, in 255ths.
    """

    folds: NDArray[np.int64]
    centre: Floats
    degrees: Floats
    scale: Floats
    parts: NDArray[np.int16]
    roots: NDArray[np.uint8]

    @classmethod
    def of(
        cls,
        folds: NDArray[np.int64],
        centre: Floats,
        degrees: Floats,
        moved: Floats,
        shares: Floats,
    ) -> FoldCurves:
        """Keep deviations and shares of the kernel weight, both (k, n).

        A deviation is the centre without the fold less the centre with all.
        """
        known = np.isfinite(moved).all(axis=0) & np.isfinite(centre)
        scale = np.where(known, np.abs(np.where(known, moved, 0.0)).max(axis=0), np.nan)
        divisor = np.where(known & (scale > 0.0), scale, 1.0)
        parts = np.rint(np.where(known, moved, 0.0) / divisor * _STEPS).astype(np.int16)
        roots = np.rint(np.sqrt(np.nan_to_num(shares)) * _SHARE_STEPS).astype(np.uint8)
        return cls(folds, np.where(known, centre, np.nan), degrees, scale, parts, roots)

    @property
    def moved(self) -> Floats:
        """Deviations in units of y, (k, n)."""
        return np.asarray(self.parts / _STEPS * self.scale)

    @property
    def shares(self) -> Floats:
        """Each fold's share of the window's kernel weight, (k, n); 0 in empty windows."""
        squares = (self.roots / _SHARE_STEPS) ** 2
        total = squares.sum(axis=0)
        return np.asarray(squares / np.where(total > 0.0, total, 1.0))

    @property
    def known(self) -> NDArray[np.bool_]:
        """Where every fold can be left out, (n,)."""
        return np.isfinite(self.scale)

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {
            "folds": self.folds.tolist(),
            "centre": _plain(self.centre),
            "degrees": _plain(self.degrees),
            "scale": _plain(self.scale),
            "parts": base64.b64encode(self.parts.astype("<i2").tobytes()).decode(),
            "roots": base64.b64encode(self.roots.tobytes()).decode(),
        }

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> FoldCurves:
        """Build from what `to_dict` returned."""
        folds = np.array(plain["folds"], np.int64)
        parts = np.frombuffer(base64.b64decode(plain["parts"]), "<i2").astype(np.int16)
        roots = np.frombuffer(base64.b64decode(plain["roots"]), np.uint8)
        centre, degrees, scale = (_floats(plain[name]) for name in ("centre", "degrees", "scale"))
        shape = folds.shape[0], -1
        return cls(folds, centre, degrees, scale, parts.reshape(shape), roots.reshape(shape))


def _plain(values: Floats) -> list[float | None]:
    return [one if math.isfinite(one) else None for one in values.tolist()]


def _floats(values: list[float | None]) -> Floats:
    return np.array([math.nan if one is None else one for one in values], np.float64)
