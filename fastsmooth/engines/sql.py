"""The bin table by SQL: one GROUP BY that any database runs on its own rows.

The statement counts every row: the used ones by fold (or block) and bin with their sums, the others
by reason. `read_result` makes the table of what comes back. With a block in the plan the statement
groups by the block itself, and blocks are dealt to folds when the result is read: the same folds
as everywhere. Without one the fold is a run of the table's own row numbers, where the dialect has
them, or an expression of the caller's.
"""

from __future__ import annotations

from typing import Any

import sqlglot
from sqlglot import exp
from sqlglot.errors import ErrorLevel, SqlglotError

from fastsmooth.bintable import sum_names
from fastsmooth.blocks import Block
from fastsmooth.engines.condition import translated
from fastsmooth.engines.parts import block_of
from fastsmooth.engines.result import DEALT_FROM, REASONS, read_result, result_columns
from fastsmooth.errors import InputError
from fastsmooth.near import advise
from fastsmooth.plan import Plan
from fastsmooth.quoting import sql_name

__all__ = ["read_result", "statement"]

# Expressions that number the rows of a stored table.
_ROW_NUMBERS = {
    "duckdb": "rowid",
    "sqlite": "rowid",
    "spark": "monotonically_increasing_id()",
    "databricks": "monotonically_increasing_id()",
}
_SPARK_EPOCH = "TIMESTAMP_NTZ '1970-01-01 00:00:00'"
# Microseconds since 1970 of an instant or clock, and of a date.
_MICROSECONDS = {
    ("duckdb", "zoned"): "epoch_us({})",
    ("duckdb", "clock"): "epoch_us({})",
    ("duckdb", "date"): "epoch_us(CAST({} AS TIMESTAMP))",
    ("spark", "zoned"): "unix_micros({})",
    ("spark", "clock"): f"timestampdiff(MICROSECOND, {_SPARK_EPOCH}, {{}})",
    ("spark", "date"): "CAST(unix_date({}) AS BIGINT) * 86400000000",
}
_MICROSECONDS_PER_TICK = {"s": 1_000_000, "ms": 1_000, "us": 1, "day": 86_400_000_000}
# Steps of the template that are used several times by the next one.
_KEPT_STEPS = ("bin_table_sorted", "bin_table_terms")
# Names that the template leaves open; what is the caller's own is parsed in its own dialect.
_OPEN = "open_"
_TEMPLATE = """
WITH {pilot},
bin_table_read AS (
    SELECT open_x AS "x", open_y AS "y", {weight} AS "weight", {count} AS "count",
        open_group AS "{group}", open_early AS "early"
    FROM open_table
),
bin_table_placed AS (
    SELECT *, {place} AS "place" FROM bin_table_read
),
bin_table_judged AS (
    SELECT *, ("place" - {origin}) * {bins_per_unit} AS "t" FROM bin_table_placed
),
bin_table_sorted AS (
    SELECT *, CASE {reasons} ELSE 0 END AS "reason" FROM bin_table_judged
),
bin_table_binned AS (
    SELECT *, CASE WHEN "reason" = 0 THEN {bin} ELSE 0 END AS "bin" FROM bin_table_sorted
),
bin_table_terms AS (
    SELECT "reason", "bin",
        CASE WHEN {grouped} THEN "{group}" END AS "{group}",
        CASE WHEN "reason" = 0 THEN "place" END AS "place",
        CASE WHEN "reason" = 0 THEN "count" END AS "c",
        CASE WHEN "reason" = 0 THEN "weight" END AS "p",
        CASE WHEN "reason" = 0 THEN "t" - "bin" - 0.5E0 END AS "v",
        CASE WHEN "reason" = 0 THEN "y" - "level" END AS "e"
    FROM bin_table_binned JOIN bin_table_pilot ON bin_table_pilot."node" = {node}
)
SELECT "reason", "{group}", "bin", COUNT(*) AS "rows", MIN("place") AS "low",
    MAX("place") AS "high", {sums}
FROM bin_table_terms
GROUP BY "reason", "{group}", "bin"
"""


def statement(plan: Plan, table: str, dialect: str, *, fold: str | None = None) -> str:
    """Write the GROUP BY that makes the bin table of a plan in a database.

    Parameters
    ----------
    plan : Plan
        From `fastsmooth.plan_for`, made of a part of the rows and their range.
    table : str
        What stands after FROM: a table, a view, or a table function, in the dialect.
    dialect : str
        Name of the dialect as sqlglot knows it: ``duckdb``, ``sqlite``, ``spark``, ``postgres``...
    fold : str or None
        For a plan without a block: an SQL expression, in the dialect, that gives the fold of a row
        as an integer from 0 to ``plan.folds - 1``. None takes runs of the table's own row numbers
        (stored tables of duckdb and SQLite; Spark).

    Returns
    -------
    str
        One SELECT. Hand what it returns to `read_result`.

    Raises
    ------
    InputError
        The dialect is unknown or cannot say what the plan asks for.

    Examples
    --------
    >>> plan = Plan.simple(0.0, 30.0, bins=1024, folds=8)
    >>> print(statement(plan, "readings", "duckdb")[-38:])
    GROUP BY
      "reason",
      "fold",
      "bin"
    """
    if dialect not in sqlglot.Dialect.classes or not dialect:
        known = sorted(name for name in sqlglot.Dialect.classes if name)
        raise InputError(
            "dialect=", "be a dialect that sqlglot writes", f"'{dialect}' is none",
            advise(dialect, known),
        )  # fmt: skip
    writer = _Writer(plan, dialect)
    try:
        nodes = writer.nodes(table, fold)
        tree = sqlglot.parse_one(_TEMPLATE.format(**writer.texts()), read="duckdb")

        def fill(node: Any) -> Any:
            name = node.name if isinstance(node, exp.Column | exp.Table) else ""
            return nodes[name.removeprefix(_OPEN)] if name.startswith(_OPEN) else node

        whole = tree.transform(fill)
        for step in whole.find_all(exp.CTE) if dialect == "sqlite" else ():
            # It would write the steps into each other and compute them anew for every use.
            step.set("materialized", step.alias in _KEPT_STEPS)
        return whole.sql(dialect, pretty=True, unsupported_level=ErrorLevel.RAISE)
    except SqlglotError as error:
        raise InputError(
            "the statement", f"be one that {dialect} can say",
            str(error).splitlines()[0].rstrip("."), "check table, fold and the plan's condition",
        ) from error  # fmt: skip


class _Writer:
    """Writes the parts of the statement for one plan and dialect."""

    def __init__(self, plan: Plan, dialect: str) -> None:
        self.plan = plan
        self.dialect = dialect

    def texts(self) -> dict[str, str]:
        """The parts that every dialect understands, once translated."""
        plan, columns = self.plan, self.plan.columns
        number = self.number
        pilot = ", ".join(f"({n}, {number(level)})" for n, level in enumerate(plan.pilot))
        # SQLite names columns at the step only, other dialects take names at the values only.
        pilot = (
            f'bin_table_pilot("node", "level") AS (VALUES {pilot})'
            if self.dialect == "sqlite"
            else f'bin_table_pilot AS (SELECT * FROM (VALUES {pilot}) AS steps("node", "level"))'
        )
        log = plan.scale == "log"
        nodes = len(plan.pilot)
        return {
            "pilot": pilot,
            "weight": "1.0E0" if columns.weight is None else "open_weight",
            "count": "1.0E0" if columns.count is None else "open_count",
            "group": result_columns(plan)[1],
            "grouped": '"reason" = 0'
            if plan.block is None
            else f'"reason" = 0 OR "reason" > {DEALT_FROM}',
            "place": 'CASE WHEN "x" > 0 THEN LN("x") END' if log else '"x"',
            "origin": number(plan.origin),
            "bins_per_unit": number(1.0 / plan.width),
            "reasons": " ".join(f"WHEN {test} THEN {code}" for code, test in self.reasons()),
            "bin": self.whole('"t"'),
            "node": self.whole(f'"bin" * {number(float(nodes))} / {number(float(plan.bins))}'),
            "sums": ", ".join(f'SUM({term}) AS "{name}"' for name, term in self.sums().items()),
        }

    def nodes(self, table: str, fold: str | None) -> dict[str, Any]:
        """The parts that read the caller's own columns."""
        columns = self.plan.columns
        nodes = {
            "x": self.x_seconds(),
            "y": self.double(columns.y),
            "early": self.early(),
            "group": self.group(fold),
            "table": sqlglot.parse_one(table, read=self.dialect, into=exp.Table),
        }
        for role in ("weight", "count"):
            column = getattr(columns, role)
            if column is not None:
                nodes[role] = self.double(column)
        return nodes

    def own(self, text: str) -> Any:
        """Parse an expression of the dialect itself."""
        return sqlglot.parse_one(text, read=self.dialect)

    def column(self, name: str) -> Any:
        """Refer to a column of the table; quoted only where it must be."""
        return exp.column(exp.to_identifier(name, quoted=sql_name(name) != name))

    def double(self, name: str) -> Any:
        """A column as a double."""
        return exp.cast(self.column(name), "DOUBLE")

    def number(self, value: float) -> str:
        """Write a double so that the dialect reads the same one."""
        if self.dialect == "sqlite":
            # It may miss the last bit of many digits; whole numbers and powers of two are exact.
            above, below = value.as_integer_ratio()
            shift = max(0, above.bit_length() - 53)
            factors = [f"{above >> shift}.0E0"]
            factors += [f"* {part}.0E0" for part in _powers_of_two(shift)]
            factors += [f"/ {part}.0E0" for part in _powers_of_two(below.bit_length() - 1)]
            return f"({' '.join(factors)})"
        text = repr(value)
        text = text if "e" in text else f"{text}E0"
        return f"({text})" if value < 0.0 else text

    def whole(self, text: str) -> str:
        """The whole part of a double that is not negative, as an integer."""
        # SQLite cuts by itself, and has no floor unless it is built in.
        cut = text if self.dialect == "sqlite" else f"FLOOR({text})"
        return f"CAST({cut} AS BIGINT)"

    def x_seconds(self) -> Any:
        """x in the floats of the plan's axis."""
        axis, column = self.plan.axis, self.plan.columns.x
        if axis.kind == "number":
            return self.double(column)
        kind = "date" if axis.kind == "date" else "clock" if axis.zone is None else "zoned"
        dialect = "spark" if self.dialect == "databricks" else self.dialect
        template = _MICROSECONDS.get((dialect, kind))
        if template is None or axis.unit not in _MICROSECONDS_PER_TICK or axis.kind == "duration":
            raise InputError(
                "--x", f"be a number where {self.dialect} counts",
                f"'{column}' holds {axis.kind}s of {axis.unit or 'no unit'}",
                "make a view with seconds as a number, and the plan of that",
            )  # fmt: skip
        origin = axis.origin * _MICROSECONDS_PER_TICK[axis.unit]
        name = self.column(column).sql(self.dialect)
        since = self.own(f"{template.format(name)} - {origin}")
        return exp.Div(this=exp.cast(exp.paren(since), "DOUBLE"), expression=exp.Literal.number(
            "1.0E6"), typed=True)  # fmt: skip

    def group(self, fold: str | None) -> Any:
        """What rows are grouped by besides the bin."""
        block = block_of(self.plan)
        if block is not None:
            if fold is not None:
                raise InputError(
                    "fold=", "be left out where the plan has a block",
                    f"the plan deals {self.plan.block} to folds", "leave it out",
                )  # fmt: skip
            return self.block(block)
        if fold is not None:
            return self.own(fold)
        rows = _ROW_NUMBERS.get(self.dialect)
        if rows is None:
            raise InputError(
                "fold=", f"say what makes a fold, because {self.dialect} does not number rows",
                "it is missing", "make the plan with a block, or give an expression such as "
                f"batch_number % {self.plan.folds}",
            )  # fmt: skip
        run = self.whole(f"{rows} / {self.plan.rows_per_run}.0E0")
        return self.own(f"{run} % {self.plan.folds}")

    def block(self, block: Block) -> Any:
        """The block's column; a time is cut to days, or hours, on the block's own clock."""
        column = self.column(block.column)
        if block.unit is None:
            return column
        text = column.sql(self.dialect)
        if self.dialect == "sqlite":
            if block.zone is not None:
                raise InputError(
                    "--block", "be on a clock of its own where sqlite counts",
                    f"'{self.plan.block}' names a zone", "make a column of local times",
                )  # fmt: skip
            form = "%Y-%m-%d %H:00:00" if block.unit == "hour" else "%Y-%m-%d"
            return self.own(
                f"CASE WHEN TYPEOF({text}) = 'text' THEN STRFTIME('{form}', {text}) END"
            )
        if self.dialect in ("spark", "databricks"):
            return self.spark_block(block, text)
        clock: Any = column
        if block.zone is not None:
            # Hours are absolute; days, weeks and months begin at local midnight.
            zone = "UTC" if block.unit == "hour" else block.zone
            clock = exp.AtTimeZone(this=column, zone=exp.Literal.string(zone))
        if block.unit == "hour":
            return exp.TimestampTrunc(this=clock, unit=exp.var("HOUR"))
        # Weeks and months are made of days.
        return exp.cast(clock, "DATE")

    def spark_block(self, block: Block, text: str) -> Any:
        """As `block`, on clocks without a zone: truncating takes the session's where there is one.

        The way from an instant to the session's clock and on to another skips or doubles hours.
        """
        clock = text
        if block.zone is not None:
            clock = f"TIMESTAMPADD(MICROSECOND, UNIX_MICROS({text}), {_SPARK_EPOCH})"
        if block.unit != "hour":
            if block.zone is not None:
                clock = f"CONVERT_TIMEZONE('UTC', '{block.zone}', {clock})"
            return self.own(f"CAST({clock} AS DATE)")
        since = f"TIMESTAMPDIFF(MICROSECOND, {_SPARK_EPOCH}, {clock})"
        hours = f"CAST(FLOOR({since} / 3.6E9) AS INT)"
        return self.own(f"TIMESTAMPADD(HOUR, {hours}, {_SPARK_EPOCH})")

    def early(self) -> Any:
        """Reasons that only the columns themselves tell: the filter, and text among numbers."""
        cases: list[tuple[Any, str]] = []
        if self.plan.where is not None:
            numbers = self.plan.columns
            kept = translated(self.plan.where, self.dialect, numbers, self.plan.axis.kind)
            kept = exp.Coalesce(this=exp.paren(kept), expressions=[exp.false()])
            cases.append((exp.Not(this=kept), "filtered"))
        if self.dialect == "sqlite":
            # Its columns hold anything, and text cast to a number is 0.
            for role in ("x", "y", "weight", "count"):
                column = getattr(self.plan.columns, role)
                if column is not None:
                    text = self.column(column).sql("sqlite")
                    other = self.own(f"NOT TYPEOF({text}) IN ('integer', 'real', 'null')")
                    cases.append((other, f"{role} no number"))
        if not cases:
            return exp.Literal.number(0)
        chosen = exp.Case()
        for test, reason in cases:
            chosen = chosen.when(test, exp.Literal.number(REASONS.index(reason) + 1))
        return chosen.else_(exp.Literal.number(0))

    def reasons(self) -> list[tuple[str, str]]:
        """Code and test of every reason against a row, in the order in which they are tried.

        NaN is told by comparisons alone: neither it nor its negative is below 1, whether the
        engine takes it as unordered or as the largest number. An infinity is its own half.
        """
        columns, log = self.plan.columns, self.plan.scale == "log"
        roles = ["x", "y"]
        roles += [role for role in ("weight", "count") if getattr(columns, role) is not None]
        tests = [(f"{role} null", f'"{role}" IS NULL') for role in roles]
        if self.plan.block is not None:
            tests.append(("block null", '"block" IS NULL'))
        if log:
            tests.append(("x not positive", '"x" <= 0'))
        for role in roles:
            tests.append((f"{role} NaN", f'NOT ("{role}" < 1 OR -"{role}" < 1)'))
            infinite = f'"{role}" = 0.5E0 * "{role}"'
            if role in ("x", "y"):
                tests.append((f"{role} infinite", f'"{role}" <> 0 AND {infinite}'))
            else:
                tests.append((f"{role} zero", f'"{role}" = 0'))
                tests.append((f"{role} negative or infinite", f'"{role}" < 0 OR {infinite}'))
        tests.append(("x below range", '"t" < 0'))
        tests.append(("x above range", f'"t" >= {self.plan.bins}'))
        coded = [(str(REASONS.index(reason) + 1), test) for reason, test in tests]
        return [('"early"', '"early" <> 0'), *coded]

    def sums(self) -> dict[str, str]:
        """The terms of the sums by name."""
        plain = {"": "1.0E0", "v": '"v"', "v2": '"v" * "v"', "e": '"e"', "ve": '"v" * "e"',
                 "v2e": '"v" * "v" * "e"', "e2": '"e" * "e"'}  # fmt: skip
        columns = self.plan.columns
        factor = '"c" * "p"' if columns.weight is not None else '"c"'
        alone = columns.weight is None and columns.count is None
        terms = {
            f"w{name}": f"{factor} * {term}" if name and not alone else term if name else factor
            for name, term in plain.items()
        }
        terms |= {
            f"w2{name}": f'"c" * "p" * "p" * {term}' if name else '"c" * "p" * "p"'
            for name, term in plain.items()
        }
        terms["count"] = '"c"'
        return {name: terms[name] for name in sum_names(self.plan)}


def _powers_of_two(power: int) -> list[int]:
    """Powers of two that multiply to 2^power, none beyond what every engine holds exactly."""
    return [1 << min(52, power - start) for start in range(0, power, 52)]
