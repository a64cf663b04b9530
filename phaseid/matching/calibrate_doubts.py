"""What can be wrong with a calibration: another standard, two of them, several ways to fit."""

from __future__ import annotations

from math import exp, hypot

import numpy as np

from phaseid.errors import InputError
from phaseid.matching.standard_rings import Plate
from phaseid.matching.standards import Standard, other_standards
from phaseid.rings.calibration import Fit, Readings, lay

Others = list[tuple[Standard, Fit | None]]
"""Every other standard and how it lies on the rings."""

_FITS = 3.0
"""ln evidence from which on the rings are taken as the standard's."""
_DOUBTFUL, _BETTER = 2.0, 8.0
"""ln evidence by which another standard has to be better to be mentioned, to be believed."""
_FEW = 4
_UNDECIDED, _SURE = 0.5, 0.95
_STRONG = 15.0


def checked(
    fit: Fit | None, plate: Plate, standard: Standard, temperature_C: float | None
) -> tuple[Fit, list[str]]:
    """Refuse a fit that is none or is one of several; else return it, with remarks on doubts."""
    rings = plate.rings
    others: Others = []
    if _suspicious(fit, plate, standard):
        others = [(o, plate.lay(o)) for o in other_standards(standard, temperature_C)]
    fits_all = fit is not None and len(fit.used) == len(rings)
    few = len(rings) < _FEW and fits_all
    if few and not plate.known and fit is not None and fit.log_evidence < _FITS:
        raise _several_ways(fit, plate, standard)
    if fit is None or (fit.log_evidence < _FITS and not few):
        raise InputError(
            f"the ring ratios do not fit {standard.label}{_likely(plate, others, 0.0)}",
            path=rings.source or None,
            remedy="Check --standard, the column's unit and the list.",
        )
    remarks: list[str] = []
    used = set(fit.used.tolist())
    if _likely(plate, others, fit.log_evidence + _BETTER, used):
        raise InputError(
            f"{_shortcoming(fit, plate, standard)}"
            f"{_likely(plate, others, fit.log_evidence + _BETTER, used)}",
            path=rings.source or None,
            remedy="Check --standard.",
        )
    if likely := _likely(plate, others, fit.log_evidence + _DOUBTFUL, used):
        remarks.append(f"{_shortcoming(fit, plate, standard)}{likely}.")
    if fit.probability < _UNDECIDED:
        raise _several_ways(fit, plate, standard)
    if fit.probability < _SURE and fit.rivals:
        shift, weight = fit.rivals[0]
        remarks.append(
            f"Another assignment is possible (probability {weight:.2f}): "
            f"{_constant_text(plate, shift)}."
        )
    if plate.known:
        remarks += _other_scale(fit, plate, others)
    remarks += _second_standard(fit, plate, others)
    if rings.sigma_stated and fit.scatter > 1.5:
        remarks.append(
            f"Rings scatter {fit.scatter:.1f} times more than their sigmas; "
            "the uncertainty has been raised accordingly."
        )
    return fit, remarks


def _suspicious(fit: Fit | None, plate: Plate, standard: Standard) -> bool:
    """Whether anything is wrong enough to look at other standards."""
    if fit is None or fit.log_evidence < _FITS or len(fit.used) < len(plate.rings):
        return True
    intensity = plate.lines(standard).intensity
    if any(intensity[j] > _STRONG for j in fit.missing):
        return True
    return plate.known and abs(fit.shift) > 3.0 * hypot(plate.rings.probe.scale_sigma, fit.sigma)


def _several_ways(fit: Fit, plate: Plate, standard: Standard) -> InputError:
    rough = f"Measure more rings, or state a rough scale: {_rough(plate)}."
    if fit.probability > _SURE:
        return InputError(
            f"{len(fit.used)} rings fit {standard.label} with {_constant_text(plate, fit.shift)}, "
            "but so few would fit by chance, too",
            path=plate.rings.source or None,
            remedy=rough,
        )
    ways = ", ".join(
        f"{_constant_text(plate, shift)} ({weight:.0%})"
        for shift, weight in ((fit.shift, fit.probability), *fit.rivals[:2])
    )
    return InputError(
        f"so few rings fit {standard.label} in several ways: {ways}",
        path=plate.rings.source or None,
        remedy=rough,
    )


def _rough(plate: Plate) -> str:
    if plate.column.quantity == "radius":
        return f'--camera-constant "25 +- 3 A {plate.column.plate_unit}"'
    return "--scale-uncertainty 2%"


def _constant_text(plate: Plate, shift: float) -> str:
    constant = plate.rings.camera_constant
    if plate.column.quantity == "radius" and constant is not None:
        return f"camera constant {constant.value * exp(shift):.5g} Å {plate.column.plate_unit}"
    return f"factor {exp(shift):.5g}"


def _shortcoming(fit: Fit, plate: Plate, standard: Standard) -> str:
    """Where the standard fits less well than it should."""
    lines = plate.lines(standard)
    gaps = [j for j in fit.missing if lines.intensity[j] > _STRONG]
    said = f"{standard.label} fits {len(fit.used)} of {len(plate.rings)} rings"
    if gaps:
        names = ", ".join("".join(map(str, lines.hkl[j])) for j in gaps)
        said += f" and would also show {names}"
    return said


def _likely(plate: Plate, others: Others, at_least: float, used: set[int] | None = None) -> str:
    """Which other standard fits, in words; empty where none does.

    `used` are rings that it has to explain too: rings of another standard on the same plate are no
    reason to doubt this one.
    """
    found = []
    for other, fit in others:
        if fit is None or fit.log_evidence < max(at_least, _FITS):
            continue
        if used is None or used <= set(fit.used.tolist()):
            found.append((fit.log_evidence, other.label, len(fit.used)))
    if not found:
        return ""
    found.sort(reverse=True)
    names = [label for evidence, label, _ in found if found[0][0] - evidence < 3.0][:4]
    fitting = "which fits" if len(names) == 1 else "which fit"
    return f"; likely {' or '.join(names)}, {fitting} {found[0][2]} of {len(plate.rings)}"


def _other_scale(fit: Fit, plate: Plate, others: Others) -> list[str]:
    """Note a factor that the stated scale does not allow, and the standards that it would."""
    allowed = hypot(plate.rings.probe.scale_sigma, fit.sigma)
    if abs(fit.shift) < 3.0 * allowed:
        return []
    hints = []
    for other, found in others:
        if found is None or len(found.used) < len(fit.used):
            continue
        if abs(found.shift) < 2.0 * allowed:
            hints.append(f"{other.label} ({exp(found.shift):.4f})")
    end = "; it has changed, or this is another standard."
    if hints:
        end = f"; within it would be {', '.join(hints)}: the right standard?"
    return [
        f"The factor {exp(fit.shift):.4f} lies {abs(fit.shift) / allowed:.1f} sigma from the "
        f"stated scale{end}"
    ]


def _second_standard(fit: Fit, plate: Plate, others: Others) -> list[str]:
    """Note a further standard among the rejected rings."""
    left = np.flatnonzero(fit.line < 0)
    if len(left) < 3:
        return []
    readings = plate.readings
    rest = Readings(
        readings.x[left] + fit.shift,
        readings.sigma[left],
        readings.nuisance[left],
        scale_sd=max(fit.sigma, 5e-4),
        sigma_stated=readings.sigma_stated,
    )
    remarks = []
    for other, _ in others:
        found = lay(rest, plate.lines(other))
        if found is not None and found.log_evidence > _FITS + 2.0 and len(found.used) >= 3:
            shown = ", ".join(str(left[i] + 1) for i in found.used)
            remarks.append(
                f"Rings {shown} fit {other.label}: two standards? Calibrate with each alone; "
                "the two answers should agree."
            )
    return remarks
