"""Sharing the work of adding: whoever reads the files, the library is the same."""

from __future__ import annotations

import json
import os
import signal
import subprocess
import sys
import threading
from collections.abc import Callable, Iterator
from concurrent.futures import Executor, Future, ThreadPoolExecutor
from importlib.util import find_spec
from multiprocessing import active_children
from pathlib import Path
from typing import Any

import pytest

from phaseid.errors import InputError
from phaseid.library import Library, sharing
from phaseid.library.adding import work
from phaseid.library.cluster import cluster
from phaseid.library.outcome import Outcome
from phaseid.library.sources import StructureFile
from tests.library.rock_salts import rock_salt

WriteCif = Callable[..., Path]


@pytest.fixture(scope="module")
def folder(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """200 rock salts, a file that is none and one whose entry comes twice."""
    made = tmp_path_factory.mktemp("many")
    for number in range(200):
        text = rock_salt("NaCl", round(5 + number / 300, 4), cod=str(9_000_000 + number // 2))
        (made / f"{number:03}.cif").write_text(text)
    (made / "no.cif").write_text("nothing")
    return made


@pytest.fixture(scope="module")
def serial(folder: Path, tmp_path_factory: pytest.TempPathFactory) -> dict[str, Any]:
    """What one process makes of the folder."""
    with Library.create(tmp_path_factory.mktemp("serial") / "lib.sqlite") as library:
        tally = library.add([folder])
        return {"tally": tally, "digest": library.digest, "phases": library.phases()}


def _assert_same(library: Library, tally: object, serial: dict[str, Any]) -> None:
    assert tally == serial["tally"]
    assert library.digest == serial["digest"]
    assert library.phases() == serial["phases"]


class Backwards(Executor):
    """Finishes what it holds last come, first served, in a thread: results out of order."""

    def __init__(self) -> None:
        self._held: list[Callable[[], None]] = []
        self._lock = threading.Lock()

    def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
        future: Future[Any] = Future()

        def run() -> None:
            future.set_result(fn(*args, **kwargs))

        with self._lock:
            self._held.append(run)
        threading.Timer(0.02, self._pop).start()
        return future

    def _pop(self) -> None:
        with self._lock:
            run = self._held.pop()
        run()


@pytest.mark.parametrize("make", [lambda: ThreadPoolExecutor(3), Backwards], ids=["threads", "odd"])
def test_any_executor_gives_what_one_process_gives(
    make: Callable[[], Executor], library: Library, folder: Path, serial: dict[str, Any]
) -> None:
    with make() as executor:
        tally = library.add([folder], executor=executor)
    _assert_same(library, tally, serial)


def test_an_executor_of_ours_stays_open(library: Library, folder: Path) -> None:
    with ThreadPoolExecutor(1) as executor:
        library.add([folder], executor=executor)
        assert executor.submit(int, "7").result() == 7


def test_files_on_their_way_are_bounded(library: Library, folder: Path) -> None:
    class Counting(ThreadPoolExecutor):
        flying = most = 0

        def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
            self.flying += 1
            self.most = max(self.most, self.flying)
            future = super().submit(fn, *args, **kwargs)
            future.result()
            return future

    with Counting(1) as executor:
        reading = sharing.shared(work, _files(4000), workers=1, executor=executor)
        for _ in range(32):
            next(reading)
        assert executor.most <= 18  # of 125 chunks
        reading.close()
    assert folder.is_dir()


def _files(count: int) -> Iterator[StructureFile]:
    for number in range(count):
        yield StructureFile(str(number), str(number), b"none")


def test_large_files_travel_in_small_chunks() -> None:
    big = [StructureFile(str(n), "x.cif", b"." * (3 << 20)) for n in range(4)]
    small = list(_files(70))
    chunks = list(sharing.bundles([*big, *small], 32, 4 << 20, sharing.bytes_of))
    assert [len(chunk) for chunk in chunks] == [2, 2, 32, 32, 6]


def test_a_bundle_does_not_wait_for_long(monkeypatch: pytest.MonkeyPatch) -> None:
    now = iter(range(1000))
    monkeypatch.setattr("phaseid.library.sharing.time.monotonic", lambda: float(next(now)))
    bundles = list(sharing.bundles(range(10), 500, 500, lambda _: 0, longest_s=3.0))
    assert [len(bundle) for bundle in bundles] == [3, 3, 3, 1]


def test_who_goes_away_is_told(library: Library, folder: Path) -> None:
    executor = ThreadPoolExecutor(1)
    executor.shutdown()
    with pytest.raises(InputError, match=r"the workers take no more files.*What was added is kept"):
        library.add([folder], executor=executor)
    assert len(library) == 0


def test_a_worker_of_another_version_is_told(library: Library, folder: Path) -> None:
    class Older(ThreadPoolExecutor):
        def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
            return super().submit(fn, *args[:2], "0.0.1")

    with Older(1) as executor, pytest.raises(InputError, match=r"this is phaseid 0\.0\.1.*same"):
        library.add([folder], executor=executor)


def test_a_worker_without_phaseid_is_told(library: Library, folder: Path) -> None:
    def lost(*_: object) -> None:
        raise ModuleNotFoundError("No module named 'phaseid'")

    class Bare(ThreadPoolExecutor):
        def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
            return super().submit(lost)

    with (
        Bare(1) as executor,
        pytest.raises(InputError, match=r"cannot load phaseid.*every"),
    ):
        library.add([folder], executor=executor)


def _deadly(found: StructureFile) -> Outcome:
    """Read a file, or die of it as the kernel lets a process die that takes too much memory."""
    if found.file == "deadly.cif":
        os.kill(os.getpid(), signal.SIGKILL)
    return work(found)


@pytest.mark.skipif(os.name != "posix", reason="needs SIGKILL")
def test_a_file_that_kills_its_reader_is_refused_and_no_other() -> None:
    files = [
        StructureFile(name, name, rock_salt("NaCl", 5 + number / 100).encode())
        for number, name in enumerate(["a.cif", "b.cif", "deadly.cif", "c.cif"])
    ]
    outcomes = list(sharing.shared(_deadly, files, workers=2))  # type: ignore[arg-type]
    assert [outcome.location for outcome in outcomes] == [one.location for one in files]
    assert [len(outcome.entries) for outcome in outcomes] == [1, 1, 0, 1]
    (reject,) = outcomes[2].rejects
    assert reject.code == "worker_killed"
    assert "was killed" in reject.reason


@pytest.mark.skipif(os.name != "posix", reason="needs SIGKILL")
def test_a_worker_killed_on_the_way_costs_nothing(
    library: Library, folder: Path, serial: dict[str, Any]
) -> None:
    killed: list[int] = []

    def kill(done: int, _total: int | None) -> None:
        if done in (1, 120):
            victim = active_children()[0].pid
            assert victim is not None
            os.kill(victim, signal.SIGKILL)
            killed.append(victim)

    tally = library.add([folder], kill, workers=2)
    assert len(set(killed)) == 2
    _assert_same(library, tally, serial)


@pytest.mark.skipif(os.name != "posix", reason="needs SIGKILL")
def test_what_a_hired_worker_loses_is_read_again(
    library: Library, folder: Path, serial: dict[str, Any]
) -> None:
    class Dying(ThreadPoolExecutor):
        """Every third chunk comes to nothing, as when a machine goes down."""

        sent = 0

        def submit(self, fn: Callable[..., Any], /, *args: Any, **kwargs: Any) -> Future[Any]:
            self.sent += 1
            if self.sent % 3:
                return super().submit(fn, *args, **kwargs)
            lost: Future[Any] = Future()
            lost.set_exception(ConnectionResetError("worker lost"))
            return lost

    with Dying(2) as executor:
        tally = library.add([folder], executor=executor)
    _assert_same(library, tally, serial)


UNGUARDED = """
import sys
from phaseid.library import Library
Library.create(sys.argv[1]).add([sys.argv[2]], workers=2)
"""


def test_a_script_that_forgets_its_guard_is_told(tmp_path: Path, folder: Path) -> None:
    script = tmp_path / "script.py"
    script.write_text(UNGUARDED)
    done = subprocess.run(
        [sys.executable, str(script), str(tmp_path / "lib.sqlite"), str(folder)],
        capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode != 0
    assert "no worker process can be started" in done.stderr
    with Library.open(tmp_path / "lib.sqlite") as library:
        assert (len(library), library.rejects()) == (0, [])


CLUSTER = """
import json, os, signal, subprocess, sys
from distributed import Client, LocalCluster
from phaseid.library import Library
from phaseid.library.cluster import cluster

def main():
    kinds = dict(n_workers=3, threads_per_worker=1, processes=True, dashboard_address=None)
    with LocalCluster(**kinds) as local:
        seen = {}
        with Client(local, set_as_default=False) as client:
            victim = next(iter(client.run(os.getpid).values()))
            before = set(client.scheduler_info()["workers"])

        def kill(done, total):
            if done == 40:
                os.kill(victim, signal.SIGKILL)

        with Library.create(sys.argv[1]) as library, cluster(local.scheduler_address) as (e, n):
            tally = library.add([sys.argv[3]], kill, executor=e, workers=n)
            said = {"workers": n, "digest": library.digest, "tally": tally.summary()}
        try:
            os.kill(victim, 0)
            said["killed"] = False
        except ProcessLookupError:
            said["killed"] = True
        done = subprocess.run([sys.executable, "-m", "phaseid", "library", "add", sys.argv[3],
            "--library", sys.argv[2], "--scheduler", local.scheduler_address, "--json"],
            capture_output=True, text=True)
        said |= {"exit": done.returncode, "stderr": done.stderr, "stdout": done.stdout}
        print(json.dumps(said))

if __name__ == "__main__":
    main()
"""


@pytest.mark.skipif(find_spec("distributed") is None, reason="phaseid[cluster] is not installed")
@pytest.mark.skipif(os.name != "posix", reason="needs SIGKILL")
def test_a_cluster_that_loses_a_worker_gives_what_one_process_gives(
    tmp_path: Path, folder: Path, serial: dict[str, Any]
) -> None:
    script = tmp_path / "script.py"
    script.write_text(CLUSTER)
    done = subprocess.run(
        [sys.executable, str(script), *(str(tmp_path / n) for n in "12"), str(folder)],
        capture_output=True, text=True, check=False, timeout=120, cwd=tmp_path,
    )  # fmt: skip
    assert done.returncode == 0, done.stderr
    said = json.loads(done.stdout)
    assert (said["workers"], said["killed"]) == (3, True)
    assert said["digest"] == serial["digest"]
    assert said["tally"] == serial["tally"].summary()
    assert said["exit"] == 0, said["stderr"]
    assert json.loads(said["stdout"]) == serial["tally"].as_json()
    with Library.open(tmp_path / "2") as library:
        assert library.digest == serial["digest"]


def test_a_scheduler_without_the_extra_is_told(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setitem(sys.modules, "distributed", None)
    with pytest.raises(InputError, match=r"pip install 'phaseid\[cluster\]'"), cluster("tcp://x:1"):
        pass
