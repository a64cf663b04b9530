"""Which of some entries stand for the others: the best first, each with the leaders so far.

Entries are taken by rank; one that is like no leader becomes one, another follows the leader
nearest in density. The outcome depends on the entries alone. What an earlier grouping of some of
them found need not be found again: it tells which pairs are alike and which are not, so that a few
new entries among many old ones cost a few comparisons.
"""

from __future__ import annotations

from bisect import bisect_left, bisect_right
from collections.abc import Iterable, Mapping, Sequence

from phaseid.library.determinations import StoredEntry
from phaseid.library.sameness import COMPUTED_CELL, MEASURED_CELL, same_phase

_COLD_K = 200.0  # below, a cell is clearly smaller than at room temperature


class Earlier:
    """What an earlier grouping found: `leaders` by row, of `parts` that were ranked each by itself.

    The parts hold the entries of that grouping, none that came since, and none of them has gone.
    """

    def __init__(
        self, parts: Iterable[Sequence[StoredEntry]] = (), leaders: Mapping[int, int] | None = None
    ) -> None:
        self._leader = dict(leaders or {})
        self._place = {
            entry.row: (number, place)
            for number, part in enumerate(parts)
            for place, entry in enumerate(best_first(part))
        }
        self._density = {entry.row: entry.ln_density for part in parts for entry in part}

    def same(self, leader: StoredEntry, entry: StoredEntry) -> bool | None:
        """Whether `leader` and `entry` were found to be of one phase, None where that is not known.

        An entry was compared with all better leaders that are not further than its own.
        """
        one, other = leader.row, entry.row
        own = self._leader.get(other)
        if own is None or self._leader.get(one) != one:
            return None
        if own == one:
            return True
        (part, place), (its_part, its_place) = self._place[one], self._place[other]
        if part != its_part or place > its_place:
            return None
        off = abs(leader.ln_density - entry.ln_density)
        return False if own == other or off < abs(self._density[own] - entry.ln_density) else None


def leaders_of(entries: Sequence[StoredEntry], earlier: Earlier | None = None) -> dict[int, int]:
    """Return row of the leader by row of the entry, for entries of one space group."""
    earlier = earlier or Earlier()
    leaders: dict[int, int] = {}
    standing: list[StoredEntry] = []
    for entry in best_first(entries):
        off = [abs(leader.ln_density - entry.ln_density) for leader in standing]
        near = [k for k, one in enumerate(off) if one <= 3 * COMPUTED_CELL]
        for k in sorted(near, key=off.__getitem__):
            known = earlier.same(standing[k], entry)
            if known or (known is None and _same(standing[k], entry)):
                leaders[entry.row] = standing[k].row
                break
        else:
            standing.append(entry)
            leaders[entry.row] = entry.row
    return leaders


def _same(one: StoredEntry, other: StoredEntry) -> bool:
    try:
        return same_phase(one, other)
    except (ArithmeticError, ValueError):  # a cell that spans no lattice is like no other
        return False


def best_first(entries: Sequence[StoredEntry]) -> list[StoredEntry]:
    """Sort determinations by how well they stand for their phase.

    Measured before computed; shipped with phaseid, whose marks are sure where files say nothing of
    pressure and heat; the symmetry told before atoms one by one; then quality, which holds
    pressure, temperature, disorder and doubts; not measured in the cold; the cell near the middle
    of the others'; named; with its reference. Whatever is still equal goes by content.
    """
    if len(entries) <= 1:
        return list(entries)
    measured = sorted(entry.ln_density for entry in entries if not entry.computed)

    def rank(entry: StoredEntry) -> tuple[object, ...]:
        reach = 3 * MEASURED_CELL
        low = bisect_left(measured, entry.ln_density - reach)
        high = bisect_right(measured, entry.ln_density + reach)
        middle = measured[(low + high) // 2] if high > low else entry.ln_density
        off = round(abs(entry.ln_density - middle), 3)
        cold = high - low > 1 and not entry.computed and entry.colder_than(_COLD_K)
        return (
            entry.computed,
            not entry.shipped,
            entry.symmetry_untold,
            -entry.quality,
            cold,
            off,
            not entry.named,
            not entry.reference,
            entry.content,
        )

    return sorted(entries, key=rank)
