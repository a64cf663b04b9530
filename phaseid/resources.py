"""Where the files that come with phaseid lie: beside the package, or inside it in a wheel."""

from __future__ import annotations

from pathlib import Path

_PACKAGE = Path(__file__).resolve().parent


def data_path(*parts: str) -> Path:
    """Return the path of a shipped data file or folder, e.g. `data_path("starter")`."""
    installed = _PACKAGE / "_data"
    root = installed if installed.is_dir() else _PACKAGE.parent / "data"
    return root.joinpath(*parts)
