"""The likelihood of a set of phases, all nuisances marginalised. Batches of b hypotheses of k
phases.

One generative model for every pattern of the specimen. A phase's line j stands at x_j + δ + ε +
z·ζ: δ the pattern's common scale, ε the phase's strain, ζ zero shift and displacement, all
Gaussian, so their marginal is closed (linear Gaussian model). Lines near a ring add up in it; the
ring's intensity strays from that sum by a log-normal factor with a heavy tail; a line above the
detection limit that meets no ring counts against the phase. Rings no phase claims are either a few
from nowhere (Poisson) or those of an unlisted phase, with the crowd's line density.
"""

from __future__ import annotations

from math import lgamma, log

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.laying import PatternWork, Shift
from phaseid.matching.model import Fit, Looseness, Model
from phaseid.matching.patterns import Floats
from phaseid.matching.positions import AXES, Positions
from phaseid.matching.settings import (
    BESIDE_PRIOR,
    FOREIGN_RINGS,
    SIGMA_INFLATION,
    UNLISTED_RING_COUNT,
)

_RINGS_OF_A_FURTHER_PHASE = 2
"""One ring alone names no phase of a mixture: common practice, no source."""
_ROUNDS = ((4, 2.0), (2, 1.3), (1, 1.0))
"""(Newton steps, width of the windows for axial strains) of each round of refinement."""
_EXCUSED_RINGS = 8.0
"""Rings beyond the stored lines of a set fall there as densely as those it makes elsewhere, taken
to be at least this many."""


def _leftover(works: list[PatternWork]) -> Floats:
    """(b,) ln density of the rings no phase claims: a few from nowhere, or an unlisted phase's."""
    size = works[0].b
    density = np.zeros(size)
    nowhere = np.full(size, log(1.0 - BESIDE_PRIOR))
    unlisted = np.full(size, log(BESIDE_PRIOR))
    factorial = np.array([lgamma(n + 1.0) for n in range(max(w.m for w in works) + 1)])
    stay = log(UNLISTED_RING_COUNT / (1.0 + UNLISTED_RING_COUNT))
    for work in works:
        excused = work.excused()
        left = ~work.claimed & ~excused
        density += np.where(left, work.null, 0.0).sum(axis=1)
        rings = np.log(np.maximum(work.claimed.sum(axis=1), _EXCUSED_RINGS))[:, None]
        density += np.where(excused, work.null + rings, 0.0).sum(axis=1)
        count = left.sum(axis=1)
        nowhere += count * log(FOREIGN_RINGS) - FOREIGN_RINGS
        unlisted += factorial[count] + count * stay - log(1.0 + UNLISTED_RING_COUNT)
    result: Floats = density + np.logaddexp(nowhere, unlisted)
    return result


def nothing_listed(model: Model) -> float:
    """ln likelihood of all rings being those of an unlisted phase."""
    total = 0.0
    stay = log(UNLISTED_RING_COUNT / (1.0 + UNLISTED_RING_COUNT))
    for pattern, crowd in zip(model.patterns, model.crowd, strict=True):
        total += float(crowd.sum())
        total += lgamma(len(pattern) + 1.0) + len(pattern) * stay - log(1.0 + UNLISTED_RING_COUNT)
    return total


def evaluate(
    model: Model,
    members: NDArray[np.int64],
    offset: Floats,
    loose: Looseness | None = None,
) -> Fit:
    """Likelihood of b hypotheses of k phases each.

    `members` (b, k) candidate indices; `offset` (b, k, K) where to look first for each phase's
    shift in each pattern; `loose` how far phases may stray (default: as listed).
    """
    if loose is None:
        loose = Looseness.listed((members.shape[0], members.shape[1]))
    axial = loose.axial or (None,) * len(model.patterns)
    works = [
        PatternWork(pattern, lines, crowd, members, loose, stretch)
        for pattern, lines, crowd, stretch in zip(
            model.patterns, model.lines, model.crowd, axial, strict=True
        )
    ]
    positions = Positions(works, loose)
    still = np.zeros((*members.shape, AXES))
    shifts = [
        Shift(offset[:, :, i], np.zeros((work.b, work.m)), still) for i, work in enumerate(works)
    ]
    for rounds, wide in _ROUNDS:
        targets = []
        for work, shift in zip(works, shifts, strict=True):
            work.associate(shift, wide)
            if wide == _ROUNDS[0][1]:
                work.start_amplitudes()
            work.fit_amplitudes(rounds)
            targets.append(work.unshifted(shift))
        mean, covariance, _ = positions.solve(targets, SIGMA_INFLATION[0][0])
        shifts = positions.place(mean)
        residuals = []
        for work, shift, target in zip(works, shifts, targets, strict=True):
            residuals.append(target - work.placed(shift))
            work.decide(residuals[-1])
    # the claims have moved: settle amplitudes and positions once more on the final claims
    for work in works:
        work.fit_amplitudes(1)
    mean, covariance, _ = positions.solve(targets, SIGMA_INFLATION[0][0])
    total = positions.marginal(targets) + _leftover(works)
    for work in works:
        total = total + work.intensity_term() + work.missing_term() + work.occam_term()
    deviation = np.sqrt(np.maximum(np.einsum("bqq->bq", covariance), 0.0))
    first = np.cumsum([0, *positions.widths])
    scales = np.stack(
        [mean[:, first[i]] * w.pattern.nuisance[0, 0] for i, w in enumerate(works)], axis=1
    )
    scale_sds = np.stack(
        [deviation[:, first[i]] * w.pattern.nuisance[0, 0] for i, w in enumerate(works)], axis=1
    )
    offsets = np.stack([shift.offset for shift in positions.place(mean)], axis=2)
    strains = slice(positions.strains, positions.axials)
    least = 1 if members.shape[1] == 1 else _RINGS_OF_A_FURTHER_PHASE
    return Fit(
        log_likelihood=total,
        offset=offsets,
        scale=scales,
        scale_sd=scale_sds,
        strain=mean[:, strains] * loose.strain,
        strain_sd=deviation[:, strains] * loose.strain,
        shows=np.all(np.sum([work.own_rings() for work in works], axis=0) >= least, axis=1),
        patterns=tuple(map(PatternWork.result, works, targets, residuals)),
    )
