"""Which files are new, changed, moved, gone, or as they were when they were counted."""

from __future__ import annotations

import hashlib
import os
from dataclasses import dataclass

from fastsmooth.addresses import as_address, open_stream
from fastsmooth.errors import InputError
from fastsmooth.files import FileRecord, is_there, read_identity, reading
from fastsmooth.store import disk
from fastsmooth.store.ledger import Entry


@dataclass(frozen=True)
class Sorted:
    """Files by what must be done about them; known ones by their ordinal in the ledger.

    Attributes
    ----------
    new : list of FileRecord
        Never counted.
    changed, touched, moved : dict of int to FileRecord
        With another content; with the same content and another time; under another path.
    unchanged, vanished : list of int
        As they were; gone (named by the caller or not).
    digests : dict of str to str
        SHA-256 of new files, if asked for.
    """

    new: list[FileRecord]
    changed: dict[int, FileRecord]
    touched: dict[int, FileRecord]
    moved: dict[int, FileRecord]
    unchanged: list[int]
    vanished: list[int]
    digests: dict[str, str]


def sort_files(paths: list[str], entries: list[Entry], with_hash: bool) -> Sorted:
    """Sort files by what must be done about them; nothing is counted yet.

    Parameters
    ----------
    paths : list of str
        Files named by the caller.
    entries : list of Entry
        The ledger.
    with_hash : bool
        Whether the content is compared where its SHA-256 was noted.

    Raises
    ------
    InputError
        A file may be one that was counted and is gone, or another; or one is named twice.
    """
    marks = [_file_system_mark(entry.path) for entry in entries]
    vanished = [
        n for n, entry in enumerate(entries) if marks[n] is None and as_address(entry.path) is None
    ]
    place = _places(paths, entries, marks)
    found = Sorted([], {}, {}, {}, [], vanished, {})
    for path, n in place.items():
        record = read_identity(path, None)
        digest = entries[n].sha256
        alike = is_alike(entries[n], record)
        if digest is not None and (with_hash or not alike):
            same = digest == digest_of_file(path)
            if same and not alike:
                found.touched[n] = record
                continue
            alike = same
        if alike:
            found.unchanged.append(n)
        else:
            found.changed[n] = record
    new = [read_identity(path, None) for path in paths if path not in place]
    found.vanished.extend(_moved_away(new, entries, set(place.values())))
    if with_hash:
        found.digests.update({record.path: digest_of_file(record.path) for record in new})
    for record in new:
        former = _counted_before(record, new, entries, found)
        if former is None:
            found.new.append(record)
        else:
            found.moved[former] = record
    for n in found.moved:
        found.vanished.remove(n)
    return found


def _file_system_mark(path: str) -> tuple[int, int] | None:
    """What tells files of this computer apart under any name; None if there is none."""
    if as_address(path) is not None:
        return None
    try:
        status = os.stat(path)
    except OSError:
        return None
    return status.st_dev, status.st_ino


def _places(
    paths: list[str], entries: list[Entry], marks: list[tuple[int, int] | None]
) -> dict[str, int]:
    """Ordinals of the files that were counted, under their own name or by way of a link.

    Raises
    ------
    InputError
        Two paths lead to one file.
    """
    by_path = {entry.path: n for n, entry in enumerate(entries)}
    by_mark = {mark: n for n, mark in enumerate(marks) if mark is not None and mark[1]}
    named: dict[tuple[int, int], str] = {}
    place = {}
    for path in paths:
        mark = _file_system_mark(path)
        if mark is not None and mark[1]:
            if mark in named:
                raise InputError(
                    "DATA", "name each file once", f"'{path}' and '{named[mark]}' are one file",
                    "leave one of them out",
                )  # fmt: skip
            named[mark] = path
            n = by_path.get(path, by_mark.get(mark))
        else:
            n = by_path.get(path)
        if n is not None:
            place[path] = n
    return place


def _moved_away(new: list[FileRecord], entries: list[Entry], named: set[int]) -> list[int]:
    """Objects that are gone and have the ETag of a new one; a store is not asked for all others."""
    marks = {(record.size_bytes, record.etag) for record in new if record.etag is not None}
    return [
        n for n, entry in enumerate(entries)
        if (entry.size_bytes, entry.etag) in marks and n not in named and not is_there(entry.path)
    ]  # fmt: skip


def _counted_before(
    record: FileRecord, new: list[FileRecord], entries: list[Entry], found: Sorted
) -> int | None:
    """The file that was counted under another path and is gone from there; None if there is none.

    Raises
    ------
    InputError
        There may be several, or the other one is still there.
    """
    digest = found.digests.get(record.path)
    if digest is not None:
        for n, entry in enumerate(entries):
            if entry.sha256 == digest:
                if n in found.vanished:
                    return n
                raise _counted_twice(record.path, entry.path)
        for other in new:
            if other is not record and found.digests[other.path] == digest:
                raise _counted_twice(record.path, other.path)
    gone = [n for n in found.vanished if is_alike(entries[n], record)]
    former = [n for n in gone if _has_name_of(entries[n], record)]
    by_name = bool(former)
    if not by_name:
        former = [n for n in gone if not _namesakes(entries[n], new)]
    if not former:
        return None
    entry = entries[former[0]]
    rivals = _namesakes(entry, new) if by_name else [one for one in new if is_alike(entry, one)]
    # Times in whole seconds come from archives and coarse clocks: two files may well share one.
    marked = record.etag is not None and record.etag == entry.etag
    sure = by_name or marked or record.modified_ns % 1_000_000_000 != 0
    if len(former) > 1 or len(rivals) > 1 or not sure:
        raise InputError(
            "DATA", "be told apart from files that were counted and are gone",
            f"'{record.path}' may be '{entry.path}' or another, for size and time are the same",
            "put the files back under their names, or write a new one once more, for a time of "
            "its own",
        )  # fmt: skip
    return former[0]


def _counted_twice(path: str, other: str) -> InputError:
    return InputError(
        "DATA", "hold each file once", f"'{path}' and '{other}' hold the same bytes",
        "leave one of them out",
    )  # fmt: skip


def is_alike(entry: Entry, record: FileRecord) -> bool:
    """Tell whether a file is as it was when it was counted, by ETag, or by size and time."""
    if entry.etag is not None and record.etag is not None:
        return entry.etag == record.etag and entry.size_bytes == record.size_bytes
    return (entry.size_bytes, entry.modified_ns) == (record.size_bytes, record.modified_ns)


def _has_name_of(entry: Entry, record: FileRecord) -> bool:
    return os.path.basename(entry.path) == os.path.basename(record.path)


def _namesakes(entry: Entry, new: list[FileRecord]) -> list[FileRecord]:
    return [one for one in new if _has_name_of(entry, one) and is_alike(entry, one)]


def is_same(record: FileRecord, other: FileRecord) -> bool:
    """Tell whether a file is as it was a moment ago."""
    return (record.size_bytes, record.modified_ns, record.etag) == (
        other.size_bytes, other.modified_ns, other.etag,
    )  # fmt: skip


def digest_of_file(path: str) -> str:
    """Return the SHA-256 of a file, here or in an object store."""
    address = as_address(path)
    with reading(path):
        if address is None:
            return disk.file_digest(path)
        made = hashlib.sha256()
        with open_stream(address) as stream:
            while block := stream.read(1 << 20):
                made.update(block)
        return made.hexdigest()
