"""`phaseid library`: the structures that are searched; add your own, look them up."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli.library_care import check, remove
from phaseid.cli.library_export import export
from phaseid.cli.library_find import find
from phaseid.cli.options import Json, LibraryFile, open_library, say
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.library import ImportTally, Library

SHOWN_REJECTS = 20
MOST_JOBS = 60  # Windows waits for no more processes at a time

app = typer.Typer(
    help="The structures that are searched: add your own, look them up.",
    no_args_is_help=True,
    rich_markup_mode=None,
)
app.command("find")(find)
app.command("export")(export)
app.command("check")(check)
app.command("remove")(remove)


def _path(text: str) -> Path:
    """A path as given; an empty one, often a variable that is not set, is not this folder."""
    if not text.strip():
        raise InputError(
            "the name of a file or folder to add is empty",
            remedy="Name one; the folder you are in is a dot: phaseid library add .",
        )
    return Path(text)


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
            metavar="PATH...", parser=_path, help="CIF files, folders, .zip and .tar archives."
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
    _tell_changes(tally)
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
    print(f"phases          {facts['distinct']} ({facts['phases']} entries)")
    for database, count in facts["sources"].items():
        print(f"  {count:>7}  from {database}")
    print(f"digest          {facts['digest']}")
    print(f"schema version  {facts['schema_version']} (made by {facts['created_by']})")
    print(f"size            {facts['size_bytes'] / 1e6:.1f} MB")
    print(f"rejected        {facts['rejects']} (phaseid library rejects shows why)")


@app.command()
def rejects(
    library: LibraryFile = None,
    reason: Annotated[
        str | None,
        typer.Option("--reason", metavar="CODE", help="Only those with this code."),
    ] = None,
    as_json: Json = False,
) -> None:
    """Count and list the files and structures that could not be added, by reason.

    
    phaseid library rejects
    phaseid library rejects --reason no_symmetry
    """
    from collections import Counter

    with open_library(library) as opened:
        held = opened.rejects()
    counts = Counter(reject["code"] for reject in held)
    if reason is not None:
        if held and reason not in counts:
            raise InputError(
                f"nothing was rejected for '{reason}'",
                remedy=f"There are: {', '.join(code for code, _ in counts.most_common())}.",
            )
        held = [reject for reject in held if reject["code"] == reason]
    if as_json:
        from phaseid.reports.json import dumps

        reasons = [{"code": code, "count": count} for code, count in counts.most_common()]
        print(dumps({"schema": "phaseid.library-rejects/1", "rejects": held, "reasons": reasons}))
        return
    from phaseid.reports.plain import safe

    if not held:
        say("Nothing was rejected.")
        return
    for code, count in counts.most_common():
        if reason in (None, code):
            print(f"{count:>7}  {code}")
    print()
    for reject in sorted(held, key=lambda one: (-counts[one["code"]], one["code"])):
        block = f" block {reject['block']}" if reject["block"] else ""
        print(safe(f"{reject['location']}{block}: {reject['reason']}"))


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


def _tell_changes(tally: ImportTally) -> None:
    from phaseid.reports.plain import safe

    for new in tally.replacements[:SHOWN_REJECTS]:
        entry = " ".join(part for part in (new.database, new.number) if part)
        say(safe(f"replaced: {new.name} ({entry or new.file}), {new.before} by {new.phase_id}"))
    if (more := len(tally.replacements) - SHOWN_REJECTS) > 0:
        say(f"and {more} more replaced; --json lists them")
    for gone in tally.gone[:SHOWN_REJECTS]:
        say(safe(f"no longer there: {gone.location} ({gone.name}, {gone.phase_id})"))
    if tally.gone:
        more = len(tally.gone) - SHOWN_REJECTS
        rest = f"and {more} more; " if more > 0 else ""
        say(f"{rest}the library keeps them. To remove them: phaseid library remove ID")


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
