"""Sites + symmetry + cell -> one consistent structure, judged against what its source states.

Where the symmetry items of a file can mean several groups, each is tried: the cell must be left
unchanged by the operations, and the contents should fit formula and Z.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from phaseid.crystal.agreement import Stated, agree, shares_of_unknown
from phaseid.crystal.atom_sites import ReadSites
from phaseid.crystal.crystal import Finding, Site
from phaseid.crystal.found_symmetry import found_symmetry
from phaseid.crystal.metric import Cell, volume_A3
from phaseid.crystal.occupancies import settle_positions
from phaseid.crystal.positions import ROUNDING_A, Placed, close_pairs, place
from phaseid.crystal.symmetry import Symmetry, fits_cell

MIN_VOLUME_A3 = 5.0  # beryllium, the smallest atom to form a metal: 8 Å³ an atom (common practice)
MAX_ATOMS = 200_000
# atoms per Å³: 0.176 in diamond, about 0.01 in the airiest frameworks
DENSITY_RANGE_A3 = (0.001, 0.5)
NEIGHBOUR_A = 1.3
_NOTABLE_SHIFT_A = 0.05
_BEST = 3


@dataclass(frozen=True, slots=True)
class StructureProblem:
    """Why no structure results: a code and a sentence."""

    code: str
    reason: str


@dataclass(frozen=True, slots=True)
class Structure:
    """A structure in one symmetry.

    `contents` are atoms per cell, `units` the formula units they make up, `score` the fit to what
    the source states, `merged` whether sites repeat each other in this symmetry.
    """

    symmetry: Symmetry
    sites: tuple[Site, ...]
    contents: dict[str, float]
    findings: tuple[Finding, ...]
    units: float
    score: int
    merged: bool


def build(
    cell: Cell, candidates: Sequence[Symmetry], read: ReadSites, stated: Stated
) -> Structure | StructureProblem:
    """Return the structure in the candidate group that suits cell and formula best."""
    volume = volume_A3(cell)
    if volume < MIN_VOLUME_A3:
        return StructureProblem("absurd_cell", f"the cell has a volume of only {volume:.3g} Å³")
    tried: list[Structure] = []
    problem: StructureProblem | None = None
    for symmetry in candidates:
        if symmetry.last_resort and any(s.score == _BEST for s in tried):
            continue
        if not fits_cell(symmetry, cell):
            continue
        result = _structure(cell, volume, symmetry, read, stated)
        if isinstance(result, StructureProblem):
            problem = problem or result
            continue
        if symmetry.last_resort and result.score < _BEST:
            continue
        tried.append(result)
        if result.score == _BEST and not symmetry.guess and not _only_identity(symmetry, stated):
            break
    if not tried:
        return problem or StructureProblem(
            "cell_symmetry_conflict",
            f"the cell {_shown(cell)} does not have the symmetry {candidates[0].symbol} stated",
        )
    return _chosen(tried, stated)


def _chosen(tried: Sequence[Structure], stated: Stated) -> Structure | StructureProblem:
    best = max(s.score for s in tried)
    leading = [s for s in tried if s.score == best]
    chosen = leading[0]
    contradicted = len(tried) > 1 and _only_identity(tried[0].symmetry, stated)
    if contradicted and tried[1].merged:
        return tried[0]  # the atoms listed repeat each other under the symbol: the whole cell is
    if contradicted:
        return StructureProblem(
            "symmetry_ambiguous",
            f"only x,y,z is listed beside the symbol {tried[1].symmetry.symbol}; no formula with Z "
            "tells whether the atoms of the whole cell are listed",
        )
    if len(leading) == 1:
        return chosen
    symbols = " or ".join(s.symmetry.symbol for s in leading)
    if chosen.symmetry.guess:
        if any(f.code == "symmetry_from_number" for f in chosen.findings):
            return StructureProblem(
                "symmetry_ambiguous",
                f"only the space group number {chosen.symmetry.number} is given, which leaves the "
                f"setting open ({symbols})",
            )
        note = Finding(
            "setting_assumed",
            f"the symbol leaves the setting open ({symbols}) and no operations are listed; "
            f"{chosen.symmetry.symbol} is assumed",
        )
        return replace(chosen, findings=(*chosen.findings, note))
    return chosen


def _only_identity(symmetry: Symmetry, stated: Stated) -> bool:
    """Tell whether only x,y,z is listed and the source does not say what the cell holds."""
    return len(symmetry.operations) == 1 and (stated.formula is None or stated.z is None)


def _structure(
    cell: Cell, volume: float, symmetry: Symmetry, read: ReadSites, stated: Stated
) -> Structure | StructureProblem:
    sites = [*read.sites, *read.unknown]
    fract = np.array([site.fract for site in sites], dtype=np.float64)
    occupancy = np.array([site.occupancy for site in sites])
    placed = place(fract, occupancy, symmetry.maps, cell)
    counts, furthest_A = placed.multiplicity.tolist(), max(placed.shift_A.tolist())
    if sum(counts) > MAX_ATOMS:
        return StructureProblem(
            "too_many_sites",
            f"the cell would hold {sum(counts)} atoms, at most {MAX_ATOMS} are taken",
        )
    pairs = close_pairs(placed.fract, symmetry.maps, cell, NEIGHBOUR_A)
    if pairs is None:
        return StructureProblem("overlapping_atoms", "most of the listed atoms lie on each other")
    settled = settle_positions(sites, pairs, placed.crowded)
    if isinstance(settled, str):
        return StructureProblem("bad_occupancy", settled)
    kept, notes = settled
    shifted = _shifts(sites, placed) if furthest_A > _NOTABLE_SHIFT_A else []
    findings = [*symmetry.findings, *shifted, *notes]
    if furthest_A > 0:
        sites = [_moved(site, placed, i) for i, site in enumerate(sites)]
    moved = [(sites[i], counts[i]) for i in kept]
    known = [(site, count) for site, count in moved if site.element]
    unknown = [(site, count) for site, count in moved if not site.element]
    contents = _contents(known)
    if unknown:
        shares = shares_of_unknown(contents, unknown, stated)
        names = ", ".join(sorted({site.label for site, _ in unknown})[:6])
        if shares is None:
            return StructureProblem(
                "unknown_element",
                f"the element of site {names} cannot be told from its label or type symbol",
            )
        for site, count in unknown:
            known += [
                (replace(site, element=el, occupancy=site.occupancy * share), count)
                for el, share in shares.items()
            ]
        contents = _contents(known)
        mixed = ", ".join(f"{el} {share:.3f}" for el, share in shares.items())
        findings.append(
            Finding(
                "unknown_element",
                f"site {names} names no element; it is read as {mixed}, what the stated formula "
                "lacks",
            )
        )
    per_A3 = sum(contents.values()) / volume
    if not DENSITY_RANGE_A3[0] <= per_A3 <= DENSITY_RANGE_A3[1]:
        return StructureProblem(
            "absurd_cell",
            f"{sum(contents.values()):.6g} atoms in {volume:.6g} Å³ are {per_A3:.3g} atoms per Å³; "
            f"crystals have {DENSITY_RANGE_A3[0]:g} to {DENSITY_RANGE_A3[1]:g}",
        )
    if len(symmetry.operations) == 1:
        higher = found_symmetry(cell, [site for site, _ in known])
        findings += [higher] if higher else []
    agreement = agree(contents, volume, stated)
    merged = any(note.code == "duplicate_sites" for note in notes)
    overlapping = any(note.code == "overlapping_atoms" for note in notes)
    sound = furthest_A < ROUNDING_A and not overlapping
    return Structure(
        symmetry,
        tuple(site for site, _ in known),
        contents,
        (*findings, *agreement.findings),
        stated.z or agreement.units or float(math.gcd(*(count for _, count in known))),
        agreement.score + sound,
        merged,
    )


def _moved(site: Site, placed: Placed, index: int) -> Site:
    if placed.shift_A[index] == 0:
        return site
    x, y, z = placed.fract[index].tolist()
    return replace(site, fract=(x, y, z))


def _contents(sites: Sequence[tuple[Site, int]]) -> dict[str, float]:
    contents: dict[str, float] = {}
    for site, count in sites:
        contents[site.element] = contents.get(site.element, 0.0) + site.occupancy * count
    return contents


def _shifts(sites: Sequence[Site], placed: Placed) -> list[Finding]:
    labels = [sites[i].label for i in np.flatnonzero(placed.shift_A > _NOTABLE_SHIFT_A).tolist()]
    return [
        Finding(
            "special_position",
            f"moved by up to {placed.shift_A.max():.2f} Å onto the special position beside: "
            + ", ".join(labels[:6]),
        )
    ]


def _shown(cell: Cell) -> str:
    a, b, c, alpha, beta, gamma = cell
    return f"({a:g}, {b:g}, {c:g} Å; {alpha:g}, {beta:g}, {gamma:g}°)"
