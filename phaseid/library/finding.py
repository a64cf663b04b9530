"""Finding phases by what is known of them: elements, formula, name, space group, cell, density.

What is asked is asked of every entry; shown is one entry of each phase, the one that stands for it
where that answers as well. How the question becomes SQL stands in `conditions`.
"""

from __future__ import annotations

import sqlite3
from dataclasses import dataclass
from math import log

from phaseid.errors import InputError
from phaseid.library.conditions import ORDER, Condition, conditions
from phaseid.library.formulas import formula_keys
from phaseid.library.groups import LISTED, counts_of, listed, one_of_each
from phaseid.library.lookups import FORMULAS, IDS, NAMES, Match, best_fits_first, matches, phases_of
from phaseid.library.phase import Phase
from phaseid.library.question import Question

COUNTED = 10_000
"""Entries that answer are counted up to here."""
_FEW = 2_000
_ALL = 40_000  # entries; a condition that more of them meet does not lead


@dataclass(frozen=True, slots=True)
class Found:
    """Phases that answer a question, the first of `total`.

    `entries` are the numbers of entries of each phase in the library, in the same order. `more`:
    counting stopped at `total`.
    """

    phases: tuple[Phase, ...]
    entries: tuple[int, ...]
    total: int
    more: bool = False


def search(
    conn: sqlite3.Connection, question: Question, *, limit: int | None, every_entry: bool = False
) -> Found:
    """Return the phases that answer, at most `limit`; with `every_entry` the entries themselves.

    By text the best fits come first, then the more trusted entries; by cell edges the nearest;
    otherwise the order is that of elements and composition. All answer a question that asks for
    nothing. Raises InputError for one that cannot be understood.
    """
    rows = _answers(conn, question, None if limit is None else COUNTED + 1)
    more = limit is not None and len(rows) > COUNTED
    rows = rows[:COUNTED] if more else rows
    if not every_entry:
        rows = one_of_each(conn, rows)
    shown = rows if limit is None else rows[:limit]
    phases, entries = phases_of(conn, shown), counts_of(conn, shown)
    return Found(tuple(phases), tuple(entries), len(rows), more)


def _answers(conn: sqlite3.Connection, question: Question, most: int | None) -> list[int]:
    if not question:
        limit = -1 if most is None else most
        every = conn.execute(f"SELECT id FROM phase ORDER BY {ORDER} LIMIT ?", (limit,))
        return [row for (row,) in every]
    asked = conditions(conn, question)
    fits = _fits(conn, question, None if asked else most)
    if fits is None:
        rows = _by_conditions(conn, asked, most, question.edges_A)
    elif not asked:
        rows = best_fits_first(conn, fits)
    elif len(fits) <= _FEW:
        rows = _that_answer(conn, best_fits_first(conn, fits), asked)
    else:
        common = set(_by_conditions(conn, asked, None, ()))
        rows = best_fits_first(conn, {row: fits[row] for row in fits if row in common})
    return rows


def _fits(
    conn: sqlite3.Connection, question: Question, most: int | None
) -> dict[int, Match] | None:
    """How the entries fit the texts of a question, by row; None where it has none.

    With `most`, of very many entries that fit one text badly no more are told.
    """
    if sum(map(bool, (question.text, question.ids, question.formula, question.name))) > 1:
        most = None
    asked: list[dict[int, Match]] = []
    if question.text:
        asked.append(matches(conn, question.text, most=most))
    if question.ids:
        asked.append(_numbered(conn, question.ids))
    if question.formula:
        if not formula_keys(question.formula, any_case=True):
            raise InputError(
                f"'{question.formula}' is no formula", remedy="Write one such as Al2O3."
            )
        asked.append(matches(conn, question.formula, FORMULAS))
    if question.name:
        asked.append(matches(conn, question.name, NAMES, most))
    if not asked:
        return None
    common = set.intersection(*map(set, asked))
    return {row: min(fits[row] for fits in asked) for row in common}


def _numbered(conn: sqlite3.Connection, ids: tuple[str, ...]) -> dict[int, Match]:
    found: dict[int, Match] = {}
    for wanted in ids:
        fits = matches(conn, wanted, IDS)
        if not fits:
            raise InputError(
                f"the library has no entry with the id or number '{wanted}'",
                remedy="Look it up: phaseid library find NAME-OR-FORMULA",
            )
        found |= fits
    return found


def _by_conditions(
    conn: sqlite3.Connection, asked: list[Condition], most: int | None, edges_A: tuple[float, ...]
) -> list[int]:
    """Return the rows that meet all conditions: the rarest leads, the others filter.

    Where nothing that leads is rare, the index of all that is asked for is walked in order.
    """
    counts = [_count(conn, condition) for condition in asked]
    lead = asked[min(range(len(asked)), key=counts.__getitem__)]
    rest = [condition for condition in asked if condition is not lead]
    limit = "" if most is None else f" LIMIT {most}"
    if lead.rows:
        rows = [row for (row,) in conn.execute(lead.rows, lead.values)]
        return _nearest_first(conn, _that_answer(conn, rows, rest), edges_A)
    rare = lead.ordered or min(counts) <= COUNTED
    if lead.index and rare and min(counts) < _ALL:
        index, tests = lead.index, [lead.where, *(condition.where for condition in rest)]
        asked = [lead, *rest]
    else:
        index, tests = "phase_by_elements", [one.test or one.where for one in asked]
    values = [value for condition in asked for value in condition.values]
    sql = f"SELECT id FROM phase INDEXED BY {index} WHERE {' AND '.join(tests)} ORDER BY {ORDER}"
    return [row for (row,) in conn.execute(sql + limit, values)]


def _count(conn: sqlite3.Connection, condition: Condition) -> int:
    if not condition.selection:
        return _ALL
    counted = f"SELECT count(*) FROM ({condition.selection} LIMIT {_ALL})"
    return int(conn.execute(counted, condition.values).fetchone()[0])


def _that_answer(conn: sqlite3.Connection, rows: list[int], asked: list[Condition]) -> list[int]:
    if not asked:
        return rows
    where = " AND ".join(condition.where for condition in asked)
    values = [value for condition in asked for value in condition.values]
    sql = f"SELECT id FROM phase WHERE id IN {LISTED} AND {where}"
    kept = {row for (row,) in conn.execute(sql, [listed(rows), *values])}
    return [row for row in rows if row in kept]


def _nearest_first(
    conn: sqlite3.Connection, rows: list[int], edges_A: tuple[float, ...]
) -> list[int]:
    """Sort by how far the best of the cell edges are from those asked for, where any are."""
    if not edges_A or len(rows) > _FEW:
        return rows
    sql = f"SELECT id, a_A, b_A, c_A FROM phase WHERE id IN {LISTED}"
    off = {
        row: max(min(abs(log(edge / own)) for own in cell) for edge in edges_A)
        for row, *cell in conn.execute(sql, (listed(rows),))
    }
    return sorted(rows, key=off.__getitem__)
