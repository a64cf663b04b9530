"""Is anything there that should not be? Expected phases, leftovers, and what 'clean' is worth."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, replace
from math import exp, log
from typing import Literal

import numpy as np

from phaseid.errors import InputError
from phaseid.library import Library
from phaseid.library.linetable import LineTable
from phaseid.library.phase import Phase
from phaseid.matching.contaminants import Contaminants, Suspect, explain
from phaseid.matching.crowd import crowd
from phaseid.matching.likelihood import evaluate
from phaseid.matching.limits import Limit, View, expected_weight, limit_of
from phaseid.matching.lineset import gather
from phaseid.matching.model import Fit, Model
from phaseid.matching.patterns import Floats, prepare_all
from phaseid.matching.pool import Found, Pool
from phaseid.matching.records import PHASE_KEYS, Record, Tidy, indices, phase_record
from phaseid.matching.settings import STRAIN
from phaseid.matching.watch import Watched
from phaseid.rings import RingList

MOST_EXPECTED = 8
_SHIFTS = 61
_SEEN = 2.0
"""ln likelihood that an expected phase adds from which on it counts as seen."""
_FOUND = 0.5
_OWN_SHARE = 0.3


@dataclass(frozen=True, slots=True)
class ExplainedRing:
    """A ring of an expected phase."""

    pattern: int
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

    pattern: int
    ring: int
    d_A: float
    candidates: tuple[Candidate, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Screening(Tidy):
    """Whether patterns of a specimen show only what is expected, and how much else could hide.

    `found` are watch-list phases that are there with a probability above one half; `limits` the
    others; by pattern, `scales` the fitted measured d / calculated d and its one-sigma, and
    `weakest_percent` the detection limit, of its strongest ring.
    """

    patterns: tuple[RingList, ...]
    verdict: Literal["clean", "foreign-rings"]
    expected: tuple[ExpectedPhase, ...]
    foreign: tuple[ForeignRing, ...]
    found: tuple[Candidate, ...]
    limits: tuple[Limit, ...]
    weakest_percent: tuple[float, ...]
    scales: tuple[tuple[float, float], ...]
    remarks: tuple[str, ...]

    def records(self) -> list[Record]:
        """One record per foreign ring and candidate; of a clean pattern none."""
        return [
            {
                "pattern": ring.pattern + 1,
                "ring": ring.ring + 1,
                "d_A": ring.d_A,
                **(phase_record(c.phase) if c else dict.fromkeys(PHASE_KEYS)),
                "probability": None if c is None else c.probability,
                "list": ", ".join(c.lists) or None if c else None,
                "why": ", ".join(c.why) or None if c else None,
            }
            for ring in self.foreign
            for c in ring.candidates or (None,)
        ]

    def limit_records(self) -> list[Record]:
        """One record per phase watched for and not found: the shares from which it is seen."""
        return [
            {
                **phase_record(limit.phase),
                "share": limit.share,
                "share_even": limit.share_even,
                "hkl": None if limit.hidden else indices(limit.hkl),
                "d_A": None if limit.hidden else limit.d_A,
                "hidden": limit.hidden,
            }
            for limit in self.limits
        ]

    def summary(self) -> str:
        """Clean or not, and what was found."""
        if self.verdict == "clean":
            return f"clean; {len(self.limits)} phases watched for were not found"
        names = ", ".join(candidate.phase.name for candidate in self.found)
        return f"{len(self.foreign)} foreign rings" + (f", likely of {names}" if names else "")


def screen(
    patterns: Sequence[RingList],
    library: Library,
    expected: Sequence[Found],
    watch: Sequence[Watched],
    find: Callable[[str], Found],
    *,
    weakest: float | None = None,
) -> Screening:
    """Hold the rings against the phases that are expected and those that are watched for.

    `patterns` are of one specimen. `find` gives phase and structure of a name on a user's own list.
    `weakest` is the intensity (strongest ring = 1) of the weakest ring that would have been listed;
    default: estimated from each list. Raises InputError where nothing is expected, or too much.
    """
    if not 1 <= len(expected) <= MOST_EXPECTED:
        raise InputError(
            "nothing is expected" if not expected else f"{len(expected)} phases are expected",
            remedy=f"Name one to {MOST_EXPECTED} with --expect, each by itself.",
        )
    pool = Pool(library)
    members = tuple(dict.fromkeys(pool.add(*found) for found in expected))
    watched = pool.add_watched(watch, find)
    tables = {kind: pool.table(kind) for kind in {rings.probe.kind for rings in patterns}}
    own = tuple(tables[rings.probe.kind] for rings in patterns)
    model = _model(patterns, own, weakest)
    fit, shift = _fitted(model, members)
    left = [
        (number, ring)
        for number, (pattern, part) in enumerate(zip(model.patterns, fit.patterns, strict=True))
        for k in np.flatnonzero(~part.claimed[0])
        for ring in pattern.members[k]
    ]
    result = (
        explain(model, members, shift, set(watched) - set(members), pool.suspects(watched))
        if left
        else Contaminants((), {}, fit, members)
    )
    suspects = {s.candidate: s for s in result.suspects}
    present = [c for c, s in suspects.items() if s.probability > _FOUND]
    views = _views(model, own, result, [pool.phase(c) for c in result.members], shift)

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
            number,
            ring,
            float(patterns[number].d_A[ring]),
            tuple(candidate(suspects[c], p) for c, p in result.by_ring.get((number, ring), ())),
        )
        for number, ring in sorted(left)
    )
    limits = [
        limit_of(views, c, pool.phase(c)) for c in watched if c not in members and c not in present
    ]
    return Screening(
        patterns=tuple(patterns),
        verdict="foreign-rings" if foreign else "clean",
        expected=tuple(
            _expected(model, own, members, k, fit, shift, pool.phase(members[k]))
            for k in range(len(members))
        ),
        foreign=foreign,
        found=tuple(
            candidate(suspects[c], suspects[c].probability) for c in present if c in watched
        ),
        limits=tuple(sorted(limits, key=lambda limit: limit.share)),
        weakest_percent=tuple(100.0 * exp(pattern.ln_limit) for pattern in model.patterns),
        scales=tuple(
            (exp(s), exp(s) * float(sd)) for s, sd in zip(shift, fit.scale_sd[0], strict=True)
        ),
        remarks=tuple(
            dict.fromkeys(
                remark
                for view in views
                for remark in (*view.pattern.rings.remarks, *_remarks(view, weakest))
            )
        ),
    )


def _model(
    patterns: Sequence[RingList], tables: tuple[LineTable, ...], weakest: float | None
) -> Model:
    """All phases of the tables, one table per pattern, as candidates."""
    prepared = prepare_all(patterns)
    if weakest is not None:
        prepared = [replace(pattern, ln_limit=log(weakest)) for pattern in prepared]
    pairs = list(zip(tables, prepared, strict=True))
    every = np.arange(len(tables[0]))
    return Model(
        tuple(prepared),
        tuple(gather(table, every, pattern) for table, pattern in pairs),
        tuple(crowd(table, every, pattern) for table, pattern in pairs),
    )


def _views(
    model: Model,
    tables: tuple[LineTable, ...],
    result: Contaminants,
    phases: list[Phase],
    shift: Floats,
) -> list[View]:
    """Each pattern with what is seen in it, to compare shares with."""
    return [
        View(
            pattern,
            lines,
            table.hkl,
            expected_weight(
                pattern, part.ln_amplitude[0], lines.strength[list(result.members)], phases
            ),
            float(common),
        )
        for pattern, lines, table, part, common in zip(
            model.patterns, model.lines, tables, result.fit.patterns, shift, strict=True
        )
    ]


def _fitted(model: Model, members: tuple[int, ...]) -> tuple[Fit, Floats]:
    """The expected phases on the rings; the best of many common shifts of each pattern."""
    start = [
        _best_shift(Model((pattern,), (lines,), (density,)), members)
        for pattern, lines, density in zip(model.patterns, model.lines, model.crowd, strict=True)
    ]
    rows = np.array([members], dtype=np.int64)
    fit = evaluate(model, rows, np.broadcast_to(start, (1, len(members), len(start))))
    return fit, fit.offset[0].mean(axis=0)


def _best_shift(model: Model, members: tuple[int, ...]) -> float:
    (pattern,) = model.patterns
    reach = 3.0 * float(np.hypot(pattern.probe.scale_sigma, STRAIN))
    step = float(np.median(pattern.sigma))
    count = int(np.clip(2 * np.ceil(reach / step) + 1, 5, _SHIFTS))
    shifts = np.linspace(-reach, reach, count)
    rows = np.repeat(np.array([members], dtype=np.int64), count, axis=0)
    offset = np.broadcast_to(shifts[:, None, None], (count, len(members), 1))
    return float(shifts[np.argmax(evaluate(model, rows, offset).log_likelihood)])


def _expected(
    model: Model,
    tables: tuple[LineTable, ...],
    members: tuple[int, ...],
    k: int,
    fit: Fit,
    shift: Floats,
    phase: Phase,
) -> ExpectedPhase:
    """What one expected phase explains, and whether the rings need it."""
    rest = np.array([[m for m in members if m != members[k]]], dtype=np.int64)
    without = evaluate(model, rest, np.broadcast_to(shift, (1, rest.shape[1], len(shift))))
    gain = float(fit.log_likelihood[0] - without.log_likelihood[0])
    own = []
    for number, (pattern, part, lines, table) in enumerate(
        zip(model.patterns, fit.patterns, model.lines, tables, strict=True)
    ):
        for ring in np.flatnonzero(part.claimed[0]):
            if part.share[0, k, ring] < _OWN_SHARE:
                continue
            on = np.flatnonzero(part.line_ring[0, k] == ring)
            row = int(lines.row[members[k], on[np.argmax(lines.intensity[members[k], on])]])
            h, k_, l = (int(i) for i in table.hkl[row])  # noqa: E741 (Miller's own letter)
            d_calc = float(table.d_A[row])
            for i in pattern.members[ring]:
                measured, sigma = float(pattern.rings.d_A[i]), float(pattern.rings.sigma_A[i])
                residual = (log(measured / d_calc) - float(shift[number])) * measured / sigma
                own.append(ExplainedRing(number, int(i), (h, k_, l), d_calc, residual))
    own.sort(key=lambda ring: (ring.pattern, ring.ring))
    return ExpectedPhase(phase, gain > _SEEN, tuple(own))


def _remarks(view: View, weakest: float | None) -> list[str]:
    pattern, said = view.pattern, []
    if not pattern.has_intensity:
        said.append("No intensities are given: the limits rest on a guess of what was visible.")
    elif weakest is None:
        said.append(
            f"Limits suppose that a ring of {100 * exp(pattern.ln_limit):.2g} % of the strongest "
            "is seen in half of the cases, as the weakest ring listed suggests; --weakest sets it."
        )
    if pattern.probe.kind == "electron":
        said.append("Electron intensities are uneven: limits are good to a factor of about two.")
    if view.weight <= 0:
        said.append("No expected phase is seen, so there is nothing to compare shares with.")
    return said
