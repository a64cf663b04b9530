"""The camera constant of a plate: radius × d."""

from __future__ import annotations

import re
import unicodedata
from dataclasses import dataclass
from math import isfinite

from phaseid.errors import InputError
from phaseid.probes.numbers import plain_number
from phaseid.units import A_PER_NM, MM_PER_CM

EXAMPLE = "25.1 +- 0.3 A mm"

_NUMBER = r"(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:e[+-]?\d+)?"
_SIGMA = re.compile(rf"(?:\+-|\+/-|±)\s*({_NUMBER})\s*(%)?")
_BRACKET = re.compile(r"\(\s*(\d{1,4})\s*\)")
_UNIT = re.compile(rf"({_NUMBER})([\sa-zö·*×.-]*)")
_LENGTHS = {"mm": ("mm", 1.0), "cm": ("mm", MM_PER_CM)} | dict.fromkeys(
    ("px", "pixel", "pixels", "pix"), ("px", 1.0)
)
_SPACINGS = {"nm": A_PER_NM} | dict.fromkeys(("a", "angstrom", "angstroms", "angström"), 1.0)


@dataclass(frozen=True, slots=True)
class CameraConstant:
    """Radius × d in Å mm or Å px; `sigma` is its one-sigma in the same unit, None if not stated."""

    value: float
    sigma: float | None
    plate_unit: str

    @property
    def relative_sigma(self) -> float | None:
        """One-sigma as a fraction of the value, None if not stated."""
        return None if self.sigma is None else self.sigma / self.value

    def __str__(self) -> str:
        sigma = "" if self.sigma is None else f" +- {plain_number(self.sigma)}"
        return f"{plain_number(self.value)}{sigma} A {self.plate_unit}"


def parse_camera_constant(text: str) -> CameraConstant:
    """Read a camera constant: "25.1 +- 0.3 A mm", "25.1(3) Å·mm", "2.51 nm mm ± 1 %", "9800 A px".

    Raises InputError if the number or its unit is missing, unknown or not positive.
    """
    given = text.strip()
    plain = unicodedata.normalize("NFKC", given).lower().replace("−", "-").replace("å", "a")
    bracket, plus_minus = _BRACKET.search(plain), _SIGMA.search(plain)
    match = _UNIT.fullmatch(_SIGMA.sub(" ", _BRACKET.sub(" ", plain)))
    if match is None:
        raise InputError(
            f"cannot read the camera constant '{given}'", remedy=f"Write it as '{EXAMPLE}'."
        )
    words = re.findall(r"[a-zö]+", match[2])
    if words[2:] == words[:2]:
        words = words[:2]
    lengths = [_LENGTHS[word] for word in words if word in _LENGTHS]
    spacings = [_SPACINGS[word] for word in words if word in _SPACINGS]
    if len(words) != 2 or len(lengths) != 1 or len(spacings) != 1:
        raise InputError(
            f"the camera constant '{given}' needs its unit, 'A mm' or 'A px'",
            remedy=f"It is radius × spacing: write it as '{EXAMPLE}'.",
        )
    plate_unit, factor = lengths[0]
    factor *= spacings[0]
    value = _float(match[1])
    sigma = None
    if not isfinite(value):
        value = 0.0
    elif bracket:
        sigma = int(bracket[1]) * last_digit(match[1])
    elif plus_minus:
        sigma = _float(plus_minus[1]) * (0.01 * value if plus_minus[2] else 1.0)
    if value <= 0 or (sigma is not None and not 0 < sigma < 0.2 * value):
        raise InputError(
            f"the camera constant '{given}' or its uncertainty makes no sense",
            remedy=f"Both must be above zero, the uncertainty below 20 %: '{EXAMPLE}'.",
        )
    return CameraConstant(value * factor, None if sigma is None else sigma * factor, plate_unit)


def last_digit(number: str) -> float:
    """The place value of the last digit typed: 0.001 for "2.338", 1 for "412"."""
    mantissa, _, exponent = number.replace(",", ".").lower().partition("e")
    return float(10.0 ** (int(exponent or 0) - len(mantissa.partition(".")[2])))


def _float(number: str) -> float:
    return float(number.replace(",", "."))
