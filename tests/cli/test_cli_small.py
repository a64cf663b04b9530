"""The smaller commands: calibrate, ratio, compare, screen."""

from __future__ import annotations

import io
import math
import sys
from pathlib import Path

import pytest

from phaseid.resources import data_path

A_AU = 4.0782  # Å; King, crystal structures of the elements at 25 °C, from memory
HKL = [(1, 1, 1), (2, 0, 0), (2, 2, 0), (3, 1, 1), (2, 2, 2), (4, 0, 0), (3, 3, 1)]
RADII = [f"{25.0 * math.sqrt(sum(i * i for i in hkl)) / A_AU:.3f}" for hkl in HKL]
HEAD = "# title: gold\n# probe: electron 200 kV\nradius_mm,sigma\n"
XRAYS = str(data_path("demo") / "foil_xrays.csv")


@pytest.fixture
def gold(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> str:
    monkeypatch.setenv("PHASEID_CONFIG", str(tmp_path / "settings" / "config.toml"))
    path = tmp_path / "gold.csv"
    path.write_text(HEAD + "".join(f"{r},0.02\n" for r in RADII), encoding="utf-8")
    return str(path)


def test_calibrate_a_list_of_radii(phaseid, gold: str) -> None:
    value = phaseid("calibrate", gold, "--standard", "Au", "--json").json("calibration-1")
    constant = value["camera_constant_A_mm"]
    assert constant["value"] == pytest.approx(25.0, rel=2e-4)
    assert 0 < constant["sigma"] < 0.02
    assert value["camera_constant_A_px"] is None
    assert value["scale"]["factor"] == 1
    assert value["standard"]["formula"] == "Au"
    assert [a["hkl"] for a in value["assignments"]] == [list(hkl) for hkl in HKL]
    assert value["rejected"] == []


def test_calibrate_typed_pixels_and_spacings(phaseid) -> None:
    pixels = [f"{float(r) * 40:.1f}" for r in RADII]
    words = ("--standard", "gold", "--probe", "electron 200 kV", "--json")
    value = phaseid("calibrate", *pixels, "--unit", "radius_px", *words).json("calibration-1")
    assert value["camera_constant_A_px"]["value"] == pytest.approx(1000.0, rel=5e-4)
    assert value["camera_constant_A_mm"] is None
    spacings = [f"{1.01 * 25.0 / float(r):.4f}" for r in RADII]
    value = phaseid("calibrate", *spacings, *words).json("calibration-1")
    assert value["camera_constant_A_mm"] is value["camera_constant_A_px"] is None
    assert value["scale"]["factor"] == pytest.approx(1 / 1.01, rel=1e-3)


def test_calibrate_reads_standard_input(phaseid, gold: str, monkeypatch) -> None:
    stream = io.TextIOWrapper(io.BytesIO(Path(gold).read_bytes()), encoding="utf-8")
    monkeypatch.setattr(sys, "stdin", stream)
    assert phaseid("calibrate", "-", "--standard", "Au").code == 0


def test_calibrate_in_words(phaseid, gold: str) -> None:
    done = phaseid("calibrate", gold, "--standard", "Au")
    assert done.out.startswith("Camera constant 24.99")
    assert "gold (Au)" in done.out
    assert max(map(len, done.out.splitlines())) <= 80


def test_calibrate_with_any_phase_says_that_it_is_no_standard(phaseid) -> None:
    radii = [f"{25.0 * math.sqrt(sum(i * i for i in hkl)) / 3.6146:.3f}" for hkl in HKL]
    words = ("--unit", "radius_mm", "--standard", "copper", "--probe", "electron 200 kV")
    value = phaseid("calibrate", *radii, *words, "--json").json("calibration-1")
    assert not value["standard_cell"]["certified"]
    assert any("no certified standard" in remark for remark in value["remarks"])


@pytest.mark.parametrize(
    ("words", "message"),
    [
        ((), "--standard"),
        (("--standard", "Au", "--standard", "Si"), "2 standards"),
        (("--standard", "Si"), "likely"),
        (("--standard", "Auu"), "Auu"),
        (("--standard", "A" * 300), "no phase called"),
        (("--standard", "TiO2"), "rutile"),
        (("--standard", "Au", "--save", "../x"), "name"),
        (("--standard", "Au", "--across", "1.8 2.5"), "--across"),
        (("--standard", "Au", "--temperature", "5000"), "temperature"),
    ],
)
def test_calibrate_refuses_with_a_remedy(phaseid, gold: str, words: tuple, message: str) -> None:
    done = phaseid("calibrate", gold, *words)
    assert (done.code, done.out) == (2, "")
    assert message in done.err


def test_a_negative_radius_is_told_by_its_line(phaseid, tmp_path: Path) -> None:
    path = tmp_path / "bad.csv"
    path.write_text(HEAD + "10.6,0.02\n-12.3,0.02\n", encoding="utf-8")
    done = phaseid("calibrate", str(path), "--standard", "Au")
    assert done.code == 2
    assert "line 5" in done.err
    assert "negative" in done.err


@pytest.mark.parametrize("command", ["calibrate", "identify", "ratio", "near"])
def test_a_negative_number_is_told_as_such(phaseid, command: str) -> None:
    done = phaseid(command, "10.6", "-12.3")
    assert (done.code, done.out) == (2, "")
    assert "'-12.3' is negative" in done.err


def test_a_negative_value_of_an_option_is_none_of_a_ring(phaseid, gold: str) -> None:
    assert phaseid("calibrate", gold, "--standard", "Au", "--temperature", "-20").code == 0


def test_a_saved_calibration_serves_later_lists(phaseid, gold: str, tmp_path: Path) -> None:
    saved = phaseid("calibrate", gold, "--standard", "Au", "--save", "plate80", "--json")
    assert saved.json("calibration-1")["saved"] == "plate80"
    assert "--calibration plate80" in saved.err
    plate = tmp_path / "plate.csv"
    radii = [f"{25.0 * math.sqrt(sum(i * i for i in hkl)) / 4.0496:.3f}" for hkl in HKL]
    plate.write_text(HEAD + "".join(f"{r},0.02\n" for r in radii), encoding="utf-8")
    words = ("--calibration", "plate80", "--only", "Al,Au", "--json")
    answer = phaseid("identify", str(plate), *words).json("identification-1")
    pattern = answer["patterns"][0]
    assert pattern["rings"][0]["d_A"] == pytest.approx(4.0496 / math.sqrt(3), rel=5e-4)
    assert pattern["probe"]["scale_sigma"] < 1e-3
    assert any("plate80" in remark for remark in pattern["remarks"])
    assert answer["hypotheses"][0]["phases"][0]["formula"] == "Al"
    held = phaseid("screen", str(plate), "--expect", "Al", "--calibration", "plate80", "--json")
    assert held.json("screening-1")["verdict"] == "clean"


def test_another_voltage_is_warned_about(phaseid, gold: str, tmp_path: Path) -> None:
    phaseid("calibrate", gold, "--standard", "Au", "--save", "plate80")
    plate = tmp_path / "plate.csv"
    plate.write_text(Path(gold).read_text("utf-8").replace("200 kV", "120 kV"), "utf-8")
    done = phaseid("identify", str(plate), "--calibration", "plate80", "--only", "Au")
    assert "Warning" in done.err
    assert "120 kV" in done.err


@pytest.mark.parametrize("extra", [("--calibration", "none"), ("--calibration", "../etc/passwd")])
def test_an_unknown_calibration_is_told(phaseid, gold: str, extra: tuple[str, str]) -> None:
    done = phaseid("identify", gold, *extra)
    assert (done.code, done.out) == (2, "")
    assert "calibration" in done.err


def test_ratio_names_the_type(phaseid) -> None:
    value = phaseid("ratio", "1", "1.155", "1.633", "--json").json("ratio-1")
    assert value["matches"][0]["type"] == "face-centred cubic"
    assert [r["hkl"] for r in value["matches"][0]["rings"]] == [[1, 1, 1], [2, 0, 0], [2, 2, 0]]
    done = phaseid("ratio", "2.338", "2.025", "1.432")
    assert "face-centred cubic" in done.out
    assert "a = 4.0499 Å" in done.out


@pytest.mark.parametrize(
    "words", [("1",), ("1", "1"), ("--", "1", "-2"), ("1", "x"), ("1", "2", "--tolerance", "0.9")]
)
def test_ratio_refuses_what_is_no_ratio(phaseid, words: tuple[str, ...]) -> None:
    done = phaseid("ratio", *words)
    assert (done.code, done.out) == (2, "")


def test_no_type_is_an_answer_too(phaseid) -> None:
    done = phaseid("ratio", "1", "1.07", "1.11", "1.23", "1.31")
    assert done.code == 0
    assert "phaseid identify" in done.err


def test_look_ups_take_a_ring_list_too(phaseid, monkeypatch) -> None:
    d = ["2.338", "2.025", "1.432", "1.221"]
    text = "# probe: electron 200 kV\nd_A\n" + "".join(f"{one}\n" for one in d)
    typed = phaseid("near", *d, "--only", "Al", "--json").json("near-1")
    for words in (("near", "-", "--only", "Al"), ("ratio", "-")):
        stream = io.TextIOWrapper(io.BytesIO(text.encode()), encoding="utf-8")
        monkeypatch.setattr(sys, "stdin", stream)
        value = phaseid(*words, "--json").json(f"{words[0]}-1")
        if words[0] == "near":
            assert value["matches"] == typed["matches"]
        else:
            assert value["matches"][0]["type"] == "face-centred cubic"
            assert value["matches"][0]["edge_A"] == pytest.approx(4.0496, rel=1e-3)
    value = phaseid("ratio", XRAYS, "--json").json("ratio-1")
    assert len(value["ratios"]) == 13
    assert value["spacings"] is True


def test_compare_two_phases(phaseid) -> None:
    value = phaseid("compare", "anatase", "rutile", "--json").json("comparison-1")
    assert value["separable"] is True
    assert value["telling"][0]["needs_relative_precision"] > 0
    words = ("--scale-uncertainty", "1%", "--probe", "electron 200 kV")
    done = phaseid("compare", "Au", "Ag", *words)
    assert "cannot be told apart" in done.out
    assert "phaseid calibrate" in done.out
    assert max(map(len, done.out.splitlines())) <= 80


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("Au", "unobtainium"), "unobtainium"),
        (("SiO2", "Au"), "quartz"),
        (("Au", "x.cif"), "x.cif"),
    ],
)
def test_compare_refuses_what_it_does_not_know(phaseid, words: tuple, message: str) -> None:
    done = phaseid("compare", *words)
    assert (done.code, done.out) == (2, "")
    assert message in done.err


def test_screen_finds_the_salt_and_gives_limits(phaseid) -> None:
    value = phaseid("screen", XRAYS, "--expect", "Al", "--json").json("screening-1")
    assert value["verdict"] == "foreign-rings"
    assert value["foreign"][0]["candidates"][0]["phase"]["formula"] == "MgO"
    value = phaseid("screen", XRAYS, "--expect", "Al", "--expect", "MgO", "--json").json(
        "screening-1"
    )
    assert value["verdict"] == "clean"
    assert all(0 < limit["share"] <= 1 for limit in value["limits"])


def test_screen_takes_several_patterns_of_a_specimen(phaseid) -> None:
    electrons = str(data_path("demo") / "foil_electrons.csv")
    words = ("screen", electrons, XRAYS, "--expect", "Al", "--expect", "MgO")
    value = phaseid(*words, "--json").json("screening-1")
    assert [p["probe"]["kind"] for p in value["patterns"]] == ["electron", "x-ray"]
    assert [(ring["pattern"], ring["ring"]) for ring in value["foreign"]] == [(0, 0)]
    done = phaseid(*words)
    assert "pattern 2: foil, X-rays" in done.out
    assert "1.2, " in done.out
    assert max(map(len, done.out.splitlines())) <= 80


def test_screen_in_words(phaseid, tmp_path: Path) -> None:
    mine = tmp_path / "mine.txt"
    mine.write_text("gold # the coater\n", encoding="utf-8")
    words = ("--expect", "Al", "--expect", "MgO", "--watch", str(mine), "--only-mine")
    done = phaseid("screen", XRAYS, *words)
    assert done.out.startswith("Clean")
    assert "gold (Au)" in done.out
    assert max(map(len, done.out.splitlines())) <= 80
    assert "not seen" in phaseid("screen", XRAYS, "--expect", "corundum").out


@pytest.mark.parametrize(
    ("words", "message"),
    [
        ((), "--expect"),
        (("--expect", "alumminium"), "aluminium"),
        (("--expect", "TiO2"), "anatase"),
        (("--expect", "Al", "--watch", "none.txt"), "none.txt"),
        (("--expect", "Al", "--weakest", "90"), "--weakest"),
    ],
)
def test_screen_refuses_with_a_remedy(phaseid, words: tuple, message: str) -> None:
    done = phaseid("screen", XRAYS, *words)
    assert (done.code, done.out) == (2, "")
    assert message in done.err


@pytest.mark.parametrize("name", ["calibrate", "ratio", "compare", "screen", "config"])
def test_help_has_an_example(phaseid, name: str) -> None:
    done = phaseid(name, "--help")
    assert done.code == 0
    assert f"phaseid {name}" in done.out.split("Usage:")[1].split("\n", 1)[1]
