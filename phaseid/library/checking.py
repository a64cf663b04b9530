"""Whether a library holds what it should: its file, its sums, its tables among each other.

The lines of a sample of the phases, or of all, are computed again from their structures.
"""

from __future__ import annotations

import hashlib
import sqlite3
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

from phaseid import __version__
from phaseid.library.grouping import leaders_in
from phaseid.library.records import stored_crystal
from phaseid.library.strongest import block_rows, in_block
from phaseid.library.writer import combined

if TYPE_CHECKING:
    from phaseid.library.entries import Entry

SAMPLE = 100
"""Phases computed again unless all are asked for."""
_SHOWN = 20  # of one kind of trouble
_STRENGTH = 0.01  # relative, of lines that another machine rounds in its own way
_WEAK = 3e-3  # of the strongest; weaker lines may be cut off on one machine and not on another
_PARTS = ("structure", "lines")


@dataclass(slots=True)
class Checked:
    """What was found: `troubles` are sentences, none where the library is sound.

    `phases` in all, `recomputed` of them with their lines; `older`: phases whose lines were
    computed by another version of phaseid, which is no trouble.
    """

    phases: int = 0
    recomputed: int = 0
    older: int = 0
    troubles: list[str] = field(default_factory=list)


def check(
    conn: sqlite3.Connection,
    *,
    sample: int | None = SAMPLE,
    progress: Callable[[int, int | None], None] | None = None,
) -> Checked:
    """Check an open library; `sample` phases are computed again, None: all.

    A sample is spread evenly over the phases, so that it is the same each time.
    """
    found = Checked()
    found.troubles += _shortened(_file_troubles(conn))
    if found.troubles:
        return found  # what SQLite itself cannot read says nothing
    rows = [row for (row,) in conn.execute("SELECT id FROM phase ORDER BY id")]
    found.phases = len(rows)
    versions = conn.execute("SELECT count(*) FROM phase WHERE computed_by <> ?", (__version__,))
    found.older = int(versions.fetchone()[0])
    found.troubles += _shortened(_sum_troubles(conn))
    found.troubles += _shortened(_table_troubles(conn, rows))
    step = 1 if sample is None else max(1, -(-len(rows) // max(sample, 1)))
    chosen = rows[::step]
    for done, row in enumerate(chosen, start=1):
        found.troubles += _phase_troubles(conn, row)
        if progress is not None:
            progress(done, len(chosen))
    found.recomputed = len(chosen)
    if not found.troubles:  # groups follow from all the rest
        found.troubles += _shortened(_group_troubles(conn, chosen))
    return found


def _shortened(troubles: Iterator[str]) -> list[str]:
    listed = list(troubles)
    more = len(listed) - _SHOWN
    return listed[:_SHOWN] + ([f"and {more} more of this kind"] if more > 0 else [])


def _file_troubles(conn: sqlite3.Connection) -> Iterator[str]:
    for (line,) in conn.execute(f"PRAGMA integrity_check({_SHOWN})"):
        if line != "ok":
            yield f"SQLite: {line}"


def _sum_troubles(conn: sqlite3.Connection) -> Iterator[str]:
    (stated,) = conn.execute("SELECT value FROM meta WHERE key = 'digest'").fetchone()
    contents = (content for (content,) in conn.execute("SELECT content FROM phase"))
    summed = combined("0", plus=contents)
    if summed != stated:
        yield f"the digest is {stated}, the phases sum up to {summed}"


def _table_troubles(conn: sqlite3.Connection, rows: list[int]) -> Iterator[str]:
    for table in _PARTS:
        without = f"""
            SELECT phase_id FROM phase
            WHERE NOT EXISTS (SELECT 1 FROM {table} WHERE {table}.phase = phase.id)
        """
        for (phase_id,) in conn.execute(without):
            yield f"{phase_id} has no {table}"
    for table in (*_PARTS, "label", "member"):
        stray = f"""
            SELECT count(*) FROM {table}
            WHERE NOT EXISTS (SELECT 1 FROM phase WHERE phase.id = {table}.phase)
        """
        (count,) = conn.execute(stray).fetchone()
        if count:
            yield f"{count} rows of table {table} belong to no phase"
    held = block_rows(conn)
    if held != rows:
        missing, extra = len(set(rows) - set(held)), len(set(held) - set(rows))
        yield f"the blocks lack {missing} phases, hold {extra} that are none, or are out of order"


def _phase_troubles(conn: sqlite3.Connection, row: int) -> list[str]:
    """Compute a phase again from its structure and hold it against what is stored."""
    from phaseid.crystal.content_key import content_key
    from phaseid.library.entries import entry

    phase_id, content, location, by = conn.execute(
        "SELECT phase_id, content, location, computed_by FROM phase WHERE id = ?", (row,)
    ).fetchone()
    try:
        crystal = stored_crystal(conn, row)
    except Exception as error:  # whatever damaged bytes do, it is that phase's trouble
        return [f"{phase_id}: the structure cannot be read ({type(error).__name__}: {error})"]
    if crystal is None:
        return []  # told as a table's trouble
    if hashlib.sha256(content_key(crystal).encode()).hexdigest() != content:
        return [f"{phase_id}: the structure is not the one that was added"]
    if by != __version__:
        return []
    made = entry(crystal, location)
    found = []
    if not _same_lines(conn, row, made):
        found.append(f"{phase_id}: the lines are not those of its structure")
    if not _same_block(conn, row, made):
        found.append(f"{phase_id}: its block holds other lines")
    return found


def _same_lines(conn: sqlite3.Connection, row: int, made: Entry) -> bool:
    import numpy as np

    from phaseid.library.packing import KINDS, unpack_many

    held = conn.execute("SELECT data FROM lines WHERE phase = ?", (row,)).fetchone()
    if held is None or bytes(held[0]) == made.lines:
        return True
    try:
        for kind in KINDS:
            tables = []
            for data in (bytes(held[0]), made.lines):
                _, hkl, multiplicity, strength = unpack_many(kind, [data])
                kept = strength > _WEAK * strength.max(initial=0.0)
                tables.append((hkl[kept].tolist(), multiplicity[kept].tolist(), strength[kept]))
            (hkl, times, one), (other_hkl, other_times, other) = tables
            if (hkl, times) != (other_hkl, other_times):
                return False
            if not np.allclose(one, other, rtol=_STRENGTH):
                return False
    except Exception:  # bytes that cannot be unpacked are no lines
        return False
    return True


def _same_block(conn: sqlite3.Connection, row: int, made: Entry) -> bool:
    """Whether the block says the same but for the last digit of codes and levels."""
    import numpy as np

    held = in_block(conn, row)
    for part, data in made.block.items():
        if part not in held or len(held[part]) != len(data):
            return False
        if held[part] != data:
            apart = np.frombuffer(held[part], "u1").astype(int) - np.frombuffer(data, "u1")
            if np.count_nonzero(np.abs(apart) > 1) > len(data) // 10:
                return False
    return True


def _group_troubles(conn: sqlite3.Connection, rows: list[int]) -> Iterator[str]:
    (waiting,) = conn.execute("SELECT count(DISTINCT elements) FROM ungrouped").fetchone()
    if waiting:
        yield f"{waiting} sets of elements are not grouped yet; adding anything does it"
        return
    marks = ", ".join("?" * len(rows))
    sets = conn.execute(f"SELECT DISTINCT elements FROM phase WHERE id IN ({marks})", rows)
    for (elements,) in sets.fetchall():
        held = dict(
            conn.execute(
                "SELECT phase, leader FROM member JOIN phase ON phase.id = phase "
                "WHERE elements = ?",
                (elements,),
            )
        )
        due = {row: leader for row, leader in leaders_in(conn, elements).items() if row != leader}
        if held != due:
            yield f"the entries of {elements} are not grouped as they should be"
