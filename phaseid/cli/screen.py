"""`phaseid screen`: is anything there that should not be?"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli import completion
from phaseid.cli.options import Json, LibraryFile, open_library, width
from phaseid.cli.phases import find_in
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

if TYPE_CHECKING:
    from phaseid.crystal.crystal import Crystal
    from phaseid.library import Phase


def screen(
    rings: Rings,
    expect: Annotated[
        list[str] | None,
        typer.Option(
            "--expect",
            metavar="PHASE",
            help="A phase that should be there; repeat it.",
            autocompletion=completion.phases,
        ),
    ] = None,
    watch: Annotated[
        list[Path] | None,
        typer.Option(
            "--watch", metavar="FILE", help="A list of your own to watch for, a phase a line."
        ),
    ] = None,
    only_mine: Annotated[
        bool, typer.Option("--only-mine", help="Watch for the phases of --watch alone.")
    ] = False,
    weakest: Annotated[
        str | None,
        typer.Option(
            "--weakest",
            metavar="REL",
            help="Of the strongest ring: the weakest you would have listed, such as 2%.",
        ),
    ] = None,
    calibration: CalibrationName = None,
    probe: ProbeOverFile = None,
    scale_uncertainty: ScaleUncertainty = None,
    camera_constant: CameraConstantText = None,
    unit: Unit = "d_A",
    sigma: Sigma = None,
    intensities: Intensities = None,
    library: LibraryFile = None,
    as_json: Json = False,
) -> None:
    """Find rings that should not be there, and say how much could hide.

    Rings that no expected phase explains are held against the watch list (grids and films, native
    oxides, targets, salts, ice, abrasives, holders) and the library. For what is not found: the
    share above which it would have been seen in 95 % of cases.

    \b
    phaseid screen foil.csv --expect Al --expect Al2O3
    phaseid screen electrons.csv xrays.csv --expect Al
    """
    from phaseid.matching.screen import screen as hold
    from phaseid.matching.watch import watch_lists
    from phaseid.probes import parse_relative

    measured = ring_lists(
        rings,
        calibration=calibration,
        probe=probe,
        scale_uncertainty=scale_uncertainty,
        camera_constant=camera_constant,
        unit=unit,
        sigma=sigma,
        intensities=intensities,
    )
    watched = watch_lists(watch or [], shipped=not only_mine)
    limit = None if weakest is None else parse_relative(weakest, "--weakest")
    with open_library(library) as shelf:

        def find(text: str) -> tuple[Phase, Crystal]:
            return find_in(shelf, text)

        expected = [find(text) for text in expect or []]
        result = hold(measured, shelf, expected, watched, find, weakest=limit)
    if as_json:
        from phaseid.reports.json import dumps
        from phaseid.reports.screening import screening_dict

        print(dumps(screening_dict(result)))
    else:
        from phaseid.reports.screening import screening_text

        print(screening_text(result, width()), end="")
