"""What became of the structures that were to be added."""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass, field
from typing import Any


@dataclass(frozen=True, slots=True)
class Rejected:
    """A file, or one structure in it, that could not be used.

    `file` is its name (inside an archive: the member's), `location` where that lies, `block` the
    data block or "", `code` a short stable word, `reason` a sentence.
    """

    location: str
    file: str
    block: str
    code: str
    reason: str


@dataclass(slots=True)
class ImportTally:
    """The counts of one run of adding; text, JSON and exit code all come from here."""

    added: int = 0
    unchanged: int = 0
    replaced: int = 0
    rejects: list[Rejected] = field(default_factory=list)

    def __iadd__(self, other: ImportTally) -> ImportTally:
        self.added += other.added
        self.unchanged += other.unchanged
        self.replaced += other.replaced
        self.rejects += other.rejects
        return self

    @property
    def rejected(self) -> int:
        """How many files or structures could not be used."""
        return len(self.rejects)

    @property
    def read(self) -> int:
        """How many structures could be used."""
        return self.added + self.unchanged + self.replaced

    @property
    def exit_code(self) -> int:
        """0, or 2 where nothing could be read."""
        return 0 if self.read else 2

    def summary(self) -> str:
        """Return the counts as one line."""
        return (
            f"{self.added} added, {self.unchanged} unchanged, {self.replaced} replaced, "
            f"{self.rejected} rejected"
        )

    def reasons(self) -> list[tuple[str, int]]:
        """Return the kinds of defect and how often each came, the most frequent first."""
        return Counter(reject.code for reject in self.rejects).most_common()

    def as_json(self) -> dict[str, Any]:
        """Return the object that `phaseid library add --json` prints."""
        return {
            "schema": "phaseid.library-add/1",
            "added": self.added,
            "unchanged": self.unchanged,
            "replaced": self.replaced,
            "rejected": self.rejected,
            "rejects": [
                {
                    "file": reject.file,
                    "reason": reject.reason,
                    "block": reject.block,
                    "code": reject.code,
                    "location": reject.location,
                }
                for reject in self.rejects
            ],
        }
