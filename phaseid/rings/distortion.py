"""The ellipse that lenses make of circles: what it does to a radius measured in one direction."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from math import cos, exp, hypot, log, radians, sin, sqrt

from phaseid.errors import InputError

DIRECTION_KEY = "direction"
CORRECTED_KEY = "ellipse corrected"
_NUMBER = r"[+-]?\d+(?:\.\d*)?"
_DIRECTION = re.compile(rf"({_NUMBER})\s*(?:°|deg|degrees)?")
_CORRECTED = re.compile(
    rf"axes ratio ({_NUMBER}) \+- ({_NUMBER}), long axis at ({_NUMBER}) \+- ({_NUMBER}) degrees"
)
_WORDS = {"along": 0.0, "across": 90.0}


@dataclass(frozen=True, slots=True)
class Distortion:
    """Axes of what should be a circle: `ratio` long over short, its one-sigma, and the direction of
    the long one (degrees, as `Geometry.angle_deg`: from x towards y)."""

    ratio: float
    ratio_sigma: float
    long_axis_deg: float

    def stretch(self, direction_deg: float) -> float:
        """Radius in a direction over the radius of the circle of the same area."""
        turn = radians(direction_deg - self.long_axis_deg)
        return 1.0 / sqrt(cos(turn) ** 2 / self.ratio + sin(turn) ** 2 * self.ratio)

    def sigma(self, direction_deg: float | None) -> float:
        """One-sigma of ln of that: of the ratio for a known direction, else over all directions.

        For axes a little unlike, ln stretch = ½ ln(ratio) cos 2φ, whose root mean square over φ is
        ln(ratio) / √8.
        """
        own = self.ratio_sigma / self.ratio / 2.0
        if direction_deg is None:
            return hypot(log(self.ratio), 2.0 * own) / sqrt(8.0)
        return own * abs(cos(2.0 * radians(direction_deg - self.long_axis_deg)))


def between(along: float, across: float, sigma: float, along_deg: float = 0.0) -> Distortion:
    """The ellipse of two radii of one ring at right angles; `sigma` is that of ln of their ratio.

    True where the two directions are those of the axes.
    """
    ratio = exp(abs(log(along / across)))
    turn = 0.0 if along >= across else 90.0
    return Distortion(ratio, ratio * sigma, (along_deg + turn) % 180.0)


def stated_direction(metadata: Mapping[str, str], path: str) -> float | None:
    """The direction (degrees) in which the radii of a list were measured, None where none is said.

    "along" is 0°, "across" 90°. Raises InputError for another word.
    """
    text = _value(metadata, DIRECTION_KEY)
    if text is None:
        return None
    if text.lower() in _WORDS:
        return _WORDS[text.lower()]
    match = _DIRECTION.fullmatch(text)
    if match is None:
        raise InputError(
            f"cannot read the direction '{text}'",
            path=path or None,
            remedy="Write degrees from x towards y, such as '# direction: 30', or along or across.",
        )
    return float(match[1])


def corrected_ellipse(metadata: Mapping[str, str]) -> Distortion | None:
    """The ellipse that was measured on an image and is taken off its radii already."""
    match = _CORRECTED.fullmatch(_value(metadata, CORRECTED_KEY) or "")
    return None if match is None else Distortion(float(match[1]), float(match[2]), float(match[3]))


def _value(metadata: Mapping[str, str], key: str) -> str | None:
    return next((v.strip() for k, v in metadata.items() if k.strip().lower() == key), None)
