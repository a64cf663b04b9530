"""What each probe shows of a line, against first principles, closed forms and another library."""

from __future__ import annotations

import numpy as np
import pytest
from scipy import special

from phaseid.crystal.lines import Lines
from phaseid.probes import Probe, blackman_ratio, parse_probe, two_beam_weights
from phaseid.units import d_from_two_theta, two_theta_from_d

ELECTRON = parse_probe("electron 200 kV")
COPPER = parse_probe("x-ray Cu Ka1")


def _lines() -> Lines:
    d = np.array([2.338, 2.024, 1.431, 0.7])
    ones = np.ones(4)
    return Lines(
        d_A=d,
        hkl=np.array([[1, 1, 1], [2, 0, 0], [2, 2, 0], [4, 4, 0]], dtype=np.int32),
        multiplicity=np.array([8, 6, 12, 12], dtype=np.int32),
        f2_xray=900 * ones,
        f2_electron=50 * ones,
        f2_neutron=190 * ones,
        volume_A3=66.4,
        complete_to_A=0.7,
    )


def test_share_of_crystallites_that_reflect_falls_as_one_over_g() -> None:
    """Vainshtein's d for the whole ring, by counting random crystallites near a flat Ewald sphere.

    The ring's circumference grows as 1/d, hence d² for its mean.
    """
    rng = np.random.default_rng(20)
    height = rng.uniform(-1.0, 1.0, 400_000)  # cosine of a random direction to the beam
    slab = 0.01  # half thickness of the reflecting range in reciprocal space, 1/Å
    g = np.array([0.3, 0.9])
    counted = np.array([(np.abs(height) * one < slab).sum() for one in g], dtype=float)
    weight = ELECTRON.weights(1 / g, [1, 1], [1.0, 1.0], quantity="sum")
    ratio, sigma = counted[0] / counted[1], counted[0] / counted[1] * np.sqrt((1 / counted).sum())
    assert weight[0] / weight[1] == pytest.approx(ratio, abs=4 * sigma)
    mean = ELECTRON.weights(1 / g, [1, 1], [1.0, 1.0])
    assert mean / weight == pytest.approx(1 / g, rel=1e-12)


@pytest.mark.parametrize(
    ("two_theta", "factor"),
    # (1 + cos²2θ)/(sin²θ cosθ) at angles where it closes: 30°, 45°, 60° of θ; Cullity, Elements of
    # X-ray Diffraction, appendix on Lorentz-polarisation factors, prints 5.774, 2.828, 3.333
    [(60.0, 1.25 / (0.25 * 0.75**0.5)), (90.0, 2 * 2**0.5), (120.0, 1.25 / (0.75 * 0.5))],
)
@pytest.mark.parametrize("geometry", ["bragg-brentano", "debye-scherrer"])
def test_lorentz_polarisation_of_a_diffractometer(
    two_theta: float, factor: float, geometry: str
) -> None:
    probe = parse_probe(f"x-ray Cu Ka1 {geometry}")
    d = d_from_two_theta([two_theta, 90.0], probe.wavelength_A)
    weight = probe.weights(d, 1, 1.0)
    assert weight[0] / weight[1] == pytest.approx(factor / (2 * 2**0.5), rel=1e-12)


@pytest.mark.parametrize("kind", ["x-ray", "neutron"])
def test_angle_factors_agree_with_pymatgen(kind: str) -> None:
    """The same lines at two wavelengths: |F|² and multiplicity cancel, the angle factors stay."""
    from pymatgen.analysis.diffraction.neutron import NDCalculator
    from pymatgen.analysis.diffraction.xrd import XRDCalculator
    from pymatgen.core import Lattice, Structure

    structure = Structure(Lattice.cubic(3.0), ["Fe"], [[0, 0, 0]])
    calculator = XRDCalculator if kind == "x-ray" else NDCalculator
    ours, theirs = [], []
    for wavelength in (1.2, 2.1):
        pattern = calculator(wavelength=wavelength).get_pattern(
            structure, scaled=False, two_theta_range=(0, 170)
        )
        d = np.array(pattern.d_hkls[:5])
        theirs.append(np.array(pattern.y[:5]))
        ours.append(parse_probe(f"{kind} {wavelength} A").weights(d, 1, 1.0))
    ratio = (ours[0] / ours[1]) / (theirs[0] / theirs[1])
    assert ratio / ratio[0] == pytest.approx(np.ones(5), rel=1e-6)


def test_short_wavelengths_make_plate_rings() -> None:
    # at small angle sin²θ ∝ 1/d² and every polarisation is lost: X-rays and neutrons become d²
    d = np.array([1.0, 2.0, 5.0])
    rings = ELECTRON.weights(d, 1, 1.0)
    for text in ("x-ray 0.06 A", "x-ray 0.06 A transmission", "neutron 0.1 A"):
        weight = parse_probe(text).weights(d, 1, 1.0)
        assert weight / weight[0] == pytest.approx(rings / rings[0], rel=1e-2), text


def test_monochromator_polarisation_is_the_published_form() -> None:
    # (1 + cos²2θ_M cos²2θ)/(1 + cos²2θ_M): Azaroff 1955, Acta Cryst. 8, 701
    probe = parse_probe("x-ray Cu Ka monochromator 26.6 deg")
    two_theta = np.array([20.0, 60.0, 120.0])
    mono = np.cos(np.radians(26.6)) ** 2
    expected = (1 + mono * np.cos(np.radians(two_theta)) ** 2) / (1 + mono)
    assert probe.polarisation_factor(two_theta) == pytest.approx(expected, rel=1e-12)


def test_polarised_beams() -> None:
    # I ∝ p + (1 − p) cos²2θ; p = 1 loses nothing, p = 1/2 is the unpolarised beam
    two_theta = np.array([10.0, 45.0, 90.0])
    full = parse_probe("x-ray 20 keV polarisation 1").polarisation_factor(two_theta)
    assert full == pytest.approx(np.ones(3))
    part = parse_probe("x-ray 20 keV polarisation 95 %").polarisation_factor(two_theta)
    assert part == pytest.approx(0.95 + 0.05 * np.cos(np.radians(two_theta)) ** 2)
    plain = parse_probe("x-ray 20 keV").polarisation_factor(two_theta)
    assert plain == pytest.approx((1 + np.cos(np.radians(two_theta)) ** 2) / 2)


@pytest.mark.parametrize(
    "text", ["x-ray Cu Ka debye-scherrer", "neutron 1.54 A", "x-ray 1 A transmission"]
)
def test_whole_ring_is_its_mean_times_its_circumference(text: str) -> None:
    probe = parse_probe(text)
    d = np.array([1.2, 2.0, 4.0])
    two_theta = np.radians(two_theta_from_d(d, probe.wavelength_A))
    length = np.tan(two_theta) if probe.geometry == "transmission" else np.sin(two_theta)
    ratio = probe.weights(d, 1, 1.0, quantity="sum") / (probe.weights(d, 1, 1.0) * length)
    assert ratio == pytest.approx(np.full(3, ratio[0]), rel=1e-12)


def test_time_of_flight_goes_with_the_fourth_power_of_d() -> None:
    # Buras & Gerward 1975, Acta Cryst. A31, 372
    weight = parse_probe("neutron tof").weights([1.0, 2.0], 1, 1.0)
    assert weight[1] / weight[0] == pytest.approx(16.0)


def test_lines_out_of_reach_weigh_nothing() -> None:
    limit = COPPER.wavelength_A / 2
    weight = COPPER.weights([limit * 0.999, limit, limit * 1.0001, 2.0], 8, 100.0)
    assert weight[0] == 0
    assert np.isfinite(weight).all()
    assert (weight[1:] > 0).all()
    plate = parse_probe("x-ray Cu Ka1 transmission").weights([1.0, 1.2], 8, 100.0)
    assert plate[0] == 0  # 2θ = 100.8° misses a plate
    assert plate[1] > 0
    assert COPPER.d_min_A == limit


def test_weights_take_any_shape_and_scale_with_m_and_f2() -> None:
    d = np.array([[2.0, 1.5], [1.2, 0.9]])
    weight = COPPER.weights(d, 6, 10.0)
    assert weight.shape == (2, 2)
    assert COPPER.weights(d, 12, 30.0) == pytest.approx(6 * weight)


@pytest.mark.parametrize("probe", [ELECTRON, COPPER, parse_probe("neutron 1.54 A")])
def test_intensity_is_relative_to_the_strongest(probe: Probe) -> None:
    lines = _lines()
    intensity = probe.intensity(lines)
    assert intensity.max() == pytest.approx(100.0)
    weights = probe.weights(lines.d_A, lines.multiplicity, probe.f2(lines))
    assert intensity == pytest.approx(100 * weights / weights.max())


def test_each_probe_takes_its_own_structure_factors() -> None:
    lines = _lines()
    assert ELECTRON.f2(lines) is lines.f2_electron
    assert COPPER.f2(lines) is lines.f2_xray
    assert parse_probe("neutron 1 A").f2(lines) is lines.f2_neutron


def test_a_probe_that_reaches_no_line_shows_none() -> None:
    assert parse_probe("neutron 15 A").intensity(_lines()) == pytest.approx(np.zeros(4))


def test_energy_is_given_for_xrays_only() -> None:
    # Cu Kα1: 8047.823 eV (Deslattes et al. 2003)
    assert COPPER.xray_energy_eV == pytest.approx(8047.823, abs=0.01)
    assert ELECTRON.xray_energy_eV is None


def test_blackman_ratio_against_scipy() -> None:
    A = np.array([0.01, 0.3, 1.0, 3.0, 10.0, 60.0, 199.0])
    integral, _ = special.itj0y0(2 * A)  # ∫₀^2A J₀
    assert blackman_ratio(A) == pytest.approx(integral / (2 * A), rel=1e-8)


def test_blackman_limits() -> None:
    # thin: kinematic; thick: 1/(2A), intensities ∝ |F| (Blackman 1939)
    assert blackman_ratio([0.0, 1e-4]) == pytest.approx([1.0, 1.0], abs=1e-6)
    assert blackman_ratio([[150.0], [1e4]]) == pytest.approx(
        1 / np.array([[300.0], [2e4]]), rel=0.05
    )


def test_thick_crystallites_level_the_strong_and_the_weak() -> None:
    d, m, f2 = np.array([2.0, 2.0]), np.array([8, 8]), np.array([400.0, 4.0])
    thin = two_beam_weights(ELECTRON, d, m, f2, volume_A3=66.0, thickness_A=1.0)
    thick = two_beam_weights(ELECTRON, d, m, f2, volume_A3=66.0, thickness_A=20_000.0)
    assert thin[0] / thin[1] == pytest.approx(100.0, rel=1e-3)
    assert thick[0] / thick[1] == pytest.approx(10.0, rel=0.15)


def test_two_beam_parameter_is_pi_t_over_extinction_distance() -> None:
    # Al 111 at 100 kV: ξ = 556 Å (Hirsch et al. 1965, from memory), V = 66.4 Å³
    probe = parse_probe("electron 100 kV")
    amplitude = np.pi * 66.4 / (556.0 * probe.wavelength_A * 1.1957)
    ratio = two_beam_weights(
        probe, [2.338], [8], [amplitude**2], volume_A3=66.4, thickness_A=556.0
    ) / probe.weights([2.338], [8], [amplitude**2])
    assert ratio == pytest.approx(blackman_ratio([np.pi]), rel=1e-3)
