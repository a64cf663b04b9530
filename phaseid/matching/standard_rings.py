"""One pattern held against standards: the readings, the lines it can show, the fit."""

from __future__ import annotations

import contextlib
from dataclasses import dataclass, field, replace
from functools import cached_property

import numpy as np

from phaseid.errors import InputError
from phaseid.matching.settings import DISPLACEMENT_DEG, SCATTER, ZERO_SHIFT_DEG
from phaseid.matching.standards import Standard
from phaseid.probes.probe import Probe
from phaseid.rings import CameraConstant, Column, RingList, RingTable, rings_from_table
from phaseid.rings.calibration import Fit, Floats, Readings, ReferenceLines, lay, merged
from phaseid.rings.cells import Refused, read_position
from phaseid.rings.columns import COLUMNS
from phaseid.units import two_theta_from_d

_ABOUT_THE_GUESS = ("Scale uncertainty", "All spacings", "Spacings reach")


@dataclass(frozen=True)
class Plate:
    """The rings of one pattern; `known` is whether anything is known of their scale."""

    rings: RingList
    known: bool
    _lines: dict[str, ReferenceLines] = field(default_factory=dict, compare=False, repr=False)

    @cached_property
    def column(self) -> Column:
        """What the positions are."""
        return COLUMNS[self.rings.position_column]

    @cached_property
    def tangent(self) -> bool:
        """Whether radius × d is no constant: a plate at the large angles of X-rays, neutrons."""
        return self.column.quantity == "radius" and self.rings.probe.kind != "electron"

    @cached_property
    def readings(self) -> Readings:
        """What the fit works on."""
        return Readings(
            x=np.log(self.rings.d_A),
            sigma=self.rings.sigma_A / self.rings.d_A,
            nuisance=self._angle_errors(),
            scale_sd=max(self.rings.probe.scale_sigma, 1e-4) if self.known else None,
            sigma_stated=self.rings.sigma_stated,
        )

    def lay(self, standard: Standard) -> Fit | None:
        """The standard laid on the rings."""
        return lay(self.readings, self.lines(standard))

    def lines(self, standard: Standard) -> ReferenceLines:
        """The standard's lines, those joined that this probe shows as one ring.

        On a plate at large angles x is that of the spacing which the small-angle form would read.
        Raises InputError where the probe shows none.
        """
        if standard.label not in self._lines:
            self._lines[standard.label] = self._shown(standard)
        return self._lines[standard.label]

    def _shown(self, standard: Standard) -> ReferenceLines:
        probe = self.rings.probe
        lines = standard.lines(probe)
        if self.tangent:
            within = np.exp(lines.x) > probe.wavelength_A / np.sqrt(2.0) * 1.02
            lines = ReferenceLines(lines.x[within], lines.hkl[within], lines.intensity[within])
            lines = replace(lines, x=lines.x - tangent_excess(np.exp(lines.x), probe.wavelength_A))
        if not len(lines.x):
            raise InputError(
                f"{standard.label} shows no line to {probe.label}", remedy="Check the probe."
            )
        return merged(lines, resolution(lines.x, probe))

    def spacings_A(self, x: Floats) -> Floats:
        """True spacings of lines at `x` as `lines` states them."""
        spacing: Floats = np.exp(x)
        if not self.tangent:
            return spacing
        wavelength = self.rings.probe.wavelength_A
        return np.asarray(wavelength / (2.0 * np.sin(np.arctan(wavelength / spacing) / 2.0)))

    def small_angle_sigma(self, fit: Fit, standard: Standard) -> float:
        """Spread of tan2θ·d/λ over the rings used, where the small-angle form is taken."""
        if self.column.quantity != "radius" or self.tangent:
            return 0.0
        spacing = np.exp(self.lines(standard).x[fit.line[fit.used]])
        return float(np.std(tangent_excess(spacing, self.rings.probe.wavelength_A)))

    def _angle_errors(self) -> Floats:
        """Effect on ln d (m, q) of one sigma of zero shift and displacement (Klug & Alexander)."""
        if self.column.quantity != "two_theta":
            return np.zeros((len(self.rings), 0))
        theta = np.radians(self.rings.position) / 2.0
        per_radian = 0.5 / np.tan(theta)
        columns = [per_radian * np.radians(ZERO_SHIFT_DEG)]
        if self.rings.probe.geometry == "bragg-brentano":
            columns.append(per_radian * np.cos(theta) * np.radians(DISPLACEMENT_DEG))
        return np.stack(columns, axis=1)


def read_plate(
    table: RingTable,
    probe: str | Probe | None,
    constant: str | CameraConstant | None,
    scale_uncertainty: str | float | None,
) -> Plate:
    """The rings as measured; radii without a constant are read with a guess of it."""
    column = table.column
    if column.quantity == "radius" and constant is None and "camera constant" not in table.keys:
        radii = []
        for row in table.rows:
            with contextlib.suppress(Refused):
                radii.append(read_position(row.position, column.name).value * column.factor)
        guess = 1.5 * float(np.median(radii)) if radii else 1.0
        constant = CameraConstant(guess, None, column.plate_unit)
        rings = rings_from_table(
            table, probe=probe, camera_constant=constant, scale_uncertainty=scale_uncertainty
        )
        said = tuple(r for r in rings.remarks if not r.startswith(_ABOUT_THE_GUESS))
        return Plate(replace(rings, remarks=said), known=False)
    rings = rings_from_table(
        table, probe=probe, camera_constant=constant, scale_uncertainty=scale_uncertainty
    )
    return Plate(rings, known=True)


def tangent_excess(d_A: Floats, wavelength_A: float) -> Floats:
    """ln of what a flat plate shows over the small-angle form: tan2θ · d/λ."""
    angle = np.radians(two_theta_from_d(d_A, wavelength_A))
    return np.asarray(np.log(np.tan(angle) * d_A / wavelength_A), dtype=np.float64)


def resolution(x: Floats, probe: Probe) -> Floats:
    """Distance in ln d below which this probe shows two lines (at x) as one."""
    scatter = SCATTER[probe.kind]
    if probe.geometry in ("ring", "time-of-flight"):
        return np.full(len(x), scatter.resolution)
    sine = np.clip(probe.wavelength_A / (2.0 * np.exp(x)), 1e-6, 0.9999)
    cotangent = np.sqrt(1.0 - sine**2) / sine
    width: Floats = 0.5 * cotangent * np.radians(scatter.resolution_two_theta_deg)
    return width
