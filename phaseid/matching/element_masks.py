"""Which of many phases the chemistry admits, by the bits of their elements."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from phaseid.library.linetable import elements_bits
from phaseid.matching.chemistry import Chemistry


def admitted(chemistry: Chemistry, elements: NDArray[np.uint64]) -> NDArray[np.bool_]:
    """Whether each phase may be part of an answer (p,); `elements` (p, 2) as in `LineTable`."""
    refused = words(chemistry.exclude)
    if chemistry.only is not None:
        refused |= ~words(chemistry.only)
    return np.asarray(~(elements & refused).any(axis=1))


def doubtful(chemistry: Chemistry, elements: NDArray[np.uint64]) -> NDArray[np.int64]:
    """How many elements seen with doubt each phase has (p,); `elements` (p, 2)."""
    count = np.zeros(len(elements), dtype=np.int64)
    for symbol in sorted(chemistry.doubt):
        count += (elements & words(frozenset({symbol}))).any(axis=1)
    return count


def words(elements: frozenset[str]) -> NDArray[np.uint64]:
    """Elements as `LineTable.elements_mask` has them (2,)."""
    bits = elements_bits(elements)
    return np.array([bits & 0xFFFF_FFFF_FFFF_FFFF, bits >> 64], dtype=np.uint64)
