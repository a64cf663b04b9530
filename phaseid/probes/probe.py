"""What made the pattern: kind of radiation, wavelength and its uncertainty, geometry."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

Kind = Literal["electron", "x-ray", "neutron"]
Geometry = Literal["ring", "bragg-brentano", "debye-scherrer", "transmission"]


@dataclass(frozen=True, slots=True)
class Probe:
    """A probe: what scatters, at which wavelength, seen how.

    `label` is the spelling to show ("electron 200 kV", "x-ray Cu Kα"). `scale_sigma` is the relative
    one-sigma of the common factor on all d (camera constant or wavelength).
    """

    kind: Kind
    wavelength_A: float
    scale_sigma: float
    label: str
    geometry: Geometry
