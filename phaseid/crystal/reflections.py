"""Unique reflections of a cell."""

from __future__ import annotations

import math
from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.metric import Cell, inverse_metric, squares, volume_A3
from phaseid.crystal.operations import MAX_INDEX, Operations
from phaseid.errors import InputError

Floats = NDArray[np.float64]

FINEST_D_A = 0.6
COARSEST_D_A = 1.2
WANTED_REFLECTIONS = 1000
MOST_REFLECTIONS = 20_000
_MOST_POINTS = 100_000_000
_SLAB = 1 << 14  # points looked at together: they stay in the cache, and memory stays flat
_LADDER = (3, 5, 8, 12, 16, 24, 32, 48)  # half sizes of boxes kept; they fit one byte
_RUNGS = [next(rung for rung in _LADDER if rung >= n) for n in range(_LADDER[-1] + 1)]
_MOST_KEPT = 1 << 14  # points of a box: at most 64 kB of reflections
_INTEGER = 1e-3  # h·t is a multiple of 1/24; anything nearer to an integer than this is one


@dataclass(frozen=True, slots=True, eq=False)
class Reflections:
    """One reflection of each set of equivalents, by falling d; systematic absences left out.

    `hkl` (n, 3) float64 holds whole numbers, `inverse_d2` (n,) is 1/d² in Å⁻², `multiplicity` (n,)
    counts all equivalents, Friedel mates included. Complete down to `d_min_A`.
    """

    hkl: Floats
    inverse_d2: Floats
    multiplicity: NDArray[np.int64]
    d_min_A: float


def reciprocal_metric(cell: Cell) -> Floats:
    """Return the reciprocal metric tensor (3, 3) in Å⁻²; InputError if the cell has no volume."""
    if not (all(map(math.isfinite, cell)) and min(cell[:3]) > 0 and volume_A3(cell) > 1e-3):
        raise InputError(
            "the cell " + " ".join(f"{x:g}" for x in cell) + " encloses no volume",
            remedy="Check lengths (Å) and angles (degrees)",
        )
    return inverse_metric(cell)


def unique_reflections(
    cell: Cell, operations: Operations, d_min_A: float | None = None
) -> Reflections:
    """Return every unique reflection with d ≥ `d_min_A`.

    Without `d_min_A` the list reaches 0.6 Å, or as far as about 1000 reflections go, but always at
    least 1.2 Å (at most 20 000 reflections). Raises InputError if a range is asked that holds more
    than a computer should be asked for.
    """
    reciprocal = reciprocal_metric(cell)
    if d_min_A is not None:
        if not (d_min_A > 0 and math.isfinite(d_min_A)):
            raise InputError(f"the smallest d must be a positive number of Å, not {d_min_A:g}")
        return _enumerate(cell, reciprocal, operations, d_min_A)
    # points of the reciprocal lattice in a sphere, shared among equivalents (a lower bound on sets)
    per_volume = 4 / 3 * math.pi * volume_A3(cell)
    sets = per_volume / (len(operations.centrings) * 2 * len(operations.rotations))
    d_A = min(max((sets / WANTED_REFLECTIONS) ** (1 / 3), FINEST_D_A), COARSEST_D_A)
    d_A = max(d_A, (sets / MOST_REFLECTIONS) ** (1 / 3))
    found = _enumerate(cell, reciprocal, operations, d_A)
    if d_A < COARSEST_D_A and len(found.hkl) > WANTED_REFLECTIONS:
        return _cut(found, WANTED_REFLECTIONS, COARSEST_D_A)
    return _cut(found, MOST_REFLECTIONS, math.inf)


def _cut(reflections: Reflections, wanted: int, coarsest_d_A: float) -> Reflections:
    """Keep the first `wanted` reflections, and all down to `coarsest_d_A`."""
    if len(reflections.hkl) <= wanted:
        return reflections
    d_A = min(float(reflections.inverse_d2[wanted - 1]) ** -0.5 * (1 - 1e-9), coarsest_d_A)
    d_A = max(d_A, reflections.d_min_A)
    n = int(np.searchsorted(reflections.inverse_d2, d_A**-2, side="right"))
    return Reflections(
        reflections.hkl[:n], reflections.inverse_d2[:n], reflections.multiplicity[:n], d_A
    )


def _enumerate(
    cell: Cell, reciprocal: Floats, operations: Operations, d_min_A: float
) -> Reflections:
    limit = [int(length / d_min_A * (1 + 1e-9)) for length in cell[:3]]
    domain = _domain(operations)
    box = tuple(_RUNGS[n] for n in limit) if max(limit) < len(_RUNGS) else None
    if box is not None and math.prod(_counts(box, domain.nonnegative)) <= _MOST_KEPT:
        kept, counts = _sets_in_box(operations, box)
        hkl = kept.astype(np.float64)
        inverse_d2 = squares(hkl, reciprocal)
        (inside,) = (inverse_d2 <= d_min_A**-2 * (1 + 1e-12)).nonzero()
        order = inside[inverse_d2[inside].argsort()]
        return Reflections(hkl[order], inverse_d2[order], counts[order].astype(np.int64), d_min_A)
    if max(limit) > MAX_INDEX or math.prod(_counts(limit, domain.nonnegative)) > _MOST_POINTS:
        raise InputError(
            f"a cell of {' × '.join(f'{x:.0f}' for x in cell[:3])} Å has too many reflections"
            f" down to {d_min_A:g} Å",
            remedy="Ask for a larger smallest d",
        )
    slabs = _slabs(limit, reciprocal, d_min_A, domain.nonnegative)
    parts = [_first_of_each_set(*slab, operations) for slab in slabs]
    hkl, inverse_d2, multiplicity = map(np.concatenate, zip(*parts, strict=True))
    order = inverse_d2.argsort(kind="stable")
    return Reflections(hkl[order], inverse_d2[order], multiplicity[order], d_min_A)


@lru_cache(maxsize=1024)
def _sets_in_box(
    operations: Operations, box: tuple[int, ...]
) -> tuple[NDArray[np.int8], NDArray[np.int8]]:
    """Return hkl (n, 3) and multiplicity (n,) of every set with |h|, |k|, |l| inside a box.

    Neither depends on the lengths and angles of a cell, so all crystals of a group share them.
    """
    axes = [
        np.arange(0 if half else -n, n + 1, dtype=np.float64)
        for n, half in zip(box, _domain(operations).nonnegative, strict=True)
    ]
    hkl = np.stack(np.meshgrid(*axes, indexing="ij"), axis=-1).reshape(-1, 3)
    first, _, multiplicity = _first_of_each_set(hkl, np.zeros(len(hkl)), operations)
    return first.astype(np.int8), multiplicity.astype(np.int8)


def _counts(limit: Sequence[int], nonnegative: tuple[bool, ...]) -> list[int]:
    """How many h, k, l lie within the limits, where `nonnegative` only from 0 on."""
    return [n + 1 if half else 2 * n + 1 for n, half in zip(limit, nonnegative, strict=True)]


def _slabs(
    limit: Sequence[int], reciprocal: Floats, d_min_A: float, nonnegative: tuple[bool, ...]
) -> Iterator[tuple[Floats, Floats]]:
    """Yield hkl and 1/d² of all lattice points with d ≥ d_min (the origin too), h by h."""
    h_axis, k_axis, l_axis = (
        np.arange(0 if half else -n, n + 1, dtype=np.float64)
        for n, half in zip(limit, nonnegative, strict=True)
    )
    g = reciprocal
    k, across = k_axis[:, None], l_axis[None, :]
    plane = (g[1, 1] * k * k + g[2, 2] * across * across + 2 * g[1, 2] * k * across).ravel()
    slope = (2 * g[0, 1] * k + 2 * g[0, 2] * across).ravel()
    furthest = d_min_A**-2 * (1 + 1e-12)
    step = max(1, _SLAB // len(plane))
    for start in range(0, len(h_axis), step):
        h = h_axis[start : start + step, None]
        inverse_d2 = (h * h * g[0, 0] + h * slope + plane).ravel()
        inside = np.flatnonzero(inverse_d2 <= furthest)
        i, rest = np.divmod(inside, len(plane))
        j, m = np.divmod(rest, len(l_axis))
        hkl = np.empty((len(inside), 3))
        hkl[:, 0], hkl[:, 1], hkl[:, 2] = h[i, 0], k_axis[j], l_axis[m]
        yield hkl, inverse_d2[inside]


def _first_of_each_set(
    hkl: Floats, inverse_d2: Floats, operations: Operations
) -> tuple[Floats, Floats, NDArray[np.int64]]:
    """Keep the first-ranked of each set of equivalents that is present; and count the set."""
    domain = _domain(operations)
    if len(domain.centring):
        phase = domain.centring @ hkl.T
        allowed = np.flatnonzero((np.abs(phase - np.rint(phase)) < _INTEGER).all(axis=0))
        hkl, inverse_d2 = hkl[allowed], inverse_d2[allowed]
    for wall in domain.walls:
        inside = np.flatnonzero(hkl @ wall >= 0)
        hkl, inverse_d2 = hkl[inside], inverse_d2[inside]
    ranks = domain.ranks @ hkl.T
    own = ranks[domain.identity]
    size = np.abs(ranks)
    first = np.flatnonzero((own >= size).all(axis=0) & (own > 0))
    hkl, inverse_d2, ranks = hkl[first], inverse_d2[first], ranks[:, first]
    alike = size[:, first] == own[first]
    multiplicity = 2 * len(operations.rotations) // alike.sum(axis=0)
    if len(domain.gliding):
        present = np.flatnonzero(~_absent(hkl, alike, ranks, operations))
        hkl, inverse_d2, multiplicity = hkl[present], inverse_d2[present], multiplicity[present]
    return hkl, inverse_d2, multiplicity


def _absent(
    hkl: Floats, alike: NDArray[np.bool_], ranks: Floats, operations: Operations
) -> NDArray[np.bool_]:
    """Which hkl a glide or screw forbids: an operation maps hkl on itself out of step."""
    gliding = _domain(operations).gliding
    held = alike[gliding]
    if not operations.centrosymmetric:  # the opposite of hkl is another reflection
        held = held & (ranks[gliding] > 0)
    phase = operations.translations[gliding] @ hkl.T
    return np.asarray((held & (np.abs(phase - np.rint(phase)) > _INTEGER)).any(axis=0))


@dataclass(frozen=True, slots=True, eq=False)
class _Domain:
    """Where the first-ranked reflection of each set lies."""

    ranks: Floats  # (n, 3)
    identity: int
    walls: tuple[Floats, ...]
    nonnegative: tuple[bool, ...]
    centring: Floats  # (k, 3): lattice points that are not corners of the cell
    gliding: NDArray[np.int64]


@lru_cache(maxsize=2048)
def _domain(operations: Operations) -> _Domain:
    ranks = operations.ranks
    identity = int(np.argmax([np.array_equal(r, np.eye(3)) for r in operations.rotations]))
    own = ranks[identity]
    walls = np.concatenate([own - ranks, own + ranks])
    others = np.abs(walls).sum(axis=1)[:, None] - np.abs(walls)
    nonnegative = tuple((walls > others * MAX_INDEX).any(axis=0).tolist())
    # a short list of walls that already excludes nearly everything outside, found on a sample
    sample = np.stack(np.meshgrid(*[np.arange(-4.0, 5.0)] * 3), axis=-1).reshape(-1, 3)
    sample = sample[(sample >= np.where(nonnegative, 0, -4)).all(axis=1)]
    chosen: list[Floats] = []
    outside = sample @ walls.T < 0
    while len(outside):
        counts = outside.sum(axis=0)
        best = int(np.argmax(counts))
        if counts[best] < 0.1 * len(outside):
            break
        chosen.append(walls[best])
        outside = outside[~outside[:, best]]
    shift = operations.translations @ operations.to_primitive.T
    gliding = np.flatnonzero(np.abs(shift - np.rint(shift)).max(axis=1) > _INTEGER)
    axes = operations.from_primitive.T
    centring = axes[np.abs(axes - np.rint(axes)).max(axis=1) > _INTEGER]
    return _Domain(ranks, identity, tuple(chosen), nonnegative, centring, gliding)
