"""What each pattern of a series says of sets of phases that other patterns of it suggest."""

from __future__ import annotations

from collections.abc import Sequence
from itertools import product
from math import log

import numpy as np

from phaseid.library.library import Library
from phaseid.library.linetable import LineTable
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.crowd import crowd
from phaseid.matching.dispersion import at_own_energy, needs_own_energy
from phaseid.matching.identification import Hypothesis, Identification
from phaseid.matching.likelihood import evaluate
from phaseid.matching.lineset import gather
from phaseid.matching.model import Model
from phaseid.matching.patterns import prepare
from phaseid.matching.series_chain import Floats, Set, States
from phaseid.rings.ringlist import RingList

TOP = 20
"""Answers asked of each pattern by itself."""
MOST_SETS = 200
"""Sets of phases a series is judged over, the likeliest of any of its patterns."""
_LEAST = 1e-5
_NONE = -1e4
"""ln likelihood of a set of which a phase makes no ring: it cannot be what shows there."""


def stand_ins(hypothesis: Hypothesis) -> list[Set]:
    """The sets that are this answer: its phases, each or what these rings cannot tell from it."""
    choices = [
        [part.phase.phase_id, *(other.phase_id for other in part.indistinguishable)]
        for part in hypothesis.phases
    ]
    return [frozenset(chosen) for chosen in product(*choices)]


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


def log_likelihoods(
    library: Library, rings: RingList, chemistry: Chemistry, sets: Sequence[Set], starts: Floats
) -> Floats:
    """ln likelihood (n,) of each set on one pattern, as the search for its phases judges them.

    `starts` are common shifts in ln d from which the fit sets out; the best counts.
    """
    table = library.line_table(rings.probe.kind)
    number = {phase_id: i for i, phase_id in enumerate(table.phase_ids)}
    used = sorted({phase for one in sets for phase in one})
    rows = np.array([number[phase] for phase in used], dtype=np.int64)
    if needs_own_energy(rings.probe):
        table = at_own_energy(library, table, rows.tolist(), rings.probe)
    allowed = np.array(
        [i for i, e in enumerate(table.elements) if chemistry.admits(e)], dtype=np.int64
    )
    pattern = prepare(rings)
    lines = gather(table, rows, pattern)
    model = Model((pattern,), (lines,), (crowd(table, allowed, pattern),))
    place = {phase: i for i, phase in enumerate(used)}
    result = np.full(len(sets), _NONE)
    for size in sorted({len(one) for one in sets}):
        those = [i for i, one in enumerate(sets) if len(one) == size]
        members = np.array([sorted(place[p] for p in sets[i]) for i in those], dtype=np.int64)
        for start in starts:
            fit = evaluate(model, members, np.full((*members.shape, 1), start))
            value = np.where(fit.shows, fit.log_likelihood, _NONE)
            result[those] = np.maximum(result[those], value)
    return result


def starts_of(answer: Identification) -> Floats:
    """Where to look for the shift of further sets: none, and that of the best answer."""
    best = [log(h.scale[0].factor) for h in answer.hypotheses[:1]]
    return np.array([0.0, *best])


def evidence(answer: Identification, states: States, likelihood: Floats) -> Floats:
    """ln likelihood (n + 2,) of each state, on the scale of `likelihood` (n,) of its sets.

    Where the pattern's own answer says more of a set than its plain likelihood (as a textured film,
    or with an unlisted phase beside it), that counts. What its answers leave over is shared by the
    sets not among the states.
    """
    prior = states.log_prior[:-2]
    plain = likelihood + prior
    index = {one: i for i, one in enumerate(states.sets)}
    answers = [
        (h.probability, [index[one] for one in stand_ins(h) if one in index])
        for h in answer.hypotheses
    ]
    known = [(p, members) for p, members in answers if p > 0 and members]
    # an answer worth no more than its likelihood shows the common factor; others are worth more
    common = max(
        (float(np.logaddexp.reduce(plain[members])) - log(p) for p, members in known),
        default=float(plain.max(initial=_NONE)),
    )
    weight = plain - common
    told = 0.0
    for p, members in known:
        total = float(np.logaddexp.reduce(weight[members]))
        weight[members] += max(log(p) - total, 0.0)
        told += p
    rest = max(1.0 - answer.unlisted_probability - told, 0.0)
    among = [i for i in range(len(weight)) if all(i not in members for _, members in known)]
    rest = max(rest - float(np.exp(np.minimum(weight[among], 0.0)).sum()), 1e-12)
    ends = np.log([max(answer.unlisted_probability, 1e-300), rest])
    result: Floats = np.concatenate([weight, ends]) - states.log_prior
    return result


def log_shares(table: LineTable, chemistry: Chemistry) -> dict[str, float]:
    """ln of each allowed phase's share of the prior, by the quality of its entry."""
    held = {
        phase_id: max(float(quality), 1e-3)
        for phase_id, quality, elements in zip(
            table.phase_ids, table.quality, table.elements, strict=True
        )
        if chemistry.admits(elements)
    }
    total = sum(held.values())
    return {phase_id: log(value / total) for phase_id, value in held.items()}
