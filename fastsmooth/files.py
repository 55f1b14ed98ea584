"""Paths, folders, globs and addresses of data files, and what identifies a file.

This is the only module that touches the file system by name; `addresses` does it for object stores.
"""

from __future__ import annotations

import glob
import os
from collections.abc import Callable, Iterable, Iterator, Sequence
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager, suppress
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, TypeVar
from urllib.parse import unquote

from fastsmooth import address_errors, addresses
from fastsmooth.addresses import DEFAULT_TIMEOUT_SECONDS, as_address
from fastsmooth.errors import InputError, ReadError
from fastsmooth.near import advise

if TYPE_CHECKING:
    import pyarrow as pa
    import pyarrow.fs as pafs

T = TypeVar("T")

SUFFIXES = {
    ".parquet": "parquet",
    ".pq": "parquet",
    ".arrow": "arrow",
    ".feather": "arrow",
    ".ipc": "arrow",
    ".csv": "csv",
    ".csv.gz": "csv",
}
SUFFIX_LIST = ", ".join(SUFFIXES)
EMPTY_PARTITION = "__HIVE_DEFAULT_PARTITION__"
# Questions to a store that may wait for their answers at a time.
_ASKED_TOGETHER = 16


@dataclass(frozen=True)
class FileRecord:
    """A file as it was when it was opened.

    Parameters
    ----------
    path : str
        Its path or address, as given or found.
    size_bytes : int
        Its size.
    modified_ns : int
        Its modification time, nanoseconds since 1970; 0 if an object store does not tell.
    rows : int or None
        Its rows, if its footer tells.
    etag : str or None
        What an object store calls its content.
    """

    path: str
    size_bytes: int
    modified_ns: int
    rows: int | None
    etag: str | None = None


@dataclass(frozen=True)
class Task:
    """One stretch of data that is read from start to end: a row group, record batches, a stream.

    Parameters
    ----------
    index : int
        Its place in the fixed order: files sorted by path, then row groups.
    label : str
        Its name for people.
    rows : int or None
        Its rows, if known before reading.
    """

    index: int
    label: str
    rows: int | None


def file_format(path: str) -> str | None:
    """Tell ``parquet``, ``arrow`` or ``csv`` from the suffix, or None.

    Parameters
    ----------
    path : str
        A file name.

    Returns
    -------
    str or None
        The format.

    Examples
    --------
    >>> file_format("readings.CSV.gz")
    'csv'
    """
    name = os.path.basename(path).lower()
    return next((kind for suffix, kind in SUFFIXES.items() if name.endswith(suffix)), None)


def find_files(
    data: str | os.PathLike[str] | Sequence[str | os.PathLike[str]],
    timeout_seconds: float = DEFAULT_TIMEOUT_SECONDS,
) -> tuple[str, ...]:
    """Turn a path, folder, glob, or a list of these into the data files meant, sorted by path.

    An address (``s3://bucket/folder``) may stand for a path; see `fastsmooth.addresses`.

    In folders, names that begin with ``_`` or ``.`` and other suffixes than the known ones are
    passed over. A file that is named itself must have a known suffix.

    Parameters
    ----------
    data : path or sequence of paths
        What the caller named.
    timeout_seconds : float
        How long a silent server is waited for.

    Returns
    -------
    tuple of str
        At least one path; all of one format.

    Raises
    ------
    InputError
        Nothing there, no data file in it, an unknown suffix, two formats, a file named twice, or
        a store that cannot be reached or must not be read.
    """
    given = [data] if isinstance(data, str | os.PathLike) else list(data)
    if not given:
        raise InputError("DATA", "name at least one file", "the list is empty", "name a file")
    paths = sorted(path for one in given for path in _expand(os.fspath(one), timeout_seconds))
    seen: dict[str, str] = {}
    for path in paths:
        real = path if as_address(path) else os.path.realpath(path)
        if real in seen:
            raise InputError(
                "DATA",
                "name each file once",
                f"'{path}' is named twice"
                if path == seen[real]
                else f"'{path}' and '{seen[real]}' are one file",
                "leave one of them out",
            )
        seen[real] = path
    first_of: dict[str, str] = {}
    for path in paths:
        first_of.setdefault(str(file_format(path)), path)
    if len(first_of) > 1:
        both = " and ".join(f"'{path}' ({kind})" for kind, path in list(first_of.items())[:2])
        raise InputError(
            "DATA", "hold files of one format", f"there are {both}", "name one kind, as in '*.csv'"
        )
    return tuple(paths)


def _expand(path: str, timeout_seconds: float) -> list[str]:
    address = as_address(path, timeout_seconds)
    if address is not None:
        with reading(address):
            there = addresses.find(address, lambda name: file_format(name) is not None, _is_hidden)
        if there is None:
            raise _missing(address)
        if not there:
            raise _no_match(path) if glob.has_magic(path) else _no_data(path)
        return [_known(one) for one in there]
    if os.path.isdir(path):
        found = list(_walk(path))
        if not found:
            raise _no_data(path)
        return found
    if os.path.exists(path):
        return [_known(path)]
    if glob.has_magic(path):
        found = []
        fixed = next(n for n, part in enumerate(Path(path).parts) if glob.has_magic(part))
        for match in glob.glob(path, recursive=True):
            if any(_is_hidden(part) for part in Path(match).parts[fixed:]):
                continue
            # '**' also matches folders, whose files it then matches one by one.
            if os.path.isdir(match):
                found.extend([] if "**" in path else _walk(match))
            else:
                found.append(_known(match))
        if not found:
            raise _no_match(path)
        return found
    raise _missing(path)


def _no_data(folder: str) -> InputError:
    return InputError(
        "DATA",
        "hold data files",
        f"the folder '{folder}' has none",
        f"name a folder with files that end in {SUFFIX_LIST}",
    )


def _no_match(path: str) -> InputError:
    return InputError("DATA", "match data files", f"'{path}' matches none", "check the pattern")


def _missing(path: str) -> InputError:
    address = as_address(path)
    if address is not None:
        try:
            if address.is_native and not addresses.has_bucket(address):
                return address_errors.no_bucket(address)
            folder, name, names = addresses.names_near(address)
        except address_errors.foreign_errors():
            # Who may not list a folder gets no hint.
            folder, name, names = path, "", []
        names = [one.rstrip("/") for one in names if one.endswith("/") or file_format(one)]
        return _not_there(path, name, folder, [one for one in names if not _is_hidden(one)])
    folder, name = os.path.split(path)
    folder = folder or "."
    if not os.path.isdir(folder):
        while folder and not os.path.isdir(folder):
            folder, name = os.path.split(folder)
        folder = folder or "."
    try:
        with os.scandir(folder) as entries:
            names = sorted(
                entry.name
                for entry in entries
                if not _is_hidden(entry.name) and (entry.is_dir() or file_format(entry.name))
            )
    except OSError:
        names = []
    return _not_there(path, name, folder, names)


def _not_there(path: str, name: str, folder: str, names: list[str]) -> InputError:
    if not names:
        remedy = f"there are no data files in '{folder}'"
    else:
        remedy = f"{advise(name, names)} in '{folder}'"
    return InputError(
        "DATA", "be an existing file, folder or glob", f"'{path}' does not exist", remedy
    )


def _known(path: str) -> str:
    if file_format(path) is None:
        raise InputError(
            "DATA",
            f"end in one of {SUFFIX_LIST}",
            f"'{path}' does not",
            "rename the file if it is of one of these formats",
        )
    return path


def _walk(folder: str) -> Iterator[str]:
    def refuse(error: OSError) -> None:
        raise InputError(
            "DATA", "be readable", f"there is no permission for '{error.filename}'", "ask for it"
        ) from error

    for base, folders, names in os.walk(folder, onerror=refuse):
        folders[:] = sorted(name for name in folders if not _is_hidden(name))
        for name in sorted(names):
            if not _is_hidden(name) and file_format(name) is not None:
                yield os.path.join(base, name)


def _is_hidden(name: str) -> bool:
    return name.startswith(("_", "."))


def partition_keys(path: str) -> dict[str, str | None]:
    """Read the ``key=value`` folders of a path.

    Parameters
    ----------
    path : str
        Path of a file.

    Returns
    -------
    dict
        Key to text; None where the folder stands for a missing value.

    Examples
    --------
    >>> partition_keys("fleet/plant=7/month=2026-01/part.parquet")
    {'plant': '7', 'month': '2026-01'}
    """
    keys: dict[str, str | None] = {}
    for part in Path(path).parts[:-1]:
        key, equals, value = part.partition("=")
        if equals and key:
            keys[unquote(key)] = None if value == EMPTY_PARTITION else unquote(value)
    return keys


def read_identity(path: str, rows: int | None) -> FileRecord:
    """Note a file's size and modification time, and the ETag that an object store gives it.

    Parameters
    ----------
    path : str
        Path of a file.
    rows : int or None
        Its rows, if its footer tells.

    Returns
    -------
    FileRecord
        The file as it is now.
    """
    with reading(path):
        return _identity(path, rows)


def is_there(path: str) -> bool:
    """Tell whether there is a file of this name, here or in an object store.

    Raises
    ------
    InputError
        Its store does not answer, or does not say.
    """
    with reading(path), suppress(FileNotFoundError):
        _identity(path, None)
        return True
    return False


def _identity(path: str, rows: int | None) -> FileRecord:
    address = as_address(path)
    if address is not None:
        size_bytes, modified_ns, etag = addresses.identify(address)
        return FileRecord(path, size_bytes, modified_ns, rows, etag)
    status = os.stat(path)
    return FileRecord(path, status.st_size, status.st_mtime_ns, rows)


def check_unchanged(record: FileRecord) -> None:
    """Refuse a file whose size, modification time or ETag is not what it was.

    Parameters
    ----------
    record : FileRecord
        The file as it was.

    Raises
    ------
    ReadError
        The file changed or went away.
    """
    now = None
    with reading(record.path), suppress(FileNotFoundError):
        now = _identity(record.path, record.rows)
    if now != record:
        raise ReadError(
            "DATA",
            "stay as it is while it is read",
            f"'{record.path}' was changed or removed meanwhile",
            "run again when nothing writes to it",
        )


@contextmanager
def reading(path: str) -> Iterator[None]:
    """Turn what the file system and Arrow raise while reading `path` into one sentence.

    Parameters
    ----------
    path : str
        The file that is being read; the libraries' messages often leave it out.

    Raises
    ------
    InputError
        The file is not there, must not be read, or its store does not answer.
    ReadError
        The file is damaged.
    """
    address = as_address(path)
    try:
        yield
    except FileNotFoundError as error:
        raise _missing(path) from error
    except address_errors.foreign_errors() as error:
        answer = None if address is None else address_errors.explain(address, error)
        if answer is not None:
            raise answer from error
        if isinstance(error, PermissionError):
            raise InputError(
                "DATA", "be readable", f"there is no permission for '{path}'", "ask for it"
            ) from error
        raise ReadError(
            "DATA",
            "be readable whole",
            f"'{path}' is damaged ({_first_sentence(error)})",
            "copy or write the file again",
        ) from error


def _first_sentence(error: BaseException) -> str:
    line = str(error).strip().split("\n")[0].strip()
    sentence = line.split(". ")[0].rstrip(".")
    return sentence[:160] if sentence else type(error).__name__


def open_input(path: str) -> pa.NativeFile:
    """Open a file for reading at any place: mapped into memory where it lies on this computer.

    Parameters
    ----------
    path : str
        Path or address of a file.

    Returns
    -------
    pyarrow.NativeFile
        To be closed by the caller.
    """
    import pyarrow as pa

    address = as_address(path)
    return pa.memory_map(path) if address is None else addresses.open_input(address)


def system_of(path: str) -> tuple[pafs.FileSystem, str]:
    """Return the file system that reaches a file, and the file's path in it.

    Parameters
    ----------
    path : str
        Path or address of a file.

    Returns
    -------
    tuple of pyarrow.fs.FileSystem and str
        For the parts of Arrow that take both.
    """
    import pyarrow.fs as pafs

    address = as_address(path)
    if address is None:
        return pafs.LocalFileSystem(), path
    return address.system, address.inner


def ask_each(paths: Sequence[str], ask: Callable[[str], T]) -> list[T]:
    """Ask the same of every file, in order; several at a time where an answer has far to come.

    Parameters
    ----------
    paths : sequence of str
        Paths or addresses.
    ask : callable
        Takes one of them.

    Returns
    -------
    list
        The answers.
    """
    if len(paths) < 2 or all(as_address(path) is None for path in paths):
        return [ask(path) for path in paths]
    with ThreadPoolExecutor(_ASKED_TOGETHER, thread_name_prefix="fastsmooth") as pool:
        return list(pool.map(ask, paths))


def join_names(names: Iterable[str]) -> str:
    """Quote names and join them with commas.

    Parameters
    ----------
    names : iterable of str
        Names.

    Returns
    -------
    str
        The list for a sentence.

    Examples
    --------
    >>> join_names(["power_kw", "plant"])
    "'power_kw', 'plant'"
    """
    return ", ".join(f"'{name}'" for name in names)
