"""Reading rows that lie all over a large file: from many places at a time.

A disk that is asked for one page after the other is waited for a thousand times; asked for several
at once it is as fast as it can be. Each thread has a connection of its own; they wait, they do not
compute.
"""

from __future__ import annotations

import sqlite3
from collections.abc import Callable, Sequence
from contextlib import closing
from typing import Any

from phaseid.library.groups import listed

_AT_ONCE = 8


def read_rows(
    conn: sqlite3.Connection,
    another: Callable[[], sqlite3.Connection],
    sql: str,
    numbers: Sequence[int],
    few: int = 64,
) -> list[tuple[Any, ...]]:
    """Return what `sql` selects for a list of numbers, in any order.

    Its one mark stands for the list (`groups.LISTED`). `another` opens a connection to the same
    file; up to `few` numbers are not worth a thread. Raises sqlite3.Error as SQLite does.
    """
    ordered = sorted(numbers)
    if len(ordered) <= few:
        return conn.execute(sql, (listed(ordered),)).fetchall()
    share = -(-len(ordered) // _AT_ONCE)
    parts = [ordered[start : start + share] for start in range(0, len(ordered), share)]

    def read(part: list[int]) -> list[tuple[Any, ...]]:
        with closing(another()) as own:
            return own.execute(sql, (listed(part),)).fetchall()

    from concurrent.futures import ThreadPoolExecutor

    with ThreadPoolExecutor(_AT_ONCE) as pool:
        return [row for part in pool.map(read, parts) for row in part]
