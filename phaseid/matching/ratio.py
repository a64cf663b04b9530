"""Which structure types have rings in these ratios. Arithmetic alone: no library, no numpy.

1/d² of a cubic cell goes as N = h² + k² + l², of a hexagonal one as 4/3 (h² + hk + k²) + l²/(c/a)²
(in units of 1/a²); which hkl occur is the type's. Radii stand in the ratio of the square roots.
"""

from __future__ import annotations

from bisect import bisect
from collections.abc import Callable, Sequence
from dataclasses import dataclass
from functools import cache
from itertools import pairwise, product
from math import gcd, inf, isfinite, log, sqrt

from phaseid.errors import InputError
from phaseid.matching.records import Record, indices

Hkl = tuple[int, int, int]
_HIGHEST = 7
_MOST_N = 48
_LATE_START = 3
"""How many of the type's first rings may be absent before the first one measured."""
_IDEAL = sqrt(8.0 / 3.0)
_AXIAL_RATIOS = tuple(1.55 + 0.005 * i for i in range(71))  # Cd has 1.886, Be 1.568


@dataclass(frozen=True, slots=True)
class StructureType:
    """A family of structures with the same rings: `shows(hkl)` says which reflections occur."""

    name: str
    such_as: str
    system: str
    shows: Callable[[Hkl], bool]


@dataclass(frozen=True, slots=True)
class MatchedRing:
    """A ring and the type's line: radius ratios to the first ring, given and calculated."""

    ratio: float
    hkl: Hkl
    calculated: float


@dataclass(frozen=True, slots=True)
class RatioMatch:
    """A type that fits. `worst` and `rms` are relative deviations; `skipped` are the type's rings
    that were not measured (hkl, ratio); `axial_ratio` is c/a where it was fitted; `edge_A` is a
    (Å) where spacings were given."""

    type: StructureType
    rings: tuple[MatchedRing, ...]
    skipped: tuple[tuple[Hkl, float], ...]
    rms: float
    worst: float
    axial_ratio: float | None
    edge_A: float | None

    def record(self) -> Record:
        """The type as a flat record."""
        return {
            "type": self.type.name,
            "such_as": self.type.such_as,
            "hkl": ", ".join(indices(ring.hkl) for ring in self.rings),
            "skipped": ", ".join(indices(hkl) for hkl, _ in self.skipped) or None,
            "worst": self.worst,
            "rms": self.rms,
            "axial_ratio": self.axial_ratio,
            "edge_A": self.edge_A,
        }


def _unmixed(hkl: Hkl) -> bool:
    return len({index % 2 for index in hkl}) == 1


def _diamond(hkl: Hkl) -> bool:
    return _unmixed(hkl) and (hkl[0] % 2 == 1 or sum(hkl) % 4 == 0)


def _spinel(hkl: Hkl) -> bool:
    # Fd-3m with atoms beside 8a: 0kl only with k + l = 4n
    h, k, l = sorted(map(abs, hkl))  # noqa: E741 (Miller's own letter)
    return _unmixed(hkl) and (h != 0 or (k + l) % 4 == 0)


def _a15(hkl: Hkl) -> bool:
    # Pm-3n: hhl only with l = 2n; the pseudo-general positions add nothing that is seen
    h, k, l = sorted(map(abs, hkl))  # noqa: E741 (Miller's own letter)
    if h == k:
        return l % 2 == 0
    return h % 2 == 0 if k == l else True


def _packed(hkl: Hkl) -> bool:
    h, k, l = hkl  # noqa: E741 (Miller's own letter)
    return not (l % 2 == 1 and (h + 2 * k) % 3 == 0)


TYPES = (
    StructureType(
        "face-centred cubic",
        "Cu, Al, Au; with the same rings rock salt, zinc blende, fluorite",
        "cubic",
        _unmixed,
    ),
    StructureType("body-centred cubic", "Fe, W, Cr, Mo", "cubic", lambda hkl: sum(hkl) % 2 == 0),
    StructureType("diamond", "C, Si, Ge, grey Sn", "cubic", _diamond),
    StructureType(
        "primitive cubic", "CsCl, TlCl, LaB6, cubic perovskites", "cubic", lambda _: True
    ),
    StructureType("spinel", "MgAl2O4, Fe3O4; other Fd-3m", "cubic", _spinel),
    StructureType("A15", "beta-W, Nb3Sn", "cubic", _a15),
    StructureType(
        "hexagonal close-packed", "Ti, Zn, Co, Mg; the same rings in wurtzite", "hexagonal", _packed
    ),
    StructureType(
        "hexagonal net", "graphene, columns in a hexagonal array", "net", lambda hkl: hkl[2] == 0
    ),
    StructureType(
        "layers", "one set of planes in its orders", "layers", lambda hkl: hkl[:2] == (0, 0)
    ),
)


def ratios_of(kind: StructureType, axial_ratio: float = _IDEAL) -> list[tuple[float, Hkl]]:
    """Radius (1/d in units of 1/a) and hkl of each ring of a type, rising."""
    rings: dict[int, tuple[float, Hkl]] = {}
    weight = 1.0 if kind.system in ("cubic", "layers") else axial_ratio**-2
    for hkl, plane, along in _indices(kind):
        square = plane + weight * along
        if square <= _MOST_N:
            rings.setdefault(round(square * 1e6), (sqrt(square), hkl))
    return [rings[key] for key in sorted(rings)]


@cache
def _indices(kind: StructureType) -> tuple[tuple[Hkl, float, float], ...]:
    """Reflections that occur, one of each form, with the parts of 1/d² across and along c."""
    found = []
    limits = range(_HIGHEST + 1)
    for h, k, l in product(limits, repeat=3):  # noqa: E741 (Miller's own letter)
        cubic = kind.system == "cubic"
        ordered = h >= k >= l if cubic else h >= k
        if ordered and (h or k or l) and kind.shows((h, k, l)):
            plane = h * h + k * k if cubic else 4.0 / 3.0 * (h * h + h * k + k * k)
            found.append(((h, k, l), float(plane), float(l * l)))
    return tuple(found)


def as_radii(values: Sequence[float], spacings: bool | None) -> tuple[list[float], bool]:
    """Rising radii on some scale, and whether the values were spacings.

    `spacings` None: falling values are taken as spacings. Raises InputError for values that are no
    ratios, and for fewer than two.
    """
    for value in values:
        if not (isfinite(value) and value > 0):
            raise InputError(
                f"{value:g} is no ring", remedy="Give radii or spacings, above zero, in order."
            )
    if len(values) < 2:
        raise InputError(
            "one ring has no ratio", remedy="Give two or more, as in 'phaseid ratio 1 1.155 1.633'."
        )
    if spacings is None:
        spacings = list(values) == sorted(values, reverse=True)
    radii = sorted(1.0 / value if spacings else value for value in values)
    for one, other in pairwise(radii):
        if other / one < 1.001:
            raise InputError("a ring is given twice", remedy="Give each ring once.")
    return radii, spacings


def match_types(
    radii: Sequence[float], *, tolerance: float = 0.01, spacings: bool = False
) -> list[RatioMatch]:
    """Structure types all of whose ratios fit rising `radii` within `tolerance`, best first.

    Rings may be missing, the first too, but not more of them than are given. Where `spacings` is
    true the radii are 1/d in 1/Å and the cell edge is given. Best means: fewest rings skipped, then
    the smallest deviation, each skipped ring counting as one tolerance. Raises InputError for a
    tolerance that is none.
    """
    if not 0 < tolerance < 0.1:
        raise InputError(
            f"a tolerance of {tolerance:g} is out of range", remedy="Give one such as 1% or 0.005."
        )
    found: list[tuple[float, RatioMatch]] = []
    for kind in TYPES:
        free = kind.system == "hexagonal"
        best: tuple[float, RatioMatch] | None = None
        for axial in _AXIAL_RATIOS if free else (_IDEAL,):
            lines = ratios_of(kind, axial)
            for start in range(min(_LATE_START + 1, len(lines))):
                match = _laid(kind, lines, start, radii, tolerance, axial if free else None)
                if match is not None and (best is None or match[0] < best[0]):
                    best = match
        if best is not None:
            cost, match_found = best
            found.append((cost, _with_edge(match_found, radii, spacings)))
    found.sort(key=lambda entry: entry[0])
    return [match for _, match in found]


def _laid(
    kind: StructureType,
    lines: list[tuple[float, Hkl]],
    start: int,
    radii: Sequence[float],
    tolerance: float,
    axial: float | None,
) -> tuple[float, RatioMatch] | None:
    """The type with its ring `start` on the first one given; None where a ring fits no line."""
    first = lines[start][0]
    heights = [radius for radius, _ in lines]
    taken: list[int] = []
    for radius in radii:
        wanted = radius / radii[0] * first
        above = bisect(heights, wanted)
        nearest = min(
            (j for j in (above - 1, above) if 0 <= j < len(heights)),
            key=lambda j: abs(heights[j] - wanted),
        )
        if abs(heights[nearest] / wanted - 1.0) > tolerance or nearest in taken:
            return None
        taken.append(nearest)
    # deviations after the best common factor, so that an odd first ring does not shift all
    gaps = [log(r / radii[0]) - log(lines[j][0] / first) for r, j in zip(radii, taken, strict=True)]
    mean = sum(gaps) / len(gaps)
    rest = [gap - mean for gap in gaps]
    rms = sqrt(sum(gap * gap for gap in rest) / max(1, len(rest) - 1 - (axial is not None)))
    skipped = [j for j in range(taken[-1]) if j not in taken]
    if len(skipped) > len(radii):
        return None
    shown = tuple(
        MatchedRing(r / radii[0], lines[j][1], lines[j][0] / first)
        for r, j in zip(radii, taken, strict=True)
    )
    common = gcd(*(index for ring in shown for index in ring.hkl))
    multiple = common > 1 and kind.system != "layers"  # the same rings of a cell half as large
    missed = sum(0.5 if j < taken[0] else 1.0 for j in skipped)
    cost = missed + rms / tolerance + (1.0 if axial is not None else 0.0) + (3.0 if multiple else 0)
    match = RatioMatch(
        type=kind,
        rings=shown,
        skipped=tuple((lines[j][1], lines[j][0] / first) for j in skipped),
        rms=rms,
        worst=max(map(abs, gaps), default=inf),
        axial_ratio=axial,
        edge_A=None,
    )
    return cost, match


def _with_edge(match: RatioMatch, radii: Sequence[float], spacings: bool) -> RatioMatch:
    """Add a (Å): the mean over all rings, where the radii are 1/d."""
    if not spacings:
        return match
    lines = {hkl: radius for radius, hkl in ratios_of(match.type, match.axial_ratio or _IDEAL)}
    edges = [lines[ring.hkl] / r for ring, r in zip(match.rings, radii, strict=True)]
    return RatioMatch(
        match.type,
        match.rings,
        match.skipped,
        match.rms,
        match.worst,
        match.axial_ratio,
        sum(edges) / len(edges),
    )
