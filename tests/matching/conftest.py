"""Answers that several tests look at, identified once a session."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from importlib import import_module

import pytest

from phaseid.library import Library
from phaseid.matching.identification import Identification
from phaseid.matching.identify import identify
from phaseid.matching.search import Search
from phaseid.rings import RingList
from tests.matching.published import published_rings
from tests.matching.toys import Selection

Published = Callable[[str], Identification]
Searched = Callable[[RingList, Selection, int], Search]

_SHELF = 60
"""Phases of the small library, for what does not depend on its size."""
_KEPT = ("Al2O3", "CaF2", "ZnO", "MgO", "NaCl", "Ag", "Au", "Al", "Fe2O3", "SiO2", "TiO2", "Si")


@pytest.fixture(scope="session")
def published_answer(starter_library: Library) -> Published:
    """The identification of a published pattern against every starter phase."""

    @cache
    def answer(phase: str) -> Identification:
        return identify([published_rings(phase)], starter_library)

    return answer


@pytest.fixture(scope="session")
def shelf(starter_library: Library) -> Selection:
    """A small library: the best match of a few common formulas and phases at even steps."""
    phases = starter_library.phases()
    chosen = {starter_library.find(formula)[0].phase_id for formula in _KEPT}
    chosen |= {phase.phase_id for phase in phases[:: len(phases) // _SHELF]}
    return Selection(starter_library, chosen)


@pytest.fixture
def searched(monkeypatch: pytest.MonkeyPatch) -> Searched:
    """The finished search of an identification, as the weighing of its sets meets it."""
    module = import_module("phaseid.matching.identify")
    met: list[Search] = []
    weigh = module.weigh

    def listening(search: Search) -> object:
        met.append(search)
        return weigh(search)

    monkeypatch.setattr(module, "weigh", listening)

    def search(rings: RingList, library: Selection, max_phases: int) -> Search:
        identify([rings], library, max_phases=max_phases)  # type: ignore[arg-type]
        return met.pop()

    return search
