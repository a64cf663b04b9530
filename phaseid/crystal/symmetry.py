"""Symmetry of a structure file: operations first, then Hall symbol, Hermann-Mauguin symbol, number.

A file may contradict itself. `symmetry_candidates` therefore returns every group that its symmetry
items can mean, the most trustworthy first; the reader keeps the first whose operations leave the
cell unchanged and whose contents fit the stated formula.
"""

from __future__ import annotations

import math
from dataclasses import dataclass, field, replace
from functools import lru_cache

import gemmi
import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.closure import is_group
from phaseid.crystal.crystal import Finding
from phaseid.crystal.hermann_mauguin import groups_named, short_symbol
from phaseid.crystal.metric import Cell, metric_tensor
from phaseid.crystal.positions import AffineMaps, affine_maps
from phaseid.crystal.spglib_questions import group_type

MAX_OPERATIONS = 1536  # 192 in the largest conventional cell; eightfold cells still pass
_METRIC_TOLERANCE = 0.01
_DEN = gemmi.Op.DEN


@dataclass(frozen=True, slots=True)
class SymmetryItems:
    """The symmetry items of one block as written."""

    triplets: tuple[str, ...] = ()
    hall: str = ""
    hermann_mauguin: str = ""
    number: int | None = None
    setting: str = ""


@dataclass(frozen=True, slots=True, eq=False)
class Symmetry:
    """A space group in one setting.

    `rotations` (m, 3, 3) and `translations` (m, 3) float64 are the operations in fractional
    coordinates, in the order of `operations`; `maps` are the same ready for use. `guess` marks one
    of several settings that the same symbol can mean. `last_resort` marks the other origin of a
    group whose operations are listed: to be used only where the listed ones cannot be meant.
    """

    number: int
    symbol: str
    operations: tuple[str, ...]
    rotations: NDArray[np.float64]
    translations: NDArray[np.float64]
    maps: AffineMaps
    findings: tuple[Finding, ...] = field(default=())
    guess: bool = False
    last_resort: bool = False


@dataclass(frozen=True, slots=True)
class SymmetryProblem:
    """Why no group can be taken from the symmetry items: a code and a sentence."""

    code: str
    reason: str


@lru_cache(maxsize=1024)
def operation_arrays(
    operations: tuple[str, ...],
) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return rotations (m, 3, 3) and translations (m, 3), float64, of xyz triplets.

    Raises ValueError if a triplet cannot be read.
    """
    rotations, translations = _integer_arrays([gemmi.Op(text) for text in operations])
    arrays = rotations.astype(np.float64), translations / _DEN
    for array in arrays:
        array.flags.writeable = False
    return arrays


@lru_cache(maxsize=1024)
def symmetry_candidates(items: SymmetryItems) -> tuple[Symmetry, ...] | SymmetryProblem:
    """Return the groups that the items can mean, best first, or why there is none."""
    named = _from_names(items)
    if items.triplets:
        listed = _from_triplets(items, named)
        if isinstance(listed, Symmetry):
            return (listed, *_other_origins(listed), *_contradicting(listed, named))
        if named:
            note = Finding(
                "bad_symmetry",
                f"{listed.reason}; the group is taken from its symbol {named[0].symbol} instead",
            )
            return tuple(replace(g, findings=(note, *g.findings)) for g in named)
        return listed
    if named:
        return named
    if items.hall or items.hermann_mauguin or items.number:
        stated = items.hermann_mauguin or items.hall or f"number {items.number}"
        return SymmetryProblem(
            "unknown_space_group",
            f"the space group {stated!r} stands in no table and no operations are listed",
        )
    return SymmetryProblem(
        "no_symmetry", "no space group and no symmetry operations are given; P 1 is not assumed"
    )


def metric_mismatch(symmetry: Symmetry, cell: Cell) -> float:
    """Return by how much the operations change the cell's metric tensor, relative."""
    metric = metric_tensor(cell).tolist()
    entries = [metric[i][j] for i, j in _ENTRIES]
    scale = [math.sqrt(metric[i][i] * metric[j][j]) for i, j in _ENTRIES]
    worst = 0.0
    for entry, terms in _metric_changes(symmetry):
        change = sum([factor * entries[k] for k, factor in terms])
        worst = max(worst, abs(change) / scale[entry])
    return worst


_ENTRIES = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))


@lru_cache(maxsize=1024)
def _metric_changes(
    symmetry: Symmetry,
) -> tuple[tuple[int, tuple[tuple[int, float], ...]], ...]:
    """Return by how much the operations change a metric tensor, each distinct change once.

    A change is the entry of the tensor, and the (entry, factor) that sum to how much it changes.
    """
    rows, columns = np.array(_ENTRIES).T
    unit = np.zeros((6, 3, 3))
    unit[np.arange(6), rows, columns] = unit[np.arange(6), columns, rows] = 1.0
    distinct = np.unique(symmetry.rotations.reshape(-1, 9), axis=0)  # centrings change nothing
    rotations = distinct.reshape(-1, 1, 3, 3)
    changed = rotations.transpose(0, 1, 3, 2) @ unit @ rotations - unit
    factors = changed[:, :, rows, columns].transpose(0, 2, 1).tolist()  # operation, entry, unit
    found = {
        (entry, tuple((k, factor) for k, factor in enumerate(row) if factor))
        for operation in factors
        for entry, row in enumerate(operation)
    }
    return tuple(sorted(change for change in found if change[1]))


def fits_cell(symmetry: Symmetry, cell: Cell) -> bool:
    """Tell whether the operations leave the cell unchanged within 1 % (of squared lengths)."""
    return metric_mismatch(symmetry, cell) <= _METRIC_TOLERANCE


def _from_names(items: SymmetryItems) -> tuple[Symmetry, ...]:
    """Return the groups that Hall symbol, Hermann-Mauguin symbol or number mean."""
    found: list[Symmetry] = []
    if items.hall:
        group = _from_hall(items.hall)
        if group is not None:
            found.append(group)
    if items.hermann_mauguin:
        groups, exact = groups_named(items.hermann_mauguin, items.setting)
        note: tuple[Finding, ...] = ()
        if groups and not exact:
            read_as = f"space group symbol {items.hermann_mauguin!r} read as {groups[0].xhm()}"
            note = (Finding("hm_nonstandard", read_as),)
        found += [_tabulated(g, note, guess=len(groups) > 1) for g in groups]
    if not found and items.number is not None:
        settings = [g for g in gemmi.spacegroup_table() if g.number == items.number]
        note = (
            Finding("symmetry_from_number", f"only space group number {items.number} is given"),
        )
        found += [_tabulated(g, note, guess=len(settings) > 1) for g in settings]
    distinct: dict[frozenset[str], Symmetry] = {}
    for group in found:
        key = frozenset(group.operations)
        if key not in distinct or distinct[key].guess:
            distinct[key] = group
    certain = [g for g in distinct.values() if not g.guess]
    if certain:  # a Hall symbol settles the setting; keep only a contradicting symbol beside it
        numbers = {g.number for g in certain}
        return (*certain, *(g for g in distinct.values() if g.guess and g.number not in numbers))
    return tuple(distinct.values())


def _other_origins(listed: Symmetry) -> list[Symmetry]:
    """Return the other origin choice of a tabulated group, [] where it has only one."""
    group = _group_of([gemmi.Op(text) for text in listed.operations])
    if group is None or group.ext not in ("1", "2"):
        return []
    note = Finding(
        "origin_corrected",
        f"with the listed operations, those of {group.xhm()}, atoms would lie on each other or not "
        "fit the formula; the coordinates belong to the other origin, which is used",
    )
    return [
        replace(_tabulated(other, (note,)), last_resort=True)
        for other in gemmi.spacegroup_table()
        if other.number == group.number
        and other.qualifier == group.qualifier
        and other.ext in ("1", "2")
        and other.ext != group.ext
    ]


def _contradicting(listed: Symmetry, named: tuple[Symmetry, ...]) -> list[Symmetry]:
    """Return the groups that the symbol names and the operations contradict."""
    return [
        replace(
            group,
            findings=(
                Finding(
                    "hm_ops_conflict",
                    f"the listed operations are those of {listed.symbol}, the symbol says "
                    f"{group.symbol}; the symbol is followed, for it fits formula and contacts",
                ),
            ),
        )
        for group in named
        if group.number != listed.number
    ]


def _from_hall(hall: str) -> Symmetry | None:
    try:
        operations = list(gemmi.symops_from_hall(hall))
    except (ValueError, RuntimeError):
        return None
    group = _group_of(operations)
    return None if group is None else _tabulated(group)


def _group_of(operations: list[gemmi.Op]) -> gemmi.SpaceGroup | None:
    return gemmi.find_spacegroup_by_ops(gemmi.GroupOps(operations))


def _tabulated(
    group: gemmi.SpaceGroup, findings: tuple[Finding, ...] = (), *, guess: bool = False
) -> Symmetry:
    return _symmetry(
        group.number, short_symbol(group), list(group.operations()), findings, guess=guess
    )


def _symmetry(
    number: int,
    symbol: str,
    operations: list[gemmi.Op],
    findings: tuple[Finding, ...],
    *,
    guess: bool = False,
) -> Symmetry:
    triplets = tuple(op.triplet() for op in operations)
    rotations, translations = operation_arrays(triplets)
    maps = affine_maps(rotations, translations)
    return Symmetry(number, symbol, triplets, rotations, translations, maps, findings, guess)


def _from_triplets(items: SymmetryItems, named: tuple[Symmetry, ...]) -> Symmetry | SymmetryProblem:
    """Return the group that the listed triplets form, or why they form none."""
    operations: dict[str, gemmi.Op] = {}
    for text in items.triplets:
        try:
            op = gemmi.Op(text).wrap()
        except (ValueError, RuntimeError):
            return SymmetryProblem("bad_symmetry", f"symmetry operation {text!r} cannot be read")
        operations.setdefault(op.triplet(), op)
    ops = list(operations.values())
    if not _is_group(ops):
        return SymmetryProblem(
            "bad_symmetry", f"the {len(ops)} listed symmetry operations do not form a group"
        )
    group = _group_of(ops)
    findings: list[Finding] = []
    if group is not None:
        number, symbol = group.number, short_symbol(group)
    else:
        number, standard = _type_of_untabulated(ops)
        symbol = " ".join(items.hermann_mauguin.split()) or standard
        findings.append(
            Finding(
                "nonstandard_setting",
                f"the operations are those of {standard} (number {number}) in a setting or with an "
                "origin that stands in no table; they are used as listed",
            )
        )
    if named and all(g.number != number for g in named):
        findings.append(
            Finding(
                "hm_ops_conflict",
                f"the symbol says {named[0].symbol}, the {len(ops)} listed operations are those of "
                f"{symbol}; the operations are used",
            )
        )
    elif named:
        findings += [note for note in named[0].findings if note.code == "hm_nonstandard"]
    elif items.hermann_mauguin and group is not None:
        findings.append(
            Finding(
                "hm_nonstandard",
                f"space group symbol {items.hermann_mauguin!r} stands in no table; the listed "
                f"operations are those of {symbol}",
            )
        )
    return _symmetry(number, symbol, ops, tuple(findings))


def _type_of_untabulated(operations: list[gemmi.Op]) -> tuple[int, str]:
    """Return number and standard short symbol of a group in a setting that no table lists."""
    rotations, translations = _integer_arrays(operations)
    return group_type(rotations, translations / _DEN) or (1, "a group of no known type")


def _integer_arrays(
    operations: list[gemmi.Op],
) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    rotations = np.array([op.rot for op in operations], dtype=np.int64) // _DEN
    return rotations, np.array([op.tran for op in operations], dtype=np.int64)


def _is_group(operations: list[gemmi.Op]) -> bool:
    """Tell whether distinct operations are a group of lattice rotations and translations."""
    if any(abs(op.det_rot()) != _DEN**3 for op in operations):
        return False
    return is_group(*_integer_arrays(operations))
