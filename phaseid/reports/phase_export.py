"""Phases of a library written to a file: CSV, JSON, or CIF, one file or many in a zip archive."""

from __future__ import annotations

import tempfile
import zipfile
from collections.abc import Callable, Iterator
from pathlib import Path

from phaseid.errors import InputError
from phaseid.library import Library
from phaseid.library.finding import Found
from phaseid.library.question import Question
from phaseid.reports.json import dumps
from phaseid.reports.phase_list import csv_text, listed_dict


def export_phases(
    library: Library,
    question: Question,
    path: Path,
    *,
    every_entry: bool = True,
    overwrite: bool = False,
) -> int:
    """Write the phases that answer to `path`, whose ending says how; returns their number.

    An empty question means all. The file is there whole or not at all. Raises InputError for
    another ending, a file that exists unless `overwrite`, one that cannot be written, and where
    nothing answers.
    """
    write = _WRITERS.get(path.suffix.lower())
    if write is None:
        raise InputError(
            f"phases cannot be written as '{path.suffix or path.name}'",
            path=path,
            remedy=f"Let the name end in {', '.join(_WRITERS)}.",
        )
    if path.exists() and not overwrite:
        raise InputError("there is such a file", path=path, remedy="Give --force to overwrite it.")
    found = library.search(question, every_entry=every_entry)
    if not found.phases:
        raise InputError("nothing in the library answers", remedy="Ask for less.")
    try:
        with tempfile.TemporaryDirectory(prefix=f".{path.name}-", dir=path.parent) as folder:
            made = Path(folder) / path.name
            write(library, found, made)
            made.replace(path)
    except OSError as error:
        reason = error.strerror or str(error)
        raise InputError(
            f"it cannot be written ({reason})", path=path, remedy="Name another file."
        ) from error
    return len(found.phases)


def _write_csv(library: Library, found: Found, path: Path) -> None:
    path.write_text(csv_text(found.phases, found.entries), encoding="utf-8")


def _write_json(library: Library, found: Found, path: Path) -> None:
    pairs = zip(found.phases, found.entries, strict=True)
    phases = [listed_dict(phase, count) for phase, count in pairs]
    answer = {"phases": phases, "found": found.total, "more": found.more}
    path.write_text(dumps({"schema": "phaseid.library-find/1", **answer}) + "\n", "utf-8")


def _cif_texts(library: Library, found: Found) -> Iterator[tuple[str, str]]:
    """Yield phase id and CIF text; each data block has a name of its own."""
    from phaseid.crystal.cif_writer import crystal_to_cif

    taken: dict[str, int] = {}
    for phase in found.phases:
        head, rest = crystal_to_cif(library.crystal(phase.phase_id)).split("\n", 1)
        taken[head] = taken.get(head, 0) + 1
        own = head if taken[head] == 1 else f"{head}_{taken[head]}"
        yield phase.phase_id, f"{own}\n{rest}"


def _write_cif(library: Library, found: Found, path: Path) -> None:
    with path.open("w", encoding="utf-8") as file:
        for _, text in _cif_texts(library, found):
            file.write(f"{text}\n")


def _write_zip(library: Library, found: Found, path: Path) -> None:
    with zipfile.ZipFile(path, "w", zipfile.ZIP_DEFLATED) as archive:
        for phase_id, text in _cif_texts(library, found):
            archive.writestr(f"{phase_id}.cif", text)


_WRITERS: dict[str, Callable[[Library, Found, Path], None]] = {
    ".csv": _write_csv,
    ".json": _write_json,
    ".cif": _write_cif,
    ".zip": _write_zip,
}
