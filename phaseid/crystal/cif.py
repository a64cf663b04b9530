"""CIF text -> crystals, with findings; or a refusal with its reason in words.

Every data block with atoms becomes one `Crystal` or one `Reject`. Nothing is repaired in silence:
what was interpreted, left out or contradicts the file's own formula stands in `Crystal.findings`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache
from pathlib import Path

import gemmi

from phaseid.crystal.agreement import Stated
from phaseid.crystal.atom_sites import SiteProblem, has_sites, read_sites
from phaseid.crystal.cif_text import MAX_BYTES, Block, Unreadable, parse_cif
from phaseid.crystal.composition import reduced
from phaseid.crystal.crystal import Crystal, Finding
from phaseid.crystal.elements import parse_formula
from phaseid.crystal.metric import Cell, volume_A3
from phaseid.crystal.provenance import conditions, phase_names, source
from phaseid.crystal.structure import StructureProblem, build
from phaseid.crystal.symmetry import (
    MAX_OPERATIONS,
    SymmetryItems,
    SymmetryProblem,
    symmetry_candidates,
)
from phaseid.errors import InputError

_LENGTHS = ("_cell_length_a", "_cell_length_b", "_cell_length_c")
_ANGLES = ("_cell_angle_alpha", "_cell_angle_beta", "_cell_angle_gamma")
_TRIPLET_TAGS = (
    "_space_group_symop_operation_xyz",
    "_symmetry_equiv_pos_as_xyz",
    "_space_group_symop.operation_xyz",
)
_MAX_SYMBOL = 100
_MAX_FORMULA = 2000
_MAX_BLOCK_NAME = 100
_LENGTH_RANGE_A = (1.0, 1000.0)
_ANGLE_RANGE_DEG = (5.0, 175.0)
_SUPERSPACE = (
    "_space_group_ssg_",
    "_space_group_symop_ssg_",
    "_cell_wave_vector_",
    "_cell_modulation_",
)


@dataclass(frozen=True, slots=True)
class Reject:
    """A block, or a whole file (`block` ""), that cannot be used: a code, a reason in words."""

    code: str
    reason: str
    block: str = ""


@dataclass(frozen=True, slots=True)
class CifReading:
    """What a file gave: crystals and refusals, each in the order of the file."""

    crystals: tuple[Crystal, ...] = ()
    rejects: tuple[Reject, ...] = ()


class _Refusal(Exception):  # noqa: N818 - no error of the program: it ends in a Reject
    def __init__(self, code: str, reason: str) -> None:
        self.code, self.reason = code, reason
        super().__init__(reason)


def read_cif(data: bytes, file: str) -> CifReading:
    """Read CIF text; `file` is the name that `Source.file` keeps. Never raises for bad content."""
    parsed = parse_cif(data)
    if isinstance(parsed, Unreadable):
        return CifReading(rejects=(Reject(parsed.code, parsed.reason),))
    blocks, findings = parsed
    crystals: list[Crystal] = []
    rejects: list[Reject] = []
    for block in blocks:
        try:
            crystals.append(_read_block(block, file, findings))
        except _Refusal as refusal:
            name = block.name[:_MAX_BLOCK_NAME]
            rejects.append(Reject(refusal.code, refusal.reason, name))
    if crystals:  # bibliography and reflection blocks beside a structure are no refusals
        rejects = [reject for reject in rejects if reject.code != "no_structure"]
    if not crystals and not rejects:
        rejects.append(Reject("not_cif", "no data_ block: this is no CIF"))
    return CifReading(tuple(crystals), tuple(rejects))


def read_cif_file(path: str | Path) -> CifReading:
    """Read a CIF file. Raises InputError if the file cannot be opened."""
    path = Path(path)
    try:
        with path.open("rb") as stream:
            data = stream.read(MAX_BYTES + 1)
    except OSError as error:
        raise InputError(
            f"cannot be opened: {error.strerror or error}",
            path=path,
            remedy="Check the name and your right to read it",
        ) from error
    return read_cif(data, path.name)


def _read_block(block: Block, file: str, findings: tuple[Finding, ...]) -> Crystal:
    _refuse_other_kinds(block)
    formula_text = block.text("_chemical_formula_sum", "_chemical_formula_moiety")
    formula_text = formula_text[:_MAX_FORMULA]
    formula = parse_formula(formula_text) if formula_text else None
    if not has_sites(block):
        raise _without_fractions(block)
    items = _symmetry_items(block)
    symmetry = symmetry_candidates(items)
    cell, cell_findings = _cell(block)
    sites = read_sites(block, cell, frozenset(formula or ()))
    if isinstance(sites, SiteProblem):
        raise _Refusal(sites.code, sites.reason)
    if isinstance(symmetry, SymmetryProblem):
        raise _Refusal(symmetry.code, symmetry.reason)
    temperature, pressure, marks = conditions(block)
    stated = Stated(
        formula=formula,
        formula_text=formula_text,
        z=block.number("_cell_formula_units_z"),
        density_g_cm3=block.number("_exptl_crystal_density_diffrn"),
        volume_A3=block.number("_cell_volume"),
    )
    structure = build(cell, symmetry, sites, stated)
    if isinstance(structure, StructureProblem):
        raise _Refusal(structure.code, structure.reason)
    reduced_formula, z = reduced(structure.contents, structure.units)
    name, *other_names = phase_names(block) or ("",)
    return Crystal(
        cell=cell,
        space_group_number=structure.symmetry.number,
        space_group_symbol=structure.symmetry.symbol,
        operations=structure.symmetry.operations,
        sites=structure.sites,
        name=name,
        formula=reduced_formula,
        z=z,
        source=source(block, file),
        temperature_K=temperature,
        pressure_GPa=pressure,
        findings=(*findings, *cell_findings, *sites.findings, *structure.findings, *marks),
        other_names=tuple(other_names),
    )


def _refuse_other_kinds(block: Block) -> None:
    """Refuse blocks that are no ordinary crystal structure, each with its reason."""
    if "_atom_site.cartn_x" in block:
        raise _Refusal(
            "macromolecule", "a macromolecule (mmCIF, Cartesian coordinates): no small structure"
        )
    if "_atom_site.fract_x" in block:
        raise _Refusal(
            "no_structure",
            "the atoms stand under dotted DDLm names (_atom_site.fract_x); write the file with CIF "
            "core names (_atom_site_fract_x)",
        )
    if block.has_prefix(*_SUPERSPACE):
        raise _Refusal(
            "modulated", "a modulated structure (superspace group): its lines need satellites"
        )
    if block.has_prefix("_space_group_symop_magn", "_space_group_symop.magn") and not (
        "_symmetry_equiv_pos_as_xyz" in block or "_space_group_symop_operation_xyz" in block
    ):
        raise _Refusal("magnetic", "only magnetic symmetry operations are given")


def _without_fractions(block: Block) -> _Refusal:
    if "_atom_site_cartn_x" in block:
        return _Refusal("cartesian_only", "the atoms have Cartesian coordinates only")
    if block.has_prefix("_atom_site_"):
        return _Refusal("no_coordinates", "the atom list has no fractional coordinates")
    if not block.has_prefix("_cell_length"):
        return _Refusal("no_structure", "no cell and no atoms: no crystal structure")
    return _Refusal("no_structure", "no atoms: no crystal structure")


def _symmetry_items(block: Block) -> SymmetryItems:
    triplets: tuple[str, ...] = ()
    for tag in _TRIPLET_TAGS:
        if block.rows(tag) > MAX_OPERATIONS:
            raise _Refusal(
                "bad_symmetry",
                f"{block.rows(tag)} symmetry operations are listed, at most {MAX_OPERATIONS} are "
                "possible",
            )
        triplets = triplets or _triplets(tuple(block.column(tag)))
    if max(map(len, triplets), default=0) > _MAX_SYMBOL:
        raise _Refusal("bad_symmetry", "a symmetry operation is absurdly long")
    return SymmetryItems(
        triplets=triplets,
        hall=block.text("_space_group_name_hall", "_symmetry_space_group_name_hall")[:_MAX_SYMBOL],
        hermann_mauguin=block.text("_space_group_name_h-m_alt", "_symmetry_space_group_name_h-m")[
            :_MAX_SYMBOL
        ],
        number=block.whole("_space_group_it_number", "_symmetry_int_tables_number"),
        setting=block.text(
            "_space_group_it_coordinate_system_code", "_space_group.it_coordinate_system_code"
        )[:_MAX_SYMBOL],
    )


@lru_cache(maxsize=1024)
def _triplets(raw: tuple[str, ...]) -> tuple[str, ...]:
    """Return the operations of a column as written, unquoted; many files share a list."""
    unquoted = map(gemmi.cif.as_string, raw)
    return tuple(text for text in unquoted if text not in ("", "?", "."))


def _cell(block: Block) -> tuple[Cell, tuple[Finding, ...]]:
    """Return the cell; a missing angle counts as 90°, CIF's default, if symmetry agrees later."""
    values = [block.number(tag) for tag in (*_LENGTHS, *_ANGLES)]
    missing = [tag for tag, value in zip(_LENGTHS, values[:3], strict=True) if value is None]
    if missing:
        raise _Refusal("no_cell", f"the cell is not given: {', '.join(missing)} missing")
    absent = [tag for tag, value in zip(_ANGLES, values[3:], strict=True) if value is None]
    a, b, c, alpha, beta, gamma = (90.0 if value is None else value for value in values)
    cell = (a, b, c, alpha, beta, gamma)
    low, high = _LENGTH_RANGE_A
    if not all(low <= length <= high for length in cell[:3]):
        raise _Refusal(
            "absurd_cell", f"cell lengths {a:g}, {b:g}, {c:g} Å are beyond {low:g} to {high:g} Å"
        )
    low, high = _ANGLE_RANGE_DEG
    if not all(low <= angle <= high for angle in cell[3:]) or volume_A3(cell) == 0:
        raise _Refusal("absurd_cell", f"no cell has the angles {alpha:g}, {beta:g}, {gamma:g}°")
    if not absent:
        return cell, ()
    return cell, (Finding("angle_default", f"not given, taken as 90°: {', '.join(absent)}"),)
