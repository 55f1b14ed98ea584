"""A row filter, accepted by `fastsmooth.where`, said in the dialect of a database.

Databases differ from the filter's own rules in a few places, and there the condition is rewritten
or refused: NaN (many take it as the largest number; here it is neither above nor below anything),
the number of a weekday, and LIKE where it does not mind the case. Two rules remain the engine's:
text compares by its collation, and times without a zone are read in the session's.
"""

from __future__ import annotations

from typing import Any

import sqlglot
from sqlglot import exp

from fastsmooth.errors import InputError
from fastsmooth.source import Columns

_NUMBERS = (exp.Add, exp.Sub, exp.Mul, exp.Div, exp.Neg, exp.Abs, exp.Floor, exp.Ceil, exp.Round)
_PARTS = (exp.Extract, exp.Year, exp.Quarter, exp.Month, exp.Day, exp.Hour, exp.Minute, exp.Second)
_CASELESS = ("sqlite", "mysql", "doris", "starrocks", "tsql", "singlestore")
# Dialects whose weekdays count from Sunday = 0 and Monday = 1 too, and what others write instead.
_SAME_WEEKDAYS = ("duckdb", "postgres", "redshift")
_WEEKDAYS = {
    ("spark", "DOW"): ("DAYOFWEEK", -1),
    ("spark", "ISODOW"): ("WEEKDAY", 1),
}


def translated(where: str, dialect: str, columns: Columns, axis_kind: str) -> Any:
    """Return a row filter as a tree for the dialect.

    Parameters
    ----------
    where : str
        The condition, as it stands in a plan.
    dialect : str
        The dialect that it will be written in.
    columns : Columns
        Of the plan: they are known to be numbers.
    axis_kind : str
        ``number`` if x is one too.

    Raises
    ------
    InputError
        The dialect would understand it differently.
    """
    known = {columns.y, columns.weight, columns.count}
    if axis_kind == "number":
        known.add(columns.x)

    def is_number(node: Any) -> bool:
        node = node.unnest()
        if isinstance(node, exp.Column):
            return node.name in known
        return isinstance(node, _NUMBERS) or (isinstance(node, exp.Literal) and not node.is_string)

    def said(node: Any) -> Any:
        if isinstance(node, exp.Query):
            raise _refusal("it holds a subquery", "compare columns with values")
        if isinstance(node, exp.Like | exp.ILike) and dialect in _CASELESS:
            raise _refusal(f"LIKE does not mind the case in {dialect}", "compare with = or IN")
        if isinstance(node, _PARTS) and dialect == "sqlite":
            raise _refusal("sqlite has no parts of times", "make a column of them")
        if isinstance(node, exp.Extract) and str(node.this.name).upper() in ("DOW", "ISODOW"):
            return _weekday(node, dialect)
        return node

    def compared(node: Any) -> Any:
        if isinstance(node, exp.Between) and is_number(node.this):
            # Written out, so that the comparison with the lower end is guarded.
            low = exp.GTE(this=node.this.copy(), expression=node.args["low"].copy())
            high = exp.LTE(this=node.this.copy(), expression=node.args["high"].copy())
            return exp.paren(exp.and_(_guarded(low, is_number), _guarded(high, is_number)))
        return _guarded(node, is_number)

    # In two steps: what the second replaces is not looked into again.
    return sqlglot.parse_one(where).transform(said).transform(compared)


def _guarded(node: Any, is_number: Any) -> Any:
    """A comparison of numbers as IEEE 754 has it, also where NaN counts as the largest number."""
    if not isinstance(node, exp.GT | exp.GTE | exp.LT | exp.LTE | exp.EQ | exp.NEQ):
        return node
    left, right = node.this, node.expression
    if not (is_number(left) or is_number(right)):
        return node
    if isinstance(node, exp.EQ | exp.NEQ):
        # NaN equals no literal anywhere, but itself.
        if _is_plain(left) or _is_plain(right):
            return node
        equal = exp.and_(exp.EQ(this=left.copy(), expression=right.copy()), _is_no_nan(left))
        return exp.paren(equal) if isinstance(node, exp.EQ) else exp.Not(this=exp.paren(equal))
    larger = left if isinstance(node, exp.GT | exp.GTE) else right
    if _is_plain(larger):
        return node
    return exp.paren(exp.and_(node.copy(), _is_no_nan(larger)))


def _is_plain(node: Any) -> bool:
    """Whether a side is surely not NaN: a literal, or a part of a time."""
    inner = node.unnest()
    inner = inner.this if isinstance(inner, exp.Neg) else inner
    return isinstance(inner, (exp.Literal, *_PARTS))


def _is_no_nan(node: Any) -> Any:
    """Neither NaN nor its negative is below 1, whether it counts as unordered or as largest."""
    value = exp.cast(node.copy(), "DOUBLE")
    below = exp.LT(this=value, expression=exp.Literal.number(1))
    negative = exp.LT(this=exp.Neg(this=value.copy()), expression=exp.Literal.number(1))
    return exp.paren(exp.or_(below, negative))


def _weekday(node: Any, dialect: str) -> Any:
    """The weekday counted from Sunday = 0, or from Monday = 1."""
    if dialect in _SAME_WEEKDAYS:
        return node
    family = "spark" if dialect == "databricks" else dialect
    found = _WEEKDAYS.get((family, str(node.this.name).upper()))
    if found is None:
        raise _refusal(f"weekdays are counted otherwise in {dialect}", "make a column of them")
    name, shift = found
    day = exp.Anonymous(this=name, expressions=[node.expression.copy()])
    return exp.paren(exp.Add(this=day, expression=exp.Literal.number(shift)))


def _refusal(received: str, remedy: str) -> InputError:
    return InputError("--where", "mean the same in the database", received, remedy)
