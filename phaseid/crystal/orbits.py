"""From the sites of the asymmetric unit to the atoms whose waves must be added."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.crystal import Site
from phaseid.crystal.metric import Cell, metric_tensor
from phaseid.crystal.operations import Operations

Floats = NDArray[np.float64]

SAME_ATOM_A = 0.1  # images nearer than this are one atom, apart only by rounding
_ON_THE_SPOT_A = 1e-6


@dataclass(frozen=True, slots=True, eq=False)
class Orbits:
    """Distinct images of all sites, modulo lattice translations and the inversion.

    `fract` (m, 3) refer to the origin of the `Operations`; `site` (m,) is the index of the site and
    `operation` (m,) that of the operation that made the image; `weight` (m,) is the number of atoms
    of the cell that the image stands for, occupancy included. `multiplicity` (s,) is the number of
    positions in the cell of each site.
    """

    fract: Floats
    site: NDArray[np.int64]
    operation: NDArray[np.int64]
    weight: Floats
    multiplicity: NDArray[np.int64]


def orbits(cell: Cell, operations: Operations, sites: Sequence[Site]) -> Orbits:
    """Expand sites; one whose images nearly coincide is moved onto its special position."""
    fract = np.array([site.fract for site in sites], dtype=np.float64).reshape(-1, 3)
    fract = fract - operations.origin
    occupancy = np.array([site.occupancy for site in sites], dtype=np.float64)
    tensor = operations.from_primitive.T @ metric_tensor(cell) @ operations.from_primitive
    alike = _settle(fract, operations, tensor)
    stabiliser: NDArray[np.bool_] = np.asarray(alike.any(axis=0))
    translations_and_sign = len(operations.centrings) * (2 if operations.centrosymmetric else 1)
    whole_group = len(operations.rotations) * translations_and_sign
    multiplicity = whole_group // alike.sum(axis=(0, 2))
    images = fract @ operations.rotations.transpose(0, 2, 1) + operations.translations[:, None, :]
    every = np.arange(len(operations.rotations))
    general = stabiliser.sum(axis=1) == 1
    kept = [every if general[i] else operations.cosets(stabiliser[i]) for i in range(len(sites))]
    counts = np.array([len(k) for k in kept], dtype=np.int64)
    operation = np.concatenate(kept) if kept else every[:0]
    site = np.repeat(np.arange(len(sites)), counts)
    return Orbits(
        fract=images[operation, site],
        site=site,
        operation=operation,
        weight=(occupancy * multiplicity / counts)[site],
        multiplicity=multiplicity,
    )


def _settle(fract: Floats, operations: Operations, tensor: Floats) -> NDArray[np.bool_]:
    """Move sites onto their special positions, in place; return what leaves them there.

    Shape (2 or 1, s, n): image or, in a centrosymmetric group, its inverse; site; operation.
    """
    steps, length_A = _steps(fract, operations, tensor)
    alike = length_A <= SAME_ATOM_A
    reach_A = SAME_ATOM_A
    special = np.flatnonzero((alike & (length_A > _ON_THE_SPOT_A)).any(axis=(0, 2)))
    while len(special):
        chosen = alike[:, special]
        total = (steps[:, special] * chosen[..., None]).sum(axis=(0, 2))
        mean = total / chosen.sum(axis=(0, 2))[:, None]
        moved = fract[special] + mean @ operations.from_primitive.T
        _, again_A = _steps(moved, operations, tensor)
        settled = ((again_A < _ON_THE_SPOT_A) == chosen).all(axis=(0, 2))
        fract[special[settled]] = moved[settled]
        # images that do not close to a group were not one atom: reach less far
        special = special[~settled]
        reach_A /= 2
        alike[:, special] = length_A[:, special] <= reach_A
        special = special[alike[:, special].sum(axis=(0, 2)) > 1]
    return alike


def _steps(fract: Floats, operations: Operations, tensor: Floats) -> tuple[Floats, Floats]:
    """Return steps (2 or 1, s, n, 3) from sites to images, primitive basis, and lengths in Å."""
    images = fract @ operations.rotations.transpose(0, 2, 1) + operations.translations[:, None, :]
    images = images.transpose(1, 0, 2)
    signs = [images, -images] if operations.centrosymmetric else [images]
    steps = (np.stack(signs) - fract[:, None, :]) @ operations.to_primitive.T
    steps -= np.rint(steps)
    length2 = np.einsum("...i,ij,...j->...", steps, tensor, steps)
    return steps, np.sqrt(np.maximum(length2, 0.0))
