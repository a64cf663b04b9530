"""The centre and the ellipse by least squares: every pixel on a flank of a ring tells a shift.

With I(x) = P(r), P the azimuthal mean at the present geometry, a shift of a parameter changes a
pixel by P'(r) ∂r/∂parameter. Weighted least squares over all pixels, taken relative to the mean of
each radius bin since P itself is estimated, gives the shifts; repeated until they vanish.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.measuring.geometry import Floats, Geometry, Pixels

MAX_PIXELS = 1_500_000
MAX_STEPS = 12
CLIP = 4.0
STRETCH_SIGMA_MAX = 0.004  # beyond this one-sigma an ellipse is not determined
_SECTORS = 48
_BLOCK_PX = 12.0


def refine_geometry(
    image: Pixels, usable: NDArray[np.bool_], start: Geometry, *, r_min: float
) -> Geometry:
    """Refined geometry with covariance, from residuals summed over patches along the rings.

    The ellipse is held at a circle where the image does not determine it.
    """
    stride = max(1, int(np.ceil(np.sqrt(image.size / MAX_PIXELS))))
    rows, columns = (stride * index for index in np.nonzero(usable[::stride, ::stride]))
    values = image[rows, columns].astype(np.float64)
    x, y = columns.astype(np.float32), rows.astype(np.float32)
    geometry = _iterate(x, y, values, start, r_min, 4)
    if not geometry.covariance[2, 2] or geometry.stretch_sigma > STRETCH_SIGMA_MAX:
        circle = Geometry(geometry.x, geometry.y)
        geometry = _iterate(x, y, values, circle, r_min, 2)
    return geometry


def _iterate(
    x: Pixels, y: Pixels, values: Floats, start: Geometry, r_min: float, free: int
) -> Geometry:
    p = np.array([start.x, start.y, start.stretch_c, start.stretch_s])
    smoothing = 1.5
    last = np.inf
    covariance = np.zeros((4, 4))
    for _ in range(MAX_STEPS):
        shift, part = _shift(x, y, values, Geometry(*p), r_min, free, smoothing)
        covariance[:free, :free] = part
        limit = np.array([3.0, 3.0, 0.02, 0.02])[:free]
        shift = np.clip(shift, -limit, limit)
        p[:free] += shift
        size = float(np.hypot(shift[0], shift[1]))
        smoothing = 1.0
        if size < 2e-3 or (size > 0.9 * last and size < 0.02):
            break
        last = size
    x_c, y_c, stretch_c, stretch_s = (float(v) for v in p)
    return Geometry(x_c, y_c, stretch_c, stretch_s, covariance)


def _shift(
    x: Pixels,
    y: Pixels,
    values: Floats,
    geometry: Geometry,
    r_min: float,
    free: int,
    smoothing: float,
) -> tuple[Floats, Floats]:
    """Shifts (free,) of the parameters and their covariance (free, free)."""
    from scipy.ndimage import gaussian_filter1d

    u, v = geometry.straighten(x, y)
    r = np.hypot(u, v).astype(np.float64)
    inside = r >= r_min
    u, v, r, counts = u[inside], v[inside], r[inside], values[inside]
    bins = r.astype(np.intp)
    n = int(bins.max()) + 1
    number = np.maximum(np.bincount(bins, minlength=n), 1)
    mean = np.bincount(bins, counts, n) / number
    middle = np.bincount(bins, r, n) / number
    filled = np.flatnonzero(np.bincount(bins, minlength=n) > 3)
    profile = np.interp(np.arange(n), filled, mean[filled])
    middle = np.where(np.bincount(bins, minlength=n) > 3, middle, np.arange(n) + 0.5)
    slope = gaussian_filter1d(profile, smoothing, order=1, mode="nearest")
    rest = counts - np.interp(r, middle, profile)
    var = np.bincount(bins, rest * rest, n) / number
    for _ in range(2):
        bound = CLIP * np.sqrt(var[bins])
        rest = np.clip(rest, -bound, bound)
        var = np.bincount(bins, rest * rest, n) / number
    var = gaussian_filter1d(var, 1.0, mode="nearest") + 1e-12 * float(var.max()) + 1e-30
    weight = np.where(number > 8, 1.0 / var, 0.0)[bins]
    steep = slope[bins]
    c, s = u / r, v / r
    columns = [-c * steep, -s * steep]
    if free == 4:
        columns += [-r * (c * c - s * s) * steep, -2.0 * r * c * s * steep]
    total = np.maximum(np.bincount(bins, weight, n), 1e-300)
    design = np.stack([k - (np.bincount(bins, k * weight, n) / total)[bins] for k in columns])
    normal = (design * weight) @ design.T
    scale = np.sqrt(np.maximum(np.diag(normal), 1e-300))
    inverse = np.linalg.pinv(normal / np.outer(scale, scale), rcond=1e-10) / np.outer(scale, scale)
    pulled = design * (weight * rest)
    shift = inverse @ pulled.sum(axis=1)
    turn = np.arctan2(s, c) * (_SECTORS / (2 * np.pi)) + _SECTORS
    patch = (r / _BLOCK_PX).astype(np.intp) * _SECTORS + turn.astype(np.intp) % _SECTORS
    scores = np.stack([np.bincount(patch, row) for row in pulled])
    spread = inverse @ (scores @ scores.T) @ inverse
    return np.asarray(shift), np.asarray(np.maximum(spread, 0) if free == 1 else spread)
