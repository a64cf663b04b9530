"""What rings cannot tell apart is one answer, and how to tell it apart is said.

Cells: NBS Circular 539, in tests/reference/published_patterns.json; gold a = 4.0786 Å, lithium
hydride a = 4.0834 Å (from memory of handbook tables).
"""

from __future__ import annotations

import re
from math import log

import numpy as np
import pytest

from phaseid.crystal.crystal import Source
from phaseid.library import Library
from phaseid.library.phase import Phase
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.identification import Identification
from phaseid.matching.identify import identify
from phaseid.matching.separate import separating_text
from phaseid.rings import RingList, rings_from_values
from tests.matching.conftest import Published
from tests.matching.published import PATTERNS, group
from tests.matching.toys import Toy, toy_model, toy_rings

A_AL = PATTERNS["aluminium"]["cell"][0]
FCC = {"Al": A_AL, "Ag": PATTERNS["silver"]["cell"][0], "Au": 4.0786, "LiH": 4.0834}


def aluminium_rings(scale: float, sigma: float) -> RingList:
    """The first three rings of aluminium on a plate."""
    d = [A_AL / np.sqrt(n) for n in (3, 4, 8)]
    return rings_from_values(
        d,
        probe="electron 200 kV",
        scale_uncertainty=scale,
        sigma=[sigma * value for value in d],
        intensities=["vs", "s", "m"],
    )


@pytest.fixture(scope="module")
def poor_scale(starter_library: Library) -> Identification:
    return identify([aluminium_rings(0.015, 0.003)], starter_library)


@pytest.fixture(scope="module")
def metals() -> Chemistry:
    return Chemistry.parse(None, "Al,Ag,Au,Li,H", None)


def test_fcc_phases_of_like_cell_are_one_answer_where_the_scale_is_poor(
    poor_scale: Identification,
) -> None:
    """They differ by 0.7 to 0.9 %, a camera constant without standard is good to 1 to 3 %."""
    (answer,) = poor_scale.hypotheses[0].phases
    assert set(FCC) <= {phase.formula for phase in group(answer)}


def test_the_answers_probability_is_that_of_the_whole_group(
    starter_library: Library, metals: Chemistry
) -> None:
    """Alone among these elements the group is nearly certain although none of its members is."""
    answer = identify([aluminium_rings(0.015, 0.003)], starter_library, chemistry=metals)
    best = answer.hypotheses[0]
    (found,) = best.phases
    assert set(FCC) <= {phase.formula for phase in group(found)}
    assert best.probability > 0.5


def test_a_good_calibration_leaves_aluminium_alone(starter_library: Library) -> None:
    answer = identify([aluminium_rings(0.001, 0.001)], starter_library)
    (found,) = answer.hypotheses[0].phases
    assert found.phase.formula == "Al"
    assert not set(FCC) & {phase.formula for phase in found.indistinguishable}


def test_naming_the_element_leaves_aluminium_alone(starter_library: Library) -> None:
    chemistry = Chemistry.parse("Al", "Al", None)
    answer = identify([aluminium_rings(0.015, 0.003)], starter_library, chemistry=chemistry)
    (found,) = answer.hypotheses[0].phases
    assert found.phase.name == "aluminium"
    assert not found.indistinguishable


def test_every_member_of_a_group_comes_with_what_would_separate_it(
    poor_scale: Identification,
) -> None:
    (answer,) = poor_scale.hypotheses[0].phases
    assert [s.other.phase_id for s in answer.separators] == [
        other.phase_id for other in answer.indistinguishable
    ]
    for separator in answer.separators:
        theirs, mine = set(separator.other.elements), set(answer.phase.elements)
        named = set(re.match(r"[^;]*", separator.text)[0].replace(",", " ").split())  # type: ignore[index]
        assert (theirs - mine or mine - theirs) <= named


def test_the_calibration_that_would_do_is_a_third_of_the_difference(
    starter_library: Library, metals: Chemistry
) -> None:
    """The difference in ln a is arithmetic; three sigmas separate."""
    rings = aluminium_rings(0.015, 0.003)
    answer = identify([rings], starter_library, chemistry=metals)
    (found,) = answer.hypotheses[0].phases
    a = FCC[found.phase.formula]
    checked = 0
    for separator in found.separators:
        if separator.other.formula not in FCC:
            continue
        told = re.search(
            r"all rings differ by ([\d.]+) %, so a calibration to ([\d.]+) %", separator.text
        )
        assert told, separator.text
        difference = 100 * abs(log(FCC[separator.other.formula] / a))
        assert float(told[1]) == pytest.approx(difference, rel=0.1, abs=0.02)
        assert float(told[2]) == pytest.approx(difference / 3, rel=0.4)
        checked += 1
    assert checked == 3


def test_different_phases_are_not_lumped_together(published_answer: Published) -> None:
    """Corundum and hematite share a structure type; their cells differ by 6 %."""
    for name in ("corundum", "hematite"):
        (found,) = published_answer(name).hypotheses[0].phases
        assert not found.indistinguishable


# ---------------------------------------------------------------- the words, on made-up phases


def made_up(name: str, *elements: str) -> Phase:
    return Phase(
        phase_id=name,
        name=name,
        formula="".join(elements),
        elements=elements,
        space_group_number=1,
        space_group_symbol="P1",
        cell=(1.0, 1.0, 1.0, 90.0, 90.0, 90.0),
        volume_A3=1.0,
        density_g_cm3=1.0,
        source=Source("made up", "", ""),
    )


def words(first: Toy, second: Toy, intensities: list[float] | None = None) -> str:
    heights = intensities or list(first.intensity)
    rings = toy_rings(first.d_A, 0.003, intensities=heights)
    model, _ = toy_model([first, second], [rings])
    one, other = made_up("one", *first.elements), made_up("other", *second.elements)
    return separating_text(one, other, model.lines[0], 0, 1, model.patterns[0])


BASE = Toy((3.0, 2.2, 1.7, 1.35, 1.2), (100, 80, 60, 20, 10), ("Al",))


def test_the_element_that_only_one_of_them_contains_is_named() -> None:
    assert words(BASE, Toy(BASE.d_A, BASE.intensity, ("Al", "Sc"))).startswith("Sc in an element")
    assert words(Toy(BASE.d_A, BASE.intensity, ("Al", "Sc")), BASE).startswith(
        "no Sc in an element"
    )


def test_the_ring_that_only_one_of_them_has_is_named() -> None:
    poorer = Toy((3.0, 2.2, 1.35, 1.2), (100, 80, 20, 10), ("Al",))
    assert "a ring at 1.7 Å belongs to one alone" in words(BASE, poorer)
    richer = Toy((3.0, 2.5, 2.2, 1.7, 1.35, 1.2), (100, 70, 80, 60, 20, 10), ("Al",))
    assert "a ring at 2.5 Å belongs to other alone" in words(BASE, richer)


def test_a_ring_that_the_other_shows_more_weakly_is_not_one_phases_alone() -> None:
    """20 of 100 beside 13 of 100, where rings of 10 are seen: both show it."""
    weaker = Toy(BASE.d_A, (100, 80, 60, 13, 10), ("Al",))
    assert "alone" not in words(BASE, weaker)
    assert "alone" not in words(weaker, BASE)


def test_the_ring_that_differs_is_named_with_the_reading_it_needs() -> None:
    """1 % apart: three sigmas of 0.33 % separate."""
    moved = Toy((3.0, 2.2, 1.7 * 1.01, 1.35, 1.2), BASE.intensity, ("Al",))
    text = words(BASE, moved)
    assert re.search(r"the ring at 1\.7\d* Å differs by 1 %, so it needs reading to 0\.3 %", text)


def test_a_common_factor_is_told_as_a_calibration() -> None:
    """1.2 % apart throughout."""
    scaled = Toy([d * np.exp(0.012) for d in BASE.d_A], BASE.intensity, ("Al",))
    assert words(BASE, scaled) == ("all rings differ by 1.2 %, so a calibration to 0.4 % would do")


def test_what_rings_cannot_separate_is_said_plainly() -> None:
    assert words(BASE, Toy(BASE.d_A, BASE.intensity, ("Al",))) == (
        "same elements and the same rings: rings cannot tell them apart"
    )
