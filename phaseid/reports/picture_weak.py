"""Lines that an answer has but this pattern is too weak to show: drawn faintly."""

from __future__ import annotations

from typing import TYPE_CHECKING, NamedTuple

import numpy as np

from phaseid.matching.identification import Assignment, Hypothesis, Missing
from phaseid.rings.ringlist import RingList

if TYPE_CHECKING:
    from phaseid.library import Library

WEAKEST = 0.5
"""Of 100, the phase's strongest line in the pattern's range; what is weaker is not drawn."""
MOST = 40
_EDGE = 0.004
_SAME = 1e-6


class WeakLine(NamedTuple):
    """A line of phase `phase` (index in the answer); intensity: its strongest in range = 100."""

    phase: int
    hkl: tuple[int, int, int]
    d_A: float
    relative_intensity: float


def weak_lines(
    hypothesis: Hypothesis, number: int, pattern: RingList, library: Library
) -> tuple[WeakLine, ...]:
    """Lines between the outermost rings of pattern `number` that neither explain a ring nor miss.

    The `MOST` strongest of each phase, by falling intensity, as the probe shows a random powder of
    the stored structure; none of a textured phase, whose intensities are others.
    """
    factor = next((s.factor for s in hypothesis.scale if s.pattern == number), 1.0)
    low, high = (float(d) / factor for d in (pattern.d_A.min(), pattern.d_A.max()))
    found: list[WeakLine] = []
    for index, part in enumerate(hypothesis.phases):
        if part.fibre_axis is not None:
            continue
        lines = library.lines(part.phase.phase_id)
        inside = (lines.d_A > low * (1 - _EDGE)) & (lines.d_A < high * (1 + _EDGE))
        weights = np.where(inside, pattern.probe.intensity(lines), 0.0)
        strongest = float(weights.max(initial=0.0))
        if strongest == 0:
            continue
        relative = weights * (100.0 / strongest)
        strong: list[Assignment | Missing] = [*hypothesis.assignments, *hypothesis.missing]
        told = [s.d_calc_A for s in strong if (s.pattern, s.phase) == (number, index)]
        for d_A in told:
            relative[np.abs(lines.d_A / d_A - 1) < _SAME] = 0.0
        order = np.argsort(-relative, kind="stable")[:MOST]
        found += [
            WeakLine(index, _hkl(lines.hkl[k]), float(lines.d_A[k]), float(relative[k]))
            for k in order
            if relative[k] >= WEAKEST
        ]
    return tuple(found)


def _hkl(row: np.ndarray[tuple[int], np.dtype[np.int32]]) -> tuple[int, int, int]:
    h, k, l = (int(index) for index in row)  # noqa: E741 (Miller's own letter)
    return h, k, l
