"""`phaseid ratio`: which structure types have rings in these ratios."""

from __future__ import annotations

from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.cli.options import Json, say, width
from phaseid.cli.ring_input import all_numbers, ring_list
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.matching.ratio import RatioMatch

SCHEMA = "phaseid.ratio/1"
SHOWN = 4
DEFAULT_TOLERANCE = "1%"


def ratio(
    values: Annotated[
        list[str],
        typer.Argument(
            metavar="R",
            help="Radii (rising) or spacings (falling), any unit; or a ring list, or - for "
            "standard input.",
            show_default=False,
        ),
    ],
    tolerance: Annotated[
        str, typer.Option("--tolerance", metavar="REL", help="How near: 1% or 0.01.")
    ] = DEFAULT_TOLERANCE,
    spacings: Annotated[
        bool | None,
        typer.Option("--spacings/--radii", help="What the numbers are; default: by their order."),
    ] = None,
    as_json: Json = False,
) -> None:
    """List the structure types whose rings stand in these ratios.

    Rings may be missing. Falling numbers are spacings in Å, and give the cell edge.

    \b
    phaseid ratio 1 1.155 1.633
    phaseid ratio 2.338 2.025 1.432 1.221
    phaseid ratio rings.csv
    """
    from phaseid.matching.ratio import as_radii, match_types

    radii, are_spacings = as_radii(*_values(values, spacings))
    allowed = _relative(tolerance)
    matches = match_types(radii, tolerance=allowed, spacings=are_spacings)
    if as_json:
        from phaseid.reports.json import dumps

        print(
            dumps(
                {
                    "schema": SCHEMA,
                    "ratios": [radius / radii[0] for radius in radii],
                    "spacings": are_spacings,
                    "tolerance": allowed,
                    "matches": [_as_json(match) for match in matches],
                }
            )
        )
        return
    print("\n".join(_table(radii, matches)))
    if not matches:
        say(
            "No simple type has these ratios; try a wider --tolerance, leave out doubtful rings, "
            "or search the library: phaseid identify"
        )
    elif len(matches) > SHOWN:
        say(f"{len(matches) - SHOWN} less likely types fit as well; --json lists them.")
    if matches and len(radii) < 4:
        say("Few rings fit many types: a fourth and fifth ring decide.")


def _values(words: list[str], spacings: bool | None) -> tuple[list[float], bool | None]:
    """The numbers typed, or the spacings of a ring list."""
    numbers = all_numbers(words)
    if not numbers:
        return sorted((float(d) for d in ring_list(words).d_A), reverse=True), True
    try:
        return [float(number.replace(",", ".")) for number in numbers], spacings
    except ValueError:
        raise InputError(
            f"cannot read the numbers {' '.join(numbers)}", remedy="Write them like 1 1.155 1.633."
        ) from None


def _relative(tolerance: str) -> float:
    if tolerance == DEFAULT_TOLERANCE:  # spares loading numpy, which takes longer than the answer
        return 0.01
    from phaseid.probes.numbers import parse_relative

    return parse_relative(tolerance, "tolerance")


def _as_json(match: RatioMatch) -> dict[str, object]:
    return {
        "type": match.type.name,
        "such_as": match.type.such_as,
        "rings": [
            {"ratio": ring.ratio, "hkl": list(ring.hkl), "calculated": ring.calculated}
            for ring in match.rings
        ],
        "skipped": [{"hkl": list(hkl), "ratio": value} for hkl, value in match.skipped],
        "rms": match.rms,
        "worst": match.worst,
        "axial_ratio": match.axial_ratio,
        "edge_A": match.edge_A,
    }


def _table(radii: list[float], matches: list[RatioMatch]) -> list[str]:
    from phaseid.reports.plain import wrap

    page = ["Ratios: " + "  ".join(f"{radius / radii[0]:.4f}" for radius in radii)]
    for match in matches[:SHOWN]:
        further = []
        if match.axial_ratio is not None:
            further.append(f"c/a = {match.axial_ratio:.3f}")
        if match.edge_A is not None:
            further.append(f"a = {match.edge_A:.4f} Å")
        further.append(f"worst {100 * match.worst:.2f} %")
        page.append("")
        page += wrap(
            f"{match.type.name} ({match.type.such_as}): {', '.join(further)}", width(), first=""
        )
        indices = ["".join(map(str, ring.hkl)) for ring in match.rings]
        page += wrap("rings " + ", ".join(indices), width())
        if match.skipped:
            missed = ", ".join(f"{''.join(map(str, h))} ({r:.3f})" for h, r in match.skipped)
            page += wrap(f"not given: {missed}", width())
    return page
