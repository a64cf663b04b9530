"""Ring lists to text and files."""

from __future__ import annotations

import csv
import io
import os
from pathlib import Path

import numpy as np

from phaseid.errors import InputError
from phaseid.probes.numbers import plain_number
from phaseid.rings.ringlist import RingList
from phaseid.rings.table import FORMULA_SIGNS, KNOWN_KEYS


def rings_to_text(rings: RingList) -> str:
    """The text of a ring list file. Reading it gives the same positions, sigmas and intensities.

    Sigma and scale uncertainty are written even where they were defaults, so that they stay as they
    are. Metadata of the file that phaseid does not know is kept.
    """
    lines = [f"# title: {_one_line(rings.title)}", f"# probe: {rings.probe.label}"]
    lines.append(f"# scale uncertainty: {plain_number(rings.probe.scale_sigma)}")
    if rings.camera_constant is not None:
        lines.append(f"# camera constant: {rings.camera_constant}")
    if rings.detection_limit is not None:
        lines.append(f"# detection limit: {plain_number(rings.detection_limit)}")
    known = {*KNOWN_KEYS}
    for key, value in rings.metadata.items():
        if " ".join(key.replace("_", " ").replace("-", " ").lower().split()) not in known:
            lines.append(f"# {_one_line(key)}: {_one_line(value)}")
    has_intensity = not bool(np.isnan(rings.intensity).all())
    has_note = any(rings.notes)
    header = [rings.position_column, "sigma"]
    uneven = {"spottiness": rings.spottiness, "arcs": rings.arcs}
    given = {name: values for name, values in uneven.items() if values is not None}
    header += ["intensity"] * has_intensity + [*given] + ["note"] * has_note
    stream = io.StringIO()
    writer = csv.writer(stream, lineterminator="\n")
    writer.writerow(header)
    for i in range(len(rings)):
        row = [plain_number(rings.position[i]), plain_number(rings.position_sigma[i])]
        if has_intensity:
            level = rings.intensity[i]
            row.append(rings.grades[i] or ("" if np.isnan(level) else plain_number(level)))
        row += ["" if np.isnan(v[i]) else plain_number(v[i]) for v in given.values()]
        if has_note:
            row.append(spreadsheet_text(_one_line(rings.notes[i])))
        writer.writerow(row)
    return "\n".join(lines) + "\n" + stream.getvalue()


def spreadsheet_text(text: str) -> str:
    """Return text with an apostrophe in front where a spreadsheet would take it for a formula."""
    return f"'{text}" if text.startswith(FORMULA_SIGNS) else text


def write_rings(rings: RingList, path: str | Path) -> None:
    """Write a ring list file, whole or not at all; raises InputError if it cannot be written."""
    file = Path(path)
    part = file.with_name(f".{file.name}.{os.getpid()}.part")
    try:
        if file.exists() and not file.is_file():  # a device is written to, never replaced
            file.write_text(rings_to_text(rings), encoding="utf-8")
            return
        part.write_text(rings_to_text(rings), encoding="utf-8")
        part.replace(file)
    except OSError as error:
        part.unlink(missing_ok=True)
        reason = (error.strerror or str(error)).lower()
        raise InputError(
            f"cannot be written: {reason}", path=path, remedy="Choose another place with -o."
        ) from None


def _one_line(text: str) -> str:
    return " ".join(text.split())
