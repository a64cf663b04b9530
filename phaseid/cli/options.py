"""Options that several commands share, and the few things all of them do alike."""

from __future__ import annotations

import os
import shutil
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli.settings import setting, variable

if TYPE_CHECKING:
    from phaseid.library import Library

DEFAULT_PROBE = "x-ray Cu Ka"

LibraryFile = Annotated[
    Path | None,
    typer.Option(
        "--library",
        metavar="FILE",
        readable=False,  # Library.open says it, with its own exit code
        help="The library to search; default: $PHASEID_LIBRARY, else your own, made on first use.",
    ),
]
Json = Annotated[bool, typer.Option("--json", help="Print one JSON object and nothing else.")]
MaxPhases = Annotated[
    int,
    typer.Option("--max-phases", metavar="N", min=1, max=4, help="Phases in a mixture, at most."),
]
Must = Annotated[
    str | None,
    typer.Option("--must", metavar="EL,EL", help="Elements the answer's phases hold together."),
]
Only = Annotated[
    str | None,
    typer.Option("--only", metavar="EL,EL", help="No element but these; 'Fe?': seen with doubt."),
]
AxisText = Annotated[
    str | None,
    typer.Option(
        "--axis",
        metavar="AXIS",
        help="Of the sticks drawn: d, 1/d, q or two-theta; default: as measured.",
    ),
]
Exclude = Annotated[str | None, typer.Option("--not", metavar="EL,EL", help="None of these.")]


def say(message: str) -> None:
    """Tell the person something beside the result, on standard error.

    What could steer a terminal becomes `?`: file names and file contents are quoted in messages.
    """
    plain = "".join(c if c.isprintable() or c == "\n" else "?" for c in message)
    print(plain, file=sys.stderr, flush=True)


def width() -> int:
    """Return how many columns the answer may use: the terminal's, between 40 and 100."""
    return max(40, min(100, shutil.get_terminal_size((80, 24)).columns))


def bold() -> bool:
    """Return whether headings may be bold: on a terminal that has not asked for plain text."""
    plain = os.environ.get("NO_COLOR", "") != "" or os.environ.get("TERM") == "dumb"
    return sys.stdout.isatty() and not plain


def open_library(path: Path | None) -> Library:
    """Open the library named, or that of the settings, or the default one, built on first use.

    Raises LibraryError (exit code 3) where it is missing, unreadable or newer.
    """
    from phaseid.library import Library, open_default

    if path is None and not os.environ.get(variable("library")) and (named := setting("library")):
        path = Path(named).expanduser()
    return open_default(say) if path is None else Library.open(path, say)
