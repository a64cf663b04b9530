"""Broad halos of amorphous matter, told from the tail of the beam and from rings."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.measuring.fitting import Floats
from phaseid.rings.measuring.hull import convex_below

MIN_FWHM = 3.0  # widths of a ring; a halo is broader
MIN_RISE = 0.1  # of the tail beneath it
MIN_SIGMAS = 10.0  # of one bin's noise

MAX_WIDTH = 0.2  # of its radius, that a ring has
MAX_SHARE = 0.06  # of the largest radius seen


def broad_as_halos(position: Floats, fwhm: Floats, reach: float) -> NDArray[np.bool_]:
    """Which peaks (m,) are too broad for rings, where nothing narrower shows what a ring is.

    Crystals of 2 nm still make rings of a tenth of their radius (Scherrer 1918); the first halo of
    a glass has a fifth and more.
    """
    return np.asarray((fwhm > MAX_WIDTH * position) & (fwhm > MAX_SHARE * reach))


def find_halos(x: Floats, level: Floats, sigma: Floats, fwhm: float) -> tuple[float, ...]:
    """Positions of broad maxima of the background `level` (n,) at x above a convex tail.

    A beam's tail falls off convexly, so the convex hull from below spans what is not halo. `sigma`
    (n,) is the noise of the curve, `fwhm` the usual width of its rings.
    """
    from scipy.signal import find_peaks

    ground = convex_below(x, level)
    rise = level - ground
    step = float(np.median(np.diff(x)))
    places, facts = find_peaks(
        rise, prominence=MIN_SIGMAS * float(np.median(sigma)), width=MIN_FWHM * fwhm / step
    )
    margin = MIN_FWHM * fwhm
    return tuple(
        float(x[place])
        for place, prominence in zip(places, facts["prominences"], strict=True)
        if prominence > MIN_RISE * abs(ground[place]) and x[0] + margin < x[place] < x[-1] - margin
    )
