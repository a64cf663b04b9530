"""Packed lines and the blocks of strongest lines: what they hold, how they change, what they take.

Spacings of rock salts are a/√N with a from Wyckoff (see rock_salts); everything else is compared
with the lines computed from the structure.
"""

from __future__ import annotations

import math
import sqlite3
from collections.abc import Callable
from dataclasses import replace
from itertools import islice
from pathlib import Path

import numpy as np
import pytest

from phaseid.crystal.lines import Lines
from phaseid.errors import LibraryError
from phaseid.library import Library, writer
from phaseid.library.packing import KINDS, Kind, pack_lines, strengths, unpack_lines, unpack_many
from phaseid.library.records import decompressed
from phaseid.library.starter import starter_crystals
from phaseid.library.strongest import (
    BLOCK,
    CODE_AT_1_A,
    CODE_STEP,
    LEVEL_STEP,
    NO_LINE,
    PLACES,
    block_parts,
    read_blocks,
    write_blocks,
)

WriteCif = Callable[..., Path]
CELL = (400.0, 410.0, 420.0, 90.0, 90.0, 90.0)


def lines_of(hkl: list[tuple[int, int, int]], multiplicity: list[int]) -> Lines:
    """Lines of CELL, the strongest first, the last far below the floor for neutrons."""
    n = len(hkl)
    inverse_d2 = ((np.array(hkl) / np.array(CELL[:3])) ** 2).sum(axis=1)
    d = 1 / np.sqrt(inverse_d2)
    f2 = 100.0 / np.arange(1, n + 1)
    neutron = np.where(np.arange(n) == n - 1, 1e-9, 1.0) if n > 1 else np.ones(1)
    return Lines(
        d_A=d,
        hkl=np.array(hkl, dtype=np.int32),
        multiplicity=np.array(multiplicity, dtype=np.int32),
        f2_xray=f2,
        f2_electron=f2 / 7,
        f2_neutron=neutron,
        volume_A3=math.prod(CELL[:3]),
        complete_to_A=0.6,
    )


PACKED = {
    "one line": lines_of([(1, 0, 0)], [2]),
    "an odd number": lines_of([(1, -1, 0), (-2, 1, 1), (3, 0, -128)], [2, 255, 8]),
    "large indices": lines_of([(1, 0, 0), (200, -129, 3), (-300, 400, 128)], [2, 4, 8]),
    "large multiplicities": lines_of([(1, 0, 0), (2, 0, 0)], [256, 40_000]),
}


@pytest.mark.parametrize("name", PACKED)
def test_packed_lines_come_back(name: str) -> None:
    lines = PACKED[name]
    back = unpack_lines(
        pack_lines(lines), cell=CELL, volume_A3=lines.volume_A3, complete_to_A=0.6, floor=0.0
    )
    np.testing.assert_array_equal(back.hkl, lines.hkl)
    np.testing.assert_array_equal(back.multiplicity, lines.multiplicity)
    np.testing.assert_allclose(back.d_A, lines.d_A, rtol=1e-12)
    for name_of_f2 in ("f2_xray", "f2_electron", "f2_neutron"):
        stored, exact = getattr(back, name_of_f2), getattr(lines, name_of_f2)
        weight = lines.multiplicity * lines.d_A**2 * exact
        seen = weight >= 1e-3 * weight.max()
        np.testing.assert_allclose(stored[seen], exact[seen], rtol=1e-3)
        assert not stored[~seen].any()


def test_phases_of_both_widths_are_read_together() -> None:
    chosen = [PACKED[name] for name in ("large indices", "one line", "an odd number")]
    packed = [pack_lines(chosen[0]), b"", pack_lines(chosen[1]), pack_lines(chosen[2])]
    offsets, hkl, multiplicity, strength = unpack_many("electron", packed)
    assert list(offsets) == [0, 3, 3, 4, 7]
    np.testing.assert_array_equal(hkl, np.concatenate([lines.hkl for lines in chosen]))
    np.testing.assert_array_equal(multiplicity, [2, 4, 8, 2, 2, 255, 8])
    exact = [strengths(lines)[1] for lines in chosen]
    kept = [np.where(one >= 1e-3 * one.max(), one, 0.0) for one in exact]
    np.testing.assert_allclose(strength, np.concatenate(kept), rtol=1e-3)


@pytest.mark.parametrize("kind", KINDS)
def test_blocks_hold_the_strongest_lines(starter_library: Library, kind: Kind) -> None:
    strong = starter_library.strong_lines(kind)
    phases = starter_library.phases()
    assert len(strong) == len(phases)
    assert list(strong.quality) == [phase.quality for phase in phases]
    table = starter_library.line_table(kind)
    np.testing.assert_array_equal(strong.elements_mask, table.elements_mask)
    for number in range(0, len(phases), 53):
        lines = starter_library.lines(phases[number].phase_id)
        strength = strengths(lines)[KINDS.index(kind)]
        order = np.argsort(-strength, kind="stable")[:PLACES]
        code, level = strong.code[number].astype(int), strong.level[number].astype(int)
        held = level != NO_LINE
        assert held.sum() == min(PLACES, (strength > 0).sum())
        assert not code[~held].any()
        below = np.log(strength[order[0]] / strength[order])[: held.sum()]
        near = np.minimum(below / LEVEL_STEP, NO_LINE - 1)
        np.testing.assert_allclose(level[held], near, atol=0.5 + 1e-6)
        place = np.log(lines.d_A[order][: held.sum()]) / CODE_STEP + CODE_AT_1_A
        np.testing.assert_allclose(code[held], place, atol=0.5 + 1e-6)


def test_a_new_version_takes_the_place_of_the_old(library: Library, write_cif: WriteCif) -> None:
    formulas = ("MgO", "NaCl", "CaO")
    files = [write_cif(f"{f}.cif", f, cod=f"900000{i}") for i, f in enumerate(formulas)]
    library.add(files)
    before = library.strong_lines("x-ray")
    rows, codes = before.row.copy(), before.code.copy()
    library.add([write_cif("NaCl.cif", "NaCl", 5.70, cod="9000001")])
    after = library.strong_lines("x-ray")
    np.testing.assert_array_equal(after.row, rows)
    np.testing.assert_array_equal(after.code[[0, 2]], codes[[0, 2]])
    shift = after.code[1].astype(int) - codes[1].astype(int)
    expected = math.log(5.70 / 5.64) / CODE_STEP
    assert abs(shift[0] - expected) <= 1  # 200 stays the strongest of halite


def test_a_batch_that_fails_leaves_its_block_alone(
    library: Library, write_cif: WriteCif, monkeypatch: pytest.MonkeyPatch
) -> None:
    library.add([write_cif("a.cif", "MgO")])

    def full(*_: object) -> None:
        raise sqlite3.OperationalError("database or disk is full")

    other = write_cif("b.cif", "NaCl")
    with monkeypatch.context() as patch:
        patch.setattr(writer, "write_blocks", full)
        with pytest.raises(LibraryError, match="disk is full"):
            library.add([other])
    assert len(library) == len(library.strong_lines("neutron")) == 1
    library.add([other, write_cif("c.cif", "KCl")])
    assert len(library) == len(library.strong_lines("neutron")) == 3


def nobody() -> sqlite3.Connection:
    """No connection: a few blocks need none beside the first."""
    raise AssertionError


def test_blocks_fill_in_any_order() -> None:
    conn = sqlite3.connect(":memory:")
    conn.execute("CREATE TABLE block (part, number, data, PRIMARY KEY (part, number))")
    rows = [BLOCK + 5, 3, BLOCK - 1, BLOCK, 4]

    def parts(row: int, quality: float = 1.0) -> dict[str, bytes]:
        strong = {kind: bytes([row % 251] * 3 * PLACES) for kind in KINDS}
        return dict(block_parts(1 << row % 100, quality, strong))

    for row in rows:
        write_blocks(conn, {row: parts(row)})
    write_blocks(conn, {3: parts(3, 0.25), 7: parts(7)})
    strong = read_blocks(conn, nobody, "electron")
    assert list(strong.row) == [3, 4, 7, BLOCK - 1, BLOCK, BLOCK + 5]
    assert list(strong.quality) == [0.25, 1, 1, 1, 1, 1]
    assert [int(level[0]) for level in strong.level] == [int(row) % 251 for row in strong.row]
    bits = [int(low) | int(high) << 64 for low, high in strong.elements_mask]
    assert bits == [1 << int(row) % 100 for row in strong.row]
    numbers = conn.execute("SELECT DISTINCT number FROM block ORDER BY 1").fetchall()
    assert numbers == [(0,), (1,)]
    conn.close()


def test_some_phases_can_be_loaded_alone(starter_library: Library) -> None:
    whole = starter_library.line_table("electron")
    rows = starter_library.strong_lines("electron").row
    chosen = [700, 3, 41]
    some = starter_library.line_table("electron", rows[chosen].tolist())
    assert some.phase_ids == tuple(whole.phase_ids[i] for i in chosen)
    for place, number in enumerate(chosen):
        own = slice(some.offsets[place], some.offsets[place + 1])
        same = slice(whole.offsets[number], whole.offsets[number + 1])
        for name in ("d_A", "hkl", "multiplicity", "f2"):
            np.testing.assert_array_equal(getattr(some, name)[own], getattr(whole, name)[same])
        assert some.quality[place] == whole.quality[number]


def test_a_library_is_compact(starter_library: Library) -> None:
    """The median phase takes 3.3 kB with its share of all indexes; operations are kept once."""
    conn = sqlite3.connect(starter_library.path)
    try:
        sizes = [
            sum(row)
            for row in conn.execute(
                "SELECT length(lines.data), length(structure.data) FROM lines "
                "JOIN structure USING (phase)"
            )
        ]
        in_blocks = conn.execute("SELECT sum(length(data)) FROM block").fetchone()[0]
        phases, sets = (
            conn.execute(f"SELECT count(*) FROM {table}").fetchone()[0]
            for table in ("phase", "symmetry")
        )
        # all the rest of the file, indexes included, is shared evenly
        rest = starter_library.path.stat().st_size - sum(sizes) - in_blocks
    finally:
        conn.close()
    assert np.median(sizes) + in_blocks / phases + rest / phases < 3600
    assert sets < phases / 3


def test_structures_stay_readable() -> None:
    """These bytes were written once; whoever changes the dictionary cannot read them any more."""
    held = {"cell": [5.0, 5.0, 5.0, 90.0, 90.0, 90.0], "space_group_number": 225}
    stored = bytes.fromhex("78bb8185ecbe43093e184604a325ee50343232ad0500fcfc117c")
    assert decompressed(stored) == held


def test_blocks_grow_with_the_library(library: Library) -> None:
    crystals = list(islice(starter_crystals(), 0, 60, 5))
    library.add_crystals(crystals[:5])
    library.add_crystals(crystals[5:])
    together = library.strong_lines("x-ray")
    assert len(together) == len(library) == len(crystals)
    with Library.create(library.path.with_name("once.sqlite")) as once:
        once.add_crystals(crystals)
        np.testing.assert_array_equal(once.strong_lines("x-ray").code, together.code)
    changed = replace(crystals[0], cell=(*[1.1 * x for x in crystals[0].cell[:3]], 90, 90, 90))
    library.add_crystals([changed])
    assert len(library.strong_lines("x-ray")) == len(library)
