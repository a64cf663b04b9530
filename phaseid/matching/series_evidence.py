"""What each pattern of a series says of sets of phases that other patterns of it suggest."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import product
from math import log

import numpy as np
from numpy.typing import NDArray

from phaseid.library.library import Library
from phaseid.library.linetable import LineTable
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.crowd import crowd
from phaseid.matching.dispersion import at_own_energy, needs_own_energy
from phaseid.matching.field import log_prior_of
from phaseid.matching.identification import Hypothesis, Identification
from phaseid.matching.likelihood import evaluate
from phaseid.matching.lineset import gather
from phaseid.matching.model import Looseness, Model
from phaseid.matching.patterns import prepare
from phaseid.matching.series_chain import Floats, Set, States, log_prior
from phaseid.matching.settings import ROUGH, ROUGH_PRIOR
from phaseid.rings.ringlist import RingList

Indices = NDArray[np.int64]
TOP = 20
"""Answers asked of each pattern by itself."""
MOST_SETS = 200
"""Sets of phases a series is judged over, the likeliest of any of its patterns."""
_LEAST = 1e-5
_LEAST_REST = 1e-12
NEVER = -1e4
"""ln likelihood of a set of which a phase makes no ring: it cannot be what shows there."""


def stand_ins(hypothesis: Hypothesis) -> list[Set]:
    """The sets that are this answer: its phases, each or what these rings cannot tell from it."""
    choices = [
        [part.phase.phase_id, *(other.phase_id for other in part.indistinguishable)]
        for part in hypothesis.phases
    ]
    return [frozenset(chosen) for chosen in product(*choices)]


def own_sets(answer: Identification) -> list[Set]:
    """The sets that a pattern by itself answers with, likely or not: they set the scale."""
    return [frozenset(part.phase.phase_id for part in h.phases) for h in answer.hypotheses]


def sets_suggested(answers: Sequence[Identification]) -> list[Set]:
    """The sets of phases that any pattern by itself finds likely, the likeliest first."""
    best: dict[Set, float] = {}
    for answer in answers:
        for hypothesis in answer.hypotheses:
            same = stand_ins(hypothesis)
            value = hypothesis.probability / len(same)
            for one in same:
                if len(one) == len(hypothesis.phases) and value > _LEAST:
                    best[one] = max(best.get(one, 0.0), value)
    ranked = sorted(best, key=lambda one: (-best[one], sorted(one)))
    return ranked[:MOST_SETS]


def allowed_phases(library: Library, table: LineTable, chemistry: Chemistry) -> Indices:
    """Indices of the phases that the chemistry allows, one entry of each phase."""
    standing = library.standing()
    return np.array(
        [i for i, e in enumerate(table.elements) if standing[i] and chemistry.admits(e)],
        dtype=np.int64,
    )


def log_likelihoods(
    library: Library, rings: RingList, allowed: Indices, sets: Sequence[Set], starts: Floats
) -> Floats:
    """ln likelihood of each set on one pattern, its fitted scale (ln d) and one-sigma, (3, n).

    The likelihood is that by which the search for the phases of one pattern judges sets, structures
    that are known but roughly among them. `allowed` are the phases whose lines make the crowd.
    `starts` are common shifts in ln d from which the fit sets out; the best counts.
    """
    table = library.line_table(rings.probe.kind)
    number = {phase_id: i for i, phase_id in enumerate(table.phase_ids)}
    used = sorted({phase for one in sets for phase in one})
    rows = np.array([number[phase] for phase in used], dtype=np.int64)
    if needs_own_energy(rings.probe):
        table = at_own_energy(library, table, rows.tolist(), rings.probe)
    pattern = prepare(rings)
    lines = gather(table, rows, pattern)
    model = Model((pattern,), (lines,), (crowd(table, allowed, pattern),))
    place = {phase: i for i, phase in enumerate(used)}
    result = np.full((3, len(sets)), NEVER)
    result[1:] = [[0.0], [rings.probe.scale_sigma]]
    for size in sorted({len(one) for one in sets}):
        those = [i for i, one in enumerate(sets) if len(one) == size]
        members = np.array([sorted(place[p] for p in sets[i]) for i in those], dtype=np.int64)
        for start in starts:
            fit = evaluate(model, members, np.full((*members.shape, 1), start))
            value = np.where(fit.shows, fit.log_likelihood, NEVER)
            for which, way in product(range(size), ROUGH):
                loose = Looseness.rough(members.shape, np.full(len(members), which), way)
                rough = evaluate(model, members, fit.offset, loose)
                likely = log(ROUGH_PRIOR / len(ROUGH)) + rough.log_likelihood
                value = np.where(fit.shows & rough.shows, np.logaddexp(value, likely), value)
            found = np.stack([value, fit.scale[:, 0], fit.scale_sd[:, 0]])
            result[:, those] = np.where(value > result[0, those], found, result[:, those])
    return result


def starts_of(answer: Identification) -> Floats:
    """Where to look for the shift of further sets: none, and that of the best answer."""
    best = [log(h.scale[0].factor) for h in answer.hypotheses[:1]]
    return np.array([0.0, *best])


def evidence(
    answer: Identification, states: States, likelihood: Floats, own_likelihood: Floats
) -> Floats:
    """ln likelihood (n + 2,) of each state in one pattern, on a scale of its own.

    `likelihood` (n,) is that of the states' sets, `own_likelihood` that of `own_sets`. Where the
    pattern's own answer says more of a set than its plain likelihood (as a textured film, or with
    an unlisted phase beside it), that counts. What its answers leave over is shared by the sets not
    among the states.
    """
    prior = states.log_prior[:-2]
    common = _common_factor(answer, states, own_likelihood)
    weight = np.full(len(prior), NEVER) if common is None else likelihood + prior - common
    index = {one: i for i, one in enumerate(states.sets)}
    told, own = 0.0, np.zeros(len(prior), dtype=np.bool_)
    for hypothesis in answer.hypotheses:
        members = [index[one] for one in stand_ins(hypothesis) if one in index]
        if hypothesis.probability > 0 and members:
            total = float(np.logaddexp.reduce(weight[members]))
            weight[members] += max(log(hypothesis.probability) - total, 0.0)
            told += hypothesis.probability
            own[members] = True
    further = float(np.exp(np.minimum(weight[~own], 0.0)).sum())
    rest = max(1.0 - answer.unlisted_probability - told - further, _LEAST_REST)
    ends = np.log([max(answer.unlisted_probability, 1e-300), rest])
    result: Floats = np.concatenate([weight, ends]) - states.log_prior
    return result


def _common_factor(answer: Identification, states: States, own_likelihood: Floats) -> float | None:
    """ln of likelihood × prior over probability, the same for every set; None where none is known.

    An answer that is worth no more than its plain likelihood shows it; others are worth more.
    """
    found = [
        float(value) + log_prior(one, states.log_share, states.rarity) - log(h.probability)
        for h, one, value in zip(answer.hypotheses, own_sets(answer), own_likelihood, strict=True)
        if h.probability > 0 and len(one) == len(h.phases) and value > NEVER
    ]
    return max(found, default=None)


def log_shares(table: LineTable, allowed: Indices, chemistry: Chemistry) -> dict[str, float]:
    """ln of each allowed phase's share of the prior."""
    values = log_prior_of(table, allowed, chemistry).tolist()
    return {table.phase_ids[i]: value for i, value in zip(allowed.tolist(), values, strict=True)}
