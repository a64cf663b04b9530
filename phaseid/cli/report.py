"""`phaseid report`: an identification as one page to look at, keep and send."""

from __future__ import annotations

import shlex
from datetime import UTC, datetime
from hashlib import sha256
from pathlib import Path
from typing import Annotated

import typer

from phaseid.cli.options import (
    AxisText,
    Exclude,
    LibraryFile,
    MaxPhases,
    Must,
    Only,
    open_library,
    say,
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
from phaseid.cli.settings import settings


def report(
    rings: Rings,
    output: Annotated[
        Path, typer.Option("-o", "--output", metavar="FILE.html", help="The page to write.")
    ],
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
    top: Annotated[int, typer.Option("--top", metavar="N", min=1, help="Answers to show.")] = 5,
    axis: AxisText = None,
) -> None:
    """Write the identification as one page: pictures, tables, alternatives, where it comes from.

    The page needs no network and holds the answer for machines, too.

    \b
    phaseid report foil.csv -o report.html
    phaseid report electrons.csv xrays.csv --must Al -o foil.html
    """
    from phaseid.matching.chemistry import Chemistry
    from phaseid.matching.identify import identify as rank
    from phaseid.reports.page import Provenance, page
    from phaseid.reports.picture_axis import axis_for, axis_name
    from phaseid.reports.picture_file import check_folder, write_whole

    check_folder(output)
    chosen = None if axis is None else axis_name(axis)
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
    options = {
        "--library": None if library is None else str(library),
        "--probe": probe,
        "--scale-uncertainty": scale_uncertainty,
        "--camera-constant": camera_constant,
        "--calibration": calibration,
        "--unit": None if unit == "d_A" else unit,
        "--sigma": sigma,
        "--intensities": intensities,
        "--must": must,
        "--only": only,
        "--not": exclude,
        "--max-phases": str(max_phases),
        "--top": str(top),
        "--axis": axis,
        "-o": str(output),
    }
    given = [word for name, value in options.items() if value for word in (name, value)]
    provenance = Provenance(
        command=shlex.join(["phaseid", "report", *given, "--", *rings]),
        made=datetime.now(UTC).strftime("%Y-%m-%d %H:%M UTC"),
        settings=(
            *_digests(rings),
            ("must hold", must or ""),
            ("nothing but", only or ""),
            ("none of", exclude or ""),
            ("phases at most", str(max_phases)),
            *(
                (f"default {held.key}", held.value or "")
                for held in settings()
                if held.key in ("probe", "calibration")
            ),
        ),
    )
    with open_library(library) as shelf:
        answer = rank(patterns, shelf, chemistry=chemistry, max_phases=max_phases, top=top)
        content = page(answer, provenance, axis=chosen, library=shelf).encode()
    write_whole(output, content)
    say(f"Report written to {output} ({len(content) / 1000:.0f} kB).")


def _digests(words: list[str]) -> list[tuple[str, str]]:
    """What was in each file, so that the same name with other content is noticed."""
    return [
        (f"file {Path(word).name}", f"SHA-256 {sha256(Path(word).read_bytes()).hexdigest()}")
        for word in words
        if Path(word).is_file()
    ]
