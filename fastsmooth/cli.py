"""The command line: parses, calls the Python API, prints. No numerics here."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable, Sequence
from contextlib import contextmanager
from typing import TYPE_CHECKING, Any

import click

from fastsmooth.errors import (
    EXIT_INTERRUPTED,
    EXIT_OK,
    EXIT_REFUSED,
    FastsmoothError,
    InputError,
)
from fastsmooth.near import advise, find_near
from fastsmooth.settings import BANDS, BIASES, CRITERIA, ESTIMATORS, KERNELS, NOISES, SCALES

if TYPE_CHECKING:
    from collections.abc import Iterator

    from fastsmooth.curve import Curve
    from fastsmooth.passes import Progress
    from fastsmooth.settings import Band, Reading, Smoothing


def main(arguments: Sequence[str] | None = None) -> int:
    """Run one command and return its exit code: 0 done, 2 refused, 130 interrupted, 1 a bug."""
    try:
        commands.main(args=arguments, prog_name="fastsmooth", standalone_mode=False)
    except FastsmoothError as refusal:
        return _complain(str(refusal), refusal.exit_code)
    except click.ClickException as misuse:
        return _complain(_reword(misuse), EXIT_REFUSED)
    except (KeyboardInterrupt, click.Abort):
        return _complain("Interrupted; nothing was left half-written.", EXIT_INTERRUPTED)
    except BrokenPipeError:
        # Whoever read our output has left; there is nobody to tell.
        sys.stderr.close()
        return EXIT_OK
    return EXIT_OK


def run() -> None:
    """Enter from the shell."""
    sys.exit(main())


def _reword(misuse: click.ClickException) -> str:
    """Say what the parser refuses in the form of all refusals: what, why, and what to do."""
    context = getattr(misuse, "ctx", None)
    help_ = f"see '{context.command_path if context else 'fastsmooth'} --help'"
    parameter = getattr(misuse, "param", None)
    name = "" if parameter is None else parameter.opts[0]
    if isinstance(parameter, click.Argument):
        name = parameter.human_readable_name.upper()
    if isinstance(misuse, click.MissingParameter) and name:
        return str(InputError(name, "be given", "it is missing", help_))
    if isinstance(misuse, click.BadParameter) and parameter is not None:
        kinds = {"integer": "be a whole number", "float": "be a number"}
        requirement = kinds.get(parameter.type.name, f"be {parameter.type.name}")
        return str(InputError(name, requirement, misuse.message.rstrip("."), help_))
    if isinstance(misuse, click.NoSuchOption):
        known = [] if context is None else [
            one for each in context.command.get_params(context) for one in each.opts
        ]  # fmt: skip
        near = find_near(misuse.option_name, known)
        remedy = advise(misuse.option_name, known) if near else help_
        what = f"be an option of '{context.command_path}'" if context else "be a known option"
        return str(InputError(misuse.option_name, what, "there is none of this name", remedy))
    message = misuse.format_message()
    # A call without a command shows the help, and a question names what was meant.
    done = "\n" in message or message.endswith("?")
    return message if done else f"{message.rstrip('.')}; {help_}."


def _complain(sentence: str, code: int) -> int:
    click.echo(f"fastsmooth: {sentence}", err=True)
    return code


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 96})
@click.version_option(package_name="fastsmooth", message="%(prog)s %(version)s")
def commands() -> None:
    """Reference curves from very large tables: the mean of one column as a function of another,
    with a width that the data chose.
    """


def _with(*options: Callable[[Any], Any]) -> Callable[[Any], Any]:
    def apply(function: Any) -> Any:
        for option in reversed(options):
            function = option(function)
        return function

    return apply


def _choice(name: str, words: tuple[str, ...], text: str) -> Callable[[Any], Any]:
    # The words are checked by the Python API, in the same sentence for every caller.
    return click.option(name, default=words[0], show_default=True, metavar="WORD", help=(
        f"{text}: {', '.join(words)}."))  # fmt: skip


_DATA_OPTIONS = _with(
    click.argument("data", nargs=-1, required=True),
    click.option("--x", required=True, metavar="COLUMN", help="Column along the axis."),
    click.option("--y", required=True, metavar="COLUMN", help="Column whose mean is sought."),
    click.option("--weight", metavar="COLUMN", help="Precision of each row (1 / variance)."),
    click.option("--count", metavar="COLUMN", help="How many equal rows each row stands for."),
    click.option("--where", metavar="SQL", help="Use rows that meet this SQL condition."),
    click.option("--range", "range_", nargs=2, metavar="LOW HIGH", help="Lowest and highest x."),
    _choice("--scale", SCALES, "Scale of x"),
    click.option("--strict", is_flag=True, help="Refuse the data if any row is unusable."),
    click.option("--threads", type=int, metavar="N", help="Default: all processors."),
    click.option("--folds", type=int, default=32, show_default=True, metavar="N",
                 help="Parts of the data for standard errors."),
    click.option("--block", metavar="COLUMN[:UNIT]",
                 help="Rows that may depend on each other: a column, or a time column with hour, "
                 "day, week or month, as in logged_at:day."),
)  # fmt: skip
_SMOOTHING_OPTIONS = _with(
    _choice("--estimator", ESTIMATORS, "Estimator"),
    _choice("--kernel", KERNELS, "Kernel"),
    click.option("--bandwidth", metavar="WIDTH",
                 help="Your own width in units of x (a factor with --scale log)."),
    click.option("--criterion", metavar="WORD", help=(
        f"What chooses the width: {', '.join(CRITERIA)}. Default: leave-block-out with --block, "
        "else leave-one-out.")),
    click.option("--widths", type=int, default=48, show_default=True, metavar="N",
                 help="Widths in the search grid."),
)  # fmt: skip
_BAND_OPTIONS = _with(
    click.option("--level", type=float, default=0.95, show_default=True, metavar="SHARE",
                 help="Confidence level of the band."),
    _choice("--band", BANDS, "What the band covers: each point, or the whole curve"),
    _choice("--bias", BIASES, "Bias of the band's centre"),
    _choice("--noise", NOISES, "Residual variance along x"),
    click.option("--least-rows", type=float, default=30.0, show_default=True, metavar="N",
                 help="Points with fewer effective rows are thin."),
    click.option("--points", type=int, default=256, show_default=True, metavar="N",
                 help="Evenly spaced points of the curve."),
    click.option("--at", metavar="X,X,...", help="Points of your own instead."),
    click.option("--landmarks", is_flag=True,
                 help="Locate the steepest place and the turning points, with intervals."),
    click.option("--crossing", "crossings", type=float, multiple=True, metavar="Y",
                 help="Locate where the curve crosses this value (may be repeated)."),
)  # fmt: skip
_VOICE_OPTIONS = _with(
    click.option("--json", "as_json", is_flag=True, help="Print JSON in place of the summary."),
    click.option("--quiet", is_flag=True, help="Print errors only."),
)


def _reading(
    where: str | None, range_: tuple[str, str] | None, scale: str, strict: bool,
    threads: int | None, folds: int, block: str | None,
) -> Reading:  # fmt: skip
    from fastsmooth.settings import Reading, usable_cores

    threads = usable_cores() if threads is None else threads
    return Reading(where, range_, scale, strict, threads, folds, block)


def _smoothing(
    estimator: str, kernel: str, bandwidth: str | None, criterion: str | None, widths: int
) -> Smoothing:
    from fastsmooth.settings import Smoothing

    return Smoothing(estimator, kernel, bandwidth, criterion, widths)


def _band(
    level: float, band: str, bias: str, noise: str, least_rows: float, points: int, at: str | None,
    landmarks: bool, crossings: tuple[float, ...],
) -> Band:  # fmt: skip
    from fastsmooth.settings import Band

    places = None if at is None else tuple(one.strip() for one in at.split(",") if one.strip())
    return Band(level, band, bias, noise, least_rows, points, places, landmarks, crossings)


def _take(options: dict[str, Any], names: Sequence[str]) -> dict[str, Any]:
    return {name: options.pop(name) for name in names}


def _make(data: tuple[str, ...], options: dict[str, Any], progress: Progress) -> Curve:
    """Call the API with what the three groups of options say."""
    from fastsmooth.api import make_curve

    reading = _reading(
        **_take(options, ("where", "range_", "scale", "strict", "threads", "folds", "block"))
    )
    smoothing = _smoothing(
        **_take(options, ("estimator", "kernel", "bandwidth", "criterion", "widths"))
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
    )
    band = _band(**_take(options, names)) if "level" in options else None
    return make_curve(
        data[0] if len(data) == 1 else list(data),
        reading=reading, smoothing=smoothing, band=band, progress=progress, **options,
    )  # fmt: skip


@commands.command()
@_DATA_OPTIONS
@_SMOOTHING_OPTIONS
@_BAND_OPTIONS
@click.option("--out", metavar="FILE", help="Curve table: .parquet, .arrow, .csv or .json.")
@click.option("--plot", metavar="FILE", help="Picture: .png, .svg or .pdf.")
@_VOICE_OPTIONS
def curve(
    data: tuple[str, ...], out: str | None, plot: str | None, as_json: bool, quiet: bool,
    **options: Any,
) -> None:  # fmt: skip
    """Make the reference curve of DATA: a file, folder or glob of Parquet, Arrow or CSV.

    \b
    Example:
      fastsmooth curve 'data/*.parquet' --x wet_bulb_c --y power_kw --out curve.parquet \\
          --plot curve.png
    """
    from fastsmooth.files_out import (
        PICTURE_SUFFIXES,
        TABLE_SUFFIXES,
        check_writable,
        keep_outside,
    )

    if out is not None:
        check_writable(out, "--out", TABLE_SUFFIXES)
    if plot is not None:
        check_writable(plot, "--plot", PICTURE_SUFFIXES)
    if out is not None:
        keep_outside(out, data)
    with _progress(quiet) as progress:
        made = _make(data, options, progress)
        if out is not None:
            made.save(out)
        if plot is not None:
            made.plot(plot)
    _tell_curve(made, [name for name in (out, plot) if name], as_json, quiet)


@commands.command()
@_DATA_OPTIONS
@_SMOOTHING_OPTIONS
@click.option("--out", metavar="FILE", help="Search table: .parquet, .arrow, .csv or .json.")
@_VOICE_OPTIONS
def search(
    data: tuple[str, ...], out: str | None, as_json: bool, quiet: bool, **options: Any
) -> None:
    """Search the bandwidth for DATA and show the criterion of both estimators."""
    from fastsmooth.curve import spare_data
    from fastsmooth.files_out import TABLE_SUFFIXES, check_writable, keep_outside, write_table
    from fastsmooth.summary import search_facts, search_lines

    if out is not None:
        check_writable(out, "--out", TABLE_SUFFIXES)
        keep_outside(out, data)
    with _progress(quiet) as progress:
        made = _make(data, options, progress)
        if out is not None:
            spare_data([record["path"] for record in made.trace["files"]], out, "--out")
            write_table(made.search.table(), out)
    if as_json:
        _print_json({**search_facts(made.search), "grid": made.search.table().to_pydict()})
    elif not quiet:
        _print_lines([*search_lines(made), *([f"wrote      {out}"] if out else [])])


@commands.command()
@click.argument("path")
@_VOICE_OPTIONS
def info(path: str, as_json: bool, quiet: bool) -> None:
    """Show what a curve file was made from, or which columns a data file or folder holds."""
    from fastsmooth.describe import describe, description_lines

    told = describe(path)
    if as_json:
        _print_json(told)
    elif not quiet:
        _print_lines(description_lines(told))


@commands.command()
@click.argument("folder", default="fastsmooth-demo")
@_VOICE_OPTIONS
def demo(folder: str, as_json: bool, quiet: bool) -> None:
    """Write a year of invented readings to FOLDER and make their curve and picture there."""
    from pathlib import Path

    from fastsmooth.demo import BLOCK, WHERE, run_demo

    with _progress(quiet) as progress:
        made = run_demo(Path(folder), progress)
    if not as_json and not quiet:
        _print_lines([
            "invented   one plant, a year of minute readings, 12 Parquet files; same as:",
            f"           fastsmooth curve {folder}/data --x wet_bulb_c --y power_kw "
            f"--where \"{WHERE}\" \\",
            f"               --block {BLOCK} --out {folder}/curve.parquet \\",
            f"               --plot {folder}/curve.png",
            "",
        ])  # fmt: skip
    names = ("curve.parquet", "curve.csv", "curve.png")
    _tell_curve(made, [f"{folder}/{name}" for name in names], as_json, quiet)


def _tell_curve(made: Curve, written: list[str], as_json: bool, quiet: bool) -> None:
    from fastsmooth.summary import PRUDENCE, curve_facts, curve_lines

    if as_json:
        _print_json({**curve_facts(made), "written": written})
    elif not quiet:
        lines = curve_lines(made)
        if written:
            lines.append(f"wrote      {', '.join(written)}")
        _print_lines([*lines, "", PRUDENCE])


def _print_json(plain: Any) -> None:
    click.echo(json.dumps(plain, indent=2, allow_nan=False, default=str))


def _print_lines(lines: list[str]) -> None:
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
def _progress(quiet: bool) -> Iterator[Progress]:
    """Show progress on stderr, on a terminal only."""
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
            bar.update(task, description=stage, rows=f"{rows:,} rows" if rows else "", **done)

        yield show
