"""One phase, many entries: which entries are determinations of the same phase, and which stands.

The best determination of a phase is the leader of the others (`leaders`). Entries of the same
elements are first parted by what no two determinations of a phase differ in: kind of space group,
composition, density. Only parts that something came to, or went from, are looked at anew; so adding
costs as much in a large library as in a small one. An entry that was just added, and one whose
leader went, stands for itself until `group_entries` has run.
"""

from __future__ import annotations

import sqlite3
from collections import defaultdict
from collections.abc import Callable, Iterable, Iterator, Sequence
from contextlib import suppress
from operator import attrgetter
from typing import NamedTuple

from phaseid.library.determinations import COLUMNS, StoredEntry, fractions, group_kind, ln_density
from phaseid.library.groups import LISTED, listed
from phaseid.library.leaders import Earlier, leaders_of
from phaseid.library.sameness import COMPOSITION, COMPUTED_CELL

SOMETHING_WENT = 0
"""In table `ungrouped` in place of a row: all entries of these elements are grouped anew."""
_SETS_A_TRANSACTION = 500
_PLAIN = 1  # P 1: the atoms may have more symmetry than is told


class Outline(NamedTuple):
    """What parts entries of the same elements; `group` as `StoredEntry.group`."""

    row: int
    group: int
    fractions: tuple[float, ...]
    ln_density: float


def group_entries(conn: sqlite3.Connection) -> None:
    """Bring table `member` up to date with what came and went.

    Opens transactions of its own unless it is called within one.
    """
    waiting = f"SELECT DISTINCT elements FROM ungrouped LIMIT {_SETS_A_TRANSACTION}"
    within = conn.in_transaction
    while sets := conn.execute(waiting).fetchall():
        if not within:
            conn.execute("BEGIN IMMEDIATE")
        try:
            for (elements,) in sets:
                _group_set(conn, elements)
            if not within:
                conn.execute("COMMIT")
        except BaseException:
            if not within:
                with suppress(sqlite3.OperationalError):  # SQLite may have rolled back by itself
                    conn.execute("ROLLBACK")
            raise


def _group_set(conn: sqlite3.Connection, elements: str) -> None:
    waiting = conn.execute("SELECT phase FROM ungrouped WHERE elements = ?", (elements,))
    came = {row for (row,) in waiting}
    anew = SOMETHING_WENT in came
    for part in parts_of(_outlines(conn, elements, None if anew else came)):
        # an entry by itself has no leader: those of others that went are forgotten by a trigger
        if len(part) > 1 and (anew or any(outline.row in came for outline in part)):
            _group_part(conn, part, None if anew else came)
    conn.execute("DELETE FROM ungrouped WHERE elements = ?", (elements,))


def _group_part(conn: sqlite3.Connection, part: list[Outline], came: set[int] | None) -> None:
    """Group a part to which the rows `came`; None: all that is known of it is forgotten."""
    rows = [outline.row for outline in part]
    entries = _entries(conn, rows)
    held = conn.execute(
        f"SELECT phase, leader FROM member WHERE phase IN {LISTED}", (listed(rows),)
    )
    before = dict(held.fetchall())
    if came is None:
        leaders = leaders_of(list(entries.values()))
    else:
        old = [outline for outline in part if outline.row not in came]
        earlier = Earlier(
            [[entries[outline.row] for outline in own] for own in parts_of(old)],
            {outline.row: before.get(outline.row, outline.row) for outline in old},
        )
        leaders = leaders_of(list(entries.values()), earlier)
    after = {row: leader for row, leader in leaders.items() if row != leader}
    if gone := before.keys() - after.keys():
        conn.executemany("DELETE FROM member WHERE phase = ?", [(row,) for row in gone])
    if changed := after.items() - before.items():
        conn.executemany("INSERT OR REPLACE INTO member VALUES (?, ?)", sorted(changed))


def leaders_in(conn: sqlite3.Connection, elements: str) -> dict[int, int]:
    """Return row of the leader by row of the entry, for all entries of one set of elements."""
    leaders: dict[int, int] = {}
    for part in parts_of(_outlines(conn, elements, None)):
        leaders |= leaders_of(list(_entries(conn, [outline.row for outline in part]).values()))
    return leaders


def _entries(conn: sqlite3.Connection, rows: Sequence[int]) -> dict[int, StoredEntry]:
    found = conn.execute(f"SELECT {COLUMNS} FROM phase WHERE id IN {LISTED}", (listed(rows),))
    return {row[0]: StoredEntry(conn, *row) for row in found.fetchall()}


def _outlines(conn: sqlite3.Connection, elements: str, beside: set[int] | None) -> list[Outline]:
    """Outlines of the entries of a set of elements; those alone that may be parted with the rows
    `beside`, where these are given.
    """
    found = conn.execute(
        "SELECT id, space_group_number, formula_key, density_g_cm3 "
        "FROM phase INDEXED BY phase_by_elements WHERE elements = ?",
        (elements,),
    ).fetchall()
    if beside is not None:
        kinds = {group_kind(number) for row, number, *_ in found if row in beside}
        if _PLAIN not in kinds:  # else the group is what the atoms say
            kinds.add(_PLAIN)
            found = [row for row in found if group_kind(row[1]) in kinds]
    plain = [row for row, number, *_ in found if number == _PLAIN]
    own = _entries(conn, plain) if plain else {}
    return [
        Outline(
            row,
            own[row].group if row in own else group_kind(number),
            fractions(key),
            ln_density(density),
        )
        for row, number, key, density in found
    ]


def parts_of(outlines: Iterable[Outline]) -> list[list[Outline]]:
    """Part entries of the same elements so that determinations of one phase stay together."""
    kinds: dict[tuple[int, int], list[Outline]] = defaultdict(list)
    for outline in outlines:
        kinds[outline.group, len(outline.fractions)].append(outline)
    parts: list[list[Outline]] = []
    for (_, elements), kind in kinds.items():
        own = [kind]
        if len({outline.fractions for outline in kind}) > 1:
            for k in range(elements):
                own = [run for part in own for run in _runs(part, _fraction(k), COMPOSITION)]
        parts += [run for part in own for run in _runs(part, _ln_density, 3 * COMPUTED_CELL)]
    return parts


def _fraction(k: int) -> Callable[[Outline], float]:
    return lambda outline: outline.fractions[k]


_ln_density = attrgetter("ln_density")


def _runs(
    part: list[Outline], value: Callable[[Outline], float], gap: float
) -> Iterator[list[Outline]]:
    """Part outlines where their values are further apart than a gap."""
    if len(part) > 1:
        part = sorted(part, key=value)
        values = list(map(value, part))
        start = 0
        for k in range(1, len(part)):
            if values[k] - values[k - 1] > gap:
                yield part[start:k]
                start = k
        part = part[start:]
    yield part
