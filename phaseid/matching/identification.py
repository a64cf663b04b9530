"""The finished identification: what matching hands to reports."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

from phaseid.library.phase import Phase
from phaseid.rings.ringlist import RingList

Verdict = Literal["identified", "ambiguous", "no-match"]


@dataclass(frozen=True, slots=True)
class Scale:
    """Fitted common factor of one pattern: calculated d × factor = measured d; `sigma` of the
    factor."""

    pattern: int
    factor: float
    sigma: float


@dataclass(frozen=True, slots=True)
class Assignment:
    """Ring `ring` of pattern `pattern` explained by line hkl of phase `phase` (index in the
    hypothesis).

    `d_calc_A` is the calculated spacing of the phase as stored, without the fitted scale;
    `residual_sigma` is (measured − scaled calculated) / the ring's sigma.
    `relative_intensity` is the calculated line's, strongest line of that phase in range = 100.
    """

    pattern: int
    ring: int
    phase: int
    hkl: tuple[int, int, int]
    d_calc_A: float
    residual_sigma: float
    relative_intensity: float


@dataclass(frozen=True, slots=True)
class Unexplained:
    """A ring no phase of the hypothesis explains; `hint` names a usual cause where one fits, else
    ""."""

    pattern: int
    ring: int
    hint: str = ""


@dataclass(frozen=True, slots=True)
class Missing:
    """A line the phase should show in the pattern's range and that was not measured."""

    pattern: int
    phase: int
    hkl: tuple[int, int, int]
    d_calc_A: float
    relative_intensity: float


@dataclass(frozen=True, slots=True)
class Separator:
    """A measurement that would tell the answer from another phase: plain words in `text`."""

    other: Phase
    text: str


@dataclass(frozen=True, slots=True)
class PhaseAnswer:
    """One phase of a hypothesis.

    `share` is the weight fraction (0-1) from absolute intensities, None for a pattern that cannot
    give one; `share_sigma` its one-sigma. `indistinguishable` are library phases these rings cannot
    tell from this one. `cell` is the refined cell (Å, degrees) with `cell_sigma`, None where too
    few lines were assigned. `fibre_axis` is (u, v, w) where the pattern is explained by a textured
    film.
    """

    phase: Phase
    share: float | None
    share_sigma: float | None
    indistinguishable: tuple[Phase, ...] = ()
    cell: tuple[float, float, float, float, float, float] | None = None
    cell_sigma: tuple[float, float, float, float, float, float] | None = None
    fibre_axis: tuple[int, int, int] | None = None
    separators: tuple[Separator, ...] = ()


@dataclass(frozen=True, slots=True)
class Hypothesis:
    """One explanation of the patterns: a set of phases. `probability` counts indistinguishable
    groups.

    `log_odds` is the natural log of the odds against everything else together.
    """

    rank: int
    probability: float
    log_odds: float
    phases: tuple[PhaseAnswer, ...]
    scale: tuple[Scale, ...]
    assignments: tuple[Assignment, ...]
    unexplained: tuple[Unexplained, ...]
    missing: tuple[Missing, ...]


@dataclass(frozen=True, slots=True)
class LibraryStamp:
    """Which library answered."""

    path: str
    phases: int
    digest: str


@dataclass(frozen=True, slots=True)
class TypeMatch:
    """No listed phase fits, but the ring ratios are those of a known structure type with another
    cell."""

    type_name: str
    like: Phase
    a_A: float
    a_sigma_A: float
    probability: float


@dataclass(frozen=True, slots=True)
class Identification:
    """The answer: ranked hypotheses, the probability left for what no listed phase explains,
    remarks.

    `unlisted_probability` is that of "something not in this library". `remarks` are sentences a
    reader needs (defaults used, rings set aside, chemistry applied). `cautions` are safety
    sentences for the phases named.
    """

    verdict: Verdict
    patterns: tuple[RingList, ...]
    hypotheses: tuple[Hypothesis, ...]
    unlisted_probability: float
    library: LibraryStamp
    remarks: tuple[str, ...] = ()
    cautions: tuple[str, ...] = ()
    type_matches: tuple[TypeMatch, ...] = ()
