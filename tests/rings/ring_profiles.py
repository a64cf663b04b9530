"""Profiles drawn from the cells of certified standards. Shares no code with the finder."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

A_LAB6_A = 4.156826  # NIST SRM 660c certificate, 22.5 °C
A_SI_A = 5.431144  # NIST SRM 640f certificate, 22.5 °C; from memory
CU_KA1_A, CU_KA2_A = 1.5405929, 1.5444274  # International Tables C, 4.2.2.1
PRIMITIVE = (1, 2, 3, 4, 5, 6, 8, 9, 10, 11, 12, 13, 14)  # h² + k² + l²
DIAMOND = (3, 8, 11, 16, 19, 24, 27, 32, 35)


def angle(total: int, wavelength_A: float, cell_A: float = A_LAB6_A) -> float:
    """Two theta (degrees) of a line of a cubic cell."""
    return float(2 * np.degrees(np.arcsin(wavelength_A * np.sqrt(total) / 2 / cell_A)))


@dataclass(frozen=True, eq=False)
class Scan:
    """Angles and counts (n,); true angles of the Kα1 peaks and how many sigmas each stands out."""

    two_theta_deg: NDArray[np.float64]
    counts: NDArray[np.float64]
    peaks: tuple[float, ...]
    clear: tuple[float, ...]
    doublet: bool


def random_scan(seed: int) -> Scan:
    """LaB6, silicon or both, with or without Kα2, on a background of many kinds."""
    rng = np.random.default_rng(seed + 5000)
    x = np.arange(18.0, 100.0, float(rng.choice([0.02, 0.03])))
    background = float(10 ** rng.uniform(0.7, 2.3))
    y = background + 2 * background * np.exp(-(x - 18.0) / rng.uniform(8, 20))
    if rng.random() < 0.4:  # the hump of a glass
        y += (
            background * rng.uniform(0.3, 2) * np.exp(-0.5 * ((x - rng.uniform(22, 40)) / 4.5) ** 2)
        )
    doublet = bool(rng.random() < 0.6)
    width, slope, lorentz = rng.uniform(0.07, 0.14), rng.uniform(0, 0.0012), rng.uniform(0, 0.8)
    which = rng.integers(3)
    lines = [angle(n, CU_KA1_A) for n in PRIMITIVE] if which != 1 else []
    lines += [angle(n, CU_KA1_A, A_SI_A) for n in DIAMOND] if which != 0 else []
    peaks, shapes = [], []
    for at in sorted(p for p in lines if 19.0 < p < 98.0):
        height = float(10 ** rng.uniform(0.9, 3.5))
        fwhm = width + slope * at
        parts = [(at, height)]
        if doublet:
            sine = np.sin(np.radians(at / 2)) * CU_KA2_A / CU_KA1_A
            parts.append((float(2 * np.degrees(np.arcsin(sine))), 0.5 * height))
        curve = np.zeros_like(x)
        for place, top in parts:
            u = (x - place) / fwhm
            curve += top * (
                lorentz / (1 + 4 * u * u) + (1 - lorentz) * np.exp(-4 * np.log(2) * u * u)
            )
        peaks.append(at)
        shapes.append(curve)
        y = y + curve
    clear = tuple(float(np.sqrt((curve**2 / y).sum())) for curve in shapes)
    return Scan(x, rng.poisson(y).astype(float), tuple(peaks), clear, doublet)
