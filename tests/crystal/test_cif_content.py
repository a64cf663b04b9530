"""Composition, elements, positions, writer and content key."""

from __future__ import annotations

import random
import re
from dataclasses import replace
from pathlib import Path

import gemmi
import numpy as np
import pytest

from phaseid.crystal.cif import read_cif, read_cif_file
from phaseid.crystal.cif_writer import crystal_to_cif
from phaseid.crystal.composition import (
    cell_contents,
    density_g_cm3,
    reduced,
    volume_A3,
)
from phaseid.crystal.content_key import content_key
from phaseid.crystal.crystal import Crystal, Site
from phaseid.crystal.elements import parse_formula, species
from phaseid.crystal.positions import affine_maps, close_pairs, place
from phaseid.crystal.provenance import plain_text
from phaseid.crystal.symmetry import operation_arrays

CIF = Path(__file__).resolve().parent.parent / "cif"
NAMES = sorted(path.stem for path in CIF.glob("*.cif") if path.stem != "several_blocks")


def crystal(name: str) -> Crystal:
    return read_cif_file(CIF / f"{name}.cif").crystals[0]


def test_volume_agrees_with_gemmi() -> None:
    rng = random.Random(7)
    for _ in range(50):
        cell = (*(rng.uniform(2, 30) for _ in range(3)), *(rng.uniform(60, 119) for _ in range(3)))
        assert volume_A3(cell) == pytest.approx(gemmi.UnitCell(*cell).volume)  # type: ignore[arg-type]
    assert volume_A3((5, 5, 5, 30, 30, 170)) == 0


@pytest.mark.parametrize(
    ("name", "density"),
    [  # X-ray densities as the COD entries of these cells state them, or the handbook's
        ("bom", 2.163),  # halite, CRC Handbook 2.17
        ("axes_hexagonal", 2.71),  # calcite, CRC Handbook
        ("axes_rhombohedral", 2.71),
        ("operations_untabulated", 8.308),  # PdO, COD 1009031
        ("hm_origin_unstated", 3.515),  # diamond, CRC Handbook
        ("p1_with_symmetry", 8.93),  # copper, CRC Handbook 8.96
    ],
)
def test_density(name: str, density: float) -> None:
    assert density_g_cm3(crystal(name)) == pytest.approx(density, rel=0.005)


def test_reduced_formula() -> None:
    assert reduced({"Al": 12, "O": 18}) == ("Al2O3", 6)
    assert reduced({"Fe": 3.8, "O": 4}) == ("Fe0.95O", 4)
    assert reduced({"As": 24, "Co": 6.96}, z_hint=8) == ("Co0.87As3", 8)


@pytest.mark.parametrize(
    ("text", "amounts"),
    [
        ("Al2 O3", {"Al": 2, "O": 3}),
        ("C5 H17Al N2", {"C": 5, "H": 17, "Al": 1, "N": 2}),
        ("(Ca.8,Na.2)2 Si O4", {"Ca": 1.6, "Na": 0.4, "Si": 1, "O": 4}),
        ("Fe1/3 O", None),
        ("Qx2 O", None),
        ("(Si O2", None),
        ("", None),
        ("?", None),
    ],
)
def test_formula(text: str, amounts: dict[str, float] | None) -> None:
    assert parse_formula(text) == (None if amounts is None else pytest.approx(amounts))


@pytest.mark.parametrize(
    ("type_symbol", "label", "formula", "element", "charge"),
    [  # labels met in COD and AMCSD entries
        ("Fe3+", "Fe1", "", "Fe", 3),
        ("O2-", "O1", "", "O", -2),
        ("Cl1-", "x", "", "Cl", -1),
        ("Ca+2", "x", "", "Ca", 2),
        ("C0", "x", "", "C", 0),
        ("?", "Si1", "Si O", "Si", 0),
        ("", "Wat1", "Na O H", "O", 0),
        ("", "OW2", "Ca O", "O", 0),
        ("", "W1", "Ca O", "O", 0),
        ("", "W1", "W O", "W", 0),
        ("", "OH", "Mg O H", "O", 0),
        ("", "HO1", "C H O", "H", 0),
        ("", "HO1", "Ho O", "Ho", 0),
        ("", "HC2", "C H N", "H", 0),
        ("", "CA", "Ca C", "Ca", 0),
        ("", "CA", "C O", "C", 0),
        ("", "Sl", "S O", "S", 0),
        ("", "IX", "C I", "I", 0),
        ("", "Kk", "K O", "K", 0),
        ("D", "D1", "", "D", 0),
        ("", "X1", "Al Ba", "", 0),
        ("", "T1", "Si O", "", 0),
        ("", "Cg1", "C H", "", 0),
        ("", "0.0594(19)", "C H", "", 0),
    ],
)
def test_species(type_symbol: str, label: str, formula: str, element: str, charge: int) -> None:
    found = species(type_symbol, label, frozenset(formula.split()))
    assert (found.element, found.charge) == (element, charge)


def test_cif_accents() -> None:
    # codes of the CIF 1.1 specification, International Tables G, 2.2.7.4.9
    assert (
        plain_text(r"Gra\<zulis, B\"uy\"uk, N\'eel, \%Angstr\"om")
        == "Gražulis, Büyük, Néel, Ångström"
    )


@pytest.mark.parametrize("name", ["axes_hexagonal", "mixed_site", "hm_old_cubic", "deuterium"])
def test_contents_agree_with_the_sites_gemmi_expands(name: str) -> None:
    path = CIF / f"{name}.cif"
    small = gemmi.make_small_structure_from_block(gemmi.cif.read(str(path)).sole_block())
    expanded: dict[str, float] = {}
    for site in small.get_all_unit_cell_sites():
        expanded[site.element.name] = expanded.get(site.element.name, 0) + site.occ
    assert cell_contents(crystal(name)) == pytest.approx(expanded)


@pytest.mark.parametrize(
    ("z", "occupancy", "count", "snapped"),
    [
        (0.002, 1.0, 1, True),  # 0.02 Å off the mirror: rounding
        (0.002, 0.5, 1, True),
        (0.02, 1.0, 1, True),  # images 0.2 Å apart cannot both be full
        (0.02, 0.5, 2, False),  # a split atom
        (0.1, 1.0, 2, False),  # images 1 Å apart
    ],
)
def test_place_near_a_mirror(z: float, occupancy: float, count: int, *, snapped: bool) -> None:
    rotations, translations = operation_arrays(("x,y,z", "x,y,-z"))
    fract = np.array([[0.1, 0.2, z]])
    placed = place(
        fract, np.array([occupancy]), affine_maps(rotations, translations), (5, 5, 5, 90, 90, 90)
    )
    assert placed.multiplicity.tolist() == [count]
    assert placed.fract[0, 2] == (0 if snapped else z)


def test_close_pairs_agree_with_every_distance_worked_out() -> None:
    rng = np.random.default_rng(3)
    rotations, translations = operation_arrays(
        ("x,y,z", "-x,-y,-z", "x+1/2,y+1/2,z", "1/2-x,1/2-y,-z")
    )
    cell = (6.0, 7.0, 8.0, 80.0, 95.0, 110.0)
    fract = rng.random((40, 3))
    found = close_pairs(fract, affine_maps(rotations, translations), cell, 1.3)
    assert found is not None
    orthogonal = np.array(gemmi.UnitCell(*cell).orth.mat.tolist())
    shifts = np.array([[i, j, k] for i in (-1, 0, 1) for j in (-1, 0, 1) for k in (-1, 0, 1)])
    expected = {}
    for i in range(40):
        for j in range(i + 1, 40):
            delta = fract[j] @ rotations.transpose(0, 2, 1) + translations - fract[i]
            delta = (delta - np.round(delta))[:, None, :] + shifts
            nearest = np.sqrt(((delta @ orthogonal.T) ** 2).sum(axis=2).min())
            if nearest < 1.3:
                expected[i, j] = nearest
    pairs = zip(found.first.tolist(), found.second.tolist(), strict=True)
    assert dict(zip(pairs, found.distance_A.tolist(), strict=True)) == pytest.approx(expected)
    assert len(expected) > 20


@pytest.mark.parametrize("name", NAMES)
def test_written_cif_reads_back_the_same(name: str) -> None:
    first = crystal(name)
    (again,) = read_cif(crystal_to_cif(first).encode(), first.source.file).crystals
    for item in ("cell", "space_group_number", "formula", "z", "temperature_K", "name"):
        assert getattr(again, item) == getattr(first, item), item
    assert again.other_names == first.other_names
    assert again.pressure_GPa == pytest.approx(first.pressure_GPa)
    assert set(again.operations) == set(first.operations)
    assert again.source.reference == first.source.reference
    if first.source.database != "Materials Project":
        assert again.source == first.source
    for a, b in zip(again.sites, first.sites, strict=True):
        assert (a.element, a.charge, a.fract, a.occupancy) == (
            b.element,
            b.charge,
            b.fract,
            b.occupancy,
        )
        assert (a.u_iso_A2, a.u_aniso_A2) == (b.u_iso_A2, b.u_aniso_A2)
    assert content_key(again) == content_key(first)


def test_every_name_is_kept_once_the_mineral_first() -> None:
    # the order of the tags is ours; the tags are those of the CIF core dictionary
    text = (CIF / "no_label_column.cif").read_text(encoding="utf-8")
    text = re.sub(r"^_chemical_name_.*\n", "", text, flags=re.MULTILINE)
    named = text.replace(
        "_cell_length_a",
        "_chemical_name_systematic 'Sodium chloride'\n_chemical_name_common 'sodium chloride'\n"
        "_chemical_name_mineral Halite\n_cell_length_a",
        1,
    )
    (first,) = read_cif(named.encode(), "x.cif").crystals
    assert (first.name, first.other_names) == ("Halite", ("sodium chloride",))
    (again,) = read_cif(crystal_to_cif(first).encode(), "x.cif").crystals
    assert (again.name, again.other_names) == ("Halite", ("sodium chloride",))
    (bare,) = read_cif(text.encode(), "x.cif").crystals
    assert (bare.name, bare.other_names) == ("", ())


def test_gemmi_reads_the_written_cif() -> None:
    first = crystal("mixed_site")
    block = gemmi.cif.read_string(crystal_to_cif(first)).sole_block()
    small = gemmi.make_small_structure_from_block(block)
    assert small.spacegroup.number == 221
    assert [site.element.name for site in small.sites] == [site.element for site in first.sites]


def test_content_key_ignores_order_names_and_choice_of_image() -> None:
    first = crystal("axes_hexagonal")
    key = content_key(first)
    rotations, translations = operation_arrays(first.operations)
    oxygen = first.sites[2]
    x, y, z = (rotations[4] @ oxygen.fract + translations[4]).tolist()
    moved: tuple[Site, ...] = (replace(oxygen, fract=(x, y, z), label="moved"), *first.sites[:2])
    turned = replace(first, sites=moved, operations=first.operations[::-1], name="calcite")
    assert content_key(turned) == key


def test_content_key_tells_structures_apart() -> None:
    first = crystal("mixed_site")
    lead, *rest = first.sites
    others = [
        replace(first, cell=(*first.cell[:2], first.cell[2] + 0.001, *first.cell[3:])),
        replace(first, sites=(replace(lead, element="Ba"), *rest)),
        replace(first, sites=(replace(lead, occupancy=0.99), *rest)),
        replace(first, sites=(replace(lead, fract=(0.0, 0.0, 0.001)), *rest)),
        replace(first, operations=first.operations[:-1]),
    ]
    assert len({content_key(c) for c in (first, *others)}) == 6
