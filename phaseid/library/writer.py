"""The one place that changes a library: entries in, a transaction per batch."""

from __future__ import annotations

import sqlite3
from collections.abc import Iterable, Sequence

from phaseid.library.entries import Entry
from phaseid.library.tally import ImportTally, Rejected

_DIGEST_RANGE = 1 << 128


def combined(digest: str, *, plus: Iterable[str] = (), minus: Iterable[str] = ()) -> str:
    """Return the digest of a library after contents (hex SHA-256) came in or went.

    The sum of the first 128 bits of every content, modulo 2^128: the order does not matter, and no
    other row need be read.
    """
    total = int(digest, 16)
    total += sum(int(content[:32], 16) for content in plus)
    total -= sum(int(content[:32], 16) for content in minus)
    return f"{total % _DIGEST_RANGE:032x}"


class Writer:
    """Writes entries into an open library and keeps the tally of one run."""

    def __init__(self, conn: sqlite3.Connection) -> None:
        self.tally = ImportTally()
        self._conn = conn
        self._met: set[int] = set()  # rows that a file of this run stands for

    def write(self, batch: Sequence[tuple[list[Entry], list[Rejected], str]]) -> None:
        """Write what a batch of files gave, in one transaction: all of it or nothing."""
        counts = (self.tally.added, self.tally.unchanged, self.tally.replaced)
        self._conn.execute("BEGIN IMMEDIATE")
        try:
            for entries, rejects, location in batch:
                for entry in entries:
                    self._put(entry)
                self._note_rejects(rejects, location)
            self._conn.execute("COMMIT")
        except BaseException:
            self.tally.added, self.tally.unchanged, self.tally.replaced = counts
            if self._conn.in_transaction:
                self._conn.execute("ROLLBACK")
            raise
        for _, rejects, _ in batch:
            self.tally.rejects.extend(rejects)

    def _put(self, entry: Entry) -> None:
        held = self._conn.execute("SELECT id FROM phase WHERE content = ?", (entry.content,))
        known = held.fetchone()
        if known is not None:
            self.tally.unchanged += 1
            row_id = int(known[0])
        else:
            older = self._older_version(entry)
            if older is None:
                self.tally.added += 1
                row_id = self._insert(entry, None)
                self._change_digest(plus=entry.content)
            else:
                self.tally.replaced += 1
                row_id, content = older
                for table, column in (("phase", "id"), ("structure", "phase"), ("lines", "phase")):
                    self._conn.execute(f"DELETE FROM {table} WHERE {column} = ?", (row_id,))
                self._conn.execute("DELETE FROM label WHERE phase = ?", (row_id,))
                self._insert(entry, row_id)
                self._change_digest(plus=entry.content, minus=content)
        self._met.add(row_id)
        self._conn.executemany(
            "INSERT OR IGNORE INTO label (phase, kind, text, key) VALUES (?, ?, ?, ?)",
            [(row_id, *label) for label in entry.labels],
        )

    def _older_version(self, entry: Entry) -> tuple[int, str] | None:
        """Return (row id, content) of the entry that this one is a new version of.

        The same number of the same database; for a file without a number, the same place with the
        same formula and space group. Rows that another file of this run stands for are not touched,
        and of several old ones only the one from a file of the same name.
        """
        row = entry.row
        if row["source_id"]:
            found = self._conn.execute(
                "SELECT id, content, source_file FROM phase WHERE source_id = ? "
                "AND source_database = ?",
                (row["source_id"], row["source_database"]),
            )
        elif row["location"]:
            found = self._conn.execute(
                "SELECT id, content, source_file FROM phase WHERE location = ? AND source_id = '' "
                "AND formula_key = ? AND space_group_number = ?",
                (row["location"], row["formula_key"], row["space_group_number"]),
            )
        else:
            return None
        older = [held for held in found.fetchall() if held[0] not in self._met]
        if len(older) > 1:
            older = [held for held in older if held[2] == row["source_file"]]
        return (int(older[0][0]), str(older[0][1])) if len(older) == 1 else None

    def _insert(self, entry: Entry, row_id: int | None) -> int:
        row = {
            "id": row_id,
            "phase_id": self._phase_id(entry),
            "content": entry.content,
            **entry.row,
        }
        columns, marks = ", ".join(row), ", ".join("?" * len(row))
        done = self._conn.execute(
            f"INSERT INTO phase ({columns}) VALUES ({marks})", tuple(row.values())
        )
        made = int(done.lastrowid or 0)
        self._conn.execute("INSERT INTO structure VALUES (?, ?)", (made, entry.structure))
        self._conn.execute("INSERT INTO lines VALUES (?, ?)", (made, entry.lines))
        return made

    def _phase_id(self, entry: Entry) -> str:
        """Formula and as many digits of the content as tell it from every other, 8 as a rule."""
        for digits in (8, 16, 64):
            phase_id = f"{entry.row['formula']}-{entry.content[:digits]}"
            taken = self._conn.execute("SELECT 1 FROM phase WHERE phase_id = ?", (phase_id,))
            if taken.fetchone() is None:
                break
        return phase_id

    def _change_digest(self, *, plus: str, minus: str | None = None) -> None:
        (digest,) = self._conn.execute("SELECT value FROM meta WHERE key = 'digest'").fetchone()
        changed = combined(digest, plus=[plus], minus=[] if minus is None else [minus])
        self._conn.execute("UPDATE meta SET value = ? WHERE key = 'digest'", (changed,))

    def _note_rejects(self, rejects: Sequence[Rejected], location: str) -> None:
        if location:
            self._conn.execute("DELETE FROM reject WHERE location = ?", (location,))
        self._conn.executemany(
            "INSERT INTO reject (location, file, block, code, reason) VALUES (?, ?, ?, ?, ?)",
            [(r.location, r.file, r.block, r.code, r.reason) for r in rejects],
        )
