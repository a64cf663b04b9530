"""Neighbouring patterns of a series know of each other: a hidden chain over sets of phases.

The hidden state of a pattern is the set of phases that show in it. From one pattern to the next
each phase stays with probability κ, the persistence; what stays is completed from the ordinary
prior π given that it contains what stayed. With C for what stayed and w(C|X) = κ^|C| (1-κ)^|X\\C|,

    P(X, Y) = Σ_C π(X) w(C|X) π(Y) w(C|Y) / m(C),   m(C) = Σ_X π(X) w(C|X).

Both marginals are π, whatever κ: a pattern by itself is judged as ever, the series has no preferred
direction, and κ = 0 makes its patterns independent. κ is not known: it is marginalised over a few
values, so that a folder of unrelated patterns borrows nothing. The sums over the chain are those of
Rabiner 1989, Proc. IEEE 77, 257.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass
from itertools import combinations
from math import exp, lgamma, log

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.settings import PHASE_COUNT_PRIOR, UNLISTED_PRIOR

Floats = NDArray[np.float64]
Set = frozenset[str]

PERSISTENCE = ((0.0, 0.25), (0.5, 0.25), (0.8, 0.25), (0.95, 0.25))
"""(κ, prior): a phase met in one pattern shows in the next with this probability. Common practice,
no source: from unrelated patterns to a series that hardly changes, alike likely beforehand."""


@dataclass(frozen=True, slots=True, eq=False)
class States:
    """What a pattern may show: the sets tried, then "not listed", then "another listed set".

    `sets` (n,); `log_prior` (n + 2,) ln of the ordinary prior of each state; `log_share` ln of each
    phase's own share of it; `rarity` ln of the share of random sets of one, two, … phases that hold
    the elements required, which `complete` says of a set.
    """

    sets: tuple[Set, ...]
    log_prior: Floats
    log_share: dict[str, float]
    rarity: tuple[float, ...]
    complete: Callable[[Set], bool]

    @classmethod
    def of(
        cls,
        sets: Sequence[Set],
        log_share: dict[str, float],
        rarity: tuple[float, ...],
        complete: Callable[[Set], bool] = lambda phases: True,
    ) -> States:
        """The states with the prior of `phaseid identify`; `rarity` has one entry per size."""
        listed = [log_prior(s, log_share, rarity) for s in sets]
        rest = 1.0 - UNLISTED_PRIOR - float(np.exp(listed).sum())
        ends = [log(UNLISTED_PRIOR), log(max(rest, 1e-6))]
        return cls(tuple(sets), np.array([*listed, *ends]), log_share, rarity, complete)

    def __len__(self) -> int:
        return len(self.log_prior)


@dataclass(frozen=True, slots=True, eq=False)
class Smoothed:
    """`posterior` (T, n) of each state in each pattern, given the whole series.

    `persistence_posterior` has one probability per κ tried, `variant_posterior` (v,) one per
    variant of the evidence.
    """

    posterior: Floats
    persistence_posterior: tuple[tuple[float, float], ...]
    variant_posterior: Floats

    @property
    def persistence(self) -> float:
        """The mean of κ after the series."""
        return sum(kappa * p for kappa, p in self.persistence_posterior)


def log_prior(phases: Set, log_share: dict[str, float], rarity: tuple[float, ...]) -> float:
    """ln of the prior of exactly these listed phases, as a pattern by itself has it."""
    k = len(phases)
    shares = sum(log_share[phase] for phase in phases)
    return (
        log(PHASE_COUNT_PRIOR[k - 1])
        + log(1.0 - UNLISTED_PRIOR)
        + lgamma(k + 1.0)
        + shares
        - rarity[k - 1]
    )


def smooth(
    variants: Sequence[tuple[float, Floats]],
    states: States,
    persistence: Sequence[tuple[float, float]] = PERSISTENCE,
) -> Smoothed:
    """Posterior of every pattern's state.

    `variants` are (prior, evidence): what else is common to the patterns and not known, with the ln
    likelihood (T, n) of each state in each pattern under it.
    """
    log_weight = np.empty((len(persistence), len(variants)))
    posteriors = []
    for i, (kappa, prior) in enumerate(persistence):
        links = np.exp(log_links(states, kappa))
        for k, (weight, evidence) in enumerate(variants):
            posterior, log_evidence = _along(evidence, np.exp(states.log_prior), links)
            posteriors.append(posterior)
            log_weight[i, k] = np.log(prior) + np.log(weight) + log_evidence
    weights = np.exp(log_weight - log_weight.max())
    weights /= weights.sum()
    return Smoothed(
        posterior=np.einsum("v,vtn->tn", weights.ravel(), np.stack(posteriors)),
        persistence_posterior=tuple(
            (kappa, float(w))
            for (kappa, _), w in zip(persistence, weights.sum(axis=1), strict=True)
        ),
        variant_posterior=weights.sum(axis=0),
    )


def log_links(states: States, kappa: float) -> Floats:
    """ln P(X, Y) / (π(X) π(Y)) of neighbours (n, n); 0 where they know nothing of each other."""
    count = len(states)
    total = np.zeros((count, count))
    for members, log_weights, log_mass in _cores(states, kappa):
        # no less than what the states alone hold, so that no link is more than certain
        held = float(np.logaddexp.reduce(states.log_prior[members] + log_weights))
        weights = np.exp(log_weights - max(log_mass, held) / 2.0)
        total[np.ix_(members, members)] += np.outer(weights, weights)
    with np.errstate(divide="ignore"):
        links: Floats = np.log(total)
    return links


def _cores(states: States, kappa: float) -> list[tuple[NDArray[np.int64], Floats, float]]:
    """For each C that may have stayed: the states that hold it, ln w(C|X), ln m(C)."""
    sizes = [len(s) for s in states.sets]
    unlisted, other = len(sizes), len(sizes) + 1
    gone = log(1.0 - kappa)
    counts = np.array(PHASE_COUNT_PRIOR)
    drawn = counts @ (1.0 - kappa) ** np.arange(1, len(counts) + 1)
    nothing = (1.0 - UNLISTED_PRIOR) * drawn + UNLISTED_PRIOR * (1.0 - kappa)
    every = np.arange(len(states))
    weights = np.array([*(gone * k for k in sizes), gone, log(drawn)])
    cores = [(every, weights, log(nothing))]
    if kappa == 0.0:
        return cores
    stays = log(kappa)
    cores.append((np.array([unlisted]), np.array([stays]), log(UNLISTED_PRIOR) + stays))
    cores.append(
        (
            np.array([other]),
            np.array([log(1.0 - drawn)]),
            float(states.log_prior[other]) + log(1.0 - drawn),
        )
    )
    holders: dict[Set, list[int]] = {}
    for index, one in enumerate(states.sets):
        for size in range(1, len(one) + 1):
            for core in combinations(sorted(one), size):
                holders.setdefault(frozenset(core), []).append(index)
    for stayed, members in holders.items():
        c = len(stayed)
        own = np.array([stays * c + gone * (sizes[i] - c) for i in members])
        cores.append((np.array(members), own, _log_mass(stayed, states, kappa)))
    return cores


def _log_mass(core: Set, states: States, kappa: float) -> float:
    """ln m(C) over all sets that hold `core`, listed among the states or not.

    What joins an incomplete core has to bring the elements it lacks: about as rarely as sets of
    that size hold them all.
    """
    c = len(core)
    done = states.complete(core)
    total = 0.0
    for k in range(c if done else c + 1, len(states.rarity) + 1):
        arranged = exp(lgamma(k + 1.0) - lgamma(k - c + 1.0))
        rarity = -states.rarity[k - 1] + (0.0 if done else states.rarity[k - c - 1])
        total += PHASE_COUNT_PRIOR[k - 1] * arranged * (1.0 - kappa) ** (k - c) * exp(rarity)
    shares = sum(states.log_share[phase] for phase in core)
    return log(max(total, 1e-300) * (1.0 - UNLISTED_PRIOR)) + shares + c * log(kappa)


def _along(evidence: Floats, prior: Floats, links: Floats) -> tuple[Floats, float]:
    """Forward and backward along the chain: posterior (T, n) and ln evidence of the series.

    Every state can follow every other, so that no step loses all weight to rounding.
    """
    best = evidence.max(axis=1, keepdims=True)
    own = np.exp(evidence - best) * prior
    forward, backward = np.empty_like(own), np.empty_like(own)
    total = float(best.sum())
    before = np.ones(len(prior))
    for t, seen in enumerate(own):
        forward[t] = seen * before
        scale = forward[t].sum()
        forward[t] /= scale
        total += float(np.log(scale))
        before = links @ forward[t]
    after = np.ones(len(prior))
    for t in range(len(own) - 1, -1, -1):
        backward[t] = after
        after = links @ (own[t] * after)
        after /= after.max()
    posterior: Floats = forward * backward
    return posterior / posterior.sum(axis=1, keepdims=True), total
