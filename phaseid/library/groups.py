"""Asking which entries of a library are of one phase; `grouping` finds it out."""

from __future__ import annotations

import json
import sqlite3
from collections.abc import Iterable, Sequence
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

LISTED = "(SELECT value FROM json_each(?))"
"""What stands after IN for a list of numbers of any length, given by `listed`."""


def listed(rows: Iterable[int]) -> str:
    """Return the value for the mark of LISTED."""
    return json.dumps(list(rows))


def one_of_each(conn: sqlite3.Connection, rows: Sequence[int]) -> list[int]:
    """Of the entries of one phase keep the one that stands for it, or else the first given."""
    members = conn.execute(
        f"SELECT phase, leader FROM member WHERE phase IN {LISTED}", (listed(rows),)
    )
    leader = dict(members.fetchall())
    given = set(rows)
    kept: dict[int, int] = {}
    for row in rows:
        group = leader.get(row, row)
        kept.setdefault(group, group if group in given else row)
    return list(kept.values())


def counts_of(conn: sqlite3.Connection, rows: Sequence[int]) -> list[int]:
    """Return how many entries the phase of each row has in the library."""
    count = (
        "SELECT count(*) FROM member WHERE leader = "
        "coalesce((SELECT leader FROM member WHERE phase = ?1), ?1)"
    )
    return [1 + int(conn.execute(count, (row,)).fetchone()[0]) for row in rows]


def group_of(conn: sqlite3.Connection, row: int) -> list[int]:
    """Return the rows of all entries of the phase of `row`, the one that stands for it first."""
    held = conn.execute("SELECT leader FROM member WHERE phase = ?", (row,)).fetchone()
    leader = row if held is None else int(held[0])
    others = conn.execute("SELECT phase FROM member WHERE leader = ? ORDER BY phase", (leader,))
    return [leader, *(phase for (phase,) in others)]


def standing(conn: sqlite3.Connection) -> NDArray[np.bool_]:
    """Return whether each entry, in the order of the blocks, stands for its phase (p,)."""
    import numpy as np

    parts = conn.execute("SELECT data FROM block WHERE part = 'row' ORDER BY number")
    rows = np.frombuffer(b"".join(data for (data,) in parts), dtype="<i8")
    members = conn.execute("SELECT phase FROM member ORDER BY phase").fetchall()
    held = np.fromiter((row for (row,) in members), dtype=np.int64, count=len(members))
    return ~np.isin(rows, held, assume_unique=True)
