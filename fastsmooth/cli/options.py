"""Options that several commands share, and the settings made of them."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING, Any

import click

from fastsmooth.addresses import DEFAULT_TIMEOUT_SECONDS
from fastsmooth.errors import InputError
from fastsmooth.settings import (
    BANDS,
    BIASES,
    CRITERIA,
    ENGINES,
    ESTIMATORS,
    KERNELS,
    NEAREST,
    NOISES,
    SCALES,
)  # fmt: skip

if TYPE_CHECKING:
    from fastsmooth.curve import Curve
    from fastsmooth.fleet import Fleet
    from fastsmooth.passes import Progress
    from fastsmooth.settings import Band, Reading, Smoothing


def with_options(*options: Callable[[Any], Any]) -> Callable[[Any], Any]:
    """Return one decorator that adds all the options, in the order given."""

    def apply(function: Any) -> Any:
        for option in reversed(options):
            function = option(function)
        return function

    return apply


def choice(name: str, words: tuple[str, ...], text: str) -> Callable[[Any], Any]:
    """Return an option that takes one of the words, the first by default."""
    # The words are checked by the Python API, in the same sentence for every caller.
    return click.option(name, default=words[0], show_default=True, metavar="WORD", help=(
        f"{text}: {', '.join(words)}."))  # fmt: skip


DATA_OPTIONS = with_options(
    click.argument("data", nargs=-1, required=True),
    click.option("--x", metavar="COLUMN", help="Column along the axis; a store knows its own."),
    click.option("--y", metavar="COLUMN", help="Column whose mean is sought."),
    click.option("--weight", metavar="COLUMN", help="Precision of each row (1 / variance)."),
    click.option("--count", metavar="COLUMN", help="How many equal rows each row stands for."),
    click.option("--where", metavar="SQL", help="Use rows that meet this SQL condition."),
    click.option("--range", "range_", nargs=2, metavar="LOW HIGH", help="Lowest and highest x."),
    choice("--scale", SCALES, "Scale of x"),
    click.option("--strict", is_flag=True, help="Refuse the data if any row is unusable."),
    click.option("--threads", type=int, metavar="N", help="Default: all processors."),
    click.option("--folds", type=int, default=32, show_default=True, metavar="N",
                 help="Parts of the data for standard errors."),
    click.option("--block", metavar="COLUMN[:UNIT[@ZONE]]",
                 help="Rows that may depend on each other: a column, or a time column with hour, "
                 "day, week or month, as in logged_at:day. Days, weeks and months begin at "
                 "midnight of the column's own zone, which is UTC for CSV times with an offset; "
                 "name another as in logged_at:day@Europe/Madrid. A name that holds a colon "
                 "stands in double quotes, as in '\"logged:at\":day'."),
    click.option("--timeout", type=float, default=DEFAULT_TIMEOUT_SECONDS, show_default=True,
                 metavar="SECONDS", help="How long a silent object store is waited for."),
    click.option("--last", metavar="SPAN",
                 help="Of a store: only so much up to its newest period, as in '12 months'."),
)  # fmt: skip
SMOOTHING_OPTIONS = with_options(
    choice("--estimator", (*ESTIMATORS, NEAREST), "Estimator"),
    choice("--kernel", KERNELS, "Kernel"),
    click.option("--bandwidth", metavar="WIDTH",
                 help="Your own width in units of x (a factor with --scale log)."),
    click.option("--criterion", metavar="WORD", help=(
        f"What chooses the width: {', '.join(CRITERIA)}. Default: leave-block-out with --block, "
        "else leave-one-out.")),
    click.option("--widths", type=int, default=48, show_default=True, metavar="N",
                 help="Widths in the search grid."),
    click.option("--neighbours", type=int, metavar="K",
                 help="Your own number of rows with --estimator nearest."),
    click.option("--robust", is_flag=True,
                 help="Rows far from the curve weigh less; up to three more passes."),
    choice("--engine", ENGINES, "Sums over bins, or over every row in memory"),
    click.option("--memory", type=float, default=4.0, show_default=True, metavar="GIGABYTES",
                 help="What the exact engine may take."),
)  # fmt: skip
UNIT_OPTIONS = with_options(
    click.option("--by", multiple=True, metavar="COLUMN[:UNIT[@ZONE]]",
                 help="One curve for each value of this column, or of a time column's hours, days, "
                 "weeks or months, as in logged_at:month, spelled like --block (may be repeated)."),
    click.option("--shared-bandwidth", is_flag=True,
                 help="With --by: one width for all units, chosen jointly."),
)  # fmt: skip
BAND_OPTIONS = with_options(
    click.option("--level", type=float, default=0.95, show_default=True, metavar="SHARE",
                 help="Confidence level of the band."),
    choice("--band", BANDS, "What the band covers: each point, or the whole curve"),
    choice("--bias", BIASES, "Bias of the band's centre"),
    choice("--noise", NOISES, "Residual variance along x"),
    click.option("--least-rows", type=float, default=30.0, show_default=True, metavar="N",
                 help="Points with fewer effective rows are thin."),
    click.option("--points", type=int, default=256, show_default=True, metavar="N",
                 help="Evenly spaced points of the curve."),
    click.option("--at", metavar="X,X,...", help="Points of your own instead."),
    click.option("--landmarks", is_flag=True,
                 help="Locate the steepest place and the turning points, with intervals."),
    click.option("--limits", metavar="SHARE,SHARE,...",
                 help="Curves below which these shares of the rows lie, as in 0.05,0.95; one more "
                 "pass."),
    click.option("--crossing", "crossings", type=float, multiple=True, metavar="Y",
                 help="Locate where the curve crosses this value (may be repeated)."),
)  # fmt: skip
VOICE_OPTIONS = with_options(
    click.option("--json", "as_json", is_flag=True, help="Print JSON in place of the summary."),
    click.option("--quiet", is_flag=True, help="Print errors only."),
)


def _reading(
    where: str | None, range_: tuple[str, str] | None, scale: str, strict: bool,
    threads: int | None, folds: int, block: str | None, timeout: float, last: str | None,
) -> Reading:  # fmt: skip
    from fastsmooth.settings import Reading, usable_cores

    threads = usable_cores() if threads is None else threads
    return Reading(where, range_, scale, strict, threads, folds, block, timeout, last)


def _smoothing(
    estimator: str,
    kernel: str,
    bandwidth: str | None,
    criterion: str | None,
    widths: int,
    neighbours: int | None,
    robust: bool,
    engine: str,
    memory: float,
) -> Smoothing:
    from fastsmooth.settings import Smoothing

    return Smoothing(
        estimator, kernel, bandwidth, criterion, widths, engine, memory, neighbours, robust
    )


def _band(
    level: float, band: str, bias: str, noise: str, least_rows: float, points: int, at: str | None,
    landmarks: bool, crossings: tuple[float, ...], limits: str | None,
) -> Band:  # fmt: skip
    from fastsmooth.settings import Band

    places = None if at is None else tuple(one.strip() for one in at.split(",") if one.strip())
    shares = () if limits is None else tuple(_share(one) for one in limits.split(","))
    return Band(
        level, band, bias, noise, least_rows, points, places, landmarks, crossings, limits=shares
    )


def _share(text: str) -> float:
    try:
        return float(text)
    except ValueError:
        raise InputError(
            "--limits", "hold shares between 0 and 1", f"it holds '{text}'",
            "write them with commas, as in 0.05,0.95",
        ) from None  # fmt: skip


def _take(options: dict[str, Any], names: Sequence[str]) -> dict[str, Any]:
    return {name: options.pop(name) for name in names}


def check_given(data: tuple[str, ...], options: dict[str, Any]) -> None:
    """Refuse data without the names of x and y, unless they are a store, which knows them."""
    from fastsmooth.store.disk import is_store

    if len(data) == 1 and is_store(data[0]):
        return
    for name in ("x", "y"):
        if options[name] is None:
            command = click.get_current_context().command_path
            raise InputError(f"--{name}", "be given", "it is missing", f"see '{command} --help'")


def make(data: tuple[str, ...], options: dict[str, Any], progress: Progress) -> Curve:
    """Call the API for one curve with what the three groups of options say."""
    from fastsmooth.api import make_curve

    return make_curve(**_arguments(data, options), progress=progress)


def make_many(data: tuple[str, ...], options: dict[str, Any], progress: Progress) -> Fleet:
    """Call the API for curves of many units with what the groups of options say."""
    from fastsmooth.manyunits import make_fleet

    return make_fleet(**_arguments(data, options), progress=progress)


def _arguments(data: tuple[str, ...], options: dict[str, Any]) -> dict[str, Any]:
    check_given(data, options)
    reading = _reading(
        **_take(
            options,
            (
                "where",
                "range_",
                "scale",
                "strict",
                "threads",
                "folds",
                "block",
                "timeout",
                "last",
            ),
        )
    )
    smoothing = _smoothing(
        **_take(
            options,
            (
                "estimator",
                "kernel",
                "bandwidth",
                "criterion",
                "widths",
                "neighbours",
                "robust",
                "engine",
                "memory",
            ),
        )
    )
    names = (
        "level",
        "band",
        "bias",
        "noise",
        "least_rows",
        "points",
        "at",
        "landmarks",
        "crossings",
        "limits",
    )
    band = _band(**_take(options, names)) if "level" in options else None
    whole = data[0] if len(data) == 1 else list(data)
    return {
        "data": whole, "reading": reading, "smoothing": smoothing, "band": band, **options
    }  # fmt: skip
