"""A calibration that was given a name: kept in a file, put to use on later ring lists."""

from __future__ import annotations

import json
import os
import re
from dataclasses import MISSING, asdict, dataclass, fields, replace
from datetime import date, datetime
from difflib import get_close_matches
from math import hypot, log
from pathlib import Path
from typing import Any

import numpy as np

from phaseid.errors import InputError
from phaseid.probes import Probe, parse_probe
from phaseid.rings.camera import CameraConstant
from phaseid.rings.columns import COLUMNS
from phaseid.rings.distortion import Distortion, corrected_ellipse, stated_direction
from phaseid.rings.reading import rings_from_table
from phaseid.rings.ringlist import RingList
from phaseid.rings.table import RingTable
from phaseid.units import d_from_two_theta

SCHEMA = "phaseid.calibration-record/1"
OLD_DAYS = 30
"""Lenses drift: a calibration older than this is warned about (common practice, no source)."""
_SAME_WAVELENGTH = 1e-3
_OTHER_RADIATION = 0.02
_WIDEST = 0.2
_LARGEST = 1e6  # of any number of a record
_NAME = re.compile(r"\w[\w.+-]{0,63}")


@dataclass(frozen=True, slots=True)
class CalibrationRecord:
    """What a calibration found.

    `created` is an ISO date; `probe` the label of the probe it was made with and `wavelength_A` its
    wavelength, calibrated where `quantity` is "two_theta". `camera_constant` (Å times `plate_unit`)
    for radii; `factor` multiplies measured d otherwise; `relative_sigma` is the one-sigma of
    either; `zero_shift_deg` measured − true 2θ. `standard` and `cell_source` say what it rests on.
    `ellipse_ratio` is 1 where no ellipse was seen; the constant is that of the mean circle.
    """

    name: str
    created: str
    standard: str
    cell_source: str
    probe: str
    wavelength_A: float
    quantity: str
    relative_sigma: float
    camera_constant: float | None = None
    plate_unit: str = ""
    factor: float = 1.0
    zero_shift_deg: float = 0.0
    rings: int = 0
    ellipse_ratio: float = 1.0
    ellipse_ratio_sigma: float = 0.0
    long_axis_deg: float = 0.0

    @property
    def ellipse(self) -> Distortion | None:
        """The ellipse that the instrument makes of circles, None where none was seen."""
        if self.ellipse_ratio == 1.0:
            return None
        return Distortion(self.ellipse_ratio, self.ellipse_ratio_sigma, self.long_axis_deg)

    def describe(self) -> str:
        """In a few words: "camera constant 25.084 Å mm ± 0.09 %, Au, 2024-05-01"."""
        if self.camera_constant is not None:
            what = f"camera constant {self.camera_constant:.5g} Å {self.plate_unit}"
        elif self.quantity == "two_theta":
            what = f"wavelength {self.wavelength_A:.6g} Å"
        else:
            what = f"measured d × {self.factor:.6g}"
        oval = ""
        if self.ellipse is not None:
            oval = f", axes {self.ellipse_ratio:.4f} to 1, the long one at {self.long_axis_deg:g}°"
        return (
            f"{what} ± {100 * self.relative_sigma:.2g} %{oval}, {self.standard}, {self.probe}, "
            f"{self.created}"
        )

    def apply(
        self,
        table: RingTable,
        *,
        probe: str | Probe | None = None,
        scale_uncertainty: str | float | None = None,
        today: date | None = None,
    ) -> RingList:
        """Read a ring list by this calibration; its uncertainty becomes the scale's.

        A list that states no probe is taken as made with that of the calibration. Raises
        InputError where list and calibration are of different kinds, and as `rings_from_table`.
        """
        if probe is None and "probe" not in table.keys:
            probe = self.probe
        quantity = table.column.quantity
        kind = "spacing" if quantity in ("d", "g", "q") else quantity
        own = "spacing" if self.quantity in ("d", "g", "q") else self.quantity
        if kind != own or (kind == "radius" and table.column.plate_unit != self.plate_unit):
            raise InputError(
                f"the calibration '{self.name}' ({self.describe()}) does not fit "
                f"{table.column.name}",
                path=table.source or None,
                remedy="Use one made in the unit of the list: phaseid config lists them.",
            )
        constant = None
        if self.camera_constant is not None:
            constant = CameraConstant(self.camera_constant, None, self.plate_unit)
        rings = rings_from_table(
            table,
            probe=probe,
            scale_uncertainty=self.relative_sigma
            if scale_uncertainty is None
            else scale_uncertainty,
            camera_constant=constant,
        )
        remarks = [f"Calibration '{self.name}': {self.describe()}."]
        ratio = log(rings.probe.wavelength_A / self.wavelength_A)
        if kind == "two_theta":
            if abs(ratio) > _OTHER_RADIATION:
                raise InputError(
                    f"the calibration '{self.name}' is for {self.wavelength_A:.5g} Å, the list was "
                    f"made with {rings.probe.label}",
                    remedy="Use the calibration of this wavelength.",
                )
            rings = self._by_angles(rings)
        elif kind == "spacing":
            rings = replace(rings, d_A=rings.d_A * self.factor, sigma_A=rings.sigma_A * self.factor)
        elif abs(ratio) > _SAME_WAVELENGTH:
            wider = min(hypot(self.relative_sigma, ratio), _WIDEST)
            if scale_uncertainty is None:
                rings = replace(rings, probe=rings.probe.with_scale(wider))
            remarks.append(
                f"Warning: '{self.name}' was made with {self.probe}, this pattern with "
                f"{rings.probe.label}: the scale is taken as uncertain by "
                f"{100 * rings.probe.scale_sigma:.2g} %. Calibrate at this voltage."
            )
        if kind == "radius" and self.ellipse is not None:
            rings, said = _rounded(rings, self.ellipse, widen=scale_uncertainty is None)
            remarks.append(said)
        age = ((today or date.today()) - date.fromisoformat(self.created)).days
        if age > OLD_DAYS:
            remarks.append(
                f"Warning: the calibration '{self.name}' is {age} days old; check it on a standard."
            )
        return replace(rings, remarks=(*rings.remarks, *remarks))

    def _by_angles(self, rings: RingList) -> RingList:
        """Spacings by the calibrated wavelength, zero shift taken off."""
        probe = replace(rings.probe, wavelength_A=self.wavelength_A)
        angle = rings.position - self.zero_shift_deg
        d_A = d_from_two_theta(angle, self.wavelength_A)
        slope = COLUMNS["two_theta_deg"].slope_A(angle, d_A, self.wavelength_A)
        return replace(
            rings, probe=probe, d_A=d_A, sigma_A=np.maximum(rings.position_sigma * slope, 1e-9)
        )


def _rounded(rings: RingList, ellipse: Distortion, *, widen: bool) -> tuple[RingList, str]:
    """Spacings by the mean circle, the scale as uncertain as the ellipse leaves it; and a remark.

    Positions stay as measured.
    """
    if corrected_ellipse(rings.metadata) is not None:
        return rings, "The list's own ellipse was measured; that of the calibration is not used."
    direction = stated_direction(rings.metadata, rings.source)
    spread = ellipse.sigma(direction)
    if widen:
        wider = min(hypot(rings.probe.scale_sigma, spread), _WIDEST)
        rings = replace(rings, probe=rings.probe.with_scale(wider))
    if direction is None:
        return rings, (
            f"The direction of the radii is not stated: the ellipse adds {100 * spread:.2g} % to "
            "the scale's uncertainty. A line '# direction: 30' (degrees) lets it be corrected."
        )
    stretch = ellipse.stretch(direction)
    rings = replace(rings, d_A=rings.d_A * stretch, sigma_A=rings.sigma_A * stretch)
    return rings, (
        f"Radii measured at {direction:g}° were divided by {stretch:.4f}, by the ellipse of the "
        "calibration."
    )


def save_calibration(record: CalibrationRecord, folder: Path) -> Path:
    """Keep a record in `folder`; earlier ones of that name stay in the file, the newest is used.

    Raises InputError for a name that cannot be a file's, and where nothing can be written.
    """
    path = _path(record.name, folder)
    earlier = _read(path) if path.exists() else []
    text = json.dumps({"schema": SCHEMA, "records": [*earlier, asdict(record)]}, indent=2)
    part = path.with_name(f".{path.name}.{os.getpid()}.part")
    try:
        folder.mkdir(parents=True, exist_ok=True)
        part.write_text(text + "\n", encoding="utf-8")
        part.replace(path)
    except OSError as error:
        part.unlink(missing_ok=True)
        reason = (error.strerror or str(error)).lower()
        raise InputError(
            f"the calibration cannot be kept: {reason}",
            path=path,
            remedy="Set $PHASEID_CONFIG to a file in a folder that can be written.",
        ) from None
    return path


def load_calibration(name: str, folder: Path) -> CalibrationRecord:
    """The newest calibration of that name; raises InputError naming those that exist."""
    path = _path(name, folder)
    if not path.is_file():
        names = calibration_names(folder)
        close = get_close_matches(name, names, n=3, cutoff=0.5) or names[:8]
        raise InputError(
            f"no calibration is called '{name}'",
            remedy=f"There are: {', '.join(close)}."
            if close
            else "Make one: phaseid calibrate RINGS --standard Au --save NAME.",
        )
    held = _read(path)
    try:
        record = CalibrationRecord(**held[-1])
        if not _holds_its_kinds(record):
            raise _damaged(path)
        parse_probe(record.probe)
        date.fromisoformat(record.created)
    except (TypeError, ValueError, IndexError, InputError):
        raise _damaged(path) from None
    if not (record.relative_sigma > 0 and record.wavelength_A > 0 and record.factor > 0):
        raise _damaged(path)
    if not (record.ellipse_ratio >= 1 and record.ellipse_ratio_sigma >= 0):
        raise _damaged(path)
    return record


def calibration_names(folder: Path) -> list[str]:
    """The names of the calibrations kept in `folder`."""
    return sorted(path.stem for path in folder.glob("*.json")) if folder.is_dir() else []


def today_text() -> str:
    """Today, as `CalibrationRecord.created` has it."""
    return datetime.now().date().isoformat()


def _path(name: str, folder: Path) -> Path:
    if _NAME.fullmatch(name) is None:
        raise InputError(
            f"'{name}' cannot be the name of a calibration",
            remedy="Use letters, digits, '-', '_' and '.', such as plate-80cm.",
        )
    return folder / f"{name}.json"


def _read(path: Path) -> list[dict[str, Any]]:
    try:
        held = json.loads(path.read_text(encoding="utf-8"))
        records = held["records"]
    except (OSError, ValueError, KeyError, TypeError, RecursionError):
        raise _damaged(path) from None
    names = {field.name for field in fields(CalibrationRecord)}
    needed = {field.name for field in fields(CalibrationRecord) if field.default is MISSING}
    if (
        not isinstance(records, list)
        or held.get("schema") != SCHEMA
        or not all(isinstance(one, dict) and needed <= set(one) <= names for one in records)
    ):
        raise _damaged(path)
    return records


def _holds_its_kinds(record: CalibrationRecord) -> bool:
    """Whether every field is text or a number of sensible size, as it should be."""
    for one in fields(record):
        value, kind = getattr(record, one.name), str(one.type)
        if kind == "str":
            sound = isinstance(value, str)
        elif value is None:
            sound = "None" in kind
        else:
            number = isinstance(value, int | float) and not isinstance(value, bool)
            sound = number and -_LARGEST < value < _LARGEST
        if not sound:
            return False
    return True


def _damaged(path: Path) -> InputError:
    return InputError(
        "is no calibration that can be read",
        path=path,
        remedy="Move the file away and calibrate anew with --save.",
    )
