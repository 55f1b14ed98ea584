"""The command ``score``."""

from __future__ import annotations

import click

from fastsmooth.addresses import DEFAULT_TIMEOUT_SECONDS
from fastsmooth.cli.options import VOICE_OPTIONS
from fastsmooth.cli.voice import print_json, print_lines, show_progress


@click.command()
@click.argument("new", nargs=-1, required=True)
@click.option("--curve", required=True, metavar="FILE",
              help="What 'fastsmooth curve --out' made, of one unit or many.")  # fmt: skip
@click.option("--out", required=True, metavar="PATH",
              help="A file for a file (.parquet, .arrow, .csv), a folder for a folder or glob. It "
              "appears whole or not at all; only scored rows are ever replaced.")  # fmt: skip
@click.option("--x", metavar="COLUMN", help="Column along the axis, if not named as in the curve.")
@click.option("--y", metavar="COLUMN", help="Column to be scored, if not named as in the curve.")
@click.option("--keep", metavar="COLUMN,...",
              help="Columns to write beside the new ones. Default: all.")  # fmt: skip
@click.option("--only", metavar="WORD", help="outside-limits: write rows above and below only.")
@click.option("--where", metavar="SQL", help="Leave out rows that do not meet this SQL condition.")
@click.option("--beyond", type=float, metavar="Z",
              help="Limit in residual standard deviations. Default: 3.29, beyond which one row in "
              "a thousand of a normal scatter lies.")  # fmt: skip
@click.option("--prefix", default="", metavar="TEXT",
              help="Put before the names of the new columns.")  # fmt: skip
@click.option("--threads", type=int, metavar="N", help="Default: all processors.")
@click.option("--timeout", type=float, default=DEFAULT_TIMEOUT_SECONDS, show_default=True,
              metavar="SECONDS", help="How long a silent object store is waited for.")  # fmt: skip
@VOICE_OPTIONS
def score(
    new: tuple[str, ...], curve: str, out: str, x: str | None, y: str | None, keep: str | None,
    only: str | None, where: str | None, beyond: float | None, prefix: str, threads: int | None,
    timeout: float, as_json: bool, quiet: bool,
) -> None:  # fmt: skip
    """Hold every row of NEW against its curve: adds expected, residual, z and status.

    \b
    Example:
      fastsmooth score yesterday/ --curve curve.parquet --out scored/
      fastsmooth score yesterday.parquet --curve curve.parquet --only outside-limits \\
          --out flagged.parquet
    """
    from fastsmooth.score import score_rows

    kept = None if keep is None else [one.strip() for one in keep.split(",") if one.strip()]
    with show_progress(quiet) as progress:
        scored = score_rows(
            new[0] if len(new) == 1 else list(new), curve, out=out, x=x, y=y, keep=kept, only=only,
            where=where, z_limit=beyond, prefix=prefix, threads=threads, timeout_seconds=timeout,
            progress=progress,
        )  # fmt: skip
    if as_json:
        print_json(scored.to_dict())
    elif not quiet:
        print_lines(scored.lines())
