"""`phaseid near`: strong lines of the library near given spacings."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli.options import (
    DEFAULT_PROBE,
    Exclude,
    Json,
    LibraryFile,
    Must,
    Only,
    open_library,
    say,
    width,
)
from phaseid.cli.ring_input import Unit, all_numbers, ring_list

if TYPE_CHECKING:
    from phaseid.matching.near import NearLine

SCHEMA = "phaseid.near/1"


def near(
    spacings: Annotated[
        list[str],
        typer.Argument(
            metavar="D",
            help="Spacings in Å, or see --unit; or a ring list, or - for standard input.",
            show_default=False,
        ),
    ],
    unit: Unit = "d_A",
    tolerance: Annotated[
        str, typer.Option("--tolerance", metavar="REL", help="How near: 1% or 0.01, of d.")
    ] = "1%",
    probe: Annotated[
        str, typer.Option("--probe", metavar="PROBE", help="Whose intensities say what is strong.")
    ] = DEFAULT_PROBE,
    min_intensity: Annotated[
        float,
        typer.Option(
            "--min-intensity", metavar="I", min=0, max=100, help="Weakest line (strongest = 100)."
        ),
    ] = 10.0,
    must: Must = None,
    only: Only = None,
    exclude: Exclude = None,
    top: Annotated[
        int,
        typer.Option("--top", metavar="N", min=1, help="Phases to show as text (JSON holds all)."),
    ] = 20,
    library: LibraryFile = None,
    as_json: Json = False,
) -> None:
    """List phases with a strong line near each spacing; those that meet most come first.

    \b
    phaseid near 2.338 2.025 --tolerance 0.5%
    phaseid near 3.13 --only Zn,S --probe "electron 200 kV"
    phaseid near rings.csv --tolerance 0.3%
    """
    from phaseid.matching.chemistry import Chemistry
    from phaseid.matching.near import near_lines
    from phaseid.probes import parse_probe, parse_relative
    from phaseid.reports.json import dumps, phase_dict, probe_dict

    beam = parse_probe(probe)
    chemistry = Chemistry.parse(must, only, exclude)
    allowed = parse_relative(tolerance, "tolerance")
    wanted = _spacings_A(spacings, unit, probe)
    with open_library(library) as shelf:
        matches = near_lines(
            wanted,
            shelf,
            beam,
            tolerance=allowed,
            min_intensity=min_intensity,
            chemistry=chemistry,
        )
    if as_json:
        print(
            dumps(
                {
                    "schema": SCHEMA,
                    "probe": probe_dict(beam),
                    "tolerance": allowed,
                    "matches": [
                        {
                            "phase": phase_dict(match.phase),
                            "hkl": match.hkl,
                            "d_A": match.d_A,
                            "intensity": match.intensity,
                            "wanted_d_A": match.wanted_d_A,
                        }
                        for match in matches
                    ],
                }
            )
        )
        return
    phases = list(dict.fromkeys(match.phase.phase_id for match in matches))
    if not phases:
        say("No phase of the library has a line of that strength there; try a wider --tolerance.")
        return
    shown = set(phases[:top])
    print("\n".join(_table([match for match in matches if match.phase.phase_id in shown])))
    if len(phases) > top:
        say(f"{len(phases) - top} more phases have such lines; see them with --top {len(phases)}.")


def _spacings_A(words: list[str], unit: str, probe: str) -> list[float]:
    from phaseid.rings import rings_from_values

    numbers = all_numbers(words)
    if not numbers:
        return [float(d) for d in ring_list(words).d_A]
    return [float(d) for d in rings_from_values(numbers, column=unit, probe=probe).d_A]


def _table(matches: list[NearLine]) -> list[str]:
    from phaseid.reports.plain import Column, hkl_text, phase_text, table

    columns = (
        Column("wanted\nÅ"),
        Column("d\nÅ"),
        Column("hkl"),
        Column("I"),
        Column("phase", "left", flexible=True),
        Column("group", "left"),
        Column("id", "left"),
    )
    rows = [
        [
            f"{match.wanted_d_A:.4f}",
            f"{match.d_A:.4f}",
            hkl_text(match.hkl),
            f"{match.intensity:.0f}",
            phase_text(match.phase),
            match.phase.space_group_symbol,
            match.phase.phase_id,
        ]
        for match in matches
    ]
    return table(columns, rows, width())
