"""Which entries are of one phase, and which stands for it."""

from __future__ import annotations

import random
from collections.abc import Iterable, Sequence
from dataclasses import replace
from pathlib import Path
from typing import Any

import gemmi
import numpy as np
import pytest
from numpy.typing import NDArray

from phaseid.crystal.cif import read_cif
from phaseid.crystal.crystal import Crystal, Finding, Site, Source
from phaseid.crystal.metric import metric_tensor
from phaseid.library import Library, leaders
from phaseid.library.determinations import StoredEntry
from phaseid.library.grouping import leaders_in
from phaseid.library.sameness import same_phase
from phaseid.library.starter import shipped_crystal

# a, c (Å) of published determinations of low quartz, from memory: Levien, Prewitt & Weidner, Am.
# Mineral. 65, 920 (1980) at 1 bar and at 61.4 kbar; Kihara, Eur. J. Mineral. 2, 63 (1990) at 298 K;
# Will, Bellotto, Parrish & Hart, J. Appl. Cryst. 21, 182 (1988)
LEVIEN, LEVIEN_61_KBAR = (4.916, 5.4054), (4.7022, 5.2561)
KIHARA, WILL = (4.9137, 5.4047), (4.91239, 5.40385)


def published(stem: str) -> Crystal:
    """A structure of the starter library as if it had come from elsewhere."""
    return replace(shipped_crystal(stem), source=Source("file", "", f"{stem}.cif"))


def quartz(a_c: tuple[float, float], *marks: str, left: bool = False) -> Crystal:
    """Low quartz with another cell; `left`: its mirror image, P 31 2 1 for P 32 2 1."""
    crystal = published("SiO2-quartz")
    a, c = a_c
    crystal = replace(
        crystal,
        cell=(a, a, c, 90.0, 90.0, 120.0),
        findings=tuple(Finding(mark, mark) for mark in marks),
    )
    if not left:
        return crystal
    number = {152: 154, 154: 152}[crystal.space_group_number]
    group = gemmi.SpaceGroup(number)
    sites = tuple(
        replace(site, fract=(site.fract[0], site.fract[1], -site.fract[2]))
        for site in crystal.sites
    )
    return replace(
        crystal,
        sites=sites,
        space_group_number=number,
        space_group_symbol=group.short_name(),
        operations=tuple(op.triplet() for op in group.operations()),
    )


def groups(library: Library) -> list[tuple[str, ...]]:
    """Phase ids of each group, the one that stands for it first, the others sorted."""
    found = {}
    for phase in library.phases():
        leader, *others = (entry.phase_id for entry in library.entries(phase.phase_id))
        found[leader] = (leader, *sorted(others))
    return sorted(found.values())


def sizes(library: Library, crystals: Iterable[Crystal]) -> list[int]:
    library.add_crystals(crystals)
    return sorted(len(group) for group in groups(library))


def scaled(crystal: Crystal, factor: float, *marks: str) -> Crystal:
    a, b, c, *angles = crystal.cell
    cell: Any = (a * factor, b * factor, c * factor, *angles)
    return replace(crystal, cell=cell, findings=tuple(Finding(mark, mark) for mark in marks))


def test_determinations_of_quartz_are_one_phase_in_either_hand(library: Library) -> None:
    entries = [quartz(LEVIEN), quartz(KIHARA, left=True), quartz(WILL)]
    assert sizes(library, entries) == [3]
    assert [phase.cell[0] for phase in library.find("quartz")] == [4.9137]  # the middle one
    assert library.choose("quartz").cell[0] == 4.9137


def test_quartz_under_pressure_stands_apart_and_is_marked(library: Library) -> None:
    entries = [quartz(LEVIEN), quartz(KIHARA), quartz(LEVIEN_61_KBAR, "high_pressure")]
    assert sizes(library, entries) == [1, 2]
    pressed = library.find("quartz")[-1]
    assert pressed.cell[0] == LEVIEN_61_KBAR[0]
    assert [finding.code for finding in pressed.findings] == ["high_pressure"]


def test_low_and_high_quartz_are_two_phases(library: Library) -> None:
    assert sizes(library, [quartz(KIHARA), published("SiO2-quartz-high")]) == [1, 1]


@pytest.mark.parametrize(
    "stems",
    [
        ("TiO2-rutile", "TiO2-anatase", "TiO2-brookite"),
        ("ZnS-sphalerite", "ZnS-wurtzite"),
        ("CaCO3-calcite", "CaCO3-aragonite", "CaCO3-vaterite"),
    ],
)
def test_polymorphs_stay_apart(library: Library, stems: Sequence[str]) -> None:
    assert sizes(library, map(published, stems)) == [1] * len(stems)


def test_the_measured_cell_stands_for_the_computed_one(library: Library) -> None:
    # common density functionals make oxides 1 to 2 % too large (common practice, no source)
    measured = quartz(KIHARA, "formula_mismatch")  # even a doubtful one
    computed = scaled(quartz(KIHARA), 1.025, "theoretical")
    assert sizes(library, [computed, measured]) == [2]
    (phase,) = library.find("quartz")
    assert phase.cell[0] == KIHARA[0]


def test_what_is_shipped_as_two_phases_stays_two(library: Library) -> None:
    # they differ in the order of Al and Si: Smith, Feldspar Minerals 1 (1974), from memory
    stems = ("KAlSi3O8-sanidine", "KAlSi3O8-orthoclase")
    assert sizes(library, map(shipped_crystal, stems)) == [1, 1]
    library.add_crystals([scaled(published(stems[0]), 1.001)])
    assert sorted(len(group) for group in groups(library)) == [1, 2]
    assert library.choose("sanidine").source.database == "phaseid starter"


def test_two_computed_cells_so_far_apart_are_two(library: Library) -> None:
    one, other = quartz(KIHARA, "theoretical"), scaled(quartz(KIHARA), 1.025, "theoretical")
    assert sizes(library, [one, other]) == [1, 1]


def test_a_solid_solution_is_not_its_end_member(library: Library) -> None:
    pure = published("MgO-periclase")
    (metal, oxygen) = pure.sites
    mixed = replace(
        pure,
        formula="Mg0.9Fe0.1O",
        sites=(
            replace(metal, occupancy=0.9),
            replace(metal, label="Fe1", element="Fe", occupancy=0.1),
            oxygen,
        ),
    )
    richer = replace(
        mixed,
        formula="Mg0.8Fe0.2O",
        sites=tuple(
            replace(site, occupancy=share)
            for site, share in zip(mixed.sites, (0.8, 0.2, 1.0), strict=True)
        ),
    )
    assert sizes(library, [pure, mixed, richer]) == [1, 1, 1]


def test_atoms_that_change_places_make_another_phase(library: Library) -> None:
    sulfide = published("NiS-nickel-sulfide-NiAs-type")
    swap = {"Ni": "S", "S": "Ni"}
    inverse = replace(
        sulfide,
        sites=tuple(replace(site, element=swap[site.element]) for site in sulfide.sites),
    )
    assert sizes(library, [sulfide, inverse]) == [1, 1]


THIRDS = [[2 / 3, 1 / 3, 1 / 3], [-1 / 3, 1 / 3, 1 / 3], [-1 / 3, -2 / 3, 1 / 3]]
HALVES_F = [[0, 0.5, 0.5], [0.5, 0, 0.5], [0.5, 0.5, 0]]
HALVES_I = [[-0.5, 0.5, 0.5], [0.5, -0.5, 0.5], [0.5, 0.5, -0.5]]


@pytest.mark.parametrize(
    ("stem", "basis", "symbol"),
    [
        ("PbSO4-anglesite", [[0, 0, 1], [1, 0, 0], [0, 1, 0]], "Pbnm"),
        ("PbSO4-anglesite", [[0, 1, 0], [0, 0, 1], [1, 0, 0]], "Pmcn"),
        ("ZrO2-baddeleyite", [[-1, 0, -1], [0, -1, 0], [1, 0, 0]], "P21/n"),
        ("Al2O3-corundum", THIRDS, "R-3c:R"),
        ("MgO-periclase", HALVES_F, "primitive"),
        ("TiO2-anatase", HALVES_I, "primitive"),
    ],
)
def test_other_axes_are_the_same_phase(
    library: Library, stem: str, basis: list[list[float]], symbol: str
) -> None:
    crystal = published(stem)
    turned = on_other_axes(crystal, np.array(basis), symbol)
    assert sizes(library, [crystal, turned]) == [2]


def on_other_axes(crystal: Crystal, basis: NDArray[Any], symbol: str) -> Crystal:
    """The structure on axes whose rows are given in terms of the old ones.

    International Tables A, section 1.5.2: x' = Q x, W' = Q W Q⁻¹ with Q the inverse of the
    transposed basis.
    """
    q = np.linalg.inv(basis.T)
    gram = basis @ metric_tensor(crystal.cell) @ basis.T
    edges = np.sqrt(np.diag(gram))
    cosines = (gram / np.outer(edges, edges))[[1, 0, 0], [2, 2, 1]]
    cell: Any = (*edges.tolist(), *np.degrees(np.arccos(cosines)).tolist())
    operations = []
    for text in crystal.operations:
        op = gemmi.Op(text)
        op.rot = np.rint(q @ np.array(op.rot) @ basis.T).astype(int).tolist()
        op.tran = np.rint(q @ np.array(op.tran)).astype(int).tolist()
        operations.append(op.wrap().triplet())
    sites = tuple(
        replace(site, fract=tuple((q @ np.array(site.fract)).tolist())) for site in crystal.sites
    )
    return replace(
        crystal,
        cell=cell,
        sites=sites,
        operations=tuple(dict.fromkeys(operations)),
        space_group_symbol=symbol,
    )


def test_atoms_told_one_by_one_are_the_same_phase(library: Library, tmp_path: Path) -> None:
    """pymatgen writes the structure without its symmetry, in the primitive cell."""
    from pymatgen.core.lattice import Lattice
    from pymatgen.core.structure import Structure
    from pymatgen.io.cif import CifWriter

    a_A = published("MgO-periclase").cell[0]
    full = Structure.from_spacegroup(
        "Fm-3m", Lattice.cubic(a_A), ["Mg", "O"], [[0, 0, 0], [0.5, 0.5, 0.5]]
    )
    told = str(CifWriter(full.get_primitive_structure()))
    (plain,) = read_cif(told.encode(), "plain.cif").crystals
    assert plain.space_group_number == 1
    assert sizes(library, [plain, published("MgO-periclase")]) == [2]
    (phase,) = library.find("MgO")
    assert phase.space_group_number == 225  # the one that tells its symmetry stands


def test_the_order_of_adding_does_not_matter(tmp_path: Path) -> None:
    dice = random.Random(4)
    entries = [
        replace(
            scaled(published(stem), 0.99 + 0.0031 * n, *dice.choice(MARKS)),
            source=Source("COD", str(9000000 + 10 * k + n), f"{k}-{n}.cif"),
        )
        for k, stem in enumerate(("MgO-periclase", "TiO2-rutile", "SiO2-quartz"))
        for n in range(8)
    ]
    outcomes = []
    for turn in range(3):
        dice.shuffle(entries)
        with Library.create(tmp_path / f"{turn}.sqlite") as library:
            for start in range(0, len(entries), 5 * turn + 3):  # in batches of another size
                library.add_crystals(entries[start : start + 5 * turn + 3])
            outcomes.append(groups(library))
    assert outcomes[0] == outcomes[1] == outcomes[2]
    assert 3 < len(outcomes[0]) < len(entries)


def test_grouping_what_is_new_finds_what_grouping_all_anew_finds(
    library: Library, monkeypatch: pytest.MonkeyPatch
) -> None:
    dice = random.Random(5)
    entries = [
        replace(
            scaled(published(stem), 1.0 + dice.gauss(0.0, 0.012), *dice.choice(MARKS)),
            source=Source("COD", str(9000000 + 100 * k + n), f"{k}-{n}.cif"),
            temperature_K=dice.choice((None, 100.0, 300.0)),
        )
        for k, stem in enumerate(("MgO-periclase", "SiO2-quartz", "SiO2-quartz-high"))
        for n in range(25)
    ]
    dice.shuffle(entries)
    compared = 0

    def counted(one: StoredEntry, other: StoredEntry) -> bool:
        nonlocal compared
        compared += 1
        return same_phase(one, other)

    monkeypatch.setattr(leaders, "same_phase", counted)
    few, all_anew = 0, 0
    while entries:
        added, entries = entries[:5], entries[5:]
        compared = 0
        library.add_crystals(added)
        few += compared
        compared = 0
        with library.reading() as conn:
            for elements in ("Mg O", "O Si"):
                due = leaders_in(conn, elements).items()
                held = conn.execute(
                    "SELECT phase, leader FROM member JOIN phase ON id = phase WHERE elements = ?",
                    (elements,),
                )
                assert dict(held.fetchall()) == {row: own for row, own in due if row != own}
        all_anew += compared
        if len(entries) % 3 == 0:
            library.remove([dice.choice(library.phases()).phase_id])
    assert few < all_anew / 2


MARKS: tuple[tuple[str, ...], ...] = ((), (), ("high_pressure",), ("theoretical",))


def test_a_mark_of_the_starter_library_holds_for_its_phase(library: Library) -> None:
    coesite = shipped_crystal("SiO2-coesite")
    unmarked = replace(coesite, source=Source("COD", "1", "1.cif"), findings=())
    unmarked = scaled(unmarked, 1.002)
    assert sizes(library, [unmarked, coesite]) == [2]
    (phase,) = library.find("coesite")
    assert [finding.code for finding in phase.findings] == ["high_pressure"]


def test_atoms_without_a_mass_stop_nothing(library: Library) -> None:
    weightless = Site("X1", "X", 0, (0.0, 0.0, 0.0), 1.0)
    crystals = [
        replace(scaled(published("MgO-periclase"), 1 + n / 1000), sites=(weightless,), formula="X")
        for n in range(2)
    ]
    library.add_crystals([*crystals, published("MgO-periclase")])
    assert len(library.find("MgO")) == 1


@pytest.mark.parametrize("turn", [1, -1])
def test_of_equal_structures_the_same_source_tells(library: Library, turn: int) -> None:
    structure = quartz(KIHARA, "high_pressure")
    same = [
        replace(structure, source=Source("file", "", "x.cif")),
        replace(structure, source=Source("COD", "2", "2.cif"), findings=()),
        replace(structure, source=Source("AMCSD", "1", "1.cif")),
    ]
    for crystal in same[::turn]:
        library.add_crystals([crystal])
    (phase,) = library.find("quartz")
    assert (phase.source.database, phase.quality) == ("AMCSD", 0.3)
    assert library.find("COD 2") == [phase]
    shipped = replace(structure, source=shipped_crystal("SiO2-quartz").source)
    library.add_crystals([shipped])
    assert [p.source.database for p in library.find("quartz")] == ["phaseid starter"]


def test_a_revision_of_the_standing_entry_groups_anew(library: Library) -> None:
    first = replace(quartz(KIHARA), source=Source("COD", "1", "1.cif"))
    second = replace(quartz(LEVIEN, "high_temperature"), source=Source("COD", "2", "2.cif"))
    assert sizes(library, [first, second]) == [2]
    revised = replace(quartz(LEVIEN_61_KBAR), source=first.source)  # what it is now is far away
    assert library.add_crystals([revised]).replaced == 1
    assert [len(group) for group in groups(library)] == [1, 1]
