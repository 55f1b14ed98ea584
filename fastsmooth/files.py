"""Paths, folders and globs to data files, and what identifies a file.

This is the only module that touches the file system by name.
"""

from __future__ import annotations

import glob
import os
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from urllib.parse import unquote

from fastsmooth.errors import InputError, ReadError
from fastsmooth.near import advise

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


@dataclass(frozen=True)
class FileRecord:
    """A file as it was when it was opened.

    Parameters
    ----------
    path : str
        Its path, as given or found.
    size_bytes : int
        Its size.
    modified_ns : int
        Its modification time, nanoseconds since 1970.
    rows : int or None
        Its rows, if its footer tells.
    """

    path: str
    size_bytes: int
    modified_ns: int
    rows: int | None


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


def find_files(data: str | os.PathLike[str] | Sequence[str | os.PathLike[str]]) -> tuple[str, ...]:
    """Turn a path, folder, glob, or a list of these into the data files meant, sorted by path.

    In folders, names that begin with ``_`` or ``.`` and other suffixes than the known ones are
    passed over. A file that is named itself must have a known suffix.

    Parameters
    ----------
    data : path or sequence of paths
        What the caller named.

    Returns
    -------
    tuple of str
        At least one path; all of one format.

    Raises
    ------
    InputError
        Nothing there, no data file in it, an unknown suffix, two formats, or a file named twice.
    """
    given = [data] if isinstance(data, str | os.PathLike) else list(data)
    if not given:
        raise InputError("DATA", "name at least one file", "the list is empty", "name a file")
    paths = sorted(path for one in given for path in _expand(os.fspath(one)))
    seen: dict[str, str] = {}
    for path in paths:
        real = os.path.realpath(path)
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


def _expand(path: str) -> list[str]:
    if "://" in path:
        raise InputError(
            "DATA",
            "be a path, folder or glob on this computer",
            f"'{path}' is an address",
            "copy the files to a folder first",
        )
    if os.path.isdir(path):
        found = list(_walk(path))
        if not found:
            raise InputError(
                "DATA",
                "hold data files",
                f"the folder '{path}' has none",
                f"name a folder with files that end in {SUFFIX_LIST}",
            )
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
            raise InputError(
                "DATA", "match data files", f"'{path}' matches none", "check the pattern"
            )
        return found
    raise _missing(path)


def _missing(path: str) -> InputError:
    folder, name = os.path.split(path)
    folder = folder or "."
    requirement = "be an existing file, folder or glob"
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
    if not names:
        remedy = f"there are no data files in '{folder}'"
    else:
        remedy = f"{advise(name, names)} in '{folder}'"
    return InputError("DATA", requirement, f"'{path}' does not exist", remedy)


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
    """Note a file's size and modification time.

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
        status = os.stat(path)
    return FileRecord(path, status.st_size, status.st_mtime_ns, rows)


def check_unchanged(record: FileRecord) -> None:
    """Refuse a file whose size or modification time is not what it was.

    Parameters
    ----------
    record : FileRecord
        The file as it was.

    Raises
    ------
    ReadError
        The file changed or went away.
    """
    now = read_identity(record.path, record.rows) if os.path.exists(record.path) else None
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
        The file is not there or must not be read.
    ReadError
        The file is damaged.
    """
    import pyarrow as pa

    try:
        yield
    except FileNotFoundError as error:
        raise _missing(path) from error
    except PermissionError as error:
        raise InputError(
            "DATA", "be readable", f"there is no permission for '{path}'", "ask for it"
        ) from error
    except (pa.ArrowException, OSError) as error:
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
