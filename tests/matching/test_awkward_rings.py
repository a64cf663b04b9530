"""Lists as people bring them: too few rings, too many, doubled, out of range, without intensities.

The answer is a clear error or an honest one: probabilities that sum to at most one, every ring
assigned or unexplained, nothing called identified that is not.
"""

from __future__ import annotations

from math import log

import numpy as np
import pytest

from phaseid.errors import InputError
from phaseid.library import Library
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.identification import Identification
from phaseid.matching.identify import identify
from phaseid.reports.json import identification_dict
from phaseid.rings import RingList, rings_from_values
from tests.matching.published import group, published_rings
from tests.matching.toys import Selection

ALUMINIUM = [2.338, 2.024, 1.431, 1.221]  # NBS Circular 539 vol 1 p 11
HEIGHTS = [100, 47, 22, 24]
XRAY, ELECTRON = "x-ray Cu Ka1", "electron 200 kV"


def assert_honest(answer: Identification) -> None:
    shown = [hypothesis.probability for hypothesis in answer.hypotheses]
    assert all(np.isfinite(p) and 0 <= p <= 1 for p in shown)
    assert sum(shown) + answer.unlisted_probability <= 1 + 1e-9
    for hypothesis in answer.hypotheses:
        factor = {scale.pattern: scale.factor for scale in hypothesis.scale}
        for number, rings in enumerate(answer.patterns):
            assigned = [a for a in hypothesis.assignments if a.pattern == number]
            open_rings = [u.ring for u in hypothesis.unexplained if u.pattern == number]
            assert sorted([a.ring for a in assigned] + open_rings) == list(range(len(rings)))
            for a in assigned:
                sigma = rings.sigma_A[a.ring] / rings.d_A[a.ring]
                residual = log(rings.d_A[a.ring] / a.d_calc_A / factor[number]) / sigma
                assert a.residual_sigma == pytest.approx(residual, abs=1e-6)
    identification_dict(answer)  # refuses an answer that contradicts itself


def everything_named(answer: Identification) -> set[str]:
    """Names in the groups of the best answer."""
    return {phase.name for a in answer.hypotheses[0].phases for phase in group(a)}


@pytest.mark.parametrize("probe", [XRAY, ELECTRON])
@pytest.mark.parametrize("count", [1, 2])
def test_one_or_two_rings_leave_many_answers(
    starter_library: Library, probe: str, count: int
) -> None:
    answer = identify([rings_from_values(ALUMINIUM[:count], probe=probe)], starter_library)
    assert_honest(answer)
    assert answer.verdict == "ambiguous"
    assert len(everything_named(answer)) > 1


def test_two_hundred_rings_at_random_are_no_match(starter_library: Library) -> None:
    rng = np.random.default_rng(0)
    d = np.exp(rng.uniform(np.log(0.8), np.log(10), 200))
    rings = rings_from_values(d.tolist(), probe=XRAY, intensities=rng.uniform(1, 100, 200).tolist())
    answer = identify([rings], starter_library)
    assert_honest(answer)
    assert answer.verdict == "no-match"


def test_a_ring_listed_twice_counts_once(shelf: Selection) -> None:
    once = rings_from_values(ALUMINIUM, probe=XRAY, intensities=HEIGHTS)
    twice = rings_from_values(
        [d for d in ALUMINIUM for _ in range(2)],
        probe=XRAY,
        intensities=[height for height in HEIGHTS for _ in range(2)],
    )
    one, other = identify([once], shelf), identify([twice], shelf)  # type: ignore[arg-type]
    assert_honest(other)
    assert other.hypotheses[0].probability == pytest.approx(one.hypotheses[0].probability, abs=1e-9)
    assert len(other.hypotheses[0].assignments) == 8


@pytest.mark.parametrize(
    "d_A", [[0.2, 0.15, 0.12], [500.0, 300.0, 250.0]], ids=["too small", "too large"]
)
def test_rings_that_no_line_of_the_library_reaches_identify_nothing(
    starter_library: Library, d_A: list[float]
) -> None:
    answer = identify([rings_from_values(d_A, probe=ELECTRON)], starter_library)
    assert_honest(answer)
    assert answer.verdict != "identified"
    assert all(not h.assignments for h in answer.hypotheses if len(h.phases) == 1)


@pytest.mark.parametrize("stray", [0.1, 900.0])
def test_one_ring_out_of_range_is_left_unexplained_and_the_rest_are_read(
    shelf: Selection, stray: float
) -> None:
    rings = rings_from_values([*ALUMINIUM, stray], probe=ELECTRON, scale_uncertainty=0.002)
    answer = identify([rings], shelf)  # type: ignore[arg-type]
    assert_honest(answer)
    assert "aluminium" in everything_named(answer)
    assert [u.ring for u in answer.hypotheses[0].unexplained] == [4]


def test_zero_intensities_say_no_more_than_none(shelf: Selection) -> None:
    none = identify([rings_from_values(ALUMINIUM, probe=XRAY)], shelf)  # type: ignore[arg-type]
    zero = identify(
        [rings_from_values(ALUMINIUM, probe=XRAY, intensities=[0, 0, 0, 0])],
        shelf,  # type: ignore[arg-type]
    )
    assert_honest(zero)
    assert zero.hypotheses[0].probability == pytest.approx(none.hypotheses[0].probability)
    assert zero.hypotheses[0].phases[0].share is None


INTENSITIES: dict[str, list[float | None] | None] = {
    "none": None,
    "equal": [50, 50, 50, 50],
    "some": [100, None, 22, None],
    "one zero": [100, 47, 0, 24],
    "all": [100, 47, 22, 24],
}


def test_aluminium_is_found_whatever_is_known_of_its_intensities(
    starter_library: Library,
) -> None:
    """The better they are known and fit, the surer."""
    chance = {}
    for known, intensities in INTENSITIES.items():
        rings = rings_from_values(ALUMINIUM, probe=XRAY, intensities=intensities)
        answer = identify([rings], starter_library)
        assert_honest(answer)
        assert "aluminium" in everything_named(answer)
        chance[known] = answer.hypotheses[0].probability
    assert min(chance.values()) > 0.4
    assert chance["none"] < chance["all"]
    assert chance["equal"] < chance["all"]


def test_a_sigma_far_too_small_makes_no_nonsense_certain(starter_library: Library) -> None:
    """Spacings rounded to 0.001 Å, called exact to 1e-9 Å."""
    rings = rings_from_values(ALUMINIUM, probe=XRAY, sigma=1e-9, intensities=HEIGHTS)
    answer = identify([rings], starter_library)
    assert_honest(answer)
    assert "aluminium" in everything_named(answer) or answer.verdict != "identified"


def test_a_sigma_as_wide_as_the_pattern_identifies_nothing(starter_library: Library) -> None:
    rings = rings_from_values(ALUMINIUM, probe=XRAY, sigma=0.5, intensities=HEIGHTS)
    answer = identify([rings], starter_library)
    assert_honest(answer)
    assert answer.verdict != "identified"


def test_a_scale_that_is_hardly_known_identifies_no_single_cell(starter_library: Library) -> None:
    rings = rings_from_values(ALUMINIUM, probe=ELECTRON, scale_uncertainty=0.2)
    answer = identify([rings], starter_library)
    assert_honest(answer)
    assert answer.verdict != "identified" or len(everything_named(answer)) > 20


def test_a_scale_known_exactly_is_allowed(shelf: Selection) -> None:
    rings = rings_from_values(ALUMINIUM, probe=ELECTRON, scale_uncertainty=0.0)
    answer = identify([rings], shelf)  # type: ignore[arg-type]
    assert_honest(answer)
    assert answer.hypotheses[0].scale[0].factor == pytest.approx(1.0, abs=0.002)


# ---------------------------------------------------------------- what is asked for


def aluminium() -> RingList:
    return rings_from_values(ALUMINIUM, probe=XRAY, intensities=HEIGHTS)


@pytest.mark.parametrize("count", [0, -1, 5, 100])
def test_a_number_of_phases_out_of_range_is_an_error(shelf: Selection, count: int) -> None:
    with pytest.raises(InputError, match="from 1 to 4"):
        identify([aluminium()], shelf, max_phases=count)  # type: ignore[arg-type]


def test_a_number_of_answers_out_of_range_is_an_error(shelf: Selection) -> None:
    with pytest.raises(InputError, match="--top 0"):
        identify([aluminium()], shelf, top=0)  # type: ignore[arg-type]


@pytest.mark.parametrize("top", [1, 7])
def test_no_more_answers_than_asked_for_are_given(shelf: Selection, top: int) -> None:
    answer = identify([aluminium()], shelf, top=top)  # type: ignore[arg-type]
    assert len(answer.hypotheses) == top


@pytest.mark.parametrize("count", [1, 4])
def test_no_answer_has_more_phases_than_allowed(shelf: Selection, count: int) -> None:
    answer = identify([aluminium()], shelf, max_phases=count, top=30)  # type: ignore[arg-type]
    assert_honest(answer)
    assert max(len(h.phases) for h in answer.hypotheses) <= count


def test_no_pattern_at_all_is_an_error(shelf: Selection) -> None:
    with pytest.raises(InputError, match="no rings"):
        identify([], shelf)  # type: ignore[arg-type]


def test_chemistry_that_leaves_no_phase_is_an_error_that_says_so(starter_library: Library) -> None:
    with pytest.raises(InputError, match=r"none of the library's \d+ phases is allowed"):
        identify([aluminium()], starter_library, chemistry=Chemistry.parse(None, "Rn", None))


def test_elements_that_nothing_listed_contains_are_no_match(starter_library: Library) -> None:
    chemistry = Chemistry.parse("Rn,Xe", None, None)
    answer = identify([aluminium()], starter_library, chemistry=chemistry)
    assert answer.verdict == "no-match"
    assert answer.unlisted_probability == pytest.approx(1.0)
    assert any("Rn" in remark for remark in answer.remarks)


def test_chemistry_is_obeyed_by_every_answer(starter_library: Library) -> None:
    rings = rings_from_values(ALUMINIUM[:3], probe=ELECTRON)
    chemistry = Chemistry.parse("Au", None, "Al,Pd")
    answer = identify([rings], starter_library, chemistry=chemistry)
    assert answer.hypotheses
    for hypothesis in answer.hypotheses:
        named = [set(a.phase.elements) for a in hypothesis.phases]
        assert "Au" in set().union(*named)
        for a in hypothesis.phases:
            assert not any({"Al", "Pd"} & set(phase.elements) for phase in group(a))


def test_the_wrong_chemistry_is_not_talked_into_a_match(starter_library: Library) -> None:
    """Aluminium's whole pattern, in a specimen said to hold only iron and oxygen."""
    chemistry = Chemistry.parse("Fe", "Fe,O", None)
    rings = published_rings("aluminium")
    answer = identify([rings], starter_library, chemistry=chemistry)
    assert_honest(answer)
    assert answer.verdict == "no-match"


def test_a_phase_that_explains_no_ring_is_no_part_of_an_answer(starter_library: Library) -> None:
    """Rings of aluminium alone; few elements, so that every second phase is tried beside it."""
    chemistry = Chemistry.parse(None, "Al,Ag,Au,Cu,Ni,Pt,Pd", None)
    rings = rings_from_values(
        ALUMINIUM,
        probe=ELECTRON,
        scale_uncertainty=0.001,
        sigma=[0.001 * d for d in ALUMINIUM],
        intensities=["vs", "s", "m", "m"],
    )
    answer = identify([rings], starter_library, chemistry=chemistry)
    assert_honest(answer)
    for hypothesis in answer.hypotheses:
        explaining = {a.phase for a in hypothesis.assignments}
        assert explaining == set(range(len(hypothesis.phases))), (
            hypothesis.probability,
            [a.phase.name for a in hypothesis.phases],
        )


def test_cautions_come_with_the_phases_named(starter_library: Library) -> None:
    """Beryllium oxide dust harms lungs: d of bromellite from its cell a 2.698, c 4.377 Å."""
    a, c = 2.698, 4.377
    hkl = [(1, 0, 0), (0, 0, 2), (1, 0, 1), (1, 0, 2), (1, 1, 0), (1, 0, 3)]
    d = [(4 / 3 * (h * h + h * k + k * k) / a**2 + j * j / c**2) ** -0.5 for h, k, j in hkl]
    rings = rings_from_values([round(v, 4) for v in d], probe=XRAY)
    answer = identify([rings], starter_library, chemistry=Chemistry.parse("Be", "Be,O", None))
    assert answer.hypotheses[0].phases[0].phase.formula == "BeO"
    assert any("beryllium" in caution.lower() for caution in answer.cautions)
