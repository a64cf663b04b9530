"""The azimuthal mean of an image: its noise, its sectors, and where it can be trusted."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.measuring.geometry import Floats
from phaseid.rings.measuring.polar import PolarSums

MIN_COVERAGE = 0.12  # of a circle, below which its mean is not used
MIN_SHARE = 0.7  # of the first circle used, beside the beam and its stop
MIN_POINTS = 40
CLIPPED = 0.1  # of a circle saturated, from which on its mean says nothing


@dataclass(frozen=True, slots=True, eq=False)
class AzimuthalMean:
    """n radii (px) by rising radius.

    `mean` (n,) with one-sigma `sigma`, `median` of the sectors; `noise` (n,) is that of one pixel;
    `cells`, `number` (n, s) are the means of the sectors and how many pixels they hold; `saturated`
    (n,) is the share of each circle at the top of the scale.
    """

    radius: Floats
    mean: Floats
    median: Floats
    sigma: Floats
    noise: Floats
    cells: Floats
    number: Floats
    saturated: Floats

    @property
    def clipped(self) -> NDArray[np.bool_]:
        """Radii (n,) whose mean is too low for saturation."""
        return self.saturated > CLIPPED

    def unevenness(self) -> float:
        """How much sectors differ beyond noise at the usual radius, over how much radii differ."""
        seen = self.number >= 2
        count = np.maximum(seen.sum(axis=1), 1)
        off = np.where(seen, self.cells - self.mean[:, None], 0.0)
        by_noise = np.where(seen, self.noise[:, None] ** 2 / np.maximum(self.number, 1), 0.0)
        extra = ((off**2).sum(axis=1) - by_noise.sum(axis=1)) / count
        low, high = np.percentile(self.mean, [5, 95])
        return float(np.sqrt(max(float(np.median(extra)), 0.0)) / max(float(high - low), 1e-12))


def start_radius(sums: PolarSums) -> float:
    """Radius (px) from which on circles are seen well, outside the beam and its stop."""
    share = sums.number.sum(axis=1) / np.maximum(sums.frame.sum(axis=1), 1)
    seen = np.flatnonzero((share > MIN_SHARE) & (sums.number.sum(axis=1) > 20))
    return float(max(4.0, seen[0] + 2.0 if seen.size else 4.0)) * sums.step


def azimuthal_mean(sums: PolarSums, start: float, per_count: float) -> AzimuthalMean | None:
    """The longest unbroken stretch of radii beyond `start`; None where there is none to speak of.

    `per_count` is the variance of a pixel per count; noise is never taken to be less than that.
    """
    from scipy.ndimage import median_filter

    number = sums.number.sum(axis=1)
    middle = (np.arange(len(number)) + 0.5) * sums.step
    full = 2.0 * np.pi * middle * sums.step
    good = (number > MIN_COVERAGE * full) & (number > 0.3 * sums.frame.sum(axis=1))
    good &= (middle > start) & (number >= 12)
    runs = np.flatnonzero(good)
    if runs.size < MIN_POINTS:
        return None
    breaks = np.flatnonzero(np.diff(runs) > 1)
    bounds = np.concatenate([[0], breaks + 1, [runs.size]])
    longest = int(np.argmax(np.diff(bounds)))
    part = slice(int(runs[bounds[longest]]), int(runs[bounds[longest + 1] - 1]) + 1)
    if part.stop - part.start < MIN_POINTS:
        return None
    n, total, square = (a[part] for a in (sums.number, sums.total, sums.square))
    count = n.sum(axis=1)
    mean = total.sum(axis=1) / count
    within = (square - np.where(n > 0, total**2 / np.maximum(n, 1), 0.0)).sum(axis=1)
    dof = count - (n > 0).sum(axis=1)
    var = np.where(dof > 5, within / np.maximum(dof, 1), np.nan)
    index = np.arange(len(var))
    known = np.isfinite(var)
    var = np.interp(index, index[known], var[known])
    var = np.maximum(median_filter(var, 5), 0.5 * np.maximum(var, per_count * mean))
    contrast = float(np.ptp(mean))
    if contrast == 0:
        return None
    noise = np.sqrt(var + (1e-6 * contrast) ** 2)
    cells = np.where(n > 0, total / np.maximum(n, 1), 0.0)
    return AzimuthalMean(
        radius=sums.radius[part],
        mean=mean,
        median=np.nanmedian(np.where(n > 0, cells, np.nan), axis=1),
        sigma=noise / np.sqrt(count),
        noise=noise,
        cells=cells,
        number=n,
        saturated=sums.saturated[part].sum(axis=1) / count,
    )
