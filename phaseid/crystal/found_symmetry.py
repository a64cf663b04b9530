"""Symmetry that the atoms have although the source states none."""

from __future__ import annotations

import warnings
from collections.abc import Sequence

from phaseid.crystal.crystal import Finding, Site
from phaseid.crystal.metric import Cell

MAX_SITES = 200  # spglib needs some milliseconds here, seconds for thousands of atoms
_TOLERANCE_A = 0.01


def found_symmetry(cell: Cell, sites: Sequence[Site]) -> Finding | None:
    """Return a note on the space group of the atoms of a P 1 cell, None where it is P 1 indeed.

    `sites` are all atoms of the cell. The cell is kept as the source gives it; d and intensities do
    not depend on it, only hkl do. Nothing is said of cells with shared or partly filled sites.
    """
    if not 2 <= len(sites) <= MAX_SITES or any(site.occupancy != 1.0 for site in sites):
        return None
    import numpy as np
    import spglib

    from phaseid.crystal.metric import metric_tensor

    lattice = np.linalg.cholesky(metric_tensor(cell))  # rows a, b, c
    kinds = {element: k for k, element in enumerate(sorted({site.element for site in sites}), 1)}
    atoms = (
        lattice.tolist(),
        [site.fract for site in sites],
        [kinds[site.element] for site in sites],
    )
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            symbol = spglib.get_spacegroup(atoms, symprec=_TOLERANCE_A)
        except Exception:
            return None
    if not symbol or symbol.startswith("P1 "):
        return None
    return Finding(
        "higher_symmetry",
        f"the cell is given without symmetry (P 1); its atoms have that of {symbol}, hkl refer to "
        "the cell as given",
    )
