"""The kinds of columns that tell the units of a store apart."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING

from fastsmooth.errors import InputError
from fastsmooth.grouping import Grouping

if TYPE_CHECKING:
    import pyarrow as pa


def stored_type(column: str, data_type: pa.DataType) -> str:
    """Return the name of the type in which a store keeps a unit column.

    Integers become int64, floats float64, text string; times keep their zone.

    Raises
    ------
    InputError
        The column holds nested values, or nothing.
    """
    import pyarrow as pa
    import pyarrow.types as pt

    from fastsmooth.casts import plain_type

    kind = plain_type(data_type)
    wide = (
        (pt.is_uint64, pa.uint64()), (pt.is_integer, pa.int64()), (pt.is_floating, pa.float64()),
        (pt.is_string, pa.string()), (pt.is_large_string, pa.string()), (pt.is_date, pa.date32()),
    )  # fmt: skip
    if pt.is_nested(kind) or pt.is_null(kind):
        raise InputError(
            "--by", "name columns of plain values", f"'{column}' holds {kind}",
            "name another column",
        )  # fmt: skip
    return str(next((made for test, made in wide if test(kind)), kind))


def check_alike(grouping: Grouping, types: Sequence[str], columns: Mapping[str, pa.Array]) -> None:
    """Refuse unit columns of another kind than the store's: equal units would be parted.

    Parameters
    ----------
    grouping : Grouping
        The unit columns.
    types : sequence of str
        Their types in the store.
    columns : mapping of str to pyarrow.Array
        What a file holds.

    Raises
    ------
    InputError
        A column is of another kind.
    """
    import pyarrow.types as pt

    from fastsmooth.casts import plain_type

    for one, kind in zip(grouping.by, types, strict=True):
        given = plain_type(columns[one.column].type)
        if one.unit is None and not pt.is_null(given) and stored_type(one.column, given) != kind:
            raise InputError(
                "--by", "name a column of the same kind in every file",
                f"'{one.column}' holds {given} and the store has {kind}", "write the files alike",
            )  # fmt: skip
