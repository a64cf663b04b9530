"""`phaseid library`: the structures that are searched; add your own, look them up."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli.options import Json, LibraryFile, open_library, say, width
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.library import ImportTally, Library
    from phaseid.library.phase import Phase

SHOWN_REJECTS = 20
MOST_JOBS = 60  # Windows waits for no more processes at a time

app = typer.Typer(
    help="The structures that are searched: add your own, look them up.",
    no_args_is_help=True,
    rich_markup_mode=None,
)

AddTo = Annotated[
    Path | None,
    typer.Option(
        "--library",
        metavar="FILE",
        readable=False,  # Library.open says it, with its own exit code
        help="The library to add to, made if it does not exist; default: your own.",
    ),
]


@app.command()
def add(
    paths: Annotated[
        list[Path] | None,
        typer.Argument(
            metavar="PATH...", readable=False, help="CIF files, folders, .zip and .tar archives."
        ),
    ] = None,
    library: AddTo = None,
    starter: Annotated[
        bool, typer.Option("--starter", help="Add the structures that come with phaseid.")
    ] = False,
    jobs: Annotated[
        int | None,
        typer.Option(
            "--jobs",
            metavar="N",
            min=1,
            max=MOST_JOBS,
            help="Processes that share the work; default: as it pays.",
        ),
    ] = None,
    scheduler: Annotated[
        str | None,
        typer.Option(
            "--scheduler",
            metavar="ADDRESS",
            help="Share the work with the Dask workers of a scheduler, such as tcp://HOST:8786.",
        ),
    ] = None,
    as_json: Json = False,
) -> None:
    """Add the structures in CIF files, folders and archives.

    What cannot be read is told with its reason and stops nothing; what was added before changes
    nothing; a new version of a numbered entry replaces the old one.

    \b
    phaseid library add structures/ more.zip
    phaseid library add Al2O3.cif --library mine.sqlite
    phaseid library add structures/ --scheduler tcp://192.0.2.1:8786
    """
    given = paths or []
    if not given and not starter:
        raise InputError(
            "nothing to add", remedy="Name CIF files, folders or archives, or give --starter."
        )
    if scheduler is not None and jobs is not None:
        raise InputError("--jobs and --scheduler are both given", remedy="Give one of them.")
    with _open_to_add(library) as opened:
        try:
            tally = _add(opened, given, starter=starter, jobs=jobs, scheduler=scheduler)
        except KeyboardInterrupt:
            say("Stopped. What was added is kept; the same command goes on from there.")
            raise
    if as_json:
        from phaseid.reports.json import dumps

        print(dumps(tally.as_json()))
    else:
        print(tally.summary())
    _tell_rejects(tally)
    if tally.exit_code:
        raise InputError("nothing could be read", remedy="The reasons stand above.")


@app.command()
def info(library: LibraryFile = None, as_json: Json = False) -> None:
    """Say what a library holds.

    \b
    phaseid library info
    """
    with open_library(library) as opened:
        facts = opened.info()
    if as_json:
        from phaseid.reports.json import dumps

        print(dumps({"schema": "phaseid.library-info/1", **facts}))
        return
    print(f"path            {facts['path']}")
    print(f"phases          {facts['phases']}")
    for database, count in facts["sources"].items():
        print(f"  {count:>7}  from {database}")
    print(f"digest          {facts['digest']}")
    print(f"schema version  {facts['schema_version']} (made by {facts['created_by']})")
    print(f"size            {facts['size_bytes'] / 1e6:.1f} MB")
    print(f"rejected        {facts['rejects']} (phaseid library rejects shows why)")


@app.command()
def rejects(library: LibraryFile = None, as_json: Json = False) -> None:
    """List the files and structures that could not be added, with reasons.

    \b
    phaseid library rejects
    """
    with open_library(library) as opened:
        held = opened.rejects()
    if as_json:
        from phaseid.reports.json import dumps

        print(dumps({"schema": "phaseid.library-rejects/1", "rejects": held}))
        return
    from phaseid.reports.plain import safe

    for reject in held:
        block = f" block {reject['block']}" if reject["block"] else ""
        print(safe(f"{reject['location']}{block}: {reject['reason']}"))
    if not held:
        say("Nothing was rejected.")


@app.command()
def find(
    text: Annotated[
        list[str],
        typer.Argument(metavar="TEXT", help="A name, formula, source number or phase id."),
    ],
    library: LibraryFile = None,
    as_json: Json = False,
) -> None:
    """Find phases by name or part of one, formula, source number or phase id.

    \b
    phaseid library find corundum
    phaseid library find O3Al2
    """
    wanted = " ".join(text)
    with open_library(library) as opened:
        found = opened.find(wanted)
        if not found:
            opened.choose(wanted)  # raises, and says which names come close
    if as_json:
        from phaseid.reports.json import dumps, phase_dict

        phases = [phase_dict(phase) for phase in found]
        print(dumps({"schema": "phaseid.library-find/1", "phases": phases}))
        return
    for row in _columns(found):
        print(row)


@app.command()
def path() -> None:
    """Print where the default library lies.

    \b
    phaseid library path
    """
    from phaseid.library import default_library_path

    print(default_library_path())


def _open_to_add(path: Path | None) -> Library:
    from phaseid.library import Library

    if path is None or path.exists():
        return open_library(path)
    say(f"A new library: {path}")
    return Library.create(path)


def _add(
    library: Library, paths: list[Path], *, starter: bool, jobs: int | None, scheduler: str | None
) -> ImportTally:
    from phaseid.cli.progress import progress_bar
    from phaseid.library import ImportTally
    from phaseid.library.adding import suggested_workers
    from phaseid.library.cluster import cluster
    from phaseid.library.starter import starter_crystals

    tally = ImportTally()
    with progress_bar("adding") as advance:
        if starter:
            tally += library.add_crystals(starter_crystals(), advance)
        if paths and scheduler is not None:
            with cluster(scheduler) as (executor, workers):
                tally += library.add(paths, advance, workers=workers, executor=executor)
        elif paths:
            workers = jobs or suggested_workers(paths)
            tally += library.add(paths, advance, workers=workers)
    return tally


def _tell_rejects(tally: ImportTally) -> None:
    from phaseid.reports.plain import safe

    for reject in tally.rejects[:SHOWN_REJECTS]:
        block = f" block {reject.block}" if reject.block else ""
        say(safe(f"rejected: {reject.file}{block}: {reject.reason}"))
    if tally.rejected > SHOWN_REJECTS:
        say(
            f"and {tally.rejected - SHOWN_REJECTS} more rejected; all of them: "
            "phaseid library rejects"
        )


def _columns(phases: list[Phase]) -> list[str]:
    from phaseid.reports.plain import Column, phase_text, source_text, table

    columns = (
        Column("id", "left"),
        Column("phase", "left", flexible=True),
        Column("group", "left", flexible=True),
        Column("a, b, c (Å)", "left"),
        Column("source", "left", flexible=True),
    )
    rows = [
        [
            phase.phase_id,
            phase_text(phase),
            f"{phase.space_group_symbol} ({phase.space_group_number})",
            " ".join(f"{edge:.2f}" for edge in phase.cell[:3]),
            source_text(phase),
        ]
        for phase in phases
    ]
    return table(columns, rows, width())
