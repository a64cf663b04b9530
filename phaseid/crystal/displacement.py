"""How far atoms swing: the Debye-Waller factor of amplitudes, exp(-2π² h·U·h) = exp(-B s²).

B = 8π²U, s = sinθ/λ = 1/(2d). It multiplies amplitudes; intensities fall with its square.
"""

from __future__ import annotations

import csv
import math
from collections.abc import Collection, Sequence
from functools import cache
from importlib import resources

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.crystal import Site
from phaseid.crystal.metric import Cell, metric_tensor
from phaseid.crystal.operations import Operations
from phaseid.crystal.orbits import Orbits

Floats = NDArray[np.float64]

DEFAULT_B_A2 = 0.5  # common practice for inorganic solids at room temperature, no source
DEFAULT_U_A2 = DEFAULT_B_A2 / (8 * math.pi**2)


def isotropic_U_A2(sites: Sequence[Site], cell: Cell) -> list[float]:
    """Return one mean square displacement per site in Å².

    That of the source, or the mean of an anisotropic one; where the source is silent, the default.
    Negative values, which no atom can have, count as silence.
    """
    silent = default_U_A2({site.element for site in sites})
    values = []
    for site in sites:
        u_A2 = site.u_iso_A2
        if u_A2 is None and site.u_aniso_A2 is not None:
            u_A2 = _equivalent(site.u_aniso_A2, cell)
        values.append(silent if u_A2 is None or not 0 <= u_A2 < math.inf else u_A2)
    return values


def default_U_A2(elements: Collection[str]) -> float:
    """Return the displacement in Å² of sites whose source states none, in a crystal of `elements`.

    An element by itself takes its own at 293 K where the table beside this module (which says its
    source) has it: from B = 0.22 Å² in tungsten to 14 Å² in rubidium. Everything else takes
    B = 0.5 Å², for how far an element swings in a compound depends on the compound.
    """
    if len(elements) != 1:
        return DEFAULT_U_A2
    (element,) = elements
    return _of_elements().get(element, DEFAULT_U_A2)


@cache
def _of_elements() -> dict[str, float]:
    table = resources.files("phaseid.crystal") / "tables" / "element_displacements.csv"
    lines = table.read_text(encoding="utf-8").splitlines()
    rows = csv.DictReader(line for line in lines if not line.startswith("#"))
    return {row["element"]: float(row["B_A2"]) / (8 * math.pi**2) for row in rows}


def exponents(
    sites: Sequence[Site], cell: Cell, reciprocal: Floats, operations: Operations, images: Orbits
) -> Floats:
    """Return (m, 6): exponents @ quadratic_terms(hkl).T is -2π² h·U·h of each image.

    A tensor turns with the operation that made the image, U → R U Rᵀ in the basis where h·U·h is
    taken; isotropic displacements are U g* for the reciprocal metric g*.
    """
    stars = np.sqrt(reciprocal.diagonal())
    tensors = np.array(isotropic_U_A2(sites, cell))[:, None, None] * reciprocal
    for i, site in enumerate(sites):
        u = site.u_aniso_A2
        if u is not None and _possible(u, cell):
            tensors[i] = _matrix(u) * np.outer(stars, stars)
    turned = operations.rotations[images.operation]
    turned = turned @ tensors[images.site] @ turned.transpose(0, 2, 1)
    rows = turned[:, (0, 1, 2, 0, 0, 1), (0, 1, 2, 1, 2, 2)] * (1, 1, 1, 2, 2, 2)
    return np.asarray(rows * (-2 * math.pi**2))


def quadratic_terms(hkl: Floats) -> Floats:
    """Return h², k², l², hk, hl, kl of hkl (n, 3), shape (n, 6)."""
    return hkl[:, (0, 1, 2, 0, 0, 1)] * hkl[:, (0, 1, 2, 1, 2, 2)]


def _matrix(u: tuple[float, ...]) -> Floats:
    return np.array([[u[0], u[3], u[4]], [u[3], u[1], u[5]], [u[4], u[5], u[2]]])


def _cartesian(u: tuple[float, ...], cell: Cell) -> Floats:
    """The tensor referred to orthonormal axes: A N U N Aᵀ, with lengths of a*, b*, c* in N."""
    metric = metric_tensor(cell)
    stars = np.sqrt(np.linalg.inv(metric).diagonal())
    axes = np.linalg.cholesky(metric).T
    return np.asarray(axes @ (_matrix(u) * np.outer(stars, stars)) @ axes.T)


def _equivalent(u: tuple[float, ...], cell: Cell) -> float:
    return float(np.trace(_cartesian(u, cell))) / 3


def _possible(u: tuple[float, ...], cell: Cell) -> bool:
    if not np.all(np.isfinite(u)):
        return False
    return float(np.linalg.eigvalsh(_cartesian(u, cell))[0]) >= -1e-9
