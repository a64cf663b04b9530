"""PHASE on the command line: an id, a formula, a name, a source number, or a CIF file."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import TYPE_CHECKING

from phaseid.cli.options import open_library, say
from phaseid.errors import InputError

if TYPE_CHECKING:
    from phaseid.crystal.crystal import Crystal
    from phaseid.library import Library, Phase
    from phaseid.matching.standards import Standard


def find_crystal(text: str, library: Path | None) -> tuple[Phase, Crystal]:
    """Return the phase that `text` names, and its structure.

    Raises InputError where nothing fits, or several phases do.
    """
    if (found := named_file(text)) is not None:
        return found
    with open_library(library) as shelf:
        return find_in(shelf, text)


def find_standard(
    text: str, temperature_C: float | None, find: Callable[[str], tuple[Phase, Crystal]]
) -> Standard:
    """Return the standard that `text` names, else the phase that `find` gives as one."""
    from phaseid.matching import standards

    if not is_file(text) and (found := standards.find_standard(text, temperature_C)):
        return found
    phase, crystal = find(text)
    known = standards.standard_of(phase, temperature_C)
    return known or standards.uncertified(phase, crystal, temperature_C)


def find_in(shelf: Library, text: str) -> tuple[Phase, Crystal]:
    """The same in a library that is open."""
    if (found := named_file(text)) is not None:
        return found
    phase = shelf.choose(text)
    return phase, shelf.crystal(phase.phase_id)


def is_file(text: str) -> bool:
    """Whether a file is called so; a name too long for one is none."""
    try:
        return Path(text).is_file()
    except (OSError, ValueError):
        return False


def named_file(text: str) -> tuple[Phase, Crystal] | None:
    """The structure of a CIF file, None where `text` names no file; raises InputError."""
    path = Path(text)
    if is_file(text):
        return _from_file(path)
    if path.suffix.lower() in (".cif", ".gz"):
        raise InputError("there is no such file", path=path, remedy="Check the path")
    return None


def _from_file(path: Path) -> tuple[Phase, Crystal]:
    from phaseid.crystal.cif import read_cif_file
    from phaseid.library.outside import phase_of

    reading = read_cif_file(path)
    if not reading.crystals:
        reasons = "; ".join(reject.reason for reject in reading.rejects) or "it holds none"
        raise InputError(
            f"no structure can be read from it: {reasons}",
            path=path,
            remedy="Give a CIF file with cell, symmetry and atoms",
        )
    crystal = reading.crystals[0]
    if len(reading.crystals) > 1:
        say(f"{path} holds {len(reading.crystals)} structures; this is the first.")
    return phase_of(crystal), crystal
