"""The share above which a phase that was not found would have been seen."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.library.phase import Phase
from phaseid.matching.lineset import LineSet
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import DETECTION_SLOPE
from phaseid.probes.probe import Kind

SURE, EVEN = 0.95, 0.5
COMMON_SCATTER: dict[Kind, float] = {"x-ray": 0.15, "neutron": 0.15, "electron": 0.5}
"""One-sigma of ln intensity that all lines of a phase share: absorption, texture, dynamics."""
_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(7)
_APART_SIGMAS = 2.5
_LOGISTIC = 1.702
"""A logistic of slope 1.702 is close to a normal distribution function."""


@dataclass(frozen=True, slots=True)
class Limit:
    """Shares by weight at which a phase would be seen in 95 % and in half of the cases.

    1 where its rings all hide behind others. `d_A`, `hkl` are of the ring by which it would be seen
    first.
    """

    phase: Phase
    share: float
    share_even: float
    d_A: float
    hkl: tuple[int, int, int]
    hidden: bool


def expected_weight(
    pattern: Pattern, ln_amplitude: Floats, strength: Floats, phases: Sequence[Phase]
) -> float:
    """What the phases in the pattern weigh, in units of intensity × g/cm³ over line strength."""
    density = np.array([phase.density_g_cm3 for phase in phases])
    shown = ln_amplitude > pattern.ln_limit - 1.0
    volume = np.exp(ln_amplitude) / np.where(strength > 0, strength, np.inf)
    return float((density * volume)[shown].sum())


def limit_of(
    pattern: Pattern,
    lines: LineSet,
    candidate: int,
    phase: Phase,
    line_hkl: NDArray[np.int16],
    weight: float,
    shift: float,
) -> Limit:
    """The limit of one candidate.

    `line_hkl` indices by row of the line table; `weight` of what is there (`expected_weight`);
    `shift` the fitted common shift. A line is seen where it stands apart from every ring listed, as
    a ring of its own.
    """
    x = lines.x[candidate] + shift
    visible = np.where(np.isfinite(x), lines.visible[candidate], 0.0)
    x = np.where(np.isfinite(x), x, 50.0)
    nearest = np.abs(x[:, None] - pattern.x[None, :])
    apart = np.maximum(pattern.resolution, _APART_SIGMAS * pattern.sigma)
    free = (nearest > apart[None, :]).all(axis=1) & (visible > 0)
    scatter = pattern.scatter
    covered = np.where(free, pattern.seen_weight(x), 0.0) * (1.0 - scatter.lost)
    ln_visible = np.log(np.maximum(visible, 1e-12))
    density = max(phase.density_g_cm3, 1e-6)
    strength = float(lines.strength[candidate])
    first = int(np.argmax(np.where(free, covered * visible, -1.0)))
    row = int(lines.row[candidate, first])
    h, k, l = (int(i) for i in line_hkl[row])  # noqa: E741 (Miller's own letter)
    spacing = float(np.exp(lines.x[candidate, first])) if visible[first] > 0 else float("nan")

    def share_at(chance: float) -> float:
        if strength <= 0 or weight <= 0:
            return 1.0
        ln_a = _amplitude(chance, covered, ln_visible, pattern)
        own = density * float(np.exp(ln_a)) / strength
        return own / (own + weight)

    share = share_at(SURE)
    return Limit(phase, share, share_at(EVEN), spacing, (h, k, l), share > 0.99)


def _amplitude(chance: float, covered: Floats, ln_visible: Floats, pattern: Pattern) -> float:
    """ln amplitude at which at least one line is seen with this chance, by bisection."""
    low, high = pattern.ln_limit - 8.0, 25.0
    for _ in range(48):
        middle = 0.5 * (low + high)
        if chance_seen(middle, covered, ln_visible, pattern) < chance:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)


def chance_seen(
    ln_amplitude: float, covered: Floats, ln_visible: Floats, pattern: Pattern
) -> float:
    """Chance that at least one line is listed, over intensity scatter of lines and of the phase."""
    own = pattern.scatter.intensity
    slope = DETECTION_SLOPE / np.sqrt(1.0 + (DETECTION_SLOPE * own / _LOGISTIC) ** 2)
    common = COMMON_SCATTER[pattern.probe.kind] * _NODES
    level = ln_amplitude + ln_visible[None, :] + common[:, None] - pattern.ln_limit
    seen = covered[None, :] / (1.0 + np.exp(-np.clip(slope * level, -40.0, 40.0)))
    unseen = np.log1p(-np.minimum(seen, 1.0 - 1e-12)).sum(axis=1)
    return float((_WEIGHTS * (1.0 - np.exp(unseen))).sum() / _WEIGHTS.sum())
