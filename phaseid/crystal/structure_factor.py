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
from phaseid.crystal.orbits import orbits
from phaseid.crystal.reflections import Reflections, reciprocal_metric
from phaseid.crystal.scattering import amplitudes, dispersion

Floats = NDArray[np.float64]

_CHUNK = 1 << 16  # phases held at once: they stay in the cache, and memory stays flat
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
    kinds = sorted({site.element for site in crystal.sites})
    s2 = reflections.inverse_d2 / 4
    sums, swing = _geometric_sums(crystal, operations, reflections, kinds)
    atom = amplitudes(kinds, s2)
    table = np.zeros((4, *atom.xray.shape))  # X-rays, their part from f″, electrons, neutrons
    table[0], table[2] = atom.xray, atom.electron
    if atom.neutron is not None:
        table[3] = atom.neutron
    if xray_energy_eV is not None:
        real, table[1] = np.array([dispersion(kind, xray_energy_eV) for kind in kinds]).T
        table[0] += real
    if swing is not None:
        table *= swing
    waves = np.einsum("xne,pne->xpn", sums, table)
    xray, resonant, electron, neutron = (waves * waves).sum(axis=0)
    # h and -h differ by the sign with which f″ joins: their mean has no cross term
    return SquaredAmplitudes(xray + resonant, electron, neutron)


def _geometric_sums(
    crystal: Crystal, operations: Operations, reflections: Reflections, kinds: list[str]
) -> tuple[Floats, Floats | None]:
    """Return Σ weight · cos and sin (2 or 1, n, e), and Debye-Waller factors (n, e) of each kind.

    Where atoms of one kind swing differently the factors are in the sums, and None is returned.
    """
    images = orbits(crystal.cell, operations, crystal.sites)
    index = {kind: i for i, kind in enumerate(kinds)}
    kind_of_site = np.array([index[site.element] for site in crystal.sites])
    kind = kind_of_site[images.site]
    weights = np.zeros((len(kind), len(kinds)), dtype=np.float32)
    weights[np.arange(len(kind)), kind] = images.weight

    spread = isotropic_U_A2(crystal.sites, crystal.cell)
    least = np.full(len(kinds), np.inf)
    np.minimum.at(least, kind_of_site, spread)
    alike = np.array_equal(least[kind_of_site], spread) and not any(
        site.u_aniso_A2 for site in crystal.sites
    )
    factors = np.exp(reflections.inverse_d2[:, None] * (-2 * math.pi**2 * least))
    own = None
    if not alike:
        own = exponents(
            crystal.sites, crystal.cell, reciprocal_metric(crystal.cell), operations, images
        )
    sums = np.empty((1 if operations.centrosymmetric else 2, *factors.shape))
    step = max(1, min(len(factors), _CHUNK // len(kind)))
    turns, whole = np.empty((2, step, len(kind)))
    phase, terms = np.empty((2, step, len(kind)), dtype=np.float32)
    for start in range(0, len(factors), step):
        hkl = reflections.hkl[start : start + step]
        n = len(hkl)
        np.matmul(hkl, images.fract.T, out=turns[:n])
        np.rint(turns[:n], out=whole[:n])
        turns[:n] -= whole[:n]
        np.multiply(turns[:n], 2 * math.pi, out=phase[:n], casting="same_kind")
        swing = None
        if own is not None:
            swing = np.exp((quadratic_terms(hkl) @ own).astype(np.float32))
        for wave, total in zip((np.cos, np.sin), sums, strict=False):
            wave(phase[:n], out=terms[:n])
            if swing is not None:
                terms[:n] *= swing
            total[start : start + n] = terms[:n] @ weights
    noise = weights.sum(axis=0) * (1.0 if alike else factors) * _CANCELLED
    sums[np.abs(sums) < noise] = 0.0
    return sums, factors if alike else None
