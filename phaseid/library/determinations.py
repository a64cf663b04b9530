"""Entries of a library as determinations of a phase: what comparing and ranking them asks for.

What ranks entries is read at once, the cell, the structure and the lines only of entries that come
near to others.
"""

from __future__ import annotations

import json
import re
import sqlite3
from dataclasses import dataclass
from functools import cached_property, lru_cache
from math import log
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from phaseid.library.lattice_maps import Lattice
from phaseid.library.marks import COMPUTED
from phaseid.library.packing import unpack_lines
from phaseid.library.records import SEPARATOR, stored_crystal
from phaseid.library.starter import DATABASE, MIRROR_IMAGE

if TYPE_CHECKING:
    from phaseid.crystal.crystal import Crystal
    from phaseid.crystal.lines import Lines
    from phaseid.crystal.metric import Cell

Floats = NDArray[np.float64]

COLUMNS = (
    "id, content, name NOT IN ('', formula), formula_key, space_group_number, density_g_cm3, "
    "source_database, source_reference <> '', findings, quality, temperature_K"
)
_OF_LINES = (
    "space_group_symbol, symmetry, volume_A3, complete_to_A, floor, "
    "a_A, b_A, c_A, alpha_deg, beta_deg, gamma_deg"
)

_UNTOLD = "higher_symmetry"  # the source gives all atoms of the cell and no symmetry
_FOUND = re.compile(r" \((\d+)\), hkl refer")  # how that finding tells the group of the atoms
_TOLERANCE_A = 0.01
_LIGHTEST = 1e-6  # g/cm³: of atoms without a mass, which some files list
_AMOUNT = re.compile(r"[A-Z][a-z]?([\d.]+)")


class StoredEntry:
    """One entry of a library; `row` is its number in the table."""

    def __init__(self, conn: sqlite3.Connection, *row: Any) -> None:
        self._conn = conn
        (
            self.row, self.content, self.named, key, self._number, density,
            database, self.reference, findings, self.quality, self.temperature_K,
        ) = row  # fmt: skip
        self.ln_density = ln_density(density)
        self.fractions = fractions(key)
        self.shipped = database == DATABASE
        self.computed, self.symmetry_untold, self._found_number = _told(findings)

    @cached_property
    def group(self) -> int:
        """The number of the space group, of a pair of mirror images the lower one."""
        number = self._number
        if self.symmetry_untold:
            number = self._found_number or self._found[0]
        return group_kind(number)

    @cached_property
    def crystal(self) -> Crystal:
        """The structure as it was added."""
        held = stored_crystal(self._conn, self.row)
        if held is None:
            raise LookupError(f"phase {self.row} has no structure")
        return held

    def colder_than(self, limit_K: float) -> bool:
        """Whether the structure was measured below that temperature."""
        return self.temperature_K is not None and bool(self.temperature_K < limit_K)

    @cached_property
    def _of_lines(self) -> tuple[Any, ...]:
        found = self._conn.execute(
            f"SELECT {_OF_LINES} FROM phase JOIN structure ON structure.phase = phase.id "
            "WHERE id = ?",
            (self.row,),
        )
        return _present(found.fetchone(), self.row, "structure")

    @property
    def setting(self) -> str:
        """The symbol of the space group in the setting of the source."""
        return str(self._of_lines[0])

    @property
    def cell(self) -> Cell:
        """The cell, Å and degrees."""
        a, b, c, alpha, beta, gamma = self._of_lines[5:]
        return a, b, c, alpha, beta, gamma

    @cached_property
    def strong(self) -> StrongLines:
        """The strongest lines."""
        held = self._conn.execute("SELECT data FROM lines WHERE phase = ?", (self.row,)).fetchone()
        _, _, volume_A3, complete_to_A, floor, *_ = self._of_lines
        return strong_lines(
            unpack_lines(
                _present(held, self.row, "lines")[0],
                cell=self.cell,
                volume_A3=volume_A3,
                complete_to_A=complete_to_A,
                floor=floor,
            )
        )

    @cached_property
    def lattice(self) -> Lattice:
        """The lattice, with the centring that the operations or the atoms show."""
        if self.symmetry_untold:
            return Lattice(self.cell, _centring(*self._found[1:]))
        held = self._conn.execute(
            "SELECT operations FROM symmetry WHERE id = ?", (self._of_lines[1],)
        ).fetchone()
        return Lattice(self.cell, _told_centring(_present(held, self.row, "symmetry")[0]))

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


def ln_density(density_g_cm3: float) -> float:
    """Return ln of a density by which entries are compared."""
    return log(max(density_g_cm3, _LIGHTEST))


@lru_cache(maxsize=4096)
def fractions(formula_key: str) -> tuple[float, ...]:
    """Return the fractions of the atoms, by the elements in alphabetical order."""
    return tuple(map(float, _AMOUNT.findall(formula_key)))


def group_kind(number: int) -> int:
    """Return the number of a space group, of a pair of mirror images the lower one."""
    return MIRROR_IMAGE.get(number, number)


@lru_cache(maxsize=1024)
def _told(findings: str) -> tuple[bool, bool, int | None]:
    """Whether an entry is computed, whether its symmetry is untold, the group its atoms have."""
    messages = dict(json.loads(findings))
    found = _FOUND.search(messages.get(_UNTOLD, ""))
    computed = bool(messages.keys() & COMPUTED)
    return computed, _UNTOLD in messages, int(found[1]) if found else None


def _present(row: tuple[Any, ...] | None, phase: int, what: str) -> tuple[Any, ...]:
    if row is None:
        raise LookupError(f"phase {phase} has no {what}")
    return row


@lru_cache(maxsize=1024)
def _told_centring(operations: str) -> Floats:
    from phaseid.crystal.symmetry import operation_arrays

    return _centring(*operation_arrays(tuple(operations.split(SEPARATOR) if operations else ())))


def _centring(rotations: Floats, translations: Floats) -> Floats:
    """The translations (k, 3) among operations that are not whole ones."""
    pure = translations[(rotations == np.eye(3)).all(axis=(1, 2))] % 1.0
    kept: Floats = pure[np.abs(pure - np.round(pure)).max(axis=1) > 1e-4]
    return kept


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
    hkl, d_A = lines.hkl.astype(np.float64), lines.d_A
    if len(d_A) > STRONGEST:
        kept = np.zeros(len(d_A), dtype=bool)
        kept[np.argpartition(-shown, STRONGEST, axis=1)[:, :STRONGEST]] = True
        hkl, d_A, shown = hkl[kept], d_A[kept], shown[:, kept]
    return StrongLines(hkl, d_A, shown, lines.complete_to_A)
