"""The command ``curve``."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager
from typing import Any

import click

from fastsmooth.cli.options import (
    BAND_OPTIONS,
    DATA_OPTIONS,
    SMOOTHING_OPTIONS,
    UNIT_OPTIONS,
    VOICE_OPTIONS,
    make,
    make_many,
)
from fastsmooth.cli.voice import show_progress, tell_curve, tell_fleet
from fastsmooth.errors import InputError


@click.command()
@DATA_OPTIONS
@SMOOTHING_OPTIONS
@BAND_OPTIONS
@UNIT_OPTIONS
@click.option("--out", metavar="FILE", help="Curve table: .parquet, .arrow, .csv or .json.")
@click.option("--plot", metavar="FILE", help="Picture: .png, .svg or .pdf.")
@click.option("--page", metavar="FILE", help="Page for a browser: .html.")
@click.option(
    "--cluster",
    metavar="ADDRESS",
    help="Count on the workers of this Dask scheduler, as in tcp://10.0.0.7:8786.",
)
@VOICE_OPTIONS
def curve(
    data: tuple[str, ...], out: str | None, plot: str | None, page: str | None,
    cluster: str | None, as_json: bool, quiet: bool, **options: Any,
) -> None:  # fmt: skip
    """Make the reference curve of DATA: a file, folder or glob of Parquet, Arrow or CSV.

    \b
    Example:
      fastsmooth curve 'data/*.parquet' --x wet_bulb_c --y power_kw --out curve.parquet \\
          --plot curve.png
    """
    from fastsmooth.files_out import (
        PAGE_SUFFIXES,
        PICTURE_SUFFIXES,
        TABLE_SUFFIXES,
        check_writable,
        keep_outside,
    )

    if out is not None:
        check_writable(out, "--out", TABLE_SUFFIXES)
    if plot is not None:
        check_writable(plot, "--plot", PICTURE_SUFFIXES)
    if page is not None:
        check_writable(page, "--page", PAGE_SUFFIXES)
    if out is not None:
        keep_outside(out, data)
    if options["by"]:
        _many(data, out, page, {"--plot": plot, "--cluster": cluster}, as_json, quiet, options)
        return
    if options.pop("shared_bandwidth"):
        raise InputError(
            "--shared-bandwidth", "come with --by", "there is one unit",
            "name what tells units apart, as in --by plant",
        )  # fmt: skip
    del options["by"]
    with show_progress(quiet) as progress, _cluster(cluster) as elsewhere:
        made = make(data, {**options, **elsewhere}, progress)
        if out is not None:
            made.save(out)
        if plot is not None:
            made.plot(plot)
        if page is not None:
            made.page(page)
    tell_curve(made, [name for name in (out, plot, page) if name], as_json, quiet)


def _many(
    data: tuple[str, ...], out: str | None, page: str | None, unknown: dict[str, str | None],
    as_json: bool, quiet: bool, options: dict[str, Any],
) -> None:  # fmt: skip
    """Make the curves of many units."""
    for option, given in unknown.items():
        if given is not None:
            raise InputError(
                option, "be left out with --by", f"it is {given!r}",
                "make one unit's curve with --where for it",
            )  # fmt: skip
    with show_progress(quiet) as progress:
        made = make_many(data, options, progress)
        if out is not None:
            made.save(out)
        if page is not None:
            from fastsmooth.report.page import write_page

            write_page(made, page)
    tell_fleet(made, [name for name in (out, page) if name], as_json, quiet)


@contextmanager
def _cluster(address: str | None) -> Iterator[dict[str, Any]]:
    """Connect to a cluster if one is named; gives what `make_curve` is told about it."""
    if address is None:
        yield {}
        return
    from fastsmooth.engines.dask import connected

    with connected(address) as counting:
        yield {"counting": counting}
