"""The metric of a cell: volume and metric tensor."""

from __future__ import annotations

import math

import numpy as np
from numpy.typing import NDArray

Cell = tuple[float, float, float, float, float, float]


def volume_A3(cell: Cell) -> float:
    """Return the volume in Å³ of a cell in Å and degrees; 0 where the three angles cannot meet."""
    a, b, c, alpha, beta, gamma = cell
    ca, cb, cg = (math.cos(math.radians(x)) for x in (alpha, beta, gamma))
    return a * b * c * math.sqrt(max(0.0, 1 - ca * ca - cb * cb - cg * cg + 2 * ca * cb * cg))


def metric_tensor(cell: Cell) -> NDArray[np.float64]:
    """Return the metric tensor (3, 3) in Å² of a cell in Å and degrees."""
    a, b, c, alpha, beta, gamma = cell
    bc, ac, ab = (
        x * y * math.cos(math.radians(angle))
        for x, y, angle in ((b, c, alpha), (a, c, beta), (a, b, gamma))
    )
    return np.array([[a * a, ab, ac], [ab, b * b, bc], [ac, bc, c * c]])
