"""phaseid: which crystalline phases made these diffraction rings?

The front door for notebooks and scripts; nothing is loaded before it is used.

    import phaseid

    answer = phaseid.identify("foil.csv", must="Al")
    print(phaseid.as_text(answer))
    answer.records()  # rows for a data frame

`phaseid guide python` is the tutorial.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from phaseid.crystal.cif import read_cif_file
    from phaseid.crystal.lines import compute_lines
    from phaseid.errors import InputError, LibraryError, PhaseidError
    from phaseid.library import Library, open_default
    from phaseid.matching.chemistry import Chemistry
    from phaseid.notebook import (
        calibrate,
        compare,
        find,
        identify,
        lines,
        measure,
        near,
        ratio,
        screen,
        series,
    )
    from phaseid.probes import parse_probe
    from phaseid.reports.json import identification_dict
    from phaseid.reports.picture_file import write_picture
    from phaseid.reports.text import as_text
    from phaseid.rings import read_rings, rings_from_values

__version__ = "0.2.0"

__all__ = [
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

_HOMES = {
    "Chemistry": "phaseid.matching.chemistry",
    "InputError": "phaseid.errors",
    "Library": "phaseid.library",
    "LibraryError": "phaseid.errors",
    "PhaseidError": "phaseid.errors",
    "as_text": "phaseid.reports.text",
    "calibrate": "phaseid.notebook",
    "compare": "phaseid.notebook",
    "compute_lines": "phaseid.crystal.lines",
    "find": "phaseid.notebook",
    "identification_dict": "phaseid.reports.json",
    "identify": "phaseid.notebook",
    "lines": "phaseid.notebook",
    "measure": "phaseid.notebook",
    "near": "phaseid.notebook",
    "open_default": "phaseid.library",
    "parse_probe": "phaseid.probes",
    "ratio": "phaseid.notebook",
    "read_cif_file": "phaseid.crystal.cif",
    "read_rings": "phaseid.rings",
    "rings_from_values": "phaseid.rings",
    "screen": "phaseid.notebook",
    "series": "phaseid.notebook",
    "write_picture": "phaseid.reports.picture_file",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'phaseid' has no attribute '{name}'")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*__all__, "__version__"])
