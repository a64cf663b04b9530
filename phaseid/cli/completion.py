"""What the shell offers for a word begun: names of phases, standards, calibrations, pages."""

from __future__ import annotations

from collections.abc import Iterator

_MOST = 40


def phases(incomplete: str) -> list[tuple[str, str]]:
    """Names of the library that begin so, with what tells them; none where no library is there.

    Nothing is built, and nothing said: a word is being typed.
    """
    from phaseid.errors import PhaseidError

    if len(incomplete) < 2:
        return []
    try:
        return list(_phases(incomplete))
    except PhaseidError:
        return []


def _phases(incomplete: str) -> Iterator[tuple[str, str]]:
    import os
    from pathlib import Path

    from phaseid.cli.settings import setting
    from phaseid.library import Library
    from phaseid.library.default import default_library_path

    named = os.environ.get("PHASEID_LIBRARY") or setting("library")
    path = Path(named).expanduser() if named else default_library_path()
    if not path.is_file():
        return
    begun = incomplete.lower()
    with Library.open(path) as shelf:
        seen: set[str] = set()
        for phase in shelf.find(incomplete):
            for word in (phase.name, phase.formula, phase.phase_id):
                if word.lower().startswith(begun) and word not in seen and len(seen) < _MOST:
                    seen.add(word)
                    yield word, f"{phase.formula}, {phase.space_group_symbol}"


def standards(incomplete: str) -> list[str]:
    """Formulas and names of the standards."""
    import tomllib

    from phaseid.resources import data_path

    facts = tomllib.loads(data_path("standards.toml").read_text(encoding="utf-8"))["standard"]
    words = [str(one["entry"]).partition("-")[0] for one in facts]
    words += [name for one in facts for name in one["names"]]
    return [word for word in words if word.lower().startswith(incomplete.lower())]


def calibrations(incomplete: str) -> list[str]:
    """Names of the saved calibrations."""
    from phaseid.cli.settings import calibration_folder

    folder = calibration_folder()
    names = sorted(path.stem for path in folder.glob("*.json")) if folder.is_dir() else []
    return [name for name in names if name.startswith(incomplete)]


def units(incomplete: str) -> list[str]:
    """The position columns."""
    from phaseid.cli.ring_input import UNITS

    return [name for name in UNITS.split(", ") if name.startswith(incomplete)]
