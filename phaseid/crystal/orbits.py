"""From the sites of the asymmetric unit to the atoms whose waves must be added."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.crystal import Site
from phaseid.crystal.metric import Cell, metric_tensor, squares
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
    fract -= operations.origin
    occupancy = np.array([site.occupancy for site in sites], dtype=np.float64)
    alike = _settle(fract, operations, metric_tensor(cell))
    n = len(operations.rotations)
    stabiliser: NDArray[np.bool_] = alike[:, :n]
    if operations.centrosymmetric:
        stabiliser = stabiliser | alike[:, n:]
    order = np.add.reduce(alike, axis=1)
    multiplicity = alike.shape[1] * len(operations.centrings) // order
    images = fract @ operations.image_map[:3]
    images += operations.image_map[3]
    site, operation, counts = operations.expansion(stabiliser)
    return Orbits(
        fract=images.reshape(-1, n, 3)[site, operation],
        site=site,
        operation=operation,
        weight=(occupancy * multiplicity / counts)[site],
        multiplicity=multiplicity,
    )


def _settle(fract: Floats, operations: Operations, metric: Floats) -> NDArray[np.bool_]:
    """Move sites onto their special positions, in place; return what leaves them there.

    Shape (s, n) or, in a centrosymmetric group, (s, 2n): site; image, then the images inverted.
    """
    tensor = metric
    if len(operations.centrings) > 1:
        tensor = operations.from_primitive.T @ metric @ operations.from_primitive
    steps, length2 = _steps(fract, operations, tensor)
    reach2 = SAME_ATOM_A**2
    alike: NDArray[np.bool_] = length2 <= reach2
    if np.count_nonzero(alike) == np.count_nonzero(length2 <= _ON_THE_SPOT_A**2):
        return alike
    special = np.flatnonzero((alike & (length2 > _ON_THE_SPOT_A**2)).any(axis=1))
    while len(special):
        chosen = alike[special]
        total = (steps[special] * chosen[..., None]).sum(axis=1)
        mean = total / chosen.sum(axis=1)[:, None]
        moved = fract[special] + mean @ operations.from_primitive.T
        _, again2 = _steps(moved, operations, tensor)
        settled = ((again2 < _ON_THE_SPOT_A**2) == chosen).all(axis=1)
        fract[special[settled]] = moved[settled]
        # images that do not close to a group were not one atom: reach less far
        special = special[~settled]
        reach2 /= 4
        alike[special] = length2[special] <= reach2
        special = special[alike[special].sum(axis=1) > 1]
    return alike


def _steps(fract: Floats, operations: Operations, tensor: Floats) -> tuple[Floats, Floats]:
    """Return steps (s, n or 2n, 3) from sites to images, primitive basis, and their squares, Å²."""
    steps = fract @ operations.step_map[:3]
    steps += operations.step_map[3]
    steps -= np.rint(steps)
    length2 = squares(steps.reshape(-1, 3), tensor).reshape(len(fract), -1)
    return steps.reshape(len(fract), -1, 3), length2
