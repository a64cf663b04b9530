"""The schema step that makes a library compact: lines packed, operations kept once, blocks.

`lines` holds packed lines as `packing` describes them; `symmetry` every set of operations once,
`structure` the rest of a structure beside the number of its set; `block` the strongest lines as
`strongest` describes them; `seen` has no row numbers, and only entries without a number of a
database are looked up by `location`. Nothing is lost by packing: what it rounds follows from the
structure.
"""

from __future__ import annotations

import json
import zlib
from typing import TYPE_CHECKING

from phaseid.library.linetable import elements_bits
from phaseid.library.packing import pack_lines
from phaseid.library.records import SEPARATOR, compressed, symmetry_row
from phaseid.library.strongest import BLOCK, block_parts, strongest_lines, write_blocks

if TYPE_CHECKING:
    from collections.abc import Mapping

    from sqlite_utils import Database

    from phaseid.crystal.lines import Lines

_STATEMENTS = (
    "CREATE TABLE symmetry (id INTEGER PRIMARY KEY, operations TEXT NOT NULL UNIQUE)",
    "ALTER TABLE structure ADD COLUMN symmetry INTEGER",
    "CREATE TABLE block (part TEXT, number INTEGER, data BLOB, PRIMARY KEY (part, number))",
    "ALTER TABLE seen RENAME TO seen_before",
    """
    CREATE TABLE seen (digest TEXT, content TEXT, PRIMARY KEY (digest, content)) WITHOUT ROWID
    """,
    "INSERT INTO seen SELECT digest, content FROM seen_before",
    "DROP TABLE seen_before",
    "DROP INDEX idx_phase_location",
    "CREATE INDEX idx_phase_location ON phase (location) WHERE source_id = ''",
)

_ROWS = """
    SELECT phase.id, elements, quality, structure.data, lines.data,
        volume_A3, complete_to_A, floor
    FROM phase JOIN structure ON structure.phase = phase.id JOIN lines ON lines.phase = phase.id
    WHERE phase.id > ? ORDER BY phase.id LIMIT ?
"""


def compact_tables(db: Database) -> None:
    """Make the tables and bring every phase into them."""
    conn = db.conn
    for statement in _STATEMENTS:
        conn.execute(statement)
    done = 0
    while rows := conn.execute(_ROWS, (done, BLOCK)).fetchall():
        changed: dict[int, Mapping[str, bytes]] = {}
        for row, elements, quality, structure, packed, *range_of_lines in rows:
            lines = _lines(packed, *range_of_lines)
            operations, data = _parted(structure)
            held = (symmetry_row(conn, operations), data, row)
            conn.execute("UPDATE structure SET symmetry = ?, data = ? WHERE phase = ?", held)
            conn.execute("UPDATE lines SET data = ? WHERE phase = ?", (pack_lines(lines), row))
            bits = elements_bits(elements.split())
            changed[row] = block_parts(bits, quality, strongest_lines(lines))
        write_blocks(conn, changed)
        done = rows[-1][0]


def _parted(structure: bytes) -> tuple[str, bytes]:
    """Return the operations of a structure as the first tables hold it, and the rest of it."""
    held = json.loads(zlib.decompress(structure))
    return SEPARATOR.join(held.pop("operations")), compressed(held)


def _lines(data: bytes, volume_A3: float, complete_to_A: float, floor: float) -> Lines:
    """Return the lines of a phase as the first tables hold them, a record after another."""
    import numpy as np

    from phaseid.crystal.lines import Lines

    f2 = ("f2_xray", "f2_electron", "f2_neutron")
    record = [("d_A", "<f8"), ("hkl", "<i2", (3,)), ("multiplicity", "<i4")]
    records = np.frombuffer(data, dtype=np.dtype([*record, *((name, "<f4") for name in f2)]))
    return Lines(
        d_A=records["d_A"],
        hkl=records["hkl"].astype(np.int32),
        multiplicity=records["multiplicity"].astype(np.int32),
        **{name: records[name].astype(np.float64) for name in f2},
        volume_A3=volume_A3,
        complete_to_A=complete_to_A,
        floor=floor,
    )
