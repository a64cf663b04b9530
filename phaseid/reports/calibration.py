"""A calibration as text and as JSON."""

from __future__ import annotations

from typing import Any

from phaseid.matching.calibrate import Calibration, Ellipse, Value
from phaseid.reports.json import CELL_KEYS, phase_dict, probe_dict
from phaseid.reports.plain import (
    Column,
    cell_text,
    hkl_text,
    phase_text,
    safe,
    signed_text,
    table,
    wrap,
)

SCHEMA = "phaseid.calibration/1"
_COLUMNS = (
    Column("ring"),
    Column("measured"),
    Column("hkl"),
    Column("d\nÅ"),
    Column("off by\nsigma"),
    Column("off by\n%"),
)


def calibration_dict(result: Calibration, saved: str | None = None) -> dict[str, Any]:
    """Return the object that `phaseid calibrate --json` prints; `saved` is the name given to it."""
    constant = result.camera_constant
    standard = result.standard
    ellipse = result.ellipse
    return {
        "schema": SCHEMA,
        "standard": phase_dict(standard.phase),
        "standard_cell": {
            "label": standard.label,
            "cell": dict(zip(CELL_KEYS, standard.cell, strict=True)),
            "relative_sigma": standard.relative_sigma,
            "source": standard.source,
            "temperature_C": standard.temperature_C,
            "certified": standard.certified,
        },
        "probe": probe_dict(result.rings.probe),
        "camera_constant_A_mm": _value(constant if result.plate_unit == "mm" else None),
        "camera_constant_A_px": _value(constant if result.plate_unit == "px" else None),
        "wavelength_A": _value(result.wavelength_A),
        "zero_shift_deg": result.zero_shift_deg,
        "camera_length_mm": result.camera_length_mm,
        "pixel_um": _value(result.pixel_um),
        "scale": {"factor": result.factor.value, "sigma": result.factor.sigma},
        "relative_sigma": result.relative_sigma,
        "ellipse": None
        if ellipse is None
        else {
            "ratio": ellipse.ratio.value,
            "ratio_sigma": ellipse.ratio.sigma,
            "angle_deg": ellipse.angle_deg,
            "long_axis": ellipse.long_axis,
            "along": _value(ellipse.along),
            "across": _value(ellipse.across),
        },
        "assignments": [
            {
                "ring": a.ring,
                "hkl": list(a.hkl),
                "d_A": a.d_A,
                "residual_sigma": a.residual_sigma,
            }
            for a in result.assignments
        ],
        "rejected": list(result.rejected),
        "missing": [
            {"hkl": list(m.hkl), "d_A": m.d_A, "intensity": m.intensity} for m in result.missing
        ],
        "scatter": result.scatter,
        "probability": result.probability,
        "saved": saved,
        "remarks": list(result.remarks),
    }


def calibration_text(result: Calibration, width: int = 80) -> str:
    """Return the constant, what it rests on ring by ring, and what is doubtful about it."""
    page = wrap(_headline(result), width, indent="")
    standard = result.standard
    page += wrap(
        f"Standard: {phase_text(standard.phase)}, {cell_text(standard.cell)} "
        f"at {standard.temperature_C:g} °C ({safe(standard.source)})",
        width,
        indent="  ",
        first="",
    )
    page += [line for text in _further(result) for line in wrap(text, width, first="")]
    page += ["", *table(_COLUMNS, _rows(result), width)]
    strong = [m for m in result.missing if m.intensity >= 10]
    if strong:
        names = ", ".join(f"{hkl_text(m.hkl)} ({m.intensity:.0f})" for m in strong)
        page += ["", *wrap(f"Not among the rings (intensity of 100): {names}", width, first="")]
    if result.remarks:
        page += ["", "Remarks"]
        for remark in result.remarks:
            page += wrap(remark, width, first="  ", indent="    ")
    return "\n".join(page) + "\n"


def value_text(value: Value) -> str:
    """Write a number with as many digits as its sigma supports: 25.084 ± 0.022.

    >>> value_text(Value(25.08449, 0.02207))
    '25.084 ± 0.022'
    """
    digits = 4
    if value.sigma > 0:
        digits = max(0, 1 - int(f"{value.sigma:e}".partition("e")[2]))
    return f"{value.value:.{digits}f} ± {value.sigma:.{digits}f}"


def _value(value: Value | None) -> dict[str, float] | None:
    return None if value is None else {"value": value.value, "sigma": value.sigma}


def _headline(result: Calibration) -> str:
    share = f"{100 * result.relative_sigma:.2g} %"
    count = f"{len(result.assignments)} of {len(result.rings)} rings"
    if result.camera_constant is not None:
        constant = f"{value_text(result.camera_constant)} Å {result.plate_unit}"
        return f"Camera constant {constant} ({share}), from {count}"
    if result.wavelength_A is not None:
        return f"Wavelength {value_text(result.wavelength_A)} Å ({share}), from {count}"
    return f"Measured d × {value_text(result.factor)} = d ({share}), from {count}"


def _further(result: Calibration) -> list[str]:
    found = []
    if result.pixel_um is not None and result.camera_length_mm is not None:
        found.append(
            f"One pixel is {value_text(result.pixel_um)} µm at a camera length of "
            f"{result.camera_length_mm:g} mm"
        )
    elif result.camera_length_mm is not None:
        found.append(f"Camera length {result.camera_length_mm:.5g} mm")
    if result.zero_shift_deg is not None:
        found.append(f"Zero shift, measured − true 2θ: {result.zero_shift_deg:+.3f}°")
    if result.ellipse is not None:
        ellipse = result.ellipse
        found.append(
            f"Ellipse: axes {value_text(ellipse.ratio)} to 1, the long one "
            f"{_long_axis(ellipse)}; "
            "the constant is that of the mean circle"
        )
    return found


def _long_axis(ellipse: Ellipse) -> str:
    angle = f"{ellipse.angle_deg:.3g}°"
    return f"at {angle}" if ellipse.long_axis is None else f"{ellipse.long_axis} ({angle})"


def _rows(result: Calibration) -> list[list[str]]:
    rings = result.rings
    assigned = {a.ring: a for a in result.assignments}
    rows = []
    for ring in range(len(rings)):
        measured = [str(ring + 1), f"{rings.position[ring]:.6g}"]
        found = assigned.get(ring)
        if found is None:
            rows.append([*measured, "rejected", "", "", ""])
            continue
        relative = found.residual_sigma * float(rings.sigma_A[ring] / rings.d_A[ring])
        rows.append(
            [
                *measured,
                hkl_text(found.hkl),
                f"{found.d_A:.4f}",
                signed_text(found.residual_sigma),
                f"{100 * relative:+.2f}",
            ]
        )
    return rows
