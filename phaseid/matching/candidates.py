"""A quick look at every phase of the library: where would its strong lines fall on rings?

For each phase and each common shift u the strongest lines are looked up in two tables over ln d:
how well a line there meets a ring, and how surely its absence would have been noticed. The sum
ranks phases; the likelihood then judges the best of them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.lineset import LineSet
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import DETECTION_SLOPE, STRAIN

_STRONGEST = 16
_HIT = 4.0
"""What a line that meets a ring is worth, in nats: a typical ln(ring precision / crowd density)."""


@dataclass(frozen=True, slots=True, eq=False)
class Ruler:
    """The two tables over ln d of one pattern, `step` apart from `start`; u runs over `shifts`."""

    start: float
    step: float
    hit: Floats
    miss: Floats
    shifts: NDArray[np.int64]

    @property
    def u(self) -> Floats:
        """The shifts in ln d."""
        result: Floats = self.shifts.astype(np.float64) * self.step
        return result


def make_ruler(
    pattern: Pattern,
    *,
    centre: float,
    reach: float,
    wanted: NDArray[np.bool_] | None = None,
) -> Ruler:
    """Tables for shifts within `centre` ± `reach`.

    Where `wanted` (m,) is given, only those rings are worth meeting; a line that falls on another
    ring is hidden by it, which speaks neither for nor against.
    """
    step = float(np.clip(0.7 * np.median(pattern.sigma), 2e-4, 2e-3))
    angle = np.sqrt((pattern.nuisance[:, 1:] ** 2).sum(axis=1))
    width = np.sqrt((1.5 * pattern.sigma) ** 2 + STRAIN**2 + angle**2 + (0.4 * step) ** 2)
    start = pattern.x[0] - 0.15 - abs(centre) - reach
    stop = pattern.x[-1] + 0.65 + abs(centre) + reach
    grid = np.arange(start, stop, step)
    near = np.exp(-0.5 * ((grid[:, None] - pattern.x) / width) ** 2)
    beside = np.abs(grid[:, None] - pattern.x) < np.maximum(3.0 * width, 0.7 * pattern.resolution)
    hit = near.max(axis=1) if wanted is None else (near * wanted).max(axis=1)
    miss = np.where(beside.any(axis=1), 0.0, pattern.seen_weight(grid))
    low = int(np.floor((centre - reach) / step))
    high = int(np.ceil((centre + reach) / step))
    # the outermost cells stand for everything further out
    hit[[0, -1]] = 0.0
    miss[[0, -1]] = 0.0
    return Ruler(start, step, hit, miss, np.arange(low, high + 1))


def scan(lines: LineSet, pattern: Pattern, ruler: Ruler, ln_strongest: float = 0.0) -> Floats:
    """Score (c, u) of every phase at every shift; `ln_strongest` is ln of its strongest ring."""
    depth = min(_STRONGEST, lines.x.shape[1])
    x, intensity = lines.x[:, :depth], lines.intensity[:, :depth]
    visible = lines.visible[:, :depth]
    last = len(ruler.hit) - 1
    z = DETECTION_SLOPE * (np.log(np.maximum(intensity, 1e-9)) + ln_strongest - pattern.ln_limit)
    gain = _HIT / (1.0 + np.exp(-z))
    z = DETECTION_SLOPE * (np.log(np.maximum(visible, 1e-9)) + ln_strongest - pattern.ln_limit)
    loss = -np.log1p(-(1.0 - pattern.scatter.lost) / (1.0 + np.exp(-z)))
    cell = np.where(np.isfinite(x), (x - ruler.start) / ruler.step + 0.5, 0.0).astype(np.int64)
    score = np.zeros((len(x), len(ruler.shifts)))
    for j in range(depth):
        at = np.clip(cell[:, j : j + 1] + ruler.shifts, 0, last)
        score += gain[:, j : j + 1] * ruler.hit[at] - loss[:, j : j + 1] * ruler.miss[at]
    return score


def best_shift(
    score: Floats, u: Floats, spread: float, centre: float = 0.0
) -> tuple[Floats, Floats]:
    """Best score (c,) and shift (c,) under a Gaussian prior on u of one-sigma `spread`."""
    penalised = score - 0.5 * ((u - centre) / spread) ** 2
    at = np.argmax(penalised, axis=1)
    return penalised[np.arange(len(score)), at], u[at]
