"""A crystal structure as phaseid sees it: cell, symmetry operations, sites, and where it came from.

Fractional coordinates refer to the cell as the source states it; nothing is re-set, so that hkl in
every answer refer to the cell a person finds in the source.
"""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Finding:
    """Something a reader of the structure should know: a repair, a doubt, a mark.

    `code` is a short stable word (`formula_mismatch`, `occupancy_default`, `high_pressure`, …);
    `message` is a sentence.
    """

    code: str
    message: str


@dataclass(frozen=True, slots=True)
class Source:
    """Where a structure came from.

    `database` e.g. "COD", "AFLOW prototypes", "phaseid starter", "file"; `id` its number there or
    ""; `file` the name of the file (inside an archive: the member's name); `reference` the
    literature citation or "".
    """

    database: str
    id: str
    file: str
    reference: str = ""


@dataclass(frozen=True, slots=True)
class Site:
    """One site of the asymmetric unit.

    `element` is an element symbol, or "D" for deuterium. `charge` is the ion's charge or 0.
    `occupancy` is chemical: 1 for a fully occupied site, also on a special position.
    `u_iso_A2` is in Å², None where the source states no displacement.
    `u_aniso_A2` is (U11, U22, U33, U12, U13, U23) in Å² in the CIF convention (dimensionless
    reciprocal-axis basis a*), or None.
    """

    label: str
    element: str
    charge: int
    fract: tuple[float, float, float]
    occupancy: float
    u_iso_A2: float | None = None
    u_aniso_A2: tuple[float, float, float, float, float, float] | None = None


@dataclass(frozen=True, slots=True)
class Crystal:
    """A crystal structure: one conventional cell as its source gives it.

    `cell` is (a, b, c) in Å and (alpha, beta, gamma) in degrees. `operations` is the complete list
    of symmetry operations as triplets ("x,y,z", centring included), a group modulo lattice
    translations.
    `space_group_number` is 1-230; `space_group_symbol` the short Hermann-Mauguin symbol, with the
    setting where it is not the standard one.
    `formula` is the reduced formula of what the sites hold, as chemists write it; `z` how many of
    them the cell holds. `name` is what people call the phase (mineral or common name), "" if the
    source has none; `other_names` what else it is called.
    """

    cell: tuple[float, float, float, float, float, float]
    space_group_number: int
    space_group_symbol: str
    operations: tuple[str, ...]
    sites: tuple[Site, ...]
    name: str
    formula: str
    z: float
    source: Source
    temperature_K: float | None = None
    pressure_GPa: float | None = None
    findings: tuple[Finding, ...] = ()
    other_names: tuple[str, ...] = ()
