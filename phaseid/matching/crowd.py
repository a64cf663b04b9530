"""How rings fall that no particular phase explains: as the lines of the library's crowd do."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from phaseid.library.linetable import LineTable
from phaseid.matching.lineset import shown_intensity
from phaseid.matching.patterns import Floats, Pattern

_SAMPLE = 2000
_BINS = 24
_FLAT_SHARE = 0.3
_APART = 0.9
"""Rings of a list stand no nearer than this part of the merging distance."""
_MOST_TAKEN = 0.8


def crowd(table: LineTable, phases: NDArray[np.int64], pattern: Pattern) -> Floats:
    """ln density in ln d and ln intensity of a ring that no phase explains, at each ring, (m,)."""
    position = crowd_density(table, phases, pattern)
    return position + crowd_intensity(pattern) + crowd_exclusion(pattern, position)


def crowd_exclusion(pattern: Pattern, position: Floats) -> Floats:
    """What ln density gains at each ring as rings keep their distance: nearer ones would merge.

    Each of m rings takes its merging distance from the room the others have, as hard rods on a line
    do (Tonks 1936); `position` (m,) is ln of their normalised density.
    """
    taken = len(pattern) * np.exp(position) * _APART * pattern.fineness * pattern.merging
    result: Floats = -np.log(1.0 - np.minimum(taken, _MOST_TAKEN))
    return result


def crowd_intensity(pattern: Pattern) -> Floats:
    """ln density in ln intensity of rings no phase explains, at each ring's own intensity, (m,).

    Most rings are weak: ln(intensity / limit) falls off exponentially over the range up to the
    strongest, with the mean that this pattern's rings have, mixed with a flat part. 0 where a ring
    has no intensity.
    """
    known = np.isfinite(pattern.intensity_sd)
    span = 0.5 - pattern.ln_limit
    above = np.clip(pattern.ln_intensity - pattern.ln_limit, 0.0, span)
    mean = float(above[known].mean()) if known.any() else span
    decay = max(mean, 0.6)
    falling = np.exp(-above / decay) / (decay * (1.0 - np.exp(-span / decay)))
    density = (1.0 - _FLAT_SHARE) * falling + _FLAT_SHARE / span
    result: Floats = np.where(known, np.log(density), 0.0)
    return result


def crowd_density(table: LineTable, phases: NDArray[np.int64], pattern: Pattern) -> Floats:
    """ln of the normalised density in ln d (per unit ln d) of a crowd line at each ring, (m,).

    A histogram of the visible lines (above 3 % of the phase's strongest) of up to 2000 of the
    library's phases, evenly spaced, over the pattern's range, smoothed, and mixed with a flat part.
    """
    low, high = pattern.x[0] - 0.03, pattern.x[-1] + 0.03
    span = high - low
    chosen = phases[:: max(1, len(phases) // _SAMPLE)]
    histogram = np.zeros(_BINS)
    if len(chosen):
        counts = table.offsets[chosen + 1] - table.offsets[chosen]
        rows = np.repeat(table.offsets[chosen], counts) + (
            np.arange(counts.sum()) - np.repeat(np.cumsum(counts) - counts, counts)
        )
        owner = np.repeat(np.arange(len(chosen)), counts)
        intensity = shown_intensity(table, rows, pattern)
        strongest = np.zeros(len(chosen))
        np.maximum.at(strongest, owner, intensity)
        x = np.log(table.d_A[rows])
        visible = (intensity > 0.03 * strongest[owner]) & (x > low) & (x < high)
        histogram, _ = np.histogram(x[visible], bins=_BINS, range=(low, high))
        histogram = np.convolve(histogram, [0.25, 0.5, 0.25], mode="same")
    total = histogram.sum()
    flat = np.full(_BINS, 1.0 / span)
    density = flat if total == 0 else histogram / total * _BINS / span
    density = (1.0 - _FLAT_SHARE) * density + _FLAT_SHARE * flat
    bins = np.clip(((pattern.x - low) / span * _BINS).astype(int), 0, _BINS - 1)
    position: Floats = np.log(density[bins])
    return position
