"""Ring lists of mixtures with known shares, for tests of limits and series."""

from __future__ import annotations

import math

import numpy as np

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.lines import compute_lines
from phaseid.library import Phase
from phaseid.matching.limits import COMMON_SCATTER
from phaseid.matching.settings import SCATTER
from phaseid.probes import parse_probe
from phaseid.rings import RingList, rings_from_values


def simulated(
    parts: list[tuple[Phase, Crystal, float]], probe_text: str, limit: float, seed: int
) -> RingList:
    """A ring list of a mixture (weight shares), with the scatter and losses of its probe.

    Shares follow v·m|F|²/V² with v = share / density, the reference-intensity-ratio method
    (Chung 1974, J. Appl. Cryst. 7, 519).
    """
    generator = np.random.default_rng(seed)
    probe = parse_probe(probe_text)
    scatter = SCATTER[probe.kind]
    lines: list[tuple[float, float]] = []
    for phase, crystal, share in parts:
        own = compute_lines(crystal, d_min_A=0.85)
        level = probe.weights(own.d_A, own.multiplicity, probe.f2(own)) / own.volume_A3**2
        level = level * share / phase.density_g_cm3
        level = level * np.exp(COMMON_SCATTER[probe.kind] * generator.normal())
        level = level * np.exp(scatter.intensity * generator.normal(size=len(level)))
        lines += zip(own.d_A.tolist(), level.tolist(), strict=True)
    merged: list[tuple[float, float]] = []
    for d, level in sorted(lines, reverse=True):
        if merged and _merges(merged[-1][0], d, probe_text):
            before, strength = merged[-1]
            total = strength + level
            merged[-1] = ((before * strength + d * level) / total, total)
        else:
            merged.append((d, level))
    d_A, level = np.array(merged).T
    level = level / level.max()
    listed = generator.random(len(level)) < 1.0 / (1.0 + (limit / level) ** 2.6)
    listed &= generator.random(len(level)) > scatter.lost
    listed[np.argmax(level)] = True
    d_A, level = d_A[listed], level[listed]
    sigma = 0.002 * d_A
    if probe.kind == "x-ray":
        theta = np.arcsin(probe.wavelength_A / 2 / d_A)
        sigma = 0.5 * d_A * np.radians(0.02) / np.tan(theta)
    read = d_A * (1 + probe.scale_sigma * generator.normal()) + sigma * generator.normal(
        size=len(d_A)
    )
    return rings_from_values(
        read.tolist(),
        probe=probe,
        sigma=[repr(s) for s in sigma.tolist()],
        intensities=(100 * level).tolist(),
    )


def _merges(one: float, other: float, probe_text: str) -> bool:
    probe = parse_probe(probe_text)
    scatter = SCATTER[probe.kind]
    if probe.geometry == "ring":
        return math.log(one / other) < scatter.resolution
    half = [math.asin(probe.wavelength_A / 2 / d) for d in (one, other)]
    return 2 * math.degrees(half[1] - half[0]) < scatter.resolution_two_theta_deg
