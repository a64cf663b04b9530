"""The atom-site loops of a CIF block -> sites, with what was skipped or interpreted."""

from __future__ import annotations

import math
from collections import Counter
from dataclasses import dataclass

import gemmi
import numpy as np

from phaseid.crystal.cif_text import Block, parse_number
from phaseid.crystal.crystal import Finding, Site
from phaseid.crystal.elements import species
from phaseid.crystal.metric import Cell, metric_tensor

Tensor = tuple[float, float, float, float, float, float]
_MAX_LABEL = 60
MAX_SITES = 20_000
_EIGHT_PI_SQUARED = 8 * math.pi**2
_MEDIAN_U_A2 = 0.2  # beyond it a column of U holds B = 8π²U (common practice, no source)
_MAX_U_A2 = 1.0  # a root-mean-square displacement of 1 Å is no crystal's
_AXES = ("_atom_site_fract_x", "_atom_site_fract_y", "_atom_site_fract_z")
_UNKNOWN = ("?", ".", "")
_TENSOR = ("11", "22", "33", "12", "13", "23")


@dataclass(frozen=True, slots=True)
class SiteProblem:
    """Why the sites cannot be used: a code and a sentence."""

    code: str
    reason: str


@dataclass(frozen=True, slots=True)
class ReadSites:
    """Sites as listed; `unknown` are rows whose element could not be told (element "")."""

    sites: list[Site]
    unknown: list[Site]
    findings: tuple[Finding, ...]


def has_sites(block: Block) -> bool:
    """Tell whether the block lists atoms by fractional coordinates."""
    return _AXES[0] in block


def read_sites(block: Block, cell: Cell, formula: frozenset[str]) -> ReadSites | SiteProblem:
    """Read the sites of a block.

    `formula` holds the elements of the stated formula, to interpret labels with; empty if none.
    """
    rows = block.rows(_AXES[0])
    if rows > MAX_SITES:
        return SiteProblem(
            "too_many_sites", f"{rows} sites are listed; at most {MAX_SITES} are read"
        )
    columns = [block.column(axis) for axis in _AXES]
    if any(len(column) != rows for column in columns) or rows == 0:
        return SiteProblem("no_coordinates", "the atom list has no complete x, y, z columns")
    labels = [text[:_MAX_LABEL] for text in _padded(block.strings("_atom_site_label"), rows)]
    types = [text[:_MAX_LABEL] for text in _padded(block.strings("_atom_site_type_symbol"), rows)]
    flags = _padded(block.column("_atom_site_calc_flag"), rows)
    occupancies = block.column("_atom_site_occupancy")
    if len(occupancies) not in (0, rows):
        return SiteProblem("bad_occupancy", "the occupancies do not belong to the listed sites")
    u_aniso = _anisotropic(block, cell)
    sites: list[Site] = []
    unknown: list[Site] = []
    notes = _Notes()
    u_iso = _isotropic(block, rows, notes)
    as_number = gemmi.cif.as_number
    for row in range(rows):
        label = labels[row]
        kind = species(types[row], label, formula)
        if kind.reading == "dummy" or flags[row].lower() == "dum":
            notes.add("dummy", label)
            continue
        x, y, z = (as_number(column[row]) for column in columns)
        if not (math.isfinite(x) and math.isfinite(y) and math.isfinite(z)):
            raw = [column[row] for column in columns]
            if any(value in _UNKNOWN for value in raw):
                if kind.element not in ("H", "D", ""):
                    notes.add("unlocated", label)
                else:
                    notes.add("hydrogen_unlocated", label or "?")
                continue
            parsed = [parse_number(gemmi.cif.as_string(value)) for value in raw]
            if None in parsed:
                bad = raw[parsed.index(None)]
                return SiteProblem(
                    "bad_coordinates", f"site {label}: the coordinate {bad[:40]!r} is no number"
                )
            x, y, z = (value for value in parsed if value is not None)
            notes.add("fraction", label)
        if max(abs(x), abs(y), abs(z)) > 100:
            return SiteProblem(
                "bad_coordinates",
                f"site {label}: fractional coordinates ({x:g}, {y:g}, {z:g}) lie far outside the "
                "cell; they may be in Å",
            )
        occupancy = 1.0
        if occupancies:
            raw_occupancy = occupancies[row]
            occupancy = as_number(raw_occupancy)
            if not math.isfinite(occupancy):
                parsed_occupancy = parse_number(gemmi.cif.as_string(raw_occupancy))
                if parsed_occupancy is None and raw_occupancy not in _UNKNOWN:
                    return SiteProblem(
                        "bad_occupancy",
                        f"site {label}: occupancy {raw_occupancy[:40]!r} is no number",
                    )
                occupancy = 1.0 if parsed_occupancy is None else parsed_occupancy
                notes.add("occupancy_default", label)
            if occupancy <= 0:
                notes.add("zero_occupancy", label)
                continue
        if kind.reading:
            notes.add(kind.reading, f"{label} as {kind.element}")
        tensors = u_aniso.get(label)
        tensor = tensors.pop(0) if tensors else None
        u = u_iso[row]
        if u is None and tensor is not None:
            u = _equivalent(tensor, cell)
        if u is not None and not 0 <= u <= _MAX_U_A2:
            notes.add("displacement", label)
            u = tensor = None
        site = Site(label, kind.element, kind.charge, (x, y, z), occupancy, u, tensor)
        (sites if kind.element else unknown).append(site)
    return _judged(sites, unknown, notes, rows)


class _Notes:
    """Labels gathered by what happened to them."""

    def __init__(self) -> None:
        self.labels: dict[str, list[str]] = {}

    def add(self, kind: str, label: str) -> None:
        self.labels.setdefault(kind, []).append(label)

    def findings(self) -> tuple[Finding, ...]:
        return tuple(
            Finding(code, sentence.format(_listed(self.labels[kind])))
            for kind, (code, sentence) in _SENTENCES.items()
            if kind in self.labels
        )


_SENTENCES = {
    "dummy": ("dummy_sites_skipped", "points that are no atoms are left out: {}"),
    "hydrogen_unlocated": ("incomplete_coordinates", "sites without coordinates are left out: {}"),
    "fraction": ("coord_fraction", "coordinates written as fractions such as 3/4 are read so: {}"),
    "occupancy_default": ("occupancy_default", "an occupancy not given counts as 1: {}"),
    "zero_occupancy": ("zero_occupancy", "sites of no or negative occupancy are left out: {}"),
    "water": ("water_label", "water and hydroxyl labels are read as oxygen, hydrogen left out: {}"),
    "label": ("unusual_label", "the element is taken from an unusual label: {}"),
    "b_as_u": ("displacement_as_b", "U_iso values this large are read as B_iso = 8π²U: {}"),
    "displacement": ("bad_displacement", "displacements below 0 or above 1 Å² are ignored: {}"),
}


def _judged(
    sites: list[Site], unknown: list[Site], notes: _Notes, rows: int
) -> ReadSites | SiteProblem:
    unlocated = notes.labels.get("unlocated")
    if not sites and not unknown:
        return SiteProblem("no_coordinates", "no atom has coordinates")
    if unlocated:
        return SiteProblem(
            "incomplete_coordinates",
            f"{_listed(unlocated)}: no coordinates for atoms other than hydrogen; the lines would "
            "be wrong",
        )
    numeric = sum(parse_number(site.label) is not None for site in unknown)
    if numeric:
        return SiteProblem(
            "bad_coordinates",
            f"{numeric} of {rows} atom labels are numbers: the columns are shifted",
        )
    return ReadSites(sites, unknown, notes.findings())


def _listed(labels: list[str], at_most: int = 6) -> str:
    distinct = list(Counter(labels))
    more = len(distinct) - at_most
    return ", ".join(distinct[:at_most]) + (f" and {more} more" if more > 0 else "")


def _padded(column: list[str], rows: int) -> list[str]:
    return column if len(column) == rows else [""] * rows


def _isotropic(block: Block, rows: int, notes: _Notes) -> list[float | None]:
    """Return U_iso in Å² by row; B_iso is turned into U = B / 8π²."""
    for tag, factor in (
        ("_atom_site_u_iso_or_equiv", 1.0),
        ("_atom_site_b_iso_or_equiv", 1 / _EIGHT_PI_SQUARED),
    ):
        column = block.column(tag)
        if len(column) == rows:
            values = [gemmi.cif.as_number(raw) for raw in column]
            given = sorted(value for value in values if math.isfinite(value))
            if factor == 1.0 and given and given[len(given) // 2] > _MEDIAN_U_A2:
                notes.add("b_as_u", f"{given[len(given) // 2]:g} Å² in the median")
                factor = 1 / _EIGHT_PI_SQUARED
            # exactly 0 is a blank filled in: nothing stands still
            return [value * factor if math.isfinite(value) and value else None for value in values]
    return [None] * rows


def _anisotropic(block: Block, cell: Cell) -> dict[str, list[Tensor]]:
    """Return U_ij (CIF convention, Å²) by label, from U_ij, B_ij / 8π² or β_ij.

    Sites that share a label take its tensors in turn.
    """
    labels = block.strings("_atom_site_aniso_label")
    if not labels:
        return {}
    lengths = [math.sqrt(x) for x in _reciprocal_squares(cell)]
    pairs = ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))
    beta = [1 / (2 * math.pi**2 * lengths[i] * lengths[j]) for i, j in pairs]
    for kind, factors in (
        ("u_", [1.0] * 6),
        ("b_", [1 / _EIGHT_PI_SQUARED] * 6),
        ("beta_", beta),
    ):
        columns = [block.column(f"_atom_site_aniso_{kind}{ij}") for ij in _TENSOR]
        if all(len(column) == len(labels) for column in columns):
            tensors: dict[str, list[Tensor]] = {}
            for label, *raw in zip(labels, *columns, strict=True):
                a, b, c, d, e, f = (
                    gemmi.cif.as_number(value) * factor
                    for value, factor in zip(raw, factors, strict=True)
                )
                if all(map(math.isfinite, (a, b, c, d, e, f))):
                    tensors.setdefault(label[:_MAX_LABEL], []).append((a, b, c, d, e, f))
            return tensors
    return {}


def _reciprocal_squares(cell: Cell) -> list[float]:
    """Return a*², b*², c*² in Å⁻²."""
    return [float(x) for x in np.linalg.inv(metric_tensor(cell)).diagonal()]


def _equivalent(tensor: Tensor, cell: Cell) -> float:
    """Return U_eq = 1/3 Σ U_ij a*_i a*_j a_i·a_j in Å².

    Fischer & Tillmanns (1988), Acta Cryst. C44, 775.
    """
    metric = metric_tensor(cell)
    star = [math.sqrt(x) for x in _reciprocal_squares(cell)]
    u11, u22, u33, u12, u13, u23 = tensor
    total = sum(u * star[i] ** 2 * metric[i, i] for i, u in enumerate((u11, u22, u33)))
    total += 2 * u12 * star[0] * star[1] * metric[0, 1]
    total += 2 * u13 * star[0] * star[2] * metric[0, 2]
    total += 2 * u23 * star[1] * star[2] * metric[1, 2]
    return float(total) / 3
