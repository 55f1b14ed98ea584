"""The parts of a row filter: typed terms that become an Arrow expression or an array.

A term is built once and can be used in two ways: as an expression, which data sets push down, and
on record batches, which costs nothing but the computation itself.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any, Protocol

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.types as pt

from fastsmooth.axis import parse_moment
from fastsmooth.casts import kind_of, plain_array, plain_type
from fastsmooth.errors import InputError

LONGEST_QUOTE = 160
# What a comparison becomes when its sides are exchanged.
MIRRORED = {
    "equal": "equal",
    "greater": "less",
    "greater_equal": "less_equal",
    "less": "greater",
    "less_equal": "greater_equal",
}


class Rows(Protocol):
    """Where the values of columns and literals come from."""

    def column(self, name: str) -> Any:
        """Return a column."""

    def literal(self, scalar: pa.Scalar) -> Any:
        """Return a literal in the form that columns have."""


class ExpressionRows:
    """Builds an expression for a data set."""

    def column(self, name: str) -> Any:
        """Return a reference to a column."""
        return pc.field(name)

    def literal(self, scalar: pa.Scalar) -> Any:
        """Return a literal expression."""
        return pc.scalar(scalar)


class BatchRows:
    """Computes on a record batch."""

    def __init__(self, batch: pa.RecordBatch) -> None:
        """Take columns from `batch`."""
        self._batch = batch

    def column(self, name: str) -> Any:
        """Return an array of plain values."""
        return plain_array(self._batch.column(self._batch.schema.get_field_index(name)))

    def literal(self, scalar: pa.Scalar) -> Any:
        """Return the scalar itself."""
        return scalar


@dataclass(frozen=True)
class Term:
    """A translated part of a condition.

    Parameters
    ----------
    kind : str
        ``number``, ``text``, ``boolean``, ``timestamp``, ``date`` or ``duration``.
    type : pyarrow.DataType
        Type of its values.
    build : callable
        Takes `Rows`; returns its value as an expression, array or scalar.
    sql : str
        How it was written, for errors.
    scalar : pyarrow.Scalar or None
        Its value if it is a literal.
    text : str or None
        Raw text of a literal text or time, which is read once the other side is known.
    column : str or None
        The column's name if it is a bare column.
    prunable : pyarrow.compute.Expression or None
        A condition that is true wherever this one may be, by comparisons of bare columns with
        literals; None if there is none.
    """

    kind: str
    type: pa.DataType
    build: Callable[[Rows], Any]
    sql: str
    scalar: pa.Scalar | None = None
    text: str | None = None
    column: str | None = None
    prunable: pc.Expression | None = None


def refusal(received: str, remedy: str) -> InputError:
    """Make the error of a condition that is refused.

    Parameters
    ----------
    received, remedy : str
        What was found, cut if long, and what to do.

    Returns
    -------
    InputError
        To be raised.
    """
    if len(received) > LONGEST_QUOTE:
        received = f"{received[: LONGEST_QUOTE - 3]}..."
    return InputError("--where", "be a condition on columns of DATA", received, remedy)


def balanced(combine: Callable[[Any, Any], Any], values: list[Any]) -> Any:
    """Combine values in a tree, so that a long list does not make a deep expression.

    Parameters
    ----------
    combine : callable
        Joins two values.
    values : list
        At least one value.

    Returns
    -------
    object
        All joined, in order.
    """
    while len(values) > 1:
        pairs = [combine(*values[n : n + 2]) for n in range(0, len(values) - 1, 2)]
        values = pairs + (values[-1:] if len(values) % 2 else [])
    return values[0]


def loaded_type(name: str, stored: pa.DataType) -> tuple[str, pa.DataType]:
    """Return the kind of a column and the type in which it is computed with.

    Parameters
    ----------
    name : str
        The column, for the error.
    stored : pyarrow.DataType
        Its type.

    Returns
    -------
    kind : str
        A kind of `Term`.
    loaded : pyarrow.DataType
        The type that `stored` is cast to.

    Raises
    ------
    InputError
        A nested, binary or other type that conditions do not know.
    """
    plain = plain_type(stored)
    if pt.is_null(plain):
        # A column of nulls compares as a number and meets nothing but IS NULL.
        return "number", pa.float64()
    kind = kind_of(plain)
    if kind == "other":
        raise refusal(f"'{name}' is of type {plain}", "use another column")
    if pt.is_decimal(plain):
        return kind, pa.float64()
    if pt.is_float16(plain):
        return kind, pa.float32()
    return kind, plain


def number_literal(value: float, sql: str) -> Term:
    """Make a literal number.

    Parameters
    ----------
    value : int or float
        Its value.
    sql : str
        How it was written.

    Returns
    -------
    Term
        An int64 or uint64 where one holds it, else a float64.
    """
    to = pa.float64()
    if isinstance(value, int) and -(2**63) <= value < 2**64:
        to = pa.int64() if value < 2**63 else pa.uint64()
    scalar = pa.scalar(value if pt.is_integer(to) else float(value), to)
    return Term("number", scalar.type, lambda rows: rows.literal(scalar), sql, scalar)


def as_floats(term: Term, rows: Rows) -> Any:
    """Build a numeric term as float64.

    Parameters
    ----------
    term : Term
        A number.
    rows : Rows
        Where values come from.

    Returns
    -------
    expression, array or scalar
        Its value; integers beyond 2^53 are rounded.
    """
    value = term.build(rows)
    return value if term.type == pa.float64() else value.cast(pa.float64(), safe=False)


def in_texts(value: Term, options: list[str], sql: str) -> Term:
    """Ask whether a text is in a list.

    Parameters
    ----------
    value : Term
        A text.
    options : list of str
        The list.
    sql : str
        How it was written.

    Returns
    -------
    Term
        A boolean, null where the text is.
    """
    value_set = pa.array(options, value.type)

    def build(rows: Rows) -> Any:
        texts = value.build(rows)
        found = pc.is_in(texts, value_set=value_set)
        # A null is in no list, nor not in it: false OR (true AND null) is null.
        unknown = pc.and_kleene(pc.is_null(texts), rows.literal(pa.scalar(None, pa.bool_())))
        return pc.or_kleene(found, unknown)

    prunable = None if value.column is None else pc.field(value.column).isin(value_set)
    return Term("boolean", pa.bool_(), build, sql, prunable=prunable)


def moment_literal(text: str, to: pa.DataType | None, sql: str, kind: str) -> Term:
    """Read a literal time.

    Parameters
    ----------
    text : str
        How people and ISO 8601 write it.
    to : pyarrow.DataType or None
        Type of the other side, whose zone and unit are taken where they hold the time.
    sql : str
        How it was written in the condition.
    kind : str
        ``date`` or ``time``, for errors; a ``date`` is cut to its day.

    Returns
    -------
    Term
        A timestamp or date.

    Raises
    ------
    InputError
        No time, or an offset where the column has no zone.
    """
    zone = to.tz if to is not None and pt.is_timestamp(to) else None
    try:
        scalar = parse_moment(text, zone)
    except ValueError as error:
        raise refusal(
            f"'{text}' is no {kind}{_zone_hint(error)}",
            "write it as in '2026-01-31' or '2026-01-31 06:30'",
        ) from error
    if to is not None and pt.is_date(to):
        day = scalar.cast(pa.date32(), safe=False)
        if kind == "date" or day.cast(scalar.type) == scalar:
            scalar = day
    elif to is not None:
        try:
            scalar = scalar.cast(to)
        except pa.ArrowInvalid:
            # Finer than the column, or out of its range: the comparison converts.
            scalar = scalar.cast(pa.timestamp(scalar.type.unit, zone))
    return Term(
        kind_of(scalar.type), scalar.type, lambda rows: rows.literal(scalar), sql, scalar, text
    )


def _zone_hint(error: ValueError) -> str:
    return " (the column has no zone)" if "zone" in str(error) else ""


def compared(function: str, left: Term, right: Term, sql: str) -> Term:
    """Compare two terms.

    Parameters
    ----------
    function : str
        Arrow's name of the comparison.
    left, right : Term
        Its sides.
    sql : str
        How it was written.

    Returns
    -------
    Term
        A boolean, null where a side is.

    Raises
    ------
    InputError
        Kinds that do not compare, or a literal that cannot be read as the other side needs it.
    """
    left, right = _read_literal(left, right), _read_literal(right, left)
    moments = {"timestamp", "date"}
    alike = left.kind == right.kind or {left.kind, right.kind} == moments
    if not alike:
        found = f"'{sql}' compares a {left.kind} with a {right.kind}"
        raise refusal(found, "compare values of one kind, or use CAST")
    if left.kind == "boolean" and function not in ("equal", "not_equal"):
        raise refusal(f"'{sql}' orders true and false", "use = or <>")
    zones = {term.type.tz is None for term in (left, right) if term.kind == "timestamp"}
    if len(zones) > 1 or (left.kind != right.kind and False in zones):
        raise refusal(f"'{sql}' compares times with and without a zone", "compare alike times")
    left, right = _aligned(left, right), _aligned(right, left)
    call = getattr(pc, function)
    return Term(
        "boolean",
        pa.bool_(),
        lambda rows: call(left.build(rows), right.build(rows)),
        sql,
        prunable=_prunable(function, left, right),
    )


def _read_literal(term: Term, other: Term) -> Term:
    """Read a literal as the other side needs it: times in its zone, integers in its type."""
    if term.text is not None and other.kind in ("timestamp", "date") and other.text is None:
        if term.kind == "timestamp" and other.kind == "date":
            return term
        return moment_literal(
            term.text, other.type, term.sql, "date" if term.kind == "date" else "time"
        )
    if term.kind == "number" and term.scalar is not None and other.kind == "number":
        scalar = _retyped(term.scalar.as_py(), other.type)
        if scalar is not None:
            return replace(
                term, type=other.type, scalar=scalar, build=lambda rows: rows.literal(scalar)
            )
    return term


def _retyped(value: float, to: pa.DataType) -> pa.Scalar | None:
    """Write a number in the other side's type, or None if that would change it."""
    if pt.is_integer(to):
        if isinstance(value, float) and not value.is_integer():
            return None
        value = int(value)
    try:
        scalar = pa.scalar(value, to)
    except (pa.ArrowInvalid, OverflowError):
        return None
    return scalar if scalar.as_py() == value else None


def _aligned(term: Term, other: Term) -> Term:
    """Convert one side of a comparison where Arrow would refuse or fail to do it."""
    to = None
    if term.kind == "number" and term.type != other.type:
        to = pa.float64()
    elif term.kind == "timestamp" and other.kind == "timestamp" and term.type != other.type:
        unit = term.type.unit
        if term.scalar is None and other.scalar is not None:
            unit = other.type.unit
        to = pa.timestamp(unit, None if term.type.tz is None else "UTC")
    if to is None or to == term.type:
        return term
    build = term.build
    return replace(
        term, type=to, build=lambda rows: build(rows).cast(to, safe=False), column=None, scalar=None
    )


def _prunable(function: str, left: Term, right: Term) -> pc.Expression | None:
    if left.column is None:
        left, right = right, left
        function = MIRRORED.get(function, "")
    # Not "not_equal": statistics leave NaN out, and NaN differs from everything.
    if left.column is None or right.scalar is None or function not in MIRRORED:
        return None
    if left.type != right.type:
        return None
    return getattr(pc, function)(pc.field(left.column), pc.scalar(right.scalar))
