"""Plain data with long lists of numbers as a few compressed bytes, and back, to the last bit.

A fleet keeps what belongs to each unit's curve in this form: as JSON text, ten thousand curves
would take minutes to read and gigabytes to hold.
"""

from __future__ import annotations

import json
import math
import struct
from typing import Any

import numpy as np

# Shorter lists are told as JSON; a reference to an array costs as much.
_SHORTEST_ARRAY = 8
_ARRAY = "\x00array"
_HEAD = struct.Struct("<QQ")


def pack(plain: Any) -> bytes:
    """Return plain data (as for JSON: no NaN) as bytes; `unpack` gives the same data back.

    Examples
    --------
    >>> unpack(pack({"unit": "plant 7", "widths": [1.5, None, 2.5]}))
    {'unit': 'plant 7', 'widths': [1.5, None, 2.5]}
    """
    import pyarrow as pa

    arrays: list[np.ndarray[Any, Any]] = []
    head = json.dumps(_set_aside(plain, arrays), allow_nan=False).encode()
    body = head + b"".join(array.tobytes() for array in arrays)
    squeezed = pa.compress(body, codec="zstd", asbytes=True)
    return _HEAD.pack(len(head), len(body)) + squeezed


def unpack(packed: bytes) -> Any:
    """Return what `pack` was given.

    Raises
    ------
    ValueError
        The bytes are no packed data.
    """
    body, place = _body(packed)
    head = json.loads(body[:place])

    def restore(value: Any) -> Any:
        nonlocal place
        if isinstance(value, list):
            return [restore(one) for one in value]
        if not isinstance(value, dict):
            return value
        if _ARRAY not in value:
            return {key: restore(one) for key, one in value.items()}
        kind, shape = value[_ARRAY]
        array = np.frombuffer(body, kind, math.prod(shape), place).reshape(shape)
        place += array.nbytes
        plain = array.tolist()
        missing = kind == "<f8" and len(shape) == 1 and np.isnan(array).any()
        return [None if one != one else one for one in plain] if missing else plain

    return restore(head)


def unpack_numbers(packed: bytes, name: str) -> np.ndarray[Any, Any]:
    """Return one list of numbers at the top of packed data, without unpacking the others.

    Raises
    ------
    KeyError
        There is none of this name.

    Examples
    --------
    >>> unpack_numbers(pack({"unit": "plant 7", "widths": [1.5, 2.5]}), "widths")
    array([1.5, 2.5])
    """
    body, place = _body(packed)
    head = json.loads(body[:place])
    for key, value in head.items():
        if key == name:
            break
        place += _size(value)
    value = head[name]
    if not isinstance(value, dict):
        return np.array(value)
    kind, shape = value[_ARRAY]
    # A view would keep all the bytes.
    return np.frombuffer(body, kind, math.prod(shape), place).reshape(shape).copy()


def _body(packed: bytes) -> tuple[bytes, int]:
    """The bytes, decompressed, and where the arrays begin."""
    import pyarrow as pa

    if len(packed) < _HEAD.size:
        raise ValueError("packed facts are cut short")
    in_head, size = _HEAD.unpack_from(packed)
    return pa.decompress(packed[_HEAD.size :], size, codec="zstd", asbytes=True), in_head


def _size(value: Any) -> int:
    """How many bytes the arrays in a part of the head take."""
    if isinstance(value, list):
        return sum(map(_size, value))
    if not isinstance(value, dict):
        return 0
    if _ARRAY not in value:
        return sum(map(_size, value.values()))
    kind, shape = value[_ARRAY]
    return int(np.dtype(kind).itemsize * math.prod(shape))


def _set_aside(value: Any, arrays: list[np.ndarray[Any, Any]]) -> Any:
    """Put arrays in place of long lists of numbers, in the order in which they are met."""
    if isinstance(value, dict):
        return {key: _set_aside(one, arrays) for key, one in value.items()}
    if not isinstance(value, list | tuple):
        return value
    array = _as_array(value)
    if array is None:
        return [_set_aside(one, arrays) for one in value]
    arrays.append(array)
    return {_ARRAY: [array.dtype.str, list(array.shape)]}


def _as_array(values: Any) -> np.ndarray[Any, Any] | None:
    """Numbers of one kind as an array (a missing float as NaN), or None."""
    if len(values) < _SHORTEST_ARRAY:
        return None
    if isinstance(values[0], list):
        length = len(values[0])
        if not length or any(not isinstance(row, list) or len(row) != length for row in values):
            return None
        if isinstance(values[0][0], list):
            return None
        flat = _as_array([one for row in values for one in row])
        # A missing number is told by NaN in plain lists only.
        if flat is None or np.isnan(flat).any():
            return None
        return flat.reshape(len(values), length)
    kinds = set(map(type, values))
    if kinds == {int} and max(map(abs, values)) < 2**63:
        return np.array(values, "<i8")
    if kinds == {float} or kinds == {float, type(None)}:
        return np.array([math.nan if one is None else one for one in values], "<f8")
    return None
