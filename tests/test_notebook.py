"""Functions for a notebook: what they take, and the records they give."""

from __future__ import annotations

import io
import json
from collections.abc import Iterator
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console

import phaseid
from phaseid.crystal.crystal import Source
from phaseid.errors import InputError
from phaseid.library import Library
from phaseid.matching.records import Record, Rows, Tidy
from phaseid.resources import data_path

XRAYS = data_path("demo") / "foil_xrays.csv"
ALUMINIUM = [4.0496 / n**0.5 for n in (3, 4, 8, 11)]  # Å; King, from memory
ELECTRONS = "electron 200 kV"


@pytest.fixture(scope="module")
def shelf(starter_library: Library, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Library]:
    library = Library.create(tmp_path_factory.mktemp("notebook") / "small.sqlite")
    names = ("Al", "MgO", "Au", "Cu", "corundum", "Si")
    phases = [starter_library.choose(name) for name in names]
    library.add_crystals(starter_library.crystal(phase.phase_id) for phase in phases)
    yield library
    library.close()


@pytest.mark.parametrize(
    "given",
    [
        XRAYS,
        str(XRAYS),
        phaseid.read_rings(XRAYS),
        [XRAYS],
        (phaseid.read_rings(XRAYS),),
    ],
    ids=["path", "text", "rings", "list", "tuple"],
)
def test_rings_may_be_given_in_several_ways(given: object, shelf: Library) -> None:
    answer = phaseid.identify(given, shelf)  # type: ignore[arg-type]
    assert [part.phase.formula for part in answer.hypotheses[0].phases] == ["Al", "MgO"]


@pytest.mark.parametrize(
    "given",
    [ALUMINIUM, np.array(ALUMINIUM), [f"{d:.4f}" for d in ALUMINIUM], tuple(ALUMINIUM)],
    ids=["list", "array", "text", "tuple"],
)
def test_numbers_are_one_pattern(given: object, shelf: Library) -> None:
    answer = phaseid.identify(
        given,  # type: ignore[arg-type]
        shelf,
        probe=ELECTRONS,
        sigma="0.3%",
        only="Al,O",
        intensities=[100, 47, 22, 24],
    )
    assert len(answer.patterns) == 1
    assert answer.patterns[0].intensity.tolist() == [100, 47, 22, 24]
    assert answer.hypotheses[0].phases[0].phase.formula == "Al"


def test_a_library_may_be_a_path(shelf: Library) -> None:
    typed = phaseid.identify(ALUMINIUM, str(shelf.path), probe=ELECTRONS)
    assert typed.records() == phaseid.identify(ALUMINIUM, shelf, probe=ELECTRONS).records()


def test_chemistry_is_taken_either_way(shelf: Library) -> None:
    lists = phaseid.identify(ALUMINIUM, shelf, probe=ELECTRONS, only="Al,O")
    whole = phaseid.Chemistry(only=frozenset({"Al", "O"}))
    assert (
        lists.records()
        == phaseid.identify(ALUMINIUM, shelf, probe=ELECTRONS, chemistry=whole).records()
    )
    with pytest.raises(InputError, match="both given"):
        phaseid.identify(ALUMINIUM, shelf, probe=ELECTRONS, chemistry=whole, only="Al")


def test_what_makes_no_sense_is_told(shelf: Library) -> None:
    with pytest.raises(InputError, match="a library is a path"):
        phaseid.identify(ALUMINIUM, 3, probe=ELECTRONS)  # type: ignore[arg-type]
    with pytest.raises(InputError, match="no further reading"):
        phaseid.identify(phaseid.read_rings(XRAYS), shelf, probe=ELECTRONS)
    with pytest.raises(InputError, match="probe"):
        phaseid.identify(ALUMINIUM, shelf)
    with pytest.raises(TypeError, match="prob"):
        phaseid.identify(ALUMINIUM, shelf, prob=ELECTRONS)
    with pytest.raises(InputError, match="nowhere"):
        phaseid.identify("nowhere.csv", shelf)


def _results(shelf: Library) -> list[Tidy]:
    radii = [round(25.0 / d, 3) for d in ALUMINIUM]
    return [
        phaseid.identify(XRAYS, shelf),
        phaseid.series([XRAYS, XRAYS], shelf),
        phaseid.calibrate(radii, "Al", shelf, unit="radius_mm", sigma=0.02, probe=ELECTRONS),
        phaseid.screen(XRAYS, "Al", shelf, only_mine=True),
        phaseid.compare("Al", "Au", shelf),
        phaseid.near(ALUMINIUM[:2], shelf),
        phaseid.ratio([1, 1.155, 1.633]),
        phaseid.lines("Al", shelf, probe=ELECTRONS, thickness_nm=20),
    ]


def test_every_result_is_a_table_of_flat_records(shelf: Library) -> None:
    for result in _results(shelf):
        rows = result.records()
        assert rows
        assert len({tuple(row) for row in rows}) == 1
        plain = json.loads(json.dumps(rows))
        assert plain == rows
        for row in rows:
            assert all(isinstance(v, str | int | float | bool | None) for v in row.values())
        page = result._repr_html_()
        assert page.count("<tr>") == min(len(rows), 30) + 1
        console = Console(width=120, record=True, file=io.StringIO())
        console.print(result)
        assert result.summary()[:20] in console.export_text()


def test_ring_records_name_what_each_ring_is(shelf: Library) -> None:
    answer = phaseid.identify(XRAYS, shelf, max_phases=1)
    rows = answer.ring_records()
    assert {row["ring"] for row in rows} == set(range(1, 14))
    assert {row["name"] for row in rows} == {"aluminium", None}
    unexplained = [row for row in rows if row["name"] is None]
    assert all(row["hkl"] is None and row["d_A"] > 0 for row in unexplained)


def test_entry_records_list_the_determinations_of_each_phase(
    shelf: Library, tmp_path: Path
) -> None:
    # another determination of the same phase: its cell 0.05 % larger
    crystal = shelf.crystal(shelf.choose("Al").phase_id)
    cell = (*(1.0005 * edge for edge in crystal.cell[:3]), *crystal.cell[3:])
    source = Source("another database", "2", "2.cif", "a citation")
    with Library.create(tmp_path / "two.sqlite") as two:
        two.add_crystals([crystal, replace(crystal, cell=cell, source=source)])
        answer = phaseid.identify(ALUMINIUM, two, probe=ELECTRONS)
    rows = answer.entry_records()
    assert [row["stands"] for row in rows] == [True, False]
    assert {row["phase"] for row in rows} == {1}
    assert {row["source_id"] for row in rows} == {crystal.source.id, "2"}
    assert {row["source_reference"] for row in rows} == {crystal.source.reference, "a citation"}
    assert json.loads(json.dumps(rows)) == rows
    assert answer.records()[0]["entries"] == 2
    with pytest.raises(IndexError):
        answer.entry_records(9)


def test_a_saved_calibration_is_used_by_name(
    shelf: Library, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv("PHASEID_CONFIG", str(tmp_path / "config.toml"))
    radii = [round(25.0 * n**0.5 / 4.0782, 3) for n in (3, 4, 8, 11, 12)]  # gold, King
    kept = {"unit": "radius_mm", "sigma": 0.02, "probe": ELECTRONS}
    phaseid.calibrate(radii, "Au", shelf, save="plate", **kept)  # type: ignore[arg-type]
    plate = [round(25.0 / d, 3) for d in ALUMINIUM]
    answer = phaseid.identify(plate, shelf, unit="radius_mm", sigma=0.02, calibration="plate")
    assert answer.patterns[0].d_A == pytest.approx(ALUMINIUM, rel=1e-3)
    assert answer.hypotheses[0].phases[0].phase.formula == "Al"


def test_names_of_strangers_stay_text_in_a_notebook() -> None:
    class Odd:
        def record(self) -> Record:
            return {"name": "<script>alert(1)</script>"}

    page = Rows([Odd()])._repr_html_()
    assert "<script>" not in page
    assert "&lt;script&gt;" in page
