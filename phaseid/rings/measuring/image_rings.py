"""From an image to its rings."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np

from phaseid.errors import InputError
from phaseid.rings.measuring.along_ring import SECTORS, AlongRing, follow
from phaseid.rings.measuring.azimuthal import CLIPPED, AzimuthalMean, azimuthal_mean, start_radius
from phaseid.rings.measuring.centre import guess_geometry, shrink
from phaseid.rings.measuring.defects import Mask, blots, gain, lone_pixels, saturated_pixels, shadow
from phaseid.rings.measuring.disc import straightened
from phaseid.rings.measuring.fitting import PeakFit
from phaseid.rings.measuring.geometry import Geometry, Pixels
from phaseid.rings.measuring.halos import broad_as_halos
from phaseid.rings.measuring.images import read_image
from phaseid.rings.measuring.measurement import MeasuredRing, Measurement, no_rings
from phaseid.rings.measuring.peaks import find_peaks
from phaseid.rings.measuring.polar import polar_sums
from phaseid.rings.measuring.refining import refine_geometry
from phaseid.rings.measuring.widths import overlap_sigma

FIRST_LOOK_PX = 1024
STEP_PX = 0.5
MAX_BINS = 2400
MIN_AREA = 2.5  # sigmas of a ring's area, beside what it overlaps with
MIN_POSITIVE = 0.55  # of the sectors show a ring, else it is single spots or chance
MIN_MEDIAN = 1.7  # sigmas of the median of the sectors, for the same
MIN_BRIGHT = 0.35  # of the sectors hold a clear spot of a spotty ring
MIN_BRIGHT_BESIDE = 0.25
MAX_UNEVENNESS = 0.1  # of sectors against radii, beyond which nothing is concentric
UNEVEN = 0.35  # scatter of the intensity along a ring that is worth a note
SATURATED = 0.01  # of a ring's pixels, from which on its intensity is too low
MARGIN = 1.15  # of the outermost ring, that the picture shows


def measure_image(path: str | Path, *, frame: int | None = None) -> Measurement:
    """Centre, ellipse and rings of an image; radii in px after the ellipse is made a circle.

    `frame` chooses one of several images in the file, from 1; else they are added. Raises
    InputError if the file cannot be used or shows no rings.
    """
    plate = read_image(path, frame=frame)
    found = measure_pixels(plate.counts, plate.usable, source=str(path))
    return replace(found, remarks=(*plate.remarks, *found.remarks))


def measure_pixels(image: Pixels, usable: Mask, *, source: str) -> Measurement:
    """As `measure_image`, of counts (h, w) and which of them are usable."""
    usable = usable & ~lone_pixels(image, usable)
    saturated = saturated_pixels(image, usable)
    if usable.mean() < 0.2:
        raise no_rings(source, "most pixels are dead")
    geometry, start = _first_look(image, usable, saturated)
    if usable.mean() < 0.1:
        raise no_rings(source, "most of the image is dark or saturated")
    geometry = refine_geometry(image, usable, geometry, r_min=start)
    step = max(STEP_PX, geometry.reach(image.shape) / MAX_BINS)
    sums = polar_sums(image, usable, geometry, step=step, sectors=SECTORS, saturated=saturated)
    seen = azimuthal_mean(sums, start, gain(image, usable))
    if seen is None:
        raise no_rings(source, "no stretch of radii is seen well enough")
    if seen.unevenness() > MAX_UNEVENNESS:
        raise _nothing(image, usable, source, ())
    found = find_peaks(seen.radius, seen.mean, seen.sigma, origin=0.0, clipped=seen.clipped)
    if found.fit is None:
        raise _nothing(image, usable, source, found.broad)
    along = follow(found.fit, seen)
    wide = broad_as_halos(found.fit.position, found.fit.fwhm, float(seen.radius[-1]))
    halos = tuple(sorted((*found.broad, *found.fit.position[wide].tolist())))
    sure = found.fit.area > MIN_AREA * found.fit.area_sigma
    headless = np.interp(found.fit.position, seen.radius, seen.saturated) > CLIPPED
    keep = _those_that_are_rings(along, ~wide & (sure | headless))
    if not keep:
        raise _nothing(image, usable, source, halos)
    hidden = overlap_sigma(found.fit)
    rings = tuple(_ring(found.fit, along, seen, k, geometry, float(hidden[k])) for k in keep)
    return Measurement(
        source=source,
        column="radius_px",
        rings=rings,
        curve=np.stack([seen.radius, seen.mean, seen.median, found.background], axis=1),
        limit=found.limit,
        halos=halos,
        geometry=geometry,
        shape=(image.shape[0], image.shape[1]),
        masked=float(1.0 - usable.mean()),
        remarks=_remarks(rings, geometry, float(saturated.mean())),
        disc=straightened(
            image,
            geometry,
            seen.radius,
            found.background,
            reach_px=min(float(seen.radius[-1]), MARGIN * rings[-1].position),
        ),
    )


def _first_look(image: Pixels, usable: Mask, saturated: Mask) -> tuple[Geometry, float]:
    """Rough geometry and the radius (px) to start from.

    What is in shadow or spilt by the beam is taken from `usable`. A large image is looked at in
    blocks.
    """
    factor = max(1, int(np.ceil(max(image.shape) / FIRST_LOOK_PX)))
    small, clear, top = image, usable, saturated
    if factor > 1:
        mean, share = shrink(image, usable, factor)
        small, clear = mean.astype(np.float32), share > 0.5
        top = shrink(saturated.astype(np.float32), usable, factor)[0] > 0.5
    hidden = blots(top)
    geometry = guess_geometry(small, clear & ~hidden)
    hidden |= shadow(small, clear & ~hidden, geometry)
    sums = polar_sums(small, clear & ~hidden, geometry, step=1.0, sectors=36)
    h, w = small.shape[0] * factor, small.shape[1] * factor
    usable[:h, :w] &= ~np.repeat(np.repeat(hidden, factor, axis=0), factor, axis=1)
    return geometry.scaled(factor, (factor - 1) / 2), start_radius(sums) * factor


def _those_that_are_rings(along: AlongRing, possible: Mask) -> list[int]:
    """Which of the possible peaks of the mean go round the centre, not only here and there."""
    even = (along.positive >= MIN_POSITIVE) & (along.median_score > MIN_MEDIAN)
    keep = even | (along.bright > MIN_BRIGHT)
    if keep.any():  # it is a pattern of rings: others may be of fewer crystallites
        keep |= along.bright > MIN_BRIGHT_BESIDE
    keep &= possible & np.isfinite(along.position_sigma)
    return [int(k) for k in np.flatnonzero(keep)]


def _remarks(
    rings: tuple[MeasuredRing, ...], geometry: Geometry, saturated: float
) -> tuple[str, ...]:
    remarks = []
    if saturated > 0.001:
        remarks.append(
            f"{100 * saturated:.1f} % of the image is saturated: there the counts are too low."
        )
    if not geometry.ellipse_known:
        remarks.append("The ellipse is not determined by this image; circles were assumed.")
    uneven = sum(1 for ring in rings if (ring.spottiness or 0) > UNEVEN)
    if uneven:
        remarks.append(f"{uneven} of {len(rings)} rings are spotty or textured (see their notes).")
    return tuple(remarks)


def _ring(
    fit: PeakFit, along: AlongRing, seen: AzimuthalMean, k: int, geometry: Geometry, hidden: float
) -> MeasuredRing:
    position, width = float(fit.position[k]), float(fit.fwhm[k])
    sigma = float(np.hypot(max(along.position_sigma[k], 0.5 * fit.position_sigma[k]), hidden))
    # a part of a circle moves with its centre
    lean = np.array([along.lean_x[k], along.lean_y[k]])
    sigma = float(np.sqrt(sigma**2 + max(float(lean @ geometry.covariance[:2, :2] @ lean), 0.0)))
    spottiness, arcs = float(along.spottiness[k]), float(along.arcs[k])
    notes = []
    if spottiness > UNEVEN:
        notes.append("textured" if arcs > 0.7 * spottiness else "spotty")
    if seen.saturated[np.abs(seen.radius - position) < width].max() > SATURATED:
        notes.append("saturated")
    return MeasuredRing(
        position=position,
        sigma=sigma,
        width=width,
        width_sigma=float(fit.fwhm_sigma[k]),
        intensity=float(fit.area[k]),
        intensity_sigma=float(
            np.hypot(fit.area_sigma[k], fit.area[k] * spottiness / np.sqrt(SECTORS))
        ),
        total=float(fit.area[k] * 2.0 * np.pi * position),
        spottiness=spottiness,
        arcs=arcs,
        along=tuple(float(v) for v in along.level[k]),
        coverage=float(along.coverage[k]),
        note=", ".join(notes),
    )


def _nothing(image: Pixels, usable: Mask, source: str, broad: tuple[float, ...]) -> InputError:
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
