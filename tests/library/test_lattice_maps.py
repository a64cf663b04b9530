"""Laying one lattice on another: d computed by gemmi must be the same before and after."""

from __future__ import annotations

import gemmi
import numpy as np
import pytest

from phaseid.library.lattice_maps import Lattice, index_maps

PRIMITIVE = np.zeros((0, 3))
FACES = np.array([[0.0, 0.5, 0.5], [0.5, 0.0, 0.5], [0.5, 0.5, 0.0]])
BODY = np.array([[0.5, 0.5, 0.5]])
OBVERSE = np.array([[2 / 3, 1 / 3, 1 / 3], [1 / 3, 2 / 3, 2 / 3]])
C_FACE = np.array([[0.5, 0.5, 0.0]])

# Two descriptions of one lattice, from textbook relations (International Tables A, ch. 1.5):
# the primitive rhombohedron of an F cell has a/√2 and 60°, of an I cell a√3/2 and 109.471°;
# corundum has a 4.7589, c 12.9910 Å or a 5.1284 Å, 55.287° (Wyckoff, Crystal Structures 2, from
# memory, and computed); the hexagonal cell is orthorhombic C with b = a√3.
RHOMBOHEDRON_I_DEG = float(np.degrees(np.arccos(-1 / 3)))
PAIRS = [
    ((4.05, 4.05, 4.05, 90, 90, 90), FACES, (2.86378, 2.86378, 2.86378, 60, 60, 60)),
    ((2.8665, 2.8665, 2.8665, 90, 90, 90), BODY, (2.48246,) * 3 + (RHOMBOHEDRON_I_DEG,) * 3),
    ((4.7589, 4.7589, 12.991, 90, 90, 120), OBVERSE, (5.12839, 5.12839, 5.12839) + (55.2885,) * 3),
    ((4.9134, 8.51026, 5.4052, 90, 90, 90), C_FACE, (4.9134, 4.9134, 5.4052, 90, 90, 120)),
]


@pytest.mark.parametrize(("cell", "centring", "other"), PAIRS)
def test_a_centred_cell_and_its_primitive_one_are_one_lattice(
    cell: tuple[float, ...], centring: np.ndarray, other: tuple[float, ...]
) -> None:
    one, two = gemmi.UnitCell(*cell), gemmi.UnitCell(*other)
    maps = index_maps(Lattice(cell, centring), Lattice(other, PRIMITIVE), 1e-3)  # type: ignore[arg-type]
    assert maps
    for matrix in maps:
        for hkl in ((1, 0, 0), (0, 1, 1), (2, -1, 3), (1, 1, -2)):
            turned = matrix @ np.array(hkl)
            assert turned == pytest.approx(np.round(turned), abs=1e-9)  # whole indices
            d_A = one.calculate_d([round(index) for index in turned])
            assert d_A == pytest.approx(two.calculate_d(list(hkl)), rel=1e-4)
    assert index_maps(Lattice(other, PRIMITIVE), Lattice(cell, centring), 1e-3)  # type: ignore[arg-type]


def test_all_maps_of_a_lattice_on_itself_are_its_symmetry() -> None:
    # holohedries: m-3m has 48 operations, 6/mmm 24, 2/m 4; up to sign half of them
    cubic = Lattice((4.05, 4.05, 4.05, 90, 90, 90), FACES)
    hexagonal = Lattice((3.2, 3.2, 5.2, 90, 90, 120), PRIMITIVE)
    monoclinic = Lattice((5.15, 5.21, 5.32, 90, 99.2, 90), PRIMITIVE)
    assert [len(index_maps(x, x, 1e-4)) for x in (cubic, hexagonal, monoclinic)] == [24, 12, 2]


def test_another_choice_of_axes_is_seen_through() -> None:
    # baddeleyite, Smith & Newkirk, Acta Cryst. 18, 983 (1965): a 5.1454, b 5.2075, c 5.3107 Å,
    # β 99.23°; the same lattice with a' = -a - c, c' = a
    one = (5.1454, 5.2075, 5.3107, 90.0, 99.23, 90.0)
    base = gemmi.UnitCell(*one)
    orth = np.array(base.orth.mat.tolist()).T  # rows a, b, c
    turned = np.array([[-1, 0, -1], [0, -1, 0], [1, 0, 0]]) @ orth
    lengths = np.linalg.norm(turned, axis=1)
    unit = turned / lengths[:, None]
    cosines = (unit[1] @ unit[2], unit[0] @ unit[2], unit[0] @ unit[1])
    two = (*lengths, *np.degrees(np.arccos(cosines)))
    maps = index_maps(Lattice(one, PRIMITIVE), Lattice(two, PRIMITIVE), 1e-4)
    other = gemmi.UnitCell(*two)
    d_A = [base.calculate_d([round(i) for i in m @ np.array([1, 2, -1])]) for m in maps]
    assert d_A == pytest.approx([other.calculate_d([1, 2, -1])] * 2, rel=1e-9)


@pytest.mark.parametrize("factor", [1.02, 0.98])
def test_the_tolerance_is_that_of_the_edges(factor: float) -> None:
    one = Lattice((4.05, 4.05, 4.05, 90, 90, 90), FACES)
    two = Lattice((4.05 * factor,) * 3 + (90, 90, 90), FACES)
    assert index_maps(one, two, 0.021)
    assert index_maps(one, two, 0.019) == []


def test_a_lattice_is_not_its_own_multiple() -> None:
    one = Lattice((8.1, 8.1, 8.1, 90, 90, 90), PRIMITIVE)
    half = Lattice((4.05, 4.05, 4.05, 90, 90, 90), PRIMITIVE)
    assert index_maps(one, half, 0.01) == index_maps(half, one, 0.01) == []
