"""Likely slips of a ring list that could be read: units, decimals, rings listed twice."""

from __future__ import annotations

from collections import defaultdict

import numpy as np

from phaseid.rings.columns import COLUMNS
from phaseid.rings.ringlist import RingList


def slips(rings: RingList, where: list[str]) -> list[str]:
    """Sentences on what looks wrong; `where` (m,) names each row."""
    return [*_units(rings), *_angles(rings), *_sigmas(rings), *_repeated(rings, where)]


def _units(rings: RingList) -> list[str]:
    name = rings.position_column
    smallest, largest = float(rings.d_A.min()), float(rings.d_A.max())
    found = []
    if largest < 0.5:
        hint = {
            "d_A": "were they in nm? Then name the column d_nm",
            "g_1/A": "were they in 1/nm? Then name the column g_1/nm",
            "q_1/A": "were they in 1/nm? Then name the column q_1/nm",
        }.get(name, "check the unit, the wavelength and the camera constant")
        found.append(f"All spacings are below 0.5 Å: {hint}.")
    elif smallest > 20.0 or largest > 100.0:
        hint = {
            "d_nm": "were they in Å? Then name the column d_A",
            "g_1/nm": "were they in 1/Å? Then name the column g_1/A",
            "q_1/nm": "were they in 1/Å? Then name the column q_1/A",
        }.get(name, "check the unit, the wavelength and the camera constant")
        found.append(f"Spacings reach {largest:.4g} Å, beyond most crystals: {hint}.")
    whole = bool(np.all(rings.position == np.round(rings.position)))
    if name in ("d_A", "d_nm") and whole and len(rings) > 2:
        found.append("All spacings are whole numbers: were decimal commas taken as separators?")
    return found


def _angles(rings: RingList) -> list[str]:
    probe = rings.probe
    column = COLUMNS[rings.position_column]
    found = []
    if column.quantity == "two_theta" and probe.kind == "electron" and rings.position.max() > 15.0:
        found.append("2θ above 15° is unusual for electrons: check the unit and the probe.")
    beyond = int((rings.d_A < probe.d_min_A).sum())
    if beyond:
        found.append(
            f"{beyond} of {len(rings)} spacings lie below λ/2 = {probe.d_min_A:.4g} Å and "
            f"cannot be reached with {probe.label}."
        )
    if column.quantity == "radius" and probe.kind != "electron":
        sine = min(1.0, probe.wavelength_A / (2.0 * float(rings.d_A.min())))
        if sine > 0.05:
            found.append(
                "Radius × d is constant only at small angles; here 2θ reaches "
                f"{2 * np.degrees(np.arcsin(sine)):.0f}°: give two_theta_deg instead."
            )
    return found


def _sigmas(rings: RingList) -> list[str]:
    relative = rings.sigma_A / rings.d_A
    if rings.sigma_stated and float(np.median(relative)) > 0.05:
        return [
            f"Sigma is {100 * float(np.median(relative)):.2g} % of d: it is meant in the unit of "
            f"{rings.position_column}; write '0.3 %' for a percentage."
        ]
    return []


def _repeated(rings: RingList, where: list[str]) -> list[str]:
    rows = defaultdict(list)
    for value, row in zip(rings.position.tolist(), where, strict=True):
        rows[value].append(row)
    return [
        f"The ring at {value:g} is listed {len(same)} times ({', '.join(same)})."
        for value, same in rows.items()
        if len(same) > 1
    ]
