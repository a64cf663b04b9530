"""The tables of a library file, as named steps that are applied once each.

A library file is plain SQLite. `meta` says what it is; `phase` has one compact row per structure;
`structure` and `lines` hold the bulky parts by phase so that look-ups never page through them,
`symmetry` the operations that many structures share, `block` what a search looks through first;
`label` holds every name and source number a phase can be asked for by (with a trigram index);
`seen` remembers files that were read without a reject,
so that they need not be read again; `reject` what could not be read and why. What grouping and
finding need stands in `finding_tables`.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Sequence
from typing import TYPE_CHECKING

from phaseid import __version__
from phaseid.library.compact_tables import compact_tables
from phaseid.library.finding_tables import finding_tables
from phaseid.library.waiting_rows import waiting_rows

if TYPE_CHECKING:
    from sqlite_utils import Database

Step = tuple[str, "Callable[[Database], None]"]

EMPTY_DIGEST = "0" * 32


def _first_tables(db: Database) -> None:
    db.table("meta").create({"key": str, "value": str}, pk="key")
    db.table("phase").create(
        {
            "id": int,
            "phase_id": str,
            "content": str,
            "name": str,
            "formula": str,
            "formula_key": str,
            "elements": str,
            "space_group_number": int,
            "space_group_symbol": str,
            "a_A": float,
            "b_A": float,
            "c_A": float,
            "alpha_deg": float,
            "beta_deg": float,
            "gamma_deg": float,
            "volume_A3": float,
            "density_g_cm3": float,
            "source_database": str,
            "source_id": str,
            "source_file": str,
            "source_reference": str,
            "location": str,
            "findings": str,
            "quality": float,
            "complete_to_A": float,
            "floor": float,
        },
        pk="id",
        not_null={"phase_id", "content"},
    )
    db.table("phase").create_index(["phase_id"], unique=True)
    db.table("phase").create_index(["content"], unique=True)
    db.table("phase").create_index(["formula_key"])
    db.table("phase").create_index(["source_id", "source_database"])
    db.table("phase").create_index(["location"])
    for bulky in ("structure", "lines"):
        db.table(bulky).create({"phase": int, "data": bytes}, pk="phase")
    db.table("label").create(
        {"id": int, "phase": int, "kind": str, "text": str, "key": str}, pk="id"
    )
    db.table("label").create_index(["key"])
    db.table("label").create_index(["phase", "kind", "text"], unique=True)
    db.table("label").enable_fts(["key"], tokenize="trigram", create_triggers=True)
    db.table("seen").create({"digest": str, "content": str}, pk=("digest", "content"))
    db.table("reject").create(
        {"location": str, "file": str, "block": str, "code": str, "reason": str},
    )
    db.table("reject").create_index(["location"])


STEPS: tuple[Step, ...] = (
    ("first tables", _first_tables),
    ("compact lines and blocks", compact_tables),
    ("grouping and finding", finding_tables),
    ("rows that wait for grouping", waiting_rows),
)

SCHEMA_VERSION = len(STEPS)


def apply_steps(
    conn: sqlite3.Connection,
    steps: Sequence[Step] = STEPS,
    finish: Callable[[sqlite3.Connection], None] | None = None,
) -> int:
    """Bring a library file up to date in one transaction: all missing steps, then `finish`.

    Returns the number of steps applied. Raises sqlite3.Error as SQLite does; the file then stands
    as it stood.
    """
    from sqlite_utils import Database

    db = Database(conn, execute_plugins=False)
    conn.execute("BEGIN IMMEDIATE")
    try:
        version = stored_version(conn)
        for number, (name, step) in enumerate(steps[version:], start=version + 1):
            step(db)
            if number == 1:
                facts = (
                    ("phaseid", "library"),
                    ("created_by", __version__),
                    ("digest", EMPTY_DIGEST),
                )
                conn.executemany("INSERT INTO meta VALUES (?, ?)", facts)
            conn.executemany(
                "INSERT OR REPLACE INTO meta VALUES (?, ?)",
                ((f"step {number}", name), ("schema_version", str(number))),
            )
        if finish is not None:
            finish(conn)
        conn.execute("COMMIT")
    except BaseException:
        if conn.in_transaction:
            conn.execute("ROLLBACK")
        raise
    return len(steps[version:])


def stored_version(conn: sqlite3.Connection) -> int:
    """Return the schema version a file states: 0 for an empty file, -1 for one that is not ours."""
    tables = {row[0] for row in conn.execute("SELECT name FROM sqlite_master WHERE type = 'table'")}
    if not tables:
        return 0
    if not {"meta", "phase"} <= tables:
        return -1
    facts = dict(conn.execute("SELECT key, value FROM meta"))
    if facts.get("phaseid") != "library" or not facts.get("schema_version", "").isdigit():
        return -1
    return int(facts["schema_version"])
