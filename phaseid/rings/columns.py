"""The position columns of a ring list and what each means in Å."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from phaseid import units

Quantity = Literal["d", "g", "q", "two_theta", "radius"]
Floats = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Column:
    """One way to state a position.

    `unit` is its unit in words; values times `factor` are in Å, 1/Å, degrees, or in the length unit
    of the camera constant (`plate_unit`, "mm" or "px").
    """

    name: str
    quantity: Quantity
    unit: str
    factor: float = 1.0
    plate_unit: str = ""

    def d_A(self, position: Floats, wavelength_A: float, camera_constant: float) -> Floats:
        """Spacing (Å) of positions (m,); the camera constant is in Å times `plate_unit`."""
        value = position * self.factor
        if self.quantity == "d":
            return value
        if self.quantity == "g":
            return units.d_from_g(value)
        if self.quantity == "q":
            return units.d_from_q(value)
        if self.quantity == "two_theta":
            return units.d_from_two_theta(value, wavelength_A)
        return units.d_from_radius(value, camera_constant)

    def slope_A(self, position: Floats, d_A: Floats, wavelength_A: float) -> Floats:
        """|∂d/∂position| (m,) in Å per unit of the column, never below 1e-9 d.

        For an angle it vanishes at 2θ = 180°; the floor keeps a sigma there above zero.
        """
        if self.quantity == "d":
            return np.full_like(d_A, self.factor)
        if self.quantity == "two_theta":
            return np.maximum(units.two_theta_slope_A(d_A, wavelength_A), 1e-9 * d_A)
        return d_A / position


COLUMNS: dict[str, Column] = {
    column.name: column
    for column in (
        Column("d_A", "d", "Å"),
        Column("d_nm", "d", "nm", units.A_PER_NM),
        Column("g_1/nm", "g", "1/nm", units.per_A_from_per_nm(1.0)),
        Column("g_1/A", "g", "1/Å"),
        Column("q_1/A", "q", "1/Å"),
        Column("q_1/nm", "q", "1/nm", units.per_A_from_per_nm(1.0)),
        Column("two_theta_deg", "two_theta", "degrees"),
        Column("radius_mm", "radius", "mm", plate_unit="mm"),
        Column("diameter_mm", "radius", "mm", 0.5, plate_unit="mm"),
        Column("radius_px", "radius", "px", plate_unit="px"),
    )
}
