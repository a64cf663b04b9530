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
    result: Floats = np.log(density[bins])
    return result
