"""The scale error that patterns have in common, against integrals by brute force."""

from __future__ import annotations

import math
from collections.abc import Iterator

import numpy as np
import pytest

from phaseid.library import Library
from phaseid.matching.series import identify_series
from phaseid.matching.series_scale import ScaleError
from phaseid.rings import RingList, rings_from_values

A_AU = 4.0782  # Å; King, crystal structures of the elements, from memory; aluminium has 4.0496
PLANES = (3, 4, 8, 11, 12, 16, 19, 20)


def _normal(x: float, mean: float, sd: float) -> float:
    return math.exp(-0.5 * ((x - mean) / sd) ** 2) / (sd * math.sqrt(2 * math.pi))


@pytest.fixture
def error() -> ScaleError:
    return ScaleError(np.array([0.01, 0.012]), 0.009, np.array([True, True]))


@pytest.mark.parametrize(("mean", "deviation"), [(0.004, 0.002), (-0.015, 0.006), (0.0, 0.0099)])
@pytest.mark.parametrize("common", [-0.01, 0.0, 0.006])
def test_the_tilt_is_the_integral_over_the_patterns_own_error(
    error: ScaleError, common: float, mean: float, deviation: float
) -> None:
    step = 1e-5
    grid = np.arange(-0.12, 0.12, step)
    tilt = error.tilt(common, np.full((2, 1), mean), np.full((2, 1), deviation))
    for t, sigma in enumerate(error.sigma):
        own = math.sqrt(sigma**2 - error.common**2)
        ratio = [
            _normal(s, mean, deviation) / _normal(s, 0.0, sigma) * _normal(s, common, own)
            for s in grid.tolist()
        ]
        assert tilt[t, 0] == pytest.approx(math.log(step * sum(ratio)), abs=2e-3)


def test_a_pattern_by_itself_learns_nothing_from_sharing(error: ScaleError) -> None:
    """Summed over the common error the likelihood is what it was."""
    values, prior = error.grid()
    mean, deviation = np.array([[0.004], [0.01]]), np.array([[0.003], [0.004]])
    total = sum(
        p * np.exp(error.tilt(float(value), mean, deviation))
        for value, p in zip(values, prior, strict=True)
    )
    assert np.allclose(total, 1.0, atol=0.03)


def _pattern(edge: float, **given: str) -> RingList:
    d = [edge / math.sqrt(n) for n in PLANES]
    return rings_from_values(d, probe="electron 200 kV", sigma="0.1%", **given)  # type: ignore[arg-type]


def test_lists_that_state_the_same_share_their_scale() -> None:
    same = [_pattern(4.05, scale_uncertainty="1%") for _ in range(3)]
    other = _pattern(4.05, scale_uncertainty="0.3%")
    lists = [same[0], other, *same[1:]]
    error = ScaleError.of(lists, lists)
    assert error.shared.tolist() == [True, False, True, True]
    assert error.common == pytest.approx(0.01 * math.sqrt(0.9))
    assert not ScaleError.of([other], [other]).shared.any()
    assert ScaleError.of([other], [other]).grid()[0].tolist() == [0.0]


@pytest.fixture(scope="module")
def metals(starter_library: Library, tmp_path_factory: pytest.TempPathFactory) -> Iterator[Library]:
    library = Library.create(tmp_path_factory.mktemp("metals") / "metals.sqlite")
    phases = [starter_library.choose(name) for name in ("Al", "Au", "Si", "MgO", "Cu", "NaCl")]
    library.add_crystals(starter_library.crystal(phase.phase_id) for phase in phases)
    yield library
    library.close()


def test_one_wrong_constant_is_not_held_against_a_phase_in_every_pattern(metals: Library) -> None:
    """Aluminium read with a constant 0.7 % (1.4 sigma) off looks like gold at the right one.

    One pattern prefers gold by the prior of the scale, exp(1.4²/2) = 2.7 to one; six patterns of
    the same setting say the same once, not six times.
    """
    patterns = [_pattern(A_AU, scale_uncertainty="0.5%") for _ in range(6)]
    series = identify_series(patterns, metals)
    chance = {row.phase.formula: float(row.probability[0]) for row in series.phases}
    assert chance["Al"] > 0.05
    assert chance["Au"] + chance["Al"] > 0.95


def test_the_scale_in_common_is_told(metals: Library) -> None:
    diamond = [3, 8, 11, 16, 19, 24]
    patterns = [
        rings_from_values(
            [5.4311 * 1.01 / math.sqrt(n) for n in diamond],  # silicon, SRM 640 series
            probe="electron 200 kV",
            scale_uncertainty="1%",
            sigma="0.1%",
            title=str(k),
        )
        for k in range(3)
    ]
    series = identify_series(patterns, metals)
    assert series.phases[0].phase.formula == "Si"
    assert series.scale is not None
    assert series.scale.factor == pytest.approx(1.01, abs=3 * series.scale.sigma)
    assert series.scale.sigma < 0.005
    assert identify_series(patterns, metals, persistence=0.0).scale is None
