"""Where the rings' centre lies and how far they are from circles."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Pixels = NDArray[np.float32]


@dataclass(frozen=True, slots=True, eq=False)
class Geometry:
    """Centre (px, pixel centres at whole numbers, x along columns, y along rows) and ellipse.

    A circle appears stretched by exp(e) along `angle_deg` (from x towards y) and shrunk by the same
    across it; stretch_c = e cos 2φ, stretch_s = e sin 2φ. `covariance` (4, 4) is that of x, y,
    stretch_c, stretch_s; rows of zeros where something was held.
    """

    x: float
    y: float
    stretch_c: float = 0.0
    stretch_s: float = 0.0
    covariance: Floats = field(default_factory=lambda: np.zeros((4, 4)))

    @property
    def stretch(self) -> float:
        """Half the logarithm of the ratio of the axes."""
        return float(np.hypot(self.stretch_c, self.stretch_s))

    @property
    def ratio(self) -> float:
        """Long axis over short axis."""
        return float(np.exp(2.0 * self.stretch))

    @property
    def angle_deg(self) -> float:
        """Direction of the long axis from x towards y, 0 to 180 degrees."""
        return float(np.degrees(0.5 * np.arctan2(self.stretch_s, self.stretch_c)) % 180.0)

    @property
    def ellipse_known(self) -> bool:
        """Whether the ellipse was measured."""
        return bool(self.covariance[2, 2] > 0)

    @property
    def stretch_sigma(self) -> float:
        """One-sigma of the stretch along its own direction."""
        if self.stretch == 0:
            along = np.array([0.0, 0.0, 1.0, 0.0])
        else:
            along = np.array([0.0, 0.0, self.stretch_c, self.stretch_s]) / self.stretch
        return float(np.sqrt(max(float(along @ self.covariance @ along), 0.0)))

    @property
    def ratio_sigma(self) -> float:
        """One-sigma of the ratio of the axes."""
        return 2.0 * self.ratio * self.stretch_sigma

    @property
    def angle_sigma_deg(self) -> float:
        """One-sigma of the direction of the long axis, 90 at most."""
        if self.stretch == 0:
            return 90.0
        across = np.array([0.0, 0.0, -self.stretch_s, self.stretch_c]) / self.stretch
        spread = float(np.sqrt(max(float(across @ self.covariance @ across), 0.0)))
        return min(90.0, float(np.degrees(0.5 * spread / self.stretch)))

    def straighten(self, x: Pixels, y: Pixels) -> tuple[Pixels, Pixels]:
        """Offsets (u, v) from the centre after the ellipse is made a circle; any shape."""
        dx, dy = x - np.float32(self.x), y - np.float32(self.y)
        e = self.stretch
        if e == 0:
            return dx, dy
        ch, sh = np.cosh(e), np.sinh(e) / e
        c, s = self.stretch_c, self.stretch_s
        u = np.float32(ch - sh * c) * dx - np.float32(sh * s) * dy
        v = np.float32(ch + sh * c) * dy - np.float32(sh * s) * dx
        return u, v

    def bend(self, u: Pixels, v: Pixels) -> tuple[Pixels, Pixels]:
        """The inverse of `straighten`: offsets (dx, dy) from the centre as the image has them."""
        return Geometry(0.0, 0.0, -self.stretch_c, -self.stretch_s).straighten(u, v)

    def scaled(self, factor: float, offset: float) -> Geometry:
        """The same in pixels of another size: position × factor + offset."""
        return Geometry(
            self.x * factor + offset, self.y * factor + offset, self.stretch_c, self.stretch_s
        )

    def reach(self, shape: tuple[int, ...]) -> float:
        """Largest radius (px) that the frame still shows."""
        corners_x = np.array([0, shape[1] - 1, 0, shape[1] - 1], dtype=np.float32)
        corners_y = np.array([0, 0, shape[0] - 1, shape[0] - 1], dtype=np.float32)
        return float(np.hypot(*self.straighten(corners_x, corners_y)).max())
