"""The axis on which lines stand: d, 1/d, q or two-theta."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal, get_args

from phaseid.errors import InputError
from phaseid.rings.ringlist import RingList
from phaseid.units import A_PER_NM, q_from_d, two_theta_from_d

AxisName = Literal["d", "1/d", "q", "two-theta"]
AXIS_NAMES: tuple[AxisName, ...] = get_args(AxisName)
TITLES: dict[AxisName, str] = {
    "d": "d in Å",
    "1/d": "1/d in 1/nm",
    "q": "q = 2π/d in 1/Å",
    "two-theta": "2θ in degrees",
}


@dataclass(frozen=True, slots=True)
class Axis:
    """A quantity along the picture; `wavelength_A` turns spacings into angles."""

    name: AxisName
    wavelength_A: float

    @property
    def title(self) -> str:
        """Quantity and unit."""
        return TITLES[self.name]

    def value(self, d_A: float) -> float:
        """Where a spacing (Å) stands; NaN for an angle that does not exist."""
        if self.name == "d":
            return d_A
        if self.name == "1/d":
            return A_PER_NM / d_A
        if self.name == "q":
            return q_from_d(d_A)
        return float(two_theta_from_d(d_A, self.wavelength_A))


def axis_name(text: str) -> AxisName:
    """Read the name of an axis; raises InputError for another word."""
    found = next((name for name in AXIS_NAMES if name == text.strip().lower()), None)
    if found is None:
        raise InputError(
            f"--axis: '{text}' is no axis of the picture", remedy=f"Use {', '.join(AXIS_NAMES)}."
        )
    return found


def axis_for(pattern: RingList, name: AxisName | None) -> Axis:
    """The axis asked for, else the one nearest to how the pattern was measured.

    Raises InputError for angles of a pattern by time of flight, which has none.
    """
    probe = pattern.probe
    if name == "two-theta" and probe.geometry == "time-of-flight":
        raise InputError(
            "--axis two-theta: a pattern by time of flight has no such angles",
            path=pattern.source or None,
            remedy="Use d, 1/d or q.",
        )
    return Axis(name or _usual(pattern), probe.wavelength_A)


def common_axis(patterns: Sequence[RingList], name: AxisName | None) -> AxisName | None:
    """The axis for patterns of one specimen: asked for, else their own where it is the same.

    Else 1/d, which every probe has, so that the same line stands at the same side of each.
    """
    if name is None and len({_usual(pattern) for pattern in patterns}) > 1:
        return "1/d"
    return name


def _usual(pattern: RingList) -> AxisName:
    column = pattern.position_column
    if column.startswith("two_theta"):
        return "two-theta"
    if column.startswith("q_"):
        return "q"
    return "d" if column.startswith("d_") and pattern.probe.kind != "electron" else "1/d"


def is_on(axis: Axis, d_A: float) -> bool:
    """Whether the axis has a place for that spacing."""
    return math.isfinite(axis.value(d_A))
