"""The schema step for grouping and finding: who stands for whom, and indexes over the phases.

`member` lists every entry that another one stands for; an entry that is not in it stands for
itself, and the view `standing` shows these alone. `ungrouped` lists the sets of elements in which
something changed since entries were last grouped, kept by triggers so that no writer can forget it.
`holds` lists the sets of elements by each element in them: many phases, few sets.
"""

from __future__ import annotations

from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from sqlite_utils import Database

_SYMBOLS = """json_each('["' || replace({}, ' ', '","') || '"]')"""
_STATEMENTS = (
    "ALTER TABLE phase ADD COLUMN computed_by TEXT NOT NULL DEFAULT ''",
    "CREATE TABLE member (phase INTEGER PRIMARY KEY, leader INTEGER NOT NULL)",
    "CREATE INDEX member_leader ON member (leader)",
    "CREATE TABLE ungrouped (elements TEXT PRIMARY KEY) WITHOUT ROWID",
    """
    CREATE TABLE holds
        (symbol TEXT, elements TEXT, PRIMARY KEY (symbol, elements)) WITHOUT ROWID
    """,
    "INSERT INTO ungrouped SELECT DISTINCT elements FROM phase",
    f"INSERT INTO holds SELECT value, elements FROM ungrouped, {_SYMBOLS.format('elements')}",
    f"""
    CREATE TRIGGER phase_comes AFTER INSERT ON phase BEGIN
        INSERT OR IGNORE INTO ungrouped VALUES (new.elements);
        INSERT OR IGNORE INTO holds
            SELECT value, new.elements FROM {_SYMBOLS.format("new.elements")};
    END
    """,
    """
    CREATE TRIGGER phase_goes AFTER DELETE ON phase BEGIN
        INSERT OR IGNORE INTO ungrouped VALUES (old.elements);
        DELETE FROM member WHERE phase = old.id OR leader = old.id;
    END
    """,
    # each holds what the others search by, so that a question is answered from one index
    """
    CREATE INDEX phase_by_elements ON phase
        (elements, formula_key, space_group_number, density_g_cm3, source_database, a_A, b_A, c_A)
    """,
    """
    CREATE INDEX phase_by_space_group ON phase
        (space_group_number, elements, formula_key, density_g_cm3, a_A, b_A, c_A)
    """,
    """
    CREATE INDEX phase_by_density ON phase
        (density_g_cm3, elements, formula_key, space_group_number)
    """,
    "CREATE INDEX phase_by_source ON phase (source_database, elements, formula_key)",
    "CREATE INDEX phase_by_a ON phase (a_A, b_A, c_A)",
    "CREATE INDEX phase_by_b ON phase (b_A, c_A, a_A)",
    "CREATE INDEX phase_by_c ON phase (c_A, a_A, b_A)",
    """
    CREATE VIEW standing AS
        SELECT * FROM phase WHERE id NOT IN (SELECT phase FROM member)
    """,
)


def finding_tables(db: Database) -> None:
    """Make the tables, triggers, indexes and the view."""
    for statement in _STATEMENTS:
        db.conn.execute(statement)
