#!/usr/bin/env python3
"""Write the invented patterns of data/demo: a foil by electrons and X-rays, a powder heated.

The story: an evaporated aluminium foil with some periclase from the crucible; on the microscope's
grid a crystal of salt from handling adds one spotty ring. Nothing here was measured. Positions and
structure factors are gemmi's, not phaseid's, so that the example does not answer itself; they are
then spoilt as readings are: a camera constant 0.7 % off, scatter, uneven intensities, weak rings
lost. The powder is anatase that turns into rutile, at five temperatures.
"""

from __future__ import annotations

import math
from pathlib import Path

import gemmi
import numpy as np
from numpy.typing import NDArray
from PIL import Image

ROOT = Path(__file__).resolve().parent.parent
STARTER, DEMO = ROOT / "data" / "starter", ROOT / "data" / "demo"
VOLUME_SHARES = {"elements/Al-aluminium.cif": 0.85, "oxides/MgO-periclase.cif": 0.15}
SALT_D_A = 2.8201  # 200 of halite, half its edge
B_ISO_A2 = 0.6  # common to all atoms; a usual value at room temperature
D_MIN_A = 0.9
STATED_CONSTANT_A_MM, TRUE_CONSTANT_A_MM = 25.1, 25.1 * 1.007
CU_KA_A = (2 * 1.5405929 + 1.5444274) / 3  # Int. Tables C 4.2.2.1, 2:1 mean of the doublet
CU_KA_EV = 12398.419843 / CU_KA_A
MIDDLES = {"vs": 90.0, "s": 70.0, "m": 40.0, "w": 15.0, "vw": 5.0}  # common practice, no source
SEED = 20
HEATING_SEED = 21
RUTILE_VOLUME_SHARES = {500: 0.0, 600: 0.12, 700: 0.45, 800: 0.88, 900: 1.0}  # °C: invented
EXPANSION_PER_K = 9e-6  # about that of rutile along a, handbook, from memory
PLATE_PX, PLATE_CONSTANT_A_PX = 300, 256.0


def lines(path: str, *, electrons: bool) -> list[tuple[float, float]]:
    """Return (d in Å, m|F|² per cell volume squared) of one structure, displacement included."""
    block = gemmi.cif.read(str(STARTER / path)).sole_block()
    small = gemmi.make_small_structure_from_block(block)
    small.change_occupancies_to_crystallographic()
    calculator: gemmi.StructureFactorCalculatorE | gemmi.StructureFactorCalculatorX
    if electrons:
        calculator = gemmi.StructureFactorCalculatorE(small.cell)
    else:
        calculator = gemmi.StructureFactorCalculatorX(small.cell)
        calculator.addends.add_cl_fprime(CU_KA_EV)
    operations = small.spacegroup.operations()
    found = []
    for hkl in gemmi.make_miller_array(small.cell, small.spacegroup, D_MIN_A):
        images = {tuple(op.apply_to_hkl(hkl.tolist())) for op in operations.sym_ops}
        multiplicity = len(images | {tuple(-i for i in image) for image in images})
        d_A = small.cell.calculate_d(hkl.tolist())
        amplitude = abs(calculator.calculate_sf_from_small_structure(small, hkl.tolist()))
        f2 = amplitude**2 * math.exp(-B_ISO_A2 / (2 * d_A**2))
        found.append((d_A, multiplicity * f2 / small.cell.volume**2))
    return found


def lorentz_polarisation(d_A: float) -> float:
    """Return the factor of a powder diffractometer without a monochromator."""
    theta = math.asin(CU_KA_A / (2 * d_A))
    return (1 + math.cos(2 * theta) ** 2) / (math.sin(theta) ** 2 * math.cos(theta))


def mixture(
    *, electrons: bool, resolution: float, shares: dict[str, float] = VOLUME_SHARES
) -> list[tuple[float, float]]:
    """Return (d in Å, intensity) of a mixture, lines nearer than `resolution` (of d) merged.

    Intensity is the mean along the ring, strongest = 100: for electrons m|F|²d², for X-rays m|F|²
    times the Lorentz and polarisation factor.
    """
    rows = [
        (d_A, share * strength * (d_A**2 if electrons else lorentz_polarisation(d_A)))
        for path, share in shares.items()
        for d_A, strength in lines(path, electrons=electrons)
    ]
    rows.sort(reverse=True)
    merged = rows[:1]
    for d_A, strength in rows[1:]:
        last_d_A, last = merged[-1]
        if last_d_A / d_A - 1 < resolution:
            merged[-1] = ((last_d_A * last + d_A * strength) / (last + strength), last + strength)
        else:
            merged.append((d_A, strength))
    strongest = max(strength for _, strength in merged)
    return [(d_A, 100 * strength / strongest) for d_A, strength in merged]


def grade(intensity: float) -> str:
    """Return the grade nearest to an intensity."""
    return min(MIDDLES, key=lambda name: abs(math.log(intensity / MIDDLES[name])))


def foil_electrons(rng: np.random.Generator) -> str:
    """Return the plate of an electron microscope, rings graded by eye."""
    rows = [(SALT_D_A, "vw", "spotty")]
    for d_A, strength in mixture(electrons=True, resolution=0.008):
        seen = strength * rng.lognormal(0.0, 0.4)
        if seen > 2.0:
            rows.append((d_A, grade(seen), ""))
    head = [
        "# title: foil, electrons (invented)",
        "# These data are invented for the demonstration; nothing here was measured.",
        "# probe: electron 200 kV",
        f"# camera constant: {STATED_CONSTANT_A_MM:g} +- 0.3 A mm",
        "radius_mm,sigma,intensity,note",
    ]
    for d_A, level, note in sorted(rows, reverse=True):
        radius_mm = TRUE_CONSTANT_A_MM / d_A + rng.normal(0.0, 0.03)
        head.append(f"{radius_mm:.2f},0.03,{level},{note}")
    return "\n".join(head) + "\n"


def foil_xrays(rng: np.random.Generator) -> str:
    """Return a diffractometer's pattern."""
    rows = []
    for d_A, strength in mixture(electrons=False, resolution=0.002):
        seen = strength * rng.lognormal(0.0, 0.15)
        if seen > 1.5:
            two_theta_deg = math.degrees(2 * math.asin(CU_KA_A / (2 * d_A)))
            rows.append((two_theta_deg + rng.normal(0.0, 0.02), seen))
    strongest = max(seen for _, seen in rows)
    head = [
        "# title: foil, X-rays (invented)",
        "# These data are invented for the demonstration; nothing here was measured.",
        "# probe: x-ray Cu Ka",
        "two_theta_deg,sigma,intensity",
    ]
    head += [f"{angle:.2f},0.02,{100 * seen / strongest:.0f}" for angle, seen in rows]
    return "\n".join(head) + "\n"


def heating(rng: np.random.Generator) -> dict[str, str]:
    """Return a diffractometer's patterns of a titania powder by temperature, by file name."""
    files = {}
    for celsius, rutile in RUTILE_VOLUME_SHARES.items():
        shares = {"oxides/TiO2-anatase.cif": 1.0 - rutile, "oxides/TiO2-rutile.cif": rutile}
        longer = 1.0 + EXPANSION_PER_K * (celsius - 25)
        rows = []
        shown = {path: share for path, share in shares.items() if share > 0}
        for d_A, strength in mixture(electrons=False, resolution=0.002, shares=shown):
            seen = strength * rng.lognormal(0.0, 0.15)
            if seen > 4.0:
                angle_deg = math.degrees(2 * math.asin(CU_KA_A / (2 * d_A * longer)))
                rows.append((angle_deg + rng.normal(0.0, 0.02), seen))
        strongest = max(seen for _, seen in rows)
        head = [
            f"# title: powder at {celsius} °C (invented)",
            "# These data are invented for the demonstration; nothing here was measured.",
            "# probe: x-ray Cu Ka",
            f"# temperature: {celsius} °C",
            "two_theta_deg,sigma,intensity",
        ]
        head += [f"{angle:.2f},0.02,{100 * seen / strongest:.0f}" for angle, seen in rows]
        files[f"powder_{celsius}.csv"] = "\n".join(head) + "\n"
    return files


def foil_plate(rng: np.random.Generator) -> NDArray[np.uint8]:
    """Return the electrons' plate as an image: off centre, elliptical, with a beam stop."""
    y, x = np.mgrid[0:PLATE_PX, 0:PLATE_PX].astype(float)
    x, y = x - 148.3, y - 155.6
    turn = math.radians(35.0)
    along, across = x * math.cos(turn) + y * math.sin(turn), y * math.cos(turn) - x * math.sin(turn)
    r = np.hypot(along / 1.003, across * 1.003)
    picture = 12.0 + 120.0 * np.exp(-r / 18.0)
    for d_A, strength in mixture(electrons=True, resolution=0.0):
        picture += 0.9 * strength * np.exp(-0.5 * ((r - PLATE_CONSTANT_A_PX / d_A) / 1.5) ** 2)
    picture[(np.abs(y + 0.2 * x) < 5) & (x < 0)] *= 0.03
    counts: NDArray[np.uint8] = np.minimum(rng.poisson(picture), 255).astype(np.uint8)
    return counts


def main() -> None:
    """Write the lists and the image."""
    rng = np.random.default_rng(SEED)
    DEMO.mkdir(exist_ok=True)
    (DEMO / "foil_electrons.csv").write_text(foil_electrons(rng), encoding="utf-8")
    (DEMO / "foil_xrays.csv").write_text(foil_xrays(rng), encoding="utf-8")
    Image.fromarray(foil_plate(rng)).save(DEMO / "foil_plate.png", optimize=True)
    (DEMO / "heating").mkdir(exist_ok=True)
    for name, text in heating(np.random.default_rng(HEATING_SEED)).items():
        (DEMO / "heating" / name).write_text(text, encoding="utf-8")


if __name__ == "__main__":
    main()
