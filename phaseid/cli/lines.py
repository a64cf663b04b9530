"""`phaseid lines`: the lines one phase shows to a probe."""

from __future__ import annotations

from typing import Annotated

import typer

from phaseid.cli.options import DEFAULT_PROBE, Json, LibraryFile, width
from phaseid.cli.phases import find_crystal


def lines(
    phase: Annotated[
        str,
        typer.Argument(
            metavar="PHASE",
            help="A phase id, formula, name, source number, or CIF file.",
            show_default=False,
        ),
    ],
    probe: Annotated[
        str, typer.Option("--probe", help='Such as "electron 200 kV" or "neutron 1.54 A".')
    ] = DEFAULT_PROBE,
    d_min: Annotated[
        float | None,
        typer.Option("--d-min", min=0.1, help="Smallest spacing, Å; default: as far as is useful."),
    ] = None,
    library: LibraryFile = None,
    as_json: Json = False,
) -> None:
    """List the lines of a phase: hkl, d, 1/d, 2θ and intensity for a probe.

    \b
    phaseid lines corundum
    phaseid lines Al --probe "electron 200 kV" --d-min 0.8
    """
    from phaseid.crystal.lines import compute_lines
    from phaseid.probes import parse_probe

    beam = parse_probe(probe)
    entry, crystal = find_crystal(phase, library)
    computed = compute_lines(crystal, d_min_A=d_min, xray_energy_eV=beam.xray_energy_eV)
    if as_json:
        from phaseid.reports.json import dumps
        from phaseid.reports.lines import lines_dict

        print(dumps(lines_dict(entry, beam, computed)))
    else:
        from phaseid.reports.lines import lines_text

        print(lines_text(entry, beam, computed, width()), end="")
