"""Laying the lines of hypotheses on one pattern: which ring, how strong, claimed or not.

A batch of b hypotheses of k phases at once, refined over a few rounds by `likelihood.evaluate`.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import log, pi

import numpy as np
from numpy.typing import NDArray

from phaseid.matching.lineset import LineSet
from phaseid.matching.model import Looseness, PatternFit
from phaseid.matching.pairing import NearLines
from phaseid.matching.patterns import Floats, Pattern
from phaseid.matching.settings import (
    AMPLITUDE_WIDTH,
    CROWDING,
    DETECTION_SLOPE,
    FOREIGN_RINGS,
    LOGISTIC_SLOPE,
    ODD_POSITION_FACTOR,
    ODD_POSITION_SHARE,
    SCATTER_INFLATION,
    SIGMA_INFLATION,
    TREND_SD,
)

HALF_LOG_2PI = 0.5 * log(2.0 * pi)
_AMPLITUDE_PRIOR_SD = 3.0
_OWN_PART = 0.5
"""A ring shows the phase that makes more than this part of it."""
_STRONG, _STRONG_SCATTER = 0.25, 0.5
"""Lines above this part of the strongest tell a first amplitude, each only so well (ln)."""
_ABOUT = 1.5
"""Lines within so many merging distances of a ring make its position less sure."""
_COVERED = 1e-3
"""Lines the range covers with less chance than this say nothing of amplitudes."""


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
class Shift:
    """Where a pattern's lines are moved: `offset` (b, k) of each phase, `correction` (b, m) of the
    rings by zero shift and displacement, `axial` (b, k, 3) axial strains in their sigmas."""

    offset: Floats
    correction: Floats
    axial: Floats


class PatternWork:
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
        used = int(lines.count[members].max(initial=1))
        self.axial = None if axial is None else axial[:, :, :used]
        self.crowd = crowd
        self.x = lines.x[members, :used]
        self.intensity = lines.intensity[members, :used]
        self.visible = lines.visible[members, :used]
        self.ln_visible = np.log(np.maximum(self.visible, 1e-12))
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
        self.slope = DETECTION_SLOPE / np.sqrt(
            1.0 + (DETECTION_SLOPE * loose.spread / LOGISTIC_SLOPE) ** 2
        )
        self.window = _windows(pattern)
        self.null = crowd
        self.ln_amplitude = np.zeros((self.b, self.k))
        self.trend = np.zeros(self.b)
        self.limit = np.zeros(self.b)
        curve = 0.5 * np.exp(-2.0 * pattern.x)
        self.curve = curve - curve.mean()
        self.line_curve = 0.5 * np.exp(-2.0 * self.x) - curve.mean()
        self.odd_position = np.zeros((self.b, self.m), dtype=bool)
        self.claimed = np.ones((self.b, self.m), dtype=bool)

    def associate(self, shift: Shift, wide: float) -> None:
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
        real = self.intensity > 0
        about = real & (np.abs(distance) < _ABOUT * self.pattern.merging[ring])
        near = real & (np.abs(distance) < self.window[ring] + extra)
        place = (ring, position, distance, self.intensity, self.ln_amplitude)
        self.crowding2 = NearLines(about, *place).crowding(self.m)
        lines = NearLines(near, *place)
        lines.settle(self.pattern, self.window)
        self.ring = np.full(self.x.shape, -1)
        self.ring.ravel()[lines.index] = lines.ring
        cell, size = lines.owner * self.m + lines.ring, self.b * self.k * self.m
        shape = (self.b, self.k, self.m)
        self.sum = np.bincount(cell, weights=lines.intensity, minlength=size).reshape(shape)
        weight_sum = np.maximum(self.sum, 1e-300)
        moment = np.bincount(cell, weights=lines.intensity * lines.distance, minlength=size)
        self.centre = moment.reshape(shape) / weight_sum
        if self.axial is not None:
            axial = self.axial.reshape(-1, self.axial.shape[3])[lines.index]
            levers = [
                np.bincount(cell, weights=lines.intensity * axial[:, a], minlength=size)
                for a in range(axial.shape[1])
            ]
            self.lever = np.stack(levers, axis=1).reshape(*shape, -1) / weight_sum[..., None]
        with np.errstate(invalid="ignore"):
            covered = self.pattern.seen_weight(np.where(np.isfinite(position), position, 50.0))
        self.covered = np.where(self.visible > 0, covered, 0.0)

    def _missing(self) -> Floats:
        """(b, k, n) chance that the range covers a line that meets no claimed ring."""
        batch = np.arange(self.b)[:, None, None]
        met = (self.ring >= 0) & self.claimed[batch, np.maximum(self.ring, 0)]
        result: Floats = np.where(met, 0.0, self.covered)
        return result

    def start_amplitudes(self) -> None:
        """Begin with amplitudes that the rings of each phase's strong lines allow."""
        strong = (self.intensity > _STRONG) & (self.ring >= 0)
        ring = self.pattern.ln_intensity[np.maximum(self.ring, 0)]
        shown = np.log(np.maximum(self.intensity, 1e-12))
        least = np.where(strong, ring - shown, np.inf).min(axis=2) + _STRONG_SCATTER
        self.ln_amplitude = np.clip(
            np.where(np.isfinite(least), least, 0.0), self.pattern.ln_limit - 1.0, 0.5
        )

    def fit_amplitudes(self, rounds: int) -> None:
        """Newton steps for ln amplitude (b, k), trend (b,) and the detection limit's error (b,).

        They answer to ring intensities, rings seen and lines not seen.
        """
        scatter = self.pattern.scatter
        keep = (1.0 - scatter.lost) * self._missing().ravel()
        lone = np.flatnonzero(keep > _COVERED)
        keep, owner = keep[lone], lone // self.n
        ln_visible, curve = self.ln_visible.ravel()[lone], self.line_curve.ravel()[lone]

        def by_phase(values: Floats) -> Floats:
            summed = np.bincount(owner, weights=values, minlength=self.b * self.k)
            return np.asarray(summed, dtype=np.float64).reshape(self.b, self.k)

        used = self.claimed & (self.sum.sum(axis=1) > 0)
        width = self.pattern.limit_sd
        stiffness = np.diag([_AMPLITUDE_PRIOR_SD**-2 + 1e-3] * self.k + [TREND_SD**-2, width**-2])
        lever = np.broadcast_to(-self.curve, (self.b, 1, self.m))
        lower = np.full((self.b, 1, self.m), -1.0)
        trend, limit = self.k, self.k + 1
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
            seen = _logistic(DETECTION_SLOPE * (ln_total - self._ln_limit()))
            shown = np.where(used, DETECTION_SLOPE * (1.0 - seen), 0.0)
            firm = np.where(used, DETECTION_SLOPE**2 * seen * (1.0 - seen), 0.0)

            raised = (self.ln_amplitude - self._ln_limit()).ravel()
            falling = np.repeat(self.trend, self.k)
            steep = self.slope.ravel()[owner]
            would = _logistic(steep * (ln_visible + raised[owner] - falling[owner] * curve))
            slope = keep * steep * would * (1.0 - would) / (1.0 - keep * would)
            bend = steep * slope * (1.0 - would)
            effect = np.concatenate([share, lever], axis=1)
            effect_seen = np.concatenate([effect, lower], axis=1)
            gradient = np.einsum("bkm,bm->bk", effect_seen, shown)
            gradient[:, :limit] += np.einsum("bkm,bm->bk", effect, weight * error)
            lost = by_phase(slope)
            gradient[:, : self.k] -= lost + self.ln_amplitude / _AMPLITUDE_PRIOR_SD**2
            gradient[:, trend] += by_phase(slope * curve).sum(axis=1)
            gradient[:, trend] -= self.trend / TREND_SD**2
            gradient[:, limit] += lost.sum(axis=1) - self.limit / width**2
            hessian = np.einsum("bkm,bm,blm->bkl", effect_seen, firm, effect_seen) + stiffness
            hessian[:, :limit, :limit] += np.einsum("bkm,bm,blm->bkl", effect, weight, effect)
            diagonal = np.arange(self.k)
            own, curved = by_phase(bend), by_phase(bend * curve)
            hessian[:, diagonal, diagonal] += own
            for row, column, value in (
                (slice(0, self.k), trend, -curved),
                (slice(0, self.k), limit, -own),
                (trend, limit, curved.sum(axis=1)),
            ):
                hessian[:, row, column] += value
                hessian[:, column, row] += value
            hessian[:, trend, trend] += by_phase(bend * curve**2).sum(axis=1)
            hessian[:, limit, limit] += own.sum(axis=1)
            step = np.linalg.solve(hessian, gradient[:, :, None])[:, :, 0]
            step = np.clip(step, -1.0, 1.0)
            base = self.pattern.ln_limit
            self.ln_amplitude = np.clip(self.ln_amplitude + step[:, : self.k], base - 2.0, 4.0)
            self.trend = self.trend + step[:, trend]
            self.limit = self.limit + step[:, limit]
        self.share, self.ln_total, self.hessian = share, ln_total, hessian

    def _ln_limit(self) -> Floats:
        """(b, 1) ln of the detection limit."""
        result: Floats = self.pattern.ln_limit + self.limit[:, None]
        return result

    def _ln_shown(self) -> Floats:
        """(b, k, n) ln of each line's expected intensity over the detection limit."""
        shown = self.ln_amplitude[:, :, None] + self.ln_visible - self._ln_limit()[:, :, None]
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
        intensity = np.where(self.known, np.logaddexp(ordinary, strange) - HALF_LOG_2PI, 0.0)
        seen = _logistic(DETECTION_SLOPE * (self.ln_total - self._ln_limit()))
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
        """(b, m) reading error, jitter of loose phases, and the crowd of lines about a ring.

        Where lines merge wholly or in part, the ring is read somewhere among them.
        """
        jitter = np.einsum("bkm,bk->bm", self.share, self.jitter2)
        result: Floats = self.pattern.sigma**2 + jitter + CROWDING**2 * self.crowding2
        return result

    def placed(self, shift: Shift) -> Floats:
        """(b, m) shift in ln d of each ring by the nuisances."""
        total = np.einsum("bkm,bk->bm", self.share, shift.offset) + shift.correction
        if self.axial is not None:
            total = total + np.einsum("bkm,bkma,bka->bm", self.share, self.lever, shift.axial)
        return np.asarray(total)

    def unshifted(self, shift: Shift) -> Floats:
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
        claim = np.maximum(near, far) - HALF_LOG_2PI + self.ring_terms()
        foreign = self.null + log(FOREIGN_RINGS)
        self.claimed = (claim > foreign) & (self.sum.sum(axis=1) > 0)

    def missing_term(self) -> Floats:
        """(b,) ln chance that all lines that meet no ring stayed unseen."""
        keep = (1.0 - self.pattern.scatter.lost) * self._missing()
        would = _logistic(self.slope[:, :, None] * self._ln_shown())
        result: Floats = np.log1p(-keep * would).sum(axis=(1, 2))
        return result

    def occam_term(self) -> Floats:
        """(b,) ln of posterior over prior volume of amplitudes, trend and limit (Laplace)."""
        _, log_det = np.linalg.slogdet(self.hessian)
        width = self.pattern.limit_sd
        volume = self.k * (HALF_LOG_2PI - log(AMPLITUDE_WIDTH)) - log(TREND_SD * width)
        stray = (self.trend / TREND_SD) ** 2 + (self.limit / width) ** 2
        result: Floats = np.minimum(volume - 0.5 * log_det, 0.0) - 0.5 * stray
        return result

    def own_rings(self) -> NDArray[np.int64]:
        """(b, k) how many claimed rings a phase makes for a good part."""
        made = (self.share > _OWN_PART) & self.claimed[:, None, :]
        result: NDArray[np.int64] = made.sum(axis=2)
        return result

    def excused(self) -> NDArray[np.bool_]:
        """(b, m) unclaimed rings beyond the spacing down to which a phase's lines are stored."""
        result: NDArray[np.bool_] = ~self.claimed & (self.pattern.x < self.complete[:, None])
        return result

    def result(self, target: Floats, residual: Floats) -> PatternFit:
        """What the last round came to; `target`, `residual` (b, m) in ln d."""
        variance = np.einsum("bkk->bk", np.linalg.inv(self.hessian))[:, : self.k]
        shown = np.exp(self._ln_shown() + self._ln_limit()[:, :, None])
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
