"""Names and titles of strangers in every output: no control of the terminal, no markup, no formula.

Characters a terminal may obey: C0 and C1 controls (ECMA-48) and the direction controls of Unicode
(UAX #9), which make text look like another.
"""

from __future__ import annotations

import contextlib
import csv
import html.parser
import io
import json
import re
import xml.etree.ElementTree as ET
from pathlib import Path

import pytest

from phaseid.cli.main import run
from phaseid.library import Library
from phaseid.rings import read_rings, rings_to_text
from tests.library.rock_salts import rock_salt

NAMES = (
    "<script>alert(1)</script>", "\x1b[2J\x1b]0;owned\x07", "\u202eevil\u202c", "\u009b31mred",
    '=HYPERLINK("http://192.0.2.1","y")', "+1+cmd|' /C calc'!A0", "@SUM(1)", "-2+3",
    "a\u2028b\u2066c\u200f", "</title><img src=x onerror=alert(1)>", "\ufeffx\u200by",
)  # fmt: skip
OBEYED = re.compile("[\x00-\x08\x0b-\x1f\x7f-\x9f\u200e\u200f\u2028-\u202e\u2060-\u2069\ufeff]")
RINGS = """# title: <script>alert(2)</script>\x1b[2J\u202e
# probe: electron 200 kV
d_A,intensity,note
2.367,10,<b>=1+1
2.05,100,=HYPERLINK(1)
1.4496,52,\u202eabc\x1b[1m
1.2362,5,@x
1.1836,12,-3
"""


@pytest.fixture(scope="module")
def shelf(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with a library of hostile names and a ring list."""
    folder = tmp_path_factory.mktemp("shelf")
    (folder / "cif").mkdir()
    for number, name in enumerate(NAMES):
        text = rock_salt("MgO", round(4.1 + number * 0.12, 4), name="NAME", cod="CODE")
        quoted = f"\n;{name}\n;"
        text = text.replace("'NAME'", quoted).replace(
            "database_code CODE", f"database_code{quoted}"
        )
        file = f"{number}{name[:40].replace('/', '_')}.cif"
        (folder / "cif" / file).write_text(text, encoding="utf-8")
    (folder / "cif" / "\x1b[2Jbad\u202e.cif").write_text("data_\u202ex\n_a 1\n", encoding="utf-8")
    # control characters make a ring list a binary file, those of direction do not
    (folder / "rings.csv").write_text(RINGS.replace("\x1b", ""), encoding="utf-8")
    return folder


def _run(shelf: Path, *words: str) -> tuple[str, str]:
    """Run a command in the shelf's folder, with its library; returns what it said."""
    out, err = io.StringIO(), io.StringIO()
    with (
        pytest.MonkeyPatch.context() as patch,
        contextlib.redirect_stdout(out),
        contextlib.redirect_stderr(err),
    ):
        patch.chdir(shelf)
        patch.setenv("PHASEID_LIBRARY", str(shelf / "lib.sqlite"))
        with pytest.raises(SystemExit) as end:
            run(list(words))
    assert end.value.code in (None, 0, 2), err.getvalue()
    for text in (out.getvalue(), err.getvalue()):
        assert OBEYED.search(text) is None, f"{words}: {text!r}"
        assert "something went wrong" not in text
    return out.getvalue(), err.getvalue()


@pytest.fixture(scope="module")
def ids(shelf: Path) -> list[str]:
    """The phases of the library, added by the command line."""
    Library.create(shelf / "lib.sqlite").close()
    _run(shelf, "library", "add", "cif")
    with Library.open(shelf / "lib.sqlite") as library:
        assert len(library) == len(NAMES)
        assert any("\u202e" in phase.name for phase in library.phases())  # kept as they came
        return [phase.phase_id for phase in library.phases()]


def test_no_name_reaches_a_terminal_raw(shelf: Path, ids: list[str]) -> None:
    probe = ("--probe", "electron 200 kV")
    for words in (
        ("library", "add", "cif", "--json"),
        ("library", "rejects"),
        ("library", "find", "MgO"),
        ("library", "find", "MgO", "--json"),
        ("library", "find", NAMES[2]),
        ("library", "find", "no\u202esuch"),
        ("identify", "rings.csv"),
        ("identify", "rings.csv", "--json"),
        ("near", "2.05", *probe),
        ("lines", ids[1]),
        ("lines", ids[3], "--json"),
        ("compare", ids[0], ids[2]),
        ("screen", "rings.csv", "--expect", ids[2]),
        ("calibrate", "rings.csv", "--standard", ids[2]),
        ("identify", "no\u202efile\x1b[2J.csv"),
    ):
        _run(shelf, *words)


class _Page(html.parser.HTMLParser):
    def __init__(self) -> None:
        super().__init__()
        self.tags: list[str] = []
        self.handlers: list[str] = []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.tags.append(tag)
        self.handlers += [name for name, _ in attrs if name.startswith("on")]


def test_no_name_becomes_markup(shelf: Path, ids: list[str]) -> None:
    _run(shelf, "report", "rings.csv", "-o", "page.html")
    text = (shelf / "page.html").read_text(encoding="utf-8")
    assert "&lt;script&gt;alert(2)" in text  # told, not obeyed
    page = _Page()
    page.feed(text)
    assert "img" not in page.tags
    assert "b" not in page.tags or "<b>=1+1" not in text
    assert page.handlers == []
    assert re.search(r"<script>\s*alert", text) is None
    assert OBEYED.search(text) is None
    _run(shelf, "identify", "rings.csv", "--plot", "plot.svg")
    drawn = ET.parse(shelf / "plot.svg")
    assert not [node for node in drawn.iter() if node.tag.endswith(("script", "foreignObject"))]
    assert OBEYED.search((shelf / "plot.svg").read_text(encoding="utf-8")) is None
    assert len(ids) == len(NAMES)


def test_no_cell_of_an_exported_table_is_a_formula(shelf: Path, ids: list[str]) -> None:
    _run(shelf, "library", "export", "all.csv", "--force")
    rows = list(csv.reader((shelf / "all.csv").read_text(encoding="utf-8").splitlines()))
    assert len(rows) > len(ids) / 2
    cells = [cell for row in rows for cell in row]
    assert any(cell.startswith("'=HYPERLINK") for cell in cells)
    formulas = [c for c in cells if c[:1] in "=+-@\t\r" and c and not _is_number(c)]
    assert formulas == []


def _is_number(text: str) -> bool:
    try:
        float(text)
    except ValueError:
        return False
    return True


def test_no_note_of_a_written_ring_list_is_a_formula(shelf: Path, tmp_path: Path) -> None:
    rings = read_rings(shelf / "rings.csv")
    assert rings.notes[1] == "=HYPERLINK(1)"
    text = rings_to_text(rings)
    table = "\n".join(line for line in text.splitlines() if not line.startswith("#"))
    notes = [row["note"] for row in csv.DictReader(io.StringIO(table))]
    assert notes[1] == "'=HYPERLINK(1)"
    assert not [note for note in notes if note.startswith(("=", "+", "-", "@"))]
    path = tmp_path / "written.csv"
    path.write_text(text, encoding="utf-8")
    again = read_rings(path)
    assert again.notes == rings.notes  # the guard is taken off again
    assert rings_to_text(again) == text


def test_json_is_ascii(shelf: Path, ids: list[str]) -> None:
    out, _ = _run(shelf, "library", "find", "MgO", "--json")
    assert out.isascii()
    assert NAMES[3] in [phase["name"] for phase in json.loads(out)["phases"]]
    assert ids
