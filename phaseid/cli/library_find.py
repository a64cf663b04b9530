"""`phaseid library find`: the phases of which something is known."""

from __future__ import annotations

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
from phaseid.cli.options import Exclude, Json, LibraryFile, Only, open_library, say, width
from phaseid.errors import InputError

SHOWN = 50


def find(
    text: Annotated[
        list[str] | None,
        typer.Argument(
            metavar="TEXT",
            help="A name, formula, source number or phase id.",
            show_default=False,
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
    every_entry: Annotated[
        bool, typer.Option("--entries", help="List every entry, not one of each phase.")
    ] = False,
    top: Annotated[
        int | None,
        typer.Option(
            "--top",
            metavar="N",
            min=1,
            help=f"List N at most; default: {SHOWN} as text, all as JSON or CSV.",
        ),
    ] = None,
    as_json: Json = False,
    as_csv: Annotated[bool, typer.Option("--csv", help="Print comma-separated values.")] = False,
) -> None:
    """Find phases by what is known of them; all that is given must hold.

    An entry is one determination of a phase; of each phase the best one is listed.

    \b
    phaseid library find corundum
    phaseid library find --must Fe,O --only Fe,O --density 5.1-5.3
    phaseid library find --space-group P21/c --cell 5.15,5.21,5.31 --tolerance 0.5%
    phaseid library find quartz --entries --csv
    """
    if as_json and as_csv:
        raise InputError("--json and --csv are both given", remedy="Give one of them.")
    wanted = question(
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
    limit = top if as_json or as_csv or top is not None else SHOWN
    with open_library(library) as opened:
        found = opened.search(wanted, limit=limit, every_entry=every_entry)
        if not found.phases and wanted.text and not opened.find(wanted.text):
            opened.choose(wanted.text)  # raises, and says which names come close
    if as_json:
        from phaseid.reports.json import dumps
        from phaseid.reports.phase_list import listed_dict

        pairs = zip(found.phases, found.entries, strict=True)
        phases = [listed_dict(phase, count) for phase, count in pairs]
        answer = {"phases": phases, "found": found.total, "more": found.more}
        print(dumps({"schema": "phaseid.library-find/1", **answer}))
        return
    if as_csv:
        from phaseid.reports.phase_list import csv_text

        print(csv_text(found.phases, found.entries), end="")
    elif found.phases:
        from phaseid.reports.phase_list import list_text

        print("\n".join(list_text(found, width())))
    _tell(len(found.phases), found.total, more=found.more, what=_noun(every_entry))


def _noun(every_entry: bool) -> str:
    return "entries" if every_entry else "phases"


def _tell(shown: int, total: int, *, more: bool, what: str) -> None:
    if total == 0:
        say(f"No {what} of the library are so. Ask for less, or widen a range.")
    elif shown < total:
        least = "more than " if more else ""
        say(f"{shown} of {least}{total} {what}; ask for more of what is known, or see --top.")
