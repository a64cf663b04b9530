"""A phase as the library hands it out."""

from __future__ import annotations

from dataclasses import dataclass

from phaseid.crystal.crystal import Finding, Source


@dataclass(frozen=True, slots=True)
class Phase:
    """One row of the library, without its lines.

    `phase_id` is stable across libraries: formula and content hash of the structure.
    `name` is the mineral or common name, else the formula. `cell` is (a, b, c) in Å and
    (alpha, beta, gamma) in degrees. `elements` are sorted symbols (D counts as H).
    `cautions` are safety sentences for work with that material. `quality` is 0-1: how much trust
    the entry deserves (1 a measured structure at ambient conditions; theoretical, high-pressure or
    doubtful entries less).
    """

    phase_id: str
    name: str
    formula: str
    elements: tuple[str, ...]
    space_group_number: int
    space_group_symbol: str
    cell: tuple[float, float, float, float, float, float]
    volume_A3: float
    density_g_cm3: float
    source: Source
    findings: tuple[Finding, ...] = ()
    cautions: tuple[str, ...] = ()
    quality: float = 1.0
