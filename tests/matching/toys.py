"""Made-up phases whose lines are chosen, not computed, so that answers have a closed form."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from phaseid.library import Library
from phaseid.library.linetable import Kind, LineTable, elements_bits
from phaseid.library.phase import Phase
from phaseid.matching.lineset import gather
from phaseid.matching.model import Model
from phaseid.matching.patterns import prepare
from phaseid.probes import Probe, parse_probe
from phaseid.rings import RingList, rings_from_values


@dataclass(frozen=True)
class Toy:
    """A phase of spacings `d_A` (Å, falling) that shows these `intensity` values."""

    d_A: Sequence[float]
    intensity: Sequence[float]
    elements: Sequence[str] = ("Al",)


def toy_table(toys: Sequence[Toy], probe: Probe, complete_to_A: float = 0.3) -> LineTable:
    """A line table in which `probe` shows every toy with its intensities, each of one Å³."""
    d = np.concatenate([np.asarray(toy.d_A, dtype=float) for toy in toys])
    shown = np.concatenate([np.asarray(toy.intensity, dtype=float) for toy in toys])
    count = len(toys)
    bits = [elements_bits(toy.elements) for toy in toys]
    return LineTable(
        phase_ids=tuple(f"toy-{i}" for i in range(count)),
        offsets=np.concatenate([[0], np.cumsum([len(toy.d_A) for toy in toys])]).astype(np.int64),
        d_A=d,
        hkl=np.tile(np.array([1, 0, 0], dtype=np.int16), (len(d), 1)),
        multiplicity=np.ones(len(d), dtype=np.int32),
        f2=shown / probe.weights(d, np.ones(len(d)), np.ones(len(d))),
        volume_A3=np.ones(count),
        complete_to_A=np.full(count, complete_to_A),
        floor=np.zeros(count),
        quality=np.ones(count),
        elements_mask=np.array([(b & 2**64 - 1, b >> 64) for b in bits], dtype=np.uint64),
    )


def toy_model(
    toys: Sequence[Toy], patterns: Sequence[RingList], crowd: float = 2.0
) -> tuple[Model, LineTable]:
    """The model of `patterns` over `toys`; the crowd's ln density is `crowd` at every ring.

    All patterns must share a kind of probe for the intensities to be those of the toys.
    """
    table = toy_table(toys, patterns[0].probe)
    prepared = [prepare(rings) for rings in patterns]
    everything = np.arange(len(toys))
    model = Model(
        patterns=tuple(prepared),
        lines=tuple(gather(table, everything, pattern) for pattern in prepared),
        crowd=tuple(np.full(len(pattern), crowd) for pattern in prepared),
    )
    return model, table


def toy_rings(
    d_A: Sequence[float],
    sigma: float,
    *,
    probe: str = "electron 200 kV",
    scale: float = 0.01,
    intensities: Sequence[float | str | None] | None = None,
) -> RingList:
    """A ring list of spacings with one relative `sigma` each."""
    return rings_from_values(
        [float(d) for d in d_A],
        probe=parse_probe(probe, scale_sigma=scale),
        sigma=[float(sigma * d) for d in d_A],
        intensities=intensities,
    )


class Selection:
    """Chosen phases of a library, their line tables held in memory."""

    def __init__(self, library: Library, phase_ids: set[str]) -> None:
        self._library = library
        self._chosen = phase_ids
        self._tables: dict[Kind, LineTable] = {}
        self.path = library.path
        self.digest = library.digest

    def __len__(self) -> int:
        return len(self._chosen)

    def phase(self, phase_id: str) -> Phase:
        assert phase_id in self._chosen
        return self._library.phase(phase_id)

    def entries(self, phase_id: str) -> list[Phase]:
        return [self.phase(phase_id)]

    def standing(self) -> NDArray[np.bool_]:
        return np.ones(len(self), dtype=bool)

    def line_table(self, kind: Kind) -> LineTable:
        if kind not in self._tables:
            self._tables[kind] = part_of(self._library.line_table(kind), self._chosen)
        return self._tables[kind]


def part_of(table: LineTable, phase_ids: set[str]) -> LineTable:
    """The table with only these phases in it."""
    keep = [i for i, phase_id in enumerate(table.phase_ids) if phase_id in phase_ids]
    rows = np.concatenate([np.arange(table.offsets[i], table.offsets[i + 1]) for i in keep])
    counts = np.diff(table.offsets)[keep]
    return replace(
        table,
        phase_ids=tuple(table.phase_ids[i] for i in keep),
        offsets=np.concatenate([[0], np.cumsum(counts)]),
        d_A=table.d_A[rows],
        hkl=table.hkl[rows],
        multiplicity=table.multiplicity[rows],
        f2=table.f2[rows],
        volume_A3=table.volume_A3[keep],
        complete_to_A=table.complete_to_A[keep],
        floor=table.floor[keep],
        quality=table.quality[keep],
        elements_mask=table.elements_mask[keep],
    )
