"""`phaseid compare`: can two phases be told apart by rings?"""

from __future__ import annotations

from typing import Annotated

import typer

from phaseid.cli import completion
from phaseid.cli.options import Json, LibraryFile, width
from phaseid.cli.phases import find_crystal

DEFAULT_COMPARED = "electron 200 kV"


def compare(
    first: Annotated[
        str,
        typer.Argument(
            metavar="A",
            help="A phase id, formula, name, number or CIF file.",
            autocompletion=completion.phases,
        ),
    ],
    second: Annotated[
        str,
        typer.Argument(metavar="B", help="The other phase.", autocompletion=completion.phases),
    ],
    probe: Annotated[
        str, typer.Option("--probe", help='Such as "x-ray Cu Ka" or "neutron 1.54 A".')
    ] = DEFAULT_COMPARED,
    scale_uncertainty: Annotated[
        str | None,
        typer.Option(
            "--scale-uncertainty",
            metavar="REL",
            help="One sigma of a factor common to all d; default: usual for the probe.",
        ),
    ] = None,
    sigma: Annotated[
        str | None,
        typer.Option(
            "--sigma", help="One sigma of reading a ring, of d: 0.2%; default: usual for the probe."
        ),
    ] = None,
    cell_sigma: Annotated[
        str,
        typer.Option(
            "--cell-sigma",
            metavar="REL",
            help="How far the specimen's cells may be from the listed ones (strain, alloying).",
        ),
    ] = "0.05%",
    d_min: Annotated[float | None, typer.Option("--d-min", min=0.1, help="Smallest d, Å.")] = None,
    d_max: Annotated[float | None, typer.Option("--d-max", min=0.2, help="Largest d, Å.")] = None,
    library: LibraryFile = None,
    as_json: Json = False,
) -> None:
    """Say whether two phases can be told apart by rings, and by which rings.

    \b
    phaseid compare anatase rutile
    phaseid compare Al Au --scale-uncertainty 0.1% --probe "electron 200 kV"
    """
    from phaseid.matching.compare import compare as judge
    from phaseid.probes import parse_probe, parse_relative

    scale = None if scale_uncertainty is None else parse_relative(scale_uncertainty)
    result = judge(
        find_crystal(first, library),
        find_crystal(second, library),
        parse_probe(probe, scale_sigma=scale),
        sigma=None if sigma is None else f"{100 * parse_relative(sigma, '--sigma')!r}%",
        d_range_A=(d_min, d_max),
        cell_sigma=parse_relative(cell_sigma, "--cell-sigma"),
    )
    if as_json:
        from phaseid.reports.comparison import comparison_dict
        from phaseid.reports.json import dumps

        print(dumps(comparison_dict(result)))
    else:
        from phaseid.reports.comparison import comparison_text

        print(comparison_text(result, width()), end="")
