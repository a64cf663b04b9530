"""From the cells of one ring, as typed, to numbers; every slip is told, none is guessed away."""

from __future__ import annotations

import re
import unicodedata
from difflib import get_close_matches
from math import isfinite, sqrt
from typing import NamedTuple

from phaseid.rings.camera import last_digit
from phaseid.rings.ringlist import GRADES

NAN = float("nan")

_NUMBER = r"[+-]?(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:[eE][+-]?\d{1,3})?"
_POSITION = re.compile(rf"({_NUMBER})\s*(?:\(\s*(\d{{1,4}})\s*\))?")
_PERCENT = re.compile(rf"({_NUMBER})\s*(%)?")
_LIMIT = re.compile(rf"({_NUMBER})\s*%?\s*(?:\(.*\))?")  # a remark may follow in brackets
_GRADE_WORDS = {
    "very strong": "vs",
    "strong": "s",
    "st": "s",
    "vst": "vs",
    "medium strong": "ms",
    "medium": "m",
    "med": "m",
    "medium weak": "mw",
    "weak": "w",
    "very weak": "vw",
}


class Refused(ValueError):  # noqa: N818 - read as a sentence: the cell was refused
    """A cell that cannot be used; the message is the reason."""


class Position(NamedTuple):
    """Value, its sigma in brackets (NaN if none), and the place value of the last digit."""

    value: float
    sigma: float
    step: float


class Intensity(NamedTuple):
    """A number (grade "") or a grade with its interval; NaN throughout where absent."""

    value: float
    low: float
    high: float
    grade: str


def read_position(text: str, name: str) -> Position:
    """A position above zero, with its sigma in brackets where given: "2.338", "2.338(5)"."""
    plain = _plain(text)
    if not plain:
        raise Refused(f"{name} is missing")
    match = _POSITION.fullmatch(plain)
    if match is None:
        raise Refused(f"{name} '{text.strip()}' is not a number")
    value = _float(match[1])
    if value <= 0:
        raise Refused(f"{name} is {'zero' if value == 0 else 'negative'} ({match[1]})")
    step = last_digit(match[1])
    sigma = int(match[2]) * step if match[2] else NAN
    if sigma == 0:
        raise Refused(f"the sigma in '{text.strip()}' is zero")
    return Position(value, sigma, step)


def read_sigma(text: str, position: float) -> float:
    """A sigma above zero in the unit of the position, or in percent of it; NaN where absent."""
    plain = _plain(text)
    if not plain:
        return NAN
    match = _PERCENT.fullmatch(plain)
    if match is None:
        raise Refused(f"sigma '{text.strip()}' is not a number")
    value = _float(match[1]) * (0.01 * position if match[2] else 1.0)
    if value <= 0:
        raise Refused(f"sigma is {'zero' if value == 0 else 'negative'} ({match[1]})")
    return value


def read_intensity(text: str) -> Intensity:
    """A number from zero up (zero counts as absent) or a grade."""
    plain = _plain(text)
    if not plain or plain in ("-", "?"):
        return Intensity(NAN, NAN, NAN, "")
    if match := _PERCENT.fullmatch(plain):
        value = _float(match[1])
        if value < 0:
            raise Refused(f"intensity is negative ({match[1]})")
        value = value if value > 0 else NAN
        return Intensity(value, value, value, "")
    words = re.sub(r"[\s._-]+", " ", plain.lower()).strip()
    grade = _GRADE_WORDS.get(words, words.replace(" ", ""))
    if grade not in GRADES:
        close = get_close_matches(grade, GRADES, n=1, cutoff=0.6)
        hint = f", did you mean '{close[0]}'?" if close else ""
        raise Refused(f"intensity '{text.strip()}' is neither a number nor vs s m w vw{hint}")
    low, high = GRADES[grade]
    return Intensity(sqrt(low * high), low, high, grade)


def read_unevenness(text: str, name: str) -> float:
    """A relative scatter of the intensity along a ring, zero or above; NaN where absent."""
    plain = _plain(text)
    if not plain or plain in ("-", "?"):
        return NAN
    match = _PERCENT.fullmatch(plain)
    if match is None:
        raise Refused(f"{name} '{text.strip()}' is not a number")
    value = _float(match[1]) * (0.01 if match[2] else 1.0)
    if value < 0:
        raise Refused(f"{name} is negative ({match[1]})")
    return value


def read_limit(text: str, factor: float) -> float:
    """A detection limit times `factor`, which puts the strongest ring at 100."""
    match = _LIMIT.fullmatch(_plain(text))
    limit = factor * _float(match[1]) if match else NAN
    if not 0 < limit < 100:
        raise Refused(f"detection limit '{text}' is no intensity below that of the strongest ring")
    return limit


def _plain(text: str) -> str:
    return unicodedata.normalize("NFKC", text).strip().replace("−", "-")


def _float(number: str) -> float:
    value = float(number.replace(",", "."))
    if not isfinite(value):
        raise Refused(f"{number} is too large")
    return value
