"""phaseid: which crystalline phases made these diffraction rings?

The front door for notebooks and scripts; nothing is loaded before it is used.

    import phaseid

    rings = phaseid.read_rings("rings.csv")
    with phaseid.open_default() as library:
        answer = phaseid.identify([rings], library)
    print(phaseid.as_text(answer))
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
    from phaseid.matching.identify import identify
    from phaseid.probes import parse_probe
    from phaseid.reports.json import identification_dict
    from phaseid.reports.text import as_text
    from phaseid.rings import read_rings, rings_from_values

__version__ = "0.1.0"

__all__ = [
    "Chemistry",
    "InputError",
    "Library",
    "LibraryError",
    "PhaseidError",
    "as_text",
    "compute_lines",
    "identification_dict",
    "identify",
    "open_default",
    "parse_probe",
    "read_cif_file",
    "read_rings",
    "rings_from_values",
]

_HOMES = {
    "Chemistry": "phaseid.matching.chemistry",
    "InputError": "phaseid.errors",
    "Library": "phaseid.library",
    "LibraryError": "phaseid.errors",
    "PhaseidError": "phaseid.errors",
    "as_text": "phaseid.reports.text",
    "compute_lines": "phaseid.crystal.lines",
    "identification_dict": "phaseid.reports.json",
    "identify": "phaseid.matching.identify",
    "open_default": "phaseid.library",
    "parse_probe": "phaseid.probes",
    "read_cif_file": "phaseid.crystal.cif",
    "read_rings": "phaseid.rings",
    "rings_from_values": "phaseid.rings",
}


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'phaseid' has no attribute '{name}'")
    value = getattr(import_module(_HOMES[name]), name)
    globals()[name] = value
    return value


def __dir__() -> list[str]:
    return sorted([*__all__, "__version__"])
