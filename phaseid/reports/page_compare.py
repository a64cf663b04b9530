"""The first answers side by side, and what separates them."""

from __future__ import annotations

from itertools import groupby
from operator import itemgetter

from phaseid.matching.identification import Hypothesis, Identification
from phaseid.reports.page_html import items, prose, scrolling
from phaseid.reports.plain import (
    cell_text,
    hkl_text,
    marked_text,
    probability_text,
    safe,
    signed_text,
)

COMPARED = 4
NAMED = 6


def side_by_side(answer: Identification) -> str:
    """A table of the first answers and a list of what separates the best from the others."""
    first = answer.hypotheses[:COMPARED]
    if len(first) < 2:
        return ""
    heads = "".join(f'<th scope="col">answer {h.rank}</th>' for h in first)
    told = {name: [tell(answer, h) for h in first] for name, tell in ROWS.items()}
    rows = "".join(
        f'<tr><th scope="row">{name}</th>'
        + "".join(f'<td class="wide">{prose(cell)}</td>' for cell in cells)
        + "</tr>"
        for name, cells in told.items()
        if any(cells)
    )
    table = f"<table><thead><tr><td></td>{heads}</tr></thead><tbody>{rows}</tbody></table>"
    tells = [text for other in first[1:] for text in differences(answer, first[0], other)]
    return (
        "<h2>The first answers side by side</h2>"
        + scrolling(table, "Answers side by side, scrolls sideways")
        + items("What separates them", tells, level=3)
    )


def differences(answer: Identification, best: Hypothesis, other: Hypothesis) -> list[str]:
    """Say which rings and lines speak for one of two answers and not for the other."""
    ours, theirs = _explained(best), _explained(other)
    told = []
    for mine, alien, winner, loser in (
        (ours, theirs, best, other),
        (theirs, ours, other, best),
    ):
        if alone := sorted(mine - alien):
            told.append(
                f"Answer {winner.rank} explains {_rings(answer, alone)}, answer {loser.rank} "
                "does not."
            )
    for one, against in ((best, other), (other, best)):
        if one.missing and len(one.missing) > len(against.missing):
            told.append(
                f"Answer {one.rank} asks for {_missing(one)}, not measured, against answer "
                f"{against.rank}."
            )
    if not told:
        told.append(
            f"Answers {best.rank} and {other.rank} explain the same rings; they differ by how well "
            "spacings and intensities fit."
        )
    return told


def _explained(hypothesis: Hypothesis) -> set[tuple[int, int]]:
    return {(a.pattern, a.ring) for a in hypothesis.assignments}


def _rings(answer: Identification, rings: list[tuple[int, int]]) -> str:
    many = len(answer.patterns) > 1
    shown = []
    for number, own in groupby(rings[:NAMED], itemgetter(0)):
        pattern = answer.patterns[number]
        told = ", ".join(f"{ring + 1} ({pattern.d_A[ring]:.4f} Å)" for _, ring in own)
        shown.append(f"{told} of pattern {number + 1}" if many else told)
    more = f" and {len(rings) - NAMED} more" if len(rings) > NAMED else ""
    return f"ring{'s' * (len(rings) > 1)} {'; '.join(shown)}{more}"


def _missing(hypothesis: Hypothesis) -> str:
    shown = [
        f"{safe(hypothesis.phases[m.phase].phase.formula)} {hkl_text(m.hkl)} ({m.d_calc_A:.4f} Å)"
        for m in hypothesis.missing[:NAMED]
    ]
    more = len(hypothesis.missing) - NAMED
    return ", ".join(shown) + (f" and {more} more" if more > 0 else "")


def _phases(_answer: Identification, h: Hypothesis) -> str:
    return " + ".join(marked_text(part.phase) for part in h.phases)


def _probability(_answer: Identification, h: Hypothesis) -> str:
    groups = sum(len(part.indistinguishable) for part in h.phases)
    return probability_text(h.probability) + (f", with {groups} alike" if groups else "")


def _coverage(answer: Identification, h: Hypothesis) -> str:
    return f"{len(_explained(h))} of {sum(map(len, answer.patterns))}"


def _unexplained(answer: Identification, h: Hypothesis) -> str:
    left = sorted((u.pattern, u.ring) for u in h.unexplained)
    return _rings(answer, left) if left else "none"


def _missing_or_none(_answer: Identification, h: Hypothesis) -> str:
    return _missing(h) or "none"


def _worst(_answer: Identification, h: Hypothesis) -> str:
    worst = max((a.residual_sigma for a in h.assignments), key=abs, default=None)
    return "" if worst is None else f"{signed_text(worst)} sigma"


def _scales(_answer: Identification, h: Hypothesis) -> str:
    return "; ".join(f"{s.factor:.4f} ± {s.sigma:.4f}" for s in h.scale)


def _shares(_answer: Identification, h: Hypothesis) -> str:
    told = []
    for part in h.phases:
        if part.share is not None and len(h.phases) > 1:
            error = "" if part.share_sigma is None else f" ± {100 * part.share_sigma:.0f}"
            told.append(f"{safe(part.phase.formula)} {100 * part.share:.0f}{error} %")
    return ", ".join(told)


def _cells(_answer: Identification, h: Hypothesis) -> str:
    return "; ".join(
        f"{safe(part.phase.formula)} {cell_text(part.cell, part.cell_sigma)}"
        for part in h.phases
        if part.cell is not None
    )


ROWS = {
    "phases": _phases,
    "probability": _probability,
    "rings explained": _coverage,
    "unexplained": _unexplained,
    "strong lines missing": _missing_or_none,
    "largest deviation": _worst,
    "fitted scale": _scales,
    "shares by weight": _shares,
    "refined cells": _cells,
}
