"""`phaseid library export`: phases as a table, as JSON, or as structures."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from phaseid.cli.known import (
    CameFrom,
    Cell,
    Density,
    Formula,
    FromSource,
    Must,
    Name,
    SpaceGroup,
    Tolerance,
    question,
)
from phaseid.cli.options import Exclude, LibraryFile, Only, open_library, say


def export(
    file: Annotated[
        Path,
        typer.Argument(
            metavar="FILE", show_default=False, help="FILE.csv, .json, .cif, or .zip of CIF files."
        ),
    ],
    text: Annotated[
        list[str] | None,
        typer.Argument(
            metavar="TEXT", show_default=False, help="A name, formula, number or phase id."
        ),
    ] = None,
    library: LibraryFile = None,
    formula: Formula = None,
    name: Name = None,
    must: Must = None,
    only: Only = None,
    exclude: Exclude = None,
    space_group: SpaceGroup = None,
    cell: Cell = None,
    tolerance: Tolerance = "1%",
    density: Density = None,
    source: FromSource = None,
    came_from: CameFrom = None,
    best: Annotated[
        bool, typer.Option("--best", help="One entry of each phase, not every entry.")
    ] = False,
    force: Annotated[bool, typer.Option("--force", help="Overwrite the file.")] = False,
) -> None:
    """Write phases to a file, all or those that answer as in find.

    \b
    phaseid library export all.csv
    phaseid library export carbonates.cif --must C,O --space-group 167
    """
    from phaseid.reports.phase_export import export_phases

    wanted = question(
        required=False,
        text=" ".join(text or ()),
        formula=formula,
        name=name,
        must=must,
        only=only,
        exclude=exclude,
        space_group=space_group,
        cell=cell,
        tolerance=tolerance,
        density=density,
        source=source,
        came_from=came_from,
    )
    with open_library(library) as opened:
        count = export_phases(opened, wanted, file, every_entry=not best, overwrite=force)
    say(f"{count} written to {file}.")
