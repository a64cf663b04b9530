"""Measuring: from an image or a profile to a ring list."""

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
