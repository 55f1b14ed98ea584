"""What object stores answer when something is wrong, in one plain sentence each."""

from __future__ import annotations

import os
import sys
from collections.abc import Sequence
from typing import TYPE_CHECKING

from fastsmooth.errors import InputError

if TYPE_CHECKING:
    from fastsmooth.addresses import Address

_FIRST_LETTERS = 160
_PASSING = ("NETWORK_CONNECTION", "SLOW_DOWN", "INTERNAL_FAILURE", "SERVICE_UNAVAILABLE",
            "THROTTLING", "HTTP status 5", "Connection reset")  # fmt: skip
# The client has waited its time out already, as often as it may.
_WAITED = ("Timeout was reached", "Operation too slow", "timed out", "Retry policy exhausted")


def may_pass(text: str) -> bool:
    """Tell whether what failed may succeed a moment later, from the error's text."""
    return any(word in text for word in _PASSING) and not any(word in text for word in _WAITED)


def foreign_errors() -> tuple[type[Exception], ...]:
    """Return what file systems raise: Arrow's errors, those of the system, those of fsspec's HTTP.

    Returns
    -------
    tuple of exception classes
        For an ``except`` clause.
    """
    import pyarrow as pa

    # fsspec passes on the errors of its HTTP client, some of which are no OSError.
    client = getattr(sys.modules.get("aiohttp"), "ClientError", None)
    return (pa.ArrowException, OSError, *(() if client is None else (client,)))


def lacking(scheme: str, why: str) -> InputError:
    """Return the refusal of a scheme for which a package is missing."""
    return InputError(
        "DATA", "be reached by what is installed", f"'{scheme}://' is not: {why}",
        "install fastsmooth[fsspec] and what the scheme needs",
    )  # fmt: skip


def no_bucket(address: Address) -> InputError:
    """Return the refusal of an address whose bucket does not exist."""
    return InputError(
        "DATA", "lie in a bucket that exists",
        f"there is no bucket '{address.bucket}' for '{address}'",
        "check the address and, for another server, the endpoint in the environment",
    )  # fmt: skip


_REFUSED_KEY = ("INVALID_ACCESS_KEY_ID", "SIGNATURE_DOES_NOT_MATCH", "INVALID_CLIENT_TOKEN_ID",
                "EXPIRED_TOKEN", "InvalidAccessKeyId", "ExpiredToken")  # fmt: skip
_NO_KEY = ("MISSING_AUTHENTICATION", "access token", "DefaultAzureCredential", "NoCredentials")
_DENIED = ("ACCESS_DENIED", "PERMISSION_DENIED", "Permission denied", "AuthorizationFailure",
           "AuthenticationFailed", "Forbidden", "HTTP status 403", "HTTP status 401")  # fmt: skip
_ELSEWHERE = ("PERMANENT_REDIRECT", "HTTP status 301", "AUTHORIZATION_HEADER_MALFORMED")
_UNREACHED = ("NETWORK_CONNECTION", "curlCode", "CURL error", "UNAVAILABLE", "Could not connect",
              "Could not resolve", "Fail to get a new connection", "Cannot connect",
              "Connection refused", "timed out", "REQUEST_TIMEOUT", "SLOW_DOWN", "INTERNAL_FAILURE",
              "HTTP status 5")  # fmt: skip
_SET_KEYS = {
    "s3": "AWS_ACCESS_KEY_ID and AWS_SECRET_ACCESS_KEY, or AWS_PROFILE",
    "gs": "GOOGLE_APPLICATION_CREDENTIALS",
    "az": "AZURE_STORAGE_KEY, AZURE_STORAGE_SAS_TOKEN or AZURE_STORAGE_CONNECTION_STRING",
}


def explain(address: Address, error: BaseException) -> InputError | None:
    """Put what a store answered into one sentence.

    Parameters
    ----------
    address : Address
        What was asked for.
    error : Exception
        What pyarrow or fsspec raised.

    Returns
    -------
    InputError or None
        None if the error tells nothing of the store: the file itself is at fault.
    """
    text = str(error)

    def says(words: Sequence[str]) -> bool:
        return any(word in text for word in words)

    keys = _SET_KEYS.get(address.scheme, "what the store asks for")
    if says(("NO_SUCH_BUCKET", "ContainerNotFound", f"Bucket '{address.bucket}' not found")):
        return no_bucket(address)
    if says(_NO_KEY) or (says(_DENIED) and not _has_keys(address.scheme)):
        return InputError(
            "DATA", "come with credentials in the environment",
            f"'{address}' is closed to strangers and the environment holds none", f"set {keys}",
        )  # fmt: skip
    if says(_REFUSED_KEY):
        return InputError(
            "DATA", "come with valid credentials", f"those in the environment are refused for "
            f"'{address}' ({_first_sentence(error)})", f"renew {keys}",
        )  # fmt: skip
    if says(_DENIED) or isinstance(error, PermissionError):
        return InputError(
            "DATA", "be readable", f"access to '{address}' is denied to the credentials in the "
            "environment", "ask for leave to list and to read it, or use other credentials",
        )  # fmt: skip
    if says(_ELSEWHERE):
        return InputError(
            "DATA", "be asked for in its own region", f"'{address}' lies in another",
            "set AWS_REGION",
        )  # fmt: skip
    if says(_UNREACHED) or isinstance(error, ConnectionError | TimeoutError):
        return InputError(
            "DATA", "be reachable",
            f"the server of '{address}' did not answer as it should ({_reason(text)})",
            "check the network and the endpoint in the environment, or wait longer "
            "with --timeout",
        )  # fmt: skip
    return None


def _has_keys(scheme: str) -> bool:
    """Tell whether the environment holds what could be a credential; only asked for S3."""
    if scheme != "s3":
        return True
    names = (
        "AWS_ACCESS_KEY_ID", "AWS_PROFILE", "AWS_WEB_IDENTITY_TOKEN_FILE",
        "AWS_CONTAINER_CREDENTIALS_RELATIVE_URI", "AWS_CONTAINER_CREDENTIALS_FULL_URI",
    )  # fmt: skip
    if any(os.environ.get(name) for name in names):
        return True
    shared = os.environ.get("AWS_SHARED_CREDENTIALS_FILE", "~/.aws/credentials")
    return os.path.exists(os.path.expanduser(shared))


def _reason(text: str) -> str:
    """Pick the part of a long message that says what failed."""
    for mark in ("Details: ", "curlCode: ", "CURL error ", "Azure Error: "):
        if mark in text:
            text = text.rpartition(mark)[2]
            break
    return shortened(text)


def _first_sentence(error: BaseException) -> str:
    text = str(error)
    # The first half of the client's message only repeats the address.
    return shortened(text.rpartition("operation: ")[2]) or type(error).__name__


def shortened(text: str) -> str:
    """Return the first sentence of a message, without what changes from request to request."""
    line = text.strip().split("\n")[0].strip()
    for mark in (" (Request ID", " error_info="):
        line = line.split(mark)[0]
    return line.split(". ")[0].rstrip(". ")[:_FIRST_LETTERS]
