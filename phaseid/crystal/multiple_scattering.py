"""Rings that only multiple scattering can show, as electrons do (double diffraction)."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.lines import COINCIDENT
from phaseid.crystal.operations import INDEX_CODE, Operations, read_operations
from phaseid.crystal.reflections import Floats, unique_reflections
from phaseid.crystal.structure_factor import squared_amplitudes

_FIRST_BEAMS = 30  # of the longest d: strong enough to be scattered again
_CHUNK = 1 << 20


def multiple_scattering_lines(
    crystal: Crystal, d_min_A: float | None = None
) -> tuple[NDArray[np.int32], Floats]:
    """Return hkl (n, 3) and d (n,) in Å, falling, of lines that only multiple scattering can show.

    These are points of the lattice in which nothing is scattered once, because a glide plane or a
    screw axis forbids it or the waves of all atoms cancel, and that are the sum of two reflections
    that are there: 200 and 222 of silicon, 00l with l odd of a hexagonal close-packed metal. Lines
    that coincide with an ordinary one are left out. One hkl per d; the range is that of
    `unique_reflections`, and what it raises.
    """
    operations = read_operations(crystal.operations)
    allowed = unique_reflections(crystal.cell, operations, d_min_A)
    lit = squared_amplitudes(crystal, operations, allowed, None)[1] > 0
    there, inverse_d2 = allowed.hkl[lit], allowed.inverse_d2[lit]
    straight = replace(operations, translations=np.zeros_like(operations.translations))
    every = unique_reflections(crystal.cell, straight, allowed.d_min_A)
    dark = ~np.isin(every.hkl @ INDEX_CODE, there @ INDEX_CODE)
    dark &= ~_coincide(every.inverse_d2, inverse_d2)
    hkl, d_A = every.hkl[dark], every.inverse_d2[dark] ** -0.5
    first = _all_equivalents(there[:_FIRST_BEAMS], operations)
    codes = np.unique(_all_equivalents(there, operations) @ INDEX_CODE)
    reached = _sums_of_two(hkl, first, codes)
    hkl, d_A = hkl[reached], d_A[reached]
    new = np.ones(len(d_A), dtype=bool)
    new[1:] = d_A[1:] < d_A[:-1] * (1 - COINCIDENT)
    return hkl[new].astype(np.int32), d_A[new]


def _all_equivalents(hkl: Floats, operations: Operations) -> Floats:
    both = np.concatenate([operations.rotations, -operations.rotations])
    return np.unique((hkl @ both).reshape(-1, 3), axis=0)


def _coincide(inverse_d2: Floats, others: Floats) -> NDArray[np.bool_]:
    """Which of sorted 1/d² (n,) lie on one of the sorted others."""
    if not len(others):
        return np.zeros(len(inverse_d2), dtype=bool)
    right = np.searchsorted(others, inverse_d2).clip(max=len(others) - 1)
    left = (right - 1).clip(min=0)
    nearest = np.minimum(abs(others[right] - inverse_d2), abs(others[left] - inverse_d2))
    return np.asarray(nearest <= 2 * COINCIDENT * inverse_d2)


def _sums_of_two(hkl: Floats, first: Floats, codes: Floats) -> NDArray[np.bool_]:
    """Which hkl (n, 3) are one of `first` (b, 3) plus a reflection whose code is in `codes`."""
    reached = np.zeros(len(hkl), dtype=bool)
    if not len(codes):
        return reached
    step = max(1, _CHUNK // len(first))
    for start in range(0, len(hkl), step):
        part = slice(start, start + step)
        second = (hkl[part] @ INDEX_CODE)[:, None] - first @ INDEX_CODE
        place = np.searchsorted(codes, second).clip(max=len(codes) - 1)
        reached[part] = (codes[place] == second).any(axis=1)
    return reached
