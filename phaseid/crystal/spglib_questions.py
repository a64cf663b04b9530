"""The four questions put to spglib, each asked only where gemmi's table has no answer.

spglib takes a tenth of a second to load and warns about its own future error handling on every
call; both stay in here.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable
from typing import Any, TypeVar

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.metric import Cell, metric_tensor

_HALL_NUMBERS = range(1, 531)
_T = TypeVar("_T")


def group_type(
    rotations: NDArray[np.int64], translations: NDArray[np.float64]
) -> tuple[int, str] | None:
    """Return number and standard short symbol of the group that operations form, in any setting."""
    import spglib

    found: Any = _asked(lambda: spglib.get_spacegroup_type_from_symmetry(rotations, translations))
    return None if found is None else (int(found.number), str(found.international_short))


def full_symbols() -> list[tuple[str, str]]:
    """Return (Hall symbol, full Hermann-Mauguin symbol) of every tabulated setting."""
    import spglib

    rows: Any = _asked(lambda: [spglib.get_spacegroup_type(n) for n in _HALL_NUMBERS])
    return [(str(row.hall_symbol), str(row.international_full)) for row in rows or ()]


def group_of_atoms(
    cell: Cell, fract: list[tuple[float, float, float]], kinds: list[int], tolerance_A: float
) -> tuple[int, str] | None:
    """Return number and short symbol of the group of all atoms of a cell, None if none fits."""
    import spglib

    lattice = np.linalg.cholesky(metric_tensor(cell))  # rows a, b, c
    atoms = (lattice.tolist(), fract, kinds)
    found: Any = _asked(lambda: spglib.get_symmetry_dataset(atoms, symprec=tolerance_A))
    return None if found is None else (int(found.number), str(found.international))


def operations_of_atoms(
    cell: Cell, fract: list[tuple[float, float, float]], kinds: list[int], tolerance_A: float
) -> tuple[int, NDArray[np.float64], NDArray[np.float64]] | None:
    """Return number, rotations (m, 3, 3) and translations (m, 3) of the group of all atoms.

    In the cell as given; None if no group fits.
    """
    import spglib

    atoms = (np.linalg.cholesky(metric_tensor(cell)).tolist(), fract, kinds)
    found: Any = _asked(lambda: spglib.get_symmetry_dataset(atoms, symprec=tolerance_A))
    if found is None:
        return None
    return int(found.number), found.rotations.astype(np.float64), found.translations


def _asked(question: Callable[[], _T]) -> _T | None:
    import spglib

    # newer spglib raises its own error where older ones gave None
    refusal = getattr(spglib, "SpglibError", RuntimeError)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore", DeprecationWarning)
        try:
            return question()
        except (refusal, RuntimeError, ValueError, TypeError):
            return None
