"""The lines of one phase for one probe, as text and as JSON."""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.lines import Lines
from phaseid.library.phase import Phase
from phaseid.probes.probe import Probe
from phaseid.reports.json import phase_dict, probe_dict
from phaseid.reports.plain import (
    Column,
    cell_text,
    hkl_text,
    phase_text,
    safe,
    source_text,
    table,
    wrap,
)
from phaseid.units import two_theta_from_d

SCHEMA = "phaseid.lines/1"
F2_UNITS = {"x-ray": "electron²", "electron": "Å²", "neutron": "fm²"}
WEAKEST_SHOWN = 0.1  # of 100: below it a line says little and the table grows long


def lines_dict(phase: Phase, probe: Probe, lines: Lines) -> dict[str, Any]:
    """Return the object that `phaseid lines --json` prints: every line the probe can reach."""
    f2, intensity = probe.f2(lines), probe.intensity(lines)
    two_theta_deg = two_theta_from_d(lines.d_A, probe.wavelength_A)
    return {
        "schema": SCHEMA,
        "phase": phase_dict(phase),
        "probe": probe_dict(probe),
        "f2_unit": F2_UNITS[probe.kind],
        "complete_to_A": lines.complete_to_A,
        "lines": [
            {
                "hkl": lines.hkl[k].tolist(),
                "d_A": float(lines.d_A[k]),
                "g_inv_A": 1 / float(lines.d_A[k]),
                "two_theta_deg": float(two_theta_deg[k]),
                "multiplicity": int(lines.multiplicity[k]),
                "f2": float(f2[k]),
                "intensity": float(intensity[k]),
            }
            for k in _reached(lines, probe)
        ],
    }


def lines_text(phase: Phase, probe: Probe, lines: Lines, width: int = 80) -> str:
    """Return a heading and a table of the lines of at least 0.1 of 100, in `width` columns."""
    head = (
        f"{phase_text(phase)}, {safe(phase.space_group_symbol)} (no. {phase.space_group_number}), "
        f"{cell_text(phase.cell)}"
    )
    page = wrap(head, width, indent="")
    page += wrap(f"{phase.phase_id}; {source_text(phase)}", width, indent="")
    assumed = "" if probe.wavelength_stated else " (assumed, for none was stated)"
    page += wrap(
        f"{probe.label}, wavelength {probe.wavelength_A:.5f} Å{assumed}; intensity as this probe "
        f"shows it, strongest = 100; |F|² in {F2_UNITS[probe.kind]} per cell",
        width,
        indent="",
    )
    f2, intensity = probe.f2(lines), probe.intensity(lines)
    two_theta_deg = two_theta_from_d(lines.d_A, probe.wavelength_A)
    reached = _reached(lines, probe)
    shown = [k for k in reached if intensity[k] >= WEAKEST_SHOWN]
    rows = [
        [
            hkl_text(lines.hkl[k]),
            f"{lines.d_A[k]:.5f}",
            f"{10 / lines.d_A[k]:.4f}",
            f"{two_theta_deg[k]:.4f}",
            f"{intensity[k]:.1f}",
            str(int(lines.multiplicity[k])),
            f"{f2[k]:.5g}",
        ]
        for k in shown
    ]
    columns = (
        Column("hkl"),
        Column("d\nÅ"),
        Column("1/d\n1/nm"),
        Column("2θ\ndeg"),
        Column("I"),
        Column("mult."),
        Column("|F|²"),
    )
    page += ["", *table(columns, rows, width)]
    weak = len(reached) - len(shown)
    if weak:
        left_out = f"Weaker than {WEAKEST_SHOWN} of 100 and left out: {weak}."
        page += ["", *wrap(left_out, width, indent="")]
    return "\n".join(page) + "\n"


def _reached(lines: Lines, probe: Probe) -> NDArray[np.intp]:
    """Indices of the lines that exist for this probe: sinθ ≤ 1."""
    return np.flatnonzero(lines.d_A >= probe.d_min_A)
