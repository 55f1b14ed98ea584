"""The command ``curve``."""

from __future__ import annotations

from typing import Any

import click

from fastsmooth.cli.options import (
    BAND_OPTIONS,
    DATA_OPTIONS,
    SMOOTHING_OPTIONS,
    VOICE_OPTIONS,
    make,
)
from fastsmooth.cli.voice import show_progress, tell_curve


@click.command()
@DATA_OPTIONS
@SMOOTHING_OPTIONS
@BAND_OPTIONS
@click.option("--out", metavar="FILE", help="Curve table: .parquet, .arrow, .csv or .json.")
@click.option("--plot", metavar="FILE", help="Picture: .png, .svg or .pdf.")
@VOICE_OPTIONS
def curve(
    data: tuple[str, ...], out: str | None, plot: str | None, as_json: bool, quiet: bool,
    **options: Any,
) -> None:  # fmt: skip
    """Make the reference curve of DATA: a file, folder or glob of Parquet, Arrow or CSV.

    \b
    Example:
      fastsmooth curve 'data/*.parquet' --x wet_bulb_c --y power_kw --out curve.parquet \\
          --plot curve.png
    """
    from fastsmooth.files_out import (
        PICTURE_SUFFIXES,
        TABLE_SUFFIXES,
        check_writable,
        keep_outside,
    )

    if out is not None:
        check_writable(out, "--out", TABLE_SUFFIXES)
    if plot is not None:
        check_writable(plot, "--plot", PICTURE_SUFFIXES)
    if out is not None:
        keep_outside(out, data)
    with show_progress(quiet) as progress:
        made = make(data, options, progress)
        if out is not None:
            made.save(out)
        if plot is not None:
            made.plot(plot)
    tell_curve(made, [name for name in (out, plot) if name], as_json, quiet)
