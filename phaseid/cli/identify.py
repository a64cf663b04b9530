"""`phaseid identify`: rings in, ranked phases and mixtures out."""

from __future__ import annotations

import re
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Any

import typer

from phaseid.cli.options import (
    Exclude,
    Json,
    LibraryFile,
    Must,
    Only,
    bold,
    open_library,
    say,
    width,
)
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.rings import RingList

TYPED_NUMBER = re.compile(r"[+-]?[\d.,]*\d[\d.,]*(e[+-]?\d+)?(\(\d+\))?", re.IGNORECASE)
UNITS = "d_A, d_nm, g_1/nm, g_1/A, q_1/A, q_1/nm, two_theta_deg, radius_mm, diameter_mm, radius_px"


def identify(
    rings: Annotated[
        list[str],
        typer.Argument(
            metavar="RINGS",
            help="Ring list files (patterns of one specimen), - for standard input, or spacings.",
            show_default=False,
        ),
    ],
    library: LibraryFile = None,
    probe: Annotated[
        str | None,
        typer.Option("--probe", help='Such as "electron 200 kV" or "x-ray Cu Ka"; over the file.'),
    ] = None,
    scale_uncertainty: Annotated[
        str | None,
        typer.Option(
            "--scale-uncertainty",
            metavar="REL",
            help="One sigma of a factor common to all d, such as 1% or 0.005; over the file.",
        ),
    ] = None,
    camera_constant: Annotated[
        str | None,
        typer.Option(
            "--camera-constant", help='For radii: "25.1 +- 0.3 A mm" or "... A px"; over the file.'
        ),
    ] = None,
    unit: Annotated[
        str, typer.Option("--unit", metavar="COLUMN", help=f"What typed numbers are: {UNITS}.")
    ] = "d_A",
    sigma: Annotated[
        str | None,
        typer.Option("--sigma", help="One sigma of each typed number, in its unit or in %."),
    ] = None,
    intensities: Annotated[
        str | None,
        typer.Option(
            "--intensities",
            metavar="LIST",
            help='Of typed rings, in their order: "100 40 25" or grades "vs m w".',
        ),
    ] = None,
    must: Must = None,
    only: Only = None,
    exclude: Exclude = None,
    max_phases: Annotated[
        int, typer.Option("--max-phases", min=1, max=4, help="Phases in a mixture, at most.")
    ] = 3,
    top: Annotated[int, typer.Option("--top", min=1, help="Answers to list.")] = 5,
    as_json: Json = False,
) -> None:
    """Rank the phases and mixtures that explain a list of rings.

    \b
    phaseid identify foil.csv --must Al
    phaseid identify electrons.csv xrays.csv --json
    phaseid identify 2.34 2.02 1.43 1.22 --probe "electron 200 kV"
    """
    from phaseid.matching.chemistry import Chemistry
    from phaseid.matching.identify import identify as rank

    chemistry = Chemistry.parse(must, only, exclude)
    typed = [_numbers(word) for word in rings]
    numbers = [number for several in typed for number in several]
    if numbers and not all(typed):
        stray = rings[typed.index([])]
        raise InputError(
            f"typed spacings and files do not mix ('{numbers[0]}' and '{stray}')",
            remedy="Give only files or only numbers; rings of a second pattern belong in a file",
        )
    if numbers:
        patterns = [
            _typed(
                numbers,
                column=unit,
                probe=probe,
                scale_uncertainty=scale_uncertainty,
                sigma=sigma,
                intensities=intensities,
                camera_constant=camera_constant,
            )
        ]
    else:
        patterns = [_read(word, probe, scale_uncertainty, camera_constant) for word in rings]
    with open_library(library) as shelf:
        answer = rank(patterns, shelf, chemistry=chemistry, max_phases=max_phases, top=top)
    if as_json:
        from phaseid.reports.json import dumps, identification_dict

        print(dumps(identification_dict(answer)))
    else:
        from phaseid.reports.text import as_text

        print(as_text(answer, width=width(), bold=bold()), end="")


def _typed(
    numbers: list[str], *, probe: str | None, intensities: str | None, **given: Any
) -> RingList:
    from phaseid.rings import rings_from_values

    if probe is None:
        raise InputError(
            "typed rings need a probe",
            remedy='Add --probe "electron 200 kV", "x-ray Cu Ka" or "neutron 1.54 A"',
        )
    levels = None if intensities is None else intensities.replace(",", " ").split()
    return rings_from_values(numbers, probe=probe, intensities=levels, **given)


def _read(
    word: str, probe: str | None, scale_uncertainty: str | None, camera_constant: str | None
) -> RingList:
    from phaseid.rings import read_rings, rings_from_text

    if word != "-":
        return read_rings(
            word,
            probe=probe,
            scale_uncertainty=scale_uncertainty,
            camera_constant=camera_constant,
        )
    if sys.stdin.isatty():
        say("Reading a ring list from the keyboard; end it with Ctrl-D.")
    try:
        text = sys.stdin.read()
    except UnicodeDecodeError:
        raise InputError(
            "is not UTF-8 text", path="standard input", remedy="Save the list as UTF-8"
        ) from None
    return rings_from_text(
        text,
        source="standard input",
        probe=probe,
        scale_uncertainty=scale_uncertainty,
        camera_constant=camera_constant,
    )


def _numbers(word: str) -> list[str]:
    """Return the numbers typed in one word, "2.34" or "2.34, 2.02; 1.43"; none for a file.

    A comma may be a decimal one: it separates only where every part has a point of its own.
    """
    if Path(word).is_file():
        return []
    listed = all("." in part for part in word.strip(", ").split(","))
    parts = re.split(r"[\s;,]+" if listed else r"[\s;]+", word.strip("\t ,;"))
    return parts if all(TYPED_NUMBER.fullmatch(part) for part in parts) else []
