"""`phaseid library`: add, info, rejects, find, path."""

from __future__ import annotations

import json
import sqlite3
import zipfile
from pathlib import Path

import pytest

from phaseid.library import Library
from phaseid.library.schema import SCHEMA_VERSION
from phaseid.resources import data_path
from tests.cli.conftest import Command
from tests.library.rock_salts import rock_salt


@pytest.fixture
def cif(tmp_path: Path) -> Path:
    path = tmp_path / "periclase.cif"
    path.write_text(rock_salt("MgO", name="Periclase", cod="9000001"), encoding="utf-8")
    return path


@pytest.fixture
def mine(tmp_path: Path, cif: Path, phaseid: Command) -> Path:
    path = tmp_path / "mine.sqlite"
    assert phaseid("library", "add", str(cif), "--library", str(path)).code == 0
    return path


def test_adding_makes_the_library_named_and_counts(
    phaseid: Command, tmp_path: Path, cif: Path
) -> None:
    path = tmp_path / "new.sqlite"
    words = ("library", "add", str(cif), "--library", str(path))
    done = phaseid(*words)
    assert (done.code, done.out) == (0, "1 added, 0 unchanged, 0 replaced, 0 rejected\n")
    assert str(path) in done.err  # that it is a new one
    again = phaseid(*words, "--json").json("library-add-1")
    assert (again["added"], again["unchanged"]) == (0, 1)
    with Library.open(path) as library:
        assert len(library) == 1  # without the starter structures


def test_rejects_are_told_and_kept(phaseid: Command, tmp_path: Path, cif: Path) -> None:
    bad = tmp_path / "bad.cif"
    bad.write_text("no CIF at all")
    path = str(tmp_path / "lib.sqlite")
    done = phaseid("library", "add", str(bad), str(cif), "--library", path)
    assert done.code == 0
    assert "1 added" in done.out
    assert "rejected: bad.cif: " in done.err
    kept = phaseid("library", "rejects", "--library", path, "--json").json("library-rejects-1")
    assert [(r["file"], r["location"]) for r in kept["rejects"]] == [("bad.cif", str(bad))]
    assert str(bad) in phaseid("library", "rejects", "--library", path).out


@pytest.mark.parametrize("as_json", [False, True])
def test_nothing_read_is_an_error(phaseid: Command, tmp_path: Path, as_json: bool) -> None:
    words = ["library", "add", str(tmp_path / "no.cif"), "--library", str(tmp_path / "l.sqlite")]
    done = phaseid(*words, *(["--json"] if as_json else []))
    assert done.code == 2
    assert "no such file" in done.err
    assert "nothing could be read" in done.err
    if as_json:
        said = json.loads(done.out)
        assert (said["schema"], said["rejected"]) == ("phaseid.library-add/1", 1)
        assert said["rejects"][0]["file"] == "no.cif"


def test_adding_nothing_is_an_error(phaseid: Command, tmp_path: Path) -> None:
    done = phaseid("library", "add", "--library", str(tmp_path / "l.sqlite"))
    assert done.code == 2
    assert "--starter" in done.err
    assert not (tmp_path / "l.sqlite").exists()


@pytest.mark.parametrize("empty", ["", " "])
def test_an_empty_name_is_not_this_folder(
    phaseid: Command, tmp_path: Path, cif: Path, monkeypatch: pytest.MonkeyPatch, empty: str
) -> None:
    monkeypatch.chdir(cif.parent)
    path = tmp_path / "new.sqlite"
    done = phaseid("library", "add", empty, "--library", str(path))
    assert done.code == 2
    assert "the name of a file or folder to add is empty" in done.err
    assert not path.exists()
    assert "1 added" in phaseid("library", "add", ".", "--library", str(path)).out


def test_the_starter_structures_can_be_added(
    phaseid: Command, mine: Path, starter_library: Library
) -> None:
    done = phaseid("library", "add", "--starter", "--library", str(mine), "--json")
    assert done.json("library-add-1")["added"] >= len(starter_library) - 1
    with Library.open(mine) as library:
        assert len(library) >= len(starter_library)


def test_shipped_files_are_in_the_starter_library(phaseid: Command, tmp_path: Path) -> None:
    with zipfile.ZipFile(tmp_path / "elements.zip", "w") as archive:
        for path in sorted(data_path("starter", "elements").glob("*.cif"))[:5]:
            archive.write(path, path.name)
    said = phaseid("library", "add", str(tmp_path / "elements.zip"), "--json").json("library-add-1")
    assert (said["added"], said["unchanged"]) == (0, 5)


def test_info_says_what_it_holds(phaseid: Command, mine: Path) -> None:
    facts = phaseid("library", "info", "--library", str(mine), "--json").json("library-info-1")
    with Library.open(mine) as library:
        assert (facts["phases"], facts["digest"]) == (1, library.digest)
    assert (facts["path"], facts["schema_version"]) == (str(mine), SCHEMA_VERSION)
    shown = phaseid("library", "info", "--library", str(mine)).out
    assert facts["digest"] in shown
    assert "COD" in shown


@pytest.mark.parametrize("text", ["periclase", "MgO", "OMg", "9000001", "PERI"])
def test_find_shows_phases(phaseid: Command, mine: Path, text: str) -> None:
    shown = phaseid("library", "find", text, "--library", str(mine))
    assert shown.code == 0
    assert "Periclase" in shown.out
    assert "Fm-3m (225)" in shown.out
    found = phaseid("library", "find", text, "--library", str(mine), "--json").json(
        "library-find-1"
    )
    assert [phase["source"]["id"] for phase in found["phases"]] == ["9000001"]


def test_find_without_result_names_what_is_near(phaseid: Command, mine: Path) -> None:
    done = phaseid("library", "find", "peryclase", "--library", str(mine))
    assert (done.code, done.out) == (2, "")
    assert "Close names: Periclase" in done.err


def test_path_is_printed(phaseid: Command, starter_library_path: Path) -> None:
    assert phaseid("library", "path").out == f"{starter_library_path}\n"


@pytest.mark.parametrize("command", [["info"], ["find", "MgO"], ["rejects"]])
def test_a_missing_library_is_exit_code_3(
    phaseid: Command, tmp_path: Path, command: list[str]
) -> None:
    path = tmp_path / "none.sqlite"
    done = phaseid("library", *command, "--library", str(path))
    assert (done.code, done.out) == (3, "")
    assert f"{path}: there is no library" in done.err
    assert not path.exists()


def test_what_is_no_library_is_not_added_to(phaseid: Command, tmp_path: Path, cif: Path) -> None:
    path = tmp_path / "other.sqlite"
    with sqlite3.connect(path) as conn:
        conn.execute("CREATE TABLE moon (day TEXT)")
    conn.close()
    before = path.read_bytes()
    done = phaseid("library", "add", str(cif), "--library", str(path))
    assert done.code == 3
    assert "no library of phaseid" in done.err
    assert path.read_bytes() == before
