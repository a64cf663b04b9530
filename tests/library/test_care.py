"""Checking a library, removing from it, and what adding tells of changes."""

from __future__ import annotations

import re
import sqlite3
from collections.abc import Callable
from contextlib import closing
from pathlib import Path

import pytest

from phaseid.library import Library
from phaseid.library.checking import Checked, check
from phaseid.library.starter import shipped_crystal

WriteCif = Callable[..., Path]
STEMS = ("MgO-periclase", "SiO2-quartz", "TiO2-rutile", "Al2O3-corundum", "CaCO3-calcite")


@pytest.fixture
def five(library: Library) -> Library:
    library.add_crystals(map(shipped_crystal, STEMS))
    return library


def checked(library: Library) -> Checked:
    with library.reading() as conn:
        return check(conn, sample=None)


def damaged(library: Library, *statements: str) -> list[str]:
    """Change the file behind the library's back; return what checking says."""
    library.close()
    with closing(sqlite3.connect(library.path)) as conn:
        for statement in statements:
            conn.execute(statement)
        conn.execute("PRAGMA user_version = 0")  # no seal: found by looking, not by a checksum
        conn.commit()
    with Library.open(library.path) as again:
        return checked(again).troubles


def test_a_sound_library_has_no_troubles(five: Library) -> None:
    found = checked(five)
    assert (found.phases, found.recomputed, found.older, found.troubles) == (5, 5, 0, [])


@pytest.mark.parametrize(
    ("statement", "trouble"),
    [
        ("UPDATE meta SET value = '00' WHERE key = 'digest'", "the digest is 00"),
        ("DELETE FROM lines WHERE phase = 2", "SiO2-a800b63d has no lines"),
        ("DELETE FROM structure WHERE phase = 3", "TiO2-fbfc889e has no structure"),
        ("UPDATE lines SET data = (SELECT data FROM lines WHERE phase = 1) WHERE phase = 4",
         "Al2O3-94d88a67: the lines are not those of its structure"),
        ("UPDATE structure SET data = (SELECT data FROM structure WHERE phase = 1) WHERE phase = 4",
         "Al2O3-94d88a67: the structure is not the one that was added"),
        ("UPDATE structure SET data = x'00' WHERE phase = 1", "MgO-.*the structure cannot be read"),
        ("UPDATE lines SET data = x'0102' WHERE phase = 1", "MgO-.*the lines are not those"),
        ("UPDATE block SET data = zeroblob(length(data)) WHERE part = 'x-ray'",
         "its block holds other lines"),
        ("DELETE FROM block", "the blocks lack 5 phases"),
        ("INSERT INTO label (phase, kind, text, key) VALUES (99, 'name', 'x', 'x')",
         "1 rows of table label belong to no phase"),
        ("INSERT INTO member VALUES (1, 2)", "the entries of Mg O are not grouped as they should"),
        ("INSERT INTO ungrouped VALUES ('Mg O', 1)", "1 sets of elements are not grouped yet"),
    ],
)  # fmt: skip
def test_each_kind_of_damage_is_told(five: Library, statement: str, trouble: str) -> None:
    troubles = damaged(five, statement)
    assert any(re.search(trouble, told) for told in troubles), troubles


def test_a_sample_is_some_of_the_phases(five: Library) -> None:
    with five.reading() as conn:
        assert check(conn, sample=2).recomputed == 2


def test_what_is_removed_was_never_there(five: Library, tmp_path: Path) -> None:
    (quartz,) = five.find("quartz")
    five.remove([quartz.phase_id])
    with Library.create(tmp_path / "other.sqlite") as other:
        stems = [stem for stem in STEMS if stem != "SiO2-quartz"]
        other.add_crystals(map(shipped_crystal, stems))
        assert five.digest == other.digest
        assert [p.phase_id for p in five.phases()] == [p.phase_id for p in other.phases()]
        one, two = five.strong_lines("x-ray"), other.strong_lines("x-ray")
        assert one.code.tolist() == two.code.tolist()
    assert five.find("quartz") == []
    assert checked(five).troubles == []
    five.add_crystals([shipped_crystal("SiO2-quartz")])
    assert five.find("quartz") == [quartz]
    assert checked(five).troubles == []


def test_a_file_brings_back_what_was_removed(library: Library, write_cif: WriteCif) -> None:
    path = write_cif("1.cif", "MgO")
    library.add([path])
    (phase,) = library.phases()
    library.remove([phase.phase_id])
    assert len(library) == 0
    assert library.digest == "0" * 32
    assert library.add([path]).added == 1
    assert library.phases() == [phase]


def test_who_stood_for_others_may_be_removed(library: Library, write_cif: WriteCif) -> None:
    library.add([write_cif(f"{n}.cif", "MgO", 4.21 + n / 1000, cod=f"900000{n}") for n in range(3)])
    leader, *others = library.entries(library.phases()[0].phase_id)
    library.remove([leader.phase_id])
    left = library.entries(others[0].phase_id)
    assert {p.phase_id for p in left} == {p.phase_id for p in others}


def test_a_newer_version_says_what_it_replaces(library: Library, write_cif: WriteCif) -> None:
    library.add([write_cif("1.cif", "MgO", 4.21, cod="9000001", name="Periclase")])
    (before,) = library.phases()
    tally = library.add([write_cif("1.cif", "MgO", 4.22, cod="9000001", name="Periclase")])
    (after,) = library.phases()
    (told,) = tally.replacements
    assert (told.before, told.phase_id) == (before.phase_id, after.phase_id)
    assert (told.name, told.database, told.number) == ("Periclase", "COD", "9000001")
    assert tally.as_json()["replacements"][0]["before"] == before.phase_id


def test_what_a_folder_no_longer_holds_is_told_and_kept(
    library: Library, write_cif: WriteCif
) -> None:
    kept, gone = write_cif("set/1.cif", "MgO"), write_cif("set/2.cif", "NaCl", name="Halite")
    moved, broken = write_cif("set/3.cif", "KCl"), write_cif("set/4.cif", "CaO")
    other = write_cif("set2/5.cif", "LiF")
    folder = kept.parent
    assert library.add([folder, other.parent]).gone == []
    gone.unlink()
    moved.rename(folder / "elsewhere.cif")
    broken.write_text("no CIF at all")
    tally = library.add([folder])
    assert [(one.name, one.location) for one in tally.gone] == [("Halite", str(gone))]
    assert tally.as_json()["gone"][0]["location"] == str(gone)
    assert len(library) == 5
    gone.parent.rename(folder.with_name("away"))
    assert library.add([folder]).gone == []  # the folder itself is not there: nothing is known


def test_lines_of_another_version_are_computed_anew(
    library: Library, write_cif: WriteCif, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = write_cif("1.cif", "MgO")
    library.add([path])
    before = library.line_table("x-ray")
    digest = library.digest
    with library.writing() as conn:  # as an older version may have computed them
        conn.execute("UPDATE phase SET computed_by = '0.0.1'")
        conn.execute("UPDATE lines SET data = x''")
    assert checked(library).older == 1
    assert library.add([path]).recomputed == 0  # these bytes were read by this version
    with library.writing() as conn:
        conn.execute("DELETE FROM seen")  # as an older version remembers it under another digest
    tally = library.add([path])
    assert (tally.unchanged, tally.recomputed) == (1, 1)
    assert "1 unchanged (1 computed anew)" in tally.summary()
    assert library.line_table("x-ray").f2.tolist() == before.f2.tolist()
    assert (library.digest, checked(library).older) == (digest, 0)
