"""What became of one structure file on its way into the library."""

from __future__ import annotations

from dataclasses import dataclass

from phaseid.library.entries import Entry
from phaseid.library.sources import StructureFile
from phaseid.library.tally import Rejected


@dataclass(frozen=True, slots=True)
class Outcome:
    """Entries and rejects of one file at `location`.

    `digest` is that of its bytes, "" where it was not a file. `file` is the file itself where it
    was left unread because the library remembers it; everything else is then empty.
    """

    location: str
    entries: tuple[Entry, ...] = ()
    rejects: tuple[Rejected, ...] = ()
    digest: str = ""
    file: StructureFile | None = None
