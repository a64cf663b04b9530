"""The measured image as a small square picture about its centre, for showing beside an answer."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.measuring.centre import shrink
from phaseid.rings.measuring.geometry import Floats, Geometry, Pixels
from phaseid.rings.measuring.hull import convex_below

SIDE = 801
GAMMA = 0.6  # of the stretch: weak rings stay visible beside strong ones
WHITE_PERCENTILE = 99.5


@dataclass(frozen=True, slots=True, eq=False)
class Disc:
    """A plate seen about its centre, its ellipse made a circle.

    `grey` (n, n) uint8, rows and columns in the directions of the image's; the centre of the rings
    is the middle of the picture, index (n - 1) / 2 both ways. `seen` (n, n) says which pixels
    lie in the image's frame; the others are 0. `px_per_pixel` is the size of one pixel of the
    picture in pixels of the image, after the ellipse is corrected.
    """

    grey: NDArray[np.uint8]
    seen: NDArray[np.bool_]
    px_per_pixel: float

    @property
    def centre(self) -> float:
        """Row and column of the rings' centre."""
        return (len(self.grey) - 1) / 2.0

    @property
    def reach_px(self) -> float:
        """Radius of the largest circle in the picture, in px of the image."""
        return self.centre * self.px_per_pixel

    def per_A_per_pixel(self, camera_constant_A_px: float) -> float:
        """Size of one pixel of the picture in g = 1/d (Å⁻¹), by the constant radius × d (Å px)."""
        return self.px_per_pixel / camera_constant_A_px


def straightened(
    image: Pixels,
    geometry: Geometry,
    radius: Floats,
    background: Floats,
    *,
    reach_px: float,
    side: int = SIDE,
) -> Disc:
    """Counts (h, w) resampled about the centre out to `reach_px`, at most `side` pixels square.

    `radius`, `background` (n,) are the fitted background of the azimuthal mean. The tail of the
    beam, its convex part, is taken off so that outer rings show; halos stay. What is left is
    stretched from no excess, black, to that of the brightest rings, white.
    """
    from scipy.ndimage import map_coordinates

    half = max(8, int(min(np.ceil(reach_px), (side - 1) // 2)))
    px_per_pixel = float(reach_px) / half
    factor = max(1, int(px_per_pixel))
    small: NDArray[np.floating] = image
    if factor > 1:
        small, _ = shrink(image, np.ones(image.shape, dtype=np.bool_), factor)
    steps = np.arange(-half, half + 1, dtype=np.float32) * np.float32(px_per_pixel)
    u, v = np.meshgrid(steps, steps)
    dx, dy = geometry.bend(u, v)
    x = (dx + np.float32(geometry.x) - np.float32((factor - 1) / 2)) / np.float32(factor)
    y = (dy + np.float32(geometry.y) - np.float32((factor - 1) / 2)) / np.float32(factor)
    rows, columns = small.shape
    seen = (x > -0.5) & (x < columns - 0.5) & (y > -0.5) & (y < rows - 0.5)
    counts = map_coordinates(
        small.astype(np.float32, copy=False), [y, x], order=1, mode="nearest", prefilter=False
    )
    tail = convex_below(radius, background)
    r = np.hypot(u, v)
    excess = np.where(seen, counts - np.interp(r, radius, tail), 0.0)
    measured = seen & (r >= radius[0]) & (r <= radius[-1])
    white = float(np.percentile(excess[measured], WHITE_PERCENTILE)) if measured.any() else 1.0
    level = np.clip(excess / max(white, 1e-9), 0.0, 1.0) ** GAMMA
    return Disc(np.asarray(np.rint(255.0 * level), dtype=np.uint8), seen, px_per_pixel)
