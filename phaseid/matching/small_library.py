"""A line table of a few phases, as the likelihood wants it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from phaseid.crystal.lines import Lines, trim
from phaseid.library.linetable import LineTable, line_table, pack_lines
from phaseid.library.phase import Phase
from phaseid.probes.probe import Kind

_FLOOR = 1e-3


def table_of(kind: Kind, phases: Sequence[tuple[Phase, Lines]]) -> LineTable:
    """The line table of these phases in this order."""
    rows = []
    for phase, computed in phases:
        lines = trim(computed, _FLOOR)
        rows.append(
            (
                phase.phase_id,
                lines.volume_A3,
                lines.complete_to_A,
                lines.floor,
                phase.quality,
                " ".join(phase.elements),
                pack_lines(lines),
            )
        )
    return line_table(kind, rows)


def joined(first: LineTable, second: LineTable) -> LineTable:
    """Both tables as one, the phases of `first` first."""
    return replace(
        first,
        phase_ids=first.phase_ids + second.phase_ids,
        offsets=np.concatenate([first.offsets, second.offsets[1:] + first.offsets[-1]]),
        **{
            name: np.concatenate([getattr(first, name), getattr(second, name)])
            for name in (
                "d_A",
                "hkl",
                "multiplicity",
                "f2",
                "volume_A3",
                "complete_to_A",
                "floor",
                "quality",
                "elements_mask",
            )
        },
    )
