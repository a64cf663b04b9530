"""How lines come to lie on rings: crowds of them, close pairs, long lists, what shows and what not.

Made-up phases; what is expected follows from their construction.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from phaseid.matching import laying, settings
from phaseid.matching.likelihood import evaluate
from phaseid.matching.lineset import LINES_LEAST
from phaseid.matching.model import Fit, Model
from phaseid.matching.patterns import prepare
from phaseid.matching.texture import texture_prior
from tests.matching.toys import Toy, toy_model, toy_rings


def fit_of(model: Model, *members: int) -> Fit:
    start = np.zeros((1, len(members), len(model.patterns)))
    return evaluate(model, np.array([members], dtype=np.int64), start)


@pytest.mark.parametrize("shift", [0.0055, -0.0055])
@pytest.mark.parametrize("weaker", [(60, 50), (50, 60)])
def test_two_lines_nearest_to_one_ring_make_it_and_the_ring_beside_it(
    shift: float, weaker: tuple[float, float]
) -> None:
    """Rings read too long or too short bring both lines of a close pair nearest to one of them."""
    toy = Toy((3.0, 2.2, 1.700, 1.690), (100, 80, *weaker))
    spacings = (3.0, 2.2, 1.700 + shift, 1.690 + shift)
    rings = toy_rings(spacings, 0.004, probe="x-ray 1 A", intensities=[100, 80, *weaker])
    model, _ = toy_model([toy], [rings])
    fit = fit_of(model, 0).patterns[0]
    assert fit.claimed.all()
    assert sorted(fit.line_ring[0, 0][:4].tolist()) == [0, 1, 2, 3]


def test_a_phase_of_many_lines_explains_as_long_a_list() -> None:
    count = LINES_LEAST + 60
    spacings = np.geomspace(6.0, 0.9, count).tolist()
    intensities = np.linspace(100, 40, count).tolist()
    toy = Toy(spacings, intensities)
    rings = toy_rings(spacings, 2e-4, probe="x-ray 1 A", intensities=intensities)
    model, _ = toy_model([toy], [rings])
    assert fit_of(model, 0).patterns[0].claimed.all()


@pytest.mark.parametrize(("own", "shows"), [((1.9,), False), ((1.9, 1.5), True)])
def test_a_further_phase_shows_by_two_rings_of_its_own(own: tuple[float, ...], shows: bool) -> None:
    host = Toy((3.0, 2.2, 1.7), (100, 80, 60))
    guest = Toy((3.0, *own), (100, *([60] * len(own))), ("O",))
    spacings = (3.0, 2.2, 1.7, *own)
    rings = toy_rings(
        spacings, 0.004, probe="x-ray 1 A", intensities=[100, 80, 60, *([30] * len(own))]
    )
    model, _ = toy_model([host, guest], [rings])
    assert bool(fit_of(model, 0, 1).shows[0]) is shows
    assert bool(fit_of(model, 0).shows[0])


@pytest.mark.parametrize(("beside", "helps"), [((1.706, 1.694), True), ((), False)])
def test_a_ring_amid_a_crowd_of_lines_may_stray_further(
    monkeypatch: pytest.MonkeyPatch, beside: tuple[float, ...], helps: bool
) -> None:
    toy = Toy((3.0, 2.2, 1.7, *beside), (100, 80, 60, *([50] * len(beside))))
    strayed = (3.0, 2.2, 1.7 * np.exp(0.006))
    rings = toy_rings(strayed, 0.001, probe="x-ray 1 A", scale=1e-4, intensities=[100, 80, 60])
    model, _ = toy_model([toy], [rings])
    allowed = fit_of(model, 0).log_likelihood[0]
    monkeypatch.setattr(laying, "CROWDING", 0.0)
    refused = fit_of(model, 0).log_likelihood[0]
    assert (allowed > refused + 0.2) if helps else (allowed == refused)


def test_a_measured_detection_limit_is_believed_before_the_weakest_ring() -> None:
    rings = toy_rings((3.0, 2.2, 1.7), 0.004, intensities=[100, 80, 20])
    told, measured = prepare(rings), prepare(replace(rings, detection_limit=3.0))
    assert np.exp(told.ln_limit) == pytest.approx(0.2 * np.exp(-0.25))
    assert np.exp(measured.ln_limit) == pytest.approx(0.03)
    assert measured.limit_sd < told.limit_sd


def test_arcs_make_a_fibre_axis_likelier() -> None:
    rings = toy_rings((3.0, 2.2, 1.7), 0.004, intensities=[100, 80, 20])
    prior = [
        texture_prior([prepare(replace(rings, arcs=arcs))])
        for arcs in (None, np.array([0.05, 0.1, np.nan]), np.array([0.6, 0.5, 0.7]))
    ]
    assert prior == [settings.TEXTURE_PRIOR, settings.TEXTURE_PRIOR, settings.ARCED_TEXTURE_PRIOR]
