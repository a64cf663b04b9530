"""RINGS on the command line: ring list files, typed numbers, or standard input."""

from __future__ import annotations

import re
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli.options import say
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.rings import RingTable

STDIN = "standard input"
_NUMBER = re.compile(r"[+-]?[\d.,]*\d[\d.,]*(e[+-]?\d+)?(\(\d+\))?", re.IGNORECASE)
UNITS = "d_A, d_nm, g_1/nm, g_1/A, q_1/A, q_1/nm, two_theta_deg, radius_mm, diameter_mm, radius_px"

Rings = Annotated[
    list[str],
    typer.Argument(
        metavar="RINGS",
        help="A ring list file, - for standard input, or typed numbers.",
        show_default=False,
    ),
]
ProbeOverFile = Annotated[
    str | None,
    typer.Option("--probe", help='Such as "electron 200 kV" or "x-ray Cu Ka"; over the file.'),
]
ScaleUncertainty = Annotated[
    str | None,
    typer.Option(
        "--scale-uncertainty",
        metavar="REL",
        help="One sigma of a factor common to all d, such as 1% or 0.005; over the file.",
    ),
]
CameraConstantText = Annotated[
    str | None,
    typer.Option(
        "--camera-constant", help='For radii: "25.1 +- 0.3 A mm" or "... A px"; over the file.'
    ),
]
Unit = Annotated[
    str, typer.Option("--unit", metavar="COLUMN", help=f"What typed numbers are: {UNITS}.")
]
Sigma = Annotated[
    str | None,
    typer.Option("--sigma", help="One sigma of each typed number, in its unit or in %."),
]
Intensities = Annotated[
    str | None,
    typer.Option(
        "--intensities",
        metavar="LIST",
        help='Of typed rings, in their order: "100 40 25" or grades "vs m w".',
    ),
]


def is_number(word: str) -> bool:
    """Whether a word is a typed position: a number, and no file is called so."""
    return _NUMBER.fullmatch(word) is not None and not Path(word).is_file()


def all_numbers(words: list[str]) -> bool:
    """Whether the words are typed positions; raises InputError where they are mixed with files."""
    numbers = [word for word in words if is_number(word)]
    if numbers and len(numbers) < len(words):
        stray = next(word for word in words if word not in numbers)
        raise InputError(
            f"typed numbers and files do not mix ('{numbers[0]}' and '{stray}')",
            remedy="Give only files or only numbers; rings of a second pattern belong in a file",
        )
    return bool(numbers)


def ring_table(
    words: list[str],
    *,
    unit: str = "d_A",
    sigma: str | None = None,
    intensities: str | None = None,
) -> RingTable:
    """The cells of one pattern; raises InputError where it cannot be read or there are several."""
    from phaseid.rings import parse_table, read_text, table_from_values

    if all_numbers(words):
        levels = None if intensities is None else intensities.replace(",", " ").split()
        return table_from_values(words, column=unit, sigma=sigma, intensities=levels)
    if len(words) > 1:
        raise InputError(
            f"this command takes one ring list, not {len(words)}",
            remedy=f"Give '{words[0]}' alone.",
        )
    if words[0] != "-":
        return parse_table(read_text(words[0]), words[0])
    return parse_table(_standard_input(), STDIN)


def _standard_input() -> str:
    if sys.stdin.isatty():
        say("Reading a ring list from the keyboard; end it with Ctrl-D.")
    try:
        return sys.stdin.read()
    except UnicodeDecodeError:
        raise InputError("is not UTF-8 text", path=STDIN, remedy="Save the list as UTF-8") from None
