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
    """`posterior` (T, n) of each state in each pattern, given the whole series; `persistence` the
    mean of κ after it; `persistence_posterior` one probability per value tried."""

    posterior: Floats
    persistence: float
    persistence_posterior: tuple[tuple[float, float], ...]


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
    evidence: Floats, states: States, persistence: Sequence[tuple[float, float]] = PERSISTENCE
) -> Smoothed:
    """Posterior of every pattern's state; `evidence` (T, n) ln likelihood of each in each."""
    runs = []
    for kappa, weight in persistence:
        posterior, log_evidence = _along(evidence, states.log_prior, log_links(states, kappa))
        runs.append((kappa, log(weight) + log_evidence, posterior))
    best = max(value for _, value, _ in runs)
    weights = np.array([exp(value - best) for _, value, _ in runs])
    weights /= weights.sum()
    return Smoothed(
        posterior=sum(
            (w * p for w, (_, _, p) in zip(weights, runs, strict=True)), 0.0 * runs[0][2]
        ),
        persistence=float(sum(w * k for w, (k, _, _) in zip(weights, runs, strict=True))),
        persistence_posterior=tuple(
            (k, float(w)) for w, (k, _, _) in zip(weights, runs, strict=True)
        ),
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
    """Forward and backward along the chain: posterior (T, n) and ln evidence of the series."""
    length = len(evidence)
    own = evidence + prior
    forward = np.empty_like(own)
    forward[0] = own[0]
    for t in range(1, length):
        forward[t] = own[t] + _log_sum(links + forward[t - 1][None, :])
    backward = np.zeros_like(own)
    for t in range(length - 2, -1, -1):
        backward[t] = _log_sum(links + (own[t + 1] + backward[t + 1])[None, :])
    total = _log_sum(forward[-1][None, :])[0]
    posterior: Floats = np.exp(forward + backward - total)
    return posterior / posterior.sum(axis=1, keepdims=True), float(total)


def _log_sum(values: Floats) -> Floats:
    """ln Σ exp along the last axis; -inf where all are."""
    top = values.max(axis=-1)
    safe = np.where(np.isfinite(top), top, 0.0)
    with np.errstate(divide="ignore"):
        result: Floats = safe + np.log(np.exp(values - safe[..., None]).sum(axis=-1))
    return result
