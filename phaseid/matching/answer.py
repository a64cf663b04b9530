"""From a judged set of phases to the hypothesis a person reads."""

from __future__ import annotations

from math import exp, log

import numpy as np

from phaseid.library.linetable import LineTable
from phaseid.library.phase import Phase
from phaseid.matching.identification import (
    Assignment,
    Hypothesis,
    Missing,
    PhaseAnswer,
    Scale,
    Separator,
    Unexplained,
)
from phaseid.matching.likelihood import evaluate
from phaseid.matching.model import Fit, Model, PatternFit
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.refine import RefinedCell, refine_cell, scaled_cell
from phaseid.matching.search import Judged
from phaseid.matching.separate import separating_text
from phaseid.matching.settings import DETECTION_SLOPE
from phaseid.matching.shares import weight_shares
from phaseid.probes.probe import Probe

_LOG_ODDS_LIMIT = 50.0
_MISSING_CHANCE = 0.75
_MISSING_LEAST = 0.05
_OWN_RING = 0.7
"""A ring counts for a phase's cell where that phase, by one line, makes up so much of it."""


def build_hypothesis(
    model: Model,
    tables: tuple[LineTable, ...],
    judged: Judged,
    axes: list[tuple[int, int, int] | None],
    phases: list[Phase],
    members: list[list[tuple[int, Phase]]],
    probability: float,
    rank: int,
) -> Hypothesis:
    """Assemble the hypothesis of `judged`, whose members are `phases` with fibre `axes`.

    `members` lists, for each phase, the (candidate, phase) that these rings cannot tell from it.
    """
    fit = evaluate(model, np.array([judged.members], dtype=np.int64), judged.offset[None])
    assignments: list[Assignment] = []
    unexplained: list[Unexplained] = []
    missing: list[Missing] = []
    scales = []
    for index, (pattern, part) in enumerate(zip(model.patterns, fit.patterns, strict=True)):
        factor, deviation = _reported_scale(fit, index)
        scales.append(Scale(index, exp(factor), exp(factor) * deviation))
        found = _assign(model, tables, judged, index, part, factor)
        assignments += found
        explained = {a.ring for a in found}
        left = [i for i in range(len(pattern.rings)) if i not in explained]
        hints = _ghost_hints(pattern.probe, pattern, found)
        unexplained += [Unexplained(index, i, hints.get(i, "")) for i in left]
        missing += _missing(model, tables, judged, index, part)
    shares = weight_shares(
        [
            (
                pattern,
                part.ln_amplitude[0],
                part.amplitude_sd[0],
                model.lines[i].strength[list(judged.members)],
            )
            for i, (pattern, part) in enumerate(zip(model.patterns, fit.patterns, strict=True))
        ],
        np.array([phase.density_g_cm3 for phase in phases]),
    )
    answers = []
    for k, phase in enumerate(phases):
        cell = _refined(model, tables, judged, fit, k, phase)
        answers.append(
            PhaseAnswer(
                phase=phase,
                share=None if shares is None else float(shares[0][k]),
                share_sigma=None if shares is None else float(shares[1][k]),
                indistinguishable=tuple(other for _, other in members[k]),
                cell=cell.cell,
                cell_sigma=cell.sigma,
                fibre_axis=axes[k],
                separators=tuple(
                    Separator(
                        other,
                        separating_text(
                            phase,
                            other,
                            model.lines[0],
                            judged.members[k],
                            candidate,
                            model.patterns[0],
                        ),
                    )
                    for candidate, other in members[k]
                ),
            )
        )
    odds = log(max(probability, 1e-300)) - log(max(1.0 - probability, 1e-300))
    return Hypothesis(
        rank=rank,
        probability=probability,
        log_odds=float(np.clip(odds, -_LOG_ODDS_LIMIT, _LOG_ODDS_LIMIT)),
        phases=tuple(answers),
        scale=tuple(scales),
        assignments=tuple(assignments),
        unexplained=tuple(unexplained),
        missing=tuple(sorted(missing, key=lambda m: -m.relative_intensity)),
    )


def _reported_scale(fit: Fit, index: int) -> tuple[float, float]:
    """ln of the common factor of one pattern and its one-sigma.

    One phase alone cannot tell scale from strain: there the two are reported together.
    """
    if fit.strain.shape[1] == 1:
        return float(fit.offset[0, 0, index]), float(fit.scale_sd[0, index])
    return float(fit.scale[0, index]), float(fit.scale_sd[0, index])


def _relative_intensity(model: Model, judged: Judged, index: int, k: int) -> Floats:
    """Intensity of a phase's lines in one pattern, strongest in range = 100."""
    result: Floats = 100.0 * model.lines[index].intensity[judged.members[k]]
    return result


def _assign(
    model: Model,
    tables: tuple[LineTable, ...],
    judged: Judged,
    index: int,
    part: PatternFit,
    factor: float,
) -> list[Assignment]:
    """The line that contributes most to each claimed ring."""
    pattern, table, lines = model.patterns[index], tables[index], model.lines[index]
    amplitude = np.exp(part.ln_amplitude[0])
    found = []
    for ring in np.flatnonzero(part.claimed[0]):
        strongest = (-1.0, 0, 0)
        for k, candidate in enumerate(judged.members):
            for j in np.flatnonzero(part.line_ring[0, k] == ring):
                value = float(amplitude[k] * lines.intensity[candidate, j])
                if value > strongest[0]:
                    strongest = (value, k, int(j))
        if strongest[0] < 0:
            continue
        _, k, best = strongest
        row = int(lines.row[judged.members[k], best])
        d_calc = float(table.d_A[row])
        for member in pattern.members[ring]:
            sigma = pattern.rings.sigma_A[member] / pattern.rings.d_A[member]
            residual = (log(pattern.rings.d_A[member]) - log(d_calc) - factor) / sigma
            found.append(
                Assignment(
                    pattern=index,
                    ring=int(member),
                    phase=k,
                    hkl=_hkl(table, row),
                    d_calc_A=d_calc,
                    residual_sigma=float(residual),
                    relative_intensity=min(
                        100.0, float(_relative_intensity(model, judged, index, k)[best])
                    ),
                )
            )
    return sorted(found, key=lambda a: a.ring)


def _missing(
    model: Model, tables: tuple[LineTable, ...], judged: Judged, index: int, part: PatternFit
) -> list[Missing]:
    """Lines that should have been seen and meet no ring."""
    pattern, table, lines = model.patterns[index], tables[index], model.lines[index]
    found = []
    for k, candidate in enumerate(judged.members):
        shown = np.maximum(part.shown[0, k], 1e-12)
        chance = 1.0 / (1.0 + np.exp(-DETECTION_SLOPE * (np.log(shown) - pattern.ln_limit)))
        x = lines.x[candidate, : len(shown)] + judged.offset[k, index]
        inside = (x > pattern.x[0] - 0.004) & (x < pattern.x[-1] + 0.004)
        strong = lines.intensity[candidate, : len(shown)] > _MISSING_LEAST
        for j in np.flatnonzero((chance > _MISSING_CHANCE) & inside & strong):
            row = int(lines.row[candidate, j])
            found.append(
                Missing(
                    pattern=index,
                    phase=k,
                    hkl=_hkl(table, row),
                    d_calc_A=float(table.d_A[row]),
                    relative_intensity=min(100.0, 100.0 * float(lines.intensity[candidate, j])),
                )
            )
    return found


def _refined(
    model: Model,
    tables: tuple[LineTable, ...],
    judged: Judged,
    fit: Fit,
    k: int,
    phase: Phase,
) -> RefinedCell:
    """Cell from the rings that one line of this phase makes alone, else the listed one, scaled."""
    hkl, spacing, sigma = [], [], []
    for index, part in enumerate(fit.patterns):
        pattern, table, lines = model.patterns[index], tables[index], model.lines[index]
        candidate = judged.members[k]
        strain = float(fit.offset[0, k, index] - fit.scale[0, index])
        for ring in np.flatnonzero(part.claimed[0] & (part.share[0, k] > _OWN_RING)):
            on_ring = np.flatnonzero(part.line_ring[0, k] == ring)
            intensity = lines.intensity[candidate, on_ring]
            if intensity.max() < _OWN_RING * intensity.sum():
                continue
            # what zero shift and displacement explain is taken out: measured = calculated +
            # residual
            j = on_ring[np.argmax(intensity)]
            row = int(lines.row[candidate, j])
            residual = part.residual[0, ring] * pattern.sigma[ring]
            hkl.append(_hkl(table, row))
            spacing.append(log(table.d_A[row]) + strain + residual)
            sigma.append(pattern.sigma[ring])
    scale_sigma = float(fit.scale_sd[0].min())
    # zero shift and displacement leave the strain less certain than the rings' own sigmas say
    common = max(scale_sigma, float(fit.strain_sd[0, k]))
    if hkl:
        refined = refine_cell(
            phase.cell,
            phase.space_group_number,
            np.array(hkl, dtype=np.int64),
            np.exp(np.array(spacing)),
            np.array(sigma),
            common,
        )
        if refined is not None:
            return refined
    return scaled_cell(
        phase.cell, float(fit.strain[0, k]), float(np.hypot(fit.strain_sd[0, k], scale_sigma))
    )


def _ghost_hints(probe: Probe, pattern: Pattern, found: list[Assignment]) -> dict[int, str]:
    """Rings that lie where another line of the tube would repeat a strong assigned ring."""
    hints: dict[int, str] = {}
    rings = pattern.rings
    strong = [a for a in found if a.relative_intensity >= 40.0]
    for name, wavelength in probe.ghosts:
        for assignment in strong:
            ghost = rings.d_A[assignment.ring] * probe.wavelength_A / wavelength
            for i, d in enumerate(rings.d_A):
                if abs(log(d / ghost)) < 3.0 * rings.sigma_A[i] / d + 5e-4:
                    hints.setdefault(
                        i, f"may be {name} of the ring at {rings.d_A[assignment.ring]:.4g} Å"
                    )
    return hints


def _hkl(table: LineTable, row: int) -> tuple[int, int, int]:
    h, k, l = (int(v) for v in table.hkl[row])  # noqa: E741 (Miller's own letter)
    return h, k, l
