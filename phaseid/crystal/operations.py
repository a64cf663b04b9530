"""A crystal's symmetry as arrays, from nothing but its list of operations.

No space-group table is consulted, so shifted origins and unusual settings need no special care.
The operations are reduced to one per rotation up to sign: lattice translations only thin out the
reflections, an inversion centre (moved to the origin) only makes the structure factor real, and
what is left, at most 24 operations, does all the work.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from functools import lru_cache

import gemmi
import numpy as np
from numpy.typing import NDArray

from phaseid.errors import InputError

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

# Linear functions of (h, k, l) with a different value for every triple up to |index| = 1000. The
# triple ranked first among equivalents is the one people write: by h, then k, then l; on hexagonal
# axes by h + k + l first (110 rather than 2-10, 012 rather than 10-2).
_BASE = 4001
_RANKING = np.array([_BASE**2, _BASE, 1], dtype=np.float64)
_HEXAGONAL_RANKING = _BASE**3 + _RANKING
MAX_INDEX = (_BASE - 1) // 4
_EXPANSIONS_KEPT = 64
INDEX_CODE = _RANKING
"""The product with hkl is one number per triple up to |index| = 1000, ordered by h, then k, l."""


@dataclass(frozen=True, slots=True, eq=False)
class Operations:
    """A space group modulo lattice translations and, where it has one, modulo the inversion.

    `rotations` (n, 3, 3) act on fractional coordinates, `translations` (n, 3) belong to the origin
    moved by `origin` (3,), onto an inversion centre if `centrosymmetric`. `centrings` (c, 3) are
    the lattice points of the cell. `to_primitive` (3, 3) turns fractional coordinates into those of
    a primitive basis, `from_primitive` back. `order` is the number of operations as listed.
    `products` (n, n) is the index of rotation i times rotation j, up to sign. Two affine maps take
    all images in one product: `image_map` (4, 3n) turns (x, y, z, 1) into the n images, `step_map`
    (4, 3n or 6n) into the steps from x to them (and to their inverses), in the primitive basis.
    """

    rotations: Floats
    translations: Floats
    origin: Floats
    centrings: Floats
    to_primitive: Floats
    from_primitive: Floats
    centrosymmetric: bool
    order: int
    products: Ints
    image_map: Floats
    step_map: Floats
    _expansions: dict[bytes, tuple[Ints, Ints, Ints]] = field(default_factory=dict)

    def expansion(self, stabilisers: NDArray[np.bool_]) -> tuple[Ints, Ints, Ints]:
        """Site and operation (k,) of each distinct image of s sites, and their counts (s,).

        `stabilisers` (s, n) marks the operations that leave each site where it is. What was asked
        last is kept: crystals of one type ask the same.
        """
        key = stabilisers.tobytes()
        found = self._expansions.get(key)
        if found is None:
            kept = [np.unique(self.products[:, row].min(axis=1)) for row in stabilisers]
            counts = np.array([len(k) for k in kept], dtype=np.int64)
            found = np.repeat(np.arange(len(kept)), counts), np.concatenate(kept), counts
            if len(self._expansions) >= _EXPANSIONS_KEPT:
                self._expansions.clear()
            self._expansions[key] = found
        return found

    @property
    def ranks(self) -> Floats:
        """(n, 3): the product with hkl is the rank of each equivalent of hkl (up to sign)."""
        hexagonal = np.count_nonzero(self.rotations, axis=2).max() > 1
        return np.asarray(self.rotations @ (_HEXAGONAL_RANKING if hexagonal else _RANKING))


@lru_cache(maxsize=2048)
def read_operations(triplets: tuple[str, ...]) -> Operations:
    """Reduce the complete list of operations, written "x,y,z", to an `Operations`.

    Raises InputError where a triplet cannot be read or the list is not a group.
    """
    rotations, translations = _parse(triplets)
    identity = np.eye(3, dtype=np.int64)
    by_rotation: dict[bytes, int] = {identity.tobytes(): -1}  # comes first, wherever it is listed
    for i, rotation in enumerate(rotations):
        if by_rotation.get(rotation.tobytes(), -1) < 0:
            by_rotation[rotation.tobytes()] = i
    pure = [i for i, r in enumerate(rotations) if np.array_equal(r, identity)]
    centrings = np.unique(translations[pure] % 1.0, axis=0) if pure else np.zeros((0, 3))
    if len(centrings) * len(by_rotation) != len(triplets):
        raise InputError(
            f"the {len(triplets)} symmetry operations are not a group: {len(by_rotation)} different"
            f" rotations and {len(centrings)} lattice translations",
            remedy="Give every operation once, the centring included",
        )
    inversion = by_rotation.get((-identity).tobytes())
    kept: dict[bytes, int] = {}
    for key, i in by_rotation.items():
        if inversion is None or (-rotations[i]).tobytes() not in kept:
            kept[key] = i
    chosen = np.array(list(kept.values()))
    reduced = rotations[chosen]
    origin = np.zeros(3) if inversion is None else translations[inversion] / 2
    from_primitive = _primitive_basis(centrings)
    to_primitive = np.asarray(np.linalg.inv(from_primitive), dtype=np.float64)
    moved = translations[chosen] + reduced @ origin - origin
    images = np.concatenate([reduced, moved[:, :, None]], axis=2)
    both = images if inversion is None else np.concatenate([images, -images])
    steps = to_primitive @ (both - np.eye(3, 4))
    return Operations(
        rotations=reduced.astype(np.float64),
        translations=moved,
        origin=origin,
        centrings=centrings,
        to_primitive=to_primitive,
        from_primitive=from_primitive,
        centrosymmetric=inversion is not None,
        order=len(triplets),
        products=_multiplication_table(reduced),
        image_map=images.reshape(-1, 4).T.copy(),
        step_map=steps.reshape(-1, 4).T.copy(),
    )


def _parse(triplets: Sequence[str]) -> tuple[Ints, Floats]:
    if not triplets:
        raise InputError("the structure has no symmetry operations", remedy="Give at least x,y,z")
    rotations = np.empty((len(triplets), 3, 3), dtype=np.int64)
    translations = np.empty((len(triplets), 3))
    for i, triplet in enumerate(triplets):
        try:
            op = gemmi.Op(triplet)
        except (RuntimeError, ValueError) as error:
            raise InputError(f"symmetry operation '{triplet}' cannot be read: {error}") from error
        rotations[i] = op.rot
        translations[i] = op.tran
    whole, rest = np.divmod(rotations, gemmi.Op.DEN)
    if rest.any() or not np.all(np.abs(np.linalg.det(whole)) > 0.5):
        bad = triplets[int(np.argmax(rest.any(axis=(1, 2))))]
        raise InputError(f"symmetry operation '{bad}' does not map the lattice onto itself")
    return whole, translations / gemmi.Op.DEN


def _primitive_basis(centrings: Floats) -> Floats:
    """Columns: a primitive basis of the lattice spanned by the cell and its centrings."""
    denominator = gemmi.Op.DEN
    rows = [list(row) for row in (np.eye(3, dtype=int) * denominator).tolist()]
    rows += np.rint(centrings * denominator).astype(int).tolist()
    basis: list[list[int]] = []
    for column in range(3):  # Hermite normal form
        active = [r for r in rows if any(r[column:])]
        while sum(bool(r[column]) for r in active) > 1:
            active.sort(key=lambda r: (r[column] == 0, abs(r[column])))
            pivot = active[0]
            for r in active[1:]:
                factor = r[column] // pivot[column]
                r[:] = [a - factor * b for a, b in zip(r, pivot, strict=True)]
        active.sort(key=lambda r: r[column] == 0)
        basis.append(active[0])
        rows = active[1:]
    return np.array(basis, dtype=np.float64).T / denominator


def _multiplication_table(rotations: Ints) -> Ints:
    index = {r.tobytes(): i for i, r in enumerate(rotations)}
    index.update(
        {(-r).tobytes(): i for i, r in enumerate(rotations) if (-r).tobytes() not in index}
    )
    table = np.empty((len(rotations), len(rotations)), dtype=np.int64)
    for i, a in enumerate(rotations):
        for j, product in enumerate(a @ rotations):
            found = index.get(product.tobytes())
            if found is None:
                raise InputError(
                    "the symmetry operations are not a group: the product of two is missing",
                    remedy="Give the complete list of operations",
                )
            table[i, j] = found
    return table
