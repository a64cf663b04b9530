"""The file itself: what is refused, what survives, what comes back as it went in."""

from __future__ import annotations

import os
import shutil
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from itertools import islice
from pathlib import Path

import numpy as np
import pytest

from phaseid.crystal.cif import read_cif_file
from phaseid.crystal.crystal import Crystal, Finding, Site, Source
from phaseid.crystal.lines import compute_lines, trim
from phaseid.errors import InputError, LibraryError
from phaseid.library import Library, connection, linetable
from phaseid.library.linetable import LineTable
from phaseid.library.packing import STORED_FLOOR
from phaseid.library.records import pack_crystal, unpack_crystal
from phaseid.library.schema import SCHEMA_VERSION, STEPS, apply_steps, stored_version
from phaseid.library.starter import starter_crystals
from tests.library.rock_salts import rock_salt

WriteCif = Callable[..., Path]
NOBODY = 65534


def test_a_crystal_comes_back_exactly() -> None:
    crystal = Crystal(
        cell=(5.1, 0.1 + 0.2, 1e-17 + 7, 90.0, 89.99999999999999, 120.0),
        space_group_number=1,
        space_group_symbol="P1",
        operations=("x,y,z",),
        sites=(
            Site("O1", "O", -2, (1 / 3, 2 / 3, 0.1), 0.5, 0.012, (0.1, 0.2, 0.3, 0.0, -0.1, 1e-9)),
            Site("D2", "D", 0, (0.0, -0.0, 0.999999999999), 1.0),
        ),
        name="Wüstenstein α",
        formula="DO",
        z=0.5,
        source=Source("COD", "9000001", "a b.cif", "Müller, J. (1999)"),
        temperature_K=4.2,
        pressure_GPa=None,
        findings=(Finding("code", "a sentence"),),
    )
    assert unpack_crystal(*pack_crystal(crystal)) == crystal


def test_a_phase_comes_back_as_it_went_in(library: Library, write_cif: WriteCif) -> None:
    path = write_cif("halite.cif", "NaCl", cod="9000629", name="Halite")
    (crystal,) = read_cif_file(path).crystals
    library.add([path])
    (phase,) = library.phases()
    assert library.phase(phase.phase_id) == phase
    assert library.crystal(phase.phase_id) == crystal
    assert phase.source == crystal.source
    assert (phase.name, phase.formula, phase.elements) == ("Halite", "NaCl", ("Cl", "Na"))
    assert (phase.space_group_number, phase.space_group_symbol) == (225, "Fm-3m")
    assert phase.cell == (5.64, 5.64, 5.64, 90.0, 90.0, 90.0)
    assert phase.volume_A3 == pytest.approx(5.64**3)
    # density of halite 2.165 g/cm3: CRC Handbook of Chemistry and Physics, from memory
    assert phase.density_g_cm3 == pytest.approx(2.165, rel=2e-3)
    assert phase.phase_id.startswith("NaCl-")
    assert len(phase.phase_id) == len("ClNa-") + 8
    assert (phase.quality, phase.findings, phase.cautions) == (1.0, (), ())


def test_lines_come_back_to_the_precision_they_are_stored_with(library: Library) -> None:
    crystals = list(islice(starter_crystals(), 0, 80, 10))
    library.add_crystals(crystals)
    for phase in library.phases():
        wanted = trim(compute_lines(library.crystal(phase.phase_id)), STORED_FLOOR)
        lines = library.lines(phase.phase_id)
        for name in ("d_A", "hkl", "multiplicity", "f2_xray", "f2_electron", "f2_neutron"):
            np.testing.assert_array_equal(getattr(lines, name), getattr(wanted, name))
        assert (lines.volume_A3, lines.complete_to_A, lines.floor) == (
            wanted.volume_A3, wanted.complete_to_A, wanted.floor,
        )  # fmt: skip


def test_lines_at_another_energy_carry_its_dispersion(starter_library: Library) -> None:
    """110 of ferrite at Co Kα1 (6930 eV) against Cu Kα1; f0, f′, f″ are those of xraydb.

    |F|² ∝ (f0 + f′)² + f″²; the tables of f′ (Chantler 1995 there, Cromer & Liberman 1981 here)
    differ by 0.1 to 0.2 electrons, 2 % of |F|².
    """
    xraydb = pytest.importorskip("xraydb")
    ferrite = starter_library.choose("ferrite").phase_id
    copper, cobalt = 8047.8, 6930.4
    stored, other = starter_library.lines(ferrite), starter_library.lines_at(ferrite, cobalt)
    assert tuple(other.hkl[0]) == (1, 1, 0)
    f0 = float(xraydb.f0("Fe", 1 / (2 * float(other.d_A[0])))[0])
    expected = [
        (f0 + xraydb.f1_chantler("Fe", energy)) ** 2 + xraydb.f2_chantler("Fe", energy) ** 2
        for energy in (cobalt, copper)
    ]
    found = other.f2_xray[0] / stored.f2_xray[0]
    assert found == pytest.approx(expected[0] / expected[1], rel=0.02)
    assert abs(found - 1) > 0.05
    np.testing.assert_allclose(other.f2_electron[:20], stored.f2_electron[:20], rtol=1e-6)
    assert (other.floor, other.complete_to_A) == (stored.floor, stored.complete_to_A)
    with pytest.raises(InputError, match="energy"):
        starter_library.lines_at(ferrite, -1.0)
    with pytest.raises(InputError, match="no phase"):
        starter_library.lines_at("nothing", cobalt)


@pytest.mark.parametrize("kind", ["x-ray", "electron", "neutron"])
def test_the_line_table_is_all_the_lines(starter_library: Library, kind: str) -> None:
    table = starter_library.line_table(kind)  # type: ignore[arg-type]
    phases = starter_library.phases()
    assert table.phase_ids == tuple(phase.phase_id for phase in phases)
    assert len(table) == len(phases) == len(starter_library)
    assert table.offsets[0] == 0
    assert table.offsets[-1] == len(table.d_A) == len(table.hkl) == len(table.f2)
    assert table.hkl.dtype == np.int16
    assert table.multiplicity.dtype == np.int32
    for number in range(0, len(phases), 37):
        part = slice(table.offsets[number], table.offsets[number + 1])
        lines = starter_library.lines(phases[number].phase_id)
        field = "f2_" + kind.replace("-", "")
        np.testing.assert_allclose(table.d_A[part], lines.d_A, rtol=1e-12)
        np.testing.assert_array_equal(table.hkl[part], lines.hkl)
        f2 = getattr(lines, field)
        strength = lines.multiplicity * lines.d_A**2 * f2
        kept = strength >= STORED_FLOOR * strength.max()
        np.testing.assert_array_equal(table.f2[part] > 0, kept)
        np.testing.assert_allclose(table.f2[part][kept], f2[kept], rtol=1.2e-3)
        assert table.volume_A3[number] == lines.volume_A3
        assert table.complete_to_A[number] == lines.complete_to_A
        assert table.quality[number] == phases[number].quality
    assert [tuple(sorted(held)) for held in table.elements] == [p.elements for p in phases]
    aluminium = np.uint64(1 << 12)  # Z = 13
    has = (table.elements_mask[:, 0] & aluminium) != 0
    assert list(has) == ["Al" in phase.elements for phase in phases]


def test_the_table_of_an_empty_library_is_empty(library: Library) -> None:
    table = library.line_table("electron")
    assert (len(table), len(table.d_A), list(table.offsets)) == (0, 0, [0])
    assert table.elements == ()


def test_a_table_made_in_pieces_is_the_same(
    starter_library: Library, monkeypatch: pytest.MonkeyPatch
) -> None:
    whole = starter_library.line_table("neutron")
    monkeypatch.setattr(linetable, "_AT_ONCE", 100)
    pieces = starter_library.line_table("neutron")
    assert pieces.phase_ids == whole.phase_ids
    for name in LineTable.__slots__[1:]:
        np.testing.assert_array_equal(getattr(pieces, name), getattr(whole, name))


def test_lines_of_some_phases_come_in_the_order_asked(starter_library: Library) -> None:
    whole = starter_library.line_table("x-ray")
    asked = np.random.default_rng(3).permutation(len(whole))[:300]  # enough for several threads
    rows = starter_library.strong_lines("x-ray").row[asked].tolist()
    some = starter_library.line_table("x-ray", rows)
    assert list(some.phase_ids) == [whole.phase_ids[i] for i in asked]
    for here, there in enumerate(asked):
        own = slice(*some.offsets[here : here + 2])
        np.testing.assert_array_equal(
            some.f2[own], whole.f2[slice(*whole.offsets[there : there + 2])]
        )
    with pytest.raises(LibraryError, match="phase 99999 is missing"):
        starter_library.line_table("x-ray", [1, 99999])


def _damaged(path: Path) -> None:
    with Library.create(path) as library:
        library.add_crystals(islice(starter_crystals(), 20))
    data = bytearray(path.read_bytes())
    data[4096:] = b"\xa5" * (len(data) - 4096)
    path.write_bytes(data)


def _other_database(path: Path) -> None:
    with sqlite3.connect(path) as conn:
        conn.execute("CREATE TABLE phase (day TEXT, moon TEXT)")
    conn.close()


def _newer(path: Path) -> None:
    Library.create(path).close()
    with sqlite3.connect(path) as conn:
        conn.execute("UPDATE meta SET value = '99' WHERE key = 'schema_version'")
    conn.close()


REFUSED: dict[str, tuple[Callable[[Path], object], str]] = {
    "missing": (lambda _: None, "there is no library.*phaseid library add"),
    "folder": (Path.mkdir, "a folder.*--library"),
    "text": (lambda p: p.write_text("rings"), "not a library of phaseid.*--library"),
    "empty file": (Path.touch, "not a library of phaseid"),
    "other database": (_other_database, "SQLite file but no library of phaseid"),
    "newer": (_newer, f"schema version 99.*up to {SCHEMA_VERSION}.*Update phaseid"),
    "damaged": (_damaged, "damaged.*Restore a copy"),
}


@pytest.mark.parametrize("kind", REFUSED)
def test_what_is_no_library_is_refused_in_words(tmp_path: Path, kind: str) -> None:
    make, message = REFUSED[kind]
    path = tmp_path / "it.sqlite"
    make(path)
    before = path.read_bytes() if path.is_file() else None
    with pytest.raises(LibraryError, match=message) as caught:
        Library.open(path).phases()
    assert str(path) in str(caught.value)
    assert caught.value.exit_code == 3
    assert (path.read_bytes() if path.is_file() else None) == before


def test_nothing_is_created_over_a_file_or_in_no_folder(tmp_path: Path) -> None:
    path = tmp_path / "mine.txt"
    path.write_text("notes")
    with pytest.raises(LibraryError, match="a file already"):
        Library.create(path)
    assert path.read_text() == "notes"
    with pytest.raises(LibraryError, match=r"the folder .* does not exist"):
        Library.create(tmp_path / "no" / "lib.sqlite")
    assert sorted(p.name for p in tmp_path.iterdir()) == ["mine.txt"]


def test_a_phase_id_that_is_not_there(library: Library) -> None:
    for ask in (library.phase, library.crystal, library.lines):
        with pytest.raises(InputError, match=r"no phase with the id 'Al-00000000'.*library find"):
            ask("Al-00000000")


@contextmanager
def _as_another_user(folder: Path) -> Iterator[None]:
    """Give up root's rights for a while; `folder` and what leads to it stay readable."""
    mine = [p for p in (folder, *folder.parents) if p.stat().st_uid == 0 and len(p.parts) > 2]
    modes = [(p, p.stat().st_mode) for p in mine]
    for one in mine:
        one.chmod(0o755)
    os.seteuid(NOBODY)
    try:
        yield
    finally:
        os.seteuid(0)
        for one, mode in modes:
            one.chmod(mode)


@pytest.mark.skipif(os.name != "posix" or os.geteuid() != 0, reason="only root can act as another")
def test_who_may_not_write_reads_and_is_told(tmp_path: Path, write_cif: WriteCif) -> None:
    shelf = tmp_path / "shelf"
    shelf.mkdir()
    path = shelf / "lib.sqlite"
    with Library.create(path) as library:
        library.add([write_cif("MgO.cif", "MgO")])
        library.line_table("electron")  # whatever it loads is loaded now
    path.chmod(0o444)
    with _as_another_user(shelf), Library.open(path) as library:
        assert [phase.formula for phase in library.find("MgO")] == ["MgO"]
        assert len(library.line_table("electron")) == 1
        with pytest.raises(LibraryError, match=r"lib\.sqlite: the library cannot be written"):
            library.add([])
        with pytest.raises(LibraryError, match=r"new\.sqlite: permission denied\. Check"):
            Library.create(shelf / "new.sqlite")
        assert len(library) == 1  # still open


@pytest.mark.skipif(os.name != "posix" or os.geteuid() != 0, reason="only root can act as another")
def test_a_library_left_by_a_killed_writer_on_a_read_only_shelf(
    tmp_path: Path, write_cif: WriteCif
) -> None:
    shelf = tmp_path / "shelf"
    shelf.mkdir()
    path = shelf / "lib.sqlite"
    Library.create(path).close()
    conn = connection.open_for_writing(path)
    try:
        conn.execute("UPDATE meta SET value = 'x' WHERE key = 'created_by'")
        (tmp_path / "copy").mkdir()
        for part in shelf.iterdir():  # as a killed writer leaves them: journal, no index of it
            if not part.name.endswith("-shm"):
                shutil.copy(part, tmp_path / "copy" / part.name)
    finally:
        conn.close()
    left = tmp_path / "copy" / path.name
    with _as_another_user(left.parent), pytest.raises(LibraryError, match="cannot be"):
        Library.open(left)
    with Library.open(left) as library:  # who may write there mends it by opening
        assert library.info()["created_by"] == "phaseid x"


KILLED = """
import sys
from pathlib import Path
from phaseid.library import Library, adding
adding._BATCH = 5
print("go", flush=True)
with Library.open(sys.argv[1]) as library:
    library.add([Path(sys.argv[2])])
"""


@pytest.mark.skipif(os.name != "posix", reason="needs SIGKILL")
def test_killed_at_any_moment_the_library_is_sound(tmp_path: Path) -> None:
    folder = tmp_path / "cif"
    folder.mkdir()
    for number in range(400):
        text = rock_salt("NaCl", round(5 + number / 400, 4))
        (folder / f"{number:03}.cif").write_text(text)
    path = tmp_path / "lib.sqlite"
    Library.create(path).close()
    held = [0]
    for wait_s in (0.02, 0.1, 0.2, 0.35):
        process = subprocess.Popen(
            [sys.executable, "-c", KILLED, str(path), str(folder)], stdout=subprocess.PIPE
        )
        assert process.stdout is not None
        process.stdout.readline()
        time.sleep(wait_s)
        process.send_signal(signal.SIGKILL)
        process.wait()
        process.stdout.close()
        with Library.open(path) as library:
            held.append(len(library))
            _assert_sound(library)
    assert held == sorted(held)  # nothing that was added went away again
    with Library.open(path) as library:
        tally = library.add([folder])
        assert tally.added == 400 - held[-1]
        assert tally.unchanged == held[-1]
        _assert_sound(library)
    with Library.create(tmp_path / "whole.sqlite") as whole:
        whole.add([folder])
        with Library.open(path) as library:
            assert library.digest == whole.digest


def _assert_sound(library: Library) -> None:
    conn = connection.open_for_reading(library.path)
    try:
        assert conn.execute("PRAGMA integrity_check").fetchone() == ("ok",)
        counts = [
            conn.execute(f"SELECT count(*) FROM {table}").fetchone()[0]
            for table in ("phase", "structure", "lines", "seen")
        ]
        assert len(set(counts)) == 1
        contents = [row[0] for row in conn.execute("SELECT content FROM phase")]
    finally:
        conn.close()
    total = sum(int(content[:32], 16) for content in contents) % 2**128
    assert library.digest == f"{total:032x}"
    assert len(library.line_table("neutron")) == len(contents)


def test_a_reader_reads_on_while_somebody_adds(tmp_path: Path, write_cif: WriteCif) -> None:
    path = tmp_path / "lib.sqlite"
    with Library.create(path) as writer, Library.open(path) as reader:
        writer.add([write_cif("a.cif", "MgO")])
        assert [phase.formula for phase in reader.phases()] == ["MgO"]
        writer.add([write_cif("b.cif", "NaCl")])
        assert len(reader) == len(writer) == 2


def test_a_copied_library_is_whole(library: Library, tmp_path: Path, write_cif: WriteCif) -> None:
    library.add([write_cif("a.cif", "MgO")])
    shutil.copy(library.path, tmp_path / "copy.sqlite")  # the file alone, no journal beside it
    with Library.open(tmp_path / "copy.sqlite") as copy:
        assert copy.phases() == library.phases()


def test_schema_steps_are_applied_once_and_whole(tmp_path: Path) -> None:
    path = tmp_path / "old.sqlite"
    Library.create(path).close()

    def second(db: object) -> None:
        db.table("second").create({"id": int}, pk="id")  # type: ignore[attr-defined]

    def third(db: object) -> None:
        db.table("third").create({"id": int}, pk="id")  # type: ignore[attr-defined]

    def broken(db: object) -> None:
        db.table("fourth").create({"id": int}, pk="id")  # type: ignore[attr-defined]
        raise RuntimeError("halfway")

    conn = sqlite3.connect(path, isolation_level=None)
    try:
        assert apply_steps(conn) == 0
        assert apply_steps(conn, (*STEPS, ("second", second))) == 1
        assert stored_version(conn) == SCHEMA_VERSION + 1
        further = (("third", third), ("fourth", broken))
        with pytest.raises(RuntimeError, match="halfway"):  # and the one before it with it
            apply_steps(conn, (*STEPS, ("second", second), *further))
        tables = {row[0] for row in conn.execute("SELECT name FROM sqlite_master")}
        assert "second" in tables
        assert not {"third", "fourth"} & tables
        assert stored_version(conn) == SCHEMA_VERSION + 1
    finally:
        conn.close()


def test_an_older_library_is_brought_up_to_date(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    path = tmp_path / "old.sqlite"
    Library.create(path).close()

    def second(db: object) -> None:
        db.table("second").create({"id": int}, pk="id")  # type: ignore[attr-defined]

    steps = (*STEPS, ("second", second))
    monkeypatch.setattr(connection, "SCHEMA_VERSION", len(steps))
    monkeypatch.setattr(
        connection, "apply_steps", lambda conn, **more: apply_steps(conn, steps, **more)
    )
    with Library.open(path) as library:
        assert library.info()["schema_version"] == len(steps)


def test_looking_up_loads_no_heavy_library(starter_library_path: Path) -> None:
    script = (
        "import sys; from phaseid.library import Library\n"
        "with Library.open(sys.argv[1]) as library:\n"
        "    assert library.choose('corundum').formula == 'Al2O3'\n"
        "    library.info()\n"
        "heavy = {'numpy', 'gemmi', 'sqlite_utils', 'pandas', 'platformdirs', 'rich', 'spglib'}\n"
        "print(sorted(heavy & sys.modules.keys()))\n"
    )
    done = subprocess.run(
        [sys.executable, "-c", script, str(starter_library_path)],
        capture_output=True, text=True, check=True,
    )  # fmt: skip
    assert done.stdout.strip() == "[]"
