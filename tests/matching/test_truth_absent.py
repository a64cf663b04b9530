"""What is not in the library must not be named.

Published patterns (tests/reference/published_patterns.json) against a library from which their
phase is taken out, with every entry of its composition and space group; and rings of no phase.
"""

from __future__ import annotations

import numpy as np
import pytest

from phaseid.library import Library
from phaseid.matching.identification import Identification
from phaseid.matching.identify import identify
from phaseid.rings import RingList, rings_from_values
from tests.matching.published import PATTERNS, published_rings, without
from tests.matching.toys import Selection


def answer_without(library: Library, name: str) -> Identification:
    poorer = Selection(library, without(library, name))
    assert len(poorer) < len(library)
    return identify([published_rings(name)], poorer)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    "name",
    [
        "aluminium",
        "halite",
        "hematite",
        "rutile",
        "corundum",
        "quartz (alpha)",
        "lithium fluoride",
    ],
)
def test_a_phase_that_is_not_listed_is_told_as_no_match(
    starter_library: Library, name: str
) -> None:
    """None of these has a neighbour within 0.2 % in the library."""
    answer = answer_without(starter_library, name)
    assert answer.verdict == "no-match", [a.phase.name for a in answer.hypotheses[0].phases]
    assert answer.unlisted_probability > 0.5


@pytest.mark.parametrize("name", ["nickel", "galena", "titanium nitride", "tin (beta, white)"])
def test_a_phase_that_is_not_listed_is_never_taken_for_a_neighbour_with_confidence(
    starter_library: Library, name: str
) -> None:
    """Here a phase of the same type, or one with rings at some of the places, is listed."""
    answer = answer_without(starter_library, name)
    assert answer.verdict != "identified", [a.phase.name for a in answer.hypotheses[0].phases]


def test_an_unlisted_cell_of_a_known_type_is_told_with_its_length(
    starter_library: Library,
) -> None:
    """Lithium fluoride has the rock salt rings; a = 4.0270 Å (NBS Circular 539 vol 1 p 61)."""
    answer = answer_without(starter_library, "lithium fluoride")
    assert answer.type_matches
    best = answer.type_matches[0]
    assert best.like.space_group_number == 225
    assert best.a_A == pytest.approx(PATTERNS["lithium fluoride"]["cell"][0], rel=1e-3)
    assert best.a_sigma_A < 0.01


def shuffled(name: str, seed: int) -> RingList:
    """The intensities of a published pattern at places drawn evenly over its range of ln d."""
    rings = published_rings(name)
    rng = np.random.default_rng(seed)
    low, high = np.log(rings.d_A.min()), np.log(rings.d_A.max())
    places = np.exp(np.sort(rng.uniform(low, high, len(rings)))[::-1])
    return rings_from_values(
        places.round(4).tolist(),
        probe=rings.probe,
        intensities=rng.permutation(rings.intensity).tolist(),
    )


@pytest.mark.parametrize("seed", range(3))
@pytest.mark.parametrize("name", ["aluminium", "corundum"])
def test_rings_at_random_are_never_identified(
    starter_library: Library, name: str, seed: int
) -> None:
    answer = identify([shuffled(name, seed)], starter_library)
    assert answer.verdict != "identified", [a.phase.name for a in answer.hypotheses[0].phases]
    assert answer.hypotheses[0].probability < 0.9
