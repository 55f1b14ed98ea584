"""The command line: parses, calls the Python API, prints. No numerics here."""

from __future__ import annotations

import sys
from collections.abc import Sequence

import click

from fastsmooth.cli.bench import bench
from fastsmooth.cli.compare import compare
from fastsmooth.cli.curve import curve
from fastsmooth.cli.demo import demo
from fastsmooth.cli.info import info
from fastsmooth.cli.score import score
from fastsmooth.cli.search import search
from fastsmooth.cli.update import update
from fastsmooth.errors import (
    EXIT_INTERRUPTED,
    EXIT_OK,
    EXIT_REFUSED,
    FastsmoothError,
    InputError,
)
from fastsmooth.near import find_near


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
        # Dashes, which all options share, would make strangers look alike.
        near = find_near(misuse.option_name.lstrip("-"), [one.lstrip("-") for one in known])
        remedy = "use " + " or ".join(f"'--{one}'" for one in near) if near else help_
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


for _command in (curve, search, score, info, demo, bench, update, compare):
    commands.add_command(_command)
