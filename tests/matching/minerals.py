"""Powder patterns of mixtures, computed with gemmi from handbook structures, not with phaseid.

Cells and coordinates: R. W. G. Wyckoff, Crystal Structures, 2nd ed., rounded, from memory; the
cells of corundum, zincite and rutile those of SRM 674 (International Tables C, Table 5.2.11.1). B
values are usual ones at room temperature, from memory. Scattering factors with dispersion: gemmi
(IT92, Cromer & Liberman).
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import gemmi
import numpy as np

from phaseid.rings import RingList, rings_from_values

CU_KA1_A, CU_KA1_EV = 1.5405929, 8047.83
Spot = tuple[str, float, float, float, float]  # element, x, y, z, B in Å²


@dataclass(frozen=True)
class Mineral:
    """One structure: cell edges (Å), gamma (degrees), space group, sites."""

    a: float
    c: float
    gamma: float
    group: str
    sites: tuple[Spot, ...]


MINERALS = {
    "corundum": Mineral(
        4.75893, 12.9917, 120.0, "R -3 c:H",
        (("Al", 0, 0, 0.3523, 0.28), ("O", 0.3064, 0, 0.25, 0.32)),
    ),
    "fluorite": Mineral(
        5.4638, 5.4638, 90.0, "F m -3 m",
        (("Ca", 0, 0, 0, 0.47), ("F", 0.25, 0.25, 0.25, 0.67)),
    ),
    "zincite": Mineral(
        3.24981, 5.20653, 120.0, "P 63 m c",
        (("Zn", 1 / 3, 2 / 3, 0, 0.6), ("O", 1 / 3, 2 / 3, 0.382, 0.6)),
    ),
    "rutile": Mineral(
        4.59365, 2.95874, 90.0, "P 42/m n m",
        (("Ti", 0, 0, 0, 0.45), ("O", 0.3053, 0.3053, 0, 0.4)),
    ),
    "halite": Mineral(
        5.6402, 5.6402, 90.0, "F m -3 m", (("Na", 0, 0, 0, 1.6), ("Cl", 0.5, 0.5, 0.5, 1.3)),
    ),
    "periclase": Mineral(
        4.2117, 4.2117, 90.0, "F m -3 m", (("Mg", 0, 0, 0, 0.32), ("O", 0.5, 0.5, 0.5, 0.36)),
    ),
}  # fmt: skip


@cache
def powder(name: str, d_min_A: float = 0.95) -> tuple[float, list[tuple[float, float]]]:
    """Density (g/cm³) and lines (d in Å, m|F|²/V²) of a mineral."""
    mineral = MINERALS[name]
    small = gemmi.SmallStructure()
    small.cell = gemmi.UnitCell(mineral.a, mineral.a, mineral.c, 90, 90, mineral.gamma)
    small.spacegroup = gemmi.SpaceGroup(mineral.group)
    for number, (element, x, y, z, b) in enumerate(mineral.sites):
        site = gemmi.SmallStructure.Site()
        site.label = f"{element}{number}"
        site.element = gemmi.Element(element)
        site.fract = gemmi.Fractional(x, y, z)
        site.occ = 1.0
        site.u_iso = b / (8 * np.pi**2)
        small.add_site(site)
    small.setup_cell_images()
    atoms = small.get_all_unit_cell_sites()
    density = sum(atom.element.weight for atom in atoms) / small.cell.volume / 0.602214076
    small.change_occupancies_to_crystallographic()
    calculator = gemmi.StructureFactorCalculatorX(small.cell)
    calculator.addends.add_cl_fprime(CU_KA1_EV)
    operations = small.spacegroup.operations().sym_ops
    lines = []
    for hkl in gemmi.make_miller_array(small.cell, small.spacegroup, d_min_A):
        images = {tuple(op.apply_to_hkl(hkl.tolist())) for op in operations}
        multiplicity = len(images | {tuple(-i for i in image) for image in images})
        f = abs(calculator.calculate_sf_from_small_structure(small, hkl.tolist()))
        lines.append(
            (small.cell.calculate_d(hkl.tolist()), multiplicity * f**2 / small.cell.volume**2)
        )
    return density, lines


def lorentz_polarisation(theta: float) -> float:
    """Powder diffractometer without a monochromator (International Tables C, 6.2)."""
    return float((1 + np.cos(2 * theta) ** 2) / (np.sin(theta) ** 2 * np.cos(theta)))


def mixed(weights: dict[str, float], seed: int, *, least: float = 0.01) -> RingList:
    """Rings of a mixture as a diffractometer with Cu Kα1 lists them.

    Lines within 0.12° in 2θ are one ring; positions stray by 0.01°, heights by 8 %; rings below
    `least` of the strongest and outside 20° to 105° are not listed.
    """
    rng = np.random.default_rng(seed)
    lines = []
    for name, weight in weights.items():
        density, own = powder(name)
        for d, strength in own:
            theta = float(np.arcsin(CU_KA1_A / 2 / d))
            lines.append(
                (np.degrees(2 * theta), weight / density * strength * lorentz_polarisation(theta))
            )
    merged: list[tuple[float, float]] = []
    for angle, height in sorted(lines):
        if merged and angle - merged[-1][0] < 0.12:
            before, standing = merged[-1]
            total = standing + height
            merged[-1] = ((before * standing + angle * height) / total, total)
        else:
            merged.append((angle, height))
    strongest = max(height for _, height in merged)
    kept = [(a, h) for a, h in merged if h > least * strongest and 20 < a < 105]
    return rings_from_values(
        [round(angle + rng.normal(0, 0.01), 3) for angle, _ in kept],
        column="two_theta_deg",
        probe="x-ray Cu Ka1",
        sigma=0.015,
        intensities=[height / strongest * 100 * rng.lognormal(0, 0.08) for _, height in kept],
    )
