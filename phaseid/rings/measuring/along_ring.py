"""A ring followed along its azimuth: how sure its radius is, how even its intensity."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from phaseid.rings.measuring.fitting import PeakFit, shape
from phaseid.rings.measuring.geometry import Floats

MIN_CELLS = 8


@dataclass(frozen=True, slots=True)
class AlongRing:
    """Each (m,): one-sigma of the position from the scatter between sectors, relative scatter of
    intensity beyond noise, share of sectors seen, share of those in which the ring is positive,
    the median intensity of a sector over its uncertainty, the share of sectors in which the ring
    is bright less five times that in which it is dark, both by 3 sigma, and how alike neighbouring
    sectors are (1 alike, 0 not at all). `lean_x`, `lean_y`: mean direction of the sectors seen,
    0 for a full circle.
    """

    position_sigma: Floats
    spottiness: Floats
    coverage: Floats
    positive: Floats
    median_score: Floats
    bright: Floats
    alike: Floats
    lean_x: Floats
    lean_y: Floats


def follow(fit: PeakFit, radius: Floats, mean: Floats, number: Floats, noise: Floats) -> AlongRing:
    """Follow each ring of `fit` over sector means (n, s) with pixel numbers and noise (n,) a pixel.

    In each sector the ring is fitted as height, displacement and a straight background beside the
    neighbouring rings of the fit. Their scatter holds noise, spots, texture and what is left of the
    distortion, whichever they are.
    """
    m, sectors = len(fit.position), mean.shape[1]
    out = np.full((9, m), np.nan)
    value, by_place, _, _ = shape(radius, fit.position, fit.fwhm, fit.lorentzian)
    for k in range(m):
        near = np.abs(radius - fit.position[k]) < 1.6 * fit.fwhm[k]
        if near.sum() < 4:
            continue
        others = [
            j
            for j in range(m)
            if j != k
            and abs(fit.position[j] - fit.position[k]) < 2.5 * max(fit.fwhm[j], fit.fwhm[k])
        ]
        t = (radius[near] - fit.position[k]) / fit.fwhm[k]
        design = np.stack(
            [value[near, k], by_place[near, k], np.ones_like(t), t]
            + [value[near, j] for j in others],
            axis=1,
        )
        if design.shape[1] > near.sum() - 1:
            design = design[:, :4]
        height, shift, height_var = [], [], []
        directions = []
        seen = 0
        for s in range(sectors):
            n = number[near, s]
            # a straight background needs both flanks and most of the window
            if (n > 0).mean() < 0.85:
                continue
            seen += 1
            directions.append((s + 0.5) * 2.0 * np.pi / sectors)
            weight = np.sqrt(n) / noise[near]
            normal = (design * weight[:, None] ** 2).T @ design
            inverse = np.linalg.pinv(normal, hermitian=True)
            c = inverse @ (design.T @ (weight**2 * np.nan_to_num(mean[near, s])))
            height.append(c[0])
            shift.append(c[1])
            height_var.append(inverse[0, 0])
        out[2, k] = seen / sectors
        if seen < MIN_CELLS:
            continue
        out[7, k], out[8, k] = np.cos(directions).mean(), np.sin(directions).mean()
        a, d, va = np.array(height), np.array(shift), np.array(height_var)
        total = a.sum()
        if total <= 0:
            out[3, k] = 0.0
            continue
        delta = d.sum() / total
        scores = d - delta * a
        out[0, k] = np.sqrt((scores**2).sum() * seen / (seen - 1)) / total
        extra = a.var(ddof=1) - va.mean()
        out[1, k] = np.sqrt(max(extra, 0.0)) / a.mean()
        out[3, k] = float((a > 0).mean())
        out[4, k] = np.median(a) / (1.2533 * np.sqrt(max(a.var(ddof=1), 1e-30) / seen))
        neighbours = (a[:-1] - a.mean()) * (a[1:] - a.mean())
        clear = a / np.sqrt(va)
        out[5, k] = float((clear > 3.0).mean() - 5.0 * (clear < -3.0).mean())
        out[6, k] = neighbours.mean() / max(a.var(), 1e-30)
    return AlongRing(*out)
