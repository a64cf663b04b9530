"""The search against brute force, and what must not change its answer."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from itertools import combinations

import numpy as np
import pytest

from phaseid.library import Library
from phaseid.matching.identification import Identification
from phaseid.matching.identify import identify
from phaseid.matching.likelihood import evaluate
from phaseid.probes import parse_probe
from phaseid.rings import RingList, rings_from_values
from tests.matching.conftest import Searched
from tests.matching.published import added, is_published, published_rings
from tests.matching.toys import Selection

NAMES = ("corundum", "fluorite", "halite", "quartz (alpha)", "hematite", "rutile", "periclase")


@pytest.fixture(scope="module")
def fifteen(starter_library: Library) -> Selection:
    """Seven common phases and eight others."""
    phases = starter_library.phases()
    common = {
        next(phase.phase_id for phase in phases if is_published(phase, name)) for name in NAMES
    }
    others = {phase.phase_id for phase in phases[20 :: len(phases) // 12]} - common
    return Selection(starter_library, common | set(sorted(others)[: 15 - len(common)]))


@pytest.mark.parametrize(
    "shares",
    [
        {"corundum": 1.0},
        {"corundum": 0.6, "fluorite": 0.4},
        {"halite": 0.8, "quartz (alpha)": 0.3},
        {"periclase": 1.0, "rutile": 0.15},
    ],
    ids=" + ".join,
)
def test_the_search_finds_what_brute_force_over_all_singles_and_pairs_finds(
    fifteen: Selection, searched: Searched, shares: dict[str, float]
) -> None:
    search = searched(added(shares), fifteen, 2)
    found = search.ranked()[0]
    count = len(fifteen)
    value = {}
    for members in [*((i,) for i in range(count)), *combinations(range(count), 2)]:
        fit = evaluate(search.model, np.array([members]), np.zeros((1, len(members), 1)))
        value[members] = float(fit.log_likelihood[0]) + search.prior_of(members)
    assert len(value) == 15 + 105
    best = max(value, key=lambda members: value[members])
    assert found.members == best
    assert found.log_posterior == pytest.approx(value[best], abs=0.5)
    assert len(found.members) == len(shares)


def signature(answer: Identification) -> list[tuple[list[list[str]], float]]:
    """Phases with their groups, and probabilities."""
    return [
        (
            sorted(
                sorted([a.phase.phase_id, *(p.phase_id for p in a.indistinguishable)])
                for a in hypothesis.phases
            ),
            hypothesis.probability,
        )
        for hypothesis in answer.hypotheses
    ]


def assert_same(one: Identification, other: Identification) -> None:
    assert one.verdict == other.verdict
    assert one.unlisted_probability == pytest.approx(other.unlisted_probability, abs=1e-6)
    first, second = signature(one), signature(other)
    likely = [i for i, (_, p) in enumerate(first) if p > 1e-4]
    assert likely
    for i in likely:
        assert first[i][0] == second[i][0]
        assert first[i][1] == pytest.approx(second[i][1], abs=1e-6)


MIXTURE = added({"corundum": 0.6, "fluorite": 0.4})


@pytest.fixture(scope="module")
def mixture(shelf: Selection) -> Identification:
    return identify([MIXTURE], shelf)  # type: ignore[arg-type]


def test_the_same_question_gets_the_same_answer(shelf: Selection, mixture: Identification) -> None:
    other = identify([MIXTURE], shelf)  # type: ignore[arg-type]
    assert signature(mixture) == signature(other)
    assert mixture.hypotheses == other.hypotheses


def test_the_order_of_rings_does_not_matter(shelf: Selection, mixture: Identification) -> None:
    order = np.random.default_rng(5).permutation(len(MIXTURE))
    shuffled = replace(
        MIXTURE,
        position=MIXTURE.position[order],
        position_sigma=MIXTURE.position_sigma[order],
        d_A=MIXTURE.d_A[order],
        sigma_A=MIXTURE.sigma_A[order],
        intensity=MIXTURE.intensity[order],
        intensity_range=MIXTURE.intensity_range[order],
        grades=tuple(MIXTURE.grades[i] for i in order),
        notes=tuple(MIXTURE.notes[i] for i in order),
    )
    one, other = mixture, identify([shuffled], shelf)  # type: ignore[arg-type]
    assert_same(one, other)
    for a in other.hypotheses[0].assignments:
        twin = next(b for b in one.hypotheses[0].assignments if b.ring == order[a.ring])
        assert (twin.hkl, twin.phase) == (a.hkl, a.phase)


def test_the_unit_of_intensity_does_not_matter(shelf: Selection) -> None:
    rings = published_rings("hematite")
    counts = rings_from_values(
        rings.d_A.tolist(),
        probe=rings.probe,
        sigma=rings.sigma_A.tolist(),
        intensities=(rings.intensity * 137.0).tolist(),
    )
    assert_same(identify([rings], shelf), identify([counts], shelf))  # type: ignore[arg-type]


ELECTRON = parse_probe("electron 200 kV", scale_sigma=0.005)
PLATE = np.array([3.153, 1.931, 1.647, 1.366, 1.253, 1.115])  # fluorite, NBS Circular 539
HEIGHTS = [94.0, 100.0, 35.0, 12.0, 10.0, 16.0]


SIGMA = 0.003


@pytest.fixture(scope="module")
def plate(shelf: Selection) -> Identification:
    """The answer to the spacings of the plate."""
    rings = rings_from_values(
        PLATE.tolist(), probe=ELECTRON, sigma=(SIGMA * PLATE).tolist(), intensities=HEIGHTS
    )
    return identify([rings], shelf)  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("column", "factor", "power"),
    [
        ("d_nm", 0.1, 1),
        ("g_1/A", 1.0, -1),
        ("g_1/nm", 10.0, -1),
        ("q_1/A", 2 * np.pi, -1),
        ("q_1/nm", 20 * np.pi, -1),
        ("radius_mm", 25.1, -1),
        ("diameter_mm", 50.2, -1),
    ],
)
def test_the_unit_of_positions_does_not_matter(
    shelf: Selection, plate: Identification, column: str, factor: float, power: int
) -> None:
    """Bragg's law at small angle; the camera constant is 25.1 Å mm."""
    position = factor * PLATE**power
    other = rings_from_values(
        position.tolist(),
        column=column,
        probe=ELECTRON,
        sigma=(SIGMA * position).tolist(),
        intensities=HEIGHTS,
        camera_constant="25.1 A mm" if column.endswith("mm") else None,
    )
    assert_same(plate, identify([other], shelf))  # type: ignore[arg-type]


def test_angles_and_spacings_of_the_same_rings_get_the_same_answer(shelf: Selection) -> None:
    """λ = 2 d sin θ; σ_d = d cot θ σ_θ."""
    probe = parse_probe("x-ray Cu Ka1", scale_sigma=5e-4)
    theta = np.arcsin(probe.wavelength_A / 2 / PLATE)
    angle_sigma = 0.03
    sigma = PLATE / np.tan(theta) * np.radians(angle_sigma) / 2
    spacings = rings_from_values(
        PLATE.tolist(), probe=probe, sigma=sigma.tolist(), intensities=HEIGHTS
    )
    angles = rings_from_values(
        np.degrees(2 * theta).tolist(),
        column="two_theta_deg",
        probe=probe,
        sigma=angle_sigma,
        intensities=HEIGHTS,
    )
    assert_same(identify([spacings], shelf), identify([angles], shelf))  # type: ignore[arg-type]


def test_the_order_of_patterns_does_not_matter(shelf: Selection) -> None:
    electron = rings_from_values(
        PLATE.tolist(), probe=ELECTRON, sigma=(0.003 * PLATE).tolist(), intensities=HEIGHTS
    )
    xray = published_rings("fluorite")
    one = identify([electron, xray], shelf)  # type: ignore[arg-type]
    other = identify([xray, electron], shelf)  # type: ignore[arg-type]
    assert_same(one, other)
    swapped = {(1 - a.pattern, a.ring, a.hkl) for a in other.hypotheses[0].assignments}
    assert swapped == {(a.pattern, a.ring, a.hkl) for a in one.hypotheses[0].assignments}


def test_two_patterns_together_are_surer_than_either_alone(
    starter_library: Library,
) -> None:
    """Few rings at a poor scale: together they leave less to other explanations."""
    few = rings_from_values(
        PLATE[:4].tolist(),
        probe=parse_probe("electron 200 kV", scale_sigma=0.02),
        sigma=(0.005 * PLATE[:4]).tolist(),
        intensities=["s", "vs", "m", "w"],
    )
    xray = rings_from_values(PLATE[:3].tolist(), probe="x-ray Cu Ka1", intensities=HEIGHTS[:3])

    def chance(patterns: Sequence[RingList]) -> float:
        answer = identify(patterns, starter_library, top=20)
        return sum(
            h.probability
            for h in answer.hypotheses
            if len(h.phases) == 1 and h.phases[0].phase.name == "fluorite"
        )

    alone = [chance([few]), chance([xray])]
    assert chance([few, xray]) > max(alone)
