"""Second sources for the starter library: structures from elsewhere to compare ours with.

Measured structures: NCrystal's data library, those of `../shared/data/open_structures.zip` (mostly
Crystallography Open Database), the AFLOW prototypes that pymatgen carries. Measured cells and
patterns without coordinates: `../shared/checks`. Computed structures (relaxed cells, 1-3 % off, but
coordinates worth comparing): the Materials Project set in `../shared/data/mp_structures.zip`.
"""

from __future__ import annotations

import gzip
import json
import re
import zipfile
from collections.abc import Iterator
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import gemmi
import numpy as np
from numpy.typing import NDArray
from starter_checks import Filled, fill_cell, symmetry
from starter_facts import FactError, atoms


@dataclass(frozen=True, slots=True, eq=False)
class Standard:
    """A structure in spglib's standard setting.

    `cell` (a, b, c, alpha, beta, gamma) in Å and degrees; `positions` (n, 3) fractional; `fills`
    (n,) what each position holds, element -> occupancy. `label` names the source, `cod` its number
    in the Crystallography Open Database.
    """

    label: str
    number: int
    cell: tuple[float, ...]
    positions: NDArray[np.float64] = field(repr=False)
    fills: tuple[dict[str, float], ...] = field(repr=False)
    cod: str | None = None

    @property
    def atoms(self) -> float:
        """Atoms per standard cell, partial ones counted by their occupancy."""
        return sum(sum(f.values()) for f in self.fills)

    @property
    def composition(self) -> dict[str, float]:
        """Atomic fractions."""
        held: dict[str, float] = {}
        for fill in self.fills:
            for element, n in fill.items():
                element = "H" if element == "D" else element
                held[element] = held.get(element, 0.0) + n
        total = sum(held.values())
        return {e: n / total for e, n in held.items()}


@dataclass(frozen=True, slots=True)
class CellOnly:
    """A published cell without coordinates, and the lines (d in Å, intensity) if any."""

    label: str
    number: int
    formula: str
    cell: tuple[float, ...]
    lines: tuple[tuple[float, float], ...] = ()


def same_composition(one: dict[str, float], other: dict[str, float]) -> bool:
    return all(abs(one.get(e, 0.0) - other.get(e, 0.0)) < 0.015 for e in {*one, *other})


def standardise(
    cell: gemmi.UnitCell, filled: Filled, label: str, cod: str | None = None
) -> Standard | None:
    """Bring a filled cell (positions in 1e-4) to the standard setting; None if spglib cannot."""
    data, kinds = symmetry(cell, filled)
    if data is None:
        return None
    std = gemmi.UnitCell(*_parameters(data.std_lattice))
    return Standard(
        label=label,
        number=int(data.number),
        cell=tuple(std.parameters),
        positions=np.array(data.std_positions),
        fills=tuple(kinds[t - 1] for t in data.std_types),
        cod=cod,
    )


def _parameters(lattice: NDArray[np.float64]) -> list[float]:
    a, b, c = lattice
    lengths = [float(np.linalg.norm(v)) for v in lattice]
    angles = [
        float(np.degrees(np.arccos(np.clip(u @ v / np.linalg.norm(u) / np.linalg.norm(v), -1, 1))))
        for u, v in ((b, c), (a, c), (a, b))
    ]
    return lengths + angles


def ncrystal() -> Iterator[Standard]:
    import NCrystal

    for file in NCrystal.browseFiles():
        if "_sg" not in file.name:
            continue
        info = NCrystal.createInfo(f"{file.name};dcutoff=-1")
        s = info.structure_info
        cell = gemmi.UnitCell(*(s[k] for k in ("a", "b", "c", "alpha", "beta", "gamma")))
        filled: Filled = {}
        for kind in info.atominfos:
            element = kind.atomData.displayLabel()
            for position in kind.positions:
                x, y, z = (round(v * 10000) % 10000 for v in position)
                filled[x, y, z] = {re.sub(r"\d+$", "", element): 1.0}
        found = standardise(cell, filled, f"NCrystal {file.name}")
        if found:
            yield found


def open_structures(path: Path) -> Iterator[Standard]:
    with zipfile.ZipFile(path) as archive:
        for name in archive.namelist():
            text = archive.read(name).decode("utf-8", "replace")
            try:
                block = gemmi.cif.read_string(text).sole_block()
                small = gemmi.make_small_structure_from_block(block)
                small.determine_and_set_spacegroup("S.2")
                small.setup_cell_images()
            except (ValueError, RuntimeError):
                continue
            if not small.sites or len(small.sites) > 60:
                continue
            code = block.find_value("_cod_database_code")
            found = re.search(r"\d{7}", code or "") or re.search(r"data_(\d{7})", text)
            cod = found.group() if found else None
            label = f"COD {cod}" if cod else f"open structure {name}"
            standard = standardise(small.cell, fill_cell(small), label, cod)
            if standard:
                yield standard


def aflow() -> Iterator[Standard]:
    import pymatgen.analysis.prototypes as prototypes

    path = Path(prototypes.__file__).parent / "aflow_prototypes.json.gz"
    for entry in json.loads(gzip.decompress(path.read_bytes())):
        structure = entry["snl"]
        lattice = structure["lattice"]
        cell = gemmi.UnitCell(*(lattice[k] for k in ("a", "b", "c", "alpha", "beta", "gamma")))
        filled: Filled = {}
        for site in structure["sites"]:
            x, y, z = (round(v * 10000) % 10000 for v in site["abc"])
            filled[x, y, z] = {s["element"]: s["occu"] for s in site["species"]}
        found = standardise(cell, filled, f"AFLOW prototype {entry['tags']['aflow']}")
        if found:
            yield found


def computed(path: Path, wanted: set[tuple[frozenset[str], int]]) -> Iterator[Standard]:
    """Computed structures with the wanted elements and space group numbers."""
    with zipfile.ZipFile(path) as archive:
        for name in archive.namelist():
            if not name.endswith(".cif"):
                continue
            text = archive.read(name).decode()
            formula = re.search(r"_chemical_formula_sum '([^']*)'", text)
            number = re.search(r"_space_group_IT_number (\d+)", text)
            if not formula or not number:
                continue
            elements = frozenset(re.findall(r"[A-Z][a-z]?", formula.group(1)))
            if (elements, int(number.group(1))) not in wanted:
                continue
            small = gemmi.make_small_structure_from_block(gemmi.cif.read_string(text).sole_block())
            label = "computed structure (Materials Project data)"
            standard = standardise(small.cell, fill_cell(small), label)
            if standard:
                yield standard


def cells_only(checks: Path) -> Iterator[CellOnly]:
    """Certified and handbook cells, and published powder patterns."""
    data: dict[str, Any] = json.loads((checks / "published_checks.json").read_text("utf-8"))
    for row in data["handbook_lattice_parameters"]:
        if row.get("handbook_A"):
            a = float(row["handbook_A"])
            label = row["handbook"].replace(" (memory)", ", from memory")
            yield CellOnly(label, int(row["sg"]), row["material"], (a, a, a, 90, 90, 90))
    for row in json.loads((checks / "published_patterns.json").read_text("utf-8")):
        lines = tuple((float(line["d_A"]), float(line["I"])) for line in row["lines"])
        try:
            atoms(row["formula"])
        except FactError:
            continue
        label = f"powder pattern, {row['source']}" + ", from memory" * bool(row.get("memory"))
        number = int(row["space_group_number"])
        yield CellOnly(label, number, row["formula"], tuple(row["cell"]), lines)
