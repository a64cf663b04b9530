"""How the lattices of two structures can be laid on each other, whatever cells they are told in.

A lattice is its cell and the centring translations; a reduced primitive basis of the one is looked
for among the short vectors of the other. So neither axes nor the choice of a multiple cell matters.
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import cached_property
from itertools import product

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.metric import Cell, metric_tensor

Floats = NDArray[np.float64]

_STEPS = np.array(list(product((-2, -1, 0, 1, 2), repeat=3)), dtype=np.float64)
_FLAT = 1e-4  # of the product of the edges: three vectors in one plane span no cell


@dataclass(frozen=True, eq=False)
class Lattice:
    """A lattice by its cell (Å, degrees) and the translations of its centring.

    `centring` (k, 3) holds the translations beside whole ones, as fractions of the cell edges.
    """

    cell: Cell
    centring: Floats

    @cached_property
    def vectors(self) -> tuple[Floats, Floats]:
        """Lattice vectors, shortest first: coordinates (n, 3) and lengths (n,) in Å.

        They reach two cells far, which holds the shortest ones of the cells that people choose.
        """
        shifts = np.concatenate([np.zeros((1, 3)), self.centring])
        steps = (_STEPS[:, None, :] + shifts).reshape(-1, 3)
        steps = steps[np.abs(steps).sum(axis=1) > 0]
        lengths = np.sqrt(np.einsum("ni,ij,nj->n", steps, metric_tensor(self.cell), steps))
        order = np.argsort(lengths, kind="stable")
        return steps[order], lengths[order]

    @cached_property
    def basis(self) -> Floats:
        """A primitive basis (3, 3) of the shortest vectors, rows in coordinates of the cell.

        In three dimensions the vectors of the successive minima of a lattice are a basis of it
        (Minkowski); which of several equally short ones are taken does not matter here.
        """
        steps, lengths = self.vectors
        products = steps @ metric_tensor(self.cell)
        unit = steps / lengths[:, None]
        first, along = steps[0], products[0] / lengths[0]
        second = int(np.argmax(np.abs(unit @ along) < 1.0 - _FLAT))
        normal = np.cross(first, steps[second])
        normal = normal / np.linalg.norm(normal)
        third = int(np.argmax(np.abs(steps @ normal) > _FLAT))
        return np.array([first, steps[second], steps[third]])

    @cached_property
    def edges_A(self) -> Floats:
        """Lengths (3,) of the vectors of `basis`, rising."""
        return np.sqrt(np.diag(self.basis @ metric_tensor(self.cell) @ self.basis.T))

    @cached_property
    def minima_A(self) -> tuple[float, float, float]:
        """Edges of the Niggli cell, rising: the same for every cell of a lattice.

        Raises ValueError for a cell that spans no lattice.
        """
        letter = _LETTERS.get(_rounded(self.centring))
        if letter is None:
            a, b, c = self.edges_A.tolist()
            return a, b, c
        import gemmi

        reduced = gemmi.GruberVector(gemmi.UnitCell(*self.cell), letter)
        reduced.niggli_reduce()
        a, b, c = sorted(reduced.cell_parameters()[:3])
        if not 0.0 < a <= c < math.inf:
            raise ValueError("a cell that spans no lattice")
        return a, b, c


def _rounded(centring: Floats) -> tuple[tuple[int, ...], ...]:
    """The translations of a centring in 12ths of the edges, in a fixed order."""
    return tuple(sorted(map(tuple, np.rint(12 * centring).astype(int).tolist())))


_LETTERS: dict[tuple[tuple[int, ...], ...], str] = {
    (): "P",
    ((0, 6, 6),): "A",
    ((6, 0, 6),): "B",
    ((6, 6, 0),): "C",
    ((6, 6, 6),): "I",
    ((0, 6, 6), (6, 0, 6), (6, 6, 0)): "F",
    ((4, 8, 8), (8, 4, 4)): "R",
}
"""Letters of the usual centrings (International Tables A, table 2.1.1.2), R in the obverse way."""


def index_maps(one: Lattice, other: Lattice, tolerance: float) -> list[Floats]:
    """Return the matrices (3, 3) that turn hkl of `other` into hkl of `one`, each once up to sign.

    Lengths of the basis vectors agree within the relative `tolerance`, cosines of their angles
    within it. An empty list: the lattices differ.
    """
    if any(
        abs(math.log(x / y)) > tolerance for x, y in zip(one.minima_A, other.minima_A, strict=True)
    ):
        return []
    edges = one.edges_A
    cosines = (one.basis @ metric_tensor(one.cell) @ one.basis.T) / np.outer(edges, edges)
    steps, lengths = other.vectors
    near = [np.flatnonzero(np.abs(np.log(lengths / edge)) <= tolerance) for edge in edges]
    if not all(map(len, near)):
        return []
    kept = np.unique(np.concatenate(near))
    near = [np.searchsorted(kept, which) for which in near]
    steps, lengths = steps[kept], lengths[kept]
    unit = steps / lengths[:, None]
    meeting = unit @ metric_tensor(other.cell) @ unit.T
    inverse = np.linalg.inv(one.basis)
    primitive = 1.0 / (1 + len(other.centring))  # of the cell's volume
    maps = []
    for i in near[0]:
        if tuple(steps[i]) < (0.0, 0.0, 0.0):
            continue  # its opposite gives the same map with the other sign
        seconds = near[1][np.abs(meeting[i, near[1]] - cosines[0, 1]) <= tolerance]
        thirds = near[2][np.abs(meeting[i, near[2]] - cosines[0, 2]) <= tolerance]
        for j in seconds:
            for k in thirds[np.abs(meeting[j, thirds] - cosines[1, 2]) <= tolerance]:
                images = steps[[i, j, k]]
                if abs(abs(np.linalg.det(images)) - primitive) < _FLAT:
                    maps.append(inverse @ images)
    return maps
