"""Probes from words: wavelengths against International Tables C, spellings, clear refusals."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from phaseid.errors import InputError
from phaseid.probes import ghost_d_A, parse_probe, parse_relative

REFERENCE = Path(__file__).parents[1] / "reference"
XRAY = json.loads((REFERENCE / "xray_wavelengths.json").read_text())


@pytest.mark.parametrize("row", XRAY["rows"], ids=lambda row: str(row["element"]))
def test_anode_lines_are_those_of_international_tables(row: dict[str, Any]) -> None:
    # Int. Tables C Table 4.2.2.1; Bearden 1967 in Å*, 15 to 24 ppm longer, within its own errors
    for line in ("Ka1", "Ka2", "Kb1"):
        probe = parse_probe(
            f"x-ray {row['element']} {line.removesuffix('1') if 'b' in line else line}"
        )
        assert probe.wavelength_A == pytest.approx(row[f"{line}_A"], rel=1e-9)
        bearden_A = row["bearden_Astar"][line] * (1 + 20e-6)
        assert probe.wavelength_A == pytest.approx(bearden_A, rel=4e-5)


def test_copper_doublet_is_the_weighted_mean() -> None:
    # (2 Kα1 + Kα2)/3; in Å* the customary 1.54184
    assert parse_probe("x-ray Cu Ka").wavelength_A == pytest.approx(XRAY["cu_ka_mean_A"], rel=1e-12)
    assert parse_probe("x-ray Cu Ka").wavelength_A / 1.0000201 == pytest.approx(1.54184, abs=5e-6)


@pytest.mark.parametrize("anode", ["Cr", "Fe", "Co", "Cu", "Mo", "Ag", "W"])
def test_anode_lines_agree_with_xraydb(anode: str) -> None:
    # its Elam energies are good to 200 ppm: catches a digit slip or a swapped anode
    import xraydb

    lines = xraydb.xray_lines(anode)
    for ours, theirs in (("Ka1", "Ka1"), ("Ka2", "Ka2"), ("Kb", "Kb1")):
        energy = parse_probe(f"x-ray {anode} {ours}").xray_energy_eV
        assert energy == pytest.approx(lines[theirs].energy, rel=3e-4)


@pytest.mark.parametrize(
    ("text", "wavelength", "label", "geometry"),
    [
        ("electron 200 kV", 0.0250793, "electron 200 kV", "ring"),
        ("electron 200 keV", 0.0250793, "electron 200 kV", "ring"),
        ("ELECTRONS 200kV", 0.0250793, "electron 200 kV", "ring"),
        ("200 kV", 0.0250793, "electron 200 kV", "ring"),
        ("TEM 0.2 MV", 0.0250793, "electron 200 kV", "ring"),
        ("e- 300000 V", 0.0196875, "electron 300 kV", "ring"),
        ("electron 0.0251 Å", 0.0251, "electron 0.0251 Å", "ring"),
        ("electron 2,51 pm", 0.0251, "electron 0.0251 Å", "ring"),
        ("x-ray Cu Ka", 1.541871, "x-ray Cu Kα", "bragg-brentano"),
        ("x-ray CuKa", 1.541871, "x-ray Cu Kα", "bragg-brentano"),
        ("X-rays, Cu K-alpha", 1.541871, "x-ray Cu Kα", "bragg-brentano"),
        ("X-ray: Cu K_alpha_1", 1.5405929, "x-ray Cu Kα1", "bragg-brentano"),
        ("Cu Kα1,2", 1.541871, "x-ray Cu Kα", "bragg-brentano"),
        ("x ray Cu tube", 1.541871, "x-ray Cu Kα", "bragg-brentano"),
        ("XRD Ni-filtered Cu Ka, 40 kV 40 mA", 1.541871, "x-ray Cu Kα", "bragg-brentano"),
        ("x-ray cu kα₁", 1.5405929, "x-ray Cu Kα1", "bragg-brentano"),
        ("xray Mo Kα", 0.710747, "x-ray Mo Kα", "bragg-brentano"),
        (
            "x-ray Cu Ka debye scherrer",
            1.541871,
            "x-ray Cu Kα, debye-scherrer",
            "debye-scherrer",
        ),
        ("x-ray 20 keV", 0.619921, "x-ray 20 keV", "debye-scherrer"),
        ("x-ray 8047.8 eV", 1.540597, "x-ray 8.0478 keV", "debye-scherrer"),
        ("x-ray 0.7107 A", 0.7107, "x-ray 0.7107 Å", "debye-scherrer"),
        ("x-ray λ = 0.07107 nm", 0.7107, "x-ray 0.7107 Å", "debye-scherrer"),
        (
            "x-ray 20 keV flat plate",
            0.619921,
            "x-ray 20 keV, transmission",
            "transmission",
        ),
        ("neutron 1.54 A", 1.54, "neutron 1.54 Å", "debye-scherrer"),
        ("neutrons 25.3 meV", 1.79816, "neutron 25.3 meV", "debye-scherrer"),
        ("neutron time-of-flight", 1.798, "neutron time of flight", "time-of-flight"),
    ],
)
def test_spellings(text: str, wavelength: float, label: str, geometry: str) -> None:
    probe = parse_probe(text)
    assert probe.wavelength_A == pytest.approx(wavelength, abs=6e-7 if wavelength < 0.1 else 6e-6)
    assert (probe.label, probe.geometry) == (label, geometry)


@pytest.mark.parametrize(
    "text",
    [
        "electron 123.456 kV",
        "electron",
        "x-ray",
        "x-ray, debye-scherrer",
        "x-ray Cu Kb",
        "x-ray Co Ka1 graphite monochromator",
        "synchrotron 12.398 keV",
        "x-ray 0.4 A transmission polarised 60 %",
        "neutron 31.7 meV",
        "neutron tof",
    ],
)
def test_a_label_reads_back_as_the_same_probe(text: str) -> None:
    from dataclasses import replace

    probe = parse_probe(text, scale_sigma=0.002)
    again = parse_probe(probe.label, scale_sigma=0.002)
    assert replace(again, assumed=()) == replace(probe, assumed=())


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "empty"),
        ("   ", "empty"),
        ("elektron 200 kV", "Did you mean 'electron'?"),
        ("neutrom 1.54 A", "Did you mean 'neutron'?"),
        ("electron 200", "'electron 200 kV'"),
        ("x-ray 1.54", "'x-ray 1.54 A'"),
        ("x-ray Zn Ka", "Cr, Fe, Co, Cu, Mo, Ag, W"),
        ("x-ray Cu Ka3", "no line Kα3"),
        ("x-ray 20 kV", "tube's voltage"),
        ("x-ray Cu Ka 1.54 A", "more than one"),
        ("neutron Cu Ka", "X-ray line"),
        ("neutron 200 kV", "meV"),
        ("electron x-ray 20 keV", "both"),
        ("x-ray tof", "neutrons"),
        ("electron 0 kV", "above zero"),
        ("electron 1e999 kV", "outside"),
        ("electron 20 A", "outside"),
        ("x-ray 2000 keV", "outside"),
        ("x-ray Cu Ka monochromator", "crystal or angle"),
        ("x-ray Cu Ka polarisation 1.5", "between 0 and 1"),
        ("12 furlongs", "no"),
        ("x" * 300, "too long"),
    ],
)
def test_refusals_say_what_to_write(text: str, says: str) -> None:
    with pytest.raises(InputError) as refused:
        parse_probe(text)
    assert says in str(refused.value)
    assert "'electron 200 kV'" in str(refused.value)


@given(st.text(alphabet="electron x-ray neutron CuKaα 0123456789.,keVA%Å°()±=\t#é", max_size=40))
@settings(max_examples=300, deadline=None, database=None)
def test_any_text_is_a_probe_or_a_clear_refusal(text: str) -> None:
    try:
        probe = parse_probe(text)
    except InputError as refused:
        assert refused.remedy  # noqa: PT017 - either outcome is right, a refusal must help
    else:
        assert probe.wavelength_A > 0
        assert 0 < probe.scale_sigma < 0.2


def test_assumed_values_are_told() -> None:
    probe = parse_probe("electron")
    assert not probe.wavelength_stated
    assert not probe.scale_stated
    assert any("200 kV assumed" in remark for remark in probe.remarks)
    assert any("1.5 % assumed" in remark for remark in probe.remarks)
    stated = parse_probe("electron 200 kV", scale_sigma=0.003)
    assert (stated.scale_sigma, stated.remarks) == (0.003, ())


def test_default_scale_of_electrons_is_that_of_an_uncalibrated_camera_constant() -> None:
    # 1 to 3 % without an internal standard: common practice, no source
    assert 0.01 <= parse_probe("electron 200 kV").scale_sigma <= 0.03


@pytest.mark.parametrize(
    ("text", "value"),
    [("1 %", 0.01), ("0.005", 0.005), ("±0,3%", 0.003), ("200 ppm", 2e-4), ("5e-3", 0.005)],
)
def test_relative_uncertainties(text: str, value: float) -> None:
    assert parse_relative(text) == pytest.approx(value, rel=1e-12)


@pytest.mark.parametrize("text", ["1.5", "", "one percent", "-1 %", "nan", "1 % of d", "1e999"])
def test_relative_uncertainties_that_make_no_sense(text: str) -> None:
    with pytest.raises(InputError, match="%"):
        parse_relative(text)


def test_a_missing_percent_sign_is_pointed_out() -> None:
    with pytest.raises(InputError, match=r"'1\.5 %'"):
        parse_relative("1.5")


def test_ghosts_of_a_copper_tube_appear_where_the_literature_puts_them() -> None:
    # arithmetic on the tables' wavelengths through Cu Kα1: Kβ at 1.1066 d, W Lα at 1.0435 d
    probe = parse_probe("x-ray Cu Ka1")
    apparent = {name: ghost_d_A(1.0, probe, wavelength) for name, wavelength in probe.ghosts}
    assert apparent["Cu Kβ"] == pytest.approx(1.1066, abs=5e-5)
    assert apparent["W Lα"] == pytest.approx(1.0435, abs=5e-5)
    assert apparent["Cu Kα2"] < 1.0


@pytest.mark.parametrize(
    "text", ["x-ray Cu Ka graphite monochromator", "x-ray 20 keV", "neutron 1 A"]
)
def test_no_ghosts_without_a_bare_tube(text: str) -> None:
    assert parse_probe(text).ghosts == ()


def test_graphite_monochromator_angle() -> None:
    # graphite 002 at Cu Kα: 2θ = 26.6° (handbook)
    angle = parse_probe("x-ray Cu Ka graphite monochromator").monochromator_two_theta_deg
    assert angle == pytest.approx(26.6, abs=0.05)
