"""The chain over a series, against sums over every course that a small one can take."""

from __future__ import annotations

import math
from itertools import combinations, pairwise, product

import numpy as np
import pytest

from phaseid.matching.series_chain import PERSISTENCE, States, log_links, log_prior, smooth
from phaseid.matching.settings import PHASE_COUNT_PRIOR, UNLISTED_PRIOR

MANY = 400
SHARE = {f"p{i}": math.log(1.0 / MANY) for i in range(MANY)}
SETS = [frozenset(c) for k in (1, 2) for c in combinations(("p0", "p1", "p2"), k)]
STATES = States.of(SETS, SHARE, (0.0, 0.0, 0.0))
ANYTHING = np.random.default_rng(7).normal(scale=4.0, size=(4, len(STATES)))


def _stays(one: frozenset[str], core: frozenset[str], kappa: float) -> float:
    return kappa ** len(core) * (1 - kappa) ** len(one - core) if core <= one else 0.0


def _mass(core: frozenset[str], kappa: float) -> float:
    """Σ over sets that hold the core, phases alike likely: k!/N^k for each of C(N-c, k-c) sets."""
    c = len(core)
    total = sum(
        PHASE_COUNT_PRIOR[k - 1]
        * (1 - UNLISTED_PRIOR)
        * math.factorial(k)
        / MANY**k
        * math.comb(MANY - c, k - c)
        * kappa**c
        * (1 - kappa) ** (k - c)
        for k in range(max(c, 1), 4)
    )
    return total + (UNLISTED_PRIOR * (1 - kappa) if not core else 0.0)


@pytest.mark.parametrize("kappa", [0.5, 0.8, 0.95])
def test_links_of_listed_sets_are_the_sum_over_what_may_have_stayed(kappa: float) -> None:
    links = np.exp(log_links(STATES, kappa))
    for (i, one), (j, other) in product(enumerate(SETS), repeat=2):
        common = one & other
        cores = [frozenset(c) for k in range(len(common) + 1) for c in combinations(common, k)]
        expected = sum(
            _stays(one, core, kappa) * _stays(other, core, kappa) / _mass(core, kappa)
            for core in cores
        )
        assert links[i, j] == pytest.approx(expected, rel=0.03)


def test_nothing_stays_means_nothing_is_learnt() -> None:
    assert np.allclose(log_links(STATES, 0.0), 0.0)
    alone = np.exp(ANYTHING + STATES.log_prior)
    posterior = smooth([(1.0, ANYTHING)], STATES, ((0.0, 1.0),)).posterior
    assert np.allclose(posterior, alone / alone.sum(axis=1, keepdims=True))


@pytest.mark.parametrize("kappa", [0.5, 0.8])
def test_the_posterior_is_the_sum_over_every_course(kappa: float) -> None:
    """Brute force: all sequences of states of four patterns."""
    links = log_links(STATES, kappa)
    own = ANYTHING + STATES.log_prior
    n = len(STATES)
    total = np.zeros((4, n))
    for course in product(range(n), repeat=4):
        value = sum(own[t, s] for t, s in enumerate(course))
        value += sum(links[a, b] for a, b in pairwise(course))
        for t, s in enumerate(course):
            total[t, s] += math.exp(value)
    expected = total / total.sum(axis=1, keepdims=True)
    assert np.allclose(smooth([(1.0, ANYTHING)], STATES, ((kappa, 1.0),)).posterior, expected)


def test_the_direction_of_the_series_does_not_matter() -> None:
    there, back = smooth([(1.0, ANYTHING)], STATES), smooth([(1.0, ANYTHING[::-1])], STATES)
    assert np.allclose(there.posterior, back.posterior[::-1])
    assert there.persistence == pytest.approx(back.persistence)


def test_without_rings_each_pattern_keeps_its_prior() -> None:
    """The chain adds no opinion of its own, whatever the persistence."""
    sets = [frozenset([f"p{i}"]) for i in range(MANY)]
    states = States.of(sets, SHARE, (0.0,))
    nothing = np.zeros((3, len(states)))
    posterior = smooth([(1.0, nothing)], states, ((0.8, 1.0),)).posterior
    assert np.allclose(posterior[:, :-1], np.exp(states.log_prior[:-1]), rtol=0.15)
    assert np.allclose(posterior[:, -2], UNLISTED_PRIOR, rtol=0.1)


def test_a_phase_seen_on_both_sides_is_likely_between() -> None:
    evidence = np.zeros((3, len(STATES)))
    evidence[[0, 2], SETS.index(frozenset(["p1"]))] = 30.0
    evidence[1, [0, 1]] = 12.0
    posterior = smooth([(1.0, evidence)], STATES, ((0.8, 1.0),)).posterior
    assert posterior[1, 1] > 0.99
    apart = smooth([(1.0, evidence)], STATES, ((0.0, 1.0),)).posterior
    assert apart[1, 0] == pytest.approx(apart[1, 1])


def test_unrelated_patterns_teach_that_nothing_stays_and_borrow_nothing() -> None:
    singles = [frozenset([f"p{i}"]) for i in range(12)]
    states = States.of(singles, SHARE, (0.0,))
    evidence = np.zeros((12, len(states)))
    evidence[np.arange(12), np.arange(12)] = 40.0
    lonely = smooth([(1.0, evidence)], states)
    assert lonely.persistence < 0.1
    evidence = np.zeros((12, len(states)))
    evidence[:, 3] = 40.0
    steady = smooth([(1.0, evidence)], states)
    assert steady.persistence > 0.8
    assert sum(p for _, p in steady.persistence_posterior) == pytest.approx(1.0)
    assert [k for k, _ in steady.persistence_posterior] == [k for k, _ in PERSISTENCE]


def test_variants_of_the_evidence_are_weighed_by_what_they_explain() -> None:
    """Two variants, alike likely: the posterior is the mean weighted by their evidence."""
    other = ANYTHING + np.random.default_rng(8).normal(scale=1.0, size=ANYTHING.shape)
    one = ((0.8, 1.0),)
    both = smooth([(0.5, ANYTHING), (0.5, other)], STATES, one)
    apart = [smooth([(1.0, e)], STATES, one).posterior for e in (ANYTHING, other)]
    w = both.variant_posterior
    assert w.sum() == pytest.approx(1.0)
    assert np.allclose(both.posterior, w[0] * apart[0] + w[1] * apart[1])
    lifted = smooth([(0.5, ANYTHING), (0.5, ANYTHING + 1.0)], STATES, one)
    assert lifted.variant_posterior[1] == pytest.approx(1 / (1 + math.exp(-4.0)))


def test_required_elements_make_the_sets_that_hold_them_likelier() -> None:
    """Half of the singles and three quarters of the pairs hold what is required, say."""
    rarity = (math.log(0.5), math.log(0.75))
    plain = log_prior(frozenset(["p0"]), SHARE, (0.0, 0.0))
    assert log_prior(frozenset(["p0"]), SHARE, rarity) == pytest.approx(plain + math.log(2.0))
    states = States.of(SETS[:1], SHARE, rarity, lambda phases: "p0" in phases)
    assert np.isfinite(log_links(states, 0.8)).any()
    assert (log_links(states, 0.8) + states.log_prior < 1e-9).all()
