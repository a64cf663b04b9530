"""The phases of a library and a few beside it, numbered as in its line tables."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.lines import Lines, compute_lines
from phaseid.library import Library
from phaseid.library.linetable import LineTable
from phaseid.library.outside import phase_of
from phaseid.library.phase import Phase
from phaseid.library.starter import DATABASE, shipped_crystal
from phaseid.matching.small_library import joined, table_of
from phaseid.matching.watch import Watched
from phaseid.probes.probe import Kind

Found = tuple[Phase, Crystal]


class Pool:
    """Add phases by `add` and `add_watched`; then `table` holds the library and them."""

    def __init__(self, library: Library) -> None:
        self._library = library
        self._phases = library.phases()
        self._number = {phase.phase_id: i for i, phase in enumerate(self._phases)}
        self._shipped = {
            phase.source.id: i
            for i, phase in enumerate(self._phases)
            if phase.source.database == DATABASE
        }
        self._beside: list[tuple[Phase, Lines]] = []

    def add(self, phase: Phase, crystal: Crystal) -> int:
        """The number of a phase, whose lines are computed where the library lacks it."""
        if phase.phase_id not in self._number:
            self._number[phase.phase_id] = len(self._phases)
            self._phases.append(phase)
            self._beside.append((phase, compute_lines(crystal)))
        return self._number[phase.phase_id]

    def add_watched(
        self, watch: Sequence[Watched], find: Callable[[str], Found]
    ) -> dict[int, Watched]:
        """The numbers of the phases watched for."""
        numbers: dict[int, Watched] = {}
        for watched in watch:
            if watched.shipped and watched.name in self._shipped:
                number = self._shipped[watched.name]
            elif watched.shipped:
                crystal = shipped_crystal(watched.name)
                number = self.add(phase_of(crystal), crystal)
            else:
                number = self.add(*find(watched.name))
            numbers[number] = watched
        return numbers

    def phase(self, number: int) -> Phase:
        """The phase of that number."""
        return self._phases[number]

    def suspects(self, watched: Iterable[int]) -> NDArray[np.bool_]:
        """Which numbers may be suspected: those watched, and one entry of each other phase."""
        suspected = np.ones(len(self._phases), dtype=bool)
        own = self._library.standing()
        suspected[: len(own)] = own
        suspected[list(watched)] = True
        return suspected

    def table(self, kind: Kind) -> LineTable:
        """The lines of all phases to one kind of probe, in the order of their numbers."""
        own = self._library.line_table(kind)
        if not self._beside:
            return own
        beside = table_of(kind, self._beside)
        return joined(own, beside) if len(own) else beside
