"""Scattering amplitudes against tabulated values of independent tables."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest

from phaseid.crystal.scattering import (
    CU_KA1_EV,
    amplitudes,
    dispersion,
    element_of,
    neutron_length_fm,
)
from phaseid.errors import InputError

REFERENCE = Path(__file__).parent.parent / "reference"


def rows(name: str) -> list[dict]:  # type: ignore[type-arg]
    return list(json.loads((REFERENCE / name).read_text(encoding="utf-8"))["rows"])


@pytest.mark.parametrize("row", rows("form_factors.json"), ids=lambda row: row["element"])
def test_xray_and_electron_amplitudes_agree_with_other_tables(row: dict) -> None:  # type: ignore[type-arg]
    """X-rays: Waasmaier & Kirfel 1995, an independent fit; electrons: Mott-Bethe from that fit.

    Tolerances as measured between the tables: 0.3 % (X), 1.0 % for s ≥ 0.15 and 1.5 % below (e).
    """
    s = np.array(row["s"])
    found = amplitudes([row["element"]], s**2)
    low = s <= 0.6
    np.testing.assert_allclose(found.xray[low, 0], np.array(row["fX_wk"])[low], rtol=3e-3)
    np.testing.assert_allclose(found.xray[:, 0], row["fX_it"], atol=6e-5)
    np.testing.assert_allclose(found.electron[:, 0], row["fe_A"], atol=6e-5)
    bethe = np.array(row["fe_A_mott_bethe"], dtype=float)
    middle = (s >= 0.15) & (s <= 1.0)
    np.testing.assert_allclose(found.electron[middle, 0], bethe[middle], rtol=0.01)
    outer = (s > 0) & (s < 0.15)
    np.testing.assert_allclose(found.electron[outer, 0], bethe[outer], rtol=0.015)


def test_every_tabulated_atom_obeys_the_mott_bethe_relation_within_three_percent() -> None:
    """fe = 0.0239337 (Z - fX) / s² (Mott & Bethe 1930) ties the two tables for all 98 elements."""
    import gemmi

    kinds = [gemmi.Element(z).name for z in range(1, 99)]
    s = np.linspace(0.2, 1.0, 9)
    found = amplitudes(kinds, s**2)
    bethe = 0.0239337 * (np.arange(1, 99) - found.xray) / (s**2)[:, None]
    deviation = np.abs(found.electron / bethe - 1)
    assert np.median(deviation) < 0.005
    assert np.percentile(deviation, 99) < 0.03


def test_forward_electron_amplitudes_agree_with_doyle_and_turner() -> None:
    """Doyle & Turner 1968, Acta Cryst. A24, 390 (from memory); tolerance 0.1 %."""
    reference = json.loads((REFERENCE / "form_factors.json").read_text(encoding="utf-8"))
    table = reference["doyle_turner_1968_fe0_A_memory"]
    found = amplitudes(list(table), np.zeros(1)).electron[0]
    np.testing.assert_allclose(found, list(table.values()), rtol=1e-3)


def test_forward_xray_amplitude_is_the_number_of_electrons() -> None:
    """By definition; Int. Tables C's fits miss it by up to 0.1 electron for heavy atoms."""
    kinds = ["H", "C", "O", "Si", "Fe", "Cu", "Ag", "W", "Au", "Pb", "U"]
    found = amplitudes(kinds, np.zeros(1)).xray[0]
    np.testing.assert_allclose(found, [1, 6, 8, 14, 26, 29, 47, 74, 79, 82, 92], atol=0.1)


@pytest.mark.parametrize("row", rows("neutron_lengths.json"), ids=lambda row: row["element"])
def test_neutron_lengths_are_those_of_sears_and_near_newer_ones(row: dict) -> None:  # type: ignore[type-arg]
    """Sears 1992; newer evaluations differ by at most 0.2 fm for these (Au 0.27)."""
    found = neutron_length_fm(row["element"])
    assert found == pytest.approx(row["sears_fm"], abs=1e-4)
    assert found == pytest.approx(row["periodictable_fm"], abs=0.28)


@pytest.mark.parametrize(
    ("kind", "length_fm"),
    # Sears 1992, Neutron News 3(3), 26 (from memory); tolerance 3 %
    [("D", 6.671), ("T", 4.792), ("7Li", -2.22), ("11B", 6.65), ("58Ni", 14.4), ("62Ni", -8.7)],
)
def test_isotopes_have_lengths_of_their_own(kind: str, length_fm: float) -> None:
    assert neutron_length_fm(kind) == pytest.approx(length_fm, rel=0.03)


def test_isotopes_scatter_xrays_like_their_element() -> None:
    s2 = np.array([0.0, 0.1])
    pairs = amplitudes(["D", "H", "T", "11B", "B"], s2)
    assert np.array_equal(pairs.xray[:, 0], pairs.xray[:, 1])
    assert np.array_equal(pairs.xray[:, 2], pairs.xray[:, 1])
    assert np.array_equal(pairs.electron[:, 3], pairs.electron[:, 4])


def test_a_missing_neutron_length_is_said_not_guessed() -> None:
    assert neutron_length_fm("At") is None
    assert amplitudes(["O", "At"], np.zeros(1)).neutron is None
    assert amplitudes(["O"], np.zeros(1)).neutron is not None


@pytest.mark.parametrize("row", rows("dispersion_cu_ka1.json"), ids=lambda row: row["element"])
def test_dispersion_at_copper_k_alpha_agrees_with_other_tables(row: dict) -> None:  # type: ignore[type-arg]
    """Chantler 1995 and Henke 1993; the tables differ among themselves by 0.2 electron, Au 0.6."""
    real, imaginary = dispersion(row["element"], CU_KA1_EV)
    tolerance = 0.6 if row["element"] == "Au" else 0.2
    for table in ("chantler", "henke"):
        assert real == pytest.approx(row[table][0], abs=tolerance)
        assert imaginary == pytest.approx(row[table][1], abs=tolerance)


def test_copper_k_alpha_energy() -> None:
    """8047.82 eV: hc / 1.5405929 Å (Int. Tables C Table 4.2.2.1)."""
    assert pytest.approx(8047.8236, abs=0.001) == CU_KA1_EV


@pytest.mark.parametrize("kind", ["X", "", "Zz", "fe", "Fe3+"])
def test_what_is_no_element_is_refused(kind: str) -> None:
    with pytest.raises(InputError, match="not an element"):
        element_of(kind)


def test_elements_beyond_the_tables_are_refused() -> None:
    with pytest.raises(InputError, match="Es"):
        amplitudes(["Es"], np.zeros(1))


@pytest.mark.parametrize("energy_eV", [0.0, -8000.0, float("inf"), float("nan")])
def test_the_photon_energy_must_be_positive(energy_eV: float) -> None:
    with pytest.raises(InputError, match="photon energy"):
        dispersion("Fe", energy_eV)
