"""Every odd CIF in tests/cif reads as written here; every broken one in tests/bad is refused.

The first line of each file says what is odd and where its numbers are from. Contents follow from
formula and Z of the same file, or from the multiplicities in International Tables A.
"""

from __future__ import annotations

import math
from pathlib import Path

import pytest

from phaseid.crystal.cif import CifReading, read_cif, read_cif_file
from phaseid.crystal.composition import cell_contents
from phaseid.crystal.crystal import Crystal
from phaseid.errors import InputError

TESTS = Path(__file__).resolve().parent.parent
ROCK_SALT = {"Na": 4, "Cl": 4}
BRUCITE_FRAME = {"Mg": 1, "O": 2}

# file: space group, atoms per cell, codes of all findings
READ: dict[str, tuple[int, dict[str, float], set[str]]] = {
    "angles_missing": (62, {"C": 4, "Fe": 12}, {"angle_default"}),
    "aniso_only": (194, {"Zn": 2}, set()),
    "axes_hexagonal": (167, {"Ca": 6, "C": 6, "O": 18}, set()),
    "axes_rhombohedral": (167, {"Ca": 2, "C": 2, "O": 6}, set()),
    "b_iso_and_b_aniso": (225, ROCK_SALT, set()),
    "bom": (225, ROCK_SALT, set()),
    "citation": (131, {"Pd": 2, "O": 2}, set()),
    "conditions": (225, ROCK_SALT, {"high_pressure", "high_temperature"}),
    "contact": (1, {"Fe": 1, "O": 2}, {"overlapping_atoms", "higher_symmetry"}),
    "crlf_and_case": (225, ROCK_SALT, set()),
    "density_mismatch": (225, ROCK_SALT, {"density_mismatch", "volume_mismatch"}),
    "deuterium": (164, {"D": 2, "Mg": 1, "O": 2}, set()),
    "dummy_and_unlocated": (
        164,
        BRUCITE_FRAME,
        {"dummy_sites_skipped", "incomplete_coordinates", "hydrogen_missing"},
    ),
    "duplicate_tag": (225, ROCK_SALT, {"duplicate_tag"}),
    "empty_loop": (225, ROCK_SALT, {"syntax_error"}),
    "formula_mismatch": (225, {"Na": 4}, {"formula_mismatch"}),
    "fractions": (225, ROCK_SALT, {"coord_fraction"}),
    "high_pressure": (224, {"H": 4, "O": 2}, {"high_pressure"}),
    "hm_old_cubic": (221, {"La": 1, "B": 6}, set()),
    "hm_origin_1_fits": (227, {"C": 8}, set()),
    "hm_origin_open": (224, {"Cu": 2, "O": 4}, {"setting_assumed"}),
    "hm_origin_unstated": (227, {"C": 8}, set()),
    "hm_origin_word": (227, {"C": 8}, {"hm_nonstandard"}),
    "hm_underscore": (14, {"As": 4}, {"hm_nonstandard"}),
    "hydrogen_missing": (164, BRUCITE_FRAME, {"hydrogen_missing"}),
    "identity_only": (1, {"Cu": 4}, {"hm_ops_conflict", "higher_symmetry"}),
    "identity_whole_cell": (1, {"Cu": 4}, {"hm_ops_conflict", "higher_symmetry"}),
    "item_without_value": (225, ROCK_SALT, {"syntax_error"}),
    "label_hydrogen": (164, {"H": 2, "Mg": 1, "O": 2}, {"unusual_label"}),
    # Fornasini & Pani (1992): Ba15 Al13.4 Ga14.5, Z = 1
    "label_unknown_balanced": (166, {"Al": 13.4, "Ba": 15, "Ga": 14.5}, {"unknown_element"}),
    "latin1": (225, ROCK_SALT, {"encoding"}),
    "mates_listed_twice": (166, {"As": 2}, {"duplicate_sites"}),
    "mixed_site": (221, {"Pb": 1, "Mg": 0.25, "Nb": 0.5, "Ti": 0.25, "O": 3}, set()),
    "no_label_column": (225, ROCK_SALT, set()),
    "number_quoted": (221, {"Cs": 1, "Cl": 1}, {"symmetry_from_number"}),
    "occupancy_dot": (225, ROCK_SALT, {"occupancy_default"}),
    "occupancy_sum_1.1": (204, {"As": 24, "Co": 6.96, "Fe": 0.88, "Ni": 1.04}, {"bad_occupancy"}),
    "occupancy_zero": (225, ROCK_SALT, {"zero_occupancy"}),
    "operations_contradict_name": (10, {"Fe": 3}, {"hm_ops_conflict"}),
    "operations_mistyped": (14, {"Fe": 4}, {"bad_symmetry"}),
    "operations_only": (2, {"Cu": 2}, set()),
    "operations_untabulated": (131, {"Pd": 2, "O": 2}, {"nonstandard_setting", "hm_nonstandard"}),
    "origin_of_operations_wrong": (227, {"Co": 8, "Fe": 16, "O": 32}, {"origin_corrected"}),
    "p1_with_symmetry": (1, {"Cu": 4}, {"higher_symmetry"}),
    "prose_first": (225, ROCK_SALT, {"syntax_error"}),
    "special_position_rounded": (194, {"Zn": 2}, set()),
    "split_position": (221, {"Sr": 1, "O": 1}, set()),
    "theoretical": (225, ROCK_SALT, {"theoretical"}),
    "theoretical_cod": (225, ROCK_SALT, {"theoretical"}),
    "u_that_is_b": (225, ROCK_SALT, {"displacement_as_b"}),
    "water_label": (137, {"O": 10}, {"water_label", "hydrogen_missing"}),
    "z_mismatch": (225, ROCK_SALT, {"z_mismatch"}),
}
# file in tests/bad: code of the refusal, where it is not the file's own name
REFUSED = {
    "absurd_cell_angles": "absurd_cell",
    "absurd_cell_dense": "absurd_cell",
    "absurd_cell_empty": "absurd_cell",
    "absurd_cell_length": "absurd_cell",
    "bad_coordinates_angstrom": "bad_coordinates",
    "bad_coordinates_shifted": "bad_coordinates",
    "bad_occupancy_text": "bad_occupancy",
    "bad_symmetry_unreadable": "bad_symmetry",
    "cell_length_missing": "no_cell",
    "no_structure_dotted": "no_structure",
    "symmetry_ambiguous_identity": "symmetry_ambiguous",
}


def read(name: str) -> CifReading:
    return read_cif_file(TESTS / "cif" / f"{name}.cif")


def only(name: str) -> Crystal:
    reading = read(name)
    assert reading.rejects == ()
    (crystal,) = reading.crystals
    return crystal


@pytest.mark.parametrize("name", sorted(READ))
def test_odd_file_reads_as_expected(name: str) -> None:
    number, contents, codes = READ[name]
    crystal = only(name)
    assert crystal.space_group_number == number
    assert cell_contents(crystal) == pytest.approx(contents, rel=3e-3)
    assert {finding.code for finding in crystal.findings} == codes
    assert crystal.source.file == f"{name}.cif"


def test_every_odd_file_is_expected() -> None:
    files = {path.stem for path in (TESTS / "cif").glob("*.cif")}
    assert files == {*READ, "several_blocks"}


@pytest.mark.parametrize("path", sorted((TESTS / "bad").glob("*.cif")), ids=lambda path: path.stem)
def test_broken_file_is_refused_with_its_reason(path: Path) -> None:
    reading = read_cif_file(path)
    assert reading.crystals == ()
    (reject,) = reading.rejects
    assert reject.code == REFUSED.get(path.stem, path.stem)
    assert len(reject.reason.split()) >= 4


def test_several_blocks_give_structures_and_refusals_apart() -> None:
    reading = read("several_blocks")
    assert [crystal.formula for crystal in reading.crystals] == ["NaCl", "LaB6"]
    assert [(reject.code, reject.block) for reject in reading.rejects] == [("no_symmetry", "three")]


def test_symbols_carry_the_setting_where_it_is_not_the_standard_one() -> None:
    symbols = {
        "axes_hexagonal": "R-3c",
        "axes_rhombohedral": "R-3c:R",
        "hm_origin_1_fits": "Fd-3m:1",
        "hm_origin_unstated": "Fd-3m",
        "hm_underscore": "P21/n",
        "hm_old_cubic": "Pm-3m",
    }
    assert {name: only(name).space_group_symbol for name in symbols} == symbols


def test_operations_are_complete_with_centring() -> None:
    # orders of the groups: International Tables A
    orders = {"no_label_column": 192, "axes_hexagonal": 36, "axes_rhombohedral": 12, "contact": 1}
    assert {name: len(set(only(name).operations)) for name in orders} == orders


def test_b_is_turned_into_u() -> None:
    # B = 8 pi^2 U (Trueblood et al. (1996), Acta Cryst. A52, 770)
    sodium, chlorine = only("b_iso_and_b_aniso").sites
    assert sodium.u_iso_A2 == pytest.approx(1.6 / (8 * math.pi**2))
    assert chlorine.u_iso_A2 == pytest.approx(1.3 / (8 * math.pi**2))
    assert sodium.u_aniso_A2 == pytest.approx([1.6 / (8 * math.pi**2)] * 3 + [0, 0, 0])


def test_equivalent_u_of_a_hexagonal_cell() -> None:
    # U11 = U22 = 2 U12: Ueq = (U11 + U22 + U33) / 3 on Cartesian axes along a, a* turned, c
    (zinc,) = only("aniso_only").sites
    assert zinc.u_iso_A2 == pytest.approx((0.010 + 0.010 + 0.020) / 3)


def test_sites_that_share_a_label_take_its_tensors_in_turn() -> None:
    head = (TESTS / "cif" / "aniso_only.cif").read_text().split("loop_")[0]
    text = head + (
        "loop_\n_atom_site_label\n_atom_site_fract_x\n_atom_site_fract_y\n_atom_site_fract_z\n"
        "Zn .3333 .6667 .25\nZn 0 0 0\nloop_\n_atom_site_aniso_label\n"
        + "".join(f"_atom_site_aniso_U_{ij}\n" for ij in ("11", "22", "33", "12", "13", "23"))
        + "Zn .01 .01 .02 .005 0 0\nZn .03 .03 .04 .015 0 0\n"
    )
    first, second = read_cif(text.encode(), "x.cif").crystals[0].sites
    assert (first.u_aniso_A2, second.u_aniso_A2) == (
        (0.01, 0.01, 0.02, 0.005, 0, 0),
        (0.03, 0.03, 0.04, 0.015, 0, 0),
    )


def test_displacement_of_zero_counts_as_not_stated() -> None:
    text = (TESTS / "cif" / "u_that_is_b.cif").read_text().replace(" 1.6", " 0").replace("1.3", "0")
    sites = read_cif(text.encode(), "x.cif").crystals[0].sites
    assert [site.u_iso_A2 for site in sites] == [None, None]


def test_magnetic_entry_with_ordinary_operations_is_marked() -> None:
    text = (TESTS / "cif" / "bom.cif").read_text(encoding="utf-8-sig")
    text += "loop_\n_atom_site_moment.label\n_atom_site_moment.crystalaxis_x\nNa1 1.0\n"
    codes = {f.code for f in read_cif(text.encode(), "x.mcif").crystals[0].findings}
    assert codes == {"magnetic"}


def test_ions_keep_their_charges() -> None:
    charges = {site.element: site.charge for site in only("mixed_site").sites}
    assert charges == {"Pb": 2, "Mg": 2, "Nb": 5, "Ti": 4, "O": -2}


def test_occupancy_is_chemical_on_special_positions() -> None:
    assert [site.occupancy for site in only("hm_old_cubic").sites] == [1.0, 1.0]


def test_rounded_special_position_is_made_exact() -> None:
    (zinc,) = only("special_position_rounded").sites
    assert zinc.fract == pytest.approx((1 / 3, 2 / 3, 1 / 4), abs=1e-9)


def test_split_position_stays_split() -> None:
    oxygen = only("split_position").sites[1]
    assert oxygen.fract == (0.5, 0.5, 0.5775)


def test_unknown_site_is_shared_out_as_the_formula_says() -> None:
    shared = {
        s.element: s.occupancy for s in only("label_unknown_balanced").sites if s.label == "X"
    }
    assert shared == pytest.approx({"Al": 0.63, "Ga": 0.37}, abs=2e-3)


def test_name_source_and_citation() -> None:
    crystal = only("citation")
    assert crystal.name == "Palladium oxide"
    assert (crystal.source.database, crystal.source.id) == ("COD", "1009031")
    assert crystal.source.reference == (
        "Waser, J.; Levy, H. A.; Peterson, S. W., Acta Crystallographica 6 (1953) 661, "
        "doi:10.1107/S0365110X53001800"
    )
    assert only("theoretical").source.database == "Materials Project"
    assert only("theoretical").source.id == "mp-22862"
    assert only("bom").source.database == "file"


def test_conditions_from_tags_and_title() -> None:
    tagged, titled = only("conditions"), only("high_pressure")
    assert (tagged.temperature_K, tagged.pressure_GPa) == (773, 5.4)
    assert (titled.temperature_K, titled.pressure_GPa) == (223, 2.5)


def test_formula_and_z_of_a_mixed_crystal() -> None:
    crystal = only("occupancy_sum_1.1")
    assert (crystal.formula, crystal.z) == ("Fe0.11Co0.87Ni0.13As3", 8)


def test_missing_file_is_an_input_error(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"nowhere\.cif: cannot be opened"):
        read_cif_file(tmp_path / "nowhere.cif")


def test_missing_angle_is_not_guessed_where_the_group_asks_for_another() -> None:
    text = (TESTS / "cif" / "axes_hexagonal.cif").read_text().replace("_cell_angle_gamma 120\n", "")
    (reject,) = read_cif(text.encode(), "x.cif").rejects
    assert reject.code == "cell_symmetry_conflict"
