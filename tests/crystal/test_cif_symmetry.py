"""Symmetry items -> groups, against gemmi's table and spglib's independent one."""

from __future__ import annotations

import gemmi
import pytest

from phaseid.crystal.hermann_mauguin import groups_named, short_symbol
from phaseid.crystal.symmetry import (
    Symmetry,
    SymmetryItems,
    SymmetryProblem,
    fits_cell,
    symmetry_candidates,
)


def candidates(**items: object) -> tuple[Symmetry, ...]:
    found = symmetry_candidates(SymmetryItems(**items))  # type: ignore[arg-type]
    assert not isinstance(found, SymmetryProblem)
    return found


def test_every_tabulated_setting_comes_back_from_its_operations() -> None:
    for group in gemmi.spacegroup_table():
        triplets = tuple(op.triplet() for op in group.operations())
        first = candidates(triplets=triplets)[0]
        assert (first.number, set(first.operations)) == (group.number, set(triplets))


def test_every_short_symbol_leads_back_to_its_group() -> None:
    for group in gemmi.spacegroup_table():
        found, exact = groups_named(short_symbol(group))
        assert exact
        assert group.number in {g.number for g in found}


@pytest.mark.parametrize(
    ("written", "meant"),
    [  # spellings met in COD entries; the meaning follows from International Tables A
        ("P 21/c", "P 1 21/c 1"),
        ("P2_1/n", "P 1 21/n 1"),
        ("P2~1~/n", "P 1 21/n 1"),
        ("Pmn2(1)", "P m n 21"),
        ("P m 3 m", "P m -3 m"),
        ("P n 3 m :1", "P n -3 m:1"),
        ("F d 3 m", "F d -3 m:2"),
        ("F d -3 m S", "F d -3 m:1"),
        ("F d -3 m Z", "F d -3 m:2"),
        ("F 41/d -3 2/m (origin choice 2)", "F d -3 m:2"),
        ("F d -3 m {origin choice 1}", "F d -3 m:1"),
        ("R-3mH", "R -3 m:H"),
        ("R -3 m HR", "R -3 m:H"),
        ("R -3 :R", "R -3:R"),
        ("A e m 2", "A b m 2"),
        ("I 2/b 2/a 2/m", "I b a m"),
        ("p63/mmc", "P 63/m m c"),
    ],
)
def test_spelling(written: str, meant: str) -> None:
    assert groups_named(written)[0][0].xhm() == meant


def test_symbols_of_no_group_mean_nothing() -> None:
    for symbol in ("", "P?", "X 4 b m", "F d -3 m banana", "P 42/n x y", "x" * 100_000):
        assert groups_named(symbol)[0] == []


def test_origin_left_open_gives_both() -> None:
    assert [g.symbol for g in candidates(hermann_mauguin="F d -3 m")] == ["Fd-3m", "Fd-3m:1"]
    assert [g.symbol for g in candidates(hermann_mauguin="F d -3 m", setting="1")] == ["Fd-3m:1"]


def test_hall_symbol_settles_the_origin() -> None:
    (group,) = candidates(hermann_mauguin="F d -3 m", hall="-F 4vw 2vw 3")
    assert group.symbol == "Fd-3m"


def test_the_other_origin_is_offered_last() -> None:
    triplets = tuple(
        op.triplet() for op in gemmi.find_spacegroup_by_name("F d -3 m:2").operations()
    )
    listed, other = candidates(triplets=triplets)
    assert (listed.symbol, listed.last_resort) == ("Fd-3m", False)
    assert (other.symbol, other.last_resort) == ("Fd-3m:1", True)


def test_untabulated_setting_gets_its_number_from_the_operations() -> None:
    moved = gemmi.find_spacegroup_by_name("P 42/m m c").operations()
    shift = gemmi.Op("x,y+1/2,z")
    triplets = tuple(shift.combine(op).combine(shift.inverse()).wrap().triplet() for op in moved)
    (group,) = candidates(triplets=triplets)
    assert group.number == 131
    assert [finding.code for finding in group.findings] == ["nonstandard_setting"]


@pytest.mark.parametrize(
    ("triplets", "code"),
    [
        (("x,y,z", "-x,y+1/2,-z", "x,y,-z"), "bad_symmetry"),  # products are missing
        (("x,y,z", "2*x,y,z"), "bad_symmetry"),  # does not keep the volume
        (("x,y,z", "x+y,y,z"), "bad_symmetry"),  # of infinite order
        (("x,y,z", "x,y"), "bad_symmetry"),
        ((), "no_symmetry"),
    ],
)
def test_lists_that_are_no_group(triplets: tuple[str, ...], code: str) -> None:
    problem = symmetry_candidates(SymmetryItems(triplets=triplets))
    assert isinstance(problem, SymmetryProblem)
    assert problem.code == code


def test_operations_written_with_shifts_beyond_the_cell_are_the_same() -> None:
    usual = candidates(triplets=("x,y,z", "-x,y+1/2,-z"))[0]
    odd = candidates(triplets=("X, Y, Z", "2-x, -1/2+y, -z", "x,y,z"))[0]
    assert set(usual.operations) == set(odd.operations)


@pytest.mark.parametrize(
    ("symbol", "cell", "fits"),
    [
        ("F m -3 m", (4, 4, 4, 90, 90, 90), True),
        ("F m -3 m", (4, 4, 4.1, 90, 90, 90), False),
        ("F m -3 m", (4, 4, 4.004, 90, 90, 90), True),
        ("P 63/m m c", (3, 3, 5, 90, 90, 120), True),
        ("P 63/m m c", (3, 3, 5, 90, 90, 90), False),
        ("P 1 21/c 1", (5, 6, 7, 90, 105, 90), True),
        ("P 1 21/c 1", (5, 6, 7, 105, 90, 90), False),
        ("R -3 m:R", (5, 5, 5, 60, 60, 60), True),
        ("R -3 m:H", (5, 5, 5, 60, 60, 60), False),
    ],
)
def test_cell_against_group(symbol: str, cell: tuple[float, ...], *, fits: bool) -> None:
    group = candidates(hermann_mauguin=symbol)[0]
    assert fits_cell(group, cell) is fits  # type: ignore[arg-type]
