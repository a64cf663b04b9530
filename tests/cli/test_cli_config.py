"""`phaseid config`: what is in force, from where, and what wins."""

from __future__ import annotations

import os
import subprocess
import sys
import time
from pathlib import Path

import pytest

from phaseid.cli.settings import KEYS

RADII = ["10.69", "12.35", "17.46", "20.47", "21.39"]  # Al at 25 Å mm, arithmetic on 4.0496 Å


@pytest.fixture
def config_file(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    path = tmp_path / "settings" / "config.toml"
    monkeypatch.setenv("PHASEID_CONFIG", str(path))
    return path


def _settings(phaseid) -> dict[str, dict[str, str | None]]:
    value = phaseid("config", "--json").json("config-1")
    return {entry["key"]: entry for entry in value["settings"]}


def test_nothing_is_set_at_first(phaseid, config_file: Path, monkeypatch) -> None:
    found = _settings(phaseid)
    assert set(found) == set(KEYS)
    assert found["probe"]["value"] is None
    assert found["library"]["origin"] == "$PHASEID_LIBRARY"
    assert not config_file.exists()


def test_a_default_is_set_shown_and_unset(phaseid, config_file: Path) -> None:
    assert phaseid("config", "probe", "electron 200 kV").code == 0
    assert _settings(phaseid)["probe"] == {
        "key": "probe",
        "value": "electron 200 kV",
        "origin": str(config_file),
        "variable": "PHASEID_PROBE",
    }
    assert phaseid("config", "probe").out == "electron 200 kV\n"
    assert "electron 200 kV" in phaseid("lines", "Al").out
    assert "Cu" in phaseid("lines", "Al", "--probe", "x-ray Cu Ka1").out  # what is typed wins
    assert phaseid("config", "probe", "--unset").code == 0
    assert _settings(phaseid)["probe"]["value"] is None


def test_the_environment_wins_over_the_file(phaseid, config_file: Path, monkeypatch) -> None:
    phaseid("config", "probe", "electron 200 kV")
    monkeypatch.setenv("PHASEID_PROBE", "electron 80 kV")
    assert _settings(phaseid)["probe"]["value"] == "electron 80 kV"
    assert _settings(phaseid)["probe"]["origin"] == "$PHASEID_PROBE"
    assert "80 kV" in phaseid("lines", "Al").out


def test_a_default_probe_serves_lists_that_state_none(phaseid, config_file: Path) -> None:
    phaseid("config", "probe", "electron 200 kV")
    words = ("identify", "2.338", "2.025", "1.432", "1.221", "--only", "Al", "--json")
    value = phaseid(*words).json("identification-1")
    assert value["patterns"][0]["probe"]["kind"] == "electron"


def test_a_default_calibration_serves_radii_alone(phaseid, config_file: Path) -> None:
    gold = ["10.62", "12.26", "17.34", "20.33", "21.24"]  # Au at 25 Å mm
    unit = ("--unit", "radius_mm", "--probe", "electron 200 kV")
    phaseid("calibrate", *gold, *unit, "--standard", "Au", "--save", "plate80")
    assert phaseid("config", "calibration", "plate80").code == 0
    assert "plate80" in phaseid("config").out
    value = phaseid("identify", *RADII, *unit, "--only", "Al", "--json").json("identification-1")
    assert value["patterns"][0]["rings"][0]["d_A"] == pytest.approx(2.338, rel=2e-3)
    stated = ("--camera-constant", "26 +- 0.1 A mm")
    value = phaseid("identify", *RADII, *unit, *stated, "--json").json("identification-1")
    assert value["patterns"][0]["rings"][0]["d_A"] == pytest.approx(26 / 10.69, rel=1e-6)


def test_default_chemistry_is_in_force_and_said(phaseid, config_file: Path) -> None:
    phaseid("config", "only", "Al,O")
    done = phaseid("near", "2.338", "--json").json("near-1")
    assert all(set(match["phase"]["elements"]) <= {"Al", "O"} for match in done["matches"])
    words = ("identify", "2.338", "2.025", "1.432", "--probe", "electron 200 kV")
    assert "Al" in " ".join(phaseid(*words, "--json").json("identification-1")["remarks"])


def test_a_library_named_in_the_file_is_opened(
    phaseid, config_file: Path, monkeypatch, tmp_path: Path
) -> None:
    monkeypatch.delenv("PHASEID_LIBRARY")
    phaseid("config", "library", str(tmp_path / "none.sqlite"))
    done = phaseid("lines", "Al")
    assert done.code == 3
    assert "none.sqlite" in done.err


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("prob", "x"), "probe"),
        (("probe", "gamma rays"), "probe"),
        (("calibration", "nowhere"), "nowhere"),
        (("only", "Xx"), "Xx"),
        (("--unset",), "KEY"),
        (("probe", "x-ray Cu Ka", "--unset"), "VALUE"),
    ],
)
def test_a_wrong_setting_is_refused(phaseid, config_file: Path, words: tuple, message: str) -> None:
    done = phaseid("config", *words)
    assert done.code == 2
    assert message in done.err
    assert not config_file.exists()


@pytest.mark.parametrize("text", ["probe = ", 'prob = "x"', "probe = 3", "\x00\xff"])
def test_a_bad_file_is_told_with_its_place(phaseid, config_file: Path, text: str) -> None:
    config_file.parent.mkdir()
    config_file.write_text(text, encoding="latin-1")
    for words in (("config",), ("lines", "Al"), ("config", "probe", "x-ray Cu Ka")):
        done = phaseid(*words)
        assert done.code == 2
        assert "config.toml" in done.err
    assert config_file.read_text(encoding="latin-1") == text


def _completed(words: str, **environment: str) -> list[str]:
    done = subprocess.run(
        [sys.executable, "-c", "from phaseid.cli.main import run; run([])"],
        capture_output=True,
        text=True,
        env={
            **os.environ,
            **environment,
            "_PHASEID_COMPLETE": "complete_bash",
            "COMP_WORDS": words,
            "COMP_CWORD": str(len(words.split(" ")) - 1),
        },
        check=False,
    )
    return [line for line in done.stdout.splitlines() if line]


def test_shell_completion_offers_the_commands() -> None:
    assert _completed("phaseid ca") == ["calibrate"]


def test_shell_completion_knows_phases_standards_and_pages(starter_library_path: Path) -> None:
    library = str(starter_library_path)
    assert "corundum" in _completed("phaseid lines corun", PHASEID_LIBRARY=library)
    assert "rutile" in _completed("phaseid screen a.csv --expect rut", PHASEID_LIBRARY=library)
    assert _completed("phaseid calibrate a.csv --standard La") == ["LaB6"]
    assert _completed("phaseid guide se") == ["series", "settings"]


def test_shell_completion_builds_nothing(tmp_path: Path) -> None:
    path = tmp_path / "none.sqlite"
    assert _completed("phaseid lines corun", PHASEID_LIBRARY=str(path)) == []
    assert not path.exists()


@pytest.mark.parametrize("words", [["ratio", "1", "1.155", "1.633"], ["config"]])
def test_small_questions_are_answered_at_once(words: list[str]) -> None:
    start = time.perf_counter()
    subprocess.run([sys.executable, "-m", "phaseid", *words], capture_output=True, check=True)
    assert time.perf_counter() - start < 2.0  # 0.25 s on a quiet machine


def test_ratio_loads_no_numpy() -> None:
    code = (
        "import sys\nfrom phaseid.cli.main import run\n"
        "try:\n    run(['ratio', '1', '1.155', '1.633'])\n"
        "except SystemExit:\n    pass\nassert 'numpy' not in sys.modules"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
