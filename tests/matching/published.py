"""The published powder patterns of tests/reference, as ring lists."""

from __future__ import annotations

import json
import re
from collections import Counter
from functools import cache
from math import log
from pathlib import Path
from typing import Any

from phaseid.library import Library
from phaseid.library.phase import Phase
from phaseid.matching.identification import Hypothesis, PhaseAnswer
from phaseid.rings import RingList, rings_from_values

REFERENCE = Path(__file__).parents[1] / "reference"
Composition = dict[str, float]


@cache
def reference(name: str) -> Any:
    """A table of tests/reference."""
    return json.loads((REFERENCE / f"{name}.json").read_text(encoding="utf-8"))


PATTERNS: dict[str, dict[str, Any]] = {
    entry["phase"]: entry for entry in reference("published_patterns")["patterns"]
}


def published_rings(phase: str) -> RingList:
    """The published spacings and peak heights of `phase`, read with Cu Kα1."""
    lines = PATTERNS[phase]["lines"]
    return rings_from_values(
        [line["d_A"] for line in lines],
        probe="x-ray Cu Ka1",
        intensities=[line["I"] for line in lines],
        title=phase,
    )


def added(shares: dict[str, float]) -> RingList:
    """Published patterns added with these weights; rings nearer than 0.15 % become one."""
    lines = [
        (line["d_A"], share * line["I"])
        for name, share in shares.items()
        for line in PATTERNS[name]["lines"]
    ]
    merged: list[tuple[float, float]] = []
    for d, height in sorted(lines, reverse=True):
        if merged and log(merged[-1][0] / d) < 0.0015:
            before = merged[-1]
            total = before[1] + height
            merged[-1] = ((before[0] * before[1] + d * height) / total, total)
        else:
            merged.append((d, height))
    strongest = max(height for _, height in merged)
    kept = [(d, height) for d, height in merged if height > 0.01 * strongest]
    return rings_from_values(
        [d for d, _ in kept], probe="x-ray Cu Ka1", intensities=[height for _, height in kept]
    )


def composition(formula: str) -> Composition:
    """Atomic fractions of a formula without brackets."""
    counts: Counter[str] = Counter()
    for symbol, number in re.findall(r"([A-Z][a-z]?)([\d.]*)", formula):
        counts[symbol] += float(number or 1)  # type: ignore[assignment]
    total = sum(counts.values())
    return {symbol: round(number / total, 3) for symbol, number in sorted(counts.items())}


def is_phase(phase: Phase, formula: str, space_group_number: int) -> bool:
    """Whether a library phase has this composition and space group."""
    return phase.space_group_number == space_group_number and composition(
        phase.formula
    ) == composition(formula)


def is_published(phase: Phase, name: str) -> bool:
    """Whether a library phase is the published one."""
    entry = PATTERNS[name]
    return is_phase(phase, entry["formula"], entry["space_group_number"])


def group(answer: PhaseAnswer) -> tuple[Phase, ...]:
    """The phase of an answer and those the rings cannot tell from it."""
    return (answer.phase, *answer.indistinguishable)


def names_exactly(hypothesis: Hypothesis, names: list[str]) -> bool:
    """Whether the hypothesis consists of the published phases, groups counted as one."""
    free = list(names)
    for answer in hypothesis.phases:
        hit = next((n for n in free if any(is_published(p, n) for p in group(answer))), None)
        if hit is None:
            return False
        free.remove(hit)
    return not free


def without(library: Library, *names: str) -> set[str]:
    """Ids of all phases but the published ones and entries of their composition and group."""
    return {
        phase.phase_id
        for phase in library.phases()
        if not any(is_published(phase, name) for name in names)
    }
