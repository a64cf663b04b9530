"""`phaseid library check` and `remove`: whether a library is sound, and less of it."""

from __future__ import annotations

import sys
from typing import TYPE_CHECKING, Annotated, Any

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
from phaseid.errors import InputError, LibraryError

if TYPE_CHECKING:
    from phaseid.library.finding import Found

SHOWN = 20


def check(
    library: LibraryFile = None,
    every: Annotated[
        bool, typer.Option("--all", help="Compute the lines of every phase again, not a sample.")
    ] = False,
    as_json: Json = False,
) -> None:
    """Check a library: the file, its sums, and the lines of a sample of its phases.

    \b
    phaseid library check
    phaseid library check --all --library mine.sqlite
    """
    from phaseid.cli.progress import progress_bar
    from phaseid.library.checking import SAMPLE
    from phaseid.library.checking import check as checked

    with open_library(library) as opened:
        path = opened.path
        with opened.reading() as conn, progress_bar("checking") as advance:
            found = checked(conn, sample=None if every else SAMPLE, progress=advance)
    if as_json:
        from phaseid.reports.json import dumps

        facts = {
            "sound": not found.troubles,
            "path": str(path),
            "phases": found.phases,
            "recomputed": found.recomputed,
            "older": found.older,
            "troubles": found.troubles,
        }
        print(dumps({"schema": "phaseid.library-check/1", **facts}))
    else:
        print(f"{found.phases} phases, the lines of {found.recomputed} computed again")
        if found.older:
            print(
                f"{found.older} phases have lines of another version of phaseid; add their files "
                "again to have them computed anew"
            )
        for trouble in found.troubles:
            print(f"  {trouble}")
        if not found.troubles:
            print("The library is sound.")
    if found.troubles:
        raise LibraryError(
            f"{path}: the library is damaged. Restore a copy, or add the structures to a new one."
        )


def remove(
    ids: Annotated[
        list[str] | None,
        typer.Argument(metavar="ID", help="Phase ids or source numbers.", show_default=False),
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
    yes: Annotated[bool, typer.Option("--yes", help="Do not ask.")] = False,
    dry_run: Annotated[
        bool, typer.Option("--dry-run", help="Say what would be removed, and remove nothing.")
    ] = False,
    as_json: Json = False,
) -> None:
    """Remove entries from a library, by id or by what is known of them.

    Every entry that answers is removed, not one of each phase. Their files bring them back.

    \b
    phaseid library remove 9008460
    phaseid library remove --from structures/old --dry-run
    phaseid library remove --source "Materials Project" --yes
    """
    wanted = question(
        ids=tuple(ids or ()),
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
        found = opened.search(wanted, every_entry=True)
        if not as_json:
            _show(found)
        if found.phases and not dry_run:
            if not yes and not _agreed(found.total):
                say("Nothing was removed.")
                raise typer.Exit(0)
            opened.remove([phase.phase_id for phase in found.phases])
        facts: dict[str, Any] = {
            "removed": 0 if dry_run else found.total,
            "dry_run": dry_run,
            "entries": [_entry(phase) for phase in found.phases],
            "phases": len(opened),
            "digest": opened.digest,
        }
    if as_json:
        from phaseid.reports.json import dumps

        print(dumps({"schema": "phaseid.library-remove/1", **facts}))
        return
    would = "would be " if dry_run else ""
    print(f"{found.total} {would}removed, {facts['phases']} in the library")


def _show(found: Found) -> None:
    from dataclasses import replace

    from phaseid.reports.phase_list import list_text

    some = replace(found, phases=found.phases[:SHOWN], entries=found.entries[:SHOWN])
    if some.phases:
        print("\n".join(list_text(some, width())))
    if found.total > SHOWN:
        say(f"and {found.total - SHOWN} more")


def _entry(phase: Any) -> dict[str, Any]:
    from phaseid.reports.json import phase_dict

    whole = phase_dict(phase)
    return {key: whole[key] for key in ("phase_id", "name", "formula", "source", "cell")}


def _agreed(count: int) -> bool:
    if not sys.stdin.isatty():
        raise InputError(
            "nobody can be asked whether to remove", remedy="Give --yes, or --dry-run to look."
        )
    say(f"Remove {count} entries? y or n: ")
    return sys.stdin.readline().strip().lower() in ("y", "yes")
