"""What there is to draw of one pattern: rings as measured, lines as one answer calculates them."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from typing import TYPE_CHECKING, Literal

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.identification import (
    Assignment,
    Hypothesis,
    Identification,
    Missing,
    Scale,
)
from phaseid.reports.picture_style import phase_letter
from phaseid.reports.picture_weak import WeakLine, weak_lines
from phaseid.reports.plain import hkl_text, safe, short_phase_text, signed_text
from phaseid.rings.columns import COLUMNS
from phaseid.rings.ringlist import RingList

if TYPE_CHECKING:
    from phaseid.library import Library

UNKNOWN_HEIGHT = 45.0
UNSEEN = 0.1  # of its calculated intensity, where a phase makes no ring of a pattern


@dataclass(frozen=True, slots=True)
class MeasuredRing:
    """A ring: `d_A` as measured, `true_d_A` after the fitted scale, so that it meets its line.

    `height` is its relative intensity (strongest = 100), `UNKNOWN_HEIGHT` where none was given;
    `matches` are (phase, deviation in sigma) of the lines that explain it; none for one left over.
    """

    ring: int
    d_A: float
    true_d_A: float
    height: float
    matches: tuple[tuple[int, float], ...]
    key: str
    title: str

    @property
    def phases(self) -> tuple[int, ...]:
        """The phases that explain it, each once."""
        return tuple(dict.fromkeys(phase for phase, _ in self.matches))


@dataclass(frozen=True, slots=True)
class CalculatedLine:
    """A line of phase `phase`: it explains a ring, is strong and missing, or too weak to be seen.

    `height` is its intensity on the scale of the measured ones, per phase.
    """

    kind: Literal["found", "missing", "weak"]
    phase: int
    hkl: tuple[int, int, int]
    d_A: float
    height: float
    key: str
    title: str


@dataclass(frozen=True, slots=True)
class Scene:
    """One pattern beside one answer; `number` counts patterns from 0.

    `curve` (k, 2) is the measured curve, true d (Å) and height (highest = 100); None for a list
    from a file.
    """

    number: int
    pattern: RingList
    hypothesis: Hypothesis | None
    measured: tuple[MeasuredRing, ...]
    calculated: tuple[CalculatedLine, ...]
    scale: Scale | None
    has_intensity: bool
    curve: NDArray[np.float64] | None = None

    @property
    def factor(self) -> float:
        """Measured d / true d; 1 where no scale was fitted."""
        return 1.0 if self.scale is None else self.scale.factor

    def strongest(self, rings: int) -> Scene:
        """The same with that many rings, and no more missing lines, the strongest of both."""
        if max(len(self.measured), len(self.calculated)) <= rings:
            return self
        kept = sorted(self.measured, key=lambda ring: -ring.height)[:rings]
        keys = {ring.key for ring in kept}
        missing = [line for line in self.calculated if line.kind == "missing"]
        keys |= {line.key for line in sorted(missing, key=lambda line: -line.height)[:rings]}
        return replace(
            self,
            measured=tuple(ring for ring in self.measured if ring.key in keys),
            calculated=tuple(
                line for line in self.calculated if line.kind == "weak" or line.key in keys
            ),
        )

    def names(self, letters: int) -> tuple[str, ...]:
        """The phases of the answer, each with its letter, shortened to so many letters."""
        if self.hypothesis is None:
            return ()
        return tuple(
            f"{phase_letter(k)}  {short_phase_text(part.phase, letters - 3)}"
            for k, part in enumerate(self.hypothesis.phases)
        )

    @property
    def scale_text(self) -> str:
        """The fitted scale beside the uncertainty that was stated."""
        stated = f"stated to {100 * self.pattern.probe.scale_sigma:.2g} %"
        if self.scale is None:
            return f"scale not fitted, {stated}"
        return f"scale {self.scale.factor:.4f} ± {self.scale.sigma:.4f}, {stated}"


def scene(
    answer: Identification,
    hypothesis: Hypothesis | None,
    number: int,
    library: Library | None = None,
) -> Scene:
    """Gather the rings and lines of pattern `number` under `hypothesis` (None: no answer).

    Lines too weak to be seen are in `library`, that of the answer; without it there are none.
    Raises InputError where it does not hold a phase of the answer.
    """
    pattern = answer.patterns[number]
    heights = [float(value) for value in pattern.intensity]
    scale = None
    if hypothesis is not None:
        scale = next((s for s in hypothesis.scale if s.pattern == number), None)
    factor = 1.0 if scale is None else scale.factor
    weak: tuple[WeakLine, ...] = ()
    if hypothesis is not None and library is not None:
        weak = weak_lines(hypothesis, number, pattern, library)
    return Scene(
        number=number,
        pattern=pattern,
        hypothesis=hypothesis,
        measured=tuple(
            _measured(pattern, hypothesis, number, ring, factor) for ring in range(len(pattern))
        ),
        calculated=() if hypothesis is None else _calculated(hypothesis, number, heights, weak),
        scale=scale,
        has_intensity=any(not math.isnan(value) for value in heights),
        curve=_curve(pattern, factor),
    )


def _curve(pattern: RingList, factor: float) -> NDArray[np.float64] | None:
    """The measured curve on true spacings, as the rings' own spacings say where these are."""
    if pattern.curve is None:
        return None
    position, height = pattern.curve[pattern.curve[:, 0] > 0].T
    column, probe = COLUMNS[pattern.position_column], pattern.probe
    constant = pattern.camera_constant.value if pattern.camera_constant else 1.0
    plain = column.d_A(position, probe.wavelength_A, constant)
    rings = column.d_A(pattern.position, probe.wavelength_A, constant)
    order = np.argsort(pattern.position)
    # a calibration moved the rings: the curve goes with them
    moved = np.interp(position, pattern.position[order], (pattern.d_A / rings)[order])
    d_A = plain * moved / factor
    shown = (d_A >= pattern.d_A.min() / factor * 0.98) & (d_A <= pattern.d_A.max() / factor * 1.02)
    highest = float(height[shown].max(initial=0.0))
    return np.stack([d_A, height * (100.0 / highest)], axis=1) if highest > 0 else None


def _measured(
    pattern: RingList, hypothesis: Hypothesis | None, number: int, ring: int, factor: float
) -> MeasuredRing:
    found = [
        a
        for a in (() if hypothesis is None else hypothesis.assignments)
        if (a.pattern, a.ring) == (number, ring)
    ]
    d_A, height = float(pattern.d_A[ring]), float(pattern.intensity[ring])
    told = f"Ring {ring + 1}, measured {d_A:.4f} Å"
    if pattern.grades[ring] or not math.isnan(height):
        told += f", intensity {pattern.grades[ring] or f'{height:.0f}'}"
    for a in found:
        formula = hypothesis.phases[a.phase].phase.formula if hypothesis else ""
        told += (
            f"; {phase_letter(a.phase)} {safe(formula)} {hkl_text(a.hkl)} at {a.d_calc_A:.4f} Å, "
            f"off by {signed_text(a.residual_sigma)} sigma"
        )
    if not found:
        told += "; unexplained"
    return MeasuredRing(
        ring=ring,
        d_A=d_A,
        true_d_A=d_A / factor,
        height=UNKNOWN_HEIGHT if math.isnan(height) else height,
        matches=tuple((a.phase, a.residual_sigma) for a in found),
        key=ring_key(number, ring),
        title=told,
    )


def ring_key(number: int, ring: int) -> str:
    """What links a ring of the picture to its row in the table."""
    return f"p{number + 1}r{ring + 1}"


def missing_key(number: int, order: int) -> str:
    """What links a missing line of the picture to its row."""
    return f"p{number + 1}m{order + 1}"


def _calculated(
    hypothesis: Hypothesis, number: int, heights: list[float], weak: tuple[WeakLine, ...]
) -> tuple[CalculatedLine, ...]:
    factors = [
        _intensity_factor(hypothesis, number, phase, heights)
        for phase in range(len(hypothesis.phases))
    ]
    seen = {a.phase for a in hypothesis.assignments if a.pattern == number}
    matched = [
        CalculatedLine(
            kind="found",
            phase=a.phase,
            hkl=a.hkl,
            d_A=a.d_calc_A,
            height=min(100.0, a.relative_intensity * factors[a.phase]),
            key=ring_key(number, a.ring),
            title=f"{_told(hypothesis, a)}, ring {a.ring + 1}",
        )
        for a in hypothesis.assignments
        if a.pattern == number
    ]
    missing = [
        CalculatedLine(
            kind="missing",
            phase=m.phase,
            hkl=m.hkl,
            d_A=m.d_calc_A,
            height=min(100.0, m.relative_intensity * factors[m.phase]),
            key=missing_key(number, order),
            title=f"Missing: {_told(hypothesis, m)}",
        )
        for order, m in enumerate(m for m in hypothesis.missing if m.pattern == number)
    ]
    faint = [
        CalculatedLine(
            kind="weak",
            phase=w.phase,
            hkl=w.hkl,
            d_A=w.d_A,
            height=min(
                100.0, w.relative_intensity * (factors[w.phase] if w.phase in seen else UNSEEN)
            ),
            key="",
            title=f"Too weak to be seen, or behind another: {_line_told(hypothesis, *w)}",
        )
        for w in weak
    ]
    return tuple(sorted([*matched, *missing, *faint], key=lambda line: -line.d_A))


def _told(hypothesis: Hypothesis, line: Assignment | Missing) -> str:
    return _line_told(hypothesis, line.phase, line.hkl, line.d_calc_A, line.relative_intensity)


def _line_told(
    hypothesis: Hypothesis, phase: int, hkl: tuple[int, int, int], d_A: float, intensity: float
) -> str:
    formula = safe(hypothesis.phases[phase].phase.formula)
    return (
        f"{phase_letter(phase)} {formula} {hkl_text(hkl)}, calculated "
        f"{d_A:.4f} Å, intensity {intensity:.0f} of 100"
    )


def _intensity_factor(
    hypothesis: Hypothesis, number: int, phase: int, heights: list[float]
) -> float:
    """What lays a phase's calculated intensities on the measured ones: the ratio of their sums.

    Over rings that this phase alone explains, else over all of its; 1 where none was measured.
    """
    own = [a for a in hypothesis.assignments if a.pattern == number and a.phase == phase]
    shared = {a.ring for a in hypothesis.assignments if a.pattern == number and a.phase != phase}
    for pairs in (
        [(heights[a.ring], a.relative_intensity) for a in own if a.ring not in shared],
        [(heights[a.ring], a.relative_intensity) for a in own],
    ):
        seen = [(m, c) for m, c in pairs if not math.isnan(m)]
        calculated = sum(c for _, c in seen)
        if calculated > 0:
            return sum(m for m, _ in seen) / calculated
    return 1.0
