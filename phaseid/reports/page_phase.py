"""A phase of an answer on the page: what is known of it, its other entries, those like it."""

from __future__ import annotations

from phaseid.library.phase import Phase
from phaseid.matching.identification import PhaseAnswer
from phaseid.reports.page_html import facts, prose, scrolling, tag
from phaseid.reports.plain import (
    cell_text,
    hkl_text,
    marks_text,
    phase_text,
    source_text,
)
from phaseid.reports.text import alike

SHOWN_ENTRIES = 20
ENTRY_HEADS = ("source", "marks", "cell", "reference", "name", "entry")


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
    name = prose(phase_text(phase) + marks_text(phase))
    return f"<h3>{tag(number)}{name}</h3>{facts(pairs)}{_entries(part)}{_alike(part)}"


def _entries(part: PhaseAnswer) -> str:
    """The other entries of the phase, folded away; nothing where there are none."""
    if not part.entries:
        return ""
    rows = [_entry(entry) for entry in part.entries[:SHOWN_ENTRIES]]
    told = [k for k, _ in enumerate(ENTRY_HEADS) if any(row[k] for row in rows)]
    heads = "".join(f'<th scope="col">{ENTRY_HEADS[k]}</th>' for k in told)
    body = "".join("<tr>" + "".join(_cell(row[k]) for k in told) + "</tr>" for row in rows)
    table = f"<table><thead><tr>{heads}</tr></thead><tbody>{body}</tbody></table>"
    count = len(part.entries)
    others = "1 other entry" if count == 1 else f"{count} other entries"
    more = f'<p class="quiet">and {_more(count - len(rows))}</p>' if count > len(rows) else ""
    return (
        f"<details><summary>{others} of this phase in the library</summary>"
        f"{scrolling(table, 'Other entries, scrolls sideways')}{more}</details>"
    )


def _entry(entry: Phase) -> tuple[str, ...]:
    return (
        source_text(entry),
        marks_text(entry).strip(" []"),
        cell_text(entry.cell),
        entry.source.reference,
        entry.name,
        entry.phase_id,
    )


def _cell(text: str) -> str:
    return f'<td class="wide">{prose(text)}</td>'


def _more(count: int) -> str:
    return f"{count} more; the JSON inside this page lists them all"


def _alike(part: PhaseAnswer) -> str:
    """Phases that the rings cannot tell from it, and what would."""
    listed = [
        prose(named) + (f"<br>To tell them apart: {prose(tell)}" if tell else "")
        for named, tell in alike(part)
    ]
    if (more := len(part.indistinguishable) - len(listed)) > 0:
        listed.append(f"and {_more(more)}")
    inner = "".join(f"<li>{one}</li>" for one in listed)
    return f"<p>These rings cannot tell it from:</p><ul>{inner}</ul>" if listed else ""
