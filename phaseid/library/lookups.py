"""Which phase a person means: by id, formula, source number, name or part of a name."""

from __future__ import annotations

import difflib
import sqlite3
from collections.abc import Callable, Iterator, Mapping, Sequence
from dataclasses import dataclass
from enum import IntEnum
from typing import Any

from phaseid.crystal.crystal import Source
from phaseid.errors import InputError
from phaseid.library.cautions import cautions_for
from phaseid.library.formulas import (
    ELEMENT_NAMED,
    composition_key,
    formula_keys,
    name_key,
    near_compositions,
)
from phaseid.library.groups import LISTED, listed, one_of_each
from phaseid.library.phase import Phase
from phaseid.library.records import findings_from_json

PHASE_COLUMNS = (
    "phase_id, name, formula, elements, space_group_number, space_group_symbol, "
    "a_A, b_A, c_A, alpha_deg, beta_deg, gamma_deg, volume_A3, density_g_cm3, "
    "source_database, source_id, source_file, source_reference, findings, quality, formula_key"
)

_SHOWN_CHOICES = 12
_NAME_SHOWN = 30  # characters, so that a choice fits on a line
_SUGGESTIONS = 5
_TRIGRAM = 3
_NAMES_COMPARED = 20_000
_SORTED = 2_000  # entries for which name and trust are read to sort them
_LAST = "\U0010ffff"  # sorts behind every letter
_CLEARLY_BETTER = 0.2  # in quality: an entry this far ahead of the others is the one meant
_SAME_CELL = 0.02  # relative edge difference within which two entries are one and the same phase


class Match(IntEnum):
    """How a text fits a phase, best first."""

    ID = 0
    NUMBER = 1
    FORMULA = 2
    NAME = 3
    ELEMENT = 4
    FORMULA_ANY_CASE = 5
    NAME_FIRST_WORDS = 6
    NAME_WORDS = 7
    NAME_STARTS = 8
    NAME_HOLDS = 9
    FORMULA_NEAR = 10


@dataclass(frozen=True, slots=True)
class Hit:
    """A phase found, and how the text fits it."""

    match: Match
    phase: Phase


def phase_from_row(row: Sequence[Any]) -> Phase:
    """Build a phase from a row of PHASE_COLUMNS; cautions follow today's rules."""
    elements = tuple(row[3].split())
    return Phase(
        phase_id=row[0],
        name=row[1],
        formula=row[2],
        elements=elements,
        space_group_number=row[4],
        space_group_symbol=row[5],
        cell=(row[6], row[7], row[8], row[9], row[10], row[11]),
        volume_A3=row[12],
        density_g_cm3=row[13],
        source=Source(*row[14:18]),
        findings=findings_from_json(row[18]),
        cautions=cautions_for(row[1], row[20], elements, row[4]),
        quality=row[19],
    )


Kinds = frozenset[str]

FORMULAS: Kinds = frozenset({"formula"})
NAMES: Kinds = frozenset({"name"})
IDS: Kinds = frozenset({"id"})
ANYTHING = FORMULAS | NAMES | IDS


def find(conn: sqlite3.Connection, text: str) -> list[Hit]:
    """Return the phases that `text` can mean: exact fits first, then the more trusted entries.

    One entry of each phase: the one that stands for it, where `text` can mean that one, too.
    """
    fits = matches(conn, text)
    rows = one_of_each(conn, best_fits_first(conn, fits))
    return [Hit(fits[row], phase) for row, phase in zip(rows, phases_of(conn, rows), strict=True)]


def matches(
    conn: sqlite3.Connection, text: str, kinds: Kinds = ANYTHING, most: int | None = None
) -> dict[int, Match]:
    """Return how every entry that `text` can mean fits it, by row; `kinds` says what it may be.

    With `most`, of the names that only hold the text no more than so many are looked at.
    """
    found: dict[int, Match] = {}

    def note(match: Match, row_id: int) -> None:
        found[row_id] = min(match, found.get(row_id, match))

    def note_all(match: Match, sql: str, value: str) -> None:
        for (row_id,) in conn.execute(sql, (value,)):
            note(match, row_id)

    wanted, key = text.strip(), name_key(text)
    literal = formula_keys(wanted) if "formula" in kinds else []
    if "id" in kinds:
        _note_numbers(conn, wanted, note)
    if "formula" in kinds:
        by_formula = "SELECT id FROM phase WHERE formula_key = ?"
        for formula_key in literal:
            note_all(Match.FORMULA, by_formula, formula_key)
        if key in ELEMENT_NAMED and "name" in kinds:
            note_all(Match.ELEMENT, by_formula, composition_key({ELEMENT_NAMED[key]: 1.0}))
        if not literal or "name" in kinds:  # who says that it is a formula minds the capitals
            for formula_key in formula_keys(wanted, any_case=True):
                note_all(Match.FORMULA_ANY_CASE, by_formula, formula_key)
    if "name" in kinds:
        for row_id, name in _names(conn, key, exact=bool(literal), most=most):
            note(_name_match(key, name), row_id)
    if literal and not found:
        elements = " ".join(sorted(part.rstrip("0123456789.") for part in literal[0].split()))
        by_elements = "SELECT id, formula_key FROM phase WHERE elements = ?"
        for row_id, formula_key in conn.execute(by_elements, (elements,)):
            if near_compositions(formula_key, literal[0]):
                note(Match.FORMULA_NEAR, row_id)
    return found


def _note_numbers(
    conn: sqlite3.Connection, wanted: str, note: Callable[[Match, int], None]
) -> None:
    """Note the phase of that id, and the entries of that source number."""
    for (row_id,) in conn.execute("SELECT id FROM phase WHERE phase_id = ?", (wanted,)):
        note(Match.ID, row_id)
    by_number = "SELECT phase FROM label WHERE kind = 'number' AND key = ?"
    for (row_id,) in conn.execute(by_number, (wanted.casefold(),)):
        note(Match.NUMBER, row_id)
    database, named, number = wanted.casefold().replace(":", " ").rpartition(" ")
    if named:  # "COD 9008460"
        both = (number, f"{database.strip()} {number}")
        for (row_id,) in conn.execute(by_number + " AND lower(text) = ?", both):
            note(Match.NUMBER, row_id)


def best_fits_first(conn: sqlite3.Connection, fits: Mapping[int, Match]) -> list[int]:
    """Return rows, best fits first, then the more trusted, by name and phase id.

    Of very many, who wants more than the first has asked too little: these are sorted by fit alone.
    """
    if len(fits) > _SORTED:
        return sorted(fits, key=lambda row: (fits[row], row))
    sql = f"SELECT quality, name, phase_id, id FROM phase WHERE id IN {LISTED}"
    order = [
        (fits[row], -quality, name, phase_id, row)
        for quality, name, phase_id, row in conn.execute(sql, (listed(fits),))
    ]
    return [entry[-1] for entry in sorted(order)]


def phases_of(conn: sqlite3.Connection, rows: Sequence[int]) -> list[Phase]:
    """Return the phases of the rows, in that order."""
    sql = f"SELECT id, {PHASE_COLUMNS} FROM phase WHERE id IN {LISTED}"
    found = {row[0]: phase_from_row(row[1:]) for row in conn.execute(sql, (listed(rows),))}
    return [found[row] for row in rows]


def _names(
    conn: sqlite3.Connection, key: str, *, exact: bool, most: int | None
) -> Iterator[tuple[int, str]]:
    """Yield (row of the phase, name key) of every name that holds `key`.

    `exact`: only those that equal it; who writes a formula does not mean a name that holds it.
    `most` names at most that do not begin with it.
    """
    by_name = "SELECT phase, key FROM label WHERE kind = 'name' AND "
    if not key:
        return
    if exact:
        yield from conn.execute(by_name + "key = ?", (key,))
        return
    yield from conn.execute(by_name + "key >= ? AND key < ?", (key, key + _LAST))
    words = key.split()
    long = " AND ".join(f'"{word}"' for word in words if len(word) >= _TRIGRAM)
    short = [word for word in words if len(word) < _TRIGRAM]  # the index does not know them
    if long:
        yield from conn.execute(
            "SELECT phase, label.key FROM label_fts JOIN label ON label.id = label_fts.rowid "
            "WHERE label_fts MATCH ? AND kind = 'name'"
            + " AND instr(label.key, ?) > 0" * len(short)
            + " LIMIT ?",
            (long, *short, -1 if most is None else most),
        )


def _name_match(key: str, name: str) -> Match:
    if name == key:
        return Match.NAME
    if name.startswith(f"{key} "):
        return Match.NAME_FIRST_WORDS
    if f" {key} " in f" {name} ":
        return Match.NAME_WORDS
    return Match.NAME_STARTS if name.startswith(key) else Match.NAME_HOLDS


def choose(conn: sqlite3.Connection, text: str) -> Phase:
    """Return the one phase that `text` means; raises InputError where that is not clear."""
    hits = find(conn, text)
    if not hits:
        raise InputError(f"the library has no phase called '{text}'", remedy=_nearest(conn, text))
    best = hits[0].match
    candidates = [hit.phase for hit in hits if hit.match == best]
    leader = candidates[0]
    rivals = [
        phase
        for phase in candidates[1:]
        if not _same(leader, phase) and phase.quality > leader.quality - _CLEARLY_BETTER
    ]
    if not rivals:
        return leader
    raise InputError(
        f"'{text}' can mean several phases",
        remedy="Give the phase id, or a name that only one of them has:\n"
        + _table([leader, *rivals]),
    )


def _same(one: Phase, other: Phase) -> bool:
    """Whether two entries describe one phase: formula, space group, nearly the same cell."""
    return (
        formula_keys(one.formula) == formula_keys(other.formula)
        and one.space_group_number == other.space_group_number
        and all(abs(a - b) <= _SAME_CELL * a for a, b in zip(one.cell, other.cell, strict=True))
    )


def _table(phases: Sequence[Phase]) -> str:
    rows = [
        (
            phase.phase_id,
            _cut(phase.name),
            phase.space_group_symbol,
            " ".join(f"{edge:.2f}" for edge in phase.cell[:3]) + " Å",
        )
        for phase in phases[:_SHOWN_CHOICES]
    ]
    widths = [max(map(len, column)) for column in zip(*rows, strict=True)]
    lines = [
        "  " + "  ".join(cell.ljust(w) for cell, w in zip(row, widths, strict=True)).rstrip()
        for row in rows
    ]
    if len(phases) > _SHOWN_CHOICES:
        lines.append(f"  and {len(phases) - _SHOWN_CHOICES} more: phaseid library find shows all")
    return "\n".join(lines)


def _cut(name: str) -> str:
    return name if len(name) <= _NAME_SHOWN else f"{name[: _NAME_SHOWN - 1]}…"


def _nearest(conn: sqlite3.Connection, text: str) -> str:
    """Say which names with the same first letter come closest, and what else can be done."""
    key = name_key(text)
    named = conn.execute(
        "SELECT key, text FROM label WHERE kind = 'name' AND key >= ? AND key < ? LIMIT ?",
        (key[:1], key[:1] + _LAST, _NAMES_COMPARED),
    )
    names = dict(named.fetchall())
    close = difflib.get_close_matches(key, names, n=_SUGGESTIONS, cutoff=0.6)
    if close:
        return f"Close names: {', '.join(names[name] for name in close)}."
    return "Give a formula, a mineral name, a source number or a CIF file; or add the structure."
