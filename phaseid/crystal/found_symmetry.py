"""Symmetry that the atoms have although the source states none."""

from __future__ import annotations

from collections.abc import Sequence

from phaseid.crystal.crystal import Finding, Site
from phaseid.crystal.metric import Cell
from phaseid.crystal.spglib_questions import group_of_atoms

MAX_SITES = 200  # some milliseconds here, seconds for thousands of atoms
_TOLERANCE_A = 0.01


def found_symmetry(cell: Cell, sites: Sequence[Site]) -> Finding | None:
    """Return a note on the space group of the atoms of a P 1 cell, None where it is P 1 indeed.

    `sites` are all atoms of the cell. The cell is kept as the source gives it; d and intensities do
    not depend on it, only hkl do. Nothing is said of cells with shared or partly filled sites.
    """
    if not 2 <= len(sites) <= MAX_SITES or any(site.occupancy != 1.0 for site in sites):
        return None
    kinds = {element: k for k, element in enumerate(sorted({site.element for site in sites}), 1)}
    found = group_of_atoms(
        cell,
        [site.fract for site in sites],
        [kinds[site.element] for site in sites],
        _TOLERANCE_A,
    )
    if found is None or found[0] == 1:
        return None
    number, symbol = found
    return Finding(
        "higher_symmetry",
        f"the cell is given without symmetry (P 1); its atoms have that of {symbol} ({number}), "
        "hkl refer to the cell as given",
    )
