"""Half of the image that was measured, laid where its rings belong."""

from __future__ import annotations

from typing import Literal

import numpy as np
from numpy.typing import NDArray

from phaseid.reports.picture import Shade
from phaseid.rings.ringlist import RingList

MOST_COLUMNS = 300
"""Columns of a half, at most: enough for its size on paper, little enough for a page to carry."""
LEVELS = 16


def half_plate(
    rings: RingList,
    factor: float,
    side: Literal["left", "right"],
    *,
    units_per_g: float,
    centre: tuple[float, float],
    radius: float,
) -> Shade | None:
    """The left or right half of the measured image, None for a list that comes from no image.

    `factor` is the fitted scale, measured d / true d. `units_per_g` are picture units per 1/d
    (1/Å, true); radii on the image are taken to be proportional to 1/d, by the rings' own spacings.
    Nothing is shown beyond `radius` units about `centre`.
    """
    disc = rings.disc
    if disc is None:
        return None
    constant = float(np.median(rings.position * rings.d_A))  # Å px, whatever calibration was used
    unit = disc.px_per_pixel / constant * factor * units_per_g
    reach = len(disc.grey) / 2 * unit
    x, y = centre
    return Shade(
        ink=half_ink(disc.grey, side),
        x=x - reach if side == "left" else x,
        y=y - reach,
        width=reach,
        height=2 * reach,
        centre_x=x,
        centre_y=y,
        radius=min(radius, disc.centre * unit),
    )


def half_ink(grey: NDArray[np.uint8], side: Literal["left", "right"]) -> NDArray[np.uint8]:
    """One half (2w, w) of a square picture (n, n), in few levels: grain is not worth its bytes."""
    size = len(grey)
    columns = min(MOST_COLUMNS, size // 2)
    box = (0, 0, size / 2, size) if side == "left" else (size / 2, 0, size, size)
    return _ink(grey, (columns, 2 * columns), box)


def whole_ink(grey: NDArray[np.uint8]) -> NDArray[np.uint8]:
    """All of a square picture, as `half_ink`."""
    size = len(grey)
    columns = min(2 * MOST_COLUMNS, size)
    return _ink(grey, (columns, columns), (0, 0, size, size))


def _ink(
    grey: NDArray[np.uint8], size: tuple[int, int], box: tuple[float, float, float, float]
) -> NDArray[np.uint8]:
    from PIL import Image

    part = Image.fromarray(grey).resize(size, Image.Resampling.BOX, box=box)
    step = 255 / (LEVELS - 1)
    levels = np.rint(np.asarray(part, dtype=np.float64) / step) * step
    return levels.astype(np.uint8)
