"""Units against CODATA, published tables and other libraries; look-alikes told apart."""

from __future__ import annotations

import doctest
import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import constants

from phaseid import units

REFERENCE = Path(__file__).parent / "reference"
WAVELENGTHS = json.loads((REFERENCE / "electron_wavelength.json").read_text())["rows"]
RULES = {
    row["rule"]: row["value"]
    for row in json.loads((REFERENCE / "rules_of_the_trade.json").read_text())["rows"]
}

spacings = st.floats(0.3, 30.0)


@pytest.mark.parametrize(
    ("ours", "codata"),
    [
        (units.PLANCK_J_S, constants.h),
        (units.ELEMENTARY_CHARGE_C, constants.e),
        (units.SPEED_OF_LIGHT_M_S, constants.c),
        (units.NEUTRON_MASS_KG, constants.m_n),
        (units.ELECTRON_REST_ENERGY_EV, constants.m_e * constants.c**2 / constants.e),
        (units.HC_EV_A, constants.h * constants.c / constants.e * 1e10),
    ],
)
def test_constants_agree_with_codata_through_scipy(ours: float, codata: float) -> None:
    # 1e-8: an older scipy carries CODATA 2018, which differs by about 1e-9
    assert ours == pytest.approx(codata, rel=1e-8)


@pytest.mark.parametrize("row", WAVELENGTHS, ids=lambda row: f"{row['kV']}kV")
def test_electron_wavelength_agrees_with_published_tables(row: dict[str, Any]) -> None:
    # glossary of transmission electron microscopy terms, Table 1: five digits
    ours = units.electron_wavelength_A(row["kV"])
    assert ours * 100 == pytest.approx(row["glossary_pm"], rel=3e-5)
    if row["williams_carter_pm"] is not None:  # Williams & Carter Table 1.2, from memory
        assert ours * 100 == pytest.approx(row["williams_carter_pm"], rel=3e-3)


@pytest.mark.parametrize("kV", [60.0, 200.0, 300.0, 1000.0])
def test_electron_wavelength_agrees_with_momentum_in_si(kV: float) -> None:
    # λ = h / sqrt(2 m e V (1 + eV/2mc²)), straight from scipy's SI constants
    eV = kV * 1e3 * constants.e
    mc2 = constants.m_e * constants.c**2
    expected_m = constants.h / np.sqrt(2 * constants.m_e * eV * (1 + eV / (2 * mc2)))
    assert units.electron_wavelength_A(kV) == pytest.approx(expected_m * 1e10, rel=1e-8)


def test_mass_factor_at_200_kV() -> None:
    # Williams & Carter Table 1.2: 1.391 at 200 kV (memory)
    assert units.relativistic_mass_factor(200.0) == pytest.approx(1.391, abs=5e-4)


def test_neutron_of_2200_m_per_s() -> None:
    # the reference of tabulated cross-sections: 25.3 meV, 1.798 Å (Sears 1992)
    assert units.neutron_wavelength_A(25.3) == pytest.approx(1.798, abs=5e-4)


def test_neutron_and_xray_conversions_agree_with_periodictable() -> None:
    from periodictable import nsf, xsf

    assert units.neutron_wavelength_A(81.8) == pytest.approx(nsf.neutron_wavelength(81.8), rel=1e-6)
    assert units.xray_wavelength_A(20.0) == pytest.approx(xsf.xray_wavelength(20.0), rel=1e-6)


@given(st.floats(1.0, 3000.0))
@settings(max_examples=50, deadline=None, database=None)
def test_voltage_and_wavelength_undo_each_other(kV: float) -> None:
    assert units.electron_voltage_kV(units.electron_wavelength_A(kV)) == pytest.approx(
        kV, rel=1e-12
    )


@given(spacings, st.floats(0.01, 2.5))
@settings(max_examples=100, deadline=None, database=None)
def test_reciprocal_quantities_keep_their_two_pi_apart(d: float, wavelength: float) -> None:
    g, q, s = units.g_from_d(d), units.q_from_d(d), units.s_from_d(d)
    assert q / g == pytest.approx(2 * np.pi)
    assert s / g == pytest.approx(0.5)
    assert units.d_from_g(g) == pytest.approx(d)
    assert units.d_from_q(q) == pytest.approx(d)
    two_theta = float(units.two_theta_from_d(d, wavelength))
    if wavelength > 2 * d:
        assert np.isnan(two_theta)
    else:
        assert np.sin(np.radians(two_theta / 2)) / wavelength == pytest.approx(s)
        assert float(units.d_from_two_theta(two_theta, wavelength)) == pytest.approx(d)


def test_bragg_angles_of_silicon_standard() -> None:
    # SRM 640e certificate: a = 5.431179 Å, λ = 1.5405929 Å. Angles of 111, 220, 422 from the
    # certificate's table of 640c-e, 28.441, 47.300, 88.025° (memory)
    d = 5.431179 / np.sqrt([3.0, 8.0, 24.0])
    assert units.two_theta_from_d(d, 1.5405929) == pytest.approx([28.441, 47.300, 88.025], abs=2e-3)


@given(spacings, st.floats(0.02, 0.5))
@settings(max_examples=50, deadline=None, database=None)
def test_slope_of_the_angle_is_its_derivative(d: float, wavelength: float) -> None:
    angle, step = float(units.two_theta_from_d(d, wavelength)), 1e-5
    above = float(units.d_from_two_theta(angle + step, wavelength))
    below = float(units.d_from_two_theta(angle - step, wavelength))
    slope = float(units.two_theta_slope_A(d, wavelength))
    assert slope == pytest.approx((below - above) / (2 * step), rel=1e-3)


def test_camera_constant_at_200_kV_and_one_metre() -> None:
    constant = units.camera_constant_A_mm(units.electron_wavelength_A(200.0), 1000.0)
    assert constant == pytest.approx(25.079, abs=5e-4)
    assert units.d_from_radius(units.radius_from_d(2.338, constant), constant) == 2.338


@pytest.mark.parametrize(
    ("lattice", "sums"),
    [
        ("fcc", [3, 4, 8, 11, 12, 16, 19, 20, 24]),
        ("bcc", [2, 4, 6, 8, 10, 12, 14, 16, 18]),
        ("diamond", [3, 8, 11, 16, 19, 24, 27, 32]),
    ],
)
def test_ring_radii_stand_in_the_ratios_of_the_lattice(lattice: str, sums: list[int]) -> None:
    # arithmetic: R ∝ sqrt(h² + k² + l²)
    d = 4.05 / np.sqrt(np.array(sums, dtype=float))
    radius = units.radius_from_d(d, 25.1)
    assert radius / radius[0] == pytest.approx(RULES[f"{lattice} ring radii ratio"], abs=6e-5)


def test_worked_examples_in_the_docstrings() -> None:
    failed, tried = doctest.testmod(units)
    assert (failed, tried > 0) == (0, True)
