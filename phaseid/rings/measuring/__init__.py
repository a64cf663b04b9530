"""Measuring: from an image or a profile to a ring list; loaded where it is used."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from phaseid.rings.measuring.curves import Curve, read_curve
    from phaseid.rings.measuring.disc import Disc, straightened
    from phaseid.rings.measuring.image_rings import measure_image, measure_pixels
    from phaseid.rings.measuring.images import is_image, read_image
    from phaseid.rings.measuring.measurement import MeasuredRing, Measurement
    from phaseid.rings.measuring.profile_peaks import measure_curve, measure_profile

__all__ = [
    "Curve",
    "Disc",
    "MeasuredRing",
    "Measurement",
    "is_image",
    "measure_curve",
    "measure_image",
    "measure_pixels",
    "measure_profile",
    "read_curve",
    "read_image",
    "straightened",
]

_HOMES = {
    "Curve": "curves",
    "Disc": "disc",
    "MeasuredRing": "measurement",
    "Measurement": "measurement",
    "is_image": "images",
    "measure_curve": "profile_peaks",
    "measure_image": "image_rings",
    "measure_pixels": "image_rings",
    "measure_profile": "profile_peaks",
    "read_curve": "curves",
    "read_image": "images",
    "straightened": "disc",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module '{__name__}' has no attribute '{name}'")
    value = getattr(import_module(f"{__name__}.{_HOMES[name]}"), name)
    globals()[name] = value
    return value
