"""`phaseid lines` and `phaseid near`."""

from __future__ import annotations

import math
from pathlib import Path

import pytest

A_NACL = 5.6402  # Å, halite at room temperature; from memory of handbook tables
CU_KA1_A = 1.540593  # Å; Hölzer et al. 1997, Phys. Rev. A 56, 4554; from memory
HALITE = f"""\
data_halite
_chemical_name_mineral Halite
_cell_length_a {A_NACL}
_cell_length_b {A_NACL}
_cell_length_c {A_NACL}
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_space_group_name_H-M_alt 'F m -3 m'
_space_group_IT_number 225
loop_
_atom_site_label
_atom_site_type_symbol
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
_atom_site_occupancy
Na Na 0 0 0 1
Cl Cl 0.5 0.5 0.5 1
"""


@pytest.fixture
def halite(tmp_path: Path) -> str:
    path = tmp_path / "halite.cif"
    path.write_text(HALITE, encoding="utf-8")
    return str(path)


def test_lines_of_a_cif_file(phaseid, halite: str) -> None:
    value = phaseid("lines", halite, "--probe", "x-ray Cu Ka1", "--json").json("lines-1")
    assert value["phase"]["source"]["file"] == "halite.cif"
    assert value["phase"]["space_group"]["number"] == 225
    assert value["lines"][0]["hkl"] == [1, 1, 1]
    for line in value["lines"]:
        d_A = A_NACL / math.sqrt(sum(index**2 for index in line["hkl"]))
        assert line["d_A"] == pytest.approx(d_A, rel=1e-6)
        assert line["g_inv_A"] == pytest.approx(1 / d_A, rel=1e-6)
        two_theta_deg = 2 * math.degrees(math.asin(CU_KA1_A / (2 * d_A)))
        assert line["two_theta_deg"] == pytest.approx(two_theta_deg, abs=0.01)
    strongest = max(value["lines"], key=lambda line: line["intensity"])
    assert strongest["hkl"] == [2, 0, 0]  # rock salt's strongest X-ray line: common practice
    assert strongest["intensity"] == pytest.approx(100)
    spacings = [line["d_A"] for line in value["lines"]]
    assert spacings == sorted(spacings, reverse=True)


def test_lines_stop_at_d_min(phaseid, halite: str) -> None:
    words = ("lines", halite, "--probe", "electron 200 kV", "--json")
    value = phaseid(*words, "--d-min", "1.5").json("lines-1")
    assert [line["hkl"] for line in value["lines"]] == [
        [1, 1, 1],
        [2, 0, 0],
        [2, 2, 0],
        [3, 1, 1],
        [2, 2, 2],
    ]
    assert len(phaseid(*words).json("lines-1")["lines"]) > 5


def test_dispersion_follows_the_wavelength(phaseid, halite: str) -> None:
    def f2_of_111(probe: str) -> float:
        value = phaseid("lines", halite, "--probe", probe, "--json").json("lines-1")
        return float(value["lines"][0]["f2"])

    # just below and far above the chlorine K edge (2.822 keV) f′ differs by electrons
    assert abs(f2_of_111("x-ray 2.815 keV") / f2_of_111("x-ray 20 keV") - 1) > 0.2


def test_a_phase_of_the_library_by_formula_and_by_id(phaseid) -> None:
    by_formula = phaseid("lines", "Al", "--json").json("lines-1")
    by_id = phaseid("lines", by_formula["phase"]["phase_id"], "--json").json("lines-1")
    assert by_id == by_formula
    assert by_formula["phase"]["formula"] == "Al"
    assert by_formula["probe"]["kind"] == "x-ray"


@pytest.mark.parametrize("columns", [60, 80])
def test_the_table_fits_the_terminal(
    phaseid, halite: str, columns: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("COLUMNS", str(columns))
    done = phaseid("lines", halite)
    assert done.code == 0
    assert max(len(line) for line in done.out.splitlines()) <= columns
    row = next(
        line.split() for line in done.out.splitlines() if line.split()[:3] == ["2"] + ["0"] * 2
    )
    assert row[3] == f"{A_NACL / 2:.5f}"
    assert "100.0" in row


def test_several_structures_in_a_file_are_told(phaseid, tmp_path: Path) -> None:
    path = tmp_path / "two.cif"
    path.write_text(HALITE + HALITE.replace("data_halite", "data_again"), encoding="utf-8")
    done = phaseid("lines", str(path))
    assert done.code == 0
    assert "holds 2 structures" in done.err


@pytest.mark.parametrize("text", ["", "data_x\n_cell_length_a 4\n", "\x00\x01\x02"])
def test_a_file_without_a_structure_is_told(phaseid, tmp_path: Path, text: str) -> None:
    path = tmp_path / "bad.cif"
    path.write_text(text, encoding="utf-8")
    done = phaseid("lines", str(path))
    assert done.code == 2
    assert "bad.cif" in done.err
    assert "Traceback" not in done.err


@pytest.mark.parametrize(
    "words",
    [("lines", "none.cif"), ("lines", "Al", "--probe", "gamma"), ("near", "2", "--not", "0")],
)
def test_wrong_words_are_exit_code_2(phaseid, words: tuple[str, ...]) -> None:
    done = phaseid(*words)
    assert (done.code, done.out) == (2, "")
    assert done.err


def test_a_wavelength_that_was_assumed_is_told(phaseid) -> None:
    assert "(assumed, for none was stated)" in phaseid("lines", "Al", "--probe", "electron").out
    assert "assumed" not in phaseid("lines", "Al", "--probe", "electron 200 kV").out


def test_near_finds_the_line_asked_for(phaseid) -> None:
    value = phaseid("near", "2.338", "--tolerance", "0.5 %", "--only", "Al", "--json").json(
        "near-1"
    )
    aluminium = [match for match in value["matches"] if match["phase"]["formula"] == "Al"]
    assert aluminium[0]["hkl"] == [1, 1, 1]  # a(Al) = 4.0495 Å, from memory: d(111) = 2.3380 Å
    assert aluminium[0]["intensity"] == pytest.approx(100)
    for match in value["matches"]:
        assert abs(match["d_A"] / 2.338 - 1) <= 0.005
        assert match["wanted_d_A"] == 2.338
        assert set(match["phase"]["elements"]) == {"Al"}


def test_near_puts_phases_that_meet_more_first(phaseid) -> None:
    value = phaseid("near", "2.338", "2.025", "--tolerance", "0.2%", "--json").json("near-1")
    met: dict[str, set[float]] = {}
    for match in value["matches"]:
        met.setdefault(match["phase"]["phase_id"], set()).add(match["wanted_d_A"])
    counts = [len(wanted) for wanted in met.values()]
    assert counts == sorted(counts, reverse=True)
    assert value["matches"][0]["phase"]["formula"] == "Al"


def test_near_leaves_weak_lines_out(phaseid) -> None:
    loose = phaseid("near", "2.0", "--min-intensity", "0", "--json").json("near-1")["matches"]
    strict = phaseid("near", "2.0", "--min-intensity", "50", "--json").json("near-1")["matches"]
    assert 0 < len(strict) < len(loose)
    assert min(match["intensity"] for match in strict) >= 50


@pytest.mark.parametrize("columns", [60, 80])
def test_near_as_text(phaseid, columns: int, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("COLUMNS", str(columns))
    done = phaseid("near", "2.338", "--only", "Al", "--top", "1")
    assert done.code == 0
    assert "1 1 1" in done.out
    assert max(len(line) for line in done.out.splitlines()) <= columns


def test_nothing_near_is_an_answer(phaseid) -> None:
    done = phaseid("near", "2.338", "--only", "He")
    assert (done.code, done.out) == (0, "")
    assert "--tolerance" in done.err
    assert phaseid("near", "2.338", "--only", "He", "--json").json("near-1")["matches"] == []


@pytest.mark.parametrize("tolerance", ["zero", "-1%", "90"])
def test_a_tolerance_that_is_none_is_refused(phaseid, tolerance: str) -> None:
    assert phaseid("near", "2.338", f"--tolerance={tolerance}").code == 2


def test_a_spacing_that_is_none_is_refused(phaseid) -> None:
    assert phaseid("near", "--", "-2.3").code == 2
    assert phaseid("near", "nan").code == 2
    done = phaseid("near", "2.3", "rings.csv")
    assert done.code == 2
    assert "do not mix" in done.err


@pytest.mark.parametrize(
    "words",
    [("2,338", "2,025"), ("2.338, 2.025",), ("4.2772", "4.9383", "--unit", "g_1/nm")],
)
def test_near_takes_spacings_as_people_type_them(phaseid, words: tuple[str, ...]) -> None:
    value = phaseid("near", *words, "--only", "Al", "--json").json("near-1")
    wanted = {round(match["wanted_d_A"], 3) for match in value["matches"]}
    assert wanted == {2.338, 2.025}
