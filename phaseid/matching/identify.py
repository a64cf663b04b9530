"""Which phases made these rings: the main job."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from math import log

import numpy as np
from numpy.typing import NDArray

from phaseid.errors import InputError
from phaseid.library.library import Library
from phaseid.library.linetable import LineTable
from phaseid.library.phase import Phase
from phaseid.matching.answer import build_hypothesis
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.confidence import Standing, weigh
from phaseid.matching.determinations import with_entries
from phaseid.matching.dispersion import at_own_energy, needs_own_energy
from phaseid.matching.field import field_of, searched
from phaseid.matching.groups import indistinguishable, pairing, rivals_of
from phaseid.matching.identification import (
    Hypothesis,
    Identification,
    LibraryStamp,
    TypeMatch,
    Verdict,
)
from phaseid.matching.patterns import prepare_all
from phaseid.matching.search import Judged, Members, Search
from phaseid.matching.settings import PHASE_COUNT_PRIOR
from phaseid.rings.ringlist import RingList

_SURE = 0.9
_TWINS_FROM = 0.003
"""Answers less probable than this are not searched for phases that could stand in."""
_SETS_AT_OWN_ENERGY = 60
"""The best sets whose phases get f′ and f″ at the X-ray energy, where it is not Cu Kα's."""
_NOTHING = 0.5
_SHOWN_TYPES = 3
_TYPE_PROBABILITY = 0.02
_SAME_TYPE = 0.01
"""Two relatives of one group whose edges agree to this (ln) are one structure type."""


def identify(
    patterns: Sequence[RingList],
    library: Library,
    *,
    chemistry: Chemistry | None = None,
    max_phases: int = 3,
    top: int = 5,
    exhaustive: bool = False,
) -> Identification:
    """Rank phases and mixtures of `library` for one or several patterns of the same specimen.

    `exhaustive`: search every phase of a large library, not a shortlist. Raises InputError where
    there is nothing to identify or nothing to choose from.
    """
    chemistry = chemistry or Chemistry()
    _check(patterns, max_phases, top)
    field = field_of(patterns, library, chemistry, max_phases, exhaustive=exhaustive)
    search = searched(prepare_all(patterns), field, chemistry, max_phases)
    if any(needs_own_energy(p.probe) for p in patterns):
        best = search.ranked()[:_SETS_AT_OWN_ENERGY]
        phases = sorted({int(search.phases[i]) for judged in best for i in judged.members})
        own = tuple(
            at_own_energy(library, table, phases, rings.probe)
            if needs_own_energy(rings.probe)
            else table
            for table, rings in zip(field.tables, patterns, strict=True)
        )
        field = replace(field, tables=own)
        search = searched(prepare_all(patterns), field, chemistry, max_phases)
    standing = weigh(search)
    phase_of = _Phases(library, field.tables[0], search.phases)
    hypotheses = with_entries(library, _hypotheses(search, field.tables, standing, phase_of, top))
    listed = 1.0 - standing.unlisted
    return Identification(
        verdict=_verdict(hypotheses, listed),
        patterns=tuple(patterns),
        hypotheses=hypotheses,
        unlisted_probability=standing.unlisted,
        library=LibraryStamp(str(library.path), len(library), library.digest),
        remarks=_remarks(patterns, chemistry, hypotheses),
        cautions=_cautions(hypotheses),
        type_matches=_type_matches(standing, phase_of, listed),
    )


def _check(patterns: Sequence[RingList], max_phases: int, top: int) -> None:
    if not patterns or any(len(p) == 0 for p in patterns):
        raise InputError("there are no rings to identify", remedy="Give at least one spacing.")
    for i, one in enumerate(patterns):
        for other in patterns[:i]:
            if _same(one, other):
                raise InputError(
                    f"two of the patterns are the same list of rings ({one.title or one.source})",
                    remedy="Give each measurement once.",
                )
    if not 1 <= max_phases <= len(PHASE_COUNT_PRIOR):
        raise InputError(
            f"--max-phases {max_phases} is out of range",
            remedy=f"Give a number from 1 to {len(PHASE_COUNT_PRIOR)}.",
        )
    if top < 1:
        raise InputError(f"--top {top} is out of range", remedy="Give 1 or more.")


def _same(one: RingList, other: RingList) -> bool:
    return (
        one.probe.label == other.probe.label
        and np.array_equal(one.position, other.position)
        and np.array_equal(one.intensity, other.intensity, equal_nan=True)
    )


class _Phases:
    """Candidate number -> Phase, read from the library once."""

    def __init__(self, library: Library, table: LineTable, allowed: NDArray[np.int64]) -> None:
        self._library = library
        self._ids = [table.phase_ids[i] for i in allowed]
        self._held: dict[int, Phase] = {}

    def __call__(self, candidate: int) -> Phase:
        if candidate not in self._held:
            self._held[candidate] = self._library.phase(self._ids[candidate])
        return self._held[candidate]


def _hypotheses(
    search: Search,
    tables: tuple[LineTable, ...],
    standing: Standing,
    phase_of: _Phases,
    top: int,
) -> tuple[Hypothesis, ...]:
    """The best `top` answers, sets that these rings cannot tell apart counted as one."""
    probability = {judged.members: p for judged, p in standing.sets}
    remaining = [judged for judged, _ in standing.sets]
    answers: list[Hypothesis] = []
    while remaining and len(answers) < top:
        leader = remaining[0]
        told = probability[leader.members] > _TWINS_FROM
        twins = _twins(search, leader, remaining if told else [])
        taken = _same_answer(search, leader, twins, remaining)
        total = min(sum(probability[members] for members in taken), 1.0)
        answers.append(
            build_hypothesis(
                search.model,
                tables,
                leader,
                [search.axes.get(c) for c in leader.members],
                [phase_of(c) for c in leader.members],
                [[(c, phase_of(c)) for c in others] for others in twins],
                total,
                len(answers) + 1,
            )
        )
        remaining = [j for j in remaining if j.members not in taken]
    answers.sort(key=lambda h: -h.probability)
    return tuple(replace(h, rank=i + 1) for i, h in enumerate(answers))


def _twins(search: Search, leader: Judged, remaining: list[Judged]) -> list[list[int]]:
    """For each phase of the leader, the phases that cannot be told from it, textured or not."""
    own = search.plain(leader.members)
    twins: list[list[int]] = [[] for _ in own]
    rivals = [r for r in rivals_of(leader, remaining) if set(search.plain(r.members)) != set(own)]
    for rival, same in indistinguishable(search.model, leader, rivals):
        if same:
            position, candidate = pairing(leader.members, rival.members)
            (plain,) = search.plain((candidate,))
            if plain not in twins[position]:
                twins[position].append(plain)
    return twins


def _same_answer(
    search: Search, leader: Judged, twins: list[list[int]], remaining: list[Judged]
) -> set[Members]:
    """Sets that differ from the leader only by texture or by phases that cannot be told apart."""
    own = search.plain(leader.members)
    groups = [{c, *others} for c, others in zip(own, twins, strict=True)]
    taken = {leader.members}
    for judged in remaining:
        if len(judged.members) != len(groups):
            continue
        free = list(groups)
        for member in search.plain(judged.members):
            home = next((g for g in free if member in g), None)
            if home is None:
                break
            free.remove(home)
        else:
            taken.add(judged.members)
    return taken


def _verdict(hypotheses: tuple[Hypothesis, ...], listed: float) -> Verdict:
    if hypotheses and hypotheses[0].probability >= _SURE:
        return "identified"
    return "no-match" if listed < _NOTHING else "ambiguous"


def _remarks(
    patterns: Sequence[RingList], chemistry: Chemistry, hypotheses: tuple[Hypothesis, ...]
) -> tuple[str, ...]:
    remarks = [remark for rings in patterns for remark in rings.remarks]
    if chemistry.describe():
        remarks.append(chemistry.describe())
    mixed = any(len(h.phases) > 1 for h in hypotheses)
    if mixed and any(p.probe.kind == "electron" for p in patterns):
        remarks.append(
            "Electron ring intensities are too uneven for shares by weight; "
            "none are taken from them."
        )
    return tuple(dict.fromkeys(remarks))


def _cautions(hypotheses: tuple[Hypothesis, ...]) -> tuple[str, ...]:
    """Safety sentences of every phase that is named."""
    named = [
        phase
        for hypothesis in hypotheses
        for answer in hypothesis.phases
        for phase in (answer.phase, *answer.indistinguishable)
    ]
    return tuple(dict.fromkeys(c for phase in named for c in phase.cautions))


def _type_matches(standing: Standing, phase_of: _Phases, listed: float) -> tuple[TypeMatch, ...]:
    """Structure types whose ratios fit with another cell, where nothing listed is sure."""
    if listed >= _SURE:
        return ()
    found: list[TypeMatch] = []
    seen: list[tuple[int, float]] = []
    for relative in standing.relatives:
        if relative.probability < _TYPE_PROBABILITY or len(found) == _SHOWN_TYPES:
            continue
        like = phase_of(relative.phase)
        a = like.cell[0] * float(np.exp(relative.strain))
        if any(like.space_group_number == n and abs(log(a / b)) < _SAME_TYPE for n, b in seen):
            continue
        seen.append((like.space_group_number, a))
        found.append(
            TypeMatch(
                type_name=f"{like.name} type",
                like=like,
                a_A=a,
                a_sigma_A=a * relative.strain_sigma,
                probability=relative.probability,
            )
        )
    return tuple(found)
