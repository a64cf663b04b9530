"""Taking entries out of a library."""

from __future__ import annotations

import sqlite3
from collections.abc import Sequence

from phaseid.library.groups import LISTED, listed
from phaseid.library.strongest import drop_from_blocks
from phaseid.library.writer import TABLES, combined


def remove(conn: sqlite3.Connection, rows: Sequence[int]) -> None:
    """Take entries, by row number, out of an open library: all of them or none.

    Files that they came from bring them back when they are added again. Raises sqlite3.Error as
    SQLite does.
    """
    which = (listed(rows),)
    conn.execute("BEGIN IMMEDIATE")
    try:
        found = conn.execute(f"SELECT content FROM phase WHERE id IN {LISTED}", which)
        contents = [content for (content,) in found]
        (digest,) = conn.execute("SELECT value FROM meta WHERE key = 'digest'").fetchone()
        for table, column in TABLES:
            conn.execute(f"DELETE FROM {table} WHERE {column} IN {LISTED}", which)
        drop_from_blocks(conn, rows)
        conn.execute(
            "UPDATE meta SET value = ? WHERE key = 'digest'", (combined(digest, minus=contents),)
        )
        conn.execute("COMMIT")
    except BaseException:
        conn.execute("ROLLBACK")
        raise
