"""Finding phases: each condition held against looking at every phase."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import permutations
from pathlib import Path
from typing import Any

import gemmi
import pytest

from phaseid.crystal.crystal import Finding, Source
from phaseid.errors import InputError
from phaseid.library import Library, Phase, finding
from phaseid.library.formulas import SYMBOLS
from phaseid.library.question import Question
from phaseid.library.starter import shipped_crystal

S = frozenset
MANY = S(SYMBOLS[:26])  # up to iron: too many for all their sets to be asked for one by one


def found(library: Library, **known: Any) -> set[str]:
    answer = library.search(Question(**known), every_entry=True)
    assert answer.total == len(answer.phases)
    assert not answer.more
    return {phase.phase_id for phase in answer.phases}


def those(library: Library, holds: Callable[[Phase], bool]) -> set[str]:
    kept = {phase.phase_id for phase in library.phases() if holds(phase)}
    assert kept  # or nothing is tested
    return kept


@pytest.mark.parametrize(
    ("must", "only", "exclude"),
    [
        (S({"Al", "O"}), None, S()),
        (S({"Si"}), None, S({"O"})),
        (S(), S({"Ti", "O"}), S()),
        (S({"Fe"}), S({"Fe", "O", "S", "C"}), S()),
        (S(), MANY, S({"H"})),
        (S({"Ca"}), MANY, S()),
        (S(), None, S({"O"})),
    ],
)
def test_by_elements(
    starter_library: Library, must: S[str], only: S[str] | None, exclude: S[str]
) -> None:
    wanted = those(
        starter_library,
        lambda phase: (
            must <= set(phase.elements)
            and (only is None or set(phase.elements) <= only)
            and not exclude & set(phase.elements)
        ),
    )
    assert found(starter_library, must=must, only=only, exclude=exclude) == wanted


@pytest.mark.parametrize("group", ["225", "F m -3 m", "P21/n", "Pbnm", "R-3c:R", "14"])
def test_by_space_group_in_any_setting(starter_library: Library, group: str) -> None:
    number = int(group) if group.isdecimal() else gemmi.SpaceGroup(group).number
    wanted = those(starter_library, lambda phase: phase.space_group_number == number)
    assert found(starter_library, space_group=group) == wanted


@pytest.mark.parametrize(
    ("edges_A", "tolerance"),
    [((12.99, 4.76), 0.002), ((5.43,), 0.02), ((4.0, 4.0, 4.0), 0.02), ((3.0, 5.0), 0.05)],
)
def test_by_cell_edges_in_any_order(
    starter_library: Library, edges_A: tuple[float, ...], tolerance: float
) -> None:
    def holds(phase: Phase) -> bool:
        return any(
            all(abs(own - edge) <= tolerance * edge for own, edge in zip(way, edges_A, strict=True))
            for way in permutations(phase.cell[:3], len(edges_A))
        )

    wanted = those(starter_library, holds)
    assert found(starter_library, edges_A=edges_A, tolerance=tolerance) == wanted


def test_by_density(starter_library: Library) -> None:
    wanted = those(starter_library, lambda phase: 2.6 <= phase.density_g_cm3 <= 2.7)
    assert found(starter_library, density_g_cm3=(2.6, 2.7)) == wanted
    # Handbook of Chemistry and Physics, from memory: quartz 2.65, calcite 2.71 g/cm³
    names = {p.name for p in starter_library.phases() if p.phase_id in wanted}
    assert "quartz" in names
    assert "calcite" not in names


@pytest.mark.parametrize(
    ("known", "names"),
    [
        # hematite and corundum: R-3c, a 4.76 and 5.04, c 12.99 and 13.75 Å; from memory
        ({"space_group": "R-3c", "edges_A": (4.76, 12.99)}, ["corundum"]),
        ({"must": S({"Fe", "O"}), "only": S({"Fe", "O"}), "space_group": "167"}, ["hematite"]),
        ({"name": "rutile", "density_g_cm3": (4.2, 4.3)}, ["rutile"]),
        ({"formula": "O2Ti", "space_group": "Pbca"}, ["brookite"]),
        ({"text": "TiO2", "edges_A": (9.51,)}, ["anatase"]),
        ({"text": "quartz", "must": S({"O"}), "exclude": S({"Ge"}), "space_group": "154"},
         ["quartz"]),
    ],
)  # fmt: skip
def test_all_that_is_known_must_hold(
    starter_library: Library, known: dict[str, Any], names: list[str]
) -> None:
    answer = starter_library.search(Question(**known))
    assert [phase.name for phase in answer.phases] == names


def test_common_conditions_are_looked_through_in_order(
    starter_library: Library, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(finding, "COUNTED", 7)
    monkeypatch.setattr(finding, "_ALL", 12)
    for known in ({"must": S({"O"})}, {"density_g_cm3": (2.0, 9.0)}, {"space_group": "225"}):
        question = Question(**known)
        every = starter_library.search(question, every_entry=True)
        some = starter_library.search(question, limit=3, every_entry=True)
        assert (some.total, some.more) == (7, True)
        assert some.phases == every.phases[:3]
        assert every.total > 12
        keys = [" ".join(phase.elements) for phase in every.phases]
        assert keys == sorted(keys)


def test_names_are_words_and_formulas_are_not(starter_library: Library) -> None:
    assert {p.name for p in starter_library.search(Question(name="tin")).phases} >= {
        "tin (beta, white)"
    }
    assert {p.formula for p in starter_library.search(Question(formula="TiN")).phases} == {"TiN"}


@pytest.fixture
def halites(library: Library) -> Library:
    """Halite four times: 5.6402 Å is Wyckoff's cell (1963), from memory."""
    halite = shipped_crystal("NaCl-sodium-chloride")
    for number, (edge, codes) in enumerate(
        [(5.6402, ()), (5.63, ()), (5.66, ()), (5.6, ("theoretical",))], start=1
    ):
        crystal = replace(
            halite,
            cell=(edge, edge, edge, 90.0, 90.0, 90.0),
            source=Source("COD", f"90000{number}", f"{number}.cif"),
            findings=tuple(Finding(code, code) for code in codes),
        )
        library.add_crystals([crystal])
    return library


def test_one_entry_stands_for_all(halites: Library) -> None:
    answer = halites.search(Question(must=S({"Na"})))
    assert [phase.source.id for phase in answer.phases] == ["900001"]
    assert (answer.entries, answer.total) == ((4,), 1)
    every = halites.search(Question(must=S({"Na"})), every_entry=True)
    assert every.entries == (4, 4, 4, 4)
    leader, *_ = halites.entries(every.phases[-1].phase_id)
    assert leader.source.id == "900001"


def test_an_entry_that_answers_alone_is_shown_itself(halites: Library) -> None:
    for known in ({"edges_A": (5.6,), "tolerance": 1e-4}, {"source": "900004"}, {"text": "900004"}):
        answer = halites.search(Question(**known))
        assert [phase.source.id for phase in answer.phases] == ["900004"]
        assert answer.entries == (4,)


@pytest.mark.parametrize(
    ("source", "count"),
    [("COD", 4), ("cod", 4), ("900002", 1), ("COD 900002", 1), ("COD: 900002", 1), ("900009", 0)],
)
def test_by_source(halites: Library, source: str, count: int) -> None:
    assert len(found(halites, source=source)) == count


def test_by_where_it_came_from(library: Library, write_cif: Callable[..., Path]) -> None:
    one = write_cif("old/1.cif", "MgO")
    write_cif("old/2.cif", "NaCl")
    write_cif("older/3.cif", "KCl")
    library.add([one.parent, one.parent.parent / "older"])
    assert {p.formula for p in library.search(Question(under=str(one.parent))).phases} == {
        "MgO",
        "NaCl",
    }
    assert len(found(library, under=str(one))) == 1


@pytest.mark.parametrize(
    ("known", "complaint"),
    [
        ({"space_group": "231"}, "'231' is no space group"),
        ({"space_group": "Fmmmm"}, "'Fmmmm' is no space group"),
        ({"must": S({"Xx"})}, "'Xx' is not an element symbol"),
        ({"edges_A": (1.0, 2.0, 3.0, 4.0)}, "are no cell edges"),
        ({"edges_A": (-1.0,)}, "are no cell edges"),
        ({"density_g_cm3": (3.0, 2.0)}, "no range of densities"),
        ({"formula": "Not a formula"}, "is no formula"),
        ({"source": "AMCSD 1"}, "nothing from 'AMCSD'.*COD"),
        ({"ids": ("NaCl-00000000",)}, "no entry with the id"),
    ],
)
def test_what_is_no_question_is_told(
    halites: Library, known: dict[str, Any], complaint: str
) -> None:
    with pytest.raises(InputError, match=complaint):
        halites.search(Question(**known))
