"""The command ``compare``."""

from __future__ import annotations

from typing import TYPE_CHECKING, Any

import click

from fastsmooth.cli.options import VOICE_OPTIONS
from fastsmooth.cli.voice import print_json, print_lines, show_progress

if TYPE_CHECKING:
    from fastsmooth.settings import Band, Reading, Smoothing


@click.command()
@click.argument("base")
@click.argument("now")
@click.option("--x", metavar="COLUMN", help="Column along the axis. Default: as in BASE's curve.")
@click.option("--y", metavar="COLUMN", help="Column whose mean is compared.")
@click.option("--by", multiple=True, metavar="COLUMN[:UNIT[@ZONE]]",
              help="Where BASE is data: one comparison for each value (may be "
              "repeated).")  # fmt: skip
@click.option("--count", metavar="COLUMN", help="How many equal rows each row stands for.")
@click.option("--where", metavar="SQL", help="Use rows that meet this SQL condition. Default: as "
              "BASE's curve was made.")  # fmt: skip
@click.option("--base-where", metavar="SQL", help="Another condition for BASE, where it is data.")
@click.option("--range", "range_", nargs=2, metavar="LOW HIGH", help="Lowest and highest x.")
@click.option("--scale", metavar="WORD", help="Scale of x, where BASE is data: linear, log.")
@click.option("--block", metavar="COLUMN[:UNIT[@ZONE]]",
              help="Rows that may depend on each other, as in logged_at:day; see 'curve --help'. "
              "Default: as in BASE's curve.")  # fmt: skip
@click.option("--folds", type=int, metavar="N", help="Parts of the data for standard errors.")
@click.option("--threads", type=int, metavar="N", help="Default: all processors.")
@click.option("--estimator", metavar="WORD", help="Where BASE is data: see 'curve --help'.")
@click.option("--kernel", metavar="WORD", help="Where BASE is data.")
@click.option("--bandwidth", metavar="WIDTH", help="Where BASE is data; both curves take it.")
@click.option("--points", type=int, metavar="N", help="Where BASE is data: points of the curves.")
@click.option("--level", type=float, metavar="SHARE", help="Confidence level. Default: BASE's.")
@click.option("--hours-per-row", type=float, metavar="HOURS",
              help="What a row stands for: readings in kW then add up to kWh.")  # fmt: skip
@click.option("--paired", is_flag=True, help="Both sides hold the same blocks, as two machines on "
              "the same days do: errors that they share cancel.")  # fmt: skip
@click.option("--out", metavar="FILE",
              help="Difference along x: .parquet, .arrow, .csv or .json.")  # fmt: skip
@click.option("--units-out", metavar="FILE", help="Excess of each unit, largest first.")
@click.option("--plot", metavar="FILE", help="Picture: .png, .svg or .pdf.")
@VOICE_OPTIONS
def compare(
    base: str, now: str, out: str | None, units_out: str | None, plot: str | None, as_json: bool,
    quiet: bool, **options: Any,
) -> None:  # fmt: skip
    """Compare NOW with BASE: the difference along x, and the excess over what BASE expects.

    BASE is a curve file that 'fastsmooth curve --out' made, or data; NOW is data, or a curve file
    (then without an excess).

    \b
    Example:
      fastsmooth compare curve.parquet june/ --hours-per-row 0.0166667 --plot drift.png
      fastsmooth compare data/ data/ --x wet_bulb_c --y power_kw --block logged_at:day \\
          --base-where "logged_at < '2026-06-01'" --where "logged_at >= '2026-06-01'"
    """
    from fastsmooth.compare import compare_curves
    from fastsmooth.files_out import (
        PICTURE_SUFFIXES,
        TABLE_SUFFIXES,
        check_writable,
        keep_outside,
    )

    for argument, path in (("--out", out), ("--units-out", units_out)):
        if path is not None:
            check_writable(path, argument, TABLE_SUFFIXES)
            keep_outside(path, (base, now))
    if plot is not None:
        check_writable(plot, "--plot", PICTURE_SUFFIXES)
    groups = _groups(base, options)
    with show_progress(quiet) as progress:
        found = compare_curves(base, now, **groups, **options, progress=progress)
        if out is not None:
            found.save(out)
        if units_out is not None:
            found.save_units(units_out)
        if plot is not None:
            found.plot(plot)
    written = [name for name in (out, units_out, plot) if name]
    if as_json:
        print_json({**found.to_dict(), "written": written})
    elif not quiet:
        print_lines([*found.lines(), *([f"wrote      {', '.join(written)}"] if written else [])])


def _groups(base: str, options: dict[str, Any]) -> dict[str, Any]:
    """Take the options that make groups of settings.

    What was not given is as in BASE's curve, or as the store counted that stands for BASE.
    """
    from dataclasses import replace

    from fastsmooth.compare import held_curve
    from fastsmooth.settings import Band, Reading, Smoothing
    from fastsmooth.sides import reading_of
    from fastsmooth.store.disk import is_store
    from fastsmooth.store.opening import open_store

    def given(*names: str) -> dict[str, Any]:
        taken = {name: options.pop(name) for name in names}
        return {name.rstrip("_"): value for name, value in taken.items() if value is not None}

    read = given("where", "range_", "scale", "block", "folds", "threads")
    base_where = options.pop("base_where")
    smooth = given("estimator", "kernel", "bandwidth")
    laid_out = given("points")
    held = held_curve(base)
    groups: dict[str, Reading | Smoothing | Band | None] = {
        "smoothing": Smoothing(**smooth) if smooth else None,
        "band": Band(**laid_out) if laid_out else None,
    }
    if held is not None:
        groups["reading"] = replace(reading_of(held), **read)
        if base_where is not None:
            groups["base_reading"] = replace(reading_of(held), where=base_where)
        return groups
    if is_store(base):
        own = open_store(base).reading
        groups["reading"] = replace(own, **read)
        groups["base_reading"] = replace(own, where=own.where if base_where is None else base_where)
        return groups
    groups["reading"] = reading = Reading(**read)
    if base_where is not None:
        groups["base_reading"] = replace(reading, where=base_where)
    return groups
