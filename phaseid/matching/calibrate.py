"""An instrument's constant from the rings of a known standard."""

from __future__ import annotations

from dataclasses import dataclass, replace
from math import exp, hypot, sqrt
from typing import Literal

import numpy as np

from phaseid.errors import InputError
from phaseid.matching.calibrate_doubts import checked
from phaseid.matching.records import Record, Tidy, indices
from phaseid.matching.settings import ZERO_SHIFT_DEG
from phaseid.matching.standard_rings import Plate, read_plate
from phaseid.matching.standards import Standard
from phaseid.probes.probe import Probe
from phaseid.rings import CameraConstant, RingList, RingTable, rings_from_table
from phaseid.rings.calibration import Fit, Ints, lay
from phaseid.rings.calibration_record import CalibrationRecord, today_text
from phaseid.rings.columns import COLUMNS
from phaseid.rings.distortion import between, corrected_ellipse, stated_direction

GUESSED_PROBE = "electron 200 kV"
_ACROSS_SD = 0.03
"""One-sigma of ln of an ellipse's axis ratio: 0.5 to 2 % between axes (common practice)."""


@dataclass(frozen=True, slots=True)
class Value:
    """A number and its one-sigma."""

    value: float
    sigma: float


@dataclass(frozen=True, slots=True)
class AssignedRing:
    """A ring and the standard's line it is; `d_A` of the line at the standard's temperature."""

    ring: int
    hkl: tuple[int, int, int]
    d_A: float
    residual_sigma: float


@dataclass(frozen=True, slots=True)
class MissingLine:
    """A line of the standard that no ring shows; `intensity` of 100."""

    hkl: tuple[int, int, int]
    d_A: float
    intensity: float


@dataclass(frozen=True, slots=True)
class Ellipse:
    """Axes of an elliptical distortion: long over short, and the direction of the long one.

    `long_axis` names that of two directions at right angles, `along` and `across` are the constants
    in them; None where an image was measured, whose radii are those of the mean circle.
    """

    ratio: Value
    angle_deg: float
    long_axis: Literal["along", "across"] | None = None
    along: Value | None = None
    across: Value | None = None


@dataclass(frozen=True, slots=True, eq=False)
class Calibration(Tidy):
    """What a standard says about the instrument.

    `factor` multiplies measured d (1 where no constant was stated: then d is by the constant
    found). `camera_constant` (Å mm or Å px by `plate_unit`) for radii, `wavelength_A` and
    `zero_shift_deg` (measured − true 2θ) for angles, else None. `scatter` is how much residuals
    exceed the sigmas.
    """

    standard: Standard
    rings: RingList
    factor: Value
    camera_constant: Value | None
    plate_unit: str
    wavelength_A: Value | None
    zero_shift_deg: float | None
    camera_length_mm: float | None
    pixel_um: Value | None
    ellipse: Ellipse | None
    assignments: tuple[AssignedRing, ...]
    rejected: tuple[int, ...]
    missing: tuple[MissingLine, ...]
    scatter: float
    probability: float
    remarks: tuple[str, ...]

    @property
    def relative_sigma(self) -> float:
        """One-sigma of the common factor on d, relative."""
        return self.factor.sigma / self.factor.value

    def records(self) -> list[Record]:
        """One record per ring: the standard's line it is, or none where it was rejected."""
        line = {found.ring: found for found in self.assignments}
        return [
            {
                "ring": ring + 1,
                self.rings.position_column: float(self.rings.position[ring]),
                "hkl": None if ring not in line else indices(line[ring].hkl),
                "d_A": None if ring not in line else line[ring].d_A,
                "residual_sigma": None if ring not in line else line[ring].residual_sigma,
            }
            for ring in range(len(self.rings))
        ]

    def summary(self) -> str:
        """The constant found, with its one-sigma."""
        if self.camera_constant is not None:
            what, value, unit = "camera constant", self.camera_constant, f" Å {self.plate_unit}"
        elif self.wavelength_A is not None:
            what, value, unit = "wavelength", self.wavelength_A, " Å"
        else:
            what, value, unit = "factor on measured d", self.factor, ""
        return (
            f"{what} {value.value:.6g} ± {value.sigma:.2g}{unit}, from {len(self.assignments)} of "
            f"{len(self.rings)} rings of {self.standard.label}"
        )


def calibrate(
    table: RingTable,
    standard: Standard,
    *,
    probe: str | Probe | None = None,
    camera_constant: str | CameraConstant | None = None,
    scale_uncertainty: str | float | None = None,
    across: RingTable | None = None,
    camera_length_mm: float | None = None,
    temperature_C: float | None = None,
) -> Calibration:
    """Find the constant that lays the rings of `table` on the lines of `standard`.

    A list of radii need state no camera constant. `across` are the same rings measured at right
    angles. `temperature_C` is that at which the standard was made. Raises InputError where the list
    cannot be read, where the rings do not fit the standard, and where they fit it in several ways.
    """
    remarks: list[str] = []
    if probe is None and "probe" not in table.keys and table.column.quantity != "two_theta":
        probe = GUESSED_PROBE
        remarks.append(f"No probe stated: {GUESSED_PROBE} assumed, to know which lines are strong.")
    plate = read_plate(table, probe, camera_constant, scale_uncertainty)
    rings, column = plate.rings, plate.column
    fit, doubts = checked(plate.lay(standard), plate, standard, temperature_C)
    remarks += doubts
    systematic = plate.small_angle_sigma(fit, standard)
    sigma = float(np.sqrt(fit.sigma**2 + standard.relative_sigma**2 + systematic**2))
    factor = exp(fit.shift)
    constant = wavelength = zero = pixel = ellipse = length = None
    if column.quantity == "radius" and rings.camera_constant is not None:
        value = rings.camera_constant.value * factor
        constant = Value(value, value * sigma)
        if across is not None:
            ellipse, constant = _across(across, plate, standard, fit, constant)
            if not _seen(ellipse):
                remarks.append("The two directions agree within two sigma: no ellipse is seen.")
        elif (own := corrected_ellipse(table.metadata)) is not None:
            ellipse = Ellipse(Value(own.ratio, own.ratio_sigma), own.long_axis_deg)
        length, pixel = _lengths(plate, constant, camera_length_mm)
        if length is not None and camera_length_mm is not None and pixel is None:
            found = length / camera_length_mm
            remarks.append(f"The camera length found is {found:.4f} of the one given.")
    elif across is not None:
        raise InputError(
            "--across needs radii or diameters", remedy="Spacings and angles show no ellipse."
        )
    if column.quantity == "two_theta":
        wavelength = Value(rings.probe.wavelength_A * factor, rings.probe.wavelength_A * sigma)
        zero = float(fit.nuisance[0]) * ZERO_SHIFT_DEG
    if not standard.certified:
        remarks.append(
            f"{standard.label} is no certified standard: its cell is taken from the library, "
            f"good to {100 * standard.relative_sigma:.2g} %."
        )
    return Calibration(
        standard=standard,
        rings=rings,
        factor=Value(factor, factor * sigma) if plate.known else Value(1.0, sigma),
        camera_constant=constant,
        plate_unit=column.plate_unit,
        wavelength_A=wavelength,
        zero_shift_deg=zero,
        camera_length_mm=length,
        pixel_um=pixel,
        ellipse=ellipse,
        assignments=_assigned(fit, plate, standard),
        rejected=tuple(np.flatnonzero(fit.line < 0).tolist()),
        missing=_missing(fit, plate, standard),
        scatter=fit.scatter,
        probability=fit.probability,
        remarks=(*rings.remarks, *remarks),
    )


def record(result: Calibration, name: str) -> CalibrationRecord:
    """The calibration as it is kept under a name, with today's date."""
    column = COLUMNS[result.rings.position_column]
    constant = result.camera_constant
    wavelength = result.wavelength_A
    ellipse = result.ellipse if result.ellipse and _seen(result.ellipse) else None
    return CalibrationRecord(
        name=name,
        created=today_text(),
        standard=result.standard.label,
        cell_source=result.standard.source,
        probe=result.rings.probe.label,
        wavelength_A=result.rings.probe.wavelength_A if wavelength is None else wavelength.value,
        quantity=column.quantity,
        relative_sigma=result.relative_sigma
        if constant is None
        else constant.sigma / constant.value,
        camera_constant=None if constant is None else constant.value,
        plate_unit=column.plate_unit,
        factor=result.factor.value,
        zero_shift_deg=result.zero_shift_deg or 0.0,
        rings=len(result.assignments),
        ellipse_ratio=1.0 if ellipse is None else ellipse.ratio.value,
        ellipse_ratio_sigma=0.0 if ellipse is None else ellipse.ratio.sigma,
        long_axis_deg=0.0 if ellipse is None else ellipse.angle_deg,
    )


def _seen(ellipse: Ellipse) -> bool:
    return ellipse.ratio.value - 1.0 > 2.0 * ellipse.ratio.sigma


def _across(
    table: RingTable, plate: Plate, standard: Standard, fit: Fit, along: Value
) -> tuple[Ellipse, Value]:
    """The same rings at right angles: axis ratio, and the constant of the mean circle."""
    column = plate.column
    if table.column.name != column.name:
        raise InputError(
            f"--across is in {table.column.name}, the rings in {column.name}",
            remedy="Give both in the same unit.",
        )
    guess = CameraConstant(along.value, None, column.plate_unit)
    other = Plate(rings_from_table(table, probe=plate.rings.probe, camera_constant=guess), True)
    second = lay(replace(other.readings, scale_sd=_ACROSS_SD), plate.lines(standard))
    if second is None or second.log_evidence < 0.0:
        raise InputError(
            f"the rings given by --across do not fit {standard.label} within the distortion that "
            "lenses have",
            remedy="Give the same rings, measured at right angles.",
        )
    common = (along.sigma / along.value) ** 2 - fit.sigma**2
    ratio_sigma = hypot(fit.sigma, second.sigma)
    across = along.value * exp(second.shift)
    direction = stated_direction(plate.rings.metadata, plate.rings.source) or 0.0
    axes = between(along.value, across, ratio_sigma, direction)
    mean = along.value * exp(second.shift / 2)
    ellipse = Ellipse(
        ratio=Value(axes.ratio, axes.ratio_sigma),
        angle_deg=axes.long_axis_deg,
        long_axis="along" if second.shift < 0 else "across",
        along=along,
        across=Value(across, across * sqrt(second.sigma**2 + common)),
    )
    return ellipse, Value(mean, mean * sqrt(ratio_sigma**2 / 4 + common))


def _lengths(
    plate: Plate, constant: Value, camera_length_mm: float | None
) -> tuple[float | None, Value | None]:
    """Camera length (mm) of radii in mm; size of a pixel (µm) at a camera length given."""
    probe = plate.rings.probe
    if not probe.wavelength_stated:
        return None, None
    if plate.column.plate_unit == "mm":
        return constant.value / probe.wavelength_A, None
    if camera_length_mm is None:
        return None, None
    size = probe.wavelength_A * camera_length_mm / constant.value * 1e3
    return camera_length_mm, Value(size, size * constant.sigma / constant.value)


def _assigned(fit: Fit, plate: Plate, standard: Standard) -> tuple[AssignedRing, ...]:
    """Each ring kept, with its line."""
    lines = plate.lines(standard)
    spacing = plate.spacings_A(lines.x)
    return tuple(
        AssignedRing(int(i), _indices(lines.hkl[j]), float(spacing[j]), float(fit.residual[i]))
        for i, j in zip(fit.used, fit.line[fit.used], strict=True)
    )


def _missing(fit: Fit, plate: Plate, standard: Standard) -> tuple[MissingLine, ...]:
    """Lines between the outermost rings that none shows."""
    lines = plate.lines(standard)
    spacing = plate.spacings_A(lines.x)
    return tuple(
        MissingLine(_indices(lines.hkl[j]), float(spacing[j]), float(lines.intensity[j]))
        for j in fit.missing
    )


def _indices(hkl: Ints) -> tuple[int, int, int]:
    h, k, l = (int(i) for i in hkl)  # noqa: E741 (Miller's own letter)
    return h, k, l
