"""Telling a profile from a ring list."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np

MIN_ROWS = 100
EVENNESS = 0.05  # rings are nowhere as evenly spaced as the steps of a scan
_HEAD_BYTES = 200_000


def is_profile(path: Path) -> bool:
    """Whether a file is text with many evenly spaced positions, or a CIF with a powder block."""
    try:
        with path.open("rb") as stream:
            head = stream.read(_HEAD_BYTES)
    except OSError:
        return False
    if b"\0" in head:
        return False
    if re.search(rb"^\s*data_", head, re.MULTILINE):
        return re.search(rb"^\s*_pd_(meas|proc)_", head, re.MULTILINE) is not None
    positions = []
    for line in head.splitlines()[:-1]:
        cells = [cell for cell in re.split(rb"[\s,;]+", line.strip()) if cell]
        try:
            positions.append(float(cells[0]) if len(cells) > 1 else float("nan"))
        except (ValueError, IndexError):
            continue
    if np.isfinite(positions).sum() < MIN_ROWS:
        return False
    steps = np.diff(np.array([p for p in positions if np.isfinite(p)]))
    step = float(np.median(steps))
    return step != 0 and bool((np.abs(steps - step) < EVENNESS * abs(step)).mean() > 0.9)
