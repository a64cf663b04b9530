"""What became of the structures that were to be added."""

from __future__ import annotations

from collections import Counter
from dataclasses import asdict, dataclass, field
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


@dataclass(frozen=True, slots=True)
class Replaced:
    """An entry that gave way to another version of it: its phase id `before`, and what it is now.

    `phase_id`, `name`, `database`, `number` and `file` are those of the new version.
    """

    before: str
    phase_id: str
    name: str
    database: str
    number: str
    file: str


@dataclass(frozen=True, slots=True)
class Gone:
    """An entry that came from a folder or archive that is there, and no longer holds it."""

    phase_id: str
    name: str
    location: str


@dataclass(slots=True)
class ImportTally:
    """What one run of adding did; text, JSON and exit code all come from here.

    `recomputed`, of the unchanged, had lines of another version of phaseid.
    """

    added: int = 0
    unchanged: int = 0
    replaced: int = 0
    recomputed: int = 0
    rejects: list[Rejected] = field(default_factory=list)
    replacements: list[Replaced] = field(default_factory=list)
    gone: list[Gone] = field(default_factory=list)

    def __iadd__(self, other: ImportTally) -> ImportTally:
        self.counts = tuple(a + b for a, b in zip(self.counts, other.counts, strict=True))
        self.rejects += other.rejects
        self.replacements += other.replacements
        self.gone += other.gone
        return self

    @property
    def counts(self) -> tuple[int, ...]:
        """Added, unchanged, replaced, recomputed."""
        return self.added, self.unchanged, self.replaced, self.recomputed

    @counts.setter
    def counts(self, values: tuple[int, ...]) -> None:
        self.added, self.unchanged, self.replaced, self.recomputed = values

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
        anew = f" ({self.recomputed} computed anew)" if self.recomputed else ""
        return (
            f"{self.added} added, {self.unchanged} unchanged{anew}, {self.replaced} replaced, "
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
            "recomputed": self.recomputed,
            "replacements": [asdict(replaced) for replaced in self.replacements],
            "gone": [asdict(gone) for gone in self.gone],
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
