"""Can two phases be told apart: cases whose answer is plain, and the precision asked for."""

from __future__ import annotations

import pytest

from phaseid.crystal.crystal import Crystal
from phaseid.errors import InputError
from phaseid.library import Library, Phase
from phaseid.matching.compare import Comparison, compare
from phaseid.probes import parse_probe

ELECTRONS, X_RAYS = "electron 200 kV", "x-ray Cu Ka1"


@pytest.fixture
def pair(starter_library: Library):
    def find(text: str) -> tuple[Phase, Crystal]:
        phase = starter_library.choose(text)
        return phase, starter_library.crystal(phase.phase_id)

    def judged(
        first: str, second: str, probe: str = ELECTRONS, scale: float | None = None, **given: object
    ) -> Comparison:
        beam = parse_probe(probe, scale_sigma=scale)
        return compare(find(first), find(second), beam, **given)  # type: ignore[arg-type]

    return judged


def test_different_structures_are_told_apart(pair) -> None:
    """Anatase 101 at 3.52 Å, rutile 110 at 3.25 Å: the textbook pair (common practice)."""
    result = pair("anatase", "rutile")
    assert result.separable
    assert result.confidence > 0.95
    strongest = {ring.of: ring for ring in reversed(result.telling)}
    assert strongest["A"].d_A == pytest.approx(3.516, abs=0.005)
    assert strongest["B"].d_A == pytest.approx(3.248, abs=0.005)


def test_one_phase_twice_is_a_coin_toss(pair) -> None:
    result = pair("Al", "Al")
    assert not result.separable
    assert result.confidence == pytest.approx(0.5)
    assert result.telling == ()


@pytest.mark.parametrize(("scale", "separable"), [(0.015, False), (0.001, True)])
def test_gold_and_aluminium_need_a_calibration(pair, scale: float, separable: bool) -> None:
    """Both fcc, 4.0782 and 4.0496 Å (King, from memory): 0.70 % apart, by the scale alone."""
    result = pair("Au", "Al", scale=scale)
    assert result.separable is separable
    assert {ring.by for ring in result.telling} == {"scale"}
    for ring in result.telling:
        assert ring.difference == pytest.approx(0.0070, abs=0.0003)
        assert ring.needs_relative_precision == pytest.approx(ring.difference / 3.29)


def test_confidence_follows_the_normal_law_for_a_pure_shift(pair) -> None:
    """Two fcc metals differ by a shift Δ alone; Φ(Δ / 2σ) of decisions are right (closed form)."""
    from statistics import NormalDist

    delta = 0.00704
    sigma = (0.002**2 + 0.0005**2 + 0.003**2 / 8) ** 0.5  # scale, cell, the mean of about 8 rings
    result = pair("Au", "Al", scale=0.002)
    assert result.confidence == pytest.approx(NormalDist().cdf(delta / 2 / sigma), abs=0.06)


def test_better_precision_never_hurts(pair) -> None:
    confidences = [pair("Au", "Ag", X_RAYS, scale).confidence for scale in (0.01, 0.001, 1e-5)]
    assert confidences[0] < 0.7
    assert confidences[0] < confidences[2]


def test_the_order_of_the_two_does_not_matter(pair) -> None:
    one, other = pair("magnetite", "hematite"), pair("hematite", "magnetite")
    assert one.separable
    assert other.separable
    assert [(r.d_A, r.of) for r in one.telling if r.by == "ratio"][:1] != []
    assert {round(r.d_A, 4) for r in one.telling} == {round(r.d_A, 4) for r in other.telling}


def test_a_range_without_rings_is_refused(pair) -> None:
    with pytest.raises(InputError, match="no ring between"):
        pair("Al", "Au", d_range_A=(5.0, 6.0))
    with pytest.raises(InputError, match="no spacings"):
        pair("Al", "Au", d_range_A=(3.0, 2.0))


def test_elements_that_would_decide_are_named(pair) -> None:
    assert pair("Au", "Ag").elements == (("Au",), ("Ag",))
