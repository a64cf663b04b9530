"""Times and temperatures that ring lists state."""

from __future__ import annotations

import pytest

from phaseid.errors import InputError
from phaseid.rings.conditions import Condition, stated_condition


@pytest.mark.parametrize(
    ("text", "value", "unit"),
    [
        ("300 s", 300.0, "s"),
        ("2.5 min", 2.5, "min"),
        ("1e3 ms", 1000.0, "ms"),
        ("0,5 h", 0.5, "h"),
        ("12", 12.0, ""),
    ],
)
def test_times_are_read_with_their_unit(text: str, value: float, unit: str) -> None:
    assert stated_condition({"Time": text}, "time") == Condition("time", value, unit)


@pytest.mark.parametrize("text", ["450 C", "450 °C", "450 degC"])
def test_temperatures_are_read_with_their_unit(text: str) -> None:
    assert stated_condition({"temperature": text}, "temperature") == Condition(
        "temperature", 450.0, "°C"
    )


def test_units_are_converted() -> None:
    """0 °C is 273.15 K, an hour 3600 s (SI brochure)."""
    assert Condition("temperature", 0.0, "°C").within("K") == pytest.approx(273.15)
    assert Condition("temperature", 300.0, "K").within("°C") == pytest.approx(26.85)
    assert Condition("time", 1.5, "h").within("min") == pytest.approx(90.0)


def test_a_list_without_the_key_states_nothing() -> None:
    assert stated_condition({"title": "foil"}, "time") is None


@pytest.mark.parametrize("text", ["warm", "450 bar", "", "4 5 K"])
def test_what_is_no_temperature_is_told(text: str) -> None:
    with pytest.raises(InputError, match="temperature"):
        stated_condition({"temperature": text}, "temperature", "a.csv")


def test_units_and_bare_numbers_do_not_mix() -> None:
    with pytest.raises(InputError, match="unit"):
        Condition("time", 3.0, "").within("s")
