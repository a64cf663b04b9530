"""The shortlist of a large library: who comes through, and that answers do not depend on it.

A library counts as large here from 50 phases on and 150 are searched, so that the starter library
serves. Patterns are published ones or computed with gemmi (see `published`, `minerals`); every case
is held to the same answer with and without the shortlist.
"""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest

from phaseid.library import Library
from phaseid.matching import field, near, shortlist
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.field import Field, field_of, rarity_of
from phaseid.matching.glance import Share, find_places, glance_at, make_glance, make_scale
from phaseid.matching.identification import Identification
from phaseid.matching.identify import identify
from phaseid.matching.near import near_lines
from phaseid.matching.patterns import prepare
from phaseid.matching.shortlist import by_turns, ranked
from phaseid.probes import parse_probe
from phaseid.rings import RingList, rings_from_values
from tests.matching.minerals import mixed
from tests.matching.published import added, is_phase, names_exactly, published_rings

LISTED = 150

PURE = ["corundum", "rutile", "halite", "aluminium", "silicon"]
MIXTURES = {
    "two": ["halite", "corundum"],
    "three": ["rutile", "fluorite", "corundum"],
}


@pytest.fixture(autouse=True)
def _large_from_fifty_on(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(field, "SEARCHED_WHOLE", 50)
    monkeypatch.setattr(shortlist, "PHASES_SEARCHED", LISTED)
    monkeypatch.setattr(shortlist, "_EACH", 12)


def few_rings() -> RingList:
    """Five rings of aluminium on a plate: a/√N, a = 4.0494 Å (Straumanis 1949, from memory)."""
    spacings = [4.0494 / n**0.5 for n in (3, 4, 8, 11, 12)]
    return rings_from_values(
        [1.006 * d for d in spacings],
        probe="electron 200 kV",
        sigma=[0.003 * d for d in spacings],
        intensities=[100, 47, 30, 32, 9],
    )


def listed(patterns: list[RingList], library: Library, **known: object) -> set[str]:
    """Phase ids of the shortlist."""
    chosen = field_of(patterns, library, Chemistry(**known), 3)  # type: ignore[arg-type]
    return {chosen.tables[0].phase_ids[i] for i in chosen.phases}


def formulas_of(library: Library, phase_ids: set[str]) -> set[tuple[str, int]]:
    phases = [library.phase(phase_id) for phase_id in phase_ids]
    return {(phase.formula, phase.space_group_number) for phase in phases}


@pytest.mark.parametrize("exhaustive", [False, True], ids=["shortlist", "whole library"])
@pytest.mark.parametrize("name", PURE)
def test_published_patterns_are_named(
    starter_library: Library, name: str, exhaustive: bool
) -> None:
    answer = identify([published_rings(name)], starter_library, exhaustive=exhaustive)
    assert names_exactly(answer.hypotheses[0], [name])


@pytest.mark.parametrize("exhaustive", [False, True], ids=["shortlist", "whole library"])
@pytest.mark.parametrize("names", MIXTURES.values(), ids=MIXTURES)
def test_mixtures_of_published_patterns_are_named(
    starter_library: Library, names: list[str], exhaustive: bool
) -> None:
    rings = added(dict(zip(names, (1.0, 0.5, 0.3), strict=False)))
    answer = identify([rings], starter_library, exhaustive=exhaustive)
    assert names_exactly(answer.hypotheses[0], names)


def told(answer: Identification) -> list[tuple[frozenset[str], float]]:
    """The phases of every answer of at least 2 %, and its probability."""
    return [
        (frozenset(part.phase.phase_id for part in h.phases), h.probability)
        for h in answer.hypotheses
        if h.probability >= 0.02
    ]


CASES = {
    "corundum": lambda: [published_rings("corundum")],
    "two phases": lambda: [added({"halite": 1.0, "corundum": 0.4})],
    "few rings": lambda: [few_rings()],
    "electrons and x-rays": lambda: [few_rings(), published_rings("aluminium")],
}


@pytest.mark.parametrize("name", CASES)
def test_the_ranking_is_that_of_the_whole_library(starter_library: Library, name: str) -> None:
    patterns = CASES[name]()
    short = identify(patterns, starter_library)
    whole = identify(patterns, starter_library, exhaustive=True)
    for (phases, probability), (same, expected) in zip(told(short), told(whole), strict=True):
        assert phases == same
        assert probability == pytest.approx(expected, abs=0.03)
    assert short.unlisted_probability == pytest.approx(whole.unlisted_probability, abs=0.03)
    assert short.verdict == whole.verdict


def test_a_small_share_comes_through(starter_library: Library) -> None:
    """5 % by weight of fluorite shows a few weak rings; corundum's are many and strong."""
    rings = mixed({"corundum": 0.95, "fluorite": 0.05}, seed=5)
    assert len(rings) > 10
    found = [starter_library.phase(i) for i in listed([rings], starter_library)]
    assert any(is_phase(phase, "CaF2", 225) for phase in found)
    assert any(is_phase(phase, "Al2O3", 167) for phase in found)
    assert len(found) <= LISTED


def test_the_chemistry_comes_first(starter_library: Library) -> None:
    oxides = listed([few_rings()], starter_library, must=frozenset({"O"}), exclude=frozenset("H"))
    elements = [set(starter_library.phase(phase_id).elements) for phase_id in oxides]
    assert len(oxides) == LISTED
    assert not any("H" in held for held in elements)
    only = frozenset({"Al", "O", "Si"})
    known = listed([few_rings()], starter_library, only=only)
    allowed = {p.phase_id for p in starter_library.phases() if set(p.elements) <= only}
    assert known == allowed  # so few that all of them are searched
    assert ("Al", 225) in formulas_of(starter_library, known)


def test_prior_and_crowd_are_those_of_all_phases_allowed(starter_library: Library) -> None:
    def chosen(*, exhaustive: bool) -> Field:
        return field_of([few_rings()], starter_library, Chemistry(), 3, exhaustive=exhaustive)

    short, whole = chosen(exhaustive=False), chosen(exhaustive=True)
    assert np.exp(whole.log_prior).sum() == pytest.approx(1.0)
    assert len(short.phases) == LISTED < len(whole.phases) == len(starter_library)
    prior = dict(zip(whole.tables[0].phase_ids, whole.log_prior, strict=True))
    for phase_id, value in zip(short.tables[0].phase_ids, short.log_prior, strict=True):
        assert value == prior[phase_id]
    np.testing.assert_array_equal(short.crowd[0], whole.crowd[0])


def test_rarity_is_the_share_of_sets_with_the_elements(starter_library: Library) -> None:
    masks = starter_library.strong_lines("x-ray").elements_mask
    phases = starter_library.phases()
    chemistry = Chemistry(must=frozenset({"Fe", "O"}))
    one, two = rarity_of(chemistry, masks, 2)
    holding = sum({"Fe", "O"} <= set(phase.elements) for phase in phases)
    assert np.exp(one) == pytest.approx(holding / len(phases))
    has = [(("Fe" in p.elements), ("O" in p.elements)) for p in phases]
    n = len(phases)
    neither = {key: sum(h == key for h in has) / n for key in set(has)}
    lacking_iron = sum(share for (iron, _), share in neither.items() if not iron)
    lacking_oxygen = sum(share for (_, oxygen), share in neither.items() if not oxygen)
    lacking_both = neither.get((False, False), 0.0)
    expected = 1 - lacking_iron**2 - lacking_oxygen**2 + lacking_both**2
    assert np.exp(two) == pytest.approx(expected, abs=4 * (expected * (1 - expected) / 2000) ** 0.5)
    assert rarity_of(Chemistry(), masks, 3) == (0.0, 0.0, 0.0)


def test_a_glance_is_the_sum_over_lines_at_the_best_shift(starter_library: Library) -> None:
    """Against plain loops over the lines of a few phases."""
    pattern = prepare(published_rings("corundum"))
    strong = starter_library.strong_lines("x-ray")
    shares = (Share(0.0, True), Share(-1.0, False))
    scale = make_scale(pattern, reach=0.006)
    glance = make_glance(pattern, scale, shares, spread=0.001, reach=0.004, centre=0.0005)
    other = make_glance(pattern, scale, shares[:1], spread=0.002, reach=0.003)
    places, phases = 7, np.array([2, 500, 901])
    found = find_places(strong, phases, scale, places)
    got, beside = glance_at(found, scale, [glance, other])
    np.testing.assert_array_equal(glance_at(found, scale, [other])[0], beside)
    cells = glance.worth.shape[1]
    for row, phase in enumerate(phases):
        lines = [
            (int(code) // scale.width - scale.first, -int(level) / 32)
            for code, level in zip(strong.code[phase], strong.level[phase], strict=True)
            if level != 255
        ][:places]
        lines = [(min(max(cell, 0), cells - 1), value) for cell, value in lines]
        shown = [(cell, value + round(32 * scale.geometry[cell]) / 32) for cell, value in lines]
        strongest = max((v for cell, v in shown if scale.inside[cell]), default=-np.inf)
        best = np.full(len(shares), -np.inf)
        for shift, penalty in zip(glance.shifts, glance.penalty, strict=True):
            total = np.full(len(shares), -float(penalty))
            for cell, value in shown:
                below = min(max(round((strongest - value) / 0.35), 0), len(glance.worth) - 1)
                if 0 <= cell + shift < cells:
                    total += glance.worth[below, cell + shift]
            best = np.maximum(best, total)
        np.testing.assert_array_equal(got[row], best)


def test_a_line_that_should_show_and_does_not_speaks_against(starter_library: Library) -> None:
    pattern = prepare(published_rings("corundum"))
    scale = make_scale(pattern, reach=0.004)
    glance = make_glance(pattern, scale, (Share(0.0, False),), spread=0.001, reach=0.004)
    worth = glance.worth[..., 0]
    at = int(np.log(2.085) * 1e4 + 1e4) // scale.width - scale.first  # 113 of corundum
    beside = int(np.log(2.25) * 1e4 + 1e4) // scale.width - scale.first  # between its rings
    assert worth[0, at] > 64
    assert worth[0, beside] < -100
    assert not worth[-1].any()  # lines too weak to matter
    weak = worth[:-1, beside]
    assert all(a <= b for a, b in pairwise(weak))


def test_near_lines_of_a_large_library_are_the_same(
    starter_library: Library, monkeypatch: pytest.MonkeyPatch
) -> None:
    probe = parse_probe("x-ray Cu Ka1")
    known = Chemistry(exclude=frozenset({"H"}))
    found = {}
    for size in (50, 5000):
        monkeypatch.setattr(near, "SEARCHED_WHOLE", size)
        found[size] = near_lines(
            [2.085, 1.601], starter_library, probe, min_intensity=60, chemistry=known
        )
    assert found[50] == found[5000]
    assert any(line.phase.name == "corundum" for line in found[50])


def test_ranks_and_turns() -> None:
    score = np.array([[1.0, 9.0], [5.0, 1.0], [3.0, 7.0], [4.0, 2.0]], dtype=np.float32)
    ranks = ranked(score, 3)
    assert ranks.tolist() == [[1, 0], [3, 2], [2, 3]]
    assert by_turns(ranks, 2).tolist() == [1, 0, 3, 2]
    assert by_turns(ranks, 3).tolist() == [1, 0, 3, 2]
    assert ranked(score, 9).shape == (4, 2)
