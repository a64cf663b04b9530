"""The cell of an accepted phase by weighted least squares on its assigned rings."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.patterns import Floats

Cell = tuple[float, float, float, float, float, float]


@dataclass(frozen=True, slots=True, eq=False)
class RefinedCell:
    """A refined cell (Å, degrees) and its one-sigmas, scale uncertainty included."""

    cell: Cell
    sigma: Cell


def _free_parameters(cell: Cell, space_group_number: int) -> Floats:
    """(6, p) directions of the reciprocal metric 11 22 33 23 13 12 that the system allows."""
    e = np.eye(6)
    n = space_group_number
    alpha, beta, gamma = cell[3:]
    if n >= 195:
        columns = [e[0] + e[1] + e[2]]
    elif n >= 143 and abs(gamma - 120.0) < 0.5 and abs(alpha - 90.0) < 0.5:
        columns = [e[0] + e[1] + 0.5 * e[5], e[2]]
    elif n >= 143:
        columns = [e[0] + e[1] + e[2], e[3] + e[4] + e[5]]
    elif n >= 75:
        columns = [e[0] + e[1], e[2]]
    elif n >= 16:
        columns = [e[0], e[1], e[2]]
    elif n >= 3:
        angles = np.abs(np.array([alpha, beta, gamma]) - 90.0)
        columns = [e[0], e[1], e[2], e[3 + int(np.argmax(angles))]]
    else:
        columns = list(e)
    return np.stack(columns, axis=1)


def _direct_metric(cell: Cell) -> Floats:
    a, b, c = cell[:3]
    ca, cb, cg = np.cos(np.radians(cell[3:]))
    return np.array(
        [
            [a * a, a * b * cg, a * c * cb],
            [a * b * cg, b * b, b * c * ca],
            [a * c * cb, b * c * ca, c * c],
        ]
    )


def _vector(metric: Floats) -> Floats:
    """(11, 22, 33, 23, 13, 12) of a symmetric 3 × 3."""
    return np.array(
        [metric[0, 0], metric[1, 1], metric[2, 2], metric[1, 2], metric[0, 2], metric[0, 1]]
    )


def _cell(reciprocal: Floats) -> Floats:
    """Cell of a reciprocal metric vector."""
    r = reciprocal
    metric = np.linalg.inv(np.array([[r[0], r[5], r[4]], [r[5], r[1], r[3]], [r[4], r[3], r[2]]]))
    lengths = np.sqrt(np.diag(metric))
    cosines = [
        metric[1, 2] / (lengths[1] * lengths[2]),
        metric[0, 2] / (lengths[0] * lengths[2]),
        metric[0, 1] / (lengths[0] * lengths[1]),
    ]
    return np.concatenate([lengths, np.degrees(np.arccos(np.clip(cosines, -1.0, 1.0)))])


def refine_cell(
    cell: Cell,
    space_group_number: int,
    hkl: NDArray[np.int64],
    d_A: Floats,
    relative_sigma: Floats,
    scale_sigma: float,
) -> RefinedCell | None:
    """Refine `cell` from rings of known hkl (n, 3), spacing d_A (n,) already freed from the scale.

    `relative_sigma` (n,) is each ring's own one-sigma, `scale_sigma` that of the common factor.
    1/d² is linear in the reciprocal metric; weights follow from σ(1/d²) = 2σ_d/d³. The statistical
    part grows with the scatter where rings scatter more than stated. None where there are not more
    independent lines than free parameters.
    """
    free = _free_parameters(cell, space_group_number)
    h, k, l = hkl.T.astype(float)  # noqa: E741 (Miller's own letter)
    quadratic = np.stack([h * h, k * k, l * l, 2 * k * l, 2 * h * l, 2 * h * k], axis=1)
    design = quadratic @ free
    target = 1.0 / d_A**2
    weight = 1.0 / (2.0 * relative_sigma * target)
    weighted = design * weight[:, None]
    if (
        len(d_A) <= free.shape[1]
        or np.linalg.matrix_rank(weighted, tol=1e-6 * np.abs(weighted).max()) < free.shape[1]
    ):
        return None
    normal = np.linalg.inv(weighted.T @ weighted)
    values = normal @ (weighted.T @ (target * weight))
    scatter = float((((design @ values - target) * weight) ** 2).sum())
    inflation = max(1.0, scatter / (len(d_A) - free.shape[1]))
    try:
        refined = _cell(free @ values)
        step = 1e-6 * np.abs(values).max()
        jacobian = np.stack(
            [
                (_cell(free @ (values + step * np.eye(len(values))[i])) - refined) / step
                for i in range(len(values))
            ],
            axis=1,
        )
    except np.linalg.LinAlgError:
        return None
    if not np.isfinite(refined).all():
        return None
    variance = np.einsum("ip,pq,iq->i", jacobian, normal * inflation, jacobian)
    variance[:3] += (refined[:3] * scale_sigma) ** 2
    sigma = np.sqrt(np.maximum(variance, 0.0))
    fixed = np.isclose(refined[3:], np.round(cell[3:])) & (sigma[3:] < 1e-6)
    sigma[3:][fixed] = 0.0
    return RefinedCell(_six(refined), _six(sigma))


def scaled_cell(cell: Cell, strain: float, sigma: float) -> RefinedCell:
    """The listed cell with all lengths longer by `strain` ± `sigma` (relative)."""
    lengths = [length * (1.0 + strain) for length in cell[:3]]
    spread = [length * sigma for length in lengths]
    return RefinedCell(
        _six(np.array([*lengths, *cell[3:]])), _six(np.array([*spread, 0.0, 0.0, 0.0]))
    )


def _six(values: Floats) -> Cell:
    a, b, c, alpha, beta, gamma = (float(v) for v in values)
    return a, b, c, alpha, beta, gamma
