"""A glance at the strongest lines of every phase of a large library: which may explain rings here?

The same question as in `candidates`, asked of whole numbers: for a few supposed shares of a phase
in the pattern, a table says for a line of any strength at any place how far meeting or missing a
ring there speaks for the phase; a phase's score is the sum over its strongest lines, at the best
common shift. Phases of a small share are only asked for the lines that would show.

Where a phase's lines fall in the tables depends on the pattern alone (`find_places`), and tables
that are asked of the same phases lie side by side (`glance_at`): so the library is gone through few
times, whatever is supposed.
"""

from __future__ import annotations

from collections.abc import Sequence
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
_OUT_OF_REACH = 1 << 14
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
class Scale:
    """The cells in which a pattern's tables stand, all of one width.

    Cell i stands for the codes from `width` × (`first` + i) on, `x` (cells,) is ln d of its middle.
    `margin` is the most cells that lines are shifted by. `geometry` (cells,) is ln of the probe's
    factor on m|F|²d²; `inside` (cells,) whether a cell lies between the outermost rings. `sigma`
    (m,) is how far off a line may meet each ring.
    """

    width: int
    first: int
    margin: int
    x: Floats
    geometry: Floats
    inside: NDArray[np.bool_]
    sigma: Floats

    @property
    def step(self) -> float:
        """Width of a cell in ln d."""
        return self.width * CODE_STEP


@dataclass(frozen=True, slots=True, eq=False)
class Glance:
    """What to look for: `worth` (classes + 1, cells, shares) int16, for shifts of whole cells.

    `penalty` (shifts,) is what each of `shifts` costs.
    """

    worth: NDArray[np.int16]
    shifts: NDArray[np.int64]
    penalty: NDArray[np.int64]


def make_scale(pattern: Pattern, *, reach: float, blur: float = 0.0, coarseness: int = 1) -> Scale:
    """Cells for shifts within ± `reach` (ln d); `blur` widens the rings.

    Cells of `coarseness` 1 are three quarters of the sharpest ring's sigma wide.
    """
    angle = np.sqrt((pattern.nuisance[:, 1:] ** 2).sum(axis=1))
    sigma = np.sqrt((1.5 * pattern.sigma) ** 2 + STRAIN**2 + angle**2 + blur**2)
    width = int(np.clip(0.75 * sigma.min() / CODE_STEP, 5, 40)) * coarseness
    margin = int(np.ceil(reach / (width * CODE_STEP)))
    low, high = pattern.x[0] - 0.15 - reach, pattern.x[-1] + 0.65 + reach
    first, last = (int((x / CODE_STEP + CODE_AT_1_A) // width) for x in (low, high))
    cells = np.arange(first, last + 1)
    x: Floats = ((cells + 0.5) * width - 0.5 - CODE_AT_1_A).astype(np.float64) * CODE_STEP
    shown = pattern.probe.weights(np.exp(x), np.ones(len(x), dtype=np.int32), np.ones(len(x)))
    return Scale(
        width=width,
        first=first,
        margin=margin,
        x=x,
        geometry=np.log(np.maximum(shown, 1e-300)) - 2 * x,
        inside=(x > pattern.x[0] - 0.03) & (x < pattern.x[-1] + 0.03),
        sigma=sigma,
    )


def make_glance(
    pattern: Pattern,
    scale: Scale,
    shares: tuple[Share, ...],
    *,
    spread: float,
    reach: float,
    centre: float = 0.0,
    wanted: NDArray[np.bool_] | None = None,
) -> Glance:
    """Tables for common shifts within `centre` ± `reach`, Gaussian of one-sigma `spread`.

    Where `wanted` (m,) is given, only those rings are worth meeting; a line that falls on another
    ring is hidden by it. Shifts beyond the reach of the scale are not tried.
    """
    x, sigma = scale.x, scale.sigma
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
    worth = np.zeros((_CLASSES + 1, len(x), len(shares)), dtype=np.int16)
    worth[:-1] = np.clip(np.rint(value * PER_NAT), -_MOST, _MOST)
    worth[:, [0, -1]] = 0  # the outermost cells stand for everything further out

    ends = np.floor((centre - reach) / scale.step), np.ceil((centre + reach) / scale.step)
    low, high = np.clip(ends, -scale.margin, scale.margin)
    shifts = np.arange(low, high + 1)
    penalty = 0.5 * ((shifts * scale.step - centre) / spread) ** 2
    return Glance(
        worth=worth,
        shifts=shifts.astype(np.int64),
        penalty=np.rint(np.minimum(penalty, _MOST) * PER_NAT).astype(np.int64),
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


def find_places(
    strong: StrongLines, phases: NDArray[np.int64], scale: Scale, most: int
) -> NDArray[np.int64]:
    """Where the `most` strongest lines of the `phases` (indices into `strong`) stand in tables.

    Returns (most, p): class × cells + cell, for tables of which each class has the cells of the
    scale and twice its margin.
    """
    whole = len(phases) == len(strong)
    code = np.ascontiguousarray((strong.code if whole else strong.code[phases])[:, :most].T)
    level = np.ascontiguousarray((strong.level if whole else strong.level[phases])[:, :most].T)
    last = len(scale.x) - 1
    cell_of = np.clip(np.arange(1 << 16) // scale.width - scale.first, 0, last).astype(np.int16)
    # intensities in the steps of levels, as whole numbers
    steps = np.rint(np.maximum(scale.geometry, -200.0) / LEVEL_STEP).astype(np.int16)
    shown = steps[cell_of][code] - level
    inside = scale.inside[cell_of][code] & (level != NO_LINE)
    strongest = np.where(inside, shown, -(1 << 14)).max(axis=0)
    below = np.clip(strongest - shown, 0, _FAINTEST).astype(np.int16)
    below[level == NO_LINE] = _FAINTEST
    below[:, strongest == -(1 << 14)] = _FAINTEST
    length = len(scale.x) + 2 * scale.margin
    found: NDArray[np.int64] = (_CLASS_OF * length)[below] + cell_of[code]
    return found


_FAINTEST = int(np.ceil(_CLASSES * _CLASS / LEVEL_STEP))
_CLASS_OF = np.minimum(np.rint(np.arange(_FAINTEST + 1) * LEVEL_STEP / _CLASS), _CLASSES).astype(
    np.int64
)
"""Class by how many steps of level a line is below the strongest."""


def glance_at(
    places: NDArray[np.int64], scale: Scale, glances: Sequence[Glance]
) -> list[NDArray[np.int16]]:
    """Score (p, shares) of phases at their best shifts, for each of several glances on one scale.

    `places` as `find_places` gives them. Whole numbers, 64 to a nat.
    """
    classes, cells, _ = glances[0].worth.shape
    length = cells + 2 * scale.margin
    # of each table column the first shift comes to stand at the margin
    columns = [column for glance in glances for column in _columns(glance)]
    table = np.zeros((classes, length, sum(part.width for part in columns)), dtype=np.int16)
    steps = max(len(part.penalty) for part in columns)
    penalty = np.full((steps, table.shape[2]), _OUT_OF_REACH, dtype=np.int16)
    at = 0
    for part in columns:
        own = slice(at, at + part.width)
        start = scale.margin - part.first
        table[:, start : start + cells, own] = part.worth
        penalty[: len(part.penalty), own] = part.penalty[:, None]
        at += part.width
    best = _best_sums(table.reshape(-1, table.shape[2]), places, scale.margin, penalty)
    scores, at = [], 0
    for glance in glances:
        shares = glance.worth.shape[2]
        found = best[:, at : at + shares * _parts(glance)]
        scores.append(found.reshape(len(found), -1, shares).max(axis=1))
        at += found.shape[1]
    return scores


@dataclass(frozen=True, slots=True, eq=False)
class _Column:
    """A table with some neighbouring shifts, of which `first` is the lowest."""

    worth: NDArray[np.int16]
    first: int
    penalty: NDArray[np.int64]

    @property
    def width(self) -> int:
        return int(self.worth.shape[2])


_SIDE_BY_SIDE = 8
"""Shares that are summed at once as fast as one of them."""


def _parts(glance: Glance) -> int:
    shares = int(glance.worth.shape[2])
    return max(1, min(_SIDE_BY_SIDE // shares, len(glance.shifts)))


def _columns(glance: Glance) -> list[_Column]:
    """A glance of few shares several times side by side, each time with some of the shifts."""
    parts = np.array_split(np.arange(len(glance.shifts)), _parts(glance))
    return [_Column(glance.worth, int(glance.shifts[p[0]]), glance.penalty[p]) for p in parts]


def _best_sums(
    rows: NDArray[np.int16],
    places: NDArray[np.int64],
    margin: int,
    penalty: NDArray[np.int16],
) -> NDArray[np.int16]:
    """The best over the shifts of the sum of a table's rows at `places` (lines, p): (p, columns).

    The table holds them from row `margin` on.
    """
    count = places.shape[1]
    best = np.empty((count, rows.shape[1]), dtype=np.int16)
    for start in range(0, count, _CHUNK):
        at = places[:, start : start + _CHUNK]
        own = best[start : start + _CHUNK]
        own[:] = np.iinfo(np.int16).min
        score, line = np.empty_like(own), np.empty_like(own)
        for shift, lost in enumerate(penalty):
            shifted = rows[margin + shift :]
            np.negative(np.broadcast_to(lost, score.shape), out=score)
            for place in at:
                np.take(shifted, place, axis=0, out=line, mode="clip")
                score += line
            np.maximum(own, score, out=own)
    return best
