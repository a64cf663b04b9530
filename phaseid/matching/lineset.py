"""The lines of candidate phases as one pattern would show them, in padded arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.library.linetable import LineTable
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import TREND_SD

LINES_LEAST, LINES_PER_RING, LINES_MOST = 128, 5, 1000
"""Lines kept per phase and pattern, the strongest of those within reach of the rings: so many for
each ring, at least and at most these."""
_PAIRS = ((0, 0), (1, 1), (2, 2), (1, 2), (0, 2), (0, 1))
_CELLS = 3.0
"""Cells per resolution within which lines are summed before anything is left out."""
REACH_LOW, REACH_HIGH = 0.12, 0.60
"""How far beyond the outermost rings (in ln d) lines are still looked at."""
BELOW_LIMIT = 0.12
"""Lines weaker than this part of the detection limit in a phase that fills the pattern are left."""


@dataclass(frozen=True, slots=True, eq=False)
class LineSet:
    """Lines of c phases in one pattern, the n strongest within reach, strongest first.

    `x` (c, n) ln d, +inf where there is no line; `intensity` (c, n) relative to the strongest line
    between the outermost rings, 0 where there is none; `row` (c, n) index into the line table.
    `visible` (c, n) is the intensity a line would show when missing: its own plus that of weaker
    neighbours it cannot be told from, 0 for those neighbours. `strength` (c,) is the absolute
    intensity per cell volume squared of what counts as 1 in `intensity`.
    `complete` (c,) is ln of the spacing down to which the phase's lines are known; `count` (c,) how
    many lines there are, the rest of each row being filled up.
    """

    x: Floats
    intensity: Floats
    row: NDArray[np.int64]
    visible: Floats
    strength: Floats
    complete: Floats
    count: NDArray[np.int64]


def _ragged(offsets: NDArray[np.int64], phases: NDArray[np.int64]) -> tuple[NDArray[np.int64], ...]:
    """Row indices of all lines of `phases`, and for each the position of its phase in `phases`."""
    counts = offsets[phases + 1] - offsets[phases]
    owner = np.repeat(np.arange(len(phases)), counts)
    first = np.repeat(offsets[phases] - np.concatenate([[0], np.cumsum(counts)[:-1]]), counts)
    return np.arange(counts.sum()) + first, owner


def shown_intensity(table: LineTable, rows: NDArray[np.int64], pattern: Pattern) -> Floats:
    """Unnormalised intensity of the table's lines `rows` as the pattern's probe shows them."""
    weights: Floats = pattern.probe.weights(
        table.d_A[rows], table.multiplicity[rows], table.f2[rows]
    )
    return weights


def gather(table: LineTable, phases: NDArray[np.int64], pattern: Pattern) -> LineSet:
    """Collect the lines of `phases` (indices into the table) for one pattern."""
    rows, owner = _ragged(table.offsets, phases)
    x = np.log(table.d_A[rows])
    low, high = pattern.x[0], pattern.x[-1]
    near = (x > low - REACH_LOW) & (x < high + REACH_HIGH)
    rows, owner, x = rows[near], owner[near], x[near]
    intensity = shown_intensity(table, rows, pattern)
    rows, owner, x, intensity = _join(rows, owner, x, intensity, pattern)

    count = len(phases)
    strongest = np.zeros(count)
    inside = (x > low - 0.03) & (x < high + 0.03)
    np.maximum.at(strongest, owner[inside], intensity[inside])
    reference = np.where(strongest > 0, strongest, np.inf)
    relative = intensity / reference[owner]

    # weak lines of small spacing may be stronger than the file's displacement parameters say
    raised = relative * np.exp(TREND_SD * 0.5 * np.exp(-2.0 * x))
    keep = raised > BELOW_LIMIT * np.exp(pattern.ln_limit)
    rows, owner, x, relative = rows[keep], owner[keep], x[keep], np.minimum(relative[keep], 50.0)
    visible = _visible(owner, x, relative, pattern)
    order = np.lexsort((-relative, owner))
    rows, owner, x, relative = rows[order], owner[order], x[order], relative[order]
    visible = visible[order]
    starts = np.searchsorted(owner, np.arange(count))
    rank = np.arange(len(owner)) - starts[owner]
    top = rank < np.clip(LINES_PER_RING * len(pattern), LINES_LEAST, LINES_MOST)
    width = int(rank[top].max()) + 1 if top.any() else 1

    padded_x = np.full((count, width), np.inf)
    padded_i = np.zeros((count, width))
    padded_row = np.zeros((count, width), dtype=np.int64)
    padded_x[owner[top], rank[top]] = x[top]
    padded_i[owner[top], rank[top]] = relative[top]
    padded_row[owner[top], rank[top]] = rows[top]
    padded_v = np.zeros((count, width))
    padded_v[owner[top], rank[top]] = visible[top]
    return LineSet(
        x=padded_x,
        intensity=padded_i,
        row=padded_row,
        visible=padded_v,
        strength=strongest / table.volume_A3[phases] ** 2,
        complete=np.log(table.complete_to_A[phases]),
        count=np.bincount(owner[top], minlength=count),
    )


def _join(
    rows: NDArray[np.int64],
    owner: NDArray[np.int64],
    x: Floats,
    intensity: Floats,
    pattern: Pattern,
) -> tuple[NDArray[np.int64], NDArray[np.int64], Floats, Floats]:
    """Sum lines of a phase far closer than the pattern resolves, at their centre.

    Many lines too weak to be seen one by one make a ring together. The row kept is the strongest's.
    """
    shown = intensity > 0
    rows, owner, x, intensity = rows[shown], owner[shown], x[shown], intensity[shown]
    if len(rows) == 0:
        return rows, owner, x, intensity
    first = _starts(owner, np.floor(_CELLS * pattern.resolved(x)))
    total = np.add.reduceat(intensity, first)
    centre = np.add.reduceat(x * intensity, first) / total
    group = np.repeat(np.arange(len(first)), np.diff(np.append(first, len(x))))
    order = np.lexsort((-intensity, group))
    return rows[order[first]], owner[first], centre, total


def _visible(owner: NDArray[np.int64], x: Floats, intensity: Floats, pattern: Pattern) -> Floats:
    """Give the strongest line of each resolution cell the cell's whole intensity, the others 0."""
    visible = np.zeros(len(x))
    if len(x):
        first = _starts(owner, np.floor(pattern.resolved(x)))
        group = np.repeat(np.arange(len(first)), np.diff(np.append(first, len(x))))
        strongest = np.lexsort((-intensity, group))[first]
        visible[strongest] = np.add.reduceat(intensity, first)
    return visible


def _starts(owner: NDArray[np.int64], cell: Floats) -> NDArray[np.int64]:
    """Where a new phase or a new cell begins, in lines sorted by phase and falling d."""
    return np.flatnonzero(np.append(True, (np.diff(owner) != 0) | (np.diff(cell) != 0)))


@dataclass(frozen=True, slots=True, eq=False)
class Levers:
    """`values` (n, 3): change of ln d of a line for one of ln of each cell edge; `free` lengths.

    For a cubic cell the values are 0: there is no axial strain beside the isotropic one.
    """

    values: Floats
    free: int


def reciprocal_metric(table: LineTable, phase: int) -> Floats:
    """G* (3, 3), Å⁻², from the phase's own lines, of which 1/d² = hᵀ G* h holds."""
    own = slice(table.offsets[phase], table.offsets[phase + 1])
    h = table.hkl[own].astype(np.float64)
    products = np.stack([h[:, i] * h[:, j] * (1 if i == j else 2) for i, j in _PAIRS], axis=1)
    g, *_ = np.linalg.lstsq(products, 1.0 / table.d_A[own] ** 2, rcond=1e-9)
    metric = np.empty((3, 3))
    for value, (i, j) in zip(g, _PAIRS, strict=True):
        metric[i, j] = metric[j, i] = value
    return metric


def with_variants(
    lines: LineSet, parents: NDArray[np.int64], factors: list[Floats], pattern: Pattern
) -> LineSet:
    """Append copies of the candidates `parents`, line intensities times `factors` (n,) of each."""
    factor = np.stack(factors)
    x, row = lines.x[parents], lines.row[parents]
    intensity = lines.intensity[parents] * factor
    visible = lines.visible[parents] * factor
    inside = (x > pattern.x[0] - 0.03) & (x < pattern.x[-1] + 0.03)
    strongest = np.maximum(np.where(inside, intensity, 0.0).max(axis=1), 1e-12)
    order = np.argsort(-intensity, axis=1, kind="stable")
    rows = np.arange(len(parents))[:, None]

    def appended(old: Floats, new: Floats) -> Floats:
        return np.concatenate([old, new])

    return LineSet(
        x=appended(lines.x, x[rows, order]),
        intensity=appended(lines.intensity, (intensity / strongest[:, None])[rows, order]),
        row=np.concatenate([lines.row, row[rows, order]]),
        visible=appended(lines.visible, (visible / strongest[:, None])[rows, order]),
        strength=appended(lines.strength, lines.strength[parents] * strongest),
        complete=appended(lines.complete, lines.complete[parents]),
        count=np.concatenate([lines.count, lines.count[parents]]),
    )


def axial_levers(table: LineTable, phase: int, rows: NDArray[np.int64]) -> Levers:
    """How the lines `rows` (n,) of a phase answer to a relative change of each cell edge.

    ∂ln d/∂ln a_i = h_i (G* h)_i d², with G* the reciprocal metric, summing to one over the edges.
    Edges that symmetry makes alike share one lever.
    """
    metric = reciprocal_metric(table, phase)
    chosen = table.hkl[rows].astype(np.float64)
    values: Floats = chosen * (chosen @ metric) * table.d_A[rows, None] ** 2
    edges = np.diag(metric)
    alike = np.isclose(edges[[0, 1, 0]], edges[[1, 2, 2]], rtol=1e-5)
    if alike.all():
        return Levers(np.zeros_like(values), 1)
    if not alike.any():
        return Levers(values, 3)
    i, j = ((0, 1), (1, 2), (0, 2))[int(np.argmax(alike))]
    values[:, i] += values[:, j]
    values[:, j] = 0.0
    return Levers(values, 2)
