"""A question as SQL: each thing known of a phase as a condition, with the index that serves it."""

from __future__ import annotations

import os
import sqlite3
from dataclasses import dataclass
from itertools import combinations, permutations
from pathlib import Path
from typing import Any

from phaseid.errors import InputError
from phaseid.library.formulas import ATOMIC_NUMBER
from phaseid.library.question import Question

ORDER = "elements, formula_key, id"

_ENUMERATED = 12  # elements of which all sets are asked for one by one, 4096 at the most
_EDGE_INDEX = {"a_A": "phase_by_a", "b_A": "phase_by_b", "c_A": "phase_by_c"}


@dataclass(frozen=True, slots=True)
class Condition:
    """One thing that must hold: `where` as it stands in SQL, with `values` for its marks.

    `index` is the index of table `phase` that serves it, "" where none does; `ordered`: its rows
    come in the order of ORDER. `rows`, where not "", selects the rows from several indexes.
    `test` is the same as `where` for one row at a time, where that is said in another way.
    """

    where: str
    values: tuple[Any, ...] = ()
    index: str = ""
    ordered: bool = False
    rows: str = ""
    test: str = ""

    @property
    def selection(self) -> str:
        """SQL that selects the row numbers; "" where only all phases can be looked through."""
        if self.rows or not self.index:
            return self.rows
        return f"SELECT id FROM phase INDEXED BY {self.index} WHERE {self.where}"


def conditions(conn: sqlite3.Connection, question: Question) -> list[Condition]:
    """Return the conditions of a question beside its texts; raises InputError as `search`."""
    asked = []
    if question.must or question.only is not None or question.exclude:
        asked.append(_elements(conn, question))
    if question.space_group:
        number = space_group_number(question.space_group)
        index = "phase_by_space_group"
        asked.append(Condition("space_group_number = ?", (number,), index, ordered=True))
    if question.edges_A:
        asked.append(_edges(question.edges_A, question.tolerance))
    if question.density_g_cm3 is not None:
        low, high = question.density_g_cm3
        if not 0 <= low <= high:
            raise InputError(
                f"{low:g} to {high:g} g/cm³ is no range of densities", remedy="Write 2.6-2.7."
            )
        where = "density_g_cm3 BETWEEN ? AND ?"
        asked.append(Condition(where, (low, high), "phase_by_density"))
    if question.source:
        asked.append(_source(conn, question.source))
    if question.under:
        asked.append(out_of(question.under))
    return asked


def _elements(conn: sqlite3.Connection, question: Question) -> Condition:
    """The sets of elements are few where phases are many, and are looked through first."""
    must, only, exclude = question.must, question.only, question.exclude
    for symbol in must | (only or frozenset()) | exclude:
        if symbol not in ATOMIC_NUMBER:
            raise InputError(f"'{symbol}' is not an element symbol", remedy="Write e.g. Al,O.")
    inside = [f"instr(' ' || elements || ' ', ' {e} ') > 0" for e in sorted(must)]
    inside += [f"instr(' ' || elements || ' ', ' {e} ') = 0" for e in sorted(exclude)]
    if only is not None:
        allowed = ", ".join(f"'{symbol}'" for symbol in sorted(only))
        others = f"SELECT elements FROM holds WHERE symbol NOT IN ({allowed})"
        inside.append(f"elements NOT IN ({others})")
    where = " AND ".join(inside)
    index = "phase_by_elements"
    free = (only or frozenset()) - must - exclude
    if only is not None and len(free) <= _ENUMERATED:
        sets = ", ".join(f"'{elements}'" for elements in _sets_between(must - exclude, free))
    elif must or only:
        least = min(sorted(must or only or ()), key=lambda symbol: _sets_with(conn, symbol))
        named = [least] if must else sorted(only or ())
        symbols = ", ".join(f"'{symbol}'" for symbol in named)
        sets = f"SELECT elements FROM holds WHERE symbol IN ({symbols}) AND {where}"
    else:
        return Condition(where)
    return Condition(f"elements IN ({sets})", (), index, ordered=True, test=where)


def _sets_between(least: frozenset[str], free: frozenset[str]) -> list[str]:
    return [
        " ".join(sorted({*least, *more}))
        for count in range(len(free) + 1)
        for more in combinations(sorted(free), count)
    ]


def _sets_with(conn: sqlite3.Connection, symbol: str) -> int:
    (count,) = conn.execute("SELECT count(*) FROM holds WHERE symbol = ?", (symbol,)).fetchone()
    return int(count)


def _edges(edges_A: tuple[float, ...], tolerance: float) -> Condition:
    if len(edges_A) > 3 or not all(0 < edge < 1e4 for edge in edges_A):
        raise InputError(
            f"{', '.join(f'{edge:g}' for edge in edges_A)} are no cell edges",
            remedy="Give one to three lengths in Å, such as 4.76,12.99.",
        )
    if not 0 <= tolerance < 0.5:
        raise InputError(
            f"a tolerance of {tolerance:g} is out of range", remedy="Give one such as 1% or 0.005."
        )
    bounds = [(edge * (1 - tolerance), edge * (1 + tolerance)) for edge in edges_A]
    ways, selected = [], []
    for columns in permutations(_EDGE_INDEX, len(edges_A)):
        way = " AND ".join(f"{column} BETWEEN ? AND ?" for column in columns)
        ways.append(f"({way})")
        selected.append(f"SELECT id FROM phase INDEXED BY {_EDGE_INDEX[columns[0]]} WHERE {way}")
    values = tuple(bound for pair in bounds for bound in pair) * len(ways)
    return Condition(f"({' OR '.join(ways)})", values, rows=" UNION ".join(selected))


def space_group_number(text: str) -> int:
    """Return the number of a space group given by number or by symbol, in any setting.

    Raises InputError where it is neither.
    """
    wanted = text.strip()
    if wanted.isdecimal() and len(wanted) <= 3:
        if 1 <= int(wanted) <= 230:
            return int(wanted)
    elif wanted.isascii():
        import gemmi

        found = gemmi.find_spacegroup_by_name(wanted)
        if found is not None:
            return int(found.number)
    raise InputError(
        f"'{text}' is no space group", remedy="Give a number from 1 to 230 or a symbol: Fm-3m."
    )


def _source(conn: sqlite3.Connection, text: str) -> Condition:
    """A database, a number, or a database and a number, whichever the library has."""
    words = text.replace(":", " ").split()
    databases = {name.casefold(): name for name in databases_of(conn)}
    whole = " ".join(words).casefold()
    if whole in databases:
        where = "source_database = ?"
        return Condition(where, (databases[whole],), "phase_by_source", ordered=True)
    if not words:
        raise InputError("no source is given", remedy="Write COD, 9008460 or 'COD 9008460'.")
    database, number = " ".join(words[:-1]), words[-1]
    if database and database.casefold() not in databases:
        raise InputError(
            f"the library has nothing from '{database}'",
            remedy=f"It has entries from {', '.join(databases.values()) or 'nowhere'}.",
        )
    where = "source_id = ?"
    values = [number]
    if database:
        where += " AND +source_database = ?"
        values.append(databases[database.casefold()])
    return Condition(where, tuple(values), rows=f"SELECT id FROM phase WHERE {where}")


def databases_of(conn: sqlite3.Connection) -> list[str]:
    """Return the databases that entries came from."""
    names: list[str] = []
    next_one = "SELECT min(source_database) FROM phase WHERE source_database > ?"
    found = conn.execute("SELECT min(source_database) FROM phase").fetchone()[0]
    while found is not None:
        names.append(str(found))
        found = conn.execute(next_one, (found,)).fetchone()[0]
    return names


def out_of(path: str) -> Condition:
    """Return the condition for entries out of a file, a folder or an archive."""
    place = str(Path(path).absolute())
    ranges = [(place + mark, place + chr(ord(mark) + 1)) for mark in ("!", "#", os.sep)]
    ways = ["location = ?", *["location >= ? AND location < ?"] * len(ranges)]
    where = f"({' OR '.join(ways)})"
    values = (place, *(end for ends in ranges for end in ends))
    return Condition(where, values, rows=f"SELECT id FROM phase WHERE {where}")
