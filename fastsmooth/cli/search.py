"""The command ``search``."""

from __future__ import annotations

from typing import Any

import click

from fastsmooth.cli.options import DATA_OPTIONS, SMOOTHING_OPTIONS, VOICE_OPTIONS, make
from fastsmooth.cli.voice import print_json, print_lines, show_progress


@click.command()
@DATA_OPTIONS
@SMOOTHING_OPTIONS
@click.option("--out", metavar="FILE", help="Search table: .parquet, .arrow, .csv or .json.")
@VOICE_OPTIONS
def search(
    data: tuple[str, ...], out: str | None, as_json: bool, quiet: bool, **options: Any
) -> None:
    """Search the bandwidth for DATA and show the criterion of both estimators."""
    from fastsmooth.curve import spare_data
    from fastsmooth.files_out import TABLE_SUFFIXES, check_writable, keep_outside, write_table
    from fastsmooth.summary import search_facts, search_lines

    if out is not None:
        check_writable(out, "--out", TABLE_SUFFIXES)
        keep_outside(out, data)
    with show_progress(quiet) as progress:
        made = make(data, options, progress)
        if out is not None:
            spare_data([record["path"] for record in made.trace["files"]], out, "--out")
            write_table(made.search.table(), out)
    if as_json:
        print_json({**search_facts(made.search), "grid": made.search.table().to_pydict()})
    elif not quiet:
        print_lines([*search_lines(made), *([f"wrote      {out}"] if out else [])])
