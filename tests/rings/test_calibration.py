"""The common factor from the rings of a standard: assignment, outliers, honest uncertainty.

Lines are arithmetic on handbook cells (King, Metals Handbook, 25 °C: Au 4.0782 Å; from memory); the
readings are drawn with a known factor and known errors.
"""

from __future__ import annotations

import math

import numpy as np
import pytest

from phaseid.rings.calibration import Fit, Readings, ReferenceLines, lay, merged

A_AU = 4.0782
FCC = {  # hkl: usual relative intensity of an fcc metal's electron rings (common practice)
    (1, 1, 1): 100,
    (2, 0, 0): 45,
    (2, 2, 0): 23,
    (3, 1, 1): 23,
    (2, 2, 2): 6,
    (4, 0, 0): 3,
    (3, 3, 1): 6,
    (4, 2, 0): 6,
    (4, 2, 2): 4,
}


def _lines() -> ReferenceLines:
    x = [math.log(A_AU / math.sqrt(sum(i * i for i in hkl))) for hkl in FCC]
    return ReferenceLines(
        np.array(x), np.array(list(FCC), dtype=np.int64), np.array(list(FCC.values()), dtype=float)
    )


def _fit(
    x: np.ndarray, sigma: float, *, scale_sd: float | None = None, stated: bool = True
) -> Fit | None:
    readings = Readings(x, np.full(len(x), sigma), np.zeros((len(x), 0)), scale_sd, stated)
    return lay(readings, _lines())


@pytest.mark.parametrize("shift", [-0.6, -0.1, 0.0, 0.02, 0.4])
def test_an_injected_factor_comes_back_without_any_hint(shift: float) -> None:
    fit = _fit(_lines().x - shift, 0.001)
    assert fit is not None
    assert fit.shift == pytest.approx(shift, abs=1e-9)
    assert fit.line.tolist() == list(range(len(FCC)))
    assert fit.probability > 0.99


@pytest.mark.parametrize("absent", [0, 1, 2, 3])
def test_a_missing_ring_does_not_shift_the_assignment(absent: int) -> None:
    kept = [i for i in range(len(FCC)) if i != absent]
    fit = _fit(_lines().x[kept] + 0.13, 0.002)
    assert fit is not None
    assert fit.shift == pytest.approx(-0.13, abs=1e-9)
    assert fit.line.tolist() == kept
    assert fit.missing == ((absent,) if absent > 0 else ())


def test_an_outlier_and_a_foreign_ring_are_rejected() -> None:
    x = _lines().x.copy()
    x[3] += 0.012  # six sigma
    x = np.append(x, math.log(1.75))  # a ring of something else
    fit = _fit(x, 0.002)
    assert fit is not None
    assert np.flatnonzero(fit.line < 0).tolist() == [3, len(FCC)]
    assert fit.shift == pytest.approx(0.0, abs=1e-9)


def test_an_outlier_among_unstated_sigmas_is_rejected() -> None:
    x = _lines().x.copy()
    x[4] += 0.02
    fit = _fit(x, 0.003, stated=False)
    assert fit is not None
    assert np.flatnonzero(fit.line < 0).tolist() == [4]


def test_other_ratios_are_no_evidence() -> None:
    # hexagonal close-packed, ideal c/a: 100, 002, 101, 102, 110, 103, 200, 112 (arithmetic)
    packed = [1.0, 1.0607, 1.1319, 1.4577, 1.7321, 1.8792, 2.0, 2.031]
    own = _fit(_lines().x, 0.002)
    fit = _fit(-np.log(packed) + 0.9, 0.002)
    assert own is not None
    assert own.log_evidence > 10
    assert fit is None or fit.log_evidence < 3


def test_two_rings_alone_may_be_several_pairs() -> None:
    fit = _fit(
        np.log([1.0, 1.0 / math.sqrt(2.0)]), 0.003
    )  # 111/222 is 2, 200/220 is √2, so 220/400
    assert fit is not None
    assert fit.probability < 0.95
    assert fit.rivals


@pytest.mark.parametrize(("stated", "true_sigma"), [(True, 0.002), (False, 0.002), (False, 0.004)])
def test_the_stated_uncertainty_is_honest(stated: bool, true_sigma: float) -> None:
    """Pulls (found - injected) / sigma over 120 plates: standard deviation near one."""
    generator = np.random.default_rng(11)
    pulls = []
    for _ in range(120):
        shift = generator.normal(0.0, 0.01)
        x = _lines().x - shift + true_sigma * generator.normal(size=len(FCC))
        x = np.append(x, generator.uniform(x.min(), x.max()))
        fit = _fit(x, true_sigma if stated else 0.003, scale_sd=0.01, stated=stated)
        assert fit is not None
        pulls.append((fit.shift - shift) / fit.sigma)
    # 120 draws fix a standard deviation to 7 %; a sigma that was assumed may be somewhat cautious
    low, high = (0.85, 1.2) if stated else (0.6, 1.3)
    assert low < float(np.std(pulls)) < high
    assert abs(float(np.mean(pulls))) < 0.3


def test_sigmas_that_are_too_small_are_raised() -> None:
    generator = np.random.default_rng(5)
    x = _lines().x + 0.002 * generator.normal(size=len(FCC))
    fit = _fit(x, 0.0005, scale_sd=0.01)
    assert fit is not None
    assert fit.scatter > 1.5
    assert fit.sigma > 1.5 * 0.0005 / math.sqrt(len(fit.used))


def test_a_zero_shift_is_told_from_a_factor() -> None:
    """Angles of Cu Kα1 with an offset in 2θ: the nuisance takes it, not the wavelength."""
    wavelength, offset_deg = 1.5405929, 0.03  # Hölzer et al. 1997
    lines = _lines()
    theta = np.arcsin(wavelength / (2.0 * np.exp(lines.x)))
    read = theta + math.radians(offset_deg) / 2.0
    x = np.log(wavelength / (2.0 * np.sin(read)))
    sigma = 0.5 / np.tan(read) * math.radians(0.005)
    nuisance = (0.5 / np.tan(read) * math.radians(0.02))[:, None]
    fit = lay(Readings(x, sigma, nuisance, 5e-4, True), lines)
    assert fit is not None
    assert fit.nuisance[0] * 0.02 == pytest.approx(offset_deg, abs=0.012)
    assert abs(fit.shift) < 3 * fit.sigma
    assert fit.sigma < 3e-4


def test_lines_too_close_to_see_apart_are_one_at_their_centre() -> None:
    lines = ReferenceLines(
        np.log([2.000, 2.004, 1.5]), np.eye(3, dtype=np.int64), np.array([30.0, 90.0, 100.0])
    )
    joined = merged(lines, np.full(3, 0.008))
    assert joined.hkl.tolist() == [[0, 1, 0], [0, 0, 1]]
    assert np.exp(joined.x[0]) == pytest.approx(2.003, abs=1e-4)
    assert joined.intensity.tolist() == pytest.approx([100.0, 100.0 / 1.2])
