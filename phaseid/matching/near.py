"""Which strong lines of a library lie near given spacings: a look-up, not an identification."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from phaseid.errors import InputError
from phaseid.library import Library
from phaseid.library.phase import Phase
from phaseid.library.strongest import CODE_AT_1_A, CODE_STEP
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.element_masks import admitted
from phaseid.matching.records import Record, indices, phase_record
from phaseid.matching.settings import SEARCHED_WHOLE
from phaseid.probes import Probe


@dataclass(frozen=True, slots=True)
class NearLine:
    """A line of `phase` near `wanted_d_A`; `intensity` as the probe shows it, strongest = 100."""

    phase: Phase
    hkl: tuple[int, int, int]
    d_A: float
    intensity: float
    wanted_d_A: float

    def record(self) -> Record:
        """The line as a flat record."""
        return {
            "wanted_d_A": self.wanted_d_A,
            "d_A": self.d_A,
            "hkl": indices(self.hkl),
            "intensity": self.intensity,
            **phase_record(self.phase),
        }


def near_lines(
    spacings_A: Sequence[float],
    library: Library,
    probe: Probe,
    *,
    tolerance: float = 0.01,
    min_intensity: float = 10.0,
    chemistry: Chemistry | None = None,
) -> list[NearLine]:
    """Return the lines within a relative `tolerance` of any of the spacings (Å).

    Only lines of at least `min_intensity` (strongest of the phase = 100) count. Phases that meet
    more of the spacings come first, then those whose lines there are stronger; within a phase the
    order is that of the spacings asked for. Of a phase with several entries the one that stands for
    it is asked; of a large library, phases of which one of the 24 strongest lines is that near.
    Raises InputError for a spacing or tolerance that is none.
    """
    for value in spacings_A:
        if not 0 < value < np.inf:
            raise InputError(
                f"{value:g} is no lattice spacing", remedy="Give positive numbers, in Å"
            )
    if not 0 < tolerance < 1:
        raise InputError(
            f"a tolerance of {tolerance:g} is out of range", remedy="Give one such as 1% or 0.005"
        )
    chemistry = chemistry or Chemistry()
    rows = None
    if len(library) > SEARCHED_WHOLE:
        rows = _strong_near(spacings_A, library, probe, tolerance, chemistry)
    table = library.line_table(probe.kind, rows)
    intensity = probe.weights(table.d_A, table.multiplicity, table.f2)
    counts = np.diff(table.offsets)
    owner = np.repeat(np.arange(len(counts)), counts)
    strongest = np.zeros(len(counts))
    np.maximum.at(strongest, owner, intensity)
    relative = 100 * intensity / np.where(strongest > 0, strongest, 1.0)[owner]

    one_of_each = library.standing()[owner] if rows is None else np.ones(len(owner), dtype=bool)
    met: dict[int, list[tuple[int, int]]] = {}  # phase -> (which spacing, which line)
    for order, wanted in enumerate(spacings_A):
        close = (np.abs(table.d_A / wanted - 1) <= tolerance) & (relative >= min_intensity)
        close &= one_of_each
        for line in np.flatnonzero(close).tolist():
            met.setdefault(int(owner[line]), []).append((order, line))

    def worth(phase: int) -> tuple[float, float, int]:
        spacings = {order for order, _ in met[phase]}
        strength = sum(float(relative[line]) for _, line in met[phase])
        return -len(spacings), -strength, phase

    answer = []
    for index in sorted(met, key=worth):
        phase = library.phase(table.phase_ids[index])
        if not (chemistry.admits(phase.elements) and chemistry.must <= set(phase.elements)):
            continue
        for order, line in met[index]:
            h, k, l = (int(i) for i in table.hkl[line])  # noqa: E741 (Miller's own letter)
            answer.append(
                NearLine(
                    phase=phase,
                    hkl=(h, k, l),
                    d_A=float(table.d_A[line]),
                    intensity=float(relative[line]),
                    wanted_d_A=float(spacings_A[order]),
                )
            )
    return answer


def _strong_near(
    spacings_A: Sequence[float],
    library: Library,
    probe: Probe,
    tolerance: float,
    chemistry: Chemistry,
) -> list[int]:
    """Row numbers of the phases allowed with one of their strongest lines near a spacing."""
    strong = library.strong_lines(probe.kind)
    allowed = np.flatnonzero(admitted(chemistry, strong.elements_mask) & library.standing())
    code = strong.code[allowed].astype(np.int32)
    near = np.zeros(len(allowed), dtype=bool)
    for wanted in spacings_A:
        low, high = (
            np.log(wanted * (1 + side * tolerance)) / CODE_STEP + CODE_AT_1_A + side
            for side in (-1, 1)
        )
        near |= ((code >= low) & (code <= high)).any(axis=1)
    rows: list[int] = strong.row[allowed[near]].tolist()
    return rows
