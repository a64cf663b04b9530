"""Mixtures: every phase named, shares by weight recovered.

Compositions: samples of the IUCr round robin on quantitative phase analysis (Madsen et al. 2001,
J. Appl. Cryst. 34, 409). Patterns are computed with gemmi from handbook structures.
"""

from __future__ import annotations

import numpy as np
import pytest

from phaseid.library import Library
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.identification import Hypothesis
from phaseid.matching.identify import identify
from phaseid.rings import rings_from_values
from tests.matching.minerals import MINERALS, mixed, powder
from tests.matching.published import added, group, is_phase, names_exactly, reference

FORMULAS = {
    "corundum": ("Al2O3", 167),
    "fluorite": ("CaF2", 225),
    "zincite": ("ZnO", 186),
    "rutile": ("TiO2", 136),
    "halite": ("NaCl", 225),
    "periclase": ("MgO", 225),
}
ROUND_ROBIN = reference("quantitative_round_robin")
SAMPLES = {
    name: dict(zip(ROUND_ROBIN["order"], weights, strict=True))
    for name, weights in ROUND_ROBIN["samples"].items()
}


def shares(hypothesis: Hypothesis) -> dict[str, tuple[float, float]]:
    """Weight share and its one-sigma of every mineral named; a foreign phase is an error."""
    found = {}
    for answer in hypothesis.phases:
        names = [
            name
            for name, facts in FORMULAS.items()
            if any(is_phase(phase, *facts) for phase in group(answer))
        ]
        assert names, f"{answer.phase.name} is not in the specimen"
        assert answer.share is not None
        assert answer.share_sigma is not None
        found[names[0]] = (answer.share, answer.share_sigma)
    return found


@pytest.mark.parametrize("name", ["corundum", "fluorite", "zincite", "rutile", "halite"])
def test_the_minerals_have_their_handbook_densities(name: str) -> None:
    """From memory of handbooks; a check of the reference patterns, not of phaseid."""
    handbook = {
        "corundum": 3.99, "fluorite": 3.18, "zincite": 5.68, "rutile": 4.25, "halite": 2.165,
    }  # fmt: skip
    assert powder(name)[0] == pytest.approx(handbook[name], rel=0.01)
    assert len(MINERALS[name].sites) == 2


@pytest.mark.parametrize("sample", ["1g", "1d"])
def test_a_round_robin_sample_is_named_with_its_shares(
    starter_library: Library, sample: str
) -> None:
    weighed = SAMPLES[sample]
    best = identify([mixed(weighed, seed=7)], starter_library).hypotheses[0]
    found = shares(best)
    assert set(found) == set(weighed)
    assert sum(share for share, _ in found.values()) == pytest.approx(1.0)
    for mineral, (share, sigma) in found.items():
        true = weighed[mineral] / sum(weighed.values())
        assert abs(share - true) < max(2.5 * sigma, 0.1 * true), mineral
        assert share - true == pytest.approx(0, abs=0.06)
        assert 0 < sigma < 0.08


def test_traces_are_named_beside_a_main_phase(starter_library: Library) -> None:
    """Sample 1b: 94 % corundum, 4 % fluorite, 1.4 % zincite, whose lines are strong."""
    weighed = SAMPLES["1b"]
    best = identify([mixed(weighed, seed=7)], starter_library).hypotheses[0]
    found = shares(best)
    assert set(found) == set(weighed)
    for mineral, (share, _) in found.items():
        assert share == pytest.approx(weighed[mineral] / 100, rel=0.5)


def test_stated_shares_are_as_uncertain_as_they_are_wrong(starter_library: Library) -> None:
    """Over several seeds the errors are worth about one stated sigma."""
    weighed = SAMPLES["1e"]
    chemistry = Chemistry.parse(None, "Al,O,Ca,F,Zn", None)
    errors = []
    for seed in range(4):
        rings = mixed(weighed, seed=seed)
        found = shares(identify([rings], starter_library, chemistry=chemistry).hypotheses[0])
        errors += [
            (share - weighed[mineral] / 100) / sigma for mineral, (share, sigma) in found.items()
        ]
    assert len(errors) == 12
    assert 0.05 < np.sqrt(np.mean(np.square(errors))) < 1.5


@pytest.mark.parametrize(
    "parts",
    [
        {"corundum": 0.6, "fluorite": 0.4},
        {"halite": 0.5, "periclase": 0.5},
        {"hematite": 0.7, "quartz (alpha)": 0.4},
    ],
    ids=" + ".join,
)
def test_published_patterns_added_are_taken_apart(
    starter_library: Library, parts: dict[str, float]
) -> None:
    """Heights are those of NBS Circular 539 and Monograph 25, times the stated factors."""
    best = identify([added(parts)], starter_library).hypotheses[0]
    assert names_exactly(best, list(parts)), [a.phase.name for a in best.phases]


def test_shares_follow_the_published_reference_intensity_ratios(starter_library: Library) -> None:
    """Chung 1974: w_A / w_B = (I_A / RIR_A) / (I_B / RIR_B) with I of the strongest lines."""
    ratio = {
        row["phase"]: row["published"] for row in reference("reference_intensity_ratios")["rows"]
    }
    factors = {"rutile": 1.0, "corundum": 0.5}
    rings = added(factors)
    best = identify([rings], starter_library).hypotheses[0]
    found = shares(best)
    part = {name: factor / ratio[name] for name, factor in factors.items()}
    for name, (share, _) in found.items():
        assert share == pytest.approx(part[name] / sum(part.values()), abs=0.07)


def test_an_electron_pattern_gives_no_shares(starter_library: Library) -> None:
    """Uneven intensities of electron rings leave no more than a rough order (common practice)."""
    rings = rings_from_values(
        [2.338, 2.024, 1.431, 1.221, 2.106, 1.489],
        probe="electron 200 kV",
        scale_uncertainty=0.003,
        intensities=["vs", "s", "m", "m", "s", "m"],
    )
    answer = identify([rings], starter_library, chemistry=Chemistry.parse("Al,Mg", "Al,Mg,O", None))
    assert all(a.share is None for h in answer.hypotheses for a in h.phases)
    assert any("shares" in remark for remark in answer.remarks)
    names = {a.phase.name for a in answer.hypotheses[0].phases}
    assert names == {"aluminium", "periclase"}


def test_a_foreign_ring_is_left_unexplained(starter_library: Library) -> None:
    """A ring of intensity 30 where neither phase has a line."""
    rings = mixed({"corundum": 50.0, "fluorite": 50.0}, seed=1)
    dirty = rings_from_values(
        [*rings.position.tolist(), 47.95],
        column="two_theta_deg",
        probe="x-ray Cu Ka1",
        sigma=0.015,
        intensities=[*rings.intensity.tolist(), 30.0],
    )
    best = identify([dirty], starter_library).hypotheses[0]
    assert set(shares(best)) == {"corundum", "fluorite"}
    assert [u.ring for u in best.unexplained] == [len(rings)]
