"""What measurement would tell two phases apart, in words a person can act on."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from phaseid.library.phase import Phase
from phaseid.matching.lineset import LineSet
from phaseid.matching.patterns import Floats, Pattern

_SURE = 3.0
"""How many sigmas a difference has to be worth before it separates."""
_CLEAR, _TRACE = 0.7, -0.7
"""How far above ln of the detection limit a line is sure to be seen; from where on it may be."""
_FAR = 0.02
"""A line without a counterpart this near (in ln d) stands alone."""


@dataclass(frozen=True, slots=True)
class Telling:
    """A line of one of two phases that tells them apart.

    `row` of the line table; `x` its ln d; `distance` in ln d to the nearest line of the other phase
    after both are laid on each other as well as one common scale can; inf where it stands alone.
    """

    row: int
    x: float
    distance: float


def _shown(
    lines: LineSet, phase: int, pattern: Pattern, margin: float = _CLEAR
) -> tuple[Floats, Floats]:
    """ln d and table rows of the lines inside the rings' range, `margin` above ln of the limit."""
    x = lines.x[phase]
    strong = np.log(np.maximum(lines.visible[phase], 1e-12)) > pattern.ln_limit + margin
    inside = (x > pattern.x[0] - 0.03) & (x < pattern.x[-1] + 0.03)
    chosen = strong & inside
    return x[chosen], lines.row[phase][chosen].astype(float)


def common_shift(lines: LineSet, first: int, second: int, pattern: Pattern) -> float:
    """Shift in ln d that lays the lines of `second` on those of `first` best (median of
    neighbours)."""
    x, _ = _shown(lines, first, pattern)
    y, _ = _shown(lines, second, pattern, _TRACE)
    if not len(x) or not len(y):
        return 0.0
    nearest = y[np.argmin(np.abs(x[:, None] - y), axis=1)]
    near = np.abs(x - nearest) < 0.06
    return float(np.median((x - nearest)[near])) if near.any() else 0.0


def telling_lines(lines: LineSet, first: int, second: int, pattern: Pattern) -> list[Telling]:
    """Lines of `first` that `second` does not show at the same place, the most telling first."""
    shift = common_shift(lines, first, second, pattern)
    x, rows = _shown(lines, first, pattern)
    y, _ = _shown(lines, second, pattern, _TRACE)
    found = []
    for value, row in zip(x, rows, strict=True):
        distance = float(np.abs(value - y - shift).min()) if len(y) else np.inf
        found.append(Telling(int(row), float(value), np.inf if distance > _FAR else distance))
    return sorted(found, key=lambda t: (-t.distance, t.x))


def separating_text(
    answer: Phase, other: Phase, lines: LineSet, first: int, second: int, pattern: Pattern
) -> str:
    """One or two sentences: which element, which ring to which precision, or which calibration."""
    sentences = []
    only_answer = sorted(set(answer.elements) - set(other.elements))
    only_other = sorted(set(other.elements) - set(answer.elements))
    if only_other:
        sentences.append(f"{', '.join(only_other)} in an element analysis would point to it")
    elif only_answer:
        sentences.append(f"no {', '.join(only_answer)} in an element analysis would point to it")
    for mine, own, foreign, name in (
        (True, first, second, answer.name),
        (False, second, first, other.name),
    ):
        telling = telling_lines(lines, own, foreign, pattern)
        alone = [t for t in telling if np.isinf(t.distance)]
        if alone:
            spacing = np.exp(max(alone, key=lambda t: t.x).x)
            sentences.append(f"a ring at {spacing:.4g} Å belongs to {name} alone")
            break
        if not mine and telling and telling[0].distance > 1e-4:
            best = telling[0]
            sentences.append(
                f"the ring at {np.exp(best.x):.4g} Å differs by {100 * best.distance:.2g} %, "
                f"so it needs reading to {100 * best.distance / _SURE:.1g} %"
            )
    shift = abs(common_shift(lines, first, second, pattern))
    if shift > 2e-4:
        sentences.append(
            f"all rings differ by {100 * shift:.2g} %, so a calibration to "
            f"{100 * shift / _SURE:.1g} % would do"
        )
    if not sentences:
        return "same elements and the same rings: rings cannot tell them apart"
    return "; ".join(sentences)
