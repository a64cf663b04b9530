"""A library with damaged bytes: told with exit code 3, never a wrong answer, never a traceback."""

from __future__ import annotations

import hashlib
import random
import shutil
import sqlite3
import subprocess
import sys
from collections.abc import Callable, Iterator
from itertools import islice
from pathlib import Path

import pytest

from phaseid.errors import InputError, LibraryError
from phaseid.library import Library, connection, seal
from phaseid.library.packing import KINDS
from phaseid.library.starter import starter_crystals
from tests.library.rock_salts import rock_salt

WriteCif = Callable[..., Path]
POSITIONS = 200
ASKED = ("iron", "Al2O3", "goethite", "no such phase", "COD 9000001", "Fe")


def _answers(path: Path) -> str:
    """Ask a library for everything it can answer; the digest of what it said."""
    said = hashlib.sha256()
    with Library.open(path) as library:
        phases = library.phases()
        said.update(repr((library.digest, len(library), phases, library.rejects())).encode())
        for text in ASKED:
            said.update(repr(library.find(text)).encode())
        for kind in KINDS:
            table, strong = library.line_table(kind), library.strong_lines(kind)
            for array in (table.hkl, table.f2, table.d_A, table.offsets, table.quality):
                said.update(array.tobytes())
            for array in (strong.row, strong.code, strong.level, strong.elements_mask):
                said.update(array.tobytes())
        for phase in phases:
            said.update(repr(library.crystal(phase.phase_id)).encode())
        said.update(library.lines(phases[0].phase_id).f2_xray.tobytes())
    return said.hexdigest()


@pytest.fixture(scope="module")
def sound(tmp_path_factory: pytest.TempPathFactory) -> tuple[bytes, str]:
    """The bytes of a small library, and what it answers."""
    path = tmp_path_factory.mktemp("sound") / "sound.sqlite"
    with Library.create(path) as library:
        library.add_crystals(islice(starter_crystals(), 0, 120, 5))
        no_cif = path.with_suffix(".cif")
        no_cif.write_text("no CIF")
        library.add([no_cif])
    return path.read_bytes(), _answers(path)


def _flipped(data: bytes, at: int, bit: int) -> bytes:
    return data[:at] + bytes([data[at] ^ 1 << bit]) + data[at + 1 :]


def test_no_flipped_bit_gives_a_wrong_answer(sound: tuple[bytes, str], tmp_path: Path) -> None:
    data, answer = sound
    chance = random.Random(1)
    places = [(chance.randrange(len(data)), chance.randrange(8)) for _ in range(POSITIONS)]
    places += [(at, at % 8) for at in range(100)]  # the header, byte by byte
    path = tmp_path / "flipped.sqlite"
    harmless, told = [], 0
    for at, bit in places:
        path.write_bytes(_flipped(data, at, bit))
        try:
            given = _answers(path)
        except LibraryError as error:
            told += str(path) in str(error)
            continue
        assert given == answer, f"bit {bit} of byte {at}"
        harmless.append(at)
    # counts of changes and the number of SQLite's version: nothing else is read from them
    assert set(harmless) <= {*range(24, 28), *range(68, 72), *range(92, 100)}
    assert told == len(places) - len(harmless)


def test_no_flipped_bit_of_a_file_without_a_seal_gives_a_traceback(
    sound: tuple[bytes, str], tmp_path: Path
) -> None:
    """As a killed writer leaves it; a bit in a name may then pass, a wrong error may not."""
    data = sound[0][:60] + bytes(4) + sound[0][64:]
    chance = random.Random(2)
    path = tmp_path / "flipped.sqlite"
    told = 0
    for _ in range(POSITIONS // 2):
        path.write_bytes(_flipped(data, chance.randrange(len(data)), chance.randrange(8)))
        try:
            _answers(path)
        except (LibraryError, InputError):
            told += 1
    assert told > POSITIONS / 20


def test_a_shortened_library_is_told(sound: tuple[bytes, str], tmp_path: Path) -> None:
    data, _ = sound
    path = tmp_path / "short.sqlite"
    for length in (0, 10, 99, 100, 4096, len(data) // 2, len(data) - 4096, len(data) - 1):
        path.write_bytes(data[:length])
        with pytest.raises(LibraryError):
            _answers(path)
    path.write_bytes(data + b"more")
    with pytest.raises(LibraryError, match="damaged"):
        _answers(path)


def test_a_damaged_library_is_not_added_to(
    sound: tuple[bytes, str], tmp_path: Path, write_cif: WriteCif
) -> None:
    path = tmp_path / "lib.sqlite"
    path.write_bytes(sound[0])
    with Library.open(path) as library:
        path.write_bytes(_flipped(sound[0], len(sound[0]) // 2, 3))
        before = path.read_bytes()
        with pytest.raises(LibraryError, match="damaged"):
            library.add([write_cif("MgO.cif", "MgO")])
        assert path.read_bytes() == before


def test_the_command_line_says_3(sound: tuple[bytes, str], tmp_path: Path) -> None:
    path = tmp_path / "lib.sqlite"
    path.write_bytes(_flipped(sound[0], len(sound[0]) // 3, 0))
    done = subprocess.run(
        [sys.executable, "-m", "phaseid", "library", "info", "--library", str(path)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert (done.returncode, done.stdout) == (3, "")
    assert "the library is damaged, its bytes are not those that were written" in done.stderr
    assert "Restore a copy" in done.stderr
    assert "Traceback" not in done.stderr


def _stored(path: Path) -> int:
    return int.from_bytes(path.read_bytes()[60:64], "big", signed=True)


def test_every_way_of_adding_seals(tmp_path: Path, write_cif: WriteCif) -> None:
    path = tmp_path / "lib.sqlite"
    seals = []
    with Library.create(path) as library:
        for formula in ("MgO", "NaCl", "KCl"):
            library.add([write_cif(f"{formula}.cif", formula)])
            seals.append(_stored(path))
        library.add([write_cif("again.cif", "KCl")])
    assert 0 not in seals
    assert len(set(seals)) == 3
    assert not seal.is_broken(path)
    with sqlite3.connect(path) as conn:  # any program that reads SQLite reads it, seal or not
        assert conn.execute("SELECT count(*) FROM phase").fetchone() == (3,)
    conn.close()
    assert not seal.is_broken(path)


def test_a_seal_is_broken_before_anything_changes(tmp_path: Path, write_cif: WriteCif) -> None:
    path = tmp_path / "lib.sqlite"
    with Library.create(path) as library:
        library.add([write_cif("MgO.cif", "MgO")])
    conn = connection.open_for_writing(path)
    try:
        assert _stored(path) == 0
        conn.execute("UPDATE meta SET value = 'x' WHERE key = 'created_by'")
        shutil.copy(path, tmp_path / "killed.sqlite")
        shutil.copy(f"{path}-wal", tmp_path / "killed.sqlite-wal")
        with Library.open(path) as reader:  # while somebody writes
            assert len(reader) == 1
    finally:
        connection.close_after_writing(conn, path)
    assert _stored(path) != 0
    with Library.open(tmp_path / "killed.sqlite") as left:
        assert left.info()["created_by"] == "phaseid x"
        left.add([write_cif("NaCl.cif", "NaCl")])
    assert _stored(tmp_path / "killed.sqlite") != 0


def test_what_another_program_writes_is_no_damage(
    sound: tuple[bytes, str], tmp_path: Path, write_cif: WriteCif
) -> None:
    """An index or a view of one's own, a VACUUM: the seal is void until phaseid writes again."""
    for statement in ("CREATE INDEX mine ON phase (density_g_cm3)", "VACUUM"):
        path = tmp_path / "lib.sqlite"
        path.write_bytes(sound[0])
        conn = sqlite3.connect(path, isolation_level=None)
        conn.execute(statement)
        conn.close()
        assert path.read_bytes()[100:] != sound[0][100:]
        assert _answers(path) == sound[1]
        with Library.open(path) as library:
            library.add([write_cif("MgO.cif", "MgO")])
        data = path.read_bytes()
        path.write_bytes(_flipped(data, len(data) // 2, 1))
        with pytest.raises(LibraryError, match="damaged"):
            Library.open(path)


def test_a_very_large_library_has_no_seal(
    sound: tuple[bytes, str], tmp_path: Path, write_cif: WriteCif, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(seal, "MOST_BYTES", 1000)
    path = tmp_path / "lib.sqlite"
    path.write_bytes(sound[0])
    with Library.open(path) as library:
        library.add([write_cif("MgO.cif", "MgO")])
    assert _stored(path) == 0


WRITES = """
import sys
from phaseid.library import Library
print("go", flush=True)
for number in range(2, len(sys.argv)):
    with Library.open(sys.argv[1]) as library:
        library.add([sys.argv[number]])
"""


@pytest.fixture
def writing(tmp_path: Path) -> Iterator[tuple[Path, subprocess.Popen[str]]]:
    """A library that another process opens, adds to and closes many times over."""
    path = tmp_path / "lib.sqlite"
    Library.create(path).close()
    files = []
    for number in range(20):
        files.append(str(tmp_path / f"{number}.cif"))
        Path(files[-1]).write_text(rock_salt("NaCl", 5 + number / 100))
    process = subprocess.Popen(
        [sys.executable, "-c", WRITES, str(path), *files], stdout=subprocess.PIPE, text=True
    )
    assert process.stdout is not None
    process.stdout.readline()
    yield path, process
    process.wait()
    process.stdout.close()


def test_a_file_that_is_being_written_is_not_called_damaged(
    writing: tuple[Path, subprocess.Popen[str]],
) -> None:
    path, process = writing
    held, opened = [0], 0
    while process.poll() is None:
        with Library.open(path) as library:
            held.append(len(library))
        opened += 1
    assert process.returncode == 0
    assert held == sorted(held)
    assert opened > 5
    with Library.open(path) as library:
        assert len(library) == 20
    assert not seal.is_broken(path)
