"""RINGS on the command line: ring list files, typed numbers, or standard input."""

from __future__ import annotations

import re
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli import completion
from phaseid.cli.options import say
from phaseid.cli.settings import calibration_folder, setting
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.rings import RingList, RingTable

STDIN = "standard input"
_NUMBER = re.compile(r"[+-]?[\d.,]*\d[\d.,]*(e[+-]?\d+)?(\(\d+\))?", re.IGNORECASE)
UNITS = "d_A, d_nm, g_1/nm, g_1/A, q_1/A, q_1/nm, two_theta_deg, radius_mm, diameter_mm, radius_px"

Rings = Annotated[
    list[str],
    typer.Argument(
        metavar="RINGS",
        help="Ring list files, images, profiles, typed numbers, or - for standard input.",
        show_default=False,
    ),
]
ProbeOverFile = Annotated[
    str | None,
    typer.Option(
        "--probe",
        metavar="PROBE",
        help='Such as "electron 200 kV" or "x-ray Cu Ka"; over the file.',
    ),
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
        "--camera-constant",
        metavar="CONSTANT",
        help='For radii: "25.1 +- 0.3 A mm" or "... A px"; over the file.',
    ),
]
Unit = Annotated[
    str,
    typer.Option(
        "--unit",
        metavar="COLUMN",
        help=f"What typed numbers are: {UNITS}.",
        autocompletion=completion.units,
    ),
]
Sigma = Annotated[
    str | None,
    typer.Option(
        "--sigma", metavar="SIGMA", help="One sigma of each typed number, in its unit or in %."
    ),
]
Intensities = Annotated[
    str | None,
    typer.Option(
        "--intensities",
        metavar="LIST",
        help='Of typed rings, in their order: "100 40 25" or grades "vs m w".',
    ),
]
CalibrationName = Annotated[
    str | None,
    typer.Option(
        "--calibration",
        metavar="NAME",
        help="A calibration saved by `phaseid calibrate --save NAME`; over the file.",
        autocompletion=completion.calibrations,
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
    probe: str | None = None,
) -> list[RingTable]:
    """The cells of each pattern; raises InputError where one cannot be read.

    `unit`, `sigma`, `intensities` are those of typed numbers, which make one pattern. Images and
    profiles are measured on the way; `probe` tells a profile's Kα pairs.
    """
    from phaseid.rings import table_from_values

    numbers = all_numbers(words)
    if numbers:
        levels = None if intensities is None else intensities.replace(",", " ").split()
        return [table_from_values(numbers, column=unit, sigma=sigma, intensities=levels)]
    if words.count("-") > 1:
        raise InputError("standard input can be read only once", remedy="Name files instead")
    return [_table(word, probe) for word in words]


def _table(word: str, probe: str | None) -> RingTable:
    from phaseid.rings import parse_table, read_text

    if word == "-":
        return parse_table(_standard_input(), STDIN)
    if measurable(word):
        from phaseid.cli.measure import find_rings

        found = find_rings(Path(word), probe=probe)
        say(f"{word}: {len(found.rings)} rings measured; `phaseid measure` shows them.")
        return found.ring_table()
    return parse_table(read_text(word), word)


def measurable(word: str) -> bool:
    """Return whether a file is an image or a profile, from which rings are measured first."""
    from phaseid.rings.measuring.images import is_image
    from phaseid.rings.measuring.telling import is_profile

    path = Path(word)
    return path.is_file() and (is_image(path) or is_profile(path))


def ring_lists(
    words: list[str],
    *,
    unit: str = "d_A",
    sigma: str | None = None,
    intensities: str | None = None,
    probe: str | None = None,
    scale_uncertainty: str | None = None,
    camera_constant: str | None = None,
    calibration: str | None = None,
) -> list[RingList]:
    """The patterns given, read as typed, else as they say, else by the defaults in force.

    A calibration named here is used for every pattern; one set as default only for radii that state
    no camera constant. Raises InputError like `ring_tables`.
    """
    if calibration is not None and camera_constant is not None:
        raise InputError(
            "--calibration and --camera-constant are both given", remedy="Give one of them"
        )
    tables = ring_tables(words, unit=unit, sigma=sigma, intensities=intensities, probe=probe)
    return [
        _ring_list(
            table,
            # a profile measured here already has it, and may have told Kα1 from Kα
            None if "probe" in table.keys and measurable(table.source) else probe,
            scale_uncertainty,
            camera_constant,
            calibration,
        )
        for table in tables
    ]


def ring_list(words: list[str], **given: str | None) -> RingList:
    """The one pattern given; raises InputError where there are several, and like `ring_lists`."""
    _single(words)
    unit = given.pop("unit", None) or "d_A"
    return ring_lists(words, unit=unit, **given)[0]


def _ring_list(
    table: RingTable,
    probe: str | None,
    scale_uncertainty: str | None,
    camera_constant: str | None,
    calibration: str | None,
) -> RingList:
    from phaseid.rings import rings_from_table

    if calibration is None and _needs_constant(table) and camera_constant is None:
        calibration = setting("calibration")
    if calibration is not None:
        from phaseid.rings.calibration_record import load_calibration

        record = load_calibration(calibration, calibration_folder())
        rings = record.apply(table, probe=probe, scale_uncertainty=scale_uncertainty)
        for remark in rings.remarks:
            if remark.startswith("Warning:"):
                say(remark)
        return rings
    if probe is None and "probe" not in table.keys:
        probe = setting("probe")
        if probe is None and not table.source:
            raise InputError(
                "typed rings need a probe",
                remedy='Add --probe "electron 200 kV", "x-ray Cu Ka" or "neutron 1.54 A"',
            )
    return rings_from_table(
        table, probe=probe, scale_uncertainty=scale_uncertainty, camera_constant=camera_constant
    )


def _needs_constant(table: RingTable) -> bool:
    return table.column.quantity == "radius" and "camera constant" not in table.keys


def ring_table(words: list[str], *, unit: str = "d_A", sigma: str | None = None) -> RingTable:
    """The cells of one pattern; raises InputError where it cannot be read or there are several."""
    _single(words)
    return ring_tables(words, unit=unit, sigma=sigma)[0]


def _single(words: list[str]) -> None:
    if len(words) > 1 and not all_numbers(words):
        raise InputError(
            f"this command takes one ring list, not {len(words)}",
            remedy=f"Give '{words[0]}' alone.",
        )


def _standard_input() -> str:
    from phaseid.rings import text_of
    from phaseid.rings.table import MAX_BYTES

    if sys.stdin is None or sys.stdin.closed:
        raise InputError("cannot be read: it is closed", path=STDIN, remedy="Name a file instead")
    if sys.stdin.isatty():
        say("Reading a ring list from the keyboard; end it with Ctrl-D.")
    # bytes: what they mean does not depend on the language of the terminal
    return text_of(sys.stdin.buffer.read(MAX_BYTES + 1), STDIN)
