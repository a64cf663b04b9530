"""|F|² of a list of reflections for X-rays, electrons and neutrons at once.

The three probes share the geometry: for each kind of atom the sum of cos 2πh·x over its images
(and of sin 2πh·x without an inversion centre) is taken once. Phases are reduced to one turn in
double precision; the cosines themselves are single precision, which costs about 1e-7 of F(000).
"""

from __future__ import annotations

import math
from dataclasses import dataclass

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


@dataclass(frozen=True, slots=True, eq=False)
class SquaredAmplitudes:
    """|F|² per cell of n reflections: `xray` in electron², `electron` in Å², `neutron` in fm²."""

    xray: Floats
    electron: Floats
    neutron: Floats


def squared_amplitudes(
    crystal: Crystal,
    operations: Operations,
    reflections: Reflections,
    xray_energy_eV: float | None,
) -> SquaredAmplitudes:
    """Return |F|² averaged over Friedel mates, displacement included.

    Without `xray_energy_eV` X-rays scatter without dispersion. A reflection in which the waves of
    all atoms cancel has exactly 0. Neutrons show nothing if the length of some atom is unknown.
    """
    atoms = _atoms(crystal, operations)
    n = len(reflections.hkl)
    out = np.empty((3, n))
    step = max(1, min(n, _CHUNK // len(atoms.images.site)))
    for start in range(0, n, step):
        part = slice(start, start + step)
        hkl, inverse_d2 = reflections.hkl[part], reflections.inverse_d2[part]
        sums = _geometric_sums(atoms, hkl, inverse_d2)
        out[:, part] = _intensities(atoms, sums, inverse_d2, xray_energy_eV)
    return SquaredAmplitudes(*out)


@dataclass(frozen=True, slots=True, eq=False)
class _Atoms:
    """The atoms of a cell, ready for summing.

    `weights` (m, e) float32 spreads images over kinds of atom; `swing` (6, m) are the exponents of
    each image if atoms of one kind swing differently, else None; `spread_A2` (e,) is the least mean
    square displacement of each kind.
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
    kind_of_site = np.array([kinds.index(site.element) for site in sites])
    weights = np.zeros((len(images.site), len(kinds)), dtype=np.float32)
    weights[np.arange(len(images.site)), kind_of_site[images.site]] = images.weight
    spread = isotropic_U_A2(sites, cell)
    least = np.full(len(kinds), np.inf)
    np.minimum.at(least, kind_of_site, spread)
    swing = None
    if any(site.u_aniso_A2 for site in sites) or not np.array_equal(least[kind_of_site], spread):
        swing = exponents(sites, cell, reciprocal_metric(cell), operations, images)
    return _Atoms(tuple(kinds), images, operations.centrosymmetric, weights, least, swing)


def _geometric_sums(atoms: _Atoms, hkl: Floats, inverse_d2: Floats) -> Floats:
    """Return Σ weight · swing · cos, and sin without an inversion centre, (1 or 2, n, e)."""
    turns = hkl @ atoms.images.fract.T
    turns -= np.rint(turns)
    phase = np.multiply(turns, 2 * math.pi, dtype=np.float32, casting="same_kind")
    factors = np.exp(inverse_d2[:, None] * (-2 * math.pi**2 * atoms.spread_A2))
    swing = None
    if atoms.swing is not None:
        swing = np.exp((quadratic_terms(hkl) @ atoms.swing).astype(np.float32))
    sums = np.empty((1 if atoms.centrosymmetric else 2, *factors.shape))
    for wave, total in zip((np.cos, np.sin), sums, strict=False):
        terms = wave(phase)
        if swing is not None:
            terms *= swing
        total[:] = terms @ atoms.weights
    if swing is None:
        sums *= factors
    sums[np.abs(sums) < atoms.weights.sum(axis=0) * factors * _CANCELLED] = 0.0
    return sums


def _intensities(
    atoms: _Atoms, sums: Floats, inverse_d2: Floats, xray_energy_eV: float | None
) -> Floats:
    """Return |F|² for X-rays, electrons, neutrons, (3, n)."""
    amplitude = amplitudes(atoms.kinds, inverse_d2 / 4)
    table = np.zeros((4, *amplitude.xray.shape))  # X-rays, electrons, neutrons, and f″
    table[0], table[1] = amplitude.xray, amplitude.electron
    if amplitude.neutron is not None:
        table[2] = amplitude.neutron
    if xray_energy_eV is not None:
        real, table[3] = np.array([dispersion(kind, xray_energy_eV) for kind in atoms.kinds]).T
        table[0] += real
    waves = np.einsum("xne,pne->xpn", sums, table)
    f2 = (waves * waves).sum(axis=0)
    f2[0] += f2[3]  # h and -h differ by the sign with which f″ joins: no cross term in their mean
    return np.asarray(f2[:3])
