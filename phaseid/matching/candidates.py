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
    angle = np.sqrt((pattern.nuisance[:, 1:] ** 2).sum(axis=1))
    width = np.sqrt((1.5 * pattern.sigma) ** 2 + STRAIN**2 + angle**2)
    step = float(np.clip(0.5 * np.min(width), 5e-4, 2e-3))
    start = pattern.x[0] - 0.15 - abs(centre) - reach
    stop = pattern.x[-1] + 0.65 + abs(centre) + reach
    grid = np.arange(start, stop, step)
    distance, ring = _nearest(grid, pattern.x, np.arange(len(pattern)))
    beside = distance < np.maximum(3.0 * width, 0.7 * pattern.resolution)[ring]
    miss = np.where(beside, 0.0, pattern.seen_weight(grid))
    worth = np.arange(len(pattern)) if wanted is None else np.flatnonzero(wanted)
    hit = np.zeros(len(grid))
    if len(worth):
        distance, ring = _nearest(grid, pattern.x[worth], worth)
        hit = np.exp(-0.5 * (distance / width[ring]) ** 2)
    low = int(np.floor((centre - reach) / step))
    high = int(np.ceil((centre + reach) / step))
    # the outermost cells stand for everything further out
    hit[[0, -1]] = 0.0
    miss[[0, -1]] = 0.0
    return Ruler(start, step, hit, miss, np.arange(low, high + 1))


def _nearest(grid: Floats, x: Floats, rings: NDArray[np.int64]) -> tuple[Floats, NDArray[np.int64]]:
    """Distance of every grid point to the nearest of `x` (rising), and which of `rings` it is."""
    at = np.searchsorted(0.5 * (x[1:] + x[:-1]), grid)
    return np.abs(grid - x[at]), rings[at]


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
        at = cell[:, j : j + 1] + ruler.shifts
        np.clip(at, 0, last, out=at)
        score += gain[:, j : j + 1] * ruler.hit.take(at)
        score -= loss[:, j : j + 1] * ruler.miss.take(at)
    return score


def best_shift(
    score: Floats, u: Floats, spread: float, centre: float = 0.0
) -> tuple[Floats, Floats]:
    """Best score (c,) and shift (c,) under a Gaussian prior on u of one-sigma `spread`."""
    penalised = score - 0.5 * ((u - centre) / spread) ** 2
    at = np.argmax(penalised, axis=1)
    return penalised[np.arange(len(score)), at], u[at]
