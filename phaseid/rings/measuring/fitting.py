"""Overlapping peaks on a smooth background, fitted together."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Floats = NDArray[np.float64]
Satellite = tuple[Callable[[Floats], Floats], float]

FWHM_PER_SIGMA = 2.0 * float(np.sqrt(2.0 * np.log(2.0)))
KNOT_SPACING_FWHM = 7.0  # background bends no faster than this many peak widths
MAX_KNOTS = 45
MAX_RELATIVE_WIDTH = 2.2  # of the usual width: what is wider is several peaks
GROUND_SIGMA = 0.04  # of the background, by which a first look at it is trusted
_GAUSS_AREA = float(np.sqrt(np.pi / (4.0 * np.log(2.0))))
_LORENTZ_AREA = float(np.pi / 2.0)


@dataclass(frozen=True, slots=True)
class PeakFit:
    """m peaks by rising position, in the unit of x; sigmas are one standard deviation.

    `position`, `fwhm`, `height`, `area` and their sigmas (m,); `significance` is the height over
    what the noise of the curve makes of it; `lorentzian` is the Lorentzian part of the common
    shape; `background` (n,) and `model` (n,) on the abscissa fitted;
    `chi2_reduced` is the misfit per degree of freedom. Sigmas are raised where the curve nearby is
    fitted worse than its noise would have it.
    """

    position: Floats
    position_sigma: Floats
    fwhm: Floats
    fwhm_sigma: Floats
    height: Floats
    area: Floats
    area_sigma: Floats
    significance: Floats
    lorentzian: float
    background: Floats
    model: Floats
    chi2_reduced: float


def shape(
    x: Floats, position: Floats, fwhm: Floats, lorentzian: float
) -> tuple[Floats, Floats, Floats, Floats]:
    """Pseudo-Voigt peaks of unit height (n, m) and derivatives by position, width and mixing."""
    u = (x[:, None] - position) / fwhm
    gauss = np.exp(-4.0 * np.log(2.0) * np.minimum(u * u, 100.0))
    lorentz = 1.0 / (1.0 + 4.0 * u * u)
    value = lorentzian * lorentz + (1.0 - lorentzian) * gauss
    by_u = -8.0 * u * (lorentzian * lorentz**2 + (1.0 - lorentzian) * float(np.log(2.0)) * gauss)
    return value, -by_u / fwhm, -by_u * u / fwhm, lorentz - gauss


def background_basis(x: Floats, fwhm: float, *, origin: float | None = None) -> Floats:
    """Cubic B-splines (n, k) on x; knots lie closer towards `origin`, where a beam's tail is."""
    from scipy.interpolate import BSpline

    start, end = float(x[0]), float(x[-1])
    step = max(KNOT_SPACING_FWHM * fwhm, (end - start) / MAX_KNOTS)
    knots = [start]
    while knots[-1] < end:
        near = step if origin is None else max(0.45 * (knots[-1] - origin), 2.0 * fwhm)
        knots.append(knots[-1] + min(step, near))
    inner = np.array(knots[1:-1]) if len(knots) > 2 else np.array([])
    if inner.size and end - inner[-1] < 0.6 * step:
        inner = inner[:-1]
    full = np.concatenate(([start] * 4, inner, [end] * 4))
    return np.asarray(BSpline.design_matrix(x, full, 3).toarray(), dtype=np.float64)


def fit_background(y: Floats, sigma: Floats, basis: Floats) -> Floats:
    """Background (n,) alone, peaks above it given little weight in turn."""
    weight = 1.0 / sigma
    for _ in range(6):
        design = basis * weight[:, None]
        level = basis @ _solve(design, y * weight)
        pull = (y - level) / sigma
        weight = np.where(pull > 2.0, 0.01, 1.0) / sigma
    return np.asarray(level)


def _solve(design: Floats, right: Floats) -> Floats:
    """Least squares by normal equations, columns scaled; a trace of damping keeps them regular."""
    scale = np.sqrt((design * design).sum(axis=0))
    scale[scale == 0] = 1.0
    scaled = design / scale
    normal = scaled.T @ scaled
    normal[np.diag_indices_from(normal)] += 1e-10
    answer = np.linalg.solve(normal, scaled.T @ right)
    return np.asarray(answer / (scale if right.ndim == 1 else scale[:, None]))


def _local_mean(values: Floats, used: NDArray[np.bool_], window: float) -> Floats:
    """Mean of the used values within a window of so many points about each (n,)."""
    from scipy.ndimage import uniform_filter1d

    size = max(3, int(window)) | 1
    share = uniform_filter1d(used.astype(np.float64), size, mode="nearest")
    return np.asarray(
        uniform_filter1d(np.where(used, values, 0.0), size, mode="nearest")
        / np.maximum(share, 1e-9)
    )


def fit_peaks(
    x: Floats,
    y: Floats,
    sigma: Floats,
    position: Floats,
    fwhm: Floats,
    basis: Floats,
    *,
    satellite: Satellite | None = None,
    clipped: NDArray[np.bool_] | None = None,
) -> PeakFit:
    """Fit m peaks at about `position` (m,) with widths about `fwhm` (m,) to y ± sigma (n,) at x.

    All peaks share one shape, each has a width of its own, together with the background of
    `basis` (n, k). `satellite` is (where the companion of a peak lies, its relative height);
    points `clipped` (n,) by saturation take no part.
    """
    from scipy.optimize import least_squares

    m = len(position)
    order = np.argsort(position)
    position, fwhm = position[order], fwhm[order]
    step = float(np.median(np.diff(x)))
    weight = 1.0 / sigma if clipped is None else np.where(clipped, 0.0, 1.0 / sigma)

    def parts(values: Floats) -> tuple[Floats, Floats, Floats, Floats]:
        place, width, mixing = values[:m], values[m : 2 * m], float(values[2 * m])
        main = shape(x, place, width, mixing)
        if satellite is None:
            return main
        where, ratio = satellite
        other = where(place)
        slope = (where(place + 1e-4) - other) / 1e-4
        extra = shape(x, other, width, mixing)
        return (
            main[0] + ratio * extra[0],
            main[1] + ratio * extra[1] * slope,
            main[2] + ratio * extra[2],
            main[3] + ratio * extra[3],
        )

    # where peaks stand too densely to see the ground, it stays about what it was without them
    ground = _solve(basis * weight[:, None], fit_background(y, sigma, basis) * weight)
    loose = GROUND_SIGMA * np.abs(ground) + 3.0 * float(np.median(sigma))
    prior = np.hstack([np.zeros((len(ground), m)), np.diag(1.0 / loose)])
    wanted = np.concatenate([y * weight, ground / loose])

    def weighted(found: tuple[Floats, Floats, Floats, Floats]) -> Floats:
        return np.vstack([np.hstack([found[0], basis]) * weight[:, None], prior])

    def linear(values: Floats) -> tuple[Floats, tuple[Floats, Floats, Floats, Floats]]:
        found = parts(values)
        return _solve(weighted(found), wanted), found

    def misfit(values: Floats) -> Floats:
        coefficients, found = linear(values)
        return np.asarray(weighted(found) @ coefficients - wanted)

    def slopes(values: Floats) -> Floats:
        coefficients, found = linear(values)
        height = coefficients[:m]
        free = np.hstack([found[1] * height, found[2] * height, (found[3] @ height)[:, None]])
        free = np.vstack([free * weight[:, None], np.zeros((len(ground), 2 * m + 1))])
        design = weighted(found)
        # variable projection in Kaufman's form
        return np.asarray(free - design @ _solve(design, free))

    start = np.concatenate([position, fwhm, [0.2]])
    narrow = np.maximum(0.3 * fwhm, step)
    wide = np.minimum(4.0 * fwhm, MAX_RELATIVE_WIDTH * float(np.median(fwhm))) + step
    if clipped is not None:  # flanks alone do not tell width from height
        headless = clipped[np.clip(np.searchsorted(x, position), 0, len(x) - 1)]
        usual = float(np.median(fwhm[~headless])) if not headless.all() else float(np.median(fwhm))
        narrow = np.where(headless, 0.8 * usual, narrow)
        wide = np.where(headless, 1.3 * usual, wide)
    low = np.concatenate([position - 1.5 * fwhm, narrow, [0.0]])
    high = np.concatenate([position + 1.5 * fwhm, wide, [1.0]])
    start = np.clip(start, low + 1e-9, high - 1e-9)
    values = start
    for _ in range(2):
        answer = least_squares(
            misfit,
            values,
            jac=slopes,
            bounds=(low, high),
            x_scale="jac",
            max_nfev=12,
            xtol=1e-5,
            ftol=1e-5,
        )
        values = np.asarray(answer.x)
        coefficients, found = linear(values)
        sunk = coefficients[m:] < ground - loose
        if not sunk.any():
            break
        # a dip under crowded peaks: they are not what they are taken for, the ground is
        loose[sunk] *= 0.02
        prior[sunk, m:] *= 50.0
        wanted[len(y) :] = ground / loose
    height = coefficients[:m]
    design = np.hstack([found[0], basis])
    model = design @ coefficients
    jacobian = np.hstack(
        [found[1] * height, found[2] * height, (found[3] @ height)[:, None], design]
    )
    used = int((weight > 0).sum())
    dof = max(used - jacobian.shape[1], 1)
    square = ((y - model) * weight) ** 2
    chi2 = float(square.sum() / dof)
    window = 3.0 * float(np.median(values[m : 2 * m])) / step
    trusted = weight**2 / np.maximum(1.0, _local_mean(square, weight > 0, window) * used / dof)
    known = np.zeros(jacobian.shape[1])
    known[3 * m + 1 :] = loose**-2
    covariance = np.linalg.pinv((jacobian.T * trusted) @ jacobian + np.diag(known), hermitian=True)
    by_noise = np.linalg.pinv((jacobian.T * weight**2) @ jacobian + np.diag(known), hermitian=True)
    spread = np.sqrt(np.maximum(np.diag(covariance), 0.0))
    width, mixing = values[m : 2 * m], float(values[2 * m])
    per_height = mixing * _LORENTZ_AREA + (1.0 - mixing) * _GAUSS_AREA
    index = np.arange(m)
    h = 2 * m + 1 + index
    cross = covariance[h, m + index]
    area_var = (width * spread[h]) ** 2 + (height * spread[m : 2 * m]) ** 2
    area_var = np.maximum(area_var + 2.0 * width * height * cross, (0.3 * width * spread[h]) ** 2)
    return PeakFit(
        position=values[:m],
        position_sigma=spread[:m],
        fwhm=width,
        fwhm_sigma=spread[m : 2 * m],
        height=height,
        area=height * width * per_height,
        area_sigma=per_height * np.sqrt(area_var),
        lorentzian=mixing,
        background=basis @ coefficients[m:],
        model=model,
        significance=height / np.sqrt(np.maximum(by_noise[h, h], 1e-300)),
        chi2_reduced=chi2,
    )
