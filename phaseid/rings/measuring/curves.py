"""Profiles from files: two-column text with the metadata of a ring list, and CIF powder blocks."""

from __future__ import annotations

import io
import re
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from phaseid.errors import InputError
from phaseid.rings.columns import COLUMNS
from phaseid.rings.measuring.geometry import Floats

MAX_BYTES = 100_000_000
MIN_POINTS, MAX_POINTS = 40, 1_000_000
_MAX_LINE = 5000

_METADATA = re.compile(r"#+\s*([^:#]{1,60}?)\s*:\s*(.*)$")
_NAMES = {
    "two_theta_deg": ("two_theta_deg", "two_theta", "2theta", "2theta_deg", "2θ", "tth", "angle"),
    "d_A": ("d_a", "d", "d_angstrom"),
    "d_nm": ("d_nm",),
    "q_1/A": ("q_1/a", "q", "q_a-1"),
    "q_1/nm": ("q_1/nm", "q_nm-1"),
    "g_1/A": ("g_1/a",),
    "g_1/nm": ("g_1/nm", "g"),
    "radius_px": ("radius_px", "channel", "px", "pixel"),
    "radius_mm": ("radius_mm", "mm"),
}
_CIF_POSITIONS = {
    "_pd_meas_2theta_scan": "two_theta_deg",
    "_pd_proc_2theta_corrected": "two_theta_deg",
    "_pd_proc_d_spacing": "d_A",
    "_pd_meas_2theta_fixed": "",
}
_CIF_COUNTS = (
    "_pd_meas_counts_total",
    "_pd_meas_intensity_total",
    "_pd_proc_intensity_total",
    "_pd_proc_intensity_net",
)


@dataclass(frozen=True, slots=True, eq=False)
class Curve:
    """Positions (n,) rising, in the unit of `column`; counts and their one-sigma (n,).

    `sigma_stated` is False where the square root of the counts was taken.
    """

    source: str
    column: str
    position: Floats
    counts: Floats
    sigma: Floats
    sigma_stated: bool
    metadata: Mapping[str, str] = field(default_factory=dict)
    remarks: tuple[str, ...] = ()


def read_curve(path: str | Path, *, column: str | None = None) -> Curve:
    """A profile from text or a CIF powder block; `column` says what its positions are.

    Raises InputError if it cannot be read, has no two columns of numbers, or too few points.
    """
    file = Path(path)
    try:
        with file.open("rb") as stream:
            data = stream.read(MAX_BYTES + 1)
    except OSError as error:
        raise InputError(
            f"cannot be read: {(error.strerror or str(error)).lower()}",
            path=path,
            remedy="Give the path of an image or of a profile.",
        ) from None
    if not data.strip():
        raise InputError("is empty", path=path, remedy="Save the profile again.")
    if len(data) > MAX_BYTES:
        raise InputError("is larger than 100 MB", path=path, remedy="Give one profile alone.")
    if b"\0" in data[:4096]:
        raise InputError(
            "is neither an image that can be read nor text",
            path=path,
            remedy="Images: grey TIFF, PNG, MRC. Profiles: two columns of numbers, or CIF.",
        )
    text = data.decode("utf-8-sig", errors="replace")
    if re.search(r"^\s*data_", text, re.MULTILINE) and "_pd_" in text:
        return _read_cif(text, str(path))
    return _read_text(text, str(path), column)


def _read_text(text: str, source: str, column: str | None) -> Curve:
    metadata: dict[str, str] = {}
    rows: list[list[float]] = []
    header, width = "", 0
    for number, raw in enumerate(io.StringIO(text, newline=None), start=1):
        line = raw.strip()
        if not line:
            continue
        if len(line) > _MAX_LINE or len(rows) > MAX_POINTS:
            more = (
                f"{_MAX_LINE} characters a line"
                if len(line) > _MAX_LINE
                else f"{MAX_POINTS} points"
            )
            raise InputError(
                f"has more than {more}, too much for a profile",
                path=source,
                line=number,
                remedy="A profile has a position and its counts on each line.",
            )
        if line.startswith("#"):
            if match := _METADATA.match(line):
                metadata[match[1]] = match[2].strip()
            elif not rows:
                header = line.lstrip("# ")
            continue
        cells = [cell for cell in re.split(r"[\s,;]+", line) if cell]
        try:
            numbers = [float(cell) for cell in cells]
        except ValueError:
            if rows:
                raise InputError(
                    f"'{line[:60]}' is not a row of numbers",
                    path=source,
                    line=number,
                    remedy="Begin remarks with '#'; write decimals with a point.",
                ) from None
            header = line
            continue
        width = width or max(2, len(numbers))
        if len(numbers) != width:
            raise InputError(
                f"has {len(numbers)} numbers where {width} are needed",
                path=source,
                line=number,
                remedy="A profile has a position and its counts on each line.",
            )
        rows.append(numbers[:3])
    named = [name for name in re.split(r"[\s,;]+", header.strip()) if name]
    found = _column(named[0]) if named else None
    if column is None and found is None and "position" in metadata:
        found = _column(metadata["position"])
    if column is None and found is None:
        raise InputError(
            "does not say what its positions are",
            path=source,
            remedy="Put a header such as 'two_theta_deg,counts' above the numbers, "
            "or give --unit two_theta_deg.",
        )
    has_sigma = bool(rows) and len(rows[0]) > 2
    table = np.array(rows, dtype=np.float64).reshape(len(rows), -1)
    sigma = table[:, 2] if has_sigma else None
    return _curve(source, column or found or "", table[:, :1], table[:, 1:2], sigma, metadata)


def _column(name: str) -> str | None:
    plain = re.sub(r"[()\[\]]", "", name.strip().lower()).replace("å", "a")
    return next((column for column, names in _NAMES.items() if plain in names), None)


def _read_cif(text: str, source: str) -> Curve:
    import gemmi

    try:
        document = gemmi.cif.read_string(text)
    except (ValueError, RuntimeError) as error:
        raise InputError(
            f"is a CIF that cannot be read ({str(error).splitlines()[0][:100]})",
            path=source,
            remedy="Correct it, or give the profile as two columns.",
        ) from None
    for block in document:
        counts = next(
            (c for c in map(block.find_values, _CIF_COUNTS) if len(c) >= MIN_POINTS), None
        )
        if counts is None:
            continue
        values = np.array([_cif_number(v) for v in counts])
        metadata = {"title": block.name}
        wavelength = block.find_value("_diffrn_radiation_wavelength")
        kind = (block.find_value("_diffrn_radiation_probe") or "x-ray").strip("'\"")
        if wavelength and np.isfinite(_cif_number(wavelength)):
            metadata["probe"] = f"{kind} {_cif_number(wavelength):g} A"
        for tag, column in _CIF_POSITIONS.items():
            places = block.find_values(tag)
            if column and len(places) == len(counts):
                place = np.array([_cif_number(v) for v in places])
                return _curve(source, column, place[:, None], values[:, None], None, metadata)
        for family in ("_pd_meas_2theta_range_", "_pd_proc_2theta_range_"):
            low, high = (
                _cif_number(block.find_value(family + end) or "?") for end in ("min", "max")
            )
            if np.isfinite(low) and np.isfinite(high) and high > low:
                place = np.linspace(low, high, len(values))
                return _curve(
                    source, "two_theta_deg", place[:, None], values[:, None], None, metadata
                )
    raise InputError(
        "holds no powder profile: no counts with their angles or spacings",
        path=source,
        remedy="Powder blocks have _pd_meas_2theta_scan or a range, and _pd_meas_counts_total.",
    )


def _cif_number(text: str) -> float:
    try:
        return float(re.sub(r"\(\d+\)", "", text.strip("'\"")))
    except ValueError:
        return float("nan")


def _curve(
    source: str,
    column: str,
    position: Floats,
    counts: Floats,
    sigma: Floats | None,
    metadata: Mapping[str, str],
) -> Curve:
    if column not in COLUMNS:
        raise InputError(
            f"unknown position column '{column}'", remedy=f"There are: {', '.join(COLUMNS)}."
        )
    place, level = position[:, 0], counts[:, 0]
    ok = np.isfinite(place) & np.isfinite(level)
    stated = sigma is not None and bool((sigma[ok] > 0).all())
    spread = sigma if stated and sigma is not None else np.sqrt(np.maximum(level, 1.0))
    place, level, spread = place[ok], level[ok], spread[ok]
    order = np.argsort(place, kind="stable")
    place, level, spread = place[order], level[order], spread[order]
    fresh = np.concatenate([[True], np.diff(place) > 0]) if len(place) else np.zeros(0, dtype=bool)
    place, level, spread = place[fresh], level[fresh], spread[fresh]
    if len(place) < MIN_POINTS:
        raise InputError(
            f"has {len(place)} points, a profile needs {MIN_POINTS} at least",
            path=source,
            remedy="If these are rings already read, 'phaseid identify' takes them as they are.",
        )
    if level.max() == level.min():
        raise InputError(
            f"is constant: every count is {level[0]:g}", path=source, remedy="Check the export."
        )
    if not stated and level.min() < 0:
        raise InputError(
            f"has negative counts ({level.min():g}) and no column of their uncertainty",
            path=source,
            remedy="Give raw counts, or the one-sigma as a third column.",
        )
    remarks: tuple[str, ...] = ()
    if not stated:
        remarks = ("Uncertainties follow from counting statistics: the column is taken as counts.",)
    return Curve(source, column, place, level, spread, stated, dict(metadata), remarks)
