"""The phases of a large library that are worth the whole search, chosen by a glance at all of them.

First as the search itself begins: which phases may explain the rings, alone or as a part of what is
there, a small part of it included. Then, as it goes on: the likeliest of these are judged by the
likelihood, and the library is looked through again for what explains the rings they leave; and so
on from the best pairs. Phases of a structure type that fits with another cell come in too, because
what is not listed is weighed by them.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from math import log

import numpy as np
from numpy.typing import NDArray

from phaseid.library.strongest import StrongLines
from phaseid.matching.glance import PER_NAT, Glance, Share, glance_at, make_glance
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.search import Judged
from phaseid.matching.settings import RELATIVE_STRAIN, STRAIN

PHASES_SEARCHED = 1500
"""This many at most are searched of a large library."""

Indices = NDArray[np.int64]
Scores = NDArray[np.float32]
Judge = Callable[[Indices, int], list[Judged]]
"""Search these of the allowed phases for sets of up to so many; every set, the best first, its
members numbered as the allowed phases are."""

_ALONE = (Share(0.0, True), Share(log(0.7), True))
_SHARES = (*_ALONE, *(Share(log(s), False) for s in (1.0, 0.6, 0.35, 0.2, 0.12, 0.06)))
_OF_THE_REST = ((0.0, True), (0.0, False), (0.8, False), (-0.6, False))
_PLACES, _PLACES_NEAR, _PLACES_OF_THE_REST = 16, 24, 12
"""Lines looked at of every phase, of those that may be near, of those for the rest."""
_RELATIVE_PLACES = 8
_RELATIVE_BLUR = 0.004
_RELATIVES = 48
_EACH = 90
"""Phases taken for each share supposed."""
_EACH_OF_THE_REST = (120, 60, 30)
"""The same for what the best set leaves, the second best, and each of the others."""
_BASES = {1: 8, 2: 4}
"""Sets of one and of two phases whose leftovers are looked at."""
_WHOLE, _LOOKS = (2, 1), 400_000
"""The whole library is looked through for what the best two phases and the best pair leave, and for
more of these while the phases looked at are fewer than that; for the others what may be near."""
_SETS_COMPARED = 40
_JUDGED = 150
"""Phases that the likelihood judges before the library is looked through again."""
_PAIRED = 12
"""Phases tried beside each of the best single ones before a third is looked for."""
_NEAR = 1500
"""Phases that may explain some of the rings, of each share supposed."""


@dataclass(slots=True)
class _Chooser:
    """The allowed phases of a library, and which of them were chosen, in the order of choosing."""

    patterns: Sequence[Pattern]
    strong: Sequence[StrongLines]
    allowed: NDArray[np.int64]
    log_prior: Floats
    chosen: dict[int, None] = field(default_factory=dict)

    def score(
        self, glances: Sequence[Glance], places: int, among: NDArray[np.int64] | None = None
    ) -> Scores:
        """ln evidence (p, shares) of the allowed phases, or of those `among` them (indices)."""
        phases = self.allowed if among is None else self.allowed[among]
        prior = self.log_prior if among is None else self.log_prior[among]
        total = np.repeat(prior[:, None].astype(np.float32), glances[0].worth.shape[2], axis=1)
        for glance, strong in zip(glances, self.strong, strict=True):
            total += glance_at(strong, phases, glance, places) / np.float32(PER_NAT)
        return total

    def take(self, phases: Iterable[int]) -> None:
        for phase in phases:
            self.chosen.setdefault(int(phase))

    def explaining_the_rest(self, sets: Sequence[Judged], near: Indices) -> list[Indices]:
        """Take, for each of the `sets` that leave other rings, the phases that may explain them.

        Returns these phases, the likeliest first, one array for each of the sets.
        """
        found = []
        size = len(sets[0].members) if sets else 1
        whole = max(_WHOLE[size - 1], _LOOKS // len(self.allowed))
        for place, judged in enumerate(sets):
            among = None if place < whole else near
            rest = [
                _glance_at_the_rest(pattern, judged, i) for i, pattern in enumerate(self.patterns)
            ]
            each = _EACH_OF_THE_REST[min(place, len(_EACH_OF_THE_REST) - 1)]
            ranks = ranked(self.score(rest, _PLACES_OF_THE_REST, among), each)
            own = by_turns(ranks if among is None else among[ranks], each)
            self.take(own)
            found.append(own)
        return found


def shortlist(
    patterns: Sequence[Pattern],
    strong: Sequence[StrongLines],
    allowed: Indices,
    log_prior: Floats,
    judge: Judge,
    max_phases: int,
) -> Indices:
    """Return which of the `allowed` phases to search, rising indices into `allowed`.

    `strong` are the library's strongest lines as each pattern's probe sees them, `allowed` indices
    into them, `log_prior` (p,) belongs to the allowed.
    """
    chooser = _Chooser(patterns, strong, allowed, log_prior)
    first_glances = [_first_glance(p, _SHARES, STRAIN) for p in patterns]
    near = np.unique(ranked(chooser.score(first_glances, _PLACES), _NEAR))
    ranks = near[ranked(chooser.score(first_glances, _PLACES_NEAR, near), _NEAR)]
    chooser.take(by_turns(ranks, _EACH))
    wide = [_first_glance(p, _ALONE[:1], RELATIVE_STRAIN, _RELATIVE_BLUR) for p in patterns]
    chooser.take(ranked(chooser.score(wide, _RELATIVE_PLACES), _RELATIVES)[:, 0])
    if max_phases > 1:
        first = by_turns(ranks, _JUDGED)[:_JUDGED]
        bases = _leaving_other_rings(judge(first, 1), 1)[: _BASES[1]]
        further = chooser.explaining_the_rest(bases, near)
        if max_phases > 2 and bases:
            pairs = [np.array([j.members[0] for j in bases]), *(own[:_PAIRED] for own in further)]
            sets = _leaving_other_rings(judge(np.unique(np.concatenate(pairs)), 2), 2)
            chooser.explaining_the_rest(sets[: _BASES[2]], near)
    chooser.take(by_turns(ranks, PHASES_SEARCHED))
    return np.sort(np.fromiter(chooser.chosen, np.int64)[:PHASES_SEARCHED])


def _first_glance(
    pattern: Pattern, shares: tuple[Share, ...], strain: float, blur: float = 0.0
) -> Glance:
    spread = float(np.hypot(pattern.probe.scale_sigma, strain))
    reach = max((3.5 if strain == STRAIN else 2.5) * spread, 0.004)
    return make_glance(pattern, shares, spread=spread, reach=reach, blur=blur)


def _glance_at_the_rest(pattern: Pattern, judged: Judged, number: int) -> Glance:
    """For what explains the rings that a set leaves, at the scale it was judged to have."""
    wanted = ~judged.claimed[number]
    known = wanted & np.isfinite(pattern.intensity_sd)
    strongest = float(pattern.ln_intensity[known].max()) if known.any() else 0.0
    shares = tuple(Share(strongest + ln_share, alone) for ln_share, alone in _OF_THE_REST)
    spread = float(np.hypot(judged.scale_sd[number], 1.5 * STRAIN))
    centre = float(judged.scale[number])
    return make_glance(
        pattern, shares, spread=spread, reach=3 * spread, centre=centre, wanted=wanted
    )


def _leaving_other_rings(sets: Sequence[Judged], size: int) -> list[Judged]:
    """Of the sets of a size, best first, the first of each choice of rings that they leave."""
    kept: dict[bytes, Judged] = {}
    for judged in [j for j in sets if len(j.members) == size][:_SETS_COMPARED]:
        claimed = np.concatenate(judged.claimed)
        if not claimed.all():
            kept.setdefault(claimed.tobytes(), judged)
    return list(kept.values())


def ranked(score: Scores, count: int) -> Indices:
    """Rows of the best `count` of each column, best first, (count, columns)."""
    count = min(count, len(score))
    best = np.argpartition(-score, count - 1, axis=0)[:count]
    order = np.argsort(-np.take_along_axis(score, best, axis=0), axis=0, kind="stable")
    return np.take_along_axis(best, order, axis=0)


def by_turns(ranks: Indices, count: int) -> Indices:
    """The rows of the first `count` ranks, each once: all columns' first, all second, and so on."""
    flat = ranks[:count].ravel()
    _, first = np.unique(flat, return_index=True)
    return flat[np.sort(first)]
