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
from typing import Any

import pyarrow as pa
import pyarrow.compute as pc
import sqlglot
from sqlglot import exp
from sqlglot.errors import SqlglotError

from fastsmooth.casts import kind_of, plain_type
from fastsmooth.errors import InputError
from fastsmooth.near import advise
from fastsmooth.quoting import sql_name
from fastsmooth.terms import (
    BatchRows,
    ExpressionRows,
    Rows,
    Term,
    as_floats,
    balanced,
    compared,
    in_texts,
    loaded_type,
    moment_literal,
    number_literal,
    refusal,
)

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
# Arguments that the parser may set on a node besides `this` and `expression`. One that is set and
# not listed changes the meaning in a way that the translation would miss, so it is refused.
ARGUMENTS: dict[type[exp.Expression], tuple[str, ...]] = {
    exp.Between: ("low", "high"),
    exp.In: ("expressions",),
    exp.Like: ("negate",),
    exp.ILike: ("negate",),
    exp.Cast: ("to",),
    exp.Literal: ("is_string",),
    # They only choose between spellings; division is always in float64 here.
    exp.Div: ("typed", "safe"),
}


# The parser's own types for nodes differ from version to version.
_Node = Any


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
    term: Term

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
            return self.term.build(BatchRows(batch))
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
        raise refusal(found, "check the spelling and the parentheses") from error
    if len(statements) != 1 or statements[0] is None:
        number = sum(statement is not None for statement in statements)
        raise refusal(
            f"{number} conditions were given" if number else "nothing was given",
            "join conditions with AND" if number else "write a condition such as power_kw > 5",
        )
    translator = _Translator(schema)
    try:
        term = translator.translate(statements[0])
        if term.kind != "boolean":
            raise refusal(f"'{term.sql}' is a {term.kind}", "compare it with something")
        if not translator.columns:
            raise refusal(f"'{term.sql}' reads no column", "name a column")
        expression = term.build(ExpressionRows())
    except RecursionError as error:
        raise refusal("it is nested too deeply", "write it with fewer parentheses") from error
    prunable = pc.scalar(True) if term.prunable is None else term.prunable
    return Filter(text, tuple(translator.columns), expression, prunable, term)


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
        self._handlers: dict[type[exp.Expression], Callable[[_Node], Term]] = {
            exp.And: self._connected,
            exp.Or: self._connected,
            exp.Not: self._negated,
            exp.Between: self._between,
            exp.In: self._in_list,
            exp.Like: self._like,
            exp.ILike: self._like,
            exp.Is: self._is,
            exp.Neg: self._minus,
            exp.Cast: self._cast,
            exp.Extract: self._extract,
            exp.Literal: self._literal,
            exp.Boolean: self._boolean,
            exp.Null: self._null,
            **dict.fromkeys(COMPARISONS, self._comparison),
            **dict.fromkeys(ARITHMETIC, self._arithmetic),
            **dict.fromkeys(NUMBER_FUNCTIONS, self._number_function),
            **dict.fromkeys(TEXT_FUNCTIONS, self._text_function),
            **dict.fromkeys(PART_FUNCTIONS, self._part_function),
        }

    def translate(self, node: _Node) -> Term:
        if type(node) is exp.Paren:
            return self.translate(node.this)
        if type(node) is exp.Column:
            return self._column(node)
        # By exact type: a subclass of a listed node may mean something else.
        handler = self._handlers.get(type(node))
        if handler is None:
            raise refusal(f"{_describe(node)} is not allowed", ALLOWED)
        self._check_arguments(node)
        return handler(node)

    def _check_arguments(self, node: _Node) -> None:
        kind = type(node)
        for name, value in node.args.items():
            if kind is exp.In and name in ("query", "unnest", "field") and value:
                raise refusal("IN with a subquery is not allowed", "list the values themselves")
            known = name in ("this", "expression") or name in ARGUMENTS.get(kind, ())
            if value and not known:
                raise refusal(f"'{node.sql()}' uses '{name}', which is not allowed", ALLOWED)

    def _of_kind(self, node: _Node, kind: str) -> Term:
        term = self.translate(node)
        if term.kind != kind:
            found = f"'{term.sql}' is a {term.kind} where a {kind} is needed"
            raise refusal(found, f"cast it to a {kind} or use another column")
        return term

    def _column(self, node: _Node) -> Term:
        parts = [part.name for part in node.parts]
        name = ".".join(parts)
        if name not in self._schema.names:
            if len(parts) > 1:
                raise refusal(
                    f"'{name}' names a table",
                    f"write the column alone, as in {sql_name(parts[-1])} > 5",
                )
            known = [sql_name(one) for one in self._schema.names]
            raise refusal(f"'{name}' is no column of DATA", advise(name, known))
        if len(self._schema.get_all_field_indices(name)) > 1:
            raise refusal(f"DATA has several columns called '{name}'", "rename all but one")
        stored = self._schema.field(name).type
        kind, loaded = loaded_type(name, stored)
        self.columns[name] = None
        cast_to = None if loaded == plain_type(stored) else loaded

        def build(rows: Rows) -> Any:
            value = rows.column(name)
            is_expression = isinstance(value, pc.Expression)
            if is_expression and stored != loaded:
                return value.cast(loaded)
            return value if is_expression or cast_to is None else value.cast(cast_to)

        bare = name if stored == loaded else None
        prunable = pc.field(name) if kind == "boolean" and bare else None
        return Term(kind, loaded, build, node.sql(), column=bare, prunable=prunable)

    def _connected(self, node: _Node) -> Term:
        kind = type(node)
        # A long chain leans left, one level for each part: walked, not recursed into.
        terms = [self._of_kind(part, "boolean") for part in _spine(node, kind)]
        combine = pc.and_kleene if kind is exp.And else pc.or_kleene

        def build(rows: Rows) -> Any:
            return balanced(combine, [term.build(rows) for term in terms])

        known = [term.prunable for term in terms if term.prunable is not None]
        prunable = None
        if kind is exp.And and known:
            prunable = balanced(lambda left, right: left & right, known)
        elif kind is exp.Or and len(known) == len(terms):
            prunable = balanced(lambda left, right: left | right, known)
        return Term("boolean", pa.bool_(), build, node.sql(), prunable=prunable)

    def _negated(self, node: _Node) -> Term:
        inner = self._of_kind(node.this, "boolean")
        prunable = None
        is_null = node.this.unnest()
        if isinstance(is_null, exp.Is) and isinstance(is_null.expression, exp.Null):
            column = self.translate(is_null.this).column
            prunable = pc.field(column).is_valid() if column is not None else None
        return Term(
            "boolean",
            pa.bool_(),
            lambda rows: pc.invert(inner.build(rows)),
            node.sql(),
            prunable=prunable,
        )

    def _between(self, node: _Node) -> Term:
        value = self.translate(node.this)
        low, high = self.translate(node.args["low"]), self.translate(node.args["high"])
        above = compared("greater_equal", value, low, node.sql())
        below = compared("less_equal", value, high, node.sql())
        known = [term.prunable for term in (above, below) if term.prunable is not None]
        return Term(
            "boolean",
            pa.bool_(),
            lambda rows: pc.and_kleene(above.build(rows), below.build(rows)),
            node.sql(),
            prunable=reduce(lambda left, right: left & right, known) if known else None,
        )

    def _in_list(self, node: _Node) -> Term:
        value = self.translate(node.this)
        options = [self.translate(option) for option in node.expressions]
        if not options:
            raise refusal(f"'{node.sql()}' lists nothing", "list at least one value")
        if any(option.scalar is None and option.text is None for option in options):
            raise refusal(f"'{node.sql()}' lists more than literals", "list values only")
        if value.kind == "text" and all(option.kind == "text" for option in options):
            return in_texts(value, [str(option.text) for option in options], node.sql())
        terms = [compared("equal", value, option, node.sql()) for option in options]
        known = [term.prunable for term in terms if term.prunable is not None]
        prunable = None
        if len(known) == len(terms):
            prunable = balanced(lambda left, right: left | right, known)
        return Term(
            "boolean",
            pa.bool_(),
            lambda rows: balanced(pc.or_kleene, [term.build(rows) for term in terms]),
            node.sql(),
            prunable=prunable,
        )

    def _like(self, node: _Node) -> Term:
        value = self._of_kind(node.this, "text")
        pattern = self.translate(node.expression)
        if pattern.text is None or pattern.kind != "text":
            raise refusal(f"'{node.sql()}' has no literal pattern", "write LIKE 'Avila%'")
        matched, ignore_case = pattern.text, isinstance(node, exp.ILike)
        negate = bool(node.args.get("negate"))

        def build(rows: Rows) -> Any:
            found = pc.match_like(value.build(rows), matched, ignore_case=ignore_case)
            return pc.invert(found) if negate else found

        return Term("boolean", pa.bool_(), build, node.sql())

    def _is(self, node: _Node) -> Term:
        value = self.translate(node.this)
        if isinstance(node.expression, exp.Null):
            column = value.column
            return Term(
                "boolean",
                pa.bool_(),
                lambda rows: pc.is_null(value.build(rows)),
                node.sql(),
                prunable=pc.field(column).is_null() if column is not None else None,
            )
        if not isinstance(node.expression, exp.Boolean) or value.kind != "boolean":
            raise refusal(f"'{node.sql()}' is not allowed", "write IS NULL or IS NOT NULL")
        wanted = bool(node.expression.this)

        def build(rows: Rows) -> Any:
            truth = value.build(rows)
            # False AND null is false, so that a null is neither true nor false.
            return pc.and_kleene(pc.is_valid(truth), truth if wanted else pc.invert(truth))

        return Term("boolean", pa.bool_(), build, node.sql())

    def _comparison(self, node: _Node) -> Term:
        left, right = self.translate(node.this), self.translate(node.expression)
        return compared(COMPARISONS[type(node)], left, right, node.sql())

    def _arithmetic(self, node: _Node) -> Term:
        left = self._of_kind(node.this, "number")
        right = self._of_kind(node.expression, "number")
        function = getattr(pc, ARITHMETIC[type(node)])

        def build(rows: Rows) -> Any:
            return function(as_floats(left, rows), as_floats(right, rows))

        return Term("number", pa.float64(), build, node.sql())

    def _minus(self, node: _Node) -> Term:
        inner = self._of_kind(node.this, "number")
        if inner.scalar is not None:
            return number_literal(-inner.scalar.as_py(), node.sql())
        return Term(
            "number", pa.float64(), lambda rows: pc.negate(as_floats(inner, rows)), node.sql()
        )

    def _number_function(self, node: _Node) -> Term:
        inner = self._of_kind(node.this, "number")
        function = NUMBER_FUNCTIONS[type(node)]
        return Term(
            "number", pa.float64(), lambda rows: function(as_floats(inner, rows)), node.sql()
        )

    def _text_function(self, node: _Node) -> Term:
        inner = self._of_kind(node.this, "text")
        function = TEXT_FUNCTIONS[type(node)]
        return Term("text", inner.type, lambda rows: function(inner.build(rows)), node.sql())

    def _part_function(self, node: _Node) -> Term:
        return self._part(PART_FUNCTIONS[type(node)], node.this, node.sql())

    def _extract(self, node: _Node) -> Term:
        return self._part(str(node.this.name).upper(), node.expression, node.sql())

    def _part(self, part: str, of: _Node, sql: str) -> Term:
        moment = self.translate(of)
        parts = DATE_PARTS | TIME_PARTS
        if part not in parts:
            raise refusal(f"EXTRACT({part} ...) is not allowed", f"use {', '.join(parts)}")
        if moment.kind != "timestamp" and not (moment.kind == "date" and part in DATE_PARTS):
            found = f"'{moment.sql}' is a {moment.kind}, which has no {part.lower()}"
            raise refusal(found, "use a column of times")
        return Term("number", pa.int64(), lambda rows: parts[part](moment.build(rows)), sql)

    def _cast(self, node: _Node) -> Term:
        target = str(getattr(node.to.this, "name", node.to.this))
        if target not in CASTS or (node.to.expressions and target != "DECIMAL"):
            raise refusal(f"CAST to {node.to.sql()} is not allowed", f"use {', '.join(CASTS)}")
        to = CASTS[target]
        kind = kind_of(to)
        inner = self.translate(node.this)
        if inner.text is not None and kind in ("timestamp", "date"):
            return moment_literal(inner.text, to if kind == "date" else None, node.sql(), kind)
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
            raise refusal(f"'{inner.sql}' is a {inner.kind}, not castable to {target}", ALLOWED)
        # A day is one of the column's own zone.
        local = kind == "date" and inner.kind == "timestamp" and inner.type.tz is not None

        def build(rows: Rows) -> Any:
            value = inner.build(rows)
            return (pc.local_timestamp(value) if local else value).cast(to)

        return Term(kind, to, build, node.sql())

    def _literal(self, node: _Node) -> Term:
        raw = str(node.this)
        if node.is_string:
            scalar = pa.scalar(raw, pa.string())
            return Term(
                "text", pa.string(), lambda rows: rows.literal(scalar), node.sql(), scalar, raw
            )
        value = int(raw) if WHOLE_NUMBER.fullmatch(raw) else float(raw)
        return number_literal(value, node.sql())

    def _boolean(self, node: _Node) -> Term:
        scalar = pa.scalar(bool(node.this))
        return Term(
            "boolean", pa.bool_(), lambda rows: rows.literal(scalar), node.sql(), scalar=scalar
        )

    def _null(self, node: _Node) -> Term:
        raise refusal("NULL is compared with something", "write IS NULL or IS NOT NULL")


def _describe(node: _Node) -> str:
    if isinstance(node, exp.Subquery | exp.Select | exp.Exists | exp.All | exp.Any):
        return "a subquery"
    if isinstance(node, exp.Anonymous):
        return f"the function {str(node.this).upper()}"
    if isinstance(node, exp.Func):
        return f"the function {node.sql_name()}"
    return f"'{node.sql()}' ({node.key.upper()})"


def _spine(node: _Node, kind: Any) -> Iterator[_Node]:
    parts = []
    while type(node) is kind:
        parts.append(node.expression)
        node = node.this
    parts.append(node)
    return reversed(parts)
