#!/usr/bin/env python3
"""Writes the invented patterns of data/demo/: an aluminium foil with some periclase in it.

Nothing here was measured. Spacings and intensities are those phaseid calculates from its own
structures, then spoilt as readings are: a camera constant 0.7 % off, readings that scatter, uneven
intensities, weak rings lost, one ring from nowhere.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np

from phaseid.crystal.cif import read_cif_file
from phaseid.crystal.lines import compute_lines
from phaseid.probes import parse_probe
from phaseid.resources import data_path
from phaseid.rings import GRADES
from phaseid.units import radius_from_d, two_theta_from_d

VOLUME_SHARES = {"Al-aluminium.cif": 0.85, "MgO-periclase.cif": 0.15}
STATED_CONSTANT_A_MM, TRUE_CONSTANT_A_MM = 25.1, 25.1 * 1.007
FOREIGN_D_A = 1.83
SEED = 20


def rings(probe_text: str, *, resolution: float, d_min_A: float) -> list[tuple[float, float]]:
    """Return (d in Å, intensity) of the mixture, lines nearer than `resolution` (of d) merged."""
    probe = parse_probe(probe_text)
    found: list[tuple[float, float]] = []
    for name, share in VOLUME_SHARES.items():
        (path,) = data_path("starter").rglob(name)
        lines = compute_lines(read_cif_file(path).crystals[0], d_min_A=d_min_A)
        weights = probe.weights(lines.d_A, lines.multiplicity, probe.f2(lines))
        found += zip(lines.d_A, share * weights / lines.volume_A3**2, strict=True)
    found.sort(reverse=True)
    merged = [found[0]]
    for d_A, strength in found[1:]:
        last_d_A, last = merged[-1]
        if last_d_A / d_A - 1 < resolution:
            merged[-1] = ((last_d_A * last + d_A * strength) / (last + strength), last + strength)
        else:
            merged.append((d_A, strength))
    strongest = max(strength for _, strength in merged)
    return [(d_A, 100 * strength / strongest) for d_A, strength in merged]


def grade(intensity: float) -> str:
    """Return the grade in whose interval an intensity lies most centrally."""
    middles = {name: np.sqrt(np.prod(GRADES[name])) for name in ("vs", "s", "m", "w", "vw")}
    return min(middles, key=lambda name: abs(np.log(intensity / middles[name])))


def electrons(rng: np.random.Generator) -> str:
    """Return the plate of an electron microscope as a ring list."""
    rows = []
    for d_A, strength in rings("electron 200 kV", resolution=0.01, d_min_A=0.9):
        seen = strength * rng.lognormal(0.0, 0.4)
        if seen > 2.0:
            radius_mm = radius_from_d(d_A, TRUE_CONSTANT_A_MM) + rng.normal(0.0, 0.03)
            rows.append((radius_mm, grade(min(seen, 100.0)), ""))
    rows.append((radius_from_d(FOREIGN_D_A, TRUE_CONSTANT_A_MM), "vw", "spotty"))
    head = [
        "# title: foil, electrons (invented)",
        "# probe: electron 200 kV",
        f"# camera constant: {STATED_CONSTANT_A_MM:g} +- 0.3 A mm",
        "radius_mm,sigma,intensity,note",
    ]
    body = [f"{radius:.2f},0.03,{level},{note}" for radius, level, note in sorted(rows)]
    return "\n".join([*head, *body]) + "\n"


def xrays(rng: np.random.Generator) -> str:
    """Return a diffractometer's pattern as a ring list."""
    probe = parse_probe("x-ray Cu Ka")
    rows = []
    for d_A, strength in rings("x-ray Cu Ka", resolution=0.002, d_min_A=0.9):
        seen = strength * rng.lognormal(0.0, 0.15)
        if seen > 1.5:
            angle_deg = float(two_theta_from_d(d_A, probe.wavelength_A)) + rng.normal(0.0, 0.02)
            rows.append((angle_deg, seen))
    strongest = max(seen for _, seen in rows)
    head = ["# title: foil, X-rays (invented)", "# probe: x-ray Cu Ka"]
    head.append("two_theta_deg,sigma,intensity")
    body = [f"{angle:.2f},0.02,{100 * seen / strongest:.0f}" for angle, seen in rows]
    return "\n".join([*head, *body]) + "\n"


def main() -> None:
    rng = np.random.default_rng(SEED)
    folder = Path(data_path("demo"))
    folder.mkdir(exist_ok=True)
    (folder / "foil_electrons.csv").write_text(electrons(rng), encoding="utf-8")
    (folder / "foil_xrays.csv").write_text(xrays(rng), encoding="utf-8")


if __name__ == "__main__":
    main()
