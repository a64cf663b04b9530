"""Numbers as people write them: decimal comma or point, percent or fraction."""

from __future__ import annotations

import re
import unicodedata
from math import isfinite

from phaseid.errors import InputError

SMALLEST_SCALE_SIGMA = 1e-5
NUMBER = r"(\d+(?:[.,]\d+)?|[.,]\d+)(?:e([+-]?\d+))?"  # groups: mantissa, exponent


def parse_relative(text: str, what: str = "scale uncertainty") -> float:
    """A relative one-sigma from text: "1 %", "0.005", "200 ppm".

    Raises InputError if it is no number, negative, or so large that a percent sign is missing.
    """
    plain = unicodedata.normalize("NFKC", text).strip().lower().removeprefix("±").strip()
    match = re.fullmatch(rf"\+?{NUMBER}\s*(%|percent|per cent|‰|ppm)?", plain)
    if match is None:
        raise InputError(
            f"cannot read the {what} '{text.strip()}'", remedy="Write it as '1 %' or '0.01'."
        )
    unit = {"%": 1e-2, "percent": 1e-2, "per cent": 1e-2, "‰": 1e-3, "ppm": 1e-6}
    return check_relative(read_number(match[1], match[2]) * unit.get(match[3] or "", 1.0), what)


def check_relative(value: float, what: str = "scale uncertainty") -> float:
    """A relative one-sigma that makes sense, at least 1e-5; raises InputError otherwise."""
    if not isfinite(value) or value < 0:
        raise InputError(f"the {what} is {value:g}", remedy="Write it as '1 %' or '0.01'.")
    if value > 0.2:
        raise InputError(
            f"the {what} of {100 * value:g} % is too large to compare spacings at all",
            remedy=f"If {value:g} % was meant, write the percent sign: '{value:g} %'.",
        )
    return max(value, SMALLEST_SCALE_SIGMA)


def read_number(number: str, exponent: str | None = None) -> float:
    """The value of the two groups that NUMBER matched."""
    return float(f"{number.replace(',', '.')}e{exponent or 0}")


def plain_number(value: float) -> str:
    """The shortest text that reads back as exactly this number."""
    return repr(float(value)).removesuffix(".0")
