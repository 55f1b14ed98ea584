"""The command ``demo``."""

from __future__ import annotations

from typing import TYPE_CHECKING

import click

from fastsmooth.cli.options import VOICE_OPTIONS
from fastsmooth.cli.voice import print_json, print_lines, show_progress, tell_curve

if TYPE_CHECKING:
    from fastsmooth.demo import Night


@click.command()
@click.argument("folder", default="fastsmooth-demo")
@VOICE_OPTIONS
def demo(folder: str, as_json: bool, quiet: bool) -> None:
    """Invent readings of milk-cooling plants in FOLDER, and do a night's work on them there."""
    from pathlib import Path

    from fastsmooth.demo import BLOCK, WHERE, run_demo, run_night
    from fastsmooth.fleetwords import fleet_facts
    from fastsmooth.summary import curve_facts

    with show_progress(quiet) as progress:
        made = run_demo(Path(folder), progress)
        night = run_night(Path(folder), progress)
    if as_json:
        print_json({
            "curve": curve_facts(made), "fleet": fleet_facts(night.fleet),
            "scored": night.scored.to_dict(), "compared": night.compared.to_dict(),
        })  # fmt: skip
    if as_json or quiet:
        return
    print_lines([
        "invented   one plant, a year of minute readings, 12 Parquet files; same as:",
        f"           fastsmooth curve {folder}/data --x wet_bulb_c --y power_kw "
        f'--where "{WHERE}" \\',
        f"               --block {BLOCK} --out {folder}/curve.parquet \\",
        f"               --plot {folder}/curve.png",
        "",
    ])  # fmt: skip
    names = ("curve.parquet", "curve.csv", "curve.png")
    tell_curve(made, [f"{folder}/{name}" for name in names], as_json, quiet)
    _tell_night(folder, night)


def _tell_night(folder: str, night: Night) -> None:
    """Print what each command of a night gives."""
    from fastsmooth.demo import night_commands
    from fastsmooth.fleetwords import fleet_lines
    from fastsmooth.store.telling import update_lines
    from fastsmooth.summary import PRUDENCE

    update, _, curve, score, compare, _ = night_commands(folder)
    told = (
        (update, update_lines(night.updated)), (curve, fleet_lines(night.fleet)),
        (score, night.scored.lines()), (compare, night.compared.lines()),
    )  # fmt: skip
    print_lines(["", "invented   six plants, a year of ten-minute readings and a month after it:"])
    for command, lines in told:
        click.echo(f"\n$ {command}")
        print_lines([line for line in lines if line not in ("", PRUDENCE)])
    names = ("curves.parquet", "fleet.html", "flagged", "excess.csv", "drift.png")
    print_lines(["", f"wrote      {', '.join(f'{folder}/{name}' for name in names)}"])
