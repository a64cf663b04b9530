"""What is known of the phases that are looked for."""

from __future__ import annotations

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class Question:
    """What is known of the phases wanted; everything that is given must hold.

    `text` is anything a phase is asked for by; `ids` are phase ids or source numbers, any of which
    will do; `formula` and `name` are the same more narrowly.
    `must`, `only` and `exclude` are elements held, the only ones held, and not held. `space_group`
    is a number or a symbol in any setting. `edges_A` are up to three cell edges in any order, met
    within the relative `tolerance`. `density_g_cm3` is a range. `source` is a database, a number,
    or both; `under` a file, folder or archive that entries came from.
    """

    text: str = ""
    ids: tuple[str, ...] = ()
    formula: str = ""
    name: str = ""
    must: frozenset[str] = frozenset()
    only: frozenset[str] | None = None
    exclude: frozenset[str] = frozenset()
    space_group: str = ""
    edges_A: tuple[float, ...] = ()
    tolerance: float = 0.01
    density_g_cm3: tuple[float, float] | None = None
    source: str = ""
    under: str = ""

    def __bool__(self) -> bool:
        return self != Question(tolerance=self.tolerance)
