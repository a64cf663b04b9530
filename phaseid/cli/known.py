"""What is known of the phases looked for, as options that several commands share."""

from __future__ import annotations

import re
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.library.question import Question

Must = Annotated[
    str | None, typer.Option("--must", metavar="EL,EL", help="Elements that it holds.")
]
Formula = Annotated[
    str | None,
    typer.Option("--formula", metavar="FORMULA", help="Its formula, elements in any order."),
]
Name = Annotated[
    str | None,
    typer.Option("--name", metavar="WORDS", help="Mineral or common name, or words of it."),
]
SpaceGroup = Annotated[
    str | None,
    typer.Option("--space-group", metavar="GROUP", help="Number or symbol, in any setting."),
]
Cell = Annotated[
    str | None,
    typer.Option("--cell", metavar="A,B,C", help="One to three cell edges in Å, in any order."),
]
Tolerance = Annotated[
    str, typer.Option("--tolerance", metavar="REL", help="Of the cell edges: 1% or 0.01.")
]
Density = Annotated[
    str | None,
    typer.Option("--density", metavar="LOW-HIGH", help="Density in g/cm³, such as 2.6-2.7."),
]
FromSource = Annotated[
    str | None,
    typer.Option("--source", metavar="SOURCE", help="A database, a number, or both: COD 9008460."),
]
CameFrom = Annotated[
    Path | None,
    typer.Option(
        "--from", metavar="PATH", readable=False, help="The file, folder or archive it came from."
    ),
]

_RANGE = re.compile(r"(\d+(?:[.,]\d+)?)\s*(?:-|–|\.\.|to)\s*(\d+(?:[.,]\d+)?)")
_NUMBER = re.compile(r"\d+(?:[.,]\d+)?")
_ABOUT = 0.01  # of a density given as one number


def question(
    *,
    required: bool = True,
    text: str = "",
    ids: tuple[str, ...] = (),
    formula: str | None,
    name: str | None,
    must: str | None,
    only: str | None,
    exclude: str | None,
    space_group: str | None,
    cell: str | None,
    tolerance: str,
    density: str | None,
    source: str | None,
    came_from: Path | None,
) -> Question:
    """Return the question that the options put.

    Raises InputError for one that cannot be read, and for none where one is `required`.
    """
    from phaseid.library.question import Question

    chemistry: dict[str, frozenset[str] | None] = {}
    if must or only or exclude:  # spares loading what most questions do not need
        from phaseid.matching.chemistry import Chemistry

        known = Chemistry.parse(must, only, exclude)
        chemistry = {"must": known.must, "only": known.only, "exclude": known.exclude}
    asked = Question(
        text=text,
        ids=ids,
        formula=formula or "",
        name=name or "",
        space_group=space_group or "",
        edges_A=() if cell is None else _edges(cell),
        tolerance=_relative(tolerance),
        density_g_cm3=None if density is None else _densities(density),
        source=source or "",
        under="" if came_from is None else str(came_from),
        **chemistry,  # type: ignore[arg-type]
    )
    if required and not asked:
        raise InputError(
            "nothing is said of the phases", remedy="Give a name, or what is known of them; --help."
        )
    return asked


def _relative(tolerance: str) -> float:
    if tolerance == "1%":
        return 0.01
    from phaseid.probes.numbers import parse_relative

    return parse_relative(tolerance, "tolerance")


def _edges(text: str) -> tuple[float, ...]:
    words = re.split(r"[\s;,]+", text.strip())
    try:
        return tuple(float(word) for word in words if word)
    except ValueError:
        raise InputError(
            f"--cell: '{text}' are no cell edges", remedy="Write lengths in Å: 4.76,12.99."
        ) from None


def _densities(text: str) -> tuple[float, float]:
    plain = text.strip().lower().removesuffix("g/cm3").removesuffix("g/cm³").strip()
    found = _RANGE.fullmatch(plain)
    if found is not None:
        low, high = (float(number.replace(",", ".")) for number in found.groups())
        return low, high
    if _NUMBER.fullmatch(plain):
        value = float(plain.replace(",", "."))
        return value * (1 - _ABOUT), value * (1 + _ABOUT)
    raise InputError(
        f"--density: '{text}' is no density", remedy="Write a range in g/cm³: 2.6-2.7."
    )
