"""Libraries of older versions: brought up to date whole or not at all, the old file kept.

The libraries in `stored` were made by phaseid of their schema versions (1 and 2 by 0.1.0, 3 by
0.2.0) from four rock salts of `rock_salts` and a file that is broken.
"""

from __future__ import annotations

import os
import shutil
import sqlite3
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from phaseid.errors import LibraryError
from phaseid.library import Library, connection
from phaseid.library.schema import SCHEMA_VERSION, STEPS, apply_steps
from tests.library.dying import die, dies
from tests.library.rock_salts import rock_salt

STORED = Path(__file__).parent / "stored"
FLOOR_BEFORE = 1.002e-3  # up to version 3 weaker lines of a kind of probe were left out
DIGEST = "bef4d2f912a626b03bbff7bb0585fc28"  # that phaseid 0.1.0 printed
HELD = {"MgO": ("Periclase", "9000001"), "NaCl": ("Halite", "9000629"),
        "KCl": ("Sylvite", ""), "CaO": ("Lime", "")}  # fmt: skip


@pytest.fixture(params=range(1, SCHEMA_VERSION))
def version(request: pytest.FixtureRequest) -> int:
    """Each schema version there was."""
    return int(request.param)


def copy_of(version: int, path: Path) -> Path:
    """A copy of the stored library of a version."""
    return Path(shutil.copy(STORED / f"version_{version}.sqlite", path))


@pytest.fixture
def old(version: int, tmp_path: Path) -> Path:
    """A library of an older version."""
    return copy_of(version, tmp_path / "old.sqlite")


@pytest.fixture
def anew(tmp_path: Path) -> Library:
    """The same structures, added by this version."""
    folder = tmp_path / "structures"
    folder.mkdir()
    for formula, (name, number) in HELD.items():
        (folder / f"{formula}.cif").write_text(rock_salt(formula, name=name, cod=number))
    library = Library.create(tmp_path / "anew.sqlite")
    library.add([folder])
    return library


def _assert_whole(path: Path, anew: Library) -> None:
    with Library.open(path) as library, anew:
        assert library.info()["schema_version"] == SCHEMA_VERSION
        assert library.digest == anew.digest == DIGEST
        assert [reject["file"] for reject in library.rejects()] == ["broken.cif"]
        by_id = {phase.phase_id: phase for phase in library.phases()}
        assert by_id == {phase.phase_id: phase for phase in anew.phases()}
        for phase_id in by_id:
            assert library.crystal(phase_id) == anew.crystal(phase_id)
        for name, number in HELD.values():
            assert [phase.name for phase in library.find(name)] == [name]
            assert not number or library.choose(number).name == name
        for kind in ("x-ray", "electron", "neutron"):
            mine, new = library.line_table(kind), anew.line_table(kind)
            order = [mine.phase_ids.index(phase_id) for phase_id in new.phase_ids]
            for at, i in enumerate(order):
                f2 = mine.f2[mine.offsets[i] : mine.offsets[i + 1]]
                own = slice(*new.offsets[at : at + 2])
                strength = new.f2[own] * new.multiplicity[own] * new.d_A[own] ** 2
                held = strength >= FLOOR_BEFORE * strength.max()
                np.testing.assert_allclose(f2[held], new.f2[own][held], rtol=2e-3)
            assert len(library.strong_lines(kind)) == 4
    conn = sqlite3.connect(path)
    assert conn.execute("PRAGMA integrity_check").fetchone() == ("ok",)
    conn.close()


def test_an_old_library_is_brought_up_to_date(old: Path, version: int, anew: Library) -> None:
    before = old.read_bytes()
    told: list[str] = []
    Library.open(old, told.append).close()
    _assert_whole(old, anew)
    (copy,) = old.parent.glob(f"old.sqlite.schema-{version}*")
    assert copy.read_bytes()[100:] == before[100:]  # all but SQLite's own counters
    assert len(told) == 1
    assert copy.name in told[0]
    assert {path.name for path in old.parent.iterdir()} == {
        "old.sqlite", copy.name, "anew.sqlite", "structures",
    }  # fmt: skip


def test_adding_to_an_old_library(old: Path, anew: Library, write_cif: Callable[..., Path]) -> None:
    anew.close()
    with Library.open(old) as library:
        again = library.add([old.parent / "structures"])
        assert (again.added, again.unchanged) == (0, 4)
        assert library.add([write_cif("LiF.cif", "LiF")]).added == 1


def test_an_upgraded_library_is_sealed_and_not_upgraded_again(old: Path) -> None:
    Library.open(old).close()
    data = old.read_bytes()
    assert data[60:64] != bytes(4)
    Library.open(old).close()
    assert old.read_bytes() == data
    assert len(list(old.parent.glob("*schema*"))) == 1


@pytest.mark.skipif(not hasattr(os, "fork"), reason="needs fork")
def test_killed_during_the_upgrade_nothing_is_lost(old: Path, version: int, anew: Library) -> None:
    """Killed at every so many statements, then opened again."""
    killed = 0
    for number in range(1, 400 // version**2, 25 // version):
        path = copy_of(version, old.parent / f"{number}.sqlite")

        def upgrade(path: Path = path, number: int = number) -> None:
            left = [number]

            def count(_: str) -> None:
                left[0] -= 1
                if left[0] == 0:
                    die()

            def counted(conn: sqlite3.Connection, **more: Any) -> int:
                conn.set_trace_callback(count)
                return apply_steps(conn, **more)

            connection.apply_steps = counted
            Library.open(path)

        killed += dies(upgrade)
        _assert_whole(path, anew)
        anew = Library.open(anew.path)
        copies = sorted(old.parent.glob(f"{number}.sqlite.schema-*"))
        first = sqlite3.connect(copies[0])
        facts = dict(first.execute("SELECT key, value FROM meta"))
        assert (facts["schema_version"], facts["digest"]) == (str(version), DIGEST)
        first.close()
    assert killed >= 4
    anew.close()


@pytest.mark.skipif(not hasattr(os, "fork"), reason="needs fork")
def test_killed_while_the_copy_is_made_the_old_file_stands(
    old: Path, anew: Library, monkeypatch: pytest.MonkeyPatch
) -> None:
    class Dying(sqlite3.Connection):
        def backup(self, target: sqlite3.Connection, **_: object) -> None:  # type: ignore[override]
            super().backup(target, pages=3, progress=lambda *_: die())

    connect = sqlite3.connect

    def upgrade() -> None:
        monkeypatch.setattr(sqlite3, "connect", lambda *a, **k: connect(*a, **k, factory=Dying))
        Library.open(old)

    assert dies(upgrade)
    assert list(old.parent.glob("*.schema-?")) == []
    _assert_whole(old, anew)


def test_an_old_library_that_cannot_be_written_is_told(
    old: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    def full(_: sqlite3.Connection, **__: Any) -> int:
        raise sqlite3.OperationalError("database or disk is full")

    monkeypatch.setattr(connection, "apply_steps", full)
    with pytest.raises(LibraryError, match="the disk is full"):
        Library.open(old)
    monkeypatch.undo()
    with Library.open(old) as library:
        assert library.digest == DIGEST


@pytest.mark.parametrize("version", [1], indirect=True)
def test_two_at_once_upgrade_once(old: Path, anew: Library) -> None:
    command = [sys.executable, "-m", "phaseid", "library", "info", "--library", str(old)]
    both = [subprocess.Popen(command, stderr=subprocess.PIPE, stdout=subprocess.PIPE, text=True)
            for _ in range(2)]  # fmt: skip
    said = [process.communicate() for process in both]
    assert [process.returncode for process in both] == [0, 0], said
    assert all(DIGEST in out for out, _ in said)
    _assert_whole(old, anew)


@pytest.mark.parametrize("version", [1], indirect=True)
def test_a_newer_library_is_refused_by_the_command_line(old: Path) -> None:
    conn = sqlite3.connect(old)
    conn.execute("UPDATE meta SET value = '99' WHERE key = 'schema_version'")
    conn.commit()
    conn.close()
    before = old.read_bytes()
    for command in (["info"], ["find", "MgO"], ["add", str(STORED)]):
        done = subprocess.run(
            [sys.executable, "-m", "phaseid", "library", *command, "--library", str(old)],
            capture_output=True, text=True, check=False,
        )  # fmt: skip
        assert (done.returncode, done.stdout) == (3, "")
        assert f"schema version 99, this phaseid reads up to {SCHEMA_VERSION}" in done.stderr
        assert "Update phaseid" in done.stderr
    assert old.read_bytes() == before
    assert len(STEPS) == SCHEMA_VERSION
