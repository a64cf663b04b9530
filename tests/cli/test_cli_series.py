"""`phaseid series`: a folder in; a table, a picture and records out."""

from __future__ import annotations

import csv
import shutil
from pathlib import Path

import pytest

from phaseid.cli.series import natural_order
from phaseid.resources import data_path

HEATING = data_path("demo") / "heating"
QUICK = ("--only", "Ti,O", "--max-phases", "2")


@pytest.fixture
def folder(tmp_path: Path) -> Path:
    """Three patterns of the heating, a bad list and a hidden file."""
    for celsius in (500, 700, 900):
        shutil.copy(HEATING / f"powder_{celsius}.csv", tmp_path)
    (tmp_path / "broken_1.csv").write_text("# probe: x-ray Cu Ka\nd_A\n2.3\n-1\n", "utf-8")
    (tmp_path / ".hidden").write_text("no pattern", "utf-8")
    return tmp_path


def test_a_folder_is_followed_and_bad_files_are_told(phaseid, folder: Path) -> None:
    done = phaseid("series", str(folder), *QUICK, "--json")
    value = done.json("series-1")
    assert value["axis"] == {"name": "temperature", "unit": "°C", "values": [500, 700, 900]}
    assert [row["phase"]["name"] for row in value["phases"]] == ["anatase", "rutile"]
    assert [p["phases"] for p in value["patterns"]] == [[0], [0, 1], [1]]
    assert [Path(f["source"]).name for f in value["failed"]] == ["broken_1.csv"]
    assert "broken_1.csv" in done.err
    assert "line 4" in done.err
    assert ".hidden" not in done.err


def test_a_series_in_words_with_table_and_picture(phaseid, folder: Path, tmp_path: Path) -> None:
    table, picture = tmp_path / "out" / "s.csv", tmp_path / "out" / "s.svg"
    table.parent.mkdir()
    done = phaseid("series", str(folder), *QUICK, "--csv", str(table), "--plot", str(picture))
    assert done.code == 0
    assert done.out.startswith("3 patterns by temperature: anatase (TiO2), rutile (TiO2).")
    assert max(map(len, done.out.splitlines())) <= 80
    rows = list(csv.DictReader(table.read_text("utf-8").splitlines()))
    assert len(rows) == 6
    assert {row["name"] for row in rows} == {"anatase", "rutile"}
    assert float(rows[0]["probability"]) > 0.9
    drawn = picture.read_text("utf-8")
    assert drawn.startswith("<?xml")
    assert "anatase" in drawn
    assert "temperature" in drawn


def test_files_are_taken_in_the_order_given(phaseid) -> None:
    files = [str(HEATING / f"powder_{celsius}.csv") for celsius in (900, 500)]
    value = phaseid("series", *files, *QUICK, "--along", "number", "--json").json("series-1")
    assert value["axis"]["values"] == [1, 2]
    assert [row["phase"]["name"] for row in value["phases"]] == ["rutile", "anatase"]


def test_numbers_in_names_count_as_numbers() -> None:
    names = ["scan_10.csv", "scan_9.csv", "Scan_1b.csv", "a.csv"]
    ordered = ["a.csv", "Scan_1b.csv", "scan_9.csv", "scan_10.csv"]
    assert sorted(names, key=natural_order) == ordered


@pytest.mark.parametrize(
    ("words", "message"),
    [
        (("nowhere",), "nowhere"),
        ((str(HEATING), "--along", "time"), "time"),
        ((str(HEATING), "--plot", "s.docx"), "s.docx"),
        ((str(HEATING), "--csv", "no/such/folder.csv"), "folder"),
        ((str(HEATING), "--only", "Xx"), "Xx"),
        ((str(HEATING), "--persistence", "2"), "persistence"),
    ],
)
def test_a_series_that_is_none_is_refused(phaseid, words: tuple[str, ...], message: str) -> None:
    done = phaseid("series", *words)
    assert (done.code, done.out) == (2, "")
    assert message in done.err


def test_an_empty_folder_is_told(phaseid, tmp_path: Path) -> None:
    done = phaseid("series", str(tmp_path))
    assert (done.code, done.out) == (2, "")
    assert "no files" in done.err
