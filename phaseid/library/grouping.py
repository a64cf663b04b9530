"""One phase, many entries: which entries are determinations of the same phase, and which stands.

The best determination of a phase is the leader of the others. Entries are compared among those of
the same elements, the best first, each with the leaders so far, and follow the nearest; so the
outcome depends on what is in the library and not on how it came there. An entry that was just
added, and one whose leader went, stands for itself until `group_entries` has run.
"""

from __future__ import annotations

import sqlite3
from bisect import bisect_left, bisect_right
from collections import defaultdict
from collections.abc import Sequence
from contextlib import suppress

import numpy as np

from phaseid.library.determinations import COLUMNS, StoredEntry
from phaseid.library.sameness import COMPUTED_CELL, MEASURED_CELL, same_phase

_SETS_A_TRANSACTION = 500
_COLD_K = 200.0  # below, a cell is clearly smaller than at room temperature


def group_entries(conn: sqlite3.Connection) -> None:
    """Bring table `member` up to date with what came and went.

    Only sets of elements in which something changed are looked at. Opens transactions of its own
    unless it is called within one.
    """
    sets = [row[0] for row in conn.execute("SELECT elements FROM ungrouped ORDER BY 1")]
    if conn.in_transaction:
        _group_sets(conn, sets)
        return
    for start in range(0, len(sets), _SETS_A_TRANSACTION):
        conn.execute("BEGIN IMMEDIATE")
        try:
            _group_sets(conn, sets[start : start + _SETS_A_TRANSACTION])
            conn.execute("COMMIT")
        except BaseException:
            with suppress(sqlite3.OperationalError):  # SQLite may have rolled back by itself
                conn.execute("ROLLBACK")
            raise


def _group_sets(conn: sqlite3.Connection, sets: list[str]) -> None:
    for elements in sets:
        leaders = leaders_in(conn, elements)
        conn.executemany("DELETE FROM member WHERE phase = ?", [(row,) for row in leaders])
        others = [(row, leader) for row, leader in leaders.items() if row != leader]
        conn.executemany("INSERT INTO member VALUES (?, ?)", others)
        conn.execute("DELETE FROM ungrouped WHERE elements = ?", (elements,))


def leaders_in(conn: sqlite3.Connection, elements: str) -> dict[int, int]:
    """Return row of the leader by row of the entry, for all entries of one set of elements."""
    rows = conn.execute(f"SELECT {COLUMNS} FROM phase WHERE elements = ?", (elements,))
    return leaders_of([StoredEntry(conn, *row) for row in rows.fetchall()])


def leaders_of(entries: Sequence[StoredEntry]) -> dict[int, int]:
    """The same for entries that are read already."""
    parts: dict[int, list[StoredEntry]] = defaultdict(list)
    for entry in entries:
        parts[entry.group].append(entry)
    leaders: dict[int, int] = {}
    for part in parts.values():
        standing: list[StoredEntry] = []
        ln_density = np.full(len(part), np.inf)
        for entry in best_first(part):
            near = np.flatnonzero(np.abs(ln_density - entry.ln_density) <= 3 * COMPUTED_CELL)
            same = [standing[k] for k in near if _same(standing[k], entry)]
            if not same:
                ln_density[len(standing)] = entry.ln_density
                standing.append(entry)
            nearest = min(
                same, key=lambda one: abs(one.ln_density - entry.ln_density), default=entry
            )
            leaders[entry.row] = nearest.row
    return leaders


def _same(one: StoredEntry, other: StoredEntry) -> bool:
    try:
        return same_phase(one, other)
    except (ArithmeticError, ValueError):  # a cell that spans no lattice is like no other
        return False


def best_first(entries: list[StoredEntry]) -> list[StoredEntry]:
    """Sort determinations by how well they stand for their phase.

    Measured before computed; shipped with phaseid, whose marks are sure where files say nothing of
    pressure and heat; the symmetry told before atoms one by one; then quality, which holds
    pressure, temperature, disorder and doubts; not measured in the cold; the cell near the middle
    of the others'; named; with its reference. Whatever is still equal goes by content.
    """
    if len(entries) == 1:
        return entries
    measured = sorted(entry.ln_density for entry in entries if not entry.computed)

    def rank(entry: StoredEntry) -> tuple[object, ...]:
        reach = 3 * MEASURED_CELL
        low = bisect_left(measured, entry.ln_density - reach)
        high = bisect_right(measured, entry.ln_density + reach)
        middle = measured[(low + high) // 2] if high > low else entry.ln_density
        off = round(abs(entry.ln_density - middle), 3)
        cold = high - low > 1 and not entry.computed and entry.colder_than(_COLD_K)
        return (
            entry.computed,
            not entry.shipped,
            entry.symmetry_untold,
            -entry.quality,
            cold,
            off,
            not entry.named,
            not entry.reference,
            entry.content,
        )

    return sorted(entries, key=rank)
