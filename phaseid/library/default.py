"""The library searched when none is named, built from the shipped structures on first use."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

from phaseid.library import connection
from phaseid.library.library import Library

VARIABLE = "PHASEID_LIBRARY"


def default_library_path() -> Path:
    """Return $PHASEID_LIBRARY, else library.sqlite in the user's data folder for phaseid."""
    named = os.environ.get(VARIABLE, "")
    if named:
        return Path(named)
    from platformdirs import user_data_path

    return user_data_path("phaseid", appauthor=False) / "library.sqlite"


def build_starter(path: Path) -> bool:
    """Build the starter library at `path` in one step: it is there whole, or not at all.

    Returns False where another process was faster. Raises LibraryError where the folder is missing
    or cannot be written.
    """
    from phaseid.library.starter import starter_crystals

    def build(made: Path) -> None:
        connection.build_empty(made)
        with Library.open(made) as library:
            library.add_crystals(starter_crystals())

    return connection.publish_new(path, build)


def open_default(progress: Callable[[str], None] | None = None) -> Library:
    """Open the default library; on first use build it, and tell `progress` so in a sentence.

    Raises LibraryError as `Library.open`, and where the folder cannot be written.
    """
    path = default_library_path()
    if not path.exists():
        if progress is not None:
            progress(f"First use: building the starter library {path} (once, a few seconds) ...")
        with connection.told(path):
            path.parent.mkdir(parents=True, exist_ok=True)
        build_starter(path)
    return Library.open(path, progress)
