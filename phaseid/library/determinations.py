"""Entries of a library as determinations of a phase: what comparing and ranking them asks for.

Columns are read at once, the structure and the lines only of entries that come near to others.
"""

from __future__ import annotations

import json
import re
import sqlite3
from dataclasses import dataclass
from functools import cached_property
from math import log
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from phaseid.library.lattice_maps import Lattice
from phaseid.library.marks import COMPUTED
from phaseid.library.packing import unpack_lines
from phaseid.library.records import stored_crystal
from phaseid.library.starter import DATABASE, MIRROR_IMAGE

if TYPE_CHECKING:
    from phaseid.crystal.crystal import Crystal
    from phaseid.crystal.lines import Lines
    from phaseid.crystal.metric import Cell

Floats = NDArray[np.float64]

COLUMNS = (
    "id, content, name, formula, formula_key, space_group_number, space_group_symbol, "
    "density_g_cm3, source_database, source_reference, findings, quality, volume_A3, "
    "complete_to_A, floor, a_A, b_A, c_A, alpha_deg, beta_deg, gamma_deg"
)

_UNTOLD = "higher_symmetry"  # the source gives all atoms of the cell and no symmetry
_TOLERANCE_A = 0.01
_LIGHTEST = 1e-6  # g/cm³: of atoms without a mass, which some files list
_AMOUNT = re.compile(r"[A-Z][a-z]?([\d.]+)")


class StoredEntry:
    """One entry of a library; `row` is its number in the table."""

    def __init__(self, conn: sqlite3.Connection, *row: Any) -> None:
        self._conn = conn
        (
            self.row, self.content, name, formula, self._key, self._number,
            self.setting, density, database, reference, findings, self.quality,
            self._volume_A3, self._complete_to_A, self._floor, *cell,
        ) = row  # fmt: skip
        self.cell: Cell = tuple(cell)
        self.ln_density = log(max(density, _LIGHTEST))
        self.named = bool(name) and name != formula
        self.reference = bool(reference)
        self.shipped = database == DATABASE
        codes = {code for code, _ in json.loads(findings)}
        self.computed = bool(codes & COMPUTED)
        self.symmetry_untold = _UNTOLD in codes

    @cached_property
    def group(self) -> int:
        """The number of the space group, of a pair of mirror images the lower one."""
        number = self._found[0] if self.symmetry_untold else self._number
        return MIRROR_IMAGE.get(number, number)

    @cached_property
    def fractions(self) -> Floats:
        """The fractions of the atoms (k,), by the elements in alphabetical order."""
        return np.array([float(amount) for amount in _AMOUNT.findall(self._key)])

    @cached_property
    def crystal(self) -> Crystal:
        """The structure as it was added."""
        held = stored_crystal(self._conn, self.row)
        if held is None:
            raise LookupError(f"phase {self.row} has no structure")
        return held

    def colder_than(self, limit_K: float) -> bool:
        """Whether the structure was measured below that temperature."""
        temperature = self.crystal.temperature_K
        return temperature is not None and temperature < limit_K

    @cached_property
    def strong(self) -> StrongLines:
        """The strongest lines."""
        held = self._conn.execute("SELECT data FROM lines WHERE phase = ?", (self.row,)).fetchone()
        if held is None:
            raise LookupError(f"phase {self.row} has no lines")
        return strong_lines(
            unpack_lines(
                held[0],
                cell=self.cell,
                volume_A3=self._volume_A3,
                complete_to_A=self._complete_to_A,
                floor=self._floor,
            )
        )

    @cached_property
    def lattice(self) -> Lattice:
        """The lattice, with the centring that the operations or the atoms show."""
        from phaseid.crystal.symmetry import operation_arrays

        if self.symmetry_untold:
            _, rotations, translations = self._found
        else:
            rotations, translations = operation_arrays(self.crystal.operations)
        pure = translations[(rotations == np.eye(3)).all(axis=(1, 2))] % 1.0
        return Lattice(self.cell, pure[np.abs(pure - np.round(pure)).max(axis=1) > 1e-4])

    @cached_property
    def _found(self) -> tuple[int, Floats, Floats]:
        """Number and operations of the group that the atoms of a cell without symmetry have."""
        from phaseid.crystal.spglib_questions import operations_of_atoms

        sites = self.crystal.sites
        kinds = {element: k for k, element in enumerate(sorted({s.element for s in sites}), 1)}
        found = operations_of_atoms(
            self.cell,
            [site.fract for site in sites],
            [kinds[site.element] for site in sites],
            _TOLERANCE_A,
        )
        return found or (self._number, np.eye(3)[None], np.zeros((1, 3)))


STRONGEST = 250
"""Lines by which determinations are compared, of each probe."""


@dataclass(frozen=True, slots=True, eq=False)
class StrongLines:
    """The strongest lines of an entry: hkl (n, 3), d_A (n,), m|F|²d² (3, n) by probe.

    Probes are X-rays, electrons, neutrons.
    """

    hkl: Floats
    d_A: Floats
    shown: Floats
    complete_to_A: float


def strong_lines(lines: Lines) -> StrongLines:
    """Return the lines that are among the strongest for one probe at least."""
    f2 = np.array([lines.f2_xray, lines.f2_electron, lines.f2_neutron])
    shown = f2 * (lines.multiplicity * lines.d_A**2)
    kept = np.arange(len(lines.d_A))
    if len(kept) > STRONGEST:
        kept = np.unique(np.argpartition(-shown, STRONGEST, axis=1)[:, :STRONGEST])
    return StrongLines(
        lines.hkl[kept].astype(np.float64), lines.d_A[kept], shown[:, kept], lines.complete_to_A
    )
