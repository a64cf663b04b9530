"""What a structure holds against what its source says it holds: formula, Z, density, volume."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

from phaseid.crystal.composition import density_of_contents
from phaseid.crystal.crystal import Finding, Site
from phaseid.crystal.formula import chemical_formula

_TOLERANCE = 0.05
_VOLUME_TOLERANCE = 0.01


@dataclass(frozen=True, slots=True)
class Stated:
    """What the source says of its contents: formula (amounts, or None), Z, density, volume."""

    formula: Mapping[str, float] | None = None
    formula_text: str = ""
    z: float | None = None
    density_g_cm3: float | None = None
    volume_A3: float | None = None


@dataclass(frozen=True, slots=True)
class Agreement:
    """How well contents agree with the source.

    `score` is 2, less 1 each for wrong ratios, wrong Z, a wrong number of located hydrogens.
    `units` is how many stated formula units the cell holds, 0 where they cannot be counted.
    """

    score: int
    units: float
    findings: tuple[Finding, ...]


def agree(contents: Mapping[str, float], volume_A3: float, stated: Stated) -> Agreement:
    """Compare contents (atoms per cell) with what the source states."""
    if stated.formula is None:
        return Agreement(2, 0.0, _measures(contents, volume_A3, stated))
    held, formula = _without_deuterium(contents), _without_deuterium(stated.formula)
    heavy = sorted((held.keys() | formula.keys()) - {"H"}) or ["H"]
    whole = sum(formula.get(el, 0.0) for el in heavy)
    units = sum(held.get(el, 0.0) for el in heavy) / whole if whole else 0.0
    unplaced = max(0.0, units * formula.get("H", 0.0) - held.get("H", 0.0))
    weighed = {**contents, "H": contents.get("H", 0.0) + unplaced}  # a density counts hydrogen
    measures = _measures(weighed, volume_A3, stated)
    if any(_differs(held.get(el, 0.0), units * formula.get(el, 0.0)) for el in heavy):
        mismatch = Finding(
            "formula_mismatch",
            f"the cell holds {chemical_formula(contents)}, not in the ratios of the stated formula "
            f"{stated.formula_text}",
        )
        missing = _hydrogen_missing(held, formula, stated.z or units)
        return Agreement(1, 0.0, (mismatch, *missing, *measures))
    score = 2
    findings: list[Finding] = []
    if stated.z and abs(units - stated.z) > _TOLERANCE * stated.z:
        score -= 1
        findings.append(
            Finding(
                "z_mismatch",
                f"the cell holds {units:.4g} formula units {stated.formula_text}, the source "
                f"states Z = {stated.z:g}",
            )
        )
    if held.get("H") and _differs(held["H"], units * formula.get("H", 0.0)):
        score -= 1
    missing = _hydrogen_missing(held, formula, units)
    return Agreement(max(score, 0), units, (*findings, *missing, *measures))


def shares_of_unknown(
    contents: Mapping[str, float], unknown: Sequence[tuple[Site, int]], stated: Stated
) -> dict[str, float] | None:
    """Return what the unknown sites must hold for the cell to hold Z formula units, or None."""
    if stated.formula is None or not stated.z:
        return None
    lacking = {
        el: n * stated.z - contents.get(el, 0.0)
        for el, n in stated.formula.items()
        if el not in ("H", "D")
    }
    if any(n < -_TOLERANCE * stated.z * stated.formula[el] for el, n in lacking.items()):
        return None
    lacking = {el: n for el, n in lacking.items() if n > _TOLERANCE * stated.z * stated.formula[el]}
    total = sum(lacking.values())
    places = sum(site.occupancy * count for site, count in unknown)
    if not lacking or abs(total - places) > _TOLERANCE * places:
        return None
    return {el: n / total for el, n in lacking.items()}


def _differs(held: float, expected: float) -> bool:
    return abs(held - expected) > _TOLERANCE * max(expected, 0.2)


def _hydrogen_missing(
    held: Mapping[str, float], formula: Mapping[str, float], units: float
) -> tuple[Finding, ...]:
    expected = formula.get("H", 0.0) * units
    located = held.get("H", 0.0)
    if expected <= 0 or located >= (1 - _TOLERANCE) * expected:
        return ()
    return (
        Finding(
            "hydrogen_missing",
            f"{located:.4g} of {expected:.4g} hydrogen atoms in the cell have positions; neutron "
            "intensities suffer most",
        ),
    )


def _measures(
    contents: Mapping[str, float], volume_A3: float, stated: Stated
) -> tuple[Finding, ...]:
    findings: list[Finding] = []
    if stated.volume_A3 and abs(volume_A3 / stated.volume_A3 - 1) > _VOLUME_TOLERANCE:
        findings.append(
            Finding(
                "volume_mismatch",
                f"the cell has {volume_A3:.2f} Å³, the source states {stated.volume_A3:g} Å³",
            )
        )
    if stated.density_g_cm3:
        density = density_of_contents(contents, volume_A3)
        if abs(density / stated.density_g_cm3 - 1) > _TOLERANCE:
            findings.append(
                Finding(
                    "density_mismatch",
                    f"the atoms give {density:.3f} g/cm³, the source states "
                    f"{stated.density_g_cm3:g} g/cm³",
                )
            )
    return tuple(findings)


def _without_deuterium(amounts: Mapping[str, float]) -> dict[str, float]:
    merged = {el: n for el, n in amounts.items() if el != "D"}
    if "D" in amounts:
        merged["H"] = merged.get("H", 0.0) + amounts["D"]
    return merged
