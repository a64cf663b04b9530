"""Rings of double diffraction in well-known structures."""

from __future__ import annotations

import numpy as np
from known_crystals import crystal, prototype

from phaseid.crystal.crystal import Site
from phaseid.crystal.lines import compute_lines
from phaseid.crystal.multiple_scattering import multiple_scattering_lines


def test_double_diffraction_shows_200_and_222_of_silicon_and_001_of_hexagonal_metals() -> None:
    """Hirsch et al. 1965, Electron Microscopy of Thin Crystals (from memory)."""
    silicon = prototype("diamond", ("Si",), (5.4309, 5.4309, 5.4309, 90, 90, 90))
    hkl, d_A = multiple_scattering_lines(silicon, 1.2)
    assert [tuple(h) for h in hkl.tolist()] == [(2, 0, 0), (2, 2, 2), (4, 2, 0)]
    np.testing.assert_allclose(d_A, 5.4309 / np.sqrt([4, 12, 20]), rtol=1e-12)
    titanium = prototype("hcp", ("Ti",), (2.95, 2.95, 4.686, 90, 90, 120))
    hkl, _ = multiple_scattering_lines(titanium, 1.0)
    assert (0, 0, 1) in {tuple(h) for h in hkl.tolist()}
    assert all(h == k and m % 2 for h, k, m in hkl.tolist())


def test_lattices_without_glides_have_no_lines_of_double_diffraction() -> None:
    """bcc and fcc: what the centring forbids is no lattice point and cannot appear."""
    for name, a_A in (("fcc", 4.05), ("bcc", 3.16)):
        hkl, d_A = multiple_scattering_lines(prototype(name, ("W",), (a_A, a_A, a_A, 90, 90, 90)))
        assert hkl.shape == (0, 3)
        assert d_A.shape == (0,)


def test_the_row_of_a_screw_axis_is_reached_from_beside_it() -> None:
    """In P 21 the forbidden 010 is the sum of 1 1 0 and -1 0 0, both allowed."""
    site = Site("C", "C", 0, (0.117, 0.2, 0.313), 1.0)
    hkl, _ = multiple_scattering_lines(crystal("P 1 21 1", (5, 6, 7, 90, 100, 90), [site]), 1.5)
    assert {tuple(h) for h in hkl.tolist()} == {(0, 1, 0), (0, 3, 0)}


def test_what_may_appear_coincides_with_no_line() -> None:
    """Sphalerite has every line that its lattice allows; rutile hides 100 and 300 beside others."""
    sphalerite = prototype("sphalerite", ("Zn", "S"), (5.406, 5.406, 5.406, 90, 90, 90))
    assert len(multiple_scattering_lines(sphalerite, 1.0)[0]) == 0
    rutile = prototype("rutile", ("Ti", "O"), (4.5937, 4.5937, 2.9587, 90, 90, 90))
    hkl, d_A = multiple_scattering_lines(rutile, 1.0)
    assert tuple(hkl[0]) == (1, 0, 0)
    there = compute_lines(rutile, d_min_A=1.0).d_A
    assert np.abs(np.log(d_A[:, None] / there)).min() > 2e-5
