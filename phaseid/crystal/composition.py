"""What a cell holds: atoms of each element, formula, density, volume."""

from __future__ import annotations

import math
from collections.abc import Mapping

import gemmi

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.formula import chemical_formula
from phaseid.crystal.metric import volume_A3
from phaseid.crystal.positions import multiplicities
from phaseid.crystal.symmetry import operation_arrays

_DALTON_G = 1.66053906892e-24  # CODATA 2022
_A3_TO_CM3 = 1e-24

__all__ = [
    "atomic_mass_u",
    "cell_contents",
    "density_g_cm3",
    "density_of_contents",
    "reduced",
    "volume_A3",
]


def cell_contents(crystal: Crystal) -> dict[str, float]:
    """Return the number of atoms per cell of each element ("D" apart from "H"), by symbol."""
    rotations, translations = operation_arrays(crystal.operations)
    counts = multiplicities(
        [site.fract for site in crystal.sites], rotations, translations, crystal.cell
    )
    contents: dict[str, float] = {}
    for site, count in zip(crystal.sites, counts, strict=True):
        contents[site.element] = contents.get(site.element, 0.0) + site.occupancy * int(count)
    return dict(sorted(contents.items()))


def atomic_mass_u(element: str) -> float:
    """Return the standard atomic weight in daltons (gemmi's table; deuterium 2.014)."""
    return 2.01410178 if element == "D" else float(gemmi.Element(element).weight)


def density_of_contents(contents: Mapping[str, float], volume: float) -> float:
    """Return g/cm³ of `contents` (atoms per cell) in `volume` Å³."""
    mass = sum(atomic_mass_u(element) * n for element, n in contents.items())
    return mass * _DALTON_G / (volume * _A3_TO_CM3)


def density_g_cm3(crystal: Crystal) -> float:
    """Return the X-ray density, g/cm³: mass of the cell's atoms over the cell volume."""
    return density_of_contents(cell_contents(crystal), volume_A3(crystal.cell))


def reduced(contents: Mapping[str, float], z_hint: float | None = None) -> tuple[str, float]:
    """Return the reduced formula as chemists write it, and how many of them the cell holds.

    Whole numbers of atoms are divided by their common divisor. Otherwise the cell holds `z_hint`
    formula units, or, without one, the common divisor of the whole numbers among them.
    """
    kept = {el: n for el, n in contents.items() if n > 1e-6}
    whole = [round(n) for n in kept.values() if abs(n - round(n)) < 1e-3 and round(n) > 0]
    z: float = math.gcd(*whole) if whole else 1
    if len(whole) < len(kept) and z_hint is not None and z_hint > 0:
        z = z_hint
    return chemical_formula({el: n / z for el, n in kept.items()}), float(z)
