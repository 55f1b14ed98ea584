"""Arrow columns to float64, by type and never by guess."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pyarrow as pa
import pyarrow.compute as pc
import pyarrow.types as pt
from numpy.typing import NDArray

from fastsmooth.axis import SECONDS_PER_DAY, TICKS_PER_SECOND, Axis
from fastsmooth.errors import InputError

LARGEST_EXACT_INTEGER = 2**53
UNITS = ("s", "ms", "us", "ns")  # coarse to fine


@dataclass(frozen=True)
class Role:
    """A column and the part it plays.

    Parameters
    ----------
    name : str
        ``x``, ``y``, ``weight`` or ``count``.
    column : str
        Name of the column.
    """

    name: str
    column: str

    @property
    def argument(self) -> str:
        """The option that names the column."""
        return f"--{self.name}"


@dataclass(frozen=True)
class Values:
    """Floats with the mask of those that are not null.

    Parameters
    ----------
    floats : (n,) float64
        Values; anything where invalid.
    valid : (n,) bool or None
        False where null; None if nothing is.
    """

    floats: NDArray[np.float64]
    valid: NDArray[np.bool_] | None


def filterable_type(data_type: pa.DataType) -> pa.DataType:
    """Return the type in which Arrow can filter a column.

    Parameters
    ----------
    data_type : pyarrow.DataType
        Type of a column.

    Returns
    -------
    pyarrow.DataType
        Text and binary without views; every other type as it is.
    """
    if pt.is_string_view(data_type):
        return pa.large_string()
    if pt.is_binary_view(data_type):
        return pa.large_binary()
    return data_type


def plain_type(data_type: pa.DataType) -> pa.DataType:
    """Return the type of the values inside dictionaries, runs and extensions, without views.

    Parameters
    ----------
    data_type : pyarrow.DataType
        Type of a column.

    Returns
    -------
    pyarrow.DataType
        Type of its values.
    """
    while True:
        if isinstance(data_type, pa.BaseExtensionType):
            data_type = data_type.storage_type
        elif pt.is_dictionary(data_type) or pt.is_run_end_encoded(data_type):
            data_type = data_type.value_type
        else:
            return filterable_type(data_type)


def plain_array(array: pa.Array) -> pa.Array:
    """Return the values inside dictionaries, runs and extensions, without views.

    Parameters
    ----------
    array : pyarrow.Array
        A column.

    Returns
    -------
    pyarrow.Array
        Its values; the same array if it is plain.
    """
    while True:
        if isinstance(array.type, pa.BaseExtensionType):
            array = array.storage
        elif pt.is_dictionary(array.type):
            values = array.dictionary.cast(filterable_type(array.type.value_type))
            array = pa.DictionaryArray.from_arrays(array.indices, values).dictionary_decode()
        elif pt.is_run_end_encoded(array.type):
            array = pc.run_end_decode(array)
        else:
            to = filterable_type(array.type)
            return array if array.type == to else array.cast(to)


def constant_array(value: pa.Scalar, rows: int) -> pa.DictionaryArray:
    """Return a column that holds one value throughout, as a dictionary of that value.

    Parameters
    ----------
    value : pyarrow.Scalar
        The value; null gives nulls.
    rows : int
        Length of the column.

    Returns
    -------
    pyarrow.DictionaryArray
        `rows` values.
    """
    indices = pa.array(np.zeros(rows, np.int32), mask=np.full(rows, not value.is_valid))
    return pa.DictionaryArray.from_arrays(indices, pa.array([value.as_py()], value.type))


def is_number(data_type: pa.DataType) -> bool:
    """Tell whether values of a plain type become floats by value.

    Parameters
    ----------
    data_type : pyarrow.DataType
        A type as `plain_type` returns it.

    Returns
    -------
    bool
        True for integers, floats, decimals and booleans.
    """
    return bool(
        pt.is_integer(data_type)
        or pt.is_floating(data_type)
        or pt.is_decimal(data_type)
        or pt.is_boolean(data_type)
    )


def is_text(data_type: pa.DataType) -> bool:
    """Tell whether a plain type is text.

    Parameters
    ----------
    data_type : pyarrow.DataType
        A type as `plain_type` returns it.

    Returns
    -------
    bool
        True for every kind of string.
    """
    return bool(
        pt.is_string(data_type) or pt.is_large_string(data_type) or pt.is_string_view(data_type)
    )


def kind_of(data_type: pa.DataType) -> str:
    """Return the kind of a plain type.

    Parameters
    ----------
    data_type : pyarrow.DataType
        A type as `plain_type` returns it.

    Returns
    -------
    str
        ``number``, ``boolean``, ``text``, ``timestamp``, ``date``, ``duration`` or ``other``.
    """
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


def column_kind(role: Role, data_type: pa.DataType, place: str) -> str:
    """Tell what kind of numbers a column gives in its role, or refuse its type.

    Parameters
    ----------
    role : Role
        The column and its part.
    data_type : pyarrow.DataType
        Its type.
    place : str
        Where it was found, for the sentence.

    Returns
    -------
    str
        ``number``, ``empty`` (nulls only, of no type), or for x also ``timestamp``, ``date``,
        ``duration``.

    Raises
    ------
    InputError
        Text, nested, binary, a time of day, or a temporal column in another role than x.
    """
    plain = plain_type(data_type)
    if pt.is_null(plain):
        return "empty"
    kind = kind_of(plain)
    if kind in ("number", "boolean"):
        return "number"
    requirement = "name a column of numbers"
    if role.name == "x":
        requirement += ", times, dates or durations"
        if kind in ("timestamp", "date", "duration"):
            return kind
    if kind == "text":
        found, remedy = "text", "cast the column to a number"
    elif pt.is_nested(plain):
        found, remedy = f"nested ({plain})", "write its parts as columns of their own"
    else:
        found, remedy = f"of type {plain}", "cast the column to a number"
    raise InputError(role.argument, requirement, f"'{role.column}' in {place} is {found}", remedy)


def finest_unit(data_types: list[pa.DataType]) -> str:
    """Return the finest unit of temporal types.

    Parameters
    ----------
    data_types : list of pyarrow.DataType
        Timestamps or durations.

    Returns
    -------
    str
        ``s``, ``ms``, ``us`` or ``ns``.
    """
    return UNITS[max(UNITS.index(data_type.unit) for data_type in data_types)]


def to_ticks(role: Role, array: pa.Array, axis: Axis) -> pa.Array:
    """Turn a temporal column into int64 counts of the axis' unit since 1970, or since 0.

    Parameters
    ----------
    role : Role
        The column and its part.
    array : pyarrow.Array
        The column.
    axis : Axis
        Its meaning; the origin is not used.

    Returns
    -------
    pyarrow.Int64Array
        The counts.

    Raises
    ------
    InputError
        A value that the unit cannot hold.
    """
    plain = plain_array(array)
    try:
        if axis.kind == "timestamp" and pt.is_timestamp(plain.type):
            # The counts of a zoned column are UTC whatever the zone, so only the unit changes.
            return plain.cast(pa.timestamp(axis.unit, plain.type.tz)).cast(pa.int64())
        if axis.kind == "date" and pt.is_date64(plain.type):
            return pc.divide(plain.cast(pa.int64()), 1000 * SECONDS_PER_DAY)
        if axis.kind == "date":
            return plain.cast(pa.date32()).cast(pa.int32()).cast(pa.int64())
        return plain.cast(axis.data_type()).cast(pa.int64())
    except pa.ArrowInvalid as error:
        raise InputError(
            role.argument,
            f"hold times that fit 64-bit counts of {axis.unit}",
            f"'{role.column}' has one that does not",
            f"filter such rows away or store every file in a coarser unit than {axis.unit}",
        ) from error


def caster(role: Role, data_type: pa.DataType, axis: Axis | None) -> Callable[[pa.Array], Values]:
    """Choose the conversion of a column to floats.

    Parameters
    ----------
    role : Role
        The column and its part.
    data_type : pyarrow.DataType
        Its type, as `column_kind` has accepted it.
    axis : Axis or None
        The axis if the column is x and temporal.

    Returns
    -------
    callable
        Takes an array of that type, returns `Values`; raises InputError for an integer beyond
        2^53, which a float64 would round.
    """
    if data_type == pa.float64():
        return _float_values
    plain = plain_type(data_type)
    if axis is not None and axis.kind != "number" and not pt.is_null(plain):
        temporal_axis = axis

        def temporal(array: pa.Array) -> Values:
            return _temporal_values(role, array, temporal_axis)

        return temporal
    if pt.is_integer(plain) and plain.bit_width == 64:

        def integers(array: pa.Array) -> Values:
            return _integer_values(role, array)

        return integers

    def others(array: pa.Array) -> Values:
        return _float_values(plain_array(array).cast(pa.float64()))

    return others


def _float_values(array: pa.Array) -> Values:
    if array.null_count == 0:
        floats = array.to_numpy(zero_copy_only=True)
        # Compiled kernels take aligned memory; foreign streams need not deliver it.
        return Values(floats if floats.flags.aligned else floats.copy(), None)
    valid = pc.is_valid(array).to_numpy(zero_copy_only=False)
    return Values(array.to_numpy(zero_copy_only=False), valid)


def _integer_values(role: Role, array: pa.Array) -> Values:
    plain = plain_array(array)
    try:
        return _float_values(plain.cast(pa.float64()))
    except pa.ArrowInvalid as error:
        largest = LARGEST_EXACT_INTEGER
        low, high = (pc.min_max(plain)[name].as_py() for name in ("min", "max"))
        raise InputError(
            role.argument,
            f"hold integers of at most 2^53 ({largest:,}), which a float64 keeps exactly",
            f"'{role.column}' has {high if high > largest else low:,}",
            "subtract an offset from the column, or divide it, first",
        ) from error


def _temporal_values(role: Role, array: pa.Array, axis: Axis) -> Values:
    ticks = to_ticks(role, array, axis)
    valid = None
    if ticks.null_count:
        valid = pc.is_valid(ticks).to_numpy(zero_copy_only=False)
        ticks = ticks.fill_null(axis.origin)
    try:
        since = pc.subtract_checked(ticks, axis.origin).to_numpy()
    except pa.ArrowInvalid as error:
        raise InputError(
            role.argument,
            "hold times that lie within 64-bit counts of each other",
            f"'{role.column}' spans more",
            "filter the far ones away with --where",
        ) from error
    if axis.unit == "day":
        return Values(since * float(SECONDS_PER_DAY), valid)
    return Values(since / float(TICKS_PER_SECOND[axis.unit]), valid)


def statistic_ticks(value: int, unit: str, axis: Axis) -> int:
    """Convert a count of a file's unit into a count of the axis' unit.

    Parameters
    ----------
    value : int
        Count of `unit`.
    unit : str
        ``s``, ``ms``, ``us``, ``ns`` or ``day``.
    axis : Axis
        The axis, whose unit is as fine or finer.

    Returns
    -------
    int
        Count of the axis' unit.
    """
    if axis.unit == "day" or unit == axis.unit:
        return value
    return value * TICKS_PER_SECOND[axis.unit] // TICKS_PER_SECOND[unit]
