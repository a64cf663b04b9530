"""Unique reflections against gemmi, a plain count of lattice points, and Int. Tables."""

from __future__ import annotations

import gemmi
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from known_crystals import PROTOTYPES, crystal

from phaseid.crystal.operations import read_operations
from phaseid.crystal.reflections import unique_reflections
from phaseid.errors import InputError


def cell_for(group: gemmi.SpaceGroup) -> tuple[float, float, float, float, float, float]:
    """A cell with the shape that the group's system demands, else as uneven as it may be."""
    system = group.crystal_system_str()
    if system == "cubic":
        return (7.13, 7.13, 7.13, 90, 90, 90)
    if system in ("trigonal", "hexagonal"):
        return (6.07, 6.07, 6.07, 77, 77, 77) if group.ext == "R" else (6, 6, 8.13, 90, 90, 120)
    if system == "tetragonal":
        return (6.07, 6.07, 8.13, 90, 90, 90)
    if system == "orthorhombic":
        return (5.03, 6.17, 7.31, 90, 90, 90)
    if system == "monoclinic":
        angles = [90.0, 90.0, 90.0]
        angles["abc".index(group.monoclinic_unique_axis())] = 103.0
        return (5.03, 6.17, 7.31, angles[0], angles[1], angles[2])
    return (5.03, 6.17, 7.31, 82, 95, 107)


def triplets(group: gemmi.SpaceGroup) -> tuple[str, ...]:
    return tuple(op.triplet() for op in group.operations())


def test_every_tabulated_setting_has_the_reflections_that_gemmi_finds() -> None:
    """gemmi's reflection list, absences, epsilon, centric flags; 564 settings of its table."""
    for group in gemmi.spacegroup_table():
        cell = cell_for(group)
        found = unique_reflections(cell, read_operations(triplets(group)), 1.21)
        operations, unit_cell = group.operations(), gemmi.UnitCell(*cell)
        hkl = gemmi.make_miller_array(unit_cell, group, 1.21)
        hkl = hkl[~operations.systematic_absences(hkl)]
        friedel = np.where(operations.centric_flag_array(hkl), 1, 2)
        epsilon = operations.epsilon_factor_without_centering_array(hkl)
        multiplicity = len(operations.sym_ops) * friedel // epsilon
        expected = sorted(
            zip(np.round(unit_cell.calculate_1_d2_array(hkl), 9), multiplicity, strict=True)
        )
        got = sorted(zip(np.round(found.inverse_d2, 9), found.multiplicity, strict=True))
        assert len(got) == len(expected), group.xhm()
        np.testing.assert_allclose(got, expected, rtol=0, atol=1e-8, err_msg=group.xhm())


@settings(max_examples=30, deadline=None)
@given(
    lengths=st.tuples(*[st.floats(2.0, 9.0)] * 3),
    angles=st.tuples(*[st.floats(70.0, 110.0)] * 3),
    centring=st.sampled_from(["P -1", "P 1", "C -1", "I 1", "F -1", "A 1"]),
)
def test_multiplicities_add_up_to_the_lattice_points_in_the_sphere(
    lengths: tuple[float, float, float], angles: tuple[float, float, float], centring: str
) -> None:
    cell = (*lengths, *angles)
    group = gemmi.SpaceGroup(centring)
    found = unique_reflections(cell, read_operations(triplets(group)), 0.9)
    fractional = np.array(gemmi.UnitCell(*cell).frac.mat)  # rows are a*, b*, c*
    index = np.stack(np.meshgrid(*[np.arange(-12, 13)] * 3, indexing="ij"), -1).reshape(-1, 3)
    length = np.linalg.norm(index @ fractional, axis=1)
    rules = {
        "P": lambda h: h[:, 0] % 1 == 0,
        "A": lambda h: (h[:, 1] + h[:, 2]) % 2 == 0,
        "C": lambda h: (h[:, 0] + h[:, 1]) % 2 == 0,
        "I": lambda h: h.sum(axis=1) % 2 == 0,
        "F": lambda h: (h % 2 == h[:, :1] % 2).all(axis=1),
    }
    inside = (length > 0) & (length <= 1 / 0.9) & rules[centring[0]](index)
    assert found.multiplicity.sum() == inside.sum()


@pytest.mark.parametrize(
    ("symbol", "multiplicities"),
    [
        # Int. Tables vol. A and C: multiplicities in powder patterns by Laue class
        ("P m -3 m", {(1, 0, 0): 6, (1, 1, 0): 12, (1, 1, 1): 8, (2, 1, 0): 24, (3, 2, 1): 48}),
        ("P m -3", {(1, 0, 0): 6, (2, 1, 0): 12, (2, 0, 1): 12, (3, 2, 1): 24}),
        ("P 6/m m m", {(1, 0, 0): 6, (0, 0, 1): 2, (2, 1, 0): 12, (2, 1, 1): 24, (1, 1, 0): 6}),
        ("P 4/m m m", {(1, 0, 0): 4, (0, 0, 1): 2, (1, 1, 0): 4, (2, 1, 0): 8, (2, 1, 1): 16}),
        ("P m m m", {(1, 0, 0): 2, (1, 1, 0): 4, (1, 1, 1): 8}),
        ("P 1 2/m 1", {(0, 1, 0): 2, (1, 0, 0): 2, (1, 1, 1): 4}),
        ("P -1", {(1, 0, 0): 2, (1, 1, 1): 2}),
    ],
)
def test_multiplicities_of_the_international_tables(
    symbol: str, multiplicities: dict[tuple[int, int, int], int]
) -> None:
    group = gemmi.SpaceGroup(symbol)
    found = unique_reflections(cell_for(group), read_operations(triplets(group)), 1.2)
    table = {tuple(h): m for h, m in zip(found.hkl.tolist(), found.multiplicity, strict=True)}
    assert {hkl: int(table[hkl]) for hkl in multiplicities} == multiplicities


@pytest.mark.parametrize(
    ("symbol", "rule"),
    [
        # Int. Tables vol. A, reflection conditions
        ("F m -3 m", lambda h, k, m: h % 2 == k % 2 == m % 2),
        ("I m -3 m", lambda h, k, m: (h + k + m) % 2 == 0),
        ("P 1 21/c 1", lambda h, k, m: not (k == 0 and m % 2) and not (h == m == 0 and k % 2)),
        ("P 63/m m c", lambda h, k, m: not (h == k and m % 2)),
        ("P 41 21 2", lambda h, k, m: not (h == k == 0 and m % 4) and not (k == m == 0 and h % 2)),
        ("P 61", lambda h, k, m: not (h == k == 0 and m % 6)),
        ("R -3 c:H", lambda h, k, m: (-h + k + m) % 3 == 0 and not (h + k == 0 and m % 2)),
        ("P n m a", lambda h, k, m: not (h == 0 and (k + m) % 2) and not (m == 0 and h % 2)),
    ],
)
def test_extinction_rules_of_the_international_tables(symbol: str, rule) -> None:  # type: ignore[no-untyped-def]
    group = gemmi.SpaceGroup(symbol)
    cell = cell_for(group)
    found = unique_reflections(cell, read_operations(triplets(group)), 0.95)
    rotations = [np.array(op.rot) // gemmi.Op.DEN for op in group.operations().sym_ops]
    listed = {
        tuple(sign * (np.array(h, int) @ r))
        for h in found.hkl.tolist()
        for r in rotations
        for sign in (1, -1)
    }
    unit_cell = gemmi.UnitCell(*cell)
    for h in range(-4, 5):
        for k in range(-4, 5):
            for m in range(-4, 5):
                if (h, k, m) != (0, 0, 0) and unit_cell.calculate_d([h, k, m]) > 0.95:
                    image = [tuple(np.array([h, k, m]) @ r) for r in rotations]
                    allowed = all(rule(*i) for i in image)
                    assert ((h, k, m) in listed) == allowed, (symbol, h, k, m)


def test_indices_are_written_as_people_write_them() -> None:
    """NBS sheets of corundum, quartz, silicon and tenorite (published_patterns.json)."""
    written = {
        "corundum": (
            (4.759, 4.759, 12.99, 90, 90, 120),
            {(0, 1, 2), (1, 0, 4), (1, 1, 0), (1, 1, 3)},
        ),
        "quartz": (
            (4.913, 4.913, 5.405, 90, 90, 120),
            {(1, 0, 0), (1, 0, 1), (1, 1, 0), (1, 0, 2)},
        ),
        "diamond": ((5.43, 5.43, 5.43, 90, 90, 90), {(1, 1, 1), (2, 2, 0), (3, 1, 1), (3, 3, 1)}),
        "tenorite": ((4.684, 3.425, 5.129, 90, 99.47, 90), {(1, 1, 0), (0, 0, 2), (1, 1, 1)}),
    }
    for name, (cell, wanted) in written.items():
        operations = read_operations(crystal(PROTOTYPES[name][0], cell, []).operations)
        found = unique_reflections(cell, operations, 1.2)
        assert wanted <= {tuple(h) for h in found.hkl.astype(int).tolist()}, name


def test_range_widens_until_about_a_thousand_reflections_but_ends_between_0_6_and_1_2() -> None:
    small = unique_reflections((4, 4, 4, 90, 90, 90), read_operations(("x,y,z",)))
    assert small.d_min_A == 0.6
    middle = unique_reflections((6, 7, 8, 80, 95, 100), read_operations(("x,y,z",)))
    assert 0.6 < middle.d_min_A < 1.2
    assert 950 <= len(middle.hkl) <= 1001
    large = unique_reflections((24, 25, 26, 90, 90, 90), read_operations(("x,y,z",)))
    assert large.d_min_A == 1.2
    assert len(large.hkl) > 15_000
    huge = unique_reflections((100, 110, 120, 90, 90, 90), read_operations(("x,y,z",)))
    assert huge.d_min_A > 1.2
    assert 19_000 < len(huge.hkl) <= 20_001


def test_operations_that_are_no_group_are_refused() -> None:
    with pytest.raises(InputError, match="not a group"):
        read_operations(("x,y,z", "-y,x,z"))
    with pytest.raises(InputError, match="not a group"):
        read_operations(("x,y,z", "x,y,z", "-x,-y,-z"))
    with pytest.raises(InputError, match="'x,y'"):
        read_operations(("x,y",))
    with pytest.raises(InputError, match="no symmetry operations"):
        read_operations(())


@pytest.mark.parametrize("cell", [(5, 5, 0, 90, 90, 90), (5, 5, 5, 60, 60, 130)])
def test_a_cell_without_volume_is_refused(cell: tuple[float, ...]) -> None:
    with pytest.raises(InputError, match="encloses no volume"):
        unique_reflections((*cell,), read_operations(("x,y,z",)), 1.0)  # type: ignore[arg-type]


def test_too_many_reflections_are_refused() -> None:
    with pytest.raises(InputError, match="larger smallest d"):
        unique_reflections((90, 90, 90, 90, 90, 90), read_operations(("x,y,z",)), 0.2)


@pytest.mark.parametrize("d_min_A", [0.0, -1.0, float("nan")])
def test_the_smallest_d_must_be_a_positive_number(d_min_A: float) -> None:
    with pytest.raises(InputError, match="positive number"):
        unique_reflections((4, 4, 4, 90, 90, 90), read_operations(("x,y,z",)), d_min_A)
