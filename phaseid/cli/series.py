"""`phaseid series`: many patterns of a specimen that changes, each with its neighbours' help."""

from __future__ import annotations

import os
import re
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated, Literal

import typer

from phaseid.cli.options import (
    Exclude,
    Json,
    LibraryFile,
    MaxPhases,
    Must,
    Only,
    open_library,
    say,
    width,
)
from phaseid.cli.progress import progress_bar
from phaseid.cli.ring_input import (
    CalibrationName,
    CameraConstantText,
    ProbeOverFile,
    ScaleUncertainty,
    ring_lists,
)
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.rings import RingList

FEW = 4
"""Patterns that are done before further processes have started."""


def series(
    patterns: Annotated[
        list[Path],
        typer.Argument(
            metavar="FOLDER-or-FILES",
            show_default=False,
            readable=False,
            help="A folder of ring lists, images or profiles, or the files in their order.",
        ),
    ],
    library: LibraryFile = None,
    probe: ProbeOverFile = None,
    scale_uncertainty: ScaleUncertainty = None,
    camera_constant: CameraConstantText = None,
    calibration: CalibrationName = None,
    must: Must = None,
    only: Only = None,
    exclude: Exclude = None,
    max_phases: MaxPhases = 3,
    along: Annotated[
        Literal["auto", "number", "time", "temperature"],
        typer.Option(
            "--along",
            help="What the series runs along; auto: a temperature or time in every list, else the "
            "number.",
        ),
    ] = "auto",
    persistence: Annotated[
        float | None,
        typer.Option(
            "--persistence",
            metavar="P",
            min=0.0,
            max=0.99,
            help="Chance that a phase stays from one pattern to the next; 0: each for itself; "
            "default: as the series suggests.",
        ),
    ] = None,
    workers: Annotated[
        int | None,
        typer.Option("--workers", metavar="N", min=1, help="Processes; default: one per core."),
    ] = None,
    plot: Annotated[
        Path | None,
        typer.Option("--plot", metavar="FILE", help="Draw it: FILE.svg, FILE.png or FILE.pdf."),
    ] = None,
    csv: Annotated[
        Path | None,
        typer.Option("--csv", metavar="FILE", help="Write a line per pattern and phase."),
    ] = None,
    as_json: Json = False,
) -> None:
    """Identify a series of patterns: phase against pattern, time or temperature.

    Probe, calibration and chemistry hold for all. What shows in one pattern makes the same phases
    likelier in its neighbours, as far as the series bears that out. Files of a folder are taken in
    the order of their names, numbers in them as numbers.

    \b
    phaseid series heating/ --only Ti,O --plot heating.svg
    phaseid series scan_1.csv scan_2.csv scan_3.csv --probe "x-ray Cu Ka" --json
    """
    from phaseid.matching.chemistry import Chemistry
    from phaseid.matching.series import identify_series
    from phaseid.reports.picture_file import check_folder, check_picture_path

    if plot is not None:
        check_picture_path(plot)
    if csv is not None:
        check_folder(csv)
    chemistry = Chemistry.parse(must, only, exclude)
    lists, failed = _read(
        files_of(patterns), probe, scale_uncertainty, camera_constant, calibration
    )
    count = workers or _workers(len(lists))
    with open_library(library) as shelf, progress_bar("patterns") as advance:
        answer = identify_series(
            lists,
            shelf,
            chemistry=chemistry,
            max_phases=max_phases,
            along=along,
            persistence=persistence,
            workers=count,
            advance=advance,
        )
    if as_json:
        from phaseid.reports.json import dumps
        from phaseid.reports.series import series_dict

        print(dumps(series_dict(answer, failed)))
    else:
        from phaseid.reports.series import series_text

        print(series_text(answer, width()), end="")
    if csv is not None:
        from phaseid.reports.picture_file import write_whole
        from phaseid.reports.series import series_csv

        write_whole(csv, series_csv(answer).encode())
        say(f"Table written to {csv}.")
    if plot is not None:
        from phaseid.reports.picture_series import write_series_picture

        write_series_picture(answer, plot)
        say(f"Picture written to {plot}.")


def natural_order(name: str) -> list[tuple[int, int, str]]:
    """A key by which "scan_2" comes before "scan_10"."""
    parts = re.findall(r"\d+|\D+", name)
    return [(0, int(p), "") if p.isdigit() else (1, 0, p.lower()) for p in parts]


def files_of(named: list[Path]) -> list[Path]:
    """The files named, a folder standing for those in it in the order of their names."""
    found: list[Path] = []
    for path in named:
        if path.is_dir():
            inside = [p for p in path.iterdir() if p.is_file() and not p.name.startswith(".")]
            found += sorted(inside, key=lambda p: natural_order(p.name))
        else:
            found.append(path)
    if not found:
        raise InputError(
            "holds no files", path=named[0], remedy="Name a folder of ring lists, or the files."
        )
    return found


def _read(
    files: list[Path],
    probe: str | None,
    scale_uncertainty: str | None,
    camera_constant: str | None,
    calibration: str | None,
) -> tuple[list[RingList], list[tuple[str, str]]]:
    """The patterns that can be read, and (file, reason) of the others, each told at once."""
    lists: list[RingList] = []
    failed: list[tuple[str, str]] = []
    for path in files:
        try:
            lists += ring_lists(
                [str(path)],
                probe=probe,
                scale_uncertainty=scale_uncertainty,
                camera_constant=camera_constant,
                calibration=calibration,
            )
        except InputError as error:
            failed.append((str(path), error.what))
            say(f"Left out: {error}")
    if not lists:
        raise InputError(
            f"no pattern can be read ({len(files)} tried)",
            remedy="Correct the first of them, and try it alone with phaseid identify.",
        )
    return lists, failed


def _workers(patterns: int) -> int:
    """One process per core this process may use, one for a short series."""
    if patterns <= FEW:
        return 1
    cores = len(os.sched_getaffinity(0)) if sys.platform == "linux" else os.cpu_count() or 1
    return min(cores, patterns)
