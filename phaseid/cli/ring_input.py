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
        help="Ring list files, - for standard input, or typed numbers.",
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


def typed_numbers(word: str) -> list[str]:
    """Return the numbers typed in one word, "2.34" or "2.34, 2.02; 1.43"; none for a file.

    A comma may be a decimal one: it separates only where every part has a point of its own.
    """
    if Path(word).is_file():
        return []
    listed = all("." in part for part in word.strip(", ").split(","))
    parts = re.split(r"[\s;,]+" if listed else r"[\s;]+", word.strip("\t ,;"))
    return parts if all(_NUMBER.fullmatch(part) for part in parts) else []


def all_numbers(words: list[str]) -> list[str]:
    """Return the positions typed, none where the words are files.

    Raises InputError where numbers and files are mixed.
    """
    typed = [typed_numbers(word) for word in words]
    numbers = [number for several in typed for number in several]
    if numbers and not all(typed):
        raise InputError(
            f"typed numbers and files do not mix ('{numbers[0]}' and '{words[typed.index([])]}')",
            remedy="Give only files or only numbers; rings of a second pattern belong in a file",
        )
    return numbers


def ring_tables(
    words: list[str],
    *,
    unit: str = "d_A",
    sigma: str | None = None,
    intensities: str | None = None,
) -> list[RingTable]:
    """The cells of each pattern; raises InputError where one cannot be read.

    `unit`, `sigma`, `intensities` are those of typed numbers, which make one pattern.
    """
    from phaseid.rings import parse_table, read_text, table_from_values

    numbers = all_numbers(words)
    if numbers:
        levels = None if intensities is None else intensities.replace(",", " ").split()
        return [table_from_values(numbers, column=unit, sigma=sigma, intensities=levels)]
    if words.count("-") > 1:
        raise InputError("standard input can be read only once", remedy="Name files instead")
    return [
        parse_table(_standard_input(), STDIN) if word == "-" else parse_table(read_text(word), word)
        for word in words
    ]


def ring_table(words: list[str], *, unit: str = "d_A", sigma: str | None = None) -> RingTable:
    """The cells of one pattern; raises InputError where it cannot be read or there are several."""
    if len(words) > 1 and not all_numbers(words):
        raise InputError(
            f"this command takes one ring list, not {len(words)}",
            remedy=f"Give '{words[0]}' alone.",
        )
    return ring_tables(words, unit=unit, sigma=sigma)[0]


def _standard_input() -> str:
    from phaseid.rings import text_of

    if sys.stdin is None or sys.stdin.closed:
        raise InputError("cannot be read: it is closed", path=STDIN, remedy="Name a file instead")
    if sys.stdin.isatty():
        say("Reading a ring list from the keyboard; end it with Ctrl-D.")
    # bytes: what they mean does not depend on the language of the terminal
    return text_of(sys.stdin.buffer.read(), STDIN)
