"""What commands say: facts on stdout, progress on stderr."""

from __future__ import annotations

import json
import sys
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import click

if TYPE_CHECKING:
    from collections.abc import Iterator

    from fastsmooth.curve import Curve
    from fastsmooth.fleet import Fleet
    from fastsmooth.passes import Progress


def tell_curve(made: Curve, written: list[str], as_json: bool, quiet: bool) -> None:
    """Print a curve in a few lines, or as JSON."""
    from fastsmooth.summary import PRUDENCE, curve_facts, curve_lines

    if as_json:
        print_json({**curve_facts(made), "written": written})
    elif not quiet:
        lines = curve_lines(made)
        if written:
            lines.append(f"wrote      {', '.join(written)}")
        print_lines([*lines, "", PRUDENCE])


def tell_fleet(made: Fleet, written: list[str], as_json: bool, quiet: bool) -> None:
    """Print curves of many units in a few lines, or as JSON."""
    from fastsmooth.fleetwords import fleet_facts, fleet_lines
    from fastsmooth.summary import PRUDENCE

    if as_json:
        print_json({**fleet_facts(made), "written": written})
    elif not quiet:
        lines = fleet_lines(made)
        if written:
            lines += ["", f"wrote      {', '.join(written)}"]
        print_lines([*lines, "", PRUDENCE])


def print_json(plain: Any) -> None:
    """Print plain data as JSON."""
    click.echo(json.dumps(plain, indent=2, allow_nan=False, default=str))


def print_lines(lines: list[str]) -> None:
    """Print facts as a label and a text, wrapped beside the label on a terminal."""
    import shutil
    import textwrap

    width = min(shutil.get_terminal_size((100, 24)).columns, 110)
    for line in lines:
        if len(line) <= width or line.endswith("\\"):
            click.echo(line)
            continue
        indent = " " * 11 if line[10:11] == " " else ""
        click.echo(textwrap.fill(
            line, width, subsequent_indent=indent, break_long_words=False, break_on_hyphens=False
        ))  # fmt: skip


@contextmanager
def show_progress(quiet: bool, counted: str = "rows") -> Iterator[Progress]:
    """Show progress on stderr, on a terminal only; `counted` names what its numbers count."""
    from fastsmooth.passes import silent

    if quiet or not sys.stderr.isatty():
        yield silent
        return
    from rich.console import Console
    from rich.progress import BarColumn, Progress, TextColumn, TimeElapsedColumn

    columns = (
        TextColumn("{task.description}"), BarColumn(), TextColumn("{task.fields[rows]}"),
        TimeElapsedColumn(),
    )  # fmt: skip
    with Progress(*columns, console=Console(stderr=True), transient=True) as bar:
        task = bar.add_task("opening", total=None, rows="")

        def show(stage: str, rows: int, of: int | None) -> None:
            done = {"total": of, "completed": rows} if of else {"total": None}
            bar.update(task, description=stage, rows=f"{rows:,} {counted}" if rows else "", **done)

        yield show
