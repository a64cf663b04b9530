"""`phaseid identify`: what goes in, what comes out, what is refused."""

from __future__ import annotations

import io
import math
import sys
from pathlib import Path
from typing import Any

import pytest

A_AL = 4.0495  # Å, aluminium at room temperature; from memory of handbook tables
HKL = [(1, 1, 1), (2, 0, 0), (2, 2, 0), (3, 1, 1), (2, 2, 2), (4, 0, 0), (3, 3, 1)]
GRADES = ["vs", "s", "m", "m", "w", "vw", "w"]
SPACINGS = [A_AL / math.sqrt(sum(index**2 for index in hkl)) for hkl in HKL]
PROBE = ("--probe", "electron 200 kV", "--scale-uncertainty", "0.5%")


@pytest.fixture
def ring_file(tmp_path: Path) -> str:
    path = tmp_path / "foil.csv"
    rows = [f"{d:.3f},0.004,{grade}" for d, grade in zip(SPACINGS, GRADES, strict=True)]
    head = ["# title: foil", "# probe: electron 200 kV", "# scale uncertainty: 0.5 %"]
    path.write_text("\n".join([*head, "d_A,sigma,intensity", *rows]) + "\n", encoding="utf-8")
    return str(path)


def _typed(data: bytes) -> io.TextIOWrapper:
    """Standard input as a terminal without UTF-8 sees it."""
    return io.TextIOWrapper(io.BytesIO(data), encoding="ascii", errors="surrogateescape")


def _formulas(value: Any) -> list[str]:
    return [phase["formula"] for phase in value["hypotheses"][0]["phases"]]


def test_a_file_is_identified(phaseid, ring_file: str) -> None:
    value = phaseid("identify", ring_file, "--only", "Al", "--json").json("identification-1")
    assert _formulas(value) == ["Al"]
    assert value["verdict"] == "identified"
    best = value["hypotheses"][0]
    assert [a["hkl"] for a in best["assignments"]] == [list(hkl) for hkl in HKL]
    assert best["unexplained"] == []
    assert value["patterns"][0]["title"] == "foil"


def test_typed_spacings_are_identified(phaseid) -> None:
    typed = [f"{d:.3f}" for d in SPACINGS]
    words = ("identify", *typed, *PROBE, "--intensities", " ".join(GRADES), "--only", "Al,O")
    value = phaseid(*words, "--json").json("identification-1")
    assert _formulas(value) == ["Al"]
    assert [ring["grade"] for ring in value["patterns"][0]["rings"]] == GRADES


@pytest.mark.parametrize("between", [" ", ", ", ",", "; "])
def test_spacings_may_be_typed_in_one_word(phaseid, between: str) -> None:
    typed = between.join(f"{d:.3f}" for d in SPACINGS)
    value = phaseid("identify", typed, *PROBE, "--only", "Al", "--json").json("identification-1")
    rings = value["patterns"][0]["rings"]
    assert [ring["d_A"] for ring in rings] == pytest.approx(SPACINGS, abs=1e-3)


def test_a_decimal_comma_is_read(phaseid) -> None:
    typed = [f"{d:.3f}".replace(".", ",") for d in SPACINGS]
    value = phaseid("identify", *typed, *PROBE, "--only", "Al", "--json").json("identification-1")
    rings = value["patterns"][0]["rings"]
    assert [ring["d_A"] for ring in rings] == pytest.approx(SPACINGS, abs=1e-3)


def test_typed_angles_need_their_unit(phaseid) -> None:
    angles = [f"{2 * math.degrees(math.asin(1.5406 / 2 / d)):.2f}" for d in SPACINGS]
    words = ("identify", *angles, "--unit", "two_theta_deg", "--probe", "x-ray Cu Ka1")
    value = phaseid(*words, "--only", "Al", "--json").json("identification-1")
    assert _formulas(value) == ["Al"]
    assert value["patterns"][0]["rings"][0]["d_A"] == pytest.approx(SPACINGS[0], rel=1e-3)


def test_standard_input_is_read(phaseid, ring_file: str, monkeypatch: pytest.MonkeyPatch) -> None:
    text = Path(ring_file).read_text(encoding="utf-8")
    monkeypatch.setattr(sys, "stdin", _typed(text.encode()))
    value = phaseid("identify", "-", "--only", "Al", "--json").json("identification-1")
    assert _formulas(value) == ["Al"]


def test_several_patterns_are_one_question(phaseid, ring_file: str, tmp_path: Path) -> None:
    fewer = tmp_path / "again.csv"
    lines = Path(ring_file).read_text(encoding="utf-8").splitlines()
    fewer.write_text("\n".join(lines[:-1]) + "\n", encoding="utf-8")
    value = phaseid("identify", ring_file, str(fewer), "--only", "Al", "--json").json(
        "identification-1"
    )
    assert len(value["patterns"]) == 2
    assert {a["pattern"] for a in value["hypotheses"][0]["assignments"]} == {0, 1}


def test_one_pattern_given_twice_is_refused(phaseid, ring_file: str) -> None:
    outcome = phaseid("identify", ring_file, ring_file, "--only", "Al")
    assert outcome.code == 2
    assert "same list of rings" in outcome.err


def test_probe_and_scale_override_the_file(phaseid, ring_file: str) -> None:
    words = ("--probe", "electron 80 kV", "--scale-uncertainty", "0.02", "--only", "Al")
    value = phaseid("identify", ring_file, *words, "--json").json("identification-1")
    probe = value["patterns"][0]["probe"]
    assert probe["scale_sigma"] == pytest.approx(0.02)
    assert probe["wavelength_A"] == pytest.approx(0.0418, abs=1e-4)  # 80 kV; from memory


def test_chemistry_narrows_the_answer(phaseid, ring_file: str) -> None:
    value = phaseid("identify", ring_file, "--not", "Al", "--json").json("identification-1")
    assert all(
        "Al" not in phase["elements"]
        for hypothesis in value["hypotheses"]
        for phase in hypothesis["phases"]
    )


def test_top_limits_the_list(phaseid, ring_file: str) -> None:
    value = phaseid("identify", ring_file, "--top", "1", "--json").json("identification-1")
    assert len(value["hypotheses"]) == 1


@pytest.mark.parametrize("columns", [60, 80])
def test_text_says_the_answer_first(
    phaseid, ring_file: str, columns: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("COLUMNS", str(columns))
    done = phaseid("identify", ring_file, "--only", "Al")
    assert done.code == 0
    assert done.out.lower().startswith("aluminium (al), probability")
    assert max(len(line) for line in done.out.splitlines()) <= columns
    assert "\033" not in done.out


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("2.34", "none.csv", *PROBE), "do not mix"),
        (("none.csv",), "none.csv"),
        (("2.34", "2.02"), "need a probe"),
        (("2.34", "2.02", *PROBE, "--unit", "inch"), "two_theta_deg"),
        (("2.34", "2.02", *PROBE, "--must", "Xx"), "'Xx' is not an element"),
        (("2.34", "2.02", *PROBE, "--intensities", "vs"), "1 intensities for 2 rings"),
        (("2.34", "2.02", *PROBE, "--scale-uncertainty", "much"), "much"),
        (("0", "2.02", *PROBE), "zero"),
        (("0", "2.02", "0", *PROBE), "value 3: d_A is zero (0)\nCorrect them."),
        ((*PROBE, "--", "2.34", "-2.02"), "value 2: d_A is negative"),
        (("2.34,2.02,none", *PROBE), "none"),
        (("2.34", "2.02", *PROBE, "--max-phases", "9"), "--max-phases"),
    ],
)
def test_wrong_input_is_exit_code_2(phaseid, words: tuple[str, ...], said: str) -> None:
    done = phaseid("identify", *words)
    assert done.code == 2
    assert done.out == ""
    assert said in done.err
    assert "Traceback" not in done.err


def test_an_empty_pattern_is_refused(phaseid, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "stdin", _typed(b""))
    done = phaseid("identify", "-")
    assert done.code == 2
    assert "standard input" in done.err


@pytest.mark.parametrize(
    ("data", "said"),
    [
        (b"d_A\n2.3\n\xff\n", "standard input line 3: is not UTF-8 text"),
        (b"\x89PNG\r\n\x1a\n\x00", "standard input: is a binary file"),
    ],
)
def test_standard_input_that_is_no_text_is_refused(
    phaseid, data: bytes, said: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(sys, "stdin", _typed(data))
    done = phaseid("identify", "-")
    assert done.code == 2
    assert said in done.err


def test_titles_on_standard_input_may_hold_any_letter(
    phaseid, monkeypatch: pytest.MonkeyPatch
) -> None:
    rows = "".join(f"{d:.3f}\n" for d in SPACINGS)
    text = f"# title: Stück 图\n# probe: electron 200 kV\nd_A\n{rows}"
    monkeypatch.setattr(sys, "stdin", _typed(text.encode()))
    value = phaseid("identify", "-", "--only", "Al", "--json").json("identification-1")
    assert value["patterns"][0]["title"] == "Stück 图"


def test_standard_input_is_read_once(phaseid) -> None:
    done = phaseid("identify", "-", "-")
    assert done.code == 2
    assert "only once" in done.err


def test_closed_standard_input_is_told(phaseid, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(sys, "stdin", None)
    done = phaseid("identify", "-")
    assert done.code == 2
    assert "standard input: cannot be read: it is closed" in done.err
