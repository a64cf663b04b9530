"""A series of patterns: simulated courses whose phases are known."""

from __future__ import annotations

import os
from collections.abc import Iterator
from dataclasses import replace

import numpy as np
import pytest

from phaseid.crystal.crystal import Crystal
from phaseid.errors import InputError
from phaseid.library import Library, Phase
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.identify import identify
from phaseid.matching.series import identify_series
from phaseid.matching.series_answer import Series
from phaseid.matching.series_crew import crew
from phaseid.rings import RingList, rings_from_values
from tests.matching.mixtures import simulated

SHELF = ("anatase", "rutile", "brookite", "corundum", "Si", "Au", "quartz", "Al", "MgO", "NaCl")
SHELF += ("CeO2", "Ag", "hematite", "magnetite", "periclase", "fluorite", "calcite", "Cu", "Ni")
COURSE = (0.0, 0.0, 0.3, 0.7, 1.0)
"""Share of rutile in anatase, along a heating."""


@pytest.fixture(scope="module")
def shelf(
    starter_library: Library, tmp_path_factory: pytest.TempPathFactory
) -> Iterator[dict[str, tuple[Phase, Crystal]]]:
    found = {}
    for name in SHELF:
        phase = starter_library.choose(name)
        found[name] = (phase, starter_library.crystal(phase.phase_id))
    return found


@pytest.fixture(scope="module")
def small(
    shelf: dict[str, tuple[Phase, Crystal]], tmp_path_factory: pytest.TempPathFactory
) -> Iterator[Library]:
    """As good as a large library, and faster."""
    library = Library.create(tmp_path_factory.mktemp("series") / "small.sqlite")
    library.add_crystals(crystal for _, crystal in shelf.values())
    yield library
    library.close()


@pytest.fixture(scope="module")
def heating(shelf: dict[str, tuple[Phase, Crystal]]) -> list[RingList]:
    patterns = []
    for number, share in enumerate(COURSE):
        parts = [(*shelf["anatase"], 1 - share), (*shelf["rutile"], share)]
        rings = simulated([p for p in parts if p[2] > 0], "x-ray Cu Ka", 0.06, 40 + number)
        stated = {"temperature": f"{400 + 50 * number} C"}
        patterns.append(replace(rings, title=f"scan {number + 1}", metadata=stated))
    return patterns


@pytest.fixture(scope="module")
def heated(heating: list[RingList], small: Library) -> Series:
    return identify_series(heating, small)


def test_phases_come_and_go_along_the_series(heated: Series) -> None:
    assert [row.phase.name for row in heated.phases] == ["anatase", "rutile"]
    there = np.array([[share < 1 for share in COURSE], [share > 0 for share in COURSE]])
    for row, expected in zip(heated.phases, there, strict=True):
        assert ((row.probability > 0.9) == expected).all()
        assert ((row.probability < 0.1) == ~expected).all()
    assert {pattern.verdict for pattern in heated.patterns} == {"identified"}
    assert [pattern.phases for pattern in heated.patterns] == [(0,), (0,), (0, 1), (0, 1), (1,)]


def test_shares_follow_the_course(heated: Series) -> None:
    """By the reference intensity ratios the patterns were made with (Chung 1974)."""
    for t, share in enumerate(COURSE):
        part = heated.phases[1].answers[t]
        assert (part is None) == (share == 0)
        if part is not None:
            assert part.share == pytest.approx(share, abs=0.15)


def test_the_axis_is_the_temperature_that_the_lists_state(
    heating: list[RingList], heated: Series, small: Library
) -> None:
    assert heated.axis.title == "temperature (°C)"
    assert heated.axis.values == (400, 450, 500, 550, 600)
    assert identify_series(heating[:2], small, along="number").axis.values == (1, 2)
    with pytest.raises(InputError, match="2 of 2 lists state no time"):
        identify_series(heating[:2], small, along="time")


def test_a_series_of_one_is_the_pattern_by_itself(heating: list[RingList], small: Library) -> None:
    unheated = [replace(heating[0], metadata={})]
    series = identify_series(unheated, small)
    alone = identify(unheated, small, top=20)
    assert series.patterns[0].unlisted == pytest.approx(alone.unlisted_probability, rel=0.05)
    assert series.phases[0].probability[0] == pytest.approx(
        sum(h.probability for h in alone.hypotheses if h.phases[0].phase.name == "anatase"),
        abs=0.01,
    )


def test_processes_share_the_work_with_the_same_result(
    heating: list[RingList], heated: Series, small: Library
) -> None:
    steps: list[tuple[int, int | None]] = []
    shared = identify_series(
        heating, small, workers=2, advance=lambda done, total: steps.append((done, total))
    )
    assert shared.records() == heated.records()
    assert shared.persistence == heated.persistence
    assert steps == [(n + 1, 10) for n in range(10)]


def _dies(_library: Library, _number: int) -> None:
    os._exit(3)


def test_a_worker_that_dies_is_told(small: Library) -> None:
    with (
        pytest.raises(InputError, match="worker process died"),
        crew(small, 2) as hands,
    ):
        hands(_dies, [(1,), (2,)], lambda: None)


def test_neighbours_settle_what_a_pattern_leaves_open(small: Library) -> None:
    """Three faint rings of silver or gold at an uncertain scale, between patterns that are sure."""
    edges = {"Ag": 4.0857, "Au": 4.0782}  # Å; King, from memory
    planes = [3, 4, 8, 11, 12, 16, 19, 20, 24]

    def pattern(count: int, scale: str) -> RingList:
        d = [edges["Ag"] / np.sqrt(n) for n in planes[:count]]
        return rings_from_values(
            d, probe="electron 200 kV", scale_uncertainty=scale, sigma="0.1%", title=str(count)
        )

    patterns = [pattern(9, "0.02%"), pattern(3, "1%"), pattern(9, "0.02%")]
    series = identify_series(patterns, small, chemistry=Chemistry(only=frozenset({"Ag", "Au"})))
    silver = next(row for row in series.phases if row.phase.formula == "Ag")
    assert silver.alone[1] < 0.8
    assert silver.probability[1] > silver.alone[1] + 0.1
    apart = identify_series(
        patterns, small, chemistry=Chemistry(only=frozenset({"Ag", "Au"})), persistence=0.0
    )
    same = next(row for row in apart.phases if row.phase.formula == "Ag")
    assert same.probability == pytest.approx(same.alone)


def test_required_elements_hold_for_the_series(heating: list[RingList], small: Library) -> None:
    series = identify_series(heating, small, chemistry=Chemistry(must=frozenset({"Ti"})))
    assert [row.phase.name for row in series.phases] == ["anatase", "rutile"]
    assert {pattern.verdict for pattern in series.patterns} == {"identified"}


def test_a_phase_that_is_not_listed_stays_unlisted(
    shelf: dict[str, tuple[Phase, Crystal]], heating: list[RingList], small: Library
) -> None:
    chemistry = Chemistry(exclude=frozenset({"Ti"}))
    series = identify_series(heating[:3], small, chemistry=chemistry)
    assert {pattern.verdict for pattern in series.patterns} == {"no-match"}
    assert all(pattern.unlisted > 0.5 for pattern in series.patterns)


def test_records_are_flat_and_alike(heated: Series) -> None:
    rows = heated.records()
    assert len(rows) == len(COURSE) * 2
    assert len({tuple(row) for row in rows}) == 1
    assert rows[4]["axis"] == "temperature (°C)"
    assert rows[4]["value"] == 500
    assert rows[4]["name"] == "anatase"
    assert all(not isinstance(value, list | dict | tuple) for row in rows for value in row.values())
    assert "anatase" in heated._repr_html_()


@pytest.mark.parametrize("persistence", [-0.1, 1.0])
def test_a_persistence_out_of_range_is_refused(
    persistence: float, heating: list[RingList], small: Library
) -> None:
    with pytest.raises(InputError, match="persistence"):
        identify_series(heating, small, persistence=persistence)


def test_no_pattern_is_no_series(small: Library) -> None:
    with pytest.raises(InputError, match="no pattern"):
        identify_series([], small)
