"""Crystal -> CIF text, for storage and export; `read_cif` gives the same crystal back.

What CIF has no item for (findings) is left out: reading finds it again from the structure.
"""

from __future__ import annotations

import re

from phaseid.crystal.crystal import Crystal, Site
from phaseid.crystal.elements import parse_formula
from phaseid.crystal.formula import hill_formula
from phaseid.crystal.provenance import (
    NAME_TAGS,
    REFERENCE_TAG,
    SOURCE_DATABASE_TAG,
    SOURCE_ID_TAG,
)

_SAFE = re.compile(r"[A-Za-z0-9+\-.,()/:*|@!%^&~]+$")
_CELL_TAGS = (
    "_cell_length_a",
    "_cell_length_b",
    "_cell_length_c",
    "_cell_angle_alpha",
    "_cell_angle_beta",
    "_cell_angle_gamma",
)
_ID_TAGS = {
    "COD": "_cod_database_code",
    "AMCSD": "_database_code_amcsd",
    "ICSD": "_database_code_icsd",
    "CSD": "_database_code_csd",
    "MPOD": "_mpod_database_code",
}
_TENSOR = ("11", "22", "33", "12", "13", "23")
_GPA_TO_KPA = 1e6


def crystal_to_cif(crystal: Crystal) -> str:
    """Return CIF 1.1 text of a crystal: one block, all operations, numbers in full precision."""
    block = re.sub(r"\W", "_", crystal.source.id or crystal.name or crystal.formula) or "structure"
    names = (crystal.name, *crystal.other_names)
    pairs: list[tuple[str, str]] = list(zip(NAME_TAGS, names, strict=False))
    if crystal.source.database in _ID_TAGS:
        pairs.append((_ID_TAGS[crystal.source.database], crystal.source.id))
    elif crystal.source.id:
        pairs.append((SOURCE_DATABASE_TAG, crystal.source.database))
        pairs.append((SOURCE_ID_TAG, crystal.source.id))
    pairs.append((REFERENCE_TAG, crystal.source.reference))
    pairs += [(tag, _number(x)) for tag, x in zip(_CELL_TAGS, crystal.cell, strict=True)]
    pairs += [
        ("_cell_formula_units_Z", _number(crystal.z)),
        ("_chemical_formula_sum", hill_formula(parse_formula(crystal.formula) or {}, " ")),
        ("_space_group_IT_number", str(crystal.space_group_number)),
        ("_space_group_name_H-M_alt", crystal.space_group_symbol),
    ]
    if crystal.temperature_K is not None:
        pairs.append(("_diffrn_ambient_temperature", _number(crystal.temperature_K)))
    if crystal.pressure_GPa is not None:
        pairs.append(("_diffrn_ambient_pressure", _number(crystal.pressure_GPa * _GPA_TO_KPA)))
    lines = [f"data_{block}", *(f"{tag} {_quoted(value)}" for tag, value in pairs if value)]
    lines += ["loop_", "_space_group_symop_operation_xyz"]
    lines += [f"'{triplet}'" for triplet in crystal.operations]
    lines += _site_loop(crystal.sites)
    lines += _tensor_loop(crystal.sites)
    return "\n".join(lines) + "\n"


def _site_loop(sites: tuple[Site, ...]) -> list[str]:
    lines = ["loop_"]
    lines += [
        f"_atom_site_{name}"
        for name in (
            "label",
            "type_symbol",
            "fract_x",
            "fract_y",
            "fract_z",
            "occupancy",
            "U_iso_or_equiv",
        )
    ]
    for label, site in zip(_labels(sites), sites, strict=True):
        numbers = [*map(_number, site.fract), _number(site.occupancy)]
        displacement = "?" if site.u_iso_A2 is None else _number(site.u_iso_A2)
        lines.append(" ".join((_quoted(label), _type(site), *numbers, displacement)))
    return lines


def _tensor_loop(sites: tuple[Site, ...]) -> list[str]:
    rows = [
        " ".join((_quoted(label), *map(_number, site.u_aniso_A2)))
        for label, site in zip(_labels(sites), sites, strict=True)
        if site.u_aniso_A2 is not None
    ]
    if not rows:
        return []
    return [
        "loop_",
        "_atom_site_aniso_label",
        *(f"_atom_site_aniso_U_{ij}" for ij in _TENSOR),
        *rows,
    ]


def _labels(sites: tuple[Site, ...]) -> list[str]:
    """Return the labels, made distinct where two sites share one."""
    seen: dict[str, int] = {}
    labels = []
    for site in sites:
        label = site.label or site.element
        seen[label] = seen.get(label, 0) + 1
        labels.append(label if seen[label] == 1 else f"{label}_{seen[label]}")
    return labels


def _type(site: Site) -> str:
    if not site.charge:
        return site.element
    return f"{site.element}{abs(site.charge)}{'+' if site.charge > 0 else '-'}"


def _number(value: float) -> str:
    return repr(float(value)).removesuffix(".0")


def _quoted(value: str) -> str:
    text = " ".join(value.split())
    if _SAFE.match(text) and not text.lower().startswith(("data_", "loop_", "save_", "stop_")):
        return text
    for quote in ("'", '"'):
        if quote not in text:
            return f"{quote}{text}{quote}"
    return f"\n;{text}\n;"
