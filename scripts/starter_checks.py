"""Whether the facts of one phase hang together: contents, density, contacts, symmetry."""

from __future__ import annotations

import itertools
import math
import warnings
from typing import Any

import gemmi
import numpy as np
from starter_facts import PhaseFact, atoms

Filled = dict[tuple[int, int, int], dict[str, float]]

AVOGADRO_A3 = 0.602214076  # u/Å³ -> g/cm³ is division by this; CODATA, exact
SHORTEST_OF_RADII = 0.70  # of the sum of covalent radii (Cordero 2008, as gemmi holds them)


def contents(phase: PhaseFact) -> tuple[dict[str, float], float]:
    """Atoms per cell by element, and how many formula units that makes (least squares)."""
    held: dict[str, float] = {}
    for site in phase.structure().get_all_unit_cell_sites():
        held[site.type_symbol] = held.get(site.type_symbol, 0.0) + site.occ
    wanted = placed(phase)
    both = sum(held.get(e, 0.0) * n for e, n in wanted.items())
    z = both / sum(n * n for n in wanted.values())
    return held, round(z, 4)


def placed(phase: PhaseFact) -> dict[str, float]:
    """Atoms of the formula that the sites must hold: not hydrogen where it is not placed."""
    wanted = atoms(phase.formula)
    if "hydrogen" in phase.options.get("allow", []):
        wanted.pop("H", None)
    return wanted


def density_g_cm3(phase: PhaseFact, held: dict[str, float]) -> float:
    held = dict(held)
    if "hydrogen" in phase.options.get("allow", []):
        held["H"] = atoms(phase.formula).get("H", 0.0) * contents(phase)[1]
    mass = sum(n * (2.014 if e == "D" else gemmi.Element(e).weight) for e, n in held.items())
    return mass / gemmi.UnitCell(*phase.cell).volume / AVOGADRO_A3


def short_contacts(phase: PhaseFact) -> list[str]:
    """Pairs of sites too close to be both there."""
    small = phase.structure()
    orth = np.array(small.cell.orth.mat.tolist())
    sites = small.get_all_unit_cell_sites()
    every = np.array([s.fract.tolist() for s in sites])
    shifts = np.array(list(itertools.product((-1, 0, 1), repeat=3)))
    found = []
    for first in small.sites:
        apart = every - np.array(first.fract.tolist())
        apart -= np.round(apart)
        distance = np.linalg.norm((apart[:, None, :] + shifts) @ orth.T, axis=2)
        for second, row in zip(sites, distance, strict=True):
            itself = first.label == second.label and row.min() < 0.01
            nearest = float(np.sort(row)[1 if itself else 0])
            hydrogen = first.type_symbol in "HD" or second.type_symbol in "HD"
            radii = first.element.covalent_r + second.element.covalent_r
            floor = 0.6 if hydrogen else max(1.0, SHORTEST_OF_RADII * radii)
            together = itself or first.occ + second.occ > 1.0001
            if together and nearest < floor:
                found.append(f"{first.label}-{second.label} {nearest:.2f} A (< {floor:.2f})")
    return sorted(set(found))


def fill_cell(small: gemmi.SmallStructure) -> Filled:
    """What sits where in the filled cell, positions in 1e-4 of the axes."""
    filled: Filled = {}
    for site in small.get_all_unit_cell_sites():
        name = site.element.name if site.type_symbol != "D" else "D"
        x, y, z = (round(v * 10000) % 10000 for v in site.fract.tolist())
        here = filled.setdefault((x, y, z), {})
        here[name] = round(here.get(name, 0.0) + site.occ, 3)
    return filled


def symmetry(cell: gemmi.UnitCell, filled: Filled) -> tuple[Any, list[dict[str, float]]]:
    """Spglib's symmetry data set (tolerance 0.01 Å) or None, and the fillings its types number."""
    import spglib

    fills = [tuple(sorted(f.items())) for f in filled.values()]
    kinds = sorted(set(fills))
    lattice = np.array(cell.orth.mat.tolist()).T.tolist()
    positions = [[x / 10000, y / 10000, z / 10000] for x, y, z in filled]
    types = [kinds.index(f) + 1 for f in fills]
    with warnings.catch_warnings():
        # spglib 2.8 announces another way of reporting errors at every call
        warnings.simplefilter("ignore", DeprecationWarning)
        try:
            data = spglib.get_symmetry_dataset((lattice, positions, types), 1e-2)
        except getattr(spglib, "SpglibError", RuntimeError):  # newer ones raise, older gave None
            data = None
    return data, [dict(k) for k in kinds]


def problems(phase: PhaseFact) -> list[str]:
    """Everything wrong with one phase, in words; empty when it holds together."""
    wrong = []
    held, z = contents(phase)
    wanted = placed(phase)
    loose = atoms(phase.formula).keys() - wanted.keys()
    for element in sorted((set(held) | set(wanted)) - loose):
        have, want = held.get(element, 0.0), wanted.get(element, 0.0) * z
        if not math.isclose(have, want, rel_tol=0.02, abs_tol=0.005):
            wrong.append(
                f"the sites hold {have:g} {element} per cell, the formula {phase.formula} wants "
                f"{want:g} (Z = {z:g})"
            )
    whole = all(s.occupancy == 1 for s in phase.sites)
    if not wrong and whole and abs(z - round(z)) > 0.01:
        wrong.append(f"Z = {z:g} formula units per cell is not a whole number")
    density = density_g_cm3(phase, held)
    volume = gemmi.UnitCell(*phase.cell).volume / max(sum(held.values()), 1e-9)
    if not 0.05 < density < 23.0 or not 4.0 < volume < 130.0:
        wrong.append(f"density {density:.2f} g/cm3, {volume:.1f} A3 per atom: not believable")
    stated = phase.options.get("density")
    if stated and abs(density / stated - 1) > 0.02:
        wrong.append(f"density {density:.3f} g/cm3 from the cell, {stated} stated")
    allowed = phase.options.get("allow", [])
    short = short_contacts(phase)
    if short and "short" not in allowed:
        wrong.append("too close: " + ", ".join(short[:4]))
    if "symmetry" not in allowed:
        data, _ = symmetry(gemmi.UnitCell(*phase.cell), fill_cell(phase.structure()))
        number = None if data is None else int(data.number)
        if number != phase.group.number:
            wrong.append(
                f"group {phase.group.xhm()} ({phase.group.number}) stated, but the filled cell has "
                f"the symmetry of number {number}: a coordinate, the origin or the group is wrong"
            )
    return wrong
