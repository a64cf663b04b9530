"""A measured pattern of rings: what was read, and the spacings it means."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from phaseid.probes.probe import Probe
from phaseid.rings.camera import CameraConstant

if TYPE_CHECKING:
    from phaseid.rings.measuring.disc import Disc

GRADES: dict[str, tuple[float, float]] = {
    # interval of relative intensity (strongest = 100) each grade stands for:
    # common practice, no source
    "vs": (70.0, 100.0),
    "s": (45.0, 85.0),
    "ms": (32.0, 70.0),
    "m": (22.0, 55.0),
    "mw": (12.0, 40.0),
    "w": (7.0, 28.0),
    "vw": (1.0, 12.0),
}


@dataclass(frozen=True, slots=True, eq=False)
class RingList:
    """One measured pattern, rings in the order of the file.

    `position_column` is the file's name for it ("two_theta_deg", "radius_mm", "d_A", …);
    `position` and `position_sigma` (m,) are in its unit, as measured. `d_A`, `sigma_A` (m,) are
    the spacings in Å and the one-sigma of each ring alone (the common scale uncertainty is
    `probe.scale_sigma`).
    `intensity` (m,) is relative, strongest = 100, NaN where absent, for a grade the geometric
    middle of its interval; `intensity_range` (m, 2) the interval a grade stands for, both equal to
    `intensity` for a number, NaN where absent; `grades` (m,) the grade or "". `notes` (m,) are
    the file's. `sigma_stated` is False where a default was used for any ring.
    `remarks` are sentences to show with the answer (defaults applied, likely slips); `slips` those
    among them that make the whole pattern doubtful, such as a wrong unit.
    `metadata` are all keys of the file as written, known or not; `camera_constant` is that of the
    file where it states one. `detection_limit` is the weakest intensity that would have been seen,
    on the scale of `intensity`, None where not stated. `spottiness` (m,) is the relative one-sigma
    scatter of the intensity along each ring beyond counting noise, `arcs` (m,) that part of it
    which changes smoothly, as in a textured specimen; NaN where not stated, None where for no ring.
    `disc` is a picture of the image on which the rings were measured, None for a list from a file.
    `curve` (k, 2) is the curve they were measured on, position in the unit of `position` and counts
    above the background; None for a list from a file.
    """

    title: str
    probe: Probe
    position_column: str
    position: NDArray[np.float64]
    position_sigma: NDArray[np.float64]
    d_A: NDArray[np.float64]
    sigma_A: NDArray[np.float64]
    intensity: NDArray[np.float64]
    intensity_range: NDArray[np.float64]
    grades: tuple[str, ...]
    notes: tuple[str, ...]
    sigma_stated: bool
    source: str = ""
    remarks: tuple[str, ...] = ()
    slips: tuple[str, ...] = ()
    metadata: Mapping[str, str] = field(default_factory=dict)
    camera_constant: CameraConstant | None = None
    detection_limit: float | None = None
    spottiness: NDArray[np.float64] | None = None
    arcs: NDArray[np.float64] | None = None
    disc: Disc | None = None
    curve: NDArray[np.float64] | None = None

    def __len__(self) -> int:
        return len(self.d_A)
