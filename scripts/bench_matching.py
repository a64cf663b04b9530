"""How good the answers are: simulated patterns of known phases, identified against a library.

    python scripts/bench_matching.py [--library FILE] [--cases 60] [--seed 1] [--families a,b]
                                     [--without INGREDIENT]

Every family draws its own cases; seeds are fixed, so that a run can be repeated. The physics of the
simulator is gemmi's, not phaseid's. Beside phaseid stands the published manual procedure (Hanawalt,
Rinn & Frevel 1938: the three strongest lines, in any order) on the same cases. Percentages carry
their binomial one-sigma. A case is right where the phases named, each counted with those the rings
cannot tell from it, are exactly the true ones.

Computed structures of the library are never the truth: they are the crowd beside it. In a library
too large to be searched whole the manual procedure is left out.
"""

from __future__ import annotations

import argparse
import itertools
import os
import sys
import time
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass, fields, replace
from pathlib import Path

import numpy as np
from simulated_patterns import ELECTRON, NEUTRON, XRAY, Conditions, Simulator

from phaseid.library import Library, open_default
from phaseid.library.marks import COMPUTED
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.identify import identify
from phaseid.matching.settings import SCATTER, SEARCHED_WHOLE
from phaseid.rings.ringlist import RingList


@dataclass(frozen=True)
class Family:
    """A kind of case: the patterns taken of one specimen, and what the phases are."""

    name: str
    conditions: tuple[Conditions, ...]
    phases: int = 1
    shares: tuple[float, float] = (0.25, 1.0)
    minority: bool = False
    absent: int = 0
    chemistry: bool = False


_COARSE = replace(ELECTRON, scale=0.015, grades=True)
FAMILIES = (
    Family("electrons 0.5 %", (ELECTRON,)),
    Family("electrons 1.5 %, grades", (_COARSE,)),
    Family("the same, chemistry known", (_COARSE,), chemistry=True),
    Family("x-rays", (XRAY,)),
    Family("neutrons", (NEUTRON,)),
    Family("electrons and x-rays", (ELECTRON, XRAY)),
    Family("two phases, x-rays", (XRAY,), phases=2),
    Family("two phases, electrons", (ELECTRON,), phases=2),
    Family("three phases, x-rays", (XRAY,), phases=3),
    Family("5-10 % contaminant", (XRAY,), phases=2, minority=True),
    Family("3-6 rings", (replace(ELECTRON, most=6),)),
    Family(
        "all of it at once",
        (replace(ELECTRON, understated=1.8, scatter=0.8, lost=0.1, foreign=1.0, strain=0.002),),
    ),
    Family("sigmas understated 1.8×", (replace(ELECTRON, understated=1.8),)),
    Family("displacement 0.1°", (replace(XRAY, displacement_deg=0.1),)),
    Family("texture, electrons", (replace(ELECTRON, texture=0.5),)),
    Family("texture, x-rays", (replace(XRAY, texture=0.6),)),
    Family("rings lost", (replace(ELECTRON, lost=0.15),)),
    Family("foreign rings", (replace(ELECTRON, foreign=2.0),)),
    Family("one listed, one not", (XRAY,), phases=2, absent=1),
    Family("absent, electrons", (ELECTRON,), absent=1),
    Family("absent, x-rays", (XRAY,), absent=1),
)


@dataclass(frozen=True)
class Outcome:
    """What came of one case; `by_hand` is the manual procedure's success, None where not run."""

    right: bool
    probability: float
    verdict: str
    seconds: float
    by_hand: bool | None


def hanawalt(rings: RingList, library: Library, allowed: set[str], tolerance: float) -> str | None:
    """Phase by the three strongest rings in any order, then by the number of rings matched."""
    table = library.line_table(rings.probe.kind)
    weights = rings.probe.weights(table.d_A, table.multiplicity, table.f2)
    strongest = rings.d_A[np.argsort(-np.nan_to_num(rings.intensity))[:3]]
    best: tuple[float, str] | None = None
    for i, phase_id in enumerate(table.phase_ids):
        if phase_id not in allowed:
            continue
        rows = slice(table.offsets[i], table.offsets[i + 1])
        d, intensity = table.d_A[rows], weights[rows]
        inside = (d > rings.d_A.min() * 0.97) & (d < rings.d_A.max() * 1.03)
        d, intensity = d[inside], intensity[inside]
        if len(d) < 3:
            continue
        three = d[np.argsort(-intensity)[:3]]
        fits = min(
            max(abs(np.log(np.array(order) / strongest))) for order in itertools.permutations(three)
        )
        if fits > tolerance:
            continue
        found = sum(np.abs(np.log(d / ring)).min() < tolerance for ring in rings.d_A)
        score = float(found) - fits / tolerance
        if best is None or score > best[0]:
            best = (score, phase_id)
    return None if best is None else best[1]


class Bench:
    """One library, one simulator."""

    def __init__(self, path: Path, seed: int, without: str | None = None) -> None:
        self.without = without
        self.library = Library.open(path)
        standing = self.library.standing()
        self.everything = self.library.phases()
        held = [p for p, stands in zip(self.everything, standing, strict=True) if stands]
        self.phases = [p for p in held if not COMPUTED & {f.code for f in p.findings}]
        self.simulator = Simulator(
            lambda i: self.library.crystal(self.phases[i].phase_id), np.random.default_rng(seed)
        )

    def run(self, family: Family, cases: int) -> list[Outcome]:
        """Draw and identify `cases` cases of a family."""
        outcomes: list[Outcome] = []
        while len(outcomes) < cases:
            outcome = self._case(family)
            if outcome is not None:
                outcomes.append(outcome)
        return outcomes

    def _case(self, family: Family) -> Outcome | None:
        rng = self.simulator.rng
        truth = [int(i) for i in rng.choice(len(self.phases), family.phases, replace=False)]
        if not all(self.simulator.usable(i) for i in truth):
            return None
        shares = [float(s) for s in rng.uniform(*family.shares, family.phases)]
        if family.minority:
            shares = [1.0, float(rng.uniform(0.05, 0.10))]
            if self.simulator.lines_above(truth[1], family.conditions[0], shares[1]) < 3:
                return None
        patterns = []
        for how in family.conditions:
            if how.most is not None:
                how = replace(how, most=int(rng.integers(3, how.most + 1)))
            rings = self.simulator.pattern(truth, shares, how)
            if rings is None:
                return None
            patterns.append(_stripped(rings, self.without))
        hidden = {self.phases[i].phase_id for i in truth[len(truth) - family.absent :]}
        if family.absent:
            hidden |= self._twins(truth[len(truth) - family.absent :])
        wanted = {self.phases[i].phase_id for i in truth} - hidden
        chemistry = None
        if family.chemistry:
            elements = frozenset().union(*(self.phases[i].elements for i in truth))
            chemistry = Chemistry(only=elements)
        start = time.perf_counter()
        library = _Without(self.library, hidden) if hidden else self.library
        answer = identify(patterns, library, chemistry=chemistry)
        seconds = time.perf_counter() - start
        by_hand = None
        if family.phases == 1 and not family.absent and len(self.library) <= SEARCHED_WHOLE:
            allowed = {
                p.phase_id
                for p in self.everything
                if chemistry is None or chemistry.admits(p.elements)
            }
            by_hand = wanted == {hanawalt(patterns[0], self.library, allowed, 0.02)}
        best = answer.hypotheses[0] if answer.hypotheses else None
        right = bool(wanted) and best is not None and _names(best, wanted)
        return Outcome(right, best.probability if best else 0.0, answer.verdict, seconds, by_hand)

    def _twins(self, truth: list[int]) -> set[str]:
        """Other entries of the same phase: same elements and group, cell within 1.5 %."""
        found = set()
        for i in truth:
            one = self.phases[i]
            for other in self.everything:
                same = (
                    other.elements == one.elements
                    and other.space_group_number == one.space_group_number
                    and abs(np.log(other.volume_A3 / one.volume_A3)) < 0.045
                )
                if same:
                    found.add(other.phase_id)
        return found


class _Without:
    """A library with some phases taken out, for cases whose truth is not listed."""

    def __init__(self, library: Library, hidden: set[str]) -> None:
        self._library = library
        self._hidden = hidden
        self.path = library.path
        self.digest = library.digest

    def __len__(self) -> int:
        return len(self._library) - len(self._hidden)

    def phase(self, phase_id: str):
        return self._library.phase(phase_id)

    def entries(self, phase_id: str):
        return [p for p in self._library.entries(phase_id) if p.phase_id not in self._hidden]

    def _kept(self):
        """Whether each phase is shown, in the order of the library."""
        return np.array([p.phase_id not in self._hidden for p in self._library.phases()])

    def standing(self):
        return self._library.standing()[self._kept()]

    def strong_lines(self, kind):
        strong = self._library.strong_lines(kind)
        kept = self._kept()
        return replace(strong, **{f.name: getattr(strong, f.name)[kept] for f in fields(strong)})

    def line_table(self, kind, phases=None):
        table = self._library.line_table(kind, phases)
        keep = [i for i, p in enumerate(table.phase_ids) if p not in self._hidden]
        if len(keep) == len(table):
            return table
        rows = np.concatenate([np.arange(table.offsets[i], table.offsets[i + 1]) for i in keep])
        counts = np.diff(table.offsets)[keep]
        return replace(
            table,
            phase_ids=tuple(table.phase_ids[i] for i in keep),
            offsets=np.concatenate([[0], np.cumsum(counts)]),
            **{name: getattr(table, name)[rows] for name in ("d_A", "hkl", "multiplicity", "f2")},
            **{
                name: getattr(table, name)[keep]
                for name in ("volume_A3", "complete_to_A", "floor", "quality", "elements_mask")
            },
        )


def _names(hypothesis, wanted: set[str]) -> bool:
    """Whether the hypothesis names exactly the wanted phases, twins counted."""
    free = set(wanted)
    for answer in hypothesis.phases:
        group = {answer.phase.phase_id, *(p.phase_id for p in answer.indistinguishable)}
        hit = sorted(free & group)
        if not hit:
            return False
        free.discard(hit[0])
    return not free


WITHOUT: dict[str, dict[str, object]] = {
    "missing lines": {
        "SCATTER": {kind: replace(scatter, lost=1.0) for kind, scatter in SCATTER.items()}
    },
    "common scale": {"STRAIN": 1e-5},
    "strain": {"STRAIN": 1e-5},
    "foreign rings": {"FOREIGN_RINGS": 1e-4, "BESIDE_PRIOR": 1e-6},
    "inflated sigmas": {"SIGMA_INFLATION": ((1.0, 0.5), (1.0, 0.5))},
    "unsure detection limit": {"LIMIT_SD": 1e-3},
    "intensity trend": {"TREND_SD": 1e-3},
    "crowded rings": {"CROWDING": 0.0},
    "roughly known structures": {"ROUGH_PRIOR": 1e-9},
    "rings keep their distance": {"_MOST_TAKEN": 0.0},
    "unlisted relatives": {"RELATIVE_PRIOR": 1e-9},
    "texture": {"TEXTURE_PRIOR": 1e-12},
    "intensities": {},
}
"""Ingredients of the model and what takes each away: constants, or what the patterns carry."""


def _take_away(ingredient: str) -> None:
    """Set the constants of an ingredient in every module that uses them."""
    for name, value in WITHOUT[ingredient].items():
        for module in list(sys.modules.values()):
            if module.__name__.startswith("phaseid.matching") and hasattr(module, name):
                setattr(module, name, value)


def _stripped(rings: RingList, ingredient: str | None) -> RingList:
    """The pattern without what the ingredient needs."""
    if ingredient == "intensities":
        return replace(rings, intensity=np.full(len(rings), np.nan))
    if ingredient == "common scale":
        return replace(rings, probe=replace(rings.probe, scale_sigma=1e-4))
    return rings


def _run(task: tuple[Path, int, int, int, str | None]) -> tuple[int, list[Outcome]]:
    path, index, cases, seed, ingredient = task
    if ingredient is not None:
        _take_away(ingredient)
    return index, Bench(path, seed * 1000 + index, ingredient).run(FAMILIES[index], cases)


def _percent(hits: float, count: int) -> str:
    share = hits / count
    return (
        f"{100 * share:5.1f} ± {100 * np.sqrt(max(share * (1 - share), 0.25 / count) / count):3.1f}"
    )


def report(name: str, outcomes: list[Outcome]) -> str:
    """One line of the table."""
    n = len(outcomes)
    by_hand = [o.by_hand for o in outcomes if o.by_hand is not None]
    return (
        f"{name:28s} {_percent(sum(o.right for o in outcomes), n)}   "
        f"{_percent(sum(o.verdict == 'no-match' or o.probability < 0.5 for o in outcomes), n)}   "
        f"{_percent(sum(o.probability >= 0.9 and not o.right for o in outcomes), n)}   "
        f"{1e3 * float(np.median([o.seconds for o in outcomes])):6.0f}   "
        + (_percent(sum(by_hand), len(by_hand)) if by_hand else "")
    )


def calibration(outcomes: list[Outcome]) -> str:
    """Reliability over everything: expected calibration error, Brier score, confident mistakes."""
    p = np.array([o.probability for o in outcomes])
    right = np.array([o.right for o in outcomes], dtype=float)
    bins = np.clip((p * 10).astype(int), 0, 9)
    error = sum(
        abs(p[bins == b].mean() - right[bins == b].mean()) * (bins == b).mean()
        for b in range(10)
        if (bins == b).any()
    )
    lines = [
        f"calibration error {error:.3f}, Brier {np.mean((p - right) ** 2):.3f}, "
        f"wrong at 0.9 or more {100 * np.mean((p >= 0.9) & (right == 0)):.2f} % of all"
    ]
    for b in range(10):
        if (bins == b).any():
            inside = bins == b
            lines.append(
                f"  said {p[inside].mean():.2f}, right {right[inside].mean():.2f} ({inside.sum()})"
            )
    return "\n".join(lines)


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.split("\n")[0])
    parser.add_argument("--library", type=Path, help="default: the starter library")
    parser.add_argument("--cases", type=int, default=60)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--families", default="", help="names or parts of names, comma between")
    parser.add_argument("--without", choices=sorted(WITHOUT), help="take an ingredient away")
    parser.add_argument("--jobs", type=int, default=os.cpu_count() or 1)
    options = parser.parse_args()
    path = options.library or Path(open_default(None).path)
    wanted = [w for w in options.families.split(",") if w]
    chosen = [i for i, f in enumerate(FAMILIES) if not wanted or any(w in f.name for w in wanted)]
    print(
        f"{'family':28s} {'top-1 %':12s}  {'abstains %':12s}  {'wrong ≥ 0.9 %':12s}"
        "   ms   by hand %"
    )
    everything: list[Outcome] = []
    with ProcessPoolExecutor(options.jobs) as pool:
        tasks = [(path, i, options.cases, options.seed, options.without) for i in chosen]
        for index, outcomes in pool.map(_run, tasks):
            print(report(FAMILIES[index].name, outcomes), flush=True)
            everything += outcomes
    print(calibration(everything))


if __name__ == "__main__":
    main()
