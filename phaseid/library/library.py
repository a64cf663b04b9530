"""A library of phases in one SQLite file: open it, ask it, add to it."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterable, Sequence
from contextlib import contextmanager
from pathlib import Path
from types import TracebackType
from typing import TYPE_CHECKING, Any, Self

from phaseid.errors import InputError, LibraryError
from phaseid.library import connection, lookups
from phaseid.library.linetable import LineTable, line_table
from phaseid.library.lookups import PHASE_COLUMNS, phase_from_row
from phaseid.library.phase import Phase

if TYPE_CHECKING:
    from collections.abc import Iterator
    from concurrent.futures import Executor

    import numpy as np
    from numpy.typing import NDArray

    from phaseid.crystal.crystal import Crystal
    from phaseid.crystal.lines import Lines
    from phaseid.library.finding import Found
    from phaseid.library.packing import Kind
    from phaseid.library.question import Question
    from phaseid.library.strongest import StrongLines
    from phaseid.library.tally import ImportTally

Progress = Callable[[int, int | None], None]
"""Called after every file with the number done and the number in all (None: not known)."""


class Library:
    """A library file, open for reading; `add` opens it for writing as long as it takes.

    Use as a context manager, or call `close`. Phases keep the order in which they came in.
    """

    def __init__(self, path: Path, conn: sqlite3.Connection) -> None:
        self.path = path
        self._conn = conn

    @classmethod
    def open(cls, path: str | Path, tell: Callable[[str], None] | None = None) -> Self:
        """Open a library file; one of an older version is brought up to date, which `tell` hears.

        Raises LibraryError (exit code 3) where it is missing, a folder, no library of phaseid, from
        a newer version, or damaged.
        """
        path = Path(path)
        return cls(path, connection.open_for_reading(path, tell))

    @classmethod
    def create(cls, path: str | Path) -> Self:
        """Create an empty library and open it. Raises LibraryError where a file stands there."""
        path = Path(path)
        if not connection.publish_new(path, connection.build_empty):
            raise LibraryError(
                f"{path}: there is a file already. Open it, or name another with --library."
            )
        return cls.open(path)

    def close(self) -> None:
        """Close the file; the library cannot be used afterwards."""
        self._conn.close()

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        value: BaseException | None,
        traceback: TracebackType | None,
    ) -> None:
        self.close()

    def __len__(self) -> int:
        return int(self._one("SELECT count(*) FROM phase")[0])

    @property
    def digest(self) -> str:
        """What is in the library, as 32 hex digits: the same whatever the order of adding."""
        return str(self._one("SELECT value FROM meta WHERE key = 'digest'")[0])

    def info(self) -> dict[str, Any]:
        """Return the facts that `phaseid library info --json` prints."""
        facts = dict(self._rows("SELECT key, value FROM meta"))
        sources = self._rows(
            "SELECT source_database, count(*) FROM phase GROUP BY 1 ORDER BY 2 DESC, 1"
        )
        return {
            "path": str(self.path),
            "phases": len(self),
            "distinct": len(self) - self._one("SELECT count(*) FROM member")[0],
            "digest": self.digest,
            "schema_version": int(facts["schema_version"]),
            "created_by": f"phaseid {facts['created_by']}",
            "rejects": self._one("SELECT count(*) FROM reject")[0],
            "sources": dict(sources),
            "size_bytes": self.path.stat().st_size,
        }

    def rejects(self) -> list[dict[str, str]]:
        """Return what could not be read so far: location, file, block, code, reason."""
        rows = self._rows("SELECT location, file, block, code, reason FROM reject ORDER BY 1, 3, 4")
        names = ("location", "file", "block", "code", "reason")
        return [dict(zip(names, row, strict=True)) for row in rows]

    def phases(self) -> list[Phase]:
        """Return every phase, in the order of `line_table`."""
        rows = self._rows(f"SELECT {PHASE_COLUMNS} FROM phase ORDER BY id")
        with self._told():
            return [phase_from_row(row) for row in rows]

    def phase(self, phase_id: str) -> Phase:
        """Return the phase of that id; raises InputError where there is none."""
        rows = self._rows(f"SELECT {PHASE_COLUMNS} FROM phase WHERE phase_id = ?", phase_id)
        if not rows:
            raise InputError(
                f"the library has no phase with the id '{phase_id}'",
                remedy="Look it up: phaseid library find NAME-OR-FORMULA",
            )
        with self._told():
            return phase_from_row(rows[0])

    def find(self, text: str) -> list[Phase]:
        """Return the phases that `text` can mean, the likeliest first.

        A phase id, a formula in any order of elements, a source number, a name or part of one.
        """
        with self._told():
            return [hit.phase for hit in lookups.find(self._conn, text)]

    def choose(self, text: str) -> Phase:
        """Return the one phase that `text` means.

        Raises InputError with the nearest names where there is none, and with what tells them apart
        where several differ.
        """
        with self._told():
            return lookups.choose(self._conn, text)

    def search(
        self, question: Question, *, limit: int | None = None, every_entry: bool = False
    ) -> Found:
        """Return the phases that answer a question; see `phaseid.library.finding.search`."""
        from phaseid.library.finding import search

        with self._told():
            return search(self._conn, question, limit=limit, every_entry=every_entry)

    def entries(self, phase_id: str) -> list[Phase]:
        """Return all entries of the phase that this one is of, the one that stands for it first.

        Raises InputError as `phase`.
        """
        from phaseid.library.groups import group_of

        self.phase(phase_id)
        (row,) = self._one("SELECT id FROM phase WHERE phase_id = ?", phase_id)
        with self._told():
            return lookups.phases_of(self._conn, group_of(self._conn, row))

    def standing(self) -> NDArray[np.bool_]:
        """Return whether each entry, in the order of `line_table`, stands for its phase (p,)."""
        from phaseid.library.groups import standing

        with self._told():
            return standing(self._conn)

    def crystal(self, phase_id: str) -> Crystal:
        """Return the structure of a phase exactly as it was added; raises InputError as `phase`."""
        from phaseid.library.records import unpack_crystal

        self.phase(phase_id)
        found = self._one(
            "SELECT operations, data FROM phase JOIN structure ON phase = phase.id "
            "JOIN symmetry ON symmetry.id = symmetry WHERE phase_id = ?",
            phase_id,
        )
        with self._told():
            return unpack_crystal(*found)

    def lines(self, phase_id: str) -> Lines:
        """Return the lines of a phase, computed from its structure; raises InputError as `phase`.

        They are those of `line_table` without the rounding of what is stored.
        """
        from phaseid.crystal.scattering import CU_KA1_EV

        return self.lines_at(phase_id, CU_KA1_EV)

    def lines_at(self, phase_id: str, xray_energy_eV: float) -> Lines:
        """Return the lines of a phase with f′ and f″ at a photon energy; the stored have Cu Kα1.

        Computed anew from the stored structure, which takes about a millisecond, over the same
        range and trimmed at the same floor. Raises InputError as `phase`, and for an energy that is
        not positive.
        """
        from phaseid.crystal.lines import compute_lines, trim
        from phaseid.library.packing import STORED_FLOOR

        crystal = self.crystal(phase_id)
        with self._told():
            lines = compute_lines(crystal, xray_energy_eV=xray_energy_eV)
        return trim(lines, STORED_FLOOR)

    def line_table(self, kind: Kind, phases: Sequence[int] | None = None) -> LineTable:
        """Return the lines of every phase as that kind of probe sees them.

        With `phases`, only of those row numbers (`StrongLines.row`), in that order.
        """
        columns = (
            "phase_id, a_A, b_A, c_A, alpha_deg, beta_deg, gamma_deg, volume_A3, complete_to_A, "
            "floor, quality, elements, data"
        )
        joined = "FROM phase JOIN lines ON lines.phase = phase.id"
        if phases is None:
            with self._told():
                every = f"SELECT {columns} {joined} ORDER BY phase.id"
                return line_table(kind, self._conn.execute(every))
        from phaseid.library.groups import LISTED
        from phaseid.library.scattered import read_rows

        wanted = f"SELECT phase.id, {columns} {joined} WHERE phase.id IN {LISTED}"
        with self._told():
            found = read_rows(self._conn, self._another, wanted, phases)
        held = {row: rest for row, *rest in found}
        if missing := [row for row in phases if row not in held]:
            raise self._damaged(f"phase {missing[0]} is missing")
        with self._told():
            return line_table(kind, [tuple(held[row]) for row in phases])

    def strong_lines(self, kind: Kind) -> StrongLines:
        """Return the strongest lines of every phase, in the order of `line_table`."""
        from phaseid.library.strongest import read_blocks

        with self._told():
            return read_blocks(self._conn, self._another, kind)

    def add(
        self,
        paths: Iterable[str | Path],
        progress: Progress | None = None,
        *,
        workers: int = 1,
        executor: Executor | None = None,
    ) -> ImportTally:
        """Add the structures in CIF files, folders and archives.

        No single file stops the rest: what cannot be read is in the tally and among `rejects`, with
        the reason. Added before: nothing changes. A new version of an entry replaces the old one.
        `workers` processes share the work, or an `executor` of yours (of concurrent.futures, or a
        cluster's), which gets 2 × `workers` chunks of files at a time and stays open; the result is
        the same. Raises LibraryError where the library cannot be written, InputError where the
        workers fail as a whole and for an empty name.
        """
        from phaseid.library.adding import add_paths

        named = list(paths)
        if "" in named:
            raise InputError("an empty name names nothing to add", remedy="This folder is '.'.")
        given = [Path(path) for path in named]
        with self.writing() as conn:
            return add_paths(conn, given, progress, workers=workers, executor=executor)

    def add_crystals(
        self, crystals: Iterable[Crystal], progress: Progress | None = None
    ) -> ImportTally:
        """Add structures that are already read; otherwise as `add`."""
        from phaseid.library.adding import add_crystals

        with self.writing() as conn:
            return add_crystals(conn, crystals, progress)

    def remove(self, phase_ids: Iterable[str]) -> None:
        """Take entries out of the library, all or none; raises InputError as `phase`."""
        from phaseid.library.removing import remove

        rows = []
        for phase_id in phase_ids:
            self.phase(phase_id)
            rows.append(self._one("SELECT id FROM phase WHERE phase_id = ?", phase_id)[0])
        with self.writing() as conn:
            remove(conn, rows)

    @contextmanager
    def reading(self) -> Iterator[sqlite3.Connection]:
        """Yield the connection for reading; what SQLite complains of becomes a LibraryError."""
        with self._told():
            yield self._conn

    @contextmanager
    def writing(self) -> Iterator[sqlite3.Connection]:
        """Yield a connection for changing the library; entries are grouped anew at the end."""
        from phaseid.library.grouping import group_entries

        self._conn.close()  # an idle reader would keep the file in WAL mode
        try:
            conn = connection.open_for_writing(self.path)
            try:
                with connection.told(self.path):
                    yield conn
                    group_entries(conn)
            finally:
                connection.close_after_writing(conn, self.path)
        finally:
            with connection.told(self.path):
                self._conn = connection.another_reader(self.path)

    @contextmanager
    def _told(self) -> Iterator[None]:
        with connection.decoded(self.path):
            yield

    def _rows(self, sql: str, *values: object) -> list[tuple[Any, ...]]:
        with self._told():
            return self._conn.execute(sql, values).fetchall()

    def _one(self, sql: str, *values: object) -> Sequence[Any]:
        rows = self._rows(sql, *values)
        if not rows:
            raise self._damaged("a row is missing")
        return rows[0]

    def _another(self) -> sqlite3.Connection:
        return connection.another_reader(self.path)

    def _damaged(self, what: str) -> LibraryError:
        return LibraryError(f"{self.path}: the library is damaged ({what}). {connection.MENDING}")
