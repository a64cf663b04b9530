"""A ring followed along its azimuth: how sure its radius is, how even its intensity."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from phaseid.rings.measuring.azimuthal import AzimuthalMean
from phaseid.rings.measuring.fitting import PeakFit, shape
from phaseid.rings.measuring.geometry import Floats

SECTORS = 72
LEVELS = 36
MIN_SECTORS = 8
ARC_LAG = 2  # sectors apart: spots do not reach so far, arcs of a texture do


@dataclass(frozen=True, slots=True)
class AlongRing:
    """Each (m,): one-sigma of the position from the scatter between sectors, relative scatter of
    intensity beyond noise and the part of it that changes smoothly (`arcs`), share of sectors seen,
    share of those in which the ring is positive, the median intensity of a sector over its
    uncertainty, the share of sectors in which the ring is bright less five times that in which it
    is dark, both by 3 sigma. `lean_x`, `lean_y`: mean direction of the sectors seen, 0 for a full
    circle. `level` (m, LEVELS): intensity by sector, its mean 1, NaN where not seen.
    """

    level: Floats
    position_sigma: Floats
    spottiness: Floats
    arcs: Floats
    coverage: Floats
    positive: Floats
    median_score: Floats
    bright: Floats
    lean_x: Floats
    lean_y: Floats


def follow(fit: PeakFit, seen: AzimuthalMean) -> AlongRing:
    """Follow each ring of `fit` over the sectors of the azimuthal mean it was fitted to.

    In each sector the ring is fitted as height, displacement and a straight departure from the
    background, beside the neighbouring rings of the fit. Their scatter holds noise, spots, texture
    and what is left of the distortion, whichever they are.
    """
    m = len(fit.position)
    out = np.full((9, m), np.nan)
    level = np.full((m, LEVELS), np.nan)
    value, by_place, _, _ = shape(seen.radius, fit.position, fit.fwhm, fit.lorentzian)
    directions = (np.arange(SECTORS) + 0.5) * 2.0 * np.pi / SECTORS
    for k in range(m):
        near = np.abs(seen.radius - fit.position[k]) < 1.6 * fit.fwhm[k]
        if near.sum() < 4:
            continue
        reach = 2.5 * np.maximum(fit.fwhm[k], fit.fwhm)
        others = np.flatnonzero(np.abs(fit.position - fit.position[k]) < reach)
        t = (seen.radius[near] - fit.position[k]) / fit.fwhm[k]
        design = np.stack(
            [value[near, k], by_place[near, k], np.ones_like(t), t]
            + [value[near, j] for j in others if j != k],
            axis=1,
        )
        if design.shape[1] > near.sum() - 1:
            design = design[:, :4]
        usable = ~seen.clipped[near]
        height, shift, variance = _by_sector(
            design[usable],
            (seen.cells - fit.background[:, None])[near][usable],
            seen.number[near][usable],
            seen.noise[near][usable],
        )
        ok = np.isfinite(height)
        number = int(ok.sum())
        out[3, k] = number / SECTORS
        if number < MIN_SECTORS:
            continue
        out[7, k], out[8, k] = np.cos(directions[ok]).mean(), np.sin(directions[ok]).mean()
        a, d, va = height[ok], shift[ok], variance[ok]
        total = a.sum()
        if total <= 0:
            out[4, k] = 0.0
            continue
        scores = d - d.sum() / total * a
        out[0, k] = np.sqrt((scores**2).sum() * number / (number - 1)) / total
        extra = a.var(ddof=1) - va.mean()
        out[1, k] = np.sqrt(max(extra, 0.0)) / a.mean()
        out[2, k] = min(_arcs(height / a.mean()), out[1, k])
        out[4, k] = float((a > 0).mean())
        out[5, k] = np.median(a) / (1.2533 * np.sqrt(max(a.var(ddof=1), 1e-30) / number))
        clear = a / np.sqrt(va)
        out[6, k] = float((clear > 3.0).mean() - 5.0 * (clear < -3.0).mean())
        level[k] = _in_pairs(height / a.mean())
    return AlongRing(level, *out)


def _by_sector(
    design: Floats, mean: Floats, number: Floats, noise: Floats
) -> tuple[Floats, Floats, Floats]:
    """Height, displacement × height and variance of the height (s,), NaN where not seen."""
    height, shift, variance = np.full((3, mean.shape[1]), np.nan)
    if len(design) <= design.shape[1]:
        return height, shift, variance
    for s in range(mean.shape[1]):
        n = number[:, s]
        # a straight background needs both flanks and most of the window
        if (n > 0).mean() < 0.85:
            continue
        weight = np.sqrt(n) / noise
        inverse = np.linalg.pinv((design * weight[:, None] ** 2).T @ design, hermitian=True)
        c = inverse @ (design.T @ (weight**2 * mean[:, s]))
        height[s], shift[s], variance[s] = c[0], c[1], inverse[0, 0]
    return height, shift, variance


def _arcs(level: Floats) -> float:
    """Relative one-sigma of what neighbours two sectors apart have in common, 0 if by chance.

    `level` (s,) has mean 1, NaN where not seen. Noise is not common to two sectors.
    """
    off = level - 1.0
    products = off * np.roll(off, ARC_LAG)
    number = int(np.isfinite(products).sum())
    if number == 0:
        return 0.0
    common = float(np.nanmean(products))
    by_chance = float(np.nanmean(off**2)) / np.sqrt(number)
    return float(np.sqrt(common)) if common > 2.5 * by_chance else 0.0


def _in_pairs(level: Floats) -> Floats:
    """Means of so many neighbours that LEVELS are left, NaN where none is seen."""
    groups = level.reshape(LEVELS, -1)
    number = np.isfinite(groups).sum(axis=1)
    return np.where(number > 0, np.nansum(groups, axis=1) / np.maximum(number, 1), np.nan)
