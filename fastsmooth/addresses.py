"""Object stores: addresses such as ``s3://bucket/folder``, and the file systems that reach them.

Credentials come from the environment alone, as each store's own tools read it:

=========  =========================================================================
``s3://``  ``AWS_ACCESS_KEY_ID`` with ``AWS_SECRET_ACCESS_KEY`` (and ``AWS_SESSION_TOKEN``),
           ``AWS_PROFILE``, the shared credentials file, or the role of the machine;
           ``AWS_REGION``; ``AWS_ENDPOINT_URL_S3`` or ``AWS_ENDPOINT_URL`` for another server
``gs://``  ``GOOGLE_APPLICATION_CREDENTIALS`` or the machine's account;
           ``STORAGE_EMULATOR_HOST`` for another server
``az://``  ``AZURE_STORAGE_CONNECTION_STRING``, or ``AZURE_STORAGE_ACCOUNT`` with
           ``AZURE_STORAGE_KEY``, ``AZURE_STORAGE_SAS_TOKEN`` or the machine's identity
others     through fsspec, if it is installed with what the scheme needs
=========  =========================================================================

Waiting is bounded by `timeout_seconds` for ``s3://``: so long for a connection, and so long without
a byte, `REQUEST_TRIES` times. The other clients repeat requests by rules of their own; that of
``gs://`` gives up new attempts after the time, but may sit two minutes on a connection that hangs.
"""

from __future__ import annotations

import fnmatch
import glob
import os
import time
from collections.abc import Callable, Iterator, Sequence
from functools import lru_cache, partial
from typing import TYPE_CHECKING, Any, TypeVar
from urllib.parse import urlsplit

from fastsmooth.address_errors import foreign_errors, lacking, may_pass, shortened
from fastsmooth.errors import InputError

if TYPE_CHECKING:
    import pyarrow as pa

T = TypeVar("T")

DEFAULT_TIMEOUT_SECONDS = 20.0
# Each request is tried so often by the store's own client, with growing pauses.
REQUEST_TRIES = 3
# Finding and opening files is begun once more after a pause, unless time ran out.
OPENING_TRIES = 2
PAUSE_SECONDS = 0.5

# Schemes that pyarrow reaches by itself, and where their settings stand in the environment.
_NATIVE = {"s3": ("AWS_",), "gs": ("GOOGLE_", "STORAGE_"), "az": ("AZURE_",)}


class Address(str):
    """The address of a file or folder in an object store; a text that knows how to be reached.

    Parameters
    ----------
    text : str
        ``scheme://bucket/key``. Nothing in it is decoded: keys are taken as they stand.
    timeout_seconds : float
        How long a silent server is waited for, each time.
    """

    timeout_seconds: float

    def __new__(cls, text: str, timeout_seconds: float = DEFAULT_TIMEOUT_SECONDS) -> Address:
        """Keep `text`; nothing is reached for yet."""
        made = super().__new__(cls, text)
        made.timeout_seconds = timeout_seconds
        return made

    def __reduce__(self) -> tuple[type[Address], tuple[str, float]]:
        # Another process finds its own way, with its own environment.
        return Address, (str(self), self.timeout_seconds)

    @property
    def scheme(self) -> str:
        """What stands before ``://``, lower case."""
        return self.partition("://")[0].lower()

    @property
    def is_native(self) -> bool:
        """Whether pyarrow reaches it by itself."""
        return self.scheme in _NATIVE

    @property
    def bucket(self) -> str:
        """The first part of the path: a bucket, container or host."""
        return self.partition("://")[2].lstrip("/").partition("/")[0]

    @property
    def inner(self) -> str:
        """The path within the store, as its file system spells it."""
        if self.is_native:
            return self.partition("://")[2].strip("/")
        # First the file system, which refuses unknown schemes.
        return str(self.system.handler.fs._strip_protocol(str(self))).rstrip("/")

    @property
    def system(self) -> Any:
        """The file system that reaches it, made once for each environment."""
        prefixes = _NATIVE.get(self.scheme, ())
        told = {name: value for name, value in os.environ.items() if name.startswith(prefixes)}
        # Secrets are told apart, not kept.
        environment = hash(frozenset(told.items()))
        return _system(self.scheme, self.bucket, self.timeout_seconds, environment)

    def beside(self, inner: str) -> Address:
        """Return the address of another path of the same store."""
        if self.is_native:
            return Address(f"{self.scheme}://{inner}", self.timeout_seconds)
        return Address(self.system.handler.fs.unstrip_protocol(inner), self.timeout_seconds)


def as_address(path: str, timeout_seconds: float = DEFAULT_TIMEOUT_SECONDS) -> Address | None:
    """Return a path as an address, or None if it lies on this computer.

    Parameters
    ----------
    path : str
        A path, or an address.
    timeout_seconds : float
        Used unless `path` is an `Address` already, which has its own.

    Returns
    -------
    Address or None
        The address.

    Examples
    --------
    >>> as_address("readings/a.parquet") is None
    True
    >>> as_address("s3://plants/2026/a.parquet").inner
    'plants/2026/a.parquet'
    """
    if isinstance(path, Address):
        return path
    return Address(path, timeout_seconds) if "://" in path else None


@lru_cache(maxsize=64)
def _system(scheme: str, bucket: str, timeout_seconds: float, environment: int) -> Any:
    """Make the file system of one bucket; `environment` only tells environments apart."""
    del environment
    import pyarrow.fs as pafs

    if scheme == "s3":
        return _s3(pafs, bucket, timeout_seconds)
    if scheme == "gs":
        return _google(pafs, timeout_seconds)
    if scheme == "az" and hasattr(pafs, "AzureFileSystem"):
        return _azure(pafs)
    return _through_fsspec(pafs, scheme, bucket)


def _s3(pafs: Any, bucket: str, timeout_seconds: float) -> Any:
    options: dict[str, Any] = {}
    endpoint = os.environ.get("AWS_ENDPOINT_URL_S3") or os.environ.get("AWS_ENDPOINT_URL")
    region = os.environ.get("AWS_REGION") or os.environ.get("AWS_DEFAULT_REGION")
    if endpoint:
        server = urlsplit(endpoint if "://" in endpoint else f"https://{endpoint}")
        options = {"endpoint_override": server.netloc, "scheme": server.scheme}
    elif not region:
        # A bucket answers in its own region only.
        region = pafs.resolve_s3_region(bucket)
    return pafs.S3FileSystem(
        region=region,
        connect_timeout=timeout_seconds,
        request_timeout=timeout_seconds,
        retry_strategy=pafs.AwsStandardS3RetryStrategy(max_attempts=REQUEST_TRIES),
        **options,
    )


def _google(pafs: Any, timeout_seconds: float) -> Any:
    from datetime import timedelta

    # The client repeats requests by itself until this limit, which it counts in whole seconds.
    options: dict[str, Any] = {"retry_time_limit": timedelta(seconds=max(1.0, timeout_seconds))}
    emulator = os.environ.get("STORAGE_EMULATOR_HOST")
    if emulator:
        server = urlsplit(emulator if "://" in emulator else f"http://{emulator}")
        options |= {"endpoint_override": server.netloc, "scheme": server.scheme, "anonymous": True}
    return pafs.GcsFileSystem(**options)


def _azure(pafs: Any) -> Any:
    told = os.environ.get("AZURE_STORAGE_CONNECTION_STRING", "")
    parts = dict(part.split("=", 1) for part in told.split(";") if "=" in part)
    account = parts.get("AccountName") or os.environ.get("AZURE_STORAGE_ACCOUNT")
    if not account:
        raise InputError(
            "DATA", "come with its storage account", "the environment names none",
            "set AZURE_STORAGE_ACCOUNT or AZURE_STORAGE_CONNECTION_STRING",
        )  # fmt: skip
    options: dict[str, Any] = {}
    key = parts.get("AccountKey") or os.environ.get("AZURE_STORAGE_KEY")
    token = parts.get("SharedAccessSignature") or os.environ.get("AZURE_STORAGE_SAS_TOKEN")
    if key:
        options["account_key"] = key
    elif token:
        options["sas_token"] = token
    if "BlobEndpoint" in parts:
        server = urlsplit(parts["BlobEndpoint"])
        for service in ("blob", "dfs"):
            options[f"{service}_storage_authority"] = server.netloc
            options[f"{service}_storage_scheme"] = server.scheme
    return pafs.AzureFileSystem(account, **options)


def _through_fsspec(pafs: Any, scheme: str, host: str) -> Any:
    try:
        from fsspec.core import url_to_fs
    except ImportError as error:
        raise lacking(scheme, "fsspec is not installed") from error
    try:
        system, _ = url_to_fs(f"{scheme}://{host}")
    except ImportError as error:
        raise lacking(scheme, shortened(str(error))) from error
    except ValueError as error:
        raise InputError(
            "DATA", "be a path, or an address of a known scheme", f"'{scheme}://' is none",
            "begin with s3://, gs://, az:// or a scheme that fsspec knows",
        ) from error  # fmt: skip
    return pafs.PyFileSystem(pafs.FSSpecHandler(system))


def persist(ask: Callable[[], T]) -> T:
    """Ask a store, and once more after a pause if what failed may pass.

    Parameters
    ----------
    ask : callable
        The question.

    Returns
    -------
    object
        The answer.
    """
    for left in reversed(range(OPENING_TRIES)):
        try:
            return ask()
        except foreign_errors() as error:
            if not left or not may_pass(str(error)):
                raise
            time.sleep(PAUSE_SECONDS)
    raise AssertionError


def open_input(address: Address) -> pa.NativeFile:
    """Open a file of a store for reading at any place.

    Parameters
    ----------
    address : Address
        Of a file.

    Returns
    -------
    pyarrow.NativeFile
        To be closed by the caller.
    """
    return persist(lambda: address.system.open_input_file(address.inner))


def open_stream(address: Address) -> pa.NativeFile:
    """Open a file of a store for reading from start to end, decompressed by its suffix.

    Parameters
    ----------
    address : Address
        Of a file.

    Returns
    -------
    pyarrow.NativeFile
        To be closed by the caller.
    """
    return persist(lambda: address.system.open_input_stream(address.inner, compression="detect"))


def identify(address: Address) -> tuple[int, int, str | None]:
    """Ask a store what tells one state of a file from another.

    Parameters
    ----------
    address : Address
        Of a file.

    Returns
    -------
    tuple
        Size in bytes; time of modification in nanoseconds since 1970, 0 if the store does not
        tell; ETag, or what else names the content, if the store tells.
    """
    system, inner = address.system, address.inner
    with open_input(address) as file:
        size = int(file.size())
        told = {str(key).lower(): value.decode() for key, value in (file.metadata() or {}).items()}
    etag = told.get("etag")
    modified_ns = _nanoseconds_of(told.get("last-modified", told.get("updated", "")))
    if modified_ns is not None:
        return size, modified_ns, etag
    if not address.is_native:
        etag = str(system.handler.fs.ukey(inner))
    return size, int(persist(lambda: system.get_file_info(inner)).mtime_ns or 0), etag


def _nanoseconds_of(text: str) -> int | None:
    """Read a time as stores write it: ISO 8601, or as in the header of a mail."""
    from datetime import UTC, datetime, timedelta
    from email.utils import parsedate_to_datetime

    for parse in (datetime.fromisoformat, parsedate_to_datetime):
        try:
            moment = parse(text)
        except ValueError:
            continue
        since = moment.astimezone(UTC) - datetime.fromtimestamp(0, UTC)
        return since // timedelta(microseconds=1) * 1000
    return None


def find(
    address: Address, known: Callable[[str], bool], hidden: Callable[[str], bool]
) -> list[Address] | None:
    """Find the files that an address means: itself, those below it, or those its pattern matches.

    Parameters
    ----------
    address : Address
        Of a file or folder, or a glob.
    known : callable
        Whether a file name has a suffix of data.
    hidden : callable
        Whether a name is passed over.

    Returns
    -------
    list of Address or None
        Sorted. Those of a folder have a known suffix; a file named by itself or by a pattern
        may have any. None if nothing is there.
    """
    import pyarrow.fs as pafs

    inner = address.inner
    if address.is_native and not address.bucket:
        raise InputError("DATA", "name its bucket", f"'{address}' has none", "write it in front")
    info = persist(lambda: address.system.get_file_info(inner))
    if info.type == pafs.FileType.File:
        return [address]
    if info.type == pafs.FileType.Directory:
        root, pattern = inner, None
    elif glob.has_magic(inner):
        parts = inner.split("/")
        fixed = next(n for n, part in enumerate(parts) if glob.has_magic(part))
        if not "/".join(parts[:fixed]):
            raise InputError(
                "DATA",
                "name its bucket",
                f"'{address}' is a pattern of buckets",
                "write one address for each",
            )
        root, pattern = "/".join(parts[:fixed]), parts[fixed:]
        if address.is_native and not has_bucket(address):
            return None
    else:
        return None
    found = []
    for path in sorted(_files_below(address, root)):
        names = path[len(root) :].strip("/").split("/")
        if any(hidden(name) for name in names):
            continue
        if pattern is None or _has_matching_folder(names, pattern):
            wanted = known(names[-1])
        else:
            wanted = _matches(names, pattern)
        if wanted:
            found.append(address.beside(path))
    return found


def _files_below(address: Address, folder: str) -> Iterator[str]:
    import pyarrow.fs as pafs

    selector = pafs.FileSelector(folder, recursive=True, allow_not_found=True)
    for info in persist(lambda: address.system.get_file_info(selector)):
        if info.type == pafs.FileType.File:
            yield info.path


def _has_matching_folder(names: Sequence[str], pattern: Sequence[str]) -> bool:
    """Tell whether a pattern without ``**`` matches a folder above the file."""
    return "**" not in pattern and any(
        _matches(names[:length], pattern) for length in range(1, len(names))
    )


def _matches(names: Sequence[str], pattern: Sequence[str]) -> bool:
    """Match folder by folder; ``**`` stands for any number of folders."""
    if not pattern:
        return not names
    if pattern[0] == "**":
        if len(pattern) == 1:
            return bool(names)
        return any(_matches(names[skip:], pattern[1:]) for skip in range(len(names)))
    return (
        bool(names)
        and fnmatch.fnmatchcase(names[0], pattern[0])
        and _matches(names[1:], pattern[1:])
    )


def names_near(address: Address) -> tuple[str, str, list[str]]:
    """List what lies where an address leads to, or in the last folder above that holds anything.

    Parameters
    ----------
    address : Address
        Of something that is missing.

    Returns
    -------
    tuple
        That folder; the name that is missing in it; the names in it, those of folders with a
        slash at the end.
    """
    import pyarrow.fs as pafs

    folder, name, infos = address.inner, "", []
    while "/" in folder:
        folder, _, name = folder.rpartition("/")
        selector = pafs.FileSelector(folder, allow_not_found=True)
        infos = persist(partial(address.system.get_file_info, selector))
        if infos:
            break
    names = [
        info.base_name + ("/" if info.type == pafs.FileType.Directory else "") for info in infos
    ]
    return str(address.beside(folder)), name, sorted(names)


def has_bucket(address: Address) -> bool:
    """Tell whether the bucket of an address exists."""
    import pyarrow.fs as pafs

    info = persist(lambda: address.system.get_file_info(address.bucket))
    return bool(info.type == pafs.FileType.Directory)
