"""The search for sets of phases: singles, then what explains their leftovers, then exchanges.

Every set is judged by the full likelihood; the quick scan only proposes. No ring is taken away from
later phases: a ring already explained may be shared, it is just no longer worth as much.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass, field
from math import lgamma, log

import numpy as np
from numpy.typing import NDArray

from phaseid.library.linetable import LineTable
from phaseid.matching.candidates import best_shift, make_ruler, scan
from phaseid.matching.likelihood import evaluate
from phaseid.matching.lineset import Levers, axial_levers, reciprocal_metric, with_variants
from phaseid.matching.model import Fit, Looseness, Model
from phaseid.matching.patterns import Floats
from phaseid.matching.settings import (
    PHASE_COUNT_PRIOR,
    RELATIVE_AXIAL,
    RELATIVE_INTENSITY,
    RELATIVE_JITTER,
    RELATIVE_STRAIN,
    ROUGH,
    STRAIN,
    UNLISTED_PRIOR,
)
from phaseid.matching.texture import (
    Axis,
    can_show_texture,
    fibre_factors,
    likely_axes,
    texture_prior,
)

Members = tuple[int, ...]

_SINGLES = 180
_BASES = {1: 16, 2: 10, 3: 6}
_ADDITIONS = {1: 30, 2: 24, 3: 16}
_EXCHANGED = 4
_EXCHANGE_WIDTH = 30
_POLISHED = 40
_TEXTURED = 30
_AXES_EACH = 3
_BATCH_CELLS = 150_000


@dataclass(frozen=True, slots=True, eq=False)
class Judged:
    """One set of phases, judged. `log_posterior` is unnormalised; `offset` (k, K).

    `scale`, `scale_sd` (K,) are the common shift of each pattern; `claimed` (m,) per pattern the
    rings explained.

    A set of which a phase makes no ring is no answer: its log_posterior is -inf.
    """

    members: Members
    log_likelihood: float
    log_posterior: float
    offset: Floats
    scale: Floats
    scale_sd: Floats
    claimed: tuple[NDArray[np.bool_], ...]


@dataclass(frozen=True, slots=True, eq=False)
class Start:
    """A set of phases to begin from, with a guess of its shifts (k, K)."""

    members: Members
    offset: Floats


@dataclass(frozen=True, slots=True)
class Loosened:
    """A set in which member `which` is only an unlisted relative of its phase.

    Its lengths are longer than listed by `strain` ± `strain_sigma` (relative).
    """

    members: Members
    which: int
    log_likelihood: float
    strain: float
    strain_sigma: float


@dataclass(slots=True)
class Search:
    """State of one search over the candidate phases of `model`.

    `log_prior` (c,) is ln of each phase's share of the prior, summing to one over the candidates.
    `tables` one line table per pattern; `phases` (c,) the table's index of each candidate.
    `accepts` says whether a set of candidates may be an answer (required elements); sets it refuses
    are still built upon; `rarity` is ln of the share of sets of each size that it accepts.
    Candidates beyond the allowed phases are textured variants: `axes` their fibre axis, `parents`
    the candidate they are variants of.
    """

    model: Model
    log_prior: Floats
    max_phases: int
    tables: tuple[LineTable, ...]
    phases: NDArray[np.int64]
    accepts: Callable[[Members], bool] = field(default=lambda members: True)
    rarity: tuple[float, ...] = ()
    judged: dict[Members, Judged] = field(default_factory=dict)
    levers: dict[int, tuple[Levers, ...]] = field(default_factory=dict)
    axes: dict[int, Axis] = field(default_factory=dict)
    parents: dict[int, int] = field(default_factory=dict)

    def run(self) -> list[Judged]:
        """Search, and return every judged set, best first."""
        self._singles()
        self._add_textured()
        for size in range(1, self.max_phases):
            self._extend(size)
        self._exchange()
        self._polish()
        return self.ranked()

    def plain(self, members: Members) -> Members:
        """The candidates without texture that these are or are variants of."""
        return tuple(self.parents.get(i, i) for i in members)

    def _add_textured(self) -> None:
        """Let the best single phases be judged as films with a fibre axis, too."""
        if not any(can_show_texture(p.probe) for p in self.model.patterns):
            return
        singles = [j for j in self.ranked() if np.isfinite(j.log_posterior)]
        # texture upsets intensities and hides lines: rings met count first
        singles.sort(key=lambda j: -sum(int(claimed.sum()) for claimed in j.claimed))
        best = singles[:_TEXTURED]
        parents: list[int] = []
        axes: list[Axis] = []
        factors: list[list[Floats]] = [[] for _ in self.model.patterns]
        for judged in best:
            (candidate,) = judged.members
            phase = int(self.phases[candidate])
            likely = likely_axes(reciprocal_metric(self.tables[0], phase))
            parents += [candidate] * len(likely)
            axes += likely
            for i, (pattern, table, lines) in enumerate(
                zip(self.model.patterns, self.tables, self.model.lines, strict=True)
            ):
                rows = lines.row[candidate]
                factors[i].extend(
                    fibre_factors(table, phase, rows, likely, pattern.probe)
                    if can_show_texture(pattern.probe)
                    else np.ones((len(likely), len(rows)))
                )
        if not parents:
            return
        first = len(self.log_prior)
        chosen = np.array(parents, dtype=np.int64)
        widened = tuple(
            with_variants(own, chosen, factor, pattern)
            for own, factor, pattern in zip(
                self.model.lines, factors, self.model.patterns, strict=True
            )
        )
        self.model = Model(self.model.patterns, widened, self.model.crowd)
        shared = log(texture_prior(self.model.patterns) / _AXES_EACH)
        self.log_prior = np.concatenate([self.log_prior, self.log_prior[chosen] + shared])
        self.phases = np.concatenate([self.phases, self.phases[chosen]])
        for number, (parent, axis) in enumerate(zip(parents, axes, strict=True), first):
            self.parents[number] = parent
            self.axes[number] = axis
        offsets = [self.judged[(i,)].offset for i in parents]
        self.judge(((first + n,), offset) for n, offset in enumerate(offsets))

    def ranked(self) -> list[Judged]:
        """Every judged set, best first; ties by members."""
        return sorted(self.judged.values(), key=lambda j: (-j.log_posterior, j.members))

    def prior_of(self, members: Members) -> float:
        """ln prior of exactly these listed phases."""
        k = len(members)
        total = log(PHASE_COUNT_PRIOR[k - 1]) + log(1.0 - UNLISTED_PRIOR) + lgamma(k + 1.0)
        if self.rarity and self.accepts(self.plain(members)):
            total -= self.rarity[k - 1]
        return total + float(self.log_prior[list(members)].sum())

    def spread(self, pattern_index: int, strain: float) -> float:
        """One-sigma of the shift of a phase in one pattern: scale and strain together."""
        return float(np.hypot(self.model.patterns[pattern_index].probe.scale_sigma, strain))

    def judge(self, proposals: Iterable[tuple[Members, Floats]]) -> None:
        """Evaluate sets not judged before; all of one size. Offsets are (k, K)."""
        fresh: dict[Members, Floats] = {}
        for members, offset in proposals:
            order = np.argsort(members, kind="stable")
            key = tuple(members[i] for i in order)
            once = len(set(self.plain(key))) == len(key)
            if key not in self.judged and key not in fresh and once:
                fresh[key] = offset[order]
        self.judged.update({judged.members: judged for judged in self._judgements(fresh)})

    def _polish(self) -> None:
        """Judge the best sets again from where they came to lie; the better judgement counts."""
        by_size: dict[int, dict[Members, Floats]] = {}
        for judged in self.ranked()[:_POLISHED]:
            by_size.setdefault(len(judged.members), {})[judged.members] = judged.offset
        for sets in by_size.values():
            for again in self._judgements(sets):
                if again.log_posterior > self.judged[again.members].log_posterior:
                    self.judged[again.members] = again

    def _judgements(self, sets: dict[Members, Floats]) -> Iterable[Judged]:
        """Judge sets, all of one size, each from its offset (k, K)."""
        if not sets:
            return
        keys = list(sets)
        offsets = np.stack([sets[key] for key in keys])
        members = np.array(keys, dtype=np.int64)
        for part, fit in evaluate_in_batches(self.model, members, offsets):
            for row, index in enumerate(part):
                value = float(fit.log_likelihood[row])
                prior = self.prior_of(keys[index]) if fit.shows[row] else -np.inf
                yield Judged(
                    members=keys[index],
                    log_likelihood=value,
                    log_posterior=value + prior,
                    offset=fit.offset[row],
                    scale=fit.scale[row],
                    scale_sd=fit.scale_sd[row],
                    claimed=tuple(part.claimed[row] for part in fit.patterns),
                )

    def _singles(self) -> None:
        total: Floats = np.zeros(len(self.log_prior))
        shifts = []
        for i, (pattern, lines) in enumerate(
            zip(self.model.patterns, self.model.lines, strict=True)
        ):
            reach = max(3.5 * self.spread(i, STRAIN), 0.004)
            ruler = make_ruler(pattern, centre=0.0, reach=reach)
            score, shift = best_shift(scan(lines, pattern, ruler), ruler.u, self.spread(i, STRAIN))
            total = total + score
            shifts.append(shift)
        best = _top(total + self.log_prior, _SINGLES)
        offsets = np.stack(shifts, axis=1)
        self.judge(((int(c),), offsets[c : c + 1]) for c in best)

    def _extend(self, size: int) -> None:
        bases = [j for j in self.ranked() if len(j.members) == size][: _BASES[size]]
        self.judge(
            proposal for base in bases for proposal in self._additions(base, _ADDITIONS[size])
        )

    def _exchange(self) -> None:
        """Replace one phase of each of the best mixtures by what else explains its rings."""
        done: set[Members] = set()
        for _ in range(2):
            best = [j for j in self.ranked()[:_EXCHANGED] if len(j.members) > 1]
            proposals: dict[int, list[tuple[Members, Floats]]] = {}
            for mixture in best:
                if mixture.members in done:
                    continue
                done.add(mixture.members)
                for out in range(len(mixture.members)):
                    rest = mixture.members[:out] + mixture.members[out + 1 :]
                    base = self.judged.get(rest)
                    if base is None:
                        keep = [i for i in range(len(mixture.members)) if i != out]
                        self.judge([(rest, mixture.offset[keep])])
                        base = self.judged[rest]
                    proposals.setdefault(len(mixture.members), []).extend(
                        self._additions(base, _EXCHANGE_WIDTH)
                    )
            for group in proposals.values():
                self.judge(group)

    def _additions(self, base: Judged, count: int) -> list[tuple[Members, Floats]]:
        """Sets made of `base` and one more phase that may explain what it leaves."""
        total: Floats = np.zeros(len(self.log_prior))
        shifts = []
        wanted_any = False
        for i, (pattern, lines) in enumerate(
            zip(self.model.patterns, self.model.lines, strict=True)
        ):
            wanted = ~base.claimed[i]
            wanted_any = wanted_any or bool(wanted.any())
            centre = float(base.scale[i])
            spread = float(np.hypot(base.scale_sd[i], 1.5 * STRAIN))
            ruler = make_ruler(pattern, centre=centre, reach=3.0 * spread, wanted=wanted)
            known = wanted & np.isfinite(pattern.intensity_sd)
            strongest = float(pattern.ln_intensity[known].max()) if known.any() else 0.0
            score, shift = best_shift(
                scan(lines, pattern, ruler, strongest), ruler.u, spread, centre
            )
            total = total + score
            shifts.append(shift)
        if not wanted_any:
            return []
        offsets = np.stack(shifts, axis=1)
        best = _top(total + self.log_prior, count)
        return [
            ((*base.members, int(c)), np.vstack([base.offset, offsets[c : c + 1]]))
            for c in best
            if int(c) not in base.members
        ]

    def accepted(self) -> list[Judged]:
        """Every judged set that may be an answer, best first."""
        return [
            j
            for j in self.ranked()
            if np.isfinite(j.log_posterior) and self.accepts(self.plain(j.members))
        ]

    def relatives(self, sets: Sequence[Start | Judged]) -> list[Loosened]:
        """Unlisted relatives of members of `sets`.

        Each member of each set in turn is let loose: another cell of the same structure type, with
        like atoms and with others, each flavour an entry of its own.
        """
        found = []
        by_size: dict[int, list[tuple[Start | Judged, int]]] = {}
        for judged in sets:
            for which in range(len(judged.members)):
                by_size.setdefault(len(judged.members), []).append((judged, which))
        for _, items in sorted(by_size.items()):
            members = np.array([judged.members for judged, _ in items], dtype=np.int64)
            offsets = np.stack([judged.offset for judged, _ in items])
            loosened = np.array([w for _, w in items])
            for spread in RELATIVE_INTENSITY:
                loose = self._relaxed(members, loosened, spread)
                for part, fit in evaluate_in_batches(self.model, members, offsets, loose):
                    for row, index in enumerate(part):
                        if not fit.shows[row]:
                            continue
                        judged, k = items[index]
                        found.append(
                            Loosened(
                                members=judged.members,
                                which=k,
                                log_likelihood=float(fit.log_likelihood[row]),
                                strain=float(fit.strain[row, k]),
                                strain_sigma=float(fit.strain_sd[row, k]),
                            )
                        )
        return found

    def rough(self, sets: Sequence[Judged]) -> list[tuple[Members, float]]:
        """ln likelihood of each of `sets`, were one of its structures known less well than usual.

        Each member in turn in each of the ways of `ROUGH`, every one an entry of its own.
        """
        found = []
        by_size: dict[int, list[tuple[Judged, int]]] = {}
        for judged in sets:
            for which in range(len(judged.members)):
                by_size.setdefault(len(judged.members), []).append((judged, which))
        for _, items in sorted(by_size.items()):
            members = np.array([judged.members for judged, _ in items], dtype=np.int64)
            offsets = np.stack([judged.offset for judged, _ in items])
            roughly = np.array([which for _, which in items])
            for way in ROUGH:
                loose = Looseness.rough((len(members), members.shape[1]), roughly, way)
                for part, fit in evaluate_in_batches(self.model, members, offsets, loose):
                    found += [
                        (items[index][0].members, float(fit.log_likelihood[row]))
                        for row, index in enumerate(part)
                        if fit.shows[row]
                    ]
        return found

    def _relaxed(
        self, members: NDArray[np.int64], which: NDArray[np.int64], spread: float
    ) -> Looseness:
        """Looseness of sets (b, k) of which member `which` (b,) is only an unlisted relative."""
        loose = Looseness.listed((members.shape[0], members.shape[1]))
        axial = tuple(np.zeros((*members.shape, lines.x.shape[1], 3)) for lines in self.model.lines)
        for row, k in enumerate(which):
            candidate = int(members[row, k])
            loose.strain[row, k] = RELATIVE_STRAIN
            loose.spread[row, k] = spread
            for own, levers in zip(axial, self._levers(candidate), strict=True):
                own[row, k, : len(levers.values)] = RELATIVE_AXIAL * levers.values
            loose.jitter[row, k] = RELATIVE_JITTER[self._levers(candidate)[0].free]
        return Looseness(loose.strain, loose.jitter, loose.spread, axial)

    def _levers(self, candidate: int) -> tuple[Levers, ...]:
        """Axial levers of one phase's lines, one per pattern, computed once."""
        if candidate not in self.levers:
            self.levers[candidate] = tuple(
                axial_levers(table, int(self.phases[candidate]), lines.row[candidate])
                for table, lines in zip(self.tables, self.model.lines, strict=True)
            )
        return self.levers[candidate]

    def distant_relatives(self, count: int) -> list[Start]:
        """Single phases whose pattern fits at a shift the scale does not allow, to start from."""
        total: Floats = np.zeros(len(self.log_prior))
        shifts = []
        for i, (pattern, lines) in enumerate(
            zip(self.model.patterns, self.model.lines, strict=True)
        ):
            spread = self.spread(i, RELATIVE_STRAIN)
            ruler = make_ruler(pattern, centre=0.0, reach=2.5 * spread)
            score, shift = best_shift(scan(lines, pattern, ruler), ruler.u, spread)
            total = total + score
            shifts.append(shift)
        offsets = np.stack(shifts, axis=1)
        return [Start((int(c),), offsets[c : c + 1]) for c in _top(total + self.log_prior, count)]


def evaluate_in_batches(
    model: Model, members: NDArray[np.int64], offsets: Floats, loose: Looseness | None = None
) -> Iterable[tuple[NDArray[np.int64], Fit]]:
    """Yield (row indices, Fit) for parts of the batch small enough to stay in cache.

    Sets of about as many lines go together, so that little of the padding is computed.
    """
    counts = np.max([lines.count[members].max(axis=1) for lines in model.lines], axis=0)
    cells = np.maximum(counts, 1) * members.shape[1]
    order = np.argsort(cells, kind="stable")
    start = 0
    while start < len(order):
        size = max(1, _BATCH_CELLS // int(cells[order[start]]))
        while size > 1 and size * int(cells[order[min(start + size, len(order)) - 1]]) > (
            2 * _BATCH_CELLS
        ):
            size = (size + 1) // 2
        part = order[start : start + size]
        start += size
        chosen = None if loose is None else loose.rows(part)
        yield part, evaluate(model, members[part], offsets[part], chosen)


def _top(score: Floats, count: int) -> NDArray[np.int64]:
    """Indices of the best `count`, best first; equal scores in order of index."""
    order = np.argsort(-score, kind="stable")
    return order[:count]
