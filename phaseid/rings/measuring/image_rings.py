"""From an image to its rings."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from phaseid.errors import InputError
from phaseid.rings.measuring.along_ring import AlongRing, follow
from phaseid.rings.measuring.centre import guess_geometry, shrink
from phaseid.rings.measuring.defects import lone_pixels, shadow
from phaseid.rings.measuring.disc import straightened
from phaseid.rings.measuring.fitting import PeakFit
from phaseid.rings.measuring.geometry import Floats, Geometry, Pixels
from phaseid.rings.measuring.images import read_image
from phaseid.rings.measuring.measurement import MeasuredRing, Measurement, no_rings
from phaseid.rings.measuring.peaks import find_peaks
from phaseid.rings.measuring.polar import PolarSums, polar_sums
from phaseid.rings.measuring.refining import refine_geometry

FIRST_LOOK_PX = 1024
STEP_PX = 0.5
MAX_BINS = 2400
SECTORS = 72
MIN_COVERAGE = 0.12  # of a circle, below which its mean is not used
MIN_POSITIVE = 0.6  # of the sectors show a ring, else it is single spots or chance
MIN_BRIGHT = 0.35  # of the sectors hold a clear spot of a spotty ring
MIN_BRIGHT_BESIDE = 0.25
MAX_UNEVENNESS = 0.1  # of sectors against radii, beyond which nothing is concentric
SPOTTY = 0.35
MARGIN = 1.15  # of the outermost ring, that the picture shows


def measure_image(path: str | Path) -> Measurement:
    """Centre, ellipse and rings of an image; radii in px after the ellipse is made a circle.

    Raises InputError if the file cannot be used or shows no rings.
    """
    image, usable = read_image(path)
    return measure_pixels(image, usable, source=str(path))


def measure_pixels(image: Pixels, usable: NDArray[np.bool_], *, source: str) -> Measurement:
    """As `measure_image`, of counts (h, w) and which of them are usable."""
    saturated = float(1.0 - usable.mean())
    usable = usable & ~lone_pixels(image, usable)
    if usable.mean() < 0.2:
        raise no_rings(source, "most pixels are saturated or dead")
    geometry, start = _first_look(image, usable)
    if usable.mean() < 0.1:
        raise no_rings(source, "most of the image is dark")
    geometry = refine_geometry(image, usable, geometry, r_min=start)
    step = max(STEP_PX, geometry.reach(image.shape) / MAX_BINS)
    sums = polar_sums(image, usable, geometry, step=step, sectors=SECTORS)
    radius, mean, sigma, noise, first = _profile(sums)
    if not radius.size:
        raise no_rings(source, "no stretch of radii is seen well enough")
    cells, number = _cells(sums, first, len(radius))
    if _unevenness(mean, cells, number, noise) > MAX_UNEVENNESS:
        raise _nothing(image, usable, source, ())
    found = find_peaks(radius, mean, sigma, origin=0.0)
    if found.fit is None:
        raise _nothing(image, usable, source, found.broad)
    along = follow(found.fit, radius, cells, number, noise)
    even = (along.positive >= MIN_POSITIVE) & (along.median_score > 2.5)
    keep = even | (along.bright > MIN_BRIGHT)
    if keep.any():  # it is a pattern of rings: others may be of fewer crystallites
        keep |= along.bright > MIN_BRIGHT_BESIDE
    keep &= np.isfinite(along.position_sigma)
    if not keep.any():
        raise _nothing(image, usable, source, found.broad)
    rings = tuple(_ring(found.fit, along, k, geometry) for k in np.flatnonzero(keep).tolist())
    median = np.nanmedian(np.where(number > 0, cells, np.nan), axis=1)
    remarks = []
    if saturated > 0.001:
        remarks.append(f"{100 * saturated:.1f} % of the image is saturated and was left out.")
    if not geometry.ellipse_known:
        remarks.append("The ellipse is not determined by this image; circles were assumed.")
    spotty = sum(1 for ring in rings if (ring.spottiness or 0) > SPOTTY)
    if spotty:
        remarks.append(f"{spotty} of {len(rings)} rings are spotty or textured (see their notes).")
    return Measurement(
        source=source,
        column="radius_px",
        rings=rings,
        curve=np.stack([radius, mean, median, found.background], axis=1),
        limit=found.limit,
        halos=found.broad,
        geometry=geometry,
        shape=(image.shape[0], image.shape[1]),
        masked=float(1.0 - usable.mean()),
        remarks=tuple(remarks),
        disc=straightened(
            image,
            geometry,
            radius,
            found.background,
            reach_px=min(float(radius[-1]), MARGIN * rings[-1].position),
        ),
    )


def _first_look(image: Pixels, usable: NDArray[np.bool_]) -> tuple[Geometry, float]:
    """Rough geometry and the radius (px) to start from; takes what is in shadow from `usable`.

    A large image is looked at in blocks.
    """
    factor = max(1, int(np.ceil(max(image.shape) / FIRST_LOOK_PX)))
    small, clear = image, usable
    if factor > 1:
        mean, share = shrink(image, usable, factor)
        small, clear = mean.astype(np.float32), share > 0.5
    geometry = guess_geometry(small, clear)
    dark = shadow(small, clear, geometry)
    sums = polar_sums(small, clear & ~dark, geometry, step=1.0, sectors=36)
    start = _start_radius(sums) * factor
    h, w = small.shape[0] * factor, small.shape[1] * factor
    usable[:h, :w] &= ~np.repeat(np.repeat(dark, factor, axis=0), factor, axis=1)
    return geometry.scaled(factor, (factor - 1) / 2), start


def _start_radius(sums: PolarSums) -> float:
    """Radius (px) from which on circles are seen well, outside the beam and its stop."""
    share = sums.number.sum(axis=1) / np.maximum(sums.frame.sum(axis=1), 1)
    seen = np.flatnonzero((share > 0.4) & (sums.number.sum(axis=1) > 20))
    return float(max(4.0, seen[0] + 2.0 if seen.size else 4.0))


def _profile(sums: PolarSums) -> tuple[Floats, Floats, Floats, Floats, int]:
    """Radius, mean, its one-sigma and the noise of a pixel (n,), and the first bin used."""
    from scipy.ndimage import median_filter

    number = sums.number.sum(axis=1)
    middle = (np.arange(len(number)) + 0.5) * sums.step
    full = 2.0 * np.pi * middle * sums.step
    in_frame = sums.frame.sum(axis=1)
    good = (number > MIN_COVERAGE * full) & (number > 0.3 * in_frame) & (middle > 4.0)
    good &= number >= 12
    runs = np.flatnonzero(good)
    if runs.size < 40:
        return (*(np.zeros(0),) * 4, 0)
    # the longest stretch without a break
    breaks = np.flatnonzero(np.diff(runs) > 1)
    bounds = np.concatenate([[0], breaks + 1, [runs.size]])
    longest = int(np.argmax(np.diff(bounds)))
    part = slice(int(runs[bounds[longest]]), int(runs[bounds[longest + 1] - 1]) + 1)
    n, total, square = (a[part] for a in (sums.number, sums.total, sums.square))
    count = n.sum(axis=1)
    mean = total.sum(axis=1) / count
    within = (square - np.where(n > 0, total**2 / np.maximum(n, 1), 0.0)).sum(axis=1)
    dof = count - (n > 0).sum(axis=1)
    var = np.where(dof > 5, within / np.maximum(dof, 1), np.nan)
    known = np.isfinite(var)
    index = np.arange(len(var))
    var = np.interp(index, index[known], var[known])
    noise = np.sqrt(np.maximum(median_filter(var, 5), 0.5 * var) + 1e-12 * mean.max() ** 2)
    return sums.radius[part], mean, noise / np.sqrt(count), noise, part.start


def _cells(sums: PolarSums, first: int, n: int) -> tuple[Floats, Floats]:
    part = slice(first, first + n)
    number = sums.number[part]
    return np.where(number > 0, sums.total[part] / np.maximum(number, 1), 0.0), number


def _unevenness(mean: Floats, cells: Floats, number: Floats, noise: Floats) -> float:
    """How much sectors differ beyond noise at the usual radius, over how much radii differ."""
    seen = number >= 2
    count = np.maximum(seen.sum(axis=1), 1)
    off = np.where(seen, cells - mean[:, None], 0.0)
    by_noise = np.where(seen, noise[:, None] ** 2 / np.maximum(number, 1), 0.0)
    extra = ((off**2).sum(axis=1) - by_noise.sum(axis=1)) / count
    low, high = np.percentile(mean, [5, 95])
    return float(np.sqrt(max(float(np.median(extra)), 0.0)) / max(float(high - low), 1e-12))


def _ring(fit: PeakFit, along: AlongRing, k: int, geometry: Geometry) -> MeasuredRing:
    position = float(fit.position[k])
    sigma = float(max(along.position_sigma[k], 0.5 * fit.position_sigma[k]))
    # a part of a circle moves with its centre
    lean = np.array([along.lean_x[k], along.lean_y[k]])
    sigma = float(np.sqrt(sigma**2 + max(float(lean @ geometry.covariance[:2, :2] @ lean), 0.0)))
    spottiness = float(along.spottiness[k])
    note = ""
    if spottiness > SPOTTY:
        note = "textured" if along.alike[k] > 0.5 else "spotty"
    return MeasuredRing(
        position=position,
        sigma=sigma,
        width=float(fit.fwhm[k]),
        width_sigma=float(fit.fwhm_sigma[k]),
        intensity=float(fit.area[k]),
        intensity_sigma=float(
            np.hypot(fit.area_sigma[k], fit.area[k] * spottiness / np.sqrt(SECTORS))
        ),
        total=float(fit.area[k] * 2.0 * np.pi * position),
        spottiness=spottiness,
        coverage=float(along.coverage[k]),
        note=note,
    )


def _nothing(
    image: Pixels, usable: NDArray[np.bool_], source: str, broad: tuple[float, ...]
) -> InputError:
    """The error that says what the image shows instead of rings."""
    if broad:
        at = ", ".join(f"{r:.0f}" for r in broad)
        return no_rings(source, f"only broad halos of amorphous matter (radius {at} px)")
    values = image[usable]
    low, middle, high = (float(v) for v in np.percentile(values, [16, 50, 99.95]))
    spread = max(middle - low, 1e-6)
    bright = values > middle + 0.3 * (high - middle)
    if high > middle + 15 * spread and 1e-5 < float(bright.mean()) < 0.01:
        return no_rings(source, "the image shows single spots, as a single crystal does")
    return no_rings(source, "nothing in it is concentric")
