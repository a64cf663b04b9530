"""The table of commands, and the one place where an error becomes an exit code."""

from __future__ import annotations

import errno
import os
import re
import sys
from copy import copy
from itertools import pairwise
from typing import Annotated, Any

import typer
from typer.core import TyperGroup

from phaseid import __version__
from phaseid.cli import (
    calibrate,
    compare,
    config,
    guide,
    identify,
    library,
    lines,
    measure,
    near,
    ratio,
    report,
    screen,
    series,
)
from phaseid.cli.options import say
from phaseid.cli.settings import command_defaults
from phaseid.errors import InputError, PhaseidError

INTERRUPTED = 130
_NEGATIVE = re.compile(r"-\d[\d.,]*")
FIRST_STEPS = """\
phaseid {version}
Which crystalline phases made these diffraction rings?

  phaseid identify 2.34 2.02 1.43 --probe "electron 200 kV"
  phaseid identify rings.csv --must Al --json
  phaseid lines corundum --probe "x-ray Cu Ka"

`phaseid --help` lists the commands,
`phaseid guide` opens the manual.
"""


class Commands(TyperGroup):
    """The group of commands; turns phaseid's own errors into a message and an exit code."""

    def invoke(self, ctx: Any) -> Any:
        """Run the command; PhaseidError becomes its exit code, a closed pipe is a quiet end."""
        try:
            return super().invoke(ctx)
        except PhaseidError as error:
            if ctx.params.get("debug"):
                raise
            say(f"phaseid: {error}")
            raise typer.Exit(error.exit_code) from None
        except BrokenPipeError:
            _silence_stdout()
            raise typer.Exit(0) from None


app = typer.Typer(
    cls=Commands,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)


def _show_version(wanted: bool) -> None:
    if wanted:
        print(f"phaseid {__version__}")
        raise typer.Exit(0)


@app.callback(invoke_without_command=True)
def front(
    ctx: typer.Context,
    version: Annotated[
        bool,
        typer.Option(
            "--version", callback=_show_version, is_eager=True, help="Print the version and stop."
        ),
    ] = False,
    debug: Annotated[
        bool, typer.Option("--debug", help="Show where in the program an error arose.")
    ] = False,
) -> None:
    """Name the crystalline phases behind a list of diffraction rings.

    Rings may come from electrons, X-rays or neutrons. Results go to standard output, messages to
    standard error. Exit codes: 0 answered, 2 wrong input, 3 library missing or unreadable,
    130 interrupted.
    """
    if ctx.invoked_subcommand in ("identify", "report", "series", "near", "lines", "compare"):
        ctx.default_map = command_defaults()
    if ctx.invoked_subcommand is None:
        print(FIRST_STEPS.format(version=__version__), end="")


app.command("identify", short_help="Name the phases behind rings.")(identify.identify)
app.command("report", short_help="Write the answer as one page.")(report.report)
app.command("series", short_help="Follow phases through many patterns.")(series.series)
app.command("measure", short_help="Find rings in images and profiles.")(measure.measure)
app.command("lines", short_help="List the lines of a phase.")(lines.lines)
app.command("near", short_help="List phases with lines near spacings.")(near.near)
app.command("ratio", short_help="Name structure types by ring ratios.")(ratio.ratio)
app.command("screen", short_help="Find what should not be there.")(screen.screen)
app.command("compare", short_help="Can two phases be told apart?")(compare.compare)
app.command("calibrate", short_help="Scale by a known standard.")(calibrate.calibrate)
app.add_typer(library.app, name="library", short_help="Add structures, look them up.")
app.command("config", short_help="Show the defaults in force.")(config.config)
app.command("guide", short_help="Show the manual.")(guide.guide)


def run(arguments: list[str] | None = None) -> None:
    """Run the command line and exit; `arguments` default to those of the process."""
    words = list(sys.argv[1:] if arguments is None else arguments)
    debug = "--debug" in words
    if debug:  # accepted anywhere, so that it can be appended to the line that failed
        words = ["--debug", *(word for word in words if word != "--debug")]
    if (word := _negative_number(words)) is not None:
        say(f"phaseid: '{word}' is negative; spacings, radii and angles are not. Correct it.")
        sys.exit(InputError.exit_code)
    for stream in (sys.stdout, sys.stderr):
        if hasattr(stream, "reconfigure"):  # a terminal without Å shows a substitute
            stream.reconfigure(errors="replace")
    try:
        try:
            _app_for(words)(args=words, prog_name="phaseid")
        finally:
            _flush()
    except KeyboardInterrupt:
        sys.exit(INTERRUPTED)
    except Exception as error:
        if debug:
            raise
        if isinstance(error, OSError) and error.errno in (errno.ENOSPC, errno.EDQUOT):
            _silence_stdout()
            say("phaseid: the answer could not be written, the disk is full. Free some space.")
            sys.exit(1)
        what = f"{type(error).__name__}: {error}".splitlines()[0]
        say(
            f"phaseid: something went wrong inside phaseid ({what}). "
            "Run the same command with --debug to see where."
        )
        sys.exit(1)


def _app_for(words: list[str]) -> typer.Typer:
    """The app with the command called alone: making all of them ready takes longer than an answer.

    The whole of it where no command is named.
    """
    name = next((word for word in words if not word.startswith("-")), None)
    commands = [command for command in app.registered_commands if command.name == name]
    groups = [group for group in app.registered_groups if group.name == name]
    if not commands and not groups:
        return app
    one = copy(app)
    one.registered_commands, one.registered_groups = commands, groups
    return one


def _negative_number(words: list[str]) -> str | None:
    """A negative number where a ring is meant: to the parser it would be an unknown option."""
    for before, word in pairwise(["", *words]):
        if word == "--":
            break
        if _NEGATIVE.fullmatch(word) and not before.startswith("-"):
            return word
    return None


def _flush() -> None:
    if sys.stdout is None:  # closed by whoever called
        return
    try:
        sys.stdout.flush()
    except BrokenPipeError:
        _silence_stdout()


def _silence_stdout() -> None:
    """Point standard output at nothing, so that Python's own last flush stays quiet."""
    os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
