"""What the likelihood rests on: densities that integrate to one, a trend that costs what it should.

Outside references: numerical integration, the normal law, counting over the library.
"""

from __future__ import annotations

from dataclasses import replace
from math import log

import numpy as np
import pytest
from scipy.integrate import trapezoid

from phaseid.library import Library
from phaseid.matching import settings
from phaseid.matching.chemistry import Chemistry
from phaseid.matching.crowd import crowd_intensity
from phaseid.matching.identify import identify
from phaseid.matching.likelihood import evaluate
from phaseid.matching.model import Fit
from phaseid.matching.patterns import prepare
from tests.matching.conftest import Searched
from tests.matching.published import published_rings
from tests.matching.toys import Selection, Toy, toy_model, toy_rings

D_A = np.geomspace(3.2, 0.9, 12)
EVEN = np.full(12, 100.0)


@pytest.mark.parametrize("weakest", [0.5, 5.0, 60.0])
def test_the_crowds_intensities_have_a_density_that_integrates_to_one(weakest: float) -> None:
    """Over ln intensity, from the detection limit to half a unit above the strongest ring."""
    pattern = prepare(toy_rings((3.0, 2.2, 1.7), 1e-3, intensities=[100, 2 * weakest, weakest]))
    grid = np.linspace(pattern.ln_limit, 0.5, 20_001)
    crowd = crowd_intensity(replace(pattern, ln_intensity=grid, intensity_sd=np.zeros(len(grid))))
    assert trapezoid(np.exp(crowd), grid) == pytest.approx(1.0, rel=1e-6)
    assert crowd[0] > crowd[-1]


def test_rings_without_intensity_have_no_density_of_it() -> None:
    assert not crowd_intensity(prepare(toy_rings((3.0, 2.2, 1.7), 1e-3))).any()


def falling(rate: float) -> Fit:
    """Fit of even lines to rings whose ln intensity falls by `rate` (Å²) times 1/2d²."""
    heights = EVEN * np.exp(-rate * (1 / (2 * D_A**2) - 1 / (2 * D_A[0] ** 2)))
    rings = toy_rings(D_A, 1e-3, probe="x-ray 1 A", intensities=heights.tolist())
    model, _ = toy_model([Toy(D_A, EVEN)], [rings])
    return evaluate(model, np.array([[0]]), np.zeros((1, 1, 1)))


def test_a_fall_with_angle_is_a_trend_not_scatter() -> None:
    """A Debye-Waller factor of B = 0.8 Å² more than listed costs about one sigma: e^(-1/2).

    As scatter alone it would cost the sum of squares about the mean ln intensity.
    """
    curve = 1 / (2 * D_A**2)
    intensity = settings.SCATTER["x-ray"].intensity
    rate = 0.8
    scatter_alone = 0.5 * (((curve - curve.mean()) * rate / intensity) ** 2).sum()
    cost = float(falling(0.0).log_likelihood[0] - falling(rate).log_likelihood[0])
    assert scatter_alone > 2.0
    assert cost < 0.5 * scatter_alone
    assert float(falling(rate).log_likelihood[0]) > float(falling(3 * rate).log_likelihood[0])


def test_the_fitted_trend_brings_the_calculated_intensities_to_the_rings() -> None:
    """What is left after it is a small part of what it took away; none of the rate is invented."""
    curve = 1 / (2 * D_A**2)
    for rate in (0.0, 0.8):
        calculated = falling(rate).patterns[0].ln_total[0]
        slope = np.polyfit(np.sort(curve)[::-1], calculated, 1)[0]
        assert slope == pytest.approx(-rate, abs=0.1 + 0.25 * rate)


def test_required_elements_speak_against_what_is_not_listed(starter_library: Library) -> None:
    """An unlisted phase is as rarely of the required elements as one of the library at random."""
    rings = [published_rings("halite")]
    free = identify(rings, starter_library)
    bound = identify(rings, starter_library, chemistry=Chemistry.parse("Na,Cl", None, None))
    odds = [
        log(answer.hypotheses[0].probability / answer.unlisted_probability)
        for answer in (free, bound)
    ]
    assert odds[1] > odds[0] + 0.3


def test_a_set_with_a_phase_that_makes_no_ring_is_no_answer(
    searched: Searched, shelf: Selection
) -> None:
    search = searched(published_rings("periclase"), shelf, 2)
    silent = [j for j in search.judged.values() if not np.isfinite(j.log_posterior)]
    assert silent
    assert all(np.isfinite(j.log_likelihood) for j in silent)
    assert not {j.members for j in silent} & {j.members for j in search.accepted()}
