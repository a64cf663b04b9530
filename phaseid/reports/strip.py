"""A pattern and its answer as a strip of characters, for a wide terminal."""

from __future__ import annotations

import math
from collections.abc import Iterable

from phaseid.matching.identification import Identification
from phaseid.reports.picture_scene import scene
from phaseid.reports.picture_style import phase_letter
from phaseid.reports.plain import safe, shorten

WIDE_ENOUGH = 90
STRONG = 30.0
"""Rings at least this strong (strongest = 100) stand two lines high."""
SIGNS = {"?": "? unexplained", "x": "x strong line missing", "*": "* several"}
_INDENT = 9
_RULER_STEP = 10


def strip(answer: Identification, number: int, width: int) -> list[str]:
    """Lines of at most `width` characters: measured rings over the best answer's, along ln d.

    A ring stands as `|`, left over as `?`; a line as its phase's letter, missing as `x`, several in
    one place as `*`. No lines where `width` is below `WIDE_ENOUGH` or there is nothing to draw.
    """
    best = answer.hypotheses[0] if answer.hypotheses else None
    one = scene(answer, best, number)
    spacings = [ring.true_d_A for ring in one.measured] + [line.d_A for line in one.calculated]
    if width < WIDE_ENOUGH or best is None or len(set(spacings)) < 2:
        return []
    columns = width - _INDENT - 4  # room for the last number of the ruler
    high, span = math.log(max(spacings)), math.log(max(spacings) / min(spacings))

    def column(d_A: float) -> int:
        return round((high - math.log(d_A)) / span * (columns - 1))

    strength = one.pattern.intensity
    rings = [(column(r.true_d_A), "|" if r.phases else "?", r.ring) for r in one.measured]
    strong = _row([(x, sign) for x, sign, ring in rings if strength[ring] >= STRONG], columns)
    measured = _row([(x, sign) for x, sign, _ in rings], columns)
    calculated = _row(
        [
            (column(line.d_A), "x" if line.kind == "missing" else phase_letter(line.phase))
            for line in one.calculated
        ],
        columns,
    )
    ruler = _ruler([math.exp(high - span * k / (columns - 1)) for k in range(columns)])
    rows = [("", strong), ("meas.", measured), ("calc.", calculated), ("d in Å", ruler)]
    names = [f"{phase_letter(k)} {safe(part.phase.formula)}" for k, part in enumerate(best.phases)]
    names += [told for sign, told in SIGNS.items() if sign in measured + calculated]
    signs = "; ".join(names)
    drawn = [f"  {head:<{_INDENT - 2}}{row}".rstrip() for head, row in rows]
    return [*(line for line in drawn if line), " " * _INDENT + shorten(signs, width - _INDENT)]


def _row(marks: Iterable[tuple[int, str]], columns: int) -> str:
    cells = [" "] * columns
    for x, sign in marks:
        cells[x] = sign if cells[x] in (" ", sign) else "*"
    return "".join(cells)


def _ruler(d_A: list[float]) -> str:
    """Spacings under every tenth column, each beginning at its own."""
    return "".join(f"{d:<{_RULER_STEP}.3f}" for d in d_A[::_RULER_STEP]).rstrip()
