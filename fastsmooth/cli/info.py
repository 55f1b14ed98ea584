"""The command ``info``."""

from __future__ import annotations

import click

from fastsmooth.cli.options import VOICE_OPTIONS
from fastsmooth.cli.voice import print_json, print_lines


@click.command()
@click.argument("path")
@VOICE_OPTIONS
def info(path: str, as_json: bool, quiet: bool) -> None:
    """Show what a curve file was made from, or which columns a data file or folder holds."""
    from fastsmooth.describe import describe, description_lines

    told = describe(path)
    if as_json:
        print_json(told)
    elif not quiet:
        print_lines(description_lines(told))
