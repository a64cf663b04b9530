"""PHASE on the command line: an id, a formula, a name, a source number, or a CIF file."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

from phaseid.cli.options import open_library, say
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.crystal.crystal import Crystal
    from phaseid.library.phase import Phase


def find_crystal(text: str, library: Path | None) -> tuple[Phase, Crystal]:
    """Return the phase that `text` names, and its structure.

    Where a name fits several entries the first, the most trusted, is taken and the others are told
    on standard error. Raises InputError where nothing fits.
    """
    if Path(text).is_file():
        return _from_file(Path(text))
    with open_library(library) as shelf:
        found = shelf.find(text)
        if not found:
            raise InputError(
                f"'{text}' is no phase of this library and no file",
                path=shelf.path,
                remedy="Give a phase id, formula, name, source number or CIF file; "
                "`phaseid library add FILE` adds structures",
            )
        if len(found) > 1:
            others = ", ".join(phase.phase_id for phase in found[1:6])
            more = f" and {len(found) - 6} more" if len(found) > 6 else ""
            say(
                f"'{text}' fits {len(found)} entries; this is {found[0].phase_id}. "
                f"Also: {others}{more}"
            )
        return found[0], shelf.crystal(found[0].phase_id)


def _from_file(path: Path) -> tuple[Phase, Crystal]:
    from phaseid.crystal.cif import read_cif_file

    reading = read_cif_file(path)
    if not reading.crystals:
        reasons = "; ".join(reject.reason for reject in reading.rejects) or "it holds no structure"
        raise InputError(f"no structure can be read: {reasons}", path=path)
    crystal = reading.crystals[0]
    if len(reading.crystals) > 1:
        say(
            f"{path} holds {len(reading.crystals)} structures; "
            f"this is the first, {crystal.formula}."
        )
    return as_phase(crystal), crystal
