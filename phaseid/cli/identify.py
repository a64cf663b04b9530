"""`phaseid identify`: rings in, ranked phases and mixtures out."""

from __future__ import annotations

from typing import Annotated

import typer

from phaseid.cli.options import (
    Exclude,
    Json,
    LibraryFile,
    Must,
    Only,
    bold,
    open_library,
    width,
)
from phaseid.cli.ring_input import (
    CameraConstantText,
    Intensities,
    ProbeOverFile,
    Rings,
    ScaleUncertainty,
    Sigma,
    Unit,
    ring_tables,
)
from phaseid.errors import InputError


def identify(
    rings: Rings,
    library: LibraryFile = None,
    probe: ProbeOverFile = None,
    scale_uncertainty: ScaleUncertainty = None,
    camera_constant: CameraConstantText = None,
    unit: Unit = "d_A",
    sigma: Sigma = None,
    intensities: Intensities = None,
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
    from phaseid.rings import rings_from_table

    chemistry = Chemistry.parse(must, only, exclude)
    tables = ring_tables(rings, unit=unit, sigma=sigma, intensities=intensities)
    if probe is None and not tables[0].source:
        raise InputError(
            "typed rings need a probe",
            remedy='Add --probe "electron 200 kV", "x-ray Cu Ka" or "neutron 1.54 A"',
        )
    patterns = [
        rings_from_table(
            table,
            probe=probe,
            scale_uncertainty=scale_uncertainty,
            camera_constant=camera_constant,
        )
        for table in tables
    ]
    with open_library(library) as shelf:
        answer = rank(patterns, shelf, chemistry=chemistry, max_phases=max_phases, top=top)
    if as_json:
        from phaseid.reports.json import dumps, identification_dict

        print(dumps(identification_dict(answer)))
    else:
        from phaseid.reports.text import as_text

        print(as_text(answer, width=width(), bold=bold()), end="")
