"""Ring lists from files, text and typed numbers."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from math import isnan
from pathlib import Path

import numpy as np

from phaseid.errors import InputError
from phaseid.probes import Probe, parse_probe, parse_relative
from phaseid.probes.numbers import check_relative, plain_number
from phaseid.probes.parsing import EXAMPLES
from phaseid.rings.camera import EXAMPLE, CameraConstant, parse_camera_constant
from phaseid.rings.cells import (
    Intensity,
    Position,
    Refused,
    read_intensity,
    read_limit,
    read_position,
    read_sigma,
    read_unevenness,
)
from phaseid.rings.columns import COLUMNS, Column, Floats
from phaseid.rings.plausibility import slips
from phaseid.rings.ringlist import RingList
from phaseid.rings.table import RingTable, Row, parse_table, read_text, refuse_rows

SMALLEST_D_A, LARGEST_D_A = 0.05, 10_000.0

# one-sigma of reading one ring where none is stated: common practice, no source
PLATE_READING = 0.003  # of d; ±0.05 to 0.1 mm on radii of about 20 mm
FLIGHT_READING = 0.001  # of d
ANGLE_READING_DEG = {"x-ray": 0.02, "neutron": 0.05}
SMALLEST_READING = 1e-4  # of d


def read_rings(
    path: str | Path,
    *,
    probe: str | Probe | None = None,
    scale_uncertainty: str | float | None = None,
    camera_constant: str | CameraConstant | None = None,
) -> RingList:
    """Read a ring list file. What is given as argument wins over the file.

    Raises InputError naming file, line and remedy; all bad rows are reported together.
    """
    return rings_from_text(
        read_text(path),
        source=str(path),
        probe=probe,
        scale_uncertainty=scale_uncertainty,
        camera_constant=camera_constant,
    )


def rings_from_text(
    text: str,
    *,
    source: str = "typed text",
    probe: str | Probe | None = None,
    scale_uncertainty: str | float | None = None,
    camera_constant: str | CameraConstant | None = None,
) -> RingList:
    """Read the text of a ring list file; `source` is the name to show in messages."""
    return rings_from_table(
        parse_table(text, source),
        probe=probe,
        scale_uncertainty=scale_uncertainty,
        camera_constant=camera_constant,
    )


def rings_from_values(
    values: Sequence[float | str],
    *,
    column: str = "d_A",
    probe: str | Probe,
    scale_uncertainty: str | float | None = None,
    sigma: float | str | Sequence[float | str | None] | None = None,
    intensities: Sequence[float | str | None] | None = None,
    title: str = "typed rings",
    camera_constant: str | CameraConstant | None = None,
) -> RingList:
    """A ring list from numbers; `sigma` is one for all or one per ring, in the unit of `column`.

    Numbers typed as text keep their decimals, which tell how far they were rounded. Raises
    InputError like `read_rings`.
    """
    table = table_from_values(
        values, column=column, sigma=sigma, intensities=intensities, title=title
    )
    return rings_from_table(
        table, probe=probe, scale_uncertainty=scale_uncertainty, camera_constant=camera_constant
    )


def table_from_values(
    values: Sequence[float | str],
    *,
    column: str = "d_A",
    sigma: float | str | Sequence[float | str | None] | None = None,
    intensities: Sequence[float | str | None] | None = None,
    title: str = "typed rings",
) -> RingTable:
    """The cells of a ring list typed as numbers; raises InputError like `read_rings`."""
    if column not in COLUMNS:
        raise InputError(
            f"unknown position column '{column}'", remedy=f"Choose one of {', '.join(COLUMNS)}."
        )
    if not len(values):
        raise InputError("no rings are given", remedy="Give at least one position.")
    sigmas = (
        [sigma] * len(values) if sigma is None or isinstance(sigma, float | int | str) else sigma
    )
    levels: Sequence[float | str | None] = (
        [None] * len(values) if intensities is None else intensities
    )
    for name, given in (("sigmas", sigmas), ("intensities", levels)):
        if len(given) != len(values):
            raise InputError(
                f"{len(given)} {name} for {len(values)} rings", remedy="Give one each."
            )
    rows = [
        Row(f"value {index}", _cell(value), _cell(one_sigma), _cell(level))
        for index, (value, one_sigma, level) in enumerate(
            zip(values, sigmas, levels, strict=True), start=1
        )
    ]
    return RingTable("", COLUMNS[column], rows, {"title": title}, {"title": (title, None)})


def rings_from_table(
    table: RingTable,
    *,
    probe: str | Probe | None = None,
    scale_uncertainty: str | float | None = None,
    camera_constant: str | CameraConstant | None = None,
) -> RingList:
    """Give the cells of a table their meaning in Å; raises InputError like `read_rings`."""
    constant = _camera_constant(table, camera_constant)
    the_probe = _probe(table, probe, _scale(table, scale_uncertainty, constant))
    column = table.column
    _check_convertible(table, the_probe, constant)
    remarks = [*table.remarks]

    cells, d_A = _usable(table, the_probe, 1.0 if constant is None else constant.value)
    positions, sigmas, levels, uneven = zip(*cells, strict=True)
    position = np.array([cell.value for cell in positions], dtype=np.float64)
    slope = column.slope_A(position, d_A, the_probe.wavelength_A)
    stated = np.array(sigmas, dtype=np.float64)
    missing = np.isnan(stated)
    if missing.any():
        step = min(cell.step for cell in positions)
        reading, words = _default_reading(column, the_probe, d_A)
        default = np.hypot(reading, step / np.sqrt(12.0) * slope) / slope
        stated = np.where(missing, default, stated)
        which = "each ring" if missing.all() else f"{missing.sum()} of {len(missing)} rings"
        remarks.append(f"Sigma not stated for {which}: {words} assumed, rounding added.")
    intensity, interval, factor = _relative(levels, remarks)
    spottiness, arcs = (np.array(column, dtype=np.float64) for column in zip(*uneven, strict=True))
    title, _ = table.keys.get("title", ("", None))
    rings = RingList(
        title=title or Path(table.source).stem or "rings",
        probe=the_probe,
        position_column=column.name,
        position=position,
        position_sigma=stated,
        d_A=d_A,
        sigma_A=stated * slope,
        intensity=intensity,
        intensity_range=interval,
        grades=tuple(level.grade for level in levels),
        notes=tuple(row.note for row in table.rows),
        sigma_stated=not bool(missing.any()),
        source=table.source,
        metadata=dict(table.metadata),
        camera_constant=constant,
        detection_limit=_detection_limit(table, factor),
        spottiness=None if np.isnan(spottiness).all() else spottiness,
        arcs=None if np.isnan(arcs).all() else arcs,
        disc=table.disc,
        curve=table.curve,
    )
    found = tuple(slips(rings, [row.where for row in table.rows]))
    return replace(rings, remarks=(*the_probe.remarks, *remarks, *found), slips=found)


def _cell(value: float | str | None) -> str:
    if value is None or isinstance(value, str):
        return value or ""
    return "" if isnan(value) else plain_number(value)


def _located(error: InputError, table: RingTable, line: int | None) -> InputError:
    return InputError(error.what, path=table.source or None, line=line, remedy=error.remedy)


def _camera_constant(table: RingTable, given: str | CameraConstant | None) -> CameraConstant | None:
    if isinstance(given, CameraConstant):
        return given
    if given is not None:
        return parse_camera_constant(given)
    if "camera constant" not in table.keys:
        return None
    text, line = table.keys["camera constant"]
    try:
        return parse_camera_constant(text)
    except InputError as error:
        raise _located(error, table, line) from None


def _scale(
    table: RingTable, given: str | float | None, constant: CameraConstant | None
) -> float | None:
    """Argument, then the file's own words, then the camera constant's sigma, else None."""
    if given is not None:
        return parse_relative(given) if isinstance(given, str) else check_relative(given)
    if "scale uncertainty" in table.keys:
        text, line = table.keys["scale uncertainty"]
        try:
            return parse_relative(text)
        except InputError as error:
            raise _located(error, table, line) from None
    relative = None if constant is None else constant.relative_sigma
    return None if relative is None else check_relative(relative)


def _detection_limit(table: RingTable, factor: float) -> float | None:
    """The file's limit on the scale on which the strongest is 100, None where it states none."""
    if "detection limit" not in table.keys:
        return None
    text, line = table.keys["detection limit"]
    try:
        return read_limit(text, factor)
    except Refused as reason:
        remedy = (
            "Give the weakest intensity that would have been seen, on the scale of 'intensity'."
        )
        raise InputError(str(reason), path=table.source or None, line=line, remedy=remedy) from None


def _probe(table: RingTable, given: str | Probe | None, scale: float | None) -> Probe:
    if isinstance(given, Probe):
        return given if scale is None else given.with_scale(scale)
    if given is not None:
        return parse_probe(given, scale_sigma=scale)
    if "probe" not in table.keys:
        raise InputError(
            "no probe is stated",
            path=table.source or None,
            remedy=f"Add a line '# probe: …' or give --probe: {EXAMPLES}.",
        )
    text, line = table.keys["probe"]
    try:
        return parse_probe(text, scale_sigma=scale)
    except InputError as error:
        raise _located(error, table, line) from None


def _check_convertible(table: RingTable, probe: Probe, constant: CameraConstant | None) -> None:
    column = table.column
    path = table.source or None
    if column.quantity == "two_theta":
        if probe.geometry == "time-of-flight":
            raise InputError(
                "angles do not tell spacings by time of flight", path=path, remedy="Give d_A."
            )
        if not probe.wavelength_stated:
            raise InputError(
                f"angles need a wavelength and the probe '{probe.label}' states none",
                path=path,
                remedy=f"Write the probe in full: {EXAMPLES}.",
            )
    if column.quantity == "radius":
        unit = column.plate_unit
        if constant is None:
            raise InputError(
                f"{column.name} needs a camera constant and none is stated",
                path=path,
                remedy=f"Add a line '# camera constant: {EXAMPLE.replace('mm', unit)}' or give "
                "--camera-constant; 'phaseid calibrate' finds it from a known standard.",
            )
        if constant.plate_unit != unit:
            raise InputError(
                f"{column.name} needs a camera constant in A {unit}, "
                f"the one given is in A {constant.plate_unit}",
                path=path,
                remedy="Use the column that fits the constant, or convert one of them.",
            )


def _usable(
    table: RingTable, probe: Probe, constant: float
) -> tuple[list[tuple[Position, float, Intensity, tuple[float, float]]], Floats]:
    """Position, sigma, intensity, (spottiness, arcs) and spacing (Å) of every row.

    All bad rows are refused together.
    """
    cells, spacings, problems = [], [], []
    for row in table.rows:
        if row.defect:
            problems.append((row.where, row.defect))
            continue
        try:
            position = read_position(row.position, table.column.name)
            sigma = read_sigma(row.sigma, position.value)
            level = read_intensity(row.intensity)
            spottiness = read_unevenness(row.spottiness, "spottiness")
            uneven = spottiness, read_unevenness(row.arcs, "arcs")
            spacings.append(_spacing(table.column, position.value, probe, constant))
        except Refused as reason:
            problems.append((row.where, str(reason)))
            continue
        cells.append((position, position.sigma if isnan(sigma) else sigma, level, uneven))
    refuse_rows(problems, table.source)
    return cells, np.array(spacings, dtype=np.float64)


def _spacing(column: Column, value: float, probe: Probe, constant: float) -> float:
    if column.quantity == "two_theta" and value >= 180.0:
        raise Refused(f"two_theta_deg is {value:g}, angles end at 180")
    with np.errstate(over="ignore"):
        d = float(column.d_A(np.array([value]), probe.wavelength_A, constant)[0])
    if not SMALLEST_D_A <= d <= LARGEST_D_A:
        raise Refused(
            f"{column.name} {value:g} means d = {d:.3g} Å, "
            f"outside {SMALLEST_D_A:g} to {LARGEST_D_A:g} Å (wrong unit?)"
        )
    return d


def _default_reading(column: Column, probe: Probe, d_A: Floats) -> tuple[Floats, str]:
    """One-sigma (Å) of reading a ring with such a probe, and how to say it."""
    if probe.geometry == "time-of-flight":
        return FLIGHT_READING * d_A, f"{100 * FLIGHT_READING:g} % of d"
    if column.quantity == "radius" or probe.geometry in ("ring", "transmission"):
        return PLATE_READING * d_A, f"{100 * PLATE_READING:g} % of d"
    angle = ANGLE_READING_DEG[probe.kind]
    per_degree = COLUMNS["two_theta_deg"].slope_A(d_A, d_A, probe.wavelength_A)
    return np.maximum(angle * per_degree, SMALLEST_READING * d_A), f"{angle:g}° in 2θ"


def _relative(levels: Sequence[Intensity], remarks: list[str]) -> tuple[Floats, Floats, float]:
    """Intensities (m,), intervals (m, 2) and the factor that makes the strongest number 100."""
    value = np.array([level.value for level in levels], dtype=np.float64)
    interval = np.array([(level.low, level.high) for level in levels], dtype=np.float64)
    number = np.array([not level.grade for level in levels]) & ~np.isnan(value)
    scale = 1.0
    if number.any():
        scale = float(100.0 / value[number].max())
        value[number] *= scale
        interval[number] *= scale
    if number.any() and any(level.grade for level in levels):
        remarks.append(
            "Numbers and grades are mixed: the strongest number was taken as 100 beside the grades."
        )
    return value, interval, scale
