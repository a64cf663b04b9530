"""A structure that is in no library, described like an entry of one."""

from __future__ import annotations

from phaseid.crystal.crystal import Crystal
from phaseid.library.entries import entry
from phaseid.library.lookups import PHASE_COLUMNS, phase_from_row
from phaseid.library.phase import Phase


def phase_of(crystal: Crystal) -> Phase:
    """Return the phase that adding this structure to an empty library would give."""
    made = entry(crystal, "")
    row = {"phase_id": f"{crystal.formula}-{made.content[:8]}", **made.row}
    return phase_from_row([row[column] for column in PHASE_COLUMNS.split(", ")])
