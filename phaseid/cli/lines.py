"""`phaseid lines`: the lines one phase shows to a probe."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated, Literal

import typer

from phaseid.cli import completion
from phaseid.cli.options import DEFAULT_PROBE, Json, LibraryFile, width
from phaseid.cli.phases import find_crystal
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.crystal.crystal import Crystal


def lines(
    phase: Annotated[
        str,
        typer.Argument(
            metavar="PHASE",
            help="A phase id, formula, name, source number, or CIF file.",
            show_default=False,
            autocompletion=completion.phases,
        ),
    ],
    probe: Annotated[
        str,
        typer.Option(
            "--probe",
            metavar="PROBE",
            help='Such as "electron 200 kV" or "x-ray Mo Ka debye-scherrer".',
        ),
    ] = DEFAULT_PROBE,
    d_min: Annotated[
        float | None,
        typer.Option("--d-min", min=0.1, help="Smallest spacing, Å; default: as far as is useful."),
    ] = None,
    quantity: Annotated[
        Literal["mean", "sum"],
        typer.Option("--quantity", help="Intensity: mean along a ring, or sum over all of it."),
    ] = "mean",
    thickness: Annotated[
        float | None,
        typer.Option(
            "--thickness",
            metavar="NM",
            help="Electrons: correct for two beams in crystals this thick.",
        ),
    ] = None,
    camera_constant: Annotated[
        str | None,
        typer.Option(
            "--camera-constant", metavar="TEXT", help='Give radii too: "25.1 A mm", "9800 A px".'
        ),
    ] = None,
    may_appear: Annotated[
        bool | None,
        typer.Option(
            "--may-appear/--no-may-appear",
            help="Rings of double diffraction; default: for electrons.",
            show_default=False,
        ),
    ] = None,
    library: LibraryFile = None,
    as_json: Json = False,
) -> None:
    """List the lines of a phase: hkl, d, 1/d, q, 2θ and intensity for a probe.

    \b
    phaseid lines corundum
    phaseid lines Si --probe "electron 200 kV" --d-min 0.8 --thickness 30
    phaseid lines Au --probe "electron 200 kV" --camera-constant "25.1 A mm"
    """
    from phaseid.crystal.lines import compute_lines
    from phaseid.probes import parse_probe
    from phaseid.reports.json import dumps
    from phaseid.reports.lines import LineList, lines_dict, lines_text
    from phaseid.units import A_PER_NM

    beam = parse_probe(probe)
    if thickness is not None and beam.kind != "electron":
        raise InputError(
            f"--thickness corrects electron intensities, and the probe is {beam.label}",
            remedy='Leave it out, or give --probe "electron 200 kV"',
        )
    if thickness is not None and not 0 < thickness < 1e6:
        raise InputError(f"--thickness must be a positive number of nm, not {thickness:g}")
    camera = None
    if camera_constant is not None:
        from phaseid.rings.camera import parse_camera_constant

        camera = parse_camera_constant(camera_constant)
    entry, crystal = find_crystal(phase, library)
    wanted = beam.kind == "electron" if may_appear is None else may_appear
    shown = LineList(
        phase=entry,
        probe=beam,
        lines=compute_lines(crystal, d_min_A=d_min, xray_energy_eV=beam.xray_energy_eV),
        quantity=quantity,
        thickness_A=None if thickness is None else thickness * A_PER_NM,
        camera=camera,
        may_appear=_double_diffraction(crystal, d_min) if wanted else None,
    )
    if as_json:
        print(dumps(lines_dict(shown)))
    else:
        print(lines_text(shown, width()), end="")


def _double_diffraction(
    crystal: Crystal, d_min_A: float | None
) -> tuple[tuple[tuple[int, ...], float], ...]:
    from phaseid.crystal.multiple_scattering import multiple_scattering_lines

    hkl, d_A = multiple_scattering_lines(crystal, d_min_A)
    return tuple((tuple(h), d) for h, d in zip(hkl.tolist(), d_A.tolist(), strict=True))
