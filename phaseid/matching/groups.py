"""Which phases this pattern cannot tell apart, however well it is measured the same way again.

For an answer the pattern it predicts is laid out without noise, at the precision and detection
limit of the measured one; each rival is then judged on it. A rival whose likelihood falls short by
less than a nat and a half could not be refused by these rings.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from phaseid.matching.likelihood import evaluate
from phaseid.matching.model import Fit, Model
from phaseid.matching.search import Judged, Members

DISTANCE = 1.5
"""Expected log-likelihood distance below which two phases are one answer."""
_WIDER_DISTANCE = 3.0
_EVEN_ODDS = 1.1
"""Up to the wider distance, two phases are one answer where these very rings leave the odds between
them below three to one."""
_ACTUAL = 4.5
"""A rival further behind on the measured rings themselves is told apart by them."""


def predicted(model: Model, fit: Fit) -> Model:
    """The model with its patterns replaced by what the fitted hypothesis (row 0) predicts."""
    patterns, crowd = [], []
    for pattern, density, part in zip(model.patterns, model.crowd, fit.patterns, strict=True):
        keep = np.flatnonzero(part.claimed[0])
        if len(keep) == 0:
            keep = np.arange(len(pattern))
        x = pattern.x[keep] - part.unshifted[0, keep]
        order = np.argsort(x, kind="stable")
        keep, x = keep[order], x[order]
        known = np.isfinite(pattern.intensity_sd[keep])
        patterns.append(
            replace(
                pattern,
                x=x,
                sigma=pattern.sigma[keep],
                ln_intensity=np.where(known, part.ln_total[0, keep], 0.0),
                intensity_sd=pattern.intensity_sd[keep],
                members=tuple(pattern.members[i] for i in keep),
                nuisance=pattern.nuisance[keep],
                merging=pattern.merging[keep],
                resolution=pattern.resolution[keep],
            )
        )
        crowd.append(density[keep])
    return Model(tuple(patterns), model.lines, tuple(crowd))


def indistinguishable(
    model: Model, leader: Judged, rivals: list[Judged]
) -> list[tuple[Judged, bool]]:
    """For each rival of the leader's size, whether these rings cannot tell it from the leader."""
    if not rivals:
        return []
    fit = evaluate(model, np.array([leader.members]), leader.offset[None])
    ideal = predicted(model, fit)
    members = np.array([leader.members, *(r.members for r in rivals)], dtype=np.int64)
    # the ideal pattern stands at zero shift: a rival's shift there is its own less the leader's
    shift = leader.offset.mean(axis=0)
    offsets = np.stack([np.zeros_like(leader.offset), *(r.offset - shift for r in rivals)])
    likelihood = evaluate(ideal, members, offsets).log_likelihood
    same = []
    for i, rival in enumerate(rivals):
        distance = float(likelihood[0] - likelihood[i + 1])
        even = abs(leader.log_posterior - rival.log_posterior) < _EVEN_ODDS
        same.append((rival, distance < DISTANCE or (even and distance < _WIDER_DISTANCE)))
    return same


def rivals_of(leader: Judged, ranked: list[Judged]) -> list[Judged]:
    """Sets of the same size that differ in one phase and are not far behind."""
    return [
        j
        for j in ranked
        if len(j.members) == len(leader.members)
        and j.members != leader.members
        and len(set(j.members) & set(leader.members)) == len(leader.members) - 1
        and leader.log_posterior - j.log_posterior < _ACTUAL
    ]


def pairing(leader: Members, rival: Members) -> tuple[int, int]:
    """(position in the leader, candidate that stands there in the rival)."""
    (gone,) = set(leader) - set(rival)
    (new,) = set(rival) - set(leader)
    return leader.index(gone), new
