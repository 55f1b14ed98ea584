"""Where scored rows go: which file from which, whole or absent."""

from __future__ import annotations

import dataclasses
import glob
import os
from collections.abc import Iterator, Sequence
from pathlib import Path
from typing import Any, BinaryIO

import pyarrow as pa

from fastsmooth.errors import WriteError
from fastsmooth.files import Task, file_format
from fastsmooth.files_out import _refusal, check_writable, keep_outside, write_atomically
from fastsmooth.parquet import ParquetReader
from fastsmooth.passes import Progress
from fastsmooth.rows_out import (
    SUFFIXES,
    ParquetStyle,
    RowsOut,
    TableRows,
    check_target,
    open_rows,
    whole_folder,
    write_rows,
)
from fastsmooth.scorepass import Deliver, Part, ScorePass, run_pass

Tasks = Iterator[tuple[Task, Iterator[Any]]]


class ScoreWriter:
    """Runs the pass and puts the rows where they belong.

    Parameters
    ----------
    job : ScorePass
        The opened data.
    trace : dict
        What every written file tells of its making.
    relative : sequence of str or None
        Path of each file below the folder that is written; None for a single file.
    threads : int
        Files or row groups at a time.
    progress : callable
        Called as ``progress(stage, rows_done, rows_expected)``.
    """

    def __init__(
        self, job: ScorePass, trace: dict[str, Any], relative: Sequence[str] | None,
        threads: int, progress: Progress,
    ) -> None:  # fmt: skip
        self._job = job
        self._trace = trace
        self._relative = relative
        self._threads = threads
        self._progress = progress
        self._done = 0

    def to_memory(self) -> tuple[Part, pa.Table]:
        """Score everything; return what became of the rows, and the rows."""
        kept: dict[int, pa.Table] = {}

        def deliver(place: int, part: Part, tasks: Tasks) -> None:
            rows = TableRows(self._job.schemas[place])
            self._fill(rows, part, tasks, "the table")
            kept[place] = rows.table

        whole = self._merge(deliver)
        tables = [kept[place] for place in sorted(kept)]
        if len(tables) == 1:
            return whole, tables[0]
        return whole, pa.concat_tables(tables, promote_options="permissive")

    def to_file(self, path: str) -> Part:
        """Score everything into one file; return what became of the rows."""
        parts: list[Part] = []

        def write(stream: BinaryIO) -> None:
            def deliver(place: int, part: Part, tasks: Tasks) -> None:
                self._fill(self._open(stream, path, place), part, tasks, path)

            parts.append(self._merge(deliver))

        # Scored rows can be made again: waiting for the disk would take as long as scoring.
        write_atomically(path, write, on_disk=False)
        return parts[0]

    def to_folder(self, path: str) -> Part:
        """Score each file into one of the same name in a folder; return what became of all rows."""
        assert self._relative is not None
        relative = self._relative
        try:
            with whole_folder(path) as folder:

                def deliver(place: int, part: Part, tasks: Tasks) -> None:
                    name = os.path.join(folder, relative[place])
                    os.makedirs(os.path.dirname(name), exist_ok=True)
                    # Not Python's own files, whose writes would hold up the other threads.
                    with pa.OSFile(name, "wb") as stream:
                        rows = self._open(stream, name, place)
                        self._fill(rows, part, tasks, relative[place])

                return self._merge(deliver)
        except OSError as error:
            raise _refusal(error, path, "--out") from error

    def _open(self, stream: BinaryIO, name: str, place: int) -> RowsOut:
        files = self._job.reader.files
        told = {**self._trace, "file": dataclasses.asdict(files[place]) if files else None}
        return open_rows(stream, name, self._job.schemas[place], self._style(place), told)

    def _merge(self, deliver: Deliver) -> Part:
        whole = self._job.new_part()
        for part in run_pass(self._job, deliver, self._threads, self._report):
            whole.merge(part)
        return whole

    def _report(self, rows: int) -> None:
        self._done += rows
        self._progress("scoring", self._done, self._job.reader.rows_expected)

    def _fill(self, rows: RowsOut, part: Part, tasks: Tasks, name: str) -> None:
        dropping = self._job.wishes.flagged_only or self._job.wishes.where is not None
        try:
            for _, batches in tasks:
                write_rows(rows, batches, name)
                # Where rows are dropped, row groups would shrink: they are filled up instead.
                if not dropping:
                    rows.end_stretch()
            rows.close(part.counts())
        except BaseException:
            rows.abandon()
            raise

    def _style(self, place: int) -> ParquetStyle:
        job = self._job
        if not isinstance(job.reader, ParquetReader):
            return ParquetStyle.of(job.schemas[place])
        wishes = job.wishes
        style = ParquetStyle.like(job.reader._footers[place], wishes.y)
        expected, _, _, status = wishes.new_columns
        # The expected value is as repetitive as x is.
        new = [status, *([expected] if wishes.x in style.dictionaries else [])]
        return dataclasses.replace(style, dictionaries=(*style.dictionaries, *new))


def check_out(out: object, data: Any, files: Sequence[str], single: bool) -> str:
    """Refuse a place for scored rows before any work; return it as text.

    Parameters
    ----------
    out : path
        A file, or a folder for several files.
    data : object
        What the caller named as data.
    files : sequence of str
        The data files.
    single : bool
        Whether one file is to be written.

    Raises
    ------
    WriteError
        It is no path, holds data, lies inside the data, or holds what score did not write.
    """
    if not isinstance(out, str | os.PathLike):
        raise WriteError("--out", "name a place", f"it is {out!r}", "give a path")
    name = os.fspath(out)
    check_target(name, files, not single)
    if single:
        check_writable(name, "--out", SUFFIXES)
    _check_apart(name, data)
    return name


def is_single(data: Any) -> bool:
    """Tell whether one file comes of the data: they are one file, or no files at all."""
    if isinstance(data, list | tuple) and len(data) == 1:
        data = data[0]
    if isinstance(data, list | tuple):
        return not all(isinstance(one, str | os.PathLike) for one in data)
    if not isinstance(data, str | os.PathLike):
        return True
    name = os.fspath(data)
    if "://" in name:
        return file_format(name) is not None and not glob.has_magic(name)
    return os.path.isfile(name)


def relative_paths(data: Any, paths: Sequence[str]) -> list[str]:
    """The path of each file below what was named: a folder, or the fixed part of a glob."""
    if isinstance(data, list | tuple) and len(data) == 1:
        data = data[0]
    if isinstance(data, str | os.PathLike):
        named = os.fspath(data)
        root = named
        if not os.path.isdir(named) and glob.has_magic(named):
            parts = Path(named).parts
            fixed = next(n for n, part in enumerate(parts) if glob.has_magic(part))
            root = os.path.join(*parts[:fixed]) if fixed else "."
    else:
        root = os.path.commonpath([os.path.dirname(os.path.abspath(path)) for path in paths])
    return [os.path.relpath(path, root) for path in paths]


def _check_apart(out: str, data: Any) -> None:
    """Refuse a place inside the data: the next reading would take it for data."""
    named = [data] if isinstance(data, str | os.PathLike) else data
    if not isinstance(named, list | tuple):
        return
    roots = [os.fspath(one) for one in named if isinstance(one, str | os.PathLike)]
    local = [one for one in roots if "://" not in one]
    keep_outside(out, local)
    place = os.path.realpath(out)
    for one in local:
        root = os.path.realpath(one)
        # A pattern with '**' reaches into every folder below its fixed part.
        if "**" in root:
            root = root[: root.index("**")].rpartition(os.sep)[0]
        if os.path.isdir(root) and os.path.commonpath([place, root]) == root:
            raise WriteError(
                "--out", "lie outside DATA", f"'{out}' would be read as data next time",
                "name another folder",
            )  # fmt: skip
