"""The share above which a phase that was not found would have been seen."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.library.phase import Phase
from phaseid.matching.lineset import LineSet
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import DETECTION_SLOPE, LOGISTIC_SLOPE
from phaseid.probes.probe import Kind

SURE, EVEN = 0.95, 0.5
COMMON_SCATTER: dict[Kind, float] = {"x-ray": 0.15, "neutron": 0.15, "electron": 0.5}
"""One-sigma of ln intensity that all lines of a phase share: absorption, texture, dynamics."""
_NODES, _WEIGHTS = np.polynomial.hermite_e.hermegauss(7)
_APART_SIGMAS = 2.5


@dataclass(frozen=True, slots=True)
class Limit:
    """Shares by weight at which a phase would be seen in 95 % and in half of the cases.

    1 where its rings all hide behind others. `pattern`, `d_A`, `hkl` are of the ring by which it
    would be seen first.
    """

    phase: Phase
    share: float
    share_even: float
    pattern: int
    d_A: float
    hkl: tuple[int, int, int]
    hidden: bool


@dataclass(frozen=True, slots=True, eq=False)
class View:
    """One pattern as it shows the candidates: `weight` of what is there (`expected_weight`), the
    fitted common `shift`; `line_hkl` indices by row of its line table."""

    pattern: Pattern
    lines: LineSet
    line_hkl: NDArray[np.int16]
    weight: float
    shift: float


@dataclass(frozen=True, slots=True, eq=False)
class _Chances:
    """How one pattern would show one candidate: `covered`, `ln_visible` (n,) of its lines, and
    `ln_unit`, ln of the amplitude at which it would weigh as much as what is there."""

    view: View
    covered: Floats
    ln_visible: Floats
    ln_unit: float

    def seen(self, ln_ratio: float) -> float:
        """Chance that a ring of it is listed, at ln of its weight over what is there."""
        return chance_seen(
            ln_ratio + self.ln_unit, self.covered, self.ln_visible, self.view.pattern
        )


def expected_weight(
    pattern: Pattern, ln_amplitude: Floats, strength: Floats, phases: Sequence[Phase]
) -> float:
    """What the phases in the pattern weigh, in units of intensity × g/cm³ over line strength."""
    density = np.array([phase.density_g_cm3 for phase in phases])
    shown = ln_amplitude > pattern.ln_limit - 1.0
    volume = np.exp(ln_amplitude) / np.where(strength > 0, strength, np.inf)
    return float((density * volume)[shown].sum())


def limit_of(views: Sequence[View], candidate: int, phase: Phase) -> Limit:
    """The limit of one candidate in all patterns together, seen if any of them shows it.

    A line is seen where it stands apart from every ring listed, as a ring of its own.
    """
    ways = [way for view in views if (way := _chances(view, candidate, phase)) is not None]
    best: tuple[float, int, float, tuple[int, int, int]] = (-np.inf, 0, float("nan"), (0, 0, 0))
    for way in ways:
        with np.errstate(divide="ignore"):
            level = np.log(way.covered) + way.ln_visible + way.ln_unit - way.view.pattern.ln_limit
        first = int(np.argmax(level))
        if level[first] > best[0]:
            lines = way.view.lines
            h, k, l = (int(i) for i in way.view.line_hkl[lines.row[candidate, first]])  # noqa: E741 (Miller's own letter)
            spacing = float(np.exp(lines.x[candidate, first]))
            best = (float(level[first]), views.index(way.view), spacing, (h, k, l))

    def share_at(chance: float) -> float:
        if not ways:
            return 1.0
        own = float(np.exp(_ln_ratio(chance, ways)))
        return own / (own + 1.0)

    share = share_at(SURE)
    return Limit(phase, share, share_at(EVEN), best[1], best[2], best[3], share > 0.99)


def _chances(view: View, candidate: int, phase: Phase) -> _Chances | None:
    """How one pattern would show the candidate, None where nothing can be compared with it."""
    pattern, lines = view.pattern, view.lines
    strength = float(lines.strength[candidate])
    if strength <= 0 or view.weight <= 0:
        return None
    x = lines.x[candidate] + view.shift
    visible = np.where(np.isfinite(x), lines.visible[candidate], 0.0)
    x = np.where(np.isfinite(x), x, 50.0)
    nearest = np.abs(x[:, None] - pattern.x[None, :])
    apart = np.maximum(pattern.resolution, _APART_SIGMAS * pattern.sigma)
    free = (nearest > apart[None, :]).all(axis=1) & (visible > 0)
    density = max(phase.density_g_cm3, 1e-6)
    return _Chances(
        view=view,
        covered=np.where(free, pattern.seen_weight(x), 0.0) * (1.0 - pattern.scatter.lost),
        ln_visible=np.log(np.maximum(visible, 1e-12)),
        ln_unit=float(np.log(view.weight * strength / density)),
    )


def _ln_ratio(chance: float, ways: list[_Chances]) -> float:
    """ln of the weight over what is there at which the phase is seen with this chance."""
    low, high = -25.0, 25.0
    for _ in range(48):
        middle = 0.5 * (low + high)
        unseen = 1.0
        for way in ways:
            unseen *= 1.0 - way.seen(middle)
        if 1.0 - unseen < chance:
            low = middle
        else:
            high = middle
    return 0.5 * (low + high)


def chance_seen(
    ln_amplitude: float, covered: Floats, ln_visible: Floats, pattern: Pattern
) -> float:
    """Chance that at least one line is listed, over intensity scatter of lines and of the phase."""
    own = pattern.scatter.intensity
    slope = DETECTION_SLOPE / np.sqrt(1.0 + (DETECTION_SLOPE * own / LOGISTIC_SLOPE) ** 2)
    common = COMMON_SCATTER[pattern.probe.kind] * _NODES
    level = ln_amplitude + ln_visible[None, :] + common[:, None] - pattern.ln_limit
    seen = covered[None, :] / (1.0 + np.exp(-np.clip(slope * level, -40.0, 40.0)))
    unseen = np.log1p(-np.minimum(seen, 1.0 - 1e-12)).sum(axis=1)
    return float((_WEIGHTS * (1.0 - np.exp(unseen))).sum() / _WEIGHTS.sum())
