"""`phaseid identify`: rings in, ranked phases and mixtures out."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from phaseid.cli.options import (
    AxisText,
    Exclude,
    Json,
    LibraryFile,
    MaxPhases,
    Must,
    Only,
    bold,
    open_library,
    say,
    width,
)
from phaseid.cli.ring_input import (
    CalibrationName,
    CameraConstantText,
    Intensities,
    ProbeOverFile,
    Rings,
    ScaleUncertainty,
    Sigma,
    Unit,
    ring_lists,
)
from phaseid.errors import InputError


def identify(
    rings: Rings,
    library: LibraryFile = None,
    probe: ProbeOverFile = None,
    scale_uncertainty: ScaleUncertainty = None,
    camera_constant: CameraConstantText = None,
    calibration: CalibrationName = None,
    unit: Unit = "d_A",
    sigma: Sigma = None,
    intensities: Intensities = None,
    must: Must = None,
    only: Only = None,
    exclude: Exclude = None,
    max_phases: MaxPhases = 3,
    top: Annotated[int, typer.Option("--top", metavar="N", min=1, help="Answers to list.")] = 5,
    plot: Annotated[
        Path | None,
        typer.Option(
            "--plot", metavar="FILE", help="Draw the answer, too: FILE.png, FILE.svg or FILE.pdf."
        ),
    ] = None,
    axis: AxisText = None,
    as_json: Json = False,
) -> None:
    """Rank the phases and mixtures that explain a list of rings.

    \b
    phaseid identify foil.csv --must Al
    phaseid identify electrons.csv xrays.csv --json
    phaseid identify 2.34 2.02 1.43 1.22 --probe "electron 200 kV"
    phaseid identify foil.csv --plot foil.pdf
    """
    from phaseid.matching.chemistry import Chemistry
    from phaseid.matching.identify import identify as rank
    from phaseid.reports.picture_axis import axis_for, axis_name

    chosen = None if axis is None else axis_name(axis)
    if plot is not None:
        from phaseid.reports.picture_file import check_picture_path

        check_picture_path(plot)
    elif chosen is not None:
        raise InputError("--axis is that of a picture", remedy="Add --plot FILE.png.")
    chemistry = Chemistry.parse(must, only, exclude)
    patterns = ring_lists(
        rings,
        unit=unit,
        sigma=sigma,
        intensities=intensities,
        probe=probe,
        scale_uncertainty=scale_uncertainty,
        camera_constant=camera_constant,
        calibration=calibration,
    )
    for pattern in patterns:
        axis_for(pattern, chosen)
    with open_library(library) as shelf:
        answer = rank(patterns, shelf, chemistry=chemistry, max_phases=max_phases, top=top)
        if plot is not None:
            from phaseid.reports.picture_file import picture_bytes, write_whole

            suffix = plot.suffix.lower()
            picture = picture_bytes(answer, suffix, axis=chosen, library=shelf)
    if as_json:
        from phaseid.reports.json import dumps, identification_dict

        print(dumps(identification_dict(answer)))
    else:
        from phaseid.reports.text import as_text

        print(as_text(answer, width=width(), bold=bold()), end="")
    if plot is not None:
        write_whole(plot, picture)
        say(f"Picture written to {plot}.")
