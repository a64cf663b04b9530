"""The phases of a large library that are worth the whole search, chosen by a glance at all of them.

First as the search itself begins: which phases may explain the rings, alone or as a part of what is
there, a small part of it included. Then, as it goes on: the likeliest of these are judged by the
likelihood, and the library is looked through again for what explains the rings they leave; and so
on from the best pairs. Phases of a structure type that fits with another cell come in too, because
what is not listed is weighed by them.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass, field
from math import log
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from phaseid.library.strongest import PLACES, StrongLines
from phaseid.matching.glance import (
    PER_NAT,
    Glance,
    Scale,
    Share,
    find_places,
    glance_at,
    make_glance,
    make_scale,
)
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.search import Judged
from phaseid.matching.settings import RELATIVE_STRAIN, STRAIN

PHASES_SEARCHED = 1500
"""This many at most are searched of a large library."""

Indices = NDArray[np.int64]
Scores = NDArray[np.float32]
Pairs = Sequence[tuple[Judged, Indices]]
"""Sets of one phase, each with further phases to try beside it."""


class Judge(Protocol):
    """Judges phases (numbered as the allowed ones are) by the likelihood, the best first."""

    def __call__(self, some: Indices, pairs: Pairs | None = None, /) -> list[Judged]:
        """Sets of each phase by itself, or the `pairs`, whose phases are all among `some`."""


_ALONE = (Share(0.0, True), Share(log(0.7), True))
_SHARES = (*_ALONE, *(Share(log(s), False) for s in (1.0, 0.6, 0.35, 0.2, 0.12, 0.06)))
_OF_THE_REST = ((0.0, True), (0.0, False), (0.8, False), (-0.6, False))
_PLACES, _PLACES_OF_THE_REST = 16, 12
"""Lines looked at of every phase, and of those for the rest."""
_FINE, _COARSENESS = 200_000, 2
"""All of so many phases are looked at in fine cells; of more in coarse ones, the best again in
fine ones."""
_RELATIVE_PLACES = 8
_RELATIVE_BLUR = 0.004
_RELATIVES = 48
_EACH = 90
"""Phases taken for each share supposed."""
_EACH_OF_THE_REST = (120, 60, 30)
"""The same for what the best set leaves, the second best, and each of the others."""
_BASES = {1: 8, 2: 4}
"""Sets of one and of two phases whose leftovers are looked at."""
_WHOLE, _LOOKS = 4, 400_000
"""The whole library is looked through for what the best four sets leave, and for more while the
phases looked at are fewer than that; for the others what may be near these."""
_SETS_COMPARED = 40
_JUDGED = 150
"""Phases that the likelihood judges before the library is looked through again."""
_PAIRED = 12
"""Phases tried beside each of the best single ones before a third is looked for."""
_NEAR = 1500
"""Phases that may explain some of the rings, of each share supposed."""


@dataclass(slots=True)
class _Chooser:
    """The allowed phases of a library, and which of them were chosen, in the order of choosing.

    For every pattern there is a scale, coarse where they are very many, on which `places` say where
    their lines stand, and a fine one for phases that are looked at closely.
    """

    patterns: Sequence[Pattern]
    strong: Sequence[StrongLines]
    allowed: NDArray[np.int64]
    log_prior: Floats
    coarse: Sequence[Scale]
    fine: Sequence[Scale]
    places: list[NDArray[np.int64]] = field(init=False)
    chosen: dict[int, None] = field(default_factory=dict)

    def __post_init__(self) -> None:
        pairs = zip(self.strong, self.coarse, strict=True)
        self.places = [find_places(one, self.allowed, own, _PLACES) for one, own in pairs]

    def score(self, looks: Sequence[Sequence[Glance]], count: int) -> list[Scores]:
        """ln evidence (p, shares) of the allowed phases by their `count` strongest lines.

        One for each of the `looks`, which hold a glance on the coarse scale of every pattern.
        """
        places = [own[:count] for own in self.places]
        return scored(looks, places, self.coarse, self.log_prior)

    def score_closely(self, looks: Sequence[Sequence[Glance]], among: Indices) -> list[Scores]:
        """The same of some phases (indices) on the fine scale, by all lines that are stored."""
        pairs = zip(self.strong, self.fine, strict=True)
        places = [find_places(one, self.allowed[among], own, PLACES) for one, own in pairs]
        return scored(looks, places, self.fine, self.log_prior[among])

    def take(self, phases: Iterable[int]) -> None:
        for phase in phases:
            self.chosen.setdefault(int(phase))

    def explaining_the_rest(self, sets: Sequence[Judged], near: Indices) -> list[Indices]:
        """Take, for each of the `sets` that leave other rings, the phases that may explain them.

        Returns these phases, the likeliest first, one array for each of the sets.
        """
        if not sets:
            return []
        whole = sets[: max(_WHOLE, _LOOKS // len(self.allowed))]
        scores = self.score(self._at_the_rest(whole, self.coarse), _PLACES_OF_THE_REST)
        looks = self._at_the_rest(sets, self.fine)
        near = np.union1d(near, np.concatenate([ranked(s, _NEAR).ravel() for s in scores]))
        found = []
        for place, score in enumerate(self.score_closely(looks, near)):
            each = _EACH_OF_THE_REST[min(place, len(_EACH_OF_THE_REST) - 1)]
            own = by_turns(near[ranked(score, each)], each)
            self.take(own)
            found.append(own)
        return found

    def _at_the_rest(self, sets: Sequence[Judged], scales: Sequence[Scale]) -> list[list[Glance]]:
        pairs = list(zip(self.patterns, scales, strict=True))
        return [
            [_glance_at_the_rest(*pair, judged, i) for i, pair in enumerate(pairs)]
            for judged in sets
        ]


def scored(
    looks: Sequence[Sequence[Glance]],
    places: Sequence[NDArray[np.int64]],
    scales: Sequence[Scale],
    log_prior: Floats,
) -> list[Scores]:
    """ln evidence (p, shares) for each of the looks; `places` and `scales` by pattern."""
    total: list[Scores] = []
    for i, (own, scale) in enumerate(zip(places, scales, strict=True)):
        scores = glance_at(own, scale, [look[i] for look in looks])
        parts = [score * np.float32(1 / PER_NAT) for score in scores]
        total = [a + b for a, b in zip(total, parts, strict=True)] if total else parts
    prior = log_prior[:, None].astype(np.float32)
    return [score + prior for score in total]


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
    coarse, fine = (
        [
            make_scale(p, reach=_reach(p, STRAIN) + 4.5 * STRAIN, coarseness=coarseness)
            for p in patterns
        ]
        for coarseness in (1 if len(allowed) <= _FINE else _COARSENESS, 1)
    )
    chooser = _Chooser(patterns, strong, allowed, log_prior, coarse, fine)
    first, closer = (
        [
            _first_glance(pattern, scale, _SHARES, STRAIN)
            for pattern, scale in zip(patterns, scales, strict=True)
        ]
        for scales in (coarse, fine)
    )
    near = np.unique(ranked(chooser.score([first], _PLACES)[0], _NEAR))
    ranks = near[ranked(chooser.score_closely([closer], near)[0], _NEAR)]
    chooser.take(by_turns(ranks, _EACH))
    chooser.take(_relatives(patterns, strong, allowed, log_prior))
    if max_phases > 1:
        likeliest = by_turns(ranks, _JUDGED)[:_JUDGED]
        bases = _leaving_other_rings(judge(likeliest), 1)[: _BASES[1]]
        further = chooser.explaining_the_rest(bases, near)
        if max_phases > 2 and bases:
            pairs = [(base, own[:_PAIRED]) for base, own in zip(bases, further, strict=True)]
            some = [base.members for base in bases] + [own for _, own in pairs]
            sets = _leaving_other_rings(judge(np.unique(np.concatenate(some)), pairs), 2)
            chooser.explaining_the_rest(sets[: _BASES[2]], near)
    chooser.take(by_turns(ranks, PHASES_SEARCHED))
    return np.sort(np.fromiter(chooser.chosen, np.int64)[:PHASES_SEARCHED])


def _relatives(
    patterns: Sequence[Pattern],
    strong: Sequence[StrongLines],
    allowed: Indices,
    log_prior: Floats,
) -> Indices:
    """The likeliest phases, were their cells other than listed."""
    scales = [
        make_scale(p, reach=_reach(p, RELATIVE_STRAIN), blur=_RELATIVE_BLUR) for p in patterns
    ]
    places = [
        find_places(one, allowed, scale, _RELATIVE_PLACES)
        for one, scale in zip(strong, scales, strict=True)
    ]
    look = [
        _first_glance(pattern, scale, _ALONE[:1], RELATIVE_STRAIN)
        for pattern, scale in zip(patterns, scales, strict=True)
    ]
    return ranked(scored([look], places, scales, log_prior)[0], _RELATIVES)[:, 0]


def _first_glance(
    pattern: Pattern, scale: Scale, shares: tuple[Share, ...], strain: float
) -> Glance:
    reach = _reach(pattern, strain)
    return make_glance(pattern, scale, shares, spread=_spread(pattern, strain), reach=reach)


def _spread(pattern: Pattern, strain: float) -> float:
    """One-sigma of the common shift of a phase's lines: scale and strain together."""
    return float(np.hypot(pattern.probe.scale_sigma, strain))


def _reach(pattern: Pattern, strain: float) -> float:
    return max((3.5 if strain == STRAIN else 2.5) * _spread(pattern, strain), 0.004)


def _glance_at_the_rest(pattern: Pattern, scale: Scale, judged: Judged, number: int) -> Glance:
    """For what explains the rings that a set leaves, at the scale it was judged to have."""
    wanted = ~judged.claimed[number]
    known = wanted & np.isfinite(pattern.intensity_sd)
    strongest = float(pattern.ln_intensity[known].max()) if known.any() else 0.0
    shares = tuple(Share(strongest + ln_share, alone) for ln_share, alone in _OF_THE_REST)
    spread = float(np.hypot(judged.scale_sd[number], 1.5 * STRAIN))
    centre = float(judged.scale[number])
    return make_glance(
        pattern, scale, shares, spread=spread, reach=3 * spread, centre=centre, wanted=wanted
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
    lost = np.ascontiguousarray(-score.T)
    best = np.argpartition(lost, count - 1, axis=1)[:, :count]
    order = np.argsort(np.take_along_axis(lost, best, axis=1), axis=1, kind="stable")
    return np.take_along_axis(best, order, axis=1).T


def by_turns(ranks: Indices, count: int) -> Indices:
    """The rows of the first `count` ranks, each once: all columns' first, all second, and so on."""
    flat = ranks[:count].ravel()
    _, first = np.unique(flat, return_index=True)
    return flat[np.sort(first)]
