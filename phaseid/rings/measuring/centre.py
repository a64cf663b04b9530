"""First guess of the centre, from where gradients point and from how sharp the rings get."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.measuring.geometry import Floats, Geometry, Pixels

GUESS_SIZE = 256
_SEED = 20


def shrink(image: Pixels, usable: NDArray[np.bool_], factor: int) -> tuple[Floats, Floats]:
    """Block means (h, w) of the usable pixels and the share of each block that is usable."""
    h, w = (image.shape[0] // factor) * factor, (image.shape[1] // factor) * factor
    blocks = (h // factor, factor, w // factor, factor)
    share = usable[:h, :w].reshape(blocks).mean(axis=(1, 3), dtype=np.float64)
    total = np.where(usable[:h, :w], image[:h, :w], 0).reshape(blocks)
    mean = total.mean(axis=(1, 3), dtype=np.float64) / np.maximum(share, 1e-9)
    return np.where(share > 0, mean, 0.0), share


def guess_geometry(image: Pixels, usable: NDArray[np.bool_]) -> Geometry:
    """Centre to about a pixel and ellipse to about a per cent; works off the frame, too."""
    factor = max(1, int(np.ceil(max(image.shape) / GUESS_SIZE)))
    small, share = shrink(image, usable, factor)
    weight = (share > 0.5).astype(np.float64)
    level = np.sqrt(np.maximum(small - np.percentile(small[weight > 0], 0.1), 0.0))
    starts = [_by_gradients(level, weight), ((small.shape[1] - 1) / 2, (small.shape[0] - 1) / 2)]
    found = _sharpest(level, weight, starts)
    return found.scaled(factor, (factor - 1) / 2)


def _smooth(values: Floats, weight: Floats, sigma: float) -> Floats:
    from scipy.ndimage import gaussian_filter

    amount = gaussian_filter(weight, sigma)
    return np.asarray(gaussian_filter(values * weight, sigma) / np.maximum(amount, 1e-3))


def _by_gradients(level: Floats, weight: Floats) -> tuple[float, float]:
    """The point that most lines along the gradient pass."""
    from scipy.ndimage import gaussian_filter, minimum_filter

    smooth = _smooth(level, weight, 1.5)
    slopes: list[Floats] = list(np.gradient(smooth))
    gy, gx = slopes
    strength = np.hypot(gx, gy) * minimum_filter(weight, 5)
    strength[:3], strength[-3:], strength[:, :3], strength[:, -3:] = 0, 0, 0, 0
    rows, columns = np.nonzero(strength > np.percentile(strength, 75))
    if len(rows) < 20:
        return (level.shape[1] - 1) / 2, (level.shape[0] - 1) / 2
    nx, ny = (g[rows, columns] / strength[rows, columns] for g in (gx, gy))
    rng = np.random.default_rng(_SEED)
    i, j = rng.integers(0, len(rows), (2, 40000))
    cross = nx[i] * ny[j] - ny[i] * nx[j]
    ok = np.abs(cross) > 0.3
    i, j, cross = i[ok], j[ok], cross[ok]
    t = ((columns[j] - columns[i]) * ny[j] - (rows[j] - rows[i]) * nx[j]) / cross
    px, py = columns[i] + t * nx[i], rows[i] + t * ny[i]
    h, w = level.shape
    votes, ex, ey = np.histogram2d(
        px, py, bins=(2 * w // 2, 2 * h // 2), range=((-w / 2, 1.5 * w), (-h / 2, 1.5 * h))
    )
    votes = gaussian_filter(votes, 1.5)
    a, b = np.unravel_index(votes.argmax(), votes.shape)
    x, y = (ex[a] + ex[a + 1]) / 2, (ey[b] + ey[b + 1]) / 2
    for _ in range(15):
        off = (columns - x) * ny - (rows - y) * nx
        w8 = 1.0 / (1.0 + (off / 2.0) ** 2) ** 2
        matrix = np.array(
            [[(w8 * ny * ny).sum(), -(w8 * nx * ny).sum()], [0, (w8 * nx * nx).sum()]]
        )
        matrix[1, 0] = matrix[0, 1]
        right = np.array([(w8 * off * ny).sum(), -(w8 * off * nx).sum()])
        step = np.linalg.lstsq(matrix, right, rcond=None)[0]
        x, y = float(x + step[0]), float(y + step[1])
    return x, y


def _sharpest(level: Floats, weight: Floats, starts: list[tuple[float, float]]) -> Geometry:
    """The geometry about which rings have most contrast against their surroundings."""
    from scipy.ndimage import gaussian_filter, minimum_filter
    from scipy.optimize import minimize

    fine = level - _smooth(level, weight, 6.0)
    good = minimum_filter(weight, 3) > 0
    spread = 1.4826 * float(np.median(np.abs(fine[good]))) + 1e-12
    fine = np.where(good, np.clip(fine, -4 * spread, 4 * spread), 0.0)
    y, x = (c.astype(np.float32) for c in np.nonzero(good))
    reach = int(2.5 * max(level.shape)) + 3

    def objective(picture: Floats, width: float) -> Callable[[Floats], float]:
        values = picture[good]

        def dullness(p: Floats) -> float:
            u, v = Geometry(p[0], p[1], *(p[2:] / 100.0)).straighten(x, y)
            bins = np.minimum((np.hypot(u, v) / width).astype(np.intp), reach)
            total = np.bincount(bins, values, reach + 1)
            number = np.bincount(bins, minlength=reach + 1)
            return -float((total**2 / (number + 5.0)).sum())

        return dullness

    coarse = objective(gaussian_filter(fine, 2.0), 2.0)
    tried = []
    for sx, sy in starts:
        offsets = np.arange(-9.0, 9.1, 3.0)
        grid = [
            (coarse(np.array([sx + a, sy + b])), sx + a, sy + b) for a in offsets for b in offsets
        ]
        tried.append(min(grid))
    _, cx, cy = min(tried)
    p = np.array([cx, cy])
    for sigma, width, steps in (
        (2.0, 1.5, (2.0, 2.0)),
        (1.0, 1.0, (1, 1, 1, 1)),
        (0.0, 0.7, (0.4, 0.4, 0.4, 0.4)),
    ):
        picture = gaussian_filter(fine, sigma) if sigma else fine
        p = np.concatenate([p, np.zeros(len(steps) - len(p))])
        simplex = np.vstack([p, p + np.diag(steps)])
        p = minimize(
            objective(picture, width),
            p,
            method="Nelder-Mead",
            options={"initial_simplex": simplex, "xatol": 0.01, "fatol": 1e-7, "maxfev": 250},
        ).x
    return Geometry(float(p[0]), float(p[1]), float(p[2]) / 100, float(p[3]) / 100)
