"""What may have made the rings that no expected phase explains."""

from __future__ import annotations

from dataclasses import dataclass
from math import log

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.likelihood import evaluate
from phaseid.matching.model import Fit, Model
from phaseid.matching.patterns import Floats

Members = tuple[int, ...]
Ring = tuple[int, int]
"""Pattern and ring of its list."""

WATCHED_PRIOR, LISTED_PRIOR = 0.5, 0.3
"""Prior that a contaminant is on the watch list, or another phase of the library; else neither."""
_MOST = 3
_BRANCHES = 3
_BATCH = 128
_WORTH = 0.15
"""A phase is tried where one of its lines of this relative intensity is near a foreign ring."""
_SHOWN = 0.01
_MAIN_SHARE = 0.3


@dataclass(frozen=True, slots=True)
class Suspect:
    """A candidate (number in the line table) and the probability that it is there."""

    candidate: int
    probability: float


@dataclass(frozen=True, slots=True, eq=False)
class Contaminants:
    """Suspects, the likeliest first; for each (pattern, ring) those that make it, with the
    probability that they do; the fit of the best set, and the set, expected phases first."""

    suspects: tuple[Suspect, ...]
    by_ring: dict[Ring, tuple[tuple[int, float], ...]]
    fit: Fit
    members: Members


@dataclass(frozen=True, slots=True, eq=False)
class _Set:
    members: Members
    log_posterior: float
    fit: Fit
    row: int


def explain(
    model: Model,
    expected: Members,
    shift: Floats,
    watched: set[int],
    suspects: NDArray[np.bool_],
) -> Contaminants:
    """Add to the expected phases whatever explains the rings that are left, up to three phases.

    `shift` (K,) is the common shift of each pattern in ln d; `suspects` (c,) says which candidates
    may be added, those `watched` among them. Sets of phases are weighed by their
    likelihood and a prior that favours the watch list; "none of them" takes part.
    """
    others = int(suspects.sum()) - len(watched)
    prior = np.full(len(suspects), log(LISTED_PRIOR / max(others, 1)))
    prior[list(watched)] = log(WATCHED_PRIOR / max(len(watched), 1))
    base = _judged(model, [expected], shift, prior, expected)[0]
    sets = {expected: base}
    open_sets = [base]
    for _ in range(_MOST):
        grown: list[_Set] = []
        for parent in open_sets:
            tried = [
                (*parent.members, c)
                for c in _worth_trying(model, parent, shift)
                if suspects[c] and c not in parent.members
            ]
            fresh = [m for m in tried if frozenset(m) not in {frozenset(s) for s in sets}]
            grown += _judged(model, fresh, shift, prior, expected)
        if not grown:
            break
        grown.sort(key=lambda s: -s.log_posterior)
        best = max(s.log_posterior for s in sets.values())
        for one in grown:
            if one.log_posterior > best - 7.0:
                sets[one.members] = one
        open_sets = [s for s in grown[:_BRANCHES] if s.log_posterior > best]
        if not open_sets:
            break
    return _weighed(model, list(sets.values()), expected, base)


def _worth_trying(model: Model, parent: _Set, shift: Floats) -> list[int]:
    """Candidates with a strong line near a ring that is left."""
    near = np.zeros(len(model.lines[0].x), dtype=bool)
    for pattern, lines, part, common in zip(
        model.patterns, model.lines, parent.fit.patterns, shift, strict=True
    ):
        left = np.flatnonzero(~part.claimed[parent.row])
        strong = lines.intensity > _WORTH
        window = np.maximum(4.0 * pattern.sigma, 0.6 * pattern.resolution)[left] + 0.002
        for x, reach in zip(pattern.x[left], window, strict=True):
            near |= (strong & (np.abs(lines.x + common - x) < reach)).any(axis=1)
    return np.flatnonzero(near).tolist()


def _judged(
    model: Model, sets: list[Members], shift: Floats, prior: Floats, expected: Members
) -> list[_Set]:
    judged = []
    for start in range(0, len(sets), _BATCH):
        some = sets[start : start + _BATCH]
        members = np.array(some, dtype=np.int64)
        start_at = np.broadcast_to(shift, (*members.shape, len(shift)))
        fit = evaluate(model, members, start_at)
        for row, one in enumerate(some):
            added = float(sum(prior[c] for c in one[len(expected) :]))
            judged.append(_Set(one, float(fit.log_likelihood[row]) + added, fit, row))
    return judged


def _weighed(model: Model, sets: list[_Set], expected: Members, base: _Set) -> Contaminants:
    shifted = np.array([s.log_posterior for s in sets])
    weight = np.exp(shifted - shifted.max())
    weight /= weight.sum()
    total: dict[int, float] = {}
    by_ring: dict[Ring, dict[int, float]] = {}
    left = [np.flatnonzero(~part.claimed[base.row]) for part in base.fit.patterns]
    for one, w in zip(sets, weight.tolist(), strict=True):
        for k in range(len(expected), len(one.members)):
            candidate = one.members[k]
            total[candidate] = total.get(candidate, 0.0) + w
            for number, (pattern, part) in enumerate(
                zip(model.patterns, one.fit.patterns, strict=True)
            ):
                for ring in left[number]:
                    if not part.claimed[one.row, ring]:
                        continue
                    if part.share[one.row, k, ring] > _MAIN_SHARE:
                        for member in pattern.members[ring]:
                            held = by_ring.setdefault((number, int(member)), {})
                            held[candidate] = held.get(candidate, 0.0) + w
    best = sets[int(np.argmax(weight))]
    again = evaluate(model, np.array([best.members]), best.fit.offset[best.row][None])
    return Contaminants(
        suspects=tuple(
            Suspect(c, min(p, 1.0)) for c, p in sorted(total.items(), key=lambda e: -e[1])
        ),
        by_ring={
            ring: tuple(
                (c, min(p, 1.0)) for c, p in sorted(held.items(), key=lambda e: -e[1]) if p > _SHOWN
            )
            for ring, held in by_ring.items()
        },
        fit=again,
        members=best.members,
    )
