"""Sites that share a position: mixed occupation, atoms listed twice, atoms counted double."""

from __future__ import annotations

from collections.abc import Sequence
from functools import lru_cache

import gemmi
import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.crystal import Finding, Site
from phaseid.crystal.positions import FULL, ROUNDING_A, SPLIT_A, ClosePairs

TOUCHING = 0.6  # of the sum of covalent radii; below, two atoms cannot both be there
HOPELESS = 1.5  # from here on at least one atom is counted double; which one cannot be told


def settle_positions(
    sites: Sequence[Site], pairs: ClosePairs, crowded: NDArray[np.bool_]
) -> tuple[list[int], list[Finding]] | str:
    """Return the indices of the sites to keep and what was found, or a sentence if it is hopeless.

    The same element at the same occupancy twice on one position is one atom listed twice: the
    second is left out. Otherwise occupancies on a position may add up to 1.05; up to 1.5 is noted,
    more is refused. `crowded` (n,) marks sites too close to their own images.
    """
    dropped: set[int] = set()
    position = list(range(len(sites)))  # index of the first site of the position
    contacts: list[str] = []
    for i, j, distance in zip(
        pairs.first.tolist(), pairs.second.tolist(), pairs.distance_A.tolist(), strict=True
    ):
        if i in dropped or j in dropped:
            continue
        one, other = sites[i], sites[j]
        too_full = one.occupancy + other.occupancy > FULL
        if distance < SPLIT_A and too_full and _alike(one, other):
            dropped.add(j)
        elif distance < ROUNDING_A:
            position[j] = position[i]
        elif too_full and distance < TOUCHING * (_radius_A(one.element) + _radius_A(other.element)):
            contacts.append(f"{one.label}-{other.label} {distance:.2f} Å")
    kept = [i for i in range(len(sites)) if i not in dropped]
    findings: list[Finding] = []
    if dropped:
        labels = ", ".join(sites[i].label for i in sorted(dropped)[:6])
        findings.append(
            Finding(
                "duplicate_sites",
                f"{len(dropped)} sites repeat an atom that another site already gives and are left "
                f"out: {labels}{', …' if len(dropped) > 6 else ''}",
            )
        )
    sums: dict[int, float] = {}
    for i in kept:
        sums[position[i]] = sums.get(position[i], 0.0) + sites[i].occupancy
    over = {first: total for first, total in sums.items() if total > FULL}
    if over:
        worst = max(over, key=lambda first: over[first])
        labels = ", ".join(sites[i].label for i in kept if position[i] == worst)
        sentence = f"the occupancies of {labels} on one position add up to {over[worst]:.3g}"
        if over[worst] >= HOPELESS:
            return sentence
        findings.append(Finding("bad_occupancy", sentence))
    contacts += [f"{sites[i].label} and its own image" for i in kept if crowded[i]]
    if contacts:
        findings.append(
            Finding(
                "overlapping_atoms",
                f"atoms are too close to be real: {', '.join(contacts[:4])}"
                + (", …" if len(contacts) > 4 else ""),
            )
        )
    return kept, findings


@lru_cache(maxsize=256)
def _radius_A(element: str) -> float:
    """Return the covalent radius in Å (gemmi's table; an unknown element counts as oxygen)."""
    return float(gemmi.Element("H" if element == "D" else element or "O").covalent_r)


def _alike(one: Site, other: Site) -> bool:
    return (
        one.element == other.element
        and one.charge == other.charge
        and abs(one.occupancy - other.occupancy) < 0.01
    )
