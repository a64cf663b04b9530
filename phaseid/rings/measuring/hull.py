"""The convex curve beneath a curve: the tail of a beam falls off convexly, halos rise above it."""

from __future__ import annotations

import numpy as np

from phaseid.rings.measuring.geometry import Floats


def convex_below(x: Floats, y: Floats) -> Floats:
    """The convex curve (n,) that touches y from below at rising x."""
    corners: list[int] = []
    for i in range(len(x)):
        while len(corners) > 1:
            a, b = corners[-2], corners[-1]
            if (y[b] - y[a]) * (x[i] - x[a]) < (y[i] - y[a]) * (x[b] - x[a]):
                break
            corners.pop()
        corners.append(i)
    return np.asarray(np.interp(x, x[corners], y[corners]))
