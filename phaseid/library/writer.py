"""The one place that changes a library: entries in, a transaction per batch."""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Iterable, Sequence
from dataclasses import replace

from phaseid.library.entries import Entry
from phaseid.library.outcome import Outcome
from phaseid.library.records import symmetry_row
from phaseid.library.sources import Found, StructureFile
from phaseid.library.starter import DATABASE
from phaseid.library.strongest import Parts, write_blocks
from phaseid.library.tally import ImportTally, Rejected, Replaced

TABLES = (("phase", "id"), ("structure", "phase"), ("lines", "phase"), ("label", "phase"))
"""Where an entry has rows, and the column that holds its number; beside these its block."""
_FROM = ("source_database", "source_id", "source_file", "location")
_DIGEST_RANGE = 1 << 128


def _told_by(source: Sequence[object]) -> tuple[bool, bool, tuple[str, ...]]:
    """Rank of the source that tells of a structure which several have, whoever came first.

    What is shipped, then one with a number, then by the alphabet; `source` holds the columns _FROM.
    """
    database, number, *_ = source
    return database != DATABASE, not number, tuple(map(str, source[:3]))


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
    """Writes entries into an open library and keeps the tally of one run.

    `read` turns a file into its outcome, for the rare one that was thought to be known and is not.
    """

    def __init__(self, conn: sqlite3.Connection, read: Callable[[Found], Outcome]) -> None:
        self.tally = ImportTally()
        self._conn = conn
        self._read = read
        self.met: set[int] = set()  # rows that a file of this run stands for
        self._replacements: list[Replaced] = []  # of this batch
        self._changed: dict[int, Parts] = {}  # rows of this batch, for their blocks

    def marked(self, found: Found) -> Found:
        """Mark a file as known where all that was once read from these bytes is in the library."""
        if isinstance(found, StructureFile) and self._rows_of(found):
            return replace(found, known=True)
        return found

    def write(self, batch: Sequence[Outcome]) -> None:
        """Write what a batch of files gave, in one transaction: all of it or nothing."""
        counts = self.tally.counts
        refused: list[Rejected] = []
        self._changed, self._replacements = {}, []
        self._conn.execute("BEGIN IMMEDIATE")
        try:
            for outcome in batch:
                refused.extend(self._take(outcome))
            write_blocks(self._conn, self._changed)
            self._conn.execute("COMMIT")
        except BaseException:
            self.tally.counts = counts
            if self._conn.in_transaction:
                self._conn.execute("ROLLBACK")
            raise
        self.tally.rejects.extend(refused)
        self.tally.replacements.extend(self._replacements)

    def _take(self, outcome: Outcome) -> Sequence[Rejected]:
        if outcome.file is not None:
            rows = self._rows_of(outcome.file)
            if rows:
                self.met.update(rows)
                self.tally.unchanged += len(rows)
                return ()
            outcome = self._read(replace(outcome.file, known=False))  # replaced by this very run
        for entry in outcome.entries:
            self._put(entry)
        if outcome.location:
            self._conn.execute("DELETE FROM reject WHERE location = ?", (outcome.location,))
        self._conn.executemany(
            "INSERT INTO reject (location, file, block, code, reason) VALUES (?, ?, ?, ?, ?)",
            [(r.location, r.file, r.block, r.code, r.reason) for r in outcome.rejects],
        )
        if outcome.digest and not outcome.rejects:
            self._conn.executemany(
                "INSERT OR IGNORE INTO seen VALUES (?, ?)",
                [(outcome.digest, entry.content) for entry in outcome.entries],
            )
        return outcome.rejects

    def _rows_of(self, file: StructureFile) -> list[int]:
        """Return the rows that stand for a file once read, none where one of them is gone."""
        found = self._conn.execute(
            "SELECT phase.id FROM seen LEFT JOIN phase USING (content) WHERE digest = ?",
            (file.digest,),
        )
        rows = [row[0] for row in found]
        return [] if None in rows else rows

    def _put(self, entry: Entry) -> None:
        columns = ", ".join(("id", "computed_by", *_FROM))
        held = self._conn.execute(
            f"SELECT {columns} FROM phase WHERE content = ?", (entry.content,)
        )
        known = held.fetchone()
        if known is not None:
            self.tally.unchanged += 1
            row_id, computed_by, *before = known
            now = [entry.row[column] for column in _FROM]
            older = computed_by != entry.row["computed_by"]
            if (now == before and older) or _told_by(now) < _told_by(before):
                self._replace(row_id, entry, keep_labels=True)
                self.tally.recomputed += older
        else:
            older = self._older_version(entry)
            if older is None:
                self.tally.added += 1
                row_id = self._insert(entry, None)
                self._change_digest(plus=entry.content)
            else:
                self.tally.replaced += 1
                row_id, content = older
                before = self._replace(row_id, entry)
                self._change_digest(plus=entry.content, minus=content)
                self._replacements.append(self._replacement(row_id, before))
        self.met.add(row_id)
        self._conn.executemany(
            "INSERT OR IGNORE INTO label (phase, kind, text, key) VALUES (?, ?, ?, ?)",
            [(row_id, *label) for label in entry.labels],
        )

    def _replace(self, row_id: int, entry: Entry, *, keep_labels: bool = False) -> str:
        """Put an entry in the place of another; returns the phase id of that."""
        where = (row_id,)
        held = self._conn.execute("SELECT phase_id FROM phase WHERE id = ?", where).fetchone()
        for table, column in TABLES:
            if not (keep_labels and table == "label"):
                self._conn.execute(f"DELETE FROM {table} WHERE {column} = ?", where)
        self._insert(entry, row_id)
        return str(held[0])

    def _replacement(self, row_id: int, before: str) -> Replaced:
        columns = "phase_id, name, source_database, source_id, source_file"
        row = self._conn.execute(f"SELECT {columns} FROM phase WHERE id = ?", (row_id,)).fetchone()
        return Replaced(before, *row)

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
        older = [held for held in found.fetchall() if held[0] not in self.met]
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
        symmetry = symmetry_row(self._conn, entry.operations)
        held = (made, symmetry, entry.structure)
        self._conn.execute("INSERT INTO structure (phase, symmetry, data) VALUES (?, ?, ?)", held)
        self._conn.execute("INSERT INTO lines (phase, data) VALUES (?, ?)", (made, entry.lines))
        self._changed[made] = entry.block
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
