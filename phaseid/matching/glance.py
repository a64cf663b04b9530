"""A glance at the strongest lines of every phase of a large library: which may explain rings here?

The same question as in `candidates`, asked of whole numbers: for a few supposed shares of a phase
in the pattern, a table says for a line of any strength at any place how far meeting or missing a
ring there speaks for the phase; a phase's score is the sum over its strongest lines, at the best
common shift. Phases of a small share are only asked for the lines that would show.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.library.strongest import CODE_AT_1_A, CODE_STEP, LEVEL_STEP, NO_LINE, StrongLines
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import DETECTION_SLOPE, ODD_POSITION_FACTOR, STRAIN

PER_NAT = 64
"""Scores are whole numbers, this many to a nat."""
_MOST = 6 * PER_NAT
_CLASS = 0.35
_CLASSES = 14
"""Lines are sorted by ln(strongest / intensity) into this many classes of this width."""
_CHUNK = 8192
_ROUNDING = 0.25
"""One-sigma of ln intensity from classes and supposed shares being steps."""


@dataclass(frozen=True, slots=True)
class Share:
    """A supposed share: intensity of the phase's strongest line, of the pattern's strongest ring.

    `alone`: nothing else adds to its rings, which are then neither weaker nor stronger than its
    lines; else they may be stronger.
    """

    ln_strongest: float
    alone: bool


@dataclass(frozen=True, slots=True, eq=False)
class Glance:
    """What to look with: `worth` (classes + 1, cells, shares) int16, for shifts of whole cells.

    Cell i stands for the codes from `width` × (`first` + i) on. `geometry` (cells,) is ln of the
    probe's factor on m|F|²d²; `inside` (cells,) whether a cell lies between the outermost rings.
    `penalty` (shifts,) is what each of `shifts` costs.
    """

    width: int
    first: int
    worth: NDArray[np.int16]
    geometry: Floats
    inside: NDArray[np.bool_]
    shifts: NDArray[np.int64]
    penalty: NDArray[np.int64]


def make_glance(
    pattern: Pattern,
    shares: tuple[Share, ...],
    *,
    spread: float,
    reach: float,
    centre: float = 0.0,
    wanted: NDArray[np.bool_] | None = None,
    blur: float = 0.0,
) -> Glance:
    """Tables for common shifts within `centre` ± `reach`, Gaussian of one-sigma `spread`.

    Where `wanted` (m,) is given, only those rings are worth meeting; a line that falls on another
    ring is hidden by it. `blur` widens the rings (ln d).
    """
    angle = np.sqrt((pattern.nuisance[:, 1:] ** 2).sum(axis=1))
    sigma = np.sqrt((1.5 * pattern.sigma) ** 2 + STRAIN**2 + angle**2 + blur**2)
    width = int(np.clip(0.75 * sigma.min() / CODE_STEP, 5, 40))
    step = width * CODE_STEP
    low = pattern.x[0] - 0.15 - abs(centre) - reach
    high = pattern.x[-1] + 0.65 + abs(centre) + reach
    first, last = (int((x / CODE_STEP + CODE_AT_1_A) // width) for x in (low, high))
    cells = np.arange(first, last + 1)
    x: Floats = ((cells + 0.5) * width - 0.5 - CODE_AT_1_A).astype(np.float64) * CODE_STEP

    seen = pattern.seen_weight(x)
    ring = _nearest(x, pattern.x)
    beside = np.abs(x - pattern.x[ring]) < np.maximum(3 * sigma, 0.7 * pattern.resolution)[ring]
    worth_meeting = np.arange(len(pattern)) if wanted is None else np.flatnonzero(wanted)
    met = worth_meeting[_nearest(x, pattern.x[worth_meeting])] if len(worth_meeting) else ring
    off = (x - pattern.x[met]) / sigma[met]
    usual, odd = np.exp(-0.5 * off**2), np.exp(-0.5 * (off / ODD_POSITION_FACTOR) ** 2)
    density = (0.95 * usual + 0.05 / ODD_POSITION_FACTOR * odd) / (2.5 * sigma[met])
    chance = len(worth_meeting) / (pattern.x[-1] - pattern.x[0] + 0.06)
    ratio = density / chance if len(worth_meeting) else np.zeros(len(x))

    ln_line = -_CLASS * np.arange(_CLASSES)[:, None, None] + np.array(
        [share.ln_strongest for share in shares]
    )
    shown = (1 - pattern.scatter.lost) / (
        1 + np.exp(-DETECTION_SLOPE * (ln_line - pattern.ln_limit))
    )
    alone = np.array([share.alone for share in shares])
    fits = _fits(pattern, met, ln_line, alone)
    hidden = np.where(beside, 0.0, seen)[:, None]
    value = np.log(1 - shown * hidden + shown * fits * (seen * ratio)[:, None])
    worth = np.zeros((_CLASSES + 1, len(cells), len(shares)), dtype=np.int16)
    worth[:-1] = np.clip(np.rint(value * PER_NAT), -_MOST, _MOST)
    worth[:, [0, -1]] = 0  # the outermost cells stand for everything further out

    geometry = pattern.probe.weights(np.exp(x), np.ones(len(x), dtype=np.int32), np.ones(len(x)))
    shifts = np.arange(np.floor((centre - reach) / step), np.ceil((centre + reach) / step) + 1)
    penalty = 0.5 * ((shifts * step - centre) / spread) ** 2
    return Glance(
        width=width,
        first=first,
        worth=worth,
        geometry=np.log(np.maximum(geometry, 1e-300)) - 2 * x,
        inside=(x > pattern.x[0] - 0.03) & (x < pattern.x[-1] + 0.03),
        shifts=shifts.astype(np.int64),
        penalty=np.rint(penalty * PER_NAT).astype(np.int64),
    )


def _nearest(x: Floats, rings: Floats) -> NDArray[np.int64]:
    return np.searchsorted(0.5 * (rings[1:] + rings[:-1]), x)


def _fits(
    pattern: Pattern, ring: NDArray[np.int64], ln_line: Floats, alone: NDArray[np.bool_]
) -> Floats:
    """How well a line's intensity fits that of the ring it meets, 0 to 1 (classes, cells, shares).

    1 where the ring has no intensity.
    """
    scatter = pattern.scatter
    known = np.isfinite(pattern.intensity_sd)
    reading = np.where(known, pattern.intensity_sd, 0.0)
    sd = np.sqrt(scatter.intensity**2 + reading**2 + _ROUNDING**2)
    off = pattern.ln_intensity[ring][:, None] - ln_line
    off = np.where(alone, off, np.minimum(off, 0.0))
    usual = np.exp(-0.5 * (off / sd[ring][:, None]) ** 2)
    odd = np.exp(-0.5 * (off / scatter.odd_intensity) ** 2)
    fits: Floats = (1 - scatter.odd_share) * usual + scatter.odd_share * odd
    return np.where(known[ring][:, None], fits, 1.0)


def glance_at(
    strong: StrongLines, phases: NDArray[np.int64], glance: Glance, places: int
) -> NDArray[np.int16]:
    """Score (p, shares) of the `phases` (indices into `strong`) at their best shifts.

    `places` of the lines stored for each phase are looked at. Whole numbers, 64 to a nat.
    """
    classes, cells, shares = glance.worth.shape
    margin = int(np.abs(glance.shifts).max())
    length = cells + 2 * margin
    table = np.zeros((classes, length, shares), dtype=np.int16)
    table[:, margin : margin + cells] = glance.worth
    rows = table.reshape(-1, shares)
    best = np.empty((len(phases), shares), dtype=np.int16)
    for start in range(0, len(phases), _CHUNK):
        chosen = phases[start : start + _CHUNK]
        at = _rows(strong, chosen, glance, places, length)
        own = best[start : start + _CHUNK]
        own[:] = np.iinfo(np.int16).min
        score, line = np.empty_like(own), np.empty_like(own)
        for shift, penalty in zip(glance.shifts, glance.penalty, strict=True):
            shifted = rows[margin + shift :]
            score[:] = -penalty
            for place in at:
                np.take(shifted, place, axis=0, out=line, mode="clip")
                score += line
            np.maximum(own, score, out=own)
    return best


def _rows(
    strong: StrongLines, phases: NDArray[np.int64], glance: Glance, places: int, length: int
) -> NDArray[np.int64]:
    """Which row of a table of `length` cells a class holds each line's worth (places, p)."""
    whole = len(phases) == len(strong)
    code = (strong.code if whole else strong.code[phases])[:, :places].T
    level = (strong.level if whole else strong.level[phases])[:, :places].T
    cell = np.clip(code.astype(np.int32) // glance.width - glance.first, 0, len(glance.inside) - 1)
    ln_intensity = glance.geometry[cell] - LEVEL_STEP * level.astype(np.float32)
    inside = glance.inside[cell] & (level != NO_LINE)
    strongest = np.where(inside, ln_intensity, -np.inf).max(axis=0)
    below = np.where(np.isfinite(strongest), strongest - ln_intensity, np.inf)
    which = np.clip(np.rint(below / _CLASS), 0, _CLASSES).astype(np.int64)
    which[level == NO_LINE] = _CLASSES
    return which * length + cell
