"""Which element a site is: from its type symbol, else its label, with the formula as referee.

Labels are written for people: "Wat1" is a water molecule, "HA" a hydrogen, "IX" an iodine, "HO2" a
hydrogen on an oxygen unless the formula holds holmium.
"""

from __future__ import annotations

import re
from dataclasses import dataclass
from functools import lru_cache

import gemmi

ELEMENTS: frozenset[str] = frozenset(gemmi.Element(z).name for z in range(1, 119))
_KNOWN = ELEMENTS | {"D"}
_LETTERS = re.compile(r"[A-Za-z]+")
_TYPE = re.compile(r"([A-Za-z]{1,2})(?:\d{0,2}\.?\d{0,4}[+-]|[+-]\d{0,2}\.?\d{0,4}|0\+?|)$")
_CHARGE = re.compile(r"(\d{0,2})\.?\d{0,4}([+-])(\d{0,2})")
_WATER = re.compile(r"(wat|h2o|hoh|ow|aq)", re.IGNORECASE)
_DUMMY = re.compile(r"(cg|cnt|cent\w*|dum\w*|vac\w*|void|max|min|q)\d*$", re.IGNORECASE)
_HYDROXYL = re.compile(r"oh", re.IGNORECASE)
_FORMULA_TOKEN = re.compile(r"([A-Z][a-z]?)\s*(\d*\.?\d*)|([([{])|([)\]}])\s*(\d*\.?\d*)|[\s,*]+")


@dataclass(frozen=True, slots=True)
class Species:
    """What a site holds: an element symbol ("" if it cannot be told), a charge, how it was read.

    `reading` is "" when a type symbol or an ordinary label says it plainly, "water" for water and
    hydroxyl labels, "label" for a label that had to be interpreted, "dummy" for a point that is no
    atom (centroid, vacancy, residual peak).
    """

    element: str
    charge: int = 0
    reading: str = ""


UNKNOWN = Species("")


@lru_cache(maxsize=8192)
def species(type_symbol: str, label: str, formula: frozenset[str]) -> Species:
    """Return what a site of this type symbol and label is.

    `formula` holds the elements of the stated formula, none if the source states none.
    """
    if type_symbol not in ("", "?", "."):
        typed = _from_type(type_symbol)
        if typed.element:
            return typed
        spelled = _from_label(type_symbol, formula)
        if spelled.element:
            return Species(spelled.element, spelled.charge, spelled.reading or "label")
    return _from_label(label, formula)


def parse_formula(text: str) -> dict[str, float] | None:
    """Return the amounts in a formula such as "(Ca.8 Na.2) Si O3"; None if it is unreadable."""
    stack: list[dict[str, float]] = [{}]
    position = 0
    while position < len(text):
        token = _FORMULA_TOKEN.match(text, position)
        if token is None or token.end() == position:
            return None
        position = token.end()
        symbol, amount, opening, closing, factor = token.groups()
        if symbol:
            if symbol not in _KNOWN or amount == ".":
                return None
            stack[-1][symbol] = stack[-1].get(symbol, 0.0) + float(amount or 1)
        elif opening:
            stack.append({})
        elif closing:
            if len(stack) == 1 or factor == ".":
                return None
            for element, n in stack.pop().items():
                stack[-1][element] = stack[-1].get(element, 0.0) + n * float(factor or 1)
    if len(stack) != 1:
        return None
    return {element: n for element, n in stack[0].items() if n > 0} or None


def _from_type(symbol: str) -> Species:
    match = _TYPE.match(symbol)
    if match is None:
        return UNKNOWN
    element = match.group(1).capitalize()
    if element not in _KNOWN:
        return UNKNOWN
    return Species(element, _charge(symbol[match.end(1) :]))


def _charge(text: str) -> int:
    match = _CHARGE.match(text)
    if match is None:
        return 0
    size = int(match.group(1) or match.group(3) or 1)
    return -size if match.group(2) == "-" else size


def _from_label(label: str, formula: frozenset[str]) -> Species:
    if _DUMMY.match(label):
        return Species("", 0, "dummy")
    match = _LETTERS.match(label)
    if match is None:
        return UNKNOWN
    letters = match.group()
    if _WATER.match(letters) or (letters == "W" and "W" not in formula and "O" in formula):
        return Species("O", 0, "water")
    one, two = letters[0].upper(), letters[:2].capitalize()
    plain = letters == one or letters == two  # "O", "Si"; not "SI", "HA", "Wat"
    fitting = [el for el in (two, one) if el in _KNOWN and (not formula or el in formula)]
    if _HYDROXYL.fullmatch(letters) and "O" in (formula or {"O"}):
        return Species("O", 0, "water")
    if plain and two in fitting:
        return Species(two, _charge(label[len(letters) :]))
    if plain and letters in _KNOWN:  # stands in no formula, yet is an element plainly written
        if formula and letters not in formula and len(letters) == 2 and one in fitting:
            return Species(one, 0, "label")
        return Species(letters, _charge(label[len(letters) :]))
    if formula:
        return Species(fitting[0], 0, "label") if fitting else UNKNOWN
    # no formula to ask: capitals mean one-letter elements first, as in "HA", "OW", "CB"
    for element in (one, two) if letters[:2].isupper() else (two, one):
        if element in _KNOWN:
            return Species(element, 0, "label")
    return UNKNOWN
