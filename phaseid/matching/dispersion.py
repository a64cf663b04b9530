"""|F|² at the pattern's own X-ray energy, where the library's (Cu Kα1) are not near enough."""

from __future__ import annotations

from dataclasses import replace
from math import log

import numpy as np

from phaseid.crystal.scattering import CU_KA1_EV
from phaseid.library.library import Library
from phaseid.library.linetable import LineTable
from phaseid.probes.probe import Probe

_NEAR = 0.005
"""Energies this near to Cu Kα1 (ln) share its f′ and f″."""


def needs_own_energy(probe: Probe) -> bool:
    """Whether the stored |F|² belong to another energy than the probe's."""
    energy = probe.xray_energy_eV
    return energy is not None and abs(log(energy / CU_KA1_EV)) > _NEAR


def at_own_energy(library: Library, table: LineTable, phases: list[int], probe: Probe) -> LineTable:
    """The table with f2 of the phases numbered `phases` as the probe's energy makes them."""
    energy = probe.xray_energy_eV
    if energy is None:
        return table
    f2 = table.f2.copy()
    for phase in phases:
        own = slice(table.offsets[phase], table.offsets[phase + 1])
        lines = library.lines_at(table.phase_ids[phase], energy)
        rising = lines.d_A[::-1]
        at = np.clip(np.searchsorted(rising, table.d_A[own] * (1.0 - 1e-6)), 0, len(rising) - 1)
        same = np.abs(rising[at] / table.d_A[own] - 1.0) < 1e-6
        f2[own] = np.where(same, lines.f2_xray[::-1][at], table.f2[own])
    return replace(table, f2=f2)
