"""A measurement as text and as JSON."""

from __future__ import annotations

from typing import Any

import numpy as np

from phaseid.reports.plain import safe
from phaseid.rings.measuring import Measurement

_UNITS = {"two_theta_deg": "deg", "radius_px": "px"}


def measurement_dict(found: Measurement, d_A: list[float] | None = None) -> dict[str, Any]:
    """The JSON object of a measurement; `d_A` are the spacings of its rings where known."""
    geometry = found.geometry
    center, center_sigma, ellipse = None, None, None
    if geometry is not None:
        spread = np.sqrt(np.diag(geometry.covariance))
        center = [geometry.x, geometry.y]
        center_sigma = [float(spread[0]), float(spread[1])]
        if geometry.ellipse_known:
            ellipse = {
                "ratio": geometry.ratio,
                "angle_deg": geometry.angle_deg,
                "ratio_sigma": geometry.ratio_sigma,
                "angle_sigma_deg": geometry.angle_sigma_deg,
            }
    rings = []
    for i, ring in enumerate(found.rings):
        rings.append(
            {
                found.column: ring.position,
                "sigma": ring.sigma,
                "width": ring.width,
                "width_sigma": ring.width_sigma,
                "intensity": ring.intensity,
                "intensity_sigma": ring.intensity_sigma,
                "sum": ring.total,
                "spottiness": ring.spottiness,
                "arcs": ring.arcs,
                "coverage": ring.coverage,
                "along_ring": [None if np.isnan(v) else v for v in ring.along] or None,
                "note": ring.note,
                "d_A": None if d_A is None else d_A[i],
            }
        )
    return {
        "schema": "phaseid.measurement/1",
        "source": found.source,
        "column": found.column,
        "center_px": center,
        "center_sigma_px": center_sigma,
        "ellipse": ellipse,
        "masked": found.masked,
        "detection_limit": found.limit,
        "halos": list(found.halos),
        "rings": rings,
        "remarks": list(found.remarks),
    }


def measurement_text(found: Measurement, d_A: list[float] | None = None) -> str:
    """A measurement for the eye: geometry, then a line per ring."""
    unit = _UNITS.get(found.column, found.column)
    many = "1 ring" if len(found.rings) == 1 else f"{len(found.rings)} rings"
    lines = [f"{many} in {safe(found.source)}"]
    geometry = found.geometry
    if geometry is not None:
        spread = np.sqrt(np.diag(geometry.covariance))
        lines.append(
            f"Centre x = {geometry.x:.2f} ± {spread[0]:.2f} px, "
            f"y = {geometry.y:.2f} ± {spread[1]:.2f} px"
        )
        if geometry.ellipse_known:
            lines.append(
                f"Ellipse (corrected): axes {geometry.ratio:.4f} ± {geometry.ratio_sigma:.4f} : 1, "
                f"long axis at {geometry.angle_deg:.0f}° from x towards y"
            )
    used = [
        f"{key} {safe(found.metadata[key])}"
        for key in ("probe", "camera constant", "scale uncertainty")
        if key in found.metadata
    ]
    if used:
        lines.append(f"Spacings by: {', '.join(used)}")
    if found.halos:
        at = ", ".join(f"{halo:.4g}" for halo in found.halos)
        lines.append(f"Halo of amorphous matter, not listed as a ring: {at} {unit}")
    lines += ["", f"  ring {found.column:>13}    sigma    width      I" + "  d (Å)" * bool(d_A)]
    strongest = max(ring.intensity for ring in found.rings)
    for i, ring in enumerate(found.rings):
        d = "" if d_A is None else f" {d_A[i]:6.4f}"
        lines.append(
            f"  {i + 1:4d} {ring.position:13.3f} {ring.sigma:8.2g} {ring.width:8.3f} "
            f"{100 * ring.intensity / strongest:6.1f}{d}  {ring.note}".rstrip()
        )
    lines += ["", *found.remarks]
    return "\n".join(lines).rstrip() + "\n"
