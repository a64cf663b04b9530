"""The same rings stated in any column are the same rings."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from phaseid.probes import parse_probe
from phaseid.rings import COLUMNS, rings_from_text, rings_from_values
from phaseid.units import electron_wavelength_A

CONSTANT = {"mm": 25.1, "px": 9800.0}

spacings = st.lists(st.floats(0.9, 20.0), min_size=1, max_size=8)
relative = st.floats(1e-5, 0.02)


def _state(column: str, d: np.ndarray, wavelength: float) -> tuple[np.ndarray, np.ndarray]:
    """Position and |d position/d ln d| of spacings, each written out on the spot."""
    if column == "two_theta_deg":
        theta = np.arcsin(wavelength / (2 * d))
        return np.degrees(2 * theta), np.degrees(2 * np.tan(theta))
    position = {
        "d_A": d,
        "d_nm": d / 10,
        "g_1/nm": 10 / d,
        "g_1/A": 1 / d,
        "q_1/A": 2 * np.pi / d,
        "q_1/nm": 20 * np.pi / d,
        "radius_mm": CONSTANT["mm"] / d,
        "diameter_mm": 2 * CONSTANT["mm"] / d,
        "radius_px": CONSTANT["px"] / d,
    }[column]
    return position, position


def test_the_table_below_covers_every_column() -> None:
    for column in COLUMNS:
        _state(column, np.array([2.0]), 1.54)


@pytest.mark.parametrize("column", COLUMNS)
@given(d=spacings, sigma=relative)
@settings(max_examples=25, deadline=None, database=None)
def test_equal_content_in_any_column_gives_equal_spacings_and_sigmas(
    column: str, d: list[float], sigma: float
) -> None:
    probe = parse_probe("x-ray Cu Ka1")
    spacing = np.array(d)
    position, slope = _state(column, spacing, probe.wavelength_A)
    unit = COLUMNS[column].plate_unit
    rings = rings_from_values(
        position.tolist(),
        column=column,
        probe=probe,
        sigma=(slope * sigma).tolist(),
        camera_constant=f"{CONSTANT[unit]!r} A {unit}" if unit else None,
    )
    assert rings.d_A == pytest.approx(spacing, rel=1e-13)
    assert rings.sigma_A == pytest.approx(sigma * spacing, rel=1e-11)
    assert rings.position == pytest.approx(position, rel=1e-15)


@pytest.mark.parametrize("column", [name for name in COLUMNS if name != "two_theta_deg"])
@given(d=spacings)
@settings(max_examples=15, deadline=None, database=None)
def test_default_sigmas_do_not_depend_on_the_column(column: str, d: list[float]) -> None:
    spacing = np.array(d)
    position, _ = _state(column, spacing, 0.025)
    unit = COLUMNS[column].plate_unit
    rings = rings_from_values(
        [f"{value:.15e}" for value in position],
        column=column,
        probe="electron 200 kV",
        camera_constant=f"{CONSTANT[unit]!r} A {unit}" if unit else None,
    )
    assert rings.sigma_A == pytest.approx(0.003 * spacing, rel=1e-6)


@given(d=spacings, sigma=relative)
@settings(max_examples=25, deadline=None, database=None)
def test_typed_numbers_and_a_file_say_the_same(d: list[float], sigma: float) -> None:
    rows = "\n".join(f"{value!r},{value * sigma!r}" for value in d)
    filed = rings_from_text(f"# probe: electron 200 kV\nd_A,sigma\n{rows}\n")
    typed = rings_from_values(d, probe="electron 200 kV", sigma=[value * sigma for value in d])
    assert filed.d_A.tolist() == typed.d_A.tolist()
    assert filed.sigma_A.tolist() == typed.sigma_A.tolist()


def test_aluminium_on_a_plate() -> None:
    # a = 4.0496 Å (CRC Handbook, from memory), λL of 200 kV and 1 m; radii in the fcc ratios
    constant = electron_wavelength_A(200.0) * 1000.0
    first = constant / (4.0496 / 3**0.5)
    radii = first * np.array([1.0, 1.1547, 1.6330, 1.9149, 2.0])  # arithmetic
    rings = rings_from_values(
        radii.tolist(),
        column="radius_mm",
        probe="electron 200 kV",
        camera_constant=f"{constant} A mm",
    )
    # NBS Circular 539 vol 1 p 11 (lines from memory)
    assert rings.d_A == pytest.approx([2.338, 2.024, 1.431, 1.221, 1.169], rel=1e-3)


def test_published_angles_of_silicon() -> None:
    # SRM 640e certificate, Cu Kα1: 111, 220, 311 at 28.441, 47.300, 56.120° (angles from memory)
    rings = rings_from_values(
        ["28.441", "47.300", "56.120"], column="two_theta_deg", probe="x-ray Cu Ka1"
    )
    assert rings.d_A * np.sqrt([3.0, 8.0, 11.0]) == pytest.approx([5.4312] * 3, rel=5e-5)
