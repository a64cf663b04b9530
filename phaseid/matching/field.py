"""The phases that run for an answer, and what of the whole library is needed to weigh them.

Of a small library every phase that the chemistry allows runs. Of a large one only the shortlist is
loaded; the prior, the share of sets with the required elements and the crowd stay those of all the
phases allowed, so that probabilities do not depend on how many were looked at closely.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, replace
from math import log

import numpy as np
from numpy.typing import NDArray

from phaseid.errors import InputError
from phaseid.library.library import Library
from phaseid.library.linetable import LineTable
from phaseid.library.strongest import StrongLines
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.crowd import crowd
from phaseid.matching.element_masks import admitted, doubtful, words
from phaseid.matching.leftovers import judged_alone, judged_beside
from phaseid.matching.lineset import gather
from phaseid.matching.model import Model
from phaseid.matching.patterns import Floats, Pattern, prepare_all
from phaseid.matching.search import Judged, Search
from phaseid.matching.settings import DOUBTED, SEARCHED_WHOLE
from phaseid.matching.shortlist import Indices, Pairs, shortlist
from phaseid.probes.probe import Kind
from phaseid.rings.ringlist import RingList

_CROWD = 512
"""Phases of a large library that stand for its crowd."""
_SETS_TRIED = 2000


@dataclass(frozen=True, slots=True, eq=False)
class Field:
    """The phases that run.

    `tables` one line table per pattern; `phases` (c,) indices into each; `log_prior` (c,) ln of
    each phase's share of the prior; `rarity` ln of the share of sets of one, two, … phases that
    hold the required elements; `crowd` per pattern as `crowd.crowd` gives it.
    """

    tables: tuple[LineTable, ...]
    phases: Indices
    log_prior: Floats
    rarity: tuple[float, ...]
    crowd: tuple[Floats, ...]


def field_of(
    patterns: Sequence[RingList],
    library: Library,
    chemistry: Chemistry,
    max_phases: int,
    *,
    exhaustive: bool = False,
) -> Field:
    """Choose the phases; `exhaustive`: all that are allowed, however many.

    Raises InputError where the library is empty or the chemistry allows none of its phases.
    """
    prepared = prepare_all(patterns)
    kinds = [p.probe.kind for p in patterns]
    if len(library) <= SEARCHED_WHOLE:
        tables = {kind: library.line_table(kind) for kind in set(kinds)}
        first = tables[kinds[0]]
        allowed = _allowed(library, first, chemistry)
        own = tuple(tables[kind] for kind in kinds)
        pairs = zip(own, prepared, strict=True)
        return Field(
            tables=own,
            phases=allowed,
            log_prior=log_prior_of(first, allowed, chemistry),
            rarity=rarity_of(chemistry, first.elements_mask[allowed], max_phases),
            crowd=tuple(crowd(table, allowed, pattern) for table, pattern in pairs),
        )
    strong = {kind: library.strong_lines(kind) for kind in set(kinds)}
    index = strong[kinds[0]]
    allowed = _allowed(library, index, chemistry)
    log_prior = log_prior_of(index, allowed, chemistry)
    rarity = rarity_of(chemistry, index.elements_mask[allowed], max_phases)
    sample = _loaded(library, kinds, index.row[allowed[:: max(1, len(allowed) // _CROWD)]])
    every = np.arange(len(sample[0]))
    rates = tuple(crowd(table, every, p) for table, p in zip(sample, prepared, strict=True))

    def running(some: Indices) -> Field:
        tables = _loaded(library, kinds, index.row[allowed[some]])
        return Field(tables, np.arange(len(some)), log_prior[some], rarity, rates)

    def judge(some: Indices, pairs: Pairs | None = None) -> list[Judged]:
        search = _search_of(prepared, running(some), chemistry, 1 if pairs is None else 2)
        if pairs is None:
            found = judged_alone(search)
        else:
            number = {int(phase): i for i, phase in enumerate(some)}
            bases = [_renumbered(base, number) for base, _ in pairs]
            further = [[number[int(phase)] for phase in others] for _, others in pairs]
            found = judged_beside(search, bases, further)
        return [_renumbered(judged, some) for judged in found]

    if exhaustive or len(allowed) <= SEARCHED_WHOLE:
        return running(np.arange(len(allowed)))
    each = [strong[kind] for kind in kinds]
    return running(shortlist(prepared, each, allowed, log_prior, judge, max_phases))


def searched(
    patterns: Sequence[Pattern], field: Field, chemistry: Chemistry, max_phases: int
) -> Search:
    """Search the phases of a field."""
    search = _search_of(patterns, field, chemistry, max_phases)
    search.run()
    return search


def _search_of(
    patterns: Sequence[Pattern], field: Field, chemistry: Chemistry, max_phases: int
) -> Search:
    """A search over the phases of a field, before it begins."""
    pairs = zip(field.tables, patterns, strict=True)
    model = Model(
        patterns=tuple(patterns),
        lines=tuple(gather(table, field.phases, pattern) for table, pattern in pairs),
        crowd=field.crowd,
    )
    elements = field.tables[0].elements
    sets = [elements[i] for i in field.phases]
    return Search(
        model,
        log_prior=field.log_prior,
        max_phases=min(max_phases, len(field.phases)),
        tables=field.tables,
        phases=field.phases,
        accepts=lambda members: chemistry.satisfied_by([sets[i] for i in members]),
        rarity=field.rarity,
    )


def _renumbered(judged: Judged, number: Mapping[int, int] | Indices) -> Judged:
    """The same set with its members called otherwise."""
    return replace(judged, members=tuple(int(number[i]) for i in judged.members))


def _loaded(library: Library, kinds: Sequence[Kind], rows: Indices) -> tuple[LineTable, ...]:
    """The lines of phases by row number, one table per pattern."""
    tables = {kind: library.line_table(kind, rows.tolist()) for kind in set(kinds)}
    return tuple(tables[kind] for kind in kinds)


def _allowed(library: Library, held: LineTable | StrongLines, chemistry: Chemistry) -> Indices:
    """Indices of the phases that the chemistry allows, one entry of each phase."""
    if len(held) == 0:
        raise InputError(
            f"the library {library.path} holds no phases",
            remedy="Add structures with `phaseid library add`, or `phaseid library add --starter`.",
        )
    allowed = np.flatnonzero(admitted(chemistry, held.elements_mask) & library.standing())
    if len(allowed) == 0:
        raise InputError(
            f"none of the library's {len(held)} phases is allowed by the chemistry given",
            remedy="Allow more elements with --only, or exclude fewer with --not.",
        )
    return allowed


def rarity_of(chemistry: Chemistry, elements: NDArray[np.uint64], most: int) -> tuple[float, ...]:
    """ln of the share of random sets of one, two, … phases that hold the required elements.

    What is not listed is as rarely right in its elements: without this, requiring elements would
    speak for an unlisted phase. `elements` (p, 2) are those of the phases.
    """
    if not chemistry.must:
        return (0.0,) * most
    required = words(chemistry.must)

    def holding(together: NDArray[np.uint64]) -> int:
        return int((~(required & ~together).any(axis=1)).sum())

    random = np.random.default_rng(0)
    least = 1.0 / (len(elements) + 1.0)
    shares = []
    for size in range(1, most + 1):
        picks = random.integers(0, len(elements), (_SETS_TRIED, size))
        share = holding(np.bitwise_or.reduce(elements[picks], axis=1)) / _SETS_TRIED
        if size == 1:
            share = holding(elements) / len(elements)
        shares.append(log(max(share, least)))
    return tuple(shares)


def log_prior_of(held: LineTable | StrongLines, allowed: Indices, chemistry: Chemistry) -> Floats:
    """ln of each allowed phase's share of the prior: by quality and doubt, summing to one."""
    doubts = doubtful(chemistry, held.elements_mask[allowed])
    trust = np.maximum(held.quality[allowed], 1e-3) * DOUBTED**doubts
    result: Floats = np.log(trust / trust.sum())
    return result
