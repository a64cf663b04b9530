"""An image summed by radius and azimuth."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.measuring.geometry import Floats, Geometry, Pixels

CHUNK_PIXELS = 1_000_000


@dataclass(frozen=True, slots=True, eq=False)
class PolarSums:
    """Cells (n_r, n_s) of radius bins of `step` px (bin i from i·step) and equal azimuth sectors.

    `number` of usable pixels, `total` of their counts, `square` of the squared counts, `frame` how
    many pixels of the frame fall there, usable or not; `radius_sum` sums the radii of the usable
    ones, `saturated` tells how many of them are at the top of the scale.
    """

    step: float
    number: Floats
    total: Floats
    square: Floats
    frame: Floats
    radius_sum: Floats
    saturated: Floats

    @property
    def radius(self) -> Floats:
        """Mean radius (px) of each bin's usable pixels (n_r,), the middle where there are none."""
        middle = (np.arange(len(self.number)) + 0.5) * self.step
        number = self.number.sum(axis=1)
        return np.where(number > 0, self.radius_sum.sum(axis=1) / np.maximum(number, 1), middle)


def polar_sums(
    image: Pixels,
    usable: NDArray[np.bool_],
    geometry: Geometry,
    *,
    step: float,
    sectors: int,
    saturated: NDArray[np.bool_] | None = None,
) -> PolarSums:
    """Sum the pixels by radius after the ellipse is made a circle, and by azimuth."""
    n_r = int(geometry.reach(image.shape) / step) + 2
    size = n_r * sectors
    sums = np.zeros((6, size))
    columns = np.arange(image.shape[1], dtype=np.float32)
    rows_at_once = max(1, CHUNK_PIXELS // image.shape[1])
    for start in range(0, image.shape[0], rows_at_once):
        part = slice(start, min(start + rows_at_once, image.shape[0]))
        rows = np.arange(part.start, part.stop, dtype=np.float32)[:, None]
        u, v = geometry.straighten(columns, rows)
        r = np.hypot(u, v)
        turn = np.arctan2(v, u) * np.float32(sectors / (2 * np.pi)) + np.float32(sectors)
        cell = (r * np.float32(1 / step)).astype(np.int32) * sectors
        cell += turn.astype(np.int32) % sectors
        cell = cell.ravel()
        sums[3] += np.bincount(cell, minlength=size)
        ok = usable[part].ravel()
        cell, values = cell[ok], image[part].ravel()[ok].astype(np.float64)
        sums[0] += np.bincount(cell, minlength=size)
        sums[1] += np.bincount(cell, values, minlength=size)
        sums[2] += np.bincount(cell, values * values, minlength=size)
        sums[4] += np.bincount(cell, r.ravel()[ok], minlength=size)
        if saturated is not None:
            sums[5] += np.bincount(cell[saturated[part].ravel()[ok]], minlength=size)
    number, total, square, frame, radius, top = sums.reshape(6, n_r, sectors)
    return PolarSums(step, number, total, square, frame, radius, top)
