"""A figure into a file: the same figure gives the same bytes."""

from __future__ import annotations

import os
from collections.abc import Callable
from typing import BinaryIO

from matplotlib.figure import Figure

from fastsmooth.files_out import PICTURE_SUFFIXES, check_writable, write_atomically
from fastsmooth.report.look import DPI, plain_style


def save_figure(
    path: str | os.PathLike[str], make: Callable[[], Figure], title: str, said: str | None = None
) -> None:
    """Make a figure and write it; the suffix decides: .png, .svg or .pdf.

    Parameters
    ----------
    path : path
        Where the file shall be; it is checked before the figure is made.
    make : callable
        Returns the figure.
    title : str
        For the file's metadata.
    said : str or None
        What the picture shows, likewise.

    Raises
    ------
    WriteError
        The file cannot be written; nothing is left behind.
    """
    suffix = check_writable(path, "--plot", PICTURE_SUFFIXES)
    # No date and no version, which would make equal pictures differ.
    metadata: dict[str, dict[str, str | None]] = {
        ".png": {"Software": None, "Title": title},
        ".svg": {"Date": None, "Title": title},
        ".pdf": {"CreationDate": None, "Title": title},
    }
    if said is not None:
        for kind, told in metadata.items():
            told["Subject" if kind == ".pdf" else "Description"] = said
    made = make()

    def save(stream: BinaryIO) -> None:
        with plain_style():
            made.savefig(stream, format=suffix[1:], dpi=DPI, metadata=metadata[suffix])

    write_atomically(path, save, "--plot")
