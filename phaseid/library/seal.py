"""A checksum over the whole library file, so that no damaged bit is taken for an answer.

It stands in the "user version" of the SQLite header (file format, section 1.3), which SQLite leaves
to applications, and leaves out what SQLite itself changes when it is written. A writer breaks the
seal before it changes anything and seals the file when it is done: a file without a seal (0) was
left by a killed writer, is being written, or is too large; it is then not checked as a whole. The
"application id" keeps SQLite's count of changes at the time of sealing: where another program has
written to the file since, the seal is void, not broken.
"""

from __future__ import annotations

import sqlite3
import zlib
from io import FileIO
from pathlib import Path

MOST_BYTES = 1 << 28  # a tenth of a second's reading
_PIECE = 1 << 20
_HEADER = 100
_AT = slice(60, 64)
_CHANGES = slice(24, 28)
_SEALED_AT = slice(68, 72)
_LEFT_OUT = (_CHANGES, _AT, _SEALED_AT, slice(92, 100))
_TRIES = 3


def is_broken(path: Path) -> bool:
    """Whether a file is sealed and its bytes are not those that were sealed."""
    if path.stat().st_size > MOST_BYTES:
        return False
    with path.open("rb", buffering=0) as file:
        for _ in range(_TRIES):
            stored = _stored(file)
            if stored in (0, _due(file)):
                return False
            if _stored(file) == stored:
                return True
    return False  # somebody writes, one change after the other


def break_seal(conn: sqlite3.Connection) -> None:
    """Mark the file as about to change; in the file itself, before any journal holds changes."""
    if conn.execute("PRAGMA user_version").fetchone()[0]:
        conn.execute("PRAGMA user_version = 0")


def seal(conn: sqlite3.Connection, path: Path) -> None:
    """Seal a file that no journal stands beside; raises sqlite3.OperationalError if it is used."""
    with path.open("rb", buffering=0) as file:  # closing it drops our locks: not before the end
        conn.execute("BEGIN EXCLUSIVE")
        try:
            due = _due(file) if path.stat().st_size <= MOST_BYTES else 0
            changes = _signed(_header(file)[_CHANGES]) + 1  # this one counts, too
            conn.execute(f"PRAGMA user_version = {due}")
            conn.execute(f"PRAGMA application_id = {changes}")
            conn.execute("COMMIT")
        except BaseException:
            if conn.in_transaction:
                conn.execute("ROLLBACK")
            raise


def _stored(file: FileIO) -> int:
    """Return the seal of a file, 0 where it has none or a void one."""
    head = _header(file)
    return _signed(head[_AT]) if head[_CHANGES] == head[_SEALED_AT] else 0


def _due(file: FileIO) -> int:
    """Return the seal that the bytes of a file ask for, never 0."""
    head = _header(file)
    for part in _LEFT_OUT:
        head[part] = bytes(part.stop - part.start)
    found = zlib.crc32(head)
    while piece := file.read(_PIECE):
        found = zlib.crc32(piece, found)
    return _signed((found or 1).to_bytes(4, "big"))


def _header(file: FileIO) -> bytearray:
    file.seek(0)
    return bytearray(file.read(_HEADER))


def _signed(data: bytes | bytearray) -> int:
    return int.from_bytes(data, "big", signed=True)
