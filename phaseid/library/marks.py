"""What sets an entry apart from a measured structure at ambient conditions, in a word or two."""

from __future__ import annotations

from collections.abc import Iterable

from phaseid.library.quality import FACTORS

COMPUTED = frozenset({"theoretical", "hypothetical"})
"""Codes of findings that say a structure was not measured."""

_WORDS = {
    "theoretical": "computed",
    "hypothetical": "hypothetical",
    "high_pressure": "high pressure",
    "high_temperature": "high temperature",
    "low_temperature": "low temperature",
    "metastable": "metastable",
}
DOUBTFUL = "doubtful"
_DOUBT = 0.85  # a factor of trust below is worth a word in a list


def marks(codes: Iterable[str]) -> tuple[str, ...]:
    """Return the marks of an entry with these findings, `doubtful` last, in a fixed order."""
    held = set(codes)
    told = [word for code, word in _WORDS.items() if code in held]
    if any(FACTORS.get(code, 1.0) < _DOUBT for code in held - _WORDS.keys()):
        told.append(DOUBTFUL)
    return tuple(told)
