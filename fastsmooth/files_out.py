"""Writing results: whole files or none, and reading a written curve back."""

from __future__ import annotations

import base64
import contextlib
import errno
import fnmatch
import json
import math
import os
import secrets
import stat
from collections.abc import Callable, Mapping, Sequence
from typing import TYPE_CHECKING, Any, BinaryIO

from fastsmooth.addresses import as_address
from fastsmooth.curve import CURVE_KEY, Curve
from fastsmooth.errors import InputError, ReadError, WriteError
from fastsmooth.files import file_format
from fastsmooth.near import find_near

if TYPE_CHECKING:
    import pyarrow as pa

    from fastsmooth.fleet import Fleet

TABLE_SUFFIXES = (".parquet", ".arrow", ".csv", ".json")
PICTURE_SUFFIXES = (".png", ".svg", ".pdf")
PAGE_SUFFIXES = (".html",)
# Schema metadata under these keys is a JSON object that belongs to the result.
_OWN_KEYS = b"fastsmooth."
_READ_BACK = (".parquet", ".arrow", ".json")
# What a file system says that cannot bring a folder's entries to the disk on request.
_NO_FOLDER_SYNC = (errno.EINVAL, errno.ENOTSUP, errno.EACCES)


def check_writable(path: str | os.PathLike[str], argument: str, suffixes: Sequence[str]) -> str:
    """Refuse a path that cannot be written, before the work that leads up to it.

    Parameters
    ----------
    path : path
        Where the result shall go.
    argument : str
        The option that named it, for the refusal.
    suffixes : sequence of str
        File name endings that are known, lower case, with the dot.

    Returns
    -------
    str
        The one of `suffixes` that the path ends in.

    Raises
    ------
    WriteError
        Unknown suffix, missing or closed folder, a folder or a device in place of a file.
    """
    name = os.fspath(path)
    suffix = os.path.splitext(name)[1].lower()
    if suffix not in suffixes:
        ending = f"'{name}' ends in '{suffix}'" if suffix else f"'{name}' has no such ending"
        if os.path.isdir(name):
            ending = f"'{name}' is a folder"
        raise WriteError(
            argument, f"name a file that ends in {_either(suffixes)}", ending,
            "choose one of these endings",
        )  # fmt: skip
    _check_place(os.path.realpath(name), name, argument)
    return suffix


def keep_outside(path: str | os.PathLike[str], data: Sequence[str]) -> None:
    """Refuse an output that the next reading of the same data would take for data.

    Parameters
    ----------
    path : path
        Where a table shall go.
    data : sequence of str
        Files, folders and globs that are read.

    Raises
    ------
    WriteError
        It lies in one of the folders, or matches one of the globs.
    """
    place = os.path.realpath(path)
    if file_format(place) is None:
        return
    for one in data:
        root = os.path.realpath(one)
        inside = os.path.isdir(one) and os.path.commonpath([place, root]) == root
        if inside or ("*" in one and fnmatch.fnmatch(place, root)):
            raise WriteError(
                "--out", "lie outside DATA", f"'{os.fspath(path)}' would be read as data next time",
                "name another folder",
            )  # fmt: skip


def write_atomically(
    path: str | os.PathLike[str],
    writer: Callable[[BinaryIO], None],
    argument: str = "--out",
    on_disk: bool = True,
) -> None:
    """Write a file whole or not at all.

    The bytes go to a temporary file in the same folder, reach the disk, and only then take the
    name. A former file keeps its content until that moment, and its mode afterwards; a link
    keeps pointing where it did.

    Parameters
    ----------
    path : path
        Where the file shall be.
    writer : callable
        Writes the content into the open binary file that it is given.
    argument : str
        The option that named the path, for the refusal.
    on_disk : bool
        Whether to wait for the disk. Without, a file may be lost if the power fails soon after,
        which is well for large ones that can be made again.

    Raises
    ------
    WriteError
        The file cannot be written. Whatever goes wrong, also an interruption, the former file is
        untouched and no temporary file stays.
    """
    name = os.fspath(path)
    target = os.path.realpath(name)
    _check_place(target, name, argument)
    folder = os.path.dirname(target)
    # Data folders pass over names that begin with a dot.
    temporary = os.path.join(folder, f".{secrets.token_hex(8)}.partial")
    try:
        former = stat.S_IMODE(os.stat(target).st_mode) if os.path.exists(target) else None
        # The system takes the umask off, so that no other thread sees it changed.
        flags = os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_CLOEXEC", 0)
        with os.fdopen(os.open(temporary, flags, former or 0o666), "wb") as stream:
            writer(stream)
            stream.flush()
            if on_disk:
                os.fsync(stream.fileno())
        if former is not None:
            os.chmod(temporary, former)
        os.replace(temporary, target)
        if on_disk:
            _sync_folder(folder)
    except OSError as error:
        raise _refusal(error, name, argument) from error
    finally:
        # After success there is none. A folder that is gone must not hide the first error.
        with contextlib.suppress(OSError):
            os.unlink(temporary)


def write_table(table: pa.Table, path: str | os.PathLike[str], argument: str = "--out") -> None:
    """Write a table; the suffix decides: .parquet, .arrow, .csv or .json.

    Text formats write times in the column's zone and durations as seconds. JSON holds the
    columns as lists under ``columns``, beside what the schema metadata tell; a CSV file holds
    the table alone. Values that are not finite are null in JSON.

    Parameters
    ----------
    table : pyarrow.Table
        The table.
    path : path
        Where the file shall be.
    argument : str
        The option that named the path, for the refusal.

    Raises
    ------
    WriteError
        The file cannot be written; nothing is left behind.
    """
    suffix = check_writable(path, argument, TABLE_SUFFIXES)
    writer = {
        ".parquet": _write_parquet, ".arrow": _write_arrow, ".csv": _write_csv,
        ".json": _write_json,
    }[suffix]  # fmt: skip
    write_atomically(path, lambda stream: writer(table, stream), argument)


def write_curve(curve: Curve, path: str | os.PathLike[str]) -> None:
    """Write a curve; the suffix decides: .parquet, .arrow, .csv or .json.

    Parameters
    ----------
    curve : Curve
        The curve.
    path : path
        Where the file shall be.

    Raises
    ------
    WriteError
        The file cannot be written; nothing is left behind.
    """
    write_table(curve.table(), path)


def write_fleet(fleet: Fleet, path: str | os.PathLike[str]) -> None:
    """Write curves of many units; the suffix decides: .parquet, .arrow, .csv or .json.

    Parameters
    ----------
    fleet : Fleet
        The curves.
    path : path
        Where the file shall be.

    Raises
    ------
    WriteError
        The file cannot be written; nothing is left behind.
    """
    from fastsmooth.fleet import FACTS

    suffix = check_writable(path, "--out", TABLE_SUFFIXES)
    table = fleet.table()
    if suffix == ".csv":
        table = table.drop_columns([FACTS])
    write_table(table, path)


def load_curve(path: str | os.PathLike[str]) -> Curve | Fleet:
    """Read what `Curve.save` or `Fleet.save` wrote, equal to the last bit.

    Parameters
    ----------
    path : path
        A .parquet, .arrow or .json file.

    Returns
    -------
    Curve or Fleet
        The curve, or the curves of many units.

    Raises
    ------
    InputError
        There is no such file, or it is no curve, or rows or columns were taken out of it.
    ReadError
        The file is damaged.
    """
    import pyarrow as pa

    name = os.fspath(path)
    suffix = os.path.splitext(name)[1].lower()
    if suffix not in _READ_BACK:
        received, remedy = f"'{name}' ends in '{suffix}'", "name the file that carries the trace"
        if suffix == ".csv":
            received = f"'{name}' holds the table alone"
            remedy = "save the curve as .parquet too and name that file"
        raise InputError("CURVE", f"end in {_either(_READ_BACK)}", received, remedy)
    if as_address(name) is not None:
        raise InputError(
            "CURVE", "lie on this computer", f"'{name}' is an address", "copy it here first"
        )
    if not os.path.isfile(name):
        what = "is a folder" if os.path.isdir(name) else "does not exist"
        remedy = _near_files(name) or "check the path"
        raise InputError("CURVE", "name a file", f"'{name}' {what}", remedy)
    reader = {".parquet": _read_parquet, ".arrow": _read_arrow, ".json": _read_json}[suffix]
    from fastsmooth.fleet import FLEET_KEY, Fleet

    # Schema metadata outlive a selection of columns or rows, so a trace alone proves nothing.
    try:
        table = reader(name)
        if FLEET_KEY in (table.schema.metadata or {}):
            return Fleet.from_table(table, f"'{name}'")
        curve = Curve.from_table(table, f"'{name}'")
    except KeyError as error:
        raise _altered(name, f"lacks {error}") from None
    except (OSError, ValueError, pa.ArrowException) as error:
        raise ReadError(
            "CURVE", "be readable", f"reading '{name}' failed: {_reason(error)}",
            "make the curve again",
        ) from error  # fmt: skip
    if curve.x.shape != curve.estimate.shape:
        raise _altered(name, f"holds {curve.estimate.size:,} of {curve.x.size:,} points")
    return curve


def _altered(name: str, what: str) -> InputError:
    return InputError(
        "CURVE", "be as fastsmooth wrote it", f"'{name}' {what}",
        "name a file that 'fastsmooth curve --out' made",
    )  # fmt: skip


def _check_place(target: str, name: str, argument: str) -> None:
    """Refuse a place that cannot take a file; `name` is the path as the caller wrote it."""
    if as_address(name) is not None:
        raise WriteError(
            argument, "name a file on this computer", f"'{name}' is an address",
            "write it here and copy it there",
        )  # fmt: skip
    folder = os.path.dirname(target)
    shown = os.path.dirname(name) or folder
    if os.path.isdir(target):
        raise WriteError(argument, "name a file", f"'{name}' is a folder", "add a file name to it")
    if not os.path.isdir(folder):
        exists = os.path.exists(folder)
        remedy = "name another folder" if exists else _near_folders(folder) or "make it first"
        raise WriteError(
            argument, "lie in a folder that exists",
            f"'{shown}' {'is no folder' if exists else 'does not exist'}", remedy,
        )  # fmt: skip
    if os.path.exists(target) and not os.path.isfile(target):
        raise WriteError(
            argument, "name an ordinary file", f"'{name}' is a device or a pipe",
            "name another file",
        )  # fmt: skip
    if os.path.exists(target) and not os.access(target, os.W_OK):
        raise WriteError(
            argument, "name a file that may be replaced", f"'{name}' is write-protected",
            "name another file, or lift the protection",
        )  # fmt: skip
    if not os.access(folder, os.W_OK | os.X_OK):
        raise WriteError(
            argument, "lie in a folder that may be written", f"'{shown}' may not",
            "name another folder",
        )  # fmt: skip


def _refusal(error: OSError, name: str, argument: str) -> WriteError:
    remedy = "name another file or folder"
    if error.errno in (errno.ENOSPC, errno.EDQUOT):
        remedy = "free some space, or name another folder"
    return WriteError(
        argument, "be written whole", f"writing '{name}' failed: {_reason(error)}", remedy
    )


def _reason(error: Exception) -> str:
    text = error.strerror if isinstance(error, OSError) and error.strerror else str(error)
    return " ".join(text.split()).rstrip(".")


def _sync_folder(folder: str) -> None:
    """Bring the folder's new entry to the disk, where the file system can."""
    try:
        descriptor = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(descriptor)
        finally:
            os.close(descriptor)
    except OSError as error:
        if error.errno not in _NO_FOLDER_SYNC:
            raise


def _either(names: Sequence[str]) -> str:
    return " or ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)


def _near_folders(folder: str) -> str:
    parent = os.path.dirname(folder)
    return _near(folder, [one.name for one in _entries(parent) if one.is_dir()])


def _near_files(name: str) -> str:
    return _near(name, [one.name for one in _entries(os.path.dirname(name) or ".")])


def _near(path: str, names: Sequence[str]) -> str:
    parent, name = os.path.split(path)
    near = [os.path.join(parent, one) for one in find_near(name, names)]
    return "use " + " or ".join(f"'{one}'" for one in near) if near else ""


def _entries(folder: str) -> list[os.DirEntry[str]]:
    try:
        with os.scandir(folder) as found:
            return sorted(found, key=lambda entry: entry.name)
    except OSError:
        return []  # only advice hangs on it


def _write_parquet(table: pa.Table, stream: BinaryIO) -> None:
    import pyarrow.parquet as pq

    pq.write_table(
        table, stream, version="2.6", data_page_version="1.0", compression="zstd",
        write_page_checksum=True,
    )  # fmt: skip


def _write_arrow(table: pa.Table, stream: BinaryIO) -> None:
    import pyarrow as pa

    with pa.ipc.new_file(stream, table.schema) as writer:
        writer.write_table(table)


def _write_csv(table: pa.Table, stream: BinaryIO) -> None:
    from pyarrow import csv

    csv.write_csv(_plain_durations(table), stream)


def _write_json(table: pa.Table, stream: BinaryIO) -> None:
    import pyarrow as pa

    plain: dict[str, Any] = {}
    for key, value in (table.schema.metadata or {}).items():
        if key.startswith(_OWN_KEYS):
            plain.update(json.loads(value))
    columns = {}
    for name, column in zip(table.column_names, _plain_durations(table).columns, strict=True):
        if pa.types.is_temporal(column.type) or pa.types.is_decimal(column.type):
            column = column.cast(pa.string())
        values = column.to_pylist()
        if _is_binary(column.type):
            values = [None if one is None else base64.b64encode(one).decode() for one in values]
        if pa.types.is_floating(column.type):
            values = [one if one is not None and math.isfinite(one) else None for one in values]
        columns[name] = values
    stream.write(json.dumps({**plain, "columns": columns}, allow_nan=False).encode())
    stream.write(b"\n")


def _plain_durations(table: pa.Table) -> pa.Table:
    """Durations as float seconds: text formats would show bare ticks."""
    import pyarrow as pa
    import pyarrow.compute as pc

    from fastsmooth.axis import TICKS_PER_SECOND

    for place, field in enumerate(table.schema):
        if pa.types.is_duration(field.type):
            ticks = table.column(place).cast(pa.int64()).cast(pa.float64(), safe=False)
            seconds = pc.divide(ticks, float(TICKS_PER_SECOND[field.type.unit]))
            table = table.set_column(place, field.name, seconds)
    return table


def _read_parquet(name: str) -> pa.Table:
    import pyarrow.parquet as pq

    with pq.ParquetFile(name, page_checksum_verification=True) as file:
        return file.read()


def _read_arrow(name: str) -> pa.Table:
    import pyarrow as pa

    with pa.OSFile(name) as file, pa.ipc.open_file(file) as reader:
        return reader.read_all()


def _read_json(name: str) -> pa.Table:
    import pyarrow as pa

    with open(name, encoding="utf-8") as file:
        told = json.load(file)
    if isinstance(told, Mapping) and {"format", "columns", "by", "units"} <= told.keys():
        return _fleet_table(dict(told))
    if not isinstance(told, Mapping) or not {"format", "columns", "x_floats"} <= told.keys():
        return pa.table({})  # carries no trace; `Curve.from_table` says so
    columns = {
        column: pa.array(values, pa.string() if column == "status" else pa.float64())
        for column, values in told["columns"].items()
        if column != "x"  # the trace holds it as floats
    }
    rest = {key: value for key, value in told.items() if key != "columns"}
    return pa.table(columns).replace_schema_metadata({CURVE_KEY: json.dumps(rest).encode()})


def _fleet_table(told: dict[str, Any]) -> pa.Table:
    import pyarrow as pa

    from fastsmooth.fleet import FACTS, FLEET_KEY, arrow_type, column_of

    plain = told.pop("columns")
    del plain["x"]  # the facts hold it as floats
    kinds = {"status": pa.string(), FACTS: pa.large_binary()}
    for name, kind in zip(told["by"], told["trace"]["by_types"], strict=True):
        kinds[column_of(name)] = arrow_type(kind)
    columns = {
        name: _from_plain(values, kinds.get(name, pa.float64())) for name, values in plain.items()
    }
    metadata = {FLEET_KEY: json.dumps(told).encode()}
    return pa.table(columns).replace_schema_metadata(metadata)


def _from_plain(values: list[Any], kind: pa.DataType) -> pa.Array:
    """Undo what `_write_json` does to a column."""
    import pyarrow as pa

    from fastsmooth.axis import TICKS_PER_SECOND

    if _is_binary(kind):
        return pa.array([None if one is None else base64.b64decode(one) for one in values], kind)
    if pa.types.is_duration(kind):
        ticks = TICKS_PER_SECOND[kind.unit]
        return pa.array([None if one is None else round(one * ticks) for one in values], kind)
    if pa.types.is_temporal(kind) or pa.types.is_decimal(kind):
        return pa.array(values, pa.string()).cast(kind)
    return pa.array(values, kind)


def _is_binary(kind: pa.DataType) -> bool:
    import pyarrow.types as pt

    return bool(pt.is_binary(kind) or pt.is_large_binary(kind) or pt.is_fixed_size_binary(kind))
