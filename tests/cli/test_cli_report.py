"""`phaseid report` and `phaseid identify --plot`: what is written, what is refused."""

from __future__ import annotations

import hashlib
import json
import re
import shlex
from pathlib import Path
from typing import Any

import pytest

from phaseid.resources import data_path

# d (Å) of 111, 200, 220, 311, 222 of aluminium, a = 4.0495 Å; from memory of handbook tables
RINGS = "2.338,vs\n2.025,s\n1.432,m\n1.221,m\n1.169,vw\n"
HEAD = "# title: foil <b>\n# probe: electron 200 kV\n# scale uncertainty: 0.5 %\nd_A,intensity\n"


@pytest.fixture
def ring_file(tmp_path: Path) -> str:
    path = tmp_path / "foil.csv"
    path.write_text(HEAD + RINGS, encoding="utf-8")
    return str(path)


def _inside(path: Path) -> Any:
    text = path.read_text(encoding="utf-8")
    found = re.search(r'<script type="application/json" id="identification">(.*?)</script>', text)
    assert found is not None
    return json.loads(found[1])


def test_a_report_is_written(phaseid, ring_file: str, tmp_path: Path) -> None:
    page = tmp_path / "foil.html"
    done = phaseid("report", ring_file, "--only", "Al", "-o", str(page))
    assert (done.code, done.out) == (0, "")
    assert f"Report written to {page}" in done.err
    asked = phaseid("identify", ring_file, "--only", "Al", "--json").json("identification-1")
    assert _inside(page) == asked
    text = page.read_text(encoding="utf-8")
    assert "foil &lt;b&gt;" in text
    assert len(text.encode()) < 1_000_000
    assert hashlib.sha256(Path(ring_file).read_bytes()).hexdigest() in text


def test_an_image_is_seen_in_its_report(phaseid, tmp_path: Path) -> None:
    page, picture = tmp_path / "plate.html", tmp_path / "plate.svg"
    plate = str(data_path("demo") / "foil_plate.png")
    words = (plate, "--probe", "electron 200 kV", "--camera-constant", "255 A px", "--only", "Al,O")
    assert phaseid("report", *words, "-o", str(page)).code == 0
    assert phaseid("identify", *words, "--plot", str(picture)).code == 0
    for path in (page, picture):
        text = path.read_text(encoding="utf-8")
        assert text.count("data:image/png;base64,") == 1
        assert "behind them the measured curve" in text
    assert page.stat().st_size < 1_000_000


def test_the_command_in_a_report_gives_it_again(phaseid, ring_file: str, tmp_path: Path) -> None:
    page = tmp_path / "foil.html"
    words = ("--probe", "electron 80 kV", "--only", "Al,O", "--top", "2", "--axis", "d")
    assert phaseid("report", ring_file, *words, "-o", str(page)).code == 0
    before = page.read_text(encoding="utf-8")
    told = re.search(r"<code>(phaseid report .*?)</code>", before)
    assert told is not None
    again = shlex.split(told[1].replace("&#x27;", "'").replace("&quot;", '"'))
    page.unlink()
    assert phaseid(*again[1:]).code == 0
    made = re.compile(r"<dt>made</dt><dd>.*?</dd>")
    assert made.sub("", page.read_text(encoding="utf-8")) == made.sub("", before)


def test_the_default_chemistry_is_told(
    phaseid, ring_file: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("PHASEID_ONLY", "Al")
    page = tmp_path / "foil.html"
    assert phaseid("report", ring_file, "-o", str(page)).code == 0
    assert "--only Al" in page.read_text(encoding="utf-8")


def test_typed_rings_make_a_report(phaseid, tmp_path: Path) -> None:
    page = tmp_path / "typed.html"
    typed = ("2.338", "2.025", "1.432", "--probe", "electron 200 kV", "--only", "Al")
    assert phaseid("report", *typed, "-o", str(page)).code == 0
    assert "typed rings" in page.read_text(encoding="utf-8")


@pytest.mark.parametrize(
    ("words", "said"),
    [
        ((), "-o"),
        (("-o", "none/foil.html"), "no such folder"),
        (("-o", "."), "is a folder"),
        (("-o", "foil.html", "--axis", "radius"), "d, 1/d, q, two-theta"),
        (("-o", "foil.html", "--must", "Xx"), "not an element"),
    ],
)
def test_a_report_that_cannot_be_made_is_exit_code_2(
    phaseid,
    ring_file: str,
    words: tuple[str, ...],
    said: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.chdir(tmp_path)
    done = phaseid("report", ring_file, *words)
    assert (done.code, done.out) == (2, "")
    assert said in done.err
    assert [path.name for path in tmp_path.iterdir()] == ["foil.csv"]


def test_angles_by_time_of_flight_are_refused(phaseid, tmp_path: Path) -> None:
    page = tmp_path / "tof.html"
    words = ("2.338", "2.025", "--probe", "neutron time-of-flight", "--axis", "two-theta")
    done = phaseid("report", *words, "-o", str(page))
    assert done.code == 2
    assert "time of flight" in done.err


@pytest.mark.parametrize(
    ("suffix", "begins"), [(".svg", b"<?xml"), (".png", b"\x89PNG"), (".pdf", b"%PDF")]
)
def test_a_picture_is_drawn_beside_the_answer(
    phaseid, ring_file: str, tmp_path: Path, suffix: str, begins: bytes
) -> None:
    path = tmp_path / f"foil{suffix}"
    done = phaseid("identify", ring_file, "--only", "Al", "--json", "--plot", str(path))
    done.json("identification-1")
    assert f"Picture written to {path}" in done.err
    assert path.read_bytes().startswith(begins)


@pytest.mark.parametrize(
    ("name", "said"),
    [
        ("foil.jpg", ".png, .svg or .pdf"),
        ("foil", ".png, .svg or .pdf"),
        ("none/foil.png", "no such folder"),
    ],
)
def test_a_picture_that_cannot_be_drawn_is_refused_before_the_work(
    phaseid, ring_file: str, tmp_path: Path, name: str, said: str
) -> None:
    done = phaseid("identify", ring_file, "--plot", str(tmp_path / name))
    assert (done.code, done.out) == (2, "")
    assert said in done.err


def test_the_axis_of_a_picture_is_chosen(phaseid, ring_file: str, tmp_path: Path) -> None:
    path = tmp_path / "foil.svg"
    words = ("identify", ring_file, "--only", "Al", "--axis", "q")
    assert phaseid(*words, "--plot", str(path)).code == 0
    assert "q = 2π/d in 1/Å" in path.read_text(encoding="utf-8")
    done = phaseid(*words)
    assert done.code == 2
    assert "Add --plot" in done.err
