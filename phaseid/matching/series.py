"""A series of patterns: each identified, with what its neighbours make likely."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from math import exp

import numpy as np

from phaseid.errors import InputError
from phaseid.library.library import Library
from phaseid.library.linetable import LineTable
from phaseid.library.phase import Phase
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.field import rarity_of
from phaseid.matching.identification import Identification, Scale, Verdict
from phaseid.matching.identify import identify
from phaseid.matching.series_answer import Series, SeriesPattern, SeriesPhase
from phaseid.matching.series_axis import EXPANSION_PER_K, Along, axis_of, warmed
from phaseid.matching.series_chain import PERSISTENCE, Floats, Set, Smoothed, States, smooth
from phaseid.matching.series_crew import crew
from phaseid.matching.series_evidence import (
    TOP,
    Indices,
    allowed_phases,
    evidence,
    log_likelihoods,
    log_shares,
    own_sets,
    sets_suggested,
    stand_ins,
    starts_of,
)
from phaseid.matching.series_scale import SHARED_PRIOR, ScaleError
from phaseid.rings.ringlist import RingList

Advance = Callable[[int, int | None], None]
SURE, NOTHING = 0.9, 0.5
SHOWN = 0.1
"""A phase is told of where some pattern shows it with this probability."""
_EVEN_ODDS = 3.0
_LEARNT = 0.7


def identify_series(
    patterns: Sequence[RingList],
    library: Library,
    *,
    chemistry: Chemistry | None = None,
    max_phases: int = 3,
    along: Along = "auto",
    persistence: float | None = None,
    workers: int = 1,
    advance: Advance | None = None,
) -> Series:
    """Identify every pattern of a series, neighbours in the order given.

    Each pattern is first judged by itself, as `identify` does; every set of phases that any of them
    suggests is then judged on all. The chain of `series_chain` weighs what stays from one to the
    next, `series_scale` what scale error they share. `persistence` fixes the chance of staying (0:
    every pattern for itself). `along` names what the series runs along; "auto" takes a time or
    temperature that every list states, else their number. `workers` processes share the work; the
    result is the same. `advance(done, all)` is called as it goes on. Raises InputError like
    `identify`, and where patterns do not state what `along` names.
    """
    if not patterns:
        raise InputError("there is no pattern in the series", remedy="Give at least one ring list.")
    if persistence is not None and not 0 <= persistence < 1:
        raise InputError(
            f"a persistence of {persistence:g} is out of range",
            remedy="Give a probability from 0 (nothing stays) to below 1, such as 0.8.",
        )
    chemistry = chemistry or Chemistry()
    axis = axis_of(patterns, along)  # before any work is done
    total, done = 2 * len(patterns), 0

    def step() -> None:
        nonlocal done
        done += 1
        if advance is not None:
            advance(done, total)

    as_stated, patterns = patterns, [warmed(rings) for rings in patterns]
    hot = any(one is not other for one, other in zip(as_stated, patterns, strict=True))
    with crew(library, workers) as hands:
        alone: list[Identification] = hands(
            _alone, [(rings, chemistry, max_phases) for rings in patterns], step
        )
        sets = sets_suggested(alone)
        table = library.line_table(patterns[0].probe.kind)
        allowed = allowed_phases(library, table, chemistry)
        tried = [
            (rings, allowed, [*sets, *own_sets(answer)], starts_of(answer))
            for rings, answer in zip(patterns, alone, strict=True)
        ]
        fits: list[Floats] = hands(log_likelihoods, tried, step)
    states = _states(table, allowed, chemistry, sets, max_phases)
    count = len(sets)
    weights = np.stack(
        [
            evidence(answer, states, found[0, :count], found[0, count:])
            for answer, found in zip(alone, fits, strict=True)
        ]
    )
    apart = smooth([(1.0, weights)], states, ((0.0, 1.0),))
    together, scale = apart, None
    if persistence != 0.0:
        error = ScaleError.of(as_stated, patterns)
        mean, deviation = (np.stack([found[row, :count] for found in fits]) for row in (1, 2))
        values, prior = error.grid()
        free = np.zeros((len(patterns), 2))  # what is not listed has no scale to keep
        variants = [(1.0 - SHARED_PRIOR, weights)] + [
            (
                float(p) * SHARED_PRIOR,
                weights + np.hstack([error.tilt(float(value), mean, deviation), free]),
            )
            for value, p in zip(values, prior, strict=True)
        ]
        tried_values = PERSISTENCE if persistence is None else ((persistence, 1.0),)
        together = smooth(variants, states, tried_values)
        scale = _common_scale(error, values, together.variant_posterior[1:])
    rows = _rows(states.sets, alone, together)
    told = tuple(
        _pattern(answer, states.sets, rows, posterior)
        for answer, posterior in zip(alone, together.posterior, strict=True)
    )
    return Series(
        patterns=told,
        phases=tuple(_phase(row, states.sets, told, together, apart) for row in rows),
        axis=axis,
        scale=scale,
        persistence=together.persistence,
        persistence_posterior=together.persistence_posterior,
        library=alone[0].library,
        remarks=_remarks(alone, together, persistence, hot=hot),
        cautions=tuple(dict.fromkeys(c for row in rows for p in row for c in p.cautions)),
    )


def _alone(
    library: Library, rings: RingList, chemistry: Chemistry, max_phases: int
) -> Identification:
    return identify([rings], library, chemistry=chemistry, max_phases=max_phases, top=TOP)


def _states(
    table: LineTable, allowed: Indices, chemistry: Chemistry, sets: list[Set], max_phases: int
) -> States:
    used = {phase for one in sets for phase in one}
    of_all = table.elements
    held = {table.phase_ids[i]: of_all[i] for i in allowed.tolist() if table.phase_ids[i] in used}
    return States.of(
        sets,
        log_shares(table, allowed, chemistry),
        rarity_of(chemistry, table.elements_mask[allowed], max_phases),
        lambda phases: chemistry.satisfied_by([held[phase] for phase in phases]),
    )


def _common_scale(error: ScaleError, values: Floats, chance: Floats) -> Scale | None:
    """Measured d over calculated d in common, None where none is shared or nothing was learnt."""
    if not error.shared.any() or chance.sum() < NOTHING:
        return None
    chance = chance / chance.sum()
    mean = float(values @ chance)
    step = float(np.diff(values).mean())
    spread = float(np.sqrt(chance @ (values - mean) ** 2 + step**2 / 12.0))
    if spread > _LEARNT * error.common:
        return None
    first = int(np.flatnonzero(error.shared)[0])
    return Scale(first, exp(mean), exp(mean) * spread)


Row = tuple[Phase, ...]
"""A phase of the series, then those that its rings cannot tell from it."""


def _rows(sets: tuple[Set, ...], alone: list[Identification], together: Smoothed) -> list[Row]:
    """The phases to tell of, in the order in which they appear."""
    chance = {
        phase: together.posterior[:, [i for i, one in enumerate(sets) if phase in one]].sum(axis=1)
        for phase in sorted({phase for one in sets for phase in one})
    }
    known: dict[str, Phase] = {}
    twins: dict[str, set[str]] = {}
    for answer in alone:
        for hypothesis in answer.hypotheses:
            for part in hypothesis.phases:
                group = (part.phase, *part.indistinguishable)
                known.update({phase.phase_id: phase for phase in group})
                for one in group:
                    twins.setdefault(one.phase_id, set()).update(p.phase_id for p in group)
    rows: list[list[str]] = []
    for phase in sorted(chance, key=lambda p: (-chance[p].sum(), p)):
        home = next(
            (
                row
                for row in rows
                if phase in twins[row[0]]
                and chance[row[0]].sum() < _EVEN_ODDS * chance[phase].sum()
                and not any({phase, other} <= one for one in sets for other in row)
            ),
            None,
        )
        if home is None:
            rows.append([phase])
        else:
            home.append(phase)
    total = {row[0]: np.sum([chance[phase] for phase in row], axis=0) for row in rows}
    shown = [row for row in rows if total[row[0]].max() >= SHOWN]

    def first(row: list[str]) -> tuple[int, float]:
        seen = np.flatnonzero(total[row[0]] >= NOTHING)
        return (int(seen[0]) if len(seen) else len(alone), -float(total[row[0]].sum()))

    return [tuple(known[phase] for phase in row) for row in sorted(shown, key=first)]


def _members(one: Set, rows: list[Row]) -> tuple[int | str, ...]:
    """A set of phases as rows of the table; what is no row stands as itself."""
    row_of = {phase.phase_id: k for k, row in enumerate(rows) for phase in row}
    return tuple(sorted((row_of.get(phase, phase) for phase in one), key=str))


def _pattern(
    alone: Identification, sets: tuple[Set, ...], rows: list[Row], posterior: Floats
) -> SeriesPattern:
    total: dict[tuple[int | str, ...], float] = {}
    for one, p in zip(sets, posterior[:-2].tolist(), strict=True):
        key = _members(one, rows)
        total[key] = total.get(key, 0.0) + p
    likeliest = max(total, key=lambda key: total[key], default=())
    unlisted = float(posterior[-2])
    probability = total.get(likeliest, 0.0)
    verdict: Verdict = "identified" if probability >= SURE else "ambiguous"
    if 1.0 - unlisted < NOTHING:
        verdict = "no-match"
    best = next(
        (
            h
            for h in alone.hypotheses
            if any(_members(one, rows) == likeliest for one in stand_ins(h))
        ),
        None,
    )
    return SeriesPattern(
        rings=alone.patterns[0],
        alone=alone,
        verdict=verdict,
        phases=tuple(k for k in likeliest if isinstance(k, int)),
        probability=probability,
        unlisted=unlisted,
        best=best,
    )


def _phase(
    row: Row,
    sets: tuple[Set, ...],
    told: tuple[SeriesPattern, ...],
    together: Smoothed,
    apart: Smoothed,
) -> SeriesPhase:
    ids = {phase.phase_id for phase in row}
    holding = [i for i, one in enumerate(sets) if one & ids]
    parts = [() if pattern.best is None else pattern.best.phases for pattern in told]
    return SeriesPhase(
        phase=row[0],
        indistinguishable=row[1:],
        probability=np.minimum(together.posterior[:, holding].sum(axis=1), 1.0),
        alone=np.minimum(apart.posterior[:, holding].sum(axis=1), 1.0),
        answers=tuple(
            next((part for part in own if part.phase.phase_id in ids), None) for own in parts
        ),
    )


def _remarks(
    alone: list[Identification], together: Smoothed, persistence: float | None, *, hot: bool
) -> tuple[str, ...]:
    """What holds for the whole series: remarks that several patterns share, and the persistence."""
    said: dict[str, int] = {}
    for answer in alone:
        for remark in answer.remarks:
            said[remark] = said.get(remark, 0) + 1
    remarks = [
        remark if count == len(alone) else f"{remark} ({count} of {len(alone)} patterns)"
        for remark, count in said.items()
    ]
    if hot:
        remarks.append(
            "Cells of a library are those of room temperature: the scale of a pattern is taken as "
            f"uncertain by {100 * EXPANSION_PER_K:.2g} % for every K from it."
        )
    if persistence is None and len(alone) > 1:
        remarks.append(
            "A phase of one pattern is taken to stay in the next with a probability of "
            f"{together.persistence:.2f}, as this series suggests; --persistence 0 judges each "
            "pattern for itself."
        )
    return tuple(remarks)
