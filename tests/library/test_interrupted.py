"""Adding that is killed, stopped, starved of disk or done twice at once: nothing stored is lost."""

from __future__ import annotations

import json
import os
import random
import signal
import sqlite3
import subprocess
import sys
import time
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path
from typing import Any

import pytest

from phaseid.errors import LibraryError
from phaseid.library import Library, adding
from tests.library.dying import dies
from tests.library.rock_salts import rock_salt

KILLS = 50
FILES = 100
posix = pytest.mark.skipif(not hasattr(os, "fork"), reason="needs fork and signals")


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """FILES rock salts."""
    made = tmp_path_factory.mktemp("many")
    for number in range(FILES):
        (made / f"{number:03}.cif").write_text(rock_salt("NaCl", round(4 + number / 50, 4)))
    return made


@pytest.fixture(scope="module")
def undisturbed(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> str:
    """The digest of the folder added in one go."""
    with Library.create(tmp_path_factory.mktemp("whole") / "whole.sqlite") as library:
        library.add([folder])
        return library.digest


def _assert_sound(path: Path) -> int:
    """The file is sound, its parts belong together; returns how many phases it holds."""
    with Library.open(path) as library:
        held = len(library)
        assert len(library.phases()) == len(library.line_table("x-ray")) == held
        assert len(library.strong_lines("electron")) == held
        digest = library.digest
    conn = sqlite3.connect(path)
    try:
        assert conn.execute("PRAGMA integrity_check").fetchone() == ("ok",)
        contents = [row[0] for row in conn.execute("SELECT content FROM phase")]
        assert conn.execute("SELECT count(*) FROM seen").fetchone()[0] == held
    finally:
        conn.close()
    assert digest == f"{sum(int(content[:32], 16) for content in contents) % 2**128:032x}"
    return held


@posix
def test_killed_fifty_times_and_resumed(
    folder: Path, undisturbed: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """At random moments from the opening of the file to the middle of a batch."""
    monkeypatch.setattr(adding, "_BATCH", 3)
    path = tmp_path / "lib.sqlite"
    Library.create(path).close()
    chance = random.Random(3)
    held, killed = [0], 0

    def add() -> None:
        with Library.open(path) as library:
            library.add([folder])

    while killed < KILLS:
        if dies(add, after_s=chance.uniform(0.0, 0.1)):
            killed += 1
        held.append(_assert_sound(path))
        if held[-1] == FILES:  # all of it is in: begin anew
            held = [0]
            path.unlink()
            Library.create(path).close()
    assert held == sorted(held)  # nothing that was added went away again
    with Library.open(path) as library:
        tally = library.add([folder])
        assert (tally.added, tally.unchanged) == (FILES - held[-1], held[-1])
        assert library.digest == undisturbed
    assert _assert_sound(path) == FILES


def _command(*words: str | Path) -> list[str]:
    return [sys.executable, "-m", "phaseid", "library", *map(str, words)]


@posix
@pytest.mark.parametrize("jobs", ["1", "2"])
def test_ctrl_c_stops_cleanly_and_adding_goes_on(
    folder: Path, undisturbed: str, tmp_path: Path, jobs: str
) -> None:
    path = tmp_path / "lib.sqlite"
    process = subprocess.Popen(
        _command("add", folder, folder, folder, "--library", path, "--jobs", jobs),
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, start_new_session=True,
        preexec_fn=lambda: signal.signal(signal.SIGINT, signal.default_int_handler),
    )  # fmt: skip
    deadline = time.monotonic() + 60
    while not path.with_name("lib.sqlite-wal").exists():
        assert time.monotonic() < deadline
        time.sleep(0.01)
    os.killpg(process.pid, signal.SIGINT)  # as a terminal does: every process of the group
    said = process.communicate(timeout=60)
    leaving = process.returncode == -signal.SIGINT and "Traceback" not in said[1]
    if process.returncode == 0 or leaving:
        pytest.skip("this machine was done before it could be stopped")
    assert (process.returncode, said[0]) == (130, ""), said[1]
    assert said[1] == (
        f"A new library: {path}\n"
        "Stopped. What was added is kept; the same command goes on from there.\n"
    )
    _assert_sound(path)
    with Library.open(path) as library:
        library.add([folder])
        assert library.digest == undisturbed


@posix
def test_killed_with_its_workers_left_behind_they_end_too(folder: Path, tmp_path: Path) -> None:
    process = subprocess.Popen(
        _command("add", *[folder] * 20, "--library", tmp_path / "lib.sqlite", "--jobs", "2"),
        stderr=subprocess.PIPE, start_new_session=True,
    )  # fmt: skip
    assert process.stderr is not None
    deadline = time.monotonic() + 60
    while not list(tmp_path.glob("*-wal")):
        assert time.monotonic() < deadline
        time.sleep(0.01)
    time.sleep(1.0)
    process.kill()
    process.stderr.read()  # ends when no process of the group holds it any more
    process.stderr.close()
    process.wait()
    assert time.monotonic() < deadline


def _limited(path: Path, folder: Path, limit: int) -> subprocess.CompletedProcess[str]:
    """Add under a limit on the size of files, which the system answers like a bad disk."""
    script = (
        "import resource, sys; from phaseid.__main__ import start\n"
        f"resource.setrlimit(resource.RLIMIT_FSIZE, ({limit}, {limit}))\n"
        "start()\n"
    )
    return subprocess.run(
        [sys.executable, "-c", script, "library", "add", str(folder), "--library", str(path)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip


@posix
def test_a_limit_on_file_sizes_is_told_and_loses_nothing(
    folder: Path, undisturbed: str, tmp_path: Path
) -> None:
    path = tmp_path / "lib.sqlite"
    Library.create(path).close()
    done = _limited(path, folder, path.stat().st_size + 100_000)
    assert (done.returncode, done.stdout) == (3, "")
    assert "lib.sqlite: " in done.stderr
    assert "refused to write or read (disk I/O error). What was stored is kept" in done.stderr
    assert "Traceback" not in done.stderr
    _assert_sound(path)
    with Library.open(path) as library:
        library.add([folder])
        assert library.digest == undisturbed


@contextmanager
def _small_disk(where: Path, size: str) -> Iterator[None]:
    where.mkdir()
    made = subprocess.run(
        ["mount", "-t", "tmpfs", "-o", f"size={size}", "tmpfs", str(where)],
        capture_output=True, check=False,
    )  # fmt: skip
    if made.returncode:
        pytest.skip("no file system can be mounted here")
    try:
        yield
    finally:
        subprocess.run(["umount", str(where)], check=True)


@posix
@pytest.mark.parametrize("room", [-50_000, 50_000, 160_000])
def test_a_disk_that_is_really_full(
    folder: Path, undisturbed: str, tmp_path: Path, room: int
) -> None:
    """With so many bytes of room beside an empty library."""
    disk = tmp_path / "disk"
    Library.create(tmp_path / "empty.sqlite").close()
    size = (tmp_path / "empty.sqlite").stat().st_size + room
    with _small_disk(disk, str(size)):
        path = disk / "lib.sqlite"
        done = subprocess.run(
            _command("add", folder, "--library", path), capture_output=True, text=True, check=False
        )
        assert (done.returncode, done.stdout) == (3, "")
        assert "the disk is full. What was stored is kept; free some space" in done.stderr
        if path.exists():
            _assert_sound(path)
            subprocess.run(["mount", "-o", "remount,size=20m", str(disk)], check=True)
            with Library.open(path) as library:
                library.add([folder])
                assert library.digest == undisturbed


@posix
def test_two_processes_add_at_once(folder: Path, undisturbed: str, tmp_path: Path) -> None:
    path = tmp_path / "lib.sqlite"
    Library.create(path).close()
    both = [
        subprocess.Popen(_command("add", *order, "--library", path, "--jobs", "1", "--json"),
            stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
        for order in (sorted(folder.iterdir()), sorted(folder.iterdir(), reverse=True))
    ]  # fmt: skip
    said = [process.communicate(timeout=120) for process in both]
    assert [process.returncode for process in both] == [0, 0], said
    tallies: list[dict[str, Any]] = [json.loads(out) for out, _ in said]
    assert sum(tally["added"] for tally in tallies) == FILES
    assert all(tally["added"] + tally["unchanged"] == FILES for tally in tallies)
    assert _assert_sound(path) == FILES
    with Library.open(path) as library:
        assert library.digest == undisturbed


def test_order_and_number_of_workers_change_nothing(
    folder: Path, undisturbed: str, tmp_path: Path
) -> None:
    files = sorted(folder.iterdir())
    random.Random(4).shuffle(files)
    with Library.create(tmp_path / "lib.sqlite") as library:
        library.add(files, workers=3)
        assert library.digest == undisturbed


@posix
@pytest.mark.skipif(not hasattr(os, "geteuid") or os.geteuid() != 0, reason="needs root")
def test_a_read_only_file_system(folder: Path, tmp_path: Path) -> None:
    disk = tmp_path / "disk"
    with _small_disk(disk, "5m"):
        path = disk / "lib.sqlite"
        with Library.create(path) as library:
            library.add([next(folder.iterdir())])
        subprocess.run(["mount", "-o", "remount,ro", str(disk)], check=True)
        with Library.open(path) as library:
            assert len(library) == 1
            with pytest.raises(LibraryError, match="cannot be written"):
                library.add([folder])
            assert len(library.phases()) == 1
        with pytest.raises(LibraryError, match=r"new\.sqlite: .*(cannot be|read-only)"):
            Library.create(disk / "new.sqlite")
