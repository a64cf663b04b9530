"""Pixels that show no diffraction: dead, hot and saturated ones, the shadow of a beam stop."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.measuring.geometry import Floats, Geometry, Pixels
from phaseid.rings.measuring.polar import polar_sums

Mask = NDArray[np.bool_]

SHADOW = 0.7  # of the background around the circle, below which a patch is in shadow
_EDGE_PX = 3


def gain(image: Pixels, usable: Mask) -> float:
    """Variance of a pixel per count, from neighbours on a sample of rows."""
    rows = image[:: max(1, image.shape[0] // 200)]
    ok = usable[:: max(1, image.shape[0] // 200)]
    left, right = rows[:, :-1], rows[:, 1:]
    total = left + right
    keep = ok[:, :-1] & ok[:, 1:] & (total > 0)
    if keep.sum() < 100:
        return 1.0
    ratio = (left - right)[keep] ** 2 / total[keep]
    return max(float(np.mean(np.minimum(ratio, 9.0 * np.median(ratio) + 1e-9))), 1e-9)


def lone_pixels(image: Pixels, usable: Mask) -> Mask:
    """Pixels (h, w) far above or below three of their four neighbours at least: hot or dead."""
    per_count = np.float32(gain(image, usable))
    found = np.zeros(image.shape, dtype=np.bool_)
    rows = max(64, 500_000 // image.shape[1])
    for start in range(0, image.shape[0], rows):  # in strips that stay in the cache
        stop = min(start + rows, image.shape[0])
        above, below = max(start - 1, 0), min(stop + 1, image.shape[0])
        rim = ((int(start == 0), int(stop == image.shape[0])), (1, 1))
        found[start:stop] = _lone(np.pad(image[above:below], rim, mode="reflect"), per_count)
    return found


def _lone(image: Pixels, per_count: np.float32) -> Mask:
    """The same for the inner pixels (h - 2, w - 2)."""
    up, down, left, right = image[:-2, 1:-1], image[2:, 1:-1], image[1:-1, :-2], image[1:-1, 2:]
    high_a, low_a = np.maximum(up, down), np.minimum(up, down)
    high_b, low_b = np.maximum(left, right), np.minimum(left, right)
    high = np.maximum(np.minimum(high_a, high_b), np.maximum(low_a, low_b))  # second highest
    low = np.minimum(np.maximum(low_a, low_b), np.minimum(high_a, high_b))  # second lowest
    inner = image[1:-1, 1:-1]
    noise = np.sqrt(per_count * np.maximum(high, 1.0))
    return np.asarray((inner > 1.8 * high + 6.0 * noise) | (inner < 0.4 * low - 4.0 * noise))


def saturated_pixels(image: Pixels, usable: Mask) -> Mask:
    """Pixels (h, w) at the largest value, where more pile up there than just below."""
    high = float(image[usable].max())
    at_top = (image >= high) & usable
    number = int(at_top.sum())
    if number < 8 or number > 0.5 * image.size:
        return np.zeros(image.shape, dtype=np.bool_)
    below = int(((image >= high * 0.97) & ~at_top & usable).sum())
    levels = max(1.0, 0.03 * high)
    if number < 4.0 * below / levels + 8:
        return np.zeros(image.shape, dtype=np.bool_)
    return at_top


def blots(saturated: Mask) -> Mask:
    """Saturated areas (h, w) broader than rings are, with a rim: the beam and what it spills."""
    from scipy.ndimage import maximum_filter, minimum_filter

    size = max(7, max(saturated.shape) // 48) | 1
    core = minimum_filter(saturated, size)
    return np.asarray(maximum_filter(core, size + 2 * _EDGE_PX))


def shadow(image: Pixels, usable: Mask, geometry: Geometry) -> Mask:
    """Pixels (h, w) in the shadow of a beam stop: a patch darker than the background anywhere near.

    A gap in a textured ring shows the background and stays; a shadow is darker than that.
    """
    from scipy.ndimage import binary_dilation, label, uniform_filter

    background = _background(image, usable, geometry)
    sample = float(np.median(background)) / max(gain(image, usable), 1e-9)
    size = int(np.clip(np.ceil(np.sqrt(60.0 / max(sample, 1e-3))), 3, 15)) | 1
    smooth = uniform_filter(np.where(usable, image, 0), size)
    dark = np.zeros(image.shape, dtype=np.bool_)
    columns = np.arange(image.shape[1], dtype=np.float32)
    chunk = max(1, 2_000_000 // image.shape[1])
    for start in range(0, image.shape[0], chunk):
        part = slice(start, min(start + chunk, image.shape[0]))
        rows = np.arange(part.start, part.stop, dtype=np.float32)[:, None]
        r = np.hypot(*geometry.straighten(columns, rows)).astype(np.intp)
        dark[part] = smooth[part] < SHADOW * background[np.minimum(r, len(background) - 1)]
    groups, number = label(dark)
    if number == 0:
        return dark
    sizes = np.bincount(groups.ravel())
    large = sizes >= max(30, 2 * size * size)
    large[0] = False
    dark = large[groups]
    return np.asarray(binary_dilation(dark, iterations=_EDGE_PX + size // 2))


def _background(image: Pixels, usable: Mask, geometry: Geometry) -> Floats:
    """Background by radius (px): low envelope, not rising inwards of its own outer part."""
    from scipy.ndimage import percentile_filter

    sums = polar_sums(image, usable, geometry, step=1.0, sectors=36)
    with np.errstate(invalid="ignore", divide="ignore"):
        cells = np.where(sums.number >= 2, sums.total / sums.number, np.nan)
    filled = np.isfinite(cells).any(axis=1)
    level = np.zeros(len(cells))
    level[filled] = np.nanmedian(cells[filled], axis=1)
    level = np.interp(np.arange(len(cells)), np.flatnonzero(filled), level[filled])
    low = percentile_filter(level, 10, size=51)
    # a stop over the whole centre: what lies further out is a bound from below
    outer = np.maximum.accumulate(low[::-1])[::-1]
    return np.asarray(np.maximum(low, 0.6 * outer))
