"""The metric of a cell: volume and metric tensor."""

from __future__ import annotations

import math
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

Cell = tuple[float, float, float, float, float, float]
_ONES = np.ones(3)


@lru_cache(maxsize=64)
def volume_A3(cell: Cell) -> float:
    """Return the volume in Å³ of a cell in Å and degrees; 0 where the three angles cannot meet."""
    a, b, c, alpha, beta, gamma = cell
    ca, cb, cg = _cosine(alpha), _cosine(beta), _cosine(gamma)
    return a * b * c * math.sqrt(max(0.0, 1 - ca * ca - cb * cb - cg * cg + 2 * ca * cb * cg))


@lru_cache(maxsize=64)
def metric_tensor(cell: Cell) -> NDArray[np.float64]:
    """Return the metric tensor (3, 3) in Å² of a cell in Å and degrees; it cannot be written to."""
    a, b, c, alpha, beta, gamma = cell
    bc, ac, ab = b * c * _cosine(alpha), a * c * _cosine(beta), a * b * _cosine(gamma)
    return _kept(np.array([[a * a, ab, ac], [ab, b * b, bc], [ac, bc, c * c]]))


@lru_cache(maxsize=64)
def inverse_metric(cell: Cell) -> NDArray[np.float64]:
    """Return the reciprocal metric tensor (3, 3) in Å⁻² of a cell that has a volume.

    It cannot be written to. Raises ZeroDivisionError for a cell without volume.
    """
    (aa, ab, ac), (_, bb, bc), (_, _, cc) = metric_tensor(cell).tolist()
    xx, yy, zz = bb * cc - bc * bc, aa * cc - ac * ac, aa * bb - ab * ab
    xy, xz, yz = ac * bc - ab * cc, ab * bc - ac * bb, ab * ac - aa * bc
    v2 = aa * xx + ab * xy + ac * xz
    rows = ((xx, xy, xz), (xy, yy, yz), (xz, yz, zz))
    return _kept(np.array([[x / v2 for x in row] for row in rows]))


def squares(rows: NDArray[np.float64], tensor: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return x·G·x (n,) of each row x (n, 3) for a metric tensor G (3, 3)."""
    products = rows @ tensor
    products *= rows
    return np.asarray(products @ _ONES)  # three times as fast as summing rows of three


def _cosine(angle_deg: float) -> float:
    return math.cos(math.radians(angle_deg))


def _kept(tensor: NDArray[np.float64]) -> NDArray[np.float64]:
    tensor.flags.writeable = False
    return tensor
