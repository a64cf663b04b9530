"""What a series runs along: the number of the pattern, a time, a temperature."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import hypot
from typing import Literal

from phaseid.errors import InputError
from phaseid.rings.conditions import ConditionName, stated_condition
from phaseid.rings.ringlist import RingList

Along = Literal["auto", "number", "time", "temperature"]
EXPANSION_PER_K, ROOM_C = 1.2e-5, 25.0
"""One-sigma of the linear expansion of what may be there."""
_WIDEST = 0.1


@dataclass(frozen=True, slots=True)
class Axis:
    """What the series runs along, the numbers of its patterns counted from 1; `values` (T,)."""

    name: ConditionName | Literal["number"]
    unit: str
    values: tuple[float, ...]

    @property
    def title(self) -> str:
        """Quantity and unit, for a heading."""
        return f"{self.name} ({self.unit})" if self.unit else self.name


def axis_of(patterns: Sequence[RingList], along: Along) -> Axis:
    """What the series runs along, in the unit of its first pattern.

    Raises InputError where lists do not state what is asked for, or not in like units.
    """
    names: tuple[ConditionName, ...] = ("temperature", "time")
    wanted = names if along == "auto" else () if along == "number" else (along,)
    for name in wanted:
        stated = [stated_condition(p.metadata, name, p.source) for p in patterns]
        held = [condition for condition in stated if condition is not None]
        if len(held) == len(stated):
            unit = held[0].unit
            values = tuple(condition.within(unit) for condition in held)
            if along != "auto" or len(set(values)) > 1:
                return Axis(name, unit, values)
        elif along != "auto":
            first = next(p for p, s in zip(patterns, stated, strict=True) if s is None)
            raise InputError(
                f"{len(stated) - len(held)} of {len(stated)} lists state no {name}",
                path=first.source or None,
                remedy=f"Add a line '# {name}: …' to each, or leave out --along.",
            )
    return Axis("number", "", tuple(float(i + 1) for i in range(len(patterns))))


def warmed(rings: RingList) -> RingList:
    """A pattern that states its temperature, its scale as uncertain as expansion makes it.

    Cells of a library are those of room temperature; expansion coefficients of solids lie between
    about 0 and 3e-5 per K (handbooks).
    """
    stated = stated_condition(rings.metadata, "temperature", rings.source)
    if stated is None or not stated.unit:
        return rings
    spread = EXPANSION_PER_K * abs(stated.within("°C") - ROOM_C)
    if spread < rings.probe.scale_sigma / 3.0:
        return rings
    wider = min(hypot(rings.probe.scale_sigma, spread), _WIDEST)
    return replace(rings, probe=rings.probe.with_scale(wider))
