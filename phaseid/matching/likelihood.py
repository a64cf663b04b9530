"""The likelihood of a set of phases, all nuisances marginalised. Batches of b hypotheses of k
phases.

One generative model for every pattern of the specimen. A phase's line j stands at x_j + δ + ε +
z·ζ: δ the pattern's common scale, ε the phase's strain, ζ zero shift and displacement, all
Gaussian, so their marginal is closed (linear Gaussian model). Lines near a ring add up in it; the
ring's intensity strays from that sum by a log-normal factor with a heavy tail; a line above the
detection limit that meets no ring counts against the phase. Rings no phase claims are either a few
from nowhere (Poisson) or those of an unlisted phase, with the crowd's line density.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import lgamma, log, pi

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.lineset import LineSet
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import (
    AMPLITUDE_WIDTH,
    BESIDE_PRIOR,
    DETECTION_SLOPE,
    FOREIGN_RINGS,
    LISTED_JITTER,
    ODD_POSITION_FACTOR,
    ODD_POSITION_SHARE,
    SCATTER_INFLATION,
    SIGMA_INFLATION,
    STRAIN,
    TREND_SD,
    UNLISTED_RING_COUNT,
)

_HALF_LOG_2PI = 0.5 * log(2.0 * pi)
_AMPLITUDE_PRIOR_SD = 3.0
_OWN_PART = 0.3
"""A phase that makes less than this part of every ring does not show."""
_AXES = 3
_HIDDEN = 1.2
"""Two lines nearer than this many resolutions make one ring."""
_EXCUSED_LINES = 8.0
"""Rings beyond a phase's stored lines are taken as if it had this many lines somewhere there."""


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
    `shows` (b,) whether every phase makes at least one ring for the greater part;
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

    def rows(self, part: NDArray[np.int64]) -> Looseness:
        """The looseness of some of the hypotheses."""
        axial = None if self.axial is None else tuple(a[part] for a in self.axial)
        return Looseness(self.strain[part], self.jitter[part], self.spread[part], axial)


def _logistic(z: Floats) -> Floats:
    result: Floats = 1.0 / (1.0 + np.exp(-np.clip(z, -40.0, 40.0)))
    return result


def _windows(pattern: Pattern) -> Floats:
    """(m,) how far from a ring a line may be to be thought of as its.

    Far enough for an odd reading, but not past the middle between two rings.
    """
    near = np.maximum(4.5 * pattern.sigma, 0.6 * pattern.resolution)
    if len(pattern) == 1:
        return np.maximum(near, 9.0 * pattern.sigma)
    gaps = np.diff(pattern.x)
    middle = 0.5 * np.minimum(np.append(gaps, np.inf), np.append(np.inf, gaps))
    result: Floats = np.maximum(near, np.minimum(9.0 * pattern.sigma, middle))
    return result


@dataclass(frozen=True, slots=True, eq=False)
class _Shift:
    """Where a pattern's lines are moved: `offset` (b, k) of each phase, `correction` (b, m) of the
    rings by zero shift and displacement, `axial` (b, k, 3) axial strains in their sigmas."""

    offset: Floats
    correction: Floats
    axial: Floats


class _PatternWork:
    """One pattern's part of a batch, refined over a few rounds."""

    def __init__(
        self,
        pattern: Pattern,
        lines: LineSet,
        crowd: Floats,
        members: NDArray[np.int64],
        loose: Looseness,
        axial: Floats | None,
    ) -> None:
        self.pattern = pattern
        self.axial = axial
        self.crowd = crowd
        self.x = lines.x[members]
        self.intensity = lines.intensity[members]
        self.visible = lines.visible[members]
        self.with_ln_visible = np.log(np.maximum(self.visible, 1e-12))
        self.b, self.k, self.n = self.x.shape
        self.m = len(pattern)
        self.complete = lines.complete[members].max(axis=1) if self.k else np.full(self.b, -np.inf)
        self.jitter2 = loose.jitter**2
        scatter = pattern.scatter
        known = np.isfinite(pattern.intensity_sd)
        self.known = known
        reading = np.where(known, pattern.intensity_sd, 0.0) ** 2
        self.narrow = scatter.intensity**2 + reading
        self.odd = scatter.odd_intensity**2 + reading
        self.spread2 = loose.spread**2
        self.window = _windows(pattern)
        self.null = crowd
        self.ln_amplitude = np.zeros((self.b, self.k))
        self.trend = np.zeros(self.b)
        curve = 0.5 * np.exp(-2.0 * pattern.x)
        self.curve = curve - curve.mean()
        self.line_curve = 0.5 * np.exp(-2.0 * self.x) - curve.mean()
        self.odd_position = np.zeros((self.b, self.m), dtype=bool)
        self.claimed = np.ones((self.b, self.m), dtype=bool)

    def associate(self, shift: _Shift, wide: float) -> None:
        """Let every line fall on the ring nearest to it, if within the window (`wide` of it)."""
        correction = shift.correction
        position = self.x + shift.offset[:, :, None]
        if self.axial is not None:
            position = position + np.einsum("bkna,bka->bkn", self.axial, shift.axial)
        middles = 0.5 * (self.pattern.x[1:] + self.pattern.x[:-1])
        ring = np.searchsorted(middles, position)
        batch = np.arange(self.b)[:, None, None]
        distance = position - self.pattern.x[ring] + correction[batch, ring]
        extra = np.sqrt(self.jitter2)[:, :, None] * 3.0
        if self.axial is not None:
            extra = extra + (wide - 1.0) * np.abs(self.axial).max(axis=3)
        near = np.abs(distance) < self.window[ring] + extra
        near &= self.intensity > 0
        near = self._together(near, ring, position, distance)
        self.ring = np.where(near, ring, -1)
        cell = (np.arange(self.b * self.k).reshape(self.b, self.k, 1) * self.m + ring)[near]
        size = self.b * self.k * self.m
        weight = self.intensity[near]
        shape = (self.b, self.k, self.m)
        self.sum = np.bincount(cell, weights=weight, minlength=size).reshape(shape)
        weight_sum = np.maximum(self.sum, 1e-300)
        away = distance[near]
        moment = np.bincount(cell, weights=weight * away, minlength=size).reshape(shape)
        square = np.bincount(cell, weights=weight * away**2, minlength=size).reshape(shape)
        self.centre = moment / weight_sum
        self.square = square / weight_sum
        if self.axial is not None:
            levers = [
                np.bincount(cell, weights=weight * self.axial[..., a][near], minlength=size)
                for a in range(self.axial.shape[3])
            ]
            self.lever = np.stack(levers, axis=1).reshape(*shape, -1) / weight_sum[..., None]
        with np.errstate(invalid="ignore"):
            covered = self.pattern.seen_weight(np.where(np.isfinite(position), position, 50.0))
        self.covered = np.where(self.visible > 0, covered, 0.0)

    def _together(
        self, near: NDArray[np.bool_], ring: NDArray[np.int64], position: Floats, distance: Floats
    ) -> NDArray[np.bool_]:
        """Keep, of the lines near a ring, its main line and what cannot be told from that.

        A line that would have made a ring of its own is not hidden by being near another.
        """
        key = np.arange(self.b)[:, None, None] * self.m + ring
        with np.errstate(divide="ignore"):
            score = np.log(self.intensity) + self.ln_amplitude[:, :, None]
        score = np.where(near, score - 0.5 * (distance / (1.5 * self.pattern.sigma[ring])) ** 2, 0)
        best = np.full(self.b * self.m, -np.inf)
        np.maximum.at(best, key[near], score[near])
        main = near & (score >= best[key])
        middle = np.zeros(self.b * self.m)
        middle[key[main]] = position[main]
        apart = np.abs(position - middle[key])
        hidden = near & (apart < _HIDDEN * self.pattern.resolution[ring])
        return np.asarray(hidden | main)

    def _missing(self) -> Floats:
        """(b, k, n) chance that the range covers a line that meets no claimed ring."""
        batch = np.arange(self.b)[:, None, None]
        met = (self.ring >= 0) & self.claimed[batch, np.maximum(self.ring, 0)]
        result: Floats = np.where(met, 0.0, self.covered)
        return result

    def fit_amplitudes(self, rounds: int) -> None:
        """Newton steps for ln amplitude (b, k) and trend (b,).

        They answer to ring intensities, rings seen and lines not seen.
        """
        scatter, limit = self.pattern.scatter, self.pattern.ln_limit
        keep = (1.0 - scatter.lost) * self._missing()
        used = self.claimed & (self.sum.sum(axis=1) > 0)
        stiffness = np.diag([_AMPLITUDE_PRIOR_SD**-2 + 1e-3] * self.k + [TREND_SD**-2])
        lever = np.broadcast_to(-self.curve, (self.b, 1, self.m))
        for _ in range(rounds):
            part = np.exp(self.ln_amplitude)[:, :, None] * self.sum
            total = np.maximum(part.sum(axis=1), 1e-12)
            share = part / total[:, None, :]
            ln_total = np.log(total) - self.trend[:, None] * self.curve
            error = self.pattern.ln_intensity - ln_total
            spread = np.einsum("bkm,bk->bm", share, self.spread2)
            narrow, odd = self.narrow + spread, self.odd + spread
            likely = (1.0 - scatter.odd_share) * np.exp(-0.5 * error**2 / narrow) / np.sqrt(narrow)
            rare = scatter.odd_share * np.exp(-0.5 * error**2 / odd) / np.sqrt(odd) + 1e-30
            trust = likely / (likely + rare)
            weight = np.where(used & self.known, trust / narrow + (1.0 - trust) / odd, 0.0)
            seen = _logistic(DETECTION_SLOPE * (ln_total - limit))
            pull = weight * error + np.where(used, DETECTION_SLOPE * (1.0 - seen), 0.0)
            stiff = weight + np.where(used, DETECTION_SLOPE**2 * seen * (1.0 - seen), 0.0)

            would = _logistic(DETECTION_SLOPE * self._ln_shown())
            slope = keep * DETECTION_SLOPE * would * (1.0 - would) / (1.0 - keep * would)
            bend = DETECTION_SLOPE * slope * (1.0 - would)
            effect = np.concatenate([share, lever], axis=1)
            gradient = np.einsum("bkm,bm->bk", effect, pull)
            gradient[:, : self.k] -= slope.sum(axis=2) + self.ln_amplitude / _AMPLITUDE_PRIOR_SD**2
            gradient[:, self.k] += (slope * self.line_curve).sum(axis=(1, 2))
            gradient[:, self.k] -= self.trend / TREND_SD**2
            hessian = np.einsum("bkm,bm,blm->bkl", effect, stiff, effect) + stiffness
            diagonal = np.arange(self.k)
            hessian[:, diagonal, diagonal] += bend.sum(axis=2)
            cross = (bend * self.line_curve).sum(axis=2)
            hessian[:, : self.k, self.k] -= cross
            hessian[:, self.k, : self.k] -= cross
            hessian[:, self.k, self.k] += (bend * self.line_curve**2).sum(axis=(1, 2))
            step = np.linalg.solve(hessian, gradient[:, :, None])[:, :, 0]
            step = np.clip(step, -1.0, 1.0)
            self.ln_amplitude = np.clip(self.ln_amplitude + step[:, :-1], limit - 2.0, 4.0)
            self.trend = self.trend + step[:, -1]
        self.share, self.ln_total, self.hessian = share, ln_total, hessian

    def _ln_shown(self) -> Floats:
        """(b, k, n) ln of each line's expected intensity over the detection limit."""
        shown = self.ln_amplitude[:, :, None] + self.with_ln_visible - self.pattern.ln_limit
        result: Floats = shown - self.trend[:, None, None] * self.line_curve
        return result

    def ring_terms(self, factor: float = 1.0) -> Floats:
        """(b, m) ln likelihood of each ring's intensity and of its being seen, if claimed.

        `factor` widens the ordinary scatter of intensities.
        """
        scatter = self.pattern.scatter
        error = self.pattern.ln_intensity - self.ln_total
        spread = np.einsum("bkm,bk->bm", self.share, self.spread2)
        spread = spread + (factor**2 - 1.0) * scatter.intensity**2
        narrow, odd = self.narrow + spread, self.odd + spread
        ordinary = log(1.0 - scatter.odd_share) - 0.5 * (error**2 / narrow + np.log(narrow))
        strange = log(scatter.odd_share) - 0.5 * (error**2 / odd + np.log(odd))
        intensity = np.where(self.known, np.logaddexp(ordinary, strange) - _HALF_LOG_2PI, 0.0)
        seen = _logistic(DETECTION_SLOPE * (self.ln_total - self.pattern.ln_limit))
        result: Floats = intensity + np.log(np.maximum(seen, 1e-12))
        return result

    def intensity_term(self) -> Floats:
        """(b,) ln likelihood of the claimed rings' intensities, their scatter marginalised."""
        terms = [
            log(prior) + np.where(self.claimed, self.ring_terms(factor), 0.0).sum(axis=1)
            for factor, prior in SCATTER_INFLATION
        ]
        result: Floats = np.logaddexp.reduce(terms, axis=0)
        return result

    def variance(self) -> Floats:
        """(b, m) position variance of each ring, odd readings included."""
        base = self._ordinary_variance()
        result: Floats = np.where(self.odd_position, base * ODD_POSITION_FACTOR**2, base)
        return result

    def _ordinary_variance(self) -> Floats:
        """(b, m) reading error, jitter of loose phases, and the centre of a ring of several lines.

        The centre of lines that merge moves with their intensities: by the scatter of intensity
        times the width of the group.
        """
        jitter = np.einsum("bkm,bk->bm", self.share, self.jitter2)
        centre = np.einsum("bkm,bkm->bm", self.share, self.centre)
        width2 = np.einsum("bkm,bkm->bm", self.share, self.square) - centre**2
        merged = self.pattern.scatter.intensity**2 * np.maximum(width2, 0.0)
        result: Floats = self.pattern.sigma**2 + jitter + merged
        return result

    def placed(self, shift: _Shift) -> Floats:
        """(b, m) shift in ln d of each ring by the nuisances."""
        total = np.einsum("bkm,bk->bm", self.share, shift.offset) + shift.correction
        if self.axial is not None:
            total = total + np.einsum("bkm,bkma,bka->bm", self.share, self.lever, shift.axial)
        return np.asarray(total)

    def unshifted(self, shift: _Shift) -> Floats:
        """(b, m) measured minus calculated position at zero scale, strain and angle errors."""
        result: Floats = self.placed(shift) - np.einsum("bkm,bkm->bm", self.share, self.centre)
        return result

    def decide(self, residual: Floats) -> None:
        """Give each ring to the phases or to nowhere, whichever is the likelier."""
        factor = SIGMA_INFLATION[1][0]
        spread = self._ordinary_variance() * factor**2
        near = log(1.0 - ODD_POSITION_SHARE) - 0.5 * (residual**2 / spread + np.log(spread))
        spread = spread * ODD_POSITION_FACTOR**2
        far = log(ODD_POSITION_SHARE) - 0.5 * (residual**2 / spread + np.log(spread))
        self.odd_position = far > near
        claim = np.maximum(near, far) - _HALF_LOG_2PI + self.ring_terms()
        foreign = self.null + log(FOREIGN_RINGS)
        self.claimed = (claim > foreign) & (self.sum.sum(axis=1) > 0)

    def missing_term(self) -> Floats:
        """(b,) ln chance that all lines that meet no ring stayed unseen."""
        keep = (1.0 - self.pattern.scatter.lost) * self._missing()
        would = _logistic(DETECTION_SLOPE * self._ln_shown())
        result: Floats = np.log1p(-keep * would).sum(axis=(1, 2))
        return result

    def occam_term(self) -> Floats:
        """(b,) ln of posterior over prior volume of amplitudes and trend (Laplace)."""
        _, log_det = np.linalg.slogdet(self.hessian)
        volume = self.k * (_HALF_LOG_2PI - log(AMPLITUDE_WIDTH)) - log(TREND_SD) - 0.5 * log_det
        result: Floats = np.minimum(volume, 0.0) - 0.5 * (self.trend / TREND_SD) ** 2
        return result

    def shows(self) -> NDArray[np.bool_]:
        """(b, k) whether a phase makes some claimed ring for a good part."""
        made = (self.share > _OWN_PART) & self.claimed[:, None, :]
        result: NDArray[np.bool_] = made.any(axis=2)
        return result

    def excused(self) -> NDArray[np.bool_]:
        """(b, m) unclaimed rings beyond the spacing down to which a phase's lines are stored."""
        result: NDArray[np.bool_] = ~self.claimed & (self.pattern.x < self.complete[:, None])
        return result

    def result(self, target: Floats, residual: Floats) -> PatternFit:
        variance = np.einsum("bkk->bk", np.linalg.inv(self.hessian))[:, : self.k]
        shown = np.exp(self._ln_shown() + self.pattern.ln_limit)
        return PatternFit(
            line_ring=self.ring,
            share=self.share,
            claimed=self.claimed,
            residual=residual / self.pattern.sigma,
            unshifted=target,
            ln_total=self.ln_total,
            ln_amplitude=self.ln_amplitude,
            amplitude_sd=np.sqrt(np.maximum(variance, 0.0)),
            shown=self._missing() * np.where(self.visible > 0, shown, 0.0),
        )


def _leftover(works: list[_PatternWork]) -> Floats:
    """(b,) ln density of the rings no phase claims: a few from nowhere, or an unlisted phase's."""
    size = works[0].b
    density = np.zeros(size)
    nowhere = np.full(size, log(1.0 - BESIDE_PRIOR))
    unlisted = np.full(size, log(BESIDE_PRIOR))
    factorial = np.array([lgamma(n + 1.0) for n in range(max(w.m for w in works) + 1)])
    stay = log(UNLISTED_RING_COUNT / (1.0 + UNLISTED_RING_COUNT))
    for work in works:
        excused = work.excused()
        left = ~work.claimed & ~excused
        density += np.where(left, work.null, 0.0).sum(axis=1)
        density += np.where(excused, work.null + log(_EXCUSED_LINES), 0.0).sum(axis=1)
        count = left.sum(axis=1)
        nowhere += count * log(FOREIGN_RINGS) - FOREIGN_RINGS
        unlisted += factorial[count] + count * stay - log(1.0 + UNLISTED_RING_COUNT)
    result: Floats = density + np.logaddexp(nowhere, unlisted)
    return result


def nothing_listed(model: Model) -> float:
    """ln likelihood of all rings being those of an unlisted phase."""
    total = 0.0
    stay = log(UNLISTED_RING_COUNT / (1.0 + UNLISTED_RING_COUNT))
    for pattern, crowd in zip(model.patterns, model.crowd, strict=True):
        total += float(crowd.sum())
        total += lgamma(len(pattern) + 1.0) + len(pattern) * stay - log(1.0 + UNLISTED_RING_COUNT)
    return total


class _Positions:
    """The linear Gaussian model of all positions together.

    Nuisances in order: those of each pattern, the strain of each phase, three axial strains of each
    phase where any phase has them.
    """

    def __init__(self, works: list[_PatternWork], loose: Looseness) -> None:
        self.works = works
        self.loose = loose
        self.widths = [work.pattern.nuisance.shape[1] for work in works]
        self.strains = sum(self.widths)
        self.axials = self.strains + works[0].k
        self.size = self.axials + (0 if loose.axial is None else _AXES * works[0].k)

    def _design(self) -> Floats:
        blocks = []
        start = 0
        for work, width in zip(self.works, self.widths, strict=True):
            block = np.zeros((work.b, work.m, self.size))
            block[:, :, start : start + width] = work.pattern.nuisance
            strain = np.einsum("bkm,bk->bmk", work.share, self.loose.strain)
            block[:, :, self.strains : self.axials] = strain
            if work.axial is not None:
                lever = np.einsum("bkm,bkma->bmka", work.share, work.lever)
                block[:, :, self.axials :] = lever.reshape(work.b, work.m, -1)
            blocks.append(block)
            start += width
        return np.concatenate(blocks, axis=1)

    def solve(self, targets: list[Floats], factor: float) -> tuple[Floats, Floats, Floats]:
        """Posterior mean (b, q) and covariance (b, q, q) of the nuisances, and ln marginal (b,).

        `targets` are measured − calculated at zero nuisance, per pattern; `factor` inflates sigmas.
        Rings not claimed carry no weight.
        """
        design = self._design()
        target = np.concatenate(targets, axis=1)
        claimed = np.concatenate([work.claimed for work in self.works], axis=1)
        variance = np.concatenate([work.variance() for work in self.works], axis=1) * factor**2
        weight = np.where(claimed, 1.0 / variance, 0.0)
        weighted = design * weight[:, :, None]
        information = np.einsum("bmq,bmr->bqr", weighted, design) + np.eye(self.size)
        projected = np.einsum("bmq,bm->bq", weighted, target)
        covariance = np.linalg.inv(information)
        mean = np.einsum("bqr,br->bq", covariance, projected)
        _, log_det = np.linalg.slogdet(information)
        square = (weight * target**2).sum(axis=1) - np.einsum("bq,bq->b", mean, projected)
        norm = np.where(claimed, 0.5 * np.log(variance) + _HALF_LOG_2PI, 0.0).sum(axis=1)
        return mean, covariance, -0.5 * square - norm - 0.5 * log_det

    def marginal(self, targets: list[Floats]) -> Floats:
        """(b,) ln marginal likelihood of the positions, sigma inflation marginalised."""
        terms = [log(prior) + self.solve(targets, factor)[2] for factor, prior in SIGMA_INFLATION]
        odd = sum((work.odd_position & work.claimed).sum(axis=1) for work in self.works)
        plain = sum((~work.odd_position & work.claimed).sum(axis=1) for work in self.works)
        result: Floats = np.logaddexp.reduce(terms, axis=0)
        result += odd * log(ODD_POSITION_SHARE) + plain * log(1.0 - ODD_POSITION_SHARE)
        return result

    def place(self, mean: Floats) -> list[_Shift]:
        """What the nuisances `mean` (b, q) do in each pattern."""
        strain = mean[:, self.strains : self.axials] * self.loose.strain
        axial = mean[:, self.axials :].reshape(len(mean), -1, _AXES)
        shifts = []
        start = 0
        for work, width in zip(self.works, self.widths, strict=True):
            own = mean[:, start : start + width]
            offset = strain + own[:, :1] * work.pattern.nuisance[0, 0]
            shifts.append(_Shift(offset, own[:, 1:] @ work.pattern.nuisance[:, 1:].T, axial))
            start += width
        return shifts


def evaluate(
    model: Model,
    members: NDArray[np.int64],
    offset: Floats,
    loose: Looseness | None = None,
) -> Fit:
    """Likelihood of b hypotheses of k phases each.

    `members` (b, k) candidate indices; `offset` (b, k, K) where to look first for each phase's
    shift in each pattern; `loose` how far phases may stray (default: as listed).
    """
    if loose is None:
        loose = Looseness.listed((members.shape[0], members.shape[1]))
    axial = loose.axial or (None,) * len(model.patterns)
    works = [
        _PatternWork(pattern, lines, crowd, members, loose, stretch)
        for pattern, lines, crowd, stretch in zip(
            model.patterns, model.lines, model.crowd, axial, strict=True
        )
    ]
    positions = _Positions(works, loose)
    still = np.zeros((*members.shape, _AXES))
    shifts = [
        _Shift(offset[:, :, i], np.zeros((work.b, work.m)), still) for i, work in enumerate(works)
    ]
    for rounds, wide in ((4, 2.0), (2, 1.3), (1, 1.0)):
        targets = []
        for work, shift in zip(works, shifts, strict=True):
            work.associate(shift, wide)
            work.fit_amplitudes(rounds)
            targets.append(work.unshifted(shift))
        mean, covariance, _ = positions.solve(targets, SIGMA_INFLATION[0][0])
        shifts = positions.place(mean)
        residuals = []
        for work, shift, target in zip(works, shifts, targets, strict=True):
            residuals.append(target - work.placed(shift))
            work.decide(residuals[-1])
    # the claims have moved: settle amplitudes and positions once more on the final claims
    for work in works:
        work.fit_amplitudes(1)
    mean, covariance, _ = positions.solve(targets, SIGMA_INFLATION[0][0])
    total = positions.marginal(targets) + _leftover(works)
    for work in works:
        total = total + work.intensity_term() + work.missing_term() + work.occam_term()
    deviation = np.sqrt(np.maximum(np.einsum("bqq->bq", covariance), 0.0))
    first = np.cumsum([0, *positions.widths])
    scales = np.stack(
        [mean[:, first[i]] * w.pattern.nuisance[0, 0] for i, w in enumerate(works)], axis=1
    )
    scale_sds = np.stack(
        [deviation[:, first[i]] * w.pattern.nuisance[0, 0] for i, w in enumerate(works)], axis=1
    )
    offsets = np.stack([shift.offset for shift in positions.place(mean)], axis=2)
    strains = slice(positions.strains, positions.axials)
    return Fit(
        log_likelihood=total,
        offset=offsets,
        scale=scales,
        scale_sd=scale_sds,
        strain=mean[:, strains] * loose.strain,
        strain_sd=deviation[:, strains] * loose.strain,
        shows=np.logical_or.reduce([work.shows() for work in works]).all(axis=1),
        patterns=tuple(map(_PatternWork.result, works, targets, residuals)),
    )
