"""What one atom scatters: X-rays, electrons, neutrons.

- X-rays, electrons (unit): International Tables C (1992) Table 6.1.1.4, four Gaussians and a
  constant, s = sinθ/λ up to 2 Å⁻¹, Z 1-98; dispersion f′, f″ after Cromer & Liberman (1981, Acta
  Cryst. A37, 267), Z 3-92. Both through gemmi.
- Electrons, Å: International Tables C Table 4.3.2.2 (Peng, Ren, Dudarev & Whelan 1996, Acta Cryst.
  A52, 257), five Gaussians, s up to 2 Å⁻¹, Z 1-98, without the relativistic mass factor. Through
  gemmi.
- Neutrons, fm: bound coherent lengths of Sears (1992), and isotopes; the real part only (the
  imaginary part of strong absorbers such as Gd, Sm, Cd depends on the wavelength). The table that
  comes with phaseid says the source of each value.

Atoms are taken as neutral: tables of ions exist for X-rays only, and the formal charge that a
source states (Si⁴⁺ in quartz) is seldom the charge that scatters.
"""

from __future__ import annotations

import csv
import re
from collections.abc import Sequence
from dataclasses import dataclass
from functools import cache, lru_cache
from importlib import resources

import gemmi
import numpy as np
from numpy.typing import NDArray

from phaseid.errors import InputError
from phaseid.units import HC_EV_A

Floats = NDArray[np.float64]

CU_KA1_A = 1.5405929  # Int. Tables C Table 4.2.2.1 (Hölzer et al. 1997)
CU_KA1_EV = HC_EV_A / CU_KA1_A

_KIND = re.compile(r"\d*([A-Z][a-z]?)")


@dataclass(frozen=True, slots=True, eq=False)
class Amplitudes:
    """Amplitudes of e kinds of atom at n values of s, each (n, e) float64; neutrons (e,).

    `xray` in electrons without dispersion, `electron` in Å, `neutron` in fm. `neutron` is None if
    no length has been measured for one of the atoms.
    """

    xray: Floats
    electron: Floats
    neutron: Floats | None


def amplitudes(kinds: Sequence[str], s2: Floats) -> Amplitudes:
    """Return what atoms of `kinds` scatter at s² = (sinθ/λ)² in Å⁻², shape (n,).

    A kind is an element symbol, "D", "T", or an isotope such as "11B". Raises InputError for a
    symbol that no table holds.
    """
    table = _tables(tuple(kinds))
    terms = np.exp(table.widths * -s2)
    terms *= table.heights
    return Amplitudes(
        xray=(np.add.reduce(terms[:_XRAY_TERMS]) + table.constants).T,
        electron=np.add.reduce(terms[_XRAY_TERMS:]).T,
        neutron=table.lengths,
    )


@lru_cache(maxsize=4096)
def dispersion(kind: str, energy_eV: float) -> tuple[float, float]:
    """Return f′ and f″ in electrons at a photon energy; zero for H, He and beyond uranium."""
    if not 0 < energy_eV < float("inf"):
        raise InputError(f"the photon energy must be a positive number of eV, not {energy_eV:g}")
    real, imaginary = gemmi.cromer_liberman(element_of(kind).atomic_number, energy_eV)
    return float(real), float(imaginary)


def neutron_length_fm(kind: str) -> float | None:
    """Return the bound coherent scattering length in fm, None where none has been measured."""
    return _neutron_lengths().get("3H" if kind == "T" else kind)


@cache
def element_of(kind: str) -> gemmi.Element:
    """Return the element of a kind of atom: "D" and "2H" are hydrogen, "11B" is boron."""
    match = _KIND.fullmatch({"D": "H", "T": "H"}.get(kind, kind))
    element = gemmi.Element(match.group(1) if match else "")
    if not element.atomic_number:
        raise InputError(
            f"'{kind}' is not an element",
            remedy='Use a symbol such as "Fe", "D", or an isotope such as "11B"',
        )
    return element


_XRAY_TERMS, _TERMS = 4, 9


@dataclass(frozen=True, slots=True, eq=False)
class _Tables:
    """Of e kinds of atom: 4 X-ray and 5 electron Gaussians, (9, e, 1), and the X-ray constant."""

    heights: Floats
    widths: Floats
    constants: Floats  # (e, 1)
    lengths: Floats | None


@lru_cache(maxsize=4096)
def _tables(kinds: tuple[str, ...]) -> _Tables:
    lengths = [neutron_length_fm(kind) for kind in kinds]
    known = [length for length in lengths if length is not None]
    neutron = np.array(known) if len(known) == len(lengths) else None
    rows = np.array([_gaussians(kind) for kind in kinds]).T[:, :, None].copy()
    return _Tables(rows[:_TERMS], rows[_TERMS : 2 * _TERMS], rows[2 * _TERMS], neutron)


@cache
def _gaussians(kind: str) -> tuple[float, ...]:
    """Heights of 4 X-ray and 5 electron Gaussians, their 9 widths, the X-ray constant."""
    element = element_of(kind)
    xray, electron = element.it92, element.c4322
    if xray is None or electron is None:
        raise InputError(
            f"no scattering factors are tabulated for {kind}",
            remedy="Int. Tables C ends at californium (Z = 98)",
        )
    return (*xray.a, *electron.a, *xray.b, *electron.b, xray.c)


@cache
def _neutron_lengths() -> dict[str, float]:
    table = resources.files("phaseid.crystal") / "tables" / "neutron_lengths.csv"
    lines = table.read_text(encoding="utf-8").splitlines()
    rows = csv.DictReader(line for line in lines if not line.startswith("#"))
    return {row["nuclide"]: float(row["b_fm"]) for row in rows}
