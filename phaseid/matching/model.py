"""What the likelihood takes and gives: a model of patterns, and fits of hypotheses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.lineset import LineSet
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import LISTED_JITTER, STRAIN, Rough


@dataclass(frozen=True, slots=True, eq=False)
class Model:
    """All that the likelihood of a hypothesis depends on.

    `patterns` (K); `lines` one LineSet per pattern over the same candidate phases; `crowd` one (m,)
    array per pattern: ln density of a ring that no phase explains, in ln d and ln intensity.
    """

    patterns: tuple[Pattern, ...]
    lines: tuple[LineSet, ...]
    crowd: tuple[Floats, ...]


@dataclass(frozen=True, slots=True, eq=False)
class PatternFit:
    """How b hypotheses lie on one pattern.

    `line_ring` (b, k, n) ring each line falls on, -1 for none; `share` (b, k, m) part of each
    ring's calculated intensity from each phase; `claimed` (b, m) rings explained; `residual` (b, m)
    measured − calculated in sigmas of the ring; `unshifted` (b, m) measured − calculated in ln d
    with all nuisances at zero; `ln_total` (b, m) calculated ln intensity; `ln_amplitude`,
    `amplitude_sd` (b, k); `shown` (b, k, n) expected intensity of every line that meets no ring,
    times the chance that the range covers it (0 where it meets one).
    """

    line_ring: NDArray[np.int64]
    share: Floats
    claimed: NDArray[np.bool_]
    residual: Floats
    unshifted: Floats
    ln_total: Floats
    ln_amplitude: Floats
    amplitude_sd: Floats
    shown: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """Result for b hypotheses.

    `log_likelihood` (b,); `offset` (b, k, K) fitted shift of each phase in each pattern (scale plus
    strain); `scale`, `scale_sd` (b, K) the common shift alone; `strain`, `strain_sd` (b, k);
    `shows` (b,) whether every phase makes a ring for a good part, in a mixture two;
    `patterns` one PatternFit per pattern.
    """

    log_likelihood: Floats
    offset: Floats
    scale: Floats
    scale_sd: Floats
    strain: Floats
    strain_sd: Floats
    shows: NDArray[np.bool_]
    patterns: tuple[PatternFit, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Looseness:
    """How far each phase may stray from its listed structure: (b, k) arrays.

    `strain` one-sigma of its isotropic strain; `jitter` line-by-line scatter in ln d; `spread`
    extra one-sigma of ln intensity. A listed phase has (STRAIN, LISTED_JITTER, 0). `axial`, per
    pattern (b, k, n, 3), is the shift in ln d of each line for one sigma of each of three
    independent axial strains; None where no phase has any.
    """

    strain: Floats
    jitter: Floats
    spread: Floats
    axial: tuple[Floats, ...] | None = None

    @classmethod
    def listed(cls, shape: tuple[int, int]) -> Looseness:
        """Every phase as it is listed."""
        return cls(np.full(shape, STRAIN), np.full(shape, LISTED_JITTER), np.zeros(shape))

    @classmethod
    def rough(cls, shape: tuple[int, int], which: NDArray[np.int64], way: Rough) -> Looseness:
        """As listed, but phase `which` (b,) known less well than listed structures usually are."""
        loose = cls.listed(shape)
        rows = np.arange(shape[0])
        loose.jitter[rows, which] = way.jitter
        loose.spread[rows, which] = way.intensity
        return loose

    def rows(self, part: NDArray[np.int64]) -> Looseness:
        """The looseness of some of the hypotheses."""
        axial = None if self.axial is None else tuple(a[part] for a in self.axial)
        return Looseness(self.strain[part], self.jitter[part], self.spread[part], axial)
