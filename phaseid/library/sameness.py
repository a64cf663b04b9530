"""Whether two entries are determinations of one and the same phase.

Composition, kind of space group and density come first, then the lattices, then what the atoms do:
the lines of the one are laid on the cell of the other by their hkl, so that the cells may differ a
little, and their intensities are compared. That holds whatever the axes, the origin and the size of
the cell each source has chosen.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.metric import Cell, inverse_metric, squares
from phaseid.library.determinations import StoredEntry, StrongLines
from phaseid.library.lattice_maps import index_maps

Floats = NDArray[np.float64]

MEASURED_CELL = 0.01
"""Relative difference of cell edges up to which two measurements are of one phase."""
COMPUTED_CELL = 0.032
"""The same between a computed cell and a measured one: density functionals miss by 1 to 3 %."""
COMPOSITION = 0.002
"""Difference of atomic fractions up to which compositions are equal: rounding of occupancies."""
# Cosine of sqrt(m|F|²)d for X-rays, electrons, neutrons. Determinations of one phase in open data
# have 0.91 and more (neutrons less where light atoms are hard to see), frameworks that share only
# their cell 0.85 and less.
_ALIKE = (0.90, 0.90, 0.84)
# Two computed structures have no errors of measurement: stackings and orderings differ in little.
_ALIKE_COMPUTED = (0.98, 0.98, 0.98)
_COINCIDENT = 1e-4


def same_phase(one: StoredEntry, other: StoredEntry) -> bool:
    """Whether two entries of the same elements are of one phase; `one` is the better.

    The structures shipped with phaseid were chosen as different phases: sanidine and orthoclase
    differ in the order of Al and Si alone.
    """
    tolerance = COMPUTED_CELL if one.computed != other.computed else MEASURED_CELL
    if (
        one.group != other.group
        or (one.shipped and other.shipped)
        or abs(one.ln_density - other.ln_density) > 3 * tolerance
        or not _composed_alike(one.fractions, other.fractions)
    ):
        return False
    wanted = _ALIKE_COMPUTED if one.computed and other.computed else _ALIKE
    told_alike = one.setting == other.setting and _cells_agree(one.cell, other.cell, tolerance)
    if told_alike and _alike(one.cell, one.strong, other.strong, np.eye(3), wanted):
        return True
    maps = _distinct(index_maps(one.lattice, other.lattice, tolerance), one.cell)
    return any(_alike(one.cell, one.strong, other.strong, matrix, wanted) for matrix in maps)


def _composed_alike(one: tuple[float, ...], other: tuple[float, ...]) -> bool:
    """Whether atomic fractions agree; an element of which there is nothing has none."""
    return len(one) == len(other) and all(
        abs(x - y) <= COMPOSITION for x, y in zip(one, other, strict=True)
    )


def _cells_agree(one: Cell, other: Cell, tolerance: float) -> bool:
    edges = all(abs(a / b - 1.0) <= tolerance for a, b in zip(one[:3], other[:3], strict=True))
    cosines = np.cos(np.radians(one[3:])) - np.cos(np.radians(other[3:]))
    return edges and float(np.abs(cosines).max()) <= tolerance


def _distinct(maps: list[Floats], cell: Cell) -> list[Floats]:
    """Of maps that lay the lines alike keep one: a lattice's own symmetry gives several."""
    found: dict[bytes, Floats] = {}
    for matrix in maps:
        metric = matrix.T @ inverse_metric(cell) @ matrix
        found.setdefault((np.round(metric, 7) + 0.0).tobytes(), matrix)
    return list(found.values())


def _alike(
    cell: Cell, one: StrongLines, other: StrongLines, matrix: Floats, wanted: tuple[float, ...]
) -> bool:
    """Whether the lines of `other`, hkl turned by `matrix` and laid on `cell`, are those of `one`.

    `wanted` is the cosine between them that each probe has to reach.
    """
    laid = 1.0 / np.sqrt(squares(other.hkl @ matrix.T, inverse_metric(cell)))
    d_A = np.concatenate([one.d_A, laid])
    shown = np.concatenate([one.shown, other.shown], axis=1)
    first = np.arange(len(d_A)) < len(one.d_A)
    finest = max(one.complete_to_A, other.complete_to_A) * (1.0 + COMPUTED_CELL)
    order = np.argsort(-d_A, kind="stable")
    order = order[d_A[order] >= finest]
    if len(order) == 0:
        return False
    steps = np.diff(np.log(d_A[order])) < -_COINCIDENT
    line = np.concatenate([[0], np.cumsum(steps)])
    for probe, least in enumerate(wanted):
        p = np.bincount(line, np.where(first, shown[probe], 0.0)[order])
        q = np.bincount(line, np.where(first, 0.0, shown[probe])[order])
        size = float(np.sqrt(p.sum() * q.sum()))
        if size <= 0.0 or float(np.sqrt(p * q).sum()) < least * size:
            return False
    return True
