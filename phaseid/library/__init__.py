"""The library of phases: one SQLite file, asked by name, formula, number or lines."""

from phaseid.library.default import build_starter, default_library_path, open_default
from phaseid.library.library import Library
from phaseid.library.linetable import LineTable
from phaseid.library.phase import Phase
from phaseid.library.tally import ImportTally

__all__ = [
    "ImportTally",
    "Library",
    "LineTable",
    "Phase",
    "build_starter",
    "default_library_path",
    "open_default",
]
