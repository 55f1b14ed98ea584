"""Curves of many units: one for each plant, line or machine, made from one pass over the data."""

from __future__ import annotations

import json
import re
import weakref
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fastsmooth.axis import Axis
from fastsmooth.blocks import Block
from fastsmooth.curve import STATUSES, VALUES, Caution, Curve, limit_name, spare_data
from fastsmooth.errors import InputError
from fastsmooth.lookup import CurvePoints
from fastsmooth.packing import pack, unpack, unpack_numbers

if TYPE_CHECKING:
    import pyarrow as pa

Floats = NDArray[np.float64]
Key = tuple[Any, ...]

MADE = "made"
UNIT_STATUSES = (
    MADE,
    "no usable rows",
    "x constant",
    "too few distinct x",
    "too few rows",
    "one block only",
    "data refused",
)
FLEET_KEY = b"fastsmooth.fleet"
FORMAT = 1
# The column that holds, in each unit's first row, all that belongs to its curve.
FACTS = "facts"
# Parts of a trace that all units share; they stand in the fleet's trace alone.
SHARED = ("settings", "files", "versions")


class Unit:
    """One unit of a fleet.

    Parameters
    ----------
    key : tuple
        One value for each `by` column, as plain Python (text, int, date...); None for null.
    status : str
        One of `UNIT_STATUSES`: ``made``, or why there is no curve.
    reason : str or None
        Why there is no curve, in a sentence.
    rows : int
        Rows of the unit that were used.
    curve : Curve or callable or None
        The curve, or what gives it when asked.

    Attributes
    ----------
    key, status, reason, rows
        As above.
    """

    __slots__ = ("_curve", "_opened", "key", "reason", "rows", "status")

    def __init__(
        self,
        key: Key,
        status: str,
        reason: str | None,
        rows: int,
        curve: Curve | Callable[[], Curve] | None,
    ) -> None:
        self.key = key
        self.status = status
        self.reason = reason
        self.rows = rows
        self._curve = curve
        self._opened: weakref.ref[Curve] | None = None

    @property
    def curve(self) -> Curve | None:
        """The unit's curve; None if it could not be made."""
        if self._curve is None or isinstance(self._curve, Curve):
            return self._curve
        opened = None if self._opened is None else self._opened()
        if opened is None:
            # Ten thousand open curves would take gigabytes: one lives as long as it is used.
            opened = self._curve()
            self._opened = weakref.ref(opened)
        return opened

    def points(self) -> CurvePoints | None:
        """Return the points of the curve alone, for which it need not be opened."""
        if isinstance(self._curve, PackedCurve):
            return self._curve.curve_points()
        curve = self.curve
        return None if curve is None else CurvePoints.of(curve)

    @property
    def bandwidth(self) -> float | None:
        """The curve's bandwidth, read without opening the curve; None if there is no curve."""
        if isinstance(self._curve, PackedCurve):
            return self._curve.bandwidth
        return None if self.curve is None else self.curve.bandwidth

    @property
    def point_count(self) -> int:
        """Points of the curve; 0 if there is none."""
        if isinstance(self._curve, PackedCurve):
            return int(self._curve.status.shape[0])
        return 0 if self.curve is None else int(self.curve.x.shape[0])

    @property
    def caution_codes(self) -> tuple[str, ...]:
        """Codes of the curve's cautions, read without opening the curve."""
        if isinstance(self._curve, PackedCurve):
            return self._curve.caution_codes
        return () if self.curve is None else tuple(one.code for one in self.curve.cautions)

    @property
    def name(self) -> str:
        """The key for people."""
        return unit_name(self.key)

    def __repr__(self) -> str:
        return f"Unit({self.name}: {self.status}, {self.rows} rows)"


def unit_name(key: Key) -> str:
    """Return a key for people, as in ``plant 7, 2026-01``, on one line.

    Examples
    --------
    >>> unit_name(("plant 7", 2026)), unit_name((None, "")), unit_name(("line\\nbreak", "null"))
    ('plant 7, 2026', 'null, ""', 'line break, "null"')
    """
    return ", ".join(_part_name(one) for one in key)


def _part_name(part: object) -> str:
    text = "null" if part is None else str(part)
    # What no line can hold would tear a table; what cannot be seen, or reads as missing, is quoted.
    text = "".join(one if one.isprintable() else " " for one in text)
    unseen = text != text.strip() or not text or (text == "null" and part is not None)
    return f'"{text}"' if unseen else text


def short_name(name: str, most: int) -> str:
    """Shorten a name in its middle to so many characters: names of a fleet differ at their ends.

    Examples
    --------
    >>> short_name("northmoor", 9), short_name("northmoor-dairy-cooler-17", 13)
    ('northmoor', 'northm…ler-17')
    """
    if len(name) <= most:
        return name
    tail = (most - 1) // 2
    return f"{name[: most - 1 - tail]}…{name[len(name) - tail :]}"


def sort_key(key: Key) -> tuple[tuple[bool, Any], ...]:
    """Return what keys are sorted by: ascending, null last."""
    return tuple((one is None, 0 if one is None else one) for one in key)


class Curves(Mapping[Key, Curve]):
    """The curves of a fleet by key; each is opened when it is asked for."""

    def __init__(self, units: Sequence[Unit]) -> None:
        self._units = {unit.key: unit for unit in units if unit.status == MADE}

    def __getitem__(self, key: Key) -> Curve:
        curve = self._units[key].curve
        assert curve is not None
        return curve

    def __iter__(self) -> Iterator[Key]:
        return iter(self._units)

    def __len__(self) -> int:
        return len(self._units)

    def __contains__(self, key: object) -> bool:
        return key in self._units


@dataclass(frozen=True)
class PackedCurve:
    """A curve in little memory; calling it gives the curve.

    Attributes
    ----------
    points : (8 + levels, n) float64
        Rows as in `fastsmooth.curve.VALUES`, then the curve's limits.
    status : (n,) uint8
        Index into `fastsmooth.curve.STATUSES`.
    facts : bytes
        Everything else, packed.
    shared : dict
        The parts of the trace that all units share.
    bandwidth : float
        As in the curve.
    caution_codes : tuple of str
        Of the curve's cautions.
    """

    points: Floats
    status: NDArray[np.uint8]
    facts: bytes
    shared: Mapping[str, Any]
    bandwidth: float
    caution_codes: tuple[str, ...]

    @classmethod
    def of(cls, curve: Curve, shared: Mapping[str, Any]) -> PackedCurve:
        """Pack a curve; parts of its trace that equal `shared` are left out."""
        told = curve.to_dict()
        own = {k: v for k, v in told["trace"].items() if k not in shared or v != shared[k]}
        facts = pack({**told, "trace": own, "parts": list(told["trace"])})
        limits = [] if curve.limits is None else list(curve.limits.values)
        points = np.stack([*(getattr(curve, name) for name in VALUES), *limits])
        codes = tuple(caution.code for caution in curve.cautions)
        return cls(points, curve.status.astype(np.uint8), facts, shared, curve.bandwidth, codes)

    def curve_points(self) -> CurvePoints:
        """Return the curve's points alone."""
        estimate, residual_sd = (
            self.points[VALUES.index(name)] for name in ("estimate", "residual_sd")
        )
        limits = self.points[len(VALUES) :]
        ends = limits[[0, -1]] if limits.shape[0] > 1 else None
        return CurvePoints(_x_of(self), estimate, residual_sd, self.status.astype(np.int64), ends)

    def __call__(self) -> Curve:
        """Return the curve, equal to the last bit."""
        told = unpack(self.facts)
        trace = {**self.shared, **told["trace"]}
        told["trace"] = {part: trace[part] for part in told.pop("parts")}
        return Curve.from_parts(
            told, dict(zip(VALUES, self.points, strict=False)), self.status.astype(np.int64)
        )


@dataclass(frozen=True, eq=False)
class Fleet:
    """Reference curves of many units.

    Attributes
    ----------
    by : tuple of str
        The columns whose values tell units apart.
    units : tuple of Unit
        All units met, by ascending key, null last.
    cautions : tuple of Caution
        What the reader must know about all units; each curve has its own too.
    trace : dict
        What all units share: ``settings``, ``files``, ``versions``, ``axis``, ``by_types``,
        ``rows`` (of all units together), ``engine``, ``shared_bandwidth``.
    """

    by: tuple[str, ...]
    units: tuple[Unit, ...]
    cautions: tuple[Caution, ...]
    trace: dict[str, Any]

    @cached_property
    def curves(self) -> Mapping[Key, Curve]:
        """The curves that could be made, by key; each is opened when it is asked for."""
        return Curves(self.units)

    @property
    def settings(self) -> dict[str, Any]:
        """The settings that made the curves."""
        return dict(self.trace["settings"])

    @property
    def axis(self) -> Axis:
        """What the floats of x mean, the same for all units."""
        return Axis.from_dict(self.trace["axis"])

    def status_counts(self) -> dict[str, int]:
        """Return how many units have each status."""
        counts = dict.fromkeys(UNIT_STATUSES, 0)
        for unit in self.units:
            counts[unit.status] += 1
        return counts

    def table(self) -> pa.Table:
        """Return all curves below each other as an Arrow table.

        Returns
        -------
        pyarrow.Table
            The `by` columns in their own type, then the columns of a curve. A unit without a
            curve has one row, with its status and nulls. The column ``facts`` and the schema
            metadata hold what `fastsmooth.load_curve` needs to give the fleet back.
        """
        import pyarrow as pa

        packed = [_packed(unit, self._shared()) for unit in self.units]
        lengths = [1 if one is None else one.status.shape[0] for one in packed]
        columns: dict[str, Any] = {}
        repeats = pa.array(np.repeat(np.arange(len(packed)), lengths))
        for place, name in enumerate(self.by):
            kind = arrow_type(self.trace["by_types"][place])
            keys = pa.array([unit.key[place] for unit in self.units], kind)
            columns[column_of(name)] = keys.take(repeats)
        x = [np.full(1, np.nan) if one is None else _x_of(one) for one in packed]
        columns["x"] = self.axis.to_arrow(np.concatenate(x) if x else np.empty(0))
        for row, name in enumerate(self._value_columns()):
            parts = [np.full(1, np.nan) if one is None else one.points[row] for one in packed]
            values = np.concatenate(parts) if parts else np.empty(0)
            columns[name] = pa.array(values, mask=~np.isfinite(values))
        words = [*STATUSES, *UNIT_STATUSES]
        codes = [
            np.array([words.index(unit.status)]) if one is None else one.status
            for unit, one in zip(self.units, packed, strict=True)
        ]
        status = np.concatenate(codes) if codes else np.empty(0, int)
        columns["status"] = pa.array(words).take(pa.array(status.astype(np.int64)))
        columns[FACTS] = _in_first_rows(
            [b"" if one is None else one.facts for one in packed], lengths
        )
        metadata = {FLEET_KEY: json.dumps(self.to_dict(), allow_nan=False, default=str).encode()}
        return pa.table(columns).replace_schema_metadata(metadata)

    def to_dict(self) -> dict[str, Any]:
        """Return everything but curves and keys as plain data for JSON."""
        return {
            "format": FORMAT,
            "by": list(self.by),
            "units": [
                [
                    unit.status,
                    unit.reason,
                    unit.rows,
                    unit.point_count,
                    unit.bandwidth,
                    list(unit.caution_codes),
                ]
                for unit in self.units
            ],
            "cautions": [caution._asdict() for caution in self.cautions],
            "trace": self.trace,
        }

    def _value_columns(self) -> list[str]:
        return _value_columns(self.trace)

    def _shared(self) -> dict[str, Any]:
        return {name: self.trace[name] for name in SHARED}

    @classmethod
    def from_table(cls, table: pa.Table, name: str = "the table") -> Fleet:
        """Build a fleet from what `table` returned.

        Raises
        ------
        InputError
            The table is no fleet, a newer version wrote it, or rows were taken out of it.
        """
        metadata = table.schema.metadata or {}
        if FLEET_KEY not in metadata:
            raise InputError(
                "CURVE", "be curves of many units that fastsmooth wrote",
                f"{name} carries no trace", "name a file that 'fastsmooth curve --by --out' made",
            )  # fmt: skip
        told = json.loads(metadata[FLEET_KEY])
        if told["format"] != FORMAT:
            raise InputError(
                "CURVE", f"have format {FORMAT}", f"{name} has format {told['format']}",
                "make the curves again with this version",
            )  # fmt: skip
        facts = table[FACTS].combine_chunks()
        first = np.flatnonzero(facts.is_valid().to_numpy(zero_copy_only=False))
        ends = np.append(first, table.num_rows)
        lengths = [max(1, unit[3]) for unit in told["units"]]
        if len(first) != len(lengths):
            raise _altered(name, f"{len(first):,} of {len(lengths):,} units")
        if first[:1].any() or np.diff(ends).tolist() != lengths:
            raise _altered(name, f"{table.num_rows:,} of {sum(lengths):,} points")
        keys = [
            table[column_of(one)].combine_chunks().take(first).to_pylist() for one in told["by"]
        ]
        names = _value_columns(told["trace"])
        points = np.stack([table[one].to_numpy() for one in names]).astype(np.float64)
        status = table["status"].combine_chunks().dictionary_encode()
        words = status.dictionary.to_pylist()
        code = [STATUSES.index(one) if one in STATUSES else 0 for one in words]
        statuses = np.array(code, np.uint8)[status.indices.to_numpy()]
        shared = {one: told["trace"][one] for one in SHARED}
        units = []
        for place, (state, reason, rows, _, bandwidth, codes) in enumerate(told["units"]):
            key = tuple(column[place] for column in keys)
            curve = None
            if state == MADE:
                part = slice(ends[place], ends[place + 1])
                curve = PackedCurve(
                    points[:, part], statuses[part], facts[int(first[place])].as_py(), shared,
                    bandwidth, tuple(codes),
                )  # fmt: skip
            units.append(Unit(key, state, reason, rows, curve))
        cautions = tuple(Caution(**one) for one in told["cautions"])
        return cls(tuple(told["by"]), tuple(units), cautions, told["trace"])

    def save(self, path: Any) -> None:
        """Write the table of all curves; the suffix decides: .parquet, .arrow, .csv or .json.

        Parquet, Arrow and JSON files can be read back with `load_curve`; a CSV file holds the
        table alone.

        Raises
        ------
        WriteError
            The file cannot be written; nothing is left behind.
        """
        from fastsmooth.files_out import write_fleet

        spare_data([record["path"] for record in self.trace["files"]], path, "--out")
        write_fleet(self, path)

    def page(self, path: Any) -> None:
        """Write all curves as one HTML file: a table of units, and a picture of each.

        Raises
        ------
        WriteError
            The file cannot be written; nothing is left behind.
        """
        from fastsmooth.report.page import write_page

        write_page(self, path)


def _value_columns(trace: dict[str, Any]) -> list[str]:
    """Names of the columns of numbers: a curve's values, then its limits."""
    return [*VALUES, *(limit_name(level) for level in trace["settings"].get("limits") or [])]


def units_of(result: Curve | Fleet) -> Mapping[Key, Curve]:
    """Return curves by key; a single curve has the key ()."""
    return {(): result} if isinstance(result, Curve) else result.curves


def column_of(by: str) -> str:
    """Return the name of a `by` column in a fleet's table, where a curve's columns have theirs."""
    block = Block.parse(by)
    name = by if block.unit is not None else block.column
    return f"unit_{name}" if name in ("x", *VALUES, "status", FACTS) else name


def arrow_type(name: str) -> pa.DataType:
    """Return the Arrow type of a name as Arrow spells it.

    Raises
    ------
    ValueError
        There is no such type.
    """
    import pyarrow as pa

    zoned = re.fullmatch(r"timestamp\[(s|ms|us|ns), tz=(.+)\]", name)
    if zoned:
        return pa.timestamp(zoned[1], zoned[2])
    decimal = re.fullmatch(r"decimal(\d+)\((\d+), (-?\d+)\)", name)
    if decimal:
        makers = {
            "32": pa.decimal32, "64": pa.decimal64, "128": pa.decimal128, "256": pa.decimal256,
        }  # fmt: skip
        return makers[decimal[1]](int(decimal[2]), int(decimal[3]))
    fixed = re.fullmatch(r"fixed_size_binary\[(\d+)\]", name)
    if fixed:
        return pa.binary(int(fixed[1]))
    return pa.type_for_alias(name)


def _in_first_rows(values: Sequence[bytes], lengths: Sequence[int]) -> pa.Array:
    """A binary column with each value in the first of so many rows, and nulls in the others."""
    import pyarrow as pa

    rows = sum(lengths)
    first = np.cumsum([0, *lengths])[:-1]
    held, sizes = np.zeros(rows, bool), np.zeros(rows + 1, np.int64)
    held[first] = True
    sizes[first + 1] = [len(one) for one in values]
    # Thousands of curves take hundreds of megabytes: they are joined once and not copied again.
    buffers = [
        pa.array(held).buffers()[1], pa.py_buffer(np.cumsum(sizes)), pa.py_buffer(b"".join(values)),
    ]  # fmt: skip
    return pa.LargeBinaryArray.from_buffers(pa.large_binary(), rows, buffers)


def _altered(name: str, what: str) -> InputError:
    return InputError(
        "CURVE", "be as fastsmooth wrote it", f"{name} holds {what}",
        "name a file that 'fastsmooth curve --by --out' made",
    )  # fmt: skip


def _packed(unit: Unit, shared: Mapping[str, Any]) -> PackedCurve | None:
    """The unit's curve, packed for a fleet whose trace has these shared parts."""
    held = unit._curve
    if isinstance(held, PackedCurve) and held.shared == shared:
        return held
    curve = unit.curve
    return None if curve is None else PackedCurve.of(curve, shared)


def _x_of(packed: PackedCurve) -> Floats:
    return unpack_numbers(packed.facts, "x_floats")
