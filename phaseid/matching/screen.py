"""Is anything there that should not be? Expected phases, leftovers, and what 'clean' is worth."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from math import exp, log
from typing import Literal

import numpy as np

from phaseid.errors import InputError
from phaseid.library import Library
from phaseid.library.phase import Phase
from phaseid.matching.contaminants import Contaminants, Suspect, explain
from phaseid.matching.crowd import crowd
from phaseid.matching.likelihood import evaluate
from phaseid.matching.limits import Limit, expected_weight, limit_of
from phaseid.matching.lineset import gather
from phaseid.matching.model import Fit, Model
from phaseid.matching.patterns import Pattern, prepare
from phaseid.matching.pool import Found, Pool
from phaseid.matching.settings import STRAIN
from phaseid.matching.watch import Watched
from phaseid.rings import RingList

MOST_EXPECTED = 8
_SHIFTS = 61
_SEEN = 2.0
"""ln likelihood that an expected phase adds from which on it counts as seen."""
_FOUND = 0.5


@dataclass(frozen=True, slots=True)
class ExplainedRing:
    """A ring of an expected phase."""

    ring: int
    hkl: tuple[int, int, int]
    d_calc_A: float
    residual_sigma: float


@dataclass(frozen=True, slots=True)
class ExpectedPhase:
    """An expected phase: whether the rings need it, and which of them it explains."""

    phase: Phase
    seen: bool
    rings: tuple[ExplainedRing, ...]


@dataclass(frozen=True, slots=True)
class Candidate:
    """What may have made a foreign ring; `lists`, `why` where it is on a watch list."""

    phase: Phase
    probability: float
    lists: tuple[str, ...]
    why: tuple[str, ...]


@dataclass(frozen=True, slots=True)
class ForeignRing:
    """A ring that no expected phase explains, and what may have made it, the likeliest first."""

    ring: int
    d_A: float
    candidates: tuple[Candidate, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Screening:
    """Whether a pattern shows only what is expected, and how much of what else it could hide.

    `found` are watch-list phases that are there with a probability above one half; `limits` the
    others; `scale` the fitted measured d / calculated d and its one-sigma.
    """

    rings: RingList
    verdict: Literal["clean", "foreign-rings"]
    expected: tuple[ExpectedPhase, ...]
    foreign: tuple[ForeignRing, ...]
    found: tuple[Candidate, ...]
    limits: tuple[Limit, ...]
    weakest_percent: float
    scale: tuple[float, float]
    remarks: tuple[str, ...]


def screen(
    rings: RingList,
    library: Library,
    expected: Sequence[Found],
    watch: Sequence[Watched],
    find: Callable[[str], Found],
    *,
    weakest: float | None = None,
) -> Screening:
    """Hold the rings against the phases that are expected and those that are watched for.

    `find` gives phase and structure of a name on a user's own list. `weakest` is the intensity
    (strongest ring = 1) of the weakest ring that would have been listed; default: estimated from
    the list. Raises InputError where nothing is expected, or too much.
    """
    if not 1 <= len(expected) <= MOST_EXPECTED:
        raise InputError(
            "nothing is expected" if not expected else f"{len(expected)} phases are expected",
            remedy=f"Name one to {MOST_EXPECTED} with --expect, each by itself.",
        )
    pool = Pool(library, rings.probe.kind)
    members = tuple(dict.fromkeys(pool.add(*found) for found in expected))
    watched = pool.add_watched(watch, find)
    pattern = prepare(rings)
    if weakest is not None:
        pattern = replace(pattern, ln_limit=log(weakest))
    table = pool.table()
    every = np.arange(len(table))
    lines = gather(table, every, pattern)
    model = Model((pattern,), (lines,), (crowd(table, every, pattern),))
    fit, shift = _fitted(model, members)
    claimed = fit.patterns[0].claimed[0]
    left = [i for k in np.flatnonzero(~claimed) for i in pattern.members[k]]
    result = (
        explain(model, members, shift, set(watched) - set(members))
        if left
        else Contaminants((), {}, fit, members)
    )
    suspects = {s.candidate: s for s in result.suspects}
    present = [c for c, s in suspects.items() if s.probability > _FOUND]
    phases = [pool.phase(c) for c in result.members]
    weight = expected_weight(
        pattern,
        result.fit.patterns[0].ln_amplitude[0],
        lines.strength[list(result.members)],
        phases,
    )

    def candidate(suspect: Suspect, probability: float) -> Candidate:
        on = watched.get(suspect.candidate)
        return Candidate(
            pool.phase(suspect.candidate),
            probability,
            () if on is None else on.lists,
            () if on is None else on.why,
        )

    foreign = tuple(
        ForeignRing(
            ring,
            float(rings.d_A[ring]),
            tuple(candidate(suspects[c], p) for c, p in result.by_ring.get(ring, ())),
        )
        for ring in sorted(left)
    )
    limits = [
        limit_of(pattern, lines, c, pool.phase(c), table.hkl, weight, shift)
        for c in watched
        if c not in members and c not in present
    ]
    return Screening(
        rings=rings,
        verdict="foreign-rings" if foreign else "clean",
        expected=tuple(_expected(model, members, k, fit, shift, pool) for k in range(len(members))),
        foreign=foreign,
        found=tuple(
            candidate(suspects[c], suspects[c].probability) for c in present if c in watched
        ),
        limits=tuple(sorted(limits, key=lambda limit: limit.share)),
        weakest_percent=100.0 * exp(pattern.ln_limit),
        scale=(exp(shift), exp(shift) * float(fit.scale_sd[0, 0])),
        remarks=(*rings.remarks, *_remarks(pattern, weakest, weight)),
    )


def _fitted(model: Model, members: tuple[int, ...]) -> tuple[Fit, float]:
    """The expected phases on the rings, at the best of many common shifts."""
    pattern = model.patterns[0]
    reach = 3.0 * float(np.hypot(pattern.probe.scale_sigma, STRAIN))
    step = float(np.median(pattern.sigma))
    count = int(np.clip(2 * np.ceil(reach / step) + 1, 5, _SHIFTS))
    shifts = np.linspace(-reach, reach, count)
    rows = np.repeat(np.array([members], dtype=np.int64), count, axis=0)
    offset = np.broadcast_to(shifts[:, None, None], (count, len(members), 1))
    best = int(np.argmax(evaluate(model, rows, offset).log_likelihood))
    fit = evaluate(model, rows[:1], offset[best : best + 1])
    return fit, float(fit.offset[0].mean())


def _expected(
    model: Model, members: tuple[int, ...], k: int, fit: Fit, shift: float, pool: Pool
) -> ExpectedPhase:
    """What one expected phase explains, and whether the rings need it."""
    pattern, part, lines = model.patterns[0], fit.patterns[0], model.lines[0]
    table = pool.table()
    rest = np.array([[m for m in members if m != members[k]]], dtype=np.int64)
    without = evaluate(model, rest, np.full((1, rest.shape[1], 1), shift))
    gain = float(fit.log_likelihood[0] - without.log_likelihood[0])
    own = []
    for ring in np.flatnonzero(part.claimed[0]):
        if part.share[0, k, ring] < 0.3:
            continue
        on = np.flatnonzero(part.line_ring[0, k] == ring)
        row = int(lines.row[members[k], on[np.argmax(lines.intensity[members[k], on])]])
        h, k_, l = (int(i) for i in table.hkl[row])  # noqa: E741 (Miller's own letter)
        d_calc = float(table.d_A[row])
        for i in pattern.members[ring]:
            measured, sigma = float(pattern.rings.d_A[i]), float(pattern.rings.sigma_A[i])
            residual = (log(measured / d_calc) - shift) * measured / sigma
            own.append(ExplainedRing(int(i), (h, k_, l), d_calc, residual))
    return ExpectedPhase(
        pool.phase(members[k]), gain > _SEEN, tuple(sorted(own, key=lambda ring: ring.ring))
    )


def _remarks(pattern: Pattern, weakest: float | None, weight: float) -> list[str]:
    said = []
    if not pattern.has_intensity:
        said.append("No intensities are given: the limits rest on a guess of what was visible.")
    elif weakest is None:
        said.append(
            f"Limits suppose that a ring of {100 * exp(pattern.ln_limit):.2g} % of the strongest "
            "is seen in half of the cases, as the weakest ring listed suggests; --weakest sets it."
        )
    if pattern.probe.kind == "electron":
        said.append("Electron intensities are uneven: limits are good to a factor of about two.")
    if weight <= 0:
        said.append("No expected phase is seen, so there is nothing to compare shares with.")
    return said
