"""Which phase is meant: by id, number, formula, name or part of one."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import pytest

from phaseid.crystal.cif import read_cif
from phaseid.crystal.crystal import Finding, Source
from phaseid.errors import InputError
from phaseid.library import Library
from tests.library.rock_salts import rock_salt

WriteCif = Callable[..., Path]


@pytest.fixture
def shelf(library: Library, write_cif: WriteCif) -> Library:
    """Six rock salts: two named, two of one compound, one with a number in its name."""
    library.add(
        [
            write_cif("1.cif", "MgO", cod="9000001", name="Periclase"),
            write_cif("2.cif", "NaCl", cod="9000002", name="Halite"),
            write_cif("3.cif", "KCl", cod="9000003", name="Sylvite"),
            write_cif("4.cif", "CaO", cod="9000004", name="Lime, burnt"),
            write_cif("5.cif", "NaF", name="Villiaumite"),
            write_cif("6.cif", "LiF"),
        ]
    )
    return library


@pytest.mark.parametrize(
    ("text", "formula"),
    [
        ("MgO", "MgO"), ("OMg", "MgO"), ("mgo", "MgO"), ("Mg2O2", "MgO"), ("Mg O", "MgO"),
        ("periclase", "MgO"), ("PERICLASE", "MgO"), ("pericl", "MgO"), ("clase", "MgO"),
        ("burnt lime", "CaO"), ("lime nt", "CaO"), ("9000003", "KCl"), ("ClNa", "NaCl"),
        ("COD 9000003", "KCl"), ("cod: 9000003", "KCl"), ("FLi", "LiF"),
    ],
)  # fmt: skip
def test_one_phase_is_meant(shelf: Library, text: str, formula: str) -> None:
    assert [phase.formula for phase in shelf.find(text)] == [formula]
    assert shelf.choose(text).formula == formula


def test_a_phase_id_means_that_phase(shelf: Library) -> None:
    for phase in shelf.phases():
        assert shelf.find(phase.phase_id) == [phase]
        assert shelf.choose(f" {phase.phase_id} ") == phase


def test_a_formula_does_not_mean_a_name_that_begins_with_it(
    library: Library, write_cif: WriteCif
) -> None:
    library.add([write_cif("a.cif", "MgO", name="tin oxide (not)")])
    assert library.find("TiN") == []
    assert [p.formula for p in library.find("tin")] == ["MgO"]


def test_nothing_means_nothing_and_near_names_are_offered(shelf: Library) -> None:
    assert shelf.find("vaterite") == []
    assert shelf.find("lime xy") == shelf.find("") == []
    assert shelf.find('"; DROP TABLE phase; --') == []
    assert shelf.find("%") == shelf.find("*") == shelf.find("a'b") == []
    with pytest.raises(InputError, match=r"no phase called 'perriclase'\. Close names: Periclase"):
        shelf.choose("perriclase")
    with pytest.raises(InputError, match=r"no phase called 'xq'.*a CIF file") as caught:
        shelf.choose("xq")
    assert caught.value.exit_code == 2


def _crystals(*facts: tuple[float, str, tuple[str, ...]]) -> list[object]:
    made = []
    for a_A, name, codes in facts:
        (crystal,) = read_cif(rock_salt("MgO", a_A, name=name).encode(), "x.cif").crystals
        findings = tuple(Finding(code, code) for code in codes)
        source = Source("file", "", f"{a_A}.cif")
        made.append(replace(crystal, findings=findings, source=source))
    return made


def test_several_that_differ_are_told_apart(library: Library) -> None:
    library.add_crystals(_crystals((4.2, "one", ()), (4.6, "two", ())))  # type: ignore[arg-type]
    with pytest.raises(InputError, match="'MgO' can mean several phases") as caught:
        library.choose("MgO")
    message = str(caught.value)
    for phase in library.phases():
        assert phase.phase_id in message
        assert f"{phase.cell[0]:.2f}" in message
    assert max(map(len, message.splitlines()[1:])) <= 80
    assert library.choose("two").cell[0] == 4.6


def test_two_measurements_of_one_phase_need_no_choice(library: Library) -> None:
    library.add_crystals(_crystals((4.21, "a", ()), (4.22, "b", ())))  # type: ignore[arg-type]
    assert library.choose("MgO").cell[0] in {4.21, 4.22}


def test_the_form_met_at_ambient_conditions_is_meant(library: Library) -> None:
    library.add_crystals(
        _crystals((3.9, "dense", ("high_pressure",)), (4.21, "", ()), (4.5, "", ("hypothetical",)))  # type: ignore[arg-type]
    )
    assert library.choose("MgO").cell[0] == 4.21
    assert [phase.cell[0] for phase in library.find("MgO")] == [4.21, 3.9, 4.5]
    assert library.choose("dense").cell[0] == 3.9


def test_exact_names_come_first(library: Library) -> None:
    library.add_crystals(
        _crystals((4.2, "titanohalite", ()), (4.6, "halite", ()), (4.9, "halite, wet", ()))  # type: ignore[arg-type]
    )
    assert [phase.name for phase in library.find("halite")] == [
        "halite", "halite, wet", "titanohalite",
    ]  # fmt: skip
    assert library.choose("halite").name == "halite"
    assert library.choose("wet").name == "halite, wet"
    assert library.choose("titanoh").name == "titanohalite"
    with pytest.raises(InputError, match="several phases"):
        library.choose("halit")


def test_whole_words_come_before_parts(library: Library) -> None:
    library.add_crystals(
        _crystals((4.2, "clausthalite", ()), (4.6, "rock salt halite", ()), (4.9, "halites", ()))  # type: ignore[arg-type]
    )
    assert [phase.name for phase in library.find("halite")] == [
        "rock salt halite", "halites", "clausthalite",
    ]  # fmt: skip
    assert library.choose("halite").name == "rock salt halite"


@pytest.mark.parametrize("text", ["iron", "Iron", "IRON"])
def test_an_element_is_known_by_its_name(starter_library: Library, text: str) -> None:
    phase = starter_library.choose(text)
    assert (phase.formula, phase.space_group_number) == ("Fe", 229)


@pytest.mark.parametrize(
    ("text", "formula"), [("aluminum", "Al"), ("aluminium", "Al"), ("wolfram", "W")]
)
def test_an_element_has_its_other_name(starter_library: Library, text: str, formula: str) -> None:
    assert starter_library.choose(text).formula == formula


@pytest.mark.parametrize(
    ("mineral", "name"),
    [  # common practice, no source
        ("osbornite", "titanium nitride"),
        ("halite", "sodium chloride"),
        ("qusongite", "tungsten carbide"),
        ("cohenite", "cementite"),
    ],
)
def test_what_is_mostly_made_goes_by_its_common_name(
    starter_library: Library, mineral: str, name: str
) -> None:
    assert starter_library.choose(mineral).name == name
    assert starter_library.choose(name) == starter_library.choose(mineral)
    phase = starter_library.choose(mineral)
    assert starter_library.crystal(phase.phase_id).other_names == (mineral,)


def test_a_textbook_formula_finds_the_real_phase(starter_library: Library) -> None:
    phase = starter_library.choose("FeO")
    assert (phase.elements, phase.space_group_number) == (("Fe", "O"), 225)  # wüstite, Fe1-xO
    assert starter_library.choose("wüstite") == starter_library.choose("wustite") == phase


@pytest.mark.parametrize(
    ("text", "number", "a_A"),
    [
        # space group and cell edge: handbook values, from memory
        ("Al", 225, 4.05), ("aluminium", 225, 4.05), ("corundum", 167, 4.76),
        ("O3Al2", 167, 4.76), ("rutile", 136, 4.59), ("anatase", 141, 3.78),
    ],
)  # fmt: skip
def test_the_starter_library_knows_its_phases(
    starter_library: Library, text: str, number: int, a_A: float
) -> None:
    phase = starter_library.choose(text)
    assert phase.space_group_number == number
    assert phase.cell[0] == pytest.approx(a_A, abs=0.01)
