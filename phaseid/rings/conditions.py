"""When and how warm: the time or temperature that a ring list states beside its rings."""

from __future__ import annotations

import re
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Literal

from phaseid.errors import InputError

ConditionName = Literal["time", "temperature"]
_TEXT = re.compile(r"([+-]?(?:\d+(?:[.,]\d*)?|[.,]\d+)(?:e[+-]?\d+)?)\s*(\D*)", re.IGNORECASE)
_UNITS: dict[ConditionName, dict[str, tuple[str, float, float]]] = {
    # spelling -> unit, factor and offset to the first unit named
    "time": {
        "": ("", 1.0, 0.0),
        **dict.fromkeys(("s", "sec", "second", "seconds"), ("s", 1.0, 0.0)),
        **dict.fromkeys(("ms",), ("ms", 1e-3, 0.0)),
        **dict.fromkeys(("min", "minute", "minutes"), ("min", 60.0, 0.0)),
        **dict.fromkeys(("h", "hr", "hour", "hours"), ("h", 3600.0, 0.0)),
        **dict.fromkeys(("d", "day", "days"), ("d", 86400.0, 0.0)),
    },
    "temperature": {
        "": ("", 1.0, 0.0),
        **dict.fromkeys(("k", "kelvin"), ("K", 1.0, 0.0)),
        **dict.fromkeys(("c", "°c", "degc", "deg c", "celsius"), ("°C", 1.0, 273.15)),
    },
}


@dataclass(frozen=True, slots=True)
class Condition:
    """A time or temperature as stated: `value` in `unit` ("" where none was written)."""

    name: ConditionName
    value: float
    unit: str

    def within(self, unit: str) -> float:
        """The value in another unit of the same kind; raises InputError where one is unknown."""
        if unit == self.unit:
            return self.value
        if "" in (unit, self.unit):
            raise InputError(
                f"one {self.name} states a unit ({unit or self.unit}) and another none",
                remedy="Write the unit in every list of the series.",
            )
        known = {symbol: (factor, offset) for symbol, factor, offset in _UNITS[self.name].values()}
        (own, own_zero), (other, other_zero) = known[self.unit], known[unit]
        return (self.value * own + own_zero - other_zero) / other


def stated_condition(
    metadata: Mapping[str, str], name: ConditionName, path: str = ""
) -> Condition | None:
    """What a ring list says under the key `time` or `temperature`, None where it says nothing.

    Raises InputError for text that is no number with a unit of the kind.
    """
    text = next((v.strip() for k, v in metadata.items() if k.strip().lower() == name), None)
    if text is None:
        return None
    match = _TEXT.fullmatch(text)
    spelling = "" if match is None else match[2].strip().lower()
    if match is None or spelling not in _UNITS[name]:
        units = ", ".join(dict.fromkeys(u for u, _, _ in _UNITS[name].values() if u))
        raise InputError(
            f"cannot read the {name} '{text}'",
            path=path or None,
            remedy=f"Write a number and one of {units}, such as '# {name}: 300 {_EXAMPLE[name]}'.",
        )
    return Condition(name, float(match[1].replace(",", ".")), _UNITS[name][spelling][0])


_EXAMPLE: dict[ConditionName, str] = {"time": "s", "temperature": "K"}
