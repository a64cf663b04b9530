"""Shares by weight from absolute intensities, and cells refined from the assigned rings."""

from __future__ import annotations

import numpy as np

from phaseid.matching.patterns import Floats, Pattern

_SYSTEMATIC = 0.10
"""One-sigma of ln(share ratio) that the fit does not see: absorption, texture, extinction."""


def weight_shares(
    patterns: list[tuple[Pattern, Floats, Floats, Floats]], density: Floats
) -> tuple[Floats, Floats] | None:
    """Weight shares (k,) and their one-sigmas, None where no pattern can give them.

    `patterns`: (pattern, ln amplitude, its one-sigma, strength per phase) of each measured pattern,
    arrays (k,); `density` (k,) g/cm³. A line of a phase of volume share v shows v·m|F|²/V² × the
    probe's factor, so v ∝ amplitude / strength with strength the strongest line's m|F|²/V² on the
    absolute scale, and weight ∝ density × v: the reference-intensity-ratio method with computed
    ratios, normalised to the identified phases (Chung 1974, J. Appl. Cryst. 7, 519). Electron rings
    are not used: dynamical scattering and texture leave no more than a rough order.
    """
    usable = [p for p in patterns if p[0].probe.kind != "electron" and p[0].has_intensity]
    k = len(density)
    if not usable:
        return None
    if k == 1:
        return np.ones(1), np.zeros(1)
    ln_ratio, weight = np.zeros(k), np.zeros(k)
    for _, amplitude, deviation, strength in usable:
        value = amplitude - np.log(np.maximum(strength, 1e-300)) + np.log(density)
        precision = 1.0 / (deviation**2 + _SYSTEMATIC**2)
        # amplitudes of different patterns have different zero points
        ln_ratio += precision * (value - np.average(value, weights=precision))
        weight += precision
    ln_ratio /= weight
    variance = 1.0 / weight
    share = np.exp(ln_ratio - ln_ratio.max())
    share /= share.sum()
    # d ln w_p = d y_p - sum_q w_q d y_q
    relative = (1.0 - share) ** 2 * variance + (share**2 * variance).sum() - share**2 * variance
    return share, share * np.sqrt(relative)
