"""Facts of the starter library: the TOML tables in scripts/starter, read and checked.

One table per class of material (its file name is the class), one `[[phase]]` per structure:

    name = "aluminium"              what people call it, ASCII
    formula = "Al"                  parentheses allowed, "Ca(OH)2"
    group = "F m -3 m"              Hermann-Mauguin symbol with its setting (":1", ":2", ":H", ":R")
    cell = [4.0496]                 free parameters only, in Å and degrees: cubic a; tetragonal and
                                    hexagonal axes a, c; rhombohedral axes a, alpha; orthorhombic
                                    a, b, c; monoclinic a, b, c, angle; triclinic all six
    sites = ["Al 0 0 0"]            element x y z, fractions like 1/3 allowed;
                                    then occ=0.5, B=0.4 (Å²), label=Al1 as needed
    source = "COD 9008460; ..."     where the numbers are from, or "from memory (...)"
    temperature_K, pressure_GPa     optional
    mineral = "halite"              optional mineral name beside the common one
    type = "NaCl, B1"               optional structure type
    mark = "high_pressure"          optional: high_temperature, hypothetical, metastable
    density = 2.70                  optional published density, g/cm³, checked to 2 %
    note = "..."                    optional sentence for the reader
    allow = ["short", "symmetry"]   optional: checks that the structure fails for a good reason,
                                    which `note` must give; "hydrogen": not all of it is placed
    set_aside = ["NCrystal: why"]   optional: second sources not to compare with, and why
"""

from __future__ import annotations

import re
import tomllib
from collections import Counter
from dataclasses import dataclass
from fractions import Fraction
from pathlib import Path
from typing import Any

import gemmi

MARKS = ("high_pressure", "high_temperature", "hypothetical", "metastable")
ALLOWABLE = ("hydrogen", "short", "symmetry")
REQUIRED = {"name": str, "formula": str, "group": str, "cell": list, "sites": list, "source": str}
OPTIONAL: dict[str, type | tuple[type, ...]] = {
    "temperature_K": (int, float),
    "pressure_GPa": (int, float),
    "mineral": str,
    "type": str,
    "mark": str,
    "density": (int, float),
    "note": str,
    "allow": list,
    "set_aside": list,
}
FREE = {
    "triclinic": ("a", "b", "c", "alpha", "beta", "gamma"),
    "monoclinic": ("a", "b", "c", "monoclinic angle"),
    "orthorhombic": ("a", "b", "c"),
    "tetragonal": ("a", "c"),
    "trigonal": ("a", "c"),
    "hexagonal": ("a", "c"),
    "rhombohedral axes": ("a", "alpha"),
    "cubic": ("a",),
}


class FactError(Exception):
    """A fact that cannot be right; the message names table, phase and what is wrong."""


@dataclass(frozen=True, slots=True)
class SiteFact:
    """One site: `element` symbol or "D", fractional coordinates, occupancy, B in Å² or None."""

    label: str
    element: str
    xyz: tuple[float, float, float]
    occupancy: float
    b_iso_A2: float | None


@dataclass(frozen=True, slots=True)
class PhaseFact:
    """One phase of a table, read; `options` holds the optional keys as written."""

    kind: str
    name: str
    formula: str
    group: gemmi.SpaceGroup
    cell: tuple[float, float, float, float, float, float]
    sites: tuple[SiteFact, ...]
    source: str
    options: dict[str, Any]

    @property
    def stem(self) -> str:
        """File name without suffix."""
        formula = "".join(f"{el}{n:g}" if n != 1 else el for el, n in atoms(self.formula).items())
        return re.sub(r"[^A-Za-z0-9.+]+", "-", f"{formula}-{self.name}").strip("-")

    @property
    def path(self) -> str:
        """Path below data/starter."""
        return f"{self.kind}/{self.stem}.cif"

    @property
    def cod(self) -> str | None:
        """COD number the numbers are from, or None."""
        found = re.search(r"\bCOD (\d{7})\b", self.source)
        return found.group(1) if found else None

    def structure(self) -> gemmi.SmallStructure:
        """The phase as a gemmi small structure, sites of the asymmetric unit."""
        small = gemmi.SmallStructure()
        small.cell = gemmi.UnitCell(*self.cell)
        small.spacegroup_hm = self.group.xhm()
        small.symops = [op.triplet() for op in self.group.operations()]
        small.determine_and_set_spacegroup("S")
        for site in self.sites:
            atom = gemmi.SmallStructure.Site()
            atom.label, atom.type_symbol = site.label, site.element
            atom.element = gemmi.Element(site.element)
            atom.fract = gemmi.Fractional(*site.xyz)
            atom.occ = site.occupancy
            small.add_site(atom)
        small.setup_cell_images()
        return small


def atoms(formula: str) -> dict[str, float]:
    """Atoms of a formula with parentheses, in order of appearance; raises FactError."""

    def group(text: str, at: int) -> tuple[dict[str, float], int]:
        total: dict[str, float] = {}
        while at < len(text):
            if text[at] == ")":
                return total, at
            if text[at] == "(":
                inner, at = group(text, at + 1)
                if at >= len(text):
                    raise FactError(f"formula {formula!r}: a parenthesis is not closed")
                at += 1
            else:
                symbol = re.match(r"[A-Z][a-z]?", text[at:])
                if not symbol or not known_element(symbol.group()):
                    raise FactError(f"formula {formula!r}: no element at {text[at:]!r}")
                inner, at = {symbol.group(): 1.0}, at + symbol.end()
            count = re.match(r"\d+(\.\d+)?", text[at:])
            times = float(count.group()) if count else 1.0
            at += count.end() if count else 0
            for element, n in inner.items():
                total[element] = total.get(element, 0.0) + n * times
        return total, at

    found, end = group(formula, 0)
    if end < len(formula) or not found:
        raise FactError(f"formula {formula!r} cannot be read at {formula[end:]!r}")
    return found


def known_element(symbol: str) -> bool:
    return symbol == "D" or (gemmi.Element(symbol).name == symbol and symbol != "X")


def number(text: str) -> float:
    """A coordinate: decimal or fraction."""
    try:
        return float(Fraction(text)) if "/" in text else float(text)
    except (ValueError, ZeroDivisionError):
        raise FactError(f"{text!r} is not a number or a fraction") from None


def read_site(text: str, index: int) -> SiteFact:
    words = text.split()
    if len(words) < 4:
        raise FactError(f"site {text!r}: write 'element x y z [occ=..] [B=..] [label=..]'")
    element = words[0]
    if not known_element(element):
        raise FactError(f"site {text!r}: {element!r} is no element")
    x, y, z = (number(w) for w in words[1:4])
    extra = {}
    for word in words[4:]:
        key, _, value = word.partition("=")
        if key not in ("occ", "B", "label") or not value:
            raise FactError(f"site {text!r}: {word!r} is not occ=, B= or label=")
        extra[key] = value
    occupancy = number(extra.get("occ", "1"))
    if not 0 < occupancy <= 1:
        raise FactError(f"site {text!r}: occupancy {occupancy} is not in (0, 1]")
    b_iso = number(extra["B"]) if "B" in extra else None
    return SiteFact(extra.get("label", f"{element}{index}"), element, (x, y, z), occupancy, b_iso)


def read_group(text: str) -> gemmi.SpaceGroup:
    group = gemmi.find_spacegroup_by_name(text)
    if group is None:
        raise FactError(f"group {text!r} is unknown; write it with spaces, 'P 63/m m c'")
    if group.ext != "\0" and ":" not in text:
        settings = [g.xhm() for g in gemmi.spacegroup_table() if g.hm == group.hm]
        if len(settings) > 1:
            raise FactError(f"group {text!r} has several settings: write one of {settings}")
    return group


def read_cell(
    values: list[Any], group: gemmi.SpaceGroup
) -> tuple[float, float, float, float, float, float]:
    system = group.crystal_system_str()
    if group.ext == "R":
        system = "rhombohedral axes"
    names = FREE[system]
    if len(values) != len(names) or not all(isinstance(v, int | float) for v in values):
        raise FactError(f"cell {values}: {group.xhm()} is {system} and needs {', '.join(names)}")
    v = [float(x) for x in values]
    lengths = [x for x, name in zip(v, names, strict=True) if len(name) == 1]
    if not all(1.5 < x < 80 for x in lengths):
        raise FactError(f"cell {values}: lengths are in Å, between 1.5 and 80")
    if system == "triclinic":
        return (v[0], v[1], v[2], v[3], v[4], v[5])
    if system == "monoclinic":
        angles = [90.0, 90.0, 90.0]
        angles["abc".index(group.monoclinic_unique_axis())] = v[3]
        return (v[0], v[1], v[2], angles[0], angles[1], angles[2])
    if system == "orthorhombic":
        return (v[0], v[1], v[2], 90.0, 90.0, 90.0)
    if system == "rhombohedral axes":
        return (v[0], v[0], v[0], v[1], v[1], v[1])
    if system == "cubic":
        return (v[0], v[0], v[0], 90.0, 90.0, 90.0)
    return (v[0], v[0], v[1], 90.0, 90.0, 90.0 if system == "tetragonal" else 120.0)


def read_phase(kind: str, row: dict[str, Any]) -> PhaseFact:
    """One `[[phase]]` row; raises FactError with what is wrong."""
    for key, wanted in REQUIRED.items():
        if not isinstance(row.get(key), wanted) or not row[key]:
            raise FactError(f"needs {key!r} ({wanted.__name__})")
    for key, value in row.items():
        if key not in REQUIRED and key not in OPTIONAL:
            raise FactError(f"unknown key {key!r}; known: {', '.join([*REQUIRED, *OPTIONAL])}")
        if key in OPTIONAL and not isinstance(value, OPTIONAL[key]):
            raise FactError(f"{key} = {value!r} is of the wrong kind")
        texts = [v for v in (value if isinstance(value, list) else [value]) if isinstance(v, str)]
        if any(not t.isascii() or "\n" in t or ('"' in t and "'" in t) for t in texts):
            raise FactError(f"{key}: plain ASCII on one line, not both kinds of quotes")
    if row.get("mark", MARKS[0]) not in MARKS:
        raise FactError(f"mark {row['mark']!r} is not one of {', '.join(MARKS)}")
    if any(a not in ALLOWABLE for a in row.get("allow", [])):
        raise FactError(f"allow {row['allow']}: only {', '.join(ALLOWABLE)}")
    if row.get("allow") and not row.get("note"):
        raise FactError("allow needs a note that gives the reason")
    atoms(row["formula"])
    group = read_group(row["group"])
    counts: Counter[str] = Counter()
    sites = []
    for text in row["sites"]:
        if not isinstance(text, str):
            raise FactError(f"site {text!r} is not text")
        counts[text.split()[0] if text.split() else ""] += 1
        sites.append(read_site(text, counts[text.split()[0]] if text.split() else 0))
    if len({s.label for s in sites}) < len(sites):
        raise FactError("two sites have the same label")
    return PhaseFact(
        kind=kind,
        name=row["name"],
        formula=row["formula"],
        group=group,
        cell=read_cell(row["cell"], group),
        sites=tuple(sites),
        source=row["source"],
        options={k: v for k, v in row.items() if k not in REQUIRED},
    )


def read_tables(folder: Path) -> tuple[list[PhaseFact], list[str]]:
    """All phases of all tables, and what is wrong with the others ("table: phase: what")."""
    phases: list[PhaseFact] = []
    wrong: list[str] = []
    for path in sorted(folder.glob("*.toml")):
        try:
            table = tomllib.loads(path.read_text(encoding="utf-8"))
        except (tomllib.TOMLDecodeError, UnicodeDecodeError) as error:
            wrong.append(f"{path.name}: not TOML: {error}")
            continue
        if set(table) != {"phase"}:
            wrong.append(f"{path.name}: only [[phase]] tables belong here, found {sorted(table)}")
            continue
        for index, row in enumerate(table["phase"]):
            try:
                phases.append(read_phase(path.stem, row))
            except FactError as error:
                wrong.append(f"{path.name}: {row.get('name', f'phase {index + 1}')}: {error}")
    twice = [p for p, n in Counter(p.path for p in phases).items() if n > 1]
    wrong += [
        f"{p}: two phases would be written to this file; give one another name" for p in twice
    ]
    return phases, wrong
