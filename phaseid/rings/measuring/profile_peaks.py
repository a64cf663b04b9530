"""From a profile to its peaks."""

from __future__ import annotations

from pathlib import Path

import numpy as np

from phaseid.errors import InputError
from phaseid.probes import parse_probe
from phaseid.probes.tubes import ANODES
from phaseid.rings.measuring.curves import Curve, read_curve
from phaseid.rings.measuring.fitting import Floats, Satellite
from phaseid.rings.measuring.measurement import MeasuredRing, Measurement, no_rings
from phaseid.rings.measuring.peaks import Found, find_peaks
from phaseid.rings.measuring.widths import overlap_sigma

KA2_HEIGHT = 0.5  # of Kα1: the statistical weight of the levels 2p1/2 and 2p3/2
MIN_AREA = 2.5  # sigmas of a peak's area, beside what it overlaps with
MAX_POINTS = 60_000


def measure_profile(
    path: str | Path, *, probe: str | None = None, column: str | None = None
) -> Measurement:
    """Peaks of a profile; `probe` over the file's, `column` says what its positions are.

    With a tube's Kα doublet on an angle axis each peak is fitted as its pair where that describes
    the profile better, and positions are those of Kα1. Raises InputError if the file cannot be used
    or shows no peaks.
    """
    return measure_curve(read_curve(path, column=column), probe=probe)


def measure_curve(curve: Curve, *, probe: str | None = None) -> Measurement:
    """As `measure_profile`, of a profile already read."""
    x, y, sigma = _even(curve)
    metadata = {key: value for key, value in curve.metadata.items() if key.lower() != "probe"}
    stated = next((v for k, v in curve.metadata.items() if k.lower() == "probe"), None)
    text = probe or stated
    found = find_peaks(x, y, sigma)
    remarks = list(curve.remarks)
    anode = _doublet_anode(text) if curve.column == "two_theta_deg" else None
    if anode is not None and found.fit is not None:
        pair = find_peaks(x, y, sigma, satellite=_satellite(anode))
        if pair.fit is not None and _misfit(pair) < _misfit(found):
            found, text = pair, f"x-ray {anode} Ka1"
            remarks.append(
                f"{anode} Kα2 was fitted with each peak; positions are those of Kα1, "
                f"so the list states the probe '{text}'."
            )
        else:
            remarks.append(
                f"The profile shows no {anode} Kα2 beside its peaks; one line was fitted."
            )
    if found.fit is None:
        raise no_rings(curve.source, "no peak stands out of the profile's noise")
    if text is not None:
        metadata["probe"] = text
    fit = found.fit
    sigma_all = np.hypot(fit.position_sigma, overlap_sigma(fit))
    rings = tuple(
        MeasuredRing(
            position=float(fit.position[k]),
            sigma=float(sigma_all[k]),
            width=float(fit.fwhm[k]),
            width_sigma=float(fit.fwhm_sigma[k]),
            intensity=float(fit.area[k]),
            intensity_sigma=float(fit.area_sigma[k]),
        )
        for k in range(len(fit.position))
        if fit.position[k] > 0 and fit.area[k] > MIN_AREA * fit.area_sigma[k]
    )
    if not rings:
        raise no_rings(curve.source, "no peak stands out of the profile's noise")
    return Measurement(
        source=curve.source,
        column=curve.column,
        rings=rings,
        curve=np.stack([x, y, y, found.background], axis=1),
        limit=found.limit,
        halos=found.broad,
        remarks=tuple(remarks),
        metadata=metadata,
    )


def _even(curve: Curve) -> tuple[Floats, Floats, Floats]:
    """The profile at even steps; interpolated only where its own are uneven."""
    from scipy.ndimage import gaussian_filter1d

    x, y, sigma = curve.position, curve.counts, curve.sigma
    if not curve.sigma_stated:  # a point's own count would give low points too much weight
        sigma = np.sqrt(np.maximum(gaussian_filter1d(y, 1.5), 1.0))
    if len(x) > MAX_POINTS:
        raise InputError(
            f"has {len(x)} points, more than {MAX_POINTS}",
            path=curve.source,
            remedy="Add up neighbouring steps.",
        )
    steps = np.diff(x)
    step = float(np.median(steps))
    if np.abs(steps - step).max() < 0.02 * step:
        return x, y, sigma
    if (x[-1] - x[0]) / step > MAX_POINTS:
        raise InputError(
            "has steps too uneven to be one profile",
            path=curve.source,
            remedy="Give its ranges as separate files.",
        )
    even = np.arange(x[0], x[-1] + 0.5 * step, step)
    return even, np.interp(even, x, y), np.interp(even, x, sigma)


def _doublet_anode(probe: str | None) -> str | None:
    """The anode whose Kα1 and Kα2 the probe shows together, None for any other probe."""
    if probe is None:
        return None
    parsed = parse_probe(probe)
    for anode, lines in ANODES.items():
        if parsed.kind == "x-ray" and abs(parsed.wavelength_A - lines.Ka_A) < 1e-5 * lines.Ka_A:
            return anode
    return None


def _satellite(anode: str) -> Satellite:
    ratio = ANODES[anode].Ka2_A / ANODES[anode].Ka1_A

    def second(two_theta_deg: Floats) -> Floats:
        sine = np.minimum(ratio * np.sin(np.radians(two_theta_deg) / 2.0), 1.0)
        return np.asarray(np.degrees(2.0 * np.arcsin(sine)))

    return second, KA2_HEIGHT


def _misfit(found: Found) -> float:
    """What to compare fits by: chi-squared and six a peak."""
    if found.fit is None:
        return float("inf")
    n = len(found.background)
    return found.fit.chi2_reduced * n + 6.0 * len(found.fit.position)
