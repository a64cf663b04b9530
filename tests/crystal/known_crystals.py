"""Well-known structures for tests of lines.

Cells and coordinates: R. W. G. Wyckoff, Crystal Structures, 2nd ed., rounded, from memory, except
cells given by the caller. Prototypes are named after their mineral or metal.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence

import gemmi
import numpy as np

from phaseid.crystal.crystal import Crystal, Site, Source

Cell = tuple[float, float, float, float, float, float]
Fract = tuple[float, float, float]

PROTOTYPES: dict[str, tuple[str, tuple[Fract, ...]]] = {
    "fcc": ("F m -3 m", ((0, 0, 0),)),
    "bcc": ("I m -3 m", ((0, 0, 0),)),
    "hcp": ("P 63/m m c", ((1 / 3, 2 / 3, 1 / 4),)),
    "diamond": ("F d -3 m:2", ((1 / 8, 1 / 8, 1 / 8),)),
    "halite": ("F m -3 m", ((0, 0, 0), (1 / 2, 1 / 2, 1 / 2))),
    "fluorite": ("F m -3 m", ((0, 0, 0), (1 / 4, 1 / 4, 1 / 4))),
    "sphalerite": ("F -4 3 m", ((0, 0, 0), (1 / 4, 1 / 4, 1 / 4))),
    "wurtzite": ("P 63 m c", ((1 / 3, 2 / 3, 0), (1 / 3, 2 / 3, 0.382))),
    "rutile": ("P 42/m n m", ((0, 0, 0), (0.3053, 0.3053, 0))),
    "corundum": ("R -3 c:H", ((0, 0, 0.3523), (0.3064, 0, 1 / 4))),
    "hematite": ("R -3 c:H", ((0, 0, 0.3553), (0.3059, 0, 1 / 4))),
    "tenorite": ("C 1 2/c 1", ((1 / 4, 1 / 4, 0), (0, 0.4184, 1 / 4))),
    "quartz": ("P 32 2 1", ((0.4697, 0, 2 / 3), (0.4133, 0.2672, 0.7855))),
    "spinel": ("F d -3 m:2", ((1 / 8, 1 / 8, 1 / 8), (1 / 2, 1 / 2, 1 / 2), (0.2624,) * 3)),
    "tungsten carbide": ("P -6 m 2", ((0, 0, 0), (1 / 3, 2 / 3, 1 / 2))),
    "white tin": ("I 41/a m d:1", ((0, 0, 0),)),
    "calcite": ("R -3 c:H", ((0, 0, 0), (0, 0, 1 / 4), (0.2568, 0, 1 / 4))),
    "perovskite": ("P m -3 m", ((0, 0, 0), (1 / 2, 1 / 2, 1 / 2), (1 / 2, 1 / 2, 0))),
}

EXAMPLES: tuple[tuple[str, tuple[str, ...], Cell], ...] = (
    ("diamond", ("Si",), (5.4309, 5.4309, 5.4309, 90, 90, 90)),
    ("halite", ("Na", "Cl"), (5.6402, 5.6402, 5.6402, 90, 90, 90)),
    ("corundum", ("Al", "O"), (4.7589, 4.7589, 12.9917, 90, 90, 120)),
    ("rutile", ("Ti", "O"), (4.5937, 4.5937, 2.9587, 90, 90, 90)),
    ("wurtzite", ("Zn", "O"), (3.2498, 3.2498, 5.2065, 90, 90, 120)),
    ("fluorite", ("Ca", "F"), (5.463, 5.463, 5.463, 90, 90, 90)),
    ("hematite", ("Fe", "O"), (5.0356, 5.0356, 13.7489, 90, 90, 120)),
    ("tenorite", ("Cu", "O"), (4.684, 3.425, 5.129, 90, 99.47, 90)),
    ("quartz", ("Si", "O"), (4.9133, 4.9133, 5.4053, 90, 90, 120)),
    ("spinel", ("Mg", "Al", "O"), (8.0831, 8.0831, 8.0831, 90, 90, 90)),
    ("white tin", ("Sn",), (5.831, 5.831, 3.182, 90, 90, 90)),
    ("sphalerite", ("Zn", "S"), (5.406, 5.406, 5.406, 90, 90, 90)),
    ("calcite", ("Ca", "C", "O"), (4.99, 4.99, 17.06, 90, 90, 120)),
    ("perovskite", ("Sr", "Ti", "O"), (3.905, 3.905, 3.905, 90, 90, 90)),
)


def crystal(
    group: str | gemmi.SpaceGroup | Sequence[str],
    cell: Cell,
    sites: Iterable[Site],
    name: str = "",
) -> Crystal:
    """Make a crystal from a space-group symbol, a gemmi space group, or a list of triplets."""
    number, symbol = 1, "P 1"
    if isinstance(group, str):
        group = gemmi.SpaceGroup(group)
    if isinstance(group, gemmi.SpaceGroup):
        number, symbol = group.number, group.short_name()
        group = [op.triplet() for op in group.operations()]
    return Crystal(
        cell=cell,
        space_group_number=number,
        space_group_symbol=symbol,
        operations=tuple(group),
        sites=tuple(sites),
        name=name,
        formula="",
        z=1.0,
        source=Source("test", "", ""),
    )


def prototype(
    name: str, elements: Sequence[str], cell: Cell, u_iso_A2: float | None = None
) -> Crystal:
    """Put elements on the sites of a prototype."""
    symbol, places = PROTOTYPES[name]
    sites = [
        Site(f"{element}{i}", element, 0, place, 1.0, u_iso_A2)
        for i, (element, place) in enumerate(zip(elements, places, strict=True))
    ]
    return crystal(symbol, cell, sites, name)


def examples(u_iso_A2: float | None = None) -> list[Crystal]:
    """All examples, with one displacement for every site."""
    return [prototype(name, elements, cell, u_iso_A2) for name, elements, cell in EXAMPLES]


def all_atoms(crystal: Crystal) -> list[Site]:
    """Every atom of the cell, by applying every operation and keeping places once."""
    found: list[Site] = []
    for site in crystal.sites:
        seen: list[np.ndarray] = []
        for triplet in crystal.operations:
            place = np.array(gemmi.Op(triplet).apply_to_xyz(list(site.fract)))
            if all(np.abs((d := place - other) - np.rint(d)).max() > 1e-4 for other in seen):
                seen.append(place)
                fract = (float(place[0]), float(place[1]), float(place[2]))
                found.append(
                    Site(site.label, site.element, 0, fract, site.occupancy, site.u_iso_A2)
                )
    return found
