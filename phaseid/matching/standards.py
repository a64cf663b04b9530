"""Standards: substances whose cell is known well enough to scale an instrument by."""

from __future__ import annotations

import tomllib
from collections.abc import Iterator
from dataclasses import dataclass, replace
from functools import cache
from math import hypot
from typing import Any

import numpy as np

from phaseid.crystal.crystal import Crystal
from phaseid.crystal.lines import compute_lines
from phaseid.errors import InputError
from phaseid.library.formulas import formula_keys, name_key
from phaseid.library.outside import phase_of
from phaseid.library.phase import Phase
from phaseid.library.starter import shipped_crystal
from phaseid.probes.probe import Probe
from phaseid.resources import data_path
from phaseid.rings.calibration import ReferenceLines

ROOM_C, ROOM_SIGMA_K, STATED_SIGMA_K = 23.0, 5.0, 1.0
UNCERTIFIED_SIGMA = 2.5e-4
"""Relative one-sigma of a cell from a library: compilations agree to about 5e-4."""
UNKNOWN_EXPANSION = 2e-5
_MOST_LINES = 80
_WEAKEST = 0.03


@dataclass(frozen=True, slots=True)
class Standard:
    """A substance with its cell at the temperature of the measurement.

    `cell` Å and degrees, `relative_sigma` of its lengths (certificate and temperature together);
    `source` says where the cell is from; `certified` is False for a phase of the library.
    """

    label: str
    phase: Phase
    crystal: Crystal
    relative_sigma: float
    temperature_C: float
    source: str
    certified: bool = True

    @property
    def cell(self) -> tuple[float, float, float, float, float, float]:
        """Cell used, Å and degrees."""
        return self.crystal.cell

    def lines(self, probe: Probe) -> ReferenceLines:
        """The lines that this probe may show, strongest = 100."""
        computed = compute_lines(self.crystal, xray_energy_eV=probe.xray_energy_eV)
        intensity = probe.intensity(computed)
        strong = np.argsort(-intensity, kind="stable")[:_MOST_LINES]
        strong = strong[intensity[strong] > _WEAKEST]
        return ReferenceLines(
            np.log(computed.d_A[strong]),
            computed.hkl[strong].astype(np.int64),
            intensity[strong],
        )


@cache
def _facts() -> tuple[dict[str, Any], ...]:
    return tuple(tomllib.loads(data_path("standards.toml").read_text(encoding="utf-8"))["standard"])


def _formula(facts: dict[str, Any]) -> str:
    return str(facts["entry"]).partition("-")[0]


def standard_names() -> list[str]:
    """The formulas of the standards that come with phaseid."""
    return [_formula(facts) for facts in _facts()]


def find_standard(text: str, temperature_C: float | None = None) -> Standard | None:
    """The standard called `text` (formula, name, or SRM number), None where there is none.

    Raises InputError for a temperature at which its cell is not known.
    """
    key, keys = name_key(text), set(formula_keys(text))
    for facts in _facts():
        named = {name_key(name) for name in facts["names"]}
        batch = next((b for b in facts.get("batch", []) if name_key(b["name"]) == key), None)
        if batch or key in named or key == name_key(_formula(facts)):
            return _made(facts, batch or {}, temperature_C)
        if keys & set(formula_keys(_formula(facts))):
            return _made(facts, {}, temperature_C)
    return None


def standard_of(phase: Phase, temperature_C: float | None = None) -> Standard | None:
    """The standard whose structure this phase of the library is, None where it is none."""
    facts = next((f for f in _facts() if f["entry"] == phase.source.id), None)
    return None if facts is None else _made(facts, {}, temperature_C)


def other_standards(than: Standard, temperature_C: float | None = None) -> Iterator[Standard]:
    """Every other substance of the list."""
    for facts in _facts():
        if facts["entry"] != than.phase.source.id:
            yield _made(facts, {}, temperature_C)


def uncertified(phase: Phase, crystal: Crystal, temperature_C: float | None = None) -> Standard:
    """Any phase as a standard: its cell as the library has it."""
    spread = ROOM_SIGMA_K if temperature_C is None else STATED_SIGMA_K
    return Standard(
        label=phase.name or phase.formula,
        phase=phase,
        crystal=crystal,
        relative_sigma=hypot(UNCERTIFIED_SIGMA, UNKNOWN_EXPANSION * spread),
        temperature_C=ROOM_C if temperature_C is None else temperature_C,
        source=f"library entry {phase.phase_id}",
        certified=False,
    )


def _made(facts: dict[str, Any], batch: dict[str, Any], temperature_C: float | None) -> Standard:
    if temperature_C is not None and not -150 <= temperature_C <= 300:
        raise InputError(
            f"the expansion of standards is known near room temperature, not at "
            f"{temperature_C:g} °C",
            remedy="Give --temperature between -150 and 300.",
        )
    values = {**facts, **batch}
    now, spread = (
        (ROOM_C, ROOM_SIGMA_K) if temperature_C is None else (temperature_C, STATED_SIGMA_K)
    )
    warmer = now - float(values["temperature_C"])
    along = float(values["expansion_a"])
    a = float(values["a_A"]) * (1 + along * warmer)
    crystal = shipped_crystal(values["entry"])
    b, c = a, a
    if "c_A" in values:
        c = float(values["c_A"]) * (1 + float(values["expansion_c"]) * warmer)
    steepest = max(abs(along), abs(float(values.get("expansion_c", 0.0))))
    return Standard(
        label=str(batch.get("name", _formula(facts))),
        phase=phase_of(crystal),
        crystal=replace(crystal, cell=(a, b, c, *crystal.cell[3:])),
        relative_sigma=hypot(float(values["sigma_A"]) / float(values["a_A"]), steepest * spread),
        temperature_C=now,
        source=str(values["source"]),
    )
