"""HTML from words: everything that comes from outside passes `words` and is text, never markup."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence
from html import escape

from phaseid.reports.picture_style import phase_letter, phase_role
from phaseid.reports.plain import safe

_WHOLE = re.compile(
    r"(?<!\S)\S{1,3}-\d\S{0,8}(?!\S)"  # Fm-3m: a browser would break it
    r"|(?:[abcαβγ] = )?\d[\d.]*(?: ± \d[\d.]*)?(?: [Å%]|°)[,;)]*"
    r"|\d[\d.]* ± \d[\d.]*[,;)]*"
)


def words(text: str) -> str:
    """Words as they may stand in a page, in an element or in a quoted attribute."""
    return escape(safe(text))


def prose(text: str) -> str:
    """Words of an element, where symbols of space groups and values with their units stay whole."""
    return _WHOLE.sub(r'<span class="whole">\g<0></span>', words(text))


def items(heading: str, texts: Sequence[str], *, level: int = 2) -> str:
    """A list under its heading; nothing where there is nothing to list."""
    if not texts:
        return ""
    listed = "".join(f"<li>{prose(text)}</li>" for text in texts)
    return f"<h{level}>{words(heading)}</h{level}><ul>{listed}</ul>"


def facts(pairs: Iterable[tuple[str, str]]) -> str:
    """Pairs of term and plain words as a list; pairs without words are left out."""
    told = "".join(f"<dt>{words(term)}</dt><dd>{prose(text)}</dd>" for term, text in pairs if text)
    return f"<dl>{told}</dl>"


def tag(phase: int) -> str:
    """The letter of a phase, framed in its colour and line style."""
    return f'<span class="tag {phase_role(phase)}">{phase_letter(phase)}</span>'


def scrolling(inner: str, label: str) -> str:
    """What may be wider than a phone, in a frame that scrolls, by keyboard too."""
    return (
        f'<div class="scroll" role="region" tabindex="0" aria-label="{words(label)}">{inner}</div>'
    )
