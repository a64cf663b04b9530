"""What `phaseid lines` can be asked for beyond the plain list."""

from __future__ import annotations

import math

import pytest

A_SI = 5.431  # Å, from memory; certified standards differ in the fourth decimal
ELECTRONS = ("--probe", "electron 200 kV", "--json")


def test_the_whole_ring_is_its_mean_times_its_circumference(phaseid) -> None:
    """A plate ring's circumference goes with 1/d (arithmetic)."""
    mean = phaseid("lines", "Si", *ELECTRONS).json("lines-1")
    total = phaseid("lines", "Si", *ELECTRONS, "--quantity", "sum").json("lines-1")
    assert (mean["quantity"], total["quantity"]) == ("mean", "sum")
    ratios = [
        b["intensity"] * b["d_A"] / a["intensity"]
        for a, b in zip(mean["lines"], total["lines"], strict=True)
    ]
    assert ratios == pytest.approx([ratios[0]] * len(ratios), rel=1e-9)


def test_thick_crystals_level_strong_and_weak(phaseid) -> None:
    """Blackman 1939: from |F|² towards |F|; 311 of silicon gains on 220, which is stronger."""

    def of_220(value) -> float:  # type: ignore[no-untyped-def]
        lines = {tuple(line["hkl"]): line["intensity"] for line in value["lines"]}
        return float(lines[3, 1, 1] / lines[2, 2, 0])

    thin = phaseid("lines", "Si", *ELECTRONS, "--thickness", "0.1").json("lines-1")
    thick = phaseid("lines", "Si", *ELECTRONS, "--thickness", "500").json("lines-1")
    plain = phaseid("lines", "Si", *ELECTRONS).json("lines-1")
    assert of_220(thin) == pytest.approx(of_220(plain), rel=1e-3)
    f2 = {tuple(line["hkl"]): line["f2"] for line in plain["lines"]}
    gain = math.sqrt(f2[2, 2, 0] / f2[3, 1, 1])
    assert of_220(thick) / of_220(plain) == pytest.approx(gain, rel=0.15)
    assert thick["thickness_nm"] == 500
    assert plain["thickness_nm"] is None


@pytest.mark.parametrize(
    ("constant", "unit", "factor"), [("25.1 A mm", "mm", 25.1), ("9.8 nm px", "px", 98.0)]
)
def test_radii_are_the_camera_constant_over_d(
    phaseid, constant: str, unit: str, factor: float
) -> None:
    value = phaseid("lines", "Si", *ELECTRONS, "--camera-constant", constant).json("lines-1")
    assert value["radius_unit"] == unit
    for line in (*value["lines"], *value["may_appear"]):
        assert line["radius"] == pytest.approx(factor / line["d_A"], rel=1e-12)
    shown = phaseid("lines", "Si", *ELECTRONS[:2], "--camera-constant", constant).out
    assert f" {factor * math.sqrt(3) / A_SI:.2f}" in shown
    assert "radius" in shown


def test_q_is_two_pi_over_d(phaseid) -> None:
    value = phaseid("lines", "Si", *ELECTRONS).json("lines-1")
    for line in value["lines"]:
        assert line["q_inv_A"] == pytest.approx(2 * math.pi / line["d_A"], rel=1e-12)
        assert line["radius"] is None


def test_a_white_beam_has_spacings_and_no_angles(phaseid) -> None:
    """Time of flight: intensity m|F|²d⁴ (Buras & Gerward 1975, Acta Cryst. A31, 372)."""
    words = ("lines", "Si", "--probe", "neutron tof")
    value = phaseid(*words, "--json").json("lines-1")
    weights = [line["multiplicity"] * line["f2"] * line["d_A"] ** 4 for line in value["lines"]]
    for line, weight in zip(value["lines"], weights, strict=True):
        assert line["two_theta_deg"] is None
        assert line["intensity"] == pytest.approx(100 * weight / max(weights), rel=1e-9)
    assert "2θ" not in phaseid(*words).out


def test_the_page_says_how_far_it_goes(phaseid) -> None:
    assert "Complete down to 1.5 Å." in phaseid("lines", "Si", "--d-min", "1.5").out
    whole = phaseid("lines", "corundum", *ELECTRONS[:2]).out
    assert "Complete down to 0.6 Å; " in whole
    assert "are left out" in whole


def test_double_diffraction_is_listed_for_electrons_alone(phaseid) -> None:
    """200 of silicon (Hirsch et al. 1965, Electron Microscopy of Thin Crystals, from memory)."""
    value = phaseid("lines", "Si", *ELECTRONS).json("lines-1")
    assert value["may_appear"][0]["hkl"] == [2, 0, 0]
    assert value["may_appear"][0]["d_A"] == pytest.approx(A_SI / 2, rel=1e-4)
    assert [2, 0, 0] not in [line["hkl"] for line in value["lines"]]
    text = phaseid("lines", "Si", *ELECTRONS[:2]).out
    assert "May appear by double diffraction, though forbidden: 2 0 0 at 2.7155 Å" in text
    assert phaseid("lines", "Si", *ELECTRONS, "--no-may-appear").json("lines-1")["may_appear"] == []
    for words, listed in (((), False), (("--may-appear",), True)):
        value = phaseid("lines", "Si", "--json", *words).json("lines-1")
        assert bool(value["may_appear"]) is listed


def test_ghosts_of_a_bare_tube_stand_where_bragg_puts_them(phaseid) -> None:
    """Cu Kβ1 1.39223 Å and W Lα1 1.4763 Å (Int. Tables C Table 4.2.2.4; W from memory)."""
    value = phaseid("lines", "Si", "--probe", "x-ray Cu Ka1", "--json").json("lines-1")
    wavelengths_A = {"Cu Kβ": 1.39223, "Cu Kα2": 1.54443, "W Lα": 1.4763}
    assert {ghost["name"] for ghost in value["ghosts"]} == set(wavelengths_A)
    for ghost in value["ghosts"]:
        d_A = A_SI / math.sqrt(sum(index**2 for index in ghost["of_hkl"]))
        wavelength_A = wavelengths_A[ghost["name"]]
        angle = 2 * math.degrees(math.asin(wavelength_A / (2 * d_A)))
        assert ghost["two_theta_deg"] == pytest.approx(angle, abs=0.01)
        assert ghost["seems_d_A"] == pytest.approx(d_A * 1.540593 / wavelength_A, rel=1e-4)
        assert ghost["of_intensity"] >= 10
    text = phaseid("lines", "Si", "--probe", "x-ray Cu Ka1").out
    assert "Cu Kβ 1.39223 Å: 1 1 1 at 25.65°" in text


@pytest.mark.parametrize(
    "probe", ["x-ray Cu Ka graphite monochromator", "x-ray 20 keV", "electron 200 kV"]
)
def test_no_ghosts_of_one_wavelength(phaseid, probe: str) -> None:
    assert phaseid("lines", "Si", "--probe", probe, "--json").json("lines-1")["ghosts"] == []
    assert "ghost" not in phaseid("lines", "Si", "--probe", probe).out


@pytest.mark.parametrize(
    ("words", "says"),
    [
        (("--thickness", "30"), "electron"),
        (("--thickness", "-3", "--probe", "electron 200 kV"), "positive"),
        (("--thickness", "nan", "--probe", "electron 200 kV"), "positive"),
        (("--camera-constant", "25.1"), "A mm"),
        (("--quantity", "total"), "sum"),
        (("--d-min", "nan"), "d"),
        (("--d-min", "0"), "0.1"),
    ],
)
def test_wrong_wishes_are_exit_code_2(phaseid, words: tuple[str, ...], says: str) -> None:
    done = phaseid("lines", "Si", *words)
    assert (done.code, done.out) == (2, "")
    assert says in done.err
    assert "Traceback" not in done.err


@pytest.mark.parametrize("columns", [60, 72, 80, 100])
@pytest.mark.parametrize("probe", ["x-ray Cu Ka", "electron 200 kV"])
def test_every_page_fits_the_terminal(
    phaseid, columns: int, probe: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("COLUMNS", str(columns))
    done = phaseid("lines", "corundum", "--probe", probe)
    assert done.code == 0
    assert max(len(line) for line in done.out.splitlines()) <= columns


CROWDED = """\
data_crowded
_cell_length_a 4
_cell_length_b 4
_cell_length_c 4
_cell_angle_alpha 90
_cell_angle_beta 90
_cell_angle_gamma 90
_space_group_name_H-M_alt 'P 1'
_chemical_formula_sum 'Fe O'
loop_
_atom_site_label
_atom_site_fract_x
_atom_site_fract_y
_atom_site_fract_z
_atom_site_occupancy
Fe 0 0 0 {occupancy}
O 0.5 0.5 {z} 1
"""


@pytest.mark.parametrize(
    ("occupancy", "z", "says"), [("1.2", "0.5", "1.2"), ("0.5", "0.5", "formula"), ("1", "?", "O")]
)
def test_doubts_about_a_structure_stand_beside_its_lines_or_instead(
    phaseid, tmp_path, occupancy: str, z: str, says: str
) -> None:
    path = tmp_path / "crowded.cif"
    path.write_text(CROWDED.format(occupancy=occupancy, z=z), encoding="utf-8")
    done = phaseid("lines", str(path))
    if z == "?":
        assert (done.code, done.out) == (2, "")
        assert says in done.err
    else:
        assert done.code == 0
        assert says in done.out.split("What to know of this structure:")[1]
