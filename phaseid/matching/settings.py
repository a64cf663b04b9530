"""The numbers of the statistical model, in one place. Relative quantities are natural logarithms.

Where no source is named, the value is common practice in the trade or was set on simulated patterns
with seeds other than those of the reported benchmark.
"""

from __future__ import annotations

from dataclasses import dataclass

from phaseid.probes.probe import Kind


@dataclass(frozen=True, slots=True)
class Scatter:
    """How far intensities and lines of one kind of probe stray from the kinematic calculation.

    `intensity` is the one-sigma of ln(I_measured / I_calculated) of an ordinary ring,
    `odd_intensity` that of the share `odd_share` of rings that stray far (texture, dynamical
    effects, overlap). `lost` is the chance that a line well above the detection limit is not in the
    list all the same. `resolution_two_theta_deg` is the separation at which two lines merge
    (X-rays, neutrons); `resolution` the same as a relative separation of d (electrons).
    """

    intensity: float
    odd_intensity: float
    odd_share: float
    lost: float
    resolution_two_theta_deg: float
    resolution: float


SCATTER: dict[Kind, Scatter] = {
    # X-rays: |ln I/Icalc| of published sheets, median 0.11, 95 % 0.47
    "x-ray": Scatter(0.20, 0.70, 0.12, 0.03, 0.14, 0.002),
    "neutron": Scatter(0.20, 0.70, 0.12, 0.03, 0.25, 0.004),
    # electrons: good to a factor of about two (common practice, no source)
    "electron": Scatter(0.45, 1.20, 0.15, 0.06, 0.0, 0.008),
}


@dataclass(frozen=True, slots=True)
class Rough:
    """How a roughly known structure strays: `jitter` of ln d line by line and `intensity`, extra
    scatter of ln intensity, one-sigma each."""

    jitter: float
    intensity: float


STRAIN = 0.001
"""One-sigma of the isotropic strain, alloying or warmth of a listed phase (relative, on d)."""

LISTED_JITTER = 2e-4
"""Line-by-line scatter in ln d of a listed phase: its axial ratios are known no better."""

ROUGH_PRIOR = 0.15
"""How often a listed structure is known, or its rings are read, less well than the rest says, in
one of the ways of `ROUGH`."""
ROUGH = (Rough(LISTED_JITTER, 0.4), Rough(8e-4, 0.4))

RELATIVE_STRAIN = 0.02
"""The same for an unlisted relative: a phase of the listed structure type with another cell."""
RELATIVE_AXIAL = 0.01
"""One-sigma of the further strain of each edge of a relative whose cell has several lengths."""
RELATIVE_JITTER = {1: 0.0, 2: 0.0003, 3: 0.0008}
"""Line-by-line scatter left after that (angles, further parameters), by number of free lengths."""
RELATIVE_INTENSITY = (0.1, 0.6)
"""Extra scatter of ln intensity of a relative: of like atoms, or of others on the same sites."""
RELATIVE_PRIOR = 0.15
"""How many unlisted relatives there are for each listed phase."""

ZERO_SHIFT_DEG = 0.02
DISPLACEMENT_DEG = 0.04
"""One-sigma of the zero shift and of the specimen displacement's shift (× cos θ), degrees of two-
theta."""

SIGMA_INFLATION = ((1.0, 0.6), (1.6, 0.28), (2.5, 0.12))
"""(factor, prior): stated sigmas are often too small; marginalised per pattern."""
ODD_POSITION_FACTOR = 3.5
ODD_POSITION_SHARE = 0.04
"""A ring read this many times worse than its sigma, and how often that happens."""

CROWDING = 0.3
"""Error of a ring's position in units of the root mean square width of the lines about it."""

SCATTER_INFLATION = ((1.0, 0.75), (1.9, 0.25))
"""(factor, prior): intensities of a specimen may stray more than its probe's usual (texture)."""

TREND_SD = 1.5
"""One-sigma (Å²) of a trend of ln intensity with 1/2d²: displacement unlike the file's, heights for
areas, absorption. Published sheets need up to about 1, files without displacement parameters more.
"""

DETECTION_SLOPE = 2.6
"""Slope of the logistic chance of seeing a line against ln(intensity / limit)."""
LOGISTIC_SLOPE = 1.702
"""A logistic of this slope is close to the normal distribution function."""

LIMIT_SD = 0.35
"""One-sigma of ln of the detection limit, as the weakest rings tell it."""
MEASURED_LIMIT_SD = 0.2
"""The same of a limit that was measured with the rings."""

FOREIGN_RINGS = 0.6
"""Expected number of rings from nowhere in a pattern (Poisson)."""

AMPLITUDE_WIDTH = 4.0
"""Width of the flat prior on ln(amplitude) of each phase."""

PHASE_COUNT_PRIOR = (0.70, 0.22, 0.06, 0.02)
"""Prior of one, two, three, four listed phases."""
TEXTURE_PRIOR = 0.15
"""Prior that a phase of a film or flat specimen has a fibre axis, shared by its likely axes."""
ARCED_TEXTURE_PRIOR = 0.5
"""The same where rings are seen to be arcs: stronger on some sides by more than `ARCED`."""
ARCED = 0.3

DOUBTED = 0.25
"""How likely a phase with an element seen with doubt is against one without."""

UNLISTED_PRIOR = 0.15
"""Prior that no listed phase is in the specimen."""
BESIDE_PRIOR = 0.03
"""Prior that an unlisted phase is there beside listed ones."""
UNLISTED_RING_COUNT = 12.0
"""Mean number of rings of an unlisted phase (geometric)."""

SEARCHED_WHOLE = 4000
"""Up to this many phases allowed are all searched; of more, a shortlist."""
