"""What a comparison found: per unit the difference along x and the excess, units in order."""

from __future__ import annotations

import json
import math
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.axis import Axis
from fastsmooth.curve import Caution, spare_data
from fastsmooth.difference import Difference
from fastsmooth.excess import Excess
from fastsmooth.fleet import Key, arrow_type, unit_name

if TYPE_CHECKING:
    import pyarrow as pa

Floats = NDArray[np.float64]

COMPARISON_KEY = b"fastsmooth.comparison"
FORMAT = 1
COMPARED = "compared"
UNIT_STATUSES = (
    COMPARED,
    "no rows now",
    "no curve now",
    "no baseline",
    "no common support",
)
# Columns of the table along x, after x.
ALONG = (
    "base",
    "now",
    "difference",
    "std_error",
    "lower",
    "upper",
    "lower_all",
    "upper_all",
)
# Columns of the table of units, after the key.
PER_UNIT = (
    "rows",
    "rows_outside",
    "rows_thin",
    "actual",
    "expected",
    "amount",
    "std_error",
    "lower",
    "upper",
    "share",
    "share_lower",
    "share_upper",
    "independent_rows",
    "p_value",
)


@dataclass(frozen=True, eq=False)
class UnitComparison:
    """One unit now against its baseline.

    Attributes
    ----------
    key : tuple
        The unit; () where there is only one.
    status : str
        One of `UNIT_STATUSES`.
    reason : str or None
        Why there is no comparison, in a sentence.
    base_rows, now_rows : int or None
        Rows used on either side; None where that side is missing.
    bandwidth : float or None
        The width of both curves, in axis floats or as a factor.
    difference : Difference or None
        Along x.
    excess : Excess or None
        Summed over the current rows; None where only a curve is known of them.
    adjusted_p_value : float or None
        The excess's p value, adjusted for the number of units.
    cautions : tuple of Caution
        What the reader must know.
    """

    key: Key
    status: str
    reason: str | None
    base_rows: int | None
    now_rows: int | None
    bandwidth: float | None
    difference: Difference | None
    excess: Excess | None
    adjusted_p_value: float | None
    cautions: tuple[Caution, ...]

    @property
    def name(self) -> str:
        """The unit for people."""
        return unit_name(self.key)


@dataclass(frozen=True, eq=False)
class CurveComparison:
    """Now against a baseline.

    Attributes
    ----------
    by : tuple of str
        Columns that tell units apart; empty for a single comparison.
    units : tuple of UnitComparison
        By falling excess; those without one last, by key.
    level : float
        Confidence level of all bands and intervals; 1 - level is the share of false discoveries
        that `adjusted_p_value` bounds.
    axis : Axis
        What the floats of x mean.
    trace : dict
        ``settings``, ``base`` and ``now`` (where they come from), ``files``, ``by_types``,
        ``paired``, ``hours_per_row``.
    """

    by: tuple[str, ...]
    units: tuple[UnitComparison, ...]
    level: float
    axis: Axis
    trace: dict[str, Any]

    @property
    def settings(self) -> dict[str, Any]:
        """The settings that both sides share."""
        return dict(self.trace["settings"])

    @property
    def scale(self) -> str:
        """``linear`` or ``log``."""
        return str(self.settings["scale"])

    @property
    def amount_unit(self) -> str:
        """The unit of amounts, in words."""
        unit = self.settings["y_unit"] or self.settings["y"]
        return f"{unit} x {'rows' if self.trace['hours_per_row'] is None else 'hours'}"

    def x_of(self, t: Any) -> Floats:
        """Return places on the scale of the fit as axis floats."""
        places = np.atleast_1d(np.asarray(t, np.float64))
        return np.exp(places) if self.scale == "log" else places

    def x_label(self, t: float) -> str:
        """Write a place on the scale of the fit for people."""
        return self.axis.label(float(self.x_of(t)[0]))

    def discoveries(self) -> list[UnitComparison]:
        """Return the units whose excess is not 0, with false discoveries at most 1 - level."""
        alpha = 1.0 - self.level
        return [
            unit for unit in self.units
            if unit.adjusted_p_value is not None and unit.adjusted_p_value <= alpha
        ]  # fmt: skip

    def table(self) -> pa.Table:
        """Return the differences along x, one unit after the other, as an Arrow table.

        Returns
        -------
        pyarrow.Table
            The `by` columns, ``x`` in its own type, ``base``, ``now``, ``difference``,
            ``std_error``, ``lower`` and ``upper`` (pointwise), ``lower_all`` and ``upper_all``
            (the whole curve at once), and ``real``: whether the latter exclude 0. Null where not
            both curves are supported. The schema metadata hold everything else.
        """
        import pyarrow as pa

        held = [(unit, unit.difference) for unit in self.units if unit.difference is not None]
        lengths = [one.t.shape[0] for _, one in held]
        columns = self._key_columns([unit for unit, _ in held], lengths)
        places = np.concatenate([one.t for _, one in held]) if held else np.empty(0)
        columns["x"] = self.axis.to_arrow(self.x_of(places))
        for name in ALONG:
            parts = [getattr(one, name) for _, one in held]
            values = np.concatenate(parts) if parts else np.empty(0)
            columns[name] = pa.array(values, mask=~np.isfinite(values))
        known = [one.compared for _, one in held]
        real = [(one.lower_all > 0.0) | (one.upper_all < 0.0) for _, one in held]
        columns["real"] = pa.array(
            np.concatenate(real) if real else np.empty(0, bool),
            mask=~np.concatenate(known) if known else np.empty(0, bool),
        )
        metadata = {COMPARISON_KEY: json.dumps(self.to_dict(), allow_nan=False).encode()}
        return pa.table(columns).replace_schema_metadata(metadata)

    def units_table(self) -> pa.Table:
        """Return the units in order of their excess as an Arrow table.

        Returns
        -------
        pyarrow.Table
            ``rank`` (null without an excess), the `by` columns, ``status``, ``reason``, the
            fields of `Excess`, ``adjusted_p_value``, ``test_p_value`` (is there a difference
            anywhere along x), ``real_stretches``.
        """
        import pyarrow as pa

        excesses = [unit.excess for unit in self.units]
        ranks = np.cumsum([one is not None for one in excesses])
        columns: dict[str, Any] = {
            "rank": pa.array(
                [
                    int(r) if one is not None else None
                    for r, one in zip(ranks, excesses, strict=True)
                ],
                pa.int64(),
            ),
            **self._key_columns(list(self.units), [1] * len(self.units)),
            "status": pa.array([unit.status for unit in self.units], pa.string()),
            "reason": pa.array([unit.reason for unit in self.units], pa.string()),
        }
        for name in PER_UNIT:
            values = [None if one is None else getattr(one, name) for one in excesses]
            columns[name] = pa.array(values, pa.float64())
        columns["adjusted_p_value"] = pa.array(
            [unit.adjusted_p_value for unit in self.units], pa.float64()
        )
        along = [unit.difference for unit in self.units]
        columns["test_p_value"] = pa.array(
            [None if one is None else one.p_value for one in along], pa.float64()
        )
        columns["real_stretches"] = pa.array(
            [None if one is None else len(one.stretches) for one in along], pa.int64()
        )
        return pa.table(columns)

    def _key_columns(self, units: list[UnitComparison], lengths: list[int]) -> dict[str, Any]:
        import pyarrow as pa

        repeats = pa.array(np.repeat(np.arange(len(units)), lengths))
        columns = {}
        for place, name in enumerate(self.by):
            kind = arrow_type(self.trace["by_types"][place])
            keys = pa.array([unit.key[place] for unit in units], kind)
            columns[f"unit_{name}" if name in _TAKEN else name] = keys.take(repeats)
        return columns

    def to_dict(self) -> dict[str, Any]:
        """Return everything but the columns of `table` as plain data for JSON."""
        return {
            "format": FORMAT,
            "by": list(self.by),
            "level": self.level,
            "amount_unit": self.amount_unit,
            "axis": self.axis.to_dict(),
            "units": [self._unit_facts(unit) for unit in self.units],
            "trace": self.trace,
        }

    def _unit_facts(self, unit: UnitComparison) -> dict[str, Any]:
        along = unit.difference
        test, real = None, []
        if along is not None:
            test = {k: _finite(v) for k, v in along.test().items()}
            real = [
                {
                    "low": self.x_label(one.low), "high": self.x_label(one.high),
                    "mean_difference": one.mean_difference,
                }
                for one in along.stretches
            ]  # fmt: skip
        return {
            "key": [one if isinstance(one, int | float) else str(one) for one in unit.key],
            "status": unit.status, "reason": unit.reason, "base_rows": unit.base_rows,
            "now_rows": unit.now_rows, "bandwidth": unit.bandwidth, "test": test,
            "real_stretches": real,
            "excess": None if unit.excess is None else unit.excess.to_dict(),
            "adjusted_p_value": unit.adjusted_p_value,
            "cautions": [caution._asdict() for caution in unit.cautions],
        }  # fmt: skip

    def save(self, path: Any) -> None:
        """Write the differences along x; the suffix decides: .parquet, .arrow, .csv or .json.

        Raises
        ------
        WriteError
            The file cannot be written; nothing is left behind.
        """
        from fastsmooth.files_out import write_table

        spare_data(self.trace["files"], path, "--out")
        write_table(self.table(), path)

    def save_units(self, path: Any) -> None:
        """Write the units in order of their excess; suffixes and errors as for `save`."""
        from fastsmooth.files_out import write_table

        spare_data(self.trace["files"], path, "--units-out")
        write_table(self.units_table(), path, "--units-out")

    def plot(self, path: Any) -> None:
        """Draw the comparison; the suffix decides: .png, .svg or .pdf.

        A single comparison shows both curves and their difference along x; many units show their
        excess in order.

        Raises
        ------
        WriteError
            The file cannot be written; nothing is left behind.
        """
        from fastsmooth.report.contrast import draw

        spare_data(self.trace["files"], path, "--plot")
        draw(self, path)

    def lines(self) -> list[str]:
        """Return what a person should read first, one fact a line."""
        from fastsmooth.comparison_words import comparison_lines

        return comparison_lines(self)


_TAKEN = (
    "x", *ALONG, "real", "rank", "status", "reason", *PER_UNIT, "adjusted_p_value",
    "test_p_value", "real_stretches",
)  # fmt: skip


def in_order(units: list[UnitComparison]) -> tuple[UnitComparison, ...]:
    """Return units by falling excess, those without one last in the order given."""
    known = [unit for unit in units if unit.excess is not None]
    rest = [unit for unit in units if unit.excess is None]
    known.sort(key=lambda unit: -unit.excess.amount if unit.excess is not None else 0.0)
    return (*known, *rest)


def _finite(value: Any) -> Any:
    return None if isinstance(value, float) and not math.isfinite(value) else value
