"""The lines of one phase for one probe, as text and as JSON."""

from __future__ import annotations

from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, NamedTuple

import numpy as np
from numpy.typing import NDArray

from phaseid.crystal.lines import Lines
from phaseid.library.phase import Phase
from phaseid.matching.records import Record, Tidy
from phaseid.probes import Probe, Quantity, ghost_d_A, two_beam_weights
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
from phaseid.units import A_PER_NM, g_from_d, q_from_d, two_theta_from_d

if TYPE_CHECKING:
    from phaseid.rings.camera import CameraConstant

SCHEMA = "phaseid.lines/1"
F2_UNITS = {"x-ray": "electron²", "electron": "Å²", "neutron": "fm²"}
WEAKEST_SHOWN = 0.1  # of 100: below it a line says little and the table grows long
GHOSTS_SHOWN = 3  # lines of each other wavelength, the strongest
GHOSTS_FROM = 10.0  # of 100: fainter lines have no visible ghost
FORBIDDEN_SHOWN = 6  # of what may appear, the longest d
_WIDE = 72


class Ghost(NamedTuple):
    """Where a line appears to another wavelength of the tube, and the d it then seems to have."""

    name: str
    wavelength_A: float
    hkl: tuple[int, ...]
    two_theta_deg: float
    seems_d_A: float
    of_intensity: float


@dataclass(frozen=True, slots=True, eq=False)
class LineList(Tidy):
    """The lines of a phase as one probe shows them, and how they are wanted.

    `thickness_A` asks for the two-beam correction of electrons. `camera` gives radii on a plate.
    `may_appear` are (hkl, d in Å) of double diffraction, None where nobody asked.
    """

    phase: Phase
    probe: Probe
    lines: Lines
    quantity: Quantity = "mean"
    thickness_A: float | None = None
    camera: CameraConstant | None = None
    may_appear: tuple[tuple[tuple[int, ...], float], ...] | None = None

    def intensity(self) -> NDArray[np.float64]:
        """Return the relative intensity (n,) of every line, strongest = 100."""
        if self.thickness_A is None:
            return self.probe.intensity(self.lines, quantity=self.quantity)
        weights = two_beam_weights(
            self.probe,
            self.lines.d_A,
            self.lines.multiplicity,
            self.lines.f2_electron,
            volume_A3=self.lines.volume_A3,
            thickness_A=self.thickness_A,
            quantity=self.quantity,
        )
        strongest = float(weights.max(initial=0.0))
        return np.asarray(weights * (100 / strongest) if strongest > 0 else weights)

    def records(self) -> list[Record]:
        """One record per line, by falling d."""
        columns = zip(
            self.lines.hkl,
            self.lines.d_A,
            self.lines.multiplicity,
            self.probe.f2(self.lines),
            self.intensity(),
            strict=True,
        )
        return [
            {
                "hkl": hkl_text(hkl),
                "d_A": float(d),
                "multiplicity": int(m),
                "f2": float(f2),
                "intensity": float(i),
            }
            for hkl, d, m, f2, i in columns
        ]

    def summary(self) -> str:
        """Which phase, for which probe."""
        return f"{phase_text(self.phase)}, lines for {self.probe.label}"

    def reached(self) -> NDArray[np.intp]:
        """Return the indices of the lines that exist for this probe: sinθ ≤ 1."""
        return np.flatnonzero(self.lines.d_A >= self.probe.d_min_A)

    def ghosts(self) -> list[Ghost]:
        """Return where the tube's other lines put fainter rings, by falling intensity of each."""
        intensity = self.intensity()
        found = []
        for name, wavelength_A in self.probe.ghosts:
            for k in np.argsort(-intensity, kind="stable"):
                d_A = float(self.lines.d_A[k])
                if intensity[k] < GHOSTS_FROM or wavelength_A > 2 * d_A:
                    continue
                found.append(
                    Ghost(
                        name,
                        wavelength_A,
                        tuple(self.lines.hkl[k].tolist()),
                        float(two_theta_from_d(d_A, wavelength_A)),
                        ghost_d_A(d_A, self.probe, wavelength_A),
                        float(intensity[k]),
                    )
                )
        return found


def lines_dict(shown: LineList) -> dict[str, Any]:
    """Return the object that `phaseid lines --json` prints: every line the probe can reach."""
    lines, probe = shown.lines, shown.probe
    f2, intensity = probe.f2(lines), shown.intensity()
    two_theta_deg = None
    if probe.geometry != "time-of-flight":  # there the angle is the instrument's, the same for all
        two_theta_deg = two_theta_from_d(lines.d_A, probe.wavelength_A)
    return {
        "schema": SCHEMA,
        "phase": phase_dict(shown.phase),
        "probe": probe_dict(probe),
        "f2_unit": F2_UNITS[probe.kind],
        "complete_to_A": lines.complete_to_A,
        "quantity": shown.quantity,
        "thickness_nm": None if shown.thickness_A is None else shown.thickness_A / A_PER_NM,
        "radius_unit": None if shown.camera is None else shown.camera.plate_unit,
        "lines": [
            {
                "hkl": lines.hkl[k].tolist(),
                "d_A": float(lines.d_A[k]),
                "g_inv_A": g_from_d(float(lines.d_A[k])),
                "q_inv_A": q_from_d(float(lines.d_A[k])),
                "two_theta_deg": None if two_theta_deg is None else float(two_theta_deg[k]),
                "radius": _radius(shown, float(lines.d_A[k])),
                "multiplicity": int(lines.multiplicity[k]),
                "f2": float(f2[k]),
                "intensity": float(intensity[k]),
            }
            for k in shown.reached()
        ],
        "may_appear": [
            {"hkl": list(hkl), "d_A": d_A, "radius": _radius(shown, d_A)}
            for hkl, d_A in shown.may_appear or ()
        ],
        "ghosts": [
            {
                "name": ghost.name,
                "wavelength_A": ghost.wavelength_A,
                "of_hkl": list(ghost.hkl),
                "of_intensity": ghost.of_intensity,
                "two_theta_deg": ghost.two_theta_deg,
                "seems_d_A": ghost.seems_d_A,
            }
            for ghost in shown.ghosts()
        ],
    }


def lines_text(shown: LineList, width: int = 80) -> str:
    """Return a heading, the lines of at least 0.1 of 100, what else may show, and findings."""
    reached, intensity = shown.reached(), shown.intensity()
    strong = [k for k in reached if intensity[k] >= WEAKEST_SHOWN]
    page = [*_heading(shown, width), "", *_table(shown, strong, intensity, width)]
    range_A = max(shown.lines.complete_to_A, shown.probe.d_min_A)
    said = f"Complete down to {range_A:.4g} Å"
    if len(reached) > len(strong):
        said += f"; {len(reached) - len(strong)} weaker than {WEAKEST_SHOWN} of 100 are left out"
    page += ["", *wrap(f"{said}.", width, indent="")]
    page += [*_forbidden(shown, width), *_ghosts(shown, width)]
    if shown.phase.findings:
        page += ["", *wrap("What to know of this structure:", width, indent="")]
        for finding in shown.phase.findings:
            page += wrap(finding.message, width, indent="    ", first="  - ")
    return "\n".join(page) + "\n"


def _heading(shown: LineList, width: int) -> list[str]:
    phase, probe = shown.phase, shown.probe
    page = wrap(
        f"{phase_text(phase)}, {safe(phase.space_group_symbol)} (no. {phase.space_group_number}), "
        f"{cell_text(phase.cell)}",
        width,
        indent="",
    )
    page += wrap(f"{phase.phase_id}; {source_text(phase)}", width, indent="")
    assumed = "" if probe.wavelength_stated else " (assumed, for none was stated)"
    seen = "mean along the ring" if shown.quantity == "mean" else "sum over the whole ring"
    if shown.thickness_A is not None:
        seen += f", two-beam at {shown.thickness_A / A_PER_NM:g} nm"
    page += wrap(
        f"{probe.label}, wavelength {probe.wavelength_A:.5f} Å{assumed}; intensity as this probe "
        f"shows it ({seen}), strongest = 100; |F|² in {F2_UNITS[probe.kind]} per cell",
        width,
        indent="",
    )
    return page


def _table(
    shown: LineList, strong: list[int], intensity: NDArray[np.float64], width: int
) -> list[str]:
    lines = shown.lines
    f2 = shown.probe.f2(lines)
    unit = "" if shown.camera is None else shown.camera.plate_unit
    columns = [
        Column("hkl"),
        Column("d\nÅ"),
        Column("1/d\n1/nm"),
        Column("q\n1/Å"),
        Column(f"radius\n{unit}" if unit else "2θ\ndeg"),
        Column("I"),
        Column("mult."),
        Column("|F|²"),
    ]
    rows = []
    for k in strong:
        d_A = float(lines.d_A[k])
        radius = _radius(shown, d_A)
        angle = two_theta_from_d(d_A, shown.probe.wavelength_A)
        rows.append(
            [
                hkl_text(lines.hkl[k]),
                f"{d_A:.5f}",
                f"{10 / d_A:.4f}",
                f"{q_from_d(d_A):.4f}",
                f"{angle:.4f}" if radius is None else f"{radius:.3f}",
                f"{intensity[k]:.1f}",
                str(int(lines.multiplicity[k])),
                f"{f2[k]:.5g}",
            ]
        )
    dropped = [3] if width < _WIDE else []  # q says nothing that 1/d does not
    if shown.probe.geometry == "time-of-flight" and not unit:
        dropped.insert(0, 4)
    for column in dropped:
        del columns[column]
        for row in rows:
            del row[column]
    return table(columns, rows, width)


def _forbidden(shown: LineList, width: int) -> list[str]:
    """What electrons may show besides: the first of them, and how many more."""
    if not shown.may_appear:
        return []
    first = shown.may_appear[:FORBIDDEN_SHOWN]
    named = ", ".join(f"{hkl_text(hkl)} at {d_A:.4f} Å" for hkl, d_A in first)
    more = len(shown.may_appear) - len(first)
    rest = f", and {more} more of smaller d" if more else ""
    sentence = f"May appear by double diffraction, though forbidden: {named}{rest}."
    return ["", *wrap(sentence, width, indent="")]


def _ghosts(shown: LineList, width: int) -> list[str]:
    """Where a tube without monochromator may print its other lines."""
    ghosts = shown.ghosts()
    if not ghosts:
        return []
    page = ["", *wrap("Fainter ghosts that the tube's other lines may add:", width, indent="")]
    for name in dict.fromkeys(ghost.name for ghost in ghosts):
        strongest = [ghost for ghost in ghosts if ghost.name == name][:GHOSTS_SHOWN]
        places = ", ".join(
            f"{hkl_text(ghost.hkl)} at {ghost.two_theta_deg:.2f}° (as d = {ghost.seems_d_A:.4f} Å)"
            for ghost in strongest
        )
        page += wrap(f"{name} {strongest[0].wavelength_A:.5f} Å: {places}", width, first="  ")
    return page


def _radius(shown: LineList, d_A: float) -> float | None:
    """Return the radius on the plate: camera constant over d, as ring lists are read."""
    return None if shown.camera is None else shown.camera.value / d_A
