"""Compare the starter library's facts with second sources; the result is data/starter/checks.csv.

Same composition, space group and atoms per cell; then the cell in spglib's standard setting must
agree within 0.5 % (5 % for a computed structure), and the pattern of the other's coordinates in our
cell must look like ours: cosine of the angle between the two lists of m|F|²d² (X-ray, no
displacement, d > 1 Å).
"""

from __future__ import annotations

import itertools
import math
import sys
from pathlib import Path

import gemmi
import numpy as np
from numpy.typing import NDArray
from starter_checks import fill_cell
from starter_facts import PhaseFact, atoms
from starter_sources import (
    CellOnly,
    Standard,
    aflow,
    cells_only,
    computed,
    ncrystal,
    open_structures,
    same_composition,
    standardise,
)

CELL_PERCENT = 0.5
COMPUTED_PERCENT = 5.0
SIMILAR = 0.97
SIMILAR_PUBLISHED = 0.85  # published peak heights carry texture, absorption, displacement
CU_KA1_A = 1.5405929
D_MIN_A = 1.0

Rows = list[dict[str, str]]


def pattern(
    cell: tuple[float, ...],
    positions: NDArray[np.float64],
    fills: tuple[dict[str, float], ...],
    d_min: float = D_MIN_A,
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """d (n,) in Å, falling, and m|F|²d² (n,), coincident reflections summed."""
    unit = gemmi.UnitCell(*cell)
    tops = [int(x / d_min) + 1 for x in cell[:3]]
    hkl = np.array(list(itertools.product(*(range(-t, t + 1) for t in tops))))
    frac = np.array(unit.frac.mat.tolist())
    g = np.linalg.norm(hkl @ frac, axis=1)
    hkl = hkl[(g > 1e-6) & (g <= 1 / d_min)]
    g = np.linalg.norm(hkl @ frac, axis=1)
    order = np.argsort(g)
    hkl, g = hkl[order], g[order]
    wave = np.exp(2j * np.pi * (hkl @ positions.T))
    elements = sorted({e for f in fills for e in f})
    amplitude = np.zeros(len(g), dtype=complex)
    for element in elements:
        table = gemmi.Element("H" if element == "D" else element).it92
        factor = np.array([table.calculate_sf(float(x)) for x in g**2 / 4])
        occupancy = np.array([f.get(element, 0.0) for f in fills])
        amplitude += factor * (wave @ occupancy)
    strength = np.abs(amplitude) ** 2 / g**2
    edges = np.flatnonzero(np.diff(g, prepend=0.0) / g > 2e-4)
    return 1 / g[edges], np.add.reduceat(strength, edges)


def cell_deviation(
    ours: tuple[float, ...], theirs: tuple[float, ...], number: int
) -> tuple[float, tuple[int, int, int]]:
    """Largest relative deviation in per cent, and how their axes are to be permuted."""
    best, axes = math.inf, (0, 1, 2)
    orders = list(itertools.permutations(range(3))) if 16 <= number <= 74 else [(0, 1, 2)]
    for order in orders:
        lengths = max(abs(theirs[j] / ours[i] - 1) for i, j in enumerate(order))
        angles = max(math.radians(abs(theirs[3 + j] - ours[3 + i])) for i, j in enumerate(order))
        if max(lengths, angles) < best:
            best, axes = max(lengths, angles), (order[0], order[1], order[2])
    return best * 100, axes


def similarity(ours: Standard, theirs: Standard, axes: tuple[int, int, int]) -> float:
    """Cosine between our pattern and that of their coordinates in our cell."""
    _, mine = pattern(ours.cell, ours.positions, ours.fills)
    _, other = pattern(ours.cell, theirs.positions[:, axes], theirs.fills)
    return float(mine @ other / math.sqrt((mine @ mine) * (other @ other)))


def row(phase: PhaseFact, label: str, cell: str, like: str, result: str) -> dict[str, str]:
    return {
        "phase": phase.path,
        "formula": phase.formula,
        "compared_with": label,
        "cell_deviation_percent": cell,
        "pattern_similarity": like,
        "result": result,
    }


def compare_structure(
    phase: PhaseFact, ours: Standard, theirs: Standard, percent: float
) -> dict[str, str]:
    deviation, axes = cell_deviation(ours.cell, theirs.cell, ours.number)
    like = similarity(ours, theirs, axes)
    result = "agrees"
    if deviation > percent:
        result = "cell differs"
    elif like < SIMILAR:
        result = "intensities differ"
    if theirs.cod and theirs.cod == phase.cod:
        result = {"agrees": "same data, copied right"}.get(result, f"same data, {result}")
    return row(phase, theirs.label, f"{deviation:.3f}", f"{like:.3f}", result)


def compare_cell(phase: PhaseFact, ours: Standard, theirs: CellOnly) -> dict[str, str]:
    """Compare with a published cell, and with its lines where it has some."""
    if not theirs.lines:
        deviation = max(abs(x / y - 1) for x, y in zip(theirs.cell, ours.cell, strict=True)) * 100
        result = "agrees" if deviation <= CELL_PERCENT else "cell differs"
        return row(phase, theirs.label, f"{deviation:.3f}", "", result)
    d, strength = pattern(ours.cell, ours.positions, ours.fills, 0.78)
    sine = np.clip(CU_KA1_A / 2 / d, None, 0.999)
    cosine = np.sqrt(1 - sine**2)
    height = strength / d**2 * (1 + (1 - 2 * sine**2) ** 2) / (sine**2 * cosine)
    deviation, published, calculated = 0.0, [], []
    strong = height > height.max() / 1000
    for d_A, intensity in theirs.lines:
        if d_A < 0.78:
            continue
        nearest = int(np.argmin(np.where(strong, np.abs(d / d_A - 1), 9.0)))
        deviation = max(deviation, abs(d_A / d[nearest] - 1) * 100)
        if d_A > 1.0:
            published.append(intensity)
            calculated.append(float(height[np.abs(d / d_A - 1) < 0.0045].sum()))
    one, two = np.array(published), np.array(calculated)
    like = float(one @ two / math.sqrt((one @ one) * max(two @ two, 1e-9)))
    result = "agrees"
    if deviation > CELL_PERCENT:
        result = "cell differs"
    elif like < SIMILAR_PUBLISHED:
        result = "intensities differ"
    return row(phase, theirs.label, f"{deviation:.3f}", f"{like:.3f}", result)


def best(rows: Rows) -> Rows:
    """The closest of several entries of one source."""
    order = {"agrees": 0, "same data, copied right": 1, "intensities differ": 2}
    return sorted(
        rows, key=lambda r: (order.get(r["result"], 3), float(r["cell_deviation_percent"]))
    )[:1]


def compare_all(phases: list[PhaseFact], shared: Path) -> Rows:
    """Rows of checks.csv for all phases; absent sources are told on stderr."""
    own: list[tuple[PhaseFact, Standard]] = []
    for phase in phases:
        unit = gemmi.UnitCell(*phase.cell)
        standard = standardise(unit, fill_cell(phase.structure()), phase.path, phase.cod)
        if standard:
            own.append((phase, standard))
    wanted = {(frozenset(o.composition), o.number) for _, o in own}
    sources: list[tuple[str, list[Standard]]] = [
        ("NCrystal", list(ncrystal())),
        ("AFLOW", list(aflow())),
    ]
    archive = shared / "data" / "open_structures.zip"
    if archive.is_file():
        sources.append(("COD", list(open_structures(archive))))
    crowd = shared / "data" / "mp_structures.zip"
    if crowd.is_file():
        sources.append(("computed", list(computed(crowd, wanted))))
    published = list(cells_only(shared / "checks")) if (shared / "checks").is_dir() else []
    for path in (archive, crowd, shared / "checks"):
        if not path.exists():
            print(f"{path} is absent: not compared with it", file=sys.stderr)
    rows: Rows = []
    for phase, ours in own:
        aside = {
            t.partition(":")[0]: t.partition(":")[2].strip()
            for t in phase.options.get("set_aside", [])
        }
        mine: Rows = []
        for source, entries in sources:
            alike = [
                e
                for e in entries
                if e.number == ours.number
                and abs(e.atoms / ours.atoms - 1) < 0.03
                and same_composition(e.composition, ours.composition)
            ]
            if source == "AFLOW" and "AFLOW" in phase.source:
                continue
            if source == "NCrystal" and "NCrystal" in phase.source:
                continue
            percent = COMPUTED_PERCENT if source == "computed" else CELL_PERCENT
            mine += best([compare_structure(phase, ours, e, percent) for e in alike])
        for entry in published:
            counts = atoms(entry.formula)
            total = sum(counts.values())
            share = {e: n / total for e, n in counts.items()}
            if entry.number == ours.number and same_composition(share, ours.composition):
                mine.append(compare_cell(phase, ours, entry))
        for r in mine:
            for name, reason in aside.items():
                if name in r["compared_with"] and not r["result"].endswith(("agrees", "right")):
                    r["result"] = f"set aside: {reason}"
        if not any(
            r["result"] == "agrees" and not r["compared_with"].startswith("computed") for r in mine
        ):
            mine.append(row(phase, "", "", "", "no second source"))
        rows += mine
    return rows
