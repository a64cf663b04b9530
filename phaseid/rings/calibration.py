"""The common factor between measured and true spacings, from the rings of a known standard.

x = ln d throughout: the factor is a shift. Which ring is which line is found by trying every shift
that lays some ring on some line; the shift itself follows by weighted least squares with the usual
systematic errors of the geometry as nuisances. No library and no file here.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Ints = NDArray[np.int64]

OUTLIER = 3.5
"""Rings further than this many sigmas from their line are rejected."""
_UNKNOWN_WIDTH = 2.5
"""Range of ln(factor) where nothing is known of it: from a third to three times the guess."""
_BROAD_SD, _BROAD_SHARE = 0.15, 0.2
"""A stated scale is wrong far beyond its sigma this often, by about this much."""
_FOREIGN = ((0.08, 0.6), (0.4, 0.3), (0.75, 0.1))
"""(share of rings that are not the standard's, prior)."""
_HALF_SEEN = 12.0
"""Relative intensity of a line that is listed in half of the cases."""
_LISTED = 0.88
"""Chance that a strong line is in the list: texture and short lists leave lines out."""
_INNER, _INNER_REACH = 0.6, 0.25
"""Chance that the list reaches a line just inside its first ring, and how it falls off in ln d."""
_NEAR = 4.0
_TRIED = 12
_PRIOR_READINGS = 4.0
"""An assumed sigma of reading counts as much as so many rings against their own scatter."""


@dataclass(frozen=True, slots=True, eq=False)
class ReferenceLines:
    """Lines of a standard: `x` (n,) ln d (Å), `hkl` (n, 3), `intensity` (n,) strongest = 100."""

    x: Floats
    hkl: Ints
    intensity: Floats


@dataclass(frozen=True, slots=True, eq=False)
class Readings:
    """Rings of one pattern, m of them.

    `x` (m,) ln of the measured d; `sigma` (m,) one-sigma of each; `nuisance` (m, q) the effect on x
    of one sigma of each systematic error; `scale_sd` the one-sigma of the common factor as stated,
    None where nothing is known of it; `sigma_stated` False where sigma is a default.
    """

    x: Floats
    sigma: Floats
    nuisance: Floats
    scale_sd: float | None
    sigma_stated: bool


@dataclass(frozen=True, slots=True, eq=False)
class Fit:
    """A standard laid on the rings.

    `shift` = ln(true d / measured d) and its one-sigma; `line` (m,) index of each ring's line, -1
    where rejected; `residual` (m,) (measured - calculated) / sigma after the shift, to the nearest
    line for rejected rings; `nuisance` (q,) fitted systematic errors in their sigmas; `scatter` the
    factor by which residuals exceed the sigmas; `missing` lines within the range of the rings that
    no ring shows; `log_evidence` against rings from nowhere; `rivals` (shift, probability) of other
    assignments, best first; `probability` of this one among them.
    """

    shift: float
    sigma: float
    line: Ints
    residual: Floats
    nuisance: Floats
    scatter: float
    missing: tuple[int, ...]
    log_evidence: float
    probability: float
    rivals: tuple[tuple[float, float], ...]

    @property
    def used(self) -> Ints:
        """Indices of the rings that carry the fit."""
        return np.flatnonzero(self.line >= 0)


def merged(lines: ReferenceLines, resolution: Floats) -> ReferenceLines:
    """Join lines nearer than `resolution` (n,) to a stronger one, at their common centre."""
    order = np.argsort(-lines.intensity, kind="stable")
    x, weight, total = lines.x, lines.intensity, [0.0] * len(order)
    owner: dict[int, list[int]] = {}
    centres: list[int] = []
    for i in order.tolist():
        home = next((c for c in centres if abs(x[i] - x[c]) < resolution[c]), i)
        if home == i:
            centres.append(i)
        owner.setdefault(home, []).append(i)
    for home, group in owner.items():
        total[home] = float(weight[group].sum())
    keep = np.array(sorted(centres, key=lambda i: -x[i]), dtype=np.int64)
    centre = np.array([np.average(x[owner[i]], weights=weight[owner[i]]) for i in keep.tolist()])
    intensity = np.array([total[i] for i in keep.tolist()])
    return ReferenceLines(centre, lines.hkl[keep], intensity * 100.0 / intensity.max())


def lay(readings: Readings, lines: ReferenceLines) -> Fit | None:
    """Find which ring is which line, and the common factor; None where no ring meets a line."""
    search = _Search(readings, lines)
    trials = search.trials()
    if not trials:
        return None
    fits = [fit for fit in map(search.refined, trials) if fit is not None]
    if not fits:
        return None
    distinct: list[_Trial] = []
    for fit in sorted(fits, key=lambda f: -f.log_evidence):
        if all(abs(fit.shift - other.shift) > 3 * search.blur for other in distinct):
            distinct.append(fit)
    weight = np.exp(np.array([f.log_evidence for f in distinct]) - distinct[0].log_evidence)
    weight /= weight.sum()
    best = distinct[0]
    return search.answer(
        best,
        float(weight[0]),
        tuple((f.shift, float(w)) for f, w in zip(distinct[1:], weight[1:], strict=True)),
    )


@dataclass(frozen=True, slots=True, eq=False)
class _Trial:
    shift: float
    sd: float
    log_evidence: float


class _Search:
    def __init__(self, readings: Readings, lines: ReferenceLines) -> None:
        self.readings = readings
        self.lines = lines
        systematic = (readings.nuisance**2).sum(axis=1)
        self.wide = np.sqrt(readings.sigma**2 + systematic + 3e-4**2)
        self.blur = float(np.median(self.wide))
        self.span = float(np.ptp(readings.x)) + 0.1
        chance = lines.intensity / (lines.intensity + _HALF_SEEN)
        self.listed = _LISTED * chance

    def trials(self) -> list[float]:
        """The most promising shifts, each laying some ring on some line."""
        pairs = (self.lines.x[None, :] - self.readings.x[:, None]).ravel()
        within = 6 * _BROAD_SD if self.readings.scale_sd is not None else _UNKNOWN_WIDTH / 2
        pairs = np.sort(pairs[np.abs(pairs) < within])
        if not len(pairs):
            return []
        new = np.append(True, np.diff(pairs) > 0.2 * self.blur)
        pairs = pairs[new]
        scored = [(self.log_likelihood(float(s)) + self.log_prior(float(s)), s) for s in pairs]
        scored.sort(reverse=True)
        chosen: list[float] = []
        for _, s in scored:
            if all(abs(s - other) > 2 * self.blur for other in chosen):
                chosen.append(float(s))
            if len(chosen) == _TRIED:
                break
        return chosen

    def log_prior(self, shift: float) -> float:
        """ln density of the shift before any ring is seen."""
        sd = self.readings.scale_sd
        if sd is None:
            return float(-np.log(_UNKNOWN_WIDTH))
        near = (1 - _BROAD_SHARE) / sd * np.exp(-0.5 * (shift / sd) ** 2)
        far = _BROAD_SHARE / _BROAD_SD * np.exp(-0.5 * (shift / _BROAD_SD) ** 2)
        return float(np.log(near + far) - 0.5 * np.log(2 * np.pi))

    def log_likelihood(self, shift: float) -> float:
        """ln likelihood of all rings at this shift, against rings from nowhere."""
        x = self.readings.x + shift
        away = (x[:, None] - self.lines.x[None, :]) / self.wide[:, None]
        margin = 3 * self.blur
        inside = (self.lines.x > x.min() - margin) & (self.lines.x < x.max() + margin)
        if not inside.any():
            return -np.inf
        weight = np.where(inside, self.listed, 0.0)
        density = np.exp(-0.5 * away**2) / (np.sqrt(2 * np.pi) * self.wide[:, None])
        own = (density * (weight / weight.sum())).sum(axis=1) * self.span
        rings = [
            np.log(prior) + np.log((1 - share) * own + share).sum() for share, prior in _FOREIGN
        ]
        met = (np.abs(away) < _NEAR).any(axis=0)
        between = (self.lines.x > x.min()) & (self.lines.x < x.max())
        inner = np.clip((self.lines.x - x.max()) / _INNER_REACH, 0.0, 30.0)
        covered = np.where(between, 1.0, np.where(inner > 0, _INNER * np.exp(-inner), 0.0))
        unseen = np.log1p(-(self.listed * covered)[~met]).sum()
        return float(np.logaddexp.reduce(rings) + unseen)

    def refined(self, shift: float) -> _Trial | None:
        for cut in (6.0, 5.0, 4.0, 4.0):
            line, _ = self.assign(shift, np.zeros(self.readings.nuisance.shape[1]), cut, self.wide)
            used = np.flatnonzero(line >= 0)
            if not len(used):
                return None
            weight = 1.0 / self.wide[used] ** 2
            gap = self.lines.x[line[used]] - self.readings.x[used]
            shift = float(np.average(gap, weights=weight))
        sd = float(weight.sum() ** -0.5)
        width = np.log(sd * np.sqrt(2 * np.pi))
        return _Trial(shift, sd, self.log_likelihood(shift) + self.log_prior(shift) + float(width))

    def assign(self, shift: float, nuisance: Floats, cut: float, sd: Floats) -> tuple[Ints, Floats]:
        """Line of each ring (-1: none within `cut` sigmas) and deviation from it in ln d."""
        x = self.readings.x + shift + self.readings.nuisance @ nuisance
        away = x[:, None] - self.lines.x[None, :]
        score = np.log(self.listed)[None, :] - 0.5 * (away / sd[:, None]) ** 2
        best = score.argmax(axis=1)
        rows = np.arange(len(x))
        deviation = away[rows, best]
        line = np.where(np.abs(deviation) < cut * sd, best, -1)
        for j in set(line[line >= 0].tolist()):
            rivals = np.flatnonzero(line == j)
            first = rivals[np.argmin(np.abs(deviation[rivals]) / sd[rivals])]
            apart = np.abs(x[rivals] - x[first]) > 3 * (sd[rivals] + sd[first])
            line[rivals[apart]] = -1
        return line, deviation

    def solve(self, line: Ints) -> tuple[float, Floats, float, float, int]:
        """Shift, nuisances, variance of the shift, χ², degrees of freedom."""
        used = np.flatnonzero(line >= 0)
        sigma = self.readings.sigma[used]
        gap = (self.lines.x[line[used]] - self.readings.x[used]) / sigma
        design = np.column_stack([np.ones(len(used)), self.readings.nuisance[used]])
        design = design / sigma[:, None]
        count = design.shape[1]
        prior = np.diag([0.0] + [1.0] * (count - 1))
        covariance = np.linalg.inv(design.T @ design + prior)
        value = covariance @ (design.T @ gap)
        rest = gap - design @ value
        square = float((rest**2).sum() + (value[1:] ** 2).sum())
        return float(value[0]), value[1:], float(covariance[0, 0]), square, len(used) - 1

    def answer(
        self, trial: _Trial, probability: float, rivals: tuple[tuple[float, float], ...]
    ) -> Fit:
        sigma = self.readings.sigma
        line, _ = self.assign(
            trial.shift, np.zeros(self.readings.nuisance.shape[1]), 4.0, self.wide
        )
        seen: set[bytes] = set()
        while line.tobytes() not in seen:
            seen.add(line.tobytes())
            shift, nuisance, _, _, _ = self.solve(line)
            _, deviation = self.assign(shift, nuisance, np.inf, sigma)
            spread = self.robust((deviation / sigma)[line >= 0])
            next_line, _ = self.assign(shift, nuisance, OUTLIER, sigma * spread)
            if (next_line >= 0).any():
                line = next_line
        shift, nuisance, variance, square, freedom = self.solve(line)
        _, deviation = self.assign(shift, nuisance, np.inf, sigma)
        x = self.readings.x + shift
        met = set(line[line >= 0].tolist())
        between = (self.lines.x > x.min()) & (self.lines.x < x.max())
        scatter = self.scatter(square, freedom)
        return Fit(
            shift=shift,
            sigma=float(np.sqrt(variance)) * scatter,
            line=line,
            residual=deviation / sigma,
            nuisance=nuisance,
            scatter=scatter,
            missing=tuple(j for j in np.flatnonzero(between).tolist() if j not in met),
            log_evidence=trial.log_evidence,
            probability=probability,
            rivals=rivals,
        )

    def robust(self, residual: Floats) -> float:
        """Scale of the residuals in their sigmas that one or two outliers do not move."""
        size = np.sort(np.abs(residual))
        if len(size) < 5:
            scale = float(np.sqrt((size[:-1] ** 2).mean())) if len(size) > 2 else 1.0
        else:
            scale = 1.4826 * float(np.median(size)) * (1.0 + 1.0 / (len(size) - 1))
        if self.readings.sigma_stated:
            return max(1.0, scale)
        known, count = _PRIOR_READINGS, len(size)
        return float(np.sqrt((known + count * scale**2) / (known + count)))

    def scatter(self, square: float, freedom: int) -> float:
        """Factor on the sigmas, from χ².

        Stated sigmas are never taken as too large (Birge 1932, Phys. Rev. 40, 207). Assumed ones
        are a guess worth a few readings: the scaled inverse χ² posterior of their variance.
        """
        if self.readings.sigma_stated:
            return float(np.sqrt(max(1.0, square / freedom))) if freedom > 0 else 1.0
        return float(np.sqrt((_PRIOR_READINGS + square) / (_PRIOR_READINGS + freedom - 2.0)))
