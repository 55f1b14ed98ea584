"""Row filters: an SQL condition, parsed and translated node by node from a list.

Nothing outside the list is ever evaluated, so a condition can read columns of the data and
nothing else. Comparisons follow IEEE 754: NaN is neither above, below nor equal to anything, so
``power_kw > 5`` drops NaN and ``NOT (power_kw > 5)`` keeps it. A row for which the condition is
null is dropped.
"""

from __future__ import annotations

import re
from collections.abc import Callable, Iterator
from dataclasses import dataclass, replace
from functools import reduce
from typing import Any, Protocol

import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.types as pt
import sqlglot
from sqlglot import exp
from sqlglot.errors import SqlglotError

from fastsmooth.axis import parse_moment
from fastsmooth.casts import is_number, is_text, plain_array, plain_type
from fastsmooth.errors import InputError
from fastsmooth.near import advise

ALLOWED = (
    "use comparisons, AND, OR, NOT, IN, BETWEEN, LIKE, IS NULL, + - * /, CAST, EXTRACT, "
    "ABS, FLOOR, CEIL, ROUND, LOWER, UPPER"
)
COMPARISONS: dict[type[exp.Expression], str] = {
    exp.EQ: "equal",
    exp.NEQ: "not_equal",
    exp.GT: "greater",
    exp.GTE: "greater_equal",
    exp.LT: "less",
    exp.LTE: "less_equal",
}
MIRRORED = {
    "equal": "equal",
    "greater": "less",
    "greater_equal": "less_equal",
    "less": "greater",
    "less_equal": "greater_equal",
}
ARITHMETIC: dict[type[exp.Expression], str] = {
    exp.Add: "add",
    exp.Sub: "subtract",
    exp.Mul: "multiply",
    exp.Div: "divide",
}
NUMBER_FUNCTIONS: dict[type[exp.Expression], Callable[[Any], Any]] = {
    exp.Abs: lambda value: pc.abs(value),
    exp.Floor: lambda value: pc.floor(value),
    exp.Ceil: lambda value: pc.ceil(value),
    exp.Round: lambda value: pc.round(value, ndigits=0, round_mode="half_towards_infinity"),
}
TEXT_FUNCTIONS: dict[type[exp.Expression], Callable[[Any], Any]] = {
    exp.Lower: lambda value: pc.utf8_lower(value),
    exp.Upper: lambda value: pc.utf8_upper(value),
}
DATE_PARTS: dict[str, Callable[[Any], Any]] = {
    "YEAR": lambda value: pc.year(value),
    "QUARTER": lambda value: pc.quarter(value),
    "MONTH": lambda value: pc.month(value),
    "WEEK": lambda value: pc.iso_week(value),
    "DAY": lambda value: pc.day(value),
    "DOY": lambda value: pc.day_of_year(value),
    "DOW": lambda value: pc.day_of_week(value, count_from_zero=True, week_start=7),
    "ISODOW": lambda value: pc.day_of_week(value, count_from_zero=False, week_start=1),
}
TIME_PARTS: dict[str, Callable[[Any], Any]] = {
    "HOUR": lambda value: pc.hour(value),
    "MINUTE": lambda value: pc.minute(value),
    "SECOND": lambda value: pc.second(value),
}
PART_FUNCTIONS: dict[type[exp.Expression], str] = {
    exp.Year: "YEAR",
    exp.Quarter: "QUARTER",
    exp.Month: "MONTH",
    exp.Day: "DAY",
    exp.Hour: "HOUR",
    exp.Minute: "MINUTE",
    exp.Second: "SECOND",
}
CASTS = {
    "DOUBLE": pa.float64(),
    "FLOAT": pa.float64(),
    "DECIMAL": pa.float64(),
    "INT": pa.int64(),
    "BIGINT": pa.int64(),
    "VARCHAR": pa.string(),
    "TEXT": pa.string(),
    "BOOLEAN": pa.bool_(),
    "DATE": pa.date32(),
    "TIMESTAMP": pa.timestamp("us"),
    "TIMESTAMPTZ": pa.timestamp("us", "UTC"),
}
WHOLE_NUMBER = re.compile(r"[0-9]+")
# Arguments that the parser may set on a listed node; any other one that is set is refused.
PLAIN_ARGUMENTS = {"this", "expression", "expressions", "low", "high", "to", "decimals", "negate"}


class _Rows(Protocol):
    def column(self, name: str) -> Any: ...

    def literal(self, scalar: pa.Scalar) -> Any: ...


class _ExpressionRows:
    """Builds an expression for a data set."""

    def column(self, name: str) -> Any:
        return pc.field(name)

    def literal(self, scalar: pa.Scalar) -> Any:
        return pc.scalar(scalar)


class _BatchRows:
    """Computes on a record batch."""

    def __init__(self, batch: pa.RecordBatch) -> None:
        self._batch = batch

    def column(self, name: str) -> Any:
        return plain_array(self._batch.column(self._batch.schema.get_field_index(name)))

    def literal(self, scalar: pa.Scalar) -> Any:
        return scalar


@dataclass(frozen=True)
class _Term:
    """A translated part of the condition.

    `build` gives its value as an expression or as an array. `text` is the raw text of a literal
    text or time, which is read once the other side is known. `prunable` is a condition that is
    true wherever this term may be true, by comparisons of bare columns only.
    """

    kind: str  # number, text, boolean, timestamp, date, duration, null
    type: pa.DataType
    build: Callable[[_Rows], Any]
    sql: str
    scalar: pa.Scalar | None = None
    text: str | None = None
    column: str | None = None
    prunable: pc.Expression | None = None


@dataclass(frozen=True)
class Filter:
    """A condition on rows, ready for data of one schema.

    Parameters
    ----------
    text : str
        The condition as written.
    columns : tuple of str
        The columns that it reads.
    expression : pyarrow.compute.Expression
        The condition for pyarrow data sets.
    prunable : pyarrow.compute.Expression
        A weaker condition that may be held against statistics: where it is surely false, no row
        meets the filter, rows with NaN included (statistics leave NaN out).
    term : object
        The translation, used by `mask`.
    """

    text: str
    columns: tuple[str, ...]
    expression: pc.Expression
    prunable: pc.Expression
    term: _Term

    def mask(self, batch: pa.RecordBatch) -> pa.BooleanArray:
        """Compute which rows meet the condition.

        Parameters
        ----------
        batch : pyarrow.RecordBatch
            n rows that hold at least `columns`.

        Returns
        -------
        pyarrow.BooleanArray
            n values; null counts as false.

        Raises
        ------
        InputError
            A value that cannot be cast or computed as the condition asks.
        """
        try:
            return self.term.build(_BatchRows(batch))
        except pa.ArrowInvalid as error:
            raise InputError(
                "--where",
                "be computable for every row",
                f"'{_shortened(self.text)}' is not ({str(error).splitlines()[0]})",
                "change the condition or the column",
            ) from error


def parse_where(text: str, schema: pa.Schema) -> Filter:
    """Translate an SQL condition into a row filter.

    Integers and fractions compare by value; arithmetic is in float64, so ``1 / 2`` is 0.5 and a
    division by zero gives an infinity. A time without a zone is read in the zone of the column
    that it is compared with. Parts of times (``EXTRACT(HOUR FROM logged_at)``) are in the
    column's zone; ``DOW`` counts from Sunday = 0, ``ISODOW`` from Monday = 1.

    Parameters
    ----------
    text : str
        The condition. Names with spaces, dots or keywords stand in double quotes.
    schema : pyarrow.Schema
        Columns of the data.

    Returns
    -------
    Filter
        The filter.

    Raises
    ------
    InputError
        No condition, an unknown column, kinds that do not compare, or anything not listed.

    Examples
    --------
    >>> import pyarrow as pa
    >>> schema = pa.schema([("power_kw", pa.float64()), ("plant", pa.string())])
    >>> parse_where("power_kw > 5 AND plant IN ('Avila', 'Soria')", schema).columns
    ('power_kw', 'plant')
    """
    try:
        statements = sqlglot.parse(text)
    except (SqlglotError, RecursionError) as error:
        found = f"'{_shortened(text)}' cannot be parsed{_near(error)}"
        raise _refusal(found, "check the spelling and the parentheses") from error
    if len(statements) != 1 or statements[0] is None:
        number = sum(statement is not None for statement in statements)
        raise _refusal(
            f"{number} conditions were given" if number else "nothing was given",
            "join conditions with AND" if number else "write a condition such as power_kw > 5",
        )
    translator = _Translator(schema)
    try:
        term = translator.translate(statements[0])
        if term.kind != "boolean":
            raise _refusal(f"'{term.sql}' is a {term.kind}", "compare it with something")
        if not translator.columns:
            raise _refusal(f"'{term.sql}' reads no column", "name a column")
        expression = term.build(_ExpressionRows())
    except RecursionError as error:
        raise _refusal("it is nested too deeply", "write it with fewer parentheses") from error
    prunable = pc.scalar(True) if term.prunable is None else term.prunable
    return Filter(text, tuple(translator.columns), expression, prunable, term)


def _refusal(received: str, remedy: str) -> InputError:
    return InputError("--where", "be a condition on columns of DATA", received, remedy)


def _shortened(text: str) -> str:
    return text if len(text) <= 80 else f"{text[:77]}..."


def _near(error: Exception) -> str:
    details = getattr(error, "errors", None)
    if not details:
        return ""
    place = f"{details[0].get('start_context', '')}{details[0].get('highlight', '')}".strip()
    return f" at '{place[-30:]}'" if place else ""


class _Translator:
    """Translates the nodes of one condition; `columns` collects the names, in order."""

    def __init__(self, schema: pa.Schema) -> None:
        self._schema = schema
        self.columns: dict[str, None] = {}

    def translate(self, node: exp.Expression) -> _Term:
        kind = type(node)
        if kind is exp.Paren:
            return self.translate(node.this)
        if kind is exp.Column:
            return self._column(node)
        self._check_arguments(node)
        if kind is exp.And or kind is exp.Or:
            return self._connected(node, kind)
        if kind is exp.Not:
            return self._negated(node)
        if kind in COMPARISONS:
            left, right = self.translate(node.this), self.translate(node.expression)
            return _compared(COMPARISONS[kind], left, right, node.sql())
        if kind in ARITHMETIC:
            return self._arithmetic(node, ARITHMETIC[kind])
        if kind in NUMBER_FUNCTIONS:
            return self._number_function(node, NUMBER_FUNCTIONS[kind])
        if kind in TEXT_FUNCTIONS:
            inner = self._of_kind(node.this, "text")
            function = TEXT_FUNCTIONS[kind]
            return _Term("text", inner.type, lambda rows: function(inner.build(rows)), node.sql())
        if kind in PART_FUNCTIONS:
            return self._part(PART_FUNCTIONS[kind], node.this, node.sql())
        handlers: dict[type[exp.Expression], Callable[[Any], _Term]] = {
            exp.Between: self._between,
            exp.In: self._in_list,
            exp.Like: self._like,
            exp.ILike: self._like,
            exp.Is: self._is,
            exp.Neg: self._minus,
            exp.Cast: self._cast,
            exp.Literal: self._literal,
            exp.Boolean: self._boolean,
            exp.Null: self._null,
            exp.Extract: lambda part: self._part(
                str(part.this.name).upper(), part.expression, part.sql()
            ),
        }
        if kind not in handlers:
            raise _refusal(f"{_describe(node)} is not allowed", ALLOWED)
        return handlers[kind](node)

    def _check_arguments(self, node: exp.Expression) -> None:
        for name, value in node.args.items():
            if name in ("query", "unnest", "field") and value:
                raise _refusal("IN with a subquery is not allowed", "list the values themselves")
            literal_flag = isinstance(node, exp.Literal) and name == "is_string"
            # These flags only choose a spelling; division here is always in float64.
            division_flag = isinstance(node, exp.Div) and name in ("typed", "safe")
            known = name in PLAIN_ARGUMENTS or literal_flag or division_flag
            if value and not known and _is_listed(node):
                raise _refusal(f"'{node.sql()}' uses more than is allowed", ALLOWED)

    def _of_kind(self, node: exp.Expression, kind: str) -> _Term:
        term = self.translate(node)
        if term.kind != kind:
            found = f"'{term.sql}' is a {term.kind} where a {kind} is needed"
            raise _refusal(found, f"cast it to a {kind} or use another column")
        return term

    def _column(self, node: exp.Column) -> _Term:
        parts = [part.name for part in node.parts]
        name = ".".join(parts)
        if name not in self._schema.names:
            if len(parts) > 1:
                raise _refusal(
                    f"'{name}' names a table", f"write the column alone, as in {parts[-1]} > 5"
                )
            known = self._schema.names
            raise _refusal(f"'{name}' is no column of DATA", advise(name, known))
        if len(self._schema.get_all_field_indices(name)) > 1:
            raise _refusal(f"DATA has several columns called '{name}'", "rename all but one")
        stored = self._schema.field(name).type
        kind, loaded = _loaded_type(name, stored)
        self.columns[name] = None
        cast_to = None if loaded == plain_type(stored) else loaded

        def build(rows: _Rows) -> Any:
            value = rows.column(name)
            is_expression = isinstance(value, pc.Expression)
            if is_expression and stored != loaded:
                return value.cast(loaded)
            return value if is_expression or cast_to is None else value.cast(cast_to)

        bare = name if stored == loaded else None
        prunable = pc.field(name) if kind == "boolean" and bare else None
        return _Term(kind, loaded, build, node.sql(), column=bare, prunable=prunable)

    def _connected(self, node: exp.Expression, kind: type[exp.Expression]) -> _Term:
        # A long chain leans left, one level for each part: walked, not recursed into.
        terms = [self._of_kind(part, "boolean") for part in _spine(node, kind)]
        combine = pc.and_kleene if kind is exp.And else pc.or_kleene

        def build(rows: _Rows) -> Any:
            return _balanced(combine, [term.build(rows) for term in terms])

        known = [term.prunable for term in terms if term.prunable is not None]
        prunable = None
        if kind is exp.And and known:
            prunable = _balanced(lambda left, right: left & right, known)
        elif kind is exp.Or and len(known) == len(terms):
            prunable = _balanced(lambda left, right: left | right, known)
        return _Term("boolean", pa.bool_(), build, node.sql(), prunable=prunable)

    def _negated(self, node: exp.Not) -> _Term:
        inner = self._of_kind(node.this, "boolean")
        prunable = None
        is_null = node.this.unnest()
        if isinstance(is_null, exp.Is) and isinstance(is_null.expression, exp.Null):
            column = self.translate(is_null.this).column
            prunable = pc.field(column).is_valid() if column is not None else None
        return _Term(
            "boolean",
            pa.bool_(),
            lambda rows: pc.invert(inner.build(rows)),
            node.sql(),
            prunable=prunable,
        )

    def _between(self, node: exp.Between) -> _Term:
        value = self.translate(node.this)
        low, high = self.translate(node.args["low"]), self.translate(node.args["high"])
        above = _compared("greater_equal", value, low, node.sql())
        below = _compared("less_equal", value, high, node.sql())
        known = [term.prunable for term in (above, below) if term.prunable is not None]
        return _Term(
            "boolean",
            pa.bool_(),
            lambda rows: pc.and_kleene(above.build(rows), below.build(rows)),
            node.sql(),
            prunable=reduce(lambda left, right: left & right, known) if known else None,
        )

    def _in_list(self, node: exp.In) -> _Term:
        value = self.translate(node.this)
        options = [self.translate(option) for option in node.expressions]
        if not options:
            raise _refusal(f"'{node.sql()}' lists nothing", "list at least one value")
        if any(option.scalar is None and option.text is None for option in options):
            raise _refusal(f"'{node.sql()}' lists more than literals", "list values only")
        if value.kind == "text" and all(option.kind == "text" for option in options):
            return _in_texts(value, [str(option.text) for option in options], node.sql())
        terms = [_compared("equal", value, option, node.sql()) for option in options]
        known = [term.prunable for term in terms if term.prunable is not None]
        prunable = None
        if len(known) == len(terms):
            prunable = _balanced(lambda left, right: left | right, known)
        return _Term(
            "boolean",
            pa.bool_(),
            lambda rows: _balanced(pc.or_kleene, [term.build(rows) for term in terms]),
            node.sql(),
            prunable=prunable,
        )

    def _like(self, node: exp.Like | exp.ILike) -> _Term:
        value = self._of_kind(node.this, "text")
        pattern = self.translate(node.expression)
        if pattern.text is None or pattern.kind != "text":
            raise _refusal(f"'{node.sql()}' has no literal pattern", "write LIKE 'Avila%'")
        matched, ignore_case = pattern.text, isinstance(node, exp.ILike)
        negate = bool(node.args.get("negate"))

        def build(rows: _Rows) -> Any:
            found = pc.match_like(value.build(rows), matched, ignore_case=ignore_case)
            return pc.invert(found) if negate else found

        return _Term("boolean", pa.bool_(), build, node.sql())

    def _is(self, node: exp.Is) -> _Term:
        value = self.translate(node.this)
        if isinstance(node.expression, exp.Null):
            column = value.column
            return _Term(
                "boolean",
                pa.bool_(),
                lambda rows: pc.is_null(value.build(rows)),
                node.sql(),
                prunable=pc.field(column).is_null() if column is not None else None,
            )
        if not isinstance(node.expression, exp.Boolean) or value.kind != "boolean":
            raise _refusal(f"'{node.sql()}' is not allowed", "write IS NULL or IS NOT NULL")
        wanted = bool(node.expression.this)

        def build(rows: _Rows) -> Any:
            truth = value.build(rows)
            # False AND null is false, so that a null is neither true nor false.
            return pc.and_kleene(pc.is_valid(truth), truth if wanted else pc.invert(truth))

        return _Term("boolean", pa.bool_(), build, node.sql())

    def _arithmetic(self, node: exp.Expression, name: str) -> _Term:
        left = self._of_kind(node.this, "number")
        right = self._of_kind(node.expression, "number")
        function = getattr(pc, name)

        def build(rows: _Rows) -> Any:
            return function(_as_floats(left, rows), _as_floats(right, rows))

        return _Term("number", pa.float64(), build, node.sql())

    def _minus(self, node: exp.Neg) -> _Term:
        inner = self._of_kind(node.this, "number")
        if inner.scalar is not None:
            return _number_literal(-inner.scalar.as_py(), node.sql())
        return _Term(
            "number", pa.float64(), lambda rows: pc.negate(_as_floats(inner, rows)), node.sql()
        )

    def _number_function(self, node: exp.Expression, function: Callable[[Any], Any]) -> _Term:
        if node.args.get("decimals"):
            raise _refusal(f"'{node.sql()}' rounds to digits", "round to whole numbers")
        inner = self._of_kind(node.this, "number")
        return _Term(
            "number", pa.float64(), lambda rows: function(_as_floats(inner, rows)), node.sql()
        )

    def _part(self, part: str, of: exp.Expression, sql: str) -> _Term:
        moment = self.translate(of)
        parts = DATE_PARTS | TIME_PARTS
        if part not in parts:
            raise _refusal(f"EXTRACT({part} ...) is not allowed", f"use {', '.join(parts)}")
        if moment.kind != "timestamp" and not (moment.kind == "date" and part in DATE_PARTS):
            found = f"'{moment.sql}' is a {moment.kind}, which has no {part.lower()}"
            raise _refusal(found, "use a column of times")
        return _Term("number", pa.int64(), lambda rows: parts[part](moment.build(rows)), sql)

    def _cast(self, node: exp.Cast) -> _Term:
        target = str(getattr(node.to.this, "name", node.to.this))
        if target not in CASTS or (node.to.expressions and target != "DECIMAL"):
            raise _refusal(f"CAST to {node.to.sql()} is not allowed", f"use {', '.join(CASTS)}")
        to = CASTS[target]
        kind = _kind_of(to)
        inner = self.translate(node.this)
        if inner.text is not None and kind in ("timestamp", "date"):
            return _moment(inner.text, to if kind == "date" else None, node.sql(), kind)
        if kind == inner.kind == "date" or (kind == "text" and inner.kind == "text"):
            return replace(inner, sql=node.sql(), text=None, scalar=None, column=None)
        allowed = {
            "number": ("number", "text", "boolean"),
            "text": ("number", "text", "boolean"),
            "boolean": ("boolean", "text"),
            "date": ("timestamp", "text"),
            "timestamp": ("date", "text"),
        }
        if inner.kind not in allowed[kind] or target == "TIMESTAMPTZ":
            raise _refusal(f"'{inner.sql}' is a {inner.kind}, not castable to {target}", ALLOWED)
        # A day is one of the column's own zone.
        local = kind == "date" and inner.kind == "timestamp" and inner.type.tz is not None

        def build(rows: _Rows) -> Any:
            value = inner.build(rows)
            return (pc.local_timestamp(value) if local else value).cast(to)

        return _Term(kind, to, build, node.sql())

    def _literal(self, node: exp.Literal) -> _Term:
        raw = str(node.this)
        if node.is_string:
            scalar = pa.scalar(raw, pa.string())
            return _Term(
                "text", pa.string(), lambda rows: rows.literal(scalar), node.sql(), scalar, raw
            )
        value = int(raw) if WHOLE_NUMBER.fullmatch(raw) else float(raw)
        return _number_literal(value, node.sql())

    def _boolean(self, node: exp.Boolean) -> _Term:
        scalar = pa.scalar(bool(node.this))
        return _Term(
            "boolean", pa.bool_(), lambda rows: rows.literal(scalar), node.sql(), scalar=scalar
        )

    def _null(self, node: exp.Null) -> _Term:
        raise _refusal("NULL is compared with something", "write IS NULL or IS NOT NULL")


def _is_listed(node: exp.Expression) -> bool:
    simple = (exp.Between, exp.In, exp.Like, exp.ILike, exp.Is, exp.Neg, exp.Cast, exp.Literal)
    listed = (exp.And, exp.Or, exp.Not, exp.Extract, *COMPARISONS, *ARITHMETIC)
    functions = (*NUMBER_FUNCTIONS, *TEXT_FUNCTIONS, *PART_FUNCTIONS)
    return type(node) in (*simple, *listed, *functions)


def _describe(node: exp.Expression) -> str:
    if isinstance(node, exp.Subquery | exp.Select | exp.Exists | exp.All | exp.Any):
        return "a subquery"
    if isinstance(node, exp.Anonymous):
        return f"the function {str(node.this).upper()}"
    if isinstance(node, exp.Func):
        return f"the function {node.sql_name()}"
    return f"'{node.sql()}' ({node.key.upper()})"


def _spine(node: exp.Expression, kind: type[exp.Expression]) -> Iterator[exp.Expression]:
    parts = []
    while type(node) is kind:
        parts.append(node.expression)
        node = node.this
    parts.append(node)
    return reversed(parts)


def _balanced(combine: Callable[[Any, Any], Any], values: list[Any]) -> Any:
    """Combine in a tree, so that a long list does not make a deep expression."""
    while len(values) > 1:
        pairs = [combine(*values[n : n + 2]) for n in range(0, len(values) - 1, 2)]
        values = pairs + (values[-1:] if len(values) % 2 else [])
    return values[0]


def _kind_of(data_type: pa.DataType) -> str:
    if pt.is_boolean(data_type):
        return "boolean"
    if is_number(data_type):
        return "number"
    if is_text(data_type):
        return "text"
    if pt.is_timestamp(data_type):
        return "timestamp"
    if pt.is_date(data_type):
        return "date"
    return "duration" if pt.is_duration(data_type) else "other"


def _loaded_type(name: str, stored: pa.DataType) -> tuple[str, pa.DataType]:
    """Return the kind of a column and the type in which it is computed with."""
    plain = plain_type(stored)
    if pt.is_null(plain):
        # A column of nulls compares as a number and meets nothing but IS NULL.
        return "number", pa.float64()
    kind = _kind_of(plain)
    if kind == "other":
        raise _refusal(f"'{name}' is of type {plain}", "use another column")
    if pt.is_decimal(plain):
        return kind, pa.float64()
    if pt.is_float16(plain):
        return kind, pa.float32()
    if pt.is_string_view(plain):
        return kind, pa.string()
    return kind, plain


def _number_literal(value: float, sql: str) -> _Term:
    is_integer = isinstance(value, int) and -(2**63) <= value < 2**63
    scalar = pa.scalar(value, pa.int64()) if is_integer else pa.scalar(float(value), pa.float64())
    return _Term("number", scalar.type, lambda rows: rows.literal(scalar), sql, scalar)


def _as_floats(term: _Term, rows: _Rows) -> Any:
    value = term.build(rows)
    return value if term.type == pa.float64() else value.cast(pa.float64(), safe=False)


def _in_texts(value: _Term, options: list[str], sql: str) -> _Term:
    value_set = pa.array(options, value.type)

    def build(rows: _Rows) -> Any:
        texts = value.build(rows)
        found = pc.is_in(texts, value_set=value_set)
        # A null is in no list, nor not in it: false OR (true AND null) is null.
        unknown = pc.and_kleene(pc.is_null(texts), rows.literal(pa.scalar(None, pa.bool_())))
        return pc.or_kleene(found, unknown)

    prunable = None if value.column is None else pc.field(value.column).isin(value_set)
    return _Term("boolean", pa.bool_(), build, sql, prunable=prunable)


def _moment(text: str, to: pa.DataType | None, sql: str, kind: str) -> _Term:
    """Read a literal time, for comparison with type `to` (None: as it is written)."""
    zone = to.tz if to is not None and pt.is_timestamp(to) else None
    try:
        scalar = parse_moment(text, zone)
    except ValueError as error:
        raise _refusal(
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
    return _Term(
        _kind_of(scalar.type), scalar.type, lambda rows: rows.literal(scalar), sql, scalar, text
    )


def _zone_hint(error: ValueError) -> str:
    return " (the column has no zone)" if "zone" in str(error) else ""


def _compared(function: str, left: _Term, right: _Term, sql: str) -> _Term:
    left, right = _read_literal(left, right), _read_literal(right, left)
    moments = {"timestamp", "date"}
    alike = left.kind == right.kind or {left.kind, right.kind} == moments
    if not alike:
        found = f"'{sql}' compares a {left.kind} with a {right.kind}"
        raise _refusal(found, "compare values of one kind, or use CAST")
    if left.kind == "boolean" and function not in ("equal", "not_equal"):
        raise _refusal(f"'{sql}' orders true and false", "use = or <>")
    zones = {term.type.tz is None for term in (left, right) if term.kind == "timestamp"}
    if len(zones) > 1 or (left.kind != right.kind and False in zones):
        raise _refusal(f"'{sql}' compares times with and without a zone", "compare alike times")
    left, right = _aligned(left, right), _aligned(right, left)
    call = getattr(pc, function)
    return _Term(
        "boolean",
        pa.bool_(),
        lambda rows: call(left.build(rows), right.build(rows)),
        sql,
        prunable=_prunable(function, left, right),
    )


def _read_literal(term: _Term, other: _Term) -> _Term:
    """Read a literal as the other side needs it: times in its zone, integers in its type."""
    if term.text is not None and other.kind in ("timestamp", "date") and other.text is None:
        if term.kind == "timestamp" and other.kind == "date":
            return term
        return _moment(term.text, other.type, term.sql, "date" if term.kind == "date" else "time")
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


def _aligned(term: _Term, other: _Term) -> _Term:
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


def _prunable(function: str, left: _Term, right: _Term) -> pc.Expression | None:
    if left.column is None:
        left, right = right, left
        function = MIRRORED.get(function, "")
    # Not "not_equal": statistics leave NaN out, and NaN differs from everything.
    if left.column is None or right.scalar is None or function not in MIRRORED:
        return None
    if left.type != right.type:
        return None
    return getattr(pc, function)(pc.field(left.column), pc.scalar(right.scalar))
