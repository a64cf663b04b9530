"""The strongest lines of every phase as small whole numbers: what a search looks through first.

For each kind of probe a phase has 24 places, its strongest lines first: `code` says where a line
stands, `level` how strong it is. Phases lie together in blocks of 4096, in the order of their row
numbers, so that a library of half a million is read in a few hundred pieces.
"""

from __future__ import annotations

import sqlite3
import struct
from bisect import bisect_left
from collections.abc import Callable, Iterable, Mapping
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

from phaseid.library.groups import LISTED
from phaseid.library.packing import KINDS, Kind, strengths
from phaseid.library.scattered import read_rows

if TYPE_CHECKING:
    import numpy as np
    from numpy.typing import NDArray

    from phaseid.crystal.lines import Lines

PLACES = 24
"""Lines kept per phase and kind of probe."""
CODE_STEP = 1e-4
CODE_AT_1_A = 10_000
"""A line stands at `CODE_AT_1_A` + ln(d / Å) / `CODE_STEP`, from 0.37 to 257 Å; 0: no line."""
LEVEL_STEP = 1 / 32
"""`level` is ln(strongest / own m|F|²d²) / `LEVEL_STEP`; 255: no line."""
NO_LINE = 255

BLOCK = 4096
"""Phases of a block: those of row numbers block × 4096 to block × 4096 + 4095."""

Parts = Mapping[str, bytes]
"""What a phase adds to each part of its block, but its row number."""

# bytes a phase takes in each part of a block
_SIZE = {"row": 8, "elements": 16, "quality": 8} | dict.fromkeys(KINDS, 3 * PLACES)


@dataclass(frozen=True, slots=True, eq=False)
class StrongLines:
    """The strongest lines of p phases for one kind of probe, and what a choice of phases needs.

    `row` (p,) int64 is the phase's row number, rising; `elements_mask` (p, 2) uint64 and `quality`
    (p,) float64 are as in `LineTable`; `code` (p, 24) uint16 and `level` (p, 24) uint8 as above,
    strongest first.
    """

    row: NDArray[np.int64]
    elements_mask: NDArray[np.uint64]
    quality: NDArray[np.float64]
    code: NDArray[np.uint16]
    level: NDArray[np.uint8]

    def __len__(self) -> int:
        return len(self.row)


def strongest_lines(lines: Lines) -> dict[Kind, bytes]:
    """Return the 24 codes and levels of a phase for each kind of probe, as stored."""
    import numpy as np

    place = np.clip(np.rint(np.log(lines.d_A) / CODE_STEP) + CODE_AT_1_A, 1, 65535)
    found = {}
    for kind, strength in zip(KINDS, strengths(lines), strict=True):
        order = np.argsort(-strength, kind="stable")[:PLACES]
        order = order[strength[order] > 0]
        code = np.zeros(PLACES, dtype="<u2")
        level = np.full(PLACES, NO_LINE, dtype=np.uint8)
        if len(order):
            below = np.log(strength[order[0]] / strength[order])
            code[: len(order)] = place[order]
            level[: len(order)] = np.minimum(np.rint(below / LEVEL_STEP), NO_LINE - 1)
        found[kind] = code.tobytes() + level.tobytes()
    return found


def block_parts(elements_bits: int, quality: float, strong: Mapping[Kind, bytes]) -> Parts:
    """Return what a phase adds to its block; `elements_bits` as in `LineTable.elements_mask`."""
    own = {"elements": elements_bits.to_bytes(16, "little"), "quality": struct.pack("<d", quality)}
    return own | {str(kind): data for kind, data in strong.items()}


def write_blocks(conn: sqlite3.Connection, changed: Mapping[int, Parts]) -> None:
    """Put the phases `changed` (by row number) into their blocks, new or in place of the old."""
    blocks: dict[int, list[int]] = {}
    for row in sorted(changed):
        blocks.setdefault(row // BLOCK, []).append(row)
    for number, rows in blocks.items():
        held = conn.execute("SELECT part, data FROM block WHERE number = ?", (number,))
        parts = {part: bytearray() for part in _SIZE} | {p: bytearray(data) for p, data in held}
        present = [row for (row,) in struct.iter_unpack("<q", parts["row"])]
        for row in rows:
            at = bisect_left(present, row)
            old = at < len(present) and present[at] == row
            if not old:
                present.insert(at, row)
            for part, data in (("row", struct.pack("<q", row)), *changed[row].items()):
                size = _SIZE[part]
                parts[part][at * size : (at + old) * size] = data
        conn.executemany(
            "INSERT OR REPLACE INTO block VALUES (?, ?, ?)",
            [(part, number, bytes(data)) for part, data in parts.items()],
        )


def drop_from_blocks(conn: sqlite3.Connection, rows: Iterable[int]) -> None:
    """Take phases, by row number, out of their blocks."""
    blocks: dict[int, set[int]] = {}
    for row in rows:
        blocks.setdefault(row // BLOCK, set()).add(row)
    for number, gone in blocks.items():
        held = conn.execute("SELECT part, data FROM block WHERE number = ?", (number,))
        parts = {part: bytes(data) for part, data in held}
        present = [row for (row,) in struct.iter_unpack("<q", parts["row"])]
        left = [at for at, row in enumerate(present) if row not in gone]
        if not left:
            conn.execute("DELETE FROM block WHERE number = ?", (number,))
            continue
        for part, data in parts.items():
            size = _SIZE[part]
            kept = b"".join(data[at * size : (at + 1) * size] for at in left)
            conn.execute(
                "UPDATE block SET data = ? WHERE part = ? AND number = ?", (kept, part, number)
            )


def block_rows(conn: sqlite3.Connection) -> list[int]:
    """Return the row numbers of the phases in all blocks, as they lie there."""
    found = conn.execute("SELECT data FROM block WHERE part = 'row' ORDER BY number")
    return [row for (data,) in found for (row,) in struct.iter_unpack("<q", data)]


def in_block(conn: sqlite3.Connection, row: int) -> Parts:
    """Return what the block of a phase holds of it; nothing where it is in none."""
    held = conn.execute("SELECT part, data FROM block WHERE number = ?", (row // BLOCK,))
    parts = {part: bytes(data) for part, data in held}
    present = [other for (other,) in struct.iter_unpack("<q", parts.pop("row", b""))]
    if row not in present:
        return {}
    at = present.index(row)
    return {part: data[at * _SIZE[part] : (at + 1) * _SIZE[part]] for part, data in parts.items()}


def read_blocks(
    conn: sqlite3.Connection, another: Callable[[], sqlite3.Connection], kind: Kind
) -> StrongLines:
    """Return the strongest lines of every phase of a library, in the order of `line_table`.

    `another` opens a connection to the same file: blocks lie all over it.
    """
    import numpy as np

    numbers = [n for (n,) in conn.execute("SELECT number FROM block WHERE part = 'row' ORDER BY 1")]
    wanted = (
        "SELECT part, number, data FROM block "
        f"WHERE part IN ('row', 'elements', 'quality', '{kind}') AND number IN {LISTED}"
    )
    found = read_rows(conn, another, wanted, numbers, few=2)
    held = {(part, number): data for part, number, data in found}

    def part(name: str, dtype: Any) -> NDArray[Any]:
        return np.frombuffer(b"".join(held[name, number] for number in numbers), dtype=dtype)

    lines = part(kind, [("code", "<u2", (PLACES,)), ("level", "u1", (PLACES,))])
    return StrongLines(
        row=part("row", "<i8"),
        elements_mask=part("elements", "<u8").reshape(-1, 2),
        quality=part("quality", "<f8"),
        code=lines["code"],
        level=lines["level"],
    )
