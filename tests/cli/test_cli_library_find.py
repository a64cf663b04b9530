"""`phaseid library`: finding, exporting, checking, removing; what adding and rejects tell."""

from __future__ import annotations

import csv
import io
import json
import sqlite3
from contextlib import closing
from pathlib import Path

import pytest

from phaseid.library import Library
from phaseid.resources import data_path
from tests.cli.conftest import Command
from tests.library.rock_salts import rock_salt


@pytest.fixture
def mine(tmp_path: Path, phaseid: Command) -> str:
    """Three determinations of periclase, one of halite."""
    folder = tmp_path / "set"
    folder.mkdir()
    for number, (formula, edge, name) in enumerate(
        [
            ("MgO", 4.211, "Periclase"),
            ("MgO", 4.213, "Periclase"),
            ("MgO", 4.209, "Periclase"),
            ("NaCl", 5.640, "=Halite"),
        ]
    ):
        text = rock_salt(formula, edge, name=name, cod=f"900000{number}")
        (folder / f"{number}.cif").write_text(text, encoding="utf-8")
    path = str(tmp_path / "mine.sqlite")
    assert phaseid("library", "add", str(folder), "--library", path).code == 0
    return path


def test_one_entry_of_each_phase_is_listed(phaseid: Command, mine: str) -> None:
    shown = phaseid("library", "find", "periclase", "--library", mine)
    assert shown.out.count("Periclase") == 1
    assert "entries" in shown.out.splitlines()[0]
    assert " 3 " in shown.out.splitlines()[1]
    every = phaseid("library", "find", "periclase", "--entries", "--library", mine)
    assert every.out.count("Periclase") == 3
    found = phaseid("library", "find", "periclase", "--library", mine, "--json").json(
        "library-find-1"
    )
    assert [phase["entry_count"] for phase in found["phases"]] == [3]
    assert (found["found"], found["more"]) == (1, False)


def test_options_say_what_is_known(phaseid: Command) -> None:
    words = ("--must", "Fe,O", "--only", "Fe,O", "--density", "5.2-5.3", "--space-group", "R-3c")
    found = phaseid("library", "find", *words, "--json").json("library-find-1")
    assert [phase["name"] for phase in found["phases"]] == ["hematite"]
    cell = ("--cell", "9.51 3.78", "--tolerance", "0.3%", "--formula", "TiO2")
    found = phaseid("library", "find", *cell, "--json").json("library-find-1")
    assert [phase["name"] for phase in found["phases"]] == ["anatase"]


def test_marks_are_listed(phaseid: Command) -> None:
    shown = phaseid("library", "find", "--name", "coesite").out
    assert "high pressure" in shown
    found = phaseid("library", "find", "coesite", "--json").json("library-find-1")
    assert found["phases"][0]["marks"] == ["high pressure"]


def test_long_lists_are_cut_and_told(phaseid: Command) -> None:
    done = phaseid("library", "find", "--must", "O", "--top", "3")
    assert len(done.out.splitlines()) == 4
    assert "3 of " in done.err
    found = phaseid("library", "find", "--must", "O", "--json").json("library-find-1")
    assert len(found["phases"]) == found["found"] > 100


def test_nothing_found_is_an_answer(phaseid: Command) -> None:
    done = phaseid("library", "find", "--must", "He,Xe")
    assert (done.code, done.out) == (0, "")
    assert "No phases of the library are so" in done.err
    assert phaseid("library", "find", "--must", "He,Xe", "--json").json("library-find-1") == {
        "schema": "phaseid.library-find/1",
        "phases": [],
        "found": 0,
        "more": False,
    }


@pytest.mark.parametrize(
    ("words", "complaint"),
    [
        ([], "nothing is said"),
        (["--density", "heavy"], "is no density"),
        (["--cell", "a,b"], "are no cell edges"),
        (["--must", "Zz"], "not an element symbol"),
        (["quartz", "--json", "--csv"], "both given"),
        (["--space-group", "P9"], "is no space group"),
    ],
)
def test_bad_questions_are_told(phaseid: Command, words: list[str], complaint: str) -> None:
    done = phaseid("library", "find", *words)
    assert (done.code, done.out) == (2, "")
    assert complaint in done.err


def test_csv_holds_no_formulas_for_a_spreadsheet(phaseid: Command, mine: str) -> None:
    text = phaseid("library", "find", "--must", "Cl", "--csv", "--library", mine).out
    (row,) = csv.DictReader(io.StringIO(text))
    assert row["name"] == "'=Halite"  # OWASP, "CSV Injection": a leading = is a formula
    assert (row["formula"], float(row["a_A"]), row["entries"]) == ("NaCl", 5.64, "1")


@pytest.mark.parametrize("ending", [".cif", ".zip"])
def test_exported_structures_are_those_of_the_library(
    phaseid: Command, tmp_path: Path, starter_library_path: Path, ending: str
) -> None:
    file, copy = tmp_path / f"out{ending}", tmp_path / "copy.sqlite"
    assert phaseid("library", "export", str(file), "--must", "Ti,O").code == 0
    done = phaseid("library", "add", str(file), "--library", str(copy), "--json")
    assert done.json("library-add-1")["rejected"] == 0
    with Library.open(copy) as added, Library.open(starter_library_path) as starter:
        wanted = {p.phase_id for p in starter.phases() if {"Ti", "O"} <= set(p.elements)}
        assert {phase.phase_id for phase in added.phases()} == wanted


def test_exported_tables_hold_every_entry(phaseid: Command, tmp_path: Path, mine: str) -> None:
    table, facts, best = (str(tmp_path / name) for name in ("a.csv", "a.json", "b.csv"))
    for words in ([table], [facts], [best, "--best"]):
        assert phaseid("library", "export", *words, "--library", mine).code == 0
    assert len(rows_of(table)) == 4
    assert json.loads(Path(facts).read_text(encoding="utf-8"))["found"] == 4
    assert len(rows_of(best)) == 2


def rows_of(file: str) -> list[dict[str, str]]:
    return list(csv.DictReader(io.StringIO(Path(file).read_text(encoding="utf-8"))))


def test_export_overwrites_nothing_unasked(phaseid: Command, tmp_path: Path, mine: str) -> None:
    file = tmp_path / "all.csv"
    file.write_text("mine")
    done = phaseid("library", "export", str(file), "--library", mine)
    assert (done.code, file.read_text()) == (2, "mine")
    assert "--force" in done.err
    assert phaseid("library", "export", str(file), "--force", "--library", mine).code == 0
    assert file.read_text().startswith("phase_id,")
    for name, complaint in (("all.xls", ".csv"), ("no/all.csv", "cannot be written")):
        done = phaseid("library", "export", str(tmp_path / name), "--library", mine)
        assert done.code == 2
        assert complaint in done.err


def test_removing_is_asked_for(phaseid: Command, mine: str) -> None:
    words = ("library", "remove", "--formula", "MgO", "--library", mine)
    dry = phaseid(*words, "--dry-run", "--json").json("library-remove-1")
    assert (dry["removed"], len(dry["entries"]), dry["phases"]) == (0, 3, 4)
    refused = phaseid(*words)
    assert refused.code == 2  # nobody sits at the keyboard of a test
    assert "--yes" in refused.err
    done = phaseid(*words, "--yes", "--json").json("library-remove-1")
    assert (done["removed"], done["phases"]) == (3, 1)
    with Library.open(mine) as library:
        assert done["digest"] == library.digest
        assert [phase.formula for phase in library.phases()] == ["NaCl"]


def test_removing_by_id_takes_no_names(phaseid: Command, mine: str) -> None:
    done = phaseid("library", "remove", "Periclase", "--yes", "--library", mine)
    assert done.code == 2
    assert "no entry with the id or number 'Periclase'" in done.err
    assert "1 removed" in phaseid("library", "remove", "9000001", "--yes", "--library", mine).out
    assert phaseid("library", "remove", "--yes", "--library", mine).code == 2  # not everything


@pytest.mark.parametrize("answer", ["y\n", "n\n"])
def test_a_person_may_change_their_mind(
    phaseid: Command, mine: str, monkeypatch: pytest.MonkeyPatch, answer: str
) -> None:
    class Keyboard(io.StringIO):
        def isatty(self) -> bool:
            return True

    monkeypatch.setattr("sys.stdin", Keyboard(answer))
    done = phaseid("library", "remove", "9000003", "--library", mine)
    assert done.code == 0
    with Library.open(mine) as library:
        assert len(library) == (3 if answer == "y\n" else 4)


def test_check_says_that_a_library_is_sound(phaseid: Command, mine: str) -> None:
    done = phaseid("library", "check", "--all", "--library", mine)
    assert "4 phases, the lines of 4 computed again" in done.out
    assert "sound" in done.out
    facts = phaseid("library", "check", "--library", mine, "--json").json("library-check-1")
    assert (facts["sound"], facts["troubles"]) == (True, [])


def test_check_says_what_is_wrong_with_exit_code_3(phaseid: Command, mine: str) -> None:
    with closing(sqlite3.connect(mine)) as conn:
        conn.execute("DELETE FROM lines WHERE phase = 1")
        conn.execute("PRAGMA user_version = 0")
        conn.commit()
    done = phaseid("library", "check", "--library", mine)
    assert done.code == 3
    assert "has no lines" in done.out
    assert "damaged" in done.err
    assert (
        json.loads(phaseid("library", "check", "--library", mine, "--json").out)["sound"] is False
    )


def test_adding_tells_what_was_replaced_and_what_is_gone(
    phaseid: Command, tmp_path: Path, mine: str
) -> None:
    folder = tmp_path / "set"
    (folder / "3.cif").unlink()
    (folder / "0.cif").write_text(rock_salt("MgO", 4.22, name="Periclase", cod="9000000"))
    words = ("library", "add", str(folder), "--library", mine)
    done = phaseid(*words)
    assert "replaced: Periclase (COD 9000000), MgO-" in done.err
    assert f"no longer there: {folder / '3.cif'} (=Halite, NaCl-" in done.err
    facts = phaseid(*words, "--json").json("library-add-1")
    assert [gone["name"] for gone in facts["gone"]] == ["=Halite"]
    assert facts["replacements"] == []  # done before
    with Library.open(mine) as library:
        assert len(library) == 4


def test_rejects_are_counted_by_reason(phaseid: Command, tmp_path: Path, mine: str) -> None:
    for name, text in (("a", "no CIF"), ("b", "no CIF"), ("c", "data_c\n_cell_length_a 3\n")):
        (tmp_path / f"{name}.cif").write_text(text)
    files = [str(tmp_path / f"{name}.cif") for name in "abc"]
    phaseid("library", "add", *files, "--library", mine)
    facts = phaseid("library", "rejects", "--library", mine, "--json").json("library-rejects-1")
    counts = [reason["count"] for reason in facts["reasons"]]
    assert counts == sorted(counts, reverse=True)
    assert sum(counts) == 3
    code = facts["reasons"][0]["code"]
    shown = phaseid("library", "rejects", "--library", mine).out.splitlines()
    assert shown[0].split() == [str(counts[0]), code]
    some = phaseid("library", "rejects", "--reason", code, "--library", mine, "--json")
    assert len(some.json("library-rejects-1")["rejects"]) == counts[0]
    wrong = phaseid("library", "rejects", "--reason", "bad_luck", "--library", mine)
    assert wrong.code == 2
    assert code in wrong.err


def test_an_answer_names_the_other_entries(phaseid: Command, mine: str) -> None:
    # d (Å) of 111, 200, 220, 311, 222 of periclase with a = 4.211 Å: a/√(h² + k² + l²)
    rings = [str(round(4.211 / n**0.5, 4)) for n in (3, 4, 8, 11, 12)]
    words = ("identify", *rings, "--probe", "x-ray Cu Ka", "--library", mine)
    answer = phaseid(*words, "--json").json("identification-1")
    (phase,) = answer["hypotheses"][0]["phases"]
    assert phase["formula"] == "MgO"
    assert len(phase["entries"]) == 2
    alike = {other["phase_id"] for other in phase["indistinguishable"]}
    assert {entry["phase_id"] for entry in phase["entries"]} <= alike
    named = [p["phase_id"] for h in answer["hypotheses"] for p in h["phases"]]
    assert len([one for one in set(named) if one.startswith("MgO")]) == 1
    assert "3 entries of this phase in the library" in phaseid(*words).out
    lines = phaseid("near", *rings[:2], "--library", mine, "--json").json("near-1")["matches"]
    assert len({match["phase"]["phase_id"] for match in lines}) == 1


def test_screening_suspects_one_entry_of_each_phase(
    phaseid: Command, tmp_path: Path, mine: str
) -> None:
    halite, periclase = ([a / n**0.5 for n in (3, 4, 8, 11, 12)] for a in (5.640, 4.211))
    rows = [f"{d:.4f},100" for d in halite] + [f"{d:.4f},60" for d in periclase]
    file = tmp_path / "rings.csv"
    file.write_text("\n".join(["# probe: x-ray Cu Ka", "d_A,intensity", *rows]))
    words = ("screen", str(file), "--expect", "NaCl", "--library", mine, "--json")
    foreign = phaseid(*words).json("screening-1")["foreign"]
    named = {c["phase"]["phase_id"] for ring in foreign for c in ring["candidates"]}
    with Library.open(mine) as library:  # beside it stands the shipped one that is watched for
        own = {phase.phase_id for phase in library.phases() if phase.formula == "MgO"}
    assert (len(own), len(own & named)) == (3, 1)


def test_the_starter_folder_adds_nothing_new(phaseid: Command) -> None:
    facts = phaseid("library", "add", str(data_path("starter", "elements")), "--json").json(
        "library-add-1"
    )
    assert (facts["added"], facts["gone"]) == (0, [])
