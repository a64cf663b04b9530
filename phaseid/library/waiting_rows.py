"""The schema step that lets grouping look at what is new alone.

`ungrouped` lists the rows that came since entries were last grouped, by their elements; 0 in place
of a row says that one went, or that all entries of these elements are to be grouped anew. A phase
has the temperature of its measurement, which ranks determinations.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

from phaseid.library.records import decompressed

if TYPE_CHECKING:
    from sqlite_utils import Database

_STATEMENTS = (
    "DROP TRIGGER phase_comes",
    "DROP TRIGGER phase_goes",
    "DROP TABLE ungrouped",
    """
    CREATE TABLE ungrouped
        (elements TEXT, phase INTEGER, PRIMARY KEY (elements, phase)) WITHOUT ROWID
    """,
    "INSERT INTO ungrouped SELECT DISTINCT elements, 0 FROM phase",
    """
    CREATE TRIGGER phase_comes AFTER INSERT ON phase BEGIN
        INSERT OR IGNORE INTO ungrouped VALUES (new.elements, new.id);
        INSERT OR IGNORE INTO holds
            SELECT value, new.elements
            FROM json_each('["' || replace(new.elements, ' ', '","') || '"]');
    END
    """,
    """
    CREATE TRIGGER phase_goes AFTER DELETE ON phase BEGIN
        INSERT OR IGNORE INTO ungrouped VALUES (old.elements, 0);
        DELETE FROM member WHERE phase = old.id OR leader = old.id;
    END
    """,
    "ALTER TABLE phase ADD COLUMN temperature_K REAL",
)


def waiting_rows(db: Database) -> None:
    """Make the table and its triggers, and tell the temperatures."""
    for statement in _STATEMENTS:
        db.conn.execute(statement)
    structures = db.conn.execute("SELECT phase, data FROM structure")
    told = [(decompressed(data).get("temperature_K"), row) for row, data in structures]
    known = [pair for pair in told if pair[0] is not None]
    db.conn.executemany("UPDATE phase SET temperature_K = ? WHERE id = ?", known)
