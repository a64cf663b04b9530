"""`phaseid calibrate`: an instrument's constant from the rings of a known standard."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli import completion
from phaseid.cli.options import Json, LibraryFile, say, width
from phaseid.cli.ring_input import (
    CameraConstantText,
    ProbeOverFile,
    Rings,
    ScaleUncertainty,
    Sigma,
    Unit,
    ring_table,
)
from phaseid.cli.settings import calibration_folder, setting
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.matching.standards import Standard
    from phaseid.rings import RingTable


def calibrate(
    rings: Rings,
    standard: Annotated[
        list[str] | None,
        typer.Option(
            "--standard",
            metavar="NAME",
            help="Si, LaB6, CeO2, Al2O3, Au, Al, Ag, Pt, TlCl, MgO, NaCl, graphite, or any phase.",
            autocompletion=completion.standards,
        ),
    ] = None,
    across: Annotated[
        str | None,
        typer.Option(
            "--across",
            metavar="RINGS",
            help="The same rings measured at right angles: a file or numbers; gives the ellipse.",
        ),
    ] = None,
    camera_length: Annotated[
        float | None,
        typer.Option("--camera-length", min=1.0, help="In mm; gives the size of a pixel."),
    ] = None,
    temperature: Annotated[
        float | None,
        typer.Option("--temperature", help="Of the standard, °C; default: 23 ± 5."),
    ] = None,
    probe: ProbeOverFile = None,
    scale_uncertainty: ScaleUncertainty = None,
    camera_constant: CameraConstantText = None,
    unit: Unit = "d_A",
    sigma: Sigma = None,
    save: Annotated[
        str | None,
        typer.Option("--save", metavar="NAME", help="Keep it for --calibration NAME."),
    ] = None,
    library: LibraryFile = None,
    as_json: Json = False,
) -> None:
    """Find the camera constant, wavelength or scale from the rings of a standard.

    Which ring is which line is found by itself; radii need no camera constant.

    \b
    phaseid calibrate gold.csv --standard Au --save plate-80cm
    phaseid calibrate 10.65 12.30 17.39 20.40 --unit radius_mm --standard Au \\
        --probe "electron 200 kV" --sigma 0.05
    """
    from phaseid.matching.calibrate import calibrate as fit

    known = _standard(standard or [], temperature, library)
    table = ring_table(rings, unit=unit, sigma=sigma)
    if probe is None and "probe" not in table.keys:
        probe = setting("probe")
    result = fit(
        table,
        known,
        probe=probe,
        camera_constant=camera_constant,
        scale_uncertainty=scale_uncertainty,
        across=_across(across, unit, sigma),
        camera_length_mm=camera_length,
        temperature_C=temperature,
    )
    if save is not None:
        from phaseid.matching.calibrate import record
        from phaseid.rings.calibration_record import save_calibration

        path = save_calibration(record(result, save), calibration_folder())
        say(f"Saved as '{save}' in {path}; use it with --calibration {save}")
    if as_json:
        from phaseid.reports.calibration import calibration_dict
        from phaseid.reports.json import dumps

        print(dumps(calibration_dict(result, save)))
    else:
        from phaseid.reports.calibration import calibration_text

        print(calibration_text(result, width()), end="")


def _standard(names: list[str], temperature_C: float | None, library: Path | None) -> Standard:
    from phaseid.cli.phases import find_crystal, find_standard
    from phaseid.matching.standards import standard_names

    if len(names) != 1:
        offered = ", ".join(standard_names())
        raise InputError(
            "no standard is named"
            if not names
            else f"{len(names)} standards are named: {', '.join(names)}",
            remedy=f"Give one --standard NAME, such as {offered}."
            if not names
            else "Calibrate with one; the rings of the other then check it.",
        )
    return find_standard(names[0], temperature_C, lambda text: find_crystal(text, library))


def _across(text: str | None, unit: str, sigma: str | None) -> RingTable | None:
    return None if text is None else ring_table([text], unit=unit, sigma=sigma)
