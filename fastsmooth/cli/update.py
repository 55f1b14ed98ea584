"""The command ``update``."""

from __future__ import annotations

import click

from fastsmooth.cli.options import VOICE_OPTIONS
from fastsmooth.cli.voice import print_json, print_lines, show_progress


@click.command()
@click.argument("store")
@click.argument("data", nargs=-1)
@click.option("--x", metavar="COLUMN", help="Column along the axis.")
@click.option("--y", metavar="COLUMN", help="Column whose mean is sought.")
@click.option("--weight", metavar="COLUMN", help="Precision of each row (1 / variance).")
@click.option("--count", metavar="COLUMN", help="How many equal rows each row stands for.")
@click.option("--by", multiple=True, metavar="COLUMN[:UNIT[@ZONE]]",
              help="Keep units apart, spelled like --block (may be repeated).")  # fmt: skip
@click.option("--block", metavar="COLUMN[:UNIT[@ZONE]]",
              help="Rows that may depend on each other; see 'curve --help'.")  # fmt: skip
@click.option("--period", metavar="COLUMN:UNIT[@ZONE]",
              help="Keep hours, days, weeks or months apart, as in logged_at:month; only then the "
              "store can forget and roll.")  # fmt: skip
@click.option("--where", metavar="SQL", help="Use rows that meet this SQL condition.")
@click.option("--range", "range_", nargs=2, metavar="LOW HIGH",
              help="Lowest and highest x. Default: grows with the data.")  # fmt: skip
@click.option("--scale", metavar="WORD", help="Scale of x: linear (default) or log.")
@click.option("--bins", type=int, metavar="N", help="Default: 8192, with --by up to 4096.")
@click.option("--folds", type=int, metavar="N", help="Default: 32.")
@click.option("--replace", is_flag=True,
              help="Count files anew that changed since they were counted.")  # fmt: skip
@click.option("--forget-before", metavar="DATE", help="Drop all periods before this date.")
@click.option("--hash", "with_hash", is_flag=True,
              help="Note and compare the SHA-256 of files, not only size and time.")  # fmt: skip
@click.option("--threads", type=int, metavar="N", help="Default: all processors.")
@VOICE_OPTIONS
def update(
    store: str, data: tuple[str, ...], x: str | None, y: str | None, weight: str | None,
    count: str | None, by: tuple[str, ...], block: str | None, period: str | None,
    where: str | None, range_: tuple[str, str] | None, scale: str | None, bins: int | None,
    folds: int | None, replace: bool, forget_before: str | None, with_hash: bool,
    threads: int | None, as_json: bool, quiet: bool,
) -> None:  # fmt: skip
    """Count new files of DATA into STORE, each once; a new STORE needs --x and --y.

    What is counted is fixed when the store is made and need not be repeated. The other commands
    take the store in place of DATA.

    \b
    Example:
      fastsmooth update plant.store data/ --x wet_bulb_c --y power_kw --block logged_at:day \\
          --period logged_at:month
      fastsmooth update plant.store data/
      fastsmooth curve plant.store --last '12 months' --out curve.parquet
    """
    from fastsmooth.store.settings import StoreSettings
    from fastsmooth.store.telling import update_facts, update_lines
    from fastsmooth.store.update import update_store

    settings = StoreSettings(
        x, y, weight, count, by, block, period, where, range_, scale, bins, folds
    )
    with show_progress(quiet) as progress:
        done = update_store(
            store, list(data) or None, settings, replace_changed=replace,
            forget_before=forget_before, with_hash=with_hash, threads=threads, progress=progress,
        )  # fmt: skip
    if as_json:
        print_json(update_facts(done))
    elif not quiet:
        print_lines(update_lines(done))
