"""What a bandwidth search found: criteria over the grid, the choice, the flat zone."""

from __future__ import annotations

import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

if TYPE_CHECKING:
    import pyarrow as pa

Floats = NDArray[np.float64]

# How closely the choice is refined, in log h.
REFINED = 1e-3


@dataclass(frozen=True)
class Trail:
    """What the search found for one estimator.

    Attributes
    ----------
    estimator : str
        Which.
    bandwidths : (k,) float64
        The grid, ascending, on the plan's scale.
    leave_one_out, gcv, aicc : (k,) float64
        Criteria at the grid; infinite where undefined.
    leave_block_out : (k,) or (0,) float64
        Mean squared error of predicting each fold from the others; empty without blocks.
    excess : (k,) float64
        Mean criterion (leave-one-out or leave-block-out) less the chosen bandwidth's, paired row
        by row.
    excess_std_error : (k,) float64
        Its standard error from folds.
    bandwidth : float
        The criterion's choice, refined between grid points.
    leave_one_out_bandwidth : float
        What leave-one-out would choose.
    score : float
        Mean squared error of predicting left-out rows at the choice: leave-block-out if that was
        the criterion, else leave-one-out.
    trace : float
        Sum of leverages at the choice (equivalent number of parameters).
    flat_zone : (float, float)
        Bandwidths whose criterion is within one standard error of the choice's.
    minima : int
        Local minima of the criterion that are deeper than one standard error.
    """

    estimator: str
    bandwidths: Floats
    leave_one_out: Floats
    gcv: Floats
    aicc: Floats
    leave_block_out: Floats
    excess: Floats
    excess_std_error: Floats
    bandwidth: float
    leave_one_out_bandwidth: float
    score: float
    trace: float
    flat_zone: tuple[float, float]
    minima: int

    def values(self, criterion: str) -> Floats:
        """Return the criterion's values at the grid (leave-one-out for the plug-in rule)."""
        own = {"gcv": self.gcv, "aicc": self.aicc, "leave-block-out": self.leave_block_out}
        return own.get(criterion, self.leave_one_out)

    @property
    def at_low_end(self) -> bool:
        """Whether the choice is the narrowest width searched."""
        return self.bandwidth <= self.bandwidths[0] * (1.0 + 2.0 * REFINED)

    @property
    def at_high_end(self) -> bool:
        """Whether the choice is the widest width searched."""
        return self.bandwidth >= self.bandwidths[-1] / (1.0 + 2.0 * REFINED)

    @property
    def is_flat(self) -> bool:
        """Whether the flat zone covers the whole interval searched."""
        low, high = self.flat_zone
        return low <= self.bandwidths[0] and high >= self.bandwidths[-1]

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON (infinite values become null)."""
        plain: dict[str, Any] = {}
        for name, value in vars(self).items():
            if isinstance(value, np.ndarray):
                plain[name] = [one if math.isfinite(one) else None for one in value.tolist()]
            elif isinstance(value, tuple):
                plain[name] = list(value)
            else:
                finite = not isinstance(value, float) or math.isfinite(value)
                plain[name] = value if finite else None
        return plain

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Trail:
        """Build a trail from what `to_dict` returned."""
        made: dict[str, Any] = {}
        for name, value in plain.items():
            if name == "flat_zone":
                made[name] = tuple(value)
            elif isinstance(value, list):
                made[name] = np.array([math.inf if one is None else one for one in value])
            else:
                made[name] = math.inf if value is None else value
        return cls(**made)


@dataclass(frozen=True)
class Search:
    """The search for both estimators.

    Attributes
    ----------
    criterion : str
        What chose.
    kernel : str
        Kernel function.
    trails : dict of str to Trail
        Per estimator.
    rows_alone : float
        Rows that took no part in the criterion at any width, because the narrowest window around
        them holds no other row (with blocks: none of other folds to both sides).
    """

    criterion: str
    kernel: str
    trails: dict[str, Trail]
    rows_alone: float

    def table(self) -> pa.Table:
        """Return the criteria of both estimators at every width as an Arrow table.

        Returns
        -------
        pyarrow.Table
            Columns ``estimator``, ``bandwidth``, ``leave_one_out``, ``gcv``, ``aicc``,
            ``excess``, ``excess_std_error``; undefined values are null.
        """
        import pyarrow as pa

        names = ["leave_one_out", "gcv", "aicc", "excess", "excess_std_error"]
        if all(trail.leave_block_out.size for trail in self.trails.values()):
            names.insert(1, "leave_block_out")
        parts = []
        for name, trail in self.trails.items():
            columns: dict[str, Any] = {"estimator": [name] * trail.bandwidths.shape[0]}
            columns["bandwidth"] = trail.bandwidths
            for column in names:
                values = getattr(trail, column)
                columns[column] = pa.array(values, mask=~np.isfinite(values))
            parts.append(pa.table(columns))
        return pa.concat_tables(parts)

    def to_dict(self) -> dict[str, Any]:
        """Return plain data for JSON."""
        return {**vars(self), "trails": {k: v.to_dict() for k, v in self.trails.items()}}

    @classmethod
    def from_dict(cls, plain: dict[str, Any]) -> Search:
        """Build a search from what `to_dict` returned."""
        trails = {k: Trail.from_dict(v) for k, v in plain["trails"].items()}
        return cls(**{**plain, "trails": trails})
