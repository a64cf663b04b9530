"""A canonical text of what a crystal is, for content hashing."""

from __future__ import annotations

import numpy as np

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.symmetry import operation_arrays

_DIGITS = 4
_GRID = 10**_DIGITS


def content_key(crystal: Crystal) -> str:
    """Return text of cell, operations and sites, the same for the same structure.

    It does not depend on the order of sites and operations, on labels, names or file, nor on which
    image of a site is listed. Lengths are rounded to 0.0001 Å, angles, fractions, occupancies to
    0.0001, displacements to 0.0001 Å².
    """
    cell = " ".join(f"{value:.{_DIGITS}f}" for value in crystal.cell)
    operations = ";".join(sorted(crystal.operations))
    rotations, translations = operation_arrays(crystal.operations)
    sites = np.array([site.fract for site in crystal.sites], dtype=np.float64).reshape(-1, 3)
    images = sites @ rotations.transpose(0, 2, 1) + translations[:, None, :]
    grid = np.rint(images * _GRID).astype(np.int64) % _GRID  # (operations, sites, 3)
    first = ((grid[..., 0] * _GRID + grid[..., 1]) * _GRID + grid[..., 2]).min(axis=0)
    lines = sorted(
        f"{site.element}{site.charge:+d} {int(place):012d} {site.occupancy:.{_DIGITS}f} "
        f"{'-' if site.u_iso_A2 is None else f'{site.u_iso_A2:.{_DIGITS}f}'}"
        for site, place in zip(crystal.sites, first.tolist(), strict=True)
    )
    return "\n".join((cell, operations, *lines))
