"""A ring list made ready for the likelihood: positions as ln d, sorted, doubles together.

x = ln d throughout: a relative error is a difference, a common scale error a shift.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.settings import (
    DISPLACEMENT_DEG,
    LIMIT_SD,
    MEASURED_LIMIT_SD,
    SCATTER,
    ZERO_SHIFT_DEG,
    Scatter,
)
from phaseid.probes.probe import Probe
from phaseid.rings.ringlist import RingList

Floats = NDArray[np.float64]

_FINEST, _COARSEST = 1e-4, 0.05
"""Relative ring sigmas below or above these are taken as these: no listed cell is known better, and
a ring known worse says nothing."""
_LEAST_LIMIT = 5e-4
"""No pattern shows rings below this part of its strongest."""


@dataclass(frozen=True, slots=True, eq=False)
class Pattern:
    """One measured pattern, rings sorted by rising ln d.

    `x` (m,) ln d; `sigma` (m,) relative one-sigma; `ln_intensity` (m,) ln of the relative intensity
    (strongest = 0), 0 where absent; `intensity_sd` (m,) one-sigma of ln intensity from the reading
    itself (a grade's width), inf where absent. `members` lists, for each x, the ring indices of the
    list that fall together there. `nuisance` (m, q): effect on x of each systematic error, times
    its prior one-sigma (column 0 is the common scale). `ln_limit` is ln of the detection limit on
    the same scale as ln_intensity, `limit_sd` its one-sigma. `merging` (m,) is the distance in x at
    which lines merge by the probe's usual resolution, `resolution` (m,) the same where the rings
    lie closer than that.
    """

    rings: RingList
    probe: Probe
    scatter: Scatter
    x: Floats
    sigma: Floats
    ln_intensity: Floats
    intensity_sd: Floats
    members: tuple[tuple[int, ...], ...]
    nuisance: Floats
    ln_limit: float
    limit_sd: float
    merging: Floats
    resolution: Floats
    fineness: float

    def __len__(self) -> int:
        return len(self.x)

    @property
    def has_intensity(self) -> bool:
        """Whether any ring carries an intensity."""
        return bool(np.isfinite(self.intensity_sd).any())

    def resolved(self, x: Floats) -> Floats:
        """A coordinate over ln d in which lines one apart can just be told apart."""
        scatter = self.scatter
        if self.probe.geometry in ("ring", "time-of-flight"):
            coarse: Floats = x / max(scatter.resolution, 1e-4)
        else:
            sine = np.clip(self.probe.wavelength_A / (2.0 * np.exp(x)), 1e-6, 1.0)
            coarse = -2.0 * np.degrees(np.arcsin(sine)) / scatter.resolution_two_theta_deg
        return coarse / self.fineness

    def seen_weight(self, x: Floats) -> Floats:
        """Chance that a line at `x` (any shape) lies within the recorded range of the pattern.

        1 between the outermost rings; beyond them it falls off, faster towards small d, where lists
        are usually cut.
        """
        inner = 0.5 * np.exp(-np.maximum(x - self.x[-1], 0.0) / 0.25)
        outer = 0.4 * np.exp(-np.maximum(self.x[0] - x, 0.0) / 0.06)
        margin = 0.004
        weight = np.where(x > self.x[-1] + margin, inner, 1.0)
        return np.where(x < self.x[0] - margin, outer, weight)


def _angle_columns(x: Floats, probe: Probe) -> Floats:
    """Effect on ln d of one-sigma zero shift and specimen displacement, (m, 0..2).

    d = λ / (2 sin θ), so d(ln d) = −½ cot θ d(2θ); the displacement's shift goes with cos θ
    (Klug & Alexander 1974, chapter 5).
    """
    if probe.geometry in ("ring", "time-of-flight"):
        return np.empty((len(x), 0))
    sine = np.clip(probe.wavelength_A / (2.0 * np.exp(x)), 1e-6, 0.9999)
    cosine = np.sqrt(1.0 - sine**2)
    per_radian = -0.5 * cosine / sine
    columns = [per_radian * np.radians(ZERO_SHIFT_DEG)]
    if probe.geometry == "bragg-brentano":
        columns.append(per_radian * cosine * np.radians(DISPLACEMENT_DEG))
    return np.stack(columns, axis=1)


def _resolution(x: Floats, probe: Probe, scatter: Scatter) -> tuple[Floats, Floats, float]:
    """Merging distance in ln d at each ring: the usual, and never above what the rings resolve.

    With it the least ratio of what the pattern resolves to the usual.
    """
    merged = np.full(len(x), scatter.resolution)
    if probe.geometry not in ("ring", "time-of-flight"):
        sine = np.clip(probe.wavelength_A / (2.0 * np.exp(x)), 1e-6, 0.9999)
        cotangent = np.sqrt(1.0 - sine**2) / sine
        merged = np.maximum(0.5 * cotangent * np.radians(scatter.resolution_two_theta_deg), 2e-4)
    if len(x) == 1:
        return merged, merged, 1.0
    gaps = np.diff(x)
    nearest = 0.9 * np.minimum(np.append(gaps, np.inf), np.append(np.inf, gaps))
    return merged, np.minimum(merged, nearest), float(np.clip((nearest / merged).min(), 0.25, 1.0))


def _group_duplicates(x: Floats, sigma: Floats) -> list[list[int]]:
    """Indices in rising x, grouped where two rings are the same reading twice."""
    groups: list[list[int]] = []
    for i in np.argsort(x, kind="stable"):
        if groups and x[i] - x[groups[-1][0]] < 0.25 * min(sigma[i], sigma[groups[-1][0]]):
            groups[-1].append(int(i))
        else:
            groups.append([int(i)])
    return groups


def _detection_limit(
    rings: RingList, ln_intensity: Floats, intensity_sd: Floats
) -> tuple[float, float]:
    """ln of the detection limit and its one-sigma: as measured, else as the weakest rings tell."""
    if rings.detection_limit is not None and np.isfinite(rings.intensity).any():
        stated = rings.detection_limit / np.nanmax(rings.intensity)
        return float(np.log(max(stated, _LEAST_LIMIT))), MEASURED_LIMIT_SD
    return _told_by_rings(ln_intensity, intensity_sd), LIMIT_SD


def _told_by_rings(ln_intensity: Floats, intensity_sd: Floats) -> float:
    """ln of a limit a little below the weakest ring; 5 % where nothing is known.

    A grade says only that the ring is within its interval: the lower part of it counts.
    """
    known = np.isfinite(intensity_sd)
    if not known.any():
        return float(np.log(0.05))
    low = np.sort(ln_intensity[known] - intensity_sd[known])
    return float(max(low[: 1 + len(low) // 8].mean() - 0.25, np.log(_LEAST_LIMIT)))


def prepare(rings: RingList) -> Pattern:
    """Return the pattern that the likelihood works on."""
    ln_d = np.log(rings.d_A)
    relative = np.clip(rings.sigma_A / rings.d_A, _FINEST, _COARSEST)
    groups = _group_duplicates(ln_d, relative)
    first = np.array([group[0] for group in groups])
    x, sigma = ln_d[first], relative[first]

    strongest = np.nanmax(rings.intensity) if np.isfinite(rings.intensity).any() else 1.0
    ln_intensity = np.zeros(len(groups))
    intensity_sd = np.full(len(groups), np.inf)
    for k, group in enumerate(groups):
        best = max(group, key=lambda i: np.nan_to_num(rings.intensity[i], nan=-1.0))
        value = rings.intensity[best]
        if np.isfinite(value) and value > 0:
            low, high = rings.intensity_range[best]
            ln_intensity[k] = np.log(value / strongest)
            intensity_sd[k] = np.log(high / low) / np.sqrt(12.0) if high > low > 0 else 0.0
    scatter = SCATTER[rings.probe.kind]
    scale = np.full((len(x), 1), rings.probe.scale_sigma)
    ln_limit, limit_sd = _detection_limit(rings, ln_intensity, intensity_sd)
    merging, resolution, fineness = _resolution(x, rings.probe, scatter)
    return Pattern(
        rings=rings,
        probe=rings.probe,
        scatter=scatter,
        x=x,
        sigma=sigma,
        ln_intensity=ln_intensity,
        intensity_sd=intensity_sd,
        members=tuple(tuple(group) for group in groups),
        nuisance=np.hstack([scale, _angle_columns(x, rings.probe)]),
        ln_limit=ln_limit,
        limit_sd=limit_sd,
        merging=merging,
        resolution=resolution,
        fineness=fineness,
    )


def prepare_all(patterns: Sequence[RingList]) -> list[Pattern]:
    """Prepare several patterns of one specimen."""
    return [prepare(rings) for rings in patterns]
