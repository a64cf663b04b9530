"""`phaseid measure`: an image or a profile in, a ring list out."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli.options import Json, say
from phaseid.cli.ring_input import CameraConstantText, ProbeOverFile, ScaleUncertainty
from phaseid.cli.settings import setting
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.rings.measuring import Measurement


def measure(
    file: Annotated[
        Path,
        typer.Argument(
            metavar="IMAGE-or-PROFILE",
            readable=False,
            show_default=False,
            help="A grey image (TIFF, PNG, MRC, a detector's format), two columns of numbers, "
            "or a CIF powder block.",
        ),
    ],
    output: Annotated[
        Path | None,
        typer.Option("--output", "-o", metavar="RINGS", help="Write the ring list here."),
    ] = None,
    probe: ProbeOverFile = None,
    scale_uncertainty: ScaleUncertainty = None,
    camera_constant: CameraConstantText = None,
    unit: Annotated[
        str | None,
        typer.Option(
            "--unit", metavar="COLUMN", help="What the positions of a profile are, if unstated."
        ),
    ] = None,
    frame: Annotated[
        int | None,
        typer.Option(
            "--frame",
            metavar="N",
            min=1,
            help="Of several images in one file take number N; default: their sum.",
        ),
    ] = None,
    standard: Annotated[
        str | None,
        typer.Option(
            "--standard",
            metavar="NAME",
            help="A standard whose rings are in the image, too: gives the camera constant.",
        ),
    ] = None,
    plot: Annotated[
        Path | None,
        typer.Option(
            "--plot",
            metavar="FILE",
            help="Draw the curve and what was found: FILE.png, FILE.svg or FILE.pdf.",
        ),
    ] = None,
    as_json: Json = False,
) -> None:
    """Find the rings of an image, or the peaks of a profile.

    \b
    phaseid measure plate.tif -o rings.csv --camera-constant "980 A px" --probe "electron 200 kV"
    phaseid measure scan.xy -o peaks.csv --probe "x-ray Cu Ka"
    phaseid measure on_gold.tif --standard Au --probe "electron 200 kV" -o rings.csv
    """
    from phaseid.reports.measuring import measurement_dict, measurement_text
    from phaseid.reports.picture_file import check_picture_path

    if plot is not None:
        check_picture_path(plot)
    found = find_rings(
        file,
        probe=probe,
        scale_uncertainty=scale_uncertainty,
        camera_constant=camera_constant,
        unit=unit,
        frame=frame,
    )
    if standard is not None:
        found = calibrated(found, standard)
    try:
        spacings = [float(d) for d in found.ring_list().d_A]
    except InputError:  # without a probe or a camera constant there are positions only
        spacings = None
    if output is not None:
        write(found, output)
    if plot is not None:
        from phaseid.reports.measuring_picture import draw_measurement

        draw_measurement(found, plot)
        say(f"Picture written to {plot}")
    if as_json:
        from phaseid.reports.json import dumps

        print(dumps(measurement_dict(found, spacings)))
    else:
        print(measurement_text(found, spacings), end="")
        if spacings is None and found.column == "radius_px":
            say('Spacings need --camera-constant "… A px" and --probe.')


def find_rings(
    file: Path,
    *,
    probe: str | None = None,
    scale_uncertainty: str | None = None,
    camera_constant: str | None = None,
    unit: str | None = None,
    frame: int | None = None,
) -> Measurement:
    """Measure one file; what is given here goes to the ring list's metadata."""
    from dataclasses import replace

    from phaseid.rings import parse_camera_constant
    from phaseid.rings.measuring import is_image, measure_image, measure_profile

    if camera_constant is not None:
        camera_constant = str(parse_camera_constant(camera_constant))
    probe = probe or setting("probe")
    if is_image(file):
        found = measure_image(file, frame=frame)
        metadata = {"title": file.stem}
    else:
        found = measure_profile(file, probe=probe, column=unit)
        metadata = {"title": file.stem, **found.metadata}
    given = {"camera constant": camera_constant, "scale uncertainty": scale_uncertainty}
    if "probe" not in metadata:
        given["probe"] = probe
    metadata |= {key: value for key, value in given.items() if value is not None}
    return replace(found, metadata=metadata)


def calibrated(found: Measurement, standard: str) -> Measurement:
    """The measurement with the camera constant that the rings of a standard in it give.

    Raises InputError for a profile, and where the standard is not known or not found in the image.
    """
    from dataclasses import replace

    from phaseid.cli.phases import find_crystal, find_standard
    from phaseid.matching.calibrate import calibrate

    if found.column != "radius_px":
        raise InputError(
            "--standard is for images",
            path=found.source,
            remedy="Calibrate a profile with: phaseid calibrate PROFILE --standard NAME --save "
            "NAME.",
        )
    known = find_standard(standard, None, lambda text: find_crystal(text, None))
    result = calibrate(found.ring_table(), known, probe=found.metadata.get("probe"))
    constant = result.camera_constant
    if constant is None:
        raise InputError("gives no camera constant", path=found.source, remedy="State it.")
    others = ", ".join(str(i + 1) for i in result.rejected)
    remark = f"Calibrated here: {result.summary()}."
    if others:
        remark += f" Not of the standard: ring {others}."
    return replace(
        found,
        metadata={
            **{k: v for k, v in found.metadata.items() if k != "scale uncertainty"},
            "camera constant": f"{constant.value:.6g} +- {constant.sigma:.3g} A px",
            "calibrated on": result.standard.label,
        },
        remarks=(*found.remarks, remark),
    )


def write(found: Measurement, path: Path) -> None:
    """Write the ring list; raises InputError if it cannot be written."""
    try:
        path.write_text(found.ring_list_text(), encoding="utf-8")
    except OSError as error:
        raise InputError(
            f"cannot be written: {(error.strerror or str(error)).lower()}",
            path=path,
            remedy="Choose another place with -o.",
        ) from None
    say(f"Ring list written to {path}")
