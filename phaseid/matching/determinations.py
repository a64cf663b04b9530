"""One candidate for each phase, and with an answer the other entries of its phases."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

from phaseid.library.library import Library
from phaseid.library.phase import Phase
from phaseid.matching.identification import Hypothesis


def with_entries(library: Library, hypotheses: Sequence[Hypothesis]) -> tuple[Hypothesis, ...]:
    """Return the hypotheses with the entries that the phases named in them stand for."""
    held: dict[str, tuple[Phase, ...]] = {}

    def others(phase: Phase) -> tuple[Phase, ...]:
        if phase.phase_id not in held:
            entries = library.entries(phase.phase_id)
            held[phase.phase_id] = tuple(e for e in entries if e.phase_id != phase.phase_id)
        return held[phase.phase_id]

    return tuple(
        replace(
            hypothesis,
            phases=tuple(
                replace(
                    part,
                    entries=others(part.phase),
                    alike_entries=tuple(
                        entry for alike in part.indistinguishable for entry in others(alike)
                    ),
                )
                for part in hypothesis.phases
            ),
        )
        for hypothesis in hypotheses
    )
