"""The finished identification: what matching hands to reports."""

from __future__ import annotations

from dataclasses import dataclass
from math import isnan
from typing import ClassVar, Literal

from phaseid.library.marks import marks
from phaseid.library.phase import Phase
from phaseid.matching.records import Record, Tidy, cell_record, indices, phase_record
from phaseid.rings.ringlist import RingList

Verdict = Literal["identified", "ambiguous", "no-match"]


@dataclass(frozen=True, slots=True)
class Scale:
    """Fitted common factor of one pattern: calculated d × factor = measured d; `sigma` of the
    factor."""

    pattern: int
    factor: float
    sigma: float


@dataclass(frozen=True, slots=True)
class Assignment:
    """Ring `ring` of pattern `pattern` explained by line hkl of phase `phase` (index in the
    hypothesis).

    `d_calc_A` is the calculated spacing of the phase as stored, without the fitted scale;
    `residual_sigma` is (measured − scaled calculated) / the ring's sigma.
    `relative_intensity` is the calculated line's, strongest line of that phase in range = 100.
    """

    pattern: int
    ring: int
    phase: int
    hkl: tuple[int, int, int]
    d_calc_A: float
    residual_sigma: float
    relative_intensity: float


@dataclass(frozen=True, slots=True)
class Unexplained:
    """A ring no phase of the hypothesis explains; `hint` names a usual cause where one fits, else
    ""."""

    pattern: int
    ring: int
    hint: str = ""


@dataclass(frozen=True, slots=True)
class Missing:
    """A line the phase should show in the pattern's range and that was not measured."""

    pattern: int
    phase: int
    hkl: tuple[int, int, int]
    d_calc_A: float
    relative_intensity: float


@dataclass(frozen=True, slots=True)
class Separator:
    """A measurement that would tell the answer from another phase: plain words in `text`."""

    other: Phase
    text: str


@dataclass(frozen=True, slots=True)
class PhaseAnswer:
    """One phase of a hypothesis.

    `share` is the weight fraction (0-1) from absolute intensities, None for a pattern that cannot
    give one; `share_sigma` its one-sigma. `indistinguishable` are library phases these rings cannot
    tell from this one. `entries` are the other entries of the library that are determinations of
    this phase, `alike_entries` those of the indistinguishable ones. `cell` is the refined cell (Å,
    degrees) with `cell_sigma`, None where too few lines were assigned. `fibre_axis` is (u, v, w)
    where the pattern is explained by a textured film.
    """

    phase: Phase
    share: float | None
    share_sigma: float | None
    indistinguishable: tuple[Phase, ...] = ()
    cell: tuple[float, float, float, float, float, float] | None = None
    cell_sigma: tuple[float, float, float, float, float, float] | None = None
    fibre_axis: tuple[int, int, int] | None = None
    separators: tuple[Separator, ...] = ()
    entries: tuple[Phase, ...] = ()
    alike_entries: tuple[Phase, ...] = ()


@dataclass(frozen=True, slots=True)
class Hypothesis:
    """One explanation of the patterns: a set of phases. `probability` counts indistinguishable
    groups.

    `log_odds` is the natural log of the odds against everything else together.
    """

    rank: int
    probability: float
    log_odds: float
    phases: tuple[PhaseAnswer, ...]
    scale: tuple[Scale, ...]
    assignments: tuple[Assignment, ...]
    unexplained: tuple[Unexplained, ...]
    missing: tuple[Missing, ...]


@dataclass(frozen=True, slots=True)
class LibraryStamp:
    """Which library answered."""

    path: str
    phases: int
    digest: str


@dataclass(frozen=True, slots=True)
class TypeMatch:
    """No listed phase fits, but the ring ratios are those of a known structure type with another
    cell."""

    type_name: str
    like: Phase
    a_A: float
    a_sigma_A: float
    probability: float


@dataclass(frozen=True, slots=True)
class Identification(Tidy):
    """The answer: ranked hypotheses, the probability left for what no listed phase explains,
    remarks.

    `unlisted_probability` is that of "something not in this library". `remarks` are sentences a
    reader needs (defaults used, rings set aside, chemistry applied). `cautions` are safety
    sentences for the phases named.
    """

    verdict: Verdict
    patterns: tuple[RingList, ...]
    hypotheses: tuple[Hypothesis, ...]
    unlisted_probability: float
    library: LibraryStamp
    remarks: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
    type_matches: tuple[TypeMatch, ...] = ()
    shown_keys: ClassVar[tuple[str, ...]] = (
        "rank",
        "probability",
        "name",
        "formula",
        "space_group",
        "share",
        "rings_explained",
    )

    def records(self) -> list[Record]:
        """One record per phase of each answer, the best answer first."""
        rings = sum(len(pattern) for pattern in self.patterns)
        return [
            {
                "rank": answer.rank,
                "probability": answer.probability,
                **phase_record(part.phase),
                "indistinguishable": ", ".join(p.name for p in part.indistinguishable) or None,
                "entries": 1 + len(part.entries),
                "share": part.share,
                "share_sigma": part.share_sigma,
                **cell_record(part.cell),
                "rings_explained": rings - len(answer.unexplained),
                "rings": rings,
                "scale_factor": answer.scale[0].factor if answer.scale else None,
            }
            for answer in self.hypotheses
            for part in answer.phases
        ]

    def ring_records(self, rank: int = 1) -> list[Record]:
        """One record per ring: what the answer of that rank makes of it.

        A ring of several phases has a record for each, an unexplained one a record without a phase.
        Raises IndexError where there is no such answer.
        """
        answer = self.hypotheses[rank - 1]
        records = []
        for number, pattern in enumerate(self.patterns):
            for ring in range(len(pattern)):
                found: list[Assignment | None] = [
                    a for a in answer.assignments if (a.pattern, a.ring) == (number, ring)
                ]
                for line in found or [None]:
                    phase = None if line is None else answer.phases[line.phase].phase
                    records.append(
                        {
                            "pattern": number + 1,
                            "ring": ring + 1,
                            "d_A": float(pattern.d_A[ring]),
                            "sigma_A": float(pattern.sigma_A[ring]),
                            "intensity": _known(float(pattern.intensity[ring])),
                            "name": None if phase is None else phase.name,
                            "phase_id": None if phase is None else phase.phase_id,
                            "hkl": None if line is None else indices(line.hkl),
                            "d_calc_A": None if line is None else line.d_calc_A,
                            "residual_sigma": None if line is None else line.residual_sigma,
                        }
                    )
        return records

    def entry_records(self, rank: int = 1) -> list[Record]:
        """One record per entry of the library that is a determination of a phase of that answer.

        Of each phase the entry that stands for all comes first, with `stands` true. Raises
        IndexError where there is no such answer.
        """
        return [
            {
                "phase": number,
                "stands": entry is part.phase,
                **phase_record(entry),
                "marks": ", ".join(marks(f.code for f in entry.findings)) or None,
                **cell_record(entry.cell),
                "source_database": entry.source.database,
                "source_id": entry.source.id,
                "source_file": entry.source.file,
                "source_reference": entry.source.reference,
            }
            for number, part in enumerate(self.hypotheses[rank - 1].phases, start=1)
            for entry in (part.phase, *part.entries)
        ]

    def summary(self) -> str:
        """Verdict, best answer and its probability."""
        if not self.hypotheses:
            return f"{self.verdict}: no phase of the library explains these rings"
        best = self.hypotheses[0]
        names = " + ".join(part.phase.name for part in best.phases)
        return (
            f"{self.verdict}: {names}, probability {best.probability:.2f} "
            f"({self.unlisted_probability:.2f} for something not in the library)"
        )


def _known(value: float) -> float | None:
    return None if isnan(value) else value
