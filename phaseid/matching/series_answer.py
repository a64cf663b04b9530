"""The answer for a series: what matching hands to reports."""

from __future__ import annotations

from dataclasses import dataclass
from typing import ClassVar

from phaseid.library.phase import Phase
from phaseid.matching.identification import (
    Hypothesis,
    Identification,
    LibraryStamp,
    PhaseAnswer,
    Scale,
    Verdict,
)
from phaseid.matching.records import Record, Tidy, cell_record, phase_record
from phaseid.matching.series_axis import Axis
from phaseid.matching.series_chain import Floats
from phaseid.rings.ringlist import RingList


@dataclass(frozen=True, slots=True, eq=False)
class SeriesPhase:
    """One phase of the series, or several that its rings cannot tell apart.

    `probability` (T,) that it shows in each pattern, given the whole series; `alone` (T,) by that
    pattern by itself. `answers` (T,) its share and refined cell where the pattern's best answer
    holds it, else None.
    """

    phase: Phase
    indistinguishable: tuple[Phase, ...]
    probability: Floats
    alone: Floats
    answers: tuple[PhaseAnswer | None, ...]


@dataclass(frozen=True, slots=True, eq=False)
class SeriesPattern:
    """One pattern: its own answer, and what the series makes of it.

    `phases` are indices into the phases of the series, the likeliest set of them, `probability` its
    own; `unlisted` that of something not in the library. `best` is the pattern's own answer with
    these phases, None where it has none.
    """

    rings: RingList
    alone: Identification
    verdict: Verdict
    phases: tuple[int, ...]
    probability: float
    unlisted: float
    best: Hypothesis | None


@dataclass(frozen=True, slots=True, eq=False)
class Series(Tidy):
    """The answer for a series, patterns in the order in which they were given.

    `scale` is measured d over calculated d as far as the patterns share it, None where they do not.

    `persistence` is the mean probability that a phase stays from one pattern to the next, after the
    series; `persistence_posterior` the probability of each value tried.
    """

    patterns: tuple[SeriesPattern, ...]
    phases: tuple[SeriesPhase, ...]
    axis: Axis
    scale: Scale | None
    persistence: float
    persistence_posterior: tuple[tuple[float, float], ...]
    library: LibraryStamp
    remarks: tuple[str, ...]
    cautions: tuple[str, ...]
    shown_keys: ClassVar[tuple[str, ...]] = (
        "pattern",
        "value",
        "name",
        "probability",
        "probability_alone",
        "share",
        "verdict",
    )

    def records(self) -> list[Record]:
        """One record per pattern and phase: where, what, how likely, how much."""
        return [
            {
                "pattern": t + 1,
                "source": pattern.rings.source,
                "title": pattern.rings.title,
                "axis": self.axis.title,
                "value": self.axis.values[t],
                **phase_record(row.phase),
                "probability": float(row.probability[t]),
                "probability_alone": float(row.alone[t]),
                "share": None if part is None else part.share,
                "share_sigma": None if part is None else part.share_sigma,
                **cell_record(None if part is None else part.cell),
                "unlisted_probability": pattern.unlisted,
                "verdict": pattern.verdict,
            }
            for t, pattern in enumerate(self.patterns)
            for row in self.phases
            for part in (row.answers[t],)
        ]

    def summary(self) -> str:
        """The result in a sentence."""
        sure = sum(pattern.verdict == "identified" for pattern in self.patterns)
        names = ", ".join(row.phase.name for row in self.phases) or "no phase of the library"
        return f"{len(self.patterns)} patterns by {self.axis.name}, {sure} identified: {names}"
