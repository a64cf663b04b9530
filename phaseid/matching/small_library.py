"""A line table of a few phases, as the likelihood wants it."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.lines import Lines, trim
from phaseid.library.linetable import LineTable, elements_masks
from phaseid.library.packing import STORED_FLOOR
from phaseid.library.phase import Phase
from phaseid.probes.probe import Kind

Floats = NDArray[np.float64]


def table_of(kind: Kind, phases: Sequence[tuple[Phase, Lines]]) -> LineTable:
    """The line table of these phases in this order."""
    held = [trim(computed, STORED_FLOOR) for _, computed in phases]
    counts = np.array([len(lines.d_A) for lines in held], dtype=np.int64)
    f2 = {"x-ray": "f2_xray", "electron": "f2_electron", "neutron": "f2_neutron"}[kind]

    def values(name: str) -> Floats:
        return np.array([getattr(lines, name) for lines in held], dtype=np.float64)

    return LineTable(
        phase_ids=tuple(phase.phase_id for phase, _ in phases),
        offsets=np.concatenate([np.zeros(1, np.int64), np.cumsum(counts)]),
        d_A=np.concatenate([lines.d_A for lines in held]),
        hkl=np.concatenate([lines.hkl for lines in held]).astype(np.int16),
        multiplicity=np.concatenate([lines.multiplicity for lines in held]),
        f2=np.concatenate([getattr(lines, f2) for lines in held]),
        volume_A3=values("volume_A3"),
        complete_to_A=values("complete_to_A"),
        floor=values("floor"),
        quality=np.array([phase.quality for phase, _ in phases]),
        elements_mask=elements_masks([phase.elements for phase, _ in phases]),
    )


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
