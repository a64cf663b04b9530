"""Lists of phases: a table for the terminal, comma-separated values, plain dictionaries."""

from __future__ import annotations

import csv
import io
from collections.abc import Iterable, Sequence
from typing import Any

from phaseid.library.finding import Found
from phaseid.library.marks import marks
from phaseid.library.phase import Phase
from phaseid.reports.json import phase_dict
from phaseid.reports.plain import Column, source_text, table

CSV_COLUMNS = (
    "phase_id", "name", "formula", "elements", "space_group_number", "space_group_symbol",
    "a_A", "b_A", "c_A", "alpha_deg", "beta_deg", "gamma_deg", "volume_A3", "density_g_cm3",
    "source_database", "source_id", "source_file", "source_reference", "quality", "marks",
    "entries",
)  # fmt: skip
_FORMULA_SIGNS = ("=", "+", "-", "@", "\t", "\r")


def listed_dict(phase: Phase, entries: int) -> dict[str, Any]:
    """Return a phase as found: `entry_count` are the entries of that phase in the library."""
    return {**phase_dict(phase), "marks": list(_marks(phase)), "entry_count": entries}


def list_text(found: Found, width: int) -> list[str]:
    """Return the lines of a table of phases, at most `width` characters each."""
    columns = [
        Column("id", "left"),
        Column("phase", "left", flexible=True),
        Column("group", "left"),
        Column("a, b, c (Å)", "left"),
        Column("source", "left", flexible=True),
    ]
    rows = [
        [
            phase.phase_id,
            phase.name,  # the formula stands in the id
            f"{phase.space_group_symbol} ({phase.space_group_number})",
            " ".join(f"{edge:.2f}" for edge in phase.cell[:3]),
            source_text(phase),
        ]
        for phase in found.phases
    ]
    for heading, cells in (
        ("marks", [", ".join(_marks(phase)) for phase in found.phases]),
        ("entries", [str(count) if count > 1 else "" for count in found.entries]),
    ):
        if any(cells):
            columns.insert(-1, Column(heading, "left" if heading == "marks" else "right"))
            for row, cell in zip(rows, cells, strict=True):
                row.insert(-1, cell)
    return table(columns, rows, width)


def csv_text(phases: Iterable[Phase], entries: Iterable[int]) -> str:
    """Return phases as comma-separated values under CSV_COLUMNS.

    Texts that a spreadsheet would take for a formula get an apostrophe in front.
    """
    text = io.StringIO()
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(CSV_COLUMNS)
    for phase, count in zip(phases, entries, strict=True):
        writer.writerow([_cell(value) for value in _values(phase, count)])
    return text.getvalue()


def _values(phase: Phase, entries: int) -> Sequence[object]:
    source = phase.source
    return (
        phase.phase_id,
        phase.name,
        phase.formula,
        " ".join(phase.elements),
        phase.space_group_number,
        phase.space_group_symbol,
        *phase.cell,
        phase.volume_A3,
        phase.density_g_cm3,
        source.database,
        source.id,
        source.file,
        source.reference,
        phase.quality,
        "; ".join(_marks(phase)),
        entries,
    )


def _cell(value: object) -> object:
    if isinstance(value, float):
        return repr(round(value, 6))
    if isinstance(value, str) and value.startswith(_FORMULA_SIGNS):
        return f"'{value}"
    return value


def _marks(phase: Phase) -> tuple[str, ...]:
    return marks(finding.code for finding in phase.findings)
