"""Files of a store: written whole and named by their content, read only if their content fits.

Every call to the file system that a store makes stands here, so that the tests can stop a process
at each of them.
"""

from __future__ import annotations

import contextlib
import errno
import fcntl
import hashlib
import json
import os
import re
import secrets
import socket
import time
from collections.abc import Iterator
from contextlib import contextmanager
from dataclasses import dataclass
from typing import Any

from fastsmooth.errors import InputError, ReadError, WriteError

CURRENT = "CURRENT"
LOCK = "LOCK"
TABLES = "tables"
TABLE_SUFFIX = ".cells"
MANIFEST_SUFFIX = ".manifest"
MAGIC = "fastsmooth-store"
FORMAT = 1
_PARTIAL = ".partial"
# A reader that was overtaken by a writer begins again; so many writers in one reading are absurd.
MOST_TRIES = 10
_NO_FOLDER_SYNC = (errno.EINVAL, errno.ENOTSUP, errno.EACCES)


class OvertakenError(ReadError):
    """A file that a state names is gone: a writer has published a newer one, or it was lost."""

    def __init__(self, path: str) -> None:
        self.path = path
        super().__init__(
            "STORE", "hold the files that it names", f"'{path}' is missing",
            "open it again if it was updated meanwhile, else put it back from a copy",
        )  # fmt: skip

    def __reduce__(self) -> tuple[Any, ...]:
        return type(self), (self.path,)


def is_store(path: object) -> bool:
    """Tell whether a path is the folder of a store.

    Parameters
    ----------
    path : object
        Anything; what is no path is no store.

    Examples
    --------
    >>> is_store("nowhere"), is_store({"x": [1.0]})
    (False, False)
    """
    if not isinstance(path, str | os.PathLike):
        return False
    return os.path.isfile(os.path.join(os.fspath(path), CURRENT))


def is_own(name: str) -> bool:
    """Tell whether a file of a store may have this name."""
    return name in (CURRENT, LOCK, TABLES) or name.endswith((_PARTIAL, MANIFEST_SUFFIX))


def digest_of(content: bytes) -> str:
    """Return the SHA-256 of some bytes, in hexadecimal."""
    return hashlib.sha256(content).hexdigest()


def file_digest(path: str) -> str:
    """Return the SHA-256 of a file, in hexadecimal."""
    with open(path, "rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


def write_file(folder: str, name: str, content: bytes) -> None:
    """Put a file on the disk whole: written under another name, brought to the disk, renamed.

    Raises
    ------
    OSError
        The file could not be written; what stood under the name is untouched.
    """
    temporary = os.path.join(folder, f".{secrets.token_hex(8)}{_PARTIAL}")
    handle = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL | os.O_CLOEXEC, 0o666)
    try:
        try:
            rest = memoryview(content)
            while rest:
                rest = rest[os.write(handle, rest) :]
            os.fsync(handle)
        finally:
            os.close(handle)
        os.replace(temporary, os.path.join(folder, name))
    except BaseException:
        with contextlib.suppress(OSError):
            os.unlink(temporary)
        raise


def sync_folder(folder: str) -> None:
    """Bring a folder's entries to the disk, where the file system knows how to."""
    handle = os.open(folder, os.O_RDONLY | os.O_CLOEXEC)
    try:
        os.fsync(handle)
    except OSError as error:
        if error.errno not in _NO_FOLDER_SYNC:
            raise
    finally:
        os.close(handle)


def read_file(store: str, relative: str, digest: str) -> bytes:
    """Read a file of a store and check its content.

    Parameters
    ----------
    store : str
        The store's folder, for the refusal.
    relative : str
        Path of the file inside it.
    digest : str
        The SHA-256 that its content must have.

    Raises
    ------
    OvertakenError
        The file is not there.
    ReadError
        It cannot be read, or it is not what was written.
    """
    path = os.path.join(store, relative)
    try:
        with open(path, "rb") as stream:
            content = stream.read()
    except FileNotFoundError as error:
        raise OvertakenError(path) from error
    except OSError as error:
        raise ReadError(
            "STORE", "be readable whole", f"'{path}' cannot be read ({error.strerror})",
            "check the disk and the permissions",
        ) from error  # fmt: skip
    if digest_of(content) != digest:
        raise damaged(path)
    return content


def damaged(path: str) -> ReadError:
    """Return the refusal of a table file whose content is not what was written."""
    table = path.endswith(TABLE_SUFFIX)
    return ReadError(
        "STORE", "hold what was written to it", f"'{path}' was changed or cut short",
        "run 'fastsmooth update' with --replace and the files that it was made of" if table
        else "put the folder back from a copy, or make the store anew from its files",
    )  # fmt: skip


def read_current(store: str) -> str | None:
    """Return the manifest's digest that is current; None if the folder holds no store yet.

    Raises
    ------
    ReadError
        The file is damaged, or of a format that this version does not read.
    """
    path = os.path.join(store, CURRENT)
    try:
        with open(path, encoding="utf-8", errors="replace") as stream:
            read = re.fullmatch(MAGIC + r" ([0-9]+) ([0-9a-f]{64})\n", stream.read())
    except FileNotFoundError:
        return None
    except OSError as error:
        raise ReadError(
            "STORE", "be readable", f"'{path}' cannot be read ({error.strerror})",
            "check the disk and the permissions",
        ) from error  # fmt: skip
    if read is None:
        raise damaged(path)
    if int(read[1]) != FORMAT:
        newer = int(read[1]) > FORMAT
        raise ReadError(
            "STORE", f"have format {FORMAT}", f"'{store}' has format {read[1]}",
            "install the newer version of fastsmooth that wrote it" if newer
            else "make the store anew from its files",
        )  # fmt: skip
    return read[2]


def write_current(store: str, digest: str) -> None:
    """Make a manifest the current one: the moment at which a new state becomes visible."""
    write_file(store, CURRENT, f"{MAGIC} {FORMAT} {digest}\n".encode())
    sync_folder(store)


@dataclass(frozen=True)
class Owner:
    """Who holds the lock of a store.

    Attributes
    ----------
    host : str
        Computer.
    process : int
        Process number.
    since : float
        Seconds since 1970 at which the lock was taken.
    """

    host: str
    process: int
    since: float

    def words(self) -> str:
        """Name the owner and the age of its lock."""
        age = max(0.0, time.time() - self.since)
        return f"process {self.process} on {self.host}, which began {_age(age)} ago"


def _age(seconds: float) -> str:
    for unit, length in (("d", 86_400), ("h", 3600), ("min", 60)):
        if seconds >= length:
            return f"{seconds / length:.0f} {unit}"
    return f"{seconds:.0f} s"


@contextmanager
def locked(store: str) -> Iterator[Owner | None]:
    """Hold the only right to write to a store.

    The system gives the lock back when its process ends, however it ends. Yields the owner that
    ended without giving it back itself, if there was one.

    Raises
    ------
    InputError
        Another process holds it.
    """
    handle = os.open(os.path.join(store, LOCK), os.O_RDWR | os.O_CREAT | os.O_CLOEXEC, 0o666)
    try:
        _take(handle, store)
        former = _read_owner(handle)
        own = {"host": socket.gethostname(), "process": os.getpid(), "since": time.time()}
        os.ftruncate(handle, 0)
        os.pwrite(handle, json.dumps(own).encode(), 0)
        try:
            yield former
        finally:
            # A refusal or a failure is no crash: nobody needs to hear of it later.
            with contextlib.suppress(OSError):
                os.ftruncate(handle, 0)
    finally:
        os.close(handle)


def _take(handle: int, store: str) -> None:
    try:
        fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
    except OSError as error:
        if error.errno not in (errno.EAGAIN, errno.EACCES):
            raise
        owner = _read_owner(handle)
        by = owner.words() if owner else "another process"
        raise InputError(
            "STORE", "be updated by one process at a time", f"'{store}' is locked by {by}",
            "wait until it has ended, or end it",
        ) from None  # fmt: skip


def _read_owner(handle: int) -> Owner | None:
    try:
        told = json.loads(os.pread(handle, 4096, 0))
        return Owner(str(told["host"]), int(told["process"]), float(told["since"]))
    except (OSError, ValueError, KeyError, TypeError):
        return None  # only a message hangs on it


def sweep(store: str, kept: set[str]) -> None:
    """Remove what no current state names: former tables and manifests, and what a crash left.

    Parameters
    ----------
    store : str
        The store's folder, locked.
    kept : set of str
        Paths inside the folder that are current.
    """
    for folder, prefix in ((store, ""), (os.path.join(store, TABLES), TABLES)):
        with os.scandir(folder) as entries:
            names = sorted(entry.name for entry in entries)
        for name in names:
            ours = name.endswith((_PARTIAL, TABLE_SUFFIX, MANIFEST_SUFFIX))
            if ours and os.path.join(prefix, name) not in kept:
                # What stays is removed at the next update.
                with contextlib.suppress(OSError):
                    os.unlink(os.path.join(folder, name))


@contextmanager
def writing(store: str) -> Iterator[None]:
    """Turn what the file system raises while a store is written into one sentence.

    Raises
    ------
    WriteError
        Disk full, folder closed, or another failure; the store is as it was.
    """
    try:
        yield
    except OSError as error:
        reasons = {
            errno.ENOSPC: ("the disk is full", "make room"),
            errno.EDQUOT: ("your share of the disk is used up", "make room"),
            errno.EFBIG: ("a file would be larger than allowed", "raise the limit on file sizes"),
            errno.EACCES: ("there is no permission to write", "ask for it"),
            errno.EPERM: ("there is no permission to write", "ask for it"),
            errno.EROFS: ("the file system is read-only", "name a folder on another disk"),
        }
        what, remedy = reasons.get(
            error.errno or 0, (error.strerror or str(error), "check the disk")
        )
        raise WriteError(
            "STORE", "be writable", f"'{store}' could not be written ({what}) and is as it was",
            remedy,
        ) from error  # fmt: skip
