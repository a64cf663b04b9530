"""Entries of a folder or archive that was read anew and no longer holds them."""

from __future__ import annotations

import sqlite3
from collections.abc import Collection, Iterable
from pathlib import Path

from phaseid.library.conditions import out_of
from phaseid.library.tally import Gone


def gone_from(
    conn: sqlite3.Connection, paths: Iterable[Path], met: Collection[int], refused: Iterable[str]
) -> list[Gone]:
    """Return the entries out of `paths` that no file there stands for any more.

    `met` are the rows that a file stands for, `refused` the locations of what could not be read:
    what is there and cannot be read is not gone. Nothing is deleted.
    """
    unread = set(refused)
    found: dict[int, Gone] = {}
    for path in paths:
        if str(path.absolute()) in unread or not path.exists():
            continue
        condition = out_of(str(path))
        rows = conn.execute(
            f"SELECT id, phase_id, name, location FROM phase WHERE {condition.where} ORDER BY id",
            condition.values,
        )
        for row, phase_id, name, location in rows:
            if row not in met and location.partition("#")[0] not in unread:
                found[row] = Gone(phase_id, name, location)
    return list(found.values())
