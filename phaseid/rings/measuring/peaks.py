"""Which peaks a curve holds: search by matched filter, fit, look again at what is left over."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from phaseid.rings.measuring.fitting import (
    FWHM_PER_SIGMA,
    Floats,
    PeakFit,
    Satellite,
    background_basis,
    fit_background,
    fit_peaks,
)
from phaseid.rings.measuring.halos import find_halos

DETECTION = 5.0  # sigmas above the background below which no peak is claimed
WIDTHS = 2.0 ** np.arange(0.0, 5.0, 0.5)  # sigmas looked for, in steps of the abscissa
MAX_PEAKS = 150
PASSES = 4
REFITS = 3
SEPARABLE = 0.4  # widths between two peaks, below which they are one of another shape
SHAPE_ERROR = 0.02  # of a peak's height: how far its true shape may be from the one fitted


@dataclass(frozen=True, slots=True)
class Found:
    """Peaks of a curve: their fit, detection limit (area, at the median background), halos."""

    fit: PeakFit | None
    background: Floats
    limit: float
    broad: tuple[float, ...]
    fwhm: float


def kernel(width: float) -> Floats:
    """Matched filter for a Gaussian of sigma `width` steps, blind to a parabola beneath it."""
    half = int(np.ceil(4.0 * width)) + 1
    t = np.arange(-half, half + 1, dtype=np.float64)
    gauss = np.exp(-0.5 * (t / width) ** 2)
    smooth = np.stack([np.ones_like(t), t * t], axis=1)
    inner = gauss - smooth @ np.linalg.lstsq(smooth, gauss, rcond=None)[0]
    return np.asarray(inner / (inner @ gauss))


def significance(y: Floats, sigma: Floats, width: float) -> Floats:
    """Height of a peak of `width` steps at each point over its one-sigma (n,)."""
    weights = kernel(width)
    half = len(weights) // 2
    if len(y) <= 2 * half + 1:
        return np.zeros_like(y)
    height = np.convolve(y, weights, mode="same")
    spread = np.sqrt(np.convolve(sigma**2, weights**2, mode="same"))
    score = height / spread
    edge = half // 2
    padded = np.pad(y, half, mode="reflect", reflect_type="odd")
    score_edge = np.convolve(padded, weights, mode="same")[half:-half] / spread
    score[:half], score[-half:] = score_edge[:half], score_edge[-half:]
    score[:edge], score[len(score) - edge :] = 0.0, 0.0
    return np.asarray(score)


def candidates(
    y: Floats, sigma: Floats, widths: Floats, threshold: float
) -> list[tuple[int, float, float]]:
    """(index, sigma in steps, significance) of peaks that stand out, strongest first."""
    if not len(widths):
        return []
    scores = np.stack([significance(y, sigma, width) for width in widths])
    best = scores.argmax(axis=0)
    top = scores.max(axis=0)
    inner = (top[1:-1] >= top[:-2]) & (top[1:-1] > top[2:]) & (top[1:-1] > threshold)
    places = np.flatnonzero(inner) + 1
    found: list[tuple[int, float, float]] = []
    for place in places[np.argsort(-top[places])]:
        width = float(widths[best[place]])
        if all(abs(place - p) > 1.6 * max(min(width, w), 1.0) for p, w, _ in found):
            found.append((int(place), width, float(top[place])))
    return found


def narrowest_first(y: Floats, sigma: Floats, threshold: float) -> list[tuple[int, float, float]]:
    """As `candidates`, each at the narrowest scale at which it stands out, with its own width.

    Narrow scales see a peak alone, wide ones would take it together with its neighbours. The width
    is where the curve bends: the inflections of a Gaussian lie one sigma from its top.
    """
    from scipy.ndimage import gaussian_filter1d

    found: list[tuple[int, float, float]] = []
    for scale in WIDTHS:
        score = significance(y, sigma, scale)
        inner = (score[1:-1] >= score[:-2]) & (score[1:-1] > score[2:]) & (score[1:-1] > threshold)
        places = np.flatnonzero(inner) + 1
        bend = gaussian_filter1d(y, scale, order=2, mode="nearest")
        fresh = []
        for place in places[np.argsort(-score[places])]:
            if any(abs(place - p) < 3.0 * max(scale, w) for p, w, _ in found):
                continue
            left = np.flatnonzero(bend[:place] > 0)
            right = np.flatnonzero(bend[place:] > 0)
            if not left.size or not right.size or bend[place] >= 0:
                continue
            half = 0.5 * (place + right[0] - left[-1] - 1.0)
            width = float(np.sqrt(max(half**2 - scale**2, 0.25)))
            if width > 0.5 * scale:  # else it would have stood out at a narrower scale
                fresh.append((int(place), width, float(score[place])))
        found += fresh
    return found


def find_peaks(
    x: Floats,
    y: Floats,
    sigma: Floats,
    *,
    origin: float | None = None,
    satellite: Satellite | None = None,
    clipped: NDArray[np.bool_] | None = None,
    detection: float = DETECTION,
) -> Found:
    """Peaks of y ± sigma (n,) at evenly spaced x; `origin` is where a direct beam's tail begins.

    What is much wider than a peak is background; its maxima go to `broad` (their positions). Points
    `clipped` (n,) by saturation show that there is a peak, but not its shape.
    """
    from scipy.ndimage import gaussian_filter1d

    step = float(np.median(np.diff(x)))
    first = narrowest_first(y, sigma, detection + 1.0)
    if clipped is not None:
        first = _one_each(first, clipped)
    if satellite is not None:
        first = _without_companions(first, x, satellite)
    if not first:
        basis = background_basis(x, 12.0 * step, origin=origin)
        level = fit_background(y, sigma, basis)
        broad = find_halos(x, level, sigma, 6.0 * step)
        return Found(None, level, _limit(sigma, 3.0, step, detection), broad, 6.0 * step)
    typical = _typical_width(first)
    widths = WIDTHS[(typical / 2.1 <= WIDTHS) & (typical * 2.1 >= WIDTHS)]
    basis = background_basis(x, typical * FWHM_PER_SIGMA * step, origin=origin)
    position: list[float] = []
    fwhm: list[float] = []
    fit: PeakFit | None = None
    level = fit_background(y, sigma, basis)
    residual = y - level
    for turn in range(PASSES):
        spread = sigma if fit is None else _spread(sigma, fit, step)
        seen = [c for c in first if typical / 2.5 < c[1] < 2.5 * typical] if turn == 0 else None
        fresh = [
            c
            for c in seen or candidates(residual, spread, widths, detection)
            if all(abs(x[c[0]] - p) > 0.6 * w for p, w in zip(position, fwhm, strict=True))
        ]
        fresh = fresh[: MAX_PEAKS - len(position)]
        if not fresh:
            break
        position += [float(x[place]) for place, _, _ in fresh]
        fwhm += [width * FWHM_PER_SIGMA * step for _, width, _ in fresh]
        for _ in range(REFITS):
            fit = fit_peaks(
                x,
                y,
                sigma,
                np.array(position),
                np.array(fwhm),
                basis,
                satellite=satellite,
                clipped=clipped,
            )
            keep = _sound(fit, typical * FWHM_PER_SIGMA * step, x, detection, clipped)
            position, fwhm = list(fit.position[keep]), list(fit.fwhm[keep])
            if keep.all():
                break
            if not position:
                fit = None
                break
        if fit is None:
            break
        level = fit.background
        residual = y - fit.model
        if clipped is not None:
            residual = np.where(clipped, 0.0, residual)
    width = min(typical, 4.0) if fit is None else float(np.median(fit.fwhm)) / FWHM_PER_SIGMA / step
    limit = _limit(sigma, width, step, detection)
    if fit is None:  # nothing narrow: what is there is halo or background
        level = np.asarray(gaussian_filter1d(y, 4.0, mode="nearest"))
    broad = find_halos(x, level, sigma, width * FWHM_PER_SIGMA * step)
    return Found(fit, level, limit, broad, width * FWHM_PER_SIGMA * step)


def _one_each(
    found: list[tuple[int, float, float]], clipped: NDArray[np.bool_]
) -> list[tuple[int, float, float]]:
    """The candidates with one in the middle of every clipped stretch instead of those about it."""
    edges = np.flatnonzero(np.diff(np.concatenate([[False], clipped, [False]]).astype(np.int8)))
    usual = float(np.median([width for _, width, _ in found])) if found else 2.0
    for start, stop in zip(edges[::2].tolist(), edges[1::2].tolist(), strict=True):
        rim = max(0.5 * (stop - start), usual)
        found = [c for c in found if not start - rim < c[0] < stop + rim]
        found.append(((start + stop) // 2, usual, 1.0))
    return found


def _without_companions(
    found: list[tuple[int, float, float]], x: Floats, satellite: Satellite
) -> list[tuple[int, float, float]]:
    """The candidates without those that stand where the companion of a stronger one does.

    A peak of its own that stands there is left over by the fit.
    """
    step = float(np.median(np.diff(x)))
    kept: list[tuple[int, float, float]] = []
    for one in sorted(found, key=lambda c: -c[2]):
        places = satellite[0](x[[c[0] for c in kept]])
        widths = np.array([max(one[1], c[1]) for c in kept]) * step
        if not (np.abs(places - x[one[0]]) < 1.5 * widths).any():
            kept.append(one)
    return kept


def _spread(sigma: Floats, fit: PeakFit, step: float) -> Floats:
    """One-sigma (n,) by which what is left over may differ from zero though no peak is there.

    Noise, and errors of the shape of the peaks fitted nearby.
    """
    from scipy.ndimage import maximum_filter1d

    fwhm = float(np.median(fit.fwhm)) / step
    peaks = maximum_filter1d(fit.model - fit.background, max(3, int(2.0 * fwhm)) | 1)
    return np.asarray(np.hypot(sigma, SHAPE_ERROR * peaks))


def _typical_width(found: list[tuple[int, float, float]]) -> float:
    strongest = sorted(found, key=lambda f: -f[2])[:8]
    widths = [width for _, width, score in strongest if score > 0.1 * strongest[0][2]]
    return max(1.0, float(np.percentile(widths, 40)))


def _sound(
    fit: PeakFit,
    typical_fwhm: float,
    x: Floats,
    detection: float,
    clipped: NDArray[np.bool_] | None,
) -> NDArray[np.bool_]:
    """Which peaks stand (m,): significant, inside, as wide as peaks of this curve are, not within
    another.

    Of a clipped peak the area is hardly known, but there is no doubt that it is there.
    """
    usual = max(float(np.median(fit.fwhm)), typical_fwhm)
    strong = fit.significance > 0.7 * detection
    if clipped is not None:
        strong |= clipped[np.clip(np.searchsorted(x, fit.position), 0, len(x) - 1)]
    strong &= fit.position_sigma < 0.5 * fit.fwhm
    inside = (fit.position > x[0]) & (fit.position < x[-1])
    apart = np.abs(fit.position[:, None] - fit.position) / np.maximum(fit.fwhm[:, None], fit.fwhm)
    inside &= ~((apart < SEPARABLE) & (fit.area[:, None] < fit.area)).any(axis=1)
    sound = strong & inside & (fit.fwhm < 3.0 * usual) & (fit.fwhm > 0.3 * usual)
    # the worst first: the others may be sound without them
    bad = np.flatnonzero(~sound)
    spared = bad[np.argsort(fit.significance[bad])[(len(bad) + 1) // 2 :]]
    sound[spared] = True
    return np.asarray(sound)


def _limit(sigma: Floats, width: float, step: float, detection: float) -> float:
    """Smallest area that is found: `detection` sigmas of a peak at the median noise."""
    weights = kernel(width)
    height = detection * float(np.median(sigma)) * float(np.sqrt((weights**2).sum()))
    return height * width * step * float(np.sqrt(2.0 * np.pi))
