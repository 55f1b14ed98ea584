"""What is checked and fixed when data are opened: columns, kinds, the axis, the row filter."""

from __future__ import annotations

from collections.abc import Sequence
from typing import TYPE_CHECKING

import pyarrow.types as pt

from fastsmooth.axis import SECONDS_PER_DAY, TICKS_PER_SECOND, Axis
from fastsmooth.casts import Role, column_kind, finest_unit, plain_type, statistic_ticks, to_ticks
from fastsmooth.errors import InputError
from fastsmooth.near import advise
from fastsmooth.parquet import ParquetReader
from fastsmooth.readers import Reader, count_fields

if TYPE_CHECKING:
    import pyarrow as pa

    from fastsmooth.where import Filter

PEEK_ROWS = 65_536


def check_present(
    reader: Reader,
    roles: Sequence[Role],
    extra: Sequence[str],
    block: str | None,
    units: Sequence[str] = (),
) -> None:
    """Refuse a column that a file lacks, or has several times.

    Parameters
    ----------
    reader : Reader
        The data.
    roles : sequence of Role
        Columns and their parts.
    extra : sequence of str
        Further columns.
    block : str or None
        The one of them that holds blocks.
    units : sequence of str
        Columns that tell units apart.

    Raises
    ------
    InputError
        Names near ones, or the file that lacks the column.
    """
    wanted = [(role.argument, role.column) for role in roles] + [
        ("--block" if name == block else "DATA", name) for name in extra
    ]
    wanted += [("--by", name) for name in units]
    known = list(dict.fromkeys(name for schema in reader.schemas for name in schema.names))
    for argument, column in wanted:
        requirement = "name a column of DATA" if argument != "DATA" else "hold each named column"
        if column not in known:
            raise InputError(argument, requirement, f"'{column}' is none", advise(column, known))
        for place, schema in zip(reader.places, reader.schemas, strict=True):
            found = count_fields(schema, column)
            if found == 0:
                every = requirement.replace("DATA", "every file")
                every += " in every file" if argument == "DATA" else ""
                raise _missing(argument, every, column, place)
            if found > 1:
                raise InputError(
                    argument,
                    requirement,
                    f"'{place}' has {found} columns called '{column}'",
                    "rename all but one",
                )


def _missing(argument: str, requirement: str, column: str, place: str) -> InputError:
    return InputError(
        argument, requirement, f"'{column}' is missing from '{place}'",
        "leave the file out or write the column to it",
    )  # fmt: skip


def check_kinds(reader: Reader, roles: Sequence[Role]) -> list[str]:
    """Tell the kind of x in each file, and refuse types that a role cannot use.

    Parameters
    ----------
    reader : Reader
        The data.
    roles : sequence of Role
        Columns and their parts, x first.

    Returns
    -------
    list of str
        ``number``, ``timestamp``, ``date``, ``duration`` or ``empty`` for each file.

    Raises
    ------
    InputError
        A type that cannot be used, kinds that differ, or nulls only.
    """
    kinds = [
        [
            column_kind(role, schema.field(role.column).type, f"'{place}'")
            for place, schema in zip(reader.places, reader.schemas, strict=True)
        ]
        for role in roles
    ]
    for role, kinds_of_role in zip(roles, kinds, strict=True):
        if all(kind == "empty" for kind in kinds_of_role):
            raise _all_null(role)
    first = next(place for place, kind in enumerate(kinds[0]) if kind != "empty")
    for place, kind in enumerate(kinds[0]):
        if kind not in ("empty", kinds[0][first]):
            raise InputError(
                roles[0].argument,
                "name a column of one kind in every file",
                f"'{roles[0].column}' holds {kinds[0][first]}s in '{reader.places[first]}' and "
                f"{kind}s in '{reader.places[place]}'",
                "write the files alike",
            )
    return kinds[0]


def _all_null(role: Role) -> InputError:
    return InputError(
        role.argument,
        "name a column with values",
        f"'{role.column}' holds nulls only",
        "name another column",
    )


def check_some_value(reader: Reader, roles: Sequence[Role]) -> None:
    """Refuse a column of which the statistics say that every value is null.

    Parameters
    ----------
    reader : Reader
        The data.
    roles : sequence of Role
        Columns and their parts.

    Raises
    ------
    InputError
        A column with nulls only.
    """
    for role in roles:
        total = 0
        for task in reader.tasks:
            extent = reader.extent(task.index, role.column)
            if extent is None or extent.nulls is None or extent.nulls != task.rows:
                break
            total += extent.nulls
        else:
            if total:
                raise _all_null(role)


def parse_filters(reader: Reader, where: str | None) -> list[Filter]:
    """Translate the row filter for the schema of each file.

    Parameters
    ----------
    reader : Reader
        The data.
    where : str or None
        The condition.

    Returns
    -------
    list of Filter
        One for each file; empty if there is no condition.
    """
    if where is None:
        return []
    from fastsmooth.where import parse_where

    parsed: dict[pa.Schema, Filter] = {}
    filters: list[Filter] = []
    for place, schema in zip(reader.places, reader.schemas, strict=True):
        for name in filters[0].columns if filters else ():
            if name not in schema.names:
                raise _missing("--where", "name columns of every file", name, place)
        # Metadata does not matter here and would only multiply the schemas.
        bare = schema.remove_metadata()
        if bare not in parsed:
            parsed[bare] = parse_where(where, bare)
        filters.append(parsed[bare])
    return filters


def find_pruned(reader: Reader, filters: Sequence[Filter]) -> frozenset[int]:
    """Find the tasks in which no row can meet the filter, by their statistics.

    Parameters
    ----------
    reader : Reader
        The data.
    filters : sequence of Filter
        One for each file, or none.

    Returns
    -------
    frozenset of int
        Indices of tasks.
    """
    if not filters or not isinstance(reader, ParquetReader):
        return frozenset()
    return frozenset(
        index for place, one in enumerate(filters) for index in reader.prune(place, one.prunable)
    )


def unit_of(reader: Reader, column: str) -> str:
    """Read a column's unit from its metadata in the first file.

    Parameters
    ----------
    reader : Reader
        The data.
    column : str
        Name of a column.

    Returns
    -------
    str
        What the field's metadata say under ``unit``; empty if nothing.
    """
    metadata = reader.schemas[0].field(column).metadata or {}
    return bytes(metadata.get(b"unit", b"")).decode("utf-8", "replace")


def axis_float(value: float, unit: str, axis: Axis) -> float:
    """Convert a statistic of x into an axis float.

    Parameters
    ----------
    value : int or float
        The statistic.
    unit : str
        Its unit if it is a count of time.
    axis : Axis
        The axis.

    Returns
    -------
    float
        Axis value.
    """
    if axis.kind == "number":
        return float(value)
    ticks = statistic_ticks(int(value), unit, axis) - axis.origin
    if axis.unit == "day":
        return float(ticks * SECONDS_PER_DAY)
    return ticks / TICKS_PER_SECOND[axis.unit]


def make_axis(reader: Reader, role: Role, kinds: Sequence[str]) -> Axis:
    """Fix what the floats of x mean.

    The origin of times and dates is the start of the day (UTC) at or before the smallest
    statistic, or else the first value.

    Parameters
    ----------
    reader : Reader
        The data.
    role : Role
        The column of x.
    kinds : sequence of str
        Its kind in each file.

    Returns
    -------
    Axis
        The same for every file.

    Raises
    ------
    InputError
        Times with a zone in some files only.
    """
    kind = next(kind for kind in kinds if kind != "empty")
    if kind == "number":
        return Axis("number", "double", "", None, 0)
    types = [
        plain_type(schema.field(role.column).type)
        for schema, kind_of_file in zip(reader.schemas, kinds, strict=True)
        if kind_of_file != "empty"
    ]
    if kind == "duration":
        unit = finest_unit(types)
        return Axis(kind, f"duration[{unit}]", unit, None, 0)
    if kind == "date":
        axis = Axis(kind, "date32[day]", "day", None, 0)
        return _with_origin(axis, reader, role)
    zones = list(dict.fromkeys(one.tz for one in types))
    if None in zones and len(zones) > 1:
        named = next(zone for zone in zones if zone is not None)
        raise InputError(
            role.argument,
            "name a column with a zone in every file or in none",
            f"'{role.column}' has zone {named} in some and no zone in others",
            "write the files alike",
        )
    unit = finest_unit(types)
    spelled = f"timestamp[{unit}]" if zones[0] is None else f"timestamp[{unit}, tz={zones[0]}]"
    return _with_origin(Axis(kind, spelled, unit, zones[0], 0), reader, role)


def _with_origin(axis: Axis, reader: Reader, role: Role) -> Axis:
    """Put the origin at the start of the day (UTC) of the smallest statistic or first value."""
    extents = [reader.extent(task.index, role.column) for task in reader.tasks]
    lows = [
        statistic_ticks(int(extent.low), extent.unit, axis)
        for extent in extents
        if extent is not None and extent.low is not None
    ]
    first = min(lows) if lows else _first_ticks(axis, reader, role)
    day = 1 if axis.unit == "day" else SECONDS_PER_DAY * TICKS_PER_SECOND[axis.unit]
    # The first day that 64-bit counts reach is not whole.
    origin = max(first // day * day, -(2**63))
    return Axis(axis.kind, axis.arrow_type, axis.unit, axis.zone, origin)


def _first_ticks(axis: Axis, reader: Reader, role: Role) -> int:
    for task in reader.tasks:
        for batch in reader.batches(task.index, (role.column,), PEEK_ROWS):
            if pt.is_null(plain_type(batch.column(0).type)):
                break
            ticks = to_ticks(role, batch.column(0).drop_null(), axis)
            if len(ticks):
                return int(ticks[0].as_py())
    return 0
