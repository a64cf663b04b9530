"""Adding structures: each file becomes rows by itself, one writer puts them into the library.

`work` is a pure function of a file's bytes, so processes can share it; rows arrive in the order of
the files whoever made them, and are written a batch per transaction. Killed at any moment, the
library holds what the last whole batch left, and adding the same files again goes on from there.
"""

from __future__ import annotations

import os
import sqlite3
from collections.abc import Callable, Iterable, Iterator
from concurrent.futures import Executor
from contextlib import closing
from pathlib import Path

from phaseid.crystal.crystal import Crystal
from phaseid.library.entries import Entry, entry
from phaseid.library.gone import gone_from
from phaseid.library.outcome import Outcome
from phaseid.library.sharing import bundles, bytes_of, shared
from phaseid.library.sources import Found, count_structure_files, read_all
from phaseid.library.tally import ImportTally, Rejected
from phaseid.library.writer import Writer

Progress = Callable[[int, int | None], None]

_BATCH = 500  # files a transaction, at most
_BATCH_BYTES = 64 << 20  # of files that need not be read again
_BATCH_S = 5.0  # what a killed run loses, at most
_MANY = 2000  # files from which on several processes pay
_WORKERS_MAX = 8


def work(found: Found) -> Outcome:
    """Turn one structure file into rows. Never raises: what fails is in the rejects."""
    from phaseid.crystal.cif import read_cif

    if isinstance(found, Rejected):
        return Outcome(found.location, rejects=(found,))
    if found.known:
        return Outcome(found.location, file=found)
    try:
        reading = read_cif(found.data, found.file)
    except Exception as error:  # whatever a file holds, the next one must have its turn
        reason = f"the file cannot be read ({type(error).__name__}: {error})"
        return Outcome(
            found.location, rejects=(Rejected(found.location, found.file, "", "failed", reason),)
        )
    rejects = [
        Rejected(found.location, found.file, reject.block, reject.code, reject.reason)
        for reject in reading.rejects
    ]
    entries = []
    for number, crystal in enumerate(reading.crystals):
        location = found.location if number == 0 else f"{found.location}#{number + 1}"
        made = _made(crystal, location)
        if isinstance(made, Entry):
            entries.append(made)
        else:
            rejects.append(made)
    return Outcome(found.location, tuple(entries), tuple(rejects), found.digest)


def _made(crystal: Crystal, location: str) -> Entry | Rejected:
    file = crystal.source.file
    try:
        made = entry(crystal, location)
    except Exception as error:  # one structure that breaks the arithmetic must not stop the others
        reason = f"the lines cannot be computed ({type(error).__name__}: {error})"
        return Rejected(location, file, "", "no_lines", reason)
    if not made.lines:
        return Rejected(location, file, "", "no_lines", "the structure has no lines in the range")
    return made


def suggested_workers(paths: list[Path]) -> int:
    """Return how many processes pay for adding `paths`: starting one costs as much as 300 files."""
    files = count_structure_files(paths)
    many = files is None or files > _MANY
    return min(os.cpu_count() or 1, _WORKERS_MAX) if many else 1


def add_paths(
    conn: sqlite3.Connection,
    paths: list[Path],
    progress: Progress | None,
    *,
    workers: int,
    executor: Executor | None = None,
) -> ImportTally:
    """Add every structure file in `paths`; see `Library.add`."""
    writer = Writer(conn, work)
    total = None if progress is None else count_structure_files(paths)
    found = map(writer.marked, read_all(paths))
    outcomes = shared(work, found, workers=workers, executor=executor)
    with closing(outcomes):
        tally = _write(writer, outcomes, progress, total)
    unread = [reject.location for reject in tally.rejects]
    tally.gone = gone_from(conn, paths, writer.met, unread)
    return tally


def add_crystals(
    conn: sqlite3.Connection, crystals: Iterable[Crystal], progress: Progress | None
) -> ImportTally:
    """Add crystals that are already read; see `Library.add_crystals`."""

    def outcomes() -> Iterator[Outcome]:
        for crystal in crystals:
            made = _made(crystal, "")
            if isinstance(made, Entry):
                yield Outcome("", entries=(made,))
            else:
                yield Outcome("", rejects=(made,))

    return _write(Writer(conn, work), outcomes(), progress, None)


def _write(
    writer: Writer, outcomes: Iterable[Outcome], progress: Progress | None, total: int | None
) -> ImportTally:
    def counted() -> Iterator[Outcome]:
        for done, outcome in enumerate(outcomes, start=1):
            yield outcome
            if progress is not None:
                progress(done, total)

    for batch in bundles(counted(), _BATCH, _BATCH_BYTES, _bytes_held, _BATCH_S):
        writer.write(batch)
    return writer.tally


def _bytes_held(outcome: Outcome) -> int:
    return 0 if outcome.file is None else bytes_of(outcome.file)
