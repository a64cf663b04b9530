"""|F|² of a list of reflections for X-rays, electrons and neutrons at once.

The three probes share the geometry: for each kind of atom the sum of cos 2πh·x over its images
(and of sin 2πh·x without an inversion centre) is taken once. Phases are reduced to one turn in
double precision; the cosines themselves are single precision, which costs about 1e-7 of F(000).
"""

from __future__ import annotations

import math
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.displacement import exponents, isotropic_U_A2, quadratic_terms
from phaseid.crystal.operations import Operations
from phaseid.crystal.orbits import Orbits, orbits
from phaseid.crystal.reflections import Reflections, reciprocal_metric
from phaseid.crystal.scattering import amplitudes, dispersion

Floats = NDArray[np.float64]

_CHUNK = 1 << 16  # phases held at once: larger arrays are slower to get than to fill
_CANCELLED = 1e-6  # a sum of cosines below this part of its terms is rounding, not a wave


def squared_amplitudes(
    crystal: Crystal,
    operations: Operations,
    reflections: Reflections,
    xray_energy_eV: float | None,
) -> Floats:
    """Return |F|² per cell averaged over Friedel mates, displacement included, (3, n).

    The rows are X-rays in electron², electrons in Å², neutrons in fm².

    Without `xray_energy_eV` X-rays scatter without dispersion. A reflection in which the waves of
    all atoms cancel has exactly 0. Neutrons show nothing if the length of some atom is unknown.
    """
    atoms = _atoms(crystal, operations)
    n = len(reflections.hkl)
    step = max(1, _CHUNK // len(atoms.images.site))
    parts = []
    for start in range(0, max(n, 1), step):
        hkl = reflections.hkl[start : start + step]
        inverse_d2 = reflections.inverse_d2[start : start + step]
        sums = _geometric_sums(atoms, hkl, inverse_d2)
        parts.append(_intensities(atoms, sums, inverse_d2, xray_energy_eV))
    return parts[0] if len(parts) == 1 else np.concatenate(parts, axis=1)


@dataclass(frozen=True, slots=True, eq=False)
class _Atoms:
    """The atoms of a cell, ready for summing.

    `weights` (e, m) float32 spreads images over kinds of atom; `swing` (m, 6) are the exponents of
    each image if atoms of one kind swing differently, else None; `spread_A2` (e, 1) is the least
    mean square displacement of each kind.
    """

    kinds: tuple[str, ...]
    images: Orbits
    centrosymmetric: bool
    weights: NDArray[np.float32]
    spread_A2: Floats
    swing: Floats | None


def _atoms(crystal: Crystal, operations: Operations) -> _Atoms:
    sites, cell = crystal.sites, crystal.cell
    images = orbits(cell, operations, sites)
    kinds = sorted({site.element for site in sites})
    kind_of_site = [kinds.index(site.element) for site in sites]
    weights = np.zeros((len(kinds), len(images.site)), dtype=np.float32)
    weights[np.array(kind_of_site)[images.site], np.arange(len(images.site))] = images.weight
    spread = isotropic_U_A2(sites, cell)
    least = [math.inf] * len(kinds)
    for kind, u_A2 in zip(kind_of_site, spread, strict=True):
        least[kind] = min(least[kind], u_A2)
    swing = None
    alike = all(least[kind] == u_A2 for kind, u_A2 in zip(kind_of_site, spread, strict=True))
    if not alike or any(site.u_aniso_A2 for site in sites):
        swing = exponents(sites, cell, reciprocal_metric(cell), operations, images)
    column = np.array(least)[:, None]
    return _Atoms(tuple(kinds), images, operations.centrosymmetric, weights, column, swing)


def _geometric_sums(atoms: _Atoms, hkl: Floats, inverse_d2: Floats) -> Floats:
    """Return Σ weight · swing · cos, and sin without an inversion centre, (1 or 2, e, n)."""
    turns = atoms.images.fract @ hkl.T
    turns -= np.rint(turns)
    phase = np.multiply(turns, 2 * math.pi, dtype=np.float32, casting="same_kind")
    swing = None
    if atoms.swing is not None:
        swing = (atoms.swing @ quadratic_terms(hkl).T).astype(np.float32)
        np.exp(swing, out=swing)
    factors = np.exp(atoms.spread_A2 * (inverse_d2 * (-2 * math.pi**2)))
    sums = np.empty((1 if atoms.centrosymmetric else 2, *factors.shape))
    for wave, total in zip((np.cos, np.sin), sums, strict=False):
        terms = wave(phase)
        if swing is not None:
            terms *= swing
        total[:] = atoms.weights @ terms
    if swing is None:
        sums *= factors
    factors *= np.add.reduce(atoms.weights, axis=1, keepdims=True) * _CANCELLED
    sums[np.abs(sums) < factors] = 0.0
    return sums


def _intensities(
    atoms: _Atoms, sums: Floats, inverse_d2: Floats, xray_energy_eV: float | None
) -> Floats:
    """Return |F|² for X-rays, electrons, neutrons, (3, n)."""
    amplitude = amplitudes(atoms.kinds, inverse_d2 / 4)
    xray = amplitude.xray.T
    waves = np.zeros((4, len(sums), len(inverse_d2)))  # X-rays, electrons, neutrons, and f″
    if xray_energy_eV is not None:
        real, imaginary = _dispersion(atoms.kinds, xray_energy_eV)
        xray = xray + real[:, None]
        waves[3] = imaginary @ sums
    np.add.reduce(sums * xray, axis=1, out=waves[0])
    np.add.reduce(sums * amplitude.electron.T, axis=1, out=waves[1])
    if amplitude.neutron is not None:
        waves[2] = amplitude.neutron @ sums
    waves *= waves
    f2 = np.add.reduce(waves, axis=1)
    f2[0] += f2[3]  # h and -h differ by the sign with which f″ joins: no cross term in their mean
    return np.asarray(f2[:3])


@lru_cache(maxsize=4096)
def _dispersion(kinds: tuple[str, ...], energy_eV: float) -> Floats:
    """Return f′ and f″ of each kind of atom, (2, e)."""
    return np.array([dispersion(kind, energy_eV) for kind in kinds]).T
