"""The command ``demo``."""

from __future__ import annotations

import click

from fastsmooth.cli.options import VOICE_OPTIONS
from fastsmooth.cli.voice import print_lines, show_progress, tell_curve


@click.command()
@click.argument("folder", default="fastsmooth-demo")
@VOICE_OPTIONS
def demo(folder: str, as_json: bool, quiet: bool) -> None:
    """Write a year of invented readings to FOLDER and make their curve and picture there."""
    from pathlib import Path

    from fastsmooth.demo import BLOCK, WHERE, run_demo

    with show_progress(quiet) as progress:
        made = run_demo(Path(folder), progress)
    if not as_json and not quiet:
        print_lines([
            "invented   one plant, a year of minute readings, 12 Parquet files; same as:",
            f"           fastsmooth curve {folder}/data --x wet_bulb_c --y power_kw "
            f"--where \"{WHERE}\" \\",
            f"               --block {BLOCK} --out {folder}/curve.parquet \\",
            f"               --plot {folder}/curve.png",
            "",
        ])  # fmt: skip
    names = ("curve.parquet", "curve.csv", "curve.png")
    tell_curve(made, [f"{folder}/{name}" for name in names], as_json, quiet)
