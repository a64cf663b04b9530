"""Do operations form a group modulo lattice translations?"""

from __future__ import annotations

import gemmi
import numpy as np
from numpy.typing import NDArray

Ints = NDArray[np.int64]

_DEN = gemmi.Op.DEN
_LARGEST = 2  # entry of a rotation on a lattice basis; products of such reach 12
_ROTATION_WEIGHTS = 25 ** np.arange(9, dtype=np.int64)
_TRANSLATION_WEIGHTS = np.array([1, _DEN, _DEN**2], dtype=np.int64)


def is_group(rotations: Ints, translations: Ints) -> bool:
    """Tell whether distinct operations are closed under multiplication.

    `rotations` (m, 3, 3) have determinant ±1, `translations` (m, 3) are in twenty-fourths. Each
    rotation must come with every pure translation; then it is enough to multiply one operation of
    each rotation with each other, and with the pure translations.
    """
    if np.abs(rotations).max() > _LARGEST:
        return False
    every = np.sort(_keys(rotations, translations))
    _, first = np.unique(rotations.reshape(-1, 9) @ _ROTATION_WEIGHTS, return_index=True)
    some, shift = rotations[first], translations[first]
    identity = np.eye(3, dtype=np.int64)
    lattice = translations[(rotations == identity).all(axis=(1, 2))]
    if len(some) * len(lattice) != len(rotations):
        return False
    products = (some[:, None] @ some).reshape(-1, 3, 3)
    shifts = (some @ shift.T).transpose(0, 2, 1) + shift[:, None]
    with_lattice = shift[:, None] + lattice  # each rotation has every pure translation
    sums = lattice[:, None] + lattice
    turned = (some @ lattice.T).transpose(0, 2, 1)
    return (
        _among(every, products, shifts)
        and _among(every, np.repeat(some, len(lattice), axis=0), with_lattice)
        and _among(every, identity, sums)
        and _among(every, identity, turned)
    )


def _among(every: Ints, rotations: Ints, translations: Ints) -> bool:
    """Tell whether all operations are among those whose sorted keys are given."""
    keys = _keys(rotations.reshape(-1, 3, 3), translations.reshape(-1, 3))
    place = np.searchsorted(every, keys).clip(max=len(every) - 1)
    return np.array_equal(every[place], keys)


def _keys(rotations: Ints, translations: Ints) -> Ints:
    """Return one whole number (m,) per operation, equal only for equal operations."""
    turned = (rotations.reshape(-1, 9) + 12) @ _ROTATION_WEIGHTS
    return np.asarray(turned * _DEN**3 + translations % _DEN @ _TRANSLATION_WEIGHTS)
