"""Crystal -> Lines: d, hkl, multiplicity and |F|² for X-rays, electrons and neutrons."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.metric import volume_A3
from phaseid.crystal.operations import INDEX_CODE, read_operations
from phaseid.crystal.reflections import FINEST_D_A, unique_reflections
from phaseid.crystal.scattering import CU_KA1_EV
from phaseid.crystal.structure_factor import squared_amplitudes
from phaseid.errors import InputError

Floats = NDArray[np.float64]

COINCIDENT = 2e-5
"""Lines whose d differ by less than this part are one line."""


@dataclass(frozen=True, slots=True, eq=False)
class Lines:
    """The lines of one phase, sorted by falling d, coincident reflections merged.

    `d_A` (n,) float64, Å. `hkl` (n, 3) int, of the strongest contributor, in the cell of the
    source. `multiplicity` (n,) int counts hkl and its Friedel mate. `f2_xray`, `f2_electron`,
    `f2_neutron` (n,) float64 are |F|² of one reflection per cell in electron², Å², fm²,
    displacement included, such that multiplicity × f2 is the sum over merged reflections.
    `volume_A3` is the cell's. The list holds every line down to `complete_to_A`, except lines whose
    m|F|²d² is below `floor` times the strongest for every probe.
    """

    d_A: Floats
    hkl: NDArray[np.int32]
    multiplicity: NDArray[np.int32]
    f2_xray: Floats
    f2_electron: Floats
    f2_neutron: Floats
    volume_A3: float
    complete_to_A: float
    floor: float = 0.0


def compute_lines(
    crystal: Crystal,
    *,
    d_min_A: float | None = None,
    xray_energy_eV: float | None = CU_KA1_EV,
) -> Lines:
    """Compute the lines of a crystal.

    Without `d_min_A` they reach 0.6 Å, or as far as about 1000 unique reflections go, but at least
    1.2 Å. `xray_energy_eV` is that of f′ and f″ (Cu Kα1 unless told otherwise); None leaves them
    out. |F|² is the mean of Friedel mates; atoms are neutral; sites without displacement take the
    default of `phaseid.crystal.displacement`. Tables: `phaseid.crystal.scattering`.

    Raises InputError if the cell has no volume, the operations are no group, an atom has no
    tabulated scattering factors, or `d_min_A` asks for more reflections than can be listed.
    """
    if not crystal.sites:
        raise InputError(f"{crystal.name or crystal.formula or 'the structure'} has no atoms")
    operations = read_operations(crystal.operations)
    found = unique_reflections(crystal.cell, operations, d_min_A)
    f2 = squared_amplitudes(crystal, operations, found, xray_energy_eV)
    hkl, multiplicity, inverse_d2 = found.hkl, found.multiplicity, found.inverse_d2
    if not f2.all():
        lit = f2.any(axis=0)
        hkl, multiplicity, inverse_d2, f2 = hkl[lit], multiplicity[lit], inverse_d2[lit], f2[:, lit]
    hkl, multiplicity, inverse_d2, f2 = _merged(hkl, multiplicity, inverse_d2, f2)
    return Lines(
        d_A=1 / np.sqrt(inverse_d2),
        hkl=hkl.astype(np.int32),
        multiplicity=multiplicity.astype(np.int32),
        f2_xray=f2[0],
        f2_electron=f2[1],
        f2_neutron=f2[2],
        volume_A3=volume_A3(crystal.cell),
        complete_to_A=found.d_min_A,
    )


def trim(lines: Lines, floor: float) -> Lines:
    """Drop the lines whose m|F|²d² is below `floor` times the strongest for every probe.

    The strongest is taken among lines with d ≥ 0.6 Å, so that it does not depend on how far the
    list goes. Raises InputError unless 0 ≤ floor < 1.
    """
    if not 0 <= floor < 1:
        raise InputError(f"the floor must lie between 0 and 1, not {floor:g}")
    weight = lines.multiplicity * lines.d_A**2
    strength = np.stack([lines.f2_xray, lines.f2_electron, lines.f2_neutron]) * weight
    counted = strength[:, lines.d_A >= FINEST_D_A]
    strongest = counted.max(axis=1, initial=0.0)[:, None]
    kept = ((strength >= floor * strongest) & (strength > 0)).any(axis=0)
    return replace(
        lines,
        d_A=lines.d_A[kept],
        hkl=lines.hkl[kept],
        multiplicity=lines.multiplicity[kept],
        f2_xray=lines.f2_xray[kept],
        f2_electron=lines.f2_electron[kept],
        f2_neutron=lines.f2_neutron[kept],
        floor=max(lines.floor, floor),
    )


def _merged(
    hkl: Floats, multiplicity: NDArray[np.int64], inverse_d2: Floats, f2: Floats
) -> tuple[Floats, NDArray[np.int64], Floats, Floats]:
    """Merge reflections that coincide: hkl, multiplicity, 1/d², |F|²; hkl of the strongest."""
    new = np.empty(len(hkl), dtype=bool)
    new[:1] = True
    tolerance = 2 * COINCIDENT  # of 1/d²
    np.greater(inverse_d2[1:], inverse_d2[:-1] * (1 + tolerance), out=new[1:])
    if new.all():
        return hkl, multiplicity, inverse_d2, f2
    (first,) = new.nonzero()
    line = new.cumsum() - 1
    within = (inverse_d2 / inverse_d2[first][line] - 1) / tolerance
    if within.max() > 1:  # a chain of near neighbours longer than the tolerance: cut it
        new[1:] |= np.diff(np.floor(within)) > 0
        (first,) = new.nonzero()
        line = new.cumsum() - 1
    weighted = multiplicity * f2
    total = np.add.reduceat(multiplicity, first)
    summed = np.add.reduceat(weighted, first, axis=1)
    highest = np.maximum.reduceat(weighted[0], first)[line]
    (strong,) = (weighted[0] >= highest * (1 - 1e-6)).nonzero()
    if len(strong) > len(first):  # of equals the one of highest h, k, l
        strong = strong[(hkl[strong] @ INDEX_CODE).argsort()]
    strongest = np.empty_like(first)
    strongest[line[strong]] = strong
    return hkl[strongest], total, inverse_d2[strongest], summed / total
