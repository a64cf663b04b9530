"""The front door: the names a notebook may rely on."""

from __future__ import annotations

import pytest

import phaseid

NAMES = [
    "Chemistry",
    "InputError",
    "Library",
    "LibraryError",
    "PhaseidError",
    "as_text",
    "calibrate",
    "compare",
    "compute_lines",
    "find",
    "identification_dict",
    "identify",
    "lines",
    "measure",
    "near",
    "open_default",
    "parse_probe",
    "ratio",
    "read_cif_file",
    "read_rings",
    "rings_from_values",
    "screen",
    "series",
    "write_picture",
]


def test_the_names_are_these() -> None:
    assert sorted(phaseid.__all__) == sorted(NAMES)
    assert dir(phaseid) == sorted([*NAMES, "__version__"])


@pytest.mark.parametrize("name", NAMES)
def test_each_name_opens_and_is_told(name: str) -> None:
    thing = getattr(phaseid, name)
    assert thing.__name__ == name
    assert thing.__doc__


def test_another_name_is_refused() -> None:
    with pytest.raises(AttributeError, match="no attribute 'search'"):
        _ = phaseid.search  # type: ignore[attr-defined]
