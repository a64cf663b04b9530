"""Words and tables for a terminal: safe, aligned, never wider than asked."""

from __future__ import annotations

import textwrap
from bisect import bisect
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import accumulate
from typing import TYPE_CHECKING, Literal
from unicodedata import combining, east_asian_width

if TYPE_CHECKING:
    from phaseid.library.phase import Phase

ELLIPSIS = "…"
NARROWEST = 6  # a flexible column keeps as many characters


def safe(text: str) -> str:
    """Return `text` on one line without characters that could steer or deceive a terminal.

    Names come from files of strangers: control and direction characters become `?`, any white space
    a single blank.
    """
    return " ".join("".join(c if c.isprintable() or c.isspace() else "?" for c in text).split())


def display_width(text: str) -> int:
    """How many columns of a terminal `text` takes: letters of East Asia two, accents none."""
    return len(text) if text.isascii() else sum(map(_letter_width, text))


def _letter_width(letter: str) -> int:
    return 0 if combining(letter) else 2 if east_asian_width(letter) in "WF" else 1


def shorten(text: str, width: int) -> str:
    """Cut `text` to `width` columns, the last an ellipsis where something was cut."""
    if display_width(text) <= width:
        return text
    kept = list(accumulate(map(_letter_width, text)))
    return text[: bisect(kept, max(width - 1, 0))] + ELLIPSIS


def wrap(text: str, width: int, *, indent: str = "  ", first: str | None = None) -> list[str]:
    """Break `text` into lines of at most `width` characters, `first` before the first of them."""
    return textwrap.wrap(
        safe(text),
        width,
        initial_indent=indent if first is None else first,
        subsequent_indent=indent,
        break_on_hyphens=False,
    )


def hkl_text(hkl: Sequence[int]) -> str:
    """Write Miller indices with blanks between: `1 0 -2`."""
    return " ".join(str(int(index)) for index in hkl)


def signed_text(value: float) -> str:
    """Write a deviation with its sign and one decimal, zero without a sign."""
    text = f"{value:+.1f}"
    return "0.0" if text in ("+0.0", "-0.0") else text


def probability_text(value: float) -> str:
    """Write a probability to two digits, never as a certainty."""
    if value > 0.995:
        return ">0.99"
    return "<0.01" if value < 0.005 else f"{value:.2f}"


def phase_text(phase: Phase) -> str:
    """Name a phase for a reader: `corundum (Al2O3)`, or by the formula alone."""
    name, formula = safe(phase.name), safe(phase.formula)
    return formula if name in ("", formula) else f"{name} ({formula})"


def marks_text(phase: Phase) -> str:
    """Return what sets an entry apart, to follow its name: ` [computed]`; mostly nothing."""
    from phaseid.library.marks import marks  # a command that names no phase needs no library

    found = marks(finding.code for finding in phase.findings)
    return f" [{', '.join(found)}]" if found else ""


def marked_text(phase: Phase) -> str:
    """Name a phase with its space group and its marks: `corundum (Al2O3) R-3c [computed]`."""
    return f"{phase_text(phase)} {safe(phase.space_group_symbol)}{marks_text(phase)}"


def short_phase_text(phase: Phase, width: int) -> str:
    """Name a phase in `width` characters: where it is too long the name is cut, not the formula."""
    whole, formula = phase_text(phase), f" ({safe(phase.formula)})"
    if len(whole) <= width or not whole.endswith(formula) or 2 * len(formula) > width:
        return shorten(whole, width)
    return shorten(whole.removesuffix(formula), width - len(formula)) + formula


def source_text(phase: Phase) -> str:
    """Say where an entry came from: `COD 9008460, al.cif`."""
    source = phase.source
    file = "" if source.file == f"{source.id}.cif" else safe(source.file)
    origin = " ".join(part for part in (safe(source.database), safe(source.id)) if part)
    return ", ".join(part for part in (origin, file) if part)


def cell_text(cell: Sequence[float], sigma: Sequence[float] | None = None) -> str:
    """Write a cell (Å, degrees), leaving out what symmetry or equality makes plain.

    >>> cell_text((4.05, 4.05, 4.05, 90, 90, 90))
    'a = 4.0500 Å'
    >>> cell_text((4.758, 4.758, 12.99, 90, 90, 120))
    'a = 4.7580, c = 12.9900 Å, γ = 120°'
    """
    lengths = []
    for index, letter in enumerate("abc"):
        if index and any(abs(cell[index] - cell[k]) < 5e-5 for k in range(index)):
            continue
        error = f" ± {sigma[index]:.4f}" if sigma is not None and sigma[index] > 0 else ""
        lengths.append(f"{letter} = {cell[index]:.4f}{error}")
    angles = [
        f"{letter} = {cell[3 + index]:.5g}°"
        for index, letter in enumerate("αβγ")
        if abs(cell[3 + index] - 90) > 5e-4
    ]
    return ", ".join([", ".join(lengths) + " Å", *angles])


@dataclass(frozen=True, slots=True)
class Column:
    """One column of a table: its heading, and the side its cells lean to."""

    heading: str
    side: Literal["left", "right"] = "right"
    flexible: bool = False


def table(columns: Sequence[Column], rows: Sequence[Sequence[str]], width: int) -> list[str]:
    """Align `rows` under `columns`; flexible columns shrink until a line fits `width` characters.

    Headings may hold a line break. Cells stand two blanks apart, one where room is short.
    """
    cells = [[safe(cell) for cell in row] for row in rows]
    heads = [column.heading.split("\n") for column in columns]
    depth = max(len(head) for head in heads)
    heads = [[""] * (depth - len(head)) + head for head in heads]
    widths = [
        max([display_width(part) for part in head] + [display_width(row[k]) for row in cells])
        for k, head in enumerate(heads)
    ]
    gap = "  " if sum(widths) + 2 * len(widths) <= width else " "
    flexible = [k for k, column in enumerate(columns) if column.flexible]
    excess = sum(widths) + len(gap) * len(widths) - width
    while (
        excess > 0 and (widest := max(flexible, key=widths.__getitem__, default=None)) is not None
    ):
        if widths[widest] <= NARROWEST:
            break
        widths[widest] -= 1
        excess -= 1
    lines = [[head[level] for head in heads] for level in range(depth)] + cells
    return [
        "".join(
            gap + _padded(cell, width_k, column.side)
            for cell, width_k, column in zip(line, widths, columns, strict=True)
        ).rstrip()
        for line in lines
    ]


def _padded(cell: str, width: int, side: Literal["left", "right"]) -> str:
    shown = shorten(cell, width)
    blanks = " " * (width - display_width(shown))
    return shown + blanks if side == "left" else blanks + shown
