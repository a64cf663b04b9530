"""Adding structures: each file becomes rows by itself, one writer puts them into the library.

`work` is a pure function of a file's bytes, so processes can share it; rows arrive in the order of
the files whoever made them, and are written a batch per transaction. Killed at any moment, the
library holds what the last whole batch left.
"""

from __future__ import annotations

import sqlite3
from collections import deque
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Future, ProcessPoolExecutor
from itertools import count, islice
from multiprocessing import get_context
from pathlib import Path
from typing import TypeVar

from phaseid.crystal.crystal import Crystal
from phaseid.library.entries import Entry, entry
from phaseid.library.sources import Found, StructureFile, count_structure_files, read_all
from phaseid.library.tally import ImportTally, Rejected
from phaseid.library.writer import Writer

Progress = Callable[[int, int | None], None]
Outcome = tuple[list[Entry], list[Rejected], str]
"""What one file gave: its entries, what was refused, and where the file lies."""

T = TypeVar("T")

_BATCH = 500  # files a transaction
_CHUNK = 32  # files a message to a worker process


def work(found: Found) -> Outcome:
    """Turn one structure file into rows. Never raises: what fails is in the rejects."""
    from phaseid.crystal.cif import read_cif

    if isinstance(found, Rejected):
        return [], [found], found.location
    reading = read_cif(found.data, found.file)
    rejects = [
        Rejected(found.location, found.file, reject.block, reject.code, reject.reason)
        for reject in reading.rejects
    ]
    entries = []
    for number, crystal in enumerate(reading.crystals):
        location = found.location if number == 0 else f"{found.location}#{number + 1}"
        made = _made(crystal, location, found)
        if isinstance(made, Entry):
            entries.append(made)
        else:
            rejects.append(made)
    return entries, rejects, found.location


def _made(crystal: Crystal, location: str, found: StructureFile | None = None) -> Entry | Rejected:
    file = crystal.source.file if found is None else found.file
    try:
        made = entry(crystal, location)
    except Exception as error:  # one structure that breaks the arithmetic must not stop the others
        reason = f"the lines cannot be computed ({type(error).__name__}: {error})"
        return Rejected(location, file, "", "no_lines", reason)
    if not made.lines:
        return Rejected(location, file, "", "no_lines", "the structure has no lines above 0.6 Å")
    return made


def add_paths(
    conn: sqlite3.Connection, paths: list[Path], progress: Progress | None, *, workers: int = 1
) -> ImportTally:
    """Add every structure file in `paths`; see `Library.add`."""
    total = None if progress is None else count_structure_files(paths)
    return _write(conn, _outcomes(read_all(paths), workers), progress, total)


def add_crystals(
    conn: sqlite3.Connection, crystals: Iterable[Crystal], progress: Progress | None
) -> ImportTally:
    """Add crystals that are already read; see `Library.add_crystals`."""

    def outcomes() -> Iterator[Outcome]:
        for crystal in crystals:
            made = _made(crystal, "")
            yield ([made], [], "") if isinstance(made, Entry) else ([], [made], "")

    return _write(conn, outcomes(), progress, None)


def _write(
    conn: sqlite3.Connection,
    outcomes: Iterable[Outcome],
    progress: Progress | None,
    total: int | None,
) -> ImportTally:
    writer = Writer(conn)
    done = count(1)

    def counted() -> Iterator[Outcome]:
        for outcome in outcomes:
            yield outcome
            if progress is not None:
                progress(next(done), total)

    for batch in _batches(counted(), _BATCH):
        writer.write(batch)
    return writer.tally


def _outcomes(found: Iterator[Found], workers: int) -> Iterator[Outcome]:
    """Yield what `work` makes of each file, in order, with at most a few chunks in flight."""
    if workers <= 1:
        yield from map(work, found)
        return
    flying: deque[Future[list[Outcome]]] = deque()
    with ProcessPoolExecutor(workers, mp_context=get_context("spawn")) as pool:
        for chunk in _batches(found, _CHUNK):
            flying.append(pool.submit(_work_all, chunk))
            if len(flying) > 2 * workers:
                yield from flying.popleft().result()
        while flying:
            yield from flying.popleft().result()


def _work_all(chunk: list[Found]) -> list[Outcome]:
    return [work(found) for found in chunk]


def _batches(items: Iterable[T], size: int) -> Iterator[list[T]]:
    rest = iter(items)
    while batch := list(islice(rest, size)):
        yield batch
