"""Peaks broader than their neighbours are several lines that the pattern does not resolve."""

from __future__ import annotations

import numpy as np

from phaseid.rings.measuring.fitting import FWHM_PER_SIGMA, Floats, PeakFit

OFF_CENTRE = 0.2
"""How far the fitted middle of unresolved lines lies from their centre of gravity (one sigma), of
their spread: as drawn plates of low-symmetry phases show it, no source."""
_MIN_PEAKS = 4


def usual_width(fit: PeakFit) -> Floats:
    """How wide a single line is at each peak (m,): a straight trend along the narrow ones."""
    width, sigma = fit.fwhm, np.maximum(fit.fwhm_sigma, 0.01 * fit.fwhm)
    if len(width) < _MIN_PEAKS:
        return np.full_like(width, float(width.min()))
    place = (fit.position - fit.position.mean()) / np.ptp(fit.position)
    design = np.stack([np.ones_like(place), place], axis=1)
    weight = 1.0 / sigma
    trend = np.full_like(width, float(np.median(width)))
    for _ in range(8):
        weight = np.where(width > trend + 2.0 * sigma, 0.1, 1.0) / sigma
        answer = np.linalg.lstsq(design * weight[:, None], width * weight, rcond=None)[0]
        trend = design @ answer
    return np.clip(trend, float(width.min()), float(width.max()))


def overlap_sigma(fit: PeakFit) -> Floats:
    """One-sigma (m,) of the position for lines that may hide in a peak broader than usual."""
    single = usual_width(fit) + 2.0 * fit.fwhm_sigma
    excess = np.sqrt(np.maximum(fit.fwhm**2 - single**2, 0.0)) / FWHM_PER_SIGMA
    return np.asarray(OFF_CENTRE * excess)
