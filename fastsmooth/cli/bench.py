"""The command ``bench``."""

from __future__ import annotations

from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import click

from fastsmooth.cli.options import VOICE_OPTIONS
from fastsmooth.cli.voice import print_json, show_progress

if TYPE_CHECKING:
    from collections.abc import Iterator

    from fastsmooth.measure.figures import Measurement


@click.command()
@click.option("--out", metavar="FILE.json", help="Write the figures and the machine as JSON.")
@click.option(
    "--against", metavar="OTHER.json", help="Compare with a machine that was measured before."
)
@click.option(
    "--from",
    "from_",
    metavar="FILE.json",
    help="Show figures that were written before; measure nothing.",
)
@click.option(
    "--price",
    type=float,
    metavar="PER_HOUR",
    help="What an hour of this machine costs, in any currency: adds what large jobs "
    "cost. Kept in --out.",
)
@click.option("--threads", type=int, metavar="N", help="Most threads. Default: all processors.")
@click.option("--quick", is_flag=True, help="Ten seconds in place of about sixty; rougher.")
@click.option(
    "--folder",
    metavar="FOLDER",
    help="Where temporary Parquet files go; removed at the end. Default: the system's "
    "temporary folder.",
)
@VOICE_OPTIONS
def bench(
    out: str | None, against: str | None, from_: str | None, price: float | None,
    threads: int | None, quick: bool, folder: str | None, as_json: bool, quiet: bool,
) -> None:  # fmt: skip
    """Measure this machine, to choose among machines: memory, Parquet, each kernel, whole curves.

    \b
    Example:
      fastsmooth bench --out this.json --price 0.38
      fastsmooth bench --against this.json           # on the other machine
    """
    from fastsmooth.files_out import check_writable
    from fastsmooth.measure.compare import compare_measurements
    from fastsmooth.measure.figures import OUT_SUFFIXES
    from fastsmooth.measure.reading import load_measurement

    if out is not None:
        check_writable(out, "--out", OUT_SUFFIXES)
    # Read first: nobody waits a minute for a refusal.
    other = None if against is None else load_measurement(against, "--against")
    if from_ is not None:
        found = _load(from_, price, threads, quick, folder)
    else:
        from fastsmooth.measure.run import measure_machine

        with show_progress(quiet, "figures") as progress, interrupted_by_signals():
            found = measure_machine(
                threads=threads, quick=quick, price_per_hour=price, folder=folder,
                progress=progress,
            )  # fmt: skip
    if out is not None:
        found.save(out)
    compared = None if other is None else compare_measurements(found, other)
    if as_json:
        costs = [{"job": one.job, "seconds": one.seconds, "price": one.price}
                 for one in found.costs()]  # fmt: skip
        plain: dict[str, Any] = {**found.to_dict(), "costs": costs}
        if compared is not None:
            plain["comparison"] = compared.to_dict()
        print_json(plain)
    elif not quiet:
        lines = found.lines() if compared is None else compared.lines()
        # As they are: a table must not be wrapped.
        click.echo("\n".join([*lines, *([f"wrote      {out}"] if out else [])]))


def _load(
    path: str, price: float | None, threads: int | None, quick: bool, folder: str | None
) -> Measurement:
    """Load figures in place of measuring; a price given now takes the place of theirs."""
    from dataclasses import replace

    from fastsmooth.errors import InputError
    from fastsmooth.measure.reading import load_measurement
    from fastsmooth.measure.run import check_price

    given = {"--threads": threads is not None, "--quick": quick, "--folder": folder is not None}
    for name, is_given in given.items():
        if is_given:
            raise InputError(
                name, "be left out with --from", "nothing is measured", "leave one of them out"
            )
    found = load_measurement(path, "--from")
    return found if price is None else replace(found, price_per_hour=check_price(price))


@contextmanager
def interrupted_by_signals() -> Iterator[None]:
    """Let an order to end, or a lost terminal, interrupt as Ctrl-C does, so that files go too."""
    import signal
    import threading

    def interrupt(number: int, frame: Any) -> None:
        raise KeyboardInterrupt

    if threading.current_thread() is not threading.main_thread():
        # Only there may handlers be set.
        yield
        return
    names = ("SIGTERM", "SIGHUP")
    known = [getattr(signal, name) for name in names if hasattr(signal, name)]
    # A program that was told to outlive its terminal (nohup) keeps doing so.
    numbers = [one for one in known if signal.getsignal(one) == signal.SIG_DFL]
    for number in numbers:
        signal.signal(number, interrupt)
    try:
        yield
    finally:
        for number in numbers:
            signal.signal(number, signal.SIG_DFL)
