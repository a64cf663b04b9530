"""A phase of an answer on the page: what is known of it, its other entries, those like it."""

from __future__ import annotations

from phaseid.library.phase import Phase
from phaseid.matching.identification import PhaseAnswer
from phaseid.reports.page_html import facts, scrolling, tag, words
from phaseid.reports.plain import (
    cell_text,
    hkl_text,
    marked_text,
    marks_text,
    phase_text,
    source_text,
)
from phaseid.reports.text import SHOWN_ALIKE

SHOWN_ENTRIES = 20


def phase_part(part: PhaseAnswer, number: int, *, alone: bool) -> str:
    """The phase `number` of an answer under its heading; a share of all is left out."""
    phase = part.phase
    error = "" if part.share_sigma is None else f" ± {100 * part.share_sigma:.0f}"
    share = "" if part.share is None or alone else f"{100 * part.share:.0f}{error} % by weight"
    axis = "" if part.fibre_axis is None else f"[{hkl_text(part.fibre_axis)}] along the beam"
    pairs = [
        ("space group", f"{phase.space_group_symbol} (no. {phase.space_group_number})"),
        ("cell in the library", cell_text(phase.cell)),
        ("refined cell", "" if part.cell is None else cell_text(part.cell, part.cell_sigma)),
        ("share", share),
        ("texture, fibre axis", axis),
        ("entry", phase.phase_id),
        ("source", source_text(phase)),
        ("reference", phase.source.reference),
        *(("about the entry", finding.message) for finding in phase.findings),
    ]
    name = words(phase_text(phase) + marks_text(phase))
    return f"<h3>{tag(number)}{name}</h3>{facts(pairs)}{_entries(part)}{_alike(part)}"


def _entries(part: PhaseAnswer) -> str:
    """The other entries of the phase, folded away; nothing where there are none."""
    if not part.entries:
        return ""
    heads = "".join(
        f'<th scope="col">{name}</th>'
        for name in ("source", "marks", "cell", "reference", "name", "entry")
    )
    rows = "".join(_entry(entry) for entry in part.entries[:SHOWN_ENTRIES])
    more = len(part.entries) - SHOWN_ENTRIES
    told = (
        f'<p class="quiet">and {more} more; the JSON inside this page lists them all</p>'
        if more > 0
        else ""
    )
    count = len(part.entries)
    others = "1 other entry" if count == 1 else f"{count} other entries"
    table = f"<table><thead><tr>{heads}</tr></thead><tbody>{rows}</tbody></table>"
    return (
        f"<details><summary>{others} of this phase in the library</summary>"
        f"{scrolling(table, 'Other entries, scrolls sideways')}{told}</details>"
    )


def _entry(entry: Phase) -> str:
    cells = (
        source_text(entry),
        marks_text(entry).strip(" []"),
        cell_text(entry.cell),
        entry.source.reference,
        entry.name,
        entry.phase_id,
    )
    return "<tr>" + "".join(f'<td class="wide">{words(cell)}</td>' for cell in cells) + "</tr>"


def _alike(part: PhaseAnswer) -> str:
    """Phases that the rings cannot tell from it, and what would."""
    tells = {separator.other.phase_id: separator.text for separator in part.separators}
    alike = []
    for other in part.indistinguishable[:SHOWN_ALIKE]:
        told = f"{marked_text(other)}, {cell_text(other.cell)}; {source_text(other)}"
        tell = tells.get(other.phase_id)
        alike.append(f"{told}. To tell them apart: {tell}" if tell else told)
    more = len(part.indistinguishable) - SHOWN_ALIKE
    if more > 0:
        alike.append(f"and {more} more; the JSON inside this page lists them all")
    listed = "".join(f"<li>{words(text)}</li>" for text in alike)
    return f"<p>These rings cannot tell it from:</p><ul>{listed}</ul>" if alike else ""
